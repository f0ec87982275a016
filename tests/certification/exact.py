"""Slow exact twins used by the tests of certificates: outcome laws by Jacobi-Trudi in fractions."""

import math
from fractions import Fraction

from entropest.diagrams import YoungDiagram, young_diagrams


def complete_homogeneous(spectrum: list[Fraction], degree: int) -> list[Fraction]:
    """h_0..h_degree by multiplying the series 1/(1 - p z)."""
    h = [Fraction(1)] + [Fraction(0)] * degree
    for p in spectrum:
        for n in range(1, degree + 1):
            h[n] += p * h[n - 1]
    return h


def determinant(matrix: list[list[Fraction]]) -> Fraction:
    """Cofactor expansion."""
    if not matrix:
        return Fraction(1)
    return sum(
        (
            (-1) ** j * matrix[0][j] * determinant([row[:j] + row[j + 1 :] for row in matrix[1:]])
            for j in range(len(matrix))
        ),
        Fraction(0),
    )


def outcome_law(spectrum: list[Fraction], copies: int) -> dict[YoungDiagram, Fraction]:
    """f^lambda s_lambda(p) for every diagram with at most as many rows as eigenvalues."""
    h = complete_homogeneous(spectrum, copies)
    law = {}
    for diagram in young_diagrams(copies, len(spectrum)):
        rows = diagram.rows
        matrix = [
            [h[row - i + j] if row - i + j >= 0 else Fraction(0) for j in range(len(rows))]
            for i, row in enumerate(rows)
        ]
        law[diagram] = diagram.standard_tableaux * determinant(matrix)
    return law


def entropy(spectrum: list[Fraction]) -> float:
    return -sum(float(p) * math.log(p) for p in spectrum if p)


def as_fractions(weights: list[int]) -> list[Fraction]:
    return [Fraction(weight, sum(weights)) for weight in weights]


SPECTRA = {
    "pure": as_fractions([1]),
    "uniform qubit": as_fractions([1, 1]),
    "uniform qutrit": as_fractions([1, 1, 1]),
    "geometric": as_fractions([8, 4, 2, 1]),
    "near tie": as_fractions([501, 499]),
    "tiny eigenvalue": as_fractions([999, 1]),
    "step": as_fractions([5, 5, 3]),
}

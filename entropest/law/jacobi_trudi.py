"""The Jacobi-Trudi determinant in exact integers, and its derivative."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction


def complete_homogeneous(degree: int, values: Sequence[int]) -> list[int]:
    """Return h_0 .. h_degree, adding one variable at a time: h_k += value h_{k-1}."""
    complete = [1] + [0] * degree
    for value in values:
        for k in range(1, degree + 1):
            complete[k] += value * complete[k - 1]
    return complete


def jacobi_trudi_matrix(rows: Sequence[int], complete: Sequence[int], lag: int = 0) -> list[list[int]]:
    """Return h_{row_i - i + j - lag}; with lag 0 its determinant is the Schur polynomial."""
    return [
        [complete[row - i + j - lag] if row - i + j >= lag else 0 for j in range(len(rows))]
        for i, row in enumerate(rows)
    ]


def integer_determinant(matrix: list[list[int]]) -> int:
    """Return an exact determinant by Bareiss' fraction-free elimination; the matrix is overwritten.

    Bareiss, Math. Comp. 22 (1968) 565, doi:10.1090/S0025-5718-1968-0226829-0.
    """
    sign, previous = 1, 1
    for k in range(len(matrix) - 1):
        pivot_row = next((i for i in range(k, len(matrix)) if matrix[i][k] != 0), None)
        if pivot_row is None:
            return 0
        if pivot_row != k:
            matrix[k], matrix[pivot_row] = matrix[pivot_row], matrix[k]
            sign = -sign
        pivot, top = matrix[k][k], matrix[k]
        for row in matrix[k + 1 :]:
            head = row[k]
            for j in range(k + 1, len(row)):
                row[j] = (row[j] * pivot - head * top[j]) // previous
        previous = pivot
    return sign * matrix[-1][-1] if matrix else 1


def log_derivatives(rows: Sequence[int], complete: Sequence[int], values: Sequence[int]) -> list[Fraction]:
    """Return d log s_rows / d value_i for non-negative values, more of them positive than there are rows.

    The derivative of h_k by a variable x is sum_m x^m h_{k-1-m}, so that of the determinant is a polynomial
    in x whose coefficients sum_ab adjugate_ba h_{row_a - a + b - 1 - m} are the same for every variable.
    """
    determinant, adjugate = _adjugate(jacobi_trudi_matrix(rows, complete))
    coefficients = []
    for m in range(rows[0] + len(rows) - 1):
        lagged = jacobi_trudi_matrix(rows, complete, lag=1 + m)
        columns = zip(*adjugate, strict=True)
        coefficients.append(
            sum(
                entry * cofactor
                for row, column in zip(lagged, columns, strict=True)
                for entry, cofactor in zip(row, column, strict=True)
            )
        )
    derivatives: dict[int, Fraction] = {}
    for value in set(values):
        total = 0
        for coefficient in reversed(coefficients):
            total = total * value + coefficient
        derivatives[value] = Fraction(total, determinant)
    return [derivatives[value] for value in values]


def _adjugate(matrix: list[list[int]]) -> tuple[int, list[list[int]]]:
    """Return determinant and adjugate by fraction-free Gauss-Jordan elimination.

    The leading minors must not vanish; those of a Jacobi-Trudi matrix are Schur polynomials of the first rows,
    positive when more variables than rows are positive.
    """
    d = len(matrix)
    rows = [[*row, *(int(i == j) for j in range(d))] for i, row in enumerate(matrix)]
    previous = 1
    for k in range(d):
        top, pivot = rows[k], rows[k][k]
        for i in range(d):
            if i != k:
                head = rows[i][k]
                rows[i] = [
                    (entry * pivot - head * above) // previous for entry, above in zip(rows[i], top, strict=True)
                ]
        previous = pivot
    return previous, [row[d:] for row in rows]

"""Polynomial witnesses: functions of one outcome whose mean is at most the von Neumann entropy.

If q(x) = sum_j c_j x^j <= -log x on (0, 1] then S >= Tr rho q(rho), and g = sum_j c_j T_{j+1} has that mean, where
T_j is the normalised character of a j-cycle (the unbiased estimate of Tr rho^j from one outcome). Hermite
interpolation of -log x, value and slope at any positive nodes and the value at 1 when the number of coefficients
is odd, gives such a q. For two coefficients the chords of the curve of least entropy at given purity are better.

The ladder below is fixed: ten entropies, two witnesses each. It is the grid of the mixture e-value.
Proofs: docs/theory.md, "Witnesses". References: Golub and Meurant, Matrices, Moments and Quadrature (2010);
Harremoes and Topsoe, IEEE Trans. Inf. Theory 47 (2001) 2944, doi:10.1109/18.959272.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache
from typing import Any, Final

import numpy as np

from entropest import _mp
from entropest._types import FloatArray, IntArray
from entropest.diagrams import cycle_character, young_diagrams
from entropest.shapes import shifted_rows

__all__ = ["LADDER_ENTROPIES", "LARGEST_ORDER", "WitnessLadder", "witness_ladder", "witness_values"]

LADDER_ENTROPIES: Final = (0.1, 0.25, 0.5, 0.8, 1.15, 1.6, 2.1, 2.8, 3.6, 4.6)
LARGEST_ORDER: Final = 6
_FLOOR_SIZE: Final = 16
_DIGITS: Final = 60
_EPS: Final = float(np.finfo(np.float64).eps)


@dataclass(frozen=True, slots=True, kw_only=True)
class WitnessLadder:
    """The witnesses used for blocks of one size.

    Attributes
    ----------
    order : int
        Number of coefficients: characters up to a cycle of this length are used.
    coefficients : (W, order) array
        c_0, c_1, ..., multiplying T_1 = 1, T_2, ....
    floors : (W,) array
        Numbers not above the least value of each witness over all outcomes of such a block.
    """

    order: int
    coefficients: FloatArray
    floors: FloatArray


def chord(copies_of_largest: int) -> tuple[float, float]:
    """Return (alpha, -beta) with S >= alpha - beta Tr rho^2, the chord through r and r + 1 equal eigenvalues.

    beta = r (r+1) log(1 + 1/r), alpha = log r + beta / r.

    Examples
    --------
    >>> chord(1)[1] == -2.0 * math.log(2.0)
    True
    """
    r = copies_of_largest
    beta = r * (r + 1) * math.log1p(1.0 / r)
    return math.log(r) + beta / r, -beta


def ladder_nodes(order: int) -> list[tuple[float, ...]]:
    """Return the interpolation nodes of the ladder for witnesses of `order` coefficients, 3 to 6.

    Nodes are rounded to six digits so that they can be written down exactly; each counts for value and slope.
    """
    patterns: dict[int, tuple[tuple[float, ...], ...]] = {
        3: ((1.0,), (2.0,)),
        4: ((1.0, 0.0), (2.3, 0.3)),
        5: ((1.0, 0.0), (2.3, 0.3)),
        6: ((0.93, 0.0, 0.0), (2.0, 0.3, 0.0)),
    }
    return [
        tuple(float(f"{math.exp(-power * entropy):.6g}") for power in pattern)
        for entropy in LADDER_ENTROPIES
        for pattern in patterns[order]
    ]


def ladder_chords() -> list[int]:
    """Return the numbers r of the chords of the ladder for two coefficients: floor(e^s) and the next.

    Examples
    --------
    >>> ladder_chords()[:4]
    [1, 2, 1, 2]
    """
    return [math.floor(math.exp(entropy)) + step for entropy in LADDER_ENTROPIES for step in (0, 1)]


@cache
def _context() -> Any:
    """Return the 60-digit context of this module; its precision is never changed, so threads may share it."""
    return _mp.context(_DIGITS)


def interpolant(nodes: tuple[float, ...], value_at_one: bool) -> tuple[float, ...]:
    """Return the coefficients of the Hermite interpolant of -log x, from 60-digit divided differences.

    Examples
    --------
    >>> [round(c, 6) for c in interpolant((0.5,), False)]  # the tangent at 1/2
    [1.693147, -2.0]
    """
    ctx = _context()
    points = sorted([ctx.mpf(node) for node in nodes for _ in range(2)] + ([ctx.one] if value_at_one else []))
    column = [-ctx.log(point) for point in points]
    newton: list[Any] = [column[0]]
    for width in range(1, len(points)):
        column = [
            (column[i + 1] - column[i]) / (points[i + width] - points[i])
            if points[i + width] != points[i]
            else ctx.mpf(-1) ** width / (width * points[i] ** width)
            for i in range(len(points) - width)
        ]
        newton.append(column[0])
    coefficients = [newton[-1]]
    for value, point in zip(newton[-2::-1], points[-2::-1], strict=True):
        shifted = [ctx.zero, *coefficients]
        coefficients = [a - point * b for a, b in zip(shifted, [*coefficients, ctx.zero], strict=True)]
        coefficients[0] += value
    return tuple(float(c) for c in coefficients)


@cache
def witness_ladder(copies: int) -> WitnessLadder:
    """Return the ladder for blocks of `copies` >= 2 copies.

    Blocks of more than six copies use witnesses of six coefficients. The floors of blocks of more than 16 copies are
    those of 16 copies: T_j of a large outcome is the mean of T_j over its random sub-blocks, so its values lie
    inside the range of the smaller size.

    Examples
    --------
    >>> ladder = witness_ladder(3)
    >>> ladder.order, ladder.coefficients.shape, bool((ladder.floors <= 0).all())
    (3, (20, 3), True)
    """
    order = min(copies, LARGEST_ORDER)
    if order == 2:
        return ladder_of([chord(r) for r in ladder_chords()], copies)
    return ladder_of([interpolant(nodes, order % 2 == 1) for nodes in ladder_nodes(order)], copies)


def ladder_of(coefficients: Sequence[tuple[float, ...]], copies: int) -> WitnessLadder:
    """Return witnesses with given coefficients for blocks of `copies` copies, with their floors."""
    rows = np.array(coefficients)
    order = rows.shape[1]
    slack = 4.0 * order * _EPS * np.abs(rows).sum(axis=1)
    least = (rows @ all_characters(min(copies, _FLOOR_SIZE), order).T).min(axis=1)
    return WitnessLadder(order=order, coefficients=rows, floors=np.minimum(least - slack, 0.0))


@cache
def all_characters(copies: int, order: int) -> FloatArray:
    """Return T_1..T_order of every diagram with `copies` boxes, each rounded once."""
    return np.array(
        [
            [float(cycle_character(diagram, length)) for length in range(1, order + 1)]
            for diagram in young_diagrams(copies)
        ]
    )


def witness_values(ladder: WitnessLadder, shapes: IntArray) -> FloatArray:
    """Return every witness of the ladder at every shape, (W, K), rounded down by a proven error.

    Parameters
    ----------
    ladder : WitnessLadder
        The ladder for the block size of the shapes.
    shapes : (K, d) int array
        Shapes of one size.
    """
    characters, errors = _characters_with_error(shapes, ladder.order)
    magnitude = np.abs(ladder.coefficients)
    slack = magnitude @ errors.T + 2.0 * ladder.order * _EPS * (magnitude @ np.abs(characters).T)
    values = ladder.coefficients @ characters.T - slack
    return np.asarray(np.maximum(values, ladder.floors[:, None]), dtype=np.float64)


def _characters_with_error(shapes: IntArray, order: int) -> tuple[FloatArray, FloatArray]:
    """Return T_1..T_order of each shape and a running bound of their rounding errors, both (K, order)."""
    parts = shifted_rows(shapes).astype(np.float64)
    size = shapes.sum(axis=-1, keepdims=True).astype(np.float64)
    d = shapes.shape[-1]
    diagonal = np.eye(d, dtype=bool)
    gaps = np.where(diagonal, 1.0, parts[..., :, None] - parts[..., None, :])
    falling = np.ones_like(parts)
    columns, errors = [], []
    for length in range(1, order + 1):
        falling = falling * np.maximum(parts - length + 1.0, 0.0) / (size - length + 1.0)
        terms = falling * np.where(diagonal, 1.0, (gaps - length) / gaps).prod(axis=-1)
        columns.append(terms.sum(axis=-1))
        errors.append(np.abs(terms).sum(axis=-1) * (3.0 * d + 3.0 * length + 4.0) * _EPS)
    return np.stack(columns, axis=-1), np.stack(errors, axis=-1)

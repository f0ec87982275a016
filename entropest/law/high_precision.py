"""The confluent bialternant in arbitrary precision, with a working precision that is proved to suffice.

With v the distinct positive values, t their multiplicities and l_j = row_j + d - j, the matrix with rows
binom(l_j, r) v^(l_j - r), r < t, has determinant s_lambda prod_{a<b} (v_a - v_b)^(t_a t_b). Read from the last
row and column on it is totally positive, so elimination without pivoting has a componentwise backward error
(de Boor, Pinkus, Numer. Math. 27 (1977) 485, doi:10.1007/BF01399609), and the determinant moves at most by
that error times the permanent. All monomials of a Schur polynomial are positive, so s_lambda >= prod
v_i^row_i; the rearrangement inequality bounds every term of the permanent; hence

    permanent / determinant <= d! prod_groups prod_{r<t} max(1, l_1^r / r!) prod_{a<b} (v_a/(v_a-v_b))^(t_a t_b)

The decimal logarithm of the right-hand side is the number of digits that can be lost (derived in
docs/theory.md).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import groupby
from typing import Any

from entropest import _mp

GUARD_DIGITS = 10


@dataclass(frozen=True, slots=True)
class Alternant:
    """The matrix of one shape, with rows of the largest value and the highest derivative first."""

    values: tuple[Fraction, ...]
    sizes: tuple[int, ...]
    shifted: tuple[int, ...]

    @classmethod
    def of(cls, values: Sequence[Fraction], rows: Sequence[int]) -> Alternant:
        """Group positive, decreasing values; one (possibly empty) row of the shape belongs to each."""
        groups = [(value, len(list(members))) for value, members in groupby(values)]
        d = len(values)
        shifted = tuple(int(row) + d - j for j, row in enumerate(rows, start=1))
        return cls(tuple(value for value, _ in groups), tuple(size for _, size in groups), shifted)

    @property
    def digits_lost(self) -> int:
        """Decimal digits that the determinant can lose to cancellation and to the powers."""
        d = len(self.shifted)
        longest = max(self.shifted[0], 1)
        lost = math.log10(math.factorial(d)) + math.log10(d * d) + math.log10(longest)
        for size in self.sizes:
            lost += sum(max(0.0, r * math.log10(longest) - _log10_factorial(r)) for r in range(size))
        for a, first in enumerate(self.values):
            for b in range(a + 1, len(self.values)):
                lost += self.sizes[a] * self.sizes[b] * _log10(first / (first - self.values[b]))
        return math.ceil(lost)

    def matrix(self, ctx: Any) -> list[list[Any]]:
        """Return binom(l_j, r) v^(l_j - r) in the numbers of `ctx`."""
        rows = []
        for value, size in zip(self.values, self.sizes, strict=True):
            number = _number(ctx, value)
            powers = [number**part for part in self.shifted]
            for r in range(size - 1, -1, -1):
                scale = number**r
                rows.append(
                    [math.comb(part, r) * power / scale for part, power in zip(self.shifted, powers, strict=True)]
                )
        return rows

    def vandermonde(self, ctx: Any) -> Any:
        """Return prod_{a<b} (v_a - v_b)^(t_a t_b)."""
        product = ctx.one
        for a, first in enumerate(self.values):
            for b in range(a + 1, len(self.values)):
                product *= _number(ctx, first - self.values[b]) ** (self.sizes[a] * self.sizes[b])
        return product


def schur(values: Sequence[Fraction], rows: Sequence[int], digits: int) -> Any:
    """Return s_rows(values) with a relative error below 10^-digits, as mpf of a private context.

    `values` are positive and decreasing, and `rows` has as many entries.
    """
    alternant = Alternant.of(values, rows)
    return _schur(_mp.context(digits + alternant.digits_lost + GUARD_DIGITS), alternant)


def standard_tableaux(ctx: Any, rows: Sequence[int]) -> Any:
    """Return the number of standard tableaux, rounded to the precision of `ctx`."""
    parts = [row + len(rows) - i for i, row in enumerate(rows, start=1)]
    gaps = math.prod(upper - lower for i, upper in enumerate(parts) for lower in parts[i + 1 :])
    return ctx.factorial(sum(rows)) * gaps / ctx.fprod(ctx.factorial(part) for part in parts)


def log_schur_ratios(
    values: Sequence[Fraction], shapes: Sequence[Sequence[int]], digits: int
) -> tuple[list[float], int]:
    """Return log(s_rows(values) / prod values_i^row_i) of each shape, and the digits that were worked with."""
    alternants = [Alternant.of(values, rows) for rows in shapes]
    ctx = _mp.context(digits + max(a.digits_lost for a in alternants) + GUARD_DIGITS)
    logs = [ctx.log(_number(ctx, value)) for value in values]
    ratios = []
    for alternant, rows in zip(alternants, shapes, strict=True):
        leading = ctx.fsum(log * int(row) for log, row in zip(logs, rows, strict=True))
        ratios.append(float(ctx.log(_schur(ctx, alternant)) - leading))
    return ratios, ctx.dps


def mean_contents(values: Sequence[Fraction], shapes: Sequence[Sequence[int]], digits: int) -> list[list[float]]:
    """Return values_i d/dvalues_i log s_rows(values): how often each letter occurs in a random tableau.

    The letters of a group of equal values share the mean of their group. The entries of the inverse of the
    matrix, weighted with the matrix, are bounded by permanent / determinant and computed with that condition
    number, so twice the digits of the determinant suffice.
    """
    alternants = [Alternant.of(values, rows) for rows in shapes]
    ctx = _mp.context(digits + 2 * max(a.digits_lost for a in alternants) + GUARD_DIGITS)
    return [_mean_contents(ctx, alternant) for alternant in alternants]


def _schur(ctx: Any, alternant: Alternant) -> Any:
    matrix = alternant.matrix(ctx)
    _eliminate(matrix)
    determinant = ctx.one
    for i, row in enumerate(matrix):
        determinant *= row[i]
    return determinant / alternant.vandermonde(ctx)


def _mean_contents(ctx: Any, alternant: Alternant) -> list[float]:
    matrix = alternant.matrix(ctx)
    inverse = _inverse(ctx, matrix)
    d, shifted, start = len(matrix), alternant.shifted, 0
    means: list[float] = []
    for a, size in enumerate(alternant.sizes):
        total = ctx.zero
        for i in range(start, start + size):
            order = start + size - 1 - i
            total += ctx.fsum(inverse[j][i] * matrix[i][j] * (shifted[j] - order) for j in range(d))
        for b, other in enumerate(alternant.values):
            if b != a:
                weight = alternant.values[a] / (alternant.values[a] - other)
                total -= size * alternant.sizes[b] * _number(ctx, weight)
        means.extend([float(total / size)] * size)
        start += size
    return means


def _eliminate(matrix: list[list[Any]]) -> None:
    """Bring a matrix to upper triangular form in place, without pivoting."""
    for k, top in enumerate(matrix):
        for row in matrix[k + 1 :]:
            factor = row[k] / top[k]
            row[k:] = [entry - factor * above for entry, above in zip(row[k:], top[k:], strict=True)]


def _inverse(ctx: Any, matrix: list[list[Any]]) -> list[list[Any]]:
    """Return the inverse by elimination without pivoting."""
    d = len(matrix)
    rows = [[*row, *(ctx.one if i == j else ctx.zero for j in range(d))] for i, row in enumerate(matrix)]
    _eliminate(rows)
    for k in range(d - 1, -1, -1):
        pivot = rows[k][k]
        rows[k] = [entry / pivot for entry in rows[k]]
        for i in range(k):
            factor = rows[i][k]
            rows[i] = [entry - factor * below for entry, below in zip(rows[i], rows[k], strict=True)]
    return [row[d:] for row in rows]


def _number(ctx: Any, value: Fraction) -> Any:
    return ctx.mpf(value.numerator) / value.denominator


def _log10(value: Fraction) -> float:
    return math.log10(value.numerator) - math.log10(value.denominator)


def _log10_factorial(r: int) -> float:
    return math.lgamma(r + 1) / math.log(10)

"""The confluent bialternant in arbitrary precision, with a working precision that is proved to suffice.

With v the distinct positive values, t their multiplicities and l_j = row_j + d - j, the matrix with rows
binom(l_j, r) v^(l_j - r), r < t, has determinant s_lambda prod_{a<b} (v_a - v_b)^(t_a t_b). With values, derivatives
and l_j in increasing order its triangular factors are non-negative (for distinct values it is totally positive), so
elimination without pivoting has a componentwise backward error (de Boor, Pinkus, Numer. Math. 27 (1977) 485,
doi:10.1007/BF01399609), and the determinant moves at most by that error times the permanent. All monomials of a
Schur polynomial are positive, so s_lambda >= prod v_i^row_i; the rearrangement inequality bounds every term of the
permanent; hence

    permanent / determinant <= d! prod_groups prod_{r<t} max(1, l_1^r / r!) prod_{a<b} (v_a/(v_a-v_b))^(t_a t_b)

The decimal logarithm of the right-hand side is the number of digits that can be lost (derived in docs/derivations.md).
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from fractions import Fraction
from itertools import groupby
from typing import Any

from entropest import _mp

GUARD_DIGITS = 10


class Nodes:
    """Positive eigenvalues in decreasing order: distinct values and their multiplicities."""

    def __init__(self, spectrum: Sequence[Fraction]) -> None:
        groups = [(value, len(list(members))) for value, members in groupby(spectrum)]
        self.values = [value for value, _ in groups]
        self.sizes = [size for _, size in groups]
        self.count = len(spectrum)

    def pairs(self) -> Iterator[tuple[Fraction, Fraction, int]]:
        """Yield v_a, v_a - v_b and t_a t_b for a < b."""
        for a, first in enumerate(self.values):
            for b in range(a + 1, len(self.values)):
                yield first, first - self.values[b], self.sizes[a] * self.sizes[b]

    def digits_lost(self, shapes: Sequence[Sequence[int]]) -> int:
        """Decimal digits that the determinants of some shapes can lose to cancellation and to the powers."""
        longest = max(max(rows[0] for rows in shapes) + self.count - 1, 1)
        lost = math.log10(math.factorial(self.count)) + 2 * math.log10(self.count) + math.log10(longest)
        for size in self.sizes:
            lost += sum(max(0.0, r * math.log10(longest) - math.lgamma(r + 1) / math.log(10)) for r in range(size))
        lost += sum(power * _log10(first / gap) for first, gap, power in self.pairs())
        return math.ceil(lost)


class Alternants:
    """The matrices of the shapes of some nodes in the numbers of one context."""

    def __init__(self, nodes: Nodes, digits: int) -> None:
        self.nodes = nodes
        self.ctx = _mp.context(digits)
        self.numbers = [self.number(value) for value in nodes.values]
        self.vandermonde = self.ctx.fprod(self.number(gap) ** power for _, gap, power in nodes.pairs())

    def number(self, value: Fraction) -> Any:
        """Round a fraction to the context."""
        return self.ctx.mpf(value.numerator) / value.denominator

    def matrix(self, parts: Sequence[int]) -> list[list[Any]]:
        """Return binom(l_j, r) v^(l_j - r), v and r increasing like the l_j given."""
        rows = []
        for number, size in zip(self.numbers[::-1], self.nodes.sizes[::-1], strict=True):
            powers = [number**part for part in parts]
            rows.append(powers)
            for r in range(1, size):
                scale = number**r
                rows.append([math.comb(part, r) * power / scale for part, power in zip(parts, powers, strict=True)])
        return rows

    def schur(self, rows: Sequence[int]) -> Any:
        """Return the Schur polynomial of a shape with a row (possibly empty) for each eigenvalue."""
        matrix = self.matrix(_increasing_parts(rows))
        _eliminate(matrix)
        return self.ctx.fprod(row[i] for i, row in enumerate(matrix)) / self.vandermonde

    def mean_contents(self, rows: Sequence[int]) -> list[float]:
        """Return values_i d/dvalues_i log s_rows, the same for all members of a group."""
        parts = _increasing_parts(rows)
        matrix = self.matrix(parts)
        inverse = _inverse(self.ctx, matrix)
        values, sizes = self.nodes.values, self.nodes.sizes
        means: list[float] = []
        start = len(matrix)
        for a, size in enumerate(sizes):
            start -= size
            total = self.ctx.zero
            for r in range(size):
                row, i = matrix[start + r], start + r
                total += self.ctx.fsum(inverse[j][i] * row[j] * (part - r) for j, part in enumerate(parts))
            for b, other in enumerate(values):
                if b != a:
                    total -= size * sizes[b] * self.number(values[a] / (values[a] - other))
            means.extend([float(total / size)] * size)
        return means


def schur(spectrum: Sequence[Fraction], rows: Sequence[int], digits: int) -> Any:
    """Return s_rows(spectrum) with a relative error below 10^-digits, as mpf of a private context.

    The eigenvalues are positive and decreasing, and `rows` has as many entries.
    """
    nodes = Nodes(spectrum)
    return Alternants(nodes, digits + nodes.digits_lost([rows]) + GUARD_DIGITS).schur(rows)


def log_schur_ratios(
    spectrum: Sequence[Fraction], shapes: Sequence[Sequence[int]], digits: int
) -> tuple[list[float], int]:
    """Return log(s_rows(spectrum) / prod p_i^row_i) of each shape, and the digits that were worked with."""
    nodes = Nodes(spectrum)
    alternants = Alternants(nodes, digits + nodes.digits_lost(shapes) + GUARD_DIGITS)
    ctx = alternants.ctx
    logs = [ctx.log(alternants.number(value)) for value in spectrum]
    ratios = []
    for rows in shapes:
        leading = ctx.fsum(log * int(row) for log, row in zip(logs, rows, strict=True))
        ratios.append(float(ctx.log(alternants.schur(rows)) - leading))
    return ratios, ctx.dps


def mean_contents(spectrum: Sequence[Fraction], shapes: Sequence[Sequence[int]], digits: int) -> list[list[float]]:
    """Return p_i d/dp_i log s_rows of each shape: how often each letter occurs in a random tableau.

    The entries of the inverse of the matrix, weighted with the matrix, are bounded by permanent / determinant
    and computed with that condition number, so twice the digits of the determinant suffice.
    """
    nodes = Nodes(spectrum)
    alternants = Alternants(nodes, digits + 2 * nodes.digits_lost(shapes) + GUARD_DIGITS)
    return [alternants.mean_contents(rows) for rows in shapes]


def standard_tableaux(ctx: Any, rows: Sequence[int]) -> Any:
    """Return the number of standard tableaux, rounded to the precision of `ctx`."""
    parts = [row + len(rows) - i for i, row in enumerate(rows, start=1)]
    gaps = math.prod(upper - lower for i, upper in enumerate(parts) for lower in parts[i + 1 :])
    return ctx.factorial(sum(rows)) * gaps / ctx.fprod(ctx.factorial(part) for part in parts)


def _increasing_parts(rows: Sequence[int]) -> list[int]:
    """Return l_j = row_j + d - j as Python integers, the smallest first."""
    return [int(row) + j for j, row in enumerate(reversed(rows))]


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


def _log10(value: Fraction) -> float:
    return math.log10(value.numerator) - math.log10(value.denominator)

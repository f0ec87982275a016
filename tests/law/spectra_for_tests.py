"""Spectra with every kind of degeneracy, and slow plain versions of the law to test against."""

import math
from collections.abc import Sequence
from fractions import Fraction
from itertools import pairwise, product

import numpy as np

from entropest import _mp

F = Fraction
DEGENERATE = {
    "distinct": (F(1, 2), F(3, 10), F(3, 20), F(1, 20)),
    "uniform": (F(1, 4),) * 4,
    "one tie": (F(2, 5), F(2, 5), F(3, 20), F(1, 20)),
    "two ties": (F(2, 5), F(2, 5), F(1, 10), F(1, 10)),
    "triple": (F(7, 10), F(1, 10), F(1, 10), F(1, 10)),
    "near tie": (F(1, 2) + F(1, 10**9), F(1, 2) - F(1, 10**9) - F(1, 5), F(1, 10), F(1, 10)),
    "zeros": (F(2, 3), F(1, 3), F(0), F(0)),
    "tie and zero": (F(2, 5), F(2, 5), F(1, 5), F(0)),
    "pure": (F(1), F(0), F(0), F(0)),
    "tiny": (F(1) - F(1, 10**6) - F(1, 10**12), F(1, 10**6), F(1, 10**12), F(0)),
    "qubit": (F(3, 4), F(1, 4)),
    "one level": (F(1),),
}


def schur_by_tableaux(rows: Sequence[int], variables: Sequence[Fraction]) -> Fraction:
    """Sum the monomials of all semistandard tableaux, removing the boxes of the last letter in every way."""
    rows = list(rows)
    while rows and rows[-1] == 0:
        rows.pop()
    if not rows:
        return Fraction(1)
    if len(rows) > len(variables):
        return Fraction(0)
    *others, last = variables
    ranges = [range(lower, upper + 1) for upper, lower in pairwise([*rows, 0])]
    smaller = [mu for mu in product(*ranges) if len(mu) <= len(others) or mu[-1] == 0]
    return sum((last ** (sum(rows) - sum(mu)) * schur_by_tableaux(mu, others) for mu in smaller), Fraction(0))


def precise_logpmf(spectrum: Sequence[Fraction | float], rows: Sequence[int], digits: int = 60) -> float:
    """Return log f^rows s_rows by the plain bialternant and the factorials, in arbitrary precision.

    Equal eigenvalues are moved apart by 10^-(digits), and the working precision is large enough for that.
    """
    values = [Fraction(value) for value in spectrum if value > 0]
    values = [value / sum(values) for value in values]
    d, n = len(values), sum(rows)
    for i in range(1, d):
        if values[i] in values[:i]:
            values[i] -= values[i] * Fraction(i, 10**digits)
    ctx = _mp.context(digits * d * (d + 1) + 50)
    parts = [int(row) + d - i for i, row in enumerate(rows, start=1)]
    numbers = [ctx.mpf(value.numerator) / value.denominator for value in values]
    matrix = [[number**part for part in parts] for number in numbers]
    schur = ctx.one
    for k in range(d):
        schur *= matrix[k][k]
        for i in range(k + 1, d):
            factor = matrix[i][k] / matrix[k][k]
            matrix[i] = [entry - factor * above for entry, above in zip(matrix[i], matrix[k], strict=True)]
    for i in range(d):
        for j in range(i + 1, d):
            schur *= (parts[i] - parts[j]) / (numbers[i] - numbers[j])
    return float(ctx.log(schur) + ctx.loggamma(n + 1) - ctx.fsum(ctx.loggamma(part + 1) for part in parts))


def random_shape(spectrum: np.ndarray, copies: int, rng: np.random.Generator) -> np.ndarray:
    """Return a plausible shape: sorted multinomial counts."""
    return -np.sort(-rng.multinomial(copies, spectrum / math.fsum(spectrum)))

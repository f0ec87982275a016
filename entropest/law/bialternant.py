"""The bialternant in float64: scaled, confluent at ties, with a bound on its own error.

For positive eigenvalues with logarithms x_1 >= ... >= x_d and l_j = row_j + d - j, the matrix

    M_ij = exp[(x_i - x_j) l_j - (U_i - U_j)],   U_i = sum_{m>=i} (x_m - x_{m+1}) (l_m + l_{m+1}) / 2

has unit diagonal and entries of at most 1, and log s_lambda = sum_i x_i l_i + log det M - log prod_{i<j}
(p_i - p_j). In a group of t equal eigenvalues starting at row c the r-th row (r = 0 .. t-1) carries the Newton
polynomial prod_{m<r} (l_{c+m} - l_j), divided by its value on the diagonal: a group alone has a triangular
matrix, so that the maximally mixed state loses nothing (derived in docs/derivations.md).

The number returned is log T with T = s_lambda / prod p_i^row_i >= 1.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from entropest._types import FloatArray, IntArray

ROUNDING = 2.0**-53
# Largest accepted bound on the absolute error of a logarithm.
ERROR_LIMIT = 5e-10
# Merging near ties moves log s by at most MERGE_LIMIT^2 / 8 = 5e-11.
MERGE_LIMIT = 2e-5
ENTRIES_AT_ONCE = 2**18


@dataclass(frozen=True, slots=True)
class TiedSpectrum:
    """Positive eigenvalues in decreasing order, those closer than any shape can tell made equal.

    With delta the distances of the x_i from the means of their groups, symmetry makes the first derivative of
    log s along delta vanish, and its second derivative is the variance of sum_i delta_i w_i over the contents w
    of a random tableau, at most (n sum |delta_i|)^2 / 4. So log s is off by at most limit^2 / 8 when groups
    are no wider than limit / (n d).
    """

    values: FloatArray
    starts: tuple[int, ...]
    sizes: tuple[int, ...]

    @classmethod
    def merging(cls, spectrum: FloatArray, copies: int, limit: float = MERGE_LIMIT) -> TiedSpectrum:
        """Merge eigenvalues whose logarithms differ by at most limit / (copies * their number)."""
        width = limit / (max(copies, 1) * len(spectrum))
        values, starts, sizes = spectrum.copy(), [], []
        start = 0
        while start < len(spectrum):
            stop = start + 1
            while stop < len(spectrum) and _log_quotient(spectrum[start], spectrum[stop]) <= width:
                stop += 1
            offset = math.fsum(_log_quotient(value, spectrum[start]) for value in spectrum[start:stop])
            values[start:stop] = spectrum[start] * math.exp(offset / (stop - start))
            starts.append(start)
            sizes.append(stop - start)
            start = stop
        return cls(values, tuple(starts), tuple(sizes))

    @property
    def log_gaps(self) -> FloatArray:
        """x_i - x_{i+1}, accurate when small."""
        pairs = zip(self.values[:-1], self.values[1:], strict=True)
        return np.array([_log_quotient(upper, lower) for upper, lower in pairs], dtype=np.float64)

    @property
    def group_of_row(self) -> IntArray:
        """Index of the group that each row belongs to."""
        return np.repeat(np.arange(len(self.sizes)), self.sizes)

    def quotient_sum(self) -> float:
        """Return sum over pairs from different groups of -log(1 - p_b / p_a)."""
        total = 0.0
        for a, first in enumerate(self.starts):
            for b in range(a + 1, len(self.starts)):
                upper, lower = self.values[first], self.values[self.starts[b]]
                total -= self.sizes[a] * self.sizes[b] * math.log((upper - lower) / upper)
        return total


@dataclass(frozen=True, slots=True)
class System:
    """Scaled matrices of a batch of shapes, eliminated, with their inverses and error weights."""

    matrix: FloatArray
    inverse: FloatArray
    log_determinant: FloatArray
    uncertainty: FloatArray

    @property
    def condition(self) -> FloatArray:
        """sum_ij |M_ij| |M^-1_ji|: first-order growth of relative errors of the entries in the determinant."""
        return np.asarray(np.einsum("bij,bji->b", np.abs(self.matrix), np.abs(self.inverse)))

    @property
    def error(self) -> FloatArray:
        """Bound, to first order, on the absolute error of the logarithm of the determinant."""
        return np.asarray(np.einsum("bij,bji->b", self.uncertainty, np.abs(self.inverse)))


@dataclass(frozen=True, slots=True)
class Ratios:
    """log T of a batch of shapes, with the bound on its error and the condition number; nan where it failed."""

    log_ratio: FloatArray
    error: FloatArray
    condition: FloatArray


def log_ratios(shapes: IntArray, spectrum: TiedSpectrum) -> Ratios:
    """Return log T of shapes (B, d) with as many rows as there are eigenvalues."""
    total = len(shapes)
    log_ratio, error, condition = np.empty(total), np.empty(total), np.empty(total)
    groups = _log_group_dimensions(shapes, spectrum) + spectrum.quotient_sum()
    with np.errstate(all="ignore"):
        for part in _batches(total, shapes.shape[1]):
            system = solve(shapes[part], spectrum)
            log_ratio[part] = system.log_determinant + groups[part]
            error[part], condition[part] = system.error, system.condition
    return Ratios(log_ratio, np.where(np.isfinite(log_ratio), error, np.inf), condition)


def mean_contents(shapes: IntArray, spectrum: TiedSpectrum) -> tuple[FloatArray, FloatArray]:
    """Return p_i d/dp_i log s for shapes (B, d), and the bounds on the errors of these numbers.

    It is the mean number of letters i in a random semistandard tableau; equal eigenvalues share the mean of
    their group.
    """
    d = shapes.shape[1]
    contents, errors = np.empty(shapes.shape), np.empty(shapes.shape)
    parts = shapes + np.arange(d - 1, -1, -1)
    shift = _content_shift(spectrum)
    groups = np.equal.outer(spectrum.group_of_row, spectrum.group_of_row)
    average = groups / groups.sum(axis=1, keepdims=True)
    with np.errstate(all="ignore"):
        for part in _batches(len(shapes), d):
            system = solve(shapes[part], spectrum)
            distance = (parts[part][:, None, :] - parts[part][:, :, None]).astype(np.float64)
            weights = system.matrix * np.swapaxes(system.inverse, 1, 2)
            own = shapes[part] + (weights * distance).sum(axis=2) + shift
            spread = np.abs(system.inverse) @ system.uncertainty @ np.abs(system.inverse)
            slack = np.abs(system.matrix) * np.swapaxes(spread, 1, 2) + ROUNDING * np.abs(weights)
            contents[part] = own @ average + 0.0 * system.log_determinant[:, None]
            errors[part] = ((slack * np.abs(distance)).sum(axis=2) + ROUNDING * np.abs(shift)) @ average
    return contents, np.where(np.isfinite(contents), errors, np.inf)


def solve(shapes: IntArray, spectrum: TiedSpectrum) -> System:
    """Build and eliminate the scaled matrices of shapes (B, d); unsound ones get nan as log-determinant."""
    d = shapes.shape[1]
    parts = (shapes + np.arange(d - 1, -1, -1)).astype(np.float64)
    exponents = _exponents(parts, spectrum.log_gaps)
    matrix = np.exp(-exponents) * _newton_factors(parts, spectrum)
    pivots, growth, inverse = _eliminate(matrix)
    sound = (pivots > 0.0).all(axis=1) & np.isfinite(inverse).all(axis=(1, 2))
    log_determinant = np.where(sound, np.log(pivots).sum(axis=1), np.nan)
    of_entries = 3.0 * max(spectrum.sizes) + (d + 6.0) * exponents
    uncertainty = ROUNDING * (of_entries * np.abs(matrix) + d * growth)
    return System(matrix, inverse, log_determinant, uncertainty)


def _eliminate(matrix: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return pivots, |L||U| and inverse of each matrix, without pivoting; rubbish where a pivot vanishes.

    Without ties the matrices are totally positive (read from the last row on), and |L||U| = |M|.
    """
    d = matrix.shape[1]
    work = np.concatenate([matrix, np.broadcast_to(np.eye(d), matrix.shape)], axis=2)
    growth = np.zeros_like(matrix)
    for k in range(d):
        factors = work[:, k:, k] / work[:, k, k, None]
        growth[:, k:, k:] += np.abs(factors[:, :, None] * work[:, k, None, k:d])
        work[:, k + 1 :, k:] -= factors[:, 1:, None] * work[:, k, None, k:]
    pivots = np.diagonal(work[:, :, :d], axis1=1, axis2=2).copy()
    inverse = work[:, :, d:]
    for k in range(d - 1, -1, -1):
        inverse[:, k] /= pivots[:, k, None]
        inverse[:, :k] -= work[:, :k, k, None] * inverse[:, k, None]
    return pivots, growth, inverse


def _exponents(parts: FloatArray, log_gaps: FloatArray) -> FloatArray:
    """Return -log of the unsigned scaled entries, (B, d, d), as sums of non-negative terms."""
    d = parts.shape[1]
    distance = parts[:, :, None] - parts[:, None, :]
    terms = log_gaps[:, None] * np.abs(distance[:, :-1] + distance[:, 1:]) / 2.0
    j, m, i = np.ogrid[:d, : d - 1, :d]
    between = ((np.minimum(i, j) <= m) & (m < np.maximum(i, j))).astype(np.float64)
    return np.asarray((terms.transpose(2, 0, 1) @ between).transpose(1, 2, 0))


def _newton_factors(parts: FloatArray, spectrum: TiedSpectrum) -> FloatArray:
    """Return, for the rows of tied groups, prod_{m<r} (l_{c+m} - l_j) / (l_{c+m} - l_{c+r})."""
    d = parts.shape[1]
    factors = np.ones((len(parts), d, d))
    for start, size in zip(spectrum.starts, spectrum.sizes, strict=True):
        for i in range(start + 1, start + size):
            for m in range(start, i):
                factors[:, i] *= (parts[:, m, None] - parts) / (parts[:, m, None] - parts[:, i, None])
    return factors


def _log_group_dimensions(shapes: IntArray, spectrum: TiedSpectrum) -> FloatArray:
    """Return sum over pairs of rows within groups of log((l_i - l_j) / (j - i))."""
    upper, lower = np.triu_indices(shapes.shape[1], k=1)
    group = spectrum.group_of_row
    same = group[upper] == group[lower]
    upper, lower = upper[same], lower[same]
    steps = (lower - upper).astype(np.float64)
    return np.asarray(np.log1p((shapes[:, upper] - shapes[:, lower]) / steps).sum(axis=1))


def _content_shift(spectrum: TiedSpectrum) -> FloatArray:
    """Return sum_{j<i} p_i/(p_j - p_i) - sum_{j>i} p_j/(p_i - p_j) over the j of other groups."""
    values, group = spectrum.values, spectrum.group_of_row
    gaps = values[:, None] - values
    same = np.equal.outer(group, group)
    quotients = np.minimum(values[:, None], values) / np.where(same, 1.0, np.abs(gaps))
    index = np.arange(len(values))
    signs = np.sign(index[:, None] - index)
    return np.asarray((np.where(same, 0.0, quotients) * signs).sum(axis=1))


def _batches(total: int, d: int) -> Iterator[slice]:
    size = max(1, ENTRIES_AT_ONCE // (d * d))
    return (slice(start, start + size) for start in range(0, total, size))


def _log_quotient(upper: float, lower: float) -> float:
    """Return log(upper / lower), accurate when they are close."""
    if 0.5 * upper < lower < 2.0 * upper:
        return math.log1p((upper - lower) / lower)
    return math.log(upper) - math.log(lower)

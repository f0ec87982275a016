"""Poisson mass functions: accurate logarithms, and a well-conditioned basis of the span of several of them.

The mass functions of t_1, ..., t_m become parallel when the means approach each other. Divided differences in the
mean span the same space and stay meaningful at exact ties, where they are derivatives with respect to the mean.
"""

import math
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from scipy.special import gammaln

from entropest._types import FloatArray

__all__ = ["ScaledColumns", "groups_of_means", "log_poisson", "span_of_poissons"]

SMALL_MEAN = 4.0


@dataclass(frozen=True, slots=True, kw_only=True)
class ScaledColumns:
    """Functions exp(log_scale(x)) factors(x, k) tabulated at points x.

    Attributes
    ----------
    log_scale : (N,) float array
    factors : (N, m) float array
    """

    log_scale: FloatArray
    factors: FloatArray


def log_poisson(x: FloatArray, mean: float) -> FloatArray:
    """Return the logarithm of the Poisson mass function at real x >= 0, accurate for large arguments too.

    With v = (mean - x)/(mean + x) the exponent x log(mean/x) + x - mean is x times the series
    2 v^2 (v/3 + v^3/5 + ... - 1/(1 - v)), and log Gamma enters through Stirling's remainder only, so that the
    error is a few ulps of the result (of |x - mean| where |v| > 1/10) and not of mean log(mean).

    References
    ----------
    Loader, Fast and accurate computation of binomial probabilities (2000), for the splitting.

    Examples
    --------
    >>> float(np.exp(log_poisson(np.array([2.0]), 3.0))[0].round(12))
    0.224041807655
    """
    is_small = x < 16.0
    small = np.where(is_small, x, 0.0)
    large = np.where(is_small, 16.0, x)
    v = (mean - large) / (mean + large)
    series = np.zeros_like(v)
    for k in range(17, 1, -2):
        series = series * v * v + 1.0 / k
    exponent = np.where(
        np.abs(v) < 0.1,
        2.0 * v * v * (v * series - 1.0 / (1.0 - v)),
        np.log(mean / large) - (mean - large) / large,
    )
    inverse = 1.0 / large
    square = inverse * inverse
    remainder = inverse * (1 / 12 - square * (1 / 360 - square * (1 / 1260 - square * (1 / 1680 - square / 1188))))
    at_large = large * exponent - remainder - 0.5 * np.log(2.0 * np.pi * large)
    at_small = small * math.log(mean) - mean - gammaln(small + 1.0)
    return np.asarray(np.where(is_small, at_small, at_large), dtype=np.float64)


def groups_of_means(means: FloatArray, gap: float, least_width: float = 1.0) -> Iterator[slice]:
    """Cut decreasing means where neighbours are at least gap * max(least_width, sqrt(smaller mean)) apart.

    Examples
    --------
    >>> list(groups_of_means(np.array([90.0, 9.0, 8.9]), 0.5))
    [slice(0, 1, None), slice(1, 3, None)]
    """
    width = np.maximum(np.sqrt(means[1:]), least_width)
    cuts = np.flatnonzero(means[:-1] - means[1:] >= gap * width) + 1
    edges = [0, *cuts.tolist(), len(means)]
    return (slice(start, stop) for start, stop in pairwise(edges))


def span_of_poissons(means: FloatArray, x: FloatArray) -> ScaledColumns:
    """Return a basis of the span of the Poisson mass functions of one group of means.

    A single mean gives its mass function. A group whose mean is below 4 gives the divided differences of
    t^x/x!, which are the complete homogeneous polynomials h_{x-k}(t_1..t_{k+1})/x!: positive, so exact to rounding
    however close the means. Another group is expanded about its average t in the orthonormal Charlier
    polynomials q_j: the mass function of t + z sqrt(t) is that of t times sum_j z^j / sqrt(j!) q_j (a coherent
    state), and divided differences in z have the coefficients h_{j-k}(z_1..z_{k+1}) sqrt(k!/j!).

    Parameters
    ----------
    means : (m,) float array
        Positive, no further apart than a few standard deviations.
    x : (N,) float array
        Non-negative points; below 1000 they must be whole numbers.

    References
    ----------
    Macdonald, Symmetric Functions and Hall Polynomials (1995), I.2, for h; Szego, Orthogonal Polynomials (1975),
    2.81, for the Charlier polynomials. The expansion is derived in docs/derivations.md.

    Examples
    --------
    >>> columns = span_of_poissons(np.array([2.0, 2.0]), np.arange(3.0))
    >>> (columns.factors * np.exp(columns.log_scale)[:, None]).round(3).tolist()
    [[0.5, 0.0], [1.0, 0.5], [1.0, 1.0]]
    """
    if len(means) == 1:
        return ScaledColumns(log_scale=log_poisson(x, float(means[0])), factors=np.ones((len(x), 1)))
    center = float(means.mean())
    if center < SMALL_MEAN:
        columns = _homogeneous_columns(np.sort(means), x)
        largest = columns.max(axis=1)
        with np.errstate(divide="ignore"):
            log_largest = np.log(largest)
        return ScaledColumns(log_scale=log_largest, factors=columns / np.where(largest > 0.0, largest, 1.0)[:, None])
    coefficients = _divided_coherent_states(_leja_ordered((means - center) / math.sqrt(center)))
    orthonormal, _ = np.linalg.qr(coefficients)
    return ScaledColumns(log_scale=log_poisson(x, center), factors=charlier(x, center, len(coefficients)) @ orthonormal)


def charlier(x: FloatArray, mean: float, number: int) -> FloatArray:
    """Return the orthonormal Charlier polynomials q_0, ..., q_{number-1} of a Poisson law at x, (N, number).

    sqrt((j+1) t) q_{j+1} = (x - t - j) q_j - sqrt(j t) q_{j-1}; at whole x < j, where this recurrence is
    unstable, the duality (-1)^j q_j(x) sqrt(P(x)) = (-1)^x q_x(j) sqrt(P(j)) is used instead.

    Examples
    --------
    >>> charlier(np.array([0.0, 5.0]), 4.0, 2)
    array([[ 1. , -2. ],
           [ 1. ,  0.5]])
    """
    values = _charlier_recurrence(x, mean, number)
    low = np.flatnonzero(x < number)
    if low.size:
        degree = np.arange(number)
        point = x[low].astype(np.int64)[:, None]
        half_log = 0.5 * log_poisson(degree.astype(np.float64), mean)
        dual = _charlier_recurrence(degree.astype(np.float64), mean, number).T[point[:, 0]]
        dual *= np.where((point + degree) % 2, -1.0, 1.0) * np.exp(half_log - half_log[point])
        values[low] = np.where(degree > point, dual, values[low])
    return values


def _charlier_recurrence(x: FloatArray, mean: float, number: int) -> FloatArray:
    values = np.ones((len(x), number))
    before = np.zeros(len(x))
    for j in range(number - 1):
        step = (x - mean - j) * values[:, j] - math.sqrt(j * mean) * before
        before = values[:, j]
        values[:, j + 1] = step / math.sqrt((j + 1) * mean)
    return values


def _homogeneous_columns(means: FloatArray, x: FloatArray) -> FloatArray:
    """Return h_{x-k}(t_1..t_{k+1})/x! at whole x, each column divided by its largest entry."""
    top = int(x[-1]) + 1
    homogeneous = np.zeros(top)
    homogeneous[0] = 1.0
    columns = np.zeros((top, len(means)))
    inverse_factorial = np.exp(-gammaln(np.arange(1.0, top + 1.0)))
    for k, mean in enumerate(means.tolist()):
        for r in range(1, top):
            homogeneous[r] += mean * homogeneous[r - 1]
        columns[k:, k] = homogeneous[: top - k] * inverse_factorial[k:]
    columns /= columns.max(axis=0)
    return np.asarray(columns[x.astype(np.int64)], dtype=np.float64)


def _divided_coherent_states(offsets: FloatArray) -> FloatArray:
    """Return the columns h_{j-k}(z_1..z_{k+1}) sqrt(k!/j!), cut where the rest is below rounding."""
    number = len(offsets)
    radius = float(np.abs(offsets).max())
    terms = number
    while radius > 0.0:
        log_rest = terms * math.log(radius) - 0.5 * math.lgamma(terms + 1) + number * math.log(terms + 1)
        if log_rest < -42.0:
            break
        terms += 1
    half_log_factorial = 0.5 * gammaln(np.arange(1.0, terms + 1.0))
    columns = np.zeros((terms, number))
    homogeneous = np.zeros(terms)
    homogeneous[0] = 1.0
    for k, offset in enumerate(offsets.tolist()):
        for r in range(1, terms):
            homogeneous[r] += offset * homogeneous[r - 1]
        columns[k:, k] = homogeneous[: terms - k] * np.exp(half_log_factorial[k] - half_log_factorial[k:])
    return columns


def _leja_ordered(offsets: FloatArray) -> FloatArray:
    """Order points so that each is far from those before it (which keeps divided differences independent)."""
    left = offsets.tolist()
    ordered = [left.pop(int(np.argmin(np.abs(offsets))))]
    while left:
        distances = np.abs(np.subtract.outer(left, ordered))
        ordered.append(left.pop(int(np.argmax(np.log(np.maximum(distances, 1e-300)).sum(axis=1)))))
    return np.array(ordered)

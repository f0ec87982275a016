"""Unbiased power sums of a spectrum from the diagrams of its copies, and their continuation to real orders.

A diagram of n boxes with rows r_1 >= ... >= r_N (empty rows may be counted) is described by
l_i = r_i + N - i. The value T_k of the normalised character at a k-cycle has mean Tr rho^k for every state, and
for integer k it does not depend on the number N of rows counted. Frobenius' formula for it makes sense for real k,
where N matters::

    T_s = Gamma(n+1-s)/n! sum_i Gamma(l_i+1)/Gamma(l_i+1-s) prod_{m != i} (l_i - l_m - s)/(l_i - l_m)

T_1 = 1, and the derivatives at s = 1 continue the power sums to the entropy: -T'_1 stands for -sum p log p and
T''_1 for sum p log^2 p. Their bias is exponentially small in n times the smallest eigenvalue when N is the rank.
"""

import math
from collections.abc import Callable

import numpy as np
from scipy.special import digamma, gamma, poch, rgamma, zeta

from entropest._checks import as_integer, as_real
from entropest._types import FloatArray, IntArray
from entropest.errors import ArgumentValueError
from entropest.shapes import as_shapes, shifted_rows

__all__ = [
    "continuation_jet",
    "continuation_power_excess",
    "continuation_power_sum",
    "entropy_continuation",
    "power_sum",
]

LARGEST_ORDER = 64
_ELEMENTS_AT_ONCE = 2**18
_NEAR_ONE = 1e-3
_JET_NEAR_ONE = 6


def power_sum(shapes: IntArray, order: int) -> FloatArray:
    """Return the unbiased estimate T_k of Tr rho^k from each shape.

    Parameters
    ----------
    shapes : (..., d) int array
        Shapes with at least `order` boxes each; any number of empty rows.
    order : int
        The order k, from 1 to 64.

    Returns
    -------
    (...) float64 array, right to a few d + k ulps of 1 (not of the value).

    Raises
    ------
    ArgumentValueError
        If a shape has fewer than `order` boxes.

    Notes
    -----
    The absolute terms of the sum are ratios of numbers of standard tableaux that add up to at most 1, so nothing
    is lost by cancellation beyond rounding at the scale of 1. Exact fractions for one diagram:
    :func:`entropest.cycle_character`.

    References
    ----------
    Frobenius (1900); Macdonald, Symmetric Functions and Hall Polynomials (1995), I.7 example 7.

    Examples
    --------
    >>> power_sum(np.array([[3, 1], [2, 2]]), 2)
    array([0.33333333, 0.        ])
    """
    shapes = as_shapes(shapes)
    order = as_integer(order, "order", at_least=1, at_most=LARGEST_ORDER)
    smallest = shapes.sum(axis=-1).min(initial=LARGEST_ORDER)
    if smallest < order:
        raise ArgumentValueError(f"order must be at most the number of boxes {smallest}, got {order}")
    return _in_chunks(lambda part: _integer_power_sum(part, order), shapes)


def continuation_power_sum(shapes: IntArray, order: float, rows: int) -> FloatArray:
    """Return the continued power sum T_s of each shape, counting `rows` rows.

    At integer s up to the number of boxes it equals :func:`power_sum`, whatever `rows` is.

    Parameters
    ----------
    shapes : (..., d) int array
        Shapes with at least one box and at most `rows` non-empty rows each.
    order : float
        The real order s, from 0 to the number of boxes and to 64.
    rows : int
        Number N of rows counted.

    Raises
    ------
    ArgumentValueError
        If a rule above is broken.

    Examples
    --------
    >>> float(continuation_power_sum(np.array([3, 1]), 2.0, 4).round(12))
    0.333333333333
    """
    order = as_real(order, "order")
    shapes = _padded(shapes, rows)
    _check_order(shapes, order)
    if order.is_integer() and order >= 1.0:
        return _in_chunks(lambda part: _integer_power_sum(part, int(order)), shapes)
    return _in_chunks(lambda part: _real_power_sum(part, order), shapes)


def continuation_power_excess(shapes: IntArray, order: float, rows: int) -> FloatArray:
    """Return (T_s - 1) / (s - 1) of each shape, without cancellation near s = 1, where it is T'_1.

    Parameters and errors are those of :func:`continuation_power_sum`.

    Examples
    --------
    >>> float(continuation_power_excess(np.array([3, 1]), 2.0, 4).round(12))
    -0.666666666667
    """
    order = as_real(order, "order")
    delta = order - 1.0
    if abs(delta) > _NEAR_ONE:
        return np.asarray((continuation_power_sum(shapes, order, rows) - 1.0) / delta)
    jet = continuation_jet(shapes, rows, _JET_NEAR_ONE)
    return np.asarray(jet[..., 1:] @ delta ** np.arange(_JET_NEAR_ONE))


def continuation_jet(shapes: IntArray, rows: int, degree: int = 2) -> FloatArray:
    """Return the Taylor coefficients of T_s at s = 1, in powers of s - 1, for each shape.

    Parameters
    ----------
    shapes : (..., d) int array
        Shapes with at least one box and at most `rows` non-empty rows each.
    rows : int
        Number N of rows counted.
    degree : int
        Highest power kept, from 1.

    Returns
    -------
    (..., degree + 1) float64 array: 1, minus the continued entropy, half the continued sum p log^2 p, ...

    Examples
    --------
    >>> continuation_jet(np.array([2, 2]), 2, 1).round(6)
    array([ 1.      , -1.083333])
    """
    degree = as_integer(degree, "degree", at_least=1)
    return _in_chunks(lambda part: _jet(part, degree), _padded(shapes, rows))


def entropy_continuation(shapes: IntArray, rows: int) -> FloatArray:
    """Return the continuation estimate G_N = -dT_s/ds at s = 1 of the entropy, in nats, for each shape.

    Parameters
    ----------
    shapes : (..., d) int array
        Shapes with at least one box and at most `rows` non-empty rows each.
    rows : int
        Number N of rows counted. With N the number of non-empty rows the estimate is low on average, with N
        at least the rank of the state it is high while n times the smallest eigenvalue is small.

    Examples
    --------
    >>> float(entropy_continuation(np.array([1, 1]), 2))
    1.5
    """
    return np.asarray(-continuation_jet(shapes, rows, 1)[..., 1])


def _padded(shapes: IntArray, rows: int) -> IntArray:
    """Return checked shapes with exactly `rows` rows, and refuse the empty shape."""
    rows = as_integer(rows, "rows", at_least=1)
    shapes = as_shapes(shapes)
    height = int((shapes > 0).sum(axis=-1).max(initial=0))
    if height > rows:
        raise ArgumentValueError(f"rows must be at least the number of non-empty rows {height}, got {rows}")
    if not (shapes.sum(axis=-1) > 0).all():
        raise ArgumentValueError("shapes must have at least one box each, got an empty shape")
    return as_shapes(shapes, dim=rows)


def _check_order(shapes: IntArray, order: float) -> None:
    largest = int(shapes.sum(axis=-1).min(initial=LARGEST_ORDER))
    if not 0.0 <= order <= largest:
        raise ArgumentValueError(f"order must lie between 0 and {largest} (the boxes, at most 64), got {order}")


def _in_chunks(function: Callable[[IntArray], FloatArray], shapes: IntArray) -> FloatArray:
    """Apply a function of (K, d) shapes in pieces, so that work space stays below some tens of megabytes."""
    d = shapes.shape[-1]
    flat = shapes.reshape(-1, d)
    step = max(1, _ELEMENTS_AT_ONCE // max(d, 1))
    if len(flat) <= step:
        values = function(flat)
    else:
        values = np.concatenate([function(flat[i : i + step]) for i in range(0, len(flat), step)])
    return values.reshape(shapes.shape[:-1] + values.shape[1:])


def _integer_power_sum(shapes: IntArray, order: int) -> FloatArray:
    """T_k by Frobenius' formula, (K, d) -> (K,)."""
    parts = shifted_rows(shapes).astype(np.float64)
    size = shapes.sum(axis=-1, keepdims=True).astype(np.float64)
    terms = np.ones_like(parts)
    for j in range(order):
        terms *= (parts - j) / (size - j)
    terms[parts < order] = 0.0
    return _times_gap_ratios(terms, parts, order)


def _real_power_sum(shapes: IntArray, order: float) -> FloatArray:
    """T_s for a real order that is not a positive integer, (K, d) -> (K,)."""
    parts = shifted_rows(shapes).astype(np.float64)
    size = shapes.sum(axis=-1, keepdims=True).astype(np.float64)
    whole = math.floor(order)
    rest = order - whole
    short = parts < whole
    direct = gamma(np.where(short, parts, 0.0) + 1.0) * rgamma(np.where(short, parts, 0.0) + 1.0 - order)
    terms = np.where(short, direct, _gamma_ratio(np.where(short, 0.0, parts - whole), rest))
    terms /= _gamma_ratio(size - whole, rest)
    for j in range(whole):
        terms *= np.where(short, 1.0, parts - j) / (size - j)
    return _times_gap_ratios(terms, parts, order)


def _gamma_ratio(x: FloatArray, rest: float) -> FloatArray:
    """Return Gamma(x + 1) / Gamma(x + 1 - rest) for x >= 0 and 0 <= rest < 1."""
    return np.asarray(poch(x + 1.0 - rest, rest))


def _times_gap_ratios(terms: FloatArray, parts: FloatArray, order: float) -> FloatArray:
    """Return sum_i terms_i prod_{m != i} (l_i - l_m - order) / (l_i - l_m); `terms` is overwritten."""
    for m in range(parts.shape[1]):
        terms *= 1.0 - order * _inverse_gaps(parts, m)
    return np.asarray(terms.sum(axis=-1))


def _inverse_gaps(parts: FloatArray, m: int) -> FloatArray:
    """Return 1 / (l_i - l_m) for every i, and 0 at i = m."""
    gaps = parts - parts[:, m : m + 1]
    gaps[:, m] = np.inf
    return np.asarray(1.0 / gaps)


def _jet(shapes: IntArray, degree: int) -> FloatArray:
    """Taylor coefficients of T_s at s = 1, (K, d) -> (K, degree + 1)."""
    parts = shifted_rows(shapes).astype(np.float64)
    size = shapes.sum(axis=-1).astype(np.float64)
    terms = _gamma_jet(parts, degree)
    for m in range(parts.shape[1]):
        inverse = _inverse_gaps(parts, m)
        lower = terms[:-1] * inverse
        terms *= 1.0 - inverse
        terms[1:] -= lower
    total = terms.sum(axis=-1)
    return _times(total, _exponential(-_log_gamma_jet(size, degree)) / size).T


def _gamma_jet(parts: FloatArray, degree: int) -> FloatArray:
    """Taylor coefficients in h of Gamma(l + 1) / Gamma(l - h), stacked on a new first axis."""
    positive = np.maximum(parts, 1.0)
    jet = positive * _exponential(_log_gamma_jet(positive, degree))
    # At l = 0: 1/Gamma(-h) = -h / Gamma(1 - h), and 1/Gamma(1 - h) has the coefficients of l = 1.
    empty = parts == 0.0
    if empty.any():
        at_one = _exponential(_log_gamma_jet(np.ones(1), degree))[:, 0]
        jet[0, empty] = 0.0
        jet[1:, empty] = -at_one[:-1, None]
    return jet


def _log_gamma_jet(x: FloatArray, degree: int) -> FloatArray:
    """Taylor coefficients in h of log Gamma(x) - log Gamma(x - h), from the first power on."""
    rows = [digamma(x)]
    rows += [-zeta(k, x) / k for k in range(2, degree + 1)]
    return np.stack(rows)


def _exponential(log_jet: FloatArray) -> FloatArray:
    """Exponential of a power series without constant term (first axis: powers 1, 2, ...)."""
    degree = len(log_jet)
    jet = np.ones((degree + 1, *log_jet.shape[1:]))
    for k in range(1, degree + 1):
        jet[k] = sum(j * log_jet[j - 1] * jet[k - j] for j in range(1, k + 1)) / k
    return jet


def _times(first: FloatArray, second: FloatArray) -> FloatArray:
    """Product of two power series of one length (first axis: powers 0, 1, ...)."""
    product = np.zeros_like(first)
    for k in range(len(first)):
        product[k] = sum(first[j] * second[k - j] for j in range(k + 1))
    return product

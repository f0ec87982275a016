"""Bounds on the entropy of a qubit from one diagram of two rows: exact inversion of the law of the shorter row.

With q <= 1/2 the smaller eigenvalue, r = q / (1 - q) and M = n - 2j + 1 the shorter row has the law

    P(lambda_2 = j) prop. binom(n, j) r^j (M / (n - j + 1)) (1 - r^M) / (1 - r),

and P(lambda_2 >= j) does not decrease with q. So the limit of q at which the observed row, or a longer one, has
probability `error` is exceeded from below with probability at most `error`, as for a binomial (Clopper and Pearson).
Proofs: docs/theory-large-diagrams.md, "Qubits".
"""

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from entropest._checks import as_confidence
from entropest._types import FloatArray
from entropest.certification.dual_bound import checked_rows
from entropest.errors import MemoryBudgetError

__all__ = ["QubitBound", "qubit_lower_bound", "qubit_upper_bound"]

_LARGEST_SIZE: Final = 10**11
_DEVIATIONS: Final = 8.0
_ENTROPY_SLACK: Final = 1e-14


@dataclass(frozen=True, slots=True, kw_only=True)
class QubitBound:
    """A bound on the von Neumann entropy of a qubit.

    Attributes
    ----------
    value : float
        The bound in nats.
    smaller : float
        The limit of the smaller eigenvalue; `value` is its binary entropy, rounded to the safe side.
    """

    value: float
    smaller: float


def qubit_lower_bound(rows: npt.ArrayLike, *, error: float) -> QubitBound:
    """Return a bound that exceeds the entropy of a qubit with probability at most `error`.

    It is the binary entropy of the largest q with P(lambda_2 >= observed) <= error. Assumes identical, independent
    copies of a qubit measured as one block whose size was fixed beforehand. Time and memory grow like sqrt(n) and stay
    under 0.3 s and 30 MB up to n = 10^9.

    Parameters
    ----------
    rows : (d,) array_like of int
        The rows of one diagram, the longest first, at most two of them non-empty.
    error : float
        Strictly between 0 and 1.

    Raises
    ------
    ArgumentValueError
        For an empty diagram, more than two non-empty rows, or an `error` outside (0, 1).
    MemoryBudgetError
        Above 10^11 boxes, which would need more than 300 MB.

    References
    ----------
    Clopper and Pearson, Biometrika 26 (1934) 404, doi:10.1093/biomet/26.4.404 (the inversion); O'Donnell and Wright,
    STOC 2015, arXiv:1501.05028 (the law); monotonicity: docs/theory-large-diagrams.md.

    Examples
    --------
    >>> bound = qubit_lower_bound([520, 480], error=0.05)
    >>> round(bound.value, 4), round(bound.smaller, 4)
    (0.6903, 0.4624)
    """
    size, shorter = _two_rows(rows)
    error = as_confidence(error, "error")
    smaller = 0.0
    if shorter > 0:
        smaller = _crossing(lambda q: tail_at_least(size, shorter, q), error)
    return QubitBound(value=_binary_entropy(smaller) * (1.0 - _ENTROPY_SLACK), smaller=smaller)


def qubit_upper_bound(rows: npt.ArrayLike, *, error: float) -> QubitBound:
    """Return a bound that falls below the entropy of a qubit with probability at most `error`.

    It is the binary entropy of the smallest q with P(lambda_2 <= observed) <= error, log 2 if there is none. See
    :func:`qubit_lower_bound`.

    Examples
    --------
    >>> round(qubit_upper_bound([900, 100], error=0.05).value, 4)
    0.3612
    """
    size, shorter = _two_rows(rows)
    error = as_confidence(error, "error")
    smaller = 0.5
    if tail_at_most(size, shorter, 0.5) <= error:
        smaller = -_crossing(lambda q: tail_at_most(size, shorter, -q), error, low=-0.5, high=0.0)
    return QubitBound(value=_binary_entropy(smaller) * (1.0 + _ENTROPY_SLACK), smaller=smaller)


def tail_at_least(size: int, row: int, q: float) -> float:
    """Bound P(lambda_2 >= row) from above, tightly; the smaller eigenvalue is q.

    Examples
    --------
    >>> round(tail_at_least(2, 1, 0.5), 9)
    0.25
    """
    if row <= 0:
        return 1.0
    if q <= 0.0:
        return 0.0
    low, weights, above, _ = _window(size, q)
    if row < low:
        return 1.0
    return min(1.0, (float(weights[row - low :].sum()) + above) / float(weights.sum()) * _rounded_up(weights))


def tail_at_most(size: int, row: int, q: float) -> float:
    """Bound P(lambda_2 <= row) from above, tightly; the smaller eigenvalue is q.

    Examples
    --------
    >>> round(tail_at_most(2, 0, 0.5), 9)
    0.75
    """
    if q <= 0.0 or row >= size // 2:
        return 1.0
    low, weights, _, below = _window(size, q)
    if row >= low + len(weights):
        return 1.0
    return min(
        1.0, (float(weights[: max(0, row - low + 1)].sum()) + below) / float(weights.sum()) * _rounded_up(weights)
    )


def _two_rows(rows: npt.ArrayLike) -> tuple[int, int]:
    """Return the number of boxes and the shorter of two rows."""
    lengths = checked_rows(rows, 2)
    size = int(lengths.sum())
    if size > _LARGEST_SIZE:
        raise MemoryBudgetError(
            f"rows must hold at most {_LARGEST_SIZE:,} boxes for an exact qubit bound, got {size:,}"
        )
    return size, int(lengths[1]) if len(lengths) > 1 else 0


def _window(size: int, q: float) -> tuple[int, FloatArray, float, float]:
    """Return start and weights of the law of the shorter row, and bounds of the weights above and below the window.

    Ratios of neighbouring weights fall with j, so what lies outside is less than a geometric series.
    """
    half = _DEVIATIONS * math.sqrt(size * q * (1.0 - q)) + 60.0
    low = max(0, math.floor(size * q - half))
    high = min(size // 2, math.ceil(size * q + half))
    j = np.arange(low, high, dtype=np.float64)
    ratios = _ratios(size, q, j)
    middle = int(np.searchsorted(-ratios, -1.0))
    up = np.cumprod(ratios[middle:])
    down = np.cumprod(1.0 / ratios[:middle][::-1])[::-1]
    weights = np.concatenate([down, [1.0], up])
    above = below = 0.0
    if high < size // 2:
        above = _geometric_rest(float(weights[-1]), float(_ratios(size, q, np.array([float(high)]))[0]))
    if low > 0:
        below = _geometric_rest(float(weights[0]), 1.0 / float(_ratios(size, q, np.array([low - 1.0]))[0]))
    return low, weights, above, below


def _ratios(size: int, q: float, j: FloatArray) -> FloatArray:
    """Return P(lambda_2 = j + 1) / P(lambda_2 = j), each to better than 40 units of roundoff."""
    parts = size - 2.0 * j + 1.0
    log_ratio = math.log1p(-(1.0 - 2.0 * q) / (1.0 - q)) if q < 0.5 else 0.0
    if log_ratio == 0.0:
        shrink = (parts - 2.0) / parts
    else:
        shrink = np.expm1((parts - 2.0) * log_ratio) / np.expm1(parts * log_ratio)
    plain = (size - j + 1.0) / (j + 1.0) * ((parts - 2.0) / parts)
    return np.asarray(plain * (q / (1.0 - q)) * shrink)


def _geometric_rest(last: float, ratio: float) -> float:
    """Return last (ratio + ratio^2 + ...), infinity where it does not converge."""
    return last * ratio / (1.0 - ratio) * (1.0 + 1e-9) if ratio < 1.0 else math.inf


def _rounded_up(weights: FloatArray) -> float:
    """Return a factor beyond 1 that covers the rounding of a product of as many ratios."""
    return 1.0 + 1e-14 * (len(weights) + 10.0)


def _crossing(probability: Callable[[float], float], error: float, low: float = 0.0, high: float = 0.5) -> float:
    """Return the largest argument found, up to a relative 1e-12, at which a rising probability is at most `error`."""
    from scipy.optimize import brentq

    if probability(high) <= error:
        return high
    root = float(brentq(lambda q: probability(q) - error, low, high, xtol=1e-15, rtol=1e-13))
    step = 1e-13 * abs(root)
    while probability(root) > error:
        root = max(low, root - step)
        step *= 2.0
    return root


def _binary_entropy(q: float) -> float:
    """Return -q log q - (1 - q) log(1 - q)."""
    return -q * math.log(q) - (1.0 - q) * math.log1p(-q) if q > 0.0 else 0.0

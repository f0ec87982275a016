"""The referee's evaluation of bounds on a qubit's entropy, in whole numbers and interval arithmetic.

Shares nothing with the fast computation: the law of the shorter row is written with binomial probabilities and one
reflected term,

    P(lambda_2 <= m) = P(X <= m) + P(X >= n - m) + C(n, m) s_(m+1),    X ~ Bin(n, q),

s_j the Schur polynomial of (n - j, j). Derived in docs/theory-large-diagrams.md, "Qubits".
"""

import math
from collections.abc import Sequence
from fractions import Fraction
from typing import Any

from entropest import _mp
from entropest.certification.plain_intervals import minus_x_log_x, rounded_down, rounded_up

__all__ = ["qubit_lower_value", "qubit_upper_value"]

DIGITS = 40


def qubit_lower_value(rows: Sequence[int], *, error: float, smaller: float) -> float:
    """Return the binary entropy of `smaller` if P(lambda_2 >= observed) <= error there, else 0.

    Examples
    --------
    >>> round(qubit_lower_value([520, 480], error=0.05, smaller=0.46), 6)
    0.689944
    >>> qubit_lower_value([520, 480], error=0.05, smaller=0.47)
    0.0
    """
    size, shorter = sum(rows), rows[1] if len(rows) > 1 else 0
    if not 0 < smaller <= 0.5 or shorter == 0 or _tail_at_least(size, shorter, smaller) > error:
        return 0.0
    return rounded_down(_binary_entropy(smaller))


def qubit_upper_value(rows: Sequence[int], *, error: float, smaller: float) -> float:
    """Return the binary entropy of `smaller` if P(lambda_2 <= observed) <= error there, else log 2.

    Examples
    --------
    >>> round(qubit_upper_value([900, 100], error=0.05, smaller=0.118), 6)
    0.362921
    """
    size, shorter = sum(rows), rows[1] if len(rows) > 1 else 0
    if not 0 < smaller < 0.5 or _tail_at_most(size, shorter, smaller) > error:
        return rounded_up(_binary_entropy(0.5))
    return rounded_up(_binary_entropy(smaller))


def _tail_at_least(size: int, row: int, q: float) -> float:
    """Bound P(lambda_2 >= row) = P(row <= X <= size - row) - C(size, row - 1) s_row from above, X ~ Bin(size, q)."""
    reflected = _reflected(size, row, q)
    return float(Fraction(_binomial_sum(size, row, size - row, q)) - Fraction(rounded_down(reflected))) * (1 + 1e-15)


def _tail_at_most(size: int, row: int, q: float) -> float:
    """Bound P(lambda_2 <= row) = P(X <= row) + P(X >= size - row) + C(size, row) s_(row+1) from above."""
    if 2 * (row + 1) > size:
        return 1.0
    ends = _binomial_sum(size, row, 0, q) + _binomial_sum(size, size - row, size, q)
    return (ends + rounded_up(_reflected(size, row + 1, q))) * (1 + 1e-15)


def _reflected(size: int, row: int, q: float) -> Any:
    """Return C(size, row - 1) s_row(1 - q, q) for the shape (size - row, row)."""
    iv = _mp.interval_context(DIGITS)
    small = iv.mpf(q)
    large, width = 1 - small, size - 2 * row + 1
    ratio = iv.log(small / large)
    ordered = (1 - iv.exp(width * ratio)) / (1 - small / large) if q < 0.5 else iv.mpf(width)
    logs = _log_binomial(iv, size, row - 1) + row * iv.log(small) + (size - row) * iv.log(large)
    return iv.exp(logs) * ordered


def _binomial_sum(size: int, first: int, last: int, q: float) -> float:
    """Bound the sum of binomial probabilities from `first` to `last`, up or down, in multiples of 2^-200."""
    iv = _mp.interval_context(DIGITS)
    log_first = _log_binomial(iv, size, first) + first * iv.log(iv.mpf(q)) + (size - first) * iv.log(1 - iv.mpf(q))
    unit = 2**200
    term = math.ceil(Fraction(rounded_up(iv.exp(log_first))) * unit)
    odds = Fraction(q) / (1 - Fraction(q))
    up = last >= first
    over, under = (odds.numerator, odds.denominator) if up else (odds.denominator, odds.numerator)
    total = term
    for j in range(first, last, 1 if up else -1):
        left, right = ((size - j) * over, (j + 1) * under) if up else (j * over, (size - j + 1) * under)
        if left < right and term * size < unit >> 100:
            total += term * abs(last - j)  # from here on the terms fall
            break
        term = -(-term * left // right)
        total += term
    return float(Fraction(total, unit)) * (1 + 1e-15)


def _log_binomial(iv: Any, size: int, part: int) -> Any:
    return iv.loggamma(size + 1) - iv.loggamma(part + 1) - iv.loggamma(size - part + 1)


def _binary_entropy(q: float) -> Any:
    iv = _mp.interval_context(DIGITS)
    return minus_x_log_x(iv, iv.mpf(q)) + minus_x_log_x(iv, 1 - iv.mpf(q))

"""Checks of arguments: each message names the argument, the rule and the value."""

import math
import operator
from numbers import Integral
from typing import SupportsIndex

from entropest.errors import ArgumentTypeError, ArgumentValueError

LARGEST_COUNT = 2**62


def as_integer(value: SupportsIndex, name: str, *, at_least: int, at_most: int | None = None) -> int:
    """Return `value` as int, or say which rule it breaks. Booleans and fractional numbers are refused."""
    if isinstance(value, bool) or not isinstance(value, Integral):
        if isinstance(value, float) and not value.is_integer():
            raise ArgumentValueError(f"{name} must be a whole number, got {value!r}")
        raise ArgumentTypeError(f"{name} must be an integer, got {value!r} of type {type(value).__name__}")
    number = operator.index(value)
    if number < at_least:
        raise ArgumentValueError(f"{name} must be at least {at_least}, got {number}")
    if at_most is not None and number > at_most:
        raise ArgumentValueError(f"{name} must be at most {at_most}, got {number}")
    return number


def as_count(value: SupportsIndex, name: str) -> int:
    """Return a tally as int: a whole number from 0 to 2^62."""
    return as_integer(value, name, at_least=0, at_most=LARGEST_COUNT)


def as_real(value: float, name: str) -> float:
    """Return `value` as a finite float."""
    try:
        number = float(value)
    except (TypeError, ValueError, OverflowError) as error:
        raise ArgumentTypeError(f"{name} must be a real number, got {value!r}") from error
    if not math.isfinite(number):
        raise ArgumentValueError(f"{name} must be finite, got {number}")
    return number


def as_confidence(value: float, name: str = "confidence") -> float:
    """Return a confidence level: strictly between 0 and 1."""
    number = as_real(value, name)
    if not 0.0 < number < 1.0:
        raise ArgumentValueError(f"{name} must lie strictly between 0 and 1, got {number}")
    return number


def log_of_base(base: float | None) -> float:
    """Return log(base), and 1 for None (nats). The base must be positive and not 1."""
    if base is None:
        return 1.0
    number = as_real(base, "base")
    if number <= 0.0 or number == 1.0:
        raise ArgumentValueError(f"base must be positive and different from 1, got {number}")
    return math.log(number)


def unit_of(base: float | None) -> str:
    """Name the unit of an entropy taken with logarithms to `base` (None: nat)."""
    if base is None or base == math.e:
        return "nat"
    if base == 2:
        return "bit"
    return f"log base {base:g}"

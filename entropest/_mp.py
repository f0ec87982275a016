"""The only module that imports mpmath.

Every caller gets a context of its own: the global mpmath contexts share their precision between threads.
mpmath ships no type information, so its contexts and numbers are typed as Any here.
"""

from typing import Any


def context(digits: int) -> Any:
    """Return a fresh arbitrary-precision context working with `digits` decimal digits."""
    from mpmath import MPContext

    ctx = MPContext()
    ctx.dps = digits
    return ctx


def interval_context(digits: int) -> Any:
    """Return a fresh interval-arithmetic context (outward rounding) with `digits` decimal digits."""
    from mpmath.ctx_iv import MPIntervalContext

    ctx = MPIntervalContext()
    ctx.dps = digits
    return ctx


def is_mpf(value: object) -> bool:
    """Say whether `value` is a real number of some mpmath context, without importing mpmath for others."""
    return hasattr(value, "_mpf_")

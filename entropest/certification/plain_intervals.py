"""Small helpers of the referee's interval arithmetic."""

import math
from typing import Any

__all__ = ["minus_x_log_x", "rounded_down", "rounded_up"]


def minus_x_log_x(iv: Any, x: Any) -> Any:
    """Return an interval that holds -x log x for a positive interval x."""
    return -x * iv.log(x)


def rounded_down(x: Any) -> float:
    """Return a float that is not above an interval."""
    value = float(x.a)
    while math.isfinite(value) and (x.ctx.mpf(value) - x.a).b > 0:
        value = math.nextafter(value, -math.inf)
    return value


def rounded_up(x: Any) -> float:
    """Return a float that is not below an interval."""
    return -rounded_down(-x)

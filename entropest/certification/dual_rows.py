"""The share of one row in the dual bounds from a large diagram: a function of one variable and its proven minimum.

With sign +1 for lower and -1 for upper bounds, a row of relative length h contributes the minimum over y = -log p of

    phi(y) = w h y + e^-y (sign y + s - k (e^(sign t y) - 1)),    k = kappa / (t Z0),

and phi' = -e^-y g with a concave g. So phi rises, falls and rises again, and its minimum is at y = 0, at the largest
root of g or at the end of the range. Newton's method from the right finds that root without leaving its right-hand
side. What is returned as proven does not rest on convergence: with c0 >= c1 the last two iterates and g'(c0) < 0,

    phi >= min(phi(0), phi(c1)) - max(0, g(c0) + g'(c0) (c1 - c0)) - max(0, -g(c1)),

without the last term where g(c1) < 0 <= g'(c1) or c1 = 0. Derived in docs/theory-large-diagrams.md, "Row minima".
"""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np

from entropest._types import FloatArray

__all__ = ["Multipliers", "last_roots", "row_minima", "row_values"]

MOST_STEPS: Final = 200
ROUNDING: Final = 1e-13
"""Relative slack: 900 times the unit roundoff; the roundings that meet in a term add up to less than 120 units."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Multipliers:
    """The parameters of a dual bound; any positive t, kappa, weight and any log_z0, shift will do (t <= 1 below)."""

    sign: int
    t: float
    kappa: float
    log_z0: float
    shift: float
    weight: float

    @property
    def k(self) -> float:
        """Return kappa / (t Z0)."""
        return self.kappa * math.exp(-self.log_z0) / self.t

    def constant(self) -> float:
        """Return k (Z0 - 1 - Z0 log Z0) - s, what the dual holds besides its rows and its data."""
        return self.k * (math.expm1(self.log_z0) - self.log_z0 * math.exp(self.log_z0)) - self.shift

    def constant_rounding(self) -> float:
        """Bound the rounding error of :meth:`constant`."""
        z0 = math.exp(self.log_z0)
        return ROUNDING * (self.k * abs(self.log_z0) * (1.0 + 2.0 * z0) + abs(self.shift))


def row_values(m: Multipliers, h: FloatArray, y: FloatArray) -> FloatArray:
    """Return phi(y) of rows of relative length h."""
    inner = m.sign * y + m.shift - m.k * np.expm1(m.sign * m.t * y)
    return np.asarray(m.weight * h * y + np.exp(-y) * inner)


def last_roots(m: Multipliers, h: FloatArray, cap: float) -> tuple[FloatArray, FloatArray]:
    """Return the last two Newton iterates (c0, c1), c0 >= c1, for the largest root of g in [0, cap]."""
    after = _starts(m, h, cap)
    before = after
    for _ in range(MOST_STEPS):
        g, slope = _slopes(m, h, after)
        moving = (g < 0.0) & (slope < 0.0) & (after > 0.0)
        if not moving.any():
            break
        target = np.maximum(0.0, after - g / np.where(moving, slope, 1.0))
        moving &= after - target > 1e-15 * (1.0 + after)
        if not moving.any():
            break
        before, after = np.where(moving, after, before), np.where(moving, target, after)
    return before, after


def row_minima(m: Multipliers, h: FloatArray, cap: float) -> FloatArray:
    """Return proven lower bounds of the minimum of phi over [0, cap] for rows of relative length h."""
    before, after = last_roots(m, h, cap)
    g_before, slope_before = _slopes(m, h, before)
    g_after, slope_after = _slopes(m, h, after)
    growth = np.abs(np.expm1(m.sign * m.t * before))
    push = _push(m, h, before)
    steepest = push + 1.0 + m.k * m.t * (1.0 + m.t) * (1.0 + growth)
    rounding = ROUNDING * (push + 1.0 + abs(m.shift) + (before + 1.0) * steepest + m.k * growth)
    right = np.maximum(0.0, g_before + slope_before * (after - before)) + rounding
    right = np.where(slope_before < -ROUNDING * steepest, right, np.inf)
    right = np.where(after < cap, right, 0.0)
    rising = (g_after < 0.0) & ((slope_after >= 0.0) | (after == 0.0))
    left = np.where(rising, 0.0, np.maximum(0.0, -g_after)) + rounding
    decay = np.exp(-after)
    inner = after + abs(m.shift) + m.k * np.abs(np.expm1(m.sign * m.t * after))
    at_root = row_values(m, h, after) - ROUNDING * (m.weight * h * after + decay * inner)
    return np.asarray(np.minimum(m.shift, at_root) - left - right)


def _slopes(m: Multipliers, h: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return g(y) and g'(y)."""
    push = _push(m, h, y)
    growth = np.expm1(m.sign * m.t * y)
    rate = m.sign * m.t
    g = m.sign * (y - 1.0) + m.shift + m.k * (rate * (1.0 + growth) - growth) - push
    slope = m.sign - m.k * rate * (1.0 - rate) * (1.0 + growth) - push
    return np.asarray(g), np.asarray(slope)


def _push(m: Multipliers, h: FloatArray, y: FloatArray) -> FloatArray:
    """Return w h e^y; only for h = 0 does y pass 700."""
    return np.asarray(m.weight * h * np.exp(np.minimum(y, 700.0)))


def _starts(m: Multipliers, h: FloatArray, cap: float) -> FloatArray:
    """Return points right of which g <= 0 and g' <= -1/2, or the cap where such points lie beyond it.

    e^(sign t y) >= 1 + sign t y makes g <= top - w h e^y with a constant top, over the whole range of y.
    """
    if m.sign > 0:
        end = cap
        top = max(cap - 1.0 + m.shift + m.k * m.t, 2.0)
    else:
        curvature = m.k * m.t * (1.0 + m.t)
        end = max(0.0, 1.0 + m.shift + m.k, math.log(max(2.0 * curvature, 1e-300)) / m.t)
        top = max(1.0 + m.shift - m.k * m.t + max(0.0, curvature - 1.0) * end, curvature, 2.0)
    with np.errstate(divide="ignore"):
        points = np.log(top / (m.weight * h))
    return np.asarray(np.clip(points, 0.0, end))

"""The search for good parameters of the dual bounds from a large diagram; whatever it finds is valid.

For fixed t the dual is concave in its other parameters but has kinks, where a row has two equal minima. The minimum
is therefore softened to -tau log sum e^(-value / tau), which is smooth, and tau lowered in steps; each step is
climbed with analytic gradients (the envelope theorem).
"""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np

from entropest._types import FloatArray
from entropest.certification.dual_rows import Multipliers, last_roots

__all__ = ["LEAST_LOG", "DualProblem", "coarse_rows", "floor_of_shift", "safe_floor", "search_multipliers"]

MOST_HEIGHTS: Final = 256
SOFTNESS: Final = (1e-2, 1e-4, 1e-6, 0.0)
LEAST_LOG: Final = -40.0


@dataclass(frozen=True, slots=True, kw_only=True)
class DualProblem:
    """Rows and data of a dual: maximise constant - kappa (per_kappa + per_kappa_t / t) - w per_weight + rows.

    Attributes
    ----------
    sign : int
        +1 for lower, -1 for upper bounds. For lower bounds the weight w of a row is kappa itself.
    heights, counts : (K,) arrays
        Relative row lengths and how many rows have them.
    cap : float
        Largest y.
    any_dimension : bool
        Infinitely many empty rows: the shift may not be below :func:`floor_of_shift`.
    """

    sign: int
    heights: FloatArray
    counts: FloatArray
    per_kappa: float
    per_kappa_t: float
    per_weight: float
    cap: float
    any_dimension: bool


def floor_of_shift(k: float, t: float, cap: float) -> float:
    """Return max(0, k (e^(t cap) - 1) - cap): from there on an empty row contributes nothing negative."""
    return max(0.0, k * math.expm1(t * cap) - cap)


def safe_floor(k: float, t: float, cap: float) -> float:
    """Return a number above the floor of the shift by more than its rounding error."""
    return floor_of_shift(k, t, cap) * (1.0 + 1e-12) + 1e-12 * (1.0 + cap)


def coarse_rows(heights: FloatArray, counts: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Join neighbouring heights so that at most MOST_HEIGHTS remain, keeping number and total length of the rows."""
    if len(heights) <= MOST_HEIGHTS:
        return heights, counts
    starts = np.linspace(0, len(heights), MOST_HEIGHTS, endpoint=False).astype(np.int64)
    numbers = np.add.reduceat(counts, starts)
    return np.asarray(np.add.reduceat(counts * heights, starts) / numbers), np.asarray(numbers)


def search_multipliers(problem: DualProblem, start: Multipliers) -> list[Multipliers]:
    """Return the parameters reached at each softness, the last ones usually the best."""
    from scipy.optimize import minimize

    point = _point(problem, start)
    limits = [(LEAST_LOG, 0.0 if problem.sign > 0 else 5.0), (-12.0, 6.0), (-60.0, 60.0), (None, None)]
    if problem.any_dimension:
        limits[3] = (0.0, None)
    if problem.sign < 0:
        limits.append((LEAST_LOG, 12.0))
    reached = []
    for tau in SOFTNESS:
        result = minimize(
            _negative_dual,
            point,
            args=(problem, tau),
            jac=True,
            method="L-BFGS-B",
            bounds=limits,
            options={"maxiter": 300, "ftol": 1e-15, "gtol": 1e-9, "maxls": 40},
        )
        point = result.x
        reached.append(_multipliers(problem, point))
    return reached


def _point(problem: DualProblem, m: Multipliers) -> FloatArray:
    """Return log t, log kappa, log Z0, the shift (above its floor) and, for upper bounds, log w."""
    floor = floor_of_shift(m.k, m.t, problem.cap) if problem.any_dimension else 0.0
    head = [math.log(m.t), math.log(m.kappa), m.log_z0, m.shift - floor]
    return np.array(head if problem.sign > 0 else [*head, math.log(m.weight)])


def _multipliers(problem: DualProblem, point: FloatArray) -> Multipliers:
    """Return the parameters at a point of the search, the shift safely above its floor."""
    t, kappa, log_z0 = math.exp(point[0]), math.exp(point[1]), float(point[2])
    shift = float(point[3])
    if problem.any_dimension:
        shift = safe_floor(kappa * math.exp(-log_z0) / t, t, problem.cap) + max(0.0, shift)
    weight = kappa if problem.sign > 0 else math.exp(point[4])
    return Multipliers(sign=problem.sign, t=t, kappa=kappa, log_z0=log_z0, shift=shift, weight=weight)


def _negative_dual(point: FloatArray, problem: DualProblem, tau: float) -> tuple[float, FloatArray]:
    """Return minus the softened dual and its gradient in the coordinates of :func:`_point`."""
    sign, cap, h, counts = problem.sign, problem.cap, problem.heights, problem.counts
    t, kappa, log_z0 = math.exp(point[0]), math.exp(point[1]), float(point[2])
    z0 = math.exp(log_z0)
    k = kappa / (t * z0)
    floor, floor_k, floor_t = _soft_floor(k, t, cap, tau) if problem.any_dimension else (0.0, 0.0, 0.0)
    weight = kappa if sign > 0 else math.exp(point[4])
    m = Multipliers(sign=sign, t=t, kappa=kappa, log_z0=log_z0, shift=float(point[3]) + floor, weight=weight)
    values, p, y, growth = _candidates(m, problem)
    share, total = _soft_minimum(values, counts, tau)
    shared_p = share * p
    sum_p, sum_pg = float(shared_p.sum()), float((shared_p * growth).sum())
    sum_pye = float((shared_p * y * (1.0 + growth)).sum())
    sum_hy = float((share * np.where(share > 0.0, y, 0.0) * h).sum())
    linear = kappa * (problem.per_kappa + problem.per_kappa_t / t) + weight * problem.per_weight
    by_shift = sum_p - 1.0
    by_k = math.expm1(log_z0) - log_z0 * z0 - sum_pg + by_shift * floor_k
    by_kappa = -problem.per_kappa - problem.per_kappa_t / t
    by_weight = sum_hy - problem.per_weight
    by_t = kappa * problem.per_kappa_t / t**2 - sign * k * sum_pye + by_shift * floor_t
    gradient = [t * by_t - k * by_k, kappa * by_kappa + k * by_k, -k * log_z0 * z0 - k * by_k, by_shift]
    if sign > 0:
        gradient[1] += weight * by_weight
    else:
        gradient.append(weight * by_weight)
    return linear - m.constant() - total, -np.array(gradient)


def _candidates(m: Multipliers, problem: DualProblem) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Return value, p, y and e^(sign t y) - 1 of every row at the three places where its minimum can be, (3, K)."""
    h, cap = problem.heights, problem.cap
    root = last_roots(m, h, cap)[1]
    growth = np.expm1(m.sign * m.t * root)
    decay = np.exp(-root)
    at_root = m.weight * h * root + decay * (m.sign * root + m.shift - m.k * growth)
    ones, zeros = np.ones_like(h), np.zeros_like(h)
    if math.isinf(cap):
        end_value, end_p, end_y, end_growth = np.where(h == 0.0, 0.0, np.inf), zeros, zeros, zeros
    else:
        last = math.expm1(m.t * cap)
        inner = cap + m.shift - m.k * last
        end_value = m.weight * h * cap + math.exp(-cap) * min(0.0, inner)
        end_p, end_y, end_growth = ones * (math.exp(-cap) if inner < 0.0 else 0.0), ones * cap, ones * last
    return (
        np.stack([at_root, ones * m.shift, end_value]),
        np.stack([decay, ones, end_p]),
        np.stack([root, zeros, end_y]),
        np.stack([growth, zeros, end_growth]),
    )


def _soft_minimum(values: FloatArray, counts: FloatArray, tau: float) -> tuple[FloatArray, float]:
    """Return the weights of the candidates, times the counts, and the sum of the softened minima."""
    least = values.min(axis=0)
    if tau == 0.0:
        chosen = np.arange(len(values))[:, None] == values.argmin(axis=0)
        return np.asarray(chosen * counts), float(least @ counts)
    raised = np.exp((least - values) / tau)
    total = raised.sum(axis=0)
    return np.asarray(raised / total * counts), float((least - tau * np.log(total)) @ counts)


def _soft_floor(k: float, t: float, cap: float, tau: float) -> tuple[float, float, float]:
    """Return the softened floor of the shift and its derivatives in k and t."""
    last = math.expm1(t * cap)
    value = k * last - cap
    if tau == 0.0:
        share, floor = float(value > 0.0), max(0.0, value)
    else:
        share = 1.0 / (1.0 + math.exp(min(700.0, max(-700.0, -value / tau))))
        floor = max(0.0, value) + tau * math.log1p(math.exp(-abs(value) / tau))
    return floor, share * last, share * k * cap * (1.0 + last)

"""The dual lower bound on the von Neumann entropy from one or a few large diagrams, for any or a known dimension.

With y_i = min(-log p_i, log n) the sum over all letters of y is at least the sum of lambda_i y_i, and on average over
tableaux of shape lambda it is larger still (:mod:`entropest.certification.gap_terms`). Chernoff's bound for all
exponents t in (0, 1] at once gives a confidence set of spectra, whatever their dimension; weak duality bounds the
entropy over that set from below by an explicit function of a few numbers. Any choice of these is valid, a poor one only
loosens the bound. Proofs: docs/theory-large-diagrams.md.
"""

import math
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
import numpy.typing as npt

from entropest._checks import as_confidence, as_integer
from entropest._types import FloatArray
from entropest.certification.dual_rows import ROUNDING, Multipliers, last_roots, row_minima
from entropest.certification.dual_search import (
    LEAST_LOG,
    DualProblem,
    coarse_rows,
    floor_of_shift,
    safe_floor,
    search_multipliers,
)
from entropest.certification.gap_terms import chain_minimum, gap_lines
from entropest.errors import ArgumentValueError
from entropest.shapes import as_shapes

__all__ = ["STATED_SLACK", "DualLowerBound", "dual_lower_bound"]

MOST_CHAINED_ROWS: Final = 40
KINKS: Final = (0.02, 50.0)
LEAST_GAIN: Final = 1e-5
MOST_SIMPLEX_STEPS: Final = 150
STATED_SLACK: Final = 1e-9
"""How much a stated bound stays inside what was computed, so that any careful evaluation confirms it."""


@dataclass(frozen=True, slots=True, kw_only=True)
class DualLowerBound:
    """A lower bound on the von Neumann entropy, with the numbers from which it can be computed again.

    Attributes
    ----------
    value : float
        The bound in nats, at least 0.
    t, kappa, log_z0, shift : float
        The parameters of the dual: exponent, multiplier, log Z0, and s = nu - kappa/(t Z0).
    kinks : tuple of float
        One for each pair of neighbouring non-empty rows, or none where gap terms are not used.
    dim : int or None
        The dimension that was believed.
    """

    value: float
    t: float
    kappa: float
    log_z0: float
    shift: float
    kinks: tuple[float, ...]
    dim: int | None


def dual_lower_bound(rows: npt.ArrayLike, *, error: float, dim: int | None = None) -> DualLowerBound:
    """Return a bound that exceeds the von Neumann entropy with probability at most `error`.

    Assumes identical, independent copies, their number n fixed beforehand; several diagrams are added row by row. With
    h = rows/n, a = log(1/error)/n, B = log n and k = kappa/(t Z0) it is, without gap terms::

        -s - kappa a/t + k (Z0 - 1 - Z0 log Z0) + sum_i min over y in [0, B] of
            kappa h_i y + e^-y (y + s - k (e^(t y) - 1)),      s >= max(0, k (e^(t B) - 1) - B),

    with t in (0, 1] and kappa, Z0 > 0. In a known dimension s is free and empty rows count as rows with h = 0.

    Parameters
    ----------
    rows : (d,) array_like of int
        Row lengths, the longest first.
    error : float
        Strictly between 0 and 1.
    dim : int, optional
        A dimension that is known, not guessed; it can only raise the bound. At least the number of non-empty rows.

    Returns
    -------
    DualLowerBound

    Raises
    ------
    ArgumentValueError
        For an empty diagram, more non-empty rows than `dim`, or an `error` outside (0, 1).

    References
    ----------
    Derived in docs/theory-large-diagrams.md from Greene, Adv. Math. 14 (1974) 254, doi:10.1016/0001-8708(74)90031-0;
    Chernoff, Ann. Math. Stat. 23 (1952) 493, doi:10.1214/aoms/1177729330; Fortuin, Kasteleyn, Ginibre, Commun. Math.
    Phys. 22 (1971) 89, doi:10.1007/BF01651330.

    Examples
    --------
    >>> bound = dual_lower_bound([5333, 2667, 1333, 667], error=0.05)
    >>> round(bound.value, 3)
    1.121
    """
    dim = None if dim is None else as_integer(dim, "dim", at_least=1)
    lengths = checked_rows(rows, dim)
    error = as_confidence(error, "error")
    dual = _Dual(lengths, error, None)
    best = dual.best(dual.start())
    if dim is not None:
        dual = _Dual(lengths, error, dim)
        best = max(best, dual.best(best[0]), key=lambda found: dual.value(*found))
    m, kinks = best
    return DualLowerBound(
        value=max(0.0, dual.value(m, kinks) - STATED_SLACK),
        t=m.t,
        kappa=m.kappa,
        log_z0=m.log_z0,
        shift=m.shift,
        kinks=kinks,
        dim=dual.dim,
    )


def checked_rows(rows: npt.ArrayLike, dim: int | None) -> FloatArray:
    """Return the non-empty rows of one diagram, checked against the dimension."""
    shape = as_shapes(rows, name="rows")
    if shape.ndim != 1:
        raise ArgumentValueError(f"rows must be one-dimensional, got shape {shape.shape}")
    lengths = shape[shape > 0].astype(np.float64)
    if len(lengths) == 0:
        raise ArgumentValueError("rows must hold at least one box, got an empty diagram")
    if dim is not None and dim < len(lengths):
        raise ArgumentValueError(f"dim must be at least the number of rows {len(lengths)}, got {dim}")
    return lengths


class _Dual:
    """The dual function of one diagram."""

    def __init__(self, lengths: FloatArray, error: float, dim: int | None) -> None:
        self.lengths = lengths
        self.dim = dim
        self.size = int(lengths.sum())
        self.level = math.log(1.0 / error) / self.size
        self.cap = math.log(self.size)
        distinct, counts = np.unique(lengths, return_counts=True)
        self.heights = distinct / self.size
        self.counts = counts.astype(np.float64)

    def value(self, m: Multipliers, kinks: tuple[float, ...] = ()) -> float:
        """Return the dual at any parameters, rounded down by a proven slack; -inf where they are not allowed."""
        below = empty = 0.0
        if m.shift < floor_of_shift(m.k, m.t, self.cap) * (1.0 + ROUNDING) + ROUNDING * self.cap:
            if self.dim is None:
                return -math.inf
            growth = m.k * math.expm1(m.t * self.cap)
            below = math.exp(-self.cap) * min(0.0, self.cap + m.shift - growth - ROUNDING * (self.cap + growth))
            each = min(0.0, below, float(row_minima(m, np.zeros(1), self.cap)[0]))
            empty = (self.dim - len(self.lengths)) * each
        beyond = m.kappa * self.cap * (1.0 - ROUNDING)
        if kinks:
            lines = gap_lines(self.lengths, np.array(kinks))
            ends = beyond * self.lengths / self.size + below
            total = chain_minimum(m, self.lengths, self.size, lines, ends, self.cap)
        else:
            ends = beyond * self.heights + below
            minima = np.minimum(row_minima(m, self.heights, self.cap), ends)
            total = math.fsum(self.counts * minima) - ROUNDING * math.fsum(self.counts * np.abs(minima))
        cost = m.kappa * self.level / m.t
        slack = m.constant_rounding() + ROUNDING * (cost + abs(total) + abs(empty))
        value = m.constant() - cost + total + empty - slack
        return value if self.dim is None else min(value, math.log(self.dim) * (1.0 - ROUNDING))

    def best(self, start: Multipliers) -> tuple[Multipliers, tuple[float, ...]]:
        """Return the best parameters and kinks found from a start."""
        if len(self.lengths) == 1:
            return start, ()
        problem = self.problem()
        found = max([start, *search_multipliers(problem, start)], key=self.value)
        if len(self.lengths) > MOST_CHAINED_ROWS or self.value(found) <= 0.0:
            return found, ()
        return max((found, ()), self.with_gap_terms(found), key=lambda pair: self.value(*pair))

    def with_gap_terms(self, m: Multipliers) -> tuple[Multipliers, tuple[float, ...]]:
        """Improve parameters by a simplex search that includes the gap terms, where these are worth it."""
        from scipy.optimize import minimize

        roots = last_roots(m, self.lengths / self.size, self.cap)[1]
        steps = np.clip(np.diff(roots), *KINKS)
        if gap_lines(self.lengths, steps).offsets[1].sum() < LEAST_GAIN * self.size:
            return m, ()
        floor = floor_of_shift(m.k, m.t, self.cap) if self.dim is None else 0.0

        def at(point: FloatArray) -> tuple[Multipliers, tuple[float, ...]]:
            t, kappa = math.exp(min(0.0, max(LEAST_LOG, point[0]))), math.exp(point[1])
            moved = replace(m, t=t, kappa=kappa, weight=kappa, log_z0=float(point[2]), shift=float(point[3]))
            if self.dim is None:
                moved = replace(moved, shift=safe_floor(moved.k, t, self.cap) + max(0.0, float(point[3])))
            return moved, tuple(np.clip(math.exp(min(9.0, point[4])) * steps, *KINKS).tolist())

        point: FloatArray = np.array([math.log(m.t), math.log(m.kappa), m.log_z0, m.shift - floor, 0.0])
        widths: FloatArray = np.array([0.05, 0.05, 0.02, 0.02, -0.3])
        simplex: FloatArray = np.concatenate([point[None], point + np.diag(widths)])

        def negative(moved_point: FloatArray) -> float:
            return -max(-1e9, self.value(*at(moved_point)))

        result = minimize(
            negative,
            point,
            method="Nelder-Mead",
            options={"maxfev": MOST_SIMPLEX_STEPS, "xatol": 1e-5, "fatol": 1e-7, "initial_simplex": simplex},
        )
        return at(result.x)

    def start(self) -> Multipliers:
        """Return parameters near the optimum when n is large: p about h and the Chernoff exponent of that p."""
        logs = np.log(self.heights)
        variance = float(self.counts @ (self.heights * logs**2)) - float(self.counts @ (self.heights * logs)) ** 2
        exponent = math.sqrt(2.0 * self.level / (max(variance, 0.0) + (self.cap + 1e-9) / self.size))
        t = min(0.9, 3.0 / max(self.cap, 1.0), exponent)
        log_z0 = math.log(float(self.counts @ self.heights ** (1.0 - t)))
        floor = floor_of_shift(0.95 * math.exp(-log_z0) / t, t, self.cap)
        return Multipliers(sign=1, t=t, kappa=0.95, log_z0=log_z0, shift=floor + 0.1, weight=0.95)

    def problem(self) -> DualProblem:
        """Return the problem for the search, with neighbouring heights joined when there are very many."""
        heights, counts = coarse_rows(self.heights, self.counts)
        rest = 0 if self.dim is None else self.dim - len(self.lengths)
        if rest:
            heights, counts = np.append(heights, 0.0), np.append(counts, float(rest))
        return DualProblem(
            sign=1,
            heights=heights,
            counts=counts,
            per_kappa=0.0,
            per_kappa_t=self.level,
            per_weight=0.0,
            cap=self.cap,
            any_dimension=self.dim is None,
        )

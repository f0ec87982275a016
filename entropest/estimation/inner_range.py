"""The range of entropies at given power sums, from both sides: bounds by proof and explicit spectra."""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from entropest._checks import as_integer, as_real
from entropest._types import FloatArray
from entropest.errors import ArgumentValueError, NotCoveredError
from entropest.estimation.identified import (
    Range,
    Side,
    entropy_range_from_purity,
    polynomial_bound,
    polynomial_coefficients,
    polynomial_table,
    value_at_one,
)
from entropest.estimation.moment_fit import MomentFit
from entropest.estimation.moments import LARGEST_MOMENT
from entropest.estimation.spectrum_search import extreme_spectrum, nearest_spectrum, power_sums_of
from entropest.functionals import VonNeumann
from entropest.records.counts import DiagramCounts
from entropest.spectra import low_rank

__all__ = ["IdentifiedRange", "identified_range", "identified_range_of"]

_LARGEST_DIM = 32
_STARTS = 10
_SEED = 20
_MISFIT = 1e-9
_ROUNDING = 1e-12


@dataclass(frozen=True, slots=True, kw_only=True)
class IdentifiedRange:
    """What power sums known exactly say about the von Neumann entropy, in nats.

    Attributes
    ----------
    outer : Range
        Bounds by proof: every spectrum with these power sums lies inside.
    inner : Range
        Reached by explicit spectra: no interval that leaves out a part of it can be right.
    lowest, highest : (d,) float array; `highest` may be None
        Those spectra; None where the entropy is unbounded.
    misfit : float
        Largest relative difference of their power sums from the given ones.
    """

    outer: Range
    inner: Range
    lowest: FloatArray
    highest: FloatArray | None
    misfit: float

    @property
    def gap(self) -> Range:
        """How far the outer range reaches beyond the inner one, below and above; the misfit can hide 1e-7 nat."""
        above = 0.0 if math.isinf(self.outer.upper) else self.outer.upper - self.inner.upper
        return Range(lower=max(0.0, self.inner.lower - self.outer.lower), upper=max(0.0, above))

    def __str__(self) -> str:
        proved, reached = (f"from {found.lower:.6g} to {found.upper:.6g} nat" for found in (self.outer, self.inner))
        gaps = f"gaps {self.gap.lower:.2g} and {self.gap.upper:.2g} nat"
        return f"entropy {proved} by proof, {reached} by explicit spectra ({gaps})"

    def to_dict(self) -> dict[str, Any]:
        """Return the range as a dict of plain JSON values; what is infinite becomes None."""
        ends = [self.outer.lower, self.outer.upper, self.inner.lower, self.inner.upper]
        plain = [end if math.isfinite(end) else None for end in ends]
        return {
            "schema": "entropest-identified-range/1",
            "outer": plain[:2],
            "inner": plain[2:],
            "gap": [self.gap.lower, self.gap.upper],
            "lowest": self.lowest.tolist(),
            "highest": None if self.highest is None else self.highest.tolist(),
            "misfit": self.misfit,
        }


def identified_range(power_sums: Sequence[float], dim: int | None = None) -> IdentifiedRange:
    """Return the range of the entropy over all spectra with given Tr rho^2, Tr rho^3, ..., Tr rho^k.

    For k = 2 both ranges are the closed form of Harremoes and Topsoe. For k > 2 the outer one is the best
    polynomial bound (nodes from a grid, then refined), and the inner one comes from sequential quadratic programming
    from up to ten spectra that have these power sums; stationary spectra have at most k distinct positive eigenvalues.
    In any dimension the entropy is unbounded unless the state is pure: a vanishing weight spread over ever more
    levels changes no power sum in the limit.

    Parameters
    ----------
    power_sums : sequence of float
        From order 2 on without a gap, up to order 6.
    dim : int, optional
        Dimension, at most 32; None for any dimension.

    Raises
    ------
    NotCoveredError
        If no spectrum with these power sums was found, or beyond 32 dimensions.
    ArgumentValueError
        For a power sum outside (0, 1], or none or too many of them.

    References
    ----------
    Harremoes and Topsoe, IEEE Trans. Inf. Theory 47 (2001) 2944, doi:10.1109/18.959272; Kraft, DFVLR-FB 88-28 (1988)
    (sequential quadratic programming); Golub and Meurant, Matrices, Moments and Quadrature (2010), ch. 6.

    Examples
    --------
    >>> found = identified_range([0.38, 0.16], 4)
    >>> round(found.outer.lower, 4), round(found.outer.upper, 4)
    (1.0189, 1.0971)
    >>> round(found.inner.lower, 4), round(found.inner.upper, 4)
    (1.0297, 1.0971)
    """
    values = np.array([as_real(value, "power_sums") for value in power_sums], dtype=np.float64)
    if not 1 <= len(values) <= LARGEST_MOMENT - 1:
        raise ArgumentValueError(f"power_sums must be 1 to {LARGEST_MOMENT - 1} numbers, got {len(values)}")
    if not ((values > 0.0) & (values <= 1.0)).all():
        raise ArgumentValueError(f"power_sums must lie in (0, 1], got {values.tolist()}")
    letters = math.ceil(1.0 / values[0] - 1e-9) + 4 * len(values)
    if dim is not None:
        letters = as_integer(dim, "dim", at_least=1)
    if letters > _LARGEST_DIM:
        raise NotCoveredError(f"explicit spectra are searched for in up to {_LARGEST_DIM} dimensions, got {letters}")
    orders = np.arange(2.0, len(values) + 2.0)
    feasible = _spectra_with(orders, values, letters)
    lowest, low_misfit = _extreme(orders, values, 1.0, feasible)
    highest, high_misfit = (None, 0.0) if dim is None and values[0] < 1.0 else _extreme(orders, values, -1.0, feasible)
    inner = Range(
        lower=float(VonNeumann()(lowest)), upper=math.inf if highest is None else float(VonNeumann()(highest))
    )
    outer = entropy_range_from_purity(max(values[0], 1.0 / letters if dim is not None else 0.0), dim)
    for order in range(3, len(values) + 2):
        lower = _best_bound("lower", values[: order - 1], 0.0)
        upper = outer.upper if dim is None else _best_bound("upper", values[: order - 1], float(dim))
        outer = Range(lower=max(outer.lower, lower), upper=min(outer.upper, upper))
    return IdentifiedRange(
        outer=outer, inner=inner, lowest=lowest, highest=highest, misfit=max(low_misfit, high_misfit)
    )


def identified_range_of(counts: DiagramCounts, *, largest: int = LARGEST_MOMENT) -> IdentifiedRange:
    """Return the range at the power sums nearest to those of a record that some spectrum has, sampling error aside.

    The power sums of all block sizes are pooled and projected by :class:`entropest.estimation.moment_fit.MomentFit`
    onto those of a spectrum of the record's dimension (or of the rows seen), so that explicit spectra exist. For
    the range with its sampling error use :func:`entropest.estimate`.

    Parameters
    ----------
    counts : DiagramCounts
        The record; blocks of two copies or more.
    largest : int
        Highest order used, from 2 to 6, and at most the largest block.

    Examples
    --------
    >>> pairs = DiagramCounts.from_swap(symmetric=2100, antisymmetric=900, dim=4)
    >>> found = identified_range_of(pairs)
    >>> round(found.inner.lower, 3), round(found.outer.upper, 3)
    (0.98, 1.134)
    """
    largest = as_integer(largest, "largest", at_least=2, at_most=LARGEST_MOMENT)
    biggest = max(counts.block_sizes)
    if biggest < 2:
        raise NotCoveredError("blocks of one copy say nothing about the spectrum: blocks of at least 2 are needed")
    spectrum = MomentFit().spectrum(counts)
    orders = np.arange(2.0, min(largest, biggest) + 1.0)
    return identified_range(power_sums_of(spectrum, orders).tolist(), counts.dim)


def _spectra_with(orders: FloatArray, values: FloatArray, letters: int) -> list[FloatArray]:
    """Return spectra with the given power sums, found from fixed and random starts."""
    rng = np.random.default_rng(_SEED)
    fewest = min(letters, max(1, math.floor(1.0 / values[0] + 1e-9)))
    supports = np.linspace(fewest, letters, 2 * _STARTS).round().astype(int)
    starts = [low_rank(letters, fewest)]
    for support in np.concatenate([supports, supports]):
        start = np.zeros(letters)
        start[:support] = rng.dirichlet(np.full(support, 1.0))
        starts.append(start)
    found: list[FloatArray] = []
    for start in starts:
        spectrum, misfit = nearest_spectrum(orders, values, np.diag(1.0 / values), start)
        if misfit <= 0.1 * _MISFIT:
            found.append(spectrum)
        if len(found) == _STARTS:
            break
    if not found:
        raise NotCoveredError(f"no spectrum of {letters} eigenvalues with the power sums {values.tolist()} was found")
    return found


def _extreme(
    orders: FloatArray, values: FloatArray, sign: float, feasible: list[FloatArray]
) -> tuple[FloatArray, float]:
    """Return the most extreme spectrum reached from feasible ones, and its misfit."""
    every = np.concatenate([[1.0], orders])
    targets = np.concatenate([[1.0], values])
    candidates = [(p, float(np.abs((p[:, None] ** every).sum(axis=0) / targets - 1.0).max())) for p in feasible]
    candidates += [extreme_spectrum(orders, values, sign, start) for start in feasible]
    kept = [candidate for candidate in candidates if candidate[1] <= _MISFIT]
    return min(kept, key=lambda candidate: sign * float(VonNeumann()(candidate[0])))


def _best_bound(side: Side, values: FloatArray, dim: float) -> float:
    """Return the best polynomial bound at exact power sums, nodes refined from the grid, rounded outwards."""
    from scipy.optimize import minimize

    order = len(values) + 1
    sums = np.concatenate([[dim, 1.0], values])
    sign = 1.0 if side == "lower" else -1.0
    nodes, table = polynomial_table(side, order)
    start = nodes[int(np.argmax(sign * (table @ sums) - 1e-13 * np.abs(table) @ sums))]

    def allowed(logs: FloatArray) -> FloatArray:
        points = np.sort(np.exp(np.minimum(logs, 0.0)))
        for i in range(len(points) - 1, 0, -1):
            points[i - 1] = min(points[i - 1], points[i] / 1.002)
        return points

    def loss(logs: FloatArray) -> float:
        return -sign * float(polynomial_coefficients(side, allowed(logs)[None], order)[0] @ sums)

    found = minimize(loss, np.log(start), method="Nelder-Mead", options={"xatol": 1e-6, "fatol": 1e-12, "maxiter": 400})
    bounds = []
    for chosen in (start, allowed(found.x)):
        bound = polynomial_bound(side, tuple(chosen.tolist()), at_one=value_at_one(side, order))
        coefficients = np.array(bound.coefficients)
        bounds.append(sign * float(coefficients @ sums) - _ROUNDING * float(np.abs(coefficients) @ sums))
    return sign * max(bounds)

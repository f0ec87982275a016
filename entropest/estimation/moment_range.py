"""The range of entropies compatible with measured power sums, widened by their sampling error."""

import math
from dataclasses import dataclass
from functools import partial

import numpy as np

from entropest._types import FloatArray, IntArray
from entropest.estimation.bounded_mean import betting_fractions
from entropest.estimation.identified import Range, Side, harremoes_topsoe_lower, harremoes_topsoe_upper
from entropest.estimation.ladders import bound_ladder, statistic_range
from entropest.estimation.moments import LARGEST_MOMENT, Moments, characters, pooled_moments, power_sum_limits
from entropest.records.counts import DiagramCounts

__all__ = ["MomentRange", "entropy_range_from_moments"]

_FRACTIONS = (2.0, 5.0, 12.0)
_TOLERANCE = 1e-9
_SEARCH_LIMIT = 40.0


@dataclass(frozen=True, slots=True, kw_only=True)
class MomentRange:
    """What power sums up to some order say about the entropy, in nats.

    Attributes
    ----------
    interval : Range
        Widened by sampling error at the confidence asked.
    compatible : Range
        Bounds at the measured power sums, sampling error left aside, within the interval.
    order : int
        Highest order of the power sums used.
    """

    interval: Range
    compatible: Range
    order: int


def entropy_range_from_moments(counts: DiagramCounts, *, confidence: float) -> MomentRange:
    """Return the range of entropies that the power sums of a record allow.

    The purity gives the range of Harremoes and Topsoe between its confidence limits. Larger blocks, and pairs
    beside them, give polynomial bounds of order min(k, 6) from a fixed ladder, tested together: if S <= s, a lower
    bound read as a statistic g >= g_min of one outcome has mean at most s, so
    prod (1 - f + f (g - g_min)/(s - g_min)) has mean at most 1 for every f in [0, 1), and so has its average over
    the ladder and four fractions f; it exceeds 1/error with probability at most `error`. Likewise for upper
    bounds. Half of the error goes to the
    purity (all of it if there are only pairs), half to the ladder, and each half is split between the two sides.

    Parameters
    ----------
    counts : DiagramCounts
        The record, with blocks of two copies or more. Without `dim` there is no upper bound.
    confidence : float
        Joint confidence of the two ends.

    References
    ----------
    Harremoes and Topsoe, IEEE Trans. Inf. Theory 47 (2001) 2944, doi:10.1109/18.959272;
    Waudby-Smith and Ramdas, J. R. Stat. Soc. B 86 (2024) 1, arXiv:2010.09686.

    Examples
    --------
    >>> pairs = DiagramCounts.from_swap(symmetric=2100, antisymmetric=900, dim=4)
    >>> found = entropy_range_from_moments(pairs, confidence=0.95)
    >>> round(found.interval.lower, 2), round(found.interval.upper, 2)
    (0.91, 1.19)
    """
    moments = pooled_moments(counts)
    dim = counts.dim
    error = 1.0 - confidence
    only_pairs = moments.order == 2
    purity = power_sum_limits(counts, 2, error=error if only_pairs else error / 2.0)
    least = 0.0 if dim is None else 1.0 / dim
    lower = harremoes_topsoe_lower(max(purity.upper, least))
    upper = harremoes_topsoe_upper(max(purity.lower, least), dim)
    if not only_pairs:
        lower = max(lower, _ladder_limit("lower", counts, error / 4.0))
        if dim is not None:
            upper = min(upper, _ladder_limit("upper", counts, error / 4.0))
    most = math.inf if dim is None else math.log(dim)
    inner_lower = _best_estimate("lower", moments, None)
    inner_upper = math.inf if dim is None else _best_estimate("upper", moments, dim)
    interval = _ordered(max(lower, 0.0), min(upper, most))
    return MomentRange(
        interval=interval,
        compatible=_ordered(
            min(max(inner_lower, interval.lower), interval.upper), max(min(inner_upper, interval.upper), interval.lower)
        ),
        order=moments.order,
    )


@dataclass(frozen=True, slots=True)
class _Observed:
    """Non-negative gains of every bound of a ladder at the shapes of one size, and how often they were seen.

    A gain is g - g_min for lower bounds and g_max - g for upper bounds; its mean is at most `room` at the entropy
    in question: s - g_min or g_max - s.
    """

    gains: FloatArray
    tallies: IntArray
    edge: FloatArray


def _ladder_limit(side: Side, counts: DiagramCounts, error: float) -> float:
    """Return the confidence limit on the entropy from the ladders of all block sizes together."""
    sign = 1.0 if side == "lower" else -1.0
    observed = [_observe(side, counts, size) for size in counts.block_sizes if size >= 2]
    blocks = sum(int(part.tallies.sum()) for part in observed)
    fractions = betting_fractions(_FRACTIONS, blocks)

    def rejected(entropy: float) -> bool:
        """Say whether `entropy` and all entropies further out are rejected."""
        logs = np.zeros((len(observed[0].edge), len(fractions)))
        for part in observed:
            ratios = part.gains / (sign * (entropy - part.edge))[:, None] - 1.0
            logs += np.log1p(fractions[None, :, None] * ratios[:, None, :]) @ part.tallies
        top = logs.max()
        return bool(top + math.log(np.exp(logs - top).mean()) >= -math.log(error))

    inside, outside = 0.0, _SEARCH_LIMIT if counts.dim is None else math.log(counts.dim)
    if side == "lower":
        inside, outside = outside, inside
    # Invariant: `outside` is rejected or an end of the range, `inside` is not rejected or the other end.
    while abs(inside - outside) > _TOLERANCE:
        middle = 0.5 * (inside + outside)
        if rejected(middle):
            outside = middle
        else:
            inside = middle
    return outside


def _observe(side: Side, counts: DiagramCounts, size: int) -> _Observed:
    """Evaluate the ladder of one block size."""
    part = counts.of_size(size)
    order = min(size, LARGEST_MOMENT)
    dim = counts.dim if side == "upper" else None
    coefficients = bound_ladder(side, order, dim)
    least, largest = statistic_range(side, order, dim)
    moments = characters(part.compact_shapes, order)
    moments[:, 0] = 0.0 if dim is None else dim
    values = np.clip(coefficients @ moments.T, least[:, None], largest[:, None])
    if side == "lower":
        return _Observed(gains=values - least[:, None], tallies=part.counts, edge=least)
    return _Observed(gains=largest[:, None] - values, tallies=part.counts, edge=largest)


def _best_estimate(side: Side, moments: Moments, dim: int | None) -> float:
    """Return the bound at the measured power sums that is tightest with two standard errors added.

    The candidates are the exact bound from the purity and the ladders of all orders.
    """
    sign = 1.0 if side == "lower" else -1.0
    exact = harremoes_topsoe_lower if side == "lower" else partial(harremoes_topsoe_upper, dim=dim)
    least = 0.0 if dim is None else 1.0 / dim
    margin = 2.0 * math.sqrt(moments.covariance[2, 2])
    purity, further = (min(1.0, max(moments.values[2] + shift, least)) for shift in (0.0, sign * margin))
    candidates = [(exact(further), exact(purity))]
    for order in range(3, moments.order + 1):
        coefficients = bound_ladder(side, order, dim)
        values = moments.values[: order + 1].copy()
        values[0] = 0.0 if dim is None else dim
        estimates = coefficients @ values
        covariance = moments.covariance[: order + 1, : order + 1]
        variances = np.maximum(((coefficients @ covariance) * coefficients).sum(axis=1), 0.0)
        candidates += zip(estimates - sign * 2.0 * np.sqrt(variances), estimates, strict=True)
    return float(max(candidates, key=lambda pair: sign * pair[0])[1])


def _ordered(lower: float, upper: float) -> Range:
    """Return a range; bounds that cross by sampling error are exchanged."""
    return Range(lower=min(lower, upper), upper=max(lower, upper))

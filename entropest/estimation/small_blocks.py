"""Answers from small blocks: through power sums of integer order, or as a range of the entropy."""

import math

from entropest.estimation.answer import Answer, capped, inside
from entropest.estimation.identified import Range
from entropest.estimation.moment_range import entropy_range_from_moments
from entropest.estimation.moments import pooled_moments, power_sum_limits
from entropest.estimation.order_values import (
    OfOneOrder,
    from_tsallis,
    possible_range,
    slope_from_tsallis,
    to_tsallis,
)
from entropest.functionals import PowerSum
from entropest.records.counts import DiagramCounts

__all__ = ["from_moments", "from_power_sums"]


def from_power_sums(functional: OfOneOrder, counts: DiagramCounts, *, confidence: float) -> Answer:
    """Estimate a functional of integer order k >= 2 from the unbiased Tr rho^k of all blocks of k copies or more."""
    order = int(functional.order)
    power = PowerSum(order)
    moments = pooled_moments(counts, largest=order)
    limits = power_sum_limits(counts, order, error=1.0 - confidence)
    notes: list[str] = []
    power_sum = capped(
        float(moments.values[order]), possible_range(power, counts.dim), notes, f"estimate of Tr rho^{order}"
    )
    tsallis = to_tsallis(power, power_sum)
    ends = [from_tsallis(functional, to_tsallis(power, end)) for end in (limits.lower, limits.upper)]
    left_out = sum(blocks for size, blocks in counts.block_sizes.items() if size < order)
    if left_out:
        notes.append(f"{left_out} blocks of fewer than {order} copies were left out")
    exact = order in (2, 3) and set(counts.block_sizes) == {order}
    rule = "exact binomial limits (Clopper and Pearson)" if exact else "betting limits for bounded observations"
    notes.append(f"interval: {rule}; they hold for identical blocks, however few")
    value = from_tsallis(functional, tsallis)
    if math.isinf(value):
        notes.append(f"the estimate of Tr rho^{order} is not positive: no value")
    deviation = math.sqrt(moments.covariance[order, order]) / (order - 1.0)
    return Answer(
        value=None if math.isinf(value) else value,
        interval=inside(Range(lower=min(ends), upper=max(ends)), possible_range(functional, counts.dim)),
        standard_error=None if math.isinf(value) else deviation * slope_from_tsallis(functional, tsallis),
        method="power sum",
        identified=True,
        notes=tuple(notes),
    )


def from_moments(counts: DiagramCounts, *, confidence: float, smallest_needed: int) -> Answer:
    """Return the range of the entropy that the power sums of small blocks allow.

    Blocks of at least `dim` copies identify the entropy; its value is then the middle of the range at the measured
    power sums.
    """
    found = entropy_range_from_moments(counts, confidence=confidence)
    largest = max(counts.block_sizes)
    identified = counts.dim is not None and largest >= counts.dim
    low, high = found.compatible.lower, found.compatible.upper
    notes = [
        f"measured power sums up to order {found.order} are compatible with entropies from {low:.4g} to {high:.4g} nat",
        "interval: that range with its sampling error; it holds for identical blocks, however few",
    ]
    if counts.dim is None:
        notes.append("without the dimension nothing bounds the entropy from above")
    if identified:
        notes.append(
            f"value: the middle of the compatible range, so its bias can reach {0.5 * (high - low):.2g} nat; blocks of "
            f"{smallest_needed} copies would do better"
        )
    else:
        orders = "Tr rho^2" if largest == 2 else f"Tr rho^2 to Tr rho^{largest}"
        notes.insert(0, f"blocks of at most {largest} copies fix only {orders}, not the entropy")
    value = None
    if identified:
        value = capped(0.5 * (low + high), found.interval, notes, "middle of the compatible range")
    return Answer(
        value=value,
        interval=found.interval,
        standard_error=None,
        method="middle of moment range" if identified else "moment range",
        identified=identified,
        notes=tuple(notes),
    )

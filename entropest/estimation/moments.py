"""Unbiased power sums of a record that may mix block sizes, with their covariance and confidence limits."""

from dataclasses import dataclass

import numpy as np

from entropest._types import FloatArray, IntArray
from entropest.binomial import clopper_pearson_lower, clopper_pearson_upper
from entropest.errors import NotCoveredError
from entropest.estimation.bounded_mean import Tallies, mean_lower_limit
from entropest.estimation.identified import Range
from entropest.estimation.power_sums import power_sum
from entropest.records.counts import DiagramCounts

__all__ = ["LARGEST_MOMENT", "Moments", "characters", "pooled_moments", "power_sum_limits"]

LARGEST_MOMENT = 6


@dataclass(frozen=True, slots=True, kw_only=True)
class Moments:
    """Unbiased estimates of Tr rho^j for j = 0, 1, ..., order, from all blocks of at least j copies.

    Attributes
    ----------
    values : (order + 1,) array
        Entry 0 is 0 (the rank is not estimated), entry 1 is 1.
    covariance : (order + 1, order + 1) array
        Covariance of the values, from the spread between blocks; see :func:`pooled_moments`.
    blocks : int
        Number of blocks of at least two copies.
    """

    values: FloatArray
    covariance: FloatArray
    blocks: int

    @property
    def order(self) -> int:
        """Highest order estimated."""
        return len(self.values) - 1


def pooled_moments(counts: DiagramCounts, *, largest: int = LARGEST_MOMENT) -> Moments:
    """Return the power sums of a record, every block weighted by its number of copies.

    For order j the blocks of k >= j copies enter with weight k. The covariance between blocks of one size is taken
    after adding two blocks that showed the one-row diagram and two that showed the diagram with one box in a
    second row: the outcome that a nearly pure state hides in a small record.

    Parameters
    ----------
    counts : DiagramCounts
        The record, with at least one block of two copies or more.
    largest : int
        Highest order wanted; the order is also at most the size of the largest block.
    """
    sizes = {size: blocks for size, blocks in counts.block_sizes.items() if size >= 2}
    if not sizes:
        raise NotCoveredError("blocks of one copy say nothing about the spectrum: blocks of at least 2 are needed")
    order = min(largest, max(sizes))
    copies = [sum(k * m for k, m in sizes.items() if k >= j) for j in range(order + 1)]
    values = np.zeros(order + 1)
    covariance = np.zeros((order + 1, order + 1))
    for size, blocks in sizes.items():
        shapes, tallies = _table(counts, size)
        top = min(order, size)
        seen = characters(shapes, top)
        weights = np.array([size / copies[j] for j in range(top + 1)])
        values[: top + 1] += weights * (tallies @ seen)
        near_pure = np.array([[size, 0], [size - 1, 1]])
        spread = _covariance(
            np.concatenate([seen, characters(near_pure, top)]), np.concatenate([tallies, [2, 2]]), blocks
        )
        covariance[: top + 1, : top + 1] += blocks * np.outer(weights, weights) * spread
    values[0] = 0.0
    return Moments(values=values, covariance=covariance, blocks=sum(sizes.values()))


def power_sum_limits(counts: DiagramCounts, order: int, *, error: float) -> Range:
    """Return two-sided confidence limits on Tr rho^order, each side with half of the error.

    One block size equal to the order, 2 or 3, makes two-valued observations: the limits are the exact binomial ones
    of Clopper and Pearson. All other records go through :func:`mean_lower_limit`, which holds for every sample
    size without approximation; blocks are weighted by their number of copies over the largest.

    Parameters
    ----------
    counts : DiagramCounts
        The record; blocks of fewer than `order` copies are left out.
    order : int
        From 2.
    error : float
        Total error probability of the two limits.
    """
    sizes = {size: blocks for size, blocks in counts.block_sizes.items() if size >= order}
    if not sizes:
        raise NotCoveredError(f"Tr rho^{order} needs blocks of at least {order} copies, got {max(counts.block_sizes)}")
    if order in (2, 3) and set(sizes) == {order}:
        return _two_valued_limits(counts, order, sizes[order], error)
    parts = []
    for size in sizes:
        shapes, tallies = _table(counts, size)
        parts.append(Tallies(values=power_sum(shapes, order), counts=tallies, weight=size / max(sizes)))
    lower = mean_lower_limit(parts, least=-1.0, most=1.0, error=error / 2.0)
    mirrored = [Tallies(values=-part.values, counts=part.counts, weight=part.weight) for part in parts]
    upper = -mean_lower_limit(mirrored, least=-1.0, most=1.0, error=error / 2.0)
    return Range(lower=max(0.0, lower), upper=max(0.0, upper))


def _two_valued_limits(counts: DiagramCounts, order: int, blocks: int, error: float) -> Range:
    """Exact limits when T_order takes two values, 1 and -1/(order - 1), the second for the shapes order-1 + 1."""
    shapes, tallies = _table(counts, order)
    low = -1.0 / (order - 1.0)
    high_count = int(tallies[power_sum(shapes, order) > 0.5].sum())
    lower = clopper_pearson_lower(high_count, blocks, error=error / 2.0)
    upper = clopper_pearson_upper(high_count, blocks, error=error / 2.0)
    return Range(
        lower=max(0.0, low + (1.0 - low) * lower),
        upper=max(0.0, low + (1.0 - low) * upper),
    )


def _table(counts: DiagramCounts, size: int) -> tuple[IntArray, IntArray]:
    """Return the shapes of one size, without empty rows, and how often each was seen."""
    part = counts.of_size(size)
    return part.compact_shapes, part.counts


def characters(shapes: IntArray, top: int) -> FloatArray:
    """Return T_0 (as 0), T_1, ..., T_top of each shape, (K, top + 1)."""
    columns = [np.zeros(len(shapes))] + [power_sum(shapes, j) for j in range(1, top + 1)]
    return np.stack(columns, axis=1)


def _covariance(values: FloatArray, tallies: IntArray, blocks: int) -> FloatArray:
    """Return the sum of squares about the mean over the number of blocks, (c, c)."""
    centred = values - tallies @ values / tallies.sum()
    return np.asarray((centred * tallies[:, None]).T @ centred / blocks)

"""Which blocks of a record are large enough for estimates from single diagrams."""

from dataclasses import dataclass
from typing import Final

import numpy as np

from entropest.records.counts import DiagramCounts

__all__ = ["Route", "route"]

LARGE: Final = 20
FEW_BLOCKS: Final = 30
SMALL_BUT_FEW: Final = 8


@dataclass(frozen=True, slots=True, kw_only=True)
class Route:
    """How a record is used.

    Attributes
    ----------
    large : DiagramCounts or None
        The record of the blocks to be used one diagram at a time; None when the record goes through its power sums.
    left_out : int
        Number of blocks that are not used then.
    smallest_needed : int
        Blocks of this many copies would count as large whatever their number.
    """

    large: DiagramCounts | None
    left_out: int
    smallest_needed: int


def route(counts: DiagramCounts) -> Route:
    """Decide by block sizes alone.

    Blocks of k copies are large if k >= max(20, 4 d). Fewer than 30 blocks of one size are too few for their power
    sums to say much: then max(8, d) copies are enough, and 20 in any dimension. Without `dim`, the largest number of
    rows seen stands for d in the first rule and 20 copies are needed in the second. The large blocks are used if
    they hold at least half of all copies; otherwise the whole record goes through its power sums.

    Examples
    --------
    >>> route(DiagramCounts({"60+40": 1, "2": 10}, dim=2)).left_out
    10
    >>> route(DiagramCounts({"2": 80, "1+1": 20}, dim=2)).large is None
    True
    """
    shapes, tallies = counts.compact_shapes, counts.counts
    sizes = shapes.sum(axis=1)
    dim = counts.dim
    levels = shapes.shape[1] if dim is None else dim
    needed = max(LARGE, 4 * levels)
    few_needed = LARGE if dim is None else min(LARGE, max(SMALL_BUT_FEW, dim))
    block_sizes = counts.block_sizes
    blocks_of_size = np.array([block_sizes[int(size)] for size in sizes])
    large = (sizes >= needed) | ((blocks_of_size < FEW_BLOCKS) & (sizes >= few_needed))
    copies = sizes * tallies
    if dim == 1:
        large[:] = True
    if 2 * int(copies[large].sum()) < int(copies.sum()):
        return Route(large=None, left_out=0, smallest_needed=needed)
    part = counts if large.all() else DiagramCounts.from_checked(shapes[large], tallies[large], dim)
    return Route(large=part, left_out=int(tallies[~large].sum()), smallest_needed=needed)

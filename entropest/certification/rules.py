"""Choices that a certificate must not make after seeing the outcomes: they depend on the block sizes alone."""

import math
from collections.abc import Mapping
from typing import Final

__all__ = ["ENTROPY_CAP", "LARGE_BLOCK", "MANY_BLOCKS", "error_split", "large_sizes"]

ENTROPY_CAP: Final = 20.0 * math.log(2.0)
"""No certificate states a lower bound above 20 bits."""

LARGE_BLOCK: Final = 100
"""Blocks of at least this many copies count as large diagrams, while they are fewer than MANY_BLOCKS."""

MANY_BLOCKS: Final = 30


def large_sizes(block_sizes: Mapping[int, int]) -> frozenset[int]:
    """Return the block sizes that are bounded as large diagrams rather than by counting outcomes.

    Examples
    --------
    >>> sorted(large_sizes({2: 500, 400: 3}))
    [400]
    """
    large = {size: blocks for size, blocks in block_sizes.items() if size >= LARGE_BLOCK}
    if sum(large.values()) >= MANY_BLOCKS:
        return frozenset()
    return frozenset(large)


def error_split(error: float, blocks: int) -> tuple[float, float]:
    """Divide the error between the symmetric-outcome test and the mixture e-value.

    The e-value gets a fifth of the error below 1,000 blocks and half of it from there on: the exact test is the
    sharper one on small records, the e-value on large ones.

    Examples
    --------
    >>> error_split(0.05, 2000)
    (0.025, 0.025)
    """
    for_evidence = error / 5.0 if blocks < 1000 else error / 2.0
    return error - for_evidence, for_evidence

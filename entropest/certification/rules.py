"""Limits and divisions that depend on the block sizes alone, never on outcomes."""

import math
from collections.abc import Mapping
from typing import Final

__all__ = ["ENTROPY_CAP", "TUNED_CAP", "error_split", "large_sizes"]

ENTROPY_CAP: Final = 20.0 * math.log(2.0)
"""No certificate states a lower bound above 20 bits."""

TUNED_CAP: Final = 7.97535
"""The last point of the grid of the tuned e-value."""

_LARGE: Final = ((20, 10), (100, 30))


def large_sizes(block_sizes: Mapping[int, int]) -> frozenset[int]:
    """Return the block sizes that are used as large diagrams, added row by row.

    Blocks of at least 20 copies are, while there are fewer than 10 of them, and blocks of at least 100 copies while
    there are fewer than 30.

    Examples
    --------
    >>> sorted(large_sizes({2: 500, 400: 3}))
    [400]
    """
    found: set[int] = set()
    for least, too_many in _LARGE:
        large = {size: blocks for size, blocks in block_sizes.items() if size >= least}
        if sum(large.values()) < too_many:
            found |= large.keys()
    return frozenset(found)


def error_split(error: float, blocks: int) -> tuple[float, float]:
    """Divide the error between the score test and the e-value.

    The e-value gets a fifth of the error below 1,000 blocks and half of it from there on: the exact test is the
    sharper one on small records, the e-value on large ones.

    Examples
    --------
    >>> error_split(0.05, 2000)
    (0.025, 0.025)
    """
    for_evidence = error / 5.0 if blocks < 1000 else error / 2.0
    return error - for_evidence, for_evidence

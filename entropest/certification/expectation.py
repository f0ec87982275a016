"""Putting weight where the truth is expected: choices made from an expected spectrum, never from outcomes.

The tests are run on the outcomes that the expected spectrum would give on average, rounded to whole numbers. Whatever
is chosen here, and however wrong the expectation is, the certificate stays valid: only its power depends on it.
"""

from collections.abc import Mapping, Sequence
from functools import lru_cache
from typing import Final

import numpy as np

from entropest.certification.chains import chain_lower_bound
from entropest.certification.evidence import SizedBlocks
from entropest.certification.identical_blocks import identical_blocks_lower_bound
from entropest.certification.tuned import COMPONENTS, tuned_lower_bound
from entropest.law.schur_weyl import SchurWeyl

__all__ = ["best_leading", "best_share", "expected_blocks"]

_SHARES: Final = (0.2, 0.5, 0.8)
_LARGEST_EXPECTED: Final = 12


def expected_blocks(sizes: Mapping[int, int], spectrum: Sequence[float]) -> list[SizedBlocks]:
    """Return blocks with the expected outcomes; sizes above 12 copies are left out.

    Examples
    --------
    >>> [part.counts.tolist() for part in expected_blocks({2: 100}, [0.5, 0.5])]
    [[75, 25]]
    """
    blocks = []
    for size, number in sizes.items():
        if size > _LARGEST_EXPECTED:
            continue
        table = SchurWeyl(spectrum, size).table()
        expected = number * table.probabilities
        counts = np.floor(expected).astype(np.int64)
        missing = number - int(counts.sum())
        counts[np.argsort(counts - expected, kind="stable")[:missing]] += 1
        blocks.append(SizedBlocks(copies=size, shapes=table.shapes, counts=counts))
    return blocks


def best_share(sizes: Mapping[int, int], error: float, spectrum: tuple[float, ...]) -> float:
    """Return the share of the error for the e-value that gives the highest bound on the expected outcomes.

    Examples
    --------
    >>> best_share({4: 100_000}, 0.05, (0.5, 0.25, 0.15, 0.1))
    0.5
    """
    return _best_share(tuple(sizes.items()), error, spectrum)


@lru_cache(maxsize=64)
def _best_share(items: tuple[tuple[int, int], ...], error: float, spectrum: tuple[float, ...]) -> float:
    sizes = dict(items)
    blocks = expected_blocks(sizes, spectrum)
    if not blocks:
        return _SHARES[0]

    def bound(share: float) -> float:
        score = chain_lower_bound(blocks, error=error * (1.0 - share))
        evidence = [
            identical_blocks_lower_bound(blocks, error=error * share, planned_blocks=sizes),
            tuned_lower_bound(blocks, error=error * share, planned=sizes),
        ]
        return max(score, *evidence)

    return max(_SHARES, key=bound)


def best_leading(sizes: Mapping[int, int], error: float, spectrum: tuple[float, ...], *, drifting: bool) -> int:
    """Return the component of the tuned e-value whose lead gives the highest bound on the expected outcomes.

    Examples
    --------
    >>> best_leading({4: 1000}, 0.05, (0.5, 0.25, 0.15, 0.1), drifting=True) in range(COMPONENTS)
    True
    """
    return _best_leading(tuple(sizes.items()), error, spectrum, drifting)


@lru_cache(maxsize=64)
def _best_leading(items: tuple[tuple[int, int], ...], error: float, spectrum: tuple[float, ...], drifting: bool) -> int:
    sizes = dict(items)
    blocks = expected_blocks(sizes, spectrum)
    if not blocks:
        return 0
    return max(
        range(COMPONENTS),
        key=lambda i: tuned_lower_bound(blocks, error=error, planned=sizes, drifting=drifting, leading=i),
    )

"""The mixture e-value against "the von Neumann entropy is at most s".

For one witness g of a block size, with values at least `floor`, and a fraction f in [0, 1], the product over the
blocks of 1 + b (g - s), b = f / (s - floor), has mean at most 1 under the null whatever the number of blocks, so its
average over a fixed grid of witnesses and fractions has too. By Ville's inequality it exceeds 1/error at some time with
probability at most `error`. Every factor is non-increasing in s: the bound is the largest s rejected.

It needs identical blocks and no plan of their number. Proofs: docs/theory.md, "E-values".
References: Ville (1939); Waudby-Smith and Ramdas, J. R. Stat. Soc. B 86 (2024) 1, arXiv:2010.09686.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from entropest._types import FloatArray, IntArray
from entropest.certification.rules import ENTROPY_CAP
from entropest.certification.witnesses import witness_ladder, witness_values

__all__ = ["FRACTIONS", "SizedBlocks", "evidence_lower_bound", "log_mixture_e_value"]

FRACTIONS: Final = (0.003, 0.01, 0.025, 0.06, 0.15, 0.35, 0.65, 0.95)
_CHUNK: Final = 20_000


@dataclass(frozen=True, slots=True, kw_only=True)
class SizedBlocks:
    """The outcomes of all blocks of one size: distinct shapes (K, d) and their counts (K,)."""

    copies: int
    shapes: IntArray
    counts: IntArray


@dataclass(frozen=True, slots=True, kw_only=True)
class _Scored:
    """Witness values (W, K), counts (K,) and floors (W,) of the blocks of one size."""

    values: FloatArray
    counts: FloatArray
    floors: FloatArray


def evidence_lower_bound(blocks: Sequence[SizedBlocks], *, error: float) -> float:
    """Return the largest entropy (nat) that the mixture e-value rejects at level `error`.

    Parameters
    ----------
    blocks : sequence of SizedBlocks
        Blocks of at least two copies, one entry a size.
    error : float
        Probability that the bound exceeds the entropy, over identical blocks at any stopping time.

    Returns
    -------
    float
        Between 0 and ENTROPY_CAP, rounded down.

    Examples
    --------
    >>> pairs = SizedBlocks(copies=2, shapes=np.array([[2, 0], [1, 1]]), counts=np.array([750, 250]))
    >>> round(evidence_lower_bound([pairs], error=0.05), 2)
    0.56
    """
    scored = _score(blocks)
    threshold = -math.log(error) + 1e-9 + 1e-14 * sum(float(part.counts.sum()) for part in scored)

    def rejected(entropy: float) -> bool:
        return _log_mixture(scored, entropy) >= threshold

    low, high = 1e-9, ENTROPY_CAP
    if not rejected(low):
        return 0.0
    if rejected(high):
        return ENTROPY_CAP
    while high - low > 1e-10:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if rejected(middle) else (low, middle)
    return low


def log_mixture_e_value(blocks: Sequence[SizedBlocks], entropy: float) -> float:
    """Return the logarithm of the mixture e-value against "the entropy is at most `entropy`" (nat, positive).

    Examples
    --------
    >>> pairs = SizedBlocks(copies=2, shapes=np.array([[2, 0], [1, 1]]), counts=np.array([750, 250]))
    >>> log_mixture_e_value([pairs], 0.5) > math.log(20) > log_mixture_e_value([pairs], 0.6)
    True
    """
    return _log_mixture(_score(blocks), entropy)


def _score(blocks: Sequence[SizedBlocks]) -> list[_Scored]:
    """Evaluate the ladder of every block size."""
    scored = []
    for part in blocks:
        ladder = witness_ladder(part.copies)
        chunks = [
            witness_values(ladder, part.shapes[start : start + _CHUNK]) for start in range(0, len(part.shapes), _CHUNK)
        ]
        values = np.concatenate(chunks, axis=1)
        scored.append(_Scored(values=values, counts=part.counts.astype(np.float64), floors=ladder.floors))
    return scored


def _log_mixture(scored: Sequence[_Scored], entropy: float) -> float:
    """Return log of the average over witnesses and fractions of the product of all factors."""
    fractions = np.array(FRACTIONS)
    logs = np.zeros((len(scored[0].floors), len(fractions)))
    for part in scored:
        bets = fractions / (entropy - part.floors)[:, None]
        for start in range(0, len(part.counts), _CHUNK):
            excess = part.values[:, None, start : start + _CHUNK] - entropy
            logs += np.log1p(bets[..., None] * excess) @ part.counts[start : start + _CHUNK]
    top = float(logs.max())
    return top + math.log(float(np.mean(np.exp(logs - top))))

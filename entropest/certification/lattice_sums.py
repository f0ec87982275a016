"""Upper bounds on the lower tail of a sum of many independent whole-number scores.

Up to EXACT_BLOCKS terms the law of the sum is computed by a discrete Fourier transform on a window that Bernstein's
inequality gives; beyond, Chernoff's bound is used. Proofs of the slack: docs/theory-chains.md, "Rounding".
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.fft import irfft

from entropest._types import FloatArray

__all__ = ["EXACT_BLOCKS", "LatticeLaw", "moments_of_sum", "tail_bound"]

EXACT_BLOCKS: Final = 1_000_000
_LOG_LOST: Final = math.log(4e9)
_SLACK: Final = 1e-9
_SLACK_PER_BLOCK: Final = 2e-13


@dataclass(frozen=True, slots=True, kw_only=True)
class LatticeLaw:
    """The law of one score, and how many independent blocks have it.

    `scores` are non-negative integers, `probabilities` non-negative with sum 1 up to rounding.
    """

    blocks: int
    scores: tuple[int, ...]
    probabilities: FloatArray


def moments_of_sum(laws: Sequence[LatticeLaw]) -> tuple[float, float]:
    """Return mean and variance of the sum.

    Examples
    --------
    >>> moments_of_sum([LatticeLaw(blocks=4, scores=(1, 0), probabilities=np.array([0.75, 0.25]))])
    (3.0, 0.75)
    """
    mean = variance = 0.0
    for law in laws:
        scores = np.array(law.scores, dtype=np.float64)
        center = float(scores @ law.probabilities)
        mean += law.blocks * center
        variance += law.blocks * float((scores - center) ** 2 @ law.probabilities)
    return mean, variance


def tail_bound(laws: Sequence[LatticeLaw], observed: int) -> float:
    """Return an upper bound on P(sum of all scores <= observed); exact up to 1e-9 + 2e-13 a block, or Chernoff's.

    References
    ----------
    Bernstein (1924) and Chernoff, Ann. Math. Statist. 23 (1952) 493, doi:10.1214/aoms/1177729330; both in Boucheron,
    Lugosi and Massart, Concentration Inequalities (2013), chapter 2.

    Examples
    --------
    >>> pairs = LatticeLaw(blocks=4, scores=(1, 0), probabilities=np.array([0.75, 0.25]))
    >>> round(tail_bound([pairs], 2), 6)  # 67/256
    0.261719
    """
    if observed >= sum(law.blocks * max(law.scores) for law in laws):
        return 1.0
    if sum(law.blocks for law in laws) > EXACT_BLOCKS:
        return _chernoff(laws, observed)
    return _transformed(laws, observed)


def _transformed(laws: Sequence[LatticeLaw], observed: int) -> float:
    """Sum the law on a window; what wraps around is added to it and what lies below is in the slack."""
    mean, variance = moments_of_sum(laws)
    largest = max(max(law.scores) for law in laws)
    linear = largest * _LOG_LOST / 3.0
    reach = linear + math.sqrt(linear**2 + 2.0 * variance * _LOG_LOST)
    low = max(0, math.floor(mean - reach))
    high = min(sum(law.blocks * max(law.scores) for law in laws), math.ceil(mean + reach))
    if observed >= high:
        return 1.0
    slack = _SLACK + _SLACK_PER_BLOCK * sum(law.blocks for law in laws)
    if observed < low:
        return slack
    length = 1 << (high - low).bit_length()
    angles = (2.0 * math.pi / length) * np.arange(length // 2 + 1)
    size, phase = np.zeros(len(angles)), low * angles
    with np.errstate(divide="ignore"):
        for law in laws:
            waves = np.zeros(len(angles), dtype=np.complex128)
            for score, probability in zip(law.scores, law.probabilities, strict=True):
                waves += probability * np.exp((-1j * score) * angles)
            size += law.blocks * np.log(np.abs(waves))
            phase += law.blocks * np.angle(waves)
    weights = irfft(np.exp(size + 1j * phase), length)
    return min(1.0, float(np.maximum(weights[: observed - low + 1], 0.0).sum()) + slack)


def _chernoff(laws: Sequence[LatticeLaw], observed: int) -> float:
    """Return min over t >= 0 of exp(t observed) E exp(-t sum), near its minimum: every t gives an upper bound."""
    mean, variance = moments_of_sum(laws)
    if observed >= mean or variance == 0.0:
        return 1.0
    best, t = 0.0, (mean - observed) / variance
    for _ in range(8):
        exponent, center, spread, size = t * observed, 0.0, 0.0, t * observed
        for law in laws:
            scores = np.array(law.scores, dtype=np.float64)
            falling = law.probabilities * np.exp(-t * scores)
            shrunk = law.blocks * math.log1p(float(law.probabilities @ np.expm1(-t * scores)))
            tilted = falling / falling.sum()
            mean_here = float(scores @ tilted)
            exponent += shrunk
            size -= shrunk
            center += law.blocks * mean_here
            spread += law.blocks * float((scores - mean_here) ** 2 @ tilted)
        best = min(best, exponent + 1e-14 * size)
        if spread == 0.0:
            break
        t = max(0.5 * t, t + (center - observed) / spread)
    return math.exp(best)

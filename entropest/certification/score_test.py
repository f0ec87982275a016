"""The exact test on the fully symmetric outcome of blocks of k copies.

The symmetric outcome (one row) has probability h_k(p), the complete homogeneous polynomial of the spectrum. Among
all spectra with entropy at most s it is least for a *step spectrum*: floor(level) eigenvalues 1/level and one
smaller, the rest of the mass (proof: docs/theory.md, "The fully symmetric outcome"). The number of symmetric
outcomes among m blocks is then stochastically larger than a binomial with that least probability, so that few
symmetric outcomes reject "the entropy is at most s". Blocks of several sizes: the counts are added.
"""

import math
from collections.abc import Mapping

import numpy as np
from numpy.fft import irfft, rfft
from scipy.special import bdtr

from entropest._types import FloatArray
from entropest.certification.rules import ENTROPY_CAP

__all__ = ["score_lower_bound", "score_p_value", "step_entropy", "step_symmetric_probability"]

_LARGEST_LEVEL = math.exp(ENTROPY_CAP)
_RELATIVE_SLACK = 1e-9
_ABSOLUTE_SLACK = 1e-13


def step_entropy(level: float) -> float:
    """Return the entropy (nat) of the step spectrum with floor(level) eigenvalues 1/level and one smaller.

    With t = level - floor(level) it is log(level) - t log(t) / level, strictly increasing in the level.

    Examples
    --------
    >>> step_entropy(1.0), step_entropy(4.0) == math.log(4.0)
    (0.0, True)
    """
    part = level - math.floor(level)
    return math.log(level) - (part * math.log(part) / level if part > 0.0 else 0.0)


def step_symmetric_probability(level: float, copies: int) -> float:
    """Return h_copies of the step spectrum: the least probability of the symmetric outcome at its entropy.

    With r = floor(level), t = level - r and k copies it is level^-k sum_i C(r-1+i, i) t^(k-i), all terms
    non-negative; strictly decreasing in the level.

    Examples
    --------
    >>> step_symmetric_probability(2.0, 2)
    0.75
    """
    full = math.floor(level)
    i = np.arange(1, copies + 1)
    terms = np.concatenate([[1.0], np.cumprod((full - 1.0 + i) / (i * level))])
    smaller = (level - full) / level
    return float(np.sum(terms[::-1] * smaller ** np.arange(copies + 1.0)))


def score_p_value(symmetric: int, trials: Mapping[int, int], level: float) -> float:
    """Bound the p-value of "every block has at most the entropy of the step spectrum at `level`" from above.

    Parameters
    ----------
    symmetric : int
        Number of fully symmetric outcomes, all block sizes together.
    trials : mapping of int to int
        Block size (at least 2) to number of blocks.
    level : float
        Level of the step spectrum, at least 1.

    Returns
    -------
    float
        P(sum over sizes of Binomial(blocks, h_size) <= symmetric), raised by the proven rounding slack.

    Examples
    --------
    >>> round(score_p_value(2, {2: 4}, 2.0), 6)  # 13/256 of 4 pairs: at most 2 symmetric at probability 3/4
    0.261719
    """
    (first_size, first), *others = sorted(trials.items(), key=lambda item: -item[1])
    probability = step_symmetric_probability(level, first_size)
    start, mass, lost = 0, np.ones(1), 0.0
    for size, blocks in others:
        low, pmf = _binomial_window(blocks, step_symmetric_probability(level, size))
        start, mass = start + low, _convolve(mass, pmf)
        lost += _LOST_MASS
    room = symmetric - start - np.arange(len(mass))
    tails = np.where(room >= 0, bdtr(np.clip(room, 0, first), first, probability), 0.0)
    return min(1.0, float(mass @ tails) * (1.0 + _RELATIVE_SLACK) + _ABSOLUTE_SLACK * len(mass) + lost)


def score_lower_bound(symmetric: int, trials: Mapping[int, int], *, error: float) -> float:
    """Return the largest entropy (nat) that the symmetric-outcome test rejects at level `error`.

    The bound exceeds the entropy of identical blocks with probability at most `error`, when the number and sizes
    of the blocks were fixed beforehand. It is 0 when nothing is rejected and never above ENTROPY_CAP.

    References
    ----------
    k = 2: Harremoes and Topsoe, IEEE Trans. Inf. Theory 47 (2001) 2944, doi:10.1109/18.959272; confidence limit:
    Clopper and Pearson (1934). Larger k: docs/theory.md.

    Examples
    --------
    >>> round(score_lower_bound(750, {2: 1000}, error=0.05), 3)
    0.648
    """
    log_low, log_high = 0.0, ENTROPY_CAP
    if score_p_value(symmetric, trials, 1.0) > error:
        return 0.0
    if score_p_value(symmetric, trials, _LARGEST_LEVEL) <= error:
        return ENTROPY_CAP
    while log_high - log_low > 1e-13 * (1.0 + log_low):
        middle = 0.5 * (log_low + log_high)
        if score_p_value(symmetric, trials, math.exp(middle)) <= error:
            log_low = middle
        else:
            log_high = middle
    return max(0.0, step_entropy(math.exp(log_low)) - 1e-11)


_LOST_MASS = 1e-14


def _binomial_window(trials: int, probability: float) -> tuple[int, FloatArray]:
    """Return start and probabilities of a window that holds all but _LOST_MASS of a binomial law."""
    half = 9.0 * math.sqrt(trials * probability * (1.0 - probability)) + 70.0
    low = max(0, math.floor(trials * probability - half))
    high = min(trials, math.ceil(trials * probability + half))
    values = np.arange(low, high + 1, dtype=np.float64)
    if probability in (0.0, 1.0):
        return low, np.asarray(values == trials * probability, dtype=np.float64)
    steps = np.log((trials - values[:-1]) / values[1:]) + (math.log(probability) - math.log1p(-probability))
    logs = np.concatenate([[0.0], np.cumsum(steps)])
    pmf = np.exp(logs - logs.max())
    return low, np.asarray(pmf / pmf.sum())


def _convolve(first: FloatArray, second: FloatArray) -> FloatArray:
    """Return the convolution of two probability vectors, absolute error below _ABSOLUTE_SLACK an entry."""
    if min(len(first), len(second)) < 200:
        return np.convolve(first, second)
    length = len(first) + len(second) - 1
    return np.maximum(irfft(rfft(first, length) * rfft(second, length), length), 0.0)

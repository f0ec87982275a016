"""Confidence limits for the mean of bounded independent observations that are seen as tallies."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from entropest._checks import as_confidence
from entropest._types import FloatArray, IntArray

__all__ = ["Tallies", "betting_fractions", "mean_lower_limit"]

_FRACTIONS = (1.2, 2.5, 5.0)
_LARGEST_FRACTION = 0.9
_TOLERANCE = 1e-12


@dataclass(frozen=True, slots=True, kw_only=True)
class Tallies:
    """Values of at least `least`, how often each was seen, and the weight of one observation, up to 1."""

    values: FloatArray
    counts: IntArray
    weight: float = 1.0


def betting_fractions(multiples: Sequence[float], observations: int) -> FloatArray:
    """Return the multiples of sqrt(2/observations), and 0.9, which also caps them.

    Small fractions suit observations that spread, the last one observations that hardly vary.
    """
    small = np.asarray(multiples) * np.sqrt(2.0 / observations)
    return np.append(np.minimum(small, _LARGEST_FRACTION), _LARGEST_FRACTION)


def mean_lower_limit(tallies: Sequence[Tallies], *, least: float, most: float, error: float) -> float:
    """Return a lower confidence limit on the common mean of all observations.

    If the mean is at most mu then prod (1 + f w (x - mu)/(mu - least)) has mean at most 1 for every fraction f in
    [0, 1) and weight w in [0, 1], and so has its average over four fractions; it exceeds 1/error with
    probability at most `error`. The limit is the least mu where it does not. It needs independent observations
    with values in [least, most] and one mean, weights fixed beforehand, and no approximation. The fractions
    are 1.2, 2.5 and 5 times sqrt(2/N), N the number of observations, and 0.9, which no fraction exceeds.

    Parameters
    ----------
    tallies : sequence of Tallies
        The observations, one entry for each weight.
    least, most : float
        The range of the observations.
    error : float
        Error probability.

    References
    ----------
    Waudby-Smith and Ramdas, J. R. Stat. Soc. B 86 (2024) 1, arXiv:2010.09686.

    Examples
    --------
    >>> seen = Tallies(values=np.array([1.0, -1.0]), counts=np.array([900, 100]))
    >>> round(mean_lower_limit([seen], least=-1.0, most=1.0, error=0.025), 3)
    0.736
    """
    error = as_confidence(error, "error")
    total = sum(int(part.counts.sum()) for part in tallies)
    fractions = betting_fractions(_FRACTIONS, total)
    threshold = -np.log(error) + np.log(len(fractions))

    def excess(mean: float) -> float:
        """Logarithm of the average product over the threshold; it falls with the mean."""
        logs = np.zeros(len(fractions))
        for part in tallies:
            gains = (part.values - mean) / (mean - least) * part.weight
            logs += np.log1p(fractions[:, None] * gains[None, :]) @ part.counts
        top = logs.max()
        return float(top + np.log(np.exp(logs - top).sum()) - threshold)

    low, high = least, most
    if excess(high) > 0.0:
        return most
    while high - low > _TOLERANCE * (most - least):
        middle = 0.5 * (low + high)
        if excess(middle) > 0.0:
            low = middle
        else:
            high = middle
    return low

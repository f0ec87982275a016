"""Exact confidence limits for a binomial probability (Clopper and Pearson)."""

import numpy as np
from scipy.special import betaincinv

from entropest._checks import as_confidence, as_count
from entropest.errors import ArgumentValueError

__all__ = ["clopper_pearson_lower", "clopper_pearson_upper"]


def clopper_pearson_lower(successes: int, trials: int, *, error: float) -> float:
    """Return the probability below which `successes` or more would be rarer than `error`.

    The limit exceeds the true probability in at most a fraction `error` of repetitions.

    Parameters
    ----------
    successes, trials : int
        0 <= successes <= trials, trials >= 1.
    error : float
        One-sided error, strictly between 0 and 1.

    References
    ----------
    Clopper and Pearson, Biometrika 26 (1934) 404, doi:10.1093/biomet/26.4.404.

    Examples
    --------
    >>> round(clopper_pearson_lower(5, 100, error=0.025), 7)
    0.0164319
    """
    successes, trials, error = _checked(successes, trials, error)
    if successes == 0:
        return 0.0
    return float(betaincinv(successes, trials - successes + 1.0, error))


def clopper_pearson_upper(successes: int, trials: int, *, error: float) -> float:
    """Return the probability above which `successes` or fewer would be rarer than `error`.

    The mirror image of :func:`clopper_pearson_lower`.

    Examples
    --------
    >>> round(clopper_pearson_upper(5, 100, error=0.025), 7)
    0.1128349
    """
    successes, trials, error = _checked(successes, trials, error)
    return float(np.float64(1.0) - clopper_pearson_lower(trials - successes, trials, error=error))


def _checked(successes: int, trials: int, error: float) -> tuple[int, int, float]:
    trials = as_count(trials, "trials")
    successes = as_count(successes, "successes")
    if trials == 0:
        raise ArgumentValueError("trials must be at least 1, got 0")
    if successes > trials:
        raise ArgumentValueError(f"successes must be at most trials {trials}, got {successes}")
    return successes, trials, as_confidence(error, "error")

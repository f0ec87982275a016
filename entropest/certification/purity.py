"""Confidence limits on the purity Tr rho^2 from swap outcomes (blocks of two copies)."""

from entropest.binomial import clopper_pearson_lower, clopper_pearson_upper

__all__ = ["purity_lower_bound", "purity_upper_bound"]

_SLACK = 1e-11


def purity_lower_bound(symmetric: int, trials: int, *, error: float) -> float:
    """Return a lower confidence limit on Tr rho^2 = 2 P(symmetric) - 1, never below 0.

    Examples
    --------
    >>> round(purity_lower_bound(95, 100, error=0.025), 6)
    0.77433
    """
    return max(0.0, 2.0 * clopper_pearson_lower(symmetric, trials, error=error) - 1.0 - _SLACK)


def purity_upper_bound(symmetric: int, trials: int, *, error: float) -> float:
    """Return an upper confidence limit on Tr rho^2 = 2 P(symmetric) - 1, between 0 and 1.

    It is 0 when even the upper limit on P(symmetric) is below 1/2, which no state has.

    Examples
    --------
    >>> round(purity_upper_bound(50, 100, error=0.025), 6)
    0.203358
    """
    return min(1.0, max(0.0, 2.0 * clopper_pearson_upper(symmetric, trials, error=error) - 1.0 + _SLACK))

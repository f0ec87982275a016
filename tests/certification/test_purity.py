"""Confidence limits on the purity from swap outcomes."""

import math

import pytest

from entropest.certification.purity import purity_lower_bound, purity_upper_bound


@pytest.mark.parametrize("purity", [0.3, 0.5, 0.9, 1.0])
def test_purity_limits_miss_with_at_most_the_stated_error(purity):
    """Exact size over all tallies of 40 pairs."""
    probability = (1 + purity) / 2
    for error in (0.05, 0.2):
        too_high = too_low = 0.0
        for x in range(41):
            weight = math.comb(40, x) * probability**x * (1 - probability) ** (40 - x)
            too_high += weight * (purity_lower_bound(x, 40, error=error) > purity)
            too_low += weight * (purity_upper_bound(x, 40, error=error) < purity)
        assert too_high <= error
        assert too_low <= error

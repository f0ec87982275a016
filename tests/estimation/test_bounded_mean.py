"""Confidence limits for means of bounded observations."""

import numpy as np
import pytest
from scipy.stats import binom

from entropest.errors import ArgumentValueError
from entropest.estimation.bounded_mean import Tallies, betting_fractions, mean_lower_limit


def tallies(values, counts, weight=1.0):
    return Tallies(values=np.array(values, dtype=float), counts=np.array(counts), weight=weight)


def plain_evidence(parts, mean, least):
    """The average product, one factor at a time."""
    total = sum(int(part.counts.sum()) for part in parts)
    products = []
    for fraction in betting_fractions((1.2, 2.5, 5.0), total):
        product = 1.0
        for part in parts:
            for value, count in zip(part.values, part.counts, strict=True):
                product *= (1.0 + fraction * part.weight * (value - mean) / (mean - least)) ** int(count)
        products.append(product)
    return float(np.mean(products))


def test_the_limit_is_where_the_evidence_reaches_its_threshold():
    parts = [tallies([1.0, 0.0, -0.5], [30, 12, 3]), tallies([1.0, 0.25], [5, 7], 0.5)]
    limit = mean_lower_limit(parts, least=-1.0, most=1.0, error=0.05)
    assert plain_evidence(parts, limit, -1.0) == pytest.approx(20.0, rel=1e-6)


@pytest.mark.parametrize("probability", [0.5, 0.9, 0.98, 0.999])
@pytest.mark.parametrize("trials", [8, 60, 500])
def test_coverage_is_exact_for_two_valued_observations(trials, probability):
    """Summed over all outcomes, not simulated: the limit exceeds the mean with probability at most the error."""
    outcomes = np.arange(trials + 1)
    limits = np.array(
        [mean_lower_limit([tallies([1.0, -1.0], [k, trials - k])], least=-1.0, most=1.0, error=0.05) for k in outcomes]
    )
    assert (np.diff(limits) >= -1e-9).all()
    missed = binom.pmf(outcomes, trials, probability)[limits > 2 * probability - 1].sum()
    assert missed <= 0.05


def test_limits_fall_with_the_confidence_and_close_in_with_the_record():
    one = [tallies([1.0, -1.0], [90, 10])]
    limits = [mean_lower_limit(one, least=-1.0, most=1.0, error=error) for error in (0.2, 0.1, 0.05, 0.01, 1e-6)]
    assert limits == sorted(limits, reverse=True)
    more = [tallies([1.0, -1.0], [9000, 1000])]
    assert limits[2] < mean_lower_limit(more, least=-1.0, most=1.0, error=0.05) < 0.8


def test_observations_that_do_not_vary():
    """Ones alone: the limit is within 2 log(4/error)/(0.9 N) of 1, as for a bet of 0.9 on the ratio (1 - mu)/2."""
    limit = mean_lower_limit([tallies([1.0], [1000])], least=-1.0, most=1.0, error=0.025)
    assert 1 - 2.1 * np.log(160) / 900 < limit < 1.0
    assert mean_lower_limit([tallies([-1.0], [1000])], least=-1.0, most=1.0, error=0.025) == pytest.approx(-1.0)


def test_errors_outside_the_unit_interval_are_refused():
    with pytest.raises(ArgumentValueError, match="error must lie strictly between 0 and 1"):
        mean_lower_limit([tallies([1.0], [3])], least=-1.0, most=1.0, error=1.0)

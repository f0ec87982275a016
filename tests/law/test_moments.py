"""Mean and covariance of the rows: exact sums, limits, and which of them was used."""

import numpy as np
import pytest

from entropest.errors import MemoryBudgetError
from entropest.law.moments import is_cheap
from entropest.law.schur_weyl import SchurWeyl
from entropest.spectra import geometric, maximally_mixed
from tests.law.spectra_for_tests import DEGENERATE

EXACT = "exact sum over all shapes"
DISTINCT = "limit for distinct eigenvalues"
GROUPS = "limit for groups of equal eigenvalues"
SURROGATE = "Gaussian surrogate"


@pytest.mark.parametrize("name", DEGENERATE)
def test_exact_moments_are_those_of_the_table(name):
    law = SchurWeyl(DEGENERATE[name], 9)
    moments, table = law.moments(), law.table()
    assert (moments.method, moments.approximate) == (EXACT, False)
    assert moments.mean == pytest.approx(table.mean(), rel=1e-12, abs=1e-14)
    assert moments.cov == pytest.approx(table.cov(), rel=1e-9, abs=1e-11)
    assert not moments.mean_error.any()


def test_more_eigenvalues_than_copies():
    law = SchurWeyl([1 / 7] * 7, 3)
    assert law.mean() == pytest.approx(law.table().mean(), rel=1e-12)
    assert law.cov() == pytest.approx(law.table().cov(), abs=1e-12)


def test_mean_and_cov_are_kept_with_their_method():
    law = SchurWeyl([0.6, 0.3, 0.1], 10**9)
    assert law.moments() is law.moments()
    assert law.mean() is law.moments().mean
    assert law.cov() is law.moments().cov
    assert law.moments(exact=False) is not law.moments()


@pytest.mark.parametrize("spectrum", [[0.6, 0.3, 0.1], [0.8, 0.2], geometric(3, 0.3), [0.7, 0.3, 0.0]])
def test_limit_for_distinct_eigenvalues(spectrum):
    law = SchurWeyl(spectrum, 1000)
    exact, limit = law.moments(exact=True), law.moments(exact=False)
    assert (limit.method, limit.approximate) == (DISTINCT, True)
    assert limit.mean == pytest.approx(exact.mean, abs=0.01)
    assert limit.cov == pytest.approx(exact.cov, abs=0.03 * exact.cov.max())


@pytest.mark.parametrize(
    ("spectrum", "copies"),
    [(maximally_mixed(2), 800), (maximally_mixed(3), 800), (maximally_mixed(4), 200), ([0.45, 0.45, 0.1, 0.0], 800)],
)
def test_limit_for_groups_of_equal_eigenvalues(spectrum, copies):
    """The mean is within 0.6 boxes; the covariance is sampled, and approached like 1/sqrt(n)."""
    law = SchurWeyl(spectrum, copies)
    exact, limit = law.moments(exact=True), law.moments(exact=False)
    assert limit.method == GROUPS
    assert limit.mean == pytest.approx(exact.mean, abs=0.6)
    assert limit.mean.sum() == pytest.approx(copies, abs=1e-9)
    assert limit.cov == pytest.approx(exact.cov, abs=0.15 * exact.cov.max())


def test_distance_from_the_group_limit_falls_with_the_copies():
    distances = []
    for copies in (10_000, 1_000_000):
        law = SchurWeyl([0.5, 0.5], copies)
        difference = law.moments(exact=False).mean - law.moments(exact=True).mean
        distances.append(abs(difference[0]))
    assert distances[1] < 0.2 * distances[0] < 0.002


@pytest.mark.parametrize(
    ("spectrum", "copies"), [([0.4, 0.39, 0.21], 800), ([0.51, 0.49], 800), ([0.28, 0.26, 0.24, 0.22], 200)]
)
def test_surrogate_between_ties_and_distinct_eigenvalues(spectrum, copies):
    """Its mean is within five standard errors and 0.6 boxes (the false-alarm rate of five errors is below 1e-6)."""
    law = SchurWeyl(spectrum, copies)
    exact, limit = law.moments(exact=True), law.moments(exact=False)
    assert limit.method == SURROGATE
    assert (abs(limit.mean - exact.mean) <= 5 * limit.mean_error + 0.6).all()
    assert (limit.mean_error > 0.0).all()
    assert limit.cov == pytest.approx(exact.cov, abs=0.15 * exact.cov.max())
    assert np.array_equal(limit.mean, law.moments(exact=False).mean)


def test_limits_are_used_only_where_the_sum_is_long():
    assert SchurWeyl(maximally_mixed(2), 10**6).moments().method == EXACT
    assert SchurWeyl(maximally_mixed(3), 500).moments().method == EXACT
    assert SchurWeyl(maximally_mixed(4), 10**6).moments().method == GROUPS
    assert SchurWeyl([1.0, 0.0], 10**15).moments().method == EXACT
    assert not is_cheap(10**9, 16)


def test_pure_states_do_not_fluctuate():
    moments = SchurWeyl([1.0, 0.0], 10**15).moments()
    assert moments.mean.tolist() == [10**15, 0]
    assert not moments.cov.any()
    limit = SchurWeyl([1.0, 0.0], 100).moments(exact=False)
    assert limit.mean.tolist() == [100, 0]
    assert not limit.cov.any()


def test_exact_sums_beyond_memory_are_refused():
    with pytest.raises(MemoryBudgetError, match="rank 16"):
        SchurWeyl(maximally_mixed(16), 10**5).moments(exact=True)

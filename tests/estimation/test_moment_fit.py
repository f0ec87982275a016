"""The spectrum that matches unbiased power sums."""

import numpy as np
import pytest

from entropest.errors import NotCoveredError
from entropest.estimation.moment_fit import MomentFit
from entropest.estimation.spectrum_search import nearest_spectrum, power_sums_of
from entropest.functionals import PowerSum, RelativeEntropy, VonNeumann
from entropest.law.schur_weyl import SchurWeyl
from entropest.records import DiagramCounts
from entropest.spectra import geometric, maximally_mixed


def expected_record(spectrum, size, blocks):
    """Tallies equal to their means, rounded."""
    table = SchurWeyl(spectrum, size).table()
    tallies = np.round(blocks * table.probabilities).astype(int)
    return DiagramCounts.from_rows(table.shapes, counts=tallies, dim=len(spectrum))


@pytest.mark.parametrize("spectrum", [geometric(3, 0.5), np.array([0.4, 0.4, 0.2]), maximally_mixed(3)])
def test_expected_tallies_give_the_spectrum_back(spectrum):
    """Power sums of orders 2 and 3 fix three eigenvalues; at ties a shift of 1e-8 in them moves these by 1e-4."""
    fitted = MomentFit().spectrum(expected_record(spectrum, 4, 10**9))
    assert fitted == pytest.approx(spectrum, abs=2e-3)


def test_power_sums_are_matched_where_a_spectrum_has_them():
    counts = DiagramCounts({"2": 70, "1+1": 30}, dim=3)
    assert PowerSum(2)(MomentFit().spectrum(counts)) == pytest.approx(0.4, abs=1e-6)
    single = DiagramCounts({"600+300+100": 1}, dim=3)
    fitted = MomentFit().spectrum(single)
    assert VonNeumann()(fitted) == pytest.approx(0.9, abs=0.03)
    assert fitted.sum() == pytest.approx(1.0)


def test_several_large_blocks_are_averaged():
    one = DiagramCounts({"600+300+100": 3}, dim=3)
    other = DiagramCounts({"600+300+100": 1}, dim=3)
    assert MomentFit().spectrum(one) == pytest.approx(MomentFit().spectrum(other), abs=1e-4)


def test_search_ends_at_a_stationary_point():
    """No random spectrum near the one found is closer to impossible power sums."""
    orders, values = np.array([2.0, 3.0]), np.array([0.5, 0.2])
    found, distance = nearest_spectrum(orders, values, np.eye(2), np.array([0.5, 0.3, 0.2]))
    assert distance == pytest.approx(np.linalg.norm(power_sums_of(found, orders) - values))
    rng = np.random.default_rng(5)
    for _ in range(300):
        near = np.abs(found + 1e-3 * rng.normal(size=3))
        near /= near.sum()
        assert np.linalg.norm(power_sums_of(near, orders) - values) >= distance - 1e-9


def test_small_and_pure_records():
    assert MomentFit().spectrum(DiagramCounts({"1": 5}, dim=3)).tolist() == [1.0, 0.0, 0.0]
    assert MomentFit()(DiagramCounts({"5": 1}, dim=3)) == pytest.approx(0.0, abs=1e-5)
    assert MomentFit()(DiagramCounts({"7": 1}, dim=1)) == 0.0
    assert MomentFit(RelativeEntropy(maximally_mixed(4)))(DiagramCounts({"9+3": 1}, dim=4)) > 0.0
    with pytest.raises(NotCoveredError, match="64"):
        MomentFit()(DiagramCounts({"2": 1}, dim=65))

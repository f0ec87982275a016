"""The range of entropies at exactly known power sums, from both sides."""

import json
import math

import numpy as np
import pytest

from entropest.errors import ArgumentValueError, NotCoveredError
from entropest.estimation.identified import entropy_range_from_purity
from entropest.estimation.inner_range import identified_range, identified_range_of
from entropest.functionals import VonNeumann
from entropest.law.schur_weyl import SchurWeyl
from entropest.records import DiagramCounts
from entropest.spectra import geometric, low_rank, maximally_mixed, power_law, random_reduced, spiked


def sums(p, top):
    return [float((p**j).sum()) for j in range(2, top + 1)]


@pytest.mark.parametrize("dim", [4, None])
def test_order_two_is_the_closed_form_reached_by_spectra(dim):
    """Source: Harremoes and Topsoe 2001; .980132210439 and 1.13395903446 at purity .4, d = 4."""
    found = identified_range([0.4], dim)
    assert found.outer == entropy_range_from_purity(0.4, dim)
    assert found.inner.lower == pytest.approx(0.980132210439, abs=1e-6)
    if dim is not None:
        assert found.inner.upper == pytest.approx(1.13395903446, abs=1e-6)
    assert found.gap.lower < 1e-6 > found.gap.upper


SPECTRA = [geometric(4, 0.5), spiked(5, 0.5), low_rank(5, 3), power_law(6, 1.0), random_reduced(5, 5, rng=1)]


@pytest.mark.parametrize("spectrum", SPECTRA, ids=["geometric", "spiked", "low rank", "power law", "random"])
@pytest.mark.parametrize("top", [3, 5])
def test_both_ranges_hold_the_entropy_and_are_nested(spectrum, top):
    """The spectrum itself has these power sums: the outer range holds it, and the explicit spectra have them too."""
    entropy = VonNeumann()(spectrum)
    found = identified_range(sums(spectrum, top), len(spectrum))
    assert found.outer.lower - 1e-7 <= found.inner.lower <= entropy + 1e-6
    assert entropy - 1e-6 <= found.inner.upper <= found.outer.upper + 1e-7
    for reached, end in ((found.lowest, found.inner.lower), (found.highest, found.inner.upper)):
        assert sums(reached, top) == pytest.approx(sums(spectrum, top), rel=1e-7)
        assert reached.sum() == pytest.approx(1.0, abs=1e-7)
        assert VonNeumann()(reached) == pytest.approx(end)


def test_three_eigenvalues_are_fixed_by_two_power_sums():
    p = np.array([0.5, 0.3, 0.2])
    found = identified_range(sums(p, 3), 3)
    assert found.lowest == pytest.approx(p, abs=1e-6)
    assert found.highest == pytest.approx(p, abs=1e-6)


def test_no_dimension_no_upper_end():
    found = identified_range(sums(geometric(4, 0.5), 3))
    assert found.inner.upper == found.outer.upper == math.inf
    assert found.highest is None
    assert found.gap.upper == 0.0
    content = json.loads(json.dumps(found.to_dict()))
    assert content["inner"][1] is None
    assert "by explicit spectra" in str(found)


def test_a_finer_set_of_power_sums_narrows_both_ranges():
    p = geometric(6, 0.6)
    coarse, fine = identified_range(sums(p, 3), 6), identified_range(sums(p, 5), 6)
    assert fine.outer.upper - fine.outer.lower < coarse.outer.upper - coarse.outer.lower
    assert fine.inner.upper - fine.inner.lower < coarse.inner.upper - coarse.inner.lower


def test_wrong_or_impossible_power_sums_are_refused():
    with pytest.raises(ArgumentValueError, match="1 to 5 numbers"):
        identified_range([])
    with pytest.raises(ArgumentValueError, match="lie in"):
        identified_range([0.5, 0.0])
    with pytest.raises(NotCoveredError, match="no spectrum of 3 eigenvalues"):
        identified_range([0.5, 0.1], 3)
    with pytest.raises(NotCoveredError, match="up to 32"):
        identified_range([0.5], 33)
    assert identified_range(sums(maximally_mixed(3), 3), 3).inner.lower == pytest.approx(math.log(3))


def test_range_of_a_record_pools_its_block_sizes():
    """Tallies equal to their means: the range is that of the true power sums."""
    p = geometric(3, 0.5)
    parts = []
    for size in (2, 3):
        table = SchurWeyl(p, size).table()
        tallies = np.round(1e9 * table.probabilities).astype(int)
        parts.append(DiagramCounts.from_rows(table.shapes, counts=tallies, dim=3))
    both = identified_range_of(parts[0] + parts[1])
    assert both.inner.lower == pytest.approx(VonNeumann()(p), abs=1e-4)
    pairs = identified_range_of(parts[0] + parts[1], largest=2)
    assert pairs.outer.lower == pytest.approx(entropy_range_from_purity(sums(p, 2)[0], 3).lower, abs=1e-4)
    assert pairs.inner.upper - pairs.inner.lower > both.inner.upper - both.inner.lower
    with pytest.raises(NotCoveredError, match="one copy"):
        identified_range_of(DiagramCounts({"1": 4}, dim=3))

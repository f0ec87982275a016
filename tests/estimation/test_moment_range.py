"""Power sums of a record, and the range of entropies that they allow."""

import math
from itertools import pairwise, product

import numpy as np
import pytest
from scipy.stats import binom

from entropest.diagrams import YoungDiagram, cycle_character
from entropest.errors import NotCoveredError
from entropest.estimation.identified import entropy_range_from_purity
from entropest.estimation.moment_range import entropy_range_from_moments
from entropest.estimation.moments import pooled_moments, power_sum_limits
from entropest.functionals import PowerSum, VonNeumann
from entropest.law.schur_weyl import SchurWeyl
from entropest.records import DiagramCounts
from entropest.spectra import geometric, low_rank, maximally_mixed

MIXED = DiagramCounts({"2": 30, "1+1": 12, "3+1": 9, "4": 11, "2+1+1": 1, "5+1": 3, "1": 7}, dim=4)
SPECTRA = {
    "uniform qubit": maximally_mixed(2),
    "uniform qutrit": maximally_mixed(3),
    "geometric": geometric(4, 0.5),
    "rank 2 of 4": low_rank(4, 2),
    "pure": low_rank(3, 1),
    "nearly pure": np.array([0.99, 0.005, 0.005]),
}


def drawn(spectrum, size, blocks, rng):
    """Tallies of a record drawn from the exact law of one block."""
    table = SchurWeyl(spectrum, size).table()
    counts = rng.multinomial(blocks, table.probabilities / table.probabilities.sum())
    rows = {YoungDiagram(row.tolist()): int(count) for row, count in zip(table.shapes, counts, strict=True) if count}
    return DiagramCounts(rows, dim=len(spectrum))


def test_moments_weight_blocks_by_their_copies():
    """A plain loop over blocks of at least j copies."""
    moments = pooled_moments(MIXED)
    assert moments.order == 6
    assert moments.blocks == MIXED.blocks - 7
    for order in range(2, 7):
        blocks = [(d, count) for d, count in MIXED.items() if d.size >= order]
        copies = sum(d.size * count for d, count in blocks)
        mean = sum(d.size * count * float(cycle_character(d, order)) for d, count in blocks) / copies
        assert moments.values[order] == pytest.approx(mean, abs=1e-14)


def test_moments_are_unbiased_and_their_covariance_is_right():
    """Exact enumeration of 3 blocks of 2 and 2 of 3 copies; the stated covariance is conservative on average."""
    spectrum = np.array([0.6, 0.3, 0.1])
    pairs, triples = SchurWeyl(spectrum, 2).table(), SchurWeyl(spectrum, 3).table()
    mean, square, stated = np.zeros(4), np.zeros((4, 4)), np.zeros((4, 4))
    for chosen in product(range(2), range(2), range(2), range(3), range(3)):
        rows = [pairs.shapes[i] for i in chosen[:3]] + [triples.shapes[i] for i in chosen[3:]]
        chance = math.prod(pairs.probabilities[list(chosen[:3])]) * math.prod(triples.probabilities[list(chosen[3:])])
        moments = pooled_moments(DiagramCounts.from_rows(np.array(rows), dim=3))
        mean += chance * moments.values
        square += chance * np.outer(moments.values, moments.values)
        stated += chance * moments.covariance
    assert mean[2:] == pytest.approx([PowerSum(2)(spectrum), PowerSum(3)(spectrum)])
    true = square - np.outer(mean, mean)
    assert (np.diag(true)[2:] <= np.diag(stated)[2:]).all()


def test_limits_of_pairs_are_the_binomial_ones(check_values):
    """Source of the binomial limits: Clopper and Pearson 1934, in check_values.json."""
    low, high = check_values("Clopper-Pearson 95% intervals for x of 100")["5"]
    found = power_sum_limits(DiagramCounts({"2": 95, "1+1": 5}), 2, error=0.05)
    assert found.lower == pytest.approx(1 - 2 * high, abs=2e-7)
    assert found.upper == pytest.approx(1 - 2 * low, abs=2e-7)


def test_limits_of_triples_are_binomial_too():
    """T_3 is 1 for 3 and 1+1+1 and -1/2 for 2+1: summed over all outcomes the limits miss at most 5%."""
    probability = 16 / 27
    table = SchurWeyl(maximally_mixed(3), 3).table()
    assert table.probabilities[1] == pytest.approx(probability)
    covered = 0.0
    for hits in range(41):
        rows = {"2+1": hits, "3": 40 - hits}
        found = power_sum_limits(DiagramCounts({k: v for k, v in rows.items() if v}), 3, error=0.05)
        covered += binom.pmf(hits, 40, probability) * (found.lower <= 1 / 9 <= found.upper)
    assert covered >= 0.95


def test_limits_of_mixed_sizes_hold_the_estimate():
    found = power_sum_limits(MIXED, 3, error=0.05)
    assert found.lower < pooled_moments(MIXED).values[3] < found.upper
    with pytest.raises(NotCoveredError, match=r"Tr rho\^7 needs blocks of at least 7 copies, got 6"):
        power_sum_limits(MIXED, 7, error=0.05)


def test_single_copies_say_nothing():
    with pytest.raises(NotCoveredError, match="blocks of one copy say nothing"):
        pooled_moments(DiagramCounts({"1": 5}))


def test_pairs_use_the_exact_range_between_the_limits():
    record = DiagramCounts.from_swap(symmetric=2100, antisymmetric=900, dim=4)
    found = entropy_range_from_moments(record, confidence=0.95)
    purity = power_sum_limits(record, 2, error=0.05)
    assert found.interval.lower == pytest.approx(entropy_range_from_purity(purity.upper, 4).lower)
    assert found.interval.upper == pytest.approx(entropy_range_from_purity(purity.lower, 4).upper)
    at_estimate = entropy_range_from_purity(0.4, 4)
    assert (found.compatible.lower, found.compatible.upper) == pytest.approx((at_estimate.lower, at_estimate.upper))


@pytest.mark.parametrize("purity", [0.25, 0.3, 0.5, 0.9, 0.998])
def test_coverage_of_pairs_is_exact(purity):
    """All outcomes of 150 pairs: both ends of the range of that purity are inside with 95%."""
    spectrum_range = entropy_range_from_purity(purity, 4)
    covered = 0.0
    for antisymmetric in range(151):
        tallies = {"2": 150 - antisymmetric, "1+1": antisymmetric}
        record = DiagramCounts({k: v for k, v in tallies.items() if v}, dim=4)
        found = entropy_range_from_moments(record, confidence=0.95).interval
        inside = found.lower <= spectrum_range.lower + 1e-9 and spectrum_range.upper - 1e-9 <= found.upper
        covered += inside * binom.pmf(antisymmetric, 150, (1 - purity) / 2)
    assert covered >= 0.95


@pytest.mark.parametrize("size", [3, 4, 6])
@pytest.mark.parametrize("name", list(SPECTRA))
def test_coverage_of_larger_blocks(name, size):
    """60 records of 120 blocks at 90%: with the guaranteed coverage 15 misses or more have probability 7e-4
    a case, so one of the 18 cases fails by chance with probability 0.013 at the most (the limits are wider)."""
    rng = np.random.default_rng(17)
    spectrum = SPECTRA[name]
    entropy = VonNeumann()(spectrum)
    misses = 0
    for _ in range(60):
        found = entropy_range_from_moments(drawn(spectrum, size, 120, rng), confidence=0.9).interval
        misses += not found.lower - 1e-9 <= entropy <= found.upper + 1e-9
    assert misses < 15


def test_larger_blocks_narrow_the_range():
    """Records at their expected frequencies, so nothing is random: 6,000 copies of the geometric state."""
    widths = []
    for size in (2, 3, 4, 6):
        table = SchurWeyl(geometric(4, 0.5), size).table()
        blocks = np.rint(table.probabilities * 60000 / size).astype(int)
        record = DiagramCounts(
            {YoungDiagram(r.tolist()): int(c) for r, c in zip(table.shapes, blocks, strict=True) if c}, dim=4
        )
        found = entropy_range_from_moments(record, confidence=0.95)
        assert found.interval.lower <= found.compatible.lower <= found.compatible.upper <= found.interval.upper
        widths.append(found.interval.upper - found.interval.lower)
    assert widths[0] > widths[2] > widths[3]


def test_intervals_grow_with_the_confidence_and_need_no_dimension_below():
    for record in (MIXED, DiagramCounts({"2": 50, "1+1": 10}, dim=3), DiagramCounts({"4": 50, "3+1": 30}, dim=4)):
        found = [entropy_range_from_moments(record, confidence=c).interval for c in (0.5, 0.8, 0.95, 0.999)]
        assert all(a.lower >= b.lower for a, b in pairwise(found))
        assert all(a.upper <= b.upper for a, b in pairwise(found))
    without = DiagramCounts({"4": 50, "3+1": 30})
    assert entropy_range_from_moments(without, confidence=0.95).interval.lower == found[2].lower
    assert entropy_range_from_moments(without, confidence=0.95).interval.upper == math.inf

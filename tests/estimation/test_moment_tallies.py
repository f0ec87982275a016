"""Answers from cyclic-shift tests."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import binom

from entropest.errors import ArgumentTypeError, ArgumentValueError, NotCoveredError
from entropest.estimation import estimate
from entropest.estimation.identified import Range, entropy_range_from_purity
from entropest.estimation.moment_tallies import entropy_range_in_box, estimate_together, filled_box, shift_limits
from entropest.functionals import MinEntropy, PowerSum, Renyi, Tsallis, VonNeumann
from entropest.records import DiagramCounts, MomentCounts
from entropest.spectra import as_spectrum, geometric

RECORD = MomentCounts({2: (700, 300), 3: (600, 400)}, dim=4)
spectra = st.lists(st.floats(0.0, 1.0), min_size=1, max_size=6).filter(lambda v: sum(v) > 0.1)


def box_of(p, orders, width=0.0):
    sums = {k: float((p**k).sum()) for k in orders}
    return {k: Range(lower=max(0.0, v - width), upper=v + width) for k, v in sums.items()}


def test_limits_are_those_of_clopper_and_pearson():
    """Source: the 95% interval for 5 of 100 (Clopper and Pearson 1934, any handbook) is .0164319 .. .1128349."""
    found = shift_limits(MomentCounts({3: (95, 5)}), 3, error=0.05)
    assert found.lower == pytest.approx(1 - 2 * 0.1128349, abs=1e-6)
    assert found.upper == pytest.approx(1 - 2 * 0.0164319, abs=1e-6)


def test_intervals_cover_by_exact_enumeration():
    """Every outcome of 25 tests: the chance that the limits miss is at most the error."""
    for p in (np.array([0.5, 0.5]), np.array([0.9, 0.06, 0.04])):
        truth = float((p**3).sum())
        chance = binom.pmf(np.arange(26), 25, 0.5 * (1 + truth))
        missed = 0.0
        for plus in range(26):
            low, high = estimate(MomentCounts({3: (plus, 25 - plus)}, dim=len(p)), PowerSum(3), confidence=0.9).interval
            missed += chance[plus] * (not low <= truth <= high)
        assert missed <= 0.1


@settings(max_examples=60)
@given(spectra, st.sets(st.integers(2, 9), min_size=1, max_size=3), st.sampled_from([0.0, 0.01, 0.1]))
def test_filled_box_holds_the_power_sums_and_the_range_the_entropy(values, orders, width):
    p = as_spectrum(values, normalize=True)
    box = filled_box(box_of(p, orders, width), len(p))
    for order, limits in box.items():
        assert limits.lower - 1e-12 <= float((p**order).sum()) <= limits.upper + 1e-12
    entropy = VonNeumann()(p)
    for dim in (len(p), None):
        found = entropy_range_in_box(box, dim)
        assert found.lower - 1e-9 <= entropy <= found.upper + 1e-9


def test_range_from_purity_alone_is_the_closed_form():
    """Source: Harremoes and Topsoe 2001."""
    box = {2: Range(lower=0.4, upper=0.4)}
    assert entropy_range_in_box(box, 4) == entropy_range_from_purity(0.4, 4)


def test_further_orders_narrow_the_range():
    p = geometric(4, 0.5)
    widths = []
    for top in (2, 3, 4, 6):
        found = entropy_range_in_box(filled_box(box_of(p, range(2, top + 1)), 4), 4)
        widths.append(found.upper - found.lower)
    assert widths == sorted(widths, reverse=True)
    assert widths[-1] < 0.05 * widths[0]


def test_values_of_measured_orders():
    assert estimate(RECORD, PowerSum(2)).value == pytest.approx(0.4)
    assert estimate(RECORD, Renyi(3)).value == pytest.approx(-math.log(0.2) / 2)
    assert estimate(RECORD, Renyi(2), base=2).value == pytest.approx(-math.log2(0.4))
    found = estimate(RECORD, Tsallis(2))
    assert found.value == pytest.approx(0.6)
    assert found.standard_error == pytest.approx(math.sqrt(0.84 / 1000))
    assert (found.copies, found.blocks, found.method) == (5000, 2000, "power sum")


def test_pairs_of_both_kinds_give_the_same_interval():
    for functional in (PowerSum(2), Renyi(2)):
        one = estimate(MomentCounts({2: (700, 300)}, dim=4), functional)
        other = estimate(DiagramCounts.from_swap(symmetric=700, antisymmetric=300, dim=4), functional)
        assert one.value == pytest.approx(other.value)
        assert one.interval == pytest.approx(other.interval)


def test_entropy_is_a_range():
    found = estimate(RECORD)
    assert found.value is None
    assert found.interval[0] < VonNeumann()([0.55, 0.15, 0.15, 0.15]) < found.interval[1]
    assert not found.identified
    assert estimate(MomentCounts({2: (70, 30)}, dim=2)).identified
    assert estimate(MomentCounts({2: (700, 300)})).interval[1] == math.inf
    wide, narrow = (estimate(RECORD, confidence=c).interval for c in (0.99, 0.9))
    assert wide[0] < narrow[0] < narrow[1] < wide[1]


def test_no_or_contradicting_power_sums_are_said():
    assert estimate(MomentCounts({2: (50, 50)}), Renyi(2)).value is None
    with pytest.raises(NotCoveredError, match="contradict each other at order 2"):
        estimate(MomentCounts({2: (5000, 5000), 3: (9000, 1000)}))
    with pytest.raises(NotCoveredError, match="do not give the Renyi entropy of order 4"):
        estimate(RECORD, Renyi(4))
    with pytest.raises(NotCoveredError, match="orders 2, 3"):
        estimate(RECORD, MinEntropy())
    with pytest.raises(NotCoveredError, match="auto"):
        estimate(RECORD, method="plug-in")


def test_together_with_diagrams():
    pairs = DiagramCounts.from_swap(symmetric=2100, antisymmetric=900, dim=4)
    tests = MomentCounts({2: (690, 310), 3: (600, 400)})
    both = estimate_together(tests, pairs, PowerSum(2))
    assert both.value == pytest.approx((3000 * 0.4 + 1000 * 0.38) / 4000)
    assert both.copies == 6000 + 5000
    narrow = estimate_together(tests, pairs).interval
    wide = estimate(MomentCounts({2: (690, 310), 3: (600, 400)}, dim=4)).interval
    assert wide[0] < narrow[0] < narrow[1] < wide[1]
    only_tests = estimate_together(tests, pairs, PowerSum(3))
    assert only_tests.interval == pytest.approx(estimate(tests, PowerSum(3)).interval)
    assert estimate_together(tests, pairs, base=2).interval[0] == pytest.approx(narrow[0] / math.log(2))


def test_together_refuses_what_does_not_belong_together():
    pairs = DiagramCounts.from_swap(symmetric=2100, antisymmetric=900, dim=4)
    with pytest.raises(ArgumentValueError, match="same dim, got 3 and 4"):
        estimate_together(MomentCounts({2: (1, 1)}, dim=3), pairs)
    with pytest.raises(ArgumentTypeError, match="MomentCounts and DiagramCounts"):
        estimate_together(pairs, pairs)
    with pytest.raises(ArgumentTypeError, match="functional"):
        estimate_together(RECORD, pairs, "entropy")
    with pytest.raises(NotCoveredError, match="contradict"):
        estimate_together(MomentCounts({2: (9900, 100)}), pairs, PowerSum(2))

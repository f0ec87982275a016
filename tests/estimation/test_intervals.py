"""Intervals from large blocks: exact coverage by enumeration, coverage by simulation, and their properties."""

import math

import numpy as np
import pytest

from entropest.estimation import estimate
from entropest.estimation.quantiles import copies_scale, inflated_quantile
from entropest.functionals import (
    ChiSquare,
    MinEntropy,
    PowerSum,
    RelativeEntropy,
    Renyi,
    TraceDistance,
    Tsallis,
    Varentropy,
    VonNeumann,
)
from entropest.law.schur_weyl import SchurWeyl
from entropest.records import DiagramCounts
from entropest.spectra import geometric, low_rank, maximally_mixed, power_law, spiked


def single(row, dim):
    return DiagramCounts({tuple(int(x) for x in row if x): 1}, dim=dim)


def exact_coverage(functional, copies, spectra, confidence=0.95):
    """Probability that the interval of one diagram holds the truth, summed over all diagrams; least over spectra."""
    dim = len(spectra[0])
    shapes = SchurWeyl(maximally_mixed(dim), copies).table().shapes
    intervals = np.array([estimate(single(row, dim), functional, confidence=confidence).interval for row in shapes])
    coverages = []
    for spectrum in spectra:
        table = SchurWeyl(spectrum, copies).table()
        known = dict(zip(map(tuple, table.shapes.tolist()), table.probabilities, strict=True))
        truth = functional(spectrum)
        inside = (intervals[:, 0] <= truth + 1e-10) & (truth - 1e-10 <= intervals[:, 1])
        coverages.append(sum(known.get(tuple(row), 0.0) for row in shapes[inside].tolist()))
    return min(coverages)


def qubits(copies):
    """Second eigenvalues seen about once and more often, near ties and ties."""
    seconds = {*np.array([0.1, 0.5, 1.0, 1.7, 2.3, 2.8, 3.4, 3.8, 4.4, 5.4, 7.0, 9.0]) / copies}
    seconds |= {0.0, 0.1, 0.14, 0.17, 0.2, 0.24, 0.28, 0.33, 0.37, 0.42, 0.47, 0.49, 0.5}
    return [np.array([1 - q, q]) for q in sorted(seconds) if q <= 0.5]


@pytest.mark.parametrize("copies", [20, 26, 57, 130])
@pytest.mark.parametrize(
    "functional",
    [VonNeumann(), Renyi(0.5), Renyi(2), Renyi(5), Tsallis(3), PowerSum(2), Varentropy(), MinEntropy()],
    ids=repr,
)
def test_coverage_at_qubits_is_exact(functional, copies):
    """At least the nominal 95% at 25 spectra, nothing simulated."""
    assert exact_coverage(functional, copies, qubits(copies)) >= 0.95


@pytest.mark.parametrize("reference", [(0.5, 0.5), (0.9, 0.1), (0.7, 0.3)])
@pytest.mark.parametrize("make", [RelativeEntropy, ChiSquare, TraceDistance])
def test_coverage_of_divergences_at_qubits_is_exact(make, reference):
    spectra = [*qubits(40), np.array(reference)]
    assert exact_coverage(make(reference), 40, spectra) >= 0.95


@pytest.mark.parametrize("confidence", [0.5, 0.9, 0.99, 0.999])
def test_coverage_at_other_confidences(confidence):
    for copies in (20, 57, 200):
        assert exact_coverage(VonNeumann(), copies, qubits(copies), confidence) >= confidence


def test_coverage_at_qutrits_is_exact():
    spectra = [
        maximally_mixed(3),
        geometric(3, 0.5),
        np.array([0.36, 0.33, 0.31]),
        np.array([0.5, 0.5, 0.0]),
        np.array([0.9, 0.06, 0.04]),
        np.array([0.6, 0.38, 0.02]),
        np.array([0.95, 0.05, 0.0]),
    ]
    for copies in (20, 45):
        assert exact_coverage(VonNeumann(), copies, spectra) >= 0.95


@pytest.mark.parametrize(
    ("spectrum", "copies"),
    [
        (maximally_mixed(4), 50),
        (geometric(4, 0.5), 200),
        (low_rank(4, 2), 50),
        (maximally_mixed(8), 100),
        (geometric(8, 0.6), 1000),
        (spiked(8, 0.9), 50),
    ],
    ids=str,
)
def test_coverage_in_larger_dimensions(spectrum, copies):
    """200 draws a case: at the nominal 95% more than 22 misses have probability 1.4e-4 a case."""
    rows = SchurWeyl(spectrum, copies).rvs(200, rng=np.random.default_rng(5))
    truth = VonNeumann()(spectrum)
    found = [estimate(single(row, len(spectrum))).interval for row in rows]
    assert sum(not low - 1e-10 <= truth <= high + 1e-10 for low, high in found) <= 22


@pytest.mark.parametrize(
    ("spectrum", "copies"),
    [
        (maximally_mixed(24), 24),
        (maximally_mixed(32), 128),
        (power_law(32, 1), 64),
        (spiked(64, 0.9), 256),
        (geometric(32, 0.5), 20),
    ],
    ids=lambda value: str(len(value)) if isinstance(value, np.ndarray) else str(value),
)
def test_coverage_where_many_levels_hide(spectrum, copies):
    """Fewer rows than levels in many dimensions; 100 draws a case, more than 15 misses have probability 4e-5."""
    rows = SchurWeyl(spectrum, copies).rvs(100, rng=np.random.default_rng(13))
    truth = VonNeumann()(spectrum)
    found = [estimate(single(row, len(spectrum))).interval for row in rows]
    assert sum(not low - 1e-10 <= truth <= high + 1e-10 for low, high in found) <= 15


@pytest.mark.parametrize(("size", "blocks"), [(8, 5), (12, 20), (24, 40), (100, 5)])
@pytest.mark.parametrize("spectrum", [maximally_mixed(2), np.array([0.95, 0.05]), geometric(4, 0.5)], ids=str)
def test_coverage_of_several_blocks(spectrum, size, blocks):
    """60 records a case: at the nominal 95% more than 11 misses have probability 5e-5 a case."""
    rows = SchurWeyl(spectrum, size).rvs((60, blocks), rng=np.random.default_rng(11))
    truth = VonNeumann()(spectrum)
    found = [estimate(DiagramCounts.from_rows(record, dim=len(spectrum))).interval for record in rows]
    assert sum(not low - 1e-10 <= truth <= high + 1e-10 for low, high in found) <= 11


@pytest.mark.parametrize(
    "functional",
    [
        VonNeumann(),
        Renyi(0.5),
        Renyi(2),
        Renyi(6),
        PowerSum(3),
        Varentropy(),
        MinEntropy(),
        TraceDistance((0.5, 0.3, 0.2, 0)),
    ],
    ids=repr,
)
def test_intervals_grow_with_the_confidence(functional):
    for tallies in ({"60+30+10": 1}, {"100": 1}, {"25+25+25+25": 1}, {"20+10": 3, "25+5": 4}):
        record = DiagramCounts(tallies, dim=4)
        found = [estimate(record, functional, confidence=c) for c in (0.5, 0.8, 0.95, 0.99, 0.9999)]
        lows, highs = zip(*(e.interval for e in found), strict=True)
        assert list(lows) == sorted(lows, reverse=True)
        assert list(highs) == sorted(highs)


def test_intervals_shrink_as_expected_for_large_diagrams():
    """At n = 10^6 the width is 2 * 2.2 standard deviations sqrt(V/n), up to the bracket and skewness."""
    p = geometric(3, 0.5)
    rows = np.rint(p * 10**6).astype(int)
    found = estimate(DiagramCounts.from_rows([rows], dim=3))
    deviation = math.sqrt(Varentropy()(p) / rows.sum())
    assert found.standard_error == pytest.approx(deviation, rel=1e-3)
    assert found.interval[1] - found.interval[0] == pytest.approx(4.4 * deviation, rel=0.01)


def test_power_sums_of_one_order_have_one_interval():
    """Renyi, Tsallis and power sum of one order carry the same statement, also in other units."""
    record = DiagramCounts({"60+30+10": 1}, dim=4)
    for order in (0.5, 2.0, 4.5):
        low, high = estimate(record, PowerSum(order)).interval
        ends = sorted((1 - x) / (order - 1) for x in (low, high))
        assert estimate(record, Tsallis(order)).interval == pytest.approx(tuple(ends))
        ends = sorted(math.log(x) / (1 - order) for x in (low, high))
        assert estimate(record, Renyi(order)).interval == pytest.approx(tuple(ends))


def test_renyi_intervals_are_continuous_through_order_one():
    record = DiagramCounts({"60+30+10": 1}, dim=4)
    at_one = estimate(record)
    for order in (1, 1 + 1e-12, 1 + 1e-6):
        for make in (Renyi, Tsallis):
            found = estimate(record, make(order))
            expected = at_one if order == 1 else estimate(record, method="continuation")
            assert found.value == pytest.approx(expected.value, abs=1e-5)
            assert found.interval == pytest.approx(at_one.interval, abs=0.02)


def test_quantiles():
    """2.2 + 5/n at 95%; common practice for the normal quantile 2.5758 at 99%, no source."""
    assert inflated_quantile(0.95, 100) == pytest.approx(2.25)
    assert inflated_quantile(0.99, 100) == pytest.approx(2.25 * (2.5758293 / 1.9599640) ** 1.6)
    assert copies_scale(0.95) == pytest.approx(1.0)
    assert copies_scale(0.999) > copies_scale(0.99) > 1.0

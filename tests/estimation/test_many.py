"""Many diagrams at once: the same answers as one at a time, and the time they take."""

import math

import numpy as np
import pytest

from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.estimation import SplitPosterior, estimate, estimate_many
from entropest.functionals import VonNeumann
from entropest.law.schur_weyl import SchurWeyl
from entropest.records import DiagramCounts
from entropest.shapes import all_shapes
from entropest.spectra import as_spectrum, geometric, low_rank, maximally_mixed, power_law, spiked


def single(row, dim):
    return DiagramCounts({tuple(int(x) for x in row if x): 1}, dim=dim)


@pytest.mark.parametrize(
    ("spectrum", "copies"),
    [
        (maximally_mixed(2), 20),
        (geometric(3, 0.5), 57),
        (low_rank(4, 1), 30),
        (spiked(8, 0.9), 40),
        (geometric(8, 0.7), 1000),
        (power_law(20, 1), 60),
    ],
    ids=str,
)
@pytest.mark.parametrize("confidence", [0.95, 0.9])
def test_each_answer_is_that_of_a_single_estimate(spectrum, copies, confidence):
    d = len(spectrum)
    rows = SchurWeyl(spectrum, copies).rvs(12, rng=2)
    many = estimate_many(rows, dim=d, confidence=confidence)
    for k, row in enumerate(rows):
        one = estimate(single(row, d), confidence=confidence)
        assert many.values[k] == pytest.approx(one.value, abs=1e-7)
        assert many.intervals[k] == pytest.approx(one.interval, abs=1e-6)
        assert many.standard_errors[k] == pytest.approx(one.standard_error, rel=1e-5)
    assert (many.method, many.unit, many.confidence) == (one.method, one.unit, one.confidence)


def test_diagrams_may_differ_in_height_and_size():
    rows = [[60, 30, 10], [9, 0, 0], [40, 40, 0], [1, 1, 1], [1, 0, 0]]
    many = estimate_many(rows, dim=3)
    for value, row in zip(many.values, rows, strict=True):
        assert value == pytest.approx(SplitPosterior()(single(row, 3)), abs=1e-7)
    order = [3, 0, 4, 2, 1]
    assert np.array_equal(estimate_many(np.array(rows)[order], dim=3).intervals, many.intervals[order])


def test_an_unknown_dimension_leaves_the_upper_end_open():
    rows = [[60, 30, 10], [25, 5, 0]]
    many = estimate_many(rows)
    for k, row in enumerate(rows):
        one = estimate(single(row, None))
        assert many.values[k] == pytest.approx(one.value, abs=1e-7)
        assert many.intervals[k, 0] == pytest.approx(one.interval[0], abs=1e-6)
    assert (many.intervals[:, 1] == math.inf).all()


def test_units():
    nats, bits = estimate_many([[60, 30, 10]], dim=3), estimate_many([[60, 30, 10]], dim=3, base=2)
    assert bits.unit == "bit"
    assert bits.values * math.log(2) == pytest.approx(nats.values)
    assert bits.intervals * math.log(2) == pytest.approx(nats.intervals)
    small = estimate_many([[60, 30, 10]], dim=3, base=0.5)
    assert (small.intervals[:, 0] <= small.intervals[:, 1]).all()
    assert (small.standard_errors > 0).all()


def test_one_dimension_and_no_diagrams():
    assert estimate_many([[7]], dim=1).values == pytest.approx([0.0])
    assert estimate_many([[7]], dim=1).intervals == pytest.approx(np.zeros((1, 2)))
    assert estimate_many(np.zeros((0, 3), dtype=int), dim=3).values.shape == (0,)


@pytest.mark.parametrize(
    ("call", "error", "message"),
    [
        (lambda: estimate_many([3, 1], dim=2), ArgumentValueError, "one diagram in each row of a matrix, got 1 axes"),
        (lambda: estimate_many([[0, 0]], dim=2), ArgumentValueError, "at least one box each"),
        (lambda: estimate_many([[1, 2]], dim=2), ArgumentValueError, "rows must have non-negative rows"),
        (lambda: estimate_many([[2, 1]], dim=1), ArgumentValueError, "dim must be at least 2, got 1|dim must"),
        (lambda: estimate_many([[2, 1]], dim=257), ArgumentValueError, "dim must .*256"),
        (lambda: estimate_many([["a"]], dim=1), ArgumentTypeError, "rows must be an array of integers"),
        (lambda: estimate_many([[2, 1]], dim=2, confidence=1), ArgumentValueError, "confidence must lie strictly"),
    ],
)
def test_wrong_arguments_are_refused(call, error, message):
    with pytest.raises(error, match=message):
        call()


def least_exact_coverage(copies, spectra):
    """Least probability, over spectra, that the interval of one diagram holds the truth: a sum over all diagrams."""
    shapes = all_shapes(copies, len(spectra[0]))
    intervals = estimate_many(shapes, dim=shapes.shape[1]).intervals
    place = {tuple(shape): k for k, shape in enumerate(shapes.tolist())}
    coverages = []
    for spectrum in spectra:
        table = SchurWeyl(spectrum, copies).table()
        of_table = intervals[[place[tuple(shape)] for shape in table.shapes.tolist()]]
        truth = VonNeumann()(spectrum)
        inside = (of_table[:, 0] <= truth + 1e-10) & (truth - 1e-10 <= of_table[:, 1])
        coverages.append(float(table.probabilities @ inside))
    return min(coverages)


def test_coverage_at_qubits_is_exact():
    """n from 20 to 2,000; second eigenvalues on a grid, seen about once and a few times. Nothing is simulated."""
    for copies in [*range(20, 60, 3), 75, 100, 130, 200, 400, 2000]:
        seconds = np.concatenate(
            [np.linspace(0.0, 0.5, 30), np.array([0.1, 0.5, 1, 1.7, 2.6, 3.4, 4, 5, 7, 9]) / copies]
        )
        spectra = [np.array([1 - q, q]) for q in seconds if q <= 0.5]
        assert least_exact_coverage(copies, spectra) >= 0.95


def test_coverage_at_qutrits_is_exact():
    spectra = [as_spectrum(p) for p in np.random.default_rng(4).dirichlet(np.ones(3), 8)]
    spectra += [as_spectrum(p) for p in ([1 / 3] * 3, [0.36, 0.33, 0.31], [0.5, 0.5, 0.0], [0.9, 0.06, 0.04])]
    for copies in (20, 30, 60, 90):
        hidden = as_spectrum([0.5, 0.5 - 2.5 / copies, 2.5 / copies])
        assert least_exact_coverage(copies, [*spectra, hidden]) >= 0.95

"""Maximum likelihood of a spectrum."""

import json
from itertools import product

import numpy as np
import pytest

from entropest.errors import ArgumentValueError, NotCoveredError
from entropest.estimation.likelihood import MaximumLikelihood, fit_likelihood
from entropest.functionals import PowerSum, RelativeEntropy, VonNeumann
from entropest.law.schur_weyl import SchurWeyl
from entropest.records import DiagramCounts
from entropest.spectra import geometric, maximally_mixed


def log_likelihood(counts, spectrum):
    """A plain twin: the sum over blocks of exact log-probabilities."""
    return sum(count * SchurWeyl(spectrum, d.size).logpmf(d) for d, count in counts.items())


RECORDS = {
    "one diagram": DiagramCounts({"20+12+6": 1}, dim=3),
    "square": DiagramCounts({"4+4+4": 1}, dim=3),
    "pooled sizes": DiagramCounts({"2": 12, "1+1": 4, "2+1": 9, "3": 5, "3+2+1": 2, "9+3+1": 1}, dim=3),
    "pure": DiagramCounts({"7": 3}, dim=3),
}


@pytest.mark.parametrize("name", RECORDS)
def test_no_spectrum_of_a_grid_is_more_likely(name):
    """All spectra of dimension 3 on a grid of steps 1/40."""
    counts = RECORDS[name]
    fit = fit_likelihood(counts)
    assert fit.converged
    assert fit.log_likelihood == pytest.approx(log_likelihood(counts, fit.spectrum), abs=1e-6)
    grid = [(a, b, 40 - a - b) for a, b in product(range(41), repeat=2) if a >= b >= 40 - a - b >= 0]
    rows = max(len(d.rows) for d, _ in counts.items())
    best = max(log_likelihood(counts, np.array(p) / 40) for p in grid if sum(x > 0 for x in p) >= rows)
    assert fit.log_likelihood >= best - 1e-6


def test_the_gap_is_the_gain_of_the_best_direction():
    """The derivative towards each pure corner, by a difference, is at most the gap; at a wrong spectrum it is not 0."""
    counts = RECORDS["pooled sizes"]
    fit = fit_likelihood(counts)
    for corner in np.eye(3):
        step = 1e-5
        there = np.sort((1 - step) * fit.spectrum + step * corner)[::-1]
        assert (log_likelihood(counts, there) - log_likelihood(counts, fit.spectrum)) / step <= fit.gradient_gap + 0.05
    assert 0.0 <= fit.gradient_gap <= 1e-6 * counts.copies


def test_a_qubit_whose_maximum_lies_off_the_wall():
    """Closed form of the likelihood equation at d = 2 by bisection on the exact gradient."""
    counts = DiagramCounts({"30+12": 1}, dim=2)
    low, high = 0.5, 1.0 - 1e-9
    for _ in range(60):
        p = 0.5 * (low + high)
        gradient = SchurWeyl([p, 1 - p], 42).logpmf_gradient((30, 12))
        low, high = (p, high) if gradient[0] - gradient[1] > 1e-9 else (low, p)
    assert fit_likelihood(counts).spectrum[0] == pytest.approx(low, abs=1e-6)


def test_flat_and_pure_records_give_flat_and_pure_spectra():
    assert fit_likelihood(RECORDS["square"]).spectrum == pytest.approx([1 / 3] * 3)
    assert fit_likelihood(RECORDS["pure"]).spectrum.tolist() == [1.0, 0.0, 0.0]
    assert fit_likelihood(DiagramCounts({"1": 3}, dim=1)).spectrum.tolist() == [1.0]


def test_many_blocks_approach_the_truth():
    """Counts equal to their means, rounded: the maximum of the expected likelihood is the truth (Gibbs)."""
    spectrum = geometric(3, 0.5)
    table = SchurWeyl(spectrum, 5).table()
    tallies = np.round(1e7 * table.probabilities).astype(int)
    counts = DiagramCounts.from_rows(table.shapes, counts=tallies, dim=3)
    assert fit_likelihood(counts).spectrum == pytest.approx(spectrum, abs=1e-5)


def test_estimator_is_the_functional_of_the_spectrum():
    counts = RECORDS["one diagram"]
    spectrum = MaximumLikelihood().spectrum(counts)
    assert MaximumLikelihood()(counts) == VonNeumann()(spectrum)
    assert MaximumLikelihood(PowerSum(2))(counts) == PowerSum(2)(spectrum)
    reference = RelativeEntropy(maximally_mixed(4))
    assert MaximumLikelihood(reference)(DiagramCounts({"9+3": 1}, dim=4)) > 0.0


def test_fit_says_what_limits_it():
    fit = fit_likelihood(DiagramCounts({"2": 7, "1+1": 3}))
    assert "dimension is not given" in str(fit)
    assert json.loads(json.dumps(fit.to_dict()))["converged"] is True
    wide = fit_likelihood(DiagramCounts({"2": 7, "1+1": 3}), dim=3)
    assert any("do not fix the spectrum" in note for note in wide.notes)
    with pytest.raises(ArgumentValueError, match="dim must be that of the record, 2, got 3"):
        fit_likelihood(DiagramCounts({"2": 7}, dim=2), dim=3)
    with pytest.raises(NotCoveredError, match="64"):
        fit_likelihood(DiagramCounts({"2": 7}, dim=65))

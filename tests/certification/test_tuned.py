"""Entropy-tuned e-values: validity at every grid point, the scan, and the bets."""

import math

import numpy as np
import pytest

from entropest.certification.evidence import SizedBlocks
from entropest.certification.plain import exact_chord, exact_interpolant, fresh_context
from entropest.certification.rules import TUNED_CAP
from entropest.certification.tuned import GRID, log_tuned_e_values, tuned_lower_bound, tuned_nodes
from entropest.shapes import rows_of
from tests.certification.exact import SPECTRA, as_fractions, entropy, outcome_law
from tests.certification.test_evidence import record


def first_above(truth: float) -> int:
    return next(i for i, s in enumerate(GRID) if s >= truth)


def test_grid_rises():
    assert (np.diff(GRID) > 0).all()
    assert GRID[-1] == TUNED_CAP
    assert max(np.diff(GRID) / np.maximum(0.2, GRID[1:])) < 0.00501


@pytest.mark.parametrize("name", SPECTRA)
@pytest.mark.parametrize("copies", [2, 3, 4, 5, 6])
def test_mean_is_at_most_one_at_every_grid_point_from_the_entropy_on(name, copies):
    """Exact expectation for one block; for more blocks every factor has mean at most 1 by the same token."""
    law = outcome_law(SPECTRA[name], copies)
    shapes = rows_of(law, len(SPECTRA[name]))
    start = first_above(entropy(SPECTRA[name]))
    for planned in (1, 100, 10**6):
        mean = np.zeros(len(GRID))
        for i, probability in enumerate(law.values()):
            one = SizedBlocks(copies=copies, shapes=shapes[[i]], counts=np.array([1]))
            mean += float(probability) * np.exp(log_tuned_e_values([one], error=0.05, planned={copies: planned}))
        assert (mean[start:] <= 1.0 + 1e-12).all()


def test_mean_is_at_most_one_under_drift_for_the_average_entropy():
    first, second = as_fractions([1, 1, 1]), as_fractions([9, 1])
    average = (entropy(first) + entropy(second)) / 2
    mean = np.zeros(len(GRID))
    for a, pa in outcome_law(first, 2).items():
        for b, pb in outcome_law(second, 4).items():
            parts = [record(2, {a.rows: 1}), record(4, {b.rows: 1})]
            mean += float(pa * pb) * np.exp(log_tuned_e_values(parts, error=0.05, planned={2: 1, 4: 1}, drifting=True))
    assert (mean[first_above(average) :] <= 1.0 + 1e-12).all()


def test_witnesses_of_every_cell_are_minorants():
    """x q(x) <= -x log x with 50 digits, on a grid dense at zero, for every fifth cell."""
    ctx = fresh_context()
    points = [ctx.mpf(float(x)) for x in np.geomspace(1e-9, 1.0, 60)]
    for copies in (3, 4, 5, 6):
        for cell in range(0, len(GRID) // 6, 5):
            for nodes in tuned_nodes(copies, cell):
                coefficients = exact_interpolant(nodes, copies, ctx)
                for x in points:
                    assert sum(c * x**j for j, c in enumerate(coefficients)) <= -ctx.log(x) + ctx.mpf(10) ** -25


def test_bound_is_the_last_point_of_an_unbroken_run():
    part = record(4, {(4,): 300, (3, 1): 500, (2, 2): 120, (2, 1, 1): 80})
    logs = log_tuned_e_values([part], error=0.05, planned={4: 1000})
    bound = tuned_lower_bound([part], error=0.05, planned={4: 1000})
    last = GRID.index(bound)
    assert (logs[: last + 1] >= math.log(20.0)).all()
    assert logs[last + 1] < math.log(20.0) + 1e-8


def test_false_bounds_are_as_rare_as_stated():
    """Error 0.2, 300 records a cell: P(Binomial(300, 0.2) > 97) < 10^-6, 24 cells; planned sizes right and wrong."""
    generator = np.random.default_rng(20260104)
    for name in ("uniform qubit", "geometric", "uniform qutrit", "step"):
        truth = entropy(SPECTRA[name])
        for copies in (2, 3, 4):
            law = outcome_law(SPECTRA[name], copies)
            probabilities = np.array([float(p) for p in law.values()])
            shapes = rows_of(law, len(SPECTRA[name]))
            for planned in (40, 4000):
                wrong = 0
                for _ in range(300):
                    counts = generator.multinomial(400, probabilities)
                    part = SizedBlocks(copies=copies, shapes=shapes, counts=counts)
                    wrong += tuned_lower_bound([part], error=0.2, planned={copies: planned}) > truth
                assert wrong <= 97


def test_pure_records_give_nothing():
    for copies in (2, 3, 6, 9):
        assert tuned_lower_bound([record(copies, {(copies,): 500})], error=0.05, planned={copies: 500}) == 0.0


def test_chords_serve_pairs():
    """At two copies every component is one chord, whose mean is at most the entropy."""
    ctx = fresh_context()
    law = outcome_law(SPECTRA["step"], 2)
    for r in (1, 2, 3, 5):
        alpha, slope = exact_chord(r, ctx)
        purity = sum(p * p for p in SPECTRA["step"])
        assert float(alpha) + float(slope) * float(purity) <= entropy(SPECTRA["step"]) + 1e-12
    assert len(law) == 2

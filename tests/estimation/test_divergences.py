"""Relative entropies to the maximally mixed state and to Gibbs states."""

import math

import numpy as np
import pytest

from entropest.errors import ArgumentValueError
from entropest.estimation import estimate
from entropest.estimation.divergences import (
    relative_entropy_in_eigenbasis,
    relative_entropy_to_gibbs,
    relative_entropy_to_mixed,
)
from entropest.functionals import Fidelity, HilbertSchmidtDistance, RelativeEntropy, VonNeumann
from entropest.records import DiagramCounts, MomentCounts

RECORD = DiagramCounts({"571+286+143": 1}, dim=3)


def test_relative_entropy_to_the_mixed_state_is_the_entropy_turned_round():
    entropy = estimate(RECORD)
    found = relative_entropy_to_mixed(RECORD)
    assert found.value == pytest.approx(math.log(3) - entropy.value)
    assert found.interval == pytest.approx((math.log(3) - entropy.interval[1], math.log(3) - entropy.interval[0]))
    bits = relative_entropy_to_mixed(RECORD, base=2)
    assert bits.value == pytest.approx(found.value / math.log(2))
    assert bits.unit == "bit"
    with pytest.raises(ArgumentValueError, match="dim must be known"):
        relative_entropy_to_mixed(DiagramCounts({"5+2": 1}))


def test_moment_records_give_an_interval_without_value():
    found = relative_entropy_to_mixed(MomentCounts({2: (700, 300)}, dim=4))
    assert found.value is None
    assert 0.0 <= found.interval[0] < found.interval[1] <= math.log(4)


def test_gibbs_reference_against_explicit_matrices():
    """A state that does not commute with H: D = Tr rho (log rho - log gibbs) from the matrices themselves."""
    energies, beta = np.array([0.0, 0.7, 1.9]), 1.3
    rng = np.random.default_rng(3)
    unitary = np.linalg.qr(rng.normal(size=(3, 3)) + 1j * rng.normal(size=(3, 3)))[0]
    p = np.array([0.571, 0.286, 0.143])
    rho = unitary * p @ unitary.conj().T
    gibbs = np.exp(-beta * energies) / np.exp(-beta * energies).sum()
    exact = float(p @ np.log(p) - np.real(np.diag(rho)) @ np.log(gibbs))
    mean = float(np.real(np.diag(rho)) @ energies)
    found = relative_entropy_to_gibbs(RECORD, energies, beta, mean_energy=mean)
    shift = estimate(RECORD, confidence=0.975).value - VonNeumann()(p)
    assert found.value == pytest.approx(exact - shift)
    assert found.interval[0] < exact < found.interval[1]
    assert sorted_bound(p, energies, beta) <= exact


def sorted_bound(p, energies, beta):
    """The divergence of sorted spectra, a lower bound on that of the states."""
    gibbs = np.sort(np.exp(-beta * energies) / np.exp(-beta * energies).sum())[::-1]
    return RelativeEntropy(gibbs)(p)


def test_energy_error_widens_and_capping_is_said():
    energies = [0.0, 1.0, 2.0]
    sharp = relative_entropy_to_gibbs(RECORD, energies, 0.5, mean_energy=0.9)
    blunt = relative_entropy_to_gibbs(RECORD, energies, 0.5, mean_energy=0.9, energy_error=0.1)
    assert blunt.interval[0] <= sharp.interval[0] < sharp.interval[1] < blunt.interval[1]
    assert blunt.standard_error == pytest.approx(math.hypot(sharp.standard_error, 0.05))
    low = relative_entropy_to_gibbs(RECORD, energies, 0.5, mean_energy=0.1)
    assert low.value == 0.0
    assert any("negative" in note for note in low.notes)


@pytest.mark.parametrize(
    ("energies", "mean", "error", "message"),
    [
        ([0.0, 1.0], 0.5, 0.0, "as many as the record has dimensions, 3, got 2"),
        ([0.0, 1.0, 2.0], 2.5, 0.05, "mean_energy must lie between"),
        ([0.0, 1.0, 2.0], 0.5, -1.0, "energy_error must not be negative"),
    ],
)
def test_wrong_energies_are_refused(energies, mean, error, message):
    with pytest.raises(ArgumentValueError, match=message):
        relative_entropy_to_gibbs(RECORD, energies, 1.0, mean_energy=mean, energy_error=error)


def test_distance_and_fidelity_to_a_known_spectrum():
    reference = (0.5, 0.3, 0.2)
    rows = np.array([0.571, 0.286, 0.143])
    distance = estimate(RECORD, HilbertSchmidtDistance(reference))
    fidelity = estimate(RECORD, Fidelity(reference))
    assert distance.value == pytest.approx(np.linalg.norm(rows - reference))
    assert fidelity.value == pytest.approx(np.sqrt(rows * reference).sum() ** 2)
    for found in (distance, fidelity):
        assert found.interval[0] <= found.value <= found.interval[1]
    assert fidelity.interval[1] <= 1.0
    assert estimate(DiagramCounts({"40": 1}, dim=3), Fidelity((1.0, 0.0, 0.0))).value == pytest.approx(1.0)


def test_a_measured_eigenbasis_against_explicit_matrices():
    """Populations of a rotated state in the eigenbasis of the reference; D = Tr rho (log rho - log sigma)."""
    q = np.array([0.5, 0.2, 0.3])
    rng = np.random.default_rng(8)
    unitary = np.linalg.qr(rng.normal(size=(3, 3)) + 1j * rng.normal(size=(3, 3)))[0]
    p = np.array([0.571, 0.286, 0.143])
    rho = unitary * p @ unitary.conj().T
    populations = np.real(np.diag(rho))
    exact = float(p @ np.log(p)) - float(populations @ np.log(q))
    found = relative_entropy_in_eigenbasis(RECORD, q, np.round(1e6 * populations).astype(int))
    assert found.interval[0] < exact < found.interval[1]
    assert found.value == pytest.approx(exact, abs=3 * found.standard_error)
    flat = relative_entropy_in_eigenbasis(RECORD, [1 / 3] * 3, [5, 2, 3])
    assert flat.value == pytest.approx(relative_entropy_to_mixed(RECORD).value)


def test_an_eigenbasis_without_support_gives_infinity_and_bad_populations_are_refused():
    found = relative_entropy_in_eigenbasis(RECORD, [0.5, 0.5, 0.0], [5, 4, 1])
    assert found.value == math.inf
    assert found.to_dict()["value"] is None
    assert math.isfinite(relative_entropy_in_eigenbasis(RECORD, [0.5, 0.5, 0.0], [5, 4, 0]).value)
    for reference, populations, words in (
        ([0.5, 0.5], [1, 2], "dimension 3"),
        ([0.5, 0.3, 0.2], [1, 2], "as many as the reference"),
        ([0.5, 0.3, 0.2], [0, 0, 0], "at least one count"),
        ([0.5, 0.3, 0.2], [1.5, 2.0, 3.0], "whole numbers"),
        ([0.5, 0.3, 0.2], [-1, 2, 3], "whole numbers"),
    ):
        with pytest.raises(ArgumentValueError, match=words):
            relative_entropy_in_eigenbasis(RECORD, reference, populations)

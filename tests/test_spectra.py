"""Checked spectra, and the reference families against published values and closed forms."""

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import entr

from entropest import as_spectrum, spectrum_of_state
from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.spectra import (
    free_fermion_half_chain,
    free_fermion_occupations,
    geometric,
    low_rank,
    maximally_mixed,
    power_law,
    random_reduced,
    spiked,
    thermal,
)


def entropy(spectrum):
    return float(entr(spectrum).sum())


@given(st.lists(st.floats(0.0, 1e3), min_size=1, max_size=8).filter(lambda values: sum(values) > 1e-3))
def test_normalised_values_make_a_spectrum(values):
    spectrum = as_spectrum(values, normalize=True)
    assert spectrum.dtype == np.float64
    assert spectrum == pytest.approx(np.sort(values)[::-1] / sum(values), rel=1e-14, abs=1e-300)
    assert (as_spectrum(spectrum) == spectrum).all()


def test_a_spectrum_is_sorted_and_small_negative_values_become_zero():
    assert as_spectrum([0.25, 0.75, 0.0]).tolist() == [0.75, 0.25, 0.0]
    assert as_spectrum([1.0, -1e-10]).tolist() == [1.0, 0.0]
    assert as_spectrum((Fraction(1, 4), Fraction(3, 4))).tolist() == [0.75, 0.25]
    assert as_spectrum([1]).tolist() == [1.0]


def test_a_spectrum_does_not_share_memory_with_its_argument():
    values = np.array([0.75, 0.25])
    spectrum = as_spectrum(values)
    values[0] = 0.0
    assert spectrum.tolist() == [0.75, 0.25]


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ([0.5, float("nan")], "eigenvalues must be finite, got nan"),
        ([0.5, float("inf")], "eigenvalues must be finite, got inf"),
        ([0.5, None], "eigenvalues must be finite, got nan"),
        ([1.1, -0.1], "eigenvalues must not be negative, got -0.1"),
        ([1.0, -1e-8], "eigenvalues must not be negative, got -1e-08"),
        ([0.5, 0.4], "must sum to 1 within 1e-09, got sum 0.9"),
        ([0.5, 0.5 + 1e-8], "must sum to 1 within 1e-09"),
        ([], r"one-dimensional and not empty, got shape \(0,\)"),
        ([[0.5, 0.5]], r"one-dimensional and not empty, got shape \(1, 2\)"),
        (1.0, r"got shape \(\)"),
    ],
)
def test_values_that_are_no_spectrum_are_refused(values, message):
    with pytest.raises(ArgumentValueError, match=message):
        as_spectrum(values)


@pytest.mark.parametrize(
    "values", ["ab", ["0.5", "0.5"], [[0.5], [0.2, 0.3]], np.array([0.5, 0.5j]), [True], [10**400]]
)
def test_values_that_are_no_real_numbers_are_refused(values):
    with pytest.raises(ArgumentTypeError, match="a spectrum must be a sequence of real numbers"):
        as_spectrum(values)


@pytest.mark.parametrize("tol", [float("nan"), -1e-9, float("inf"), "x", None])
def test_the_tolerance_is_checked(tol):
    for check in (lambda: as_spectrum([0.5, 0.6], tol=tol), lambda: spectrum_of_state([[1.0]], tol=tol)):
        with pytest.raises((ArgumentTypeError, ArgumentValueError), match=r"tol must"):
            check()


def test_nothing_can_be_normalised_from_zero():
    with pytest.raises(ArgumentValueError, match=r"sum of eigenvalues must be positive to normalise, got 0.0"):
        as_spectrum([0.0, 0.0], normalize=True)


def test_a_wider_tolerance_is_used_where_it_is_asked_for():
    assert as_spectrum([0.5, 0.501], tol=0.01).tolist() == [0.501, 0.5]
    assert as_spectrum([1.005, -0.005], tol=0.01).tolist() == [1.005, 0.0]


@pytest.mark.parametrize("d", [1, 2, 5])
def test_eigenvalues_of_a_rotated_state(d):
    rng = np.random.default_rng(d)
    spectrum = np.sort(rng.dirichlet(np.ones(d)))[::-1]
    rotation, _ = np.linalg.qr(rng.standard_normal((d, d)) + 1j * rng.standard_normal((d, d)))
    state = rotation @ np.diag(spectrum) @ rotation.conj().T
    assert spectrum_of_state(state) == pytest.approx(spectrum, abs=1e-14)
    assert spectrum_of_state(7.0 * state, normalize=True) == pytest.approx(spectrum, abs=1e-14)


@pytest.mark.parametrize(
    ("state", "message"),
    [
        ([0.5, 0.5], r"square matrix, got shape \(2,\)"),
        ([[0.5, 0.5]], r"square matrix, got shape \(1, 2\)"),
        (np.zeros((0, 0)), "square matrix"),
        ([[0.5, 0.1], [0.2, 0.5]], "Hermitian within 1e-09, got asymmetry 0.1"),
        ([[0.5, 0.1j], [0.1j, 0.5]], "Hermitian within 1e-09, got asymmetry 0.2"),
        ([[0.5, np.nan], [np.nan, 0.5]], "must be finite"),
        ([[0.5, 0.6], [0.6, 0.5]], r"must not be negative, got -0\.(1|0999)"),
        ([[0.5, 0.0], [0.0, 0.6]], "must sum to 1"),
    ],
)
def test_matrices_that_are_no_states_are_refused(state, message):
    with pytest.raises(ArgumentValueError, match=message):
        spectrum_of_state(state)


@pytest.mark.parametrize("state", [[["a"]], [[1.0, 2.0], [3.0]], [[10**400]]])
def test_matrices_that_are_not_numbers_are_refused(state):
    with pytest.raises(ArgumentTypeError, match="a state must be a square matrix of complex numbers"):
        spectrum_of_state(state)


@pytest.mark.parametrize(
    "spectrum",
    [
        maximally_mixed(7),
        geometric(9, 0.3),
        geometric(4, 0.0),
        low_rank(5, 3),
        spiked(6, 0.4),
        power_law(50, 1.7),
        random_reduced(5, 3, rng=1),
        thermal([3.0, -1.0, 0.5, 0.5], 0.7),
        thermal([3.0, -1.0, 0.5], -0.7),
        free_fermion_half_chain(6),
    ],
)
def test_every_family_gives_a_spectrum(spectrum):
    assert (as_spectrum(spectrum, tol=1e-14) == spectrum).all()


def test_families_against_their_definitions():
    assert maximally_mixed(4).tolist() == [0.25] * 4
    assert geometric(3, 0.5) == pytest.approx(np.array([4, 2, 1]) / 7, rel=1e-15)
    assert geometric(4, 1.0).tolist() == [0.25] * 4
    assert geometric(3, 0.0).tolist() == [1.0, 0.0, 0.0]
    assert low_rank(5, 2).tolist() == [0.5, 0.5, 0.0, 0.0, 0.0]
    assert spiked(4, 0.2) == pytest.approx([0.4, 0.2, 0.2, 0.2], rel=1e-15)
    assert spiked(3, 1.0).tolist() == [1.0, 0.0, 0.0]
    assert power_law(3, 2.0) == pytest.approx(np.array([36, 9, 4]) / 49, rel=1e-15)
    assert power_law(3, 0.0) == pytest.approx(maximally_mixed(3), rel=1e-15)
    assert power_law(3, 1e4).tolist() == [1.0, 0.0, 0.0]


def test_thermal_weights_in_the_limits():
    levels = [2.0, 0.0, 1.0]
    weights = [math.exp(-0.5 * level) for level in (0.0, 1.0, 2.0)]
    assert thermal(levels, 0.5) == pytest.approx(np.array(weights) / sum(weights), rel=1e-15)
    assert thermal(levels, 0.0) == pytest.approx(maximally_mixed(3), rel=1e-15)
    assert thermal(levels, 1e308).tolist() == thermal(levels, -1e308).tolist() == [1.0, 0.0, 0.0]
    assert thermal([1e200, 2e200], 1e300).tolist() == [1.0, 0.0]
    shifted = thermal(np.array(levels) + 2.0**40, 0.5)
    assert shifted.tolist() == thermal(levels, 0.5).tolist()


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: maximally_mixed(0), "d must be at least 1, got 0"),
        (lambda: geometric(3, 1.5), "ratio must lie between 0 and 1, got 1.5"),
        (lambda: geometric(3, float("nan")), "ratio must be finite, got nan"),
        (lambda: low_rank(3, 4), "rank must be at most 3, got 4"),
        (lambda: spiked(3, -0.1), "weight must lie between 0 and 1, got -0.1"),
        (lambda: power_law(3, -1.0), "exponent must not be negative, got -1.0"),
        (lambda: random_reduced(3, 0), "environment must be at least 1, got 0"),
        (lambda: thermal([], 1.0), "energies must be a non-empty one-dimensional array"),
        (lambda: thermal([[0.0, 1.0]], 1.0), "energies must be a non-empty one-dimensional array"),
        (lambda: thermal([0.0, float("nan")], 1.0), "energies must be .* finite numbers"),
        (lambda: thermal([0.0, 1.0], float("inf")), "beta must be finite, got inf"),
        (lambda: thermal(["a"], 1.0), "energies must be a sequence of real numbers"),
        (lambda: free_fermion_half_chain(21), "sites must be at most 20, got 21"),
        (lambda: free_fermion_occupations(0), "sites must be at least 1, got 0"),
        (lambda: geometric(3, 10**400), "ratio must be a real number"),
    ],
)
def test_wrong_parameters_are_refused(make, message):
    with pytest.raises((ArgumentValueError, ArgumentTypeError), match=message):
        make()


def test_random_reduced_states_have_the_mean_entropy_and_purity_of_the_literature(check_values):
    """Means over 4,000 states with a fixed seed.

    Tolerance: 5 standard errors estimated from the same states; by the normal approximation a check gives a
    false alarm with probability 6e-7, the eight of them together with probability below 5e-6.
    """
    page = check_values("mean entropy of a random subsystem, (smaller, larger dimension)")
    lubkin = check_values("mean purity of a random subsystem, (m+n)/(mn+1)")
    rng = np.random.default_rng(1993)
    for key, mean_entropy in page.items():
        small, large = map(int, key.split(","))
        spectra = np.array([random_reduced(small, large, rng=rng) for _ in range(4000)])
        for sample, mean in ((entr(spectra).sum(axis=1), mean_entropy), ((spectra**2).sum(axis=1), lubkin[key])):
            error = sample.std(ddof=1) / math.sqrt(len(sample))
            assert abs(sample.mean() - float(Fraction(mean))) <= 5 * error


def test_random_reduced_states_of_a_small_environment_have_its_rank():
    spectrum = random_reduced(5, 2, rng=8)
    assert spectrum.shape == (5,)
    assert spectrum[1] > 0.0
    assert spectrum[2:].tolist() == [0.0, 0.0, 0.0]


def test_random_reduced_states_follow_the_seed():
    first, again, other = (random_reduced(4, 4, rng=seed).tolist() for seed in (7, np.random.default_rng(7), 8))
    assert first == again != other


def test_entropies_of_free_fermions(check_values):
    name = "half-filled XX chain, block of L sites in an infinite chain: von Neumann and Renyi-2 entropy"
    for text, (von_neumann, renyi) in check_values(name).items():
        sites = int(text)
        occupations = free_fermion_occupations(sites)
        binary = entropy(occupations) + entropy(1.0 - occupations)
        purity = occupations**2 + (1.0 - occupations) ** 2
        assert binary == pytest.approx(von_neumann, abs=1e-11)
        assert -np.log(purity).sum() == pytest.approx(renyi, abs=1e-11)
        if sites <= 10:
            spectrum = free_fermion_half_chain(sites)
            assert spectrum.shape == (2**sites,)
            assert entropy(spectrum) == pytest.approx(von_neumann, abs=1e-11)
            assert -math.log((spectrum**2).sum()) == pytest.approx(renyi, abs=1e-11)


def test_free_fermion_occupations_are_symmetric_about_half_filling():
    occupations = free_fermion_occupations(9)
    assert occupations + occupations[::-1] == pytest.approx(np.ones(9), abs=1e-13)
    assert (np.diff(occupations) <= 0).all()

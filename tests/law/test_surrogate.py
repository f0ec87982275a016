"""The Gaussian surrogate: always diagrams, the right limits, and the errors its documentation states."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from entropest._types import FloatArray, IntArray
from entropest.law.insertion import draw_by_insertion
from entropest.law.surrogate import draw_surrogate
from entropest.spectra import as_spectrum, low_rank, maximally_mixed


def greatest_distance(first: IntArray, second: IntArray) -> float:
    """Kolmogorov-Smirnov distance of two samples."""
    grid = np.unique(np.concatenate([first, second]))
    below = [np.searchsorted(np.sort(sample), grid, side="right") / len(sample) for sample in (first, second)]
    return float(np.abs(below[0] - below[1]).max())


def plug_in_entropy(draws: IntArray) -> FloatArray:
    frequencies = draws / draws.sum(axis=-1, keepdims=True)
    return np.asarray(-(frequencies * np.log(np.where(draws > 0, frequencies, 1.0))).sum(axis=-1))


@settings(max_examples=60, deadline=None)
@given(
    st.lists(st.floats(0.0, 1.0), min_size=1, max_size=6).filter(lambda weights: sum(weights) > 1e-3),
    st.integers(1, 10**12),
    st.integers(0, 2**32),
)
def test_draws_are_diagrams_of_the_asked_size(weights: list[float], copies: int, seed: int) -> None:
    spectrum = as_spectrum(weights, normalize=True)
    draws = draw_surrogate(spectrum, copies, 5, np.random.default_rng(seed))
    assert draws.shape == (5, len(spectrum))
    assert (draws.sum(axis=-1) == copies).all()
    assert (np.diff(draws, axis=-1) <= 0).all()
    assert (draws >= 0).all()
    assert (draws[:, spectrum == 0.0] == 0).all()


def test_pure_states_have_one_row() -> None:
    assert draw_surrogate(low_rank(3, 1), 17, 2, np.random.default_rng(1)).tolist() == [[17, 0, 0]] * 2


def test_mean_rows_of_distinct_eigenvalues() -> None:
    # E row_i - n p_i by exact enumeration at n = 120 (limits 1.2, -0.5, -0.7: Its, Tracy, Widom 2001, first row).
    # Five standard errors are .05; the rest allows for the surrogate.
    draws = draw_surrogate(np.array([0.6, 0.3, 0.1]), 120, 300_000, np.random.default_rng(1))
    shifts = draws.mean(axis=0) - 120 * np.array([0.6, 0.3, 0.1])
    assert np.abs(shifts - [1.19994, -0.49997, -0.69997]).max() < 0.1 + 0.05


@pytest.mark.parametrize(
    ("spectrum", "copies", "distance"),
    [
        (maximally_mixed(4), 100, 0.10),
        (maximally_mixed(4), 1000, 0.03),
        (np.array([0.4, 0.4, 0.1, 0.1]), 100, 0.06),
        (np.array([0.4, 0.4, 0.1, 0.1]), 1000, 0.02),
        (maximally_mixed(2), 100, 0.01),
    ],
)
def test_errors_are_those_documented(spectrum: FloatArray, copies: int, distance: float) -> None:
    # Two samples of 50,000: false alarm of each comparison below 1e-6 beyond .017 (Smirnov's tail).
    size = 50_000
    generator = np.random.default_rng(copies)
    approximate = draw_surrogate(spectrum, copies, size, generator)
    exact = draw_by_insertion(spectrum, copies, size, generator)
    standard_error = np.sqrt(2.0 * exact.var(axis=0) / size)
    assert (np.abs(approximate.mean(axis=0) - exact.mean(axis=0)) < 0.6 + 5.0 * standard_error).all()
    assert max(greatest_distance(a, b) for a, b in zip(approximate.T, exact.T, strict=True)) < distance + 0.017
    first, second = plug_in_entropy(approximate), plug_in_entropy(exact)
    noise = 5.0 * np.sqrt(2.0 * second.var() / size)
    assert abs(first.mean() - second.mean()) < 0.2 / copies + noise
    assert first.std() == pytest.approx(second.std(), rel=0.12)


def test_covariance_at_very_many_copies() -> None:
    # Distinct eigenvalues: n (diag p - p p^T); five standard errors of a variance, sqrt(2/size).
    p, copies, size = np.array([0.5, 0.3, 0.2]), 10**12, 20_000
    draws = draw_surrogate(p, copies, size, np.random.default_rng(2))
    covariance = np.cov(draws.T) / copies
    assert np.abs(covariance - np.diag(p) + np.outer(p, p)).max() < 5.0 * np.sqrt(2.0 / size) * 0.25


def test_one_seed_gives_one_result() -> None:
    first, second = (draw_surrogate(maximally_mixed(3), 10**9, 4, np.random.default_rng(6)) for _ in range(2))
    assert (first == second).all()

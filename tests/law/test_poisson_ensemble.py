"""The pair of projection ensembles: probabilities against arbitrary precision, and the measures of accuracy."""

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from entropest._mp import context
from entropest._types import FloatArray, IntArray
from entropest.errors import NotCoveredError
from entropest.law.poisson_ensemble import (
    PoissonEnsemble,
    check_ensemble,
    edge_mass,
    orthogonality_residual,
    poisson_ensemble,
)
from entropest.spectra import geometric, low_rank, maximally_mixed, power_law, spiked


def log_probability(ensemble: PoissonEnsemble, points: IntArray) -> float:
    """Log of det A(l) det B(l) / det(A^T B)."""
    cells = ensemble.grid.locate(points)
    offsets = (points - ensemble.grid.nodes[cells]).astype(np.float64)
    total = -math.log(ensemble.overlap)
    sign = 1.0
    for k in range(2):
        rows = ensemble.grid.interpolate(ensemble.bases, np.full_like(cells, k), cells, offsets)
        s, log_size = np.linalg.slogdet(rows)
        sign, total = sign * s, total + log_size
    assert sign > 0.0
    return float(total)


def exact_log_probability(means: FloatArray, points: IntArray) -> float:
    """prod (l_i - l_j) det[t_i^l_j / l_j!] e^{-sum t} / prod (t_i - t_j); ties are split by 1e-30."""
    mp = context(700)
    t = [mp.mpf(value) * (1 + (len(means) - i) * mp.mpf(10) ** -30) for i, value in enumerate(means.tolist())]
    logs = [mp.log(value) for value in t]
    at = points.tolist()
    d = len(at)
    level = [mp.mpf(0)] * d
    for i in range(d - 2, -1, -1):
        level[i] = level[i + 1] + (logs[i] - logs[i + 1]) * mp.mpf(at[i] + at[i + 1]) / 2
    matrix = mp.matrix(d, d)
    for i in range(d):
        for j in range(d):
            matrix[i, j] = mp.exp((logs[i] - logs[j]) * at[j] - (level[i] - level[j]))
    value = mp.log(abs(mp.det(matrix))) - sum(t)
    value += sum(at[j] * logs[j] - mp.loggamma(at[j] + 1) for j in range(d))
    for i in range(d):
        for j in range(i + 1, d):
            value += mp.log(at[i] - at[j]) - mp.log(abs(t[i] - t[j]))
    return float(value)


def likely_points(means: FloatArray, generator: np.random.Generator) -> IntArray:
    """Draw points from the eigenvalues of diag(t) + sqrt(t) GUE-like noise, plus the staircase."""
    d = len(means)
    noise = generator.standard_normal((d, d)) + 1j * generator.standard_normal((d, d))
    noise = 0.5 * (noise + noise.conj().T) * np.sqrt(np.minimum.outer(means, means))
    rows = np.maximum(np.linalg.eigvalsh(np.diag(means) + noise)[::-1], 0.0)
    return np.asarray(np.floor(rows), dtype=np.int64) + np.arange(d)[::-1]


SPECTRA = {
    "separated": np.array([0.4, 0.3, 0.2, 0.1]),
    "uniform": maximally_mixed(4),
    "near ties": 0.25 * (1 + 1e-12 * np.array([3.0, 1.0, -1.0, -3.0])),
    "two groups": np.array([0.35, 0.35, 0.15, 0.15]),
    "tiny ones": np.array([1 - 2.5e-7, 2e-7, 4e-8, 1e-8]),
    "geometric 16": geometric(16, 0.5),
    "uniform 16": maximally_mixed(16),
    "power law 16": power_law(16, 1.0),
    "spiked 16": spiked(16, 0.9999),
}


@pytest.mark.parametrize("copies", [7, 300, 10**4, 10**6 + 1, 10**9])
@pytest.mark.parametrize("name", SPECTRA)
def test_probability_agrees_with_arbitrary_precision(name: str, copies: int) -> None:
    means = copies * SPECTRA[name]
    ensemble = poisson_ensemble(means)
    check_ensemble(ensemble)
    generator = np.random.default_rng(copies)
    for _ in range(2):
        points = likely_points(means, generator)
        exact = exact_log_probability(means, points)
        assert log_probability(ensemble, points) == pytest.approx(exact, abs=1e-10)


def test_probabilities_of_all_points_sum_to_one() -> None:
    means = 6.0 * np.array([0.5, 0.3, 0.2])
    ensemble = poisson_ensemble(means)
    a, b = ensemble.bases
    points = np.array([(i, j, k) for i in range(2, 40) for j in range(1, i) for k in range(j)])
    total = (np.linalg.det(a[points]) * np.linalg.det(b[points])).sum() / ensemble.overlap
    assert total == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize("mean", [20.0, 3e4, 5e8])
def test_equal_means_give_one_ensemble(mean: float) -> None:
    # The Charlier ensemble: both bases span the polynomials times the root of the mass function.
    ensemble = poisson_ensemble(np.full(5, mean))
    assert ensemble.overlap == pytest.approx(1.0, abs=1e-10)
    density = (ensemble.bases**2).sum(axis=2)
    np.testing.assert_allclose(density[0], density[1], atol=1e-10 * density.max())


spectrum_kinds = st.sampled_from(["dirichlet", "log-uniform", "ties", "near ties", "chain"])


@settings(deadline=None, max_examples=120)
@given(
    kind=spectrum_kinds,
    d=st.integers(2, 16),
    log_copies=st.floats(0.0, 9.0),
    seed=st.integers(0, 2**32 - 1),
)
def test_all_measures_of_accuracy_pass_with_room(kind: str, d: int, log_copies: float, seed: int) -> None:
    generator = np.random.default_rng(seed)
    copies = int(10**log_copies)
    match kind:
        case "dirichlet":
            p = generator.dirichlet(np.full(d, generator.choice([0.1, 1.0, 1e3, 1e6])))
        case "log-uniform":
            p = 10.0 ** generator.uniform(-generator.choice([2, 6, 12]), 0, d)
        case "ties":
            p = generator.choice(10.0 ** generator.uniform(-3, 0, 4), d)
        case "near ties":
            p = generator.choice(10.0 ** generator.uniform(-3, 0, 4), d)
            p = np.abs(p * (1 + 10.0 ** generator.uniform(-15, -1) * generator.standard_normal(d)))
        case _:
            t = copies / d
            p = t + 10.0 ** generator.uniform(-2, 1.3) * math.sqrt(t) * np.arange(d)
    means = copies * np.sort(p / p.sum())[::-1]
    means = means[means >= 1e-17]
    ensemble = poisson_ensemble(means)
    assert ensemble.condition < 1e6
    assert orthogonality_residual(ensemble) < 1e-10
    assert edge_mass(ensemble) < 1e-12
    assert ensemble.overlap > 0.1
    check_ensemble(ensemble)


def test_near_ties_treated_as_separate_are_refused() -> None:
    # Without divided differences these columns are parallel to 1e-8: a case that truly fails.
    means = 1e8 * np.array([0.25 + 1e-9, 0.25, 0.25 - 1e-9, 0.25 - 2e-9])
    check_ensemble(poisson_ensemble(means))
    with pytest.raises(NotCoveredError, match=r"bases of condition at most 1e\+08, got "):
        check_ensemble(poisson_ensemble(means, tied_gaps=(0.0,)))


def test_a_basis_that_is_not_orthonormal_is_refused() -> None:
    ensemble = poisson_ensemble(1e6 * low_rank(3, 3))
    halfway = ensemble.halfway.copy()
    halfway[0, :, 1] += 1e-7 * halfway[0, :, 2]
    with pytest.raises(NotCoveredError, match=r"orthogonality residual of at most 1e-09, got 1e-07"):
        check_ensemble(replace(ensemble, halfway=halfway))


def test_too_small_a_window_is_refused() -> None:
    # Moving everything by a third of the window puts the mass where the window ends.
    ensemble = poisson_ensemble(np.array([1e6, 1e6]))
    moved = np.roll(ensemble.bases, len(ensemble.grid.nodes) // 2, axis=1)
    with pytest.raises(NotCoveredError, match="mass at the ends of its windows"):
        check_ensemble(replace(ensemble, bases=moved))


def test_too_small_an_overlap_is_refused() -> None:
    ensemble = poisson_ensemble(np.array([30.0, 20.0]))
    with pytest.raises(NotCoveredError, match=r"overlap of at least 0.001, got 0.0005"):
        check_ensemble(replace(ensemble, overlap=0.0005))

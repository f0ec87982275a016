"""Determinantal draws: against the exact law, against insertion, and at sizes where only identities are left."""

import math
from collections import Counter
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from entropest._types import FloatArray, IntArray
from entropest.diagrams import young_diagrams
from entropest.errors import NotCoveredError
from entropest.law import determinantal
from entropest.law.determinantal import draw_determinantal
from entropest.law.insertion import draw_by_insertion
from entropest.spectra import geometric, maximally_mixed, power_law, spiked

# Each goodness-of-fit test fails by chance once in 10^4 seeds; the seeds are fixed.
FALSE_ALARM = 1e-4


def determinant(matrix: list[list[Fraction]]) -> Fraction:
    """Laplace expansion along the first row."""
    if not matrix:
        return Fraction(1)
    minors = ([row[:j] + row[j + 1 :] for row in matrix[1:]] for j in range(len(matrix)))
    return sum(
        (
            (-1) ** j * entry * determinant(minor)
            for j, (entry, minor) in enumerate(zip(matrix[0], minors, strict=True))
        ),
        Fraction(0),
    )


def exact_law(spectrum: FloatArray, copies: int) -> dict[tuple[int, ...], float]:
    """f^lambda s_lambda(p) in fractions, s by the Jacobi-Trudi determinant."""
    p = [Fraction(value) for value in spectrum.tolist()]
    complete = [Fraction(1)] + [Fraction(0)] * (copies + len(p))
    for value in p:
        for r in range(1, len(complete)):
            complete[r] += value * complete[r - 1]
    law = {}
    for diagram in young_diagrams(copies, max_rows=len(p)):
        rows = diagram.rows
        matrix = [
            [complete[row - i + j] if row - i + j >= 0 else Fraction(0) for j in range(len(rows))]
            for i, row in enumerate(rows)
        ]
        shape = rows + (0,) * (len(p) - len(rows))
        law[shape] = float(diagram.standard_tableaux * determinant(matrix) / sum(p) ** copies)
    return law


def chi_square_p_value(observed: FloatArray, expected: FloatArray) -> float:
    """Pearson's test after the cells that expect fewer than 10 are pooled, rarest first."""
    order = np.argsort(expected)
    observed, expected = observed[order], expected[order]
    pooled = int(np.searchsorted(np.cumsum(expected), 10.0)) + 1
    observed = np.concatenate([[observed[:pooled].sum()], observed[pooled:]])
    expected = np.concatenate([[expected[:pooled].sum()], expected[pooled:]])
    observed[0] += observed[1:][expected[1:] < 10.0].sum()
    expected[0] += expected[1:][expected[1:] < 10.0].sum()
    kept = np.concatenate([[True], expected[1:] >= 10.0])
    observed, expected = observed[kept], expected[kept]
    if len(expected) == 1:
        return 1.0
    statistic = float(((observed - expected) ** 2 / expected).sum())
    return float(stats.chi2.sf(statistic, len(expected) - 1))


SMALL_CASES = {
    "separated, d=3": ([0.5, 0.3, 0.2], 10),
    "separated, d=4": ([0.4, 0.3, 0.2, 0.1], 12),
    "separated, d=2": ([0.9, 0.1], 8),
    "uniform, d=2": ([0.5, 0.5], 12),
    "uniform, d=3": ([1 / 3, 1 / 3, 1 / 3], 10),
    "uniform, d=4": ([0.25, 0.25, 0.25, 0.25], 12),
    "tied pair": ([0.4, 0.4, 0.2], 11),
    "tied triple": ([0.7, 0.1, 0.1, 0.1], 12),
    "near ties": ([1 / 3 + 1e-12, 1 / 3, 1 / 3 - 1e-12], 9),
    "near tie and tiny one": ([0.5, 0.25, 0.25 - 1e-12, 1e-12], 9),
    "zeros": ([0.6, 0.4, 0.0, 0.0], 10),
    "tiny ones": ([0.9997, 2e-4, 1e-4], 12),
    "one copy": ([0.4, 0.3, 0.2, 0.1], 1),
    "two copies": ([0.5, 0.3, 0.2], 2),
    "geometric, d=6": (geometric(6, 0.3).tolist(), 8),
    "uniform, d=6": (maximally_mixed(6).tolist(), 8),
    "more rows than boxes": (maximally_mixed(8).tolist(), 5),
}


@pytest.mark.parametrize("name", SMALL_CASES)
def test_small_shapes_have_the_exact_law(name: str) -> None:
    values, copies = SMALL_CASES[name]
    spectrum = np.array(values)
    size = 30_000
    law = exact_law(spectrum, copies)
    assert sum(law.values()) == pytest.approx(1.0, abs=1e-12)
    shapes = draw_determinantal(spectrum, copies, size, np.random.default_rng(2024))
    counts = Counter(map(tuple, shapes.tolist()))
    assert set(counts) <= {shape for shape, probability in law.items() if probability > 0.0}
    observed = np.array([counts[shape] for shape in law], dtype=np.float64)
    assert chi_square_p_value(observed, size * np.array(list(law.values()))) > FALSE_ALARM


def qubit_law(p: float, copies: int, lower: IntArray) -> FloatArray:
    """Law of the second row for d = 2: f^lambda (pq)^k (p^{m+1} - q^{m+1})/(p - q), m = n - 2k."""
    q, spread = 1.0 - p, copies - 2.0 * lower
    log_tableaux = (
        math.lgamma(copies + 1.0)
        - np.array([math.lgamma(k + 1.0) + math.lgamma(copies - k + 1.0) for k in lower.tolist()])
        + np.log((spread + 1.0) / (copies - lower + 1.0))
    )
    if p == q:
        return np.asarray(np.exp(log_tableaux + copies * math.log(0.5) + np.log(spread + 1.0)))
    log_schur = lower * math.log(p * q) + (spread + 1.0) * math.log(p) - math.log(p - q)
    return np.asarray(np.exp(log_tableaux + log_schur) * -np.expm1((spread + 1.0) * math.log(q / p)))


@pytest.mark.parametrize("p", [0.5, 0.5005, 0.502, 0.7])
def test_points_between_the_nodes_have_the_exact_law(p: float) -> None:
    # At n = 10^6 the nodes are 44 apart; 60 classes of equal probability.
    copies, size = 10**6, 40_000
    middle, width = copies * (1 - p), math.sqrt(copies * p * (1 - p))
    lower = np.arange(max(0, int(middle - 9 * width)), min(copies // 2, int(middle + 9 * width)) + 1)
    cumulative = np.cumsum(qubit_law(p, copies, lower))
    assert cumulative[-1] == pytest.approx(1.0, abs=1e-8)
    cuts = np.unique(np.searchsorted(cumulative, np.arange(1, 60) / 60))
    drawn = draw_determinantal(np.array([p, 1 - p]), copies, size, np.random.default_rng(7))[:, 1]
    observed = np.bincount(np.searchsorted(lower[cuts], drawn), minlength=len(cuts) + 1).astype(np.float64)
    expected = size * np.diff(np.concatenate([[0.0], cumulative[cuts], [1.0]]))
    assert chi_square_p_value(observed, expected) > FALSE_ALARM


@pytest.mark.parametrize(
    "spectrum",
    [
        np.array([0.4, 0.3, 0.2, 0.1]),
        maximally_mixed(4),
        np.array([0.25 + 1e-12, 0.25, 0.25, 0.25 - 1e-12]),
        np.array([0.4, 0.2, 0.2, 0.2]),
        np.array([0.999, 8e-4, 1.999e-4, 1e-7]),
        geometric(6, 0.4),
    ],
    ids=["separated", "uniform", "near ties", "tied triple", "tiny ones", "geometric"],
)
def test_marginals_agree_with_insertion(spectrum: FloatArray) -> None:
    # Kolmogorov-Smirnov with ties is conservative; 2 d tests a spectrum share the false alarm of one.
    copies, size = 10**4, 1_000
    fast = draw_determinantal(spectrum, copies, 4 * size, np.random.default_rng(11))
    slow = draw_by_insertion(spectrum, copies, size, np.random.default_rng(12))
    d = len(spectrum)
    for k in range(d):
        for statistic in (lambda shapes, k=k: shapes[:, k], lambda shapes, k=k: shapes[:, k] - shapes[:, (k + 1) % d]):
            p_value = stats.ks_2samp(statistic(fast), statistic(slow)).pvalue
            assert p_value > FALSE_ALARM / (2 * d)


def centred_purity(shapes: IntArray, spectrum: FloatArray, copies: int) -> FloatArray:
    """Character of a transposition minus sum p^2: 2 (contents)/(n (n-1)), with the large terms taken out exactly."""
    base = np.round(copies * spectrum).astype(np.int64)
    index = np.arange(len(spectrum))
    exact = Fraction(sum(b * (b - 1 - 2 * i) for i, b in enumerate(base.tolist())), copies * (copies - 1))
    p = [Fraction(value) for value in spectrum.tolist()]
    exact -= sum(value**2 for value in p) / sum(p) ** 2
    rest = (shapes - base).astype(np.float64)
    moved = (rest * (2.0 * base - 1.0 - 2.0 * index) + rest**2).sum(axis=1)
    return np.asarray(moved / (copies * (copies - 1.0)) + float(exact))


@pytest.mark.parametrize("copies", [10**5, 10**9])
@pytest.mark.parametrize(
    "spectrum",
    [
        maximally_mixed(4),
        geometric(4, 0.5),
        np.array([0.25 + 1e-12, 0.25, 0.25, 0.25 - 1e-12]),
        np.array([0.35, 0.35, 0.15, 0.15]),
        spiked(4, 0.9999),
        np.array([0.25 + 2e-5, 0.25 + 1e-5, 0.25 - 1e-5, 0.25 - 2e-5]),
    ],
    ids=["uniform", "geometric", "near ties", "two groups", "spiked", "one deviation apart"],
)
def test_mean_of_the_swap_character_is_the_purity(spectrum: FloatArray, copies: int) -> None:
    # E chi(transposition)/f = sum p^2 for every n; for tied rows this is a test of the repulsion itself.
    # Two-sided normal test at 4 standard errors: false alarm 6e-5.
    shapes = draw_determinantal(spectrum, copies, 10_000, np.random.default_rng(31))
    values = centred_purity(shapes, spectrum, copies)
    assert abs(values.mean()) < 4.0 * values.std() / math.sqrt(len(values))


def test_two_equal_rows_are_as_far_apart_as_gue_eigenvalues() -> None:
    # (row 1 - row 2)/sqrt(n) tends to the chi law with 3 degrees of freedom, the gap of a traceless 2 x 2 GUE
    # matrix (Johansson, Ann. Math. 153 (2001) 259); the correction at n = 10^8 is of the order n^(-1/2).
    # Kolmogorov-Smirnov: false alarm 1e-4.
    copies, size = 10**8, 40_000
    shapes = draw_determinantal(maximally_mixed(2), copies, size, np.random.default_rng(5))
    gap = (shapes[:, 0] - shapes[:, 1] + 1.0) / math.sqrt(copies)
    assert stats.kstest(gap, stats.chi(3).cdf).pvalue > FALSE_ALARM


@settings(deadline=None, max_examples=40)
@given(
    weights=st.lists(st.floats(0.0, 1.0), min_size=1, max_size=16).filter(lambda w: sum(w) > 1e-6),
    copies=st.integers(1, 10**9),
    seed=st.integers(0, 2**32 - 1),
)
def test_draws_are_shapes_of_the_right_size(weights: list[float], copies: int, seed: int) -> None:
    spectrum = np.sort(np.array(weights) / math.fsum(weights))[::-1].copy()
    shapes = draw_determinantal(spectrum, copies, 3, np.random.default_rng(seed))
    assert shapes.dtype == np.int64
    assert shapes.shape == (3, len(spectrum))
    assert (shapes.sum(axis=1) == copies).all()
    assert (np.diff(shapes, axis=1) <= 0).all()
    assert (shapes >= 0).all()
    assert (shapes[:, spectrum == 0.0] == 0).all()


@pytest.mark.parametrize("spectrum", [[1.0], [1.0, 0.0, 0.0], [1.0, 1e-30]])
def test_pure_states_give_one_row(spectrum: list[float]) -> None:
    shapes = draw_determinantal(np.array(spectrum), 10**9, 2, np.random.default_rng(1))
    assert shapes.tolist() == [[10**9] + [0] * (len(spectrum) - 1)] * 2


def test_no_draws_give_an_empty_array() -> None:
    assert draw_determinantal(maximally_mixed(3), 100, 0, np.random.default_rng(1)).shape == (0, 3)


def test_draws_follow_from_the_seed_alone() -> None:
    spectrum = power_law(5, 1.0)
    first = draw_determinantal(spectrum, 10**6, 20, np.random.default_rng(99))
    draw_determinantal(spectrum, 10**7, 1, np.random.default_rng(0))
    np.testing.assert_array_equal(first, draw_determinantal(spectrum, 10**6, 20, np.random.default_rng(99)))
    assert (first != draw_determinantal(spectrum, 10**6, 20, np.random.default_rng(98))).any()


def test_sixteen_rows_at_a_thousand_million_copies() -> None:
    # The mean of each row lies within 2 sqrt(n min(1, d p)) of n p (O'Donnell and Wright, arXiv:1612.00034).
    for spectrum in (maximally_mixed(16), geometric(16, 0.25), spiked(16, 0.999)):
        shapes = draw_determinantal(spectrum, 10**9, 30, np.random.default_rng(16))
        assert (shapes.sum(axis=1) == 10**9).all()
        bound = 2.0 * np.sqrt(1e9 * np.minimum(1.0, 16 * spectrum))
        spread = shapes.std(axis=0) / math.sqrt(30)
        assert (np.abs(shapes.mean(axis=0) - 1e9 * spectrum) <= bound + 5.0 * spread).all()


def test_what_is_not_covered_is_refused() -> None:
    with pytest.raises(NotCoveredError, match="at most 16 eigenvalues and 1000000000000 copies, got 17 and 1000"):
        draw_determinantal(maximally_mixed(17), 1000, 1, np.random.default_rng(1))
    with pytest.raises(NotCoveredError, match="got 2 and 10000000000000"):
        draw_determinantal(maximally_mixed(2), 10**13, 1, np.random.default_rng(1))


def test_negative_probabilities_are_refused() -> None:
    sampler = determinantal.sampler_of((0.5, 0.3, 0.2), 50)
    bases = sampler.bases.copy()
    bases[0, :, 0] *= -1.0
    with pytest.raises(NotCoveredError, match=r"probabilities above -1e-08 of their bound, got -"):
        replace(sampler, bases=bases).draw_batch(20, np.random.default_rng(1))


def test_an_envelope_that_is_too_low_is_refused() -> None:
    sampler = determinantal.sampler_of((0.5, 0.3, 0.2), 50)
    low = replace(sampler, heights=0.5 * sampler.heights, cumulative=0.5 * sampler.cumulative)
    with pytest.raises(NotCoveredError, match="densities below their envelope"):
        low.draw_batch(20, np.random.default_rng(1))
    with pytest.raises(NotCoveredError, match="densities below their envelope"):
        replace(sampler, ceiling=0.1 * sampler.ceiling).draw_batch(200, np.random.default_rng(1))

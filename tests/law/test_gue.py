"""The Gaussian unitary ensemble and the limit law of the rows."""

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from scipy import special

from entropest.errors import ArgumentValueError
from entropest.law.gue import gue_eigenvalues, gue_row_means, limit_row_means, limit_rows, tie_groups
from entropest.law.insertion import draw_by_insertion
from entropest.law.limits import TRACY_WIDOM_MEAN, TRACY_WIDOM_VARIANCE
from entropest.spectra import maximally_mixed


def test_largest_eigenvalue_means(check_values: Callable[[str], Any]) -> None:
    # Mehta, Random Matrices; 2/sqrt(pi) and 27/(8 sqrt(pi)) for 2 and 3.
    name = "mean largest eigenvalue, traceless GUE with density ~ Delta^2 exp(-sum x^2/2), d=2,3,4,5"
    for size, published in zip(range(2, 6), check_values(name), strict=True):
        assert gue_row_means(size)[0] == pytest.approx(published, abs=1e-12)
    assert gue_row_means(2)[0] == pytest.approx(2 / math.sqrt(math.pi), abs=1e-12)
    assert gue_row_means(3)[0] == pytest.approx(27 / (8 * math.sqrt(math.pi)), abs=1e-12)


@pytest.mark.parametrize("size", [1, 2, 6, 25])
def test_means_are_symmetric_and_decrease(size: int) -> None:
    means = gue_row_means(size)
    assert np.abs(means + means[::-1]).max() < 1e-12
    assert (np.diff(means) < 0).all()


@pytest.mark.parametrize("traceless", [False, True])
def test_simulated_means(traceless: bool) -> None:
    # Five standard errors for each of four rows: false alarm below 1e-5.
    draws = gue_eigenvalues(4, 40_000, traceless=traceless, rng=1)
    assert (np.abs(draws.mean(axis=0) - gue_row_means(4)) < 5 * draws.std(axis=0) / 200).all()
    # E Tr H^2 = d^2, one less without the trace; its variance is 2 d^2.
    squares = (draws**2).sum(axis=-1)
    assert abs(squares.mean() - (15 if traceless else 16)) < 5 * math.sqrt(2 * 16 / 40_000)
    assert not traceless or np.abs(draws.sum(axis=-1)).max() < 1e-12


def test_largest_eigenvalue_approaches_the_tracy_widom_mean() -> None:
    # 2 sqrt(d) + m d^(-1/6) with a correction of order d^(-5/6) (Tracy and Widom 1994).
    for size in (25, 100):
        edge = 2 * math.sqrt(size) + TRACY_WIDOM_MEAN * size ** (-1 / 6)
        assert abs(gue_row_means(size)[0] - edge) < 0.25 * size ** (-5 / 6)


def tracy_widom_cdf(s: float) -> float:
    """Fredholm determinant of the Airy kernel on (s, 16) by Gauss-Legendre quadrature (Bornemann 2010)."""
    nodes, weights = np.polynomial.legendre.leggauss(60)
    half = (16.0 - s) / 2.0
    x, w = s + half * (nodes + 1.0), half * weights
    value, slope, _, _ = special.airy(x)
    gap = x[:, None] - x[None, :] + np.eye(60)
    kernel = (np.outer(value, slope) - np.outer(slope, value)) / gap
    np.fill_diagonal(kernel, slope**2 - x * value**2)
    root = np.sqrt(w)
    return float(np.linalg.det(np.eye(60) - root[:, None] * kernel * root[None, :]))


def test_tracy_widom_moments(check_values: Callable[[str], Any]) -> None:
    # Tracy and Widom 1994; Bornemann 2010. E X and E X^2 from the distribution function by parts on (-10, 10).
    nodes, weights = np.polynomial.legendre.leggauss(120)
    cdf = np.array([tracy_widom_cdf(10.0 * s) for s in nodes])
    mean = 10.0 - 10.0 * weights @ cdf
    second = 100.0 - 200.0 * (weights * nodes) @ cdf
    published = check_values("Tracy-Widom (unitary) mean and variance")
    assert [mean, second - mean**2] == pytest.approx(published, abs=1e-9)
    assert published == [TRACY_WIDOM_MEAN, TRACY_WIDOM_VARIANCE]


def test_ties_are_found() -> None:
    assert tie_groups([0.4, 0.3, 0.3, 0.0]) == (slice(0, 1), slice(1, 3), slice(3, 4))
    assert tie_groups([0.5 + 5e-14, 0.5 - 5e-14]) == (slice(0, 2),)
    assert tie_groups([0.5 + 5e-10, 0.5 - 5e-10]) == (slice(0, 1), slice(1, 2))
    assert tie_groups([0.5 + 5e-10, 0.5 - 5e-10], tie=1e-8) == (slice(0, 2),)
    assert tie_groups([1.0, 0.0, 0.0]) == (slice(0, 1), slice(1, 3))


def test_uniform_limits(check_values: Callable[[str], Any]) -> None:
    # Johansson 2001: limit of (E row_1 - n/d)/sqrt(n).
    published = check_values("uniform spectrum: limit of (E lambda_1 - n/d)/sqrt(n), d=2,3,4")
    assert [limit_row_means(maximally_mixed(d))[0] for d in (2, 3, 4)] == pytest.approx(published, abs=6e-4)


@pytest.mark.parametrize("spectrum", [[0.4, 0.4, 0.1, 0.1], [0.25] * 4, [0.5, 0.3, 0.2], [0.5, 0.5, 0.0]])
def test_limit_law_against_exact_draws(spectrum: list[float]) -> None:
    # Means: the shift of order 1 leaves 2/sqrt(n) (measured: below 2 boxes), plus five standard errors.
    copies, size = 40_000, 3_000
    p = np.array(spectrum)
    draws = draw_by_insertion(p, copies, size, np.random.default_rng(1))
    scaled = (draws - copies * p) / math.sqrt(copies)
    limits = limit_rows(p, 40_000, rng=2)
    assert np.abs(limits.sum(axis=-1)).max() < 1e-12
    noise = 5 * scaled.std(axis=0) / math.sqrt(size)
    assert (np.abs(scaled.mean(axis=0) - limit_row_means(p)) <= noise + 2 / math.sqrt(copies)).all()
    assert (np.abs(limits.mean(axis=0) - limit_row_means(p)) <= 5 * limits.std(axis=0) / 200 + 1e-12).all()
    # A sample variance has relative error sqrt(2/size), more at fat tails: five of 1.2 times that.
    bound = 5 * 1.2 * math.sqrt(2 / size) + 0.02
    assert limits.std(axis=0) ** 2 == pytest.approx(scaled.std(axis=0) ** 2, rel=bound, abs=1e-12)
    joint = [np.cov(sample[:, 0], sample[:, 1])[0, 1] for sample in (limits, scaled)]
    assert joint[0] == pytest.approx(joint[1], abs=bound * limits[:, 0].std() * limits[:, 1].std())


def test_sizes_out_of_range_are_refused() -> None:
    with pytest.raises(ArgumentValueError, match="size must be at most 100, got 101"):
        gue_row_means(101)
    with pytest.raises(ArgumentValueError, match="samples must be at least 0, got -1"):
        gue_eigenvalues(2, -1)
    with pytest.raises(ArgumentValueError, match="size must be at least 0, got -1"):
        limit_rows([0.5, 0.5], -1)
    assert limit_rows([1.0], 3, rng=1).tolist() == [[0.0]] * 3

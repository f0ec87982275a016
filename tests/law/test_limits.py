"""Limit laws and bounds against exact enumeration and exact draws."""

import math
from collections.abc import Callable
from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import gammaln

from entropest._types import FloatArray, IntArray
from entropest.errors import ArgumentValueError
from entropest.law.gue import limit_rows
from entropest.law.insertion import draw_by_insertion
from entropest.law.limits import (
    chi_square_limit,
    first_order_bias,
    limit_covariance,
    mean_row_bounds,
    mean_shifts,
    plug_in_bias,
    squared_error_limit,
    uniform_first_row,
)
from entropest.law.plancherel import plancherel_rows
from entropest.shapes import all_shapes, log_standard_tableaux
from entropest.spectra import as_spectrum, geometric, maximally_mixed
from tests.certification.exact import outcome_law

DISTINCT = [Fraction(6, 10), Fraction(3, 10), Fraction(1, 10)]


def exact_rows(spectrum: list[Fraction], copies: int) -> tuple[IntArray, FloatArray]:
    """All shapes and their probabilities, by Jacobi-Trudi determinants of fractions."""
    law = outcome_law(spectrum, copies)
    rows = np.array([d.rows + (0,) * (len(spectrum) - len(d.rows)) for d in law])
    return rows, np.array([float(p) for p in law.values()])


def qubit_law(p: float, copies: int) -> tuple[IntArray, FloatArray]:
    """The law for two eigenvalues p, 1 - p: f^lambda times a geometric sum of powers, for many copies."""
    shapes = all_shapes(copies, 2)
    gap = shapes[:, 0] - shapes[:, 1] + 1
    log_ratio = math.log((1.0 - p) / p)
    series = gap if log_ratio == 0.0 else np.expm1(gap * log_ratio) / math.expm1(log_ratio)
    log_schur = shapes[:, 0] * math.log(p) + shapes[:, 1] * math.log1p(-p) + np.log(series)
    return shapes, np.exp(log_standard_tableaux(shapes) + log_schur)


def uniform_law(d: int, copies: int) -> tuple[IntArray, FloatArray]:
    """The law for d equal eigenvalues: f^lambda times Weyl's dimension over d^n."""
    shapes = all_shapes(copies, d)
    parts = shapes + np.arange(d - 1, -1, -1)
    upper, lower = np.triu_indices(d, k=1)
    log_dimension = np.log(parts[:, upper] - parts[:, lower]).sum(axis=1) - gammaln(np.arange(1.0, d + 1.0)).sum()
    return shapes, np.exp(log_standard_tableaux(shapes) + log_dimension - copies * math.log(d))


def entropy(frequencies: FloatArray) -> FloatArray:
    return np.asarray(-(frequencies * np.log(np.where(frequencies > 0, frequencies, 1.0))).sum(axis=-1))


def test_mean_shifts_of_distinct_eigenvalues(check_values: Callable[[str], Any]) -> None:
    # Limit 1.2, -.5, -.7 (Its, Tracy, Widom 2001 for the first row); exact means at n = 120.
    assert mean_shifts([0.6, 0.3, 0.1]) == pytest.approx([1.2, -0.5, -0.7], abs=1e-12)
    published = check_values("mean row shifts E lambda_i - n p_i, p=(.6,.3,.1), n=120")
    assert mean_shifts([0.6, 0.3, 0.1]) == pytest.approx(published, abs=1e-4)
    rows, probabilities = exact_rows(DISTINCT, 60)
    assert probabilities @ rows - 60 * np.array([0.6, 0.3, 0.1]) == pytest.approx([1.2, -0.5, -0.7], abs=0.02)
    assert mean_shifts([1.0, 0.0, 0.0]).tolist() == [0.0, 0.0, 0.0]


@given(st.lists(st.integers(1, 1000), min_size=1, max_size=6, unique=True))
def test_mean_shifts_sum_to_zero_and_add_to_the_first_row(weights: list[int]) -> None:
    shifts = mean_shifts(as_spectrum(weights, normalize=True))
    assert shifts.sum() == pytest.approx(0.0, abs=1e-9 * np.abs(shifts).max())
    assert (np.cumsum(shifts) >= -1e-9 * np.abs(shifts).max()).all()


def test_covariance_of_distinct_eigenvalues() -> None:
    # The correction to the covariance is of order 1: here 2.65 (measured at n = 60).
    rows, probabilities = exact_rows(DISTINCT, 60)
    centred = rows - probabilities @ rows
    exact = (centred * probabilities[:, None]).T @ centred / 60
    assert np.abs(exact - limit_covariance([0.6, 0.3, 0.1])).max() < 2.7 / 60
    shapes, probabilities = qubit_law(0.7, 20_000)
    mean = probabilities @ shapes[:, 0]
    assert probabilities @ (shapes[:, 0] - mean) ** 2 / 20_000 == pytest.approx(0.21, abs=1e-3)


@pytest.mark.parametrize("function", [mean_shifts, limit_covariance])
def test_ties_are_refused_where_the_limit_differs(function: Callable[[list[float]], FloatArray]) -> None:
    with pytest.raises(ArgumentValueError, match=r"positive eigenvalues must be distinct, got 0.4 2 times"):
        function([0.4, 0.4, 0.2])


@pytest.mark.parametrize("copies", [1, 4, 11, 20])
@pytest.mark.parametrize(
    "spectrum",
    [DISTINCT, [Fraction(1, 3)] * 3, [Fraction(1, 4)] * 4, [Fraction(9, 10), Fraction(1, 20), Fraction(1, 20)]],
)
def test_exact_means_lie_within_the_row_bounds(spectrum: list[Fraction], copies: int) -> None:
    rows, probabilities = exact_rows(spectrum, copies)
    mean = probabilities @ rows
    bounds = mean_row_bounds(np.array(spectrum, dtype=float), copies)
    assert (bounds.lower <= mean + 1e-9).all()
    assert (mean <= bounds.upper + 1e-9).all()


def test_row_bounds_with_zeros_and_many_copies() -> None:
    bounds = mean_row_bounds([0.5, 0.5, 0.0], 100)
    assert bounds.lower == pytest.approx([50.0, 30.0, 0.0])
    assert bounds.upper == pytest.approx([70.0, 50.0, 0.0])
    draws = draw_by_insertion(geometric(8, 0.5), 3000, 400, np.random.default_rng(1)).mean(axis=0)
    wide = mean_row_bounds(geometric(8, 0.5), 3000)
    assert (wide.lower <= draws + 10.0).all()
    assert (draws <= wide.upper + 10.0).all()


@pytest.mark.parametrize(("d", "copies", "size"), [(8, 300, 8000), (16, 1000, 3000), (16, 60, 8000), (32, 300, 2000)])
def test_first_row_of_large_uniform_spectra(d: int, copies: int, size: int) -> None:
    # Documented: a tenth of the standard deviation, and 5 percent for it; five standard errors besides.
    first = draw_by_insertion(maximally_mixed(d), copies, size, np.random.default_rng(1))[:, 0]
    formula = uniform_first_row(d, copies)
    assert abs(first.mean() - formula.mean) < (0.1 + 5 / math.sqrt(size)) * first.std()
    assert formula.standard_deviation == pytest.approx(first.std(), rel=0.05 + 5 * math.sqrt(0.5 / size))
    assert first.mean() - 5 * first.std() / math.sqrt(size) < copies / d + 2 * math.sqrt(copies)


def test_first_row_of_vanishing_eigenvalues_is_that_of_permutations() -> None:
    # The mean is off by about .25 n^(-1/3) (Bornemann 2024): measured .06 at 60 boxes.
    exact, formula = plancherel_rows(60), uniform_first_row(10**12, 60)
    assert formula.mean == pytest.approx(exact.mean[0], abs=0.1)
    assert formula.standard_deviation == pytest.approx(math.sqrt(exact.variance[0]), rel=0.02)
    assert uniform_first_row(1, 5).standard_deviation == 0.0


def test_risk_limits_of_uniform_spectra() -> None:
    # d - 1/d and d^2 - 1, bounds d and of order d^2: O'Donnell and Wright 2016, 2017.
    for d in (1, 2, 3, 8):
        assert squared_error_limit(maximally_mixed(d)) == pytest.approx(d - 1 / d)
        assert chi_square_limit(maximally_mixed(d)) == d * d - 1
    # With 3 equal eigenvalues the exact value falls short by an amount of order n^(-1/2).
    gaps = []
    for copies in (40, 160):
        shapes, probabilities = uniform_law(3, copies)
        gaps.append(8 - probabilities @ ((shapes / copies - 1 / 3) ** 2).sum(axis=1) * 3 * copies)
    assert gaps[0] < 2.5
    assert 1.6 < gaps[0] / gaps[1] < 2.4


@pytest.mark.parametrize("spectrum", [[0.4, 0.4, 0.1, 0.1], [0.5, 0.3, 0.2], [0.25] * 4, [0.5, 0.5, 0.0]])
def test_risk_limits_are_those_of_the_limit_law(spectrum: list[float]) -> None:
    p = np.array(spectrum)
    squares = limit_rows(p, 60_000, rng=3) ** 2
    weighted = squares[:, p > 0] / p[p > 0]
    assert abs(squares.sum(axis=1).mean() - squared_error_limit(p)) < 5 * squares.sum(axis=1).std() / math.sqrt(60_000)
    assert abs(weighted.sum(axis=1).mean() - chi_square_limit(p)) < 5 * weighted.sum(axis=1).std() / math.sqrt(60_000)


def test_published_plug_in_bias(check_values: Callable[[str], Any]) -> None:
    # p = (.7, .3), n = 1600, exact: -1.135/n; limit -1.13547/n.
    published = check_values("plug-in entropy bias times n, p=(.7,.3), n=1600")
    assert 1600 * plug_in_bias([0.7, 0.3], 1600) == pytest.approx(published, abs=6e-4)
    assert 1600 * plug_in_bias([0.7, 0.3], 1600) == pytest.approx(-1.13547, abs=5e-6)
    shapes, probabilities = qubit_law(0.7, 1600)
    exact = probabilities @ entropy(shapes / 1600) - entropy(np.array([0.7, 0.3]))
    assert 1600 * exact == pytest.approx(published, abs=6e-4)


def test_plug_in_bias_of_three_eigenvalues(check_values: Callable[[str], Any]) -> None:
    # Exact enumeration at n = 8, 16, 32, 40 digits; the first order is left by terms of order n^(-2).
    published = check_values("continuation estimator: exact bias of G_3 and of plug-in, p=(.6,.3,.1)")
    errors = [abs(published[n][1] - plug_in_bias([0.6, 0.3, 0.1], int(n))) * int(n) for n in ("8", "16", "32")]
    assert errors[0] > errors[1] > errors[2]
    assert errors[2] < 0.15
    rows, probabilities = exact_rows(DISTINCT, 60)
    exact = probabilities @ entropy(rows / 60) - entropy(np.array([0.6, 0.3, 0.1]))
    assert 60 * exact == pytest.approx(60 * plug_in_bias([0.6, 0.3, 0.1], 60), abs=0.1)


def test_plug_in_bias_at_ties() -> None:
    # The uniform limit (d^2 - 1)/(2n); the next term is of order n^(-3/2), so the error times n falls like n^(-1/2).
    for d in (1, 2, 5):
        assert plug_in_bias(maximally_mixed(d), 10) == pytest.approx(-(d * d - 1) / 20)
    errors = []
    for copies in (2_500, 10_000, 40_000):
        shapes, probabilities = qubit_law(0.5, copies)
        exact = probabilities @ entropy(shapes / copies) - math.log(2.0)
        errors.append(copies * (exact - plug_in_bias([0.5, 0.5], copies)))
    assert errors[0] / errors[1] == pytest.approx(2.0, abs=0.1)
    assert errors[1] / errors[2] == pytest.approx(2.0, abs=0.1)
    assert abs(errors[2]) < 0.02


@given(st.floats(0.05, 0.45), st.floats(-9.0, -3.0), st.integers(1, 10**6))
def test_plug_in_bias_is_continuous_at_ties(p: float, exponent: float, copies: int) -> None:
    # Linear in the gap with a slope of a few, since the smaller eigenvalue stands before each quotient.
    gap = p * 10.0**exponent
    tied = plug_in_bias([p, p, 1.0 - 2.0 * p], copies)
    split = plug_in_bias([p + gap, p - gap, 1.0 - 2.0 * p], copies)
    assert split == pytest.approx(tied, rel=10.0 * 10.0**exponent)


@pytest.mark.parametrize("gap", [3e-6, 1e-5, 2e-5, 1e-4])
def test_divided_differences_agree_on_both_sides_of_their_switch(gap: float) -> None:
    p, q = 0.5 * (1 + gap), 0.5 * (1 - gap)
    closed = -(0.5 + q * math.log1p(2 * gap / (1 - gap)) / (p - q))
    assert plug_in_bias([p, q], 1) == pytest.approx(closed, rel=1e-9)


@pytest.mark.parametrize("spectrum", [DISTINCT, [Fraction(1, 3)] * 3, [Fraction(2, 5), Fraction(2, 5), Fraction(1, 5)]])
def test_first_order_bias_of_the_purity(spectrum: list[Fraction]) -> None:
    # E of sum_i row_i^2 - (2i - 1) row_i is n (n - 1) times the purity, so the plug-in is off by
    # (E sum_i (2i - 1) row_i / n - P)/n exactly; the formula has the limit of that.
    copies, p = 30, np.array(spectrum, dtype=float)
    rows, probabilities = exact_rows(spectrum, copies)
    exact = probabilities @ ((rows / copies) ** 2).sum(axis=1) - (p**2).sum()
    through_rows = (probabilities @ rows @ np.array([1, 3, 5]) / copies - (p**2).sum()) / copies
    assert exact == pytest.approx(through_rows, rel=1e-12)
    formula = first_order_bias(p, copies, gradient=2.0 * p, hessian=2.0 * np.eye(3))
    weighted_limit = ((2.0 * np.arange(3) + 1.0) @ p - (p**2).sum()) / copies
    assert formula == pytest.approx(weighted_limit, rel=1e-12)


def test_zero_eigenvalues_do_not_count_for_the_entropy() -> None:
    assert plug_in_bias([0.7, 0.3, 0.0], 50) == plug_in_bias([0.7, 0.3], 50)
    assert plug_in_bias([1.0, 0.0], 50) == 0.0


def test_bad_requests_are_refused() -> None:
    with pytest.raises(ArgumentValueError, match="eigenvalues must be positive for the bias of a general function"):
        first_order_bias([1.0, 0.0], 5, gradient=[1, 1], hessian=np.eye(2))
    with pytest.raises(ArgumentValueError, match=r"must have shapes \(2,\) and \(2, 2\), got \(3,\) and \(2, 2\)"):
        first_order_bias([0.5, 0.5], 5, gradient=[1, 1, 1], hessian=np.eye(2))
    with pytest.raises(ArgumentValueError, match="copies must be at least 1, got 0"):
        plug_in_bias([0.5, 0.5], 0)
    with pytest.raises(ArgumentValueError, match="copies must be at least 0, got -3"):
        mean_row_bounds([0.5, 0.5], -3)
    with pytest.raises(ArgumentValueError, match="d must be at least 1, got 0"):
        uniform_first_row(0, 5)

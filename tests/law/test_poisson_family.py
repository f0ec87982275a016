"""Poisson mass functions against arbitrary precision, and the bases of their span against exact values."""

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from entropest._mp import context
from entropest.law.poisson_family import charlier, groups_of_means, log_poisson, span_of_poissons

MEANS_FROM_TINY_TO_HUGE = [1e-15, 1e-3, 0.7, 3.0, 17.0, 400.0, 1e5, 2.5e8, 1e12]


@pytest.mark.parametrize("mean", MEANS_FROM_TINY_TO_HUGE)
def test_log_poisson_is_right_to_a_few_ulps_within_14_standard_deviations(mean: float) -> None:
    mp = context(50)
    width = max(1.0, math.sqrt(mean))
    x = np.unique(np.maximum(np.floor(mean + np.linspace(-14, 14, 57) * width), 0.0))
    log_mean = mp.log(mp.mpf(mean))
    exact = np.array([float(mp.mpf(v) * log_mean - mp.mpf(mean) - mp.loggamma(mp.mpf(v) + 1)) for v in x.tolist()])
    # The series serves |x - t| < (x + t)/10; outside, terms of size |x - t| are subtracted, and below 16 the
    # three terms of the definition.
    far = (x >= 16.0) & (np.abs(x - mean) >= 0.1 * (x + mean))
    size = 1.0 + np.abs(exact) + far * np.abs(x - mean) + (x < 16.0) * (x * abs(math.log(mean)) + mean)
    allowed = 8e-16 * size
    np.testing.assert_array_less(np.abs(log_poisson(x, mean) - exact), allowed)


@pytest.mark.parametrize("mean", [4.0, 9.5, 60.0])
def test_charlier_polynomials_are_orthonormal(mean: float) -> None:
    x = np.arange(400.0)
    values = charlier(x, mean, 60) * np.exp(0.5 * log_poisson(x, mean))[:, None]
    np.testing.assert_allclose(values.T @ values, np.eye(60), atol=1e-12)


def test_charlier_polynomial_of_degree_two_is_the_exact_one() -> None:
    # sqrt(2) q_2(x) = ((x - t)^2 - x) / t, from the definition of the Charlier polynomials.
    x = np.arange(30.0)
    np.testing.assert_allclose(
        charlier(x, 9.0, 3)[:, 2], ((x - 9.0) ** 2 - x) / 9.0 / math.sqrt(2.0), rtol=1e-13, atol=1e-13
    )


def distance_between_spans(first: np.ndarray, second: np.ndarray) -> float:
    first, _ = np.linalg.qr(first)
    second, _ = np.linalg.qr(second)
    return float(np.linalg.norm(second - first @ (first.T @ second), 2))


@pytest.mark.parametrize("means", [[3.0, 2.0, 0.5], [12.0, 10.0, 8.0], [2.1e6, 2.0995e6, 2.099e6]])
def test_span_of_separate_means_is_that_of_their_mass_functions(means: list[float]) -> None:
    t = np.array(means)
    low, high = max(0.0, t[-1] - 14 * math.sqrt(t[-1])), t[0] + 14 * math.sqrt(t[0]) + 30
    x = np.arange(math.floor(low), high, max(1, int(math.sqrt(t[-1]) / 16)))
    columns = span_of_poissons(t, x)
    half = np.exp(-0.5 * log_poisson(x, float(t.mean())))[:, None]
    got = columns.factors * np.exp(columns.log_scale)[:, None] * half
    plain = np.stack([np.exp(log_poisson(x, mean)) for mean in means], axis=1) * half
    assert distance_between_spans(plain, got) < 1e-11


@pytest.mark.parametrize("mean", [0.25, 3.0, 40.0])
def test_span_of_equal_means_holds_the_derivatives(mean: float) -> None:
    # The k-th derivative of the mass function in its mean is (-1)^k times its k-th backward difference.
    x = np.arange(200.0)
    columns = span_of_poissons(np.full(3, mean), x)
    half = np.exp(-0.5 * log_poisson(x, mean))[:, None]
    difference = np.exp(log_poisson(x, mean))
    derivatives = [difference]
    for _ in range(2):
        difference = np.diff(difference, prepend=0.0)
        derivatives.append(difference)
    assert (
        distance_between_spans(
            np.stack(derivatives, axis=1) * half,
            columns.factors * np.exp(columns.log_scale)[:, None] * half,
        )
        < 1e-12
    )


def test_divided_differences_of_small_means_are_exact() -> None:
    means = [Fraction(1, 8), Fraction(1, 4), Fraction(3, 2)]
    columns = span_of_poissons(np.array([1.5, 0.25, 0.125]), np.arange(12.0))
    got = columns.factors * np.exp(columns.log_scale)[:, None]
    for k in range(3):
        exact = [Fraction(0)] * 12
        for x in range(12):
            for i in range(k + 1):
                others = math.prod(means[i] - means[j] for j in range(k + 1) if j != i)
                exact[x] += means[i] ** x / others / math.factorial(x)
        scale = max(exact)
        np.testing.assert_allclose(got[:, k], [float(v / scale) for v in exact], rtol=1e-14)


@settings(deadline=None, max_examples=60)
@given(
    mean=st.floats(30.0, 1e9),
    offsets=st.lists(st.floats(-1.5, 1.5), min_size=2, max_size=16),
    closeness=st.sampled_from([1.0, 1e-3, 1e-9, 1e-15]),
)
def test_basis_of_close_means_is_well_conditioned(mean: float, offsets: list[float], closeness: float) -> None:
    t = np.sort(mean + closeness * math.sqrt(mean) * np.array(offsets))[::-1].copy()
    low = max(0.0, t[-1] - 16 * math.sqrt(t[-1]))
    x = np.arange(math.floor(low), t[0] + 16 * math.sqrt(t[0]), max(1, int(math.sqrt(mean) / 16)))
    columns = span_of_poissons(t, x)
    masses = [log_poisson(x, value) for value in t.tolist()]
    weight = np.logaddexp.reduce(masses, axis=0)
    assert np.linalg.cond(columns.factors * np.exp(columns.log_scale - 0.5 * weight)[:, None]) < 1e3


def test_groups_are_cut_at_gaps_measured_in_standard_deviations() -> None:
    means = np.array([1000.0, 990.0, 900.0, 1.0, 0.5])
    assert [means[g].tolist() for g in groups_of_means(means, 0.5)] == [[1000.0, 990.0], [900.0], [1.0, 0.5][:1], [0.5]]
    assert [means[g].tolist() for g in groups_of_means(means, 0.5, least_width=2.0)] == [
        [1000.0, 990.0],
        [900.0],
        [1.0, 0.5],
    ]

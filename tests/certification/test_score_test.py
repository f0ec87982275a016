"""The exact test on the fully symmetric outcome."""

import math
from fractions import Fraction
from itertools import product

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from entropest.binomial import clopper_pearson_lower, clopper_pearson_upper
from entropest.certification.plain import binomial_sum_tail, fresh_context, symmetric_probability
from entropest.certification.rules import ENTROPY_CAP
from entropest.certification.score_test import (
    score_lower_bound,
    score_p_value,
    step_entropy,
    step_symmetric_probability,
)
from tests.certification.exact import SPECTRA, complete_homogeneous, entropy


def test_clopper_pearson_limits_of_the_handbooks(check_values):
    # Clopper and Pearson 1934; the values stand in any handbook
    for successes, (low, high) in check_values("Clopper-Pearson 95% intervals for x of 100").items():
        assert clopper_pearson_lower(int(successes), 100, error=0.025) == pytest.approx(low, abs=5e-8)
        assert clopper_pearson_upper(int(successes), 100, error=0.025) == pytest.approx(high, abs=5e-8)


def test_step_spectrum_has_the_stated_entropy_and_symmetric_probability():
    for numerator in range(7, 60):
        level = Fraction(numerator, 7)
        full = numerator // 7
        spectrum = [1 / level] * full + ([1 - full / level] if numerator % 7 else [])
        assert step_entropy(float(level)) == pytest.approx(entropy(spectrum), abs=1e-14)
        h = complete_homogeneous(spectrum, 12)
        for copies in (2, 3, 7, 12):
            assert step_symmetric_probability(float(level), copies) == pytest.approx(float(h[copies]), rel=1e-13)


def test_no_spectrum_has_a_smaller_symmetric_probability_at_its_entropy():
    # derived in docs/theory.md; the adversary draws 4,000 spectra, ties and low rank among them
    generator = np.random.default_rng(20260101)
    for _ in range(4000):
        size = int(generator.integers(1, 7))
        weights = generator.gamma(generator.choice([0.1, 0.5, 1.0, 20.0]), size=size)
        spectrum = np.repeat(weights, generator.integers(1, 4, size=size))
        spectrum = spectrum / spectrum.sum()
        target = -float(np.sum(spectrum[spectrum > 0] * np.log(spectrum[spectrum > 0])))
        low, high = 1.0, 100.0
        for _ in range(60):
            middle = (low + high) / 2
            low, high = (low, middle) if step_entropy(middle) >= target else (middle, high)
        h = np.concatenate([[1.0], np.zeros(6)])
        for p in spectrum:
            for n in range(1, 7):
                h[n] += p * h[n - 1]
        for copies in (2, 3, 4, 6):
            assert h[copies] >= step_symmetric_probability(high, copies) - 1e-12


@given(st.floats(1.0, 1000.0), st.floats(1.0, 1000.0), st.integers(2, 20))
def test_entropy_rises_and_symmetric_probability_falls_with_the_level(first, second, copies):
    low, high = sorted([first, second])
    assert step_entropy(low) <= step_entropy(high) + 1e-12
    assert step_symmetric_probability(low, copies) >= step_symmetric_probability(high, copies) - 1e-12


def test_bound_at_two_copies_is_the_curve_of_harremoes_and_topsoe(check_values):
    # Harremoes and Topsoe 2001: least entropy at index of coincidence 0.4
    least = check_values("range of entropy at index of coincidence 0.4, d=4")[0]
    low, high = 1.0, 10.0
    for _ in range(60):
        middle = (low + high) / 2
        low, high = (middle, high) if 2 * step_symmetric_probability(middle, 2) - 1 >= 0.4 else (low, middle)
    assert step_entropy(low) == pytest.approx(least, abs=1e-11)


def test_p_value_of_one_block_size_is_the_binomial_tail():
    for symmetric in (0, 3, 17, 40):
        tail = sum(math.comb(40, j) * 0.75**j * 0.25 ** (40 - j) for j in range(symmetric + 1))
        assert score_p_value(symmetric, {2: 40}, 2.0) == pytest.approx(tail, rel=1e-8, abs=1e-12)


def test_p_value_of_mixed_block_sizes_equals_plain_enumeration():
    trials, level = {2: 5, 3: 4, 6: 3}, 2.5
    probabilities = {size: step_symmetric_probability(level, size) for size in trials}
    for observed in range(13):
        tail = 0.0
        for seen in product(*(range(blocks + 1) for blocks in trials.values())):
            if sum(seen) <= observed:
                tail += math.prod(
                    math.comb(trials[k], x) * probabilities[k] ** x * (1 - probabilities[k]) ** (trials[k] - x)
                    for k, x in zip(trials, seen, strict=True)
                )
        assert score_p_value(observed, trials, level) == pytest.approx(tail, rel=1e-7, abs=1e-11)
        assert score_p_value(observed, trials, level) >= tail - 1e-15


def test_p_value_of_large_mixed_records_agrees_with_exact_arithmetic():
    trials, level = {2: 4000, 3: 2500, 6: 900}, 2.25
    ctx = fresh_context()
    probabilities = {size: symmetric_probability(ctx.mpf(level), size, ctx) for size in trials}
    mean = float(sum(trials[size] * probabilities[size] for size in trials))
    for observed in (int(mean) - 250, int(mean) - 60, int(mean), int(mean) + 100):
        exact = float(binomial_sum_tail(observed, trials, probabilities, ctx))
        assert exact <= score_p_value(observed, trials, level) <= exact * (1 + 1e-7) + 1e-9


@pytest.mark.parametrize("name", SPECTRA)
@pytest.mark.parametrize("copies", [2, 3, 4])
def test_size_is_exact_over_all_tallies(name, copies):
    """P(bound > entropy), summed over every possible number of symmetric outcomes, is at most the error."""
    spectrum = SPECTRA[name]
    probability = complete_homogeneous(spectrum, copies)[copies]
    truth = entropy(spectrum)
    for blocks in (1, 7, 30):
        for error in (0.05, 0.3):
            wrong = sum(
                math.comb(blocks, x) * probability**x * (1 - probability) ** (blocks - x)
                for x in range(blocks + 1)
                if score_lower_bound(x, {copies: blocks}, error=error) > truth + 1e-12
            )
            assert wrong <= error


@given(st.integers(0, 50), st.floats(0.001, 0.5), st.floats(0.001, 0.5))
def test_bound_falls_with_more_symmetric_outcomes_and_with_smaller_error(symmetric, first, second):
    small, large = sorted([first, second])
    assert score_lower_bound(symmetric, {2: 50}, error=small) <= score_lower_bound(symmetric, {2: 50}, error=large)
    if symmetric < 50:
        more = score_lower_bound(symmetric + 1, {2: 50}, error=small)
        assert more <= score_lower_bound(symmetric, {2: 50}, error=small)


def test_extreme_records():
    assert score_lower_bound(100, {2: 100}, error=0.05) == 0.0
    assert score_lower_bound(0, {2: 100}, error=0.05) == ENTROPY_CAP
    # one antisymmetric pair: purity above 0.9 would make it rarer than 5%
    larger = (1 + math.sqrt(0.8)) / 2
    expected = -larger * math.log(larger) - (1 - larger) * math.log(1 - larger)
    assert score_lower_bound(0, {2: 1}, error=0.05) == pytest.approx(expected, abs=1e-9)

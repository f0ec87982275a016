"""The numerical parts of the law: error bounds, merging of near ties, lost digits, deviances."""

import math
from fractions import Fraction

import numpy as np
import pytest

from entropest import _mp
from entropest.law import bialternant, high_precision
from entropest.law.bialternant import TiedSpectrum
from entropest.law.leading import LOG_2_HIGH, LOG_2_LOW, deviance, stirling_remainder
from entropest.law.schur import exact_schur
from tests.law.spectra_for_tests import random_shape


def test_stirling_remainder():
    ctx = _mp.context(50)
    for count in [1, 2, 5, 15, 16, 17, 40, 1000, 10**6, 10**12]:
        exact = ctx.loggamma(count + 1) - (count + ctx.mpf(1) / 2) * ctx.log(count) + count - ctx.log(2 * ctx.pi) / 2
        assert stirling_remainder(np.array(float(count))) == pytest.approx(float(exact), abs=2e-14)


def test_log_of_two_is_split_exactly():
    ctx = _mp.context(50)
    assert (LOG_2_HIGH * 2**29).is_integer()
    assert abs(ctx.mpf(LOG_2_HIGH) + ctx.mpf(LOG_2_LOW) - ctx.log(2)) < 1e-25


@pytest.mark.parametrize("count", [1.0, 3.0, 1000.0, 1e6])
@pytest.mark.parametrize("quotient", [1.0, 1 + 1e-9, 0.999, 1.2, 1.23, 0.5, 3.0, 1e-9, 1e300])
def test_deviance(count, quotient):
    ctx = _mp.context(50)
    mean = count / quotient
    exact = count * ctx.log(ctx.mpf(count) / mean) - count + mean
    whole, exponent = deviance(np.array(count), np.array(mean))
    value = ctx.mpf(float(whole)) + count * int(exponent) * ctx.log(2)
    # Rounding of the quotient and of its logarithm, below log 2.
    assert abs(value - exact) <= 4e-16 * max(count, mean) * min(abs(quotient - 1.0), 1.0) + 1e-16


def cases(seed, count, largest=8, most_copies=10**5):
    rng = np.random.default_rng(seed)
    for _ in range(count):
        d, copies = int(rng.integers(2, largest + 1)), round(10 ** rng.uniform(1, math.log10(most_copies)))
        spectrum = rng.dirichlet(np.ones(d))
        if rng.random() < 0.7:
            spectrum = rng.choice(spectrum, d) * (1 + 10 ** rng.uniform(-12, -2) * rng.standard_normal(d))
        spectrum = -np.sort(-spectrum / math.fsum(spectrum))
        yield spectrum, copies, random_shape(spectrum, copies, rng)


def test_bound_on_the_error_of_the_determinant():
    """The bound covers the error, whether it is accepted or not, down to total loss."""
    for spectrum, copies, shape in cases(seed=1, count=80):
        unmerged = TiedSpectrum.merging(spectrum, copies, limit=0.0)
        ratios = bialternant.log_ratios(shape[None], unmerged)
        values = [Fraction(float(value)) for value in unmerged.values]
        exact = high_precision.log_schur_ratios(values, [shape.tolist()], 30)[0][0]
        if ratios.error[0] < 0.1:
            assert abs(ratios.log_ratio[0] - exact) <= ratios.error[0] + 4e-15 * abs(exact) + 1e-14
            assert ratios.condition[0] >= len(spectrum) * (1 - 1e-6)


def test_bound_on_the_error_of_the_contents():
    for spectrum, copies, shape in cases(seed=2, count=60):
        unmerged = TiedSpectrum.merging(spectrum, copies, limit=0.0)
        contents, errors = bialternant.mean_contents(shape[None], unmerged)
        values = [Fraction(float(value)) for value in unmerged.values]
        exact = np.array(high_precision.mean_contents(values, [shape.tolist()], 30)[0])
        small = errors[0] < 0.1
        assert (np.abs(contents[0] - exact)[small] <= errors[0][small] + 1e-14 * exact[small]).all()
        assert exact.sum() == pytest.approx(copies, rel=1e-13)


def test_total_loss_is_noticed():
    spectrum = np.full(8, 1 / 8) * (1 + 1e-9 * np.arange(8)[::-1])
    unmerged = TiedSpectrum.merging(spectrum / spectrum.sum(), 1000, limit=0.0)
    shape = np.array([[200, 170, 150, 130, 110, 90, 80, 70]])
    assert not bialternant.log_ratios(shape, unmerged).error[0] < 1.0
    assert not (bialternant.mean_contents(shape, unmerged)[1] < 1.0).all()


def test_merging_near_ties_moves_nothing():
    """The proved bound on the logarithm is limit^2 / 8 = 5e-11."""
    rng = np.random.default_rng(3)
    for copies in (10, 1000, 10**5):
        for d in (2, 3, 5):
            width = bialternant.MERGE_LIMIT / (copies * d)
            base = np.repeat([0.9, 0.3], [d // 2, d - d // 2])
            spectrum = -np.sort(-base * (1 + 0.4 * width * rng.uniform(-1, 1, d)))
            merged = TiedSpectrum.merging(spectrum, copies)
            assert merged.sizes == (d // 2, d - d // 2)
            shape = random_shape(spectrum, copies, rng)
            apart, together = (
                high_precision.schur([Fraction(float(v)) for v in values], shape.tolist(), 30)
                for values in (spectrum, merged.values)
            )
            # The merged values are rounded, which moves the logarithm by up to copies * 2^-53.
            assert abs(apart.context.log(apart / apart.context.convert(together))) <= 5e-11 + copies * 2.0**-52


def test_groups_are_no_wider_than_allowed():
    spectrum = np.array([0.4, 0.4 - 1e-9, 0.2 + 1e-9, 1e-200])
    assert TiedSpectrum.merging(spectrum, 10).sizes == (2, 1, 1)
    assert TiedSpectrum.merging(spectrum, 10**6).sizes == (1, 1, 1, 1)
    assert TiedSpectrum.merging(np.full(4, 0.25), 10**15).sizes == (4,)
    assert TiedSpectrum.merging(np.full(4, 0.25), 10**15).values.tolist() == [0.25] * 4


def test_no_more_digits_are_lost_than_stated():
    for spectrum, _, shape in cases(seed=4, count=40, largest=5, most_copies=10**3):
        values = [Fraction(float(value)) for value in spectrum]
        exact = exact_schur(tuple(int(row) for row in shape if row), values)
        value = high_precision.schur(values, shape.tolist(), 12)
        ctx = _mp.context(60)
        assert abs(ctx.convert(value) * exact.denominator / exact.numerator - 1) < 1e-12


def test_confluent_alternants_agree_with_exact_rationals():
    for values in [(5, 5, 2), (3, 3, 3), (4, 2, 2, 2), (3, 3, 1, 1)]:
        fractions = [Fraction(value, 7) for value in values]
        for rows in [(9, 4, 1, 0), (3, 3, 3, 3), (6, 0, 0, 0)]:
            shape = rows[: len(values)]
            exact = exact_schur(tuple(row for row in shape if row), fractions)
            assert float(high_precision.schur(fractions, shape, 25)) == pytest.approx(float(exact), rel=1e-15)

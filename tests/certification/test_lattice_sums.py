"""Tails of sums of many scores: transform, Chernoff's bound and the plain whole-number convolution."""

import math
from fractions import Fraction

import numpy as np
import pytest

from entropest.certification.lattice_sums import EXACT_BLOCKS, LatticeLaw, moments_of_sum, tail_bound
from entropest.certification.plain_chains import tail_of_sum

LAWS = {
    "one event": [(40, {1: Fraction(3, 4), 0: Fraction(1, 4)})],
    "three classes": [(25, {8: Fraction(1, 5), 7: Fraction(1, 2), 0: Fraction(3, 10)})],
    "two sizes": [(30, {2: Fraction(2, 3), 0: Fraction(1, 3)}), (12, {6: Fraction(1, 7), 1: Fraction(6, 7)})],
    "rare": [(200, {3: Fraction(999, 1000), 1: Fraction(1, 1000)})],
    "certain": [(9, {2: Fraction(1)})],
}


def as_laws(plain):
    return [
        LatticeLaw(blocks=n, scores=tuple(law), probabilities=np.array([float(q) for q in law.values()]))
        for n, law in plain
    ]


def exact_law(plain):
    """Distribution of the sum by plain convolution of fractions."""
    total = {0: Fraction(1)}
    for n, law in plain:
        for _ in range(n):
            new: dict[int, Fraction] = {}
            for value, weight in total.items():
                for score, q in law.items():
                    new[value + score] = new.get(value + score, Fraction(0)) + weight * q
            total = new
    return total


@pytest.mark.parametrize("name", LAWS)
def test_transform_and_plain_convolution_equal_fractions(name):
    law = exact_law(LAWS[name])
    for observed in range(0, max(law) + 2, 3):
        tail = sum(weight for value, weight in law.items() if value <= observed)
        bound = tail_bound(as_laws(LAWS[name]), observed)
        assert tail <= bound <= tail + Fraction(2, 10**9)
        assert tail <= tail_of_sum(LAWS[name], observed) <= tail + Fraction(1, 10**20)


@pytest.mark.parametrize("name", LAWS)
def test_moments(name):
    law = exact_law(LAWS[name])
    mean = sum(value * weight for value, weight in law.items())
    variance = sum(value**2 * weight for value, weight in law.items()) - mean**2
    assert moments_of_sum(as_laws(LAWS[name])) == pytest.approx((float(mean), float(variance)), abs=1e-10)


def test_transform_of_many_blocks_equals_plain_convolution():
    plain = [(30_000, {8: Fraction(1, 3), 7: Fraction(1, 6), 6: Fraction(1, 6), 0: Fraction(1, 3)})]
    mean, variance = moments_of_sum(as_laws(plain))
    for deviation in (-6.0, -2.0, -1.0, 0.5, 9.0):
        observed = round(mean + deviation * math.sqrt(variance))
        exact = tail_of_sum(plain, observed)
        bound = tail_bound(as_laws(plain), observed)
        assert exact <= bound <= exact + Fraction(12, 10**9)


@pytest.mark.parametrize("deviation", [-8.0, -3.0, -2.0, -0.5, 0.5])
def test_beyond_a_million_blocks_chernoff_bounds_the_normal_tail(deviation):
    # normal approximation of a sum of two million scores: relative error below 1% at these deviations, no source needed
    plain = [(2 * EXACT_BLOCKS, {2: Fraction(1, 4), 1: Fraction(1, 4), 0: Fraction(1, 2)})]
    mean, variance = moments_of_sum(as_laws(plain))
    observed = math.floor(mean + deviation * math.sqrt(variance))
    bound = tail_bound(as_laws(plain), observed)
    assert bound >= 0.99 * 0.5 * math.erfc(-deviation / math.sqrt(2.0))
    assert bound == pytest.approx(min(1.0, math.exp(-(deviation**2) / 2.0)) if deviation < 0.0 else 1.0, rel=0.02)
    assert float(tail_of_sum(plain, observed)) == pytest.approx(bound, rel=1e-6)


def test_chernoff_of_a_rare_event_and_of_the_impossible():
    rare = [(2 * EXACT_BLOCKS, {1: 1 - Fraction(1, 10**6), 0: Fraction(1, 10**6)})]
    bound = tail_bound(as_laws(rare), 2 * EXACT_BLOCKS - 9)
    exponent = 2 - 9 + 9 * math.log(9 / 2)  # Chernoff's bound of a Poisson variable of mean 2 at 9
    assert bound == pytest.approx(math.exp(-exponent), rel=1e-3)
    assert float(tail_of_sum(rare, 2 * EXACT_BLOCKS - 9)) == pytest.approx(bound, rel=1e-6)
    assert tail_bound(as_laws([(2 * EXACT_BLOCKS, {1: Fraction(1)})]), 5) == 1.0


def test_tail_at_the_largest_sum_is_one():
    for plain in LAWS.values():
        largest = sum(n * max(law) for n, law in plain)
        assert tail_bound(as_laws(plain), largest) == 1.0 == tail_of_sum(plain, largest)

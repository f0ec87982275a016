"""Statements of docs/derivations.md that no other test checks, against exact enumeration of the law."""

import math
from itertools import permutations

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import gammaln, rgamma

from entropest.estimation.expansion import expand
from entropest.estimation.power_sums import continuation_power_sum, entropy_continuation
from entropest.functionals import VonNeumann
from entropest.law.gue import gue_row_means
from entropest.law.limits import mean_shifts
from entropest.law.schur_weyl import SchurWeyl
from entropest.spectra import maximally_mixed


def test_mean_and_covariance_of_distinct_eigenvalues_are_exponentially_accurate():
    p = np.array([0.6, 0.3, 0.1])
    correction = np.divide(np.outer(p, p), (p[:, None] - p) ** 2, out=np.zeros((3, 3)), where=~np.eye(3, dtype=bool))
    correction -= np.diag(correction.sum(axis=1))
    for copies, error in ((120, 4e-3), (240, 5e-6)):
        table = SchurWeyl(p, copies).table()
        assert table.mean() == pytest.approx(copies * p + mean_shifts(p), abs=error)
        assert table.cov() == pytest.approx(copies * (np.diag(p) - np.outer(p, p)) + correction, abs=error)


def remainder(order, exponent, copies, p):
    """R_b of the theorem on continued power sums."""
    value, _ = quad(lambda t: (1 - p - t) ** (copies + exponent) * (p + t) ** (-order - exponent - 1), 0, 1 - p)
    scale = math.exp(gammaln(copies - order + 1) - gammaln(copies + exponent + 1))
    return scale * float(rgamma(-order - exponent)) * value


@pytest.mark.parametrize("order", [0.5, 1.5, 2.5])
@pytest.mark.parametrize(("spectrum", "copies"), [((0.6, 0.3, 0.1), 8), ((0.8, 0.2), 10)])
def test_bias_of_continued_power_sums_is_the_closed_form(spectrum, copies, order):
    d, bias = len(spectrum), 0.0
    vandermonde = math.prod(a - b for i, a in enumerate(spectrum) for b in spectrum[i + 1 :])
    for exponents in permutations(range(d - 1, -1, -1)):
        inversions = sum(a < b for i, a in enumerate(exponents) for b in exponents[i + 1 :])
        product = (-1) ** inversions * math.prod(p**e for p, e in zip(spectrum, exponents, strict=True))
        for p, exponent in zip(spectrum, exponents, strict=True):
            bias -= p**order * product * remainder(order, exponent, copies, p) / vandermonde
    table = SchurWeyl(spectrum, copies).table()
    mean = table.probabilities @ continuation_power_sum(table.shapes, order, d)
    assert mean - sum(p**order for p in spectrum) == pytest.approx(bias, rel=1e-8)


def test_second_order_variance_is_that_of_the_continued_entropy():
    for p in ([0.7, 0.3], [0.5, 0.3, 0.2]):
        found = expand(VonNeumann(), np.array(p))
        rest = []
        for copies in (150, 300):
            table = SchurWeyl(p, copies).table()
            values = entropy_continuation(table.shapes, len(p))
            variance = table.probabilities @ (values - table.probabilities @ values) ** 2
            rest.append(copies * (copies - 1) * (variance - found.first_order / copies) - found.second_order / 2)
        assert 0.0 < rest[1] < 0.55 * rest[0] < 0.02


def test_mean_rows_at_ties_have_the_third_moment_of_the_gue():
    # c = (.206, -.412, .206) at t = 3: simulated, 400,000 matrices, standard error .004.
    table = SchurWeyl(maximally_mixed(3), 800).table()
    limit = 800 / 3 + math.sqrt(800 / 3) * gue_row_means(3) + np.array([-1.0, 0.0, 1.0])
    assert table.mean() - limit == pytest.approx([0.206, -0.412, 0.206], abs=0.03)


def test_blocks_added_at_ties():
    # Ten blocks of 1600 qubits: n times the bias tends to -(1/2)[sum Var + m sum gamma^2], the error like k^(-1/2).
    table, blocks, size = SchurWeyl(maximally_mixed(2), 1600).table(), 10, 1600
    second = np.zeros(size + 1)
    second[table.shapes[:, 1]] = table.probabilities
    law = np.ones(1)
    for _ in range(blocks):
        law = np.convolve(law, second)
    x = np.arange(len(law)) / (blocks * size)
    bias = blocks * size * (law @ VonNeumann()(np.stack([1 - x, x], axis=1)) - math.log(2))
    squares = (gue_row_means(2) ** 2).sum()
    assert bias == pytest.approx(-0.5 * (3 - squares + blocks * squares), abs=0.6)

"""Second-order expansion of the plug-in estimate, and the exact jackknife."""

import math

import numpy as np
import pytest

from entropest.estimation.expansion import expand, jackknife_variance
from entropest.functionals import MinEntropy, PowerSum, RelativeEntropy, Renyi, Tsallis, Varentropy, VonNeumann
from entropest.law.limits import plug_in_bias
from entropest.law.schur_weyl import SchurWeyl
from entropest.shapes import all_shapes, down_probabilities
from entropest.spectra import geometric, maximally_mixed

SMOOTH = [VonNeumann(), VonNeumann(base=2), Renyi(2), Renyi(0.5), Tsallis(3), PowerSum(2), Varentropy()]


@pytest.mark.parametrize("p", [[0.7, 0.3], [0.5, 0.3, 0.2], [0.4, 0.4, 0.2], [0.25] * 4, [1.0], [0.6, 0.4, 0.0]])
def test_entropy_bias_is_the_closed_form(p):
    bias = expand(VonNeumann(), np.array(p)).bias(1000)
    assert bias == pytest.approx(plug_in_bias(p, 1000), rel=1e-7, abs=1e-15)


@pytest.mark.parametrize("p", [[0.7, 0.3], [0.5, 0.3, 0.2]])
@pytest.mark.parametrize("functional", SMOOTH, ids=repr)
def test_bias_and_variance_are_the_leading_terms_of_the_exact_ones(functional, p):
    """Exact enumeration at n and 2n: the error of n * bias and of n * variance halves, as a term of order 1/n does."""
    found = expand(functional, np.array(p))
    errors = []
    for copies in (150, 300):
        table = SchurWeyl(p, copies).table()
        values = np.asarray(functional(table.shapes / copies)) * functional.scale()
        mean = table.probabilities @ values
        variance = table.probabilities @ (values - mean) ** 2
        bias = mean - functional(p) * functional.scale()
        errors.append((copies * (bias - found.bias(copies)), copies * variance - found.first_order))
    for index, scale in enumerate((abs(150 * found.bias(150)), found.first_order)):
        first, second = abs(errors[0][index]), abs(errors[1][index])
        assert second < 0.15 * scale
        assert second < 0.65 * first or second < 0.005 * scale


def test_second_order_variance_is_the_whole_variance_at_equal_eigenvalues():
    """At the uniform spectrum the first order vanishes and Var S(rows/n) tends to (d^2 - 1)/(2 n^2)."""
    for d in (2, 3, 5):
        found = expand(VonNeumann(), maximally_mixed(d))
        assert found.first_order == pytest.approx(0.0, abs=1e-15)
        assert found.second_order == pytest.approx(d * d - 1, rel=1e-6)
    table = SchurWeyl(maximally_mixed(2), 400).table()
    values = VonNeumann()(table.shapes / 400)
    variance = table.probabilities @ (values - table.probabilities @ values) ** 2
    assert 400**2 * variance == pytest.approx(1.5, rel=0.05)


def test_several_blocks_are_shifted_each_but_curved_together():
    """Two blocks of 60 copies, added row by row: bias (curvature/2 + 2 shift)/120 up to order 1/n^2, exactly summed."""
    p = np.array([0.7, 0.3])
    table = SchurWeyl(p, 60).table()
    rows = (table.shapes[:, None, :] + table.shapes[None, :, :]) / 120
    weights = table.probabilities[:, None] * table.probabilities[None, :]
    bias = float((weights * VonNeumann()(rows)).sum()) - VonNeumann()(p)
    found = expand(VonNeumann(), p)
    assert bias == pytest.approx(found.bias(120, blocks=2), rel=0.08)
    assert abs(bias - found.bias(120, blocks=2)) < 0.2 * abs(bias - found.bias(120, blocks=1))


def test_functionals_with_kinks_have_first_order_terms_only():
    for functional in (MinEntropy(), Renyi(math.inf), RelativeEntropy([0.5, 0.5])):
        found = expand(functional, np.array([0.7, 0.3]))
        assert found.curvature == found.shift == found.second_order == 0.0
        assert found.first_order > 0.0


@pytest.mark.parametrize("functional", [*SMOOTH, MinEntropy()], ids=repr)
def test_jackknife_is_the_delete_one_variance(functional):
    """A plain loop over the rows that can lose a box."""
    for shape in all_shapes(9, 3):
        weights = down_probabilities(shape)
        values, chances = [], []
        for i in range(3):
            if weights[i] > 0:
                smaller = shape.copy()
                smaller[i] -= 1
                values.append(functional(smaller / 8) * functional.scale())
                chances.append(weights[i])
        mean = np.dot(chances, values)
        plain = 8 * np.dot(chances, (np.array(values) - mean) ** 2)
        assert jackknife_variance(functional, shape[None])[0] == pytest.approx(plain, abs=1e-14)


def test_jackknife_of_one_box_and_in_pieces(monkeypatch):
    assert jackknife_variance(VonNeumann(), np.array([[1, 0]])).tolist() == [0.0]
    array = all_shapes(14, 3)
    whole = jackknife_variance(VonNeumann(), array)
    monkeypatch.setattr("entropest.estimation.expansion._ELEMENTS_AT_ONCE", 30)
    assert jackknife_variance(VonNeumann(), array).tolist() == whole.tolist()


def test_jackknife_mean_approaches_the_variance():
    """Exact enumeration: E V_jack / Var S(rows/n) within a fifth of 1 for separated eigenvalues at n = 200."""
    p = geometric(3, 0.5)
    table = SchurWeyl(p, 200).table()
    values = VonNeumann()(table.shapes / 200)
    variance = table.probabilities @ (values - table.probabilities @ values) ** 2
    assert table.probabilities @ jackknife_variance(VonNeumann(), table.shapes) == pytest.approx(variance, rel=0.2)

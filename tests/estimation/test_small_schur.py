"""Schur polynomials of small shapes from positive terms."""

import json
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

from entropest.estimation.small_schur import LARGEST_SIZE, _kostka, schur_and_contents
from entropest.law.schur import schur_polynomial
from entropest.law.schur_weyl import SchurWeyl
from entropest.shapes import all_shapes
from entropest.spectra import geometric, low_rank, maximally_mixed

VALUES = json.loads((Path(__file__).parents[1] / "reference" / "check_values.json").read_text())["values"]


def test_kostka_numbers_of_four_boxes():
    """Source: Macdonald, Symmetric Functions and Hall Polynomials; shapes and weights 4, 3+1, 2+2, 2+1+1, 1+1+1+1."""
    published = next(v["value"] for v in VALUES if v["name"].startswith("Kostka numbers n=4"))
    assert _kostka(4)[0].tolist() == published


@pytest.mark.parametrize("size", [1, 2, 5, 8])
@pytest.mark.parametrize("spectrum", [geometric(4, 0.3), maximally_mixed(3), low_rank(5, 2), np.array([1.0])])
def test_values_and_gradients_are_those_of_the_law(size, spectrum):
    """Exact fractions for values; the gradient of log P, computed another way, for contents."""
    shapes = all_shapes(size, min(size, len(spectrum)))
    schur, contents = schur_and_contents(shapes, spectrum)
    exact = [float(schur_polynomial(row, [Fraction(float(x)) for x in spectrum])) for row in shapes.tolist()]
    assert schur == pytest.approx(np.array(exact), rel=1e-13, abs=1e-300)
    gradients = SchurWeyl(spectrum, size).logpmf_gradient(shapes)
    possible = schur > 0.0
    expected = spectrum * gradients[possible] * schur[possible, None]
    assert contents[possible] == pytest.approx(expected, rel=1e-8, abs=1e-300)


def test_contents_add_up_to_the_number_of_boxes():
    shapes = all_shapes(LARGEST_SIZE, 8)
    schur, contents = schur_and_contents(shapes, geometric(8, 0.7))
    assert contents.sum(axis=1) == pytest.approx(LARGEST_SIZE * schur, rel=1e-12)

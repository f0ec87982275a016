"""The classical baseline from letter frequencies."""

import json
import math
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import binom, multinomial

from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.estimation.histogram import histogram_entropy
from entropest.functionals import VonNeumann
from entropest.shapes import all_shapes

VALUES = json.loads((Path(__file__).parents[1] / "reference" / "check_values.json").read_text())["values"]


def test_bias_of_the_plain_histogram_is_millers():
    """Source: Miller 1955, the limit -(d - 1)/2; the value at n = 200 by exact summation."""
    published = next(v["value"] for v in VALUES if v["name"].startswith("classical plug-in bias"))
    seen = np.arange(201)
    chance = binom.pmf(seen, 200, 0.3)
    histograms = np.stack([seen, 200 - seen], axis=1)
    plain = chance @ histogram_entropy(histograms, correction="none") - VonNeumann()([0.7, 0.3])
    corrected = chance @ histogram_entropy(histograms) - VonNeumann()([0.7, 0.3])
    assert plain * 200 == pytest.approx(published, abs=5e-6)
    assert abs(corrected) < 0.004 * abs(plain)


def test_correction_removes_the_first_order_for_three_letters():
    """Exact enumeration at two sizes: the remaining bias falls like 1/n^2."""
    p = np.array([0.5, 0.3, 0.2])
    biases = []
    for n in (40, 80):
        cells = np.array([[a, b, n - a - b] for a in range(n + 1) for b in range(n - a + 1)])
        biases.append(multinomial.pmf(cells, n, p) @ histogram_entropy(cells) - VonNeumann()(p))
    assert abs(biases[1]) < 0.3 * abs(biases[0]) < 1e-3


def test_it_is_vectorised_and_converts_units():
    histograms = all_shapes(6, 3)
    values = histogram_entropy(histograms)
    assert values.shape == (len(histograms),)
    assert [histogram_entropy(row) for row in histograms.tolist()] == pytest.approx(values)
    assert histogram_entropy([3, 2, 1], base=2) == pytest.approx(histogram_entropy([3, 2, 1]) / math.log(2))
    assert histogram_entropy([1]) == 0.0 == histogram_entropy([0, 5])


def test_wrong_arguments_are_refused():
    for frequencies in ([], [0, 0], 3, [1, -1], [[1, 2], [0, 0]]):
        with pytest.raises(ArgumentValueError):
            histogram_entropy(frequencies)
    with pytest.raises(ArgumentTypeError):
        histogram_entropy(["a"])
    with pytest.raises(ArgumentValueError, match="correction"):
        histogram_entropy([1, 2], correction="chao")

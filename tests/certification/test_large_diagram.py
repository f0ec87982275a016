"""The bound from one or a few large diagrams, and limits on the purity."""

import math

import numpy as np
import pytest

from entropest.certification.large_diagram import large_diagram_lower_bound
from entropest.certification.purity import purity_lower_bound, purity_upper_bound
from entropest.diagrams import young_diagrams
from entropest.errors import ArgumentValueError
from tests.certification.exact import SPECTRA, entropy, outcome_law


def rows_entropy(rows: tuple[int, ...]) -> float:
    return -sum(row / sum(rows) * math.log(row / sum(rows)) for row in rows if row)


def test_bound_is_the_stated_formula():
    rows = np.array([570, 290, 100, 40])
    expected = rows_entropy((570, 290, 100, 40)) - (1 + math.log(1000)) * math.sqrt(math.log(20) / 2000)
    assert large_diagram_lower_bound(rows, error=0.05) == pytest.approx(expected, abs=1e-11)


@pytest.mark.parametrize("name", SPECTRA)
def test_mean_entropy_of_the_rows_is_at_most_the_entropy(name):
    """Exact summation; Jensen's inequality and majorization (docs/theory.md)."""
    spectrum = SPECTRA[name]
    for copies in (1, 4, 9):
        law = outcome_law(spectrum, copies)
        assert sum(float(p) * rows_entropy(d.rows) for d, p in law.items()) <= entropy(spectrum) + 1e-12


def test_one_copy_changes_the_entropy_of_the_rows_by_no_more_than_stated():
    """Every pair of words that differ in one letter, through all pairs of diagrams sharing a down-neighbour."""
    for n in range(2, 13):
        limit = (1 + math.log(n)) / n
        for smaller in young_diagrams(n - 1):
            values = [rows_entropy(upper.rows) for upper in smaller.up_neighbours()]
            assert max(values) - min(values) <= limit


def test_an_empty_diagram_is_refused():
    with pytest.raises(ArgumentValueError, match="at least one box"):
        large_diagram_lower_bound(np.array([0, 0]), error=0.05)


@pytest.mark.parametrize("purity", [0.3, 0.5, 0.9, 1.0])
def test_purity_limits_miss_with_at_most_the_stated_error(purity):
    """Exact size over all tallies of 40 pairs."""
    probability = (1 + purity) / 2
    for error in (0.05, 0.2):
        too_high = too_low = 0.0
        for x in range(41):
            weight = math.comb(40, x) * probability**x * (1 - probability) ** (40 - x)
            too_high += weight * (purity_lower_bound(x, 40, error=error) > purity)
            too_low += weight * (purity_upper_bound(x, 40, error=error) < purity)
        assert too_high <= error
        assert too_low <= error

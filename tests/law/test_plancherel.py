"""The Plancherel law: published values, and random permutations."""

import math
from collections.abc import Callable
from fractions import Fraction
from typing import Any

import numpy as np
import pytest

from entropest.diagrams import YoungDiagram, young_diagrams
from entropest.errors import ArgumentValueError
from entropest.law.insertion import shapes_of_words
from entropest.law.plancherel import longest_increasing_bound, plancherel_probability, plancherel_rows


def test_law_of_four_boxes(check_values: Callable[[str], Any]) -> None:
    # Hook length formula, recomputed: 1/24, 3/8, 1/6, 3/8, 1/24.
    published = check_values("Plancherel measure n=4")
    law = {str(d): plancherel_probability(d) for d in young_diagrams(4)}
    assert law == {diagram: Fraction(value) for diagram, value in published.items()}


@pytest.mark.parametrize("size", [0, 1, 7, 12])
def test_probabilities_sum_to_one(size: int) -> None:
    assert sum(plancherel_probability(d) for d in young_diagrams(size)) == 1


def test_longest_increasing_subsequences(check_values: Callable[[str], Any]) -> None:
    # OEIS A003316; Baer and Brock, Math. Comp. 22 (1968) 385; at 40 the exact sum over the Plancherel measure.
    sums = check_values("sum over permutations of n of the longest increasing subsequence, n=1..10")
    for size, total in enumerate(sums, start=1):
        assert plancherel_rows(size).mean[0] * math.factorial(size) == pytest.approx(total, rel=1e-12)
    at_forty = check_values("expected longest increasing subsequence, n=40")
    assert plancherel_rows(40).mean[0] == pytest.approx(at_forty, rel=1e-12)


@pytest.mark.parametrize("size", [1, 5, 9])
def test_moments_are_those_of_the_sum_over_diagrams(size: int) -> None:
    law = {d: plancherel_probability(d) for d in young_diagrams(size)}
    rows = plancherel_rows(size)
    for i in range(size):
        lengths = {d: d.rows[i] if i < len(d.rows) else 0 for d in law}
        mean = sum(law[d] * lengths[d] for d in law)
        second = sum(law[d] * lengths[d] ** 2 for d in law)
        assert rows.mean[i] == pytest.approx(float(mean), rel=1e-12, abs=1e-15)
        assert rows.variance[i] == pytest.approx(float(second - mean**2), rel=1e-10, abs=1e-13)


@pytest.mark.parametrize("size", [1, 2, 10, 30, 50])
def test_mean_lies_below_twice_the_square_root(size: int) -> None:
    # Vershik and Kerov 1985.
    rows = plancherel_rows(size)
    assert rows.mean[0] < longest_increasing_bound(size)
    assert rows.mean.sum() == pytest.approx(size, rel=1e-12)


def test_random_permutations_have_these_rows() -> None:
    # Five standard errors for each of eight rows: false alarm below 1e-5.
    size, samples = 30, 20_000
    permutations = np.random.default_rng(1).permuted(np.tile(np.arange(size), (samples, 1)), axis=-1)
    shapes = shapes_of_words(permutations, size)
    rows = plancherel_rows(size)
    errors = np.abs(shapes.mean(axis=0) - rows.mean)[:8]
    assert (errors < 5.0 * np.sqrt(rows.variance[:8] / samples)).all()
    assert shapes[:, 0].var() == pytest.approx(rows.variance[0], rel=5.0 * math.sqrt(2.5 / samples))


def test_results_print_their_means() -> None:
    assert repr(plancherel_rows(2)) == "PlancherelRows(size=2, mean=[1.5, 0.5])"
    assert repr(plancherel_rows(5)).endswith(", ...])")


def test_sizes_out_of_range_are_refused() -> None:
    with pytest.raises(ArgumentValueError, match="size must be at most 70, got 71"):
        plancherel_rows(71)
    with pytest.raises(ArgumentValueError, match="size must be at least 0, got -1"):
        longest_increasing_bound(-1)
    assert plancherel_probability(YoungDiagram(())) == 1

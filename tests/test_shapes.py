"""Arrays of diagrams against the exact objects, one by one."""

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from entropest.diagrams import YoungDiagram, young_diagrams
from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.shapes import (
    LARGEST_ROW,
    all_shapes,
    as_shapes,
    count_shapes,
    dominates,
    down_probabilities,
    log_standard_tableaux,
    rows_of,
    shifted_rows,
)


@pytest.mark.parametrize(
    ("rows", "dim", "expected"),
    [
        ((3, 1), None, [3, 1]),
        ((3, 1), 4, [3, 1, 0, 0]),
        ([[3, 1, 0], [2, 2, 0]], 2, [[3, 1], [2, 2]]),
        (YoungDiagram((3, 1)), 3, [3, 1, 0]),
        (YoungDiagram(()), 2, [0, 0]),
        ([3.0, 1.0], None, [3, 1]),
        (np.array([3, 1], dtype=np.uint8), None, [3, 1]),
        ([2**53, 0], None, [2**53, 0]),
        (np.zeros((0, 3)), 3, np.zeros((0, 3)).tolist()),
        ([[[3, 1]], [[4, 0]]], 3, [[[3, 1, 0]], [[4, 0, 0]]]),
    ],
)
def test_accepted_rows(rows, dim, expected):
    shapes = as_shapes(rows, dim=dim)
    assert shapes.dtype == np.int64
    assert shapes.tolist() == expected


@pytest.mark.parametrize(
    ("rows", "message"),
    [
        ([1, 3], r"do not increase, got 1\+3"),
        ([[3, 1], [0, 1]], r"do not increase, got 0\+1"),
        ([3, -1], r"non-negative rows .* got 3\+-1"),
        ([2.5, 1], r"whole numbers up to 2\^53, got 2.5"),
        ([np.nan], "got nan"),
        ([np.inf], "got inf"),
        ([2**53 + 1], f"got {2**53 + 1}"),
        (np.array([2**64 - 1], dtype=np.uint64), f"got {2**64 - 1}"),
        ([-1e300], "got -1e"),
    ],
)
def test_rows_that_break_a_rule_are_refused(rows, message):
    with pytest.raises(ArgumentValueError, match=message):
        as_shapes(rows)


@pytest.mark.parametrize("rows", [5, "31", [True], [1j], [10**30], None])
def test_rows_of_the_wrong_type_are_refused(rows):
    with pytest.raises(ArgumentTypeError, match="shapes must"):
        as_shapes(rows)


def test_more_rows_than_dim_are_refused():
    with pytest.raises(ArgumentValueError, match=r"^dim must be at least the number of rows 3, got 2$"):
        as_shapes([[2, 1, 1], [4, 0, 0]], dim=2)


@pytest.mark.parametrize(("size", "dim"), [(0, 1), (0, 3), (1, 1), (5, 1), (6, 2), (9, 3), (8, 8), (7, 12)])
def test_all_shapes_are_the_diagrams_in_order(size, dim):
    shapes = all_shapes(size, dim)
    assert shapes.shape == (count_shapes(size, dim), dim)
    assert (shapes == rows_of(young_diagrams(size, dim), dim)).all()


def test_numbers_of_shapes(check_values):
    expected = check_values("partitions of n, n=0..15")
    assert [count_shapes(size, size) for size in range(16)] == expected
    assert [count_shapes(size, 40) for size in range(16)] == expected
    assert [count_shapes(size, 0) for size in range(3)] == [1, 0, 0]
    assert count_shapes(100, 100) == 190_569_292  # Hardy and Ramanujan (1918); OEIS A000041


def test_sizes_out_of_range_are_refused():
    with pytest.raises(ArgumentValueError, match="size must be at least 0, got -1"):
        all_shapes(-1, 2)
    with pytest.raises(ArgumentValueError, match="dim must be at least 1, got 0"):
        all_shapes(3, 0)
    with pytest.raises(ArgumentValueError, match="size must be at least 0, got -1"):
        count_shapes(-1, 2)


@pytest.mark.parametrize("dim", [1, 2, 3, 5])
def test_logarithms_of_standard_tableaux(dim):
    for size in (1, 2, 7, 12):
        shapes = all_shapes(size, dim)
        exact = [math.log(YoungDiagram(shape).standard_tableaux) for shape in shapes.tolist()]
        scale = max(1.0, math.lgamma(size + 1))
        assert np.abs(log_standard_tableaux(shapes) - exact).max() <= 8 * np.finfo(float).eps * scale


def test_logarithms_of_standard_tableaux_of_one_large_shape():
    """The Catalan number of n = 1000: log C(2n, n)/(n + 1), from exact integers."""
    exact = math.log(math.comb(2000, 1000) // 1001)
    value = float(log_standard_tableaux(np.array([1000, 1000, 0])))
    assert abs(value - exact) <= 8 * np.finfo(float).eps * math.lgamma(2001)


@pytest.mark.parametrize("dim", [1, 2, 4])
def test_down_steps_follow_the_numbers_of_standard_tableaux(dim):
    for size in (1, 5, 9):
        shapes = all_shapes(size, dim)
        law = down_probabilities(shapes)
        assert np.abs(law.sum(axis=-1) - 1).max() <= 1e-14
        for shape, probabilities in zip(shapes.tolist(), law, strict=True):
            diagram = YoungDiagram(shape)
            for i in range(dim):
                below = shape[i + 1] if i + 1 < dim else 0
                if shape[i] == below:
                    assert probabilities[i] == 0.0
                    continue
                smaller = YoungDiagram([*shape[:i], shape[i] - 1, *shape[i + 1 :]])
                exact = Fraction(smaller.standard_tableaux, diagram.standard_tableaux)
                assert probabilities[i] == pytest.approx(float(exact), rel=1e-13)


def test_down_steps_of_huge_rows_still_sum_to_one():
    shapes = np.array([[LARGEST_ROW // 8, 5, 5, 0], [10**9, 10**9, 10**9, 10**9], [10**12, 10**11, 1, 0]])
    law = down_probabilities(shapes)
    assert (law >= 0).all()
    assert np.abs(law.sum(axis=-1) - 1).max() <= 1e-13
    assert law[1].tolist() == [0.0, 0.0, 0.0, 1.0]


@given(st.integers(1, 8), st.data())
def test_dominance_agrees_with_the_exact_objects(size, data):
    shapes = all_shapes(size, size)
    index = st.integers(0, len(shapes) - 1)
    first = data.draw(st.lists(index, min_size=1, max_size=5))
    second = data.draw(st.lists(index, min_size=len(first), max_size=len(first)))
    found = dominates(shapes[first], shapes[second]).tolist()
    diagrams = [YoungDiagram(shape) for shape in shapes.tolist()]
    assert found == [diagrams[a].dominates(diagrams[b]) for a, b in zip(first, second, strict=True)]


def test_shifted_rows_decrease_strictly():
    assert shifted_rows(np.array([[3, 1, 1], [0, 0, 0]])).tolist() == [[5, 2, 1], [2, 1, 0]]


def test_rows_of_no_diagrams_is_an_empty_table():
    assert rows_of([], 3).shape == (0, 3)

"""Young diagrams against brute force, published sequences and the character table of S4."""

import copy
import itertools
import math
import pickle
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from entropest import YoungDiagram, cycle_character, young_diagrams
from entropest.errors import ArgumentTypeError, ArgumentValueError

diagrams = st.lists(st.integers(0, 7), max_size=5).map(lambda rows: YoungDiagram(sorted(rows, reverse=True)))
SIZE_4 = [YoungDiagram.parse(text) for text in ("4", "3+1", "2+2", "2+1+1", "1+1+1+1")]


def plain_tableaux(rows):
    """Count standard tableaux by the box that holds the largest entry."""
    if sum(rows) == 0:
        return 1
    corners = [i for i, row in enumerate(rows) if row > (rows[i + 1] if i + 1 < len(rows) else 0)]
    return sum(plain_tableaux((*rows[:i], rows[i] - 1, *rows[i + 1 :])) for i in corners)


def rim_hook_character(diagram, length):
    """Return the character of a cycle by the Murnaghan-Nakayama rule, removing rim hooks from the beads."""
    height = len(diagram.rows)
    beads = [row + height - i for i, row in enumerate(diagram.rows, start=1)]
    total = 0
    for bead in beads:
        target = bead - length
        if target >= 0 and target not in beads:
            passed = sum(target < other < bead for other in beads)
            moved = sorted((other if other != bead else target for other in beads), reverse=True)
            rows = [value - (height - i) for i, value in enumerate(moved, start=1)]
            total += (-1) ** passed * plain_tableaux(tuple(rows))
    return total


def test_enumeration_agrees_with_brute_force():
    for size in range(7):
        candidates = itertools.product(range(size, -1, -1), repeat=size)
        expected = [
            tuple(row for row in rows if row)
            for rows in candidates
            if sum(rows) == size and all(a >= b for a, b in itertools.pairwise(rows))
        ]
        assert [diagram.rows for diagram in young_diagrams(size)] == expected
        for height in range(size + 2):
            low = [rows for rows in expected if len(rows) <= height]
            assert [diagram.rows for diagram in young_diagrams(size, max_rows=height)] == low


def test_numbers_of_diagrams(check_values):
    expected = check_values("partitions of n, n=0..15")
    assert [sum(1 for _ in young_diagrams(size)) for size in range(16)] == expected


@pytest.mark.parametrize(
    ("name", "height"),
    [
        ("involutions: total standard Young tableaux of size n, n=0..10", None),
        ("standard tableaux with at most 2 rows, n=0..7", 2),
        ("standard tableaux with at most 3 rows (Motzkin numbers), n=0..7", 3),
        ("standard tableaux with at most 4 rows, n=0..8", 4),
    ],
)
def test_totals_of_standard_tableaux(check_values, name, height):
    expected = check_values(name)
    totals = [
        sum(diagram.standard_tableaux for diagram in young_diagrams(size, height)) for size in range(len(expected))
    ]
    assert totals == expected


def test_sums_of_squares_count_permutations(check_values):
    name = (
        "permutations with longest decreasing subsequence at most 3, n=0..7 "
        "(sum of squared tableau counts, at most 3 rows)"
    )
    expected = check_values(name)
    squares = [sum(shape.standard_tableaux**2 for shape in young_diagrams(size, 3)) for size in range(len(expected))]
    assert squares == expected
    for size in range(9):
        assert sum(shape.standard_tableaux**2 for shape in young_diagrams(size)) == math.factorial(size)


def test_first_rows_weighted_by_squares_are_longest_increasing_subsequences(check_values):
    expected = check_values("sum over permutations of n of the longest increasing subsequence, n=1..10")
    sums = [
        sum(shape.standard_tableaux**2 * shape.rows[0] for shape in young_diagrams(size))
        for size in range(1, len(expected) + 1)
    ]
    assert sums == expected


def test_plancherel_measure(check_values):
    measure = {str(shape): Fraction(shape.standard_tableaux**2, 24) for shape in young_diagrams(4)}
    assert measure == {text: Fraction(value) for text, value in check_values("Plancherel measure n=4").items()}


@given(diagrams)
def test_standard_tableaux_agree_with_recursion_and_hooks(diagram):
    hooks = math.prod(itertools.chain.from_iterable(diagram.hook_lengths()))
    assert diagram.standard_tableaux * hooks == math.factorial(diagram.size)
    if diagram.size > 0:
        assert diagram.standard_tableaux == sum(down.standard_tableaux for down in diagram.down_neighbours())
    if diagram.size <= 10:
        assert diagram.standard_tableaux == plain_tableaux(diagram.rows)


@given(diagrams)
def test_hooks_and_contents_box_by_box(diagram):
    boxes = {(i, j) for i, row in enumerate(diagram.rows) for j in range(row)}
    for i, row in enumerate(diagram.rows):
        assert diagram.contents()[i] == tuple(j - i for j in range(row))
        for j in range(row):
            arm = sum((i, right) in boxes for right in range(j + 1, row))
            leg = sum((below, j) in boxes for below in range(i + 1, len(diagram.rows)))
            assert diagram.hook_lengths()[i][j] == arm + leg + 1


@given(diagrams)
def test_the_conjugate_reflects_boxes(diagram):
    boxes = {(i, j) for i, row in enumerate(diagram.rows) for j in range(row)}
    reflected = diagram.conjugate
    assert {(j, i) for i, row in enumerate(reflected.rows) for j in range(row)} == boxes
    assert reflected.conjugate == diagram
    assert reflected.standard_tableaux == diagram.standard_tableaux


@given(diagrams)
def test_neighbours_differ_by_one_box_and_point_back(diagram):
    ups, downs = diagram.up_neighbours(), diagram.down_neighbours()
    assert all(up.size == diagram.size + 1 and diagram in up.down_neighbours() for up in ups)
    assert all(down.size == diagram.size - 1 and diagram in down.up_neighbours() for down in downs)
    assert len(ups) == len(set(ups)) == len(downs) + 1
    assert list(ups) == sorted(ups, reverse=True)
    height = len(diagram.rows)
    assert diagram.up_neighbours(max_rows=height) == tuple(up for up in ups if len(up.rows) <= height)
    total = sum(up.standard_tableaux for up in ups)
    assert total == (diagram.size + 1) * diagram.standard_tableaux


def test_dominance_agrees_with_kostka_numbers(check_values):
    """A Kostka number is positive exactly when the shape dominates the weight; weight 1^n counts standard tableaux."""
    name = "Kostka numbers n=4, shapes (rows) and weights (columns) in order 4, 3+1, 2+2, 2+1+1, 1+1+1+1"
    kostka = check_values(name)
    for shape, row in zip(SIZE_4, kostka, strict=True):
        assert [shape.dominates(weight) for weight in SIZE_4] == [number > 0 for number in row]
        assert shape.standard_tableaux == row[-1]


def test_order_refines_dominance_and_conjugation_reverses_it():
    shapes = list(young_diagrams(7))
    assert sorted(shapes, reverse=True) == shapes
    incomparable = 0
    for a, b in itertools.product(shapes, repeat=2):
        sums = zip(itertools.accumulate((*a.rows, *[0] * 7)), itertools.accumulate((*b.rows, *[0] * 7)), strict=False)
        plain = all(x >= y for x, y in sums)
        assert a.dominates(b) == plain == b.conjugate.dominates(a.conjugate)
        assert not plain or a >= b
        incomparable += not plain and not b.dominates(a)
    assert incomparable > 0


def test_cycle_characters_of_four_copies(check_values):
    """Classes in the order 4, 3+1, 2+2, 2+1+1, 1^4 (James and Kerber)."""
    table = check_values("character table of S4, classes 4, 3+1, 2+2, 2+1+1, 1^4")
    for diagram in SIZE_4:
        characters = table[str(diagram)]
        for length, column in ((4, 0), (3, 1), (2, 3), (1, 4)):
            assert cycle_character(diagram, length) == Fraction(characters[column], characters[4])


@given(diagrams.filter(lambda diagram: 0 < diagram.size <= 11), st.data())
def test_cycle_characters_agree_with_rim_hooks(diagram, data):
    length = data.draw(st.integers(1, diagram.size))
    expected = Fraction(rim_hook_character(diagram, length), diagram.standard_tableaux)
    assert cycle_character(diagram, length) == expected
    sign = (-1) ** (length - 1)
    assert cycle_character(diagram.conjugate, length) == sign * expected


def test_cycle_characters_are_orthogonal():
    """The sum over shapes of chi(c)^2 is the order of the centralizer of the cycle, k (n-k)! for k >= 2."""
    for size in range(2, 9):
        for length in range(2, size + 1):
            characters = [cycle_character(shape, length) * shape.standard_tableaux for shape in young_diagrams(size)]
            assert sum(value**2 for value in characters) == length * math.factorial(size - length)


def test_traces_of_permutation_matrices():
    """A k-cycle on n copies of C^d has trace d^(n-k+1), summed over shapes with the hook-content dimensions."""
    for size, d in itertools.product(range(1, 7), range(1, 4)):
        for length in range(1, size + 1):
            cycle = (*range(1, length), 0, *range(length, size))
            trace = sum(
                all(letters[cycle[i]] == letters[i] for i in range(size))
                for letters in itertools.product(range(d), repeat=size)
            )
            total = Fraction(0)
            for shape in young_diagrams(size, d):
                contents = math.prod(d + c for row in shape.contents() for c in row)
                hooks = math.prod(itertools.chain.from_iterable(shape.hook_lengths()))
                total += cycle_character(shape, length) * shape.standard_tableaux * Fraction(contents, hooks)
            assert total == trace == d ** (size - length + 1)


@pytest.mark.parametrize("length", [0, -1, 5])
def test_cycles_longer_than_the_number_of_copies_are_refused(length):
    with pytest.raises(ArgumentValueError, match=rf"length must be at (most|least) .* got {length}$"):
        cycle_character(YoungDiagram((3, 1)), length)


@given(diagrams)
def test_text_round_trip_equality_and_hash(diagram):
    again = YoungDiagram.parse(str(diagram))
    assert again == diagram
    assert hash(again) == hash(diagram)
    assert pickle.loads(pickle.dumps(diagram)) == copy.deepcopy(diagram) == diagram
    assert eval(repr(diagram)) == diagram
    assert YoungDiagram((*diagram.rows, 0, 0)) == diagram
    assert diagram != diagram.rows


@given(diagrams, diagrams)
def test_the_order_is_total(a, b):
    assert (a < b) + (a == b) + (a > b) == 1
    assert (a < b) == ((a.size, a.rows) < (b.size, b.rows))


@pytest.mark.parametrize("text", ["", "+", "3+", "3-1", "3,1", "-3", "3.0", "three", "²", "1" * 19])
def test_text_that_is_no_diagram_is_refused(text):
    with pytest.raises(ArgumentValueError, match="Young diagram"):
        YoungDiagram.parse(text)


@pytest.mark.parametrize(
    ("rows", "error", "message"),
    [
        ((1, 3), ArgumentValueError, r"must not increase, got 1\+3"),
        ((0, 1), ArgumentValueError, r"must not increase, got 0\+1"),
        ((2, -1), ArgumentValueError, "row 2 must be at least 0, got -1"),
        ((2.5,), ArgumentValueError, "row 1 must be a whole number, got 2.5"),
        ((2.0,), ArgumentTypeError, "row 1 must be an integer, got 2.0"),
        ((True,), ArgumentTypeError, "row 1 must be an integer, got True"),
        (("2",), ArgumentTypeError, "row 1 must be an integer, got '2'"),
        ((float("nan"),), ArgumentValueError, "row 1 must be a whole number, got nan"),
    ],
)
def test_rows_that_break_a_rule_are_refused(rows, error, message):
    with pytest.raises(error, match=message):
        YoungDiagram(rows)


def test_arguments_out_of_range_are_refused():
    with pytest.raises(ArgumentValueError, match="size must be at least 0, got -1"):
        young_diagrams(-1)
    with pytest.raises(ArgumentValueError, match="max_rows must be at least 0, got -1"):
        young_diagrams(3, max_rows=-1)
    with pytest.raises(ArgumentValueError, match="diagrams of one size, got sizes 4 and 3"):
        YoungDiagram((3, 1)).dominates(YoungDiagram((3,)))
    with pytest.raises(TypeError):
        YoungDiagram((3, 1)) < (3, 1)  # noqa: B015


def test_a_diagram_cannot_be_changed():
    diagram = YoungDiagram((3, 1))
    with pytest.raises(AttributeError, match="immutable"):
        diagram.rows = (4,)
    with pytest.raises(AttributeError, match="immutable"):
        del diagram.rows


def test_the_empty_diagram():
    empty = YoungDiagram(())
    assert (str(empty), empty.size, empty.standard_tableaux, empty.conjugate) == ("0", 0, 1, empty)
    assert empty == YoungDiagram.parse("0")
    assert empty.down_neighbours() == ()
    assert empty.up_neighbours() == (YoungDiagram((1,)),)
    assert empty.up_neighbours(max_rows=0) == ()
    assert list(young_diagrams(0)) == list(young_diagrams(0, max_rows=0)) == [empty]
    assert list(young_diagrams(3, max_rows=0)) == []

"""DiagramCounts: what it accepts, its canonical form, merging and its digest."""

import copy
import hashlib
import pickle
from collections import Counter
from functools import reduce

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from entropest.diagrams import YoungDiagram, cycle_character
from entropest.errors import ArgumentTypeError, ArgumentValueError, MemoryBudgetError
from entropest.records import DiagramCounts

rows_of_a_diagram = st.lists(st.integers(1, 9), min_size=1, max_size=4).map(
    lambda rows: tuple(sorted(rows, reverse=True))
)
tallies = st.dictionaries(rows_of_a_diagram, st.integers(1, 2**40), min_size=1, max_size=8)


def canonical_order(shapes):
    return sorted(shapes, key=lambda rows: (sum(rows), [-row for row in rows]))


def test_keys_may_be_diagrams_rows_or_text_and_equal_ones_add_up():
    record = DiagramCounts({YoungDiagram((3, 1)): 2, "3+1": 5, (3, 1, 0): 1, "2+2": 0, "4": 4})
    assert dict(record.items()) == {YoungDiagram((4,)): 4, YoungDiagram((3, 1)): 8}
    assert (record.blocks, record.copies, record.dim) == (12, 48, None)


@given(tallies, st.sampled_from([None, 4, 6]))
def test_contents_agree_with_a_plain_tally(counts, dim):
    record = DiagramCounts(counts, dim=dim)
    order = canonical_order(counts)
    width = dim or max(map(len, counts))
    assert record.shapes.tolist() == [[*rows, *[0] * (width - len(rows))] for rows in order]
    assert record.counts.tolist() == [counts[rows] for rows in order]
    assert record.shapes.dtype == record.counts.dtype == np.int64
    assert record.blocks == sum(counts.values())
    assert record.copies == sum(sum(rows) * count for rows, count in counts.items())
    by_size = Counter()
    for rows, count in counts.items():
        by_size[sum(rows)] += count
    assert list(record.block_sizes.items()) == sorted(by_size.items())
    assert record.compact_shapes.shape[1] == max(map(len, counts))


@pytest.mark.parametrize(
    "count", [True, 1.5, 2.0, float("nan"), float("inf"), "3", None, np.bool_(True), np.float64(2.0)]
)
def test_counts_that_are_no_integers_are_refused(count):
    with pytest.raises((ArgumentTypeError, ArgumentValueError), match=r"count of 3\+1 must be"):
        DiagramCounts({"3+1": count})


@pytest.mark.parametrize("count", [-1, 2**62 + 1, 10**25])
def test_counts_out_of_range_are_refused(count):
    with pytest.raises(ArgumentValueError, match=rf"count of 3\+1 must be at (least|most) .*, got {count}$"):
        DiagramCounts({"3+1": count})


def test_equal_diagrams_that_add_up_beyond_the_range_are_refused():
    with pytest.raises(ArgumentValueError, match=rf"total copies must stay below 2\^62, got at least {2**63}"):
        DiagramCounts({"1": 2**62, (1,): 2**62})


@pytest.mark.parametrize(
    ("diagram", "message"),
    [
        ("", "rows joined by"),
        ("0", "at least one copy, got the empty diagram"),
        ((), "at least one copy, got the empty diagram"),
        ("1+3", r"must not increase, got 1\+3"),
        ((2, -1), "row 2 must be at least 0, got -1"),
        ("3.5", "rows joined by"),
        ((2**53 + 1,), r"at most 2\^53 boxes, got 9007199254740993"),
        ((2**70,), r"at most 2\^53 boxes"),
    ],
)
def test_diagrams_that_break_a_rule_are_refused(diagram, message):
    with pytest.raises(ArgumentValueError, match=message):
        DiagramCounts({diagram: 1})


@pytest.mark.parametrize("mapping", [{3: 1}, {(1.0,): 1}, {None: 1}, [("3+1", 2)], "3+1"])
def test_wrong_types_are_refused(mapping):
    with pytest.raises(ArgumentTypeError, match=r"must be|made from a mapping"):
        DiagramCounts(mapping)


@pytest.mark.parametrize("mapping", [{}, {"3+1": 0}, {"3+1": 0, "2": 0}])
def test_a_record_without_blocks_is_refused(mapping):
    with pytest.raises(ArgumentValueError, match="a record must hold at least one block"):
        DiagramCounts(mapping)


@pytest.mark.parametrize("count", [0, 7])
def test_more_rows_than_dim_are_refused_even_when_counted_zero_times(count):
    with pytest.raises(ArgumentValueError, match=r"^dim must be at least the number of rows 3, got 2$"):
        DiagramCounts({"2+1+1": count, "4": 1}, dim=2)


@pytest.mark.parametrize("dim", [0, -3, 2**53 + 1, 2.5, True, "4"])
def test_dim_must_be_a_whole_number_in_range(dim):
    with pytest.raises((ArgumentTypeError, ArgumentValueError), match=r"^dim must be"):
        DiagramCounts({"1": 1}, dim=dim)


def test_total_copies_stay_below_the_limit_exactly():
    assert DiagramCounts({"2": 2**61 - 1, "1": 1}).copies == 2**62 - 1
    with pytest.raises(ArgumentValueError, match=rf"total copies must stay below 2\^62, got {2**62}$"):
        DiagramCounts({"2": 2**61})
    half = DiagramCounts({"2": 2**60})
    with pytest.raises(ArgumentValueError, match=r"total copies must stay below 2\^62"):
        half + half
    with pytest.raises(ArgumentValueError, match=r"total copies must stay below 2\^62"):
        DiagramCounts.from_rows(np.full((1, 4000), 2**53))


def test_rows_of_many_blocks_agree_with_a_plain_tally():
    rng = np.random.default_rng(20)
    rows = -np.sort(-rng.integers(0, 4, size=(5000, 4)), axis=1)
    rows = rows[rows[:, 0] > 0]
    expected = Counter(tuple(row for row in shape if row) for shape in rows.tolist())
    assert DiagramCounts.from_rows(rows) == DiagramCounts(expected)
    assert DiagramCounts.from_rows(rows.astype(float), dim=5) == DiagramCounts(expected, dim=5)


def test_rows_too_long_for_one_sort_key_are_still_ordered_and_merged():
    rng = np.random.default_rng(21)
    few = -np.sort(-rng.integers(1, 2**46, size=(40, 5)), axis=1)
    rows = few[rng.integers(0, 40, size=3000)]
    record = DiagramCounts.from_rows(rows)
    expected = Counter(map(tuple, rows.tolist()))
    assert record.shapes.tolist() == [list(shape) for shape in canonical_order(expected)]
    assert record.counts.tolist() == [expected[shape] for shape in canonical_order(expected)]


def test_rows_may_come_with_counts():
    record = DiagramCounts.from_rows([[3, 1], [4, 0], [3, 1]], counts=[2, 0, 5])
    assert record == DiagramCounts({"3+1": 7})
    with pytest.raises(ArgumentValueError, match="counts must be as many as rows, 1, got shape"):
        DiagramCounts.from_rows([[3, 1]], counts=[1, 2])
    with pytest.raises(ArgumentValueError, match=r"counts must be whole numbers .* got 0.5"):
        DiagramCounts.from_rows([[3, 1]], counts=[0.5])
    with pytest.raises(ArgumentTypeError, match="counts must be whole numbers, got dtype bool"):
        DiagramCounts.from_rows([[3, 1]], counts=[True])
    with pytest.raises(ArgumentValueError, match=r"counts must be whole numbers .* got nan"):
        DiagramCounts.from_rows([[3, 1]], counts=[np.nan])


@pytest.mark.parametrize(
    ("rows", "message"),
    [
        ([3, 1], "one shape a row"),
        ([[1, 3]], r"do not increase, got 1\+3"),
        ([[3, -1]], "non-negative"),
        ([[2.5, 1]], "whole numbers"),
        ([[np.nan, 1]], "whole numbers"),
        ([[0, 0]], "at least one copy"),
        (np.zeros((0, 3), dtype=int), "at least one block"),
    ],
)
def test_wrong_rows_are_refused(rows, message):
    with pytest.raises(ArgumentValueError, match=message):
        DiagramCounts.from_rows(rows)


@given(st.lists(st.tuples(st.integers(1, 12), st.integers(0, 6), st.integers(0, 99)), min_size=1))
def test_total_spins_are_two_rows(blocks):
    blocks = [(n, n - 2 * second, count + 1) for n, second, count in blocks if n >= 2 * second]
    if not blocks:
        return
    copies, two_j, counts = map(list, zip(*blocks, strict=True))
    expected = Counter()
    for n, spin, count in blocks:
        expected[YoungDiagram(((n + spin) // 2, (n - spin) // 2))] += count
    record = DiagramCounts.from_total_spin(two_j, copies=copies, counts=counts)
    assert record == DiagramCounts(expected, dim=2)


def test_total_spins_one_value_per_block():
    record = DiagramCounts.from_total_spin([3, 1, 1], copies=3)
    assert record == DiagramCounts({"3": 1, "2+1": 2}, dim=2)


@pytest.mark.parametrize(
    ("two_j", "copies", "message"),
    [
        ([2], 3, "same parity, got 2 of 3 copies"),
        ([5], 3, "at most copies .* got 5 of 3 copies"),
        ([-1], 3, "two_j must be whole numbers .* got -1"),
        ([1.5], 3, "two_j must be whole numbers .* got 1.5"),
        ([1, 1], [3, 3, 3], "one number or as many"),
        ([[1]], 3, "one number or as many"),
        ([2**60], 2**60, r"from 0 to 2\^53"),
        ([0], 0, "at least one copy"),
    ],
)
def test_wrong_total_spins_are_refused(two_j, copies, message):
    with pytest.raises(ArgumentValueError, match=message):
        DiagramCounts.from_total_spin(two_j, copies=copies)


def test_swap_outcomes_are_the_two_diagrams_of_two_boxes():
    record = DiagramCounts.from_swap(symmetric=7, antisymmetric=3, dim=4)
    assert record == DiagramCounts({"2": 7, "1+1": 3}, dim=4)
    assert DiagramCounts.from_swap(symmetric=7, antisymmetric=0, dim=1).blocks == 7
    with pytest.raises(ArgumentValueError, match="at least one block"):
        DiagramCounts.from_swap(symmetric=0, antisymmetric=0)
    with pytest.raises(ArgumentValueError, match="antisymmetric must be at least 0, got -1"):
        DiagramCounts.from_swap(symmetric=1, antisymmetric=-1)


@given(st.lists(tallies, min_size=2, max_size=5), st.randoms(use_true_random=False))
def test_the_order_of_merging_does_not_matter(parts, random):
    records = [DiagramCounts(counts, dim=random.choice([None, 5])) for counts in parts]
    merged = reduce(lambda a, b: a + b, records)
    random.shuffle(records)
    again = reduce(lambda a, b: b + a, records)
    total = Counter()
    for counts in parts:
        total.update(counts)
    assert merged == again == DiagramCounts(total, dim=merged.dim)
    assert merged.digest == again.digest
    assert hash(merged) == hash(again)


def test_merging_keeps_the_known_dimension_and_refuses_two():
    unknown, four, five = (DiagramCounts({"3+1": 1}, dim=dim) for dim in (None, 4, 5))
    assert (unknown + four).dim == (four + unknown).dim == 4
    assert (unknown + unknown).dim is None
    with pytest.raises(ArgumentValueError, match="must have the same dim, got 4 and 5"):
        four + five
    with pytest.raises(ArgumentValueError, match="dim must be at least the number of rows 5, got 4"):
        four + DiagramCounts({"1+1+1+1+1": 1})
    with pytest.raises(TypeError):
        four + {"3+1": 1}


@given(tallies, st.randoms(use_true_random=False))
def test_the_digest_does_not_depend_on_the_order_of_entry(counts, random):
    entries = list(counts.items())
    random.shuffle(entries)
    assert DiagramCounts(dict(entries)).digest == DiagramCounts(counts).digest


@given(tallies, tallies, st.sampled_from([None, 4]), st.sampled_from([None, 4]))
def test_records_are_equal_exactly_when_their_digests_are(first, second, dim, other_dim):
    a, b = DiagramCounts(first, dim=dim), DiagramCounts(second, dim=other_dim)
    assert (a == b) == (a.digest == b.digest) == (first == second and dim == other_dim)
    assert a != first


def test_the_digest_can_be_made_by_hand():
    record = DiagramCounts({"1+1": 4, "3+1": 12, "4": 1}, dim=4)
    text = "# dim: 4\ndiagram,count\n1+1,4\n4,1\n3+1,12\n"
    assert "".join(record.canonical_csv()) == text
    assert record.digest == "sha256:" + hashlib.sha256(text.encode()).hexdigest()
    assert record.digest is record.digest
    unknown = DiagramCounts({"2": 3})
    assert unknown.digest == "sha256:" + hashlib.sha256(b"diagram,count\n2,3\n").hexdigest()


def test_blocks_of_one_size_can_be_taken_out():
    record = DiagramCounts({"2": 9, "1+1": 3, "2+1+1": 4, "5": 1}, dim=3)
    assert record.of_size(2) == DiagramCounts({"2": 9, "1+1": 3}, dim=3)
    assert reduce(lambda a, b: a + b, map(record.of_size, record.block_sizes)) == record
    with pytest.raises(ArgumentValueError, match="one of the block sizes 2, 4, 5 of the record, got 3"):
        record.of_size(3)
    without_dim = DiagramCounts({"2": 9, "2+1+1": 4}).of_size(2)
    assert without_dim.shapes.tolist() == [[2]]


def test_thinning_keeps_blocks_and_leaves_small_ones_alone():
    record = DiagramCounts({"5+3+1": 70_000, "4+2": 11, "2+1": 40, "1": 6}, dim=4)
    thinner = record.thinned(4, rng=3)
    assert dict(thinner.block_sizes) == {1: 6, 3: 40, 4: 70_011}
    assert thinner.of_size(3) == record.of_size(3)
    assert thinner.dim == 4
    assert thinner == record.thinned(4, rng=np.random.default_rng(3))
    assert thinner != record.thinned(4, rng=4)
    assert record.thinned(9) == record
    assert DiagramCounts({"9": 7}).thinned(2) == DiagramCounts({"2": 7})
    with pytest.raises(ArgumentValueError, match="copies must be at least 1, got 0"):
        record.thinned(0)


def test_thinning_keeps_the_mean_of_the_swap():
    """Pairs taken from a diagram are symmetric with probability (1 + chi)/2, chi the normalised transposition.

    The draws pass the limit of one chunk. Tolerance 5 standard errors: false alarm below 6e-7 for each diagram.
    """
    blocks = 80_000
    for text in ("6+3+1", "3+3+3", "2+1+1+1"):
        pairs = DiagramCounts({text: blocks}).thinned(2, rng=11)
        symmetric = pairs.counts[pairs.shapes[:, 0] == 2].sum() / blocks
        chance = float(1 + cycle_character(YoungDiagram.parse(text), 2)) / 2
        assert abs(symmetric - chance) <= 5 * np.sqrt(chance * (1 - chance) / blocks)


def test_a_record_cannot_be_changed():
    record = DiagramCounts({"3+1": 2}, dim=3)
    for array in (record.shapes, record.counts, record.compact_shapes):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1
        with pytest.raises(ValueError, match="WRITEABLE"):
            array.flags.writeable = True
    with pytest.raises(AttributeError, match="immutable"):
        record.dim = 5
    with pytest.raises(AttributeError, match="immutable"):
        del record._counts
    with pytest.raises(TypeError):
        record.block_sizes[4] = 1


def test_a_record_does_not_follow_changes_of_the_array_it_was_made_from():
    rows = np.array([[3, 1], [2, 2]])
    record = DiagramCounts.from_rows(rows)
    rows[0] = [4, 0]
    assert record == DiagramCounts({"3+1": 1, "2+2": 1})


def test_records_survive_copying_and_pickling():
    record = DiagramCounts({"3+1": 2, "4": 1}, dim=3)
    for again in (copy.deepcopy(record), pickle.loads(pickle.dumps(record))):
        assert again == record
        assert not again.counts.flags.writeable


def test_a_huge_dimension_needs_no_huge_table_until_one_is_asked_for():
    record = DiagramCounts({"2": 9, "1+1": 3}, dim=2**40)
    assert record.compact_shapes.tolist() == [[2, 0], [1, 1]]
    assert (record + record).counts.tolist() == [18, 6]
    with pytest.raises(MemoryBudgetError, match=r"would need 1.64e\+04 GiB, more than the budget of 1 GiB"):
        record.shapes  # noqa: B018


def test_a_record_prints_in_a_few_lines():
    record = DiagramCounts({"2": 9, "1+1": 3, "3+1": 4}, dim=2)
    assert repr(record) == "DiagramCounts({'2': 9, '1+1': 3, '3+1': 4}, dim=2)"
    assert str(record) == (
        "16 blocks, 40 copies in total, dimension 2\n"
        "  blocks of 2 copies: 12 (2 x 9, 1+1 x 3)\n"
        "  blocks of 4 copies: 4 (3+1 x 4)"
    )
    many = DiagramCounts({(size, 1): size for size in range(1, 40)})
    assert repr(many) == "DiagramCounts({'1+1': 1, '2+1': 2, '3+1': 3, ... 39 shapes})"
    assert len(str(many).splitlines()) == 7
    assert max(map(len, str(DiagramCounts({(1,) * 5000: 1})).splitlines())) < 110

"""Tallies of cyclic-shift tests as records and as files."""

import hashlib
import io
import json
import pickle

import pytest
from hypothesis import given
from hypothesis import strategies as st

from entropest.errors import ArgumentTypeError, ArgumentValueError, NotCoveredError, RecordFileError
from entropest.records import DiagramCounts, MomentCounts, read_record, write_record

RECORD = MomentCounts({3: (600, 400), 2: (700, 300)}, dim=4)

tallies = st.dictionaries(
    st.integers(2, 64), st.tuples(st.integers(0, 10**9), st.integers(1, 10**9)), min_size=1, max_size=5
)


def test_record_says_what_it_holds():
    assert RECORD.orders == (2, 3)
    assert (RECORD.tests, RECORD.blocks, RECORD.copies, RECORD.dim) == (2000, 2000, 5000, 4)
    assert dict(RECORD.block_sizes) == {2: 1000, 3: 1000}
    assert RECORD.means == {2: 0.4, 3: 0.2}
    assert repr(RECORD) == "MomentCounts({2: (700, 300), 3: (600, 400)}, dim=4)"
    assert "order 3: 600 +, 400 - (mean 0.2)" in str(RECORD)


def test_records_are_immutable_hashable_and_pickle():
    with pytest.raises(AttributeError):
        RECORD.dim = 3
    with pytest.raises(TypeError):
        RECORD.tallies[2] = (1, 1)
    assert pickle.loads(pickle.dumps(RECORD)) == RECORD
    assert len({RECORD, MomentCounts({2: (700, 300), 3: (600, 400), 5: (0, 0)}, dim=4)}) == 1
    assert MomentCounts({2: (700, 300), 3: (600, 400)}) != RECORD


@given(tallies, tallies)
def test_merging_adds_tallies_and_commutes(first, second):
    a, b = MomentCounts(first), MomentCounts(second, dim=7)
    assert a + b == b + a
    assert (a + b).copies == a.copies + b.copies
    assert (a + b).dim == 7


def test_merging_refuses_different_dimensions():
    with pytest.raises(ArgumentValueError, match="same dim, got 4 and 3"):
        RECORD + MomentCounts({2: (1, 1)}, dim=3)
    with pytest.raises(TypeError):
        RECORD + DiagramCounts({"2": 1}, dim=4)


def test_tests_of_order_two_are_swap_tests():
    assert RECORD.swaps() == DiagramCounts.from_swap(symmetric=700, antisymmetric=300, dim=4)
    with pytest.raises(NotCoveredError, match="got orders 3"):
        MomentCounts({3: (1, 1)}).swaps()


@given(tallies, st.none() | st.integers(1, 100))
def test_files_read_back_equal(content, dim):
    record = MomentCounts(content, dim=dim)
    text = "".join(record.canonical_csv())
    assert read_record(io.StringIO(text)) == record
    assert record.digest == "sha256:" + hashlib.sha256(text.encode()).hexdigest()


@pytest.mark.parametrize("name", ["run.csv", "run.json"])
def test_both_formats_read_back(name, tmp_path):
    write_record(RECORD, tmp_path / name)
    assert read_record(tmp_path / name) == RECORD
    assert read_record(tmp_path / name, dim=4) == RECORD
    with pytest.raises(RecordFileError, match="dim"):
        read_record(tmp_path / name, dim=5)


def test_tolerant_reading_adds_up_repeated_orders():
    text = "# a comment\n# dim: 4\nOrder, plus, minus\n3, 300 ,200\n\n2,700,300\n3,300,200\n"
    assert read_record(io.StringIO(text)) == RECORD


@pytest.mark.parametrize(
    ("lines", "message"),
    [
        ("1,5,5", "line 2: 1,5,5: expected an order of at least 2, got 1"),
        ("65,5,5", "expected an order, a whole number from 0 to 2^6, got 65"),
        ("2,5", "expected 3 fields (order,plus,minus), got 2"),
        ("2,-5,5", "expected a count, a whole number from 0 to 2^62, got -5"),
        ("2,0,0", "a record must hold at least one test, got none"),
        ("", "expected at least one line below the header"),
    ],
)
def test_bad_lines_are_named(lines, message):
    with pytest.raises(RecordFileError) as caught:
        read_record(io.StringIO(f"order,plus,minus\n{lines}\n"))
    assert message in str(caught.value)


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ([1], "expected tallies to be an object"),
        ({"2": [1]}, "expected a list of two tallies for order 2, got [1]"),
        ({"2": [1, 2], "02": [1, 2]}, "expected each order once, got 02"),
        ({"2": [1, -2]}, "minus of order 2 must be at least 0, got -2"),
        ({"x": [1, 2]}, "expected an order"),
        ({}, "at least one test"),
    ],
)
def test_bad_json_is_named(content, message):
    text = json.dumps({"schema": "entropest-record/1", "kind": "moments", "tallies": content})
    with pytest.raises(RecordFileError) as caught:
        read_record(io.StringIO(text))
    assert message in str(caught.value)


def test_wrong_arguments_are_refused():
    for mapping in ({1: (1, 1)}, {65: (1, 1)}, {2: (0, 0)}, {}, {2: (-1, 2)}, {2: (2**61, 2**61)}):
        with pytest.raises(ArgumentValueError):
            MomentCounts(mapping)
    for mapping in ([(2, 3)], {2: 3}, {2: (1, 2, 3)}, {"2": (1, 2)}):
        with pytest.raises(ArgumentTypeError):
            MomentCounts(mapping)
    with pytest.raises(ArgumentValueError, match="dim"):
        MomentCounts({2: (1, 2)}, dim=0)

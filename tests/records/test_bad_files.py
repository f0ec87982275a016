"""Bad record files: each gives one clear line that names file, line, text and what was expected."""

import io
import json
import tracemalloc

import pytest
from hypothesis import given
from hypothesis import strategies as st

from entropest.errors import RecordFileError
from entropest.records import DiagramCounts, TwoCopyShots, grouping, read_record


def complaint(data, path, **options):
    """Read a file that must be refused; return the message after the file's name, a single line."""
    path.write_bytes(data if isinstance(data, bytes) else data.encode())
    with pytest.raises(RecordFileError) as caught:
        read_record(path, **options)
    message = str(caught.value)
    assert message.startswith(str(path))
    assert len(message.splitlines()) == 1
    assert len(message) < len(str(path)) + 350
    assert message.isprintable()
    return message.removeprefix(str(path))


BAD_LINES = [
    ("diagram,count", "1+3,7", "expected rows that do not increase, got 1+3"),
    ("diagram,count", "3+1,-7", "expected a count, a whole number from 0 to 2^62, got -7"),
    ("diagram,count", "3+1,0.5", "expected a count, a whole number from 0 to 2^62, got 0.5"),
    ("diagram,count", "3+1,2.0", "expected a count, a whole number from 0 to 2^62, got 2.0"),
    ("diagram,count", "3+1,nan", "expected a count, a whole number from 0 to 2^62, got nan"),
    ("diagram,count", f"3+1,{10**25}", f"expected a count, a whole number from 0 to 2^62, got {10**25}"),
    ("diagram,count", "3+1,5000000000000000000", "expected a count, a whole number from 0 to 2^62, got 5"),
    ("diagram,count", "3+1,²", "expected a count, a whole number from 0 to 2^62, got ²"),
    ("diagram,count", "3+1,", "expected a count, a whole number from 0 to 2^62, got nothing"),
    ("diagram,count", "3+1", "expected 2 fields (diagram,count), got 1"),
    ("diagram,count", "3+1,2,5", "expected 2 fields (diagram,count), got 3"),
    ("diagram,count", "3+1 2", "expected 2 fields (diagram,count), got 1"),
    ("diagram,count", "0,3", "expected a diagram of at least one box, got 0"),
    ("diagram,count", "3+-1,3", "expected a diagram, rows joined by + such as 3+1, got 3+-1"),
    ("diagram,count", "3++1,3", "expected a diagram, rows joined by + such as 3+1, got 3++1"),
    ("diagram,count", "3 1,3", "expected a diagram, rows joined by + such as 3+1, got 3 1"),
    ("diagram,count", ",3", "expected a diagram, rows joined by + such as 3+1, got nothing"),
    ("diagram,count", "3+1;3", "expected 2 fields (diagram,count), got 1"),
    ("diagram,count", '"3+1,3', 'expected a diagram, rows joined by + such as 3+1, got "3+1'),
    ("diagram", "9007199254740993", "expected rows, a whole number from 0 to 2^53, got 9007199254740993"),
    ("diagram", "3,1", "expected 1 field (diagram), got 2"),
    ("diagram", "3+1+", "expected a diagram, rows joined by + such as 3+1, got 3+1+"),
    ("diagram", "# dim: 4", "expected dim to be set above the header, got it below"),
    ("two_j,copies", "3,4", "expected two_j at most copies and of the same parity, got 3 of 4 copies"),
    ("two_j,copies", "2+4", "expected 2 fields (two_j,copies), got 1"),
    ("two_j,copies", "2,4,6,8", "expected 2 fields (two_j,copies), got 4"),
    ("two_j,copies", "6,4", "expected two_j at most copies and of the same parity, got 6 of 4 copies"),
    ("two_j,copies", "0,0", "expected at least 1 copy, got 0"),
    ("two_j,copies", "-2,4", "expected two_j, a whole number from 0 to 2^53, got -2"),
    ("two_j,copies", "1.5,4", "expected two_j, a whole number from 0 to 2^53, got 1.5"),
    ("two_j,copies,count", "2,4,x", "expected a count, a whole number from 0 to 2^62, got x"),
    ("two_j,copies,count", "2,4", "expected 3 fields (two_j,copies,count), got 2"),
    ("swap", "sym", "expected symmetric or antisymmetric, got sym"),
    ("swap,count", ",3", "expected symmetric or antisymmetric, got nothing"),
    ("site0,site1", "0,2", "expected 0 or 1 for site1, got 2"),
    ("site0,site1", "01", "expected 2 fields (site0,site1), got 1"),
    ("site0,site1", "0,1,1", "expected 2 fields (site0,site1), got 3"),
    ("site0,site1", "0,", "expected 0 or 1 for site1, got nothing"),
    ("site0,accepted", "0,yes", "expected 0 or 1 for accepted, got yes"),
]
GOOD_LINES = {
    "diagram,count": "3+1,5",
    "diagram": "3+1",
    "two_j,copies": "2,4",
    "two_j,copies,count": "2,4,9",
    "swap": "symmetric",
    "swap,count": "symmetric,3",
    "site0,site1": "0,1",
    "site0,accepted": "0,1",
}


@pytest.mark.parametrize(("header", "line", "message"), BAD_LINES)
def test_the_first_bad_line_is_reported_wherever_it_stands(header, line, message, tmp_path):
    good = GOOD_LINES[header]
    for before in (0, 2):
        body = [*[good] * before, line, good, "also wrong"]
        text = "\n".join(["# comment", header, *body]) + "\n"
        found = complaint(text, tmp_path / "run.csv")
        assert found.startswith(f", line {3 + before}: {line}: {message}")


def test_a_bad_line_far_down_a_large_file_has_its_number(tmp_path):
    for header, good, bad in [("diagram", "12+7+1", "7+12"), ("site0,site1", "0,1", "0,x"), ("swap", "symmetric", "?")]:
        lines = [good] * 400_000
        lines[321_098] = bad
        lines[321_200] = "worse"
        found = complaint("\n".join([header, *lines]), tmp_path / "run.csv")
        assert found.startswith(f", line {321_098 + 2}: {bad}: expected")


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", ": expected a header (diagram,count | diagram | "),
        ("\n\n", "got only comments"),
        ("# dim: 4\n", "got only comments"),
        ("diagram,count\n", ": expected at least one line below the header, got none"),
        ("diagram,count\n# end\n\n", ": expected at least one line below the header, got none"),
        ("site0,site1", ": expected at least one line below the header, got none"),
        ("diagram,count\n3+1,0\n", ": a record must hold at least one block"),
        ("site0,accepted\n1,0\n0,0\n", ": a record must hold at least one accepted shot (2 were rejected)"),
        ("shape,count\n3+1,5\n", ", line 1: shape,count: expected a header (diagram,count | diagram | "),
        ("3+1,5\n", ", line 1: 3+1,5: expected a header (diagram,count | diagram | two_j,copies,count | two_j,"),
        ("count,diagram\n", ", line 1: count,diagram: expected a header"),
        ("accepted\n1\n", ", line 1: accepted: expected a header"),
        ("site1,site2\n0,1\n", ", line 1: site1,site2: expected sites in the order site0,site1,..., got site1 in"),
        ("site0,site0\n0,1\n", "expected sites in the order site0,site1,..., got site0 in place of site1"),
        ("site0,site02\n0,1\n", "got site02 in place of site1"),
        ("site0,accepted,accepted\n", "expected at most one column accepted, got 2"),
        ("# dim: four\ndiagram\n4\n", ", line 1: # dim: four: expected dim, a whole number from 0 to 2^53, got four"),
        ("# dim: 0\ndiagram\n4\n", "expected dim to be at least 1, got 0"),
        ("# dim:\ndiagram\n4\n", "expected dim, a whole number from 0 to 2^53, got nothing"),
        ("# site_dim: 1\nsite0\n1\n", "expected site_dim to be at least 2, got 1"),
        ("# dim: 4\n# dim: 4\ndiagram\n4\n", ", line 2: # dim: 4: expected dim to be set once, got it again"),
        ("# dim: 4\nsite0\n1\n", ", line 1: # dim: 4: expected no dim for a table of sites, got dim"),
        ("\n# rejected: 4\nswap\n", ", line 2: # rejected: 4: expected no rejected for a table with the header swap"),
        ("# dim: 3\ntwo_j,copies\n2,4\n", "expected dim 2, as total spins are of qubits, got dim 3"),
        ("# dim: 2\ndiagram\n2+1+1\n", ", line 3: 2+1+1: expected at most 2 rows, as dim is 2, got 3 rows"),
        ("# dim: 1\nswap\nantisymmetric\n", "expected at most 1 row, as dim is 1, got 2 rows"),
        ("diagram,count\n2,2305843009213693952\n", ": total copies must stay below 2^62, got 4611686018427387904"),
        ("swap,count\n" + "symmetric,4611686018427387904\n" * 9, ": total copies must stay below 2^62, got at least"),
        ("diagram\n" + "+".join(["9007199254740992"] * 3000), ": total copies must stay below 2^62, got a block of"),
    ],
)
def test_files_that_are_wrong_as_a_whole(text, message, tmp_path):
    assert message in complaint(text, tmp_path / "run.csv")


@pytest.mark.parametrize(
    ("data", "message"),
    [
        (b"\x7fELF\x02\x01\x01\0\0\0\0", "got a file that is not UTF-8 text"),
        (bytes(range(256)), "got a file that is not UTF-8 text"),
        (b"\0" * 3_000_000, "expected a line of at most 1048576 bytes, got a longer one"),
        ("diagram\n3+1\n".encode("utf-16"), "got a file that is not UTF-8 text"),
        (b"\x89PNG\r\n\x1a\n", "got a file that is not UTF-8 text"),
        (b"diagram\n3+1\n3\xff1\n", r", line 3: 3\xff1: expected a diagram, rows joined by + such as 3+1, got 3\xff1"),
        (b"diagram\n3+1\n3\x001\n", r", line 3: 3\x001: expected a diagram"),
        (b"diagram\n3\x1b[31m\n", r", line 2: 3\x1b[31m: expected a diagram"),
        (b"diagram\n" + b"x" * 500, ", line 2: " + "x" * 77 + "...: expected"),
        (b"diagram\n" + b"1+" * 600_000 + b"1", ", line 2: 1+1+1"),
    ],
)
def test_binary_files_and_strange_bytes(data, message, tmp_path):
    assert message in complaint(data, tmp_path / "run.csv")


@pytest.mark.parametrize(
    ("text", "dim", "message"),
    [
        ("# dim: 4\ndiagram\n3+1\n", 3, ", line 1: # dim: 4: expected dim 3, as asked for, got dim 4"),
        ("diagram\n2+1+1\n", 2, ", line 2: 2+1+1: expected at most 2 rows, as dim is 2, got 3 rows"),
        ("two_j,copies\n2,4\n", 3, ": dim must be 2 for total spins of qubits, got 3"),
        ("site0\n1\n", 2, ": dim must be left out for a table of sites (use site_dim), got 2"),
        (
            '{"schema": "entropest-record/1", "kind": "diagrams", "dim": 4, "counts": {"2": 1}}',
            3,
            ": expected dim 3, as",
        ),
        ('{"schema": "entropest-record/1", "kind": "two_copy_shots", "shots": ["1"]}', 2, ": expected dim to be left"),
    ],
)
def test_the_dimension_of_the_caller_must_agree_with_the_file(text, dim, message, tmp_path):
    assert message in complaint(text, tmp_path / "run.csv", dim=dim)


def json_record(**content):
    return json.dumps({"schema": "entropest-record/1", "kind": "diagrams", "counts": {"3+1": 1}} | content)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("{", ", line 1: {: expected JSON, got Expecting property name enclosed in double quotes in column 2"),
        ('{"schema":\n  oops}', ", line 2: oops}: expected JSON, got Expecting value in column 3"),
        ('{"a": 1, "a": 2}', ": expected each key once, got a"),
        ('{"kind": "diagrams"}', ': expected schema "entropest-record/1", got None'),
        (
            json_record(schema="entropest-record/2"),
            ": expected schema \"entropest-record/1\", got 'entropest-record/2'",
        ),
        (json_record(schema=["x"]), ": expected schema"),
        (json_record(kind="other"), ": expected kind diagrams or moments or two_copy_shots, got 'other'"),
        (json_record(kind=["diagrams"]), ": expected kind diagrams or moments or two_copy_shots"),
        (json_record(note="x"), ": expected no other keys for kind diagrams, got note"),
        (
            '{"schema": "entropest-record/1", "kind": "diagrams"}',
            ": expected the key counts for kind diagrams, got none",
        ),
        (json_record(counts=[1]), ': expected counts to be an object such as {"3+1": 12}, got list'),
        (json_record(counts={"1+3": 1}), ": expected rows that do not increase, got 1+3"),
        (json_record(counts={"3+1": -1}), ": count of 3+1 must be at least 0, got -1"),
        (json_record(counts={"3+1": 1.5}), ": count of 3+1 must be a whole number, got 1.5"),
        (json_record(counts={"3+1": "1"}), ": count of 3+1 must be an integer, got '1' of type str"),
        (json_record(counts={"3+1": True}), ": count of 3+1 must be an integer, got True of type bool"),
        (json_record(counts={"3+1": None}), ": count of 3+1 must be an integer, got None"),
        (json_record(counts={"3+1": float("nan")}), ": expected finite numbers, got NaN"),
        (json_record(counts={"3+1": 10**25}), ": expected whole numbers of at most 20 digits, got 1"),
        ('{"counts": ' + "9" * 5000 + "}", ": expected whole numbers of at most 20 digits, got 9"),
        (json_record(counts={}), ": a record must hold at least one block"),
        (json_record(dim=1), ": dim must be at least the number of rows 2, got 1"),
        (json_record(dim="4"), ": dim must be an integer, got '4' of type str"),
        ('{"a":' * 100_000, ": expected a JSON record, got too many levels of brackets"),
    ],
)
def test_bad_json(text, message, tmp_path):
    assert message in complaint(text, tmp_path / "run.json")


def test_json_in_another_encoding(tmp_path):
    text = json_record(counts={"3\u00b2": 1}).replace("\\u00b2", "\u00b2")
    assert complaint(text.encode("latin-1"), tmp_path / "run.json") == r": expected text in UTF-8, got \xb2"
    assert "expected a diagram" in complaint(text, tmp_path / "run.json")


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ({"shots": []}, ': expected shots to be a list such as ["0110", "0000"], got []'),
        ({"shots": "01"}, ": expected shots to be a list"),
        ({"shots": ["01", "0"]}, ": expected shot 2 to be a text of 2 letters 0 or 1, got '0'"),
        ({"shots": ["01", "0\u0661"]}, ": expected shot 2 to be a text of 2 letters 0 or 1"),
        ({"shots": ["0x"]}, ": expected shot 1 to be a text of 2 letters 0 or 1, got '0x'"),
        ({"shots": [1]}, ": expected shot 1 to be a text of 1 letters 0 or 1, got 1"),
        ({"shots": [""]}, ": expected shot 1 to be a text of 1 letters 0 or 1, got ''"),
        ({"shots": ["01"], "site_dim": 1}, ": site_dim must be at least 2, got 1"),
        ({"shots": ["01"], "rejected": None}, ": rejected must be an integer, got None"),
        ({"shots": ["01"], "sites": 2}, ": expected no other keys for kind two_copy_shots, got sites"),
    ],
)
def test_bad_json_of_shots(content, message, tmp_path):
    text = json.dumps({"schema": "entropest-record/1", "kind": "two_copy_shots", **content})
    assert message in complaint(text, tmp_path / "run.json")


def test_bad_text_streams_name_the_stream():
    with pytest.raises(RecordFileError, match=r"^the open file, line 2: x: expected a diagram"):
        read_record(io.StringIO("diagram\nx\n"))
    stream = io.TextIOWrapper(io.BytesIO(b"diagram\n3\xff\n"), encoding="utf-8")
    with pytest.raises(RecordFileError, match="expected text in utf-8, got other bytes"):
        read_record(stream)
    with pytest.raises(RecordFileError, match=r"line 2: 3\\xed\\xb3\\xbf: expected"):
        read_record(io.StringIO("diagram\n3\udcff\n"))


def test_a_few_long_diagrams_among_many_short_ones_take_little_memory(tmp_path):
    path = tmp_path / "run.csv"
    lines = ["+".join(["1"] * rows) for rows in range(2000, 2100)]
    path.write_text("\n".join(["diagram", *lines]) + "\n" + "1\n" * 300_000)
    tracemalloc.start()
    record = read_record(path)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert record.blocks == 300_100
    assert peak < 100e6


def test_a_table_beyond_the_budget_is_refused_with_its_size(tmp_path, monkeypatch):
    monkeypatch.setattr(grouping, "LARGEST_TABLE", 10_000)
    lines = ["+".join(["1"] * rows) for rows in range(150, 250)]
    found = complaint("\n".join(["diagram", *lines]), tmp_path / "run.csv")
    assert found.startswith(": a table of 100 shapes in 249 rows would need 0.000186 GiB, more than the budget")


def outcome(data):
    """Return the record that bytes hold, or the message that refuses them."""
    try:
        return read_record(io.BytesIO(data))
    except RecordFileError as error:
        return str(error)


@given(
    st.sampled_from(["", *[f"{header}\n" for header in GOOD_LINES], "# dim: 3\ndiagram\n", "{"]),
    st.one_of(st.binary(max_size=60), st.text('0123456789+,\n #dim:.-"', max_size=60).map(str.encode)),
)
def test_any_bytes_give_a_record_or_a_clear_error(head, data):
    result = outcome(head.encode() + data)
    if isinstance(result, str):
        assert len(result.splitlines()) == 1
        assert "expected" in result or "must" in result
    else:
        assert isinstance(result, DiagramCounts | TwoCopyShots)
        assert outcome("".join(result.canonical_csv()).encode()) == result


@given(
    st.sampled_from([header for header in GOOD_LINES if not header.startswith("swap")]),
    st.sampled_from(["", "# dim: 2\n", "# dim: 3\n"]),
    st.lists(
        st.one_of(
            st.lists(st.sampled_from("00112233459+,"), min_size=1, max_size=7).map("".join),
            st.sampled_from(["2,2,1", "3+1", "1+1+1", "3+1,2", "2+1,0", "2,4", "1,3,5", "0,1", "1,1"]),
        ),
        min_size=1,
        max_size=12,
    ),
)
def test_lines_read_as_arrays_and_one_by_one_give_the_same(header, setting, lines):
    """A comment at the end of a block makes the reader take the block line by line."""
    data = "\n".join([setting + header, *lines, ""]).encode()
    assert outcome(data) == outcome(data + b"# end\n")

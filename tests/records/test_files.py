"""Reading and writing good records: every header, tolerated variations, exact round trips, large files."""

import hashlib
import io
import json
import os
import sys
import tracemalloc

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.records import DiagramCounts, TwoCopyShots, read_record, text_source, write_record

rows_of_a_diagram = st.lists(st.integers(1, 2**50), min_size=1, max_size=4).map(
    lambda rows: tuple(sorted(rows, reverse=True))
)
diagram_records = st.builds(
    DiagramCounts,
    st.dictionaries(rows_of_a_diagram, st.integers(1, 100), min_size=1, max_size=6),
    dim=st.sampled_from([None, 4, 7]),
)
shot_records = st.builds(
    lambda sites, bits, site_dim, rejected: TwoCopyShots(
        [[bit >> site & 1 for site in range(sites)] for bit in bits], site_dim=site_dim, rejected=rejected
    ),
    st.integers(1, 5),
    st.lists(st.integers(0, 31), min_size=1, max_size=20),
    st.integers(2, 4),
    st.sampled_from([0, 1, 9, 2**62]),
)


def read_text(text, **options):
    return read_record(io.StringIO(text), **options)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("diagram,count\n3+1,12\n4,7\n3+1,1\n", DiagramCounts({"3+1": 13, "4": 7})),
        ("# dim: 4\ndiagram\n3+1\n4\n3+1\n", DiagramCounts({"3+1": 2, "4": 1}, dim=4)),
        ("two_j,copies\n2,4\n4,4\n1,3\n", DiagramCounts({"3+1": 1, "4": 1, "2+1": 1}, dim=2)),
        ("two_j,copies,count\n2,4,10\n0,2,0\n0,6,1\n", DiagramCounts({"3+1": 10, "3+3": 1}, dim=2)),
        ("swap\nsymmetric\nantisymmetric\nsymmetric\n", DiagramCounts({"2": 2, "1+1": 1})),
        ("#dim:3\nswap,count\nantisymmetric,20\nsymmetric,80\n", DiagramCounts({"2": 80, "1+1": 20}, dim=3)),
        ("diagram,count\n3+1+0,12\n4,0\n", DiagramCounts({"3+1": 12})),
        ("diagram,count\n1,4611686018427387903\n", DiagramCounts({"1": 2**62 - 1})),
    ],
)
def test_tallies_under_every_header(text, expected):
    assert read_text(text) == expected


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("site0,site1\n0,1\n1,1\n", TwoCopyShots([[0, 1], [1, 1]])),
        ("site0\n0\n1\n", TwoCopyShots([[0], [1]])),
        ("site0,site1,accepted\n0,1,1\n1,1,0\n", TwoCopyShots([[0, 1]], rejected=1)),
        ("accepted,site0,site1\n1,0,1\n0,1,1\n", TwoCopyShots([[0, 1]], rejected=1)),
        (
            "# site_dim: 3\n# rejected: 4\nsite0,accepted,site1\n0,1,1\n1,0,1\n",
            TwoCopyShots([[0, 1]], site_dim=3, rejected=5),
        ),
    ],
)
def test_tables_of_sites(text, expected):
    assert read_text(text) == expected


@pytest.mark.parametrize(
    "text",
    [
        "\ufeff# dim: 4\r\ndiagram,count\r\n3+1,12\r\n4,7\r\n",
        "# a run of an invented machine, Zürich\n\n# DIM : 4\n\n Diagram , COUNT \n 3 + 1 , 12\t\n\n# x\n4,7",
        '# dim: 4\n"diagram","count"\n"3+1",12\n"4","7"\n',
        "# dim: 4\ndiagram,count\n4,7\n3+1,2\n3+1,2\n3+1,8\n  \n",
        "# dim: 4\ndiagram,count\n4,07\n3+1+0,012\n",
    ],
)
def test_spaces_comments_quotes_and_line_ends_are_tolerated(text, tmp_path):
    expected = DiagramCounts({"3+1": 12, "4": 7}, dim=4)
    path = tmp_path / "record.csv"
    path.write_bytes(text.encode())
    assert read_text(text) == read_record(path) == read_record(str(path)) == expected
    with open(path, "rb") as stream:
        assert read_record(stream) == expected


def test_comments_spaces_and_blank_lines_in_a_table_of_sites():
    text = "site0,site1\n0,1\n# pause\n 1 , 1\n\n"
    assert read_text(text) == TwoCopyShots([[0, 1], [1, 1]])


def test_standard_input_is_a_dash(monkeypatch):
    monkeypatch.setattr(sys, "stdin", io.StringIO("swap\nsymmetric\n"))
    assert read_record("-") == DiagramCounts({"2": 1})
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(b"swap\nsymmetric\n")))
    assert read_record("-", dim=2) == DiagramCounts({"2": 1}, dim=2)


def test_the_dimension_may_come_from_the_caller():
    assert read_text("diagram\n3+1\n", dim=2).dim == 2
    assert read_text("# dim: 2\ndiagram\n3+1\n", dim=2).dim == 2
    assert read_text("two_j,copies\n2,4\n", dim=2).dim == 2
    assert read_text("# dim: 2\ntwo_j,copies\n2,4\n").dim == 2


@pytest.mark.parametrize("dim", [0, 2.5, "2", True])
def test_the_dimension_of_the_caller_is_checked(dim):
    with pytest.raises((ArgumentTypeError, ArgumentValueError), match=r"^dim must be"):
        read_text("diagram\n3+1\n", dim=dim)


def test_json_by_hand():
    text = '{"schema": "entropest-record/1", "kind": "diagrams", "counts": {"3+1": 12, "4": 7, "3+1+0": 1}}'
    assert read_text(text) == DiagramCounts({"3+1": 13, "4": 7})
    assert read_text("\ufeff \n" + text, dim=4) == DiagramCounts({"3+1": 13, "4": 7}, dim=4)
    shots = '{"kind": "two_copy_shots", "schema": "entropest-record/1", "shots": ["01", "11"]}'
    assert read_text(shots) == TwoCopyShots([[0, 1], [1, 1]])


@given(st.one_of(diagram_records, shot_records), st.sampled_from([".csv", ".json", ".CSV"]))
def test_round_trips_are_exact(tmp_path_factory, record, suffix):
    path = tmp_path_factory.getbasetemp() / f"round-trip{suffix}"
    write_record(record, path)
    again = read_record(path)
    assert again == record
    assert again.digest == record.digest
    assert again.dim == record.dim if isinstance(record, DiagramCounts) else again.sites == record.sites


@given(st.one_of(diagram_records, shot_records))
def test_the_digest_is_that_of_the_csv_file(tmp_path_factory, record):
    path = tmp_path_factory.getbasetemp() / "digest.csv"
    write_record(record, path)
    assert record.digest == "sha256:" + hashlib.sha256(path.read_bytes()).hexdigest()


@given(st.one_of(diagram_records, shot_records), st.integers(1, 60))
def test_the_size_of_the_pieces_read_does_not_matter(record, size):
    text = "".join(record.canonical_csv())
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(text_source, "BLOCK", size)
        assert read_text(text) == record
        assert read_text(text.replace("\n", " \r\n")) == record


def test_json_that_is_written_has_a_schema_and_no_other_keys(tmp_path):
    path = tmp_path / "record.json"
    write_record(DiagramCounts({"3+1": 12}), path)
    assert json.loads(path.read_text()) == {
        "schema": "entropest-record/1",
        "kind": "diagrams",
        "dim": None,
        "counts": {"3+1": 12},
    }
    write_record(TwoCopyShots([[0, 1]], site_dim=3, rejected=2), path)
    assert json.loads(path.read_text()) == {
        "schema": "entropest-record/1",
        "kind": "two_copy_shots",
        "site_dim": 3,
        "rejected": 2,
        "shots": ["01"],
    }


def test_a_write_that_fails_leaves_the_old_file_and_nothing_else(tmp_path, monkeypatch):
    path = tmp_path / "record.csv"
    old, new = DiagramCounts({"2": 1}), DiagramCounts({"2": 2})
    write_record(old, path)

    def interrupted(self):
        yield "diagram,count\n"
        raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        patch.setattr(DiagramCounts, "canonical_csv", interrupted)
        with pytest.raises(KeyboardInterrupt):
            write_record(new, path)
    assert os.listdir(tmp_path) == ["record.csv"]
    assert read_record(path) == old
    write_record(new, path)
    assert os.listdir(tmp_path) == ["record.csv"]
    assert read_record(path) == new


def test_writing_through_a_link_keeps_the_link(tmp_path):
    target, link = tmp_path / "data.csv", tmp_path / "link.csv"
    target.write_text("old")
    link.symlink_to(target)
    write_record(DiagramCounts({"2": 1}), link)
    assert link.is_symlink()
    assert read_record(target) == DiagramCounts({"2": 1})


def test_what_cannot_be_written_is_refused(tmp_path):
    record = DiagramCounts({"2": 1})
    with pytest.raises(ArgumentValueError, match=r"path must end in \.csv or \.json, got"):
        write_record(record, tmp_path / "record.txt")
    with pytest.raises(ArgumentTypeError, match="record must be DiagramCounts, MomentCounts or TwoCopyShots, got dict"):
        write_record({"2": 1}, tmp_path / "record.csv")
    with pytest.raises(FileNotFoundError):
        write_record(record, tmp_path / "missing" / "record.csv")
    with pytest.raises(FileNotFoundError):
        read_record(tmp_path / "missing.csv")
    with pytest.raises(ArgumentTypeError, match="path must be a path, '-' or an open file, got 3"):
        read_record(3)
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize("kind", ["few", "many", "sites"])
def test_a_million_lines_are_read_in_little_memory(kind, tmp_path):
    """240 MB above what the interpreter and numpy take (some 50 MB) keep the whole below 300 MB."""
    rng = np.random.default_rng(5)
    path = tmp_path / "large.csv"
    if kind == "few":
        texts = ["6", "5+1", "4+2", "4+1+1", "3+3", "3+2+1", "2+2+2", "3+1+1+1", "2+2+1+1"]
        drawn = rng.integers(0, len(texts), size=10**6)
        expected = DiagramCounts(dict(zip(texts, np.bincount(drawn).tolist(), strict=True)))
        path.write_text("\n".join(["diagram", *np.array(texts)[drawn].tolist()]))
    elif kind == "many":
        rows = -np.sort(-rng.multinomial(10**7, [0.25] * 4, size=10**6), axis=1)
        expected = DiagramCounts.from_rows(rows)
        path.write_text("".join(expected.canonical_csv()))
    else:
        expected = TwoCopyShots(rng.integers(0, 2, size=(10**6, 10)))
        path.write_text("".join(expected.canonical_csv()))
    tracemalloc.start()
    record = read_record(path)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert record == expected
    assert peak < 240e6

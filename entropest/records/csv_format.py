"""Reading CSV records: settings in comments, then a header that says which table follows, then its lines."""

import re
from collections.abc import Iterator
from itertools import chain
from typing import NamedTuple

from entropest._checks import LARGEST_COUNT
from entropest.errors import ArgumentValueError, RecordFileError
from entropest.records.counts import DiagramCounts
from entropest.records.csv_tables import MomentTable, SiteTable, Table, TallyTable
from entropest.records.fields import read_whole, split_fields
from entropest.records.moment_counts import MomentCounts
from entropest.records.text_source import FieldError, bad_line, decoded
from entropest.records.two_copy import TwoCopyShots
from entropest.shapes import LARGEST_ROW

TALLY_HEADERS = (
    ("diagram", "count"),
    ("diagram",),
    ("two_j", "copies", "count"),
    ("two_j", "copies"),
    ("swap", "count"),
    ("swap",),
)
MOMENT_HEADER = ("order", "plus", "minus")
HEADERS = " | ".join([*map(",".join, (*TALLY_HEADERS, MOMENT_HEADER)), "site0,site1,... with or without accepted"])
SETTING = re.compile(r"#\s*(dim|site_dim|rejected)\s*:\s*(.*)", re.IGNORECASE)


class Setting(NamedTuple):
    """A setting such as ``# dim: 4`` and where it stands."""

    number: int
    line: str
    value: int


def read_csv(
    blocks: Iterator[bytes], file: str, *, dim: int | None = None
) -> DiagramCounts | MomentCounts | TwoCopyShots:
    """Read a CSV record from blocks of whole lines; `file` names it in messages."""
    table, number, rest = _read_head(blocks, file, dim)
    empty = True
    for block in chain([rest], blocks):
        if block and table.take_block(block):
            empty = False
        elif block and (lines := _read_lines(block, file, number, table)):
            table.take_lines(lines)
            empty = False
        number += block.count(b"\n")
    if empty:
        raise RecordFileError(f"{file}: expected at least one line below the header, got none")
    return table.record()


def _read_head(blocks: Iterator[bytes], file: str, dim: int | None) -> tuple[Table, int, bytes]:
    """Read up to the header: the table it announces, the number of the next line, what is left of the block."""
    settings: dict[str, Setting] = {}
    number = 0
    for block in blocks:
        start = 0
        while start < len(block):
            end = block.index(b"\n", start) + 1
            raw = block[start:end]
            line = decoded(raw).strip()
            start = end
            number += 1
            try:
                if match := SETTING.fullmatch(line):
                    name = match[1].lower()
                    if name in settings:
                        raise FieldError(f"{name} to be set once", "it again")
                    settings[name] = Setting(number, line, _setting_value(name, match[2]))
                elif line and not line.startswith("#"):
                    return _table(_columns(raw), settings, file, dim), number + 1, block[start:]
            except FieldError as problem:
                raise bad_line(file, number, line, problem) from None
    got = "only comments" if number else "an empty file"
    raise RecordFileError(f"{file}: expected a header ({HEADERS}), got {got}")


def _setting_value(name: str, text: str) -> int:
    """Read the value of a setting."""
    least = {"dim": 1, "site_dim": 2, "rejected": 0}[name]
    value = read_whole(text, name, LARGEST_COUNT if name == "rejected" else LARGEST_ROW)
    if value < least:
        raise FieldError(f"{name} to be at least {least}", text)
    return value


def _columns(raw: bytes) -> tuple[str, ...]:
    """Return the columns that a header names, or say which headers are known."""
    columns = tuple(name.lower() for name in split_fields(decoded(raw).strip()))
    if columns in TALLY_HEADERS or columns == MOMENT_HEADER:
        return columns
    sites = [name for name in columns if name != "accepted"]
    if not sites or not all(re.fullmatch(r"site[0-9]+", name) for name in sites):
        text = b"\0" not in raw and decoded(raw).encode() == raw
        raise FieldError(f"a header ({HEADERS})", "another line" if text else "a file that is not UTF-8 text")
    for place, name in enumerate(sites):
        if name != f"site{place}":
            raise FieldError("sites in the order site0,site1,...", f"{name} in place of site{place}")
    if len(columns) > len(sites) + 1:
        raise FieldError("at most one column accepted", str(len(columns) - len(sites)))
    return columns


def _table(columns: tuple[str, ...], settings: dict[str, Setting], file: str, dim: int | None) -> Table:
    """Return the table that a header announces, set up as the settings and the caller's `dim` say."""
    sites = columns not in TALLY_HEADERS and columns != MOMENT_HEADER
    for name, setting in settings.items():
        if sites == (name == "dim"):
            what = "a table of sites" if sites else f"a table with the header {','.join(columns)}"
            problem = FieldError(f"no {name} for {what}", name)
            raise bad_line(file, setting.number, setting.line, problem)
    if sites:
        if dim is not None:
            raise ArgumentValueError(f"dim must be left out for a table of sites (use site_dim), got {dim}")
        given = {name: setting.value for name, setting in settings.items()}
        return SiteTable(columns, given.get("site_dim", 2), given.get("rejected", 0))
    wanted = dim
    if columns[0] == "two_j":
        wanted = 2
        if dim not in (None, 2):
            raise ArgumentValueError(f"dim must be 2 for total spins of qubits, got {dim}")
    if "dim" in settings:
        setting = settings["dim"]
        if wanted not in (None, setting.value):
            why = "asked for" if dim is not None else "total spins are of qubits"
            problem = FieldError(f"dim {wanted}, as {why}", f"dim {setting.value}")
            raise bad_line(file, setting.number, setting.line, problem)
        wanted = setting.value
    return MomentTable(columns, wanted) if columns == MOMENT_HEADER else TallyTable(columns, wanted)


def _read_lines(block: bytes, file: str, number: int, table: Table) -> list[object]:
    """Read a block line by line, each distinct line once; the first bad line of the block is reported."""
    known: dict[bytes, object] = {}
    lines = []
    for offset, raw in enumerate(block.split(b"\n")[:-1]):
        if raw not in known:
            try:
                known[raw] = _read_line(raw, table)
            except FieldError as problem:
                raise bad_line(file, number + offset, decoded(raw), problem) from None
        if (value := known[raw]) is not None:
            lines.append(value)
    return lines


def _read_line(raw: bytes, table: Table) -> object:
    """Read one line; None for a blank line or a comment."""
    line = decoded(raw).strip()
    if not line:
        return None
    if line.startswith("#"):
        if match := SETTING.fullmatch(line):
            raise FieldError(f"{match[1]} to be set above the header", "it below")
        return None
    values = split_fields(line)
    if len(values) != len(table.columns):
        fields = "1 field" if len(table.columns) == 1 else f"{len(table.columns)} fields"
        raise FieldError(f"{fields} ({','.join(table.columns)})", str(len(values)))
    return table.read_line(values)

"""Reading and writing records: CSV or JSON, recognised by what the file holds."""

import os
import sys
from collections.abc import Iterator
from contextlib import ExitStack
from itertools import chain
from pathlib import Path
from typing import IO

from entropest._atomic import replace_file
from entropest._checks import as_integer
from entropest.errors import ArgumentTypeError, ArgumentValueError, EntropestError, RecordFileError
from entropest.records.counts import DiagramCounts
from entropest.records.csv_format import read_csv
from entropest.records.json_format import read_json, to_json
from entropest.records.moment_counts import MomentCounts
from entropest.records.text_source import line_blocks, pieces
from entropest.records.two_copy import TwoCopyShots
from entropest.shapes import LARGEST_ROW

__all__ = ["read_record", "write_record"]


def read_record(
    path: str | os.PathLike[str] | IO[str] | IO[bytes], *, dim: int | None = None
) -> DiagramCounts | MomentCounts | TwoCopyShots:
    r"""Read a record from a CSV or JSON file.

    Parameters
    ----------
    path : str, path or open file
        ``"-"`` is standard input.
    dim : int, optional
        Dimension of one copy. A file that states another one is refused.

    Returns
    -------
    DiagramCounts; MomentCounts for a table of orders; TwoCopyShots for a table of sites.

    Raises
    ------
    RecordFileError
        For the first line that does not fit: file, line number, text, what was expected and what was got.
        Nothing half-read is returned.
    OSError
        If the file cannot be opened or read.

    Notes
    -----
    A file whose first letter is ``{`` is JSON, any other is CSV, where the header says what follows:

    - ``diagram,count`` or ``diagram`` (one block a line): rows joined by ``+``, such as ``3+1``;
    - ``two_j,copies,count`` or ``two_j,copies``: twice the total spin of that many qubits;
    - ``swap,count`` or ``swap``: ``symmetric`` or ``antisymmetric``, blocks of two copies;
    - ``order,plus,minus``: tallies of cyclic-shift tests of each order;
    - ``site0,site1,...``, numbered from 0 in order, and perhaps ``accepted``: one shot a line, 1 where the
      two copies of the site were found antisymmetric.

    Lines that start with ``#`` are comments. Above the header ``# dim: 4`` sets the dimension of a copy;
    for a table of sites ``# site_dim: 3`` sets the dimension of a site, otherwise 2, and ``# rejected: 7``
    the number of shots left out before. Blank lines, spaces around fields, double quotes around a field, a
    byte-order mark and CRLF line ends are tolerated.

    JSON is an object with ``"schema": "entropest-record/1"`` and either ``"kind": "diagrams"``, ``"dim"``
    (a number, or null for unknown) and ``"counts"`` (an object such as ``{"3+1": 12}``), or
    ``"kind": "moments"``, ``"dim"`` and ``"tallies"`` (an object such as ``{"2": [70, 30]}``), or
    ``"kind": "two_copy_shots"``, ``"site_dim"``, ``"rejected"`` and ``"shots"`` (a list of texts such as
    ``"0110"``, one letter a site).

    A CSV file is read in blocks of a megabyte; memory grows with the number of distinct diagrams, or by one
    byte for each site of each shot.

    Examples
    --------
    >>> import io
    >>> read_record(io.StringIO("# dim: 2\ndiagram,count\n4,12\n3+1,5\n"))
    DiagramCounts({'4': 12, '3+1': 5}, dim=2)
    """
    if dim is not None:
        dim = as_integer(dim, "dim", at_least=1, at_most=LARGEST_ROW)
    with ExitStack() as stack:
        if isinstance(path, str | os.PathLike):
            if os.fspath(path) == "-":
                file, stream = "standard input", getattr(sys.stdin, "buffer", sys.stdin)
            else:
                file = os.fspath(path)
                stream = stack.enter_context(open(path, "rb"))
        elif hasattr(path, "read"):
            name = getattr(path, "name", None)
            file, stream = name if isinstance(name, str) else "the open file", path
        else:
            raise ArgumentTypeError(f"path must be a path, '-' or an open file, got {path!r}")
        try:
            return _read(pieces(stream, file), file, dim)
        except RecordFileError:
            raise
        except EntropestError as error:
            raise RecordFileError(f"{file}: {error}") from error


def _read(data: Iterator[bytes], file: str, dim: int | None) -> DiagramCounts | MomentCounts | TwoCopyShots:
    """Read JSON if the first letter is a brace, otherwise CSV."""
    first = next(data, b"")
    whole = chain([first], data)
    if first.lstrip().startswith(b"{"):
        return read_json(b"".join(whole), file, dim=dim)
    return read_csv(line_blocks(whole, file), file, dim=dim)


def write_record(record: DiagramCounts | MomentCounts | TwoCopyShots, path: str | os.PathLike[str]) -> None:
    """Write a record as CSV or JSON, as the suffix of the path says.

    The text goes to a temporary file beside `path`, which then takes its place: an interrupted write leaves
    an older file as it was. A CSV file is the canonical form, so that its SHA-256 is ``record.digest``.

    Raises
    ------
    ArgumentValueError
        If the suffix is neither .csv nor .json.
    OSError
        If the file cannot be written.

    Examples
    --------
    >>> import tempfile, pathlib
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = pathlib.Path(folder, "pairs.csv")
    ...     write_record(DiagramCounts.from_swap(symmetric=80, antisymmetric=20, dim=2), path)
    ...     read_record(path)
    DiagramCounts({'2': 80, '1+1': 20}, dim=2)
    """
    if not isinstance(record, DiagramCounts | MomentCounts | TwoCopyShots):
        raise ArgumentTypeError(
            f"record must be DiagramCounts, MomentCounts or TwoCopyShots, got {type(record).__name__}"
        )
    suffix = Path(path).suffix.lower()
    if suffix == ".csv":
        pieces = record.canonical_csv()
    elif suffix == ".json":
        pieces = iter([to_json(record)])
    else:
        raise ArgumentValueError(f"path must end in .csv or .json, got {os.fspath(path)!r}")
    replace_file(path, (piece.encode("ascii") for piece in pieces))

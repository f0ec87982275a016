"""JSON records: one object with the keys schema, kind, and the contents of that kind."""

import json
import re
from typing import Any

import numpy as np

from entropest._checks import LARGEST_COUNT, as_count
from entropest.errors import EntropestError, RecordFileError
from entropest.records.counts import DiagramCounts
from entropest.records.fields import read_order, read_rows
from entropest.records.grouping import tabulated
from entropest.records.moment_counts import MomentCounts
from entropest.records.text_source import FieldError, decoded, shown
from entropest.records.two_copy import TwoCopyShots

SCHEMA = "entropest-record/1"
NEEDED = {"diagrams": {"counts"}, "moments": {"tallies"}, "two_copy_shots": {"shots"}}
OPTIONAL = {"diagrams": {"dim"}, "moments": {"dim"}, "two_copy_shots": {"site_dim", "rejected"}}


def to_json(record: DiagramCounts | MomentCounts | TwoCopyShots) -> str:
    """Return a record as JSON text that reads back to an equal record."""
    if isinstance(record, DiagramCounts):
        content: dict[str, Any] = {"kind": "diagrams", "dim": record.dim, "counts": dict(record.text_items())}
    elif isinstance(record, MomentCounts):
        tallies = {str(order): list(pair) for order, pair in record.tallies.items()}
        content = {"kind": "moments", "dim": record.dim, "tallies": tallies}
    else:
        bits = record.singlets.astype(np.uint8) + np.uint8(ord("0"))
        shots = [row.tobytes().decode("ascii") for row in bits]
        content = {
            "kind": "two_copy_shots",
            "site_dim": record.site_dim,
            "rejected": record.rejected,
            "shots": shots,
        }
    return json.dumps({"schema": SCHEMA, **content}, indent=1) + "\n"


def read_json(data: bytes, file: str, *, dim: int | None = None) -> DiagramCounts | MomentCounts | TwoCopyShots:
    """Read a JSON record; `file` names it in messages."""
    try:
        text = data.decode("utf-8")
        content = json.loads(text, object_pairs_hook=_unique, parse_int=_integer, parse_constant=_refuse_constant)
        return _record(content, dim)
    except UnicodeDecodeError as error:
        bad = decoded(data[error.start : error.end])
        raise RecordFileError(f"{file}: expected text in UTF-8, got {bad}") from None
    except json.JSONDecodeError as error:
        line = shown(text.split("\n")[error.lineno - 1].strip())
        where = f"{error.msg} in column {error.colno}"
        raise RecordFileError(f"{file}, line {error.lineno}: {line}: expected JSON, got {where}") from None
    except RecursionError:
        raise RecordFileError(f"{file}: expected a JSON record, got too many levels of brackets") from None
    except (FieldError, EntropestError) as error:
        raise RecordFileError(f"{file}: {error}") from None


def _record(content: object, dim: int | None) -> DiagramCounts | MomentCounts | TwoCopyShots:
    if not isinstance(content, dict):
        raise FieldError("a JSON object", type(content).__name__)
    if content.get("schema") != SCHEMA:
        raise FieldError(f'schema "{SCHEMA}"', repr(content.get("schema")))
    kind = content.get("kind")
    if not isinstance(kind, str) or kind not in NEEDED:
        raise FieldError(f"kind {' or '.join(NEEDED)}", repr(kind))
    keys = content.keys() - {"schema", "kind"}
    if missing := NEEDED[kind] - keys:
        raise FieldError(f"the key {min(missing)} for kind {kind}", "none")
    if unknown := keys - NEEDED[kind] - OPTIONAL[kind]:
        raise FieldError(f"no other keys for kind {kind}", min(unknown))
    if kind == "moments":
        return _moments(content, dim)
    return _diagrams(content, dim) if kind == "diagrams" else _shots(content, dim)


def _diagrams(content: dict[str, Any], dim: int | None) -> DiagramCounts:
    counts = content["counts"]
    if not isinstance(counts, dict):
        raise FieldError('counts to be an object such as {"3+1": 12}', type(counts).__name__)
    tallies: dict[tuple[int, ...], int] = {}
    for text, count in counts.items():
        rows = read_rows(text, None)
        tallies[rows] = tallies.get(rows, 0) + _tally(count, text)
    return DiagramCounts.from_checked(*tabulated(tallies), _dimension(content, dim))


def _moments(content: dict[str, Any], dim: int | None) -> MomentCounts:
    tallies = content["tallies"]
    if not isinstance(tallies, dict):
        raise FieldError('tallies to be an object such as {"2": [70, 30]}', type(tallies).__name__)
    pairs: dict[int, tuple[int, int]] = {}
    for text, pair in tallies.items():
        order = read_order(text)
        if order in pairs:
            raise FieldError("each order once", text)
        if not isinstance(pair, list) or len(pair) != 2:
            raise FieldError(f"a list of two tallies for order {order}", shown(repr(pair)))
        pairs[order] = (as_count(pair[0], f"plus of order {order}"), as_count(pair[1], f"minus of order {order}"))
    return MomentCounts(pairs, dim=_dimension(content, dim))


def _dimension(content: dict[str, Any], dim: int | None) -> int | None:
    """Return the dimension that the record states, or the one asked for."""
    stated: int | None = content.get("dim")
    if dim is not None and stated is not None and stated != dim:
        raise FieldError(f"dim {dim}, as asked for", f"dim {stated!r}")
    return stated if dim is None else dim


def _tally(count: Any, diagram: str) -> int:
    """Return a tally; the name of its diagram is made only for an error."""
    if type(count) is int and 0 <= count <= LARGEST_COUNT:
        return count
    return as_count(count, f"count of {shown(diagram)}")


def _shots(content: dict[str, Any], dim: int | None) -> TwoCopyShots:
    shots = content["shots"]
    if dim is not None:
        raise FieldError("dim to be left out for shots of sites (use site_dim)", str(dim))
    if not isinstance(shots, list) or not shots:
        raise FieldError('shots to be a list such as ["0110", "0000"]', shown(repr(shots)))
    sites = len(shots[0]) if isinstance(shots[0], str) else 0
    wanted = re.compile(f"[01]{{{max(sites, 1)}}}")
    for number, shot in enumerate(shots, start=1):
        if not isinstance(shot, str) or not wanted.fullmatch(shot):
            raise FieldError(f"shot {number} to be a text of {max(sites, 1)} letters 0 or 1", repr(shot))
    bits = np.frombuffer("".join(shots).encode("ascii"), dtype=np.uint8).reshape(len(shots), sites)
    return TwoCopyShots(
        bits - np.uint8(ord("0")),
        site_dim=content.get("site_dim", 2),
        rejected=content.get("rejected", 0),
    )


def _unique(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    """Make an object of pairs, refusing a key that comes twice."""
    result = dict(pairs)
    if len(result) < len(pairs):
        keys = [key for key, _ in pairs]
        raise FieldError("each key once", next(key for i, key in enumerate(keys) if key in keys[:i]))
    return result


def _integer(text: str) -> int:
    if len(text) > 20:
        raise FieldError("whole numbers of at most 20 digits", text)
    return int(text)


def _refuse_constant(text: str) -> float:
    raise FieldError("finite numbers", text)

"""Fields of a line: each reader returns the value or says what was expected."""

from entropest._checks import LARGEST_COUNT
from entropest.records.moment_counts import LARGEST_SHIFT
from entropest.records.text_source import FieldError
from entropest.shapes import LARGEST_ROW

SWAP_ROWS = {"symmetric": (2,), "antisymmetric": (1, 1)}


def split_fields(line: str) -> list[str]:
    """Split a line at commas; spaces around a field and one pair of double quotes are dropped."""
    return [_unquoted(field.strip()) for field in line.split(",")]


def read_whole(text: str, what: str, largest: int) -> int:
    """Read digits as a whole number from 0 to `largest`, a power of two."""
    if text.isascii() and text.isdigit() and len(text.lstrip("0")) <= 19 and int(text) <= largest:
        return int(text)
    raise FieldError(f"{what}, a whole number from 0 to 2^{largest.bit_length() - 1}", text or "nothing")


def read_count(text: str) -> int:
    """Read a tally."""
    return read_whole(text, "a count", LARGEST_COUNT)


def read_order(text: str) -> int:
    """Read the order of a cyclic-shift test."""
    order = read_whole(text, "an order", LARGEST_SHIFT)
    if order < 2:
        raise FieldError("an order of at least 2", text)
    return order


def read_rows(text: str, dim: int | None) -> tuple[int, ...]:
    """Read the rows of a diagram, such as 3+1; zeros at the end are dropped."""
    parts = [part.strip() for part in text.split("+")]
    if not all(part.isascii() and part.isdigit() for part in parts):
        raise FieldError("a diagram, rows joined by + such as 3+1", text or "nothing")
    rows = [read_whole(part, "rows", LARGEST_ROW) for part in parts]
    if any(rows[i] > rows[i - 1] for i in range(1, len(rows))):
        raise FieldError("rows that do not increase", text)
    if not rows[0]:
        raise FieldError("a diagram of at least one box", text)
    while not rows[-1]:
        rows.pop()
    return _within(dim, rows)


def read_spin(two_j: str, copies: str) -> tuple[int, ...]:
    """Read twice the total spin of some qubits and their number as the two rows of a diagram."""
    size = read_whole(copies, "copies", LARGEST_ROW)
    spin = read_whole(two_j, "two_j", LARGEST_ROW)
    if not size:
        raise FieldError("at least 1 copy", copies)
    if spin > size or (size - spin) % 2:
        raise FieldError("two_j at most copies and of the same parity", f"{two_j} of {copies} copies")
    return ((size + spin) // 2, (size - spin) // 2) if spin < size else (size,)


def read_swap(text: str, dim: int | None) -> tuple[int, ...]:
    """Read a swap outcome as a diagram of two boxes."""
    if text not in SWAP_ROWS:
        raise FieldError("symmetric or antisymmetric", text or "nothing")
    return _within(dim, SWAP_ROWS[text])


def _within(dim: int | None, rows: list[int] | tuple[int, ...]) -> tuple[int, ...]:
    if dim is not None and len(rows) > dim:
        most = "1 row" if dim == 1 else f"{dim} rows"
        raise FieldError(f"at most {most}, as dim is {dim}", f"{len(rows)} rows")
    return tuple(rows)


def _unquoted(field: str) -> str:
    return field[1:-1].strip() if len(field) >= 2 and field[0] == field[-1] == '"' else field

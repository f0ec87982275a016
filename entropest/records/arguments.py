"""Checks of what a record is made from, and the digest of its canonical text."""

import hashlib
from collections.abc import Iterable

import numpy as np
import numpy.typing as npt

from entropest._checks import LARGEST_COUNT
from entropest._types import BoolArray, IntArray
from entropest.diagrams import YoungDiagram
from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.shapes import LARGEST_ROW


def as_diagram(key: YoungDiagram | tuple[int, ...] | str) -> YoungDiagram:
    """Return a diagram given as such, as a tuple of rows or as text "3+1"; a row may hold up to 2^53 boxes."""
    if isinstance(key, YoungDiagram):
        diagram = key
    elif isinstance(key, str):
        diagram = YoungDiagram.parse(key)
    elif isinstance(key, tuple):
        diagram = YoungDiagram(key)
    else:
        raise ArgumentTypeError(f'a diagram must be a YoungDiagram, a tuple of rows or text "3+1", got {key!r}')
    if diagram.rows and diagram.rows[0] > LARGEST_ROW:
        raise ArgumentValueError(f"rows must hold at most 2^53 boxes, got {diagram.rows[0]}")
    return diagram


def whole_numbers(values: npt.ArrayLike, name: str, largest: int = LARGEST_COUNT) -> IntArray:
    """Return whole numbers from 0 to `largest`, a power of 2, as int64, or name the first that is not one."""
    raw = np.asarray(values)
    if raw.dtype.kind not in "iuf":
        raise ArgumentTypeError(f"{name} must be whole numbers, got dtype {raw.dtype}")
    wrong = (raw < 0) | (raw > largest) | (raw != np.floor(raw))
    if wrong.any():
        limit = f"2^{largest.bit_length() - 1}"
        raise ArgumentValueError(f"{name} must be whole numbers from 0 to {limit}, got {raw[wrong][0]}")
    return raw.astype(np.int64)


def zeros_and_ones(values: npt.ArrayLike, name: str) -> BoolArray:
    """Return an array of 0 and 1 as booleans, or name the first other value."""
    try:
        raw = np.asarray(values)
    except ValueError as error:
        raise ArgumentValueError(f"{name} must be a rectangular array of 0 and 1") from error
    if raw.dtype.kind not in "biuf":
        raise ArgumentTypeError(f"{name} must be an array of 0 and 1, got dtype {raw.dtype}")
    wrong = (raw != 0) & (raw != 1)
    if wrong.any():
        raise ArgumentValueError(f"{name} must be 0 or 1, got {raw[wrong][0]}")
    return np.asarray(raw, dtype=np.bool_)


def read_only(array: IntArray) -> IntArray:
    """Return a view that cannot be made writable again."""
    owner = np.ascontiguousarray(array)
    owner.flags.writeable = False
    return owner.view()


def digest_of(pieces: Iterable[str]) -> str:
    """Return "sha256:" and the SHA-256 of an ASCII text given in pieces."""
    state = hashlib.sha256()
    for piece in pieces:
        state.update(piece.encode("ascii"))
    return f"sha256:{state.hexdigest()}"

"""Blocks of plainly written lines parsed as whole arrays; None for a block that needs reading line by line.

Plain means digits and separators only: no spaces, comments or quotes, and no number beyond 18 digits. What is
returned has been checked in full.
"""

import numpy as np
import numpy.typing as npt

from entropest._types import IntArray
from entropest.shapes import LARGEST_ROW

Bytes = npt.NDArray[np.uint8]
LONGEST_NUMBER = 18
LARGEST_DENSE = 2**23


def diagram_block(block: bytes, *, counted: bool, dim: int | None) -> tuple[IntArray, IntArray] | None:
    """Parse lines such as ``3+1,12`` (or ``3+1`` when not `counted`) into rows (m, d) and counts (m,)."""
    parsed = _numbers(block)
    if parsed is None:
        return None
    values, separators = parsed
    ends = separators == ord("\n")
    commas = separators == ord(",")
    last = np.flatnonzero(ends)
    if commas.sum() != (len(last) if counted else 0) or (counted and not commas[last - 1].all()):
        return None
    first = np.concatenate([[0], last[:-1] + 1])
    heights = last - first + (0 if counted else 1)
    width = int(heights.max())
    if len(last) * width > LARGEST_DENSE:
        return None
    line = np.cumsum(ends) - ends
    place = np.arange(len(values)) - first[line]
    is_row = ~ends if counted else np.ones(len(values), dtype=np.bool_)
    rows = np.zeros((len(last), width), dtype=np.int64)
    rows[line[is_row], place[is_row]] = values[is_row]
    longest = rows[:, 0]
    if longest.min() < 1 or longest.max() > LARGEST_ROW or (rows[:, 1:] > rows[:, :-1]).any():
        return None
    if dim is not None and rows[:, dim:].any():
        return None
    return rows, values[last] if counted else np.ones(len(last), dtype=np.int64)


def spin_block(block: bytes, *, counted: bool) -> tuple[IntArray, IntArray] | None:
    """Parse lines ``two_j,copies`` with or without ``,count`` into rows (m, 2) and counts (m,)."""
    columns = 3 if counted else 2
    parsed = _numbers(block)
    if parsed is None or len(parsed[0]) % columns:
        return None
    separators = parsed[1].reshape(-1, columns)
    if (separators[:, :-1] != ord(",")).any() or (separators[:, -1] != ord("\n")).any():
        return None
    table = parsed[0].reshape(-1, columns)
    spin, size = table[:, 0], table[:, 1]
    if size.min() < 1 or size.max() > LARGEST_ROW or (spin > size).any() or ((size - spin) % 2).any():
        return None
    rows = np.stack([size + spin, size - spin], axis=1) // 2
    return rows, table[:, 2] if counted else np.ones(len(rows), dtype=np.int64)


def bit_block(block: bytes, columns: int) -> Bytes | None:
    """Parse lines of `columns` zeros and ones joined by commas into an (m, columns) array."""
    data = np.frombuffer(block, dtype=np.uint8)
    if len(data) % (2 * columns):
        return None
    table = data.reshape(-1, 2 * columns)
    bits = table[:, ::2] - np.uint8(ord("0"))
    plain = (table[:, 1:-1:2] == ord(",")).all() and (table[:, -1] == ord("\n")).all() and (bits <= 1).all()
    return bits if plain else None


def _numbers(block: bytes) -> tuple[IntArray, Bytes] | None:
    """Parse digits between the separators + , newline: the numbers, and the separator after each."""
    data = np.frombuffer(block, dtype=np.uint8)
    at = np.flatnonzero(data - np.uint8(ord("0")) > 9)
    separators = data[at]
    digits = np.diff(at, prepend=-1) - 1
    known = (separators == ord("+")) | (separators == ord(",")) | (separators == ord("\n"))
    if not known.all() or digits.min() < 1 or digits.max() > LONGEST_NUMBER:
        return None
    values = np.zeros(len(at), dtype=np.int64)
    for place in range(int(digits.max())):
        has = np.flatnonzero(digits > place)
        values[has] += (data[at[has] - 1 - place] - np.uint8(ord("0"))) * np.int64(10**place)
    return values, separators

"""Tallies of many diagrams at once: equal rows merged and put in canonical order, by sorting whole arrays."""

from collections.abc import Mapping
from operator import mul

import numpy as np

from entropest._checks import LARGEST_COUNT
from entropest._types import IntArray
from entropest.errors import ArgumentValueError, MemoryBudgetError

LARGEST_TABLE = 2**27
"""Most entries of a table of rows (1 GiB of int64)."""


def check_table_size(shapes: int, rows: int, advice: str) -> None:
    """Refuse a (shapes, rows) table beyond the memory budget, saying how large it would have been."""
    if shapes * rows > LARGEST_TABLE:
        raise MemoryBudgetError(
            f"a table of {shapes} shapes in {rows} rows would need {shapes * rows / 2**27:.3g} GiB, "
            f"more than the budget of 1 GiB; {advice}"
        )


def trimmed(rows: IntArray) -> IntArray:
    """Return the columns of an (m, d) table up to the last one that holds a box."""
    width = rows.shape[1]
    while width and not rows[:, width - 1].any():
        width -= 1
    return rows[:, :width]


def tabulated(tallies: Mapping[tuple[int, ...], int]) -> tuple[IntArray, IntArray]:
    """Return the rows and the counts of a tally as arrays, shorter rows padded with zeros."""
    if (total := sum(tallies.values())) >= LARGEST_COUNT:
        raise ArgumentValueError(f"total copies must stay below 2^62, got at least {total}")
    height = max(map(len, tallies), default=0)
    check_table_size(len(tallies), height, "split the record")
    table = np.zeros((len(tallies), height), dtype=np.int64)
    for line, rows in enumerate(tallies):
        table[line, : len(rows)] = rows
    return table, np.array(list(tallies.values()), dtype=np.int64)


def stacked(parts: list[tuple[IntArray, IntArray]]) -> tuple[IntArray, IntArray]:
    """Return tables of rows, padded to a common width, and their counts one after the other.

    The list of parts is emptied on the way, so that they need not be in memory twice.
    """
    lines = sum(len(counts) for _, counts in parts)
    width = max((rows.shape[1] for rows, _ in parts), default=0)
    check_table_size(lines, width, "split the record")
    table = np.zeros((lines, width), dtype=np.int64)
    tallies = np.zeros(lines, dtype=np.int64)
    stop = lines
    while parts:
        rows, counts = parts.pop()
        start = stop - len(counts)
        table[start:stop, : rows.shape[1]] = rows
        tallies[start:stop] = counts
        stop = start
    return table, tallies


def grouped(rows: IntArray, counts: IntArray) -> tuple[IntArray, IntArray]:
    """Return the distinct shapes in canonical order and how often each was counted.

    Canonical order: size increasing, then rows lexicographically decreasing. Shapes counted zero times are
    left out.

    Parameters
    ----------
    rows : (m, d) int array
        Checked shapes of at least one box each, in any order, with repeats.
    counts : (m,) int array
        Tallies >= 0.

    Raises
    ------
    ArgumentValueError
        If nothing is left, or the total number of boxes reaches 2^62.
    """
    if not counts.all():
        seen = counts > 0
        rows, counts = rows[seen], counts[seen]
    if not len(counts):
        raise ArgumentValueError("a record must hold at least one block")
    sizes = _sizes(rows)
    copies = sum(map(mul, sizes.tolist(), counts.tolist()))
    if copies >= LARGEST_COUNT:
        raise ArgumentValueError(f"total copies must stay below 2^62, got {copies}")
    rows = trimmed(rows)
    keys = _sort_keys(rows, sizes)
    order = np.lexsort(keys[::-1])
    starts = np.zeros(len(order), dtype=bool)
    starts[0] = True
    for key in keys:
        ordered = key[order]
        starts[1:] |= ordered[1:] != ordered[:-1]
    first = np.flatnonzero(starts)
    return rows[order[first]], np.add.reduceat(counts[order], first)


def _sizes(rows: IntArray) -> IntArray:
    """Return the number of boxes of each shape, refusing sums that 64 bits could not hold."""
    approximate = rows.sum(axis=1, dtype=np.float64).max()
    if approximate >= 1.5 * LARGEST_COUNT:
        raise ArgumentValueError(f"total copies must stay below 2^62, got a block of {approximate:.6g}")
    return np.asarray(rows.sum(axis=1))


def _sort_keys(rows: IntArray, sizes: IntArray) -> list[IntArray]:
    """Return keys, the most significant first, whose increasing order is the canonical order of the shapes.

    Neighbouring columns share one 64-bit key while their ranges allow it, so that one sort is often enough.
    """
    keys = [sizes]
    span = int(sizes.max()) + 1
    for column in rows.T:
        longest = int(column.max())
        if span * (longest + 1) < 2**62:
            keys[-1] = keys[-1] * (longest + 1) + (longest - column)
            span *= longest + 1
        else:
            keys.append(longest - column)
            span = longest + 1
    return keys

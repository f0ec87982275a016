"""Semistandard tableaux in lanes: many tableaux of one alphabet, into which words are inserted at once.

A tableau is kept as its Gelfand-Tsetlin pattern: the shapes of its letters below k, for every k. In that form
row insertion needs only maxima, minima and sums of small integers. Besides the lanes, the shapes themselves run
in parallel: while the letters below k take in one row, the letters below k - 1 take in the next one.
"""

from typing import Any

import numpy as np
import numpy.typing as npt

from entropest.law.letters import CodeArray

Cells = npt.NDArray[np.integer[Any]]

BYTES_AT_ONCE = 1 << 18


class Tableaux:
    """Semistandard tableaux with letters 0..d-1, one in every lane, empty at first.

    Inserting a weakly increasing row with c_k letters k - 1 turns the shapes l_k of the letters below k into
    l'_k, k = 1..d, by (rows counted from 0, missing rows and l_0 being 0)::

        l'_k[0] = max(l_k[0], l'_{k-1}[0]) + c_k
        l'_k[i] = max(l_k[i], l'_{k-1}[i]) + min(l_k[i-1], l'_{k-1}[i-1]) - l_{k-1}[i-1]

    Only l_k, l_{k-1} and l'_{k-1} enter, so l_1 can be one row ahead of l_2, which is one ahead of l_3, and so
    on: one step moves all of them. `_before` holds the shapes as they were one step earlier; between two calls
    of public methods both copies agree.

    Parameters
    ----------
    letters : int
        Size d of the alphabet.
    lanes : int
        Number of tableaux.
    max_rows : int
        No tableau will ever have more rows than this (d always suffices).
    dtype : numpy integer type
        Must hold the longest row that can occur.

    References
    ----------
    Knuth, Pacific J. Math. 34 (1970) 709, doi:10.2140/pjm.1970.34.709 (the insertion); Noumi, Yamada,
    Adv. Stud. Pure Math. 40 (2004) 371, arXiv:math-ph/0203030 (its piecewise linear form).
    """

    __slots__ = ("_before", "_scratch", "height", "lanes", "letters", "levels", "max_rows")

    def __init__(self, letters: int, lanes: int, max_rows: int, dtype: npt.DTypeLike) -> None:
        self.letters = letters
        self.lanes = lanes
        self.max_rows = min(letters, max_rows)
        self.height = 0
        shape = (letters + 1, self.max_rows, lanes)
        self.levels: Cells = np.zeros(shape, dtype=dtype)
        self._before: Cells = np.zeros(shape, dtype=dtype)
        self._scratch: Cells = np.empty(self._band_width() * self.max_rows * lanes, dtype=dtype)

    def clear(self) -> None:
        """Empty every tableau."""
        self.levels[:, : self.height] = 0
        self._before[:, : self.height] = 0
        self.height = 0

    def shapes(self) -> npt.NDArray[np.int64]:
        """Return the shapes, (lanes, max_rows)."""
        return np.ascontiguousarray(self.levels[-1].T, dtype=np.int64)

    def insert_letters(self, codes: CodeArray) -> None:
        """Insert a word in every lane: codes (steps, lanes), where the code d stands for no letter."""
        d = self.letters
        steps = len(codes)
        alphabet = np.arange(d, dtype=codes.dtype)[:, None]
        marks = np.empty((d, self.lanes), dtype=np.bool_)
        for step in range(steps + d):
            first, last = max(1, step + 2 - steps), min(d, step + 1)  # l_k takes in letter step + 1 - k
            equal = marks[: last + 1 - first]
            np.equal(codes[step + 1 - last : step + 2 - first][::-1], alphabet[first - 1 : last], out=equal)
            self._advance(max(1, first - 1), last, equal.view(np.uint8), first)

    def multiply(self, other: "Tableaux") -> None:
        """Append the word of `other` in every lane: its rows are inserted, the lowest first (plactic product).

        Row i of `other` has no letter below i, so l_{i+1} is the first that it changes: l_k can begin with row
        k - 1, all k in the same step.
        """
        d, rows = self.letters, other.max_rows
        entries = (other.levels[1:] - other.levels[:-1]).reshape(d * rows, self.lanes)
        for step in range(d + 1):
            last = min(d, step + other.height)
            counts = entries[step * rows : (last - 1) * rows + last - step : rows + 1]
            self._advance(max(1, step), last, counts, step + 1)

    def halve(self, samples: int, dtype: npt.DTypeLike) -> "Tableaux":
        """Multiply neighbouring pieces: lanes are (pieces, samples), and piece 2j takes in piece 2j + 1."""
        left = Tableaux(self.letters, self.lanes // 2, self.max_rows, dtype)
        right = Tableaux(self.letters, self.lanes // 2, self.max_rows, self.levels.dtype)
        pairs = self.levels.reshape(self.letters + 1, self.max_rows, -1, 2, samples)
        halves = (*left.levels.shape[:2], -1, samples)
        left.levels.reshape(halves)[:] = left._before.reshape(halves)[:] = pairs[:, :, :, 0]
        right.levels.reshape(halves)[:] = pairs[:, :, :, 1]
        left.height = right.height = self.height
        left.multiply(right)
        return left

    def _advance(self, first: int, last: int, counts: Cells, counted_from: int) -> None:
        """Move l_first .. l_last by one row each; `counts` are the c_k of their rows, k = counted_from, ..."""
        now, new = self.levels, self._before
        height = min(self.height + 1, self.max_rows)
        width = self._band_width()
        for stop in range(last + 1, first, -width):
            start = max(first, stop - width)
            rows = min(stop - 1, height)
            here, below, target = now[start:stop], now[start - 1 : stop - 1], new[start:stop]
            moved = self._scratch[: (stop - start) * (rows - 1) * self.lanes]
            moved = moved.reshape(stop - start, rows - 1, self.lanes)
            np.minimum(here[:, : rows - 1], below[:, : rows - 1], out=moved)
            moved -= new[start - 1 : stop - 1, : rows - 1]
            np.maximum(here[:, :rows], below[:, :rows], out=target[:, :rows])
            target[:, 1:rows] += moved
        new[counted_from : counted_from + len(counts), 0] += counts
        self.levels, self._before = new, now
        if height > self.height and new[:, height - 1].any():
            self.height = height

    def _band_width(self) -> int:
        """Return how many levels to move at a time: all, or so few that they fit the cache."""
        bytes_per_level = self.max_rows * self.lanes * self.levels.itemsize
        return max(1, min(self.letters, BYTES_AT_ONCE // bytes_per_level))

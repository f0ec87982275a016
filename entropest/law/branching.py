"""All shapes at once: the branching rule, letter by letter, in float64 with positive terms only.

With T = s_lambda(p_1 .. p_j) / prod p_i^lambda_i, adding letter j (the letters come in decreasing order) reads

    T_lambda = sum over mu, lambda - mu a horizontal strip, of T'_mu prod_i (p_j / p_i)^(lambda_i - mu_i)

and splits into one weighted running sum per row, the lowest row first, T_lambda += (p_j / p_k) T_(lambda - box
in row k) wherever row k is longer than row k + 1. Every number is at least 1 and at most the number of
tableaux, every ratio at most 1: nothing cancels, underflows or overflows, and ties need no care. The idea of
obtaining all Schur functions up to a size at once is that of Chan, Drensky, Edelman, Kan, Koev (2019), "On
computing Schur functions and series thereof", J. Algebraic Combin. 50, doi:10.1007/s10801-018-0846-y.

A layer holds the shapes of at most n boxes, one slice for each length v of the second row: a matrix with one
line for each tail (rows 3, 4, ...) and one column for each length v, v+1, ... of the first row. The last layer
is needed for n boxes only; it is produced slice by slice and never held.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np

from entropest._types import FloatArray, IntArray


@dataclass(slots=True)
class Tails:
    """The tails below a second row of v boxes, as a tree: level 0 is the root, level i fixes row i + 2.

    Children are ordered by the length of the row they fix, 0 first; `first` is the index of the child 0.
    """

    value: list[IntArray]
    parent: list[IntArray]
    first: list[IntArray] = field(default_factory=list)
    left: IntArray = field(default_factory=lambda: np.zeros(1, dtype=np.int64))

    @classmethod
    def below(cls, second_row: int, copies: int) -> Tails:
        """Return the tree with only its root: rows 1 and 2 take 2 v boxes at least."""
        root = np.array([second_row], dtype=np.int64)
        left = np.array([copies - 2 * second_row], dtype=np.int64)
        return cls([root], [np.zeros(1, dtype=np.int64)], [], left)

    @property
    def depth(self) -> int:
        """Number of rows that the tails of the last level have."""
        return len(self.value) - 1

    def grow(self) -> None:
        """Add a level: one more row, no longer than the one above and within the boxes left."""
        choices = np.minimum(self.value[-1], self.left) + 1
        first = np.cumsum(choices) - choices
        parent = np.repeat(np.arange(len(choices)), choices)
        value = np.arange(len(parent)) - first[parent]
        self.left = self.left[parent] - value
        self.first.append(first)
        self.parent.append(parent)
        self.value.append(value)

    def rows(self) -> IntArray:
        """Return rows 3, 4, ... of the tails of the last level, (count, depth)."""
        node = np.arange(len(self.value[-1]))
        columns = []
        for level in range(self.depth, 0, -1):
            columns.append(self.value[level][node])
            node = self.parent[level][node]
        return np.stack(columns[::-1], axis=1) if columns else np.zeros((len(node), 0), dtype=np.int64)

    def find(self, rows: IntArray, node: IntArray, level: int) -> IntArray:
        """Return the last-level index of tails that continue `node` of `level` by rows[:, level:]."""
        for step in range(level, self.depth):
            node = self.first[step][node] + rows[:, step]
        return node

    def box_removals(self, rows: IntArray, row: int) -> list[tuple[IntArray, IntArray]]:
        """Return pairs of index arrays (tails, the same less a box in `row`), in the order to add them."""
        level = row - 2
        below = rows[:, level] if level < self.depth else 0
        surplus = rows[:, level - 1] - below
        node = np.arange(len(rows))
        for step in range(self.depth, level, -1):
            node = self.parent[step][node]
        order = np.argsort(surplus, kind="stable")
        order = order[np.searchsorted(surplus[order], 1) :]
        lower = self.find(rows[order], node[order] - 1, level)
        stops = np.flatnonzero(np.diff(surplus[order])) + 1
        return list(zip(np.split(order, stops), np.split(lower, stops), strict=True))


@dataclass(frozen=True, slots=True)
class Slice:
    """Shapes of n boxes with one length of the second row, and log T of each."""

    shapes: IntArray
    log_ratio: FloatArray


def tallest(copies: int, letters: int) -> int:
    """Return how many rows the arrays keep: two at least, unless there is a single letter."""
    return min(letters, max(copies, 2))


def slices(spectrum: FloatArray, copies: int) -> Iterator[Slice]:
    """Yield log T of all shapes of `copies` boxes, by increasing length of the second row.

    `spectrum` holds positive, decreasing eigenvalues; shapes have `tallest` columns.
    """
    letters = len(spectrum)
    if letters == 1:
        yield Slice(np.array([[copies]], dtype=np.int64), np.zeros(1))
    elif letters == 2:
        second = np.arange(copies // 2 + 1)
        shapes = np.stack([copies - second, second], axis=1)
        yield Slice(shapes, np.log(_geometric_sums(spectrum, copies)[copies - 2 * second]))
    else:
        yield from _LayerByLayer(spectrum, copies).run()


def last_layer_size(copies: int, letters: int) -> tuple[float, float]:
    """Return upper bounds on the bytes of working memory and on the entries of the last layer.

    Tails of k rows below a second row v are counted as the partitions of at most n - 2v into k parts, or as
    all sequences v >= row 3 >= row 4 ..., whichever are fewer.
    """
    if letters <= 2:
        shapes = 1.0 if letters == 1 else copies // 2 + 1.0
        return 40.0 * shapes, shapes
    second = np.arange(copies // 2 + 1)
    widths = copies - 2 * second + 1.0
    depth = tallest(copies, letters) - 2
    held = depth if letters > depth + 2 else depth - 1
    layer = float((_most_tails(copies, held) * widths).sum())
    last = _most_tails(copies, depth) * widths
    trees = 24.0 * sum(float(_most_tails(copies, level).sum()) for level in range(1, held + 1))
    return 8.0 * layer + 40.0 * float(last.max()) + trees, float(last.sum())


def _most_tails(copies: int, depth: int) -> FloatArray:
    """Bound the number of tails of `depth` rows below each second row 0 .. copies // 2."""
    partitions = np.ones(copies + 1)
    for part in range(1, depth + 1):
        for residue in range(min(part, copies + 1)):
            partitions[residue::part] = np.cumsum(partitions[residue::part])
    second = np.arange(copies // 2 + 1)
    sequences = np.ones(len(second))
    for k in range(1, depth + 1):
        sequences *= (second + k) / k
    return np.minimum(partitions[copies - 2 * second], sequences)


class _LayerByLayer:
    """The layers of one spectrum of at least three letters."""

    def __init__(self, spectrum: FloatArray, copies: int) -> None:
        self.spectrum = spectrum
        self.copies = copies
        self.height = tallest(copies, len(spectrum))
        self.tails = [Tails.below(v, copies) for v in range(copies // 2 + 1)]
        sums = _geometric_sums(spectrum[:2], copies)
        self.layer: list[FloatArray | None] = [sums[None, : copies - 2 * v + 1] for v in range(len(self.tails))]

    def run(self) -> Iterator[Slice]:
        for letter in range(3, len(self.spectrum)):
            for second, summed in self.add_letter(letter):
                self.layer[second] = _running_sums(summed, self.ratio(letter, 1))
        last = len(self.spectrum)
        for second, summed in self.add_letter(last):
            rows = self.tails[second].rows()
            first = self.copies - second - rows.sum(axis=1)
            ends = _last_running_sums(summed, first - second, self.ratio(last, 1))
            shapes = np.concatenate([first[:, None], np.full((len(rows), 1), second), rows], axis=1, dtype=np.int64)
            if second:
                self.tails[second - 1] = Tails([], [])
            yield Slice(shapes, np.log(ends))

    def ratio(self, letter: int, row: int) -> float:
        return float(self.spectrum[letter - 1] / self.spectrum[row - 1])

    def add_letter(self, letter: int) -> Iterator[tuple[int, FloatArray]]:
        """Yield each slice of the next layer, summed over all rows but the first."""
        new_row = letter <= self.height
        lowest = letter - 1 if new_row else self.height
        previous: FloatArray | None = None
        for second, tails in enumerate(self.tails):
            current = self.layer[second]
            assert current is not None
            self.layer[second] = None
            if new_row:
                tails.grow()
                current = current[tails.parent[-1]]
            else:
                current = current.copy()
            rows = tails.rows()
            for row in range(lowest, 2, -1):
                weight = self.ratio(letter, row)
                for upper, lower in tails.box_removals(rows, row):
                    current[upper] += weight * current[lower]
            if previous is not None:
                shorter = self.tails[second - 1]
                movable = _third_row(rows) < second
                lower = shorter.find(rows[movable], np.zeros(int(movable.sum()), dtype=np.int64), 0)
                current[movable] += self.ratio(letter, 2) * previous[lower, 1 : current.shape[1] + 1]
            previous = current
            yield second, current


def _third_row(rows: IntArray) -> IntArray:
    return rows[:, 0] if rows.shape[1] else np.zeros(len(rows), dtype=np.int64)


def _geometric_sums(pair: FloatArray, copies: int) -> FloatArray:
    """Return 1 + r + ... + r^k for k = 0 .. copies and r = pair[1] / pair[0]."""
    terms = np.arange(1.0, copies + 2.0)
    if pair[0] == pair[1]:
        return terms
    with np.errstate(divide="ignore"):
        log_ratio = np.log1p((pair[1] - pair[0]) / pair[0])
    return np.asarray(-np.expm1(terms * log_ratio) * (pair[0] / (pair[0] - pair[1])))


def _running_sums(terms: FloatArray, ratio: float) -> FloatArray:
    """Return sum_{u<=v} ratio^(v-u) terms[:, u], by doubling the length of the sums."""
    sums, step = terms, 1
    while step < terms.shape[1]:
        longer = sums.copy()
        longer[:, step:] += ratio**step * sums[:, :-step]
        sums, step = longer, 2 * step
    return sums


def _last_running_sums(terms: FloatArray, ends: IntArray, ratio: float) -> FloatArray:
    """Return sum_{u<=v} ratio^(v-u) terms[g, u] at v = ends[g] only."""
    width = terms.shape[1]
    powers = np.concatenate([np.zeros(width), ratio ** np.arange(width, dtype=np.float64)])
    weights = powers[(ends[:, None] + width) - np.arange(width)]
    return np.asarray(np.einsum("gu,gu->g", terms, weights))

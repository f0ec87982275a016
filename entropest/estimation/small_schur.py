"""Schur polynomials of all shapes of a few boxes with their gradients, from positive terms only.

s_shape = sum_mu K(shape, mu) m_mu with Kostka numbers K and monomial symmetric polynomials m. The m of all partitions
of up to n boxes are built by adding one eigenvalue after the other. Nothing is subtracted, so nothing cancels at ties.
"""

from functools import lru_cache

import numpy as np

from entropest._types import FloatArray, IntArray
from entropest.diagrams import young_diagrams

__all__ = ["LARGEST_SIZE", "schur_and_contents"]

LARGEST_SIZE = 12

Rows = tuple[int, ...]


def schur_and_contents(shapes: IntArray, spectrum: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return s_shape (K,) and p_i ds_shape/dp_i (K, d) for shapes of one size, at most 12 boxes.

    Parameters
    ----------
    shapes : (K, R) int array
        Shapes with the same number of boxes.
    spectrum : (d,) float array
        Eigenvalues, zeros allowed.

    Examples
    --------
    >>> schur, contents = schur_and_contents(np.array([[2, 1]]), np.array([0.5, 0.5]))
    >>> schur, contents
    (array([0.25]), array([[0.375, 0.375]]))
    """
    size = int(shapes[0].sum())
    monomials, contents = _monomials(size, spectrum)
    table, index = _kostka(size)
    rows = table[[index[tuple(row for row in shape if row)] for shape in shapes.tolist()]]
    return rows @ monomials, rows @ contents.T


def _monomials(size: int, spectrum: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return m_mu (M,) and p_i dm_mu/dp_i (d, M) for the partitions of `size`."""
    first, part, exponent, last = _steps(size)
    d = len(spectrum)
    powers = spectrum[:, None] ** exponent
    # Row i leaves eigenvalue i out; the last row leaves none out.
    values = np.zeros((d + 1, len(first) + 1))
    values[:, 0] = 1.0
    for letter in range(d):
        added = np.add.reduceat(values[:, part] * powers[letter], first, axis=1)
        added[letter] = 0.0
        values[:, 1:] += added
    contents = np.add.reduceat(values[:d][:, part] * powers * exponent, first, axis=1)
    return values[d, last], contents[:, last - 1]


@lru_cache(maxsize=LARGEST_SIZE)
def _steps(size: int) -> tuple[IntArray, IntArray, IntArray, IntArray]:
    """Return where the steps to each non-empty partition begin, from which one each goes, by which part, and `last`.

    Partitions are numbered by size, the empty one first; `last` holds the numbers of those of `size` boxes.
    """
    partitions = [diagram.rows for boxes in range(size + 1) for diagram in young_diagrams(boxes)]
    index = {rows: i for i, rows in enumerate(partitions)}
    steps = []
    for rows in partitions:
        for exponent in sorted(set(rows)):
            at = rows.index(exponent)
            steps.append((index[rows[:at] + rows[at + 1 :]], exponent))
    part, exponent = np.array(steps, dtype=np.int64).T
    first = np.cumsum([0] + [len(set(rows)) for rows in partitions[1:-1]])
    last = np.array([index[diagram.rows] for diagram in young_diagrams(size)], dtype=np.int64)
    return first, part, exponent, last


@lru_cache(maxsize=LARGEST_SIZE)
def _kostka(size: int) -> tuple[FloatArray, dict[Rows, int]]:
    """Return the Kostka numbers of all pairs of partitions, and the index of each partition."""
    partitions = [diagram.rows for diagram in young_diagrams(size)]
    index = {rows: i for i, rows in enumerate(partitions)}
    table = np.zeros((len(partitions), len(partitions)))
    for column, weight in enumerate(partitions):
        fillings: dict[Rows, int] = {(): 1}
        for boxes in weight:
            longer: dict[Rows, int] = {}
            for rows, ways in fillings.items():
                for shape in _strips(rows, boxes):
                    longer[shape] = longer.get(shape, 0) + ways
            fillings = longer
        for rows, ways in fillings.items():
            table[index[rows], column] = ways
    return table, index


def _strips(rows: Rows, boxes: int) -> list[Rows]:
    """Return the shapes made by adding a horizontal strip: no two boxes in one column."""
    found: list[Rows] = []

    def extend(done: Rows, at: int, left: int) -> None:
        if at > len(rows):
            if left == 0:
                found.append(done if not done or done[-1] else done[:-1])
            return
        old = rows[at] if at < len(rows) else 0
        room = left if at == 0 else min(left, rows[at - 1] - old)
        for extra in range(room + 1):
            extend((*done, old + extra), at + 1, left - extra)

    extend((), 0, boxes)
    return found

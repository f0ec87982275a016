"""Nodes on which smooth functions of an integer are tabulated, and interpolation between them.

A function that varies on the scale s is sampled every s/16. Its sum over the integers then equals the step times the
sum over the nodes up to exp(-2 pi^2 16^2), by Poisson's summation formula, and interpolation on 16 nodes recovers its
values to rounding.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from entropest._types import FloatArray, IntArray

__all__ = ["WINDOW", "Grid", "grid_of_windows", "room_above"]

NODES_PER_DEVIATION = 16
STENCIL = 16
WINDOW = 14.0
_BARYCENTRIC = np.array([(-1.0) ** k * math.comb(STENCIL - 1, k) for k in range(STENCIL)])


@dataclass(frozen=True, slots=True, kw_only=True)
class Grid:
    """Nodes in disjoint regions of the non-negative integers, equally spaced within each region.

    A cell is a node together with the integers before the next one.

    Attributes
    ----------
    nodes : (N,) int array
        Increasing positions.
    steps : (N,) int array
        The spacing in the region of each node: the number of integers in its cell.
    stencils : (N,) int array
        Index of the first of the 16 nodes from which values in the cell are interpolated.
    ends : (R,) int array
        Index of the last node of each region.
    """

    nodes: IntArray
    steps: IntArray
    stencils: IntArray
    ends: IntArray

    def locate(self, points: IntArray) -> IntArray:
        """Return the cell that holds each point, and -1 for points outside all regions."""
        cells = np.searchsorted(self.nodes, points, side="right") - 1
        inside = (cells >= 0) & (points - self.nodes[cells] < self.steps[cells])
        return np.asarray(np.where(inside, cells, -1), dtype=np.int64)

    def interpolate(self, tables: FloatArray, which: IntArray, cells: IntArray, offsets: FloatArray) -> FloatArray:
        """Return the rows of tables[which], given at the nodes, at nodes[cells] + offsets.

        Parameters
        ----------
        tables : (T, N, m) float array
        which, cells : (L,) int array
        offsets : (L,) float array
            From 0 to less than the step of the cell.

        Returns
        -------
        (L, m) float array
        """
        values = tables[which, cells]
        between = np.flatnonzero(offsets)
        if between.size:
            cell = cells[between]
            start = self.stencils[cell]
            position = (cell - start) + offsets[between] / self.steps[cell]
            weights = _BARYCENTRIC / (position[:, None] - np.arange(STENCIL))
            weights /= weights.sum(axis=1, keepdims=True)
            around = tables[which[between, None], start[:, None] + np.arange(STENCIL)]
            values[between] = np.matmul(weights[:, None, :], around)[:, 0, :]
        return values


def room_above(means: FloatArray) -> int:
    """Return what is added above windows that reach zero, where the points push each other upwards."""
    return 40 + 4 * len(means)


def grid_of_windows(means: FloatArray) -> Grid:
    """Cover windows of 14 standard deviations (each at least 1) around decreasing means.

    Overlapping windows are joined; those that reach zero get more room above.

    Examples
    --------
    >>> grid = grid_of_windows(np.array([1e8, 1.0]))
    >>> grid.nodes[[0, 1, 63, 64, -1]].tolist(), grid.ends.tolist()
    ([0, 1, 63, 99860000, 100140000], [63, 512])
    """
    ascending = means[::-1]
    deviation = np.maximum(np.sqrt(ascending), 1.0)
    low = np.maximum(np.floor(ascending - WINDOW * deviation), 0.0)
    high = np.ceil(ascending + WINDOW * deviation) + np.where(low == 0.0, room_above(means), 0)
    high = np.maximum.accumulate(high)
    opening = np.flatnonzero(np.concatenate([[True], low[1:] > high[:-1]]))
    closing = np.append(opening[1:], len(means)) - 1
    nodes, steps, stencils, ends = [], [], [], [-1]
    for start, end in zip(opening, closing, strict=True):
        step = max(1, int(deviation[start]) // NODES_PER_DEVIATION)
        nodes.append(np.arange(int(low[start]), int(high[end]) + step, step, dtype=np.int64))
        count = len(nodes[-1])
        steps.append(np.full(count, step, dtype=np.int64))
        stencil = np.clip(np.arange(count) - (STENCIL // 2 - 1), 0, count - STENCIL)
        stencils.append(stencil + ends[-1] + 1)
        ends.append(ends[-1] + count)
    return Grid(
        nodes=np.concatenate(nodes),
        steps=np.concatenate(steps),
        stencils=np.concatenate(stencils),
        ends=np.array(ends[1:]),
    )

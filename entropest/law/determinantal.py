"""Exact draws of the outcome of a joint measurement on n copies, at a cost that hardly depends on n.

The law of the shape is the Poissonised law of :mod:`entropest.law.poisson_ensemble` given that the rows add up to n.
A candidate comes from one of the two projection ensembles, chosen by a coin, point by point: a point is proposed
from an envelope of the density of all points and accepted in proportion to what the earlier points leave of it. The
last point is not drawn: it is the one that makes the sum right, accepted in proportion to its position times what is
left there. (Each point is equally likely to come last; weighting by the position makes the sum over the choices
constant, because the positions add up to a constant.) One more rejection turns the average of the two squares
det A(l)^2 and det B(l)^2 into the product det A(l) det B(l). No step approximates: the shape has its exact law up to
floating-point rounding.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from entropest._types import FloatArray, IntArray
from entropest.errors import NotCoveredError
from entropest.law.poisson_ensemble import PoissonEnsemble, check_ensemble, poisson_ensemble
from entropest.law.poisson_grid import Grid

__all__ = ["draw_determinantal"]

MOST_ROWS = 16
MOST_COPIES = 10**12
LEAST_MEAN = 1e-17
MARGIN = 1.1
ROUNDING = 1e-9
LEAST_NEGATIVE = 1e-8
LARGEST_BATCH = 4096


def draw_determinantal(probabilities: FloatArray, copies: int, size: int, generator: np.random.Generator) -> IntArray:
    """Draw shapes of `copies` copies of a state exactly, without going through the copies.

    Parameters
    ----------
    probabilities : (d,) float array
        The spectrum, decreasing and summing to 1 up to rounding. Eigenvalues p with copies * p < 1e-17 are dropped,
        which changes the law by less than d * 1e-17 in total variation; at most 16 may remain.
    copies : int
        From 1 to 10^12.
    size : int
        Number of draws.
    generator : numpy.random.Generator

    Returns
    -------
    (size, d) int array

    Raises
    ------
    NotCoveredError
        If a measure of numerical accuracy passes its limit, or there are too many eigenvalues or copies.

    Notes
    -----
    Neither time nor memory grows with `copies`. A spectrum needs a set-up, kept for the last four; a draw takes about
    d candidates (at most some 2 d) of d log d point proposals each. Memory stays below 100 MB besides
    the result: at most 50,000 nodes, typically 450 for each group of eigenvalues, and 4096 candidates at a time.

    References
    ----------
    Hough, Krishnapur, Peres, Virag, Probab. Surv. 3 (2006) 206, doi:10.1214/154957806000000078, for drawing from a
    projection ensemble. The conditioning on n and the pair of ensembles are derived in docs/derivations.md.

    Examples
    --------
    >>> shapes = draw_determinantal(np.array([0.5, 0.3, 0.2]), 10**8, 2, np.random.default_rng(1))
    >>> shapes.sum(axis=1)
    array([100000000, 100000000])
    """
    shapes = np.zeros((size, len(probabilities)), dtype=np.int64)
    relevant = int(np.count_nonzero(copies * probabilities >= LEAST_MEAN))
    if relevant <= 1:
        shapes[:, 0] = copies
        return shapes
    if relevant > MOST_ROWS or copies > MOST_COPIES:
        raise NotCoveredError(
            f"the determinantal sampler takes at most {MOST_ROWS} eigenvalues and {MOST_COPIES} copies, "
            f"got {relevant} and {copies}"
        )
    sampler = sampler_of(tuple(probabilities[:relevant].tolist()), copies)
    filled = 0
    while filled < size:
        points = sampler.draw_batch(size - filled, generator)[: size - filled]
        shapes[filled : filled + len(points), :relevant] = points - np.arange(relevant)[::-1]
        filled += len(points)
    return shapes


@dataclass(frozen=True, slots=True, kw_only=True)
class Sampler:
    """A checked ensemble with the envelope from which its points are proposed.

    Attributes
    ----------
    grid : Grid
    bases : (2, N, d) float array
    total : int
        What the points add up to: copies + d (d - 1) / 2.
    heights : (N,) float array
        Bound on the density of points, of either ensemble, at each integer of a cell.
    cumulative : (N,) float array
        Running sums of the bound over all integers.
    ceiling : float
        Bound on position times density.
    efficiency : float
        About the share of candidates that survive.
    """

    grid: Grid
    bases: FloatArray
    total: int
    heights: FloatArray
    cumulative: FloatArray
    ceiling: float
    efficiency: float

    def draw_batch(self, wanted: int, generator: np.random.Generator) -> IntArray:
        """Return the survivors, in their order, of a batch of candidates that is likely to yield `wanted`."""
        size = min(LARGEST_BATCH, math.ceil(1.2 * wanted / self.efficiency) + 8)
        which = generator.integers(0, 2, size=size)
        points, directions = self._first_points(which, generator)
        last = self.total - points.sum(axis=1)
        cells = self.grid.locate(last)
        inside = np.flatnonzero(cells >= 0)
        cells, last = cells[inside], last[inside]
        offsets = (last - self.grid.nodes[cells]).astype(np.float64)
        rows = self.grid.interpolate(self.bases, which[inside], cells, offsets)
        weighted = last * (_reject_from(rows, directions[inside]) ** 2).sum(axis=1)
        _require_below(weighted, self.ceiling)
        kept = generator.random(len(last)) * self.ceiling < weighted
        candidates = np.concatenate([points[inside[kept]], last[kept, None]], axis=1)
        survives = generator.random(len(candidates)) < self._agreement(candidates)
        return np.asarray(-np.sort(-candidates[survives], axis=1), dtype=np.int64)

    def _first_points(self, which: IntArray, generator: np.random.Generator) -> tuple[IntArray, FloatArray]:
        """Draw all points but the last of L candidates, (L, d-1), and the directions they use up, (L, d-1, d)."""
        number = self.bases.shape[2]
        points = np.zeros((len(which), number - 1), dtype=np.int64)
        directions = np.zeros((len(which), number - 1, number))
        for k in range(number - 1):
            waiting = np.arange(len(which))
            while waiting.size:
                cells, offsets = self._propose(len(waiting), generator)
                rows = self.grid.interpolate(self.bases, which[waiting], cells, offsets)
                used = directions[waiting, :k]
                rows = _reject_from(rows, used)
                left = (rows**2).sum(axis=1)
                bound = self.heights[cells]
                _require_below(left, bound)
                accepted = generator.random(len(waiting)) * bound < left
                fresh = _reject_from(rows[accepted], used[accepted])
                done = waiting[accepted]
                points[done, k] = self.grid.nodes[cells[accepted]] + offsets[accepted].astype(np.int64)
                directions[done, k] = fresh / np.linalg.norm(fresh, axis=1, keepdims=True)
                waiting = waiting[~accepted]
        return points, directions

    def _propose(self, number: int, generator: np.random.Generator) -> tuple[IntArray, FloatArray]:
        """Draw cells and offsets with probability proportional to the envelope."""
        level = generator.random(number) * self.cumulative[-1]
        cells = np.searchsorted(self.cumulative, level, side="right")
        offsets = np.floor((self.cumulative[cells] - level) / self.heights[cells])
        return cells, np.minimum(offsets, self.grid.steps[cells] - 1.0)

    def _agreement(self, points: IntArray) -> FloatArray:
        """Return det A det B / ((det A^2 + det B^2) / 2), zero where rounding makes it negative."""
        count, number = points.shape
        cells = self.grid.locate(points.ravel())
        offsets = (points.ravel() - self.grid.nodes[cells]).astype(np.float64)
        signs, logs = [], []
        for k in range(2):
            rows = self.grid.interpolate(self.bases, np.full_like(cells, k), cells, offsets)
            sign, log_size = np.linalg.slogdet(rows.reshape(count, number, number))
            signs.append(sign)
            logs.append(log_size)
        agreement = signs[0] * signs[1] / np.cosh(np.clip(logs[0] - logs[1], -500.0, 500.0))
        if agreement.size and agreement.min() < -LEAST_NEGATIVE:
            raise NotCoveredError(
                f"the determinantal sampler needs probabilities above -{LEAST_NEGATIVE:g} of their bound, "
                f"got {agreement.min():.3g}"
            )
        return np.asarray(np.maximum(agreement, 0.0), dtype=np.float64)


@lru_cache(maxsize=4)
def sampler_of(probabilities: tuple[float, ...], copies: int) -> Sampler:
    """Build the sampler of a spectrum, or raise NotCoveredError."""
    ensemble = poisson_ensemble(copies * np.array(probabilities))
    check_ensemble(ensemble)
    grid, number = ensemble.grid, len(probabilities)
    heights = _envelope(ensemble)
    total = copies + number * (number - 1) // 2
    ceiling = float((heights * (grid.nodes + grid.steps)).max())
    return Sampler(
        grid=grid,
        bases=ensemble.bases,
        total=total,
        heights=heights,
        cumulative=np.cumsum(heights * grid.steps),
        ceiling=ceiling,
        efficiency=min(1.0, ensemble.overlap * total / (number * ceiling * math.sqrt(2.0 * math.pi * copies))),
    )


def _envelope(ensemble: PoissonEnsemble) -> FloatArray:
    """Bound the density of points in each cell, by its values at both ends and half-way and a margin of 10 percent.

    With 16 nodes to a standard deviation the density of 16 tied rows rises by 1 percent at most in between, and
    every proposal is checked against the bound. Cells of one integer need no margin.
    """
    at_nodes = (ensemble.bases**2).sum(axis=2).max(axis=0)
    halfway = (ensemble.halfway**2).sum(axis=2).max(axis=0)
    following = np.append(at_nodes[1:], 0.0)
    heights = MARGIN * np.maximum(np.maximum(at_nodes, halfway), following)
    heights = np.where(ensemble.grid.steps == 1, at_nodes * (1.0 + ROUNDING), heights)
    heights[ensemble.grid.ends[ensemble.grid.steps[ensemble.grid.ends] > 1]] = 0.0
    return np.asarray(heights, dtype=np.float64)


def _reject_from(rows: FloatArray, directions: FloatArray) -> FloatArray:
    """Remove from each row, (L, d), its components along orthonormal directions, (L, k, d)."""
    components = np.matmul(directions, rows[:, :, None])
    return np.asarray(rows - (components * directions).sum(axis=1), dtype=np.float64)


def _require_below(density: FloatArray, bound: FloatArray | float) -> None:
    """Raise NotCoveredError where a density passes its envelope."""
    excess = float((density - bound * (1.0 + ROUNDING)).max(initial=0.0))
    if excess > 0.0:
        raise NotCoveredError(
            f"the determinantal sampler needs densities below their envelope, got one {excess:.3g} above it"
        )

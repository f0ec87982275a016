"""Exact score tests on chains of outcomes of blocks of k copies.

The top of the dominance order, {(k)}, then (k-1, 1), then (k-2, 2), is a chain of sets A_1, A_2, A_3. Every spectrum
with entropy at most s gives A_j at least a probability G_j(s): in closed form for j = 1, from a certified table for
j = 2, 3. A block whose outcome lies in A_j for several j earns the sum of their weights. Under "every block has entropy
at most s" the total is stochastically larger than a sum of independent scores whose tails are exactly the G_j(s), so
that a small total rejects s. Several block sizes: the scores are added.

Entropies are tested upwards on a fixed grid. The weights depend on the grid point and on the block sizes, never on
outcomes; an error needs a rejection at the first grid point that is not below the entropy, so the stated error holds.
Proofs: docs/theory-chains.md.
"""

import bisect
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cache
from typing import Final

import numpy as np
from scipy.special import ndtri

from entropest._types import FloatArray, IntArray
from entropest.certification.chain_minima import chain_rows, flat_limit
from entropest.certification.evidence import SizedBlocks
from entropest.certification.lattice_sums import LatticeLaw, tail_bound
from entropest.certification.rules import ENTROPY_CAP
from entropest.certification.score_test import score_lower_bound
from entropest.certification.tables import chain_minima
from entropest.errors import ArgumentValueError

__all__ = ["STAGE_ENDS", "chain_lower_bound", "chain_p_value", "chain_weights", "entropy_grid", "least_probabilities"]

STAGE_ENDS: Final = (0.693, 1.386, ENTROPY_CAP)
"""The last grid point of each stage: just below log 2, just below log 4, the end."""

_WEIGHTS: Final = {
    3: ((2, 0), (2, 7), (2, 4)),
    4: ((2, 4, 0), (1, 1, 6), (2, 1, 3)),
    5: ((2, 4, 0), (1, 0, 6), (1, 1, 4)),
    6: ((2, 2, 1), (1, 0, 6), (1, 1, 5)),
    7: ((2, 2, 2), (0, 0, 7), (1, 0, 6)),
    8: ((2, 2, 2), (0, 0, 7), (1, 0, 8)),
}
_ONE_EVENT: Final = ((2,), (2,), (2,))
_STEP_AFTER_TABLE: Final = 0.02


def chain_lower_bound(blocks: Sequence[SizedBlocks], *, error: float) -> float:
    """Return the largest entropy (nat) that the score test on chains rejects at level `error`.

    Blocks of 3 to 8 copies are scored on their chains, those of other sizes on the fully symmetric outcome; without any
    block of 3 to 8 copies the bound is that of :func:`~entropest.certification.score_test.score_lower_bound`.

    Parameters
    ----------
    blocks : sequence of SizedBlocks
        Blocks of at least two copies, one entry a size. Their number and sizes were fixed beforehand.
    error : float
        Probability that the bound exceeds the entropy of identical blocks.

    Returns
    -------
    float
        0 when nothing is rejected, ENTROPY_CAP when everything is; a point of the grid if a chain is used.

    References
    ----------
    Derived in docs/theory-chains.md. Schur-convexity of the sets: O'Donnell and Wright, arXiv:1508.01907.

    Examples
    --------
    >>> blocks = SizedBlocks(
    ...     copies=3, shapes=np.array([[3, 0, 0], [2, 1, 0], [1, 1, 1]]), counts=np.array([110, 84, 6])
    ... )
    >>> chain_lower_bound([blocks], error=0.05)
    0.579
    """
    counts = _class_counts_by_size(blocks)
    if not any(copies in _WEIGHTS for copies in counts):
        symmetric = sum(int(seen[0]) for seen in counts.values())
        sizes = {copies: int(seen.sum()) for copies, seen in counts.items()}
        return score_lower_bound(symmetric, sizes, error=error) if sizes else 0.0
    grid = entropy_grid()
    first, bound = 0, 0.0
    for stage, end in enumerate(STAGE_ENDS):
        after = bisect.bisect_right(grid, end)
        last = _Test.of_stage(counts, stage).last_rejected(first, after, error)
        if last >= first:
            bound = float(grid[last])
        if last < after - 1:
            break
        first = after
    return bound


def chain_p_value(blocks: Sequence[SizedBlocks], entropy: float) -> float:
    """Bound the p-value of "every block has at most `entropy`", with the weights of that entropy, from above.

    The entropy, at most ENTROPY_CAP, is raised to the next point of the grid.

    Examples
    --------
    >>> blocks = SizedBlocks(copies=3, shapes=np.array([[3, 0], [2, 1]]), counts=np.array([110, 90]))
    >>> chain_p_value([blocks], 0.5) < 0.05 < chain_p_value([blocks], 1.2)
    True
    """
    if not entropy <= ENTROPY_CAP:
        raise ArgumentValueError(f"entropy must be at most {ENTROPY_CAP:.6f} nat, got {entropy}")
    i = bisect.bisect_left(entropy_grid(), entropy)
    stage = bisect.bisect_left(STAGE_ENDS, entropy_grid()[i])
    return _Test.of_stage(_class_counts_by_size(blocks), stage).p_value(i)


def chain_weights(copies: int, stage: int) -> tuple[int, ...]:
    """Return the weights of the sets of a chain in a stage, on the scale that all block sizes share.

    They were chosen once, for the medians of flat, geometric, spiked, power-law and random spectra at 600 to 60,000
    copies: below log 2 for spectra of two eigenvalues, between log 2 and log 4 for falling ones, above for flat ones.

    Examples
    --------
    >>> chain_weights(4, 0), chain_weights(2, 0)
    ((2, 4, 0), (2,))
    """
    return _WEIGHTS.get(copies, _ONE_EVENT)[stage]


@cache
def entropy_grid() -> tuple[float, ...]:
    """Return the entropies that are tested: those of the table, then steps of 0.02 nat up to ENTROPY_CAP.

    Examples
    --------
    >>> grid = entropy_grid()
    >>> grid[0], grid[-1] == ENTROPY_CAP, all(end in grid for end in STAGE_ENDS)
    (0.0001, True, True)
    """
    tabulated = chain_minima().entropies.tolist()
    steps = math.floor((ENTROPY_CAP - tabulated[-1]) / _STEP_AFTER_TABLE)
    beyond = [round(tabulated[-1] + _STEP_AFTER_TABLE * i, 6) for i in range(1, steps + 1)]
    return (*tabulated, *(s for s in beyond if s < ENTROPY_CAP), ENTROPY_CAP)


@cache
def least_probabilities(copies: int) -> FloatArray:
    """Return lower bounds G_j at the grid, (depth, grid): non-decreasing in depth, non-increasing in the entropy.

    Beyond the table the limits at infinite entropy stand for the deeper sets.

    Examples
    --------
    >>> least_probabilities(4).shape == (3, len(entropy_grid()))
    True
    """
    rows = [_symmetric_minima(copies)]
    if copies in _WEIGHTS:
        table = chain_minima()
        beyond = len(entropy_grid()) - len(table.entropies)
        for depth in range(2, len(_WEIGHTS[copies][0]) + 1):
            limit = flat_limit(0.0, copies=copies, depth=depth)
            row = np.concatenate([table.units_of[copies, depth] / table.units, np.full(beyond, limit)])
            rows.append(row * (1.0 - 1e-15))
    return np.maximum.accumulate(np.array(rows), axis=0)


def _symmetric_minima(copies: int) -> FloatArray:
    """Return h_copies of the step spectra whose entropies are those of the grid, rounded down."""
    levels = _levels()
    full = np.floor(levels)
    smaller = (levels - full) / levels
    term = np.ones(len(levels))
    value = np.ones(len(levels))
    for n in range(1, copies + 1):
        term = term * ((full - 1.0 + n) / (n * levels))
        value = term + smaller * value
    return np.asarray(value * (1.0 - 1e-15 * (8.0 * copies + 10.0)))


@cache
def _levels() -> FloatArray:
    """Return levels whose step spectra have at least the entropies of the grid, by bisection of log(level)."""
    target = np.array(entropy_grid()) * (1.0 + 1e-13) + 1e-13
    low, high = np.zeros(len(target)), target + 1e-9
    for _ in range(60):
        middle = 0.5 * (low + high)
        level = np.exp(middle)
        part = level - np.floor(level)
        enough = middle - part * np.log(np.where(part > 0.0, part, 1.0)) / level >= target
        low, high = np.where(enough, low, middle), np.where(enough, middle, high)
    return np.exp(high)


def _class_counts_by_size(blocks: Sequence[SizedBlocks]) -> dict[int, IntArray]:
    """Count the classes of every block size that has blocks."""
    return {part.copies: _class_counts(part) for part in blocks if part.counts.any()}


def _class_counts(part: SizedBlocks) -> IntArray:
    """Count the blocks in A_1, A_2 without A_1, ... and in none of the sets of their chain."""
    diagrams = chain_rows(part.copies) if part.copies in _WEIGHTS else ((part.copies,),)
    shapes = np.pad(part.shapes, ((0, 0), (0, max(0, 2 - part.shapes.shape[1]))))
    seen = [
        int(part.counts[(shapes[:, 0] == rows[0]) & (shapes[:, 1] == (rows[1] if len(rows) > 1 else 0))].sum())
        for rows in diagrams
    ]
    return np.array([*seen, int(part.counts.sum()) - sum(seen)])


@cache
def _class_probabilities(copies: int) -> FloatArray:
    """Return the least favourable probabilities of the classes, (classes, grid), the last for "in no set"."""
    minima = least_probabilities(copies)
    ends = np.concatenate([np.zeros((1, minima.shape[1])), minima, np.ones((1, minima.shape[1]))])
    return np.diff(ends, axis=0)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Test:
    """The scores of one stage: per block size the blocks, the score and the probabilities (C, grid) of each class."""

    parts: tuple[tuple[int, tuple[int, ...], FloatArray], ...]
    observed: int

    @classmethod
    def of_stage(cls, counts: Mapping[int, IntArray], stage: int) -> "_Test":
        """Score the observed classes; the common divisor of all weights is taken out."""
        weights = {copies: chain_weights(copies, stage) for copies in counts}
        divisor = math.gcd(*(weight for row in weights.values() for weight in row))
        parts, observed = [], 0
        for copies, seen in counts.items():
            row = [weight // divisor for weight in weights[copies]]
            scores = tuple(sum(row[j:]) for j in range(len(row) + 1))
            observed += sum(score * int(count) for score, count in zip(scores, seen, strict=True))
            parts.append((int(seen.sum()), scores, _class_probabilities(copies)))
        return cls(parts=tuple(parts), observed=observed)

    def p_value(self, i: int) -> float:
        """Bound P(sum of the least favourable scores <= observed) at grid point i from above."""
        laws = [LatticeLaw(blocks=n, scores=scores, probabilities=q[:, i]) for n, scores, q in self.parts]
        return tail_bound(laws, self.observed)

    def last_rejected(self, first: int, after: int, error: float) -> int:
        """Return the largest i in [first, after) with all of first..i rejected, or first - 1.

        p-values do not fall within a stage, so that a bisection finds it; it starts from a guess.
        """
        low, high, step = first - 1, after, 1
        i = min(max(self._guess(first, after, error), first), after - 1)
        while high - low > 1:
            if self.p_value(i) <= error:
                low, i = i, i + step
            else:
                high, i = i, i - step
            step *= 2
            if not low < i < high:
                i = (low + high) // 2
        return low

    def _guess(self, first: int, after: int, error: float) -> int:
        """Guess the last rejected grid point by the normal approximation."""
        mean, variance = np.zeros(after - first), np.zeros(after - first)
        for blocks, scores, q in self.parts:
            values = np.array(scores, dtype=np.float64)
            center = values @ q[:, first:after]
            mean += blocks * center
            variance += blocks * np.maximum(values**2 @ q[:, first:after] - center**2, 0.0)
        accepted = mean - self.observed < -ndtri(error) * np.sqrt(variance)
        return first + (int(np.argmax(accepted)) if accepted.any() else after - first) - 1

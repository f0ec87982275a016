"""The split posterior: single levels split off, the others a Hilbert-Schmidt block, averaged by evidence.

A component (k, r, alpha) takes the k largest rows as single levels and the other rows as a block of r levels with the
prior Delta(p)^2 prod p_i^alpha. Components are weighted by prior times evidence. Splitting off a level uses the
branching rule of Schur polynomials with the ratios to the further levels at their plug-in values. Only in two
dimensions and at the right ratio is this exact, so the result is a rule with measured accuracy and not a posterior.
All entropies are in nats.
"""

from dataclasses import dataclass

import numpy as np
from scipy.special import betaln, digamma

from entropest._types import FloatArray, IntArray
from entropest.estimation.posterior import block_entropies, block_evidence, log_dimension

__all__ = ["LARGEST_DIMENSION", "Components", "clip_to_bracket", "components", "levels_considered", "plug_in_variance"]

LARGEST_DIMENSION = 256
_MOST_SPLITS = 6
_SPLIT_WEIGHT = 0.25
_LEAST_CONCENTRATION = -0.5
_CONCENTRATIONS_PER_LEVEL = np.array([0.0, 0.25, 0.5, 1.0, 3.0, 15.0, 200.0])
_CONCENTRATION_WEIGHTS = np.array([1.0, 2.0, 2.0, 2.0, 3.0, 3.0, 8.0, 2.0, 8.0]) / 31.0
_FULL_RANK_WEIGHT = 0.1
_OTHER_LEVELS = 0.25
_NEARLY_TIED = 1.0 - 1e-9
_ELEMENTS_AT_ONCE = 2**18


@dataclass(frozen=True, slots=True, kw_only=True)
class Components:
    """The components of the split posterior of K shapes.

    Attributes
    ----------
    log_evidence : (K, C) array
        Up to a constant per shape.
    log_priors : (C,) array
    entropies : (K, C) array
        Mean entropy within each component.
    """

    log_evidence: FloatArray
    log_priors: FloatArray
    entropies: FloatArray

    def means(self) -> FloatArray:
        """Return the evidence-weighted mean of the entropies of each shape by itself, (K,)."""
        weights = _normalised_exponentials(self.log_evidence + self.log_priors)
        return np.asarray((weights * self.entropies).sum(axis=1))

    def pooled_mean(self, counts: IntArray, sizes: IntArray) -> float:
        """Return the mean for all blocks of a record: evidence multiplies, entropies are averaged over copies."""
        weights = _normalised_exponentials((counts @ self.log_evidence + self.log_priors)[None, :])[0]
        shares = counts * sizes / (counts @ sizes)
        return float(weights @ (shares @ self.entropies))


def levels_considered(rows: int, dim: int | None) -> int:
    """Return the largest rank considered: dim up to 256; two more than the rows if dim is unknown."""
    levels = rows + 2 if dim is None else dim
    return max(rows, min(levels, LARGEST_DIMENSION))


def components(shapes: IntArray, levels: int, *, splits: int = _MOST_SPLITS) -> Components:
    """Return the components of the split posterior of each shape.

    Parameters
    ----------
    shapes : (K, R) int array
        At least one shape; the largest number of rows is R.
    levels : int
        Largest rank d, at least R.
    splits : int
        Largest number of levels split off; with 0 it is the Hilbert-Schmidt posterior averaged over rank and
        concentration.

    Notes
    -----
    The prior weight of k levels split off is 4^-k. Rank r of the remaining d' = d - k has weight
    .9/(r H_d') + .1 [r = d'], H_d' the harmonic number; each rank of the grid R - k + (0, 1, 2, 4, 8, ...), d' stands
    for those before it. alpha is -1/2 or c r, with c from 0 (the Hilbert-Schmidt measure) to infinity (equal levels).
    """
    step = max(1, _ELEMENTS_AT_ONCE // levels**2)
    pieces = [_components(shapes[i : i + step], levels, splits) for i in range(0, len(shapes), step)]
    return Components(
        log_evidence=np.concatenate([piece.log_evidence for piece in pieces]),
        log_priors=pieces[0].log_priors,
        entropies=np.concatenate([piece.entropies for piece in pieces]),
    )


def _components(shapes: IntArray, levels: int, splits: int) -> Components:
    """Return the components of few enough shapes to be worked on at once."""
    rows = shapes.shape[1]
    evidence, priors, entropies = [], [], []
    split = _Split(shapes)
    for k in range(min(splits, rows, levels - 1) + 1):
        if k > 0:
            split.take_off(k - 1)
        rest = shapes[:, k:]
        for rank, share in _ranks(max(rows - k, 1), levels - k):
            of_block, means = _block(rest, rank)
            evidence.append(split.log_evidence[:, None] + of_block)
            entropies.append(split.entropy[:, None] + split.mass[:, None] * means)
            priors.append(np.log(_SPLIT_WEIGHT**k * share * _CONCENTRATION_WEIGHTS))
    return Components(
        log_evidence=np.concatenate(evidence, axis=1),
        log_priors=np.concatenate(priors),
        entropies=np.concatenate(entropies, axis=1),
    )


def clip_to_bracket(estimates: FloatArray, brackets: FloatArray, errors: FloatArray, log_dim: float) -> FloatArray:
    """Return estimates moved into the bracket of continuation estimates, (..., 2), widened by half an error each way.

    Ends of the bracket are first restricted to [0, log_dim], and so is the result.
    """
    ends = np.clip(brackets, 0.0, log_dim)
    clipped = np.clip(estimates, ends.min(axis=-1) - 0.5 * errors, ends.max(axis=-1) + 0.5 * errors)
    return np.asarray(np.clip(clipped, 0.0, log_dim))


def plug_in_variance(shapes: IntArray) -> FloatArray:
    """Return V/n + nu/(2 n^2) at the plug-in spectrum of each shape of one height, (K,)."""
    size = shapes.sum(axis=1)
    p = shapes / size[:, None]
    logs = np.log(p)
    first = (p * logs**2).sum(axis=1) - (p * logs).sum(axis=1) ** 2
    gaps = p[:, :, None] - p[:, None, :]
    tied = np.abs(gaps) <= 1e-6 * p[:, :, None]
    slopes = np.where(
        tied, 2.0 / (p[:, :, None] + p[:, None, :]), (logs[:, :, None] - logs[:, None, :]) / np.where(tied, 1.0, gaps)
    )
    second = (p[:, :, None] * p[:, None, :] * slopes**2).sum(axis=(1, 2)) - 1.0
    return np.asarray(np.maximum(first, 0.0) / size + np.maximum(second, 0.0) / (2.0 * size**2))


class _Split:
    """Evidence, entropy and mass left after rows were split off, for each shape, (K,) each."""

    def __init__(self, shapes: IntArray) -> None:
        self.shapes = shapes.astype(np.float64)
        self.log_evidence = np.zeros(len(shapes))
        self.entropy = np.zeros(len(shapes))
        self.mass = np.ones(len(shapes))

    def take_off(self, k: int) -> None:
        """Split off row k.

        With a = row k, b = the rows below, rho_j the plug-in ratio of level j to level k, g_j = row_{j-1} - row_j, the
        evidence is B(a + 1, b + 1/4)/B(1, 1/4) prod_j (1 - rho_j^(g_j + 1))/(1 - rho_j). The weight of the level within
        the rows from k on is Beta(A, a + b + 5/4 - A), where A is a + 1 less the mean number of boxes that further
        levels have in row k.
        """
        left = self.shapes[:, k:]
        total, a = left.sum(axis=1), left[:, 0]
        own = (a + 0.5) / (total + 1.0)
        ratios = np.minimum(left[:, 1:] / np.maximum(total, 1.0)[:, None] / own[:, None], _NEARLY_TIED)
        reach = left[:, :-1] - left[:, 1:] + 1.0
        powers = ratios**reach
        sums = (1.0 - powers) / (1.0 - ratios)
        excess = (ratios / (1.0 - ratios) - reach * powers / (1.0 - powers)).sum(axis=1)
        first = np.maximum(a + 1.0 - excess, 1.0)
        second = total + 1.0 + _OTHER_LEVELS - first
        self.log_evidence = self.log_evidence + np.log(sums).sum(axis=1)
        self.log_evidence += betaln(a + 1.0, total - a + _OTHER_LEVELS) - betaln(1.0, _OTHER_LEVELS)
        both = first + second
        binary = digamma(both + 1.0) - (first * digamma(first + 1.0) + second * digamma(second + 1.0)) / both
        self.entropy = self.entropy + self.mass * binary
        self.mass = self.mass * second / both


def _ranks(least: int, most: int) -> list[tuple[int, float]]:
    """Return the ranks of the grid with their prior weights; ranks below the least one are impossible."""
    weights = 1.0 / np.arange(1, most + 1)
    weights *= (1.0 - _FULL_RANK_WEIGHT) / weights.sum()
    weights[-1] += _FULL_RANK_WEIGHT
    grid = [least]
    step = 1
    while least + step < most:
        grid.append(least + step)
        step *= 2
    if grid[-1] < most:
        grid.append(most)
    shares = [weights[last:rank].sum() for last, rank in zip([least - 1, *grid[:-1]], grid, strict=True)]
    return list(zip(grid, shares, strict=True))


def _block(rest: IntArray, rank: int) -> tuple[FloatArray, FloatArray]:
    """Return log evidence and mean entropy of a block of `rank` levels for every concentration, (K, 9) each."""
    shapes = np.zeros((len(rest), rank), dtype=np.int64)
    shapes[:, : rest.shape[1]] = rest[:, :rank]
    concentrations = np.concatenate([[_LEAST_CONCENTRATION], _CONCENTRATIONS_PER_LEVEL * rank])
    flat_evidence = -shapes.sum(axis=1) * np.log(rank)
    log_evidence = np.concatenate([block_evidence(shapes, concentrations), flat_evidence[:, None]], axis=1)
    entropies = np.concatenate([block_entropies(shapes, concentrations), np.full((len(rest), 1), np.log(rank))], axis=1)
    return log_evidence + log_dimension(shapes)[:, None], entropies


def _normalised_exponentials(logs: FloatArray) -> FloatArray:
    weights = np.exp(logs - logs.max(axis=1, keepdims=True))
    return np.asarray(weights / weights.sum(axis=1, keepdims=True))

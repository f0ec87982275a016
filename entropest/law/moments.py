"""Mean and covariance of the rows: exact where the law can be summed, by limit laws otherwise."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
import numpy.typing as npt

from entropest._types import FloatArray, IntArray
from entropest.law.branching import last_layer_size, tallest
from entropest.law.gue import LARGEST_GUE, gue_eigenvalues, gue_row_means
from entropest.law.table import stream

__all__ = ["Moments"]

ComplexArray: TypeAlias = npt.NDArray[np.complex128]

EXACT = "exact sum over all shapes"
DISTINCT = "limit for distinct eigenvalues"
GROUPS = "limit for groups of equal eigenvalues"
SURROGATE = "Gaussian surrogate"
# Additions that an exact sum may cost, about a second.
EXACT_WORK = 2e8
MOST_EXACT_COPIES = 10**4
MOST_QUBIT_COPIES = 4 * 10**6
# Neighbouring eigenvalues count as distinct or tied when their n p are this many sqrt(n p) apart.
DISTINCT_DEVIATIONS = 8.0
TIED_DEVIATIONS = 0.02
SURROGATE_ENTRIES = 2**18
FEWEST_PAIRS, MOST_PAIRS = 64, 2**15
SEED = 20170501


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Moments:
    """Mean and covariance of the rows of a shape.

    Attributes
    ----------
    mean : (d,) float array
        Mean length of each row.
    cov : (d, d) float array
        Covariance of the lengths.
    method : str
        "exact sum over all shapes", "limit for distinct eigenvalues", "limit for groups of equal eigenvalues" or
        "Gaussian surrogate".
    mean_error : (d,) float array
        Standard error of `mean` where it was simulated, zeros otherwise. It does not cover the distance of a
        limit from the exact value.
    """

    mean: FloatArray
    cov: FloatArray
    method: str
    mean_error: FloatArray

    @property
    def approximate(self) -> bool:
        """Whether a limit law was used."""
        return self.method != EXACT

    def __repr__(self) -> str:
        rows = ", ".join(f"{row:.6g}" for row in self.mean)
        return f"Moments(mean=[{rows}], method={self.method!r})"


def is_cheap(copies: int, rank: int) -> bool:
    """Say whether the exact law costs a second or so at most."""
    if rank <= 2:
        return rank == 1 or copies <= MOST_QUBIT_COPIES
    if copies > MOST_EXACT_COPIES:
        return False
    height = tallest(copies, rank)
    return last_layer_size(copies, rank)[1] * height * (rank - height + 1) <= EXACT_WORK


def exact_moments(spectrum: FloatArray, copies: int, dim: int) -> Moments:
    """Sum over all shapes, holding no more than one layer."""
    height = tallest(copies, len(spectrum))
    centre = copies * spectrum[:height]
    mean, cov = np.zeros(dim), np.zeros((dim, dim))
    for shapes, log_probabilities in stream(spectrum, copies):
        probabilities = np.exp(log_probabilities)
        offset = shapes - centre
        mean[:height] += probabilities @ offset
        cov[:height, :height] += (offset * probabilities[:, None]).T @ offset
    cov -= np.outer(mean, mean)
    mean[:height] += centre
    return Moments(mean=mean, cov=cov, method=EXACT, mean_error=np.zeros(dim))


def limit_moments(spectrum: FloatArray, copies: int, dim: int) -> Moments:
    """Return the limit for distinct or for groups of equal eigenvalues where it holds, else the surrogate's."""
    rank = len(spectrum)
    mean, cov, error = np.zeros(dim), np.zeros((dim, dim)), np.zeros(dim)
    deviations = copies * (spectrum[:-1] - spectrum[1:]) / np.sqrt(copies * spectrum[:-1])
    tied = deviations <= TIED_DEVIATIONS
    group = np.concatenate([[0], np.cumsum(~tied)])
    sizes = np.bincount(group)
    if (tied | (deviations >= DISTINCT_DEVIATIONS)).all() and sizes.max() <= LARGEST_GUE:
        method = DISTINCT if sizes.max() == 1 else GROUPS
        mean[:rank], cov[:rank, :rank] = _group_moments(spectrum, copies, group)
    else:
        method = SURROGATE
        mean[:rank], cov[:rank, :rank], error[:rank] = _surrogate_moments(spectrum, copies)
    return Moments(mean=mean, cov=cov, method=method, mean_error=error)


def _group_moments(spectrum: FloatArray, copies: int, group: IntArray) -> tuple[FloatArray, FloatArray]:
    """Return mean and covariance for separated groups of t eigenvalues p.

    Row i of the group plus (t + 1)/2 - i differs from n p by sqrt(n p) times the i-th eigenvalue of the traceless
    t x t Gaussian unitary ensemble, by its share of the group's total, which has the covariance of multinomial
    counts, and by the shift sum_j min(p_i, p_j) / (p_i - p_j) over the other groups.
    """
    sizes = np.bincount(group)
    level = (np.bincount(group, weights=spectrum) / sizes)[group]
    same = np.equal.outer(group, group)
    gaps = np.where(same, np.inf, level[:, None] - level)
    mean = copies * level + (np.minimum(level[:, None], level) / gaps).sum(axis=1)
    cov = copies * (np.where(same, level / sizes[group], 0.0) - np.outer(level, level))
    for index in np.flatnonzero(sizes > 1):
        members = group == index
        scale = copies * level[members][0]
        size = int(sizes[index])
        draws = gue_eigenvalues(size, max(SURROGATE_ENTRIES // size**2, FEWEST_PAIRS), traceless=True, rng=SEED)
        mean[members] += math.sqrt(scale) * gue_row_means(size) + np.arange(size) - (size - 1) / 2.0
        cov[np.ix_(members, members)] += scale * np.cov(draws, rowvar=False)
    return mean, cov


def _surrogate_moments(spectrum: FloatArray, copies: int) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return mean, covariance and standard error of the mean of the surrogate's rows.

    The rows plus d - i are (d-1)/2 plus the eigenvalues of n diag(p) + sqrt(n) H with H Hermitian, its diagonal
    normal with covariance diag p - p p^T, the other entries complex normal with E|H_ij|^2 = (p_i + p_j)/2
    (derived in docs/derivations.md). H and -H are used together, so that the diagonal averages to zero.
    """
    d = len(spectrum)
    generator = np.random.default_rng(SEED)
    pairs = min(max(SURROGATE_ENTRIES // d**2, FEWEST_PAIRS), MOST_PAIRS)
    at_once = max(SURROGATE_ENTRIES // d**2, 1)
    centre = np.diag(copies * spectrum)
    drawn = []
    for start in range(0, pairs, at_once):
        noise = math.sqrt(copies) * _hermitian_noise(spectrum, min(at_once, pairs - start), generator)
        drawn.append([np.linalg.eigvalsh(centre + sign * noise)[:, ::-1] for sign in (1, -1)])
    plus, minus = np.concatenate(drawn, axis=1) + (np.arange(d) - (d - 1) / 2.0)
    averages = (plus + minus) / 2.0
    cov = np.cov(np.concatenate([plus, minus]), rowvar=False).reshape(d, d)
    return averages.mean(axis=0), cov, averages.std(axis=0, ddof=1) / math.sqrt(pairs)


def _hermitian_noise(spectrum: FloatArray, count: int, generator: np.random.Generator) -> ComplexArray:
    """Draw `count` of the matrices H."""
    d = len(spectrum)
    real, imaginary = generator.standard_normal((2, count, d, d))
    spread = np.sqrt((spectrum[:, None] + spectrum) / 4.0)
    upper = np.triu((real + 1j * imaginary) * spread, k=1)
    noise = upper + np.conj(np.swapaxes(upper, 1, 2))
    diagonal = generator.standard_normal((count, d)) * np.sqrt(spectrum)
    noise[:, np.arange(d), np.arange(d)] = diagonal - spectrum * diagonal.sum(axis=1, keepdims=True)
    return np.asarray(noise)

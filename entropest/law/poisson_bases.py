"""Bases of the two function spaces of the Poissonised outcome law, tabulated at nodes and well conditioned.

U holds the polynomials of degree below d, V the span of d Poisson mass functions. Each basis is cut into parts that
belong to groups of nearby means, so that the parts of distant groups are nearly orthogonal from the start.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import gammaln

from entropest._types import FloatArray
from entropest.law.poisson_family import groups_of_means, log_poisson, span_of_poissons
from entropest.law.poisson_grid import WINDOW, room_above

__all__ = ["TwoSpaces", "two_spaces", "widest_tie"]

TIED_WIDTH = 2.0
CLUSTERED = 4.0


@dataclass(frozen=True, slots=True, kw_only=True)
class MassPart:
    """Tied means: exp(log_scale) factors spans their mass functions at the nodes of a window."""

    window: slice
    log_scale: FloatArray
    factors: FloatArray


@dataclass(frozen=True, slots=True, kw_only=True)
class PolynomialPart:
    """Neighbouring means: the expected positions of all others are roots common to their polynomials."""

    window: slice
    size: int
    roots: FloatArray


@dataclass(frozen=True, slots=True, kw_only=True)
class TwoSpaces:
    """The spaces U and V at the nodes x, ready to be weighted.

    Attributes
    ----------
    x : (N,) float array
    mass_parts, polynomial_parts : tuple
    log_weight : (N,) float array
        A first value of log w.
    """

    x: FloatArray
    mass_parts: tuple[MassPart, ...]
    polynomial_parts: tuple[PolynomialPart, ...]
    log_weight: FloatArray

    def mass_columns(self, log_weight: FloatArray) -> FloatArray:
        """Return a basis of V / w at the nodes, (N, d)."""
        columns = []
        for part in self.mass_parts:
            scale = part.log_scale - log_weight[part.window]
            block = np.zeros((len(self.x), part.factors.shape[1]))
            block[part.window] = np.exp(scale - scale.max())[:, None] * part.factors
            columns.append(block)
        return np.hstack(columns)

    def polynomial_columns(self, log_weight: FloatArray) -> FloatArray:
        """Return a basis of U w at the nodes, (N, d).

        The part of a cluster is q(x) prod_j (x - root_j) w(x), where the polynomials q of degree below the size of
        the cluster are orthonormal with respect to the rest of the expression in the window of the cluster.
        """
        columns = []
        for part in self.polynomial_parts:
            distance = self.x[:, None] - part.roots
            with np.errstate(divide="ignore", over="ignore"):
                log_size = np.log(np.abs(distance)).sum(axis=1) + log_weight
                weight = np.sign(distance).prod(axis=1) * np.exp(log_size - log_size[part.window].max())
            diagonal, side = _lanczos(self.x[part.window], weight[part.window], part.size)
            before, current = np.zeros_like(weight), weight
            columns.append(current)
            for k in range(part.size - 1):
                following = ((self.x - diagonal[k]) * current - side[k] * before) / side[k + 1]
                before, current = current, following
                columns.append(current)
        return np.stack(columns, axis=1)


def two_spaces(means: FloatArray, x: FloatArray, *, tied_gap: float) -> TwoSpaces:
    """Prepare U and V of decreasing positive means at the nodes x, with means closer than a gap taken as tied.

    Parameters
    ----------
    means : (d,) float array
    x : (N,) float array
    tied_gap : float
        In standard deviations. See :func:`widest_tie` for what it may be.

    Examples
    --------
    >>> spaces = two_spaces(np.array([2.0, 1.0]), np.arange(40.0), tied_gap=0.5)
    >>> spaces.mass_columns(spaces.log_weight).shape
    (40, 2)
    """
    room = room_above(means)
    tied = _tied_groups(means, tied_gap)
    positions = _expected_positions(means, tied)
    mass_parts = []
    for group in tied:
        window = _window(means[group], room, x)
        columns = span_of_poissons(means[group], x[window])
        mass_parts.append(MassPart(window=window, log_scale=columns.log_scale, factors=columns.factors))
    polynomial_parts = [
        PolynomialPart(
            window=_window(means[group], room, x),
            size=group.stop - group.start,
            roots=np.delete(positions, group),
        )
        for group in groups_of_means(means, CLUSTERED, least_width=CLUSTERED)
    ]
    return TwoSpaces(
        x=x,
        mass_parts=tuple(mass_parts),
        polynomial_parts=tuple(polynomial_parts),
        log_weight=_first_log_weight(means, tied, positions, x),
    )


def widest_tie(means: FloatArray, tied_gap: float) -> float:
    """Return the width, in standard deviations, of the widest group of means that count as tied.

    One expansion serves a group up to a width of about 10.

    Examples
    --------
    >>> widest_tie(np.array([110.0, 100.0, 90.0]), 1.5)
    2.0
    """
    return max(
        float(np.ptp(means[group])) / max(1.0, math.sqrt(means[group].mean()))
        for group in _tied_groups(means, tied_gap)
    )


def _tied_groups(means: FloatArray, tied_gap: float) -> list[slice]:
    return list(groups_of_means(means, tied_gap, least_width=TIED_WIDTH))


def _window(means: FloatArray, room: int, x: FloatArray) -> slice:
    """Return the nodes within 14 standard deviations of some means, with room where the window reaches zero."""
    low = float(means[-1]) - WINDOW * max(1.0, math.sqrt(means[-1]))
    high = float(means[0]) + WINDOW * max(1.0, math.sqrt(means[0])) + (room if low <= 0.0 else 0)
    return slice(int(np.searchsorted(x, low)), int(np.searchsorted(x, high, side="right")))


def _lanczos(x: FloatArray, start: FloatArray, size: int) -> tuple[FloatArray, FloatArray]:
    """Return the recurrence coefficients of the polynomials orthonormal for the weight start^2 on x.

    side[k+1] q_{k+1} = (x - diagonal[k]) q_k - side[k] q_{k-1}; the Krylov vectors are re-orthogonalised twice.
    """
    vectors = np.empty((size, len(x)))
    vectors[0] = start / np.linalg.norm(start)
    diagonal, side = np.zeros(size), np.zeros(size)
    for k in range(size - 1):
        image = x * vectors[k]
        diagonal[k] = vectors[k] @ image
        for _ in range(2):
            image = image - (vectors[: k + 1] @ image) @ vectors[: k + 1]
        side[k + 1] = np.linalg.norm(image)
        vectors[k + 1] = image / side[k + 1]
    return diagonal, side


def _expected_positions(means: FloatArray, tied: list[slice]) -> FloatArray:
    """Return about where the points lie: t_i + sum_j t_i/(t_i - t_j), consecutive integers for tied means."""
    centers = np.concatenate([np.full(group.stop - group.start, means[group].mean()) for group in tied])
    order = np.concatenate([np.arange(group.stop - group.start)[::-1] for group in tied])
    gaps = centers[:, None] - centers
    pushes = np.divide(centers[:, None], gaps, out=np.zeros_like(gaps), where=gaps != 0.0)
    return np.asarray(centers + pushes.sum(axis=1) + order, dtype=np.float64)


def _first_log_weight(means: FloatArray, tied: list[slice], positions: FloatArray, x: FloatArray) -> FloatArray:
    """Return a starting value of log w at the nodes.

    For one group of equal means t the best w^2 is their mass function. With several groups c of m_c means about
    t_c it is the sum of P_c / ((m_c - 1)! t_c^{m_c - 1} prod_{j not in c} |x - mu_j| |mu_c - mu_j|), where P_c is the
    average mass function of the group, mu are the expected positions and distances are rounded off by the widths.
    Below t_c = 1 the weight is levelled over the m_c integers that the points occupy.
    """
    widths = np.maximum(means, 1.0)
    terms = []
    for group in tied:
        size = group.stop - group.start
        center = float(means[group].mean())
        others = np.delete(np.arange(len(means)), group)
        if center < 1.0:
            term = np.maximum(x - size + 1.0, 0.0) * math.log(center) - gammaln(x + 1.0)
        else:
            masses = [log_poisson(x, mean) for mean in means[group].tolist()]
            term = np.logaddexp.reduce(masses, axis=0) - math.log(size) - (size - 1) * math.log(center)
        term -= math.lgamma(size)
        for at in (x[:, None], positions[group].mean()):
            term -= 0.5 * np.log((at - positions[others]) ** 2 + widths[others]).sum(axis=-1)
        terms.append(term)
    return np.asarray(0.5 * np.logaddexp.reduce(terms, axis=0), dtype=np.float64)

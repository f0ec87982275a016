"""How far the rows of large diagrams can be from the spectrum in a known dimension, and what follows from it.

With dim_lambda the dimension of the irreducible representation of GL(d), Q(lambda) = dim_lambda^2 / C(n + d^2 - 1, n)
is a law on diagrams (Cauchy's identity), so by Markov's inequality P(lambda) >= delta Q(lambda) with probability at
least 1 - delta, whatever the spectrum. With P = f_lambda s_lambda(p) and s_lambda(p) <= dim_lambda prod p_i^lambda_i
this bounds the relative entropy from h = lambda / n to the spectrum,

    n D(h || p) <= log(1/delta) + log C(n + d^2 - 1, n) + log(f_lambda / dim_lambda) - n S(h),

where f_lambda / dim_lambda = n! / prod over boxes (d + column - row). It bounds the ratios p_j / p_i; where these stay
away from 1, s_lambda(p) is smaller than assumed, hence the radius is smaller, and so on. Several diagrams: Q is the
product of their laws. Derived in docs/theory-large-diagrams.md, "Localiser".
"""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from scipy.special import entr, gammaln, xlogy

from entropest._types import BoolArray, FloatArray

__all__ = ["Localisation", "localise"]

REFINEMENTS: Final = 4
LARGEST_REFINED: Final = 64
_SLACK: Final = 1e-11


@dataclass(frozen=True, slots=True, kw_only=True)
class Localisation:
    """What holds together with probability at least 1 - delta.

    Attributes
    ----------
    radius : float
        Bound of D(h || p) for the rows h of all diagrams together.
    excess : float
        Bound of sum_{i<j} p_j log(p_i / p_j) / (p_i - p_j), the mean energy of a tableau above its rows.
    """

    radius: float
    excess: float


def localise(diagrams: FloatArray, delta: float) -> Localisation:
    """Bound the relative entropy from the rows to the spectrum, for diagrams (m, d) in dimension d."""
    d = diagrams.shape[1]
    total = float(diagrams.sum())
    h = diagrams.sum(axis=0) / total
    first = _first_radius(diagrams, delta)
    excess = d * (d - 1) / 2.0
    if d == 1 or d > LARGEST_REFINED:
        return Localisation(radius=first, excess=excess)
    log_dims = [_log_pair_dimensions(diagram) for diagram in diagrams]
    full = float(sum(pairs.sum() for pairs in log_dims))
    radius = first
    for _ in range(REFINEMENTS):
        ratios = _largest_ratios(h, radius)
        bound = min(full, _log_multiplicity_bound(log_dims, ratios))
        slack = _SLACK * (1.0 + full) / total
        radius = min(radius, first + (bound - full) / total + slack)
    excess = float(_excess(_largest_ratios(h, radius)[np.triu_indices(d, 1)]).sum())
    return Localisation(radius=radius, excess=excess * (1.0 + _SLACK))


def _first_radius(diagrams: FloatArray, delta: float) -> float:
    """Return the radius from s_lambda(p) <= dim_lambda prod p_i^lambda_i, rounded up."""
    d = diagrams.shape[1]
    sizes = diagrams.sum(axis=1)
    index = np.arange(d)
    total = float(sizes.sum())
    boxes = gammaln(d - index + diagrams) - gammaln(d - index)
    binomials = gammaln(sizes + d * d) - gammaln(float(d * d)) - gammaln(sizes + 1.0)
    entropy = total * float(entr(diagrams.sum(axis=0) / total).sum())
    terms = [-math.log(delta), *binomials, *gammaln(sizes + 1.0), *(-boxes.ravel()), -entropy]
    return (math.fsum(terms) + _SLACK * math.fsum(map(abs, terms))) / total


def _log_pair_dimensions(rows: FloatArray) -> FloatArray:
    """Return log((l_i - l_j) / (j - i)) for i < j, l_i = row_i + d - i; their sum is log dim_lambda."""
    d = len(rows)
    shifted = rows + np.arange(d - 1, -1, -1)
    upper = np.triu(np.ones((d, d), dtype=np.bool_), 1)
    gaps = np.where(upper, shifted[:, None] - shifted[None], 1.0)
    steps = np.where(upper, np.arange(d)[None] - np.arange(d)[:, None], 1)
    return np.asarray(np.log(gaps / steps))


def _largest_ratios(h: FloatArray, radius: float) -> FloatArray:
    """Return upper limits of p_j / p_i, i < j, from (h_i + h_j) kl(h_j / (h_i + h_j), p_j / (p_i + p_j)) <= radius."""
    first, second = np.triu_indices(len(h), 1)
    mass = h[first] + h[second]
    share = h[second] / np.where(mass > 0.0, mass, 1.0)

    def beyond(r: FloatArray) -> BoolArray:
        safe = np.clip(r, 1e-300, 0.5)
        kl = xlogy(share, share / safe) + xlogy(1.0 - share, (1.0 - share) / (1.0 - safe))
        return np.asarray(mass * kl - 1e-13 > radius, dtype=np.bool_)

    low, high = share, np.full_like(share, 0.5)
    open_ended = ~beyond(high)
    for _ in range(50):
        middle = 0.5 * (low + high)
        far = beyond(middle)
        low, high = np.where(far, low, middle), np.where(far, middle, high)
    ratios = np.zeros((len(h), len(h)))
    ratios[first, second] = np.where(open_ended, 1.0, np.minimum(1.0, high / (1.0 - high) * (1.0 + _SLACK)))
    return ratios


def _log_multiplicity_bound(log_dims: list[FloatArray], ratios: FloatArray) -> float:
    """Bound log prod s_lambda(p) / p^lambda over the diagrams, by the best division of the letters into runs.

    Inside a run of neighbouring letters the dimension of the run counts, between letters of two runs 1/(1 - p_j/p_i).
    """
    d = len(ratios)
    inside = np.sum(log_dims, axis=0)
    with np.errstate(divide="ignore"):
        between = -len(log_dims) * np.log1p(-np.triu(ratios, 1))
    best = [0.0]
    for stop in range(1, d + 1):
        best.append(
            min(
                best[start] + float(inside[start:stop, start:stop].sum() + between[:start, start:stop].sum())
                for start in range(stop)
            )
        )
    return best[d]


def _excess(x: FloatArray) -> FloatArray:
    """Return x log(1/x) / (1 - x), increasing from 0 at x = 0 to 1 at x = 1."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.where(x < 1.0, -xlogy(x, x) / (1.0 - np.minimum(x, 1.0 - 1e-16)), 1.0))

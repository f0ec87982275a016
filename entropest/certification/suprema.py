"""Certified suprema of the mean of a statistic over all spectra of bounded entropy.

The statistic of :mod:`.mean_polynomial` has mean Phi(p) = c_1 + sum_{j>=2} c_j P_j + e P_2^2, c_j <= 0 for j >= 4, e
>= 0. Over all spectra of any dimension with S(p) <= s it is largest at one of the form (w repeated t times, x, y
repeated r times, z), w >= x >= y >= z >= 0, and at (w repeated t times, x) if c_3 <= 0. That family is searched by
branch and bound, every cell bounded by weak duality (:mod:`.supremum_cells`). Proofs: docs/theory-suprema.md.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from entropest._checks import as_real
from entropest._types import FloatArray
from entropest.certification.mean_polynomial import MeanPolynomial
from entropest.certification.spectra_at_entropy import LevelSpectra, spectra_at_entropy
from entropest.certification.supremum_cells import Problem, bounded, centre_values, first_cells, halves, narrowed
from entropest.errors import ArgumentValueError

__all__ = ["Suprema", "certified_suprema"]

_CHUNK: Final = 20_000
_LARGEST_ENTROPY: Final = 5.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Suprema:
    """Two numbers around each of J suprema.

    Attributes
    ----------
    upper : (J,) array
        Not below the suprema.
    attained : (J,) array
        Reached by spectra, up to rounding.
    cells : int
        Cells that were bounded.
    """

    upper: FloatArray
    attained: FloatArray
    cells: int


def certified_suprema(
    mean: MeanPolynomial, entropies: npt.ArrayLike, *, tolerance: float, patience: int = 10_000
) -> Suprema:
    """Bound the suprema of `mean` over all spectra of entropy at most s from above, by branch and bound.

    Parameters
    ----------
    mean : MeanPolynomial
    entropies : (J,) array_like
        Values of s in nat, above 0 and at most 5, increasing.
    tolerance : float
        Wanted distance of the two numbers returned, positive.
    patience : int
        Once more cells an entropy have been bounded, the tolerance grows with their number, so that the search ends.

    Returns
    -------
    Suprema

    Raises
    ------
    ArgumentValueError
        If an entropy or the tolerance is out of range.

    Notes
    -----
    Memory: some 200 numbers for each of the at most 20,000 cells bounded at a time, 15 for each cell waiting.

    Examples
    --------
    Two pure copies are always symmetric, so the supremum of the purity is 1 at any entropy:

    >>> purity = MeanPolynomial(coefficients=(0.0, 1.0, 0.0), square=0.0)
    >>> found = certified_suprema(purity, [0.5, 0.6], tolerance=1e-3)
    >>> bool((1.0 <= found.upper).all() and (found.upper <= 1.001).all())
    True
    """
    grid = np.atleast_1d(np.asarray(entropies, dtype=np.float64))
    tolerance = as_real(tolerance, "tolerance")
    if not ((grid > 0.0) & (grid <= _LARGEST_ENTROPY)).all() or (np.diff(grid) <= 0.0).any():
        raise ArgumentValueError(
            f"entropies must increase, above 0 and at most {_LARGEST_ENTROPY:g}, got {grid.tolist()}"
        )
    if tolerance <= 0.0:
        raise ArgumentValueError(f"tolerance must be positive, got {tolerance}")
    problem, attained = _started(mean, grid)
    closed = np.full(len(grid), -np.inf)
    waiting = first_cells(problem)
    count = 0
    while len(waiting):
        now, waiting = waiting.take(slice(None, _CHUNK)), waiting.take(slice(_CHUNK, None))
        now = narrowed(now, problem)
        count += len(now)
        np.maximum.at(attained, now.index, centre_values(now, problem))
        attained = np.maximum.accumulate(attained)
        bound = bounded(now, problem)
        allowed = tolerance * max(1.0, count / (patience * len(grid)))
        settled = bound.upper <= attained[now.index] + allowed
        np.maximum.at(closed, now.index[settled], bound.upper[settled])
        now = now.take(~settled)
        waiting = halves(now, bound.spread[:, ~settled]).joined(waiting)
    return Suprema(upper=np.maximum.accumulate(np.maximum(closed, attained)), attained=attained, cells=count)


def _started(mean: MeanPolynomial, entropies: FloatArray) -> tuple[Problem, FloatArray]:
    """Return the problem with multipliers from the best of some spectra at each entropy, and their values."""
    pure = sum(mean.coefficients) + mean.square
    best, multipliers = [], []
    for entropy in entropies.tolist():
        start = spectra_at_entropy(entropy)
        values = mean.at(start.levels, start.multiplicities)
        best.append(max(float(values.max()), pure))
        multipliers.append(_multipliers(mean, start, int(values.argmax())))
    nu, mu = np.array(multipliers).T
    return Problem(mean=mean, entropies=entropies, nu=nu, mu=mu), np.maximum.accumulate(best)


def _multipliers(mean: MeanPolynomial, spectra: LevelSpectra, index: int) -> tuple[float, float]:
    """Fit nu, mu to the stationarity of the mean at one spectrum: f'(x) = mu - nu (log x + 1) at its levels."""
    levels, counts = spectra.levels[:, index], spectra.multiplicities[:, index]
    present = (counts > 0.0) & (levels > 1e-9)
    levels, counts = levels[present], counts[present]
    purity = float(counts @ levels**2)
    slopes = 2.0 * (mean.coefficients[1] + 2.0 * mean.square * purity) * levels
    for power, coefficient in enumerate(mean.coefficients[2:], start=3):
        slopes = slopes + power * coefficient * levels ** (power - 1)
    weights = np.sqrt(counts * levels)
    design = np.stack([-(np.log(levels) + 1.0), np.ones_like(levels)], axis=1)
    nu, mu = np.linalg.lstsq(design * weights[:, None], slopes * weights, rcond=None)[0]
    return max(float(nu), 0.0), float(mu)

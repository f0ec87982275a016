"""Fixed families of polynomial bounds on the entropy, tuned to reference spectra and not to any data."""

import math
from functools import lru_cache

import numpy as np

from entropest._types import FloatArray
from entropest.diagrams import cycle_character, young_diagrams
from entropest.estimation.identified import Side, exact_coefficients, polynomial_table, value_at_one
from entropest.functionals import VonNeumann

__all__ = ["bound_ladder", "statistic_range"]

_LOWER_ENTROPIES = (0.03, 0.1, 0.25, 0.5, 0.8, 1.2, 1.7, 2.3, 3.0, 4.0)
_UPPER_FRACTIONS = (0.02, 0.07, 0.15, 0.3, 0.5, 0.7, 0.85, 0.95)
_LEVELS = 256


@lru_cache(maxsize=64)
def bound_ladder(side: Side, order: int, dim: int | None) -> FloatArray:
    """Return coefficients (W, order + 1) of bounds, each the best of a grid for one reference spectrum.

    The reference spectra are, at ten entropies from 0.03 to 4 nat for lower bounds and at eight fractions of log dim
    for upper bounds, a geometric sequence and a spectrum with one eigenvalue apart: many equal ones after it for
    upper bounds, equal ones and a smaller last for lower bounds.

    Parameters
    ----------
    side : "lower" or "upper"
        Which bound.
    order : int
        Highest power sum, from 2 to 6.
    dim : int or None
        Dimension, for upper bounds: the coefficient of Tr rho^0 multiplies it.

    Examples
    --------
    >>> bound_ladder("lower", 3, None).shape[1]
    4
    """
    nodes, table = polynomial_table(side, order)
    chosen = []
    for spectrum in _references(side, dim):
        sums = (spectrum[:, None] ** np.arange(order + 1)).sum(axis=0)
        sums[0] = 0.0 if dim is None else dim
        sign = 1.0 if side == "lower" else -1.0
        rounding = 1e-14 * np.abs(table) @ np.maximum(sums, 1.0)
        chosen.append(int(np.argmax(sign * (table @ sums) - rounding)))
    coefficients = exact_coefficients(side, nodes[chosen].tolist(), at_one=value_at_one(side, order))
    coefficients.flags.writeable = False
    return coefficients


@lru_cache(maxsize=64)
def statistic_range(side: Side, order: int, dim: int | None) -> tuple[FloatArray, FloatArray]:
    """Return the least and largest value (W,) of each bound of a ladder, read as a statistic of one outcome.

    Tr rho^j is replaced by the normalised character of a j-cycle (and Tr rho^0 by the dimension). The range is
    taken over all diagrams of `order` boxes; it holds for larger blocks too, whose characters are averages
    over random sub-blocks.
    """
    coefficients = bound_ladder(side, order, dim)
    rows = [
        [0.0 if dim is None else float(dim)] + [float(cycle_character(diagram, j)) for j in range(1, order + 1)]
        for diagram in young_diagrams(order)
    ]
    values = coefficients @ np.array(rows).T
    slack = 1e-13 * np.abs(coefficients) @ np.array([max(1.0, rows[0][0])] + [1.0] * order)
    return values.min(axis=1) - slack, values.max(axis=1) + slack


def _references(side: Side, dim: int | None) -> list[FloatArray]:
    """Return the reference spectra."""
    levels = _LEVELS if dim is None else min(dim, _LEVELS)
    found = []
    if side == "lower":
        for entropy in _LOWER_ENTROPIES:
            equal = np.zeros(math.floor(math.exp(entropy)) + 1)
            equal[-1] = 1.0
            found += [_of_entropy(equal, entropy), _of_entropy(np.arange(float(levels)), entropy)]
    else:
        apart = np.ones(levels)
        apart[0] = 0.0
        for fraction in _UPPER_FRACTIONS:
            entropy = fraction * math.log(levels)
            found += [_of_entropy(apart, entropy), _of_entropy(np.arange(float(levels)), entropy)]
    return found


def _of_entropy(energies: FloatArray, entropy: float) -> FloatArray:
    """Return the thermal spectrum exp(-beta E)/Z of given entropy, by bisection in exp(-beta)."""
    low, high = 0.0, 1.0
    for _ in range(60):
        middle = 0.5 * (low + high)
        weights = middle**energies
        if VonNeumann()(weights / weights.sum()) < entropy:
            low = middle
        else:
            high = middle
    return np.asarray(high**energies / (high**energies).sum())

"""Spectra of a given entropy with at most three distinct levels: starting points of a search, no more."""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np

from entropest._types import BoolArray, FloatArray

__all__ = ["LevelSpectra", "spectra_at_entropy"]

_REPEATS: Final = (1, 2, 3, 4, 5, 6, 8, 10, 13, 17, 24, 35, 50, 80, 150, 400, 2000)
_POSITIONS: Final = (0.0, 0.02, 0.06, *(i / 10 for i in range(1, 10)), 0.95, 1.0)
_BISECTIONS: Final = 52


@dataclass(frozen=True, slots=True, kw_only=True)
class LevelSpectra:
    """Levels w, x, y, z and how often each occurs, both (4, N)."""

    levels: FloatArray
    multiplicities: FloatArray


def spectra_at_entropy(entropy: float) -> LevelSpectra:
    """Return spectra (w^t, x, y^r) and (w^t, y^r, z), w >= x >= y >= z, of entropy `entropy` or a rounding error below.

    x sits at a fixed fraction of the way from y to w, and z at a fixed fraction of y; the ratio y/w is found by
    bisection, as the entropy rises with it.

    Examples
    --------
    >>> found = spectra_at_entropy(1.0)
    >>> bool(np.allclose((found.levels * found.multiplicities).sum(axis=0), 1.0))
    True
    """
    most = int(math.exp(entropy))
    tops = range(1, most + 1) if most <= 10 else sorted({1, 2, 3, 4, *np.linspace(5, most, 8).astype(int).tolist()})
    grid = np.array(
        [(t, r, p, a) for t in tops for r in _REPEATS for p in (0, 1) for a in _POSITIONS], dtype=np.float64
    )
    top, repeats, above, position = grid.T
    multiplicities = np.stack([top, above, repeats, 1.0 - above])

    def levels(ratio: FloatArray) -> FloatArray:
        raised = above * (ratio + position * (1.0 - ratio))
        rows = np.stack([np.ones_like(ratio), raised, ratio, (1.0 - above) * position * ratio])
        return np.asarray(rows / (multiplicities * rows).sum(axis=0), dtype=np.float64)

    def above_entropy(ratio: FloatArray) -> BoolArray:
        rows = levels(ratio)
        return np.asarray(-(multiplicities * rows * np.log(np.maximum(rows, 1e-300))).sum(axis=0) > entropy)

    low, high = np.zeros(len(grid)), np.ones(len(grid))
    reachable = ~above_entropy(low) & above_entropy(high)
    top, repeats, above, position = grid[reachable].T
    multiplicities = multiplicities[:, reachable]
    low, high = low[reachable], high[reachable]
    for _ in range(_BISECTIONS):
        middle = 0.5 * (low + high)
        too_much = above_entropy(middle)
        low, high = np.where(too_much, low, middle), np.where(too_much, middle, high)
    return LevelSpectra(levels=levels(low), multiplicities=multiplicities)

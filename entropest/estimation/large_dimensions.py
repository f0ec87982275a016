"""The upper end of the entropy of large blocks in many dimensions, where unseen rows may hide many levels."""

import math

import numpy as np

from entropest._types import FloatArray
from entropest.estimation.blocks import Blocks
from entropest.estimation.identified import harremoes_topsoe_upper
from entropest.estimation.ladders import bound_ladder
from entropest.estimation.moments import LARGEST_MOMENT, characters
from entropest.shapes import down_probabilities

__all__ = ["upper_end_from_moments"]

_COPIES_PER_SQUARED_ORDER = 6


def upper_end_from_moments(blocks: Blocks, z: float) -> float:
    """Return the least of several upper bounds on the entropy, each some standard errors above its estimate.

    The bounds are the one of Harremoes and Topsoe from the purity and those of the ladders of polynomial bounds of
    order k from 3 to 6, as far as n >= 6 k^2. All are linear in the unbiased power sums of the diagrams, or monotone
    in the purity, and their standard errors are exact delete-one jackknives. They hold however many levels hide
    behind rows not seen. The multiple of the standard error is 1.2 (1 + d/(2 n)) z: power sums of few copies are
    skew, and nearly flat spectra of 17 to 128 levels at n = 20 and n = d needed as much in simulations.

    Parameters
    ----------
    blocks : Blocks
        Blocks of at least 7 copies with known dimension.
    z : float
        Multiple of the standard error that suffices for large n and few levels.
    """
    assert blocks.dim is not None
    z = 1.2 * (1.0 + 0.5 * blocks.dim / blocks.copies) * z
    sums, covariance = _power_sums(blocks)
    purity = sums[2] - z * math.sqrt(covariance[2, 2])
    best = harremoes_topsoe_upper(min(1.0, max(purity, 1.0 / blocks.dim)), blocks.dim)
    sums[0] = blocks.dim
    for order in range(3, LARGEST_MOMENT + 1):
        if blocks.copies < _COPIES_PER_SQUARED_ORDER * order**2:
            break
        coefficients = bound_ladder("upper", order, blocks.dim)
        variances = ((coefficients @ covariance[: order + 1, : order + 1]) * coefficients).sum(axis=1)
        ends = coefficients @ sums[: order + 1] + z * np.sqrt(np.maximum(variances, 0.0))
        best = min(best, float(ends.min()))
    return best


def _power_sums(blocks: Blocks) -> tuple[FloatArray, FloatArray]:
    """Return the averaged power sums of orders 0 (as 0) to 6, and their delete-one covariance."""
    shapes = blocks.shapes
    rows = blocks.rows
    weights = down_probabilities(shapes)
    possible = weights > 0.0
    smaller = (shapes[:, None, :] - np.eye(rows, dtype=np.int64))[possible]
    of_smaller = characters(smaller, LARGEST_MOMENT)
    owner = np.nonzero(possible)[0]
    covariance = np.zeros((LARGEST_MOMENT + 1, LARGEST_MOMENT + 1))
    for k, (size, count) in enumerate(zip(blocks.sizes.tolist(), blocks.counts.tolist(), strict=True)):
        chances, values = weights[k][possible[k]], of_smaller[owner == k]
        centred = values - chances @ values
        share = count * (size / blocks.copies) ** 2 * (size - 1)
        covariance += share * (centred * chances[:, None]).T @ centred
    return blocks.average(characters(shapes, LARGEST_MOMENT)), covariance

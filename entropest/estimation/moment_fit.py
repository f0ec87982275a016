"""Moment fit: the spectrum whose power sums are nearest to the unbiased ones, weighted by their covariance."""

from dataclasses import dataclass

import numpy as np

from entropest._types import FloatArray, IntArray
from entropest.errors import NotCoveredError
from entropest.estimation.blocks import Blocks, as_blocks, with_zeros
from entropest.estimation.moments import LARGEST_MOMENT, pooled_moments
from entropest.estimation.power_sums import power_sum
from entropest.estimation.spectrum_search import nearest_spectrum
from entropest.functionals import Functional, VonNeumann
from entropest.records.counts import DiagramCounts
from entropest.shapes import down_probabilities
from entropest.spectra import maximally_mixed

__all__ = ["MomentFit"]

_LARGEST_DIM = 64
_MANY_BLOCKS = 30
_RIDGE = 1e-2
_FLOOR = 1e-8


@dataclass(frozen=True, slots=True)
class MomentFit:
    """The functional at the spectrum that matches unbiased power sums of orders 2 to 6, weighted by their covariance.

    The covariance is that between blocks for 30 blocks or more, and otherwise the delete-one jackknife of each block,
    exactly, by its down-steps; its diagonal is raised by 1%, which keeps estimated correlations near 1 from
    steering the fit (at n = 100 to 300 and d = 3, 4 that halved the error of some cells). Source: generalised method of
    moments, Hansen, Econometrica 50 (1982) 1029, doi:10.2307/1912775, with the power sums of Frobenius' formula. Cost:
    two local least-squares searches of some 10 ms at d = 8. Regime: many blocks of at least d copies, or many
    copies and few dimensions; single diagrams that see an eigenvalue only once or twice are fitted badly, since
    six power sums hardly tell small eigenvalues. Up to 64 dimensions, and blocks of at least two copies.

    Parameters
    ----------
    functional : Functional
        What is estimated.

    Examples
    --------
    >>> MomentFit().spectrum(DiagramCounts({"60+30+10": 1}, dim=3)).round(3)
    array([0.574, 0.322, 0.105])
    """

    functional: Functional = VonNeumann()

    def __call__(self, counts: DiagramCounts) -> float:
        """Return the estimate."""
        return float(self.functional(with_zeros(self.functional, self.spectrum(counts))))

    def spectrum(self, counts: DiagramCounts) -> FloatArray:
        """Return the fitted spectrum, (d,); without a dimension, the rows seen are taken for all.

        A record without a block of two copies gives the rows over the copies.

        Raises
        ------
        NotCoveredError
            Beyond 64 dimensions.
        """
        blocks = as_blocks(counts)
        letters = blocks.rows if counts.dim is None else counts.dim
        if letters > _LARGEST_DIM:
            raise NotCoveredError(f"a moment fit is offered up to {_LARGEST_DIM} dimensions, got {letters}")
        rows = np.concatenate([blocks.spectrum, np.zeros(letters - blocks.rows)])
        if letters == 1 or int(blocks.sizes.max()) < 2:
            return rows
        orders, values, covariance = _measured(counts, blocks)
        whitening = _whitening(covariance)
        starts = (rows + 0.5 / blocks.copies, 0.5 * rows + 0.5 * maximally_mixed(letters))
        fits = [nearest_spectrum(orders, values, whitening, _spread(start)) for start in starts]
        return min(fits, key=lambda fit: fit[1])[0]


def _measured(counts: DiagramCounts, blocks: Blocks) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return orders, unbiased power sums and their covariance."""
    smallest = int(blocks.sizes.min())
    if blocks.blocks >= _MANY_BLOCKS or smallest < 3:
        moments = pooled_moments(counts)
        return np.arange(2.0, moments.order + 1.0), moments.values[2:], moments.covariance[2:, 2:]
    orders = np.arange(2, min(LARGEST_MOMENT, smallest - 1) + 1)
    shares = (blocks.sizes / blocks.copies)[:, None]
    values = blocks.counts @ (shares * _power_sums(blocks.shapes, orders))
    covariance = np.zeros((len(orders), len(orders)))
    for shape, tally, share in zip(blocks.shapes, blocks.counts, shares[:, 0], strict=True):
        weights = down_probabilities(shape)
        kept = np.flatnonzero(weights > 0.0)
        fewer = _power_sums(shape - np.eye(len(shape), dtype=np.int64)[kept], orders)
        centred = fewer - weights[kept] @ fewer
        covariance += tally * share**2 * (shape.sum() - 1) * (centred * weights[kept, None]).T @ centred
    return orders.astype(np.float64), values, covariance


def _power_sums(shapes: IntArray, orders: IntArray) -> FloatArray:
    return np.stack([power_sum(shapes, int(order)) for order in orders], axis=1)


def _whitening(covariance: FloatArray) -> FloatArray:
    """Return W with W^T W the inverse of the covariance with its diagonal raised."""
    trace = float(np.trace(covariance))
    raised = _RIDGE * np.diag(covariance) + (_FLOOR * trace if trace > 0.0 else 1.0)
    return np.asarray(np.linalg.inv(np.linalg.cholesky(covariance + np.diag(raised))))


def _spread(start: FloatArray) -> FloatArray:
    """Return a start normalised and with equal eigenvalues pulled apart a little."""
    apart = start * (1.0 + 1e-3 * np.arange(len(start), 0, -1))
    return np.asarray(apart / apart.sum())

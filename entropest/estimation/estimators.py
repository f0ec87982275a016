"""The named estimators: each is a function of a record that returns one number.

An estimator is any callable from DiagramCounts to float; see :class:`Estimator`. The ones here take the functional at
construction and return its value in the unit of that functional. Each says where it comes from, what it costs
and what it is meant for.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final, Protocol

import numpy as np

from entropest._types import FloatArray
from entropest.estimation.blocks import Blocks, as_blocks, with_zeros
from entropest.estimation.continuation import Continued, continued
from entropest.estimation.expansion import expand, require_smooth
from entropest.estimation.likelihood import MaximumLikelihood
from entropest.estimation.moment_fit import MomentFit
from entropest.estimation.posterior_estimators import AveragedPosterior, PosteriorMean, SplitPosterior
from entropest.functionals import Functional, VonNeumann
from entropest.records.counts import DiagramCounts
from entropest.shapes import down_probabilities

__all__ = ["ESTIMATORS", "Continuation", "Corrected", "Estimator", "Jackknife", "PlugIn"]


class Estimator(Protocol):
    """Any callable from a record to a number."""

    def __call__(self, counts: DiagramCounts) -> float:
        """Return the estimate."""
        ...


@dataclass(frozen=True, slots=True)
class PlugIn:
    """The functional of rows over copies; several blocks are added row by row first.

    Source: the empirical Young diagram of Keyl and Werner, Phys. Rev. A 64 (2001) 052311,
    doi:10.1103/PhysRevA.64.052311. Cost: one evaluation of the functional. Regime: blocks much larger than the
    squared dimension; the entropy is low by up to (d^2 - 1)/(2n) per block of n copies.

    Parameters
    ----------
    functional : Functional
        What is estimated.

    Examples
    --------
    >>> round(PlugIn()(DiagramCounts({"60+30+10": 1})), 6)
    0.897946
    """

    functional: Functional = VonNeumann()

    def __call__(self, counts: DiagramCounts) -> float:
        """Return the estimate."""
        return float(self.functional(plug_in_spectrum(self.functional, as_blocks(counts))))


@dataclass(frozen=True, slots=True)
class Corrected:
    """The plug-in estimate minus its first-order bias, evaluated at the plug-in spectrum.

    For the entropy of one block the bias is -(1/n) [(d - 1)/2 + sum_{i<j} p_j log(p_i/p_j)/(p_i - p_j)], every tie
    counting 1. Source: derived in docs/theory-estimation.md from the mean shift of the rows (Its, Tracy, Widom,
    arXiv:math/9909169, for the first row); it is the counterpart of Miller's correction (1955). Cost: about 2 d
    gradients of the functional. Regime: n times the smallest eigenvalue at least 3, separated
    eigenvalues; smooth functionals only.

    Parameters
    ----------
    functional : Functional
        What is estimated.

    Examples
    --------
    >>> round(Corrected()(DiagramCounts({"60+30+10": 1})), 6)
    0.923954
    """

    functional: Functional = VonNeumann()

    def __call__(self, counts: DiagramCounts) -> float:
        """Return the estimate."""
        require_smooth(self.functional)
        blocks = as_blocks(counts)
        spectrum = plug_in_spectrum(self.functional, blocks)
        bias = expand(self.functional, spectrum).bias(blocks.copies, blocks.blocks)
        return float(self.functional(spectrum)) - bias / self.functional.scale()


@dataclass(frozen=True, slots=True)
class Continuation:
    """Power sums continued to real order, averaged over blocks; at order 1 their slope is the entropy.

    One row more than was seen is counted, N = min(rows + 1, d), in the share of one block; the other shares
    count the rows seen in the record. Source: derived in docs/theory-estimation.md from Frobenius' formula for the
    character of one cycle. Cost: O(N^2) per distinct shape. Regime: single blocks from n of the order of d on, many
    blocks that are large; its bias is exponentially small in n times the smallest eigenvalue, ties included.

    Parameters
    ----------
    functional : Functional
        An entropy, power sum or varentropy of positive order up to 64.

    Examples
    --------
    >>> round(Continuation()(DiagramCounts({"60+30+10": 1}, dim=3)), 6)
    0.924219
    """

    functional: Functional = VonNeumann()

    def __call__(self, counts: DiagramCounts) -> float:
        """Return the estimate."""
        formula = continued(self.functional)
        return formula.value(continued_average(formula, as_blocks(counts))) / self.functional.scale()


@dataclass(frozen=True, slots=True)
class Jackknife:
    """The delete-one jackknife of the plug-in estimate: n F(rows/n) - (n - 1) times its mean with one copy less.

    The mean is over all n copies and all orders of the copies, exactly: dropping a copy of a block takes its shape to
    the shape without one box with the ratio of their numbers of standard tableaux, so nothing is resampled. Source:
    Quenouille, Biometrika 43 (1956) 353, doi:10.1093/biomet/43.3-4.353, applied to diagrams. Cost: O(d^2) per distinct
    shape and d evaluations of the functional. Regime: smooth functionals and n times the smallest eigenvalue at least
    3; it removes the bias of order 1/n but not the one of order n^(-3/2) at ties, and widens the spread a little.

    Parameters
    ----------
    functional : Functional
        What is estimated. A record of a single copy gives the plug-in value, and an infinite plug-in value stays.

    Examples
    --------
    >>> round(Jackknife()(DiagramCounts({"60+30+10": 1})), 6)
    0.923966
    """

    functional: Functional = VonNeumann()

    def __call__(self, counts: DiagramCounts) -> float:
        """Return the estimate."""
        blocks = as_blocks(counts)
        whole = float(self.functional(plug_in_spectrum(self.functional, blocks)))
        copies = blocks.copies
        if copies == 1 or math.isinf(whole):
            return whole
        weights = blocks.average(down_probabilities(blocks.shapes))
        kept = np.flatnonzero(weights > 0.0)
        fewer = blocks.counts @ blocks.shapes - np.eye(blocks.rows, dtype=np.int64)[kept]
        spectra = with_zeros(self.functional, fewer / (copies - 1.0))
        without = float(weights[kept] @ np.asarray(self.functional(spectra)) / weights[kept].sum())
        return copies * whole - (copies - 1.0) * without


def continued_average(formula: Continued, blocks: Blocks) -> FloatArray:
    """Return the averaged statistics of :class:`Continuation`, (c,)."""
    seen = blocks.average(blocks.statistics(formula, blocks.rows))
    if blocks.unseen_levels == 0:
        return seen
    share = blocks.sum_of_squared_weights(np.ones(len(blocks.counts)))
    further = blocks.average(blocks.statistics(formula, blocks.rows + 1))
    return np.asarray(seen + share * (further - seen))


def plug_in_spectrum(functional: Functional, blocks: Blocks) -> FloatArray:
    """Return the plug-in spectrum, with zeros added up to the length of the reference if there is one."""
    return with_zeros(functional, blocks.spectrum)


ESTIMATORS: Final[Mapping[str, Callable[[Functional], Estimator]]] = MappingProxyType(
    {
        "plug-in": PlugIn,
        "corrected": Corrected,
        "jackknife": Jackknife,
        "continuation": Continuation,
        "likelihood": MaximumLikelihood,
        "moment fit": MomentFit,
        "posterior mean": PosteriorMean,
        "averaged posterior": AveragedPosterior,
        "split posterior": SplitPosterior,
    }
)
"""Name of each method of :func:`entropest.estimation.estimate` -> maker of the estimator of a functional."""

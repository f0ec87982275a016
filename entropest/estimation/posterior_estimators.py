"""The named estimators of the entropy that rest on a posterior; see :mod:`entropest.estimation.estimators`."""

import math
from dataclasses import dataclass

import numpy as np

from entropest.errors import NotCoveredError
from entropest.estimation.blocks import Blocks, as_blocks
from entropest.estimation.continuation import continued
from entropest.estimation.expansion import expand, jackknife_variance
from entropest.estimation.posterior import block_entropies
from entropest.estimation.split_posterior import clip_to_bracket, components, levels_considered
from entropest.functionals import Functional, Renyi, Tsallis, VonNeumann
from entropest.records.counts import DiagramCounts

__all__ = ["AveragedPosterior", "PosteriorMean", "SplitPosterior"]


@dataclass(frozen=True, slots=True)
class PosteriorMean:
    """The posterior mean of the entropy for the Hilbert-Schmidt measure on all `dim` levels.

    Several blocks are averaged over their copies. Without `dim` the rows seen and two more stand for it; at most
    256 levels are counted. Source: the measure of Zyczkowski and Sommers, J. Phys. A 34 (2001) 7111,
    doi:10.1088/0305-4470/34/35/335; closed form derived in docs/theory-estimation.md. Cost: O(d^2) per distinct shape.
    Regime: states that are known to be like random ones; far too high for states of low rank.

    Parameters
    ----------
    functional : Functional
        The von Neumann entropy.

    Examples
    --------
    >>> round(PosteriorMean()(DiagramCounts({"60+30+10": 1}, dim=3)), 4)
    0.8777
    """

    functional: Functional = VonNeumann()

    def __post_init__(self) -> None:
        _require_entropy(self.functional)

    def __call__(self, counts: DiagramCounts) -> float:
        """Return the estimate."""
        blocks = as_blocks(counts)
        shapes = np.zeros((len(blocks.shapes), levels_considered(blocks.rows, blocks.dim)), dtype=np.int64)
        shapes[:, : blocks.rows] = blocks.shapes
        return float(blocks.average(block_entropies(shapes, np.zeros(1)))[0]) / self.functional.scale()


@dataclass(frozen=True, slots=True)
class AveragedPosterior:
    """The posterior mean of the entropy averaged over rank and concentration of the prior by exact evidence.

    It is :class:`SplitPosterior` without levels split off and without a bracket, with the same rule for levels and
    blocks. Source: that of :class:`PosteriorMean`. Cost: O(d^2 log d) per distinct shape. Regime: single blocks;
    spectra that are flat on their support or like random ones.

    Parameters
    ----------
    functional : Functional
        The von Neumann entropy.

    Examples
    --------
    >>> round(AveragedPosterior()(DiagramCounts({"60+30+10": 1}, dim=3)), 4)
    0.9183
    """

    functional: Functional = VonNeumann()

    def __post_init__(self) -> None:
        _require_entropy(self.functional)

    def __call__(self, counts: DiagramCounts) -> float:
        """Return the estimate."""
        blocks = as_blocks(counts)
        found = components(blocks.shapes, levels_considered(blocks.rows, blocks.dim), splits=0)
        return found.pooled_mean(blocks.counts, blocks.sizes) / self.functional.scale()


@dataclass(frozen=True, slots=True)
class SplitPosterior:
    """The average over posteriors with up to six single levels split off, clipped to the continuation bracket.

    The bracket runs between the continuation estimates that count the rows seen and all `dim` rows, widened by half a
    standard error. Several blocks multiply their evidence and average their entropies over copies. Without `dim` the
    rows seen and two more stand for it; at most 256 levels are considered. Source: derived in
    docs/theory-estimation.md. Cost: O(d^2 log d) per distinct shape, some milliseconds at d = 8. Regime: single
    blocks of any size; it is the automatic choice for the entropy.

    Parameters
    ----------
    functional : Functional
        The von Neumann entropy.

    Examples
    --------
    >>> round(SplitPosterior()(DiagramCounts({"60+30+10": 1}, dim=4)), 4)
    0.9248
    """

    functional: Functional = VonNeumann()

    def __post_init__(self) -> None:
        _require_entropy(self.functional)

    def __call__(self, counts: DiagramCounts) -> float:
        """Return the estimate."""
        blocks = as_blocks(counts)
        levels = levels_considered(blocks.rows, blocks.dim)
        mean = components(blocks.shapes, levels).pooled_mean(blocks.counts, blocks.sizes)
        formula = continued(VonNeumann())
        ends = [blocks.average(blocks.statistics(formula, rows))[0] for rows in (None, levels)]
        log_dim = math.inf if blocks.dim is None else math.log(blocks.dim)
        clipped = clip_to_bracket(np.array(mean), np.array(ends), np.array(_plug_in_error(blocks)), log_dim)
        return float(clipped) / self.functional.scale()


def _plug_in_error(blocks: Blocks) -> float:
    """Return the larger of the jackknife and the second-order standard deviation of the plug-in entropy."""
    expansion = expand(VonNeumann(), blocks.spectrum)
    n = blocks.copies
    second_order = expansion.first_order / n + blocks.blocks * expansion.second_order / (2.0 * n**2)
    jackknife = blocks.sum_of_squared_weights(jackknife_variance(VonNeumann(), blocks.shapes))
    return math.sqrt(max(jackknife, second_order))


def _require_entropy(functional: Functional) -> None:
    """Refuse everything but the von Neumann entropy."""
    of_order_one = isinstance(functional, Renyi | Tsallis) and functional.order == 1.0
    if not (isinstance(functional, VonNeumann) or of_order_one):
        raise NotCoveredError(f"the posterior means are for the von Neumann entropy, not the {functional.name}")

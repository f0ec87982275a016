"""Intervals for functionals from one or more large blocks."""

import math
from dataclasses import dataclass

import numpy as np

from entropest._types import FloatArray
from entropest.estimation.blocks import Blocks
from entropest.estimation.continuation import Continued, continued
from entropest.estimation.expansion import Expansion, expand, jackknife_variance
from entropest.estimation.identified import Range
from entropest.estimation.large_dimensions import upper_end_from_moments
from entropest.estimation.quantiles import UNSEEN_COPIES, copies_scale, inflated_quantile
from entropest.functionals import Functional, Varentropy, VonNeumann

__all__ = [
    "CALIBRATED_DIMENSION",
    "UNSEEN_COPIES_LARGE",
    "WIDEST_FULL_DIMENSION",
    "LargeBlockInterval",
    "continuation_interval",
    "tilted_changes",
]

WIDEST_FULL_DIMENSION = 256
_BLOCKS_FOR_SPREAD = 10
UNSEEN_COPIES_LARGE = 5.0
_STEP = 1e-6
CALIBRATED_DIMENSION = 16
_EXTRA_BELOW_ORDER_ONE = 1.1
_EXTRA_VARENTROPY = 1.2


@dataclass(frozen=True, slots=True, kw_only=True)
class LargeBlockInterval:
    """An interval with what it is made of, in nats.

    Attributes
    ----------
    interval : Range
        Not yet restricted to the possible range of the functional.
    standard_error : float
        Standard deviation of the estimate, from the largest of several estimates of it.
    bracket : Range
        Averaged continuation with the rows of each block and with all `dim` rows: mean values on either side of the
        truth. The upper end is infinite without `dim`.
    """

    interval: Range
    standard_error: float
    bracket: Range


def continuation_interval(
    functional: Functional, blocks: Blocks, estimate: float, *, confidence: float
) -> LargeBlockInterval:
    """Return the interval of a functional that power sums can be continued to.

    With F_r, F_1, F_d the averaged continuation with the rows of each block, one more, and d, and B the estimate::

        lower = min(F_r, B) - z s - kappa'
        upper = max(max(min(max(F_d, F_r), unseen_5(F_1)), B) + z s + kappa, unseen_3.7(F_r) if fewer than d rows)

    z is 2.2 + 5/n at 95% (see :func:`inflated_quantile`). unseen_e(F) is F after the weight e/n is moved to the
    d - rows unseen levels, where e is 5 or 3.7 at 95% and proportional to log(2/error) otherwise; the weight
    never passes the one that makes all levels equal. s^2 is the largest of the exact delete-one jackknife, the
    second-order variance at the plug-in spectrum (with the continued varentropy for the entropy), and from ten blocks
    on the spread between blocks. kappa = (1 + 2 z^2)/6 mu3/(V n) pays for skewness, V and mu3 being variance and
    third central moment of the gradient (kappa' for negative mu3; not used for the entropy).

    Above 16 dimensions fewer rows than d may hide many levels: the upper end of the entropy is then at least
    min(F_d + z s, the one of :func:`upper_end_from_moments`), and entropies of orders below 1 have no upper end
    while n < d^2.

    Parameters
    ----------
    functional : Functional
        An entropy of positive order or the varentropy, growing as levels are split.
    blocks : Blocks
        The large blocks.
    estimate : float
        The value B in nats.
    confidence : float
        Nominal coverage.

    References
    ----------
    Johnson, J. Am. Stat. Assoc. 73 (1978) 536 (skewness). The rest is described in docs/theory-estimation.md and was
    calibrated by simulation and exact enumeration at 95% for single diagrams of n >= 20.
    """
    formula = continued(functional)
    n = blocks.copies
    own = blocks.average(blocks.statistics(formula, None))
    further = blocks.statistics(formula, blocks.rows + (blocks.unseen_levels > 0))
    one_more = blocks.average(further)
    seen, full = formula.value(own), math.inf
    if blocks.dim is not None and blocks.dim <= WIDEST_FULL_DIMENSION:
        full = formula.value(blocks.average(blocks.statistics(formula, blocks.dim)))
    expansion = expand(functional, blocks.spectrum)
    first_order = expansion.first_order
    if isinstance(functional, VonNeumann) and n > 1:
        first_order = max(first_order, _continued_varentropy(blocks) * n / (n - 1))
    error = _standard_error(
        functional, blocks, first_order, expansion.second_order, _linear(formula, further, one_more)
    )
    z = inflated_quantile(confidence, n) * _extra_inflation(functional)
    skew = _skewness_shift(expansion, z, n)
    copies = copies_scale(confidence)
    top = _with_unseen(formula, one_more, blocks, UNSEEN_COPIES_LARGE * copies)
    tilt = Range(lower=0.0, upper=0.0)
    if isinstance(functional, Varentropy):
        tilt = tilted_changes(functional, blocks.spectrum, n, z)
    upper = max(min(max(full, seen), top), estimate) + max(z * error, tilt.upper) + max(skew, 0.0)
    if blocks.unseen_levels > 0:
        upper = max(upper, _with_unseen(formula, own, blocks, UNSEEN_COPIES * copies))
        if isinstance(functional, VonNeumann) and _may_hide_levels(blocks):
            upper = max(upper, min(max(full, seen) + z * error, upper_end_from_moments(blocks, z)))
        elif getattr(functional, "order", 1.0) < 1.0 and _may_hide_levels(blocks) and n < (blocks.dim or 0) ** 2:
            upper = math.inf
    lower = min(seen, estimate) + min(-z * error, tilt.lower)
    if not isinstance(functional, VonNeumann):
        lower += min(skew, 0.0)
    return LargeBlockInterval(
        interval=Range(lower=lower, upper=upper),
        standard_error=error,
        bracket=Range(lower=min(seen, full), upper=max(seen, full)),
    )


def _may_hide_levels(blocks: Blocks) -> bool:
    """Say whether the known dimension is so large that rows not seen may stand for many levels."""
    return blocks.dim is not None and blocks.dim > CALIBRATED_DIMENSION


def tilted_changes(functional: Functional, spectrum: FloatArray, copies: int, z: float) -> Range:
    """Return the least and largest change of the functional along p^t/sum p^t, z standard errors of S either way.

    This follows the functional where its slope changes or vanishes within the sampling error.
    """
    p = spectrum[spectrum > 0.0]
    varentropy = float(Varentropy()(p))
    if varentropy <= 0.0:
        return Range(lower=0.0, upper=0.0)
    reach = z / math.sqrt(varentropy * copies)
    powers = np.maximum(1.0 + reach * np.linspace(-1.0, 1.0, 17), 0.0)
    tilted = np.zeros((len(powers), len(spectrum)))
    tilted[:, : len(p)] = p ** powers[:, None]
    tilted /= tilted.sum(axis=1, keepdims=True)
    changes = np.asarray(functional(tilted) - functional(spectrum)) * functional.scale()
    return Range(lower=float(changes.min()), upper=float(changes.max()))


def _extra_inflation(functional: Functional) -> float:
    """Return the further factor on the quantile that exact enumeration at d = 2 showed to be needed."""
    if isinstance(functional, Varentropy):
        return _EXTRA_VARENTROPY
    return _EXTRA_BELOW_ORDER_ONE if getattr(functional, "order", 1.0) < 1.0 else 1.0


def _with_unseen(formula: Continued, statistics: FloatArray, blocks: Blocks, copies: float) -> float:
    """Return the value after the weight copies/n, at most the one that raises it most, went to unseen levels."""
    levels = blocks.unseen_levels
    if levels == 0:
        return formula.value(statistics)
    return formula.value_with_unseen(statistics, copies / blocks.copies, levels)


def _skewness_shift(expansion: Expansion, z: float, copies: int) -> float:
    """Return (1 + 2 z^2)/6 mu3/(V n), and 0 where there is no first-order variance."""
    if expansion.first_order <= 0.0:
        return 0.0
    return (1.0 + 2.0 * z**2) / 6.0 * expansion.third_moment / (expansion.first_order * copies)


def _continued_varentropy(blocks: Blocks) -> float:
    """Return the continued varentropy with one row more than seen, at least 0."""
    formula = continued(Varentropy())
    statistics = blocks.statistics(formula, blocks.rows + (blocks.unseen_levels > 0))
    return max(0.0, formula.value(blocks.average(statistics)))


def _linear(formula: Continued, statistics: FloatArray, average: FloatArray) -> FloatArray:
    """Return the first-order contribution of each shape to the value, (K,), by central differences."""
    steps = _STEP * np.maximum(1.0, np.abs(average)) * np.eye(len(average))
    slopes = np.array(
        [(formula.value(average + step) - formula.value(average - step)) / (2.0 * step.sum()) for step in steps]
    )
    with np.errstate(invalid="ignore"):
        return np.asarray((statistics - average) @ slopes)


def _standard_error(
    functional: Functional, blocks: Blocks, first_order: float, second_order: float, linear: FloatArray
) -> float:
    """Return the largest of the jackknife, the second-order and, from ten blocks on, the between-block error."""
    n, m = blocks.copies, blocks.blocks
    jackknife = blocks.sum_of_squared_weights(jackknife_variance(functional, blocks.shapes))
    variance = max(jackknife, first_order / n + m * second_order / (2.0 * n**2))
    if m >= _BLOCKS_FOR_SPREAD and np.isfinite(linear).all():
        variance = max(variance, blocks.sum_of_squared_weights(linear**2) * m / (m - 1))
    return math.sqrt(variance)

"""Answers from large blocks, used one diagram at a time."""

import math
from dataclasses import replace

from entropest.errors import ArgumentValueError
from entropest.estimation.answer import Answer, capped, inside
from entropest.estimation.blocks import Blocks, as_blocks
from entropest.estimation.continuation import has_continuation
from entropest.estimation.estimators import ESTIMATORS
from entropest.estimation.identified import Range
from entropest.estimation.intervals import CALIBRATED_DIMENSION, LargeBlockInterval, continuation_interval
from entropest.estimation.moment_range import entropy_range_from_moments
from entropest.estimation.order_values import (
    OfOneOrder,
    from_tsallis,
    possible_range,
    slope_from_tsallis,
    to_tsallis,
)
from entropest.estimation.plug_in_intervals import plug_in_interval
from entropest.estimation.split_posterior import LARGEST_DIMENSION
from entropest.functionals import Functional, PowerSum, Renyi, Tsallis, VonNeumann
from entropest.records.counts import DiagramCounts

__all__ = ["from_large_blocks"]

_STUDIED_FROM = 20
_BLOCKS_FOR_MOMENTS = 30
_SKEW_ORDER = 3.0


def from_large_blocks(functional: Functional, record: DiagramCounts, *, method: str, confidence: float) -> Answer:
    """Estimate from blocks that are used one diagram at a time.

    Parameters
    ----------
    functional : Functional
        What is estimated.
    record : DiagramCounts
        The large blocks.
    method : str
        "auto" or a name in ESTIMATORS.
    confidence : float
        Nominal coverage.
    """
    blocks = as_blocks(record)
    _check_reference(functional, record.dim, blocks.rows)
    core = VonNeumann() if isinstance(functional, Renyi | Tsallis) and functional.order == 1.0 else functional
    by_power_sums = has_continuation(core) and getattr(core, "order", 1.0) <= int(blocks.sizes.min())
    notes = []
    automatic = method == "auto"
    reason = ""
    if automatic:
        method, reason = _choice(core, record.dim, by_power_sums)
        if not by_power_sums:
            notes.append(f"no correction of the {functional.name} is offered: the value is rows over copies")
    raw = ESTIMATORS[method](core)(record) * core.scale()
    possible = possible_range(core, record.dim)
    value = capped(raw, possible, notes)
    if math.isinf(value) and not by_power_sums:
        return _infinite(functional, method, notes)
    if by_power_sums:
        found, refined = _interval_by_power_sums(core, blocks, value, confidence)
        notes += refined + _power_sum_notes(functional, core, blocks, found, confidence)
    else:
        found = plug_in_interval(core, blocks, confidence=confidence)
        notes.append("interval: made wide by trial in some cells (equal, geometric, pure, spiked spectra; d to 8)")
    interval = inside(found.interval, possible)
    if method == "continuation":
        value = capped(value, interval, notes)
    identified = _identified(core, blocks)
    if math.isinf(value):
        notes.append("the estimate of the power sum is not positive: no value")
    if not identified:
        notes.append(f"blocks of fewer copies than dimensions do not fix the {functional.name}, however many they are")
    has_value = math.isfinite(value) and (identified or not automatic)
    return Answer(
        value=value if has_value else None,
        interval=interval,
        standard_error=found.standard_error if has_value else None,
        method=method,
        identified=identified,
        notes=tuple(notes),
        reason=reason,
    )


def _choice(functional: Functional, dim: int | None, by_power_sums: bool) -> tuple[str, str]:
    """Return the automatic method for large blocks, and why it is chosen."""
    if isinstance(functional, VonNeumann) and (dim is None or dim <= LARGEST_DIMENSION):
        return "split posterior", "the least error in trials over spectra, dimensions and sizes of large blocks"
    if isinstance(functional, VonNeumann):
        return "continuation", f"more than {LARGEST_DIMENSION} dimensions are too many for posteriors"
    if by_power_sums:
        return "continuation", "nearly free of bias, and made for functionals of power sums"
    return "plug-in", "no correction is offered"


def _identified(functional: Functional, blocks: Blocks) -> bool:
    """Say whether the law of one block fixes the functional: all of it, or its power sum of integer order."""
    largest = int(blocks.sizes.max())
    if blocks.dim is None or largest >= blocks.dim:
        return True
    order = getattr(functional, "order", 0.5)
    return float(order).is_integer() and order <= largest


def _interval_by_power_sums(
    functional: Functional, blocks: Blocks, value: float, confidence: float
) -> tuple[LargeBlockInterval, list[str]]:
    """Return the interval of a functional that power sums can be continued to, and what was added to its rule."""
    if isinstance(functional, Renyi | Tsallis | PowerSum):
        return _interval_of_order(functional, blocks, value, confidence), []
    if not (isinstance(functional, VonNeumann) and _moments_help(blocks)):
        return continuation_interval(functional, blocks, value, confidence=confidence), []
    half = 0.5 * (1.0 + confidence)
    found = continuation_interval(functional, blocks, value, confidence=half)
    record = DiagramCounts.from_checked(blocks.shapes, blocks.counts, blocks.dim)
    moments = entropy_range_from_moments(record, confidence=half).interval
    lower, upper = max(found.interval.lower, moments.lower), min(found.interval.upper, moments.upper)
    if lower > upper:
        return found, []
    note = "interval: met with the range that the power sums up to order 6 allow, half of the error for each"
    return replace(found, interval=Range(lower=lower, upper=upper)), [note]


def _interval_of_order(functional: OfOneOrder, blocks: Blocks, value: float, confidence: float) -> LargeBlockInterval:
    """Return the interval of a function of P = Tr rho^s, s != 1, from the one of (1 - P)/(s - 1).

    Above order 3 the one of log P/(1 - s) is added, where it exists: P is then too skew for one scale.
    """
    tsallis = to_tsallis(functional, value)
    found = continuation_interval(Tsallis(functional.order), blocks, tsallis, confidence=confidence)
    interval = _mapped(functional, Tsallis(functional.order), found.interval)
    renyi = Renyi(functional.order)
    if functional.order > _SKEW_ORDER and math.isfinite(from_tsallis(renyi, tsallis)):
        skew = continuation_interval(renyi, blocks, from_tsallis(renyi, tsallis), confidence=confidence)
        if math.isfinite(skew.bracket.lower):
            other = _mapped(functional, renyi, skew.interval)
            interval = Range(lower=min(interval.lower, other.lower), upper=max(interval.upper, other.upper))
    return LargeBlockInterval(
        interval=interval,
        standard_error=found.standard_error * slope_from_tsallis(functional, tsallis),
        bracket=_mapped(functional, Tsallis(functional.order), found.bracket),
    )


def _mapped(functional: OfOneOrder, source: OfOneOrder, found: Range) -> Range:
    """Return the range of one functional over the range of another one of the same power sum."""
    ends = [from_tsallis(functional, to_tsallis(source, end)) for end in (found.lower, found.upper)]
    return Range(lower=min(ends), upper=max(ends))


def _moments_help(blocks: Blocks) -> bool:
    """Say whether the blocks are so many and so small that their power sums bound the entropy well."""
    levels = blocks.rows if blocks.dim is None else blocks.dim
    return blocks.blocks >= _BLOCKS_FOR_MOMENTS and int(blocks.sizes.max()) < 4 * levels**2


def _power_sum_notes(
    functional: Functional, core: Functional, blocks: Blocks, found: LargeBlockInterval, confidence: float
) -> list[str]:
    """Return what the value and the interval rest on."""
    notes = []
    if blocks.dim is None:
        by_posteriors = ", two more by posteriors" if isinstance(core, VonNeumann) else ""
        notes.append(f"the dimension is not given: one row more than the {blocks.rows} seen is counted{by_posteriors}")
        if math.isinf(found.interval.upper):
            closed = replace(blocks, dim=blocks.rows)
            upper = _interval_by_power_sums(core, closed, found.bracket.lower, confidence)[0].interval.upper
            notes.append(
                "without the dimension nothing bounds it from above; if there is no level beyond those seen, the upper "
                f"end is {upper / core.scale():.4g} {core.unit()}"
            )
    if blocks.blocks > 1:
        low, high = found.bracket.lower / core.scale(), found.bracket.upper / core.scale()
        notes.append(
            "averaging blocks leaves a constant bias: the averages that count the rows of each block and all rows, "
            f"{low:.4g} and {high:.4g} {core.unit()}, lie on either side"
        )
    if blocks.copies < _STUDIED_FROM:
        notes.append(f"the interval was not studied for fewer than {_STUDIED_FROM} copies")
    if not isinstance(core, VonNeumann):
        notes.append(f"for the {functional.name} the interval was checked in some cells only (d to 8, order to 5)")
    elif blocks.dim is not None and blocks.dim > blocks.rows and blocks.dim > CALIBRATED_DIMENSION:
        notes.append(
            f"more than {CALIBRATED_DIMENSION} dimensions: rows not seen may hide many levels, so the upper end "
            "rests on the power sums of the diagrams as well"
        )
    if confidence != 0.95:
        notes.append("the interval was calibrated at 95%; at this confidence it was checked in two dimensions only")
    return notes


def _check_reference(functional: Functional, dim: int | None, rows: int) -> None:
    """Refuse a reference spectrum whose length is not the dimension of the record."""
    length = len(getattr(functional, "reference", ()))
    needed = rows if dim is None else dim
    if length and (length < needed or (dim is not None and length != dim)):
        raise ArgumentValueError(
            f"the reference must have as many eigenvalues as the record has dimensions, {needed}, got {length}"
        )


def _infinite(functional: Functional, method: str, notes: list[str]) -> Answer:
    """Return the answer where rows were seen that the reference does not support."""
    notes.append(f"rows were seen beyond the support of the reference: the {functional.name} is infinite")
    return Answer(
        value=math.inf,
        interval=Range(lower=math.inf, upper=math.inf),
        standard_error=None,
        method=method,
        identified=True,
        notes=tuple(notes),
    )

"""Answers from tallies of cyclic-shift tests, alone or together with diagrams of the same state."""

import math
from collections.abc import Mapping

import numpy as np

from entropest._checks import as_confidence
from entropest._types import FloatArray
from entropest.binomial import clopper_pearson_lower, clopper_pearson_upper
from entropest.errors import ArgumentTypeError, ArgumentValueError, NotCoveredError
from entropest.estimation.answer import Answer, capped, inside
from entropest.estimation.identified import (
    Range,
    Side,
    harremoes_topsoe_lower,
    harremoes_topsoe_upper,
    polynomial_bound,
    polynomial_table,
    value_at_one,
)
from entropest.estimation.moments import LARGEST_MOMENT, pooled_moments, power_sum_limits
from entropest.estimation.order_values import (
    OfOneOrder,
    from_tsallis,
    possible_range,
    slope_from_tsallis,
    to_tsallis,
)
from entropest.estimation.result import Estimate
from entropest.functionals import Functional, PowerSum, Renyi, Tsallis, VonNeumann
from entropest.records.counts import DiagramCounts
from entropest.records.moment_counts import MomentCounts

__all__ = ["entropy_range_in_box", "estimate_together", "filled_box", "from_tallies", "shift_limits"]

_ROUNDING = 1e-12
_REASON = "cyclic-shift tests fix power sums of whole orders only"


def shift_limits(record: MomentCounts, order: int, *, error: float) -> Range:
    """Return exact two-sided limits on Tr rho^order from the tests of that order, each side with half of the error.

    The outcomes + are binomial with probability (1 + Tr rho^order)/2 (Clopper and Pearson); limits below the
    smallest possible power sum, d^(1 - order) or 0, are moved there.

    Examples
    --------
    >>> found = shift_limits(MomentCounts({3: (600, 400)}), 3, error=0.05)
    >>> round(found.lower, 4), round(found.upper, 4)
    (0.1378, 0.2611)
    """
    plus, minus = record.tallies[order]
    trials = plus + minus
    least = 0.0 if record.dim is None else float(record.dim) ** (1 - order)
    lower = 2.0 * clopper_pearson_lower(plus, trials, error=error / 2.0) - 1.0
    upper = 2.0 * clopper_pearson_upper(plus, trials, error=error / 2.0) - 1.0
    return Range(lower=max(least, lower), upper=max(least, upper))


def filled_box(limits: Mapping[int, Range], dim: int | None) -> dict[int, Range]:
    """Return limits on Tr rho^j for j = 2 .. 6 (up to the highest order given) and all given orders.

    With P_j = Tr rho^j: log P_j is convex in j and P_1 = 1, so P_j^(1/(j-1)) does not decrease with j; and P_j^(1/j)
    does not increase. Every given order bounds all others by both; d^(1 - j) <= P_j <= 1.

    Raises
    ------
    NotCoveredError
        If the limits contradict each other: no state has such power sums.

    References
    ----------
    Hardy, Littlewood, Polya, Inequalities (1934), theorems 16 and 19.

    Examples
    --------
    >>> filled_box({2: Range(lower=0.25, upper=0.25), 4: Range(lower=0.02, upper=0.02)}, None)[3].lower
    0.0625
    """
    orders = sorted({*limits, *range(2, min(LARGEST_MOMENT, max(limits)) + 1)})
    box = {}
    for j in orders:
        lower = 0.0 if dim is None else float(dim) ** (1 - j)
        upper = 1.0
        for a, given in limits.items():
            rising, falling = (j - 1.0) / (a - 1.0), j / a
            low, high = max(given.lower, 0.0), min(max(given.upper, 0.0), 1.0)
            lower = max(lower, low ** (rising if j >= a else falling))
            upper = min(upper, high ** (falling if j >= a else rising))
        if lower > upper * (1.0 + 1e-12):
            raise NotCoveredError(
                f"the limits on the power sums contradict each other at order {j}: one state has none"
            )
        box[j] = Range(lower=min(lower, upper), upper=upper)
    return box


def entropy_range_in_box(box: Mapping[int, Range], dim: int | None) -> Range:
    """Return bounds on the von Neumann entropy of every state whose power sums lie in a box, in nats.

    The purity gives the range of Harremoes and Topsoe; every order from 3 to 6 with all lower ones in the box
    gives the polynomial bounds at all nodes of a grid, each at the worst corner of the box. All hold at once, so
    the best may be chosen after seeing the box.

    Examples
    --------
    >>> box = {2: Range(lower=0.4, upper=0.4), 3: Range(lower=0.2, upper=0.2)}
    >>> found = entropy_range_in_box(box, 4)
    >>> round(found.lower, 4), round(found.upper, 4)
    (0.9879, 1.1194)
    """
    least = 0.0 if dim is None else 1.0 / dim
    lower = harremoes_topsoe_lower(max(box[2].upper, least))
    upper = harremoes_topsoe_upper(max(box[2].lower, least), dim)
    order = 3
    while order in box and order <= LARGEST_MOMENT:
        lower = max(lower, _polynomial_limit("lower", box, order, None))
        if dim is not None:
            upper = min(upper, _polynomial_limit("upper", box, order, dim))
        order += 1
    most = math.inf if dim is None else math.log(dim)
    return Range(lower=min(max(lower, 0.0), most), upper=min(max(upper, 0.0), most))


def _polynomial_limit(side: Side, box: Mapping[int, Range], order: int, dim: int | None) -> float:
    """Return the best bound of one order at its worst corner, rounded outwards."""
    fixed = [0.0 if dim is None else float(dim), 1.0]
    low = np.array(fixed + [box[j].lower for j in range(2, order + 1)])
    high = np.array(fixed + [box[j].upper for j in range(2, order + 1)])
    nodes, table = polynomial_table(side, order)
    sign = 1.0 if side == "lower" else -1.0
    best = int(np.argmax(_at_worst(sign * table, low, high)))
    bound = polynomial_bound(side, tuple(nodes[best].tolist()), at_one=value_at_one(side, order))
    coefficients = sign * np.array(bound.coefficients)[None]
    return float(sign * _at_worst(coefficients, low, high)[0])


def _at_worst(coefficients: FloatArray, low: FloatArray, high: FloatArray) -> FloatArray:
    """Return the least value of linear forms (M, k) over a box, less a bound on rounding."""
    values = np.where(coefficients > 0.0, coefficients * low, coefficients * high)
    return np.asarray(values.sum(axis=1) - _ROUNDING * np.abs(coefficients) @ np.maximum(high, low))


def from_tallies(functional: Functional, record: MomentCounts, *, confidence: float) -> Answer:
    """Answer from cyclic-shift tests alone: see :func:`estimate_together`."""
    return _answer(functional, record, None, confidence)


def estimate_together(
    moments: MomentCounts,
    diagrams: DiagramCounts,
    functional: Functional = VonNeumann(),
    *,
    confidence: float = 0.95,
    base: float | None = None,
) -> Estimate:
    """Estimate from cyclic-shift tests and diagrams of the same state together, with an interval.

    A Renyi or Tsallis entropy or power sum of integer order k is formed from the average of the two unbiased estimates
    of Tr rho^k, weighted by tests of order k and blocks of k copies or more. Half of the error goes to each
    record, and their limits are intersected. For the von Neumann entropy the limits of all orders up to 6 from both
    records hold at once (error divided equally), and the range of the entropy in that box is returned.

    Parameters
    ----------
    moments : MomentCounts
        Cyclic-shift tests.
    diagrams : DiagramCounts
        Diagrams of the same state, in blocks of two copies or more; many small blocks suit this best.
    functional, confidence, base
        As for :func:`entropest.estimate`.

    Raises
    ------
    NotCoveredError
        If the functional is no function of a measured power sum, or the records contradict each other.
    ArgumentValueError, ArgumentTypeError
        For records of different dimensions, or a wrong argument.

    Examples
    --------
    >>> tests = MomentCounts({3: (600, 400)}, dim=4)
    >>> pairs = DiagramCounts.from_swap(symmetric=2100, antisymmetric=900, dim=4)
    >>> found = estimate_together(tests, pairs)
    >>> round(found.interval[0], 2), round(found.interval[1], 2)
    (0.9, 1.2)
    """
    if not isinstance(moments, MomentCounts) or not isinstance(diagrams, DiagramCounts):
        got = f"{type(moments).__name__} and {type(diagrams).__name__}"
        raise ArgumentTypeError(f"moments and diagrams must be MomentCounts and DiagramCounts, got {got}")
    if not isinstance(functional, Functional):
        raise ArgumentTypeError(
            f"functional must be a functional such as VonNeumann(), got {type(functional).__name__}"
        )
    if moments.dim is not None and diagrams.dim is not None and moments.dim != diagrams.dim:
        raise ArgumentValueError(f"records must have the same dim, got {moments.dim} and {diagrams.dim}")
    confidence = as_confidence(confidence)
    unit, scale = functional.unit(base), functional.scale(base)
    answer = _answer(functional, moments, diagrams, confidence)
    ends = sorted((answer.interval.lower / scale, answer.interval.upper / scale))
    return Estimate(
        value=None if answer.value is None else answer.value / scale,
        interval=(ends[0], ends[1]),
        standard_error=None if answer.standard_error is None else answer.standard_error / abs(scale),
        method=answer.method,
        functional=functional,
        unit=unit,
        confidence=confidence,
        copies=moments.copies + diagrams.copies,
        blocks=moments.tests + diagrams.blocks,
        identified=answer.identified,
        notes=answer.notes,
    )


def _answer(functional: Functional, record: MomentCounts, diagrams: DiagramCounts | None, confidence: float) -> Answer:
    """Choose by the functional."""
    order = getattr(functional, "order", None)
    if isinstance(functional, VonNeumann) or (isinstance(functional, Renyi | Tsallis) and order == 1.0):
        return _entropy_range(record, diagrams, confidence)
    known = set(record.orders)
    if diagrams is not None:
        known |= set(range(2, min(LARGEST_MOMENT, max(diagrams.block_sizes)) + 1))
    if isinstance(functional, Renyi | Tsallis | PowerSum) and functional.order in known:
        return _of_order(functional, record, diagrams, confidence)
    raise NotCoveredError(
        f"tests of orders {', '.join(map(str, sorted(known)))} do not give the {functional.name}: they give the range "
        "of the von Neumann entropy, and Renyi and Tsallis entropies and power sums of these orders"
    )


def _of_order(
    functional: OfOneOrder, record: MomentCounts, diagrams: DiagramCounts | None, confidence: float
) -> Answer:
    """Answer for a functional of one measured power sum."""
    order = int(functional.order)
    dim = _dimension(record, diagrams)
    found: list[tuple[float, float, int]] = []
    sources = [part for part in (record if order in record.orders else None, diagrams) if part is not None]
    if diagrams is not None and max(diagrams.block_sizes) < order:
        sources.remove(diagrams)
    limits, notes = Range(lower=0.0, upper=1.0), []
    for source in sources:
        error = (1.0 - confidence) / len(sources)
        if isinstance(source, MomentCounts):
            mean, tests = source.means[order], sum(source.tallies[order])
            found.append((mean, (1.0 - mean**2) / tests, tests))
            own = shift_limits(source, order, error=error)
            notes.append(f"{tests} tests of order {order}: exact binomial limits (Clopper and Pearson)")
        else:
            pooled = pooled_moments(source, largest=order)
            blocks = sum(count for size, count in source.block_sizes.items() if size >= order)
            found.append((float(pooled.values[order]), float(pooled.covariance[order, order]), blocks))
            own = power_sum_limits(source, order, error=error)
            notes.append(f"{blocks} blocks of diagrams of {order} copies or more: limits that hold for every number")
        if own.lower > limits.upper or own.upper < limits.lower:
            raise NotCoveredError(f"tests and diagrams contradict each other at order {order}: not of one state?")
        limits = Range(lower=max(limits.lower, own.lower), upper=min(limits.upper, own.upper))
    total = sum(weight for _, _, weight in found)
    mean = sum(weight * value for value, _, weight in found) / total
    deviation = math.sqrt(sum((weight / total) ** 2 * variance for _, variance, weight in found))
    power = PowerSum(order)
    power_sum = capped(mean, possible_range(power, dim), notes, f"estimate of Tr rho^{order}")
    tsallis = to_tsallis(power, power_sum)
    value = from_tsallis(functional, tsallis)
    ends = [from_tsallis(functional, to_tsallis(power, end)) for end in (limits.lower, limits.upper)]
    finite = math.isfinite(value)
    if not finite:
        notes.append(f"the estimate of Tr rho^{order} is not positive: no value")
    return Answer(
        value=value if finite else None,
        interval=inside(Range(lower=min(ends), upper=max(ends)), possible_range(functional, dim)),
        standard_error=deviation / (order - 1.0) * slope_from_tsallis(functional, tsallis) if finite else None,
        method="power sum",
        identified=True,
        reason=_REASON,
        notes=tuple(notes),
    )


def _entropy_range(record: MomentCounts, diagrams: DiagramCounts | None, confidence: float) -> Answer:
    """Return the range of the entropy over the box of all power sums."""
    dim = _dimension(record, diagrams)
    orders = list(record.orders)
    by_diagrams = []
    if diagrams is not None:
        by_diagrams = list(range(2, min(LARGEST_MOMENT, max(diagrams.block_sizes)) + 1))
        pooled_moments(diagrams)
    error = (1.0 - confidence) / (len(orders) + len(by_diagrams))
    limits = {order: shift_limits(record, order, error=error) for order in orders}
    for order in by_diagrams:
        assert diagrams is not None
        own = power_sum_limits(diagrams, order, error=error)
        other = limits.get(order, Range(lower=0.0, upper=1.0))
        limits[order] = Range(lower=max(own.lower, other.lower), upper=min(own.upper, other.upper))
    interval = entropy_range_in_box(filled_box(limits, dim), dim)
    measured = sorted(limits)
    notes = [
        f"power sums of orders {', '.join(map(str, measured))} give a range of the entropy, not its value",
        f"interval: that range over simultaneous limits on {len(orders) + len(by_diagrams)} power sums (the error is "
        "divided equally); exact for identical tests, however few",
    ]
    if dim is None:
        notes.append("without the dimension nothing bounds the entropy from above")
    return Answer(
        value=None,
        interval=interval,
        standard_error=None,
        method="moment range",
        reason=_REASON,
        identified=dim is not None and measured[: dim - 1] == list(range(2, dim + 1)),
        notes=tuple(notes),
    )


def _dimension(record: MomentCounts, diagrams: DiagramCounts | None) -> int | None:
    return diagrams.dim if record.dim is None and diagrams is not None else record.dim

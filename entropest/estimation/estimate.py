"""estimate: a record in, a value with an interval out, by the method that suits the record."""

from dataclasses import replace

from entropest._checks import as_confidence
from entropest.errors import ArgumentTypeError, ArgumentValueError, NotCoveredError
from entropest.estimation.answer import Answer
from entropest.estimation.continuation import has_continuation
from entropest.estimation.estimators import ESTIMATORS
from entropest.estimation.identified import Range
from entropest.estimation.large_blocks import from_large_blocks
from entropest.estimation.moment_tallies import from_tallies
from entropest.estimation.power_sums import LARGEST_ORDER
from entropest.estimation.result import Estimate
from entropest.estimation.routing import Route, route
from entropest.estimation.small_blocks import from_moments, from_power_sums
from entropest.functionals import Functional, PowerSum, Renyi, Tsallis, VonNeumann
from entropest.records.counts import DiagramCounts
from entropest.records.moment_counts import MomentCounts

__all__ = ["estimate"]


def estimate(
    counts: DiagramCounts | MomentCounts,
    functional: Functional = VonNeumann(),
    *,
    method: str = "auto",
    confidence: float = 0.95,
    base: float | None = None,
) -> Estimate:
    """Estimate a functional of the spectrum from a record, with an interval.

    Parameters
    ----------
    counts : DiagramCounts or MomentCounts
        The record. Cyclic-shift tests (MomentCounts) give the Renyi and Tsallis entropies and power sums of the orders
        tested, and the range of the von Neumann entropy that these allow; only with method="auto".
    functional : Functional
        What is estimated.
    method : str
        "auto", or a name in ``ESTIMATORS`` such as "plug-in" or "continuation". With "auto":

        - large blocks (see :func:`entropest.estimation.routing.route`), if they hold at least half of the copies,
          are used one diagram at a time: by the split posterior for the von Neumann entropy (by continuation above
          256 dimensions), by continuation for other functionals made of power sums, by plug-in for the rest;
        - otherwise a Renyi or Tsallis entropy or power sum of integer order k comes from the unbiased Tr rho^k of
          all blocks of k copies or more;
        - otherwise the von Neumann entropy gets the range that the measured power sums allow. If the blocks are
          smaller than the dimension, or it is unknown, the entropy is not identified and there is no value.
    confidence : float
        Nominal coverage of the interval.
    base : float, optional
        Base of the logarithm; overrides the base of the functional. Default: nats.

    Returns
    -------
    Estimate

    Raises
    ------
    NotCoveredError
        If the record is too small for the functional.
    ArgumentValueError, ArgumentTypeError
        For a wrong argument.

    Examples
    --------
    >>> found = estimate(DiagramCounts({"571+286+143": 1}, dim=3))
    >>> round(found.value, 3), round(found.interval[0], 2), round(found.interval[1], 2), found.method
    (0.958, 0.92, 1.0, 'split posterior')
    >>> pairs = DiagramCounts.from_swap(symmetric=2100, antisymmetric=900, dim=4)
    >>> estimate(pairs).identified, round(estimate(pairs, Renyi(2), base=2).value, 2)
    (False, 1.32)
    """
    if not isinstance(counts, DiagramCounts | MomentCounts):
        raise ArgumentTypeError(f"counts must be a DiagramCounts or MomentCounts, got {type(counts).__name__}")
    if not isinstance(functional, Functional):
        raise ArgumentTypeError(
            f"functional must be a functional such as VonNeumann(), got {type(functional).__name__}"
        )
    if method != "auto" and method not in ESTIMATORS:
        raise ArgumentValueError(f'method must be "auto" or one of {", ".join(ESTIMATORS)}, got {method!r}')
    confidence = as_confidence(confidence)
    unit, scale = functional.unit(base), functional.scale(base)
    answer = _answer(functional, counts, method, confidence)
    return Estimate(
        value=None if answer.value is None else answer.value / scale,
        interval=_in_unit(answer, scale),
        standard_error=None if answer.standard_error is None else answer.standard_error / abs(scale),
        method=answer.method,
        functional=functional,
        unit=unit,
        confidence=confidence,
        copies=counts.copies,
        blocks=counts.blocks,
        identified=answer.identified,
        reason=answer.reason,
        notes=answer.notes,
    )


def _answer(functional: Functional, counts: DiagramCounts | MomentCounts, method: str, confidence: float) -> Answer:
    """Choose the way and go it."""
    order = getattr(functional, "order", None)
    if order == 0.0:
        raise NotCoveredError(f"no record fixes the rank of a state, so there is no estimate of the {functional.name}")
    if isinstance(functional, PowerSum) and order == 1.0:
        return _sum_of_eigenvalues()
    if isinstance(counts, MomentCounts):
        if method != "auto":
            raise NotCoveredError(f'method must be "auto" for cyclic-shift tests, got {method!r}')
        return from_tallies(functional, counts, confidence=confidence)
    found = route(counts)
    if found.large is not None:
        answer = from_large_blocks(functional, found.large, method=method, confidence=confidence)
        if found.left_out:
            note = f"{found.left_out} small blocks were left out"
            answer = replace(answer, notes=(note, *answer.notes))
        return answer
    answer = _from_small_blocks(functional, counts, found, confidence)
    if method == "auto":
        return replace(answer, reason="the blocks are small and fix power sums of whole orders only")
    value = ESTIMATORS[method](functional)(counts) * functional.scale()
    note = f"the blocks are too small for the {method} value that was asked for; the interval does not rest on it"
    return replace(answer, value=value, standard_error=None, method=method, notes=(note, *answer.notes))


def _sum_of_eigenvalues() -> Answer:
    """Return the answer for Tr rho, which needs no data."""
    return Answer(
        value=1.0,
        interval=Range(lower=1.0, upper=1.0),
        standard_error=0.0,
        method="exact",
        identified=True,
        notes=("the eigenvalues of a state sum to 1",),
    )


def _from_small_blocks(functional: Functional, counts: DiagramCounts, found: Route, confidence: float) -> Answer:
    """Answer by power sums of integer order."""
    if isinstance(functional, VonNeumann) or (isinstance(functional, Renyi | Tsallis) and functional.order == 1.0):
        return from_moments(counts, confidence=confidence, smallest_needed=found.smallest_needed)
    if isinstance(functional, Renyi | Tsallis | PowerSum):
        order = functional.order
        if order.is_integer() and 2 <= order <= min(max(counts.block_sizes), LARGEST_ORDER):
            return from_power_sums(functional, counts, confidence=confidence)
    raise NotCoveredError(
        f"blocks of {_sizes(counts)} copies do not give the {functional.name}: it needs blocks of at least "
        f"{found.smallest_needed} copies"
        + ("" if not has_continuation(functional) else ", or an integer order from 2 up to the largest block")
    )


def _sizes(counts: DiagramCounts) -> str:
    sizes = list(counts.block_sizes)
    return str(sizes[0]) if len(sizes) == 1 else f"{sizes[0]} to {sizes[-1]}"


def _in_unit(answer: Answer, scale: float) -> tuple[float, float]:
    """Return the interval in the unit asked for; a base below 1 turns it round."""
    ends = sorted((answer.interval.lower / scale, answer.interval.upper / scale))
    return ends[0], ends[1]

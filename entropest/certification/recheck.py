"""The referee's second implementation, which says whether a certificate follows from a record.

Every test is repeated with exact fractions and 50-digit arithmetic from :mod:`entropest.certification.plain`; the
choices that had to be fixed before the data (division of the error, grid of witnesses) are derived again here.
"""

import math
from collections.abc import Callable
from typing import Any

from entropest._checks import unit_of
from entropest.certification.certificate import Certificate, Test, WitnessSet
from entropest.certification.plain import (
    binomial_sum_tail,
    cycle_values,
    exact_chord,
    exact_interpolant,
    fresh_context,
    partitions,
    step_level,
    symmetric_probability,
)
from entropest.certification.wording import assumptions, describe_method
from entropest.errors import RecheckError
from entropest.records.counts import DiagramCounts

__all__ = ["recheck"]

Outcomes = dict[tuple[int, ...], int]

_CAP = 20.0 * math.log(2.0)
_TIGHTNESS = 1e-6
_ENTROPIES = (0.1, 0.25, 0.5, 0.8, 1.15, 1.6, 2.1, 2.8, 3.6, 4.6)
_POWERS = {
    3: ((1.0,), (2.0,)),
    4: ((1.0, 0.0), (2.3, 0.3)),
    5: ((1.0, 0.0), (2.3, 0.3)),
    6: ((0.93, 0.0, 0.0), (2.0, 0.3, 0.0)),
}
_FRACTIONS = (0.003, 0.01, 0.025, 0.06, 0.15, 0.35, 0.65, 0.95)


def recheck(certificate: Certificate, counts: DiagramCounts) -> bool:
    """Recompute a certificate from the record with an independent plain implementation.

    Each test must reject at the bound it states and must not reject 10^-6 above it; the bounds, the claim, the division
    of the error, the grid of witnesses and the assumptions must be those that the record's block sizes give.

    Parameters
    ----------
    certificate : Certificate
    counts : DiagramCounts
        The record it was computed from.

    Returns
    -------
    bool
        True; everything else raises.

    Raises
    ------
    RecheckError
        If the record is another one, or any part of the certificate does not follow from it.

    Examples
    --------
    >>> from entropest import DiagramCounts, certify
    >>> pairs = DiagramCounts.from_swap(symmetric=68, antisymmetric=32)
    >>> recheck(certify(pairs, at_least=0.5), pairs)
    True
    """
    _must(certificate.record_digest == counts.digest, "record_digest", counts.digest, certificate.record_digest)
    _must(certificate.blocks == counts.blocks, "blocks", counts.blocks, certificate.blocks)
    _must(certificate.copies == counts.copies, "copies", counts.copies, certificate.copies)
    if certificate.anytime and certificate.drifting:
        raise RecheckError("anytime and drifting must not both be true, no proof covers the combination")
    outcomes: Outcomes = {diagram.rows: count for diagram, count in counts.items()}
    expected = _expected_tests(certificate, outcomes)
    stated = [(test.kind, dict(test.block_sizes)) for test in certificate.tests]
    _must(stated == [(kind, sizes) for kind, sizes, _ in expected], "tests", [kind for kind, _, _ in expected], stated)
    for test, (_, _, error) in zip(certificate.tests, expected, strict=True):
        _must(test.error == error, f"error of {test.kind}", error, test.error)
    _check_witnesses(certificate)
    for test in certificate.tests:
        _CHECKS[test.kind](certificate, test, outcomes)
    _check_statement(certificate)
    return True


def _must(holds: bool, name: str, expected: object, got: object) -> None:
    if not holds:
        raise RecheckError(f"{name} must be {expected!r} for this record, got {got!r}")


def _expected_tests(certificate: Certificate, outcomes: Outcomes) -> list[tuple[str, dict[int, int], float]]:
    """Derive the tests, their blocks and their errors from the block sizes and the options alone."""
    error = 1.0 - certificate.confidence
    sizes: dict[int, int] = {}
    for rows in sorted(outcomes, key=sum):
        sizes[sum(rows)] = sizes.get(sum(rows), 0) + outcomes[rows]
    if certificate.functional != "von Neumann entropy":
        return [("swap-purity", {2: sizes.get(2, 0)}, error)]
    several = {size: blocks for size, blocks in sizes.items() if size >= 2}
    if certificate.anytime or certificate.drifting:
        return [("mixture-e-value", several, error)]
    large = {size: blocks for size, blocks in sizes.items() if size >= 100}
    if sum(large.values()) >= 30:
        large = {}
    small = {size: blocks for size, blocks in several.items() if size not in large}
    if not small:
        return [("large-diagram", large or sizes, error)]
    tests = []
    if large:
        error /= 2
        tests.append(("large-diagram", large, error))
    evidence = error / 5 if sum(small.values()) < 1000 else error / 2
    return [*tests, ("symmetric-outcome", small, error - evidence), ("mixture-e-value", small, evidence)]


def _check_witnesses(certificate: Certificate) -> None:
    """Compare the grid of the certificate with the documented one."""
    sizes = [size for test in certificate.tests if test.kind == "mixture-e-value" for size in test.block_sizes]
    expected = tuple(_documented_witnesses(size) for size in sizes)
    _must(certificate.witnesses == expected, "witnesses", expected, certificate.witnesses)
    fractions = _FRACTIONS if sizes else ()
    _must(certificate.fractions == fractions, "fractions", fractions, certificate.fractions)


def _documented_witnesses(copies: int) -> WitnessSet:
    if copies == 2:
        chords = tuple(int(math.exp(s)) + step for s in _ENTROPIES for step in (0, 1))
        return WitnessSet(copies=2, order=2, chords=chords)
    order = min(copies, 6)
    nodes = tuple(
        tuple(float(f"{math.exp(-power * s):.6g}") for power in powers) for s in _ENTROPIES for powers in _POWERS[order]
    )
    return WitnessSet(copies=copies, order=order, nodes=nodes)


def _check_bound(test: Test, rejects: Callable[[float], bool]) -> None:
    """Check that an entropy test rejects at the stated bound and not above it."""
    bound = test.lower
    if bound is None or not 0.0 <= bound <= _CAP:
        raise RecheckError(f"lower of {test.kind} must lie between 0 and {_CAP:.6f} nat, got {bound!r}")
    if bound > 0.0 and not rejects(bound):
        raise RecheckError(f"the record does not support lower = {bound!r} of {test.kind}")
    if bound < _CAP and rejects(bound + _TIGHTNESS):
        raise RecheckError(f"lower of {test.kind} is not the bound of this record, got {bound!r}")


def _check_symmetric(certificate: Certificate, test: Test, outcomes: Outcomes) -> None:
    ctx = fresh_context()
    observed = sum(count for rows, count in outcomes.items() if len(rows) == 1 and rows[0] in test.block_sizes)

    def rejects(entropy: float) -> bool:
        level = step_level(entropy, ctx)
        probabilities = {size: symmetric_probability(level, size, ctx) for size in test.block_sizes}
        return bool(binomial_sum_tail(observed, test.block_sizes, probabilities, ctx) <= test.error)

    _check_bound(test, rejects)


def _check_evidence(certificate: Certificate, test: Test, outcomes: Outcomes) -> None:
    ctx = fresh_context()
    sizes = {witnesses.copies: _coefficients(witnesses, ctx) for witnesses in certificate.witnesses}
    floors = {size: _floors(size, coefficients) for size, coefficients in sizes.items()}
    if certificate.drifting and floors:
        lowest = [min(column) for column in zip(*floors.values(), strict=True)]
        floors = dict.fromkeys(floors, lowest)
    seen = [
        (sum(rows), count, [_value(rows, c) for c in sizes[sum(rows)]])
        for rows, count in outcomes.items()
        if sum(rows) in sizes
    ]
    fractions = [ctx.mpf(repr(fraction)) for fraction in certificate.fractions]

    def rejects(entropy: float) -> bool:
        if not sizes:
            return False
        ladder = range(len(next(iter(sizes.values()))))
        needed = len(ladder) * len(fractions) / ctx.mpf(test.error)
        total = ctx.zero
        for i in ladder:
            for fraction in fractions:
                product = ctx.one
                for size, count, values in seen:
                    bet = fraction / (entropy - floors[size][i])
                    product *= (1 + bet * (values[i] - entropy)) ** count
                total += product
                if total >= needed:
                    return True
        return False

    _check_bound(test, rejects)


def _coefficients(witnesses: WitnessSet, ctx: Any) -> list[list[Any]]:
    if witnesses.order == 2:
        return [exact_chord(r, ctx) for r in witnesses.chords]
    return [exact_interpolant(nodes, witnesses.order, ctx) for nodes in witnesses.nodes]


def _value(rows: tuple[int, ...], coefficients: list[Any]) -> Any:
    """Return sum_j c_j T_{j+1} at one outcome."""
    characters = cycle_values(rows, len(coefficients))
    return sum(c * t.numerator / t.denominator for c, t in zip(coefficients, characters, strict=True))


def _floors(size: int, coefficients: list[list[Any]]) -> list[Any]:
    """Return the least value of each witness over all outcomes of min(size, 16) copies, at most 0."""
    shapes = partitions(min(size, 16))
    return [min(0, *(_value(rows, c) for rows in shapes)) for c in coefficients]


def _check_large(certificate: Certificate, test: Test, outcomes: Outcomes) -> None:
    ctx = fresh_context()
    rows = [0] * max(len(shape) for shape in outcomes)
    for shape, count in outcomes.items():
        if sum(shape) in test.block_sizes:
            for i, row in enumerate(shape):
                rows[i] += count * row
    n = sum(rows)
    entropy = -sum(ctx.mpf(row) / n * ctx.log(ctx.mpf(row) / n) for row in rows if row)
    bound = entropy - (1 + ctx.log(n)) * ctx.sqrt(-ctx.log(test.error) / (2 * n))
    _check_bound(test, lambda value: bool(value <= bound))


def _check_purity(certificate: Certificate, test: Test, outcomes: Outcomes) -> None:
    ctx = fresh_context()
    pairs = test.block_sizes[2]
    symmetric = outcomes.get((2,), 0)
    sides = [bound for bound in (test.lower, test.upper) if bound is not None]
    share = test.error / max(1, len(sides))

    def too_small(purity: float) -> bool:
        """Say whether so many symmetric outcomes reject a purity of at most `purity`."""
        tail = binomial_sum_tail(pairs - symmetric, {2: pairs}, {2: (1 - ctx.mpf(purity)) / 2}, ctx)
        return bool(tail <= share)

    def too_large(purity: float) -> bool:
        """Say whether so few symmetric outcomes reject a purity of at least `purity`."""
        tail = binomial_sum_tail(symmetric, {2: pairs}, {2: (1 + ctx.mpf(purity)) / 2}, ctx)
        return bool(tail <= share)

    low, high = test.lower, test.upper
    if low is not None and not (0 <= low <= 1 and (low == 0 or too_small(low)) and not too_small(low + _TIGHTNESS)):
        raise RecheckError(f"lower of {test.kind} is not the bound of this record, got {low!r}")
    if high is not None and not (0 <= high <= 1 and (high == 1 or too_large(high))):
        raise RecheckError(f"the record does not support upper = {high!r} of {test.kind}")
    if high is not None and high > _TIGHTNESS and too_large(high - _TIGHTNESS):
        raise RecheckError(f"upper of {test.kind} is not the bound of this record, got {high!r}")


_CHECKS: dict[str, Callable[[Certificate, Test, Outcomes], None]] = {
    "symmetric-outcome": _check_symmetric,
    "mixture-e-value": _check_evidence,
    "large-diagram": _check_large,
    "swap-purity": _check_purity,
}


def _check_statement(certificate: Certificate) -> None:
    """Check that the stated bounds, claim and words follow from the tests."""
    unit = "1" if certificate.functional == "purity" else unit_of(certificate.base)
    _must(certificate.unit == unit, "unit", unit, certificate.unit)
    lower, upper = _stated_bounds(certificate)
    _must(certificate.lower == lower, "lower", lower, certificate.lower)
    _must(certificate.upper == upper, "upper", upper, certificate.upper)
    claim = certificate.claim
    met = None
    if claim is not None:
        met = not (
            (claim.at_least is not None and (lower is None or lower < claim.at_least))
            or (claim.at_most is not None and (upper is None or upper > claim.at_most))
        )
    _must(certificate.met == met, "met", met, certificate.met)
    words = assumptions(anytime=certificate.anytime, drifting=certificate.drifting)
    _must(certificate.assumptions == words, "assumptions", words, certificate.assumptions)
    method = describe_method(certificate.tests)
    _must(certificate.method == method, "method", method, certificate.method)


def _stated_bounds(certificate: Certificate) -> tuple[float | None, float | None]:
    """Turn the bounds of the tests into those of the functional, in its unit."""
    lower: float | None
    upper: float | None
    if certificate.functional == "von Neumann entropy":
        bounds = [test.lower or 0.0 for test in certificate.tests]
        lower, upper = (0.0 if _CAP in bounds else max(bounds)), None
    else:
        lower, upper = certificate.tests[0].lower, certificate.tests[0].upper or None
        if certificate.unit == "1":
            return lower, upper
        lower, upper = None if upper is None else abs(math.log(upper)), -math.log(lower) if lower else None
    scale = 1.0 if certificate.base is None else math.log(certificate.base)
    if scale != 1.0:
        lower = None if lower is None else max(0.0, math.nextafter(lower / scale, -math.inf))
        upper = None if upper is None else math.nextafter(upper / scale, math.inf)
    return lower, upper

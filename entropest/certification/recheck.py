"""The referee's second implementation, which says whether a certificate follows from a record.

Every test is repeated with exact fractions and 50-digit arithmetic from :mod:`entropest.certification.plain`; the
choices that had to be fixed before the data (division of the error, grid of witnesses) are derived again here.
"""

import math
from collections.abc import Callable
from typing import Any

from entropest._checks import unit_of
from entropest.certification.certificate import Certificate, Test, entropy_bounds
from entropest.certification.plain import binomial_sum_tail, fresh_context
from entropest.certification.plain_chains import chain_rejects
from entropest.certification.plain_identical_blocks import check_identical_blocks
from entropest.certification.plain_large import dual_lower_value, dual_upper_value
from entropest.certification.plain_mixture import documented_witnesses, mixture_rejects
from entropest.certification.plain_qubit import qubit_lower_value, qubit_upper_value
from entropest.certification.plain_tuned import tuned_scan_ends_at
from entropest.certification.plan import Options, PlannedTest, plan_entropy_tests
from entropest.certification.wording import assumptions, describe_method
from entropest.errors import ArgumentTypeError, RecheckError
from entropest.records.counts import DiagramCounts

__all__ = ["recheck"]

Rows = tuple[int, ...]
Outcomes = dict[Rows, int]

_CAP = 20.0 * math.log(2.0)
_TIGHTNESS = 1e-6
_ROUNDING = 1e-8
_FRACTIONS = (0.003, 0.01, 0.025, 0.06, 0.15, 0.35, 0.65, 0.95)


def recheck(certificate: Certificate, counts: DiagramCounts) -> bool:
    """Recompute a certificate from the record with an independent plain implementation.

    Each test must reject at the bound it states and must not reject above it; the bounds, the claim, the division of
    the error, the grid of witnesses and the assumptions must be those that the block sizes of the record give. It takes
    seconds, and up to a minute where suprema are certified again.

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
    if not isinstance(certificate, Certificate) or not isinstance(counts, DiagramCounts):
        raise ArgumentTypeError(
            "recheck takes a Certificate and a DiagramCounts, "
            f"got {type(certificate).__name__} and {type(counts).__name__}"
        )
    _must(certificate.record_digest == counts.digest, "record_digest", counts.digest, certificate.record_digest)
    _must(certificate.blocks == counts.blocks, "blocks", counts.blocks, certificate.blocks)
    _must(certificate.copies == counts.copies, "copies", counts.copies, certificate.copies)
    if certificate.anytime and certificate.drifting:
        raise RecheckError("anytime and drifting must not both be true, no proof covers the combination")
    _must(certificate.trusted_dim in (None, counts.dim), "trusted_dim", counts.dim, certificate.trusted_dim)
    stated = [_planned_part(test) for test in certificate.tests]
    expected = _expected_tests(certificate, counts)
    _must(stated == expected, "tests", expected, stated)
    outcomes: Outcomes = {diagram.rows: count for diagram, count in counts.items()}
    _check_witnesses(certificate)
    _check_statement(certificate)
    for test in certificate.tests:
        _CHECKS[test.kind](certificate, test, _used(outcomes, test))
    return True


def _must(holds: bool, name: str, expected: object, got: object) -> None:
    if not holds:
        raise RecheckError(f"{name} must be {expected!r} for this record, got {got!r}")


def _planned_part(test: Test) -> PlannedTest:
    return PlannedTest(
        kind=test.kind,
        error=test.error,
        block_sizes=dict(test.block_sizes),
        planned=dict(test.planned),
        leading=test.leading,
    )


def _expected_tests(certificate: Certificate, counts: DiagramCounts) -> list[PlannedTest]:
    """Derive the tests, their blocks and their errors from the block sizes and the options."""
    error = 1.0 - certificate.confidence
    sizes = dict(counts.block_sizes)
    if certificate.functional != "von Neumann entropy":
        return [PlannedTest(kind="swap-purity", error=error, block_sizes={2: sizes.get(2, 0)})]
    kinds = [test.kind for test in certificate.tests]
    upper = any(kind.endswith("-upper") for kind in kinds)
    if upper and (certificate.anytime or certificate.drifting or certificate.trusted_dim is None):
        raise RecheckError("an upper bound needs a trusted dimension and a number of copies fixed beforehand")
    options = Options(
        error=error,
        lower=not kinds or any(not kind.endswith("-upper") for kind in kinds),
        upper=upper,
        anytime=certificate.anytime,
        drifting=certificate.drifting,
        dim=certificate.trusted_dim,
        planned_blocks=dict(certificate.tests[0].planned) if certificate.anytime and certificate.tests else None,
        expecting=certificate.expecting,
    )
    return plan_entropy_tests(sizes, options)


def _used(outcomes: Outcomes, test: Test) -> Outcomes:
    """Return the outcomes of the blocks that a test uses."""
    return {rows: count for rows, count in outcomes.items() if sum(rows) in test.block_sizes}


def _check_witnesses(certificate: Certificate) -> None:
    """Compare the grid of the mixture with the documented one."""
    sizes = [size for test in certificate.tests if test.kind == "mixture-e-value" for size in test.block_sizes]
    expected = tuple(documented_witnesses(size) for size in sizes)
    _must(certificate.witnesses == expected, "witnesses", expected, certificate.witnesses)
    fractions = _FRACTIONS if sizes else ()
    _must(certificate.fractions == fractions, "fractions", fractions, certificate.fractions)


def _lower(test: Test) -> float:
    if test.lower is None or test.upper is not None or not 0.0 <= test.lower <= _CAP:
        raise RecheckError(f"{test.kind} must state a lower bound between 0 and {_CAP:.6f} nat, got {test.lower!r}")
    return test.lower


def _check_score(certificate: Certificate, test: Test, outcomes: Outcomes) -> None:
    bound = _lower(test)
    if bound > 0.0 and not chain_rejects(outcomes, test.error, bound):
        raise RecheckError(f"the record does not support lower = {bound!r} of {test.kind}")
    if bound < _CAP and chain_rejects(outcomes, test.error * (1.0 - _ROUNDING), bound + _TIGHTNESS):
        raise RecheckError(f"lower of {test.kind} is not the bound of this record, got {bound!r}")


def _check_identical(certificate: Certificate, test: Test, outcomes: Outcomes) -> None:
    check_identical_blocks(outcomes, _lower(test), error=test.error, planned_blocks=test.planned)


def _check_tuned(certificate: Certificate, test: Test, outcomes: Outcomes) -> None:
    bound = _lower(test)
    found = 0.0
    if outcomes:
        found = tuned_scan_ends_at(
            outcomes, test.error, test.planned, drifting=certificate.drifting, leading=test.leading
        )
    _must(bound == found, f"lower of {test.kind}", found, bound)


def _check_mixture(certificate: Certificate, test: Test, outcomes: Outcomes) -> None:
    bound = _lower(test)
    if bound > 0.0 and not mixture_rejects(outcomes, test.error, bound, certificate.fractions):
        raise RecheckError(f"the record does not support lower = {bound!r} of {test.kind}")
    if bound < _CAP and mixture_rejects(outcomes, test.error, bound + _TIGHTNESS, certificate.fractions):
        raise RecheckError(f"lower of {test.kind} is not the bound of this record, got {bound!r}")


def _check_diagram(certificate: Certificate, test: Test, outcomes: Outcomes) -> None:
    """Evaluate a bound from large diagrams at its stated parameters; any parameters prove what they prove."""
    diagrams = [rows for rows, count in outcomes.items() for _ in range(count)]
    width = max(map(len, diagrams))
    rows = [sum(diagram[i] for diagram in diagrams if i < len(diagram)) for i in range(width)]
    parameters: dict[str, Any] = dict(test.parameters)
    upper = test.kind.endswith("-upper")
    stated, other = (test.upper, test.lower) if upper else (test.lower, test.upper)
    if stated is None or other is not None:
        raise RecheckError(f"{test.kind} must state one bound, got lower {test.lower!r} and upper {test.upper!r}")
    try:
        if test.kind == "large-lower":
            proved = dual_lower_value(rows, error=test.error, dim=certificate.trusted_dim, **parameters)
            if certificate.trusted_dim is not None:
                proved = max(proved, dual_lower_value(rows, error=test.error, **parameters))
        elif test.kind == "large-upper":
            assert certificate.trusted_dim is not None
            proved = dual_upper_value(diagrams, error=test.error, dim=certificate.trusted_dim, **parameters)
        elif test.kind == "qubit-lower":
            proved = qubit_lower_value(rows, error=test.error, **parameters)
        else:
            proved = qubit_upper_value(rows, error=test.error, **parameters)
    except TypeError as error:
        raise RecheckError(f"parameters of {test.kind} are not those of such a test: {error}") from error
    holds = stated >= proved if upper else stated <= proved
    _must(holds and abs(stated - proved) <= _TIGHTNESS, f"bound of {test.kind}", proved, stated)


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
    "score": _check_score,
    "identical-blocks": _check_identical,
    "tuned-e-value": _check_tuned,
    "mixture-e-value": _check_mixture,
    "large-lower": _check_diagram,
    "large-upper": _check_diagram,
    "qubit-lower": _check_diagram,
    "qubit-upper": _check_diagram,
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
    words = assumptions(anytime=certificate.anytime, drifting=certificate.drifting, trusted_dim=certificate.trusted_dim)
    _must(certificate.assumptions == words, "assumptions", words, certificate.assumptions)
    method = describe_method(certificate.tests)
    _must(certificate.method == method, "method", method, certificate.method)


def _stated_bounds(certificate: Certificate) -> tuple[float | None, float | None]:
    """Turn the bounds of the tests into those of the functional, in its unit."""
    lower: float | None
    upper: float | None
    if certificate.functional == "von Neumann entropy":
        lower, upper = entropy_bounds(certificate.tests)
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

"""The certificate of a record: which tests apply, how the error is divided, what is assumed."""

import math
from collections.abc import Mapping

import numpy as np

from entropest._checks import as_confidence, as_real
from entropest._version import __version__
from entropest.certification.certificate import Certificate, Claim, Test, WitnessSet
from entropest.certification.evidence import FRACTIONS, SizedBlocks, evidence_lower_bound
from entropest.certification.large_diagram import large_diagram_lower_bound
from entropest.certification.purity import purity_lower_bound, purity_upper_bound
from entropest.certification.rules import ENTROPY_CAP, error_split, large_sizes
from entropest.certification.score_test import score_lower_bound
from entropest.certification.witnesses import LARGEST_ORDER, ladder_chords, ladder_nodes
from entropest.certification.wording import assumptions, describe_method
from entropest.errors import ArgumentValueError, NotCoveredError
from entropest.functionals import Functional, PowerSum, Renyi, VonNeumann
from entropest.records.counts import DiagramCounts

__all__ = ["certify"]


def certify(
    counts: DiagramCounts,
    functional: Functional = VonNeumann(),
    *,
    at_least: float | None = None,
    at_most: float | None = None,
    confidence: float = 0.95,
    anytime: bool = False,
    drifting: bool = False,
) -> Certificate:
    """Bound an entropy from below by what a record proves, without knowing the dimension.

    The von Neumann entropy is bounded by the larger of an exact test on the fully symmetric outcome and a mixture
    e-value, at a split of the error that depends on the number of blocks alone; fewer than 30 blocks of at least 100
    copies are bounded as large diagrams instead. With `anytime` or `drifting` the e-value is used alone. The Renyi
    entropy of order 2 and the purity ``PowerSum(2)`` are bounded by exact binomial limits from the blocks of two
    copies.

    Parameters
    ----------
    counts : DiagramCounts
        The record. Its dimension is not used.
    functional : VonNeumann, Renyi(2) or PowerSum(2)
        What to bound; von Neumann by default. Its base sets the unit.
    at_least, at_most : float, optional
        The claim, in the unit of the functional. An upper bound exists for Renyi(2) and PowerSum(2).
    confidence : float
        One minus the largest probability of a false statement.
    anytime : bool
        The record may have been stopped at any time, by looking at it; blocks are identical.
    drifting : bool
        The state may differ between blocks; their number was fixed beforehand, the bound is on the average.

    Returns
    -------
    Certificate
        With `met` true only if the bound as stored implies the claim.

    Raises
    ------
    NotCoveredError
        For a functional, a side or a combination of options that no proof here covers.

    References
    ----------
    Clopper and Pearson, Biometrika 26 (1934) 404; Harremoes and Topsoe, IEEE Trans. Inf. Theory 47 (2001) 2944;
    Waudby-Smith and Ramdas, arXiv:2010.09686; proofs of the rest: docs/theory.md.

    Examples
    --------
    >>> from entropest import DiagramCounts
    >>> pairs = DiagramCounts.from_swap(symmetric=2064, antisymmetric=936)
    >>> certificate = certify(pairs, at_least=0.9)
    >>> certificate.met, round(certificate.lower, 3)
    (True, 0.961)
    """
    error = 1.0 - as_confidence(confidence)
    claim = _checked_claim(at_least, at_most)
    if anytime and drifting:
        raise NotCoveredError(
            "anytime and drifting cannot both be true: with drifting blocks and a stopping time chosen from the data, "
            "the running average can be overstated more often than 1 - confidence; give up one of the two"
        )
    bounds: tuple[float | None, float | None]
    if isinstance(functional, VonNeumann):
        tests = _entropy_tests(counts, error, claim, anytime=anytime, drifting=drifting)
        bounds = 0.0 if _contradicts(tests) else max(test.lower for test in tests if test.lower is not None), None
    elif isinstance(functional, Renyi | PowerSum) and functional.order == 2:
        tests = [_purity_test(counts, error, claim, functional, anytime=anytime, drifting=drifting)]
        bounds = tests[0].lower, None if _contradicts(tests) else tests[0].upper
    else:
        raise NotCoveredError(
            f"functional must be VonNeumann(), Renyi(2) or PowerSum(2) for a certificate, got {functional.name}"
        )
    lower, upper = _in_unit(bounds, functional)
    evidence_sizes = sorted({size for test in tests if test.kind == "mixture-e-value" for size in test.block_sizes})
    return Certificate(
        functional=functional.name,
        lower=lower,
        upper=upper,
        unit=functional.unit(),
        base=None if isinstance(functional, PowerSum) else functional.base,
        claim=claim,
        met=None if claim is None else claim.holds(lower, upper),
        confidence=confidence,
        method=describe_method(tests),
        anytime=anytime,
        drifting=drifting,
        tests=tuple(tests),
        witnesses=tuple(_witness_set(size) for size in evidence_sizes),
        fractions=FRACTIONS if evidence_sizes else (),
        assumptions=assumptions(anytime=anytime, drifting=drifting),
        notes=_notes(counts, tests),
        blocks=counts.blocks,
        copies=counts.copies,
        record_digest=counts.digest,
        versions=_versions(),
    )


def _checked_claim(at_least: float | None, at_most: float | None) -> Claim | None:
    if at_least is None and at_most is None:
        return None
    lower = None if at_least is None else as_real(at_least, "at_least")
    upper = None if at_most is None else as_real(at_most, "at_most")
    if lower is not None and upper is not None and lower > upper:
        raise ArgumentValueError(f"at_least must not exceed at_most {upper:g}, got {lower:g}")
    return Claim(at_least=lower, at_most=upper)


def _entropy_tests(
    counts: DiagramCounts, error: float, claim: Claim | None, *, anytime: bool, drifting: bool
) -> list[Test]:
    """Run the tests that bound the von Neumann entropy from below; their errors add up to `error`."""
    if claim is not None and claim.at_most is not None:
        raise NotCoveredError(
            "at_most cannot be certified for the von Neumann entropy: without a known dimension no finite record "
            "excludes a small part of the state with large entropy"
        )
    sizes = dict(counts.block_sizes)
    small = {size: blocks for size, blocks in sizes.items() if size >= 2}
    if anytime or drifting:
        return [_evidence_test(counts, small, error, drifting=drifting)]
    large = large_sizes(sizes)
    small = {size: blocks for size, blocks in small.items() if size not in large}
    tests = []
    if large or not small:
        tests.append(_large_test(counts, {size: sizes[size] for size in large or sizes}, error / 2 if small else error))
    if small:
        for_score, for_evidence = error_split(error / 2 if tests else error, sum(small.values()))
        tests.append(_score_test(counts, small, for_score))
        tests.append(_evidence_test(counts, small, for_evidence, drifting=False))
    return tests


def _score_test(counts: DiagramCounts, sizes: Mapping[int, int], error: float) -> Test:
    symmetric = _symmetric_outcomes(counts, sizes)
    lower = score_lower_bound(symmetric, sizes, error=error)
    return Test(kind="symmetric-outcome", error=error, lower=lower, upper=None, block_sizes=sizes)


def _evidence_test(counts: DiagramCounts, sizes: Mapping[int, int], error: float, *, drifting: bool) -> Test:
    lower = evidence_lower_bound(_sized(counts, sizes), error=error, drifting=drifting) if sizes else 0.0
    return Test(kind="mixture-e-value", error=error, lower=lower, upper=None, block_sizes=sizes)


def _large_test(counts: DiagramCounts, sizes: Mapping[int, int], error: float) -> Test:
    rows = np.sum([part.counts @ part.shapes for part in _sized(counts, sizes)], axis=0)
    lower = large_diagram_lower_bound(rows, error=error)
    return Test(kind="large-diagram", error=error, lower=lower, upper=None, block_sizes=sizes)


def _purity_test(
    counts: DiagramCounts,
    error: float,
    claim: Claim | None,
    functional: Renyi | PowerSum,
    *,
    anytime: bool,
    drifting: bool,
) -> Test:
    """Bound the purity on the sides that are asked for; both, at half the error each, without a claim."""
    if anytime or drifting:
        raise NotCoveredError(
            f"anytime and drifting must be false for {functional.name}: "
            "its binomial limits need identical blocks and a fixed number of them"
        )
    pairs = counts.block_sizes.get(2, 0)
    if pairs == 0:
        raise NotCoveredError(
            f"a certificate of the {functional.name} needs blocks of two copies, "
            f"got sizes {', '.join(map(str, counts.block_sizes))}"
        )
    floor_asked = claim is None or claim.at_least is not None
    ceiling_asked = claim is None or claim.at_most is not None
    if isinstance(functional, Renyi):
        floor_asked, ceiling_asked = ceiling_asked, floor_asked
    share = error / 2 if floor_asked and ceiling_asked else error
    symmetric = _symmetric_outcomes(counts, {2: pairs})
    return Test(
        kind="swap-purity",
        error=error,
        lower=purity_lower_bound(symmetric, pairs, error=share) if floor_asked else None,
        upper=purity_upper_bound(symmetric, pairs, error=share) if ceiling_asked else None,
        block_sizes={2: pairs},
    )


def _symmetric_outcomes(counts: DiagramCounts, sizes: Mapping[int, int]) -> int:
    return sum(int(part.counts[part.shapes[:, 0] == part.copies].sum()) for part in _sized(counts, sizes))


def _sized(counts: DiagramCounts, sizes: Mapping[int, int]) -> list[SizedBlocks]:
    boxes = counts.compact_shapes.sum(axis=1)
    return [
        SizedBlocks(copies=size, shapes=counts.compact_shapes[boxes == size], counts=counts.counts[boxes == size])
        for size in sorted(sizes)
    ]


def _in_unit(bounds: tuple[float | None, float | None], functional: Functional) -> tuple[float | None, float | None]:
    """Convert bounds in nats (or on the purity) to the functional and its unit, rounding outwards."""
    lower, upper = _renyi_2(bounds) if isinstance(functional, Renyi) else bounds
    scale = functional.scale()
    if scale < 0.0:
        raise ArgumentValueError("base must be above 1 for a certificate, got a base below 1")
    if scale != 1.0:
        lower = None if lower is None else max(0.0, math.nextafter(lower / scale, -math.inf))
        upper = None if upper is None else math.nextafter(upper / scale, math.inf)
    return lower, upper


def _renyi_2(purity: tuple[float | None, float | None]) -> tuple[float | None, float | None]:
    """Turn bounds on the purity into bounds on -log(purity)."""
    least, largest = purity
    return None if largest is None else abs(math.log(largest)), -math.log(least) if least else None


def _contradicts(tests: list[Test]) -> bool:
    """Say whether a test rejects every state, which tells of a fault and not of entropy: then nothing is certified."""
    return any(test.upper == 0.0 if test.kind == "swap-purity" else test.lower == ENTROPY_CAP for test in tests)


def _witness_set(copies: int) -> WitnessSet:
    order = min(copies, LARGEST_ORDER)
    if order == 2:
        return WitnessSet(copies=copies, order=order, chords=tuple(ladder_chords()))
    return WitnessSet(copies=copies, order=order, nodes=tuple(ladder_nodes(order)))


def _notes(counts: DiagramCounts, tests: list[Test]) -> tuple[str, ...]:
    notes = []
    used = {size for test in tests for size in test.block_sizes}
    unused = [size for size in counts.block_sizes if size not in used]
    if unused:
        notes.append(f"blocks of {', '.join(map(str, unused))} copies are not used by these tests")
    if _contradicts(tests):
        notes.append(
            "no state makes such outcomes likely, whatever its entropy, so nothing is certified: "
            "look for a fault in the measurement"
        )
    return tuple(notes)


def _versions() -> dict[str, str]:
    import scipy

    return {"entropest": __version__, "numpy": np.__version__, "scipy": scipy.__version__}

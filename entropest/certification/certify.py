"""The certificate of a record: which tests apply, how the error is divided, what is assumed."""

import math
from collections.abc import Mapping
from dataclasses import replace

import numpy as np
import numpy.typing as npt

from entropest._checks import as_confidence, as_integer, as_real
from entropest._version import __version__
from entropest.certification.certificate import (
    Certificate,
    Claim,
    Test,
    WitnessSet,
    contradicts,
    entropy_bounds,
)
from entropest.certification.entropy_tests import run_entropy_test, sized_blocks
from entropest.certification.evidence import FRACTIONS
from entropest.certification.plan import Options, plan_entropy_tests
from entropest.certification.purity import purity_lower_bound, purity_upper_bound
from entropest.certification.rules import large_sizes
from entropest.certification.tuned import smooth_spectrum
from entropest.certification.witnesses import LARGEST_ORDER, ladder_chords, ladder_nodes
from entropest.certification.wording import assumptions, describe_method
from entropest.errors import ArgumentTypeError, ArgumentValueError, NotCoveredError
from entropest.functionals import Functional, PowerSum, Renyi, VonNeumann
from entropest.records.counts import DiagramCounts
from entropest.records.two_copy import TwoCopyShots
from entropest.spectra import as_spectrum

__all__ = ["certify"]

_LARGEST_EXPECTED = 4.0


def certify(
    counts: DiagramCounts,
    functional: Functional = VonNeumann(),
    *,
    at_least: float | None = None,
    at_most: float | None = None,
    confidence: float = 0.95,
    anytime: bool = False,
    planned_blocks: int | Mapping[int, int] | None = None,
    drifting: bool = False,
    trusted_dim: bool = False,
    expecting: float | npt.ArrayLike | None = None,
) -> Certificate:
    """Bound an entropy by what a record proves, without knowing the dimension.

    The von Neumann entropy is bounded from below by the larger of an exact score test on the topmost outcomes and an
    e-value, at a split of the error that depends on the block sizes alone; few large blocks are used as large diagrams
    instead (:func:`entropest.certification.rules.plan_entropy_tests` has the rule). With `anytime` or `drifting` an
    e-value is used alone. The Renyi entropy of order 2 and the purity ``PowerSum(2)`` are bounded by exact binomial
    limits from the blocks of two copies.

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
    planned_blocks : int or mapping of int to int, optional
        With `anytime`: the number of blocks of each size expected before the data were seen. It sharpens the bound and
        has no bearing on its validity. One number serves a record of one block size.
    drifting : bool
        The state may differ between blocks; their number was fixed beforehand, the bound is on the average.
    trusted_dim : bool
        Believe the dimension of the record. It sharpens lower bounds from large diagrams and gives upper bounds there.

    expecting : array_like or float, optional
        The spectrum, or the von Neumann entropy in nats, expected before the data were seen. It decides where the
        weight is put (the division of the error, the leading witness) and has no bearing on validity.

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
    (True, 0.972)
    """
    if not isinstance(counts, DiagramCounts):
        hint = ": name a region of it" if isinstance(counts, TwoCopyShots) else ""
        raise ArgumentTypeError(f"counts must be a DiagramCounts, got {type(counts).__name__}{hint}")
    if not isinstance(functional, Functional):
        raise ArgumentTypeError(f"functional must be a functional such as VonNeumann(), got {functional!r}")
    claim = _checked_claim(at_least, at_most)
    options = Options(
        error=1.0 - as_confidence(confidence),
        lower=claim is None or claim.at_least is not None,
        upper=claim is not None and claim.at_most is not None,
        anytime=anytime,
        drifting=drifting,
        dim=_trusted_dim(counts) if trusted_dim else None,
        planned_blocks=_planned(planned_blocks, counts),
        expecting=None if expecting is None else _expected_spectrum(expecting),
    )
    if anytime and drifting:
        raise NotCoveredError(
            "anytime and drifting cannot both be true: with drifting blocks and a stopping time chosen from the data, "
            "the running average can be overstated more often than 1 - confidence; give up one of the two"
        )
    bounds: tuple[float | None, float | None]
    if isinstance(functional, VonNeumann):
        tests = _entropy_tests(counts, options, two_sided=claim is None)
        bounds = entropy_bounds(tests)
    elif isinstance(functional, Renyi | PowerSum) and functional.order == 2:
        tests = [_purity_test(counts, options, functional, two_sided=claim is None)]
        bounds = tests[0].lower, None if contradicts(tests) else tests[0].upper
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
        trusted_dim=options.dim,
        expecting=options.expecting,
        tests=tuple(tests),
        witnesses=tuple(_witness_set(size) for size in evidence_sizes),
        fractions=FRACTIONS if evidence_sizes else (),
        assumptions=assumptions(anytime=anytime, drifting=drifting, trusted_dim=options.dim),
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


def _trusted_dim(counts: DiagramCounts) -> int:
    if counts.dim is None:
        raise ArgumentValueError("trusted_dim needs a record with a dimension, got dim None")
    return counts.dim


def _expected_spectrum(expecting: float | npt.ArrayLike) -> tuple[float, ...]:
    """Return the expected spectrum; an entropy stands for the smooth spectrum of that entropy."""
    if np.ndim(expecting) > 0:
        return tuple(as_spectrum(expecting).tolist())
    entropy = as_real(expecting, "expecting")  # type: ignore[arg-type]
    if not 0.0 < entropy <= _LARGEST_EXPECTED:
        raise ArgumentValueError(
            f"expecting must be an entropy above 0 and at most {_LARGEST_EXPECTED} nat, got {entropy}"
        )
    spectrum = smooth_spectrum(entropy)
    return tuple(as_spectrum(spectrum[spectrum > 1e-9], normalize=True).tolist())


def _planned(planned: int | Mapping[int, int] | None, counts: DiagramCounts) -> dict[int, int] | None:
    """Return the planned number of blocks for every block size of the record."""
    if planned is None:
        return None
    sizes = [size for size in counts.block_sizes if size >= 2]
    if not isinstance(planned, Mapping):
        if len(sizes) > 1:
            raise ArgumentValueError(f"planned_blocks must map each block size to a number, got {planned!r}")
        planned = dict.fromkeys(sizes, planned)
    if missing := [size for size in sizes if size not in planned]:
        raise ArgumentValueError(f"planned_blocks must name every block size of the record, {missing[0]} is missing")
    return {
        as_integer(size, "size of planned_blocks", at_least=1): as_integer(number, "planned_blocks", at_least=1)
        for size, number in planned.items()
    }


def _entropy_tests(counts: DiagramCounts, options: Options, *, two_sided: bool) -> list[Test]:
    """Run the tests of the von Neumann entropy; their errors add up to the error of the certificate."""
    diagrams = large_sizes(counts.block_sizes)
    upper_possible = options.dim is not None and bool(diagrams) and not (options.anytime or options.drifting)
    if options.upper and not upper_possible:
        raise NotCoveredError(
            "at_most needs large diagrams of a trusted dimension, and their number fixed beforehand: otherwise no "
            "finite record excludes a small part of the state with large entropy"
        )
    if two_sided and upper_possible:
        options = replace(options, upper=True)
    return [run_entropy_test(test, counts, options) for test in plan_entropy_tests(counts.block_sizes, options)]


def _purity_test(counts: DiagramCounts, options: Options, functional: Renyi | PowerSum, *, two_sided: bool) -> Test:
    """Bound the purity on the sides that are asked for; both, at half the error each, without a claim."""
    if options.anytime or options.drifting:
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
    floor_asked, ceiling_asked = options.lower, options.upper or two_sided
    if isinstance(functional, Renyi):
        floor_asked, ceiling_asked = ceiling_asked, floor_asked
    share = options.error / 2 if floor_asked and ceiling_asked else options.error
    (part,) = sized_blocks(counts, {2: pairs})
    symmetric = int(part.counts[part.shapes[:, 0] == 2].sum())
    return Test(
        kind="swap-purity",
        error=options.error,
        lower=purity_lower_bound(symmetric, pairs, error=share) if floor_asked else None,
        upper=purity_upper_bound(symmetric, pairs, error=share) if ceiling_asked else None,
        block_sizes={2: pairs},
    )


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
    if contradicts(tests):
        notes.append(
            "no state makes such outcomes likely, whatever its entropy, so nothing is certified: "
            "look for a fault in the measurement"
        )
    return tuple(notes)


def _versions() -> dict[str, str]:
    import scipy

    return {"entropest": __version__, "numpy": np.__version__, "scipy": scipy.__version__}

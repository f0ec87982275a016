"""What a certificate decides before it sees the outcomes: which tests, on which blocks, at which share of the error.

Everything here depends on the block sizes and on the options alone.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Final

from entropest.certification.expectation import best_leading, best_share
from entropest.certification.rules import error_split, large_sizes

__all__ = ["Options", "PlannedTest", "plan_entropy_tests"]

_TABULATED: Final = range(3, 7)


@dataclass(frozen=True, slots=True, kw_only=True)
class Options:
    """What the user asked for.

    Attributes
    ----------
    error : float
        One minus the confidence.
    lower, upper : bool
        Which sides are wanted.
    anytime, drifting : bool
        See :func:`entropest.certify`.
    dim : int or None
        The dimension, where it is trusted.
    planned_blocks : mapping of int to int, or None
        Planned number of blocks of each size.
    expecting : tuple of float or None
        The spectrum that is expected.
    """

    error: float
    lower: bool = True
    upper: bool = False
    anytime: bool = False
    drifting: bool = False
    dim: int | None = None
    planned_blocks: Mapping[int, int] | None = None
    expecting: tuple[float, ...] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class PlannedTest:
    """A test to be run: its kind, its share of the error, its blocks, and what tunes its bets."""

    kind: str
    error: float
    block_sizes: Mapping[int, int]
    planned: Mapping[int, int] = field(default_factory=dict)
    leading: int = 0


def plan_entropy_tests(block_sizes: Mapping[int, int], options: Options) -> list[PlannedTest]:
    """Return the tests of the von Neumann entropy; their errors add up to at most `options.error`.

    - Large diagrams (see :func:`large_sizes`): the dual bounds; the exact law for one diagram of a trusted qubit.
    - Other blocks, all of two copies: the score test. Otherwise the score test and an e-value at the shares of
      :func:`error_split`: the identical-blocks e-value if blocks of 3 to 6 copies hold at least half of the copies,
      else the tuned one.
    - With an expected spectrum the shares, and the leading component of the tuned e-value, are those that would give
      the highest bound if the outcomes were exactly as expected.
    - Large diagrams beside other blocks share the error equally; so do the two sides, if both are wanted.
    - Any stopping time: one e-value, the mixture if no number of blocks was planned. Drift: the tuned e-value.

    Examples
    --------
    >>> [(test.kind, test.error) for test in plan_entropy_tests({4: 2000}, Options(error=0.05))]
    [('score', 0.025), ('identical-blocks', 0.025)]
    """
    several = {size: blocks for size, blocks in sorted(block_sizes.items()) if size >= 2}
    if options.anytime or options.drifting:
        return [_evidence(several, options.error, options)]
    large = {size: several[size] for size in sorted(large_sizes(several))}
    small = {size: blocks for size, blocks in several.items() if size not in large}
    share = options.error / 2 if options.lower and options.upper else options.error
    tests = []
    if options.upper:
        kind = "qubit-upper" if options.dim == 2 and sum(large.values()) == 1 else "large-upper"
        tests.append(PlannedTest(kind=kind, error=share, block_sizes=large))
    if not options.lower:
        return tests
    if large and small:
        share /= 2
    if large:
        kind = "qubit-lower" if options.dim == 2 and sum(large.values()) == 1 else "large-lower"
        tests.append(PlannedTest(kind=kind, error=share, block_sizes=large))
    if small.keys() == {2}:
        tests.append(PlannedTest(kind="score", error=share, block_sizes=small))
    elif small:
        for_score, for_evidence = error_split(share, sum(small.values()))
        if options.expecting is not None:
            for_evidence = share * best_share(small, share, options.expecting)
            for_score = share - for_evidence
        tests.append(PlannedTest(kind="score", error=for_score, block_sizes=small))
        tests.append(_evidence(small, for_evidence, options))
    return tests


def _evidence(sizes: Mapping[int, int], error: float, options: Options) -> PlannedTest:
    """Choose the e-value; the planned numbers of blocks are the actual ones where these were fixed beforehand."""
    planned = dict(options.planned_blocks or {}) if options.anytime else dict(sizes)
    if not planned:
        return PlannedTest(kind="mixture-e-value", error=error, block_sizes=sizes)
    copies = {size: size * blocks for size, blocks in planned.items()}
    tabulated = sum(number for size, number in copies.items() if size in _TABULATED)
    identical = not options.drifting and 2 * tabulated >= sum(copies.values())
    if identical:
        return PlannedTest(kind="identical-blocks", error=error, block_sizes=sizes, planned=planned)
    leading = 0
    if options.expecting is not None:
        leading = best_leading(planned, error, options.expecting, drifting=options.drifting)
    return PlannedTest(kind="tuned-e-value", error=error, block_sizes=sizes, planned=planned, leading=leading)

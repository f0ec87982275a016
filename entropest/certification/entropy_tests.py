"""Running the planned tests of the von Neumann entropy on a record."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict
from typing import Any, Final

import numpy as np

from entropest._types import IntArray
from entropest.certification.certificate import Test
from entropest.certification.chains import chain_lower_bound
from entropest.certification.dual_bound import dual_lower_bound
from entropest.certification.dual_upper import dual_upper_bound
from entropest.certification.evidence import SizedBlocks, evidence_lower_bound
from entropest.certification.identical_blocks import identical_blocks_lower_bound
from entropest.certification.plan import Options, PlannedTest
from entropest.certification.qubit_diagram import qubit_lower_bound, qubit_upper_bound
from entropest.certification.tuned import tuned_lower_bound
from entropest.records.counts import DiagramCounts

__all__ = ["run_entropy_test", "sized_blocks"]


def run_entropy_test(planned: PlannedTest, counts: DiagramCounts, options: Options) -> Test:
    """Run one planned test and return it with its bound in nats."""
    if planned.kind in _DIAGRAM_TESTS:
        diagrams = _diagrams(counts, planned.block_sizes)
        bound, parameters = _DIAGRAM_TESTS[planned.kind](diagrams, planned.error, options.dim)
    else:
        bound = _block_bound(planned, sized_blocks(counts, planned.block_sizes), options)
        parameters = {}
    upper = planned.kind.endswith("-upper")
    return Test(
        kind=planned.kind,
        error=planned.error,
        lower=None if upper else bound,
        upper=bound if upper else None,
        block_sizes=dict(planned.block_sizes),
        planned=dict(planned.planned),
        leading=planned.leading,
        parameters=parameters,
    )


def sized_blocks(counts: DiagramCounts, sizes: Mapping[int, int]) -> list[SizedBlocks]:
    """Return the outcomes of the blocks of the given sizes, one entry a size."""
    boxes = counts.compact_shapes.sum(axis=1)
    return [
        SizedBlocks(copies=size, shapes=counts.compact_shapes[boxes == size], counts=counts.counts[boxes == size])
        for size in sorted(sizes)
    ]


def _block_bound(planned: PlannedTest, blocks: Sequence[SizedBlocks], options: Options) -> float:
    """Return the lower bound of a test that uses the blocks one by one."""
    if not blocks:
        return 0.0
    if planned.kind == "score":
        return chain_lower_bound(blocks, error=planned.error)
    if planned.kind == "identical-blocks":
        return identical_blocks_lower_bound(blocks, error=planned.error, planned_blocks=planned.planned)
    if planned.kind == "tuned-e-value":
        return tuned_lower_bound(
            blocks,
            error=planned.error,
            planned=planned.planned,
            drifting=options.drifting,
            leading=planned.leading,
        )
    return evidence_lower_bound(blocks, error=planned.error)


def _diagrams(counts: DiagramCounts, sizes: Mapping[int, int]) -> IntArray:
    """Return the diagrams of the given sizes, one in each line."""
    parts = sized_blocks(counts, sizes)
    return np.concatenate([np.repeat(part.shapes, part.counts, axis=0) for part in parts])


def _parameters(bound: object) -> dict[str, Any]:
    """Return the numbers from which a bound can be computed again."""
    return {name: value for name, value in asdict(bound).items() if name not in ("value", "dim")}  # type: ignore[call-overload]


def _large_lower(diagrams: IntArray, error: float, dim: int | None) -> tuple[float, dict[str, Any]]:
    bound = dual_lower_bound(diagrams.sum(axis=0), error=error, dim=dim)
    return bound.value, _parameters(bound)


def _large_upper(diagrams: IntArray, error: float, dim: int | None) -> tuple[float, dict[str, Any]]:
    assert dim is not None
    bound = dual_upper_bound(diagrams, error=error, dim=dim)
    return bound.value, _parameters(bound)


def _qubit_lower(diagrams: IntArray, error: float, dim: int | None) -> tuple[float, dict[str, Any]]:
    bound = qubit_lower_bound(diagrams[0], error=error)
    return bound.value, _parameters(bound)


def _qubit_upper(diagrams: IntArray, error: float, dim: int | None) -> tuple[float, dict[str, Any]]:
    bound = qubit_upper_bound(diagrams[0], error=error)
    return bound.value, _parameters(bound)


_DIAGRAM_TESTS: Final[dict[str, Callable[[IntArray, float, int | None], tuple[float, dict[str, Any]]]]] = {
    "large-lower": _large_lower,
    "large-upper": _large_upper,
    "qubit-lower": _qubit_lower,
    "qubit-upper": _qubit_upper,
}

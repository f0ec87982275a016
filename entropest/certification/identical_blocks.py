"""The identical-blocks e-value against "every block has von Neumann entropy at most s".

For a statistic E of one outcome whose mean is at most B for every spectrum of entropy at most s, the product over the
blocks of 1 + beta (E / B - 1) has mean at most 1 under the null, whatever their number, as long as beta >= 0 keeps
every factor positive. Statistic, B and beta depend on s and on the planned number of copies, on nothing seen: the
average over three reference families is an e-value at any stopping time, also if the blocks have several sizes. The
entropies of a fixed grid are tested upwards, and the bound is the last one before the first that is not rejected.

The bound concerns identical blocks: if the state drifts it says that some block exceeds it. No dimension is needed.
Proofs: docs/theory-suprema.md. References: Ville, Etude critique de la notion de collectif (1939); Grunwald, de Heide
and Koolen, J. R. Stat. Soc. B 86 (2024) 1091, arXiv:1906.07801.
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from entropest._checks import as_confidence, as_count
from entropest._types import BoolArray, FloatArray
from entropest.certification.evidence import SizedBlocks
from entropest.certification.identical_blocks_table import IdenticalBlocksTable, identical_blocks_table
from entropest.certification.mean_polynomial import character_columns
from entropest.errors import ArgumentValueError

__all__ = [
    "IdenticalBlocksEvidence",
    "UsedSupremum",
    "identical_blocks_evidence",
    "identical_blocks_lower_bound",
    "log_identical_blocks_e_values",
]

_DESIGN_CHANGE: Final = 3000
_LARGEST_STAKE: Final = 0.97
_EPS: Final = float(np.finfo(np.float64).eps)


@dataclass(frozen=True, slots=True, kw_only=True)
class UsedSupremum:
    """One supremum that a bound rests on.

    Attributes
    ----------
    copies : int
        Block size k.
    reference : str
        Reference family of the statistic.
    design : int
        Number of copies the statistic is made for.
    entropy : float
        The tested entropy s, in nat.
    coefficients : tuple of float
        c_1 .. c_k and e of the mean.
    upper : float
        Not below the supremum of the mean over all spectra of entropy at most s.
    bet : float
        beta.
    """

    copies: int
    reference: str
    design: int
    entropy: float
    coefficients: tuple[float, ...]
    upper: float
    bet: float


@dataclass(frozen=True, slots=True, kw_only=True)
class IdenticalBlocksEvidence:
    """A lower bound on the entropy and what it rests on.

    Attributes
    ----------
    lower : float
        The bound in nat, an entropy of the table or 0.
    entries : tuple of UsedSupremum
        For every cell of the table up to the bound, at the last entropy rejected in it, as few families as reject.
        Rejection there implies rejection at the lower entropies of the cell.
    table_digest : str
        SHA-256 of the table.
    """

    lower: float
    entries: tuple[UsedSupremum, ...]
    table_digest: str


def identical_blocks_lower_bound(
    blocks: Sequence[SizedBlocks], *, error: float, planned_blocks: Mapping[int, int] | None = None
) -> float:
    """Return the largest entropy (nat) below which the identical-blocks e-value rejects everything.

    Parameters
    ----------
    blocks : sequence of SizedBlocks
        One entry a size. Sizes outside 3 .. 6 enter with the factor 1.
    error : float
        Probability that the bound exceeds the entropy of identical blocks, at any stopping time.
    planned_blocks : mapping, optional
        Planned number of blocks of each size, fixed before the data; it tunes the bets. By default the numbers of the
        record, which must then have been fixed beforehand.

    Returns
    -------
    float
        An entropy of the table, at most about 3.4, or 0.

    Raises
    ------
    ArgumentValueError
        If `error` is not between 0 and 1, or blocks of sizes 3 .. 6 were measured and none were planned.

    Examples
    --------
    >>> from entropest.shapes import all_shapes
    >>> four = SizedBlocks(copies=4, shapes=all_shapes(4, 4), counts=np.array([500, 420, 60, 20, 0]))
    >>> round(identical_blocks_lower_bound([four], error=0.05), 2)
    0.58
    """
    as_confidence(error, "error")
    table = identical_blocks_table()
    rejected = _rejected(_tests(blocks, planned_blocks, table), table, _threshold(error))
    return _lower(rejected, table)


def identical_blocks_evidence(
    blocks: Sequence[SizedBlocks], *, error: float, planned_blocks: Mapping[int, int] | None = None
) -> IdenticalBlocksEvidence:
    """Return the bound of `identical_blocks_lower_bound` together with the suprema that it rests on."""
    as_confidence(error, "error")
    table = identical_blocks_table()
    tests = _tests(blocks, planned_blocks, table)
    rejected = _rejected(tests, table, _threshold(error))
    entries = [
        _entry(test, table, family, end)
        for end in rejected
        for family in _rejecting(end.logs, _threshold(error))
        for test in tests
    ]
    return IdenticalBlocksEvidence(lower=_lower(rejected, table), entries=tuple(entries), table_digest=table.digest)


def log_identical_blocks_e_values(
    blocks: Sequence[SizedBlocks], *, planned_blocks: Mapping[int, int] | None = None
) -> FloatArray:
    """Return the logarithms of the e-values against the entropies of the table, rounded down, (cells, points).

    Examples
    --------
    >>> logs = log_identical_blocks_e_values([])
    >>> logs.shape == identical_blocks_table().entropies.shape, float(logs.max())
    (True, 0.0)
    """
    table = identical_blocks_table()
    tests = _tests(blocks, planned_blocks, table)
    if not tests:
        return np.zeros_like(table.entropies)
    return _log_mean(np.moveaxis(_log_products(tests, table), 1, -1))


@dataclass(frozen=True, slots=True, kw_only=True)
class _SizeTest:
    """The blocks of one size: counts of all diagrams (D,), statistics (cells, families, D), suprema, bets."""

    copies: int
    design: int
    counts: FloatArray
    coefficients: FloatArray
    values: FloatArray
    errors: FloatArray
    suprema: FloatArray
    bets: FloatArray


def _tests(
    blocks: Sequence[SizedBlocks], planned_blocks: Mapping[int, int] | None, table: IdenticalBlocksTable
) -> list[_SizeTest]:
    parts = [part for part in blocks if part.copies in table.coefficients]
    if not parts:
        return []
    planned = {part.copies: int(part.counts.sum()) for part in blocks} if planned_blocks is None else planned_blocks
    copies = sum(
        size * as_count(number, f"planned_blocks[{size}]")
        for size, number in planned.items()
        if size in table.coefficients
    )
    if copies == 0 and planned_blocks is not None:
        raise ArgumentValueError(
            f"planned_blocks must plan blocks of 3 to 6 copies for a record that has some, got {dict(planned_blocks)}"
        )
    design = 0 if copies < _DESIGN_CHANGE else 1
    boldness = math.sqrt(table.designs[design] / max(copies, 1))
    return [_size_test(part, table, design, boldness) for part in parts]


def _size_test(part: SizedBlocks, table: IdenticalBlocksTable, design: int, boldness: float) -> _SizeTest:
    diagrams, columns = character_columns(part.copies)
    place = {diagram.rows: index for index, diagram in enumerate(diagrams)}
    counts = np.zeros(len(diagrams))
    for shape, count in zip(part.shapes.tolist(), part.counts.tolist(), strict=True):
        counts[place[tuple(row for row in shape if row)]] += count
    coefficients = table.coefficients[part.copies][:, design]
    suprema = table.suprema[part.copies][:, design]
    values = coefficients @ columns.T
    room = 1.0 - values.min(axis=-1) / suprema.max(axis=-1)
    return _SizeTest(
        copies=part.copies,
        design=table.designs[design],
        counts=counts,
        coefficients=coefficients,
        values=values,
        errors=4.0 * part.copies * _EPS * np.abs(coefficients).sum(axis=-1),
        suprema=suprema,
        bets=np.minimum(boldness, _LARGEST_STAKE / np.maximum(room, 1e-9)),
    )


def _log_products(
    tests: Sequence[_SizeTest],
    table: IdenticalBlocksTable,
    *,
    cells: slice = slice(None),
    points: slice = slice(None),
) -> FloatArray:
    """Return log(weight) plus the sum of the logarithms of all factors, rounded down: (cells, families, points)."""
    chosen = range(min(len(test.suprema) for test in tests))[cells]
    total = np.zeros(1)
    for test in tests:
        uppers = test.suprema[chosen.start : chosen.stop, :, points, None]
        values, errors, bets = (
            array[chosen.start : chosen.stop, :, None]
            for array in (test.values, test.errors[..., None], test.bets[..., None])
        )
        ratios = values / uppers
        factors = 1.0 + bets * (ratios - 1.0)
        absolute = bets * (errors / uppers + 4.0 * _EPS * np.abs(ratios)) + 4.0 * _EPS * (1.0 + bets)
        logs = np.log(factors)
        total = total + (logs - 2.0 * absolute / factors - 32.0 * _EPS * np.abs(logs)) @ test.counts
    return np.asarray(total + np.log(table.weights)[:, None], dtype=np.float64)


def _log_mean(logs: FloatArray) -> FloatArray:
    """Return the logarithm of the sum over the families, the last axis."""
    top = logs.max(axis=-1)
    return np.asarray(top + np.log(np.exp(logs - top[..., None]).sum(axis=-1)), dtype=np.float64)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Rejected:
    """The last entropy rejected in a cell, and the logarithms of the weighted products there, (families,)."""

    cell: int
    point: int
    logs: FloatArray


def _rejected(tests: Sequence[_SizeTest], table: IdenticalBlocksTable, threshold: float) -> list[_Rejected]:
    """Go upwards through the cells, and through the first cell that is not rejected as a whole.

    Inside a cell the e-values fall, as the suprema rise: a cell is rejected where its last entropy is.
    """
    if not tests:
        return []
    last = table.entropies.shape[1] - 1
    ends = _log_products(tests, table, points=slice(last, None))[..., 0]
    full = _count_before_first(_log_mean(ends) < threshold)
    found = [_Rejected(cell=cell, point=last, logs=ends[cell]) for cell in range(full)]
    if full < len(ends):
        inside = _log_products(tests, table, cells=slice(full, full + 1))[0].T
        steps = _count_before_first(_log_mean(inside) < threshold)
        if steps:
            found.append(_Rejected(cell=full, point=steps - 1, logs=inside[steps - 1]))
    return found


def _count_before_first(flags: BoolArray) -> int:
    """Return how many entries come before the first true one."""
    return int(np.argmax(flags)) if flags.any() else len(flags)


def _lower(rejected: Sequence[_Rejected], table: IdenticalBlocksTable) -> float:
    return float(table.entropies[rejected[-1].cell, rejected[-1].point]) if rejected else 0.0


def _threshold(error: float) -> float:
    return -math.log(error) + 1e-9


def _rejecting(logs: FloatArray, threshold: float) -> tuple[int, ...]:
    """Return the smallest set of families that rejects: those with the largest products."""
    order = np.argsort(-logs, kind="stable").tolist()
    for size in range(1, len(order)):
        if np.logaddexp.reduce(logs[order[:size]]) >= threshold:
            return tuple(order[:size])
    return tuple(order)


def _entry(test: _SizeTest, table: IdenticalBlocksTable, family: int, end: _Rejected) -> UsedSupremum:
    return UsedSupremum(
        copies=test.copies,
        reference=table.references[family],
        design=test.design,
        entropy=float(table.entropies[end.cell, end.point]),
        coefficients=tuple(test.coefficients[end.cell, family].tolist()),
        upper=float(test.suprema[end.cell, family, end.point]),
        bet=float(test.bets[end.cell, family]),
    )

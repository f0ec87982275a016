"""Entropy-tuned e-values: witnesses, bets and weights depend on the tested entropy and on the planned size.

For every point s of a fixed grid a few witnesses fitted to states of entropy near s, each with a bet fitted to the
planned number of blocks, give a weighted average of products that is an e-value against "the entropy is at most s".
The grid is scanned upwards while the e-value reaches 1/error; the last point accepted is the bound. An error needs an
acceptance at the first grid point above the truth, whatever happens at the other points (proof: docs/theory.md,
"Scans").

Identical blocks: any stopping time, the planned size being a guess made before the data. Drifting blocks: their number
must have been fixed beforehand, all sizes share one bet, and the bound is on the average entropy over the blocks.
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cache
from typing import Final

import numpy as np

from entropest._types import FloatArray, IntArray
from entropest.certification.evidence import SizedBlocks
from entropest.certification.witnesses import (
    LARGEST_ORDER,
    WitnessLadder,
    all_characters,
    chord,
    interpolant,
    ladder_of,
    witness_values,
)
from entropest.diagrams import young_diagrams

__all__ = [
    "COMPONENTS",
    "GRID",
    "cell_of",
    "log_tuned_e_values",
    "smooth_spectrum",
    "tuned_bets",
    "tuned_chord",
    "tuned_lower_bound",
    "tuned_nodes",
    "tuned_weights",
]

_FINE: Final = 200
_GROWTH: Final = 1.005
_CELL: Final = 6

GRID: Final = tuple(
    round(0.001 * i, 3) if i <= _FINE else float(f"{0.001 * _FINE * _GROWTH ** (i - _FINE):.6g}") for i in range(1, 940)
)
"""The tested entropies, in nats: steps of 0.001 up to 0.2, then of half a percent up to 8.0."""

_PATTERNS: Final[dict[int, tuple[tuple[str, ...], ...]]] = {
    3: (("R1",), ("R2",), ("R3.5",), ("0.3",), ("0.5",)),
    4: (
        ("R1", "1"),
        ("R2.3", "R0.3"),
        ("R1.4", "R0.4"),
        ("R3", "R0.3"),
        ("0.1", "R0.1"),
        ("0.18", "R0.1"),
        ("0.03", "0.8"),
    ),
    6: (
        ("R0.93", "1", "1"),
        ("R2", "R0.3", "1"),
        ("R1.25", "R0.5", "1"),
        ("0.1", "1", "1"),
        ("0.06", "1", "1"),
        ("0.18", "1", "1"),
        ("0.03", "1", "1"),
    ),
}
COMPONENTS: Final = 7
_CHUNK: Final = 500
_LARGEST_FRACTION: Final = 1.0 - 1e-6


@dataclass(frozen=True, slots=True, kw_only=True)
class _TunedWitnesses:
    """Witnesses of all cells of the grid, cell after cell, each with its spread in a typical state of that entropy."""

    ladder: WitnessLadder
    spread: FloatArray
    components: int


def tuned_lower_bound(
    blocks: Sequence[SizedBlocks],
    *,
    error: float,
    planned: Mapping[int, int],
    drifting: bool = False,
    leading: int = 0,
) -> float:
    """Return the last entropy (nat) of the grid that the upward scan rejects at level `error`, 0 if none.

    Parameters
    ----------
    blocks : sequence of SizedBlocks
        Blocks of at least two copies, one entry a size.
    error : float
        Probability that the bound exceeds the entropy.
    planned : mapping of int to int
        Number of blocks of each size, as planned before the data; it sets the bets and has no bearing on validity.
    drifting : bool
        Bound the plain average over the blocks instead; their number must have been fixed beforehand.
    leading : int
        The component that has most of the weight, fixed before the data.

    References
    ----------
    Derived in docs/theory.md, "Scans".

    Examples
    --------
    >>> pairs = SizedBlocks(copies=2, shapes=np.array([[2, 0], [1, 1]]), counts=np.array([750, 250]))
    >>> tuned_lower_bound([pairs], error=0.05, planned={2: 1000})
    0.602185
    """
    logs = log_tuned_e_values(blocks, error=error, planned=planned, drifting=drifting, leading=leading)
    threshold = -math.log(error) + 1e-9 + 1e-14 * sum(float(part.counts.sum()) for part in blocks)
    accepted = logs >= threshold
    last = len(GRID) if accepted.all() else int(np.argmin(accepted))
    return GRID[last - 1] if last else 0.0


def log_tuned_e_values(
    blocks: Sequence[SizedBlocks],
    *,
    error: float,
    planned: Mapping[int, int],
    drifting: bool = False,
    leading: int = 0,
) -> FloatArray:
    """Return the logarithm of the e-value at every point of GRID, (len(GRID),); arguments as in the bound."""
    grid = np.array(GRID)[:, None]
    sizes = [part.copies for part in blocks]
    bets = tuned_bets(sizes, error=error, planned=planned, drifting=drifting)
    logs = np.broadcast_to(np.log(tuned_weights(planned, sizes, leading)), (len(GRID), COMPONENTS)).copy()
    for part in blocks:
        tuned = _tuned_witnesses(part.copies)
        values = witness_values(tuned.ladder, part.shapes)
        for start in range(0, len(part.counts), _CHUNK):
            excess = values[:, start : start + _CHUNK][_chosen(tuned)] - grid[..., None]
            counts = part.counts[start : start + _CHUNK].astype(np.float64)
            logs += np.log1p(bets[part.copies][..., None] * excess) @ counts
    top = logs.max(axis=1, keepdims=True)
    return np.asarray(top[:, 0] + np.log(np.exp(logs - top).sum(axis=1)))


def tuned_bets(
    sizes: Sequence[int], *, error: float, planned: Mapping[int, int], drifting: bool
) -> dict[int, FloatArray]:
    """Return the bet b of every component at every point of GRID, (len(GRID), 7), for each block size.

    b is sqrt(2 log(1/error) / planned blocks) over the spread of the witness, at most what keeps every factor positive.

    Examples
    --------
    >>> tuned_bets([2], error=0.05, planned={2: 1000}, drifting=False)[2].shape == (len(GRID), 7)
    True
    """
    bets = {}
    for size in sizes:
        tuned = _tuned_witnesses(size)
        chosen = _chosen(tuned)
        wanted = math.sqrt(2.0 * math.log(1.0 / error) / max(1, planned[size])) / tuned.spread[chosen]
        bets[size] = np.minimum(wanted, _LARGEST_FRACTION / (np.array(GRID)[:, None] - tuned.ladder.floors[chosen]))
    if drifting and bets:
        return dict.fromkeys(sizes, np.min(list(bets.values()), axis=0))
    return bets


def tuned_weights(planned: Mapping[int, int], sizes: Sequence[int], leading: int = 0) -> FloatArray:
    """Return the weights of the components: the leading one has most, the more so the smaller the plan.

    Examples
    --------
    >>> float(tuned_weights({2: 1000}, [2]).sum().round(12))
    1.0
    """
    most = min(0.9, max(0.6, 1.0 - 0.08 * math.log10(max(1, sum(planned[size] for size in sizes)))))
    weights = np.full(COMPONENTS, (1.0 - most) / (COMPONENTS - 1))
    weights[leading] = most
    return weights


def cell_of(point: int) -> int:
    """Return the cell that a point of GRID, given by its index, belongs to."""
    return point // _CELL


def _chosen(tuned: _TunedWitnesses) -> IntArray:
    """Return which witness of all cells each component uses at each point, (len(GRID), 7)."""
    cells = np.arange(len(GRID))[:, None] // _CELL
    return np.asarray(cells * tuned.components + np.minimum(np.arange(COMPONENTS), tuned.components - 1))


def tuned_chord(cell: int) -> int:
    """Return the number r of the chord that blocks of two copies use in a cell of the grid."""
    return math.floor(math.exp(_anchor(cell)))


def tuned_nodes(copies: int, cell: int) -> list[tuple[float, ...]]:
    """Return the interpolation nodes of the witnesses in a cell of the grid, for blocks of at least three copies.

    The numbers behind R in the patterns are powers: R2 stands for exp(-2 s) at the middle s of the cell. All nodes
    are rounded to six digits.

    Examples
    --------
    >>> tuned_nodes(3, 100)[0]
    (0.223108,)
    """
    anchor = _anchor(cell)
    order = min(copies, LARGEST_ORDER)
    return [
        tuple(float(f"{math.exp(-float(mark[1:]) * anchor):.6g}") if mark[0] == "R" else float(mark) for mark in marks)
        for marks in _PATTERNS[4 if order == 5 else order]
    ]


def _anchor(cell: int) -> float:
    """Return the entropy that the witnesses of a cell are fitted to."""
    return GRID[min(cell * _CELL + _CELL // 2, len(GRID) - 1)]


@cache
def _tuned_witnesses(copies: int) -> _TunedWitnesses:
    order = min(copies, LARGEST_ORDER)
    cells = range(-(-len(GRID) // _CELL))
    if order == 2:
        rows: list[tuple[float, ...]] = [chord(tuned_chord(cell)) for cell in cells]
    else:
        rows = [interpolant(nodes, order % 2 == 1) for cell in cells for nodes in tuned_nodes(copies, cell)]
    ladder = ladder_of(rows, copies)
    components = len(rows) // len(cells)
    spread = np.concatenate(
        [
            _typical_spread(ladder.coefficients[cell * components : (cell + 1) * components], _anchor(cell))
            for cell in cells
        ]
    )
    return _TunedWitnesses(ladder=ladder, spread=spread * math.sqrt(order / copies), components=components)


def _typical_spread(coefficients: FloatArray, entropy: float) -> FloatArray:
    """Return the standard deviation of witnesses under the law of a smooth spectrum of that entropy."""
    order = coefficients.shape[1]
    probabilities = _law_of_small_blocks(smooth_spectrum(entropy), order)
    values = coefficients @ all_characters(order, order).T
    mean = values @ probabilities
    return np.sqrt(np.maximum(values**2 @ probabilities - mean**2, 1e-12))


def smooth_spectrum(entropy: float) -> FloatArray:
    """Return eigenvalues proportional to exp(-b i^2), i = 0, 1, ..., with the given entropy (nat)."""
    squares = np.arange(3.0 * math.exp(entropy) + 2.0) ** 2
    low, high = 1e-12, 100.0
    for _ in range(60):
        middle = math.sqrt(low * high)
        weights = np.exp(-middle * squares)
        total = weights.sum()
        value = math.log(total) + middle * float(weights @ squares) / total
        low, high = (middle, high) if value > entropy else (low, middle)
    weights = np.exp(-low * squares)
    return np.asarray(weights / weights.sum())


def _law_of_small_blocks(spectrum: FloatArray, copies: int) -> FloatArray:
    """Return the outcome law over young_diagrams(copies) by determinants; its rounding has no bearing on validity."""
    powers = [float(np.sum(spectrum**j)) for j in range(copies + 1)]
    h = [1.0]
    for n in range(1, copies + 1):
        h.append(sum(powers[j] * h[n - j] for j in range(1, n + 1)) / n)
    law = []
    for diagram in young_diagrams(copies):
        rows = diagram.rows
        columns = range(len(rows))
        matrix = [[h[row - i + j] if row - i + j >= 0 else 0.0 for j in columns] for i, row in enumerate(rows)]
        law.append(diagram.standard_tableaux * max(0.0, float(np.linalg.det(np.array(matrix)))))
    return np.array(law)

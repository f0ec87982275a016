"""What the letters of a random tableau cost beyond its rows: one term for each pair of neighbouring rows.

For the law of tableaux of shape lambda with letters of probabilities p_1 >= p_2 >= ..., y_i = -log p_i and
a_i = lambda_i - lambda_{i+1},

    E[content . y] >= lambda . y + sum_i X_{a_i}(y_{i+1} - y_i),   X_a(z) = b(z) - b((a + 1) z),   b(z) = z / (e^z - 1).

For any kink z0 > 0, X_a(z) >= min(X_a(z0) z / z0, X_a(z0) + b'(z0) (z - z0)), the lower of two lines. With one line
chosen for each pair the rows separate again, and the minimum over all choices is a minimum along a chain. Derived in
docs/theory-large-diagrams.md, "Gap terms".
"""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np

from entropest._types import FloatArray
from entropest.certification.dual_rows import Multipliers, row_minima

__all__ = ["GapLines", "chain_minimum", "gap_lines"]

_SHRINK: Final = 1e-11


@dataclass(frozen=True, slots=True, kw_only=True)
class GapLines:
    """Two lines offset + slope z for every pair of neighbouring rows, (2, R - 1) each, in boxes."""

    slopes: FloatArray
    offsets: FloatArray


def gap_lines(rows: FloatArray, kinks: FloatArray) -> GapLines:
    """Return the lines below X_a at the given kinks (at least 0.01), lowered beyond their rounding errors."""
    gaps = rows[:-1] - rows[1:]
    height = np.maximum(0.0, _bose(kinks) - _bose((gaps + 1.0) * kinks) - _SHRINK)
    grown = np.expm1(kinks)
    falling = (grown - kinks * (1.0 + grown)) / grown**2 - _SHRINK
    rising = np.where(gaps > 0.0, height / kinks * (1.0 - _SHRINK), 0.0)
    falling = np.where(gaps > 0.0, falling, 0.0)
    offset = np.where(gaps > 0.0, height - falling * kinks - _SHRINK, 0.0)
    return GapLines(slopes=np.stack([rising, falling]), offsets=np.stack([np.zeros_like(offset), offset]))


def chain_minimum(
    m: Multipliers, rows: FloatArray, size: int, lines: GapLines, beyond: FloatArray, cap: float
) -> float:
    """Return a lower bound of the sum of all rows with their gap terms.

    The rows from some place on may all lie beyond the cap, where row i gives `beyond[i]` and gap terms are dropped;
    before it every gap takes one of its two lines.
    """
    incoming = np.concatenate([np.zeros((2, 1)), lines.slopes], axis=1)
    outgoing = np.concatenate([lines.slopes, np.zeros((2, 1))], axis=1)
    outgoing = np.concatenate([outgoing, np.zeros((1, len(rows)))])
    minima = row_minima(m, (rows + incoming[:, None] - outgoing[None]) / size, cap)
    gains = m.kappa / size * lines.offsets
    rest = np.append(np.cumsum(beyond[::-1])[::-1], 0.0)
    least = float(rest[0])
    entered = np.zeros(2)
    for i in range(len(rows)):
        ways = entered[:, None] + minima[:, :, i]
        least = min(least, float(ways[:, 2].min()) + float(rest[i + 1]))
        if i + 1 < len(rows):
            entered = ways[:, :2].min(axis=0) + gains[:, i]
    return least - 1e-14 * (len(rows) + 1) * (1.0 + math.fsum(np.abs(minima).max(axis=(0, 1))))


def _bose(z: FloatArray) -> FloatArray:
    """Return z / (e^z - 1) for z > 0, 0 where e^z overflows."""
    with np.errstate(over="ignore"):
        return np.asarray(z / np.expm1(z))

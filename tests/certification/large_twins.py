"""Slow plain twins of the bounds from large diagrams: tableaux one by one, rows minimised on dense grids."""

import itertools
import math
from collections.abc import Iterator, Sequence

import numpy as np

GRID = 40_001


def tableaux(rows: Sequence[int], letters: int) -> Iterator[tuple[int, ...]]:
    """Contents of all semistandard tableaux, letter by letter: horizontal strips are removed from the shape."""
    rows = tuple(rows)
    if letters == 0:
        if sum(rows) == 0:
            yield ()
        return
    below = [*rows[1:], 0]
    for inner in itertools.product(*(range(low, high + 1) for low, high in zip(below, rows, strict=True))):
        if letters <= len(rows) and any(inner[letters - 1 :]):
            continue
        for content in tableaux(inner, letters - 1):
            yield (*content, sum(rows) - sum(inner))


def mean_energy(rows: Sequence[int], p: Sequence[float], y: Sequence[float]) -> float:
    """E[content . y] over tableaux weighted with the product of the probabilities of their letters."""
    weights, energies = [], []
    for content in tableaux(rows, len(p)):
        weights.append(math.prod(x**c for x, c in zip(p, content, strict=True)))
        energies.append(sum(c * e for c, e in zip(content, y, strict=True)))
    return sum(w * e for w, e in zip(weights, energies, strict=True)) / sum(weights)


def bose(z: float) -> float:
    return -z * math.exp(-z) / math.expm1(-z) if z > 0.0 else 1.0


def gap_term(gap: int, z: float) -> float:
    return bose(z) - bose((gap + 1) * z)


def capped_energy(rows: Sequence[int], p: Sequence[float], cap: float) -> float:
    """rows . y and the gap terms of neighbouring rows that lie within the cap, y = min(-log p, cap)."""
    y = [min(-math.log(x), cap) if x > 0 else cap for x in p]
    total = sum(row * energy for row, energy in zip(rows, y, strict=False))
    for i in range(len(rows) - 1):
        if rows[i + 1] > 0 and p[i + 1] >= math.exp(-cap):
            total += gap_term(rows[i] - rows[i + 1], y[i + 1] - y[i])
    return total


def lower_statistic(rows: Sequence[int], p: Sequence[float], cap: float) -> float:
    """The supremum over t in (0, 1] of t U - n log Z_t; at most log(1/error) for spectra in the confidence set."""
    n = sum(rows)
    energy = capped_energy(rows, p, cap)
    letters = np.array([x for x in p if x > 0])
    y = np.minimum(-np.log(letters), cap)
    t = np.linspace(0.0, 1.0, 2001)[:, None]
    log_z = np.log((letters * np.exp(t * y)).sum(axis=1))
    return float((t[:, 0] * energy - n * log_z).max())


def upper_statistic(rows: Sequence[int], p: Sequence[float], excess: float) -> float:
    """The supremum over t > 0 of -t (rows . y + excess) - n log sum p^(1 + t)."""
    n = sum(rows)
    energy = -sum(row * math.log(x) for row, x in zip(rows, p, strict=False) if row) + excess
    letters = np.array([x for x in p if x > 0])
    t = np.geomspace(1e-4, 200.0, 4001)[:, None]
    log_z = np.log((letters ** (1.0 + t)).sum(axis=1))
    return float((-t[:, 0] * energy - n * log_z).max())


def grid_minimum(sign: int, h: float, weight: float, t: float, k: float, shift: float, end: float) -> float:
    """The least phi on a dense grid of [0, end]."""
    y = np.linspace(0.0, end, GRID)
    phi = weight * h * y + np.exp(-y) * (sign * y + shift - k * np.expm1(sign * t * y))
    return float(phi.min())


def plain_lower_value(
    rows: Sequence[int],
    error: float,
    t: float,
    kappa: float,
    log_z0: float,
    shift: float,
    kinks: Sequence[float] = (),
    dim: int | None = None,
) -> float:
    """The dual of the lower bound with grids instead of roots and every choice of lines instead of a chain."""
    n, cap = sum(rows), math.log(sum(rows))
    z0 = math.exp(log_z0)
    k = kappa / (t * z0)

    def row(boxes: float) -> float:
        return grid_minimum(1, boxes / n, kappa, t, k, shift, cap)

    beyond_p = math.exp(-cap) * min(0.0, cap + shift - k * math.expm1(t * cap)) if dim is not None else 0.0
    beyond = [kappa * length / n * cap + beyond_p for length in rows]
    empty = 0.0 if dim is None else (dim - len(rows)) * min(0.0, row(0.0))
    if kinks:
        totals = [sum(beyond)]
        for within in range(1, len(rows) + 1):
            for choice in itertools.product((0, 1), repeat=within - 1):
                slopes, offset = [0.0], 0.0
                for i, line in enumerate(choice):
                    height, z = gap_term(rows[i] - rows[i + 1], kinks[i]), kinks[i]
                    step = 1e-6
                    falling = (bose(z + step) - bose(z - step)) / (2 * step) if rows[i] > rows[i + 1] else 0.0
                    slopes.append(height / z if line == 0 else falling)
                    offset += 0.0 if line == 0 else height - falling * z
                slopes.append(0.0)
                shifted = [rows[i] + slopes[i] - slopes[i + 1] for i in range(within)]
                totals.append(sum(map(row, shifted)) + kappa / n * offset + sum(beyond[within:]))
        total = min(totals)
    else:
        total = sum(min(row(length), end) for length, end in zip(rows, beyond, strict=True))
    constant = k * (z0 - 1 - z0 * log_z0) - shift
    return constant - kappa * math.log(1 / error) / (n * t) + total + empty


def shannon(p: Sequence[float]) -> float:
    return -sum(x * math.log(x) for x in p if x > 0)


def bounded_difference_value(rows: Sequence[int], error: float) -> float:
    """S(rows/n) - (1 + log n) sqrt(log(1/error)/(2n)): McDiarmid's inequality, a bound that the dual should beat."""
    n = sum(rows)
    entropy = -sum(row / n * math.log(row / n) for row in rows if row)
    return entropy - (1 + math.log(n)) * math.sqrt(math.log(1 / error) / (2 * n))

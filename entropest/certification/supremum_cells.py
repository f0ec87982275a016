"""Cells of the branch and bound of :mod:`.suprema`: first partition, narrowing, bounding, halving.

A cell holds spectra (w repeated t times, x, y repeated r times, z), w >= x >= y >= z >= 0, sum 1: t fixed, r in a range
that may be infinite, every level in an interval, and so the mass M = r y of the repeated level.

A bound on Phi over the part of a cell with S <= s, for any nu >= 0 and any mu: with P_2 in [a, b] on the cell,
P_2^2 <= (a + b) P_2 - a b, hence

    Phi <= c_1 - e a b + nu s + mu + t U(w) + U(x) + r U(y) + U(z),    psi(u) = f(u) + nu u log u - mu u,

f(u) = (c_2 + e (a + b)) u^2 + sum_{j>=3} c_j u^j, and U bounds psi on the interval of its level. The y term may be
replaced by M times a bound of psi(u)/u, which serves for a whole range of r. Every bound is raised by more than the
rounding errors of its evaluation. Proofs: docs/theory-suprema.md.
"""

import math
from dataclasses import dataclass, fields
from typing import Final, Self

import numpy as np

from entropest._types import BoolArray, FloatArray, IntArray
from entropest.certification.mean_polynomial import MeanPolynomial

__all__ = ["Bounded", "Cells", "Problem", "bounded", "centre_values", "first_cells", "halves", "narrowed"]

_PAD: Final = 1e-14
_TINY: Final = 1e-300
_RANGES: Final = ((1.0, 1.0), (2.0, 4.0), (5.0, 16.0), (17.0, math.inf))
_W, _X, _Y, _Z = range(4)


@dataclass(frozen=True, slots=True, kw_only=True)
class Problem:
    """What is bounded: one mean at J entropies s, and for each of them multipliers nu, mu worth trying everywhere."""

    mean: MeanPolynomial
    entropies: FloatArray
    nu: FloatArray
    mu: FloatArray


@dataclass(frozen=True, slots=True, kw_only=True)
class Cells:
    """N cells: which entropy, t and the range of r, all (N,); levels w, x, y, z between `low` and `high`, (4, N); M."""

    index: IntArray
    top: FloatArray
    repeats_low: FloatArray
    repeats_high: FloatArray
    low: FloatArray
    high: FloatArray
    mass_low: FloatArray
    mass_high: FloatArray

    def __len__(self) -> int:
        return len(self.top)

    def take(self, chosen: BoolArray | slice) -> Self:
        """Return some of the cells."""
        return type(self)(**{field.name: getattr(self, field.name)[..., chosen] for field in fields(self)})

    def joined(self, other: Self) -> Self:
        """Return these cells and those of `other`."""
        return type(self)(
            **{
                field.name: np.concatenate([getattr(self, field.name), getattr(other, field.name)], axis=-1)
                for field in fields(self)
            }
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Bounded:
    """Upper bounds (N,), and how much of each comes from the spread of w, x, z and r: (4, N)."""

    upper: FloatArray
    spread: FloatArray


def first_cells(problem: Problem) -> Cells:
    """Return cells that cover the family: the largest eigenvalue is at least exp(-s), so t <= exp(s)."""
    rows: list[tuple[float, ...]] = []
    for index, entropy in enumerate(problem.entropies.tolist()):
        least = math.exp(-entropy) * (1.0 - 1e-12)
        tops = range(1, int(math.exp(entropy) + 1e-9) + 1)
        if problem.mean.coefficients[2] <= 0.0:
            rows += [(index, t, 1, 1, least, 0, 0, 0, 1 / t, 1 / (t + 1), 0, 0, 0) for t in tops]
            continue
        for r, s in _RANGES:
            rows.append((index, 0, r, s, 0, least, 0, 0, 0, 1, 1 / (r + 1), 1 / (r + 2), 1))
            rows += [
                (index, t, r, s, least, 0, 0, 0, 1 / t, 1 / (t + 1), 1 / (t + r + 1), 1 / (t + r + 2), 1) for t in tops
            ]
    table = np.array(rows).T
    return Cells(
        index=table[0].astype(np.int64),
        top=table[1],
        repeats_low=table[2],
        repeats_high=table[3],
        low=table[4:8],
        high=np.where(table[8:12] > 0.0, table[8:12] + _PAD, 0.0),
        mass_low=np.zeros(len(rows)),
        mass_high=table[12],
    )


def narrowed(cells: Cells, problem: Problem) -> Cells:
    """Shrink cells by the constraints on sum and order; drop those left empty or with all entropies above s."""
    t, r, s = cells.top, cells.repeats_low, cells.repeats_high
    low, high = cells.low.copy(), cells.high.copy()
    has_top = t > 0.0
    others_low, others_high = t * low[_W] + low[_X] + low[_Z], t * high[_W] + high[_X] + high[_Z]
    with np.errstate(invalid="ignore"):  # 0 times infinity: no information
        most = np.fmin(1.0 - others_low, s * high[_Y]) + _PAD
    mass_high = np.minimum(cells.mass_high, most)
    mass_low = np.maximum(cells.mass_low, np.maximum(1.0 - others_high, r * low[_Y]) - _PAD)
    low[_Y] = np.maximum(low[_Y], np.maximum(mass_low / s - _PAD, low[_Z]))
    high[_Y] = np.minimum(high[_Y], np.minimum(mass_high / r + _PAD, high[_X]))
    high[_Z] = np.minimum(high[_Z], high[_Y])
    low[_X] = np.maximum(low[_X], np.maximum(low[_Y], 1.0 - t * high[_W] - high[_Z] - mass_high - _PAD))
    high[_X] = np.minimum(high[_X], 1.0 - t * low[_W] - low[_Z] - mass_low + _PAD)
    high[_X] = np.where(has_top, np.minimum(high[_X], high[_W]), high[_X])
    room = np.maximum(t, 1.0)
    low[_W] = np.where(
        has_top,
        np.maximum(low[_W], np.maximum(low[_X], (1.0 - high[_X] - high[_Z] - mass_high) / room - _PAD)),
        0.0,
    )
    high[_W] = np.where(has_top, np.minimum(high[_W], (1.0 - low[_X] - low[_Z] - mass_low) / room + _PAD), 0.0)
    least_entropy = np.minimum(_xi(low), _xi(high))
    repeated = np.maximum(mass_low * -_log(high[_Y]), r * least_entropy[_Y])
    least = t * least_entropy[_W] + least_entropy[_X] + repeated + least_entropy[_Z]
    keep = (low <= high).all(axis=0) & (mass_low <= mass_high) & (least <= problem.entropies[cells.index] + 1e-9)
    return _with(cells, low=low, high=high, mass_low=mass_low, mass_high=mass_high).take(keep)


def centre_values(cells: Cells, problem: Problem) -> FloatArray:
    """Return the mean at the centre of every cell, minus infinity where that is no spectrum of entropy at most s."""
    levels = 0.5 * (cells.low + cells.high)
    rest = 1.0 - cells.top * levels[_W] - levels[_X] - levels[_Z]
    levels[_Y] = np.maximum(rest, 0.0) / cells.repeats_low
    ones = np.ones(len(cells))
    multiplicities = np.stack([cells.top, ones, cells.repeats_low, ones])
    entropies = (multiplicities * _xi(levels)).sum(axis=0)
    inside = (rest >= 0.0) & (entropies <= problem.entropies[cells.index])
    return np.where(inside, problem.mean.at(levels, multiplicities), -np.inf)


def bounded(cells: Cells, problem: Problem) -> Bounded:
    """Bound the mean over every cell, by the best of four choices of the multipliers."""
    geometry = _Geometry(cells, problem)
    upper = np.full(len(cells), np.inf)
    excess = np.zeros((4, len(cells)))
    for nu, mu in geometry.multipliers(problem):
        bound, over = geometry.bound(nu, mu)
        better = bound < upper
        upper = np.where(better, bound, upper)
        excess = np.where(better, over, excess)
    return Bounded(upper=upper, spread=_spread(cells, excess))


class _Geometry:
    """What the bounds of a cell share for all multipliers."""

    def __init__(self, cells: Cells, problem: Problem) -> None:
        c, e = problem.mean.coefficients, problem.mean.square
        low, high = cells.low, cells.high
        self.cells = cells
        self.entropy = problem.entropies[cells.index]
        self.centre, self.half = 0.5 * (low + high), 0.5 * (high - low)
        least, most = _purity(cells, low, cells.mass_low), np.minimum(_purity(cells, high, cells.mass_high), 1.0)
        most = np.maximum(least, most)
        second = c[1] + e * (least + most)
        self.constant = c[0] - e * least * most
        self.size = sum((j + 1) ** 2 * abs(value) for j, value in enumerate(c)) + 8.0 * e
        powers = np.array([0.0, 0.0, 0.0, *c[2:]])
        x = self.centre
        self.value = second * x**2 + _polynomial(powers, x)
        self.slope = 2.0 * second * x + _polynomial(_derivative(powers), x)
        negative = np.array([0.0, 0.0, 0.0, 0.0, *c[3:]])
        self.curvature = 2.0 * second + 6.0 * np.maximum(c[2] * low, c[2] * high)
        self.curvature += _polynomial(_derivative(_derivative(negative)), low)
        self.log_centre = _log(x)
        self.low_log, self.high_log = -_xi(low), -_xi(high)
        self.inverse_low = np.where(low > 0.0, 1.0 / np.maximum(low, _TINY), np.inf)
        ratio = powers[1:]
        y = x[_Y]
        self.ratio_value = second * y + _polynomial(ratio, y)
        self.ratio_slope = second + _polynomial(_derivative(ratio), y)
        self.ratio_curvature = _polynomial(_derivative(_derivative(ratio)), low[_Y])
        self.log_high_y = _log(high[_Y])
        self.mass = 0.5 * (cells.mass_low + cells.mass_high)
        self.single = cells.repeats_low == cells.repeats_high

    def multipliers(self, problem: Problem) -> list[tuple[FloatArray, FloatArray]]:
        """Return choices of nu and mu: stationary at the centre, nu = 0, and those of the whole problem."""
        cells, x = self.cells, self.centre
        ones = np.ones(len(cells))
        middle = np.where(np.isinf(cells.repeats_high), 2.0 * cells.repeats_low, np.sqrt(cells.repeats_low))
        middle = np.where(self.single, cells.repeats_low, middle)
        weights = np.where(x > 1e-9, np.stack([cells.top, ones, middle, ones]) * x, 0.0)
        weights = weights / weights.sum(axis=0)
        steep = self.log_centre + 1.0
        mean_steep, mean_slope = (weights * steep).sum(axis=0), (weights * self.slope).sum(axis=0)
        variance = (weights * (steep - mean_steep) ** 2).sum(axis=0)
        covariance = (weights * (steep - mean_steep) * (self.slope - mean_slope)).sum(axis=0)
        fitted = np.where(variance > 1e-12, -covariance / np.maximum(variance, 1e-12), 0.0)
        fitted = np.clip(fitted, 0.0, self.size)
        given = problem.nu[cells.index]
        return [
            (fitted, mean_slope + fitted * mean_steep),
            (0.0 * ones, mean_slope),
            (given, problem.mu[cells.index]),
            (given, mean_slope + given * mean_steep),
        ]

    def bound(self, nu: FloatArray, mu: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return the bound for one choice of multipliers a cell, and by how much each term exceeds its centre."""
        cells, x, half = self.cells, self.centre, self.half
        at_centre = self.value + nu * x * self.log_centre - mu * x
        slope = self.slope + nu * (self.log_centre + 1.0) - mu
        with np.errstate(invalid="ignore"):  # 0 times infinity where nu = 0 and a level may vanish
            curvature = self.curvature + nu * self.inverse_low
            tangent = at_centre + _rise(slope, curvature, half)
        tilt = (self.slope - mu) * half
        ends = np.maximum(nu * self.low_log - tilt, nu * self.high_log + tilt)
        chord = self.value - mu * x + ends + 0.5 * half**2 * np.maximum(self.curvature, 0.0)
        over = np.fmin(tangent, chord)
        repeated, ratio_centre = self._repeated(over[_Y], nu, mu)
        t = cells.top
        upper = self.constant + nu * self.entropy + mu + t * over[_W] + over[_X] + repeated + over[_Z]
        sizes = self.size + np.abs(mu) + nu * (4.0 + self.entropy + cells.mass_high * np.abs(self.log_high_y))
        excess = over - at_centre
        excess[_W] *= t
        excess[_Y] = repeated - ratio_centre
        return upper + 1e-13 * sizes + 1e-10, excess

    def _repeated(self, over: FloatArray, nu: FloatArray, mu: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Bound the sum of psi over the repeated level y, and give its value at the centre."""
        cells, y, half = self.cells, self.centre[_Y], self.half[_Y]
        high = np.maximum(cells.high[_Y], 1e-150)
        slope = self.ratio_slope + nu / np.maximum(y, 1e-150)
        curvature = self.ratio_curvature - nu / high**2
        at_centre = self.ratio_value - mu + nu * self.log_centre[_Y]
        inside = np.where(cells.low[_Y] > 0.0, at_centre + _rise(slope, curvature, half), np.inf)
        smooth = self.ratio_value - mu + np.abs(self.ratio_slope) * half
        touching = smooth + 0.5 * half**2 * np.maximum(self.ratio_curvature, 0.0) + nu * self.log_high_y
        ratio = np.minimum(inside, touching)
        by_mass = np.maximum(cells.mass_low * ratio, cells.mass_high * ratio)
        repeated = np.where(self.single, np.minimum(cells.repeats_low * over, by_mass), by_mass)
        return repeated, self.mass * at_centre


def _spread(cells: Cells, excess: FloatArray) -> FloatArray:
    """Attribute what the bound exceeds the centre by to the widths of w, x, z and the range of r."""
    widths = np.stack([cells.top, np.ones(len(cells)), np.ones(len(cells))]) * (cells.high - cells.low)[[_W, _X, _Z]]
    in_range = np.where(
        np.isinf(cells.repeats_high), 3.0, np.log(np.fmin(cells.repeats_high, 1e300) / cells.repeats_low)
    )
    in_mass = _log(cells.mass_high) - _log(cells.mass_low)
    share = np.where(cells.mass_low > 1e-12, in_range / (in_range + in_mass + 1e-12), 0.0)
    excess = np.maximum(excess, 0.0)
    per_width = (1.0 - share) * excess[_Y] / np.maximum(widths.sum(axis=0), _TINY)
    return np.concatenate([excess[[_W, _X, _Z]] + widths * (per_width + 1e-6), (share * excess[_Y])[None]])


def halves(cells: Cells, spread: FloatArray) -> Cells:
    """Halve every cell along the one of w, x, z, r that contributes most to its bound."""
    widths = np.stack(
        [cells.top * (cells.high[_W] - cells.low[_W]), cells.high[_X] - cells.low[_X], cells.high[_Z] - cells.low[_Z]]
    )
    ranged = cells.repeats_low < cells.repeats_high
    by_range = cells.mass_low * (1.0 - cells.repeats_low / cells.repeats_high)
    forced = ranged & (cells.repeats_low < 1e4) & (by_range >= widths.max(axis=0))
    score = np.where(np.concatenate([widths > 1e-13, ranged[None]]), spread, -1.0)
    side = np.where(forced, 3, score.argmax(axis=0))
    lower, upper = cells.high.copy(), cells.low.copy()
    for index, level in enumerate((_W, _X, _Z)):
        here = side == index
        middle = 0.5 * (cells.low[level] + cells.high[level])
        lower[level, here] = upper[level, here] = middle[here]
    here = side == 3
    least = cells.repeats_low
    cut = np.where(
        np.isinf(cells.repeats_high), 4.0 * least, np.floor(np.sqrt(least * np.fmin(cells.repeats_high, 1e300)))
    )
    first = _with(cells, high=lower, repeats_high=np.where(here, cut, cells.repeats_high))
    second = _with(cells, low=upper, repeats_low=np.where(here, cut + 1.0, least))
    return first.joined(second)


def _with(cells: Cells, **changes: FloatArray) -> Cells:
    return Cells(**{field.name: changes.get(field.name, getattr(cells, field.name)) for field in fields(cells)})


def _purity(cells: Cells, levels: FloatArray, mass: FloatArray) -> FloatArray:
    """Return P_2 at one corner of the cells."""
    value = cells.top * levels[_W] ** 2 + levels[_X] ** 2 + mass * levels[_Y] + levels[_Z] ** 2
    return np.asarray(value, dtype=np.float64)


def _rise(slope: FloatArray, curvature: FloatArray, half: FloatArray) -> FloatArray:
    """Return the maximum of slope u + curvature u^2 / 2 over |u| <= half."""
    steep = np.abs(slope)
    at_end = steep * half + 0.5 * curvature * half**2
    bend = np.maximum(-curvature, _TINY)
    with np.errstate(over="ignore"):
        at_top = 0.5 * steep * (steep / bend)
    return np.asarray(np.where((curvature < 0.0) & (steep < bend * half), at_top, at_end), dtype=np.float64)


def _polynomial(coefficients: FloatArray, x: FloatArray) -> FloatArray:
    """Evaluate sum_n coefficients[n] x^n by Horner's rule."""
    value = np.full_like(x, coefficients[-1])
    for coefficient in coefficients[-2::-1]:
        value = value * x + coefficient
    return value


def _derivative(coefficients: FloatArray) -> FloatArray:
    return np.asarray(coefficients[1:] * np.arange(1, len(coefficients)), dtype=np.float64)


def _log(x: FloatArray) -> FloatArray:
    return np.asarray(np.log(np.maximum(x, _TINY)), dtype=np.float64)


def _xi(x: FloatArray) -> FloatArray:
    """Return -x log x."""
    return np.asarray(-x * _log(x), dtype=np.float64)

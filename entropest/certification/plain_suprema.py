"""The referee's branch and bound, which proves that a mean stays below a number for all spectra of small entropy.

Numbers that matter are whole multiples of 2^-128, and every operation on them is exact up to one such unit; logarithms
are enclosed by interval arithmetic. Floating-point numbers only choose multipliers and cuts, which need no proof.

The mean is Phi(p) = c_1 + sum_{j=2..k} c_j P_j + e P_2^2, c_j <= 0 for j >= 4, e >= 0. A box holds spectra (w^t, x,
y^r, z) with w >= x >= y >= z >= 0, t and r whole, levels in intervals, and so M = r y. If P_2 lies in [a, b] on the
box and S(p) <= s, then for any nu >= 0 and any mu

    Phi <= c_1 - e a b + nu s + mu + t psi(w) + psi(x) + r psi(y) + psi(z),
    psi(u) = f u^2 + c_3 u^3 + ... + nu u log u - mu u,    f = c_2 + e (a + b),

and each psi is bounded over its interval by itself. Proofs: docs/theory-suprema.md.
"""

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Any, Final

from entropest import _mp
from entropest.errors import RecheckError

__all__ = ["prove_supremum"]

BITS: Final = 128
ONE: Final = 1 << BITS
_SLACK: Final = 1 << (BITS - 50)
_LARGEST: Final = 1 << 14
_LARGEST_ENTROPY: Final = 5.0
_MOST_REPEATS: Final = 1 << 20
_RANGES: Final = ((1, 1), (2, 4), (5, 16), (17, 0))


@dataclass(frozen=True, slots=True)
class _Problem:
    """c_1 .. c_k, e, s and the number to stay below in units, and the floats that choices are made with."""

    c: tuple[int, ...]
    e: int
    s: int
    limit: int
    real: tuple[float, ...]
    real_e: float
    real_s: float
    real_limit: float


@dataclass(frozen=True, slots=True)
class _Box:
    """t, the range of r (r_end = 0: no end) and the ends of the intervals of w, x, y, z and M, in units."""

    t: int
    r: int
    r_end: int
    w: int
    w_end: int
    x: int
    x_end: int
    y: int
    y_end: int
    z: int
    z_end: int
    m: int
    m_end: int


def prove_supremum(
    coefficients: Sequence[float], square: float, entropy: float, upper: float, *, most_boxes: int = 100_000
) -> int:
    """Prove that the mean is at most `upper` for every spectrum of entropy at most `entropy`.

    Parameters
    ----------
    coefficients : sequence of float
        c_1 .. c_k, taken as exact; from the fourth on not positive.
    square : float
        e, not negative.
    entropy, upper : float
        s in nat, above 0 and at most 5, and the number to be proved an upper bound.
    most_boxes : int
        Give up after so many boxes.

    Returns
    -------
    int
        The number of boxes the proof took.

    Raises
    ------
    RecheckError
        If a spectrum has a larger mean, if signs or sizes are not those the proof needs, or if the boxes run out.

    Examples
    --------
    >>> prove_supremum([1.5, -0.5, 0.0], 0.0, 0.5, 1.2) > 0  # 1.5 - P_2 / 2 where the entropy is at most 1/2
    True
    """
    numbers = (*coefficients, square, entropy, upper)
    if not all(math.isfinite(number) and abs(number) < _LARGEST for number in numbers):
        raise RecheckError(f"the numbers of a supremum must be below {_LARGEST}, got {numbers}")
    if not 0.0 < entropy <= _LARGEST_ENTROPY:
        raise RecheckError(f"the entropy of a supremum must be above 0 and at most {_LARGEST_ENTROPY}, got {entropy}")
    if len(coefficients) < 3 or any(value > 0.0 for value in coefficients[3:]) or square < 0.0:
        raise RecheckError(f"no theorem covers the coefficients {tuple(coefficients)} with square {square}")
    problem = _Problem(
        c=tuple(_units(value) for value in coefficients),
        e=_units(square),
        s=_units(entropy),
        limit=_units(upper) - _SLACK,
        real=tuple(coefficients),
        real_e=square,
        real_s=entropy,
        real_limit=upper,
    )
    waiting = list(_first_boxes(problem))
    count = 0
    while waiting:
        box = _narrowed(waiting.pop(), problem.s)
        if box is None:
            continue
        count += 1
        if count > most_boxes:
            raise RecheckError(f"the supremum at entropy {entropy!r} was not proved to be at most {upper!r}")
        excess = _excess(box, problem)
        if excess is not None:
            _refuse_counterexample(box, problem)
            waiting.extend(_cut(box, excess))
    return count


def _first_boxes(problem: _Problem) -> Iterator[_Box]:
    """Cover the family: the largest eigenvalue is at least exp(-s), so t <= exp(s)."""
    interval, plain = _contexts()
    least = int(plain.floor(plain.mpf(interval.exp(-interval.mpf(problem.real_s)).a) * ONE))
    tops = range(1, ONE // least + 1)
    if problem.c[2] <= 0:
        for t in tops:
            yield _Box(t, 1, 1, least, ONE // t + 1, 0, ONE // (t + 1) + 1, 0, 0, 0, 0, 0, 0)
        return
    for r, r_end in _RANGES:
        yield _Box(0, r, r_end, 0, 0, least, ONE, 0, ONE // r + 1, 0, ONE // r + 1, 0, ONE)
        for t in tops:
            yield _Box(t, r, r_end, least, ONE // t + 1, 0, ONE, 0, ONE // r + 1, 0, ONE // r + 1, 0, ONE)


def _narrowed(box: _Box, s: int) -> _Box | None:
    """Shrink a box by the constraints; None if no spectrum of entropy at most s is left."""
    t, r, r_end = box.t, box.r, box.r_end
    w, w_end, x, x_end, y, y_end, z, z_end = (
        box.w,
        box.w_end,
        box.x,
        box.x_end,
        box.y,
        box.y_end,
        box.z,
        box.z_end,
    )
    m = max(box.m, ONE - t * w_end - x_end - z_end, r * y)
    m_end = min(box.m_end, ONE - t * w - x - z)
    if r_end:
        m_end = min(m_end, r_end * y_end)
        y = max(y, m // r_end)
    y, y_end = max(y, z), min(y_end, -(-m_end // r), x_end)
    z_end = min(z_end, y_end)
    x, x_end = max(x, y, ONE - t * w_end - z_end - m_end), min(x_end, ONE - t * w - z - m)
    if t:
        x_end = min(x_end, w_end)
        w, w_end = max(w, x, (ONE - x_end - z_end - m_end) // t), min(w_end, -((x + z + m - ONE) // t))
    if w > w_end or x > x_end or y > y_end or z > z_end or m > m_end:
        return None
    least = t * _least_xi(w, w_end) + _least_xi(x, x_end) + _least_xi(z, z_end)
    if least + max(_times(m, -_log(y_end)) if m else 0, r * _least_xi(y, y_end)) > s + _SLACK:
        return None
    return _Box(t, r, r_end, w, w_end, x, x_end, y, y_end, z, z_end, m, m_end)


def _excess(box: _Box, problem: _Problem) -> tuple[int, int, int, int] | None:
    """Return None if the mean is proved to stay below, else what the terms of w, x, y, z exceed their centres by."""
    purities = [
        box.t * _times(w, w) + _times(x, x) + _times(m, y) + _times(z, z)
        for w, x, y, z, m in (
            (box.w, box.x, box.y, box.z, box.m),
            (box.w_end, box.x_end, box.y_end, box.z_end, box.m_end),
        )
    ]
    low, high = purities[0], min(purities[1], ONE)
    f = problem.c[1] + _times(problem.e, low + high)
    constant = problem.c[0] - _times(_times(problem.e, low), high)
    smallest, excess = None, (0, 0, 0, 0)
    for nu, mu in _multipliers(box, problem, (low + high) / ONE):
        terms = [
            _level(box.w, box.w_end, f, problem.c, nu, mu) if box.t else (0, 0),
            _level(box.x, box.x_end, f, problem.c, nu, mu),
            _repeated(box, f, problem.c, nu, mu),
            _level(box.z, box.z_end, f, problem.c, nu, mu),
        ]
        bound = constant + _times(nu, problem.s) + mu + box.t * terms[0][0] + sum(upper for upper, _ in terms[1:])
        if bound <= problem.limit:
            return None
        if smallest is None or bound < smallest:
            smallest, excess = bound, (box.t * terms[0][1], terms[1][1], terms[2][1], terms[3][1])
    return excess


def _level(a: int, b: int, f: int, c: tuple[int, ...], nu: int, mu: int) -> tuple[int, int]:
    """Bound psi on [a, b], and say by how much the bound exceeds the value at the centre.

    By Taylor's formula at the centre with the largest second derivative; or, where a is small, the polynomial so and
    the convex u log u by its chord.
    """
    if not b:
        return 0, 0
    middle = (a + b + 1) // 2
    half = middle - a
    value, slope, bend = _polynomial(f, c, middle, a, b)
    log = _log(middle)
    centre = value + _times(nu, _times(middle, log)) - _times(mu, middle)
    over = value - _times(mu, middle) + _times(_times(max(bend, 0), half), half) // 2
    tilt = _times(slope - mu, half)
    upper = over + max(_times(nu, _x_log_x(a)) - tilt, _times(nu, _x_log_x(b)) + tilt)
    if a:
        upper = min(upper, centre + _rise(slope + _times(nu, log + ONE) - mu, bend + nu * ONE // a, half))
    return upper, upper - centre


def _repeated(box: _Box, f: int, c: tuple[int, ...], nu: int, mu: int) -> tuple[int, int]:
    """Bound r psi(y): r times a bound of psi, if r is one number, or M times a bound of psi(y) / y."""
    if not box.m_end:
        return 0, 0
    a, b = box.y, box.y_end
    middle = (a + b + 1) // 2
    half = middle - a
    value, slope, bend = _ratio(f, c, middle, a)
    centre = value - mu + _times(nu, _log(middle))
    if a:
        ratio = centre + _rise(slope + nu * ONE // middle, bend - nu * ONE // b * ONE // b, half)
    else:
        ratio = value - mu + _times(abs(slope), half) + _times(nu, _log(b))
        ratio += _times(_times(max(bend, 0), half), half) // 2
    upper = max(_times(box.m, ratio), _times(box.m_end, ratio))
    if box.r == box.r_end:
        upper = min(upper, box.r * _level(a, b, f, c, nu, mu)[0])
    return upper, upper - _times((box.m + box.m_end) // 2, centre)


def _polynomial(f: int, c: tuple[int, ...], u: int, a: int, b: int) -> tuple[int, int, int]:
    """Return f u^2 + c_3 u^3 + ..., its slope, and the largest second derivative on [a, b] (c_j <= 0 from j = 4)."""
    value, slope, bend = _times(f, _times(u, u)), 2 * _times(f, u), 2 * f + 6 * max(_times(c[2], a), _times(c[2], b))
    power, low = u, a
    for j in range(3, len(c) + 1):
        power = _times(power, u)
        slope += j * _times(c[j - 1], power)
        value += _times(c[j - 1], _times(power, u))
        if j > 3:
            low = low if j == 4 else _times(low, a)
            bend += j * (j - 1) * _times(c[j - 1], _times(low, a))
    return value, slope, bend


def _ratio(f: int, c: tuple[int, ...], u: int, a: int) -> tuple[int, int, int]:
    """Return f u + c_3 u^2 + ..., its slope, and the largest second derivative right of a."""
    value, slope, bend = _times(f, u), f, 2 * c[2]
    power, low = ONE, ONE
    for j in range(3, len(c) + 1):
        power = _times(power, u)
        slope += (j - 1) * _times(c[j - 1], power)
        value += _times(c[j - 1], _times(power, u))
        if j > 3:
            low = _times(low, a)
            bend += (j - 1) * (j - 2) * _times(c[j - 1], low)
    return value, slope, bend


def _rise(slope: int, bend: int, half: int) -> int:
    """Return the maximum of slope u + bend u^2 / 2 over |u| <= half.

    `bend` may be huge, with an error as large as one unit over half: it is multiplied by half before all else.
    """
    steep = abs(slope)
    if bend < 0 and steep < _times(-bend, half):
        return steep * steep // (-2 * bend)
    return _times(steep, half) + _times(_times(bend, half), half) // 2


def _multipliers(box: _Box, problem: _Problem, purities: float) -> Iterator[tuple[int, int]]:
    """Yield nu and mu that make psi stationary at the centre as well as two numbers can, and the best mu for nu = 0."""
    centres = [box.w + box.w_end, box.x + box.x_end, box.y + box.y_end, box.z + box.z_end]
    ends = box.r_end or 4 * box.r
    second = 2.0 * (problem.real[1] + problem.real_e * purities)
    total = mean_g = mean_f = square_g = cross = 0.0
    for count, doubled in zip((box.t, 1.0, math.sqrt(box.r * ends), 1.0), centres, strict=True):
        u = doubled / (2 * ONE)
        if count == 0 or u < 1e-9:
            continue
        g = math.log(u) + 1.0
        slope = second * u + sum(j * problem.real[j - 1] * u ** (j - 1) for j in range(3, len(problem.real) + 1))
        weight = count * u
        total += weight
        mean_g += weight * g
        mean_f += weight * slope
        square_g += weight * g * g
        cross += weight * g * slope
    mean_g, mean_f = mean_g / total, mean_f / total
    variance, covariance = square_g / total - mean_g**2, cross / total - mean_g * mean_f
    nu = min(max(-covariance / variance, 0.0), _LARGEST) if variance > 1e-12 else 0.0
    if nu > 0.0:
        yield _units(nu), _units(mean_f + nu * mean_g)
    yield 0, _units(mean_f)


def _refuse_counterexample(box: _Box, problem: _Problem) -> None:
    """Raise if the centre of the box is a spectrum of smaller entropy and larger mean."""
    w, x, z = (doubled / (2 * ONE) for doubled in (box.w + box.w_end, box.x + box.x_end, box.z + box.z_end))
    y = (1.0 - box.t * w - x - z) / box.r
    if y < 0.0:
        return
    spectrum = [w] * box.t + [x] + [y] * box.r + [z]
    if -math.fsum(p * math.log(p) for p in spectrum if p > 0.0) > problem.real_s - 1e-12:
        return
    sums = [math.fsum(p**j for p in spectrum) for j in range(1, len(problem.real) + 1)]
    value = math.fsum(c * p for c, p in zip(problem.real, sums, strict=True)) + problem.real_e * sums[1] ** 2
    if value > problem.real_limit + 1e-12:
        raise RecheckError(
            f"a spectrum of entropy below {problem.real_s!r} has mean {value}, not {problem.real_limit!r}"
        )


def _cut(box: _Box, excess: tuple[int, int, int, int]) -> tuple[_Box, _Box]:
    """Halve the interval of w, x or z, or the range of r, that adds most to the bound."""
    widths = (box.t * (box.w_end - box.w), box.x_end - box.x, box.z_end - box.z)
    widest = max(widths)
    if box.r != box.r_end and box.r < _MOST_REPEATS:
        by_range = box.m - (box.m * box.r // box.r_end if box.r_end else 0)
        in_range = 3.0 if not box.r_end else math.log(box.r_end / box.r)
        in_mass = math.log(box.m_end / box.m) if box.m else math.inf
        by_repeats = excess[2] * in_range / (in_range + in_mass) / ONE
        if by_range >= widest or by_repeats > max(excess[0], excess[1], excess[3]) / ONE:
            middle = 4 * box.r if not box.r_end else math.isqrt(box.r * box.r_end)
            return replace(box, r_end=middle), replace(box, r=middle + 1)
    total = sum(widths) or 1
    shares = [
        own + excess[2] * width // total for own, width in zip((excess[0], excess[1], excess[3]), widths, strict=True)
    ]
    shares = [share + width // 2**20 if width > 4 else -1 for share, width in zip(shares, widths, strict=True)]
    side = shares.index(max(shares))
    if side == 0:
        middle = (box.w + box.w_end) // 2
        return replace(box, w_end=middle), replace(box, w=middle)
    if side == 1:
        middle = (box.x + box.x_end) // 2
        return replace(box, x_end=middle), replace(box, x=middle)
    middle = (box.z + box.z_end) // 2
    return replace(box, z_end=middle), replace(box, z=middle)


def _units(value: float) -> int:
    """Return a float as a whole number of units, rounded down; exact from 2^-75 on."""
    numerator, denominator = value.as_integer_ratio()
    return numerator * ONE // denominator


def _times(a: int, b: int) -> int:
    return a * b >> BITS


def _least_xi(a: int, b: int) -> int:
    """Return the smaller of -u log u at the two ends: it is concave."""
    return min(-_x_log_x(a), -_x_log_x(b))


def _x_log_x(a: int) -> int:
    return _times(a, _log(a)) if a else 0


@lru_cache(maxsize=1 << 16)
def _log(a: int) -> int:
    """Return log(a) of a positive number, rounded down by at most two units."""
    interval, plain = _contexts()
    enclosure = interval.log(interval.mpf(a) / ONE)
    return int(plain.floor(plain.mpf(enclosure.a) * ONE))


@lru_cache(maxsize=1)
def _contexts() -> tuple[Any, Any]:
    """Return contexts of 50 and 60 digits; the second reads ends of intervals of the first."""
    return _mp.interval_context(50), _mp.context(60)

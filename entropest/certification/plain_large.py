"""The referee's evaluation of the dual bounds from large diagrams, in interval arithmetic.

Both functions take the rows, the error and the parameters that a bound was stated with, and return what these prove;
nothing here is shared with the fast computation, and how the parameters were found does not matter. Roots are guessed
by bisection in floats; what is then proved about them is proved with intervals, and a bad guess only loosens the value.
Formulas: docs/theory-large-diagrams.md.
"""

import math
from collections.abc import Callable, Sequence
from typing import Any

from entropest import _mp
from entropest.certification.plain_intervals import minus_x_log_x, rounded_down, rounded_up

__all__ = ["dual_lower_value", "dual_upper_value"]

DIGITS = 40
BISECTIONS = 60
LOCALISER_SHARE = 0.1
REFINEMENTS = 4
LARGEST_REFINED = 64


def dual_lower_value(
    rows: Sequence[int],
    *,
    error: float,
    t: float,
    kappa: float,
    log_z0: float,
    shift: float,
    kinks: Sequence[float] = (),
    dim: int | None = None,
) -> float:
    """Return the lower bound on the entropy (nat) that these parameters prove, at least 0.

    Examples
    --------
    >>> from entropest.certification.dual_bound import dual_lower_bound
    >>> rows = [5333, 2667, 1333, 667]
    >>> b = dual_lower_bound(rows, error=0.05)
    >>> value = dual_lower_value(
    ...     rows, error=0.05, t=b.t, kappa=b.kappa, log_z0=b.log_z0, shift=b.shift, kinks=b.kinks
    ... )
    >>> 0.0 <= value - b.value < 1e-8
    True
    """
    iv = _mp.interval_context(DIGITS)
    lengths = sorted((row for row in rows if row > 0), reverse=True)
    if not (0 < t <= 1 and kappa > 0 and (dim is None or dim >= len(lengths))):
        return 0.0
    size = sum(lengths)
    cap = iv.log(iv.mpf(size))
    row = _Row(iv, 1, t, kappa, log_z0, shift, kappa)
    inner = cap + row.shift - row.k * (iv.exp(row.t * cap) - 1)
    below = empty = iv.zero
    if not (row.shift.a >= 0 and inner.a >= 0):
        if dim is None:
            return 0.0
        below = iv.exp(-cap) * _least([iv.zero, inner])
        empty = (dim - len(lengths)) * _least([iv.zero, below, row.least(iv.zero, cap)])
    beyond = {length: row.weight * length / size * cap + below for length in set(lengths)}
    if kinks:
        total = _chain(row, lengths, kinks, cap, [beyond[length] for length in lengths])
    else:
        least = {length: _least([row.least(iv.mpf(length) / size, cap), beyond[length]]) for length in set(lengths)}
        total = sum((least[length] for length in lengths), iv.zero)
    level = -iv.log(iv.mpf(error)) / size
    value = row.constant() - row.kappa * level / row.t + total + empty
    if dim is not None:
        value = _least([value, iv.log(iv.mpf(dim))])
    return max(0.0, rounded_down(value))


def dual_upper_value(
    diagrams: Sequence[Sequence[int]],
    *,
    error: float,
    dim: int,
    t: float,
    mu: float,
    log_z0: float,
    shift: float,
    weight: float,
) -> float:
    """Return the upper bound on the entropy (nat) that these parameters prove, at most log(dim).

    Examples
    --------
    >>> from entropest.certification.dual_upper import dual_upper_bound
    >>> rows = [5333, 2667, 1333, 667]
    >>> b = dual_upper_bound(rows, error=0.05, dim=4)
    >>> value = dual_upper_value(
    ...     [rows], error=0.05, dim=4, t=b.t, mu=b.mu, log_z0=b.log_z0, shift=b.shift, weight=b.weight
    ... )
    >>> 0.0 <= b.value - value < 1e-8
    True
    """
    iv = _mp.interval_context(DIGITS)
    log_dim = iv.log(iv.mpf(dim))
    if not (t > 0 and mu > 0 and weight > 0):
        return rounded_up(log_dim)
    padded = [list(rows) + [0] * (dim - len(rows)) for rows in diagrams]
    size = sum(map(sum, padded))
    lengths = [sum(rows[i] for rows in padded) for i in range(dim)]
    share = iv.mpf(LOCALISER_SHARE) * error
    radius, excess = _localise(iv, padded, lengths, share)
    entropy = sum((minus_x_log_x(iv, iv.mpf(length) / size) for length in lengths if length), iv.zero)
    row = _Row(iv, -1, t, mu, log_z0, shift, weight)
    least = {length: row.least(iv.mpf(length) / size, None) for length in set(lengths)}
    if 0 in least:
        least[0] = _least([iv.zero, least[0]])
    total = sum((least[length] for length in lengths), iv.zero)
    level = -iv.log(iv.mpf(error) - share) / size
    cross = (row.kappa + row.weight) * (radius + entropy)
    value = cross + row.kappa * (len(padded) * excess / size + level / row.t) - row.constant() - total
    return max(0.0, min(rounded_up(value), rounded_up(log_dim)))


class _Row:
    """phi(y) = w h y + e^-y (sign y + s - k (e^(sign t y) - 1)) in intervals; phi' = -e^-y g with a concave g."""

    def __init__(self, iv: Any, sign: int, t: float, kappa: float, log_z0: float, shift: float, weight: float) -> None:
        self.iv, self.sign = iv, sign
        self.t, self.kappa, self.log_z0 = iv.mpf(t), iv.mpf(kappa), iv.mpf(log_z0)
        self.shift, self.weight = iv.mpf(shift), iv.mpf(weight)
        self.k = self.kappa * iv.exp(-self.log_z0) / self.t

    def constant(self) -> Any:
        """Return k (Z0 - 1 - Z0 log Z0) - s."""
        z0 = self.iv.exp(self.log_z0)
        return self.k * (z0 - 1 - z0 * self.log_z0) - self.shift

    def phi(self, h: Any, y: Any) -> Any:
        """Return phi(y)."""
        grown = self.iv.exp(self.sign * self.t * y) - 1
        return self.weight * h * y + self.iv.exp(-y) * (self.sign * y + self.shift - self.k * grown)

    def g(self, h: Any, y: Any) -> Any:
        """Return g(y)."""
        rate = self.sign * self.t
        grown = self.k * (1 - rate) * self.iv.exp(rate * y)
        return self.sign * (y - 1) + self.shift + self.k - grown - self.weight * h * self.iv.exp(y)

    def slope(self, h: Any, y: Any) -> Any:
        """Return g'(y)."""
        rate = self.sign * self.t
        return self.sign - self.k * rate * (1 - rate) * self.iv.exp(rate * y) - self.weight * h * self.iv.exp(y)

    def least(self, h: Any, cap: Any) -> Any:
        """Return a lower bound of phi over [0, cap], over [0, infinity) without a cap.

        At the highest point of g where g is nowhere positive, at the cap where g is positive there, else at the last
        root of g: in each case for any point at all, with what is missing to a perfect one subtracted.
        """
        iv = self.iv
        place, point = self._guess(_float(h), math.inf if cap is None else _float(cap))
        if place == "peak":
            peak = iv.mpf(point)
            slope = self.slope(h, peak)
            highest = self.g(h, peak) + _most([iv.zero, -slope]) * peak
            if cap is not None:
                highest += _most([iv.zero, slope]) * _most([iv.zero, cap - peak])
            elif not slope.b <= 0:
                return -iv.inf
            return self.shift - _most([iv.zero, highest])
        if place == "cap":
            return _least([self.shift, self.phi(h, cap)]) - _most([iv.zero, -self.g(h, cap)])
        low, high = iv.mpf(max(0.0, point - 1e-9 * (1.0 + point))), iv.mpf(point + 1e-9 * (1.0 + point))
        if cap is not None:
            high = _least([high, cap])
        if not self.slope(h, high).b <= 0:
            return -iv.inf
        g_low, g_high = self.g(h, low), self.g(h, high)
        between = (high - low) * iv.exp(-low) * _most([iv.zero, -g_low, -g_high])
        missing = _most([iv.zero, -g_low]) + _most([iv.zero, g_high])
        return _least([self.shift, self.phi(h, high) - between]) - missing

    def _guess(self, h: float, cap: float) -> tuple[str, float]:
        """Say in floats where the minimum is decided: ("peak" | "cap" | "root", y)."""
        t, k, shift = self.sign * _float(self.t), _float(self.k), _float(self.shift)
        push = _float(self.weight) * h

        def pushed(y: float) -> float:
            return push * math.exp(min(y, 700.0)) if push > 0.0 else 0.0

        def g(y: float) -> float:
            return self.sign * (y - 1.0) + shift + k * (t * math.exp(t * y) - math.expm1(t * y)) - pushed(y)

        def slope(y: float) -> float:
            return self.sign - k * t * (1.0 - t) * math.exp(t * y) - pushed(y)

        end = cap
        if math.isinf(cap):
            end = 1.0
            while g(end) >= 0.0 or slope(end) >= 0.0:
                end *= 2.0
        peak = _turn(slope, 0.0, end)
        if g(peak) <= 0.0:
            return "peak", peak
        if g(end) >= 0.0:
            return "cap", end
        return "root", _turn(g, peak, end)


def _turn(f: Callable[[float], float], low: float, high: float) -> float:
    """Return the last point found by bisection at which a falling function is not negative; `low` if there is none."""
    if f(high) >= 0.0:
        return high
    for _ in range(BISECTIONS):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if f(middle) >= 0.0 else (low, middle)
    return low


def _chain(row: _Row, lengths: Sequence[int], kinks: Sequence[float], cap: Any, beyond: Sequence[Any]) -> Any:
    """Return the least sum of rows and gap terms, over the lines taken and over how many rows lie within the cap."""
    iv, size = row.iv, sum(lengths)
    if len(kinks) != len(lengths) - 1 or min(kinks) <= 0.0:
        return -iv.inf
    lines = [_lines(iv, lengths[i] - lengths[i + 1], kinks[i]) for i in range(len(kinks))]
    flat = (iv.zero, iv.zero)
    least = sum(beyond, iv.zero)
    entered = [(iv.zero, iv.zero)]
    for i, length in enumerate(lengths):
        rest = sum(beyond[i + 1 :], iv.zero)
        reached = [
            [value + row.least((length + slope - out) / size, cap) for slope, value in entered]
            for out, _ in [flat, *(lines[i] if i < len(lines) else [])]
        ]
        least = _least([least, *(value + rest for value in reached[0])])
        if i < len(lines):
            entered = [
                (slope, _least(values) + row.kappa * offset / size)
                for (slope, offset), values in zip(lines[i], reached[1:], strict=True)
            ]
    return least


def _lines(iv: Any, gap: int, kink: float) -> list[tuple[Any, Any]]:
    """Return slope and offset of two lines whose lower one is below b(z) - b((gap + 1) z), b(z) = z / (e^z - 1)."""
    if gap == 0:
        return [(iv.zero, iv.zero)]
    z = iv.mpf(kink)
    grown = iv.exp(z) - 1
    height = z / grown - (gap + 1) * z / (iv.exp((gap + 1) * z) - 1)
    falling = (grown - z * (grown + 1)) / grown**2
    return [(height / z, iv.zero), (falling, height - falling * z)]


def _localise(iv: Any, diagrams: Sequence[Sequence[int]], lengths: Sequence[int], share: Any) -> tuple[Any, Any]:
    """Return bounds of the relative entropy from rows to spectrum and of the mean excess energy of a tableau."""
    d, total = len(lengths), sum(lengths)
    information = -iv.log(share)
    for rows in diagrams:
        size = sum(rows)
        information += iv.loggamma(size + d * d) - iv.loggamma(d * d)
        for i, row in enumerate(rows):
            if row:
                information -= iv.loggamma(d - i + row) - iv.loggamma(d - i)
    entropy = sum((minus_x_log_x(iv, iv.mpf(row) / total) for row in lengths if row), iv.zero)
    first = information / total - entropy
    if d == 1 or d > LARGEST_REFINED:
        return first, iv.mpf(d * (d - 1)) / 2
    pairs = [(i, j) for i in range(d) for j in range(i + 1, d)]
    log_dims = {
        (i, j): sum((iv.log(iv.mpf(rows[i] - rows[j] + j - i) / (j - i)) for rows in diagrams), iv.zero)
        for i, j in pairs
    }
    full = sum(log_dims.values(), iv.zero)
    radius = first
    for _ in range(REFINEMENTS):
        ratios = _largest_ratios(iv, lengths, pairs, radius)
        bound = _least([full, _runs(iv, d, log_dims, ratios, len(diagrams))])
        radius = _least([radius, first + (bound - full) / total])
    ratios = _largest_ratios(iv, lengths, pairs, radius)
    excess = sum((iv.one if x is None else -x * iv.log(x) / (1 - x) for x in ratios.values()), iv.zero)
    return radius, excess


def _largest_ratios(
    iv: Any, lengths: Sequence[int], pairs: Sequence[tuple[int, int]], radius: Any
) -> dict[tuple[int, int], Any]:
    """Return proven upper limits of p_j / p_i; None stands for 1."""
    found: dict[tuple[int, int], Any] = {}
    for i, j in pairs:
        key = lengths[i], lengths[j]
        if key not in found:
            found[key] = _largest_ratio(iv, lengths[i], lengths[j], sum(lengths), radius)
    return {(i, j): found[lengths[i], lengths[j]] for i, j in pairs}


def _largest_ratio(iv: Any, longer: int, shorter: int, total: int, radius: Any) -> Any:
    """Return x below 1 with mass kl(share, x / (1 + x)) > radius, or None."""
    if longer == shorter:
        return None
    share, mass, limit = shorter / (longer + shorter), (longer + shorter) / total, _float(radius) + 5e-14

    def inside(r: float) -> float:
        kl = (1.0 - share) * math.log((1.0 - share) / (1.0 - r))
        kl += share * math.log(share / r) if share > 0.0 else 0.0
        return limit - mass * kl

    r = _turn(inside, share, 0.5) * (1.0 + 1e-12) if inside(0.5) < 0.0 else 0.5
    if not 0.0 < r < 0.5:
        return None
    part, rest = iv.mpf(shorter), iv.mpf(longer)
    both = longer + shorter
    divergence = rest * iv.log(rest / (both * (1 - iv.mpf(r))))
    if shorter:
        divergence += part * iv.log(part / (both * iv.mpf(r)))
    return iv.mpf(r) / (1 - iv.mpf(r)) if (divergence / total - radius).a > 0 else None


def _runs(
    iv: Any, d: int, log_dims: dict[tuple[int, int], Any], ratios: dict[tuple[int, int], Any], blocks: int
) -> Any:
    """Return the least bound of log prod s_lambda(p) / p^lambda over all divisions of the letters into runs."""
    inside = [iv.zero] * d  # of the run start..stop-1, for each start
    across = [iv.zero] * d  # between that run and all letters before it
    best = [iv.zero]
    for stop in range(1, d + 1):
        last = stop - 1
        column = iv.zero
        for i in range(last):
            across[i] += column
            ratio = ratios[i, last]
            column += iv.inf if ratio is None else -blocks * iv.log(1 - ratio)
        across[last] = column
        column = iv.zero
        for i in reversed(range(last)):
            column += log_dims[i, last]
            inside[i] += column
        best.append(_least([best[start] + inside[start] + across[start] for start in range(stop)]))
    return best[d]


def _least(values: Sequence[Any]) -> Any:
    """Return an interval that holds the least of several numbers."""
    ctx = values[0].ctx
    return ctx.mpf([min(v.a for v in values), min(v.b for v in values)])


def _most(values: Sequence[Any]) -> Any:
    """Return an interval that holds the greatest of several numbers."""
    return -_least([-value for value in values])


def _float(x: Any) -> float:
    """Return a float near the middle of an interval."""
    return float(x.mid)

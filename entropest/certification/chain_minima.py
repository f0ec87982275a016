"""Proven lower bounds on the least probability of a set of outcomes over all spectra of bounded entropy.

The sets are the top of the dominance order on diagrams with k boxes: depth 1 is {(k)}, depth 2 adds (k-1, 1), depth 3
adds (k-2, 2). Among all spectra with entropy at most s the least probability is that of a spectrum (x, y repeated r
times, t y) with x >= y, 0 <= t <= 1 and entropy s, for some r. For each r the interval of t is bisected: every such
spectrum in a cell [t0, t1] majorizes the one that has t = t1 and the x of entropy s at t = t0, whose probability bounds
the cell from below. Probabilities are compared in whole numbers, entropies by interval logarithms; floating point only
proposes where to look.

Proofs: docs/theory-chains.md, sections 3 and 4.
"""

import math
from fractions import Fraction
from functools import cache
from typing import Any, Final, NamedTuple

from entropest import _mp

__all__ = ["UNITS", "certified_minimum", "chain_rows", "chain_value", "deepest", "flat_limit"]

UNITS: Final = 10**10
"""Tabulated probabilities are whole multiples of 1/UNITS."""

_BITS: Final = 52
_DIGITS: Final = 30
_NUDGE: Final = 1.0 + 1e-11


def deepest(copies: int) -> int:
    """Return how many sets the chain of `copies` copies has: 1 at two copies, 2 at three, 3 from four on.

    Examples
    --------
    >>> [deepest(copies) for copies in (2, 3, 4, 8)]
    [1, 2, 3, 3]
    """
    return min(copies - 1, 3)


def chain_rows(copies: int) -> tuple[tuple[int, ...], ...]:
    """Return the diagrams that the sets of the chain add one by one.

    Examples
    --------
    >>> chain_rows(4)
    ((4,), (3, 1), (2, 2))
    """
    return ((copies,), (copies - 1, 1), (copies - 2, 2))[: deepest(copies)]


def chain_value(x: Any, y: Any, repeats: int, z: Any, *, copies: int, depth: int) -> Any:
    """Return N^copies times the probability of a set at the spectrum (x, y repeated, z)/N, N = x + repeats y + z.

    With f = k (k-3)/2 at depth 3 and 0 at depth 2 it is f h_2 h_{k-2} - (f-k+1) h_{k-1} N - (k-2) h_k; at depth 1, h_k.
    Integers and fractions give it exactly.

    Examples
    --------
    >>> chain_value(1, 1, 1, 0, copies=4, depth=2), chain_value(1, 1, 1, 0, copies=4, depth=3)  # of 16
    (14, 16)
    """
    h = [math.comb(repeats - 1 + i, i) * y**i for i in range(copies + 1)]
    for value in (x, z):
        for n in range(1, copies + 1):
            h[n] += value * h[n - 1]
    return _combine(h, copies, depth)


def flat_limit(x: Any, *, copies: int, depth: int) -> Any:
    """Return the probability of a set at the eigenvalue x and a rest spread over infinitely many eigenvalues.

    Examples
    --------
    >>> flat_limit(Fraction(0), copies=4, depth=3)  # 1 + 9 + 4 pairs of standard tableaux, of 24
    Fraction(7, 12)
    """
    h = [sum(x ** (n - i) * (1 - x) ** i / math.factorial(i) for i in range(n + 1)) for n in range(copies + 1)]
    return _combine(h, copies, depth)


def _combine(h: list[Any], copies: int, depth: int) -> Any:
    if depth == 1:
        return h[copies]
    tableaux = copies * (copies - 3) // 2 if depth == 3 else 0
    value = (copies - 1 - tableaux) * h[copies - 1] * h[1] - (copies - 2) * h[copies]
    return value + tableaux * h[2] * h[copies - 2] if tableaux else value


class _Spectrum(NamedTuple):
    """Integers proportional to the eigenvalues x, y (repeated) and z."""

    x: int
    y: int
    repeats: int
    z: int


def certified_minimum(copies: int, depth: int, entropy: float, *, gap: float) -> int:
    """Return a whole number g with P(set of `depth`) >= g/UNITS for every spectrum of entropy at most `entropy`.

    Parameters
    ----------
    copies, depth : int
        depth from 2 to deepest(copies).
    entropy : float
        In nats, positive, read as the exact binary number.
    gap : float
        How far g may lie below the least value, as a fraction of its distance to 1 and to its limit at infinite
        entropy, whichever is nearer.

    Examples
    --------
    >>> certified_minimum(3, 2, 0.693, gap=1e-3) / UNITS > 0.99  # 1 for qubits; three eigenvalues can have less
    True
    """
    search = _Search(copies, depth, entropy, gap / 2)
    repeats = _fewest_repeats(entropy)
    while not (repeats >= 3 and search.tail_is_done(repeats)):
        search.cover(repeats)
        repeats += 1
    return search.allowing(gap)


class _Search:
    """One branch and bound: the best value found so far and the target that all discarded cells reach."""

    def __init__(self, copies: int, depth: int, entropy: float, gap: float) -> None:
        self.copies, self.depth, self.entropy, self.gap = copies, depth, entropy, gap
        self.floor = float(flat_limit(0.0, copies=copies, depth=depth))
        self.best = 1.0
        self.target = UNITS
        fewest = _fewest_repeats(entropy)
        for repeats in range(fewest, fewest + 12):
            for eighths in range(9):
                self._try(repeats, eighths / 8)

    def cover(self, repeats: int) -> None:
        """Bisect 0 <= t <= 1 until every cell reaches the target."""
        cells = [(0, 0)]
        while cells:
            index, level = cells.pop()
            if not self._reached(repeats, index, level):
                self._try(repeats, (index + 0.5) / 2**level)
                cells += [(2 * index, level + 1), (2 * index + 1, level + 1)]

    def tail_is_done(self, repeats: int) -> bool:
        """Prove that no spectrum with at least `repeats` equal eigenvalues falls below the target."""
        low, high = 0.0, 1.0
        while high - low > 1e-6 * high:
            middle = 0.5 * (low + high)
            low, high = (middle, high) if middle * math.log(repeats / middle) <= self.entropy else (low, middle)
        if flat_limit(1.0 - high, copies=self.copies, depth=self.depth) * UNITS < self.target:
            return False
        rest = Fraction(math.ceil(high * _NUDGE * 2**40), 2**40)
        if rest > 1 or flat_limit(1 - rest, copies=self.copies, depth=self.depth) * UNITS < self.target:
            return False
        ctx = _intervals()
        weight = ctx.mpf(rest.numerator) / rest.denominator
        return bool((weight * ctx.log(repeats / weight)).a > self.entropy)

    def allowing(self, gap: float) -> int:
        """Return the best value found less the gap, in units, rounded down."""
        return math.floor((self.best - gap * min(self.best - self.floor, 1.0 - self.best)) * UNITS)

    def _try(self, repeats: int, t: float) -> None:
        """Lower the best value if the spectrum of the given entropy at t has a smaller one."""
        rest = _rest_of_entropy(self.entropy, repeats, t)
        if rest is None:
            return
        y = rest / (repeats + t)
        value = float(chain_value(1.0 - rest, y, repeats, t * y, copies=self.copies, depth=self.depth))
        if value < self.best:
            self.best = value
            self.target = self.allowing(self.gap)

    def _reached(self, repeats: int, index: int, level: int) -> bool:
        """Say whether all spectra of the entropy with t from index/2^level to (index+1)/2^level reach the target."""
        corner = self._corner(repeats, index, level)
        if corner is None:
            last = _Spectrum(2**level, 2**level, repeats, index + 1)
            if _entropy_interval(last).b < self.entropy:
                return True
            corner = last
        total = corner.x + corner.repeats * corner.y + corner.z
        value = chain_value(*corner, copies=self.copies, depth=self.depth)
        return bool(value * UNITS >= self.target * total**self.copies)

    def _corner(self, repeats: int, index: int, level: int) -> _Spectrum | None:
        """Return the spectrum with a proven entropy of at least s at the left end, its t moved to the right end."""
        rest = _rest_of_entropy(self.entropy, repeats, index / 2**level)
        if rest is None:
            return None
        share = math.ceil(rest * _NUDGE * 2**_BITS)
        left = _spectrum(share, repeats, index, level)
        if left.x < left.y or _entropy_interval(left).a < self.entropy:
            return None
        return _spectrum(share, repeats, index + 1, level)


def _spectrum(share: int, repeats: int, index: int, level: int) -> _Spectrum:
    """Return (1-v, y^r, t y) with v = share/2^_BITS, t = index/2^level, y = v/(r + t), as integers."""
    parts = (repeats << level) + index
    return _Spectrum(((1 << _BITS) - share) * parts, share << level, repeats, share * index)


def _rest_of_entropy(entropy: float, repeats: int, t: float) -> float | None:
    """Return 1 - x for the spectrum (x, y^r, t y) of the given entropy, x >= y; None where there is none.

    The entropy is h(v) + v c with the binary entropy h, v = 1 - x and the entropy c of (1^r, t)/(r + t): concave and
    rising up to x = y, so that Newton steps from below stay below.
    """
    parts = repeats + t
    c = math.log(parts) - (t * math.log(t) / parts if t > 0.0 else 0.0)
    most = parts / (parts + 1.0)
    if -(1.0 - most) * math.log1p(-most) - most * math.log(most) + most * c < entropy:
        return None
    v = entropy / (2.0 * (1.0 + c + math.log1p(1.0 / entropy)))
    for _ in range(60):
        slope = math.log1p(-v) - math.log(v) + c
        missing = entropy + (1.0 - v) * math.log1p(-v) + v * math.log(v) - v * c
        if missing <= 1e-15 * entropy or slope <= 0.0:
            break
        v += missing / slope
    return min(v, most)


def _fewest_repeats(entropy: float) -> int:
    """Return the least r that need be searched: log(r + 2) >= s, proved for all smaller r by the largest of them."""
    repeats = max(1, math.ceil(math.exp(entropy)) - 2)
    ctx = _intervals()
    while repeats > 1 and not ctx.log(repeats + 1).b < entropy:
        repeats -= 1
    return repeats


def _entropy_interval(spectrum: _Spectrum) -> Any:
    """Return an interval that contains the entropy: log N - (sum of a log a)/N for integers a of sum N."""
    ctx = _intervals()
    total = spectrum.x + spectrum.repeats * spectrum.y + spectrum.z
    weighted = ctx.zero
    for value, times in ((spectrum.x, 1), (spectrum.y, spectrum.repeats), (spectrum.z, 1)):
        if value > 0:
            weighted += ctx.mpf(value * times) * ctx.log(ctx.mpf(value))
    return ctx.log(ctx.mpf(total)) - weighted / total


@cache
def _intervals() -> Any:
    return _mp.interval_context(_DIGITS)

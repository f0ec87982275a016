"""The referee's plain re-check of the score test on chains: fractions, interval logarithms, whole-number convolution.

Nothing here is shared with the fast test but the table file, and every entry of it that a verdict uses is proved again.
"""

import json
import math
from collections.abc import Iterable, Mapping
from decimal import MAX_EMAX, MAX_PREC, MIN_EMIN, Context, Decimal, Inexact
from fractions import Fraction
from functools import cache
from importlib.resources import files
from itertools import accumulate
from typing import Any, Final, NamedTuple

from entropest import _mp
from entropest.certification.plain import binomial_sum_tail, fresh_context, step_level, symmetric_probability
from entropest.errors import RecheckError

__all__ = ["chain_rejects", "minimum_is_at_least", "tail_of_sum"]

Rows = tuple[int, ...]

_CAP: Final = 20.0 * math.log(2.0)
_STAGE_ENDS: Final = (0.693, 1.386, _CAP)
_WEIGHTS: Final = {
    3: ((2, 0), (2, 7), (2, 4)),
    4: ((2, 4, 0), (1, 1, 6), (2, 1, 3)),
    5: ((2, 4, 0), (1, 0, 6), (1, 1, 4)),
    6: ((2, 2, 1), (1, 0, 6), (1, 1, 5)),
    7: ((2, 2, 2), (0, 0, 7), (1, 0, 6)),
    8: ((2, 2, 2), (0, 0, 7), (1, 0, 8)),
}
_MANY_BLOCKS: Final = 10**6
_UNIT: Final = 10**30
_CUT: Final = 10**6
_SLOT: Final = 64
_WHOLE: Final = Context(prec=MAX_PREC, Emax=MAX_EMAX, Emin=MIN_EMIN, traps=[Inexact])


def chain_rejects(outcomes: Mapping[Rows, int], error: float, entropy: float) -> bool:
    """Say whether the test on chains rejects every entropy up to `entropy`.

    Parameters
    ----------
    outcomes : mapping of rows to counts
        The outcomes of all blocks that the test uses, each of at least two copies.
    error : float
        Level of the test.
    entropy : float
        In nats, positive; raised to the next point of the grid when blocks of 3 to 8 copies are present.

    Raises
    ------
    RecheckError
        If an entry of the table cannot be proved.

    Examples
    --------
    >>> record = {(3,): 110, (2, 1): 84, (1, 1, 1): 6}
    >>> chain_rejects(record, 0.05, 0.579), chain_rejects(record, 0.05, 0.5791)
    (True, False)
    """
    sizes: dict[int, int] = {}
    for rows, count in outcomes.items():
        sizes[sum(rows)] = sizes.get(sum(rows), 0) + count
    if not any(size in _WEIGHTS for size in sizes):
        return _symmetric_rejects(outcomes, sizes, error, entropy)
    if entropy > _CAP:
        return False
    point = min(s for s in _grid() if s >= entropy)
    return all(
        _p_value(outcomes, sizes, min(point, end), stage) <= error
        for stage, end in enumerate(_STAGE_ENDS)
        if stage == 0 or point > _STAGE_ENDS[stage - 1]
    )


def _symmetric_rejects(outcomes: Mapping[Rows, int], sizes: dict[int, int], error: float, entropy: float) -> bool:
    ctx = fresh_context()
    observed = sum(count for rows, count in outcomes.items() if len(rows) == 1)
    level = step_level(entropy, ctx)
    probabilities = {size: symmetric_probability(level, size, ctx) for size in sizes}
    return bool(binomial_sum_tail(observed, sizes, probabilities, ctx) <= error)


def _p_value(outcomes: Mapping[Rows, int], sizes: dict[int, int], entropy: float, stage: int) -> Any:
    """Bound the p-value at a grid point from above."""
    rows_of = {size: [(size,), (size - 1, 1), (size - 2, 2)][: len(_weights(size, stage))] for size in sizes}
    divisor = math.gcd(*(weight for size in sizes for weight in _weights(size, stage)))
    observed = 0
    laws = []
    for size, blocks in sizes.items():
        weights = [weight // divisor for weight in _weights(size, stage)]
        scores = [sum(weights[j:]) for j in range(len(weights) + 1)]
        observed += sum(score * outcomes.get(rows, 0) for score, rows in zip(scores, rows_of[size], strict=False))
        laws.append((blocks, dict(_least_law(size, entropy, scores))))
    return tail_of_sum(laws, observed)


def _weights(size: int, stage: int) -> tuple[int, ...]:
    return _WEIGHTS[size][stage] if size in _WEIGHTS else (2,)


def _least_law(size: int, entropy: float, scores: list[int]) -> Iterable[tuple[int, Fraction]]:
    """Return score and probability of the law whose tails are the proven minima."""
    ctx = fresh_context()
    symmetric = symmetric_probability(step_level(entropy, ctx), size, ctx)
    minima = [Fraction(int(ctx.floor(symmetric * 10**40)) - 1, 10**40)]
    for depth in range(2, len(scores)):
        minima.append(max(minima[-1], _proved_minimum(size, depth, entropy)))
    law: dict[int, Fraction] = {}
    for score, upper, lower in zip(scores, [*minima, Fraction(1)], [Fraction(0), *minima], strict=True):
        law[score] = law.get(score, Fraction(0)) + upper - lower
    return law.items()


def tail_of_sum(laws: Iterable[tuple[int, dict[int, Fraction]]], observed: int) -> Any:
    """Bound P(sum of independent scores <= observed) from above.

    A law is its number of blocks and the probabilities of its scores. Up to a million blocks weights are whole
    multiples of 10^-30, rounded up; what lies outside the window is added. Beyond that Chernoff's bound is used.

    Examples
    --------
    >>> tail_of_sum([(4, {1: Fraction(3, 4), 0: Fraction(1, 4)})], 2)
    Fraction(67, 256)
    """
    parts = list(laws)
    if observed >= sum(blocks * max(law) for blocks, law in parts):
        return Fraction(1)
    if sum(blocks for blocks, _ in parts) > _MANY_BLOCKS:
        return _chernoff(parts, observed)
    total = _Weights(0, [_UNIT], 0)
    for blocks, law in parts:
        total = total.plus(_Weights.of_power(law, blocks))
    below = sum(weight for n, weight in enumerate(total.weights, start=total.start) if n <= observed)
    return Fraction(below + total.lost, _UNIT)


class _Weights(NamedTuple):
    """Upper bounds on probabilities start, start+1, ... and on what is left out, in multiples of 1/_UNIT."""

    start: int
    weights: list[int]
    lost: int

    @classmethod
    def of_power(cls, law: dict[int, Fraction], blocks: int) -> "_Weights":
        """Return the law of the sum of `blocks` scores by repeated squaring."""
        once = cls(0, [math.ceil(law.get(score, Fraction(0)) * _UNIT) for score in range(max(law) + 1)], 0)
        total = cls(0, [_UNIT], 0)
        for bit in bin(blocks)[2:]:
            total = total.plus(total)
            if bit == "1":
                total = total.plus(once)
        return total

    def plus(self, other: "_Weights") -> "_Weights":
        """Return the law of the sum of two independent variables, its light ends cut off."""
        products = [-(-product // _UNIT) for product in _convolution(self.weights, other.weights)]
        first, last, lost = 0, len(products), self.lost + other.lost
        cut = 0
        while cut + products[first] <= _CUT:
            cut += products[first]
            first += 1
        lost, cut = lost + cut, 0
        while cut + products[last - 1] <= _CUT:
            cut += products[last - 1]
            last -= 1
        return _Weights(self.start + other.start + first, products[first:last], lost + cut)


def _convolution(first: list[int], second: list[int]) -> list[int]:
    """Convolve by one product of two decimal numbers that hold the entries in slots of _SLOT digits."""
    numbers = [Decimal("".join(f"{entry:0{_SLOT}d}" for entry in entries)) for entries in (first, second)]
    length = len(first) + len(second) - 1
    digits = f"{_WHOLE.multiply(*numbers):f}".zfill(_SLOT * length)
    return [int(digits[i : i + _SLOT]) for i in range(len(digits) - _SLOT * length, len(digits), _SLOT)]


def _chernoff(parts: list[tuple[int, dict[int, Fraction]]], observed: int) -> Any:
    """Return exp(t observed) E exp(-t sum) at a t >= 0 near its minimum."""
    ctx = fresh_context()
    laws = [(n, {score: ctx.mpf(q.numerator) / q.denominator for score, q in law.items()}) for n, law in parts]

    def mean(t: Any) -> Any:
        tilted = ctx.zero
        for n, law in laws:
            shares = {score: q * ctx.exp(-t * score) for score, q in law.items()}
            tilted += n * sum(score * share for score, share in shares.items()) / sum(shares.values())
        return tilted

    low, high = ctx.zero, ctx.one
    while high < 1000 and mean(high) > observed:
        high *= 2
    for _ in range(100):
        middle = (low + high) / 2
        low, high = (middle, high) if mean(middle) > observed else (low, middle)
    exponent = low * observed
    for n, law in laws:
        exponent += n * ctx.log(sum(q * ctx.exp(-low * score) for score, q in law.items()))
    return ctx.exp(exponent) * (1 + ctx.mpf(10) ** -20)


@cache
def _table() -> dict[str, Any]:
    text = files("entropest.certification.tables").joinpath("chain_minima.json").read_text(encoding="utf-8")
    table: dict[str, Any] = json.loads(text)
    return table


@cache
def _grid() -> tuple[float, ...]:
    """Return the tabulated entropies and those that follow in steps of 0.02 up to the cap."""
    tabulated = _table()["entropies"]
    beyond = [round(tabulated[-1] + 0.02 * i, 6) for i in range(1, 1000)]
    return (*tabulated, *(s for s in beyond if s < _CAP), _CAP)


@cache
def _proved_minimum(size: int, depth: int, entropy: float) -> Fraction:
    """Look up a minimum probability and prove it; beyond the table the limit at infinite entropy holds."""
    table = _table()
    if entropy > table["entropies"][-1]:
        return _spread_out(size, depth, Fraction(0))
    first, *decrements = table["minima"][str(size)][str(depth)]
    values = list(accumulate(decrements, lambda value, step: value - step, initial=first))
    value = Fraction(values[table["entropies"].index(entropy)], table["units"])
    if not minimum_is_at_least(size, depth, entropy, value):
        raise RecheckError(f"the table's {float(value)} for {size} copies, depth {depth} at {entropy} is not proved")
    return value


def minimum_is_at_least(size: int, depth: int, entropy: float, value: Fraction) -> bool:
    """Prove that every spectrum of entropy at most `entropy` gives the set at least `value`; False if undecided.

    Spectra (x, y repeated r times, t y) of that entropy suffice. Cells of t are halved, at most 40 times, until a
    spectrum that is majorized by all of the cell reaches the value.

    Examples
    --------
    >>> [minimum_is_at_least(3, 2, 0.693, Fraction(g, 1000)) for g in (988, 992)]
    [True, False]
    """
    if value > _spread_out(size, depth, Fraction(1)):
        return False
    r = 1
    while _surely_below(_entropy_of([(1, r + 2)]), entropy):
        r += 1
    while not _tail_reaches(size, depth, entropy, value, r):
        cells = [(Fraction(0), Fraction(1))]
        while cells:
            left, right = cells.pop()
            if _cell_reaches(size, depth, entropy, value, r, left, right):
                continue
            if right - left < Fraction(1, 2**40):
                return False
            middle = (left + right) / 2
            cells += [(left, middle), (middle, right)]
        r += 1
    return True


def _cell_reaches(
    size: int, depth: int, entropy: float, value: Fraction, r: int, left: Fraction, right: Fraction
) -> bool:
    x = _largest_share(entropy, r, float(left))
    if x is not None and x * (r + 1 + left) >= 1:
        y = (1 - x) / (r + left)
        if _surely_at_least(_entropy_of([(x, 1), (y, r), (left * y, 1)]), entropy):
            y = (1 - x) / (r + right)
            return _probability(size, depth, [(x, 1), (y, r), (right * y, 1)]) >= value
    u = 1 / (r + 1 + right)
    if _surely_below(_entropy_of([(u, r + 1), (right * u, 1)]), entropy):
        return True
    return _probability(size, depth, [(u, r + 1), (right * u, 1)]) >= value


def _tail_reaches(size: int, depth: int, entropy: float, value: Fraction, r: int) -> bool:
    """Say whether v log(r/v) > entropy for a v that leaves x = 1 - v enough: all larger r are then settled."""
    if r < 3:
        return False
    low, high = 0.0, 1.0
    for _ in range(50):
        middle = (low + high) / 2
        low, high = (middle, high) if middle * math.log(r / middle) <= entropy else (low, middle)
    v = Fraction(high) * (1 + Fraction(1, 10**12))
    if v > 1 or _spread_out(size, depth, 1 - v) < value:
        return False
    ctx = _intervals()
    share = ctx.mpf(v.numerator) / v.denominator
    return bool((share * ctx.log(r / share)).a > entropy)


def _largest_share(entropy: float, r: int, t: float) -> Fraction | None:
    """Propose the x at which (x, y^r, t y) has the entropy, from below; None if there is none."""

    def at_least(x: float) -> bool:
        y = (1.0 - x) / (r + t)
        return -x * math.log(x) - r * y * math.log(y) - (t * y * math.log(t * y) if t > 0.0 else 0.0) >= entropy

    low, high = 1.0 / (r + 1.0 + t), 1.0
    if not at_least(low):
        return None
    while high - low > 1e-13 * (1.0 - low):
        middle = (low + high) / 2
        if not low < middle < high:
            break
        low, high = (middle, high) if at_least(middle) else (low, middle)
    return max(Fraction(low) - Fraction(1.0 - low) / 10**11, Fraction(0))


def _probability(size: int, depth: int, spectrum: list[tuple[Fraction, int]]) -> Fraction:
    """Return the probability of the set from h_m and two-row Schur polynomials (Jacobi and Trudi)."""
    h = [Fraction(1)] + [Fraction(0)] * size
    for p, times in spectrum:
        new = [math.comb(times - 1 + i, i) * p**i for i in range(size + 1)]
        h = [sum((h[n - i] * new[i] for i in range(n + 1)), Fraction(0)) for n in range(size + 1)]
    return _set_value(size, depth, h)


def _spread_out(size: int, depth: int, x: Fraction) -> Fraction:
    """Return the probability for one eigenvalue x and infinitely many infinitely small ones."""
    h = [
        sum((x ** (n - i) * (1 - x) ** i / math.factorial(i) for i in range(n + 1)), Fraction(0))
        for n in range(size + 1)
    ]
    return _set_value(size, depth, h)


def _set_value(size: int, depth: int, h: list[Fraction]) -> Fraction:
    total = h[size]
    for b in range(1, depth):
        tableaux = math.comb(size, b) - math.comb(size, b - 1)
        total += tableaux * (h[size - b] * h[b] - h[size - b + 1] * h[b - 1])
    return total


def _entropy_of(weights: list[tuple[Any, int]]) -> Any:
    """Return an interval around the entropy of eigenvalues proportional to the weights."""
    ctx = _intervals()
    total = sum(Fraction(p) * times for p, times in weights)
    entropy = ctx.zero
    for p, times in weights:
        share = Fraction(p) / total
        if share > 0:
            number = ctx.mpf(share.numerator) / share.denominator
            entropy -= times * number * ctx.log(number)
    return entropy


def _surely_at_least(interval: Any, entropy: float) -> bool:
    return bool(interval.a >= entropy)


def _surely_below(interval: Any, entropy: float) -> bool:
    return bool(interval.b < entropy)


@cache
def _intervals() -> Any:
    return _mp.interval_context(30)

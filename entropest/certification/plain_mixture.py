"""The referee's re-check of the mixture e-value, with 50 digits and exact characters."""

import math
from collections.abc import Mapping, Sequence
from typing import Any

from entropest.certification.certificate import WitnessSet
from entropest.certification.plain import cycle_values, exact_chord, exact_interpolant, fresh_context, partitions

__all__ = ["documented_witnesses", "mixture_rejects"]

Rows = tuple[int, ...]

_ENTROPIES = (0.1, 0.25, 0.5, 0.8, 1.15, 1.6, 2.1, 2.8, 3.6, 4.6)
_POWERS = {
    3: ((1.0,), (2.0,)),
    4: ((1.0, 0.0), (2.3, 0.3)),
    5: ((1.0, 0.0), (2.3, 0.3)),
    6: ((0.93, 0.0, 0.0), (2.0, 0.3, 0.0)),
}


def mixture_rejects(outcomes: Mapping[Rows, int], error: float, entropy: float, fractions: Sequence[float]) -> bool:
    """Say whether the mixture e-value reaches 1/error against "the entropy is at most `entropy`"."""
    ctx = fresh_context()
    sizes = {size: _coefficients(documented_witnesses(size), ctx) for size in sorted({sum(rows) for rows in outcomes})}
    if not sizes:
        return False
    floors = {size: _floors(size, coefficients) for size, coefficients in sizes.items()}
    seen = [(sum(rows), count, [_value(rows, c) for c in sizes[sum(rows)]]) for rows, count in outcomes.items()]
    ladder = range(len(next(iter(sizes.values()))))
    needed = len(ladder) * len(fractions) / ctx.mpf(error)
    total = ctx.zero
    for i in ladder:
        for fraction in fractions:
            product = ctx.one
            for size, count, values in seen:
                bet = ctx.mpf(repr(fraction)) / (entropy - floors[size][i])
                product *= (1 + bet * (values[i] - entropy)) ** count
            total += product
            if total >= needed:
                return True
    return False


def documented_witnesses(copies: int) -> WitnessSet:
    """Return the documented grid of witnesses for blocks of `copies` copies."""
    if copies == 2:
        chords = tuple(int(math.exp(s)) + step for s in _ENTROPIES for step in (0, 1))
        return WitnessSet(copies=2, order=2, chords=chords)
    order = min(copies, 6)
    nodes = tuple(
        tuple(float(f"{math.exp(-power * s):.6g}") for power in powers) for s in _ENTROPIES for powers in _POWERS[order]
    )
    return WitnessSet(copies=copies, order=order, nodes=nodes)


def _coefficients(witnesses: WitnessSet, ctx: Any) -> list[list[Any]]:
    if witnesses.order == 2:
        return [exact_chord(r, ctx) for r in witnesses.chords]
    return [exact_interpolant(nodes, witnesses.order, ctx) for nodes in witnesses.nodes]


def _value(rows: tuple[int, ...], coefficients: list[Any]) -> Any:
    """Return sum_j c_j T_{j+1} at one outcome."""
    characters = cycle_values(rows, len(coefficients))
    return sum(c * t.numerator / t.denominator for c, t in zip(coefficients, characters, strict=True))


def _floors(size: int, coefficients: list[list[Any]]) -> list[Any]:
    """Return the least value of each witness over all outcomes of min(size, 16) copies, at most 0."""
    shapes = partitions(min(size, 16))
    return [min(0, *(_value(rows, c) for rows in shapes)) for c in coefficients]

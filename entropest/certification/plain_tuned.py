"""The referee's re-check of the entropy-tuned e-value, with 50 digits and exact characters.

The bets may be any numbers fixed before the data, so they are taken from the fast code as they are; that each leaves
every factor non-negative, and what the e-values are, is computed here again.
"""

from collections.abc import Mapping
from functools import cache
from typing import Any

from entropest.certification.plain import (
    cycle_values,
    exact_chord,
    exact_interpolant,
    fresh_context,
    partitions,
)
from entropest.certification.tuned import GRID, cell_of, tuned_bets, tuned_chord, tuned_nodes, tuned_weights
from entropest.errors import RecheckError

__all__ = ["tuned_scan_ends_at"]

Rows = tuple[int, ...]
_LARGEST_ORDER = 6
_FLOOR_SIZE = 16


def tuned_scan_ends_at(
    outcomes: Mapping[Rows, int], error: float, planned: Mapping[int, int], *, drifting: bool, leading: int = 0
) -> float:
    """Return the last point of the unbroken run of rejections from the first point of the grid on, 0 if there is none.

    Parameters
    ----------
    outcomes : mapping of rows to counts
        The outcomes of all blocks that the test uses, each of at least two copies.
    error : float
        Level of the test.
    planned : mapping of int to int
        The numbers of blocks that tuned the bets.
    drifting : bool
        Whether all sizes share one bet.
    leading : int
        The component with most of the weight.

    Raises
    ------
    RecheckError
        If a bet could make a factor negative.
    """
    ctx = fresh_context()
    sizes = sorted({sum(rows) for rows in outcomes})
    all_bets = tuned_bets(sizes, error=error, planned=planned, drifting=drifting)
    weights = [ctx.mpf(float(weight)) for weight in tuned_weights(planned, sizes, leading)]
    needed = 1 / ctx.mpf(error)
    last = 0.0
    for i, entropy in enumerate(GRID):
        total = ctx.zero
        for component, weight in enumerate(weights):
            product = weight
            for size in sizes:
                coefficients = _coefficients(size, cell_of(i))
                chosen = min(component, len(coefficients) - 1)
                bet = ctx.mpf(float(all_bets[size][i, component]))
                if bet < 0 or 1 + bet * (_floor(size, cell_of(i), chosen) - entropy) < 0:
                    raise RecheckError(f"the bet on blocks of {size} copies at {entropy} could make a factor negative")
                for rows, count in outcomes.items():
                    if sum(rows) == size:
                        value = _value(rows, size, cell_of(i), chosen)
                        product *= (1 + bet * (value - entropy)) ** count
            total += product
        if total < needed:
            break
        last = entropy
    return last


@cache
def _coefficients(size: int, cell: int) -> tuple[list[Any], ...]:
    ctx = fresh_context()
    order = min(size, _LARGEST_ORDER)
    if order == 2:
        return (exact_chord(tuned_chord(cell), ctx),)
    return tuple(exact_interpolant(nodes, order, ctx) for nodes in tuned_nodes(size, cell))


@cache
def _value(rows: Rows, size: int, cell: int, component: int) -> Any:
    coefficients = _coefficients(size, cell)[component]
    characters = cycle_values(rows, len(coefficients))
    return sum(c * t.numerator / t.denominator for c, t in zip(coefficients, characters, strict=True))


@cache
def _floor(size: int, cell: int, component: int) -> Any:
    return min(0, *(_value(rows, size, cell, component) for rows in partitions(min(size, _FLOOR_SIZE))))

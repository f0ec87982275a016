"""The referee's re-check of the identical-blocks e-value; nothing here is shared with the fast test.

The rule that is checked is the ideal one, with the exact suprema in place of the tabulated ones: it rejects an entropy
whenever the e-value with any larger numbers does. So for every cell of the table up to the bound the referee looks for
the largest numbers that still reject at the last entropy of the cell, and proves them to be upper bounds.
"""

import json
import math
from collections.abc import Mapping, Sequence
from fractions import Fraction
from importlib.resources import files
from typing import Any, Final

from entropest import _mp
from entropest.certification.plain import cycle_values, partitions
from entropest.certification.plain_suprema import prove_supremum
from entropest.errors import RecheckError

__all__ = ["check_identical_blocks", "pair_of_swaps_value"]

Rows = tuple[int, ...]
_STAKE: Final = Fraction(97, 100)
_DESIGN_CHANGE: Final = 3000
_MOST_SLACK: Final = 0.3


def pair_of_swaps_value(rows: Rows) -> Fraction:
    """Return chi(two disjoint transpositions)/chi(identity), by removing two rim hooks of two boxes in every way.

    Examples
    --------
    >>> pair_of_swaps_value((2, 1, 1))
    Fraction(-1, 3)
    """

    def dominoes_off(betas: tuple[int, ...]) -> list[tuple[int, tuple[int, ...]]]:
        return [
            ((-1) ** sum(beta - 2 < other < beta for other in betas), tuple(sorted({*betas} - {beta} | {beta - 2})))
            for beta in betas
            if beta >= 2 and beta - 2 not in betas
        ]

    def dimension(betas: tuple[int, ...]) -> Fraction:
        gaps = math.prod(b - a for i, a in enumerate(betas) for b in betas[i + 1 :])
        return Fraction(gaps * math.factorial(boxes(betas)), math.prod(math.factorial(beta) for beta in betas))

    def boxes(betas: tuple[int, ...]) -> int:
        return sum(betas) - len(betas) * (len(betas) - 1) // 2

    start = tuple(sorted(row + len(rows) - 1 - i for i, row in enumerate(rows)))
    total = sum(
        first * second * dimension(left) for first, once in dominoes_off(start) for second, left in dominoes_off(once)
    )
    return Fraction(total) / dimension(start)


def check_identical_blocks(
    outcomes: Mapping[Rows, int], lower: float, *, error: float, planned_blocks: Mapping[int, int]
) -> int:
    """Re-derive a bound of the identical-blocks e-value and prove every supremum that it needs.

    Parameters
    ----------
    outcomes : mapping
        How often each diagram, given by its rows, was seen; other sizes than 3 .. 6 are ignored.
    lower : float
        The bound to be checked, in nat.
    error : float
        Its error probability.
    planned_blocks : mapping
        The numbers of blocks that tuned the bets.

    Returns
    -------
    int
        The number of suprema proved.

    Raises
    ------
    RecheckError
        If the bound is not the one of this record, or a supremum cannot be proved.
    """
    referee = _Referee(outcomes, error, planned_blocks)
    places = (
        [(cell, point) for cell in range(referee.cells) for point in range(referee.points)] if referee.sizes else []
    )
    steps = next((i for i, place in enumerate(places) if referee.entropy(place) > lower), len(places))
    if (referee.entropy(places[steps - 1]) if steps else 0.0) != lower:
        raise RecheckError(f"lower of the identical-blocks e-value must be an entropy of its table, got {lower!r}")
    if steps < len(places) and referee.rejects(places[steps]):
        raise RecheckError(f"lower of the identical-blocks e-value is not the bound of this record, got {lower!r}")
    return sum(
        referee.prove(place)
        for i, place in enumerate(places[:steps])
        if i + 1 == steps or place[1] + 1 == referee.points
    )


class _Referee:
    """One record against the table."""

    def __init__(self, outcomes: Mapping[Rows, int], error: float, planned_blocks: Mapping[int, int]) -> None:
        text = files("entropest.certification.tables").joinpath("identical_blocks.json").read_text(encoding="utf-8")
        self.ctx = _mp.context(40)
        self.table: dict[str, Any] = json.loads(text)
        self.counts = {rows: count for rows, count in outcomes.items() if str(sum(rows)) in self.table["sizes"]}
        self.sizes = sorted({sum(rows) for rows, count in self.counts.items() if count})
        self.cells = min((len(self.table["sizes"][str(size)]) for size in self.sizes), default=0)
        self.points = len(self.table["entropies"][0])
        copies = sum(size * blocks for size, blocks in planned_blocks.items() if str(size) in self.table["sizes"])
        self.design = 0 if copies < _DESIGN_CHANGE else 1
        self.boldness = self.ctx.sqrt(self.ctx.mpf(self.table["designs"][self.design]) / max(copies, 1))
        self.needed = -self.ctx.log(self.ctx.mpf(error))
        self.characters = {
            rows: [*cycle_values(rows, size), pair_of_swaps_value(rows)]
            for size in self.sizes
            for rows in partitions(size)
        }

    def entropy(self, place: tuple[int, int]) -> float:
        return float(self.table["entropies"][place[0]][place[1]])

    def rejects(self, place: tuple[int, int]) -> bool:
        """Say whether the e-value with the tabulated numbers rejects."""
        return bool(self._log_value(place, range(len(self.table["weights"])), 0.0) >= self.needed)

    def prove(self, place: tuple[int, int]) -> int:
        """Prove, for the families that reject with most room, suprema that suffice; return how many."""
        families = range(len(self.table["weights"]))
        rooms = {(family,): self._room(place, (family,)) for family in families}
        best = max(rooms, key=lambda chosen: rooms[chosen])
        chosen: Sequence[int] = best if rooms[best] >= 0.0 else families
        room = rooms[best] if rooms[best] >= 0.0 else self._room(place, families)
        if room < 0.0:
            raise RecheckError(f"the record does not reject the entropy {self.entropy(place)!r}")
        for size in self.sizes:
            for family in chosen:
                numbers = self._statistic(size, place, family)
                prove_supremum(numbers[:-1], numbers[-1], self.entropy(place), self._upper(size, place, family, room))
        return len(chosen) * len(self.sizes)

    def _room(self, place: tuple[int, int], families: Sequence[int]) -> float:
        """Return by how much entropy the suprema may be overstated with these families still rejecting; else -1."""
        if self._log_value(place, families, 0.0) < self.needed:
            return -1.0
        low, high = 0.0, _MOST_SLACK * min(1.0, self.entropy(place))
        for _ in range(12):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if self._log_value(place, families, middle) >= self.needed else (low, middle)
        return low

    def _log_value(self, place: tuple[int, int], families: Sequence[int], room: float) -> Any:
        """Return the logarithm of the e-value from some families, with suprema overstated by `room`."""
        ctx = self.ctx
        products = []
        for family in families:
            total = ctx.log(ctx.mpf(str(self.table["weights"][family])))
            for size in self.sizes:
                upper = ctx.mpf(self._upper(size, place, family, room))
                values = self._values(size, place[0], family)
                bet = self._bet(size, place[0], family, min(values.values()))
                for rows, value in values.items():
                    if self.counts.get(rows, 0):
                        factor = 1 + bet * (value / upper - 1)
                        if factor <= 0:
                            return -ctx.inf
                        total += self.counts[rows] * ctx.log(factor)
            products.append(total)
        top = max(products)
        return top + ctx.log(sum(ctx.exp(product - top) for product in products))

    def _values(self, size: int, cell: int, family: int) -> dict[Rows, Any]:
        """Return the statistic at every diagram, from exact fractions."""
        numbers = [Fraction(number) for number in self._statistic(size, (cell, 0), family)]
        exact = {
            rows: sum(c * t for c, t in zip(numbers, self.characters[rows], strict=True)) for rows in partitions(size)
        }
        return {rows: self.ctx.mpf(value.numerator) / value.denominator for rows, value in exact.items()}

    def _bet(self, size: int, cell: int, family: int, least: Any) -> Any:
        largest = self._upper(size, (cell, self.points - 1), family, 0.0)
        room = 1 - least / largest
        cap = self.ctx.mpf(_STAKE.numerator) / _STAKE.denominator / room if room > 0 else self.ctx.inf
        return min(self.boldness, cap)

    def _statistic(self, size: int, place: tuple[int, int], family: int) -> list[float]:
        return [float(c) for c in self.table["sizes"][str(size)][place[0]]["coefficients"][self.design][family]]

    def _upper(self, size: int, place: tuple[int, int], family: int, room: float) -> float:
        """Return the tabulated number plus what `room` of entropy is worth in the cell."""
        row = self.table["sizes"][str(size)][place[0]]["suprema"][self.design][family]
        grid = self.table["entropies"][place[0]]
        slope = sum(row[1:]) / self.table["units"] / (grid[-1] - grid[0])
        return float(sum(row[: place[1] + 1]) / self.table["units"] + room * slope)

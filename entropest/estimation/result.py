"""Estimate: the answer of :func:`entropest.estimation.estimate`."""

import math
from dataclasses import dataclass
from typing import Any

from entropest.functionals import Functional

__all__ = ["SCHEMA", "Estimate"]

SCHEMA = "entropest-estimate/1"


@dataclass(frozen=True, slots=True, kw_only=True)
class Estimate:
    """An estimate of a functional of the spectrum, with its interval.

    Attributes
    ----------
    value : float or None
        The estimate; None where the data do not single out a value. Infinite where the functional is.
    interval : tuple of float
        Lower and upper end; an end is infinite where nothing bounds it.
    standard_error : float or None
        Standard error of the value, where one was formed.
    method : str
        How the value was formed; for method="auto", the method that was chosen.
    functional : Functional
        What was estimated.
    unit : str
        Unit of value, interval and standard error; "1" for dimensionless functionals.
    confidence : float
        Nominal coverage of the interval.
    copies, blocks : int
        What the record holds.
    identified : bool
        Whether more blocks like these would fix the functional; if not, the interval cannot shrink to a point.
    reason : str
        Why the method was chosen; empty for a method that was asked for.
    notes : tuple of str
        What was capped, left out or assumed, and what the interval rests on.
    """

    value: float | None
    interval: tuple[float, float]
    standard_error: float | None
    method: str
    functional: Functional
    unit: str
    confidence: float
    copies: int
    blocks: int
    identified: bool
    reason: str = ""
    notes: tuple[str, ...] = ()

    @property
    def lower(self) -> float:
        """The lower end alone: a one-sided limit that holds at least as often as the interval does."""
        return self.interval[0]

    @property
    def upper(self) -> float:
        """The upper end alone: a one-sided limit that holds at least as often as the interval does."""
        return self.interval[1]

    def __str__(self) -> str:
        unit = "" if self.unit == "1" else f" {self.unit}"
        low, high = (f"{end:.4g}" for end in self.interval)
        value = "not identified by this record" if not self.identified else "no value"
        if self.value is not None:
            value = f"{self.value:.4g}{unit}"
        sizes = f"{self.blocks} block{'s' * (self.blocks != 1)}, {self.copies} copies"
        lines = [
            f"{self.functional.name}: {value}",
            f"{100 * self.confidence:g}% interval: {low} to {high}{unit}",
            f"method: {self.method}{', ' * bool(self.reason)}{self.reason} ({sizes})",
        ]
        return "\n".join(lines + [f"note: {note}" for note in self.notes])

    def to_dict(self) -> dict[str, Any]:
        """Return the estimate as a dict of plain JSON values; what is infinite becomes None.

        Examples
        --------
        >>> from entropest.records import DiagramCounts
        >>> from entropest.estimation import estimate
        >>> found = estimate(DiagramCounts({"60+40": 1}, dim=2)).to_dict()
        >>> found["schema"], found["method"], found["unit"], found["copies"]
        ('entropest-estimate/1', 'split posterior', 'nat', 100)
        """
        return {
            "schema": SCHEMA,
            "functional": self.functional.name,
            "value": _finite(self.value),
            "interval": [_finite(end) for end in self.interval],
            "standard_error": _finite(self.standard_error),
            "unit": self.unit,
            "method": self.method,
            "reason": self.reason,
            "confidence": self.confidence,
            "copies": self.copies,
            "blocks": self.blocks,
            "identified": self.identified,
            "notes": list(self.notes),
        }


def _finite(value: float | None) -> float | None:
    return value if value is not None and math.isfinite(value) else None

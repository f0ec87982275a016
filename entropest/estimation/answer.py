"""Answer: an estimate in nats, before it is put into units."""

from dataclasses import dataclass

from entropest.estimation.identified import Range

__all__ = ["Answer", "capped", "inside"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Answer:
    """What a way through a record found; the attributes are those of Estimate, in nats."""

    value: float | None
    interval: Range
    standard_error: float | None
    method: str
    identified: bool
    notes: tuple[str, ...]
    reason: str = ""


def capped(raw: float, possible: Range, notes: list[str], what: str = "estimate") -> float:
    """Return the nearest value of a range, and add a note when that is another one."""
    value = min(max(raw, possible.lower), possible.upper)
    if value != raw and not abs(value - raw) <= 1e-12:
        notes.append(f"the {what} {raw:.4g} lies outside the interval of possible values and was capped at {value:.4g}")
    return value


def inside(found: Range, possible: Range) -> Range:
    """Return a range cut to the possible one."""
    lower = min(max(found.lower, possible.lower), possible.upper)
    return Range(lower=lower, upper=min(max(found.upper, possible.lower), possible.upper))

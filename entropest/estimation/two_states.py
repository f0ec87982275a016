"""Two unknown states: distances and fidelity bounds from swap tests."""

import math
from dataclasses import dataclass
from typing import Any

from entropest._checks import as_confidence
from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.estimation.moment_tallies import shift_limits
from entropest.estimation.moments import power_sum_limits
from entropest.records.counts import DiagramCounts
from entropest.records.moment_counts import MomentCounts

__all__ = ["Quantity", "StateComparison", "common_dim", "compare_states"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Quantity:
    """A value and its interval; both may be infinite."""

    value: float
    interval: tuple[float, float]

    def __str__(self) -> str:
        return f"{self.value:.4g} ({self.interval[0]:.4g} to {self.interval[1]:.4g})"

    def to_dict(self) -> dict[str, Any]:
        """Return plain JSON values; what is infinite becomes the text "infinity"."""
        return {"value": _plain(self.value), "interval": [_plain(end) for end in self.interval]}


@dataclass(frozen=True, slots=True, kw_only=True)
class StateComparison:
    """What swap tests within and between two states say about them; all intervals hold together.

    Attributes
    ----------
    purity_first, purity_second, overlap : Quantity
        Tr rho^2, Tr sigma^2 and Tr rho sigma.
    hilbert_schmidt : Quantity
        sqrt(Tr (rho - sigma)^2).
    super_fidelity : Quantity
        Tr rho sigma + sqrt((1 - Tr rho^2)(1 - Tr sigma^2)), not below the fidelity.
    sub_fidelity : Quantity or None
        Tr rho sigma + sqrt(2 [(Tr rho sigma)^2 - Tr rho sigma rho sigma]), not above the fidelity; None without tests
        of the cyclic shift on rho, sigma, rho, sigma.
    fidelity, trace_distance : tuple of float
        Range of (Tr |sqrt(rho) sqrt(sigma)|)^2 and of Tr |rho - sigma| / 2 that the intervals allow.
    confidence : float
        Of all intervals together.
    notes : tuple of str
        What was capped, and what the intervals rest on.
    """

    purity_first: Quantity
    purity_second: Quantity
    overlap: Quantity
    hilbert_schmidt: Quantity
    super_fidelity: Quantity
    sub_fidelity: Quantity | None
    fidelity: tuple[float, float]
    trace_distance: tuple[float, float]
    confidence: float
    notes: tuple[str, ...]

    def __str__(self) -> str:
        lines = [
            f"purities: {self.purity_first} and {self.purity_second}",
            f"overlap: {self.overlap}",
            f"Hilbert-Schmidt distance: {self.hilbert_schmidt}",
            f"super-fidelity: {self.super_fidelity}",
        ]
        if self.sub_fidelity is not None:
            lines.append(f"sub-fidelity: {self.sub_fidelity}")
        for name, (low, high) in (("fidelity", self.fidelity), ("trace distance", self.trace_distance)):
            lines.append(f"{name}: {low:.4g} to {high:.4g}")
        lines.append(f"all intervals together at {100 * self.confidence:g}%")
        return "\n".join(lines + [f"note: {note}" for note in self.notes])

    def to_dict(self) -> dict[str, Any]:
        """Return the comparison as a dict of plain JSON values."""
        return {
            "schema": "entropest-state-comparison/1",
            "purity_first": self.purity_first.to_dict(),
            "purity_second": self.purity_second.to_dict(),
            "overlap": self.overlap.to_dict(),
            "hilbert_schmidt": self.hilbert_schmidt.to_dict(),
            "super_fidelity": self.super_fidelity.to_dict(),
            "sub_fidelity": None if self.sub_fidelity is None else self.sub_fidelity.to_dict(),
            "fidelity": list(self.fidelity),
            "trace_distance": list(self.trace_distance),
            "confidence": self.confidence,
            "notes": list(self.notes),
        }


def compare_states(
    *,
    first: DiagramCounts,
    second: DiagramCounts,
    between: DiagramCounts,
    cyclic: MomentCounts | None = None,
    confidence: float = 0.95,
) -> StateComparison:
    """Compare two unknown states by swap tests on pairs (rho, rho), (sigma, sigma) and (rho, sigma).

    Every interval follows from exact binomial limits on the three (or four) mean outcomes, each with its share of
    the error, at the worst corner of their box. Fidelity: between the overlap or the sub-fidelity and the
    super-fidelity, which for qubits it equals. Trace distance T, with D the Hilbert-Schmidt distance, F the fidelity:
    max(D/sqrt 2, 1 - sqrt F) <= T <= min(D sqrt(d)/2, sqrt(1 - F)).

    Parameters
    ----------
    first, second, between : DiagramCounts
        Blocks of two copies: diagram 2 for symmetric, 1+1 for antisymmetric outcomes.
    cyclic : MomentCounts, optional
        Tests of order 4 on rho, sigma, rho, sigma in that order, whose mean is Tr rho sigma rho sigma.
    confidence : float
        Of all intervals together.

    Raises
    ------
    ArgumentValueError, ArgumentTypeError
        If a record has other blocks, or the dimensions differ.

    References
    ----------
    Miszczak, Puchala, Horodecki, Uhlmann, Zyczkowski, Quantum Inf. Comput. 9 (2009) 103, arXiv:0805.2037;
    Fuchs, van de Graaf, IEEE Trans. Inf. Theory 45 (1999) 1216, doi:10.1109/18.761271.

    Examples
    --------
    >>> pure = DiagramCounts.from_swap(symmetric=1000, antisymmetric=0, dim=2)
    >>> mixed = DiagramCounts.from_swap(symmetric=750, antisymmetric=250, dim=2)
    >>> print(compare_states(first=pure, second=mixed, between=mixed).hilbert_schmidt)
    0.7071 (0.6015 to 0.8376)
    """
    confidence = as_confidence(confidence)
    dim = common_dim(first, second, between)
    error = (1.0 - confidence) / (3 if cyclic is None else 4)
    p, q, o = (
        _swap(record, name, error) for record, name in ((first, "first"), (second, "second"), (between, "between"))
    )
    largest = math.sqrt(p.interval[1] * q.interval[1])
    o = Quantity(value=o.value, interval=(min(o.interval[0], largest), min(o.interval[1], largest)))
    notes = ["exact binomial limits (Clopper and Pearson); they hold for identical pairs, however few"]
    for name, record, found in (("first", first, p), ("second", second, q), ("between", between, o)):
        raw = _mean_swap(record)
        if raw < found.value:
            notes.append(f"the mean outcome {raw:.4g} of {name} is impossible and was capped at {found.value:.4g}")
    square = p.value + q.value - 2.0 * o.value
    if square < 0.0:
        notes.append(f"the estimate {square:.4g} of the squared distance is negative and was capped at 0")
    distance = Quantity(
        value=math.sqrt(max(0.0, square)),
        interval=(
            math.sqrt(max(0.0, p.interval[0] + q.interval[0] - 2.0 * o.interval[1])),
            math.sqrt(max(0.0, p.interval[1] + q.interval[1] - 2.0 * o.interval[0])),
        ),
    )
    upper = Quantity(
        value=_super_fidelity(p.value, q.value, o.value),
        interval=(
            _super_fidelity(p.interval[1], q.interval[1], o.interval[0]),
            _super_fidelity(p.interval[0], q.interval[0], o.interval[1]),
        ),
    )
    lower = None
    least = o.interval[0]
    if cyclic is not None:
        lower = _sub_fidelity(cyclic, o, error)
        least = max(least, lower.interval[0])
    if dim == 2:
        least = max(least, upper.interval[0])
    fidelity = (min(least, upper.interval[1]), upper.interval[1])
    far, near = distance.interval[1], distance.interval[0]
    most = math.sqrt(max(0.0, 1.0 - fidelity[0]))
    if dim is not None:
        most = min(most, 0.5 * math.sqrt(dim) * far)
    trace = max(near / math.sqrt(2.0), 1.0 - math.sqrt(fidelity[1]))
    if cyclic is None and dim != 2:
        notes.append("no tests of Tr rho sigma rho sigma: the fidelity is bounded below by the overlap alone")
    return StateComparison(
        purity_first=p,
        purity_second=q,
        overlap=o,
        hilbert_schmidt=distance,
        super_fidelity=upper,
        sub_fidelity=lower,
        fidelity=fidelity,
        trace_distance=(min(trace, most), most),
        confidence=confidence,
        notes=tuple(notes),
    )


def _swap(record: DiagramCounts, name: str, error: float) -> Quantity:
    """Return the mean swap outcome of pairs and its exact limits."""
    if set(record.block_sizes) != {2}:
        raise ArgumentValueError(f"{name} must hold blocks of two copies only, got sizes {list(record.block_sizes)}")
    least = 0.0 if record.dim is None or name == "between" else 1.0 / record.dim
    limits = power_sum_limits(record, 2, error=error)
    return Quantity(value=max(_mean_swap(record), least), interval=(max(limits.lower, least), max(limits.upper, least)))


def _mean_swap(record: DiagramCounts) -> float:
    symmetric = sum(count for diagram, count in record.items() if diagram.rows == (2,))
    return 2.0 * symmetric / record.blocks - 1.0


def _super_fidelity(p: float, q: float, overlap: float) -> float:
    return min(1.0, overlap + math.sqrt(max(0.0, (1.0 - p) * (1.0 - q))))


def _sub_fidelity(cyclic: MomentCounts, overlap: Quantity, error: float) -> Quantity:
    """Return overlap + sqrt(2 (overlap^2 - Tr rho sigma rho sigma))."""
    if not isinstance(cyclic, MomentCounts):
        raise ArgumentTypeError(f"cyclic must be MomentCounts, got {type(cyclic).__name__}")
    if cyclic.orders != (4,):
        raise ArgumentValueError(f"cyclic must hold tests of order 4 only, got orders {list(cyclic.orders)}")
    limits = shift_limits(MomentCounts(dict(cyclic.tallies)), 4, error=error)
    corners = [
        (overlap.value, cyclic.means[4]),
        (overlap.interval[0], limits.upper),
        (overlap.interval[1], limits.lower),
    ]
    value, low, high = (min(1.0, o + math.sqrt(2.0 * max(0.0, o * o - max(0.0, fourth)))) for o, fourth in corners)
    return Quantity(value=value, interval=(low, high))


def common_dim(*records: DiagramCounts) -> int | None:
    """Return the dimension that the records state, the same for all that state one."""
    for record in records:
        if not isinstance(record, DiagramCounts):
            raise ArgumentTypeError(f"records must be DiagramCounts, got {type(record).__name__}")
    known = {record.dim for record in records if record.dim is not None}
    if len(known) > 1:
        raise ArgumentValueError(f"records must have the same dim, got {', '.join(map(str, sorted(known)))}")
    return known.pop() if known else None


def _plain(value: float) -> float | str:
    return value if math.isfinite(value) else "infinity"

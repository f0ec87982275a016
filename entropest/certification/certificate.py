"""What was certified: the bound, the claim, the tests behind it, and what they assume."""

import json
import math
import textwrap
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, field, fields
from typing import Any, Final, Self

from entropest.certification.rules import ENTROPY_CAP, TUNED_CAP
from entropest.errors import ArgumentValueError

__all__ = ["SCHEMA", "Certificate", "Claim", "Test", "WitnessSet", "contradicts", "entropy_bounds"]

SCHEMA: Final = "entropest-certificate/2"
_OLDER_SCHEMA: Final = "entropest-certificate/1"


@dataclass(frozen=True, slots=True, kw_only=True)
class Claim:
    """What should hold, in the unit of the certificate; None where nothing is claimed."""

    at_least: float | None = None
    at_most: float | None = None

    def holds(self, lower: float | None, upper: float | None) -> bool:
        """Say whether the bounds imply the claim; no rounding is forgiven."""
        enough = self.at_least is None or (lower is not None and lower >= self.at_least)
        return enough and (self.at_most is None or (upper is not None and upper <= self.at_most))

    def __str__(self) -> str:
        parts = [f"at least {self.at_least:g}"] if self.at_least is not None else []
        parts += [f"at most {self.at_most:g}"] if self.at_most is not None else []
        return " and ".join(parts)


@dataclass(frozen=True, slots=True, kw_only=True)
class WitnessSet:
    """The witnesses for one block size: interpolation nodes (six digits each), or chords for two copies."""

    copies: int
    order: int
    nodes: tuple[tuple[float, ...], ...] = ()
    chords: tuple[int, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Test:
    """One test inside a certificate.

    Attributes
    ----------
    kind : str
        Which test; see :mod:`entropest.certification.wording`.
    error : float
        Share of the error that the test may use.
    lower, upper : float or None
        What it bounds: the von Neumann entropy in nats, or the purity for "swap-purity".
    block_sizes : mapping of int to int
        The blocks it uses: size to number of blocks.
    planned : mapping of int to int
        The numbers of blocks that tuned its bets, empty without bets of that kind.
    leading : int
        The component of a tuned e-value that has most of the weight.
    parameters : mapping of str to numbers
        The parameters of a dual bound or the limit of an eigenvalue, from which the bound can be computed again.
    """

    __test__ = False

    kind: str
    error: float
    lower: float | None
    upper: float | None
    block_sizes: Mapping[int, int]
    planned: Mapping[int, int] = field(default_factory=dict)
    leading: int = 0
    parameters: Mapping[str, float | tuple[float, ...]] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class Certificate:
    """A bound that follows from a record, and everything needed to check it again.

    Attributes
    ----------
    functional : str
        Name of the certified quantity.
    lower, upper : float or None
        The bounds in `unit`; None where nothing is stated.
    unit : str
        "nat", "bit", "log base b", or "1" for the purity.
    base : float or None
        Base of the logarithms, None for nats and for the purity.
    claim : Claim or None
        What was asked for.
    met : bool or None
        Whether the bounds imply the claim; None without a claim.
    confidence : float
        One minus the largest probability of a false statement.
    method : str
        The tests in words.
    anytime, drifting : bool
        The options the bound was computed under.
    trusted_dim : int or None
        The dimension that was believed, None if none was.
    expecting : tuple of float or None
        The spectrum that was expected, which chose where to put the weight.
    tests : tuple of Test
    witnesses : tuple of WitnessSet
        The fixed grid of the mixture e-value, for each block size it uses.
    fractions : tuple of float
        The fractions of that grid.
    assumptions, notes : tuple of str
    blocks, copies : int
        Size of the record.
    record_digest : str
        Digest of the record, see :attr:`entropest.DiagramCounts.digest`.
    versions : mapping of str to str
        Versions of the software that computed it.
    """

    functional: str
    lower: float | None
    upper: float | None
    unit: str
    base: float | None
    claim: Claim | None
    met: bool | None
    confidence: float
    method: str
    anytime: bool
    drifting: bool
    trusted_dim: int | None
    expecting: tuple[float, ...] | None
    tests: tuple[Test, ...]
    witnesses: tuple[WitnessSet, ...]
    fractions: tuple[float, ...]
    assumptions: tuple[str, ...]
    notes: tuple[str, ...]
    blocks: int
    copies: int
    record_digest: str
    versions: Mapping[str, str]

    def to_dict(self) -> dict[str, Any]:
        """Return the certificate as plain dicts and lists, with its schema."""
        return {"schema": SCHEMA, **asdict(self)}

    def to_json(self) -> str:
        """Return the certificate as JSON text; it holds no NaN or Infinity."""
        return json.dumps(self.to_dict(), indent=2, allow_nan=False)

    @classmethod
    def from_json(cls, text: str) -> Self:
        """Read a certificate written by :meth:`to_json`.

        Raises
        ------
        ArgumentValueError
            If the text is not JSON, has another schema, or lacks or adds a field.
        """
        try:
            data = json.loads(text, parse_constant=_refuse_constant)
        except (ValueError, RecursionError) as error:
            raise ArgumentValueError(f"a certificate must be JSON text: {error}") from error
        return cls.from_dict(data)

    @classmethod
    def from_dict(cls, data: Any) -> Self:
        """Build a certificate from what :meth:`to_dict` returns."""
        if isinstance(data, dict) and data.get("schema") == _OLDER_SCHEMA:
            data = _from_version_1(data)
        if not isinstance(data, dict) or data.get("schema") != SCHEMA:
            found = data.get("schema") if isinstance(data, dict) else type(data).__name__
            raise ArgumentValueError(f"a certificate must have schema {SCHEMA!r}, got {found!r}")
        values = {key: value for key, value in data.items() if key != "schema"}
        _check_keys(cls, values, "a certificate")
        try:
            values["claim"] = None if values["claim"] is None else Claim(**values["claim"])
            values["tests"] = tuple(_read_test(test) for test in values["tests"])
            values["witnesses"] = tuple(_read_witnesses(witness) for witness in values["witnesses"])
            for name in ("fractions", "assumptions", "notes"):
                values[name] = tuple(values[name])
            if values["expecting"] is not None:
                values["expecting"] = tuple(_number(value) for value in values["expecting"])
        except (TypeError, ValueError, AttributeError) as error:
            raise ArgumentValueError(f"a certificate is damaged: {error}") from error
        _check_numbers(values)
        return cls(**values)

    def __str__(self) -> str:
        bounds = [f"at least {_down(self.lower)}"] if self.lower is not None else []
        bounds += [f"at most {_up(self.upper)}"] if self.upper is not None else []
        unit = "" if self.unit == "1" else f" {self.unit}"
        average = ", averaged over the blocks," if self.drifting else ""
        subject = f"The {self.functional}{average} is {' and '.join(bounds)}{unit}"
        if not bounds:
            subject = f"Nothing is certified about the {self.functional}"
        head = f"{subject} at confidence {100 * self.confidence:g}%."
        if self.claim is not None:
            head += f" The claim ({self.claim}{unit}) is {'met' if self.met else 'NOT met'}."
        body = (
            f"Method: {self.method}. Record: {self.blocks} blocks, {self.copies} copies, {self.record_digest[:19]}..."
        )
        paragraphs = [head, body, "It assumes:"]
        lines = [line for text in paragraphs for line in textwrap.wrap(text, 100)]
        for text in self.assumptions:
            lines += textwrap.wrap(text, 98, initial_indent="- ", subsequent_indent="  ")
        for text in self.notes:
            lines += textwrap.wrap(f"Note: {text}", 100)
        return "\n".join(lines)


def contradicts(tests: Sequence[Test]) -> bool:
    """Say whether a test rejects every state, which tells of a fault and not of entropy: then nothing is certified."""
    tops = {"tuned-e-value": TUNED_CAP}
    return any(
        test.upper == 0.0 if test.kind == "swap-purity" else test.lower == tops.get(test.kind, ENTROPY_CAP)
        for test in tests
    )


def entropy_bounds(tests: Sequence[Test]) -> tuple[float | None, float | None]:
    """Return what tests of the von Neumann entropy prove together, in nats."""
    lowers = [test.lower for test in tests if test.lower is not None]
    uppers = [test.upper for test in tests if test.upper is not None]
    upper = min(uppers, default=None)
    if contradicts(tests):
        return 0.0, None
    if not lowers and upper is None:
        return 0.0, None
    return max(lowers, default=None), upper


def _down(value: float) -> str:
    """Write six decimals, rounded down."""
    return f"{math.floor(value * 1e6) / 1e6:.6f}"


def _up(value: float) -> str:
    """Write six decimals, rounded up."""
    return f"{math.ceil(value * 1e6) / 1e6:.6f}"


def _from_version_1(data: dict[str, Any]) -> dict[str, Any]:
    """Add the fields that version 1 lacked; its tests are no longer made, so it can be read but not checked again."""
    tests = data.get("tests")
    if not isinstance(tests, list) or not all(isinstance(test, dict) for test in tests):
        raise ArgumentValueError("a certificate is damaged: tests must be a list of objects")
    added = {"planned": {}, "leading": 0, "parameters": {}}
    return {**data, "schema": SCHEMA, "trusted_dim": None, "expecting": None, "tests": [{**added, **t} for t in tests]}


def _refuse_constant(name: str) -> float:
    raise ValueError(f"{name} is not allowed")


def _check_keys(cls: type, values: Mapping[str, Any], what: str) -> None:
    expected = {one.name for one in fields(cls)}
    if missing := expected - values.keys():
        raise ArgumentValueError(f"{what} lacks {', '.join(sorted(missing))}")
    if extra := values.keys() - expected:
        raise ArgumentValueError(f"{what} has unknown fields {', '.join(sorted(extra))}")


def _read_test(data: Any) -> Test:
    if not isinstance(data, dict):
        raise ValueError(f"a test must be an object, got {type(data).__name__}")
    _check_keys(Test, data, "a test")
    sizes = {name: {int(k): int(m) for k, m in data[name].items()} for name in ("block_sizes", "planned")}
    parameters = {
        str(name): tuple(_number(x) for x in value) if isinstance(value, list) else _number(value)
        for name, value in data["parameters"].items()
    }
    return Test(**{**data, **sizes, "parameters": parameters})


def _number(value: object) -> float:
    if not _is_number(value):
        raise ValueError(f"a parameter must be a number, got {value!r}")
    return float(value)  # type: ignore[arg-type]


def _read_witnesses(data: Any) -> WitnessSet:
    if not isinstance(data, dict):
        raise ValueError(f"a witness set must be an object, got {type(data).__name__}")
    _check_keys(WitnessSet, data, "a witness set")
    nodes = tuple(tuple(float(node) for node in nodes) for nodes in data["nodes"])
    return WitnessSet(**{**data, "nodes": nodes, "chords": tuple(int(r) for r in data["chords"])})


def _check_numbers(values: Mapping[str, Any]) -> None:
    """Refuse a certificate whose main fields have the wrong type."""
    for name in ("lower", "upper", "base"):
        if not (values[name] is None or _is_number(values[name])):
            raise ArgumentValueError(f"{name} of a certificate must be a number or null, got {values[name]!r}")
    if not _is_number(values["confidence"]) or not 0.0 < values["confidence"] < 1.0:
        raise ArgumentValueError(f"confidence must lie strictly between 0 and 1, got {values['confidence']!r}")
    dim = values["trusted_dim"]
    if not (dim is None or (isinstance(dim, int) and not isinstance(dim, bool) and dim >= 1)):
        raise ArgumentValueError(f"trusted_dim of a certificate must be a dimension or null, got {dim!r}")
    for name in ("anytime", "drifting"):
        if not isinstance(values[name], bool):
            raise ArgumentValueError(f"{name} of a certificate must be true or false, got {values[name]!r}")
    for test in values["tests"]:
        for number in (test.error, test.lower, test.upper):
            if not (number is None or _is_number(number)):
                raise ArgumentValueError(f"a test of a certificate must hold numbers, got {number!r}")


def _is_number(value: object) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)

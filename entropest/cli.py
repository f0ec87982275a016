"""The command line: a thin layer over the library.

Results go to stdout (text, or JSON with ``--json``), messages to stderr. Exit codes: 0 done, 1 failed on the data,
2 usage, 3 claim not certified.
"""

import argparse
import json
import os
import re
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, Final

from entropest._atomic import replace_file
from entropest._version import __version__
from entropest.certification.certificate import Certificate
from entropest.certification.certify import certify
from entropest.certification.recheck import recheck
from entropest.errors import ArgumentValueError, EntropestError, NotCoveredError
from entropest.estimation.estimate import estimate
from entropest.functionals import Functional, MinEntropy, PowerSum, Renyi, Tsallis, Varentropy, VonNeumann
from entropest.records.counts import DiagramCounts
from entropest.records.files import read_record
from entropest.records.moment_counts import MomentCounts
from entropest.records.two_copy import TwoCopyShots

__all__ = ["main"]

DONE: Final = 0
FAILED: Final = 1
USAGE: Final = 2
NOT_CERTIFIED: Final = 3
INTERRUPTED: Final = 130

_PLAIN: Final[dict[str, Callable[[float | None], Functional]]] = {
    "von-neumann": lambda base: VonNeumann(base=base),
    "min-entropy": lambda base: MinEntropy(base=base),
    "varentropy": lambda base: Varentropy(base=base),
    "purity": lambda base: PowerSum(2),
}
_OF_ORDER: Final[dict[str, Callable[[float, float | None], Functional]]] = {
    "renyi": lambda order, base: Renyi(order, base=base),
    "tsallis": lambda order, base: Tsallis(order),
    "power-sum": lambda order, base: PowerSum(order),
}


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code.

    Examples
    --------
    >>> main(["estimate", "no-such-file.csv"])
    1
    """
    parser = _parser()
    try:
        options = parser.parse_args(arguments)
    except SystemExit as stop:
        return int(stop.code or 0)
    try:
        code = int(options.run(options))
        sys.stdout.flush()
        return code
    except EntropestError as error:
        return _fail(f"entropest {options.command}: {error}")
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return FAILED
    except OSError as error:
        return _fail(f"entropest {options.command}: {error.filename or ''}: {error.strerror or error}")
    except MemoryError:
        return _fail(f"entropest {options.command}: not enough memory for this record")
    except KeyboardInterrupt:
        print(f"entropest {options.command}: interrupted", file=sys.stderr)
        return INTERRUPTED


def _fail(message: str) -> int:
    print(" ".join(message.split()), file=sys.stderr)
    return FAILED


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="entropest", description="Entropies and certificates from joint measurements on copies of a quantum state."
    )
    parser.add_argument("--version", action="version", version=f"entropest {__version__}")
    commands = parser.add_subparsers(dest="command", required=True, metavar="COMMAND")

    def command(
        name: str, run: Callable[[argparse.Namespace], int], text: str, example: str
    ) -> argparse.ArgumentParser:
        added = commands.add_parser(
            name,
            help=text,
            description=text[0].upper() + text[1:] + ".",
            epilog=f"example: {example}",
            formatter_class=argparse.RawDescriptionHelpFormatter,
        )
        added.add_argument("--json", action="store_true", help="print JSON instead of text")
        added.set_defaults(run=run)
        return added

    pairs = "printf 'swap,count\\nsymmetric,700\\nantisymmetric,300\\n' |"
    inspect = command("inspect", _inspect, "show what a record holds", f"{pairs} entropest inspect -")
    _record_arguments(inspect)

    estimates = command("estimate", _estimate, "estimate an entropy", f"{pairs} entropest estimate - --dim 2")
    _record_arguments(estimates)
    _functional_arguments(estimates)
    estimates.add_argument("--method", default="auto", help="estimator (default: %(default)s)")

    certifies = command("certify", _certify, "certify a bound", f"{pairs} entropest certify - --at-least 0.7")
    _record_arguments(certifies)
    _functional_arguments(certifies)
    certifies.add_argument("--at-least", type=float, metavar="X", help="claim: the value is at least X")
    certifies.add_argument("--at-most", type=float, metavar="X", help="claim: the value is at most X")
    certifies.add_argument("--anytime", action="store_true", help="the record may have been stopped by looking at it")
    certifies.add_argument(
        "--planned-blocks", metavar="PLAN", help="with --anytime: blocks expected beforehand, 2000 or 2:500,4:1500"
    )
    certifies.add_argument("--drifting", action="store_true", help="the state may differ from block to block")
    certifies.add_argument("--trusted-dim", action="store_true", help="believe the dimension of the record")
    certifies.add_argument("--output", "-o", metavar="FILE", help="also save the certificate as JSON")

    rechecks = command(
        "recheck",
        _recheck,
        "check a certificate against its record",
        "entropest demo --save . && entropest recheck certificate.json record.csv",
    )
    rechecks.add_argument("certificate", metavar="CERTIFICATE", help="JSON file written by certify --output")
    _record_arguments(rechecks)

    demo = command("demo", _demo, "walk through an invented record", "entropest demo")
    demo.add_argument("--save", metavar="DIRECTORY", help="also write record.csv and certificate.json there")
    return parser


def _record_arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("record", metavar="RECORD", help='CSV or JSON file, "-" for standard input')
    parser.add_argument("--dim", type=int, metavar="D", help="dimension of one copy")
    parser.add_argument("--region", metavar="SITES", help="sites of a two-copy record to look at, such as 0,1,4-7")


def _functional_arguments(parser: argparse.ArgumentParser) -> None:
    names = [*_PLAIN, *(f"{name}:ORDER" for name in _OF_ORDER)]
    parser.add_argument("--functional", default="von-neumann", metavar="NAME", help=f"one of {', '.join(names)}")
    parser.add_argument("--confidence", type=float, default=0.95, metavar="C", help="default: %(default)s")
    parser.add_argument("--base", type=float, metavar="B", help="base of the logarithm (default: nats)")


def _inspect(options: argparse.Namespace) -> int:
    record = read_record(options.record, dim=None if options.region else options.dim)
    if options.region:
        record = _region(record, options.region)
    facts: dict[str, Any]
    if isinstance(record, TwoCopyShots):
        facts = {"kind": "two-copy shots", "shots": record.shots, "rejected": record.rejected, "sites": record.sites}
    elif isinstance(record, MomentCounts):
        facts = {"kind": "moments", "tests": record.tests, "copies": record.copies, "dim": record.dim}
    else:
        facts = {
            "kind": "diagrams",
            "blocks": record.blocks,
            "copies": record.copies,
            "dim": record.dim,
            "block_sizes": dict(record.block_sizes),
            "distinct_diagrams": len(record.counts),
        }
    facts["digest"] = record.digest
    _print(options, {"schema": "entropest-inspection/1", **facts}, f"{record}\n{record.digest}")
    return DONE


def _estimate(options: argparse.Namespace) -> int:
    result = estimate(
        _tallies(options),
        _functional(options.functional, options.base),
        method=options.method,
        confidence=options.confidence,
    )
    _print(options, result.to_dict(), str(result))
    return DONE


def _certify(options: argparse.Namespace) -> int:
    certificate = certify(
        _diagrams(options),
        _functional(options.functional, options.base),
        at_least=options.at_least,
        at_most=options.at_most,
        confidence=options.confidence,
        anytime=options.anytime,
        planned_blocks=_plan(options.planned_blocks),
        drifting=options.drifting,
        trusted_dim=options.trusted_dim,
    )
    if options.output is not None:
        replace_file(options.output, [certificate.to_json().encode() + b"\n"])
    _print(options, certificate.to_dict(), str(certificate))
    return NOT_CERTIFIED if certificate.met is False else DONE


def _recheck(options: argparse.Namespace) -> int:
    certificate = Certificate.from_json(_read_text(options.certificate))
    recheck(certificate, _diagrams(options))
    report = {"schema": "entropest-recheck/1", "holds": True, "record_digest": certificate.record_digest}
    _print(options, report, "The certificate follows from this record.")
    return DONE


def _demo(options: argparse.Namespace) -> int:
    from entropest.demo.walk import walk_through

    print(walk_through(save=options.save, as_json=options.json))
    return DONE


def _tallies(options: argparse.Namespace) -> DiagramCounts | MomentCounts:
    """Read the record, a region of it when it is a two-copy record."""
    record = read_record(options.record, dim=None if options.region else options.dim)
    if options.region:
        return _region(record, options.region)
    if isinstance(record, TwoCopyShots):
        raise ArgumentValueError(
            f"{options.record} holds two-copy shots of {record.sites} sites: name a region, such as --region 0"
        )
    return record


def _diagrams(options: argparse.Namespace) -> DiagramCounts:
    """Read the record as diagrams; tests of order 2 are swap outcomes, other moments cannot be certified."""
    record = _tallies(options)
    if isinstance(record, MomentCounts):
        if record.orders != (2,):
            raise NotCoveredError(f"a certificate needs diagrams or swap outcomes, got tests of orders {record.orders}")
        return record.swaps()
    return record


def _region(record: DiagramCounts | MomentCounts | TwoCopyShots, text: str) -> DiagramCounts:
    if not isinstance(record, TwoCopyShots):
        raise ArgumentValueError(f"--region needs a record of two-copy shots, got {type(record).__name__}")
    sites: list[int] = []
    for part in text.split(","):
        first, _, last = part.partition("-")
        if not (first.strip().isdecimal() and (last or first).strip().isdecimal()) or len(part) > 20:
            raise ArgumentValueError(f"--region must be sites such as 0,1,4-7, got {text!r}")
        if int(last or first) >= record.sites:
            raise ArgumentValueError(f"--region must name sites below {record.sites}, got {part}")
        sites.extend(range(int(first), int(last or first) + 1))
    return record.region(sites)


def _plan(text: str | None) -> int | dict[int, int] | None:
    """Read "2000", or sizes and numbers such as "2:500,4:1500"."""
    if text is None:
        return None
    if not re.fullmatch(r"\d{1,18}|\d{1,18}:\d{1,18}(,\d{1,18}:\d{1,18})*", text, flags=re.ASCII):
        raise ArgumentValueError(f"--planned-blocks must be a number or such as 2:500,4:1500, got {text!r}")
    if ":" not in text:
        return int(text)
    return {int(size): int(number) for size, number in (part.split(":") for part in text.split(","))}


def _functional(text: str, base: float | None) -> Functional:
    """Read a functional such as "von-neumann" or "renyi:2"."""
    name, _, order = text.partition(":")
    if name in _PLAIN and not order:
        functional = _PLAIN[name](base)
    elif name in _OF_ORDER and order:
        try:
            number = float(order)
        except ValueError as error:
            raise ArgumentValueError(f"order of --functional must be a number, got {order!r}") from error
        functional = _OF_ORDER[name](number, base)
    else:
        names = ", ".join([*_PLAIN, *(f"{name}:ORDER" for name in _OF_ORDER)])
        raise ArgumentValueError(f"--functional must be one of {names}, got {text!r}")
    functional.unit(base)
    return functional


def _read_text(path: str) -> str:
    try:
        return sys.stdin.read() if path == "-" else Path(path).read_text(encoding="utf-8")
    except UnicodeDecodeError as error:
        raise ArgumentValueError(f"{path}: a certificate must be UTF-8 text") from error


def _print(options: argparse.Namespace, data: dict[str, Any], text: str) -> None:
    print(json.dumps(data, indent=2, allow_nan=False) if options.json else text)

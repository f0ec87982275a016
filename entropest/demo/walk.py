"""The demo: what was measured, estimates, a certificate, its re-check, and how to go on."""

import json
from contextlib import AbstractContextManager
from importlib import resources
from pathlib import Path
from typing import Any, Final

from entropest._atomic import replace_file
from entropest.certification.certify import certify
from entropest.certification.recheck import recheck
from entropest.demo.make_record import SPECTRUM
from entropest.estimation.estimate import estimate
from entropest.functionals import VonNeumann
from entropest.records.counts import DiagramCounts
from entropest.records.files import read_record

__all__ = ["demo_record", "walk_through"]

_CLAIM: Final = 0.9


def demo_record() -> DiagramCounts:
    """Return the packaged record.

    Examples
    --------
    >>> demo_record().blocks
    50
    """
    with _packaged() as path:
        record = read_record(path)
    assert isinstance(record, DiagramCounts)
    return record


def walk_through(*, save: str | None, as_json: bool) -> str:
    """Run the main job on the packaged record and return what to print.

    Parameters
    ----------
    save : str or None
        Directory to write record.csv and certificate.json to.
    as_json : bool
        Return JSON instead of text.
    """
    record = demo_record()
    plug_in, corrected = estimate(record, method="plug-in"), estimate(record)
    certificate = certify(record, at_least=_CLAIM)
    recheck(certificate, record)
    if save is not None:
        with _packaged() as path:
            replace_file(Path(save, "record.csv"), [path.read_bytes()])
        replace_file(Path(save, "certificate.json"), [certificate.to_json().encode() + b"\n"])
    truth = VonNeumann()(SPECTRUM)
    if as_json:
        results: dict[str, Any] = {
            "schema": "entropest-demo/1",
            "truth": truth,
            "plug_in": plug_in.to_dict(),
            "estimate": corrected.to_dict(),
            "certificate": certificate.to_dict(),
            "rechecked": True,
        }
        return json.dumps(results, indent=2, allow_nan=False)
    return "\n".join(
        [
            "An invented four-level memory cell; its joint measurements were simulated, so the truth is known.",
            "",
            "== What was measured",
            str(record),
            "",
            f"== Estimates of the von Neumann entropy (truth {truth:.4f} nat)",
            "-- rows divided by copies:",
            str(plug_in),
            "-- the automatic choice:",
            str(corrected),
            "",
            "== A certificate",
            str(certificate),
            "",
            "== Its re-check, by an independent implementation",
            "The certificate follows from this record.",
            "",
            "== The same with a file of your own",
            "entropest estimate FILE",
            f"entropest certify FILE --at-least {_CLAIM} --output certificate.json",
            "entropest recheck certificate.json FILE",
        ]
    )


def _packaged() -> AbstractContextManager[Path]:
    return resources.as_file(resources.files("entropest.demo") / "record.csv")

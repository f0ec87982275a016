"""Entropies, divergences and certificates from joint measurements on several copies of a quantum state.

The public names below are loaded when they are first used, so that the import itself stays light.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

from entropest._version import __version__

if TYPE_CHECKING:
    from entropest.certification.certificate import Certificate
    from entropest.certification.certify import certify
    from entropest.certification.recheck import recheck
    from entropest.diagrams import YoungDiagram, cycle_character, young_diagrams
    from entropest.estimation.estimate import estimate
    from entropest.estimation.result import Estimate
    from entropest.functionals import (
        ChiSquare,
        MinEntropy,
        PowerSum,
        RelativeEntropy,
        Renyi,
        TraceDistance,
        Tsallis,
        Varentropy,
        VonNeumann,
    )
    from entropest.law.schur import schur_polynomial
    from entropest.law.schur_weyl import SchurWeyl
    from entropest.records.counts import DiagramCounts
    from entropest.records.files import read_record, write_record
    from entropest.records.moment_counts import MomentCounts
    from entropest.records.two_copy import JointSwapCounts, TwoCopyShots
    from entropest.spectra import (
        as_spectrum,
        free_fermion_half_chain,
        geometric,
        low_rank,
        maximally_mixed,
        power_law,
        random_reduced,
        spectrum_of_state,
        spiked,
        thermal,
    )

_HOMES = {
    "entropest.certification.certificate": ("Certificate",),
    "entropest.certification.certify": ("certify",),
    "entropest.certification.recheck": ("recheck",),
    "entropest.diagrams": (
        "YoungDiagram",
        "cycle_character",
        "young_diagrams",
    ),
    "entropest.estimation.estimate": ("estimate",),
    "entropest.estimation.result": ("Estimate",),
    "entropest.functionals": (
        "ChiSquare",
        "MinEntropy",
        "PowerSum",
        "RelativeEntropy",
        "Renyi",
        "TraceDistance",
        "Tsallis",
        "Varentropy",
        "VonNeumann",
    ),
    "entropest.law.schur": ("schur_polynomial",),
    "entropest.law.schur_weyl": ("SchurWeyl",),
    "entropest.records.counts": ("DiagramCounts",),
    "entropest.records.files": (
        "read_record",
        "write_record",
    ),
    "entropest.records.moment_counts": ("MomentCounts",),
    "entropest.records.two_copy": (
        "JointSwapCounts",
        "TwoCopyShots",
    ),
    "entropest.spectra": (
        "as_spectrum",
        "free_fermion_half_chain",
        "geometric",
        "low_rank",
        "maximally_mixed",
        "power_law",
        "random_reduced",
        "spectrum_of_state",
        "spiked",
        "thermal",
    ),
}
_HOME = {name: module for module, names in _HOMES.items() for name in names}

__all__ = [
    "Certificate",
    "ChiSquare",
    "DiagramCounts",
    "Estimate",
    "JointSwapCounts",
    "MinEntropy",
    "MomentCounts",
    "PowerSum",
    "RelativeEntropy",
    "Renyi",
    "SchurWeyl",
    "TraceDistance",
    "Tsallis",
    "TwoCopyShots",
    "Varentropy",
    "VonNeumann",
    "YoungDiagram",
    "__version__",
    "as_spectrum",
    "certify",
    "cycle_character",
    "estimate",
    "free_fermion_half_chain",
    "geometric",
    "low_rank",
    "maximally_mixed",
    "power_law",
    "random_reduced",
    "read_record",
    "recheck",
    "schur_polynomial",
    "spectrum_of_state",
    "spiked",
    "thermal",
    "write_record",
    "young_diagrams",
]


def __getattr__(name: str) -> Any:
    """Load a public name from the module that defines it."""
    if name not in _HOME:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(_HOME[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(__all__)

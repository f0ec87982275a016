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
    from entropest.estimation.divergences import (
        relative_entropy_in_eigenbasis,
        relative_entropy_to_gibbs,
        relative_entropy_to_mixed,
    )
    from entropest.estimation.estimate import estimate
    from entropest.estimation.histogram import histogram_entropy
    from entropest.estimation.inner_range import identified_range, identified_range_of
    from entropest.estimation.likelihood import fit_likelihood
    from entropest.estimation.many import ManyEstimates, estimate_many
    from entropest.estimation.moment_tallies import estimate_together
    from entropest.estimation.result import Estimate
    from entropest.estimation.two_spectra import compare_spectra
    from entropest.estimation.two_states import compare_states
    from entropest.functionals import (
        ChiSquare,
        Fidelity,
        HilbertSchmidtDistance,
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
    "entropest.estimation.divergences": (
        "relative_entropy_in_eigenbasis",
        "relative_entropy_to_gibbs",
        "relative_entropy_to_mixed",
    ),
    "entropest.estimation.estimate": ("estimate",),
    "entropest.estimation.histogram": ("histogram_entropy",),
    "entropest.estimation.inner_range": (
        "identified_range",
        "identified_range_of",
    ),
    "entropest.estimation.likelihood": ("fit_likelihood",),
    "entropest.estimation.many": (
        "ManyEstimates",
        "estimate_many",
    ),
    "entropest.estimation.moment_tallies": ("estimate_together",),
    "entropest.estimation.result": ("Estimate",),
    "entropest.estimation.two_spectra": ("compare_spectra",),
    "entropest.estimation.two_states": ("compare_states",),
    "entropest.functionals": (
        "ChiSquare",
        "Fidelity",
        "HilbertSchmidtDistance",
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
    "Fidelity",
    "HilbertSchmidtDistance",
    "JointSwapCounts",
    "ManyEstimates",
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
    "compare_spectra",
    "compare_states",
    "cycle_character",
    "estimate",
    "estimate_many",
    "estimate_together",
    "fit_likelihood",
    "free_fermion_half_chain",
    "geometric",
    "histogram_entropy",
    "identified_range",
    "identified_range_of",
    "low_rank",
    "maximally_mixed",
    "power_law",
    "random_reduced",
    "read_record",
    "recheck",
    "relative_entropy_in_eigenbasis",
    "relative_entropy_to_gibbs",
    "relative_entropy_to_mixed",
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

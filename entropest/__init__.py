"""Entropies, divergences and certificates from joint measurements on several copies of a quantum state."""

from entropest._version import __version__
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
from entropest.records.two_copy import TwoCopyShots
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

__all__ = [
    "Certificate",
    "ChiSquare",
    "DiagramCounts",
    "Estimate",
    "MinEntropy",
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

"""Entropies, divergences and certificates from joint measurements on several copies of a quantum state."""

from entropest._version import __version__
from entropest.diagrams import YoungDiagram, cycle_character, young_diagrams
from entropest.spectra import as_spectrum, spectrum_of_state

__all__ = [
    "YoungDiagram",
    "__version__",
    "as_spectrum",
    "cycle_character",
    "spectrum_of_state",
    "young_diagrams",
]

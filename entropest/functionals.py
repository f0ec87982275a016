"""Entropies and divergences of a spectrum, with gradients.

Each functional is a small frozen object. It is called on arrays of eigenvalues whose last axis holds the
spectrum; nothing is normalised or clipped, and zeros are exact: 0 log 0 = 0. Entropies are in nats unless a base
is given, at construction or in the call. Divergences put both spectra in decreasing order.
"""

from entropest._divergences import ChiSquare, Fidelity, HilbertSchmidtDistance, RelativeEntropy, TraceDistance
from entropest._entropies import MinEntropy, PowerSum, Renyi, Tsallis, Varentropy, VonNeumann
from entropest._functional import Functional

__all__ = [
    "ChiSquare",
    "Fidelity",
    "Functional",
    "HilbertSchmidtDistance",
    "MinEntropy",
    "PowerSum",
    "RelativeEntropy",
    "Renyi",
    "TraceDistance",
    "Tsallis",
    "Varentropy",
    "VonNeumann",
]

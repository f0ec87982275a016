"""Functionals of one power sum in terms of the Tsallis entropy of the same order, and possible ranges."""

import math
from typing import TypeAlias

import numpy as np

from entropest.estimation.identified import Range
from entropest.functionals import Fidelity, Functional, MinEntropy, PowerSum, Renyi, TraceDistance, Tsallis, VonNeumann

__all__ = ["OfOneOrder", "from_tsallis", "possible_range", "slope_from_tsallis", "to_tsallis"]

OfOneOrder: TypeAlias = Renyi | Tsallis | PowerSum


def to_tsallis(functional: OfOneOrder, value: float) -> float:
    """Return the Tsallis entropy (1 - P)/(s - 1) at which the functional of P = Tr rho^s has a value (s != 1)."""
    delta = functional.order - 1.0
    if isinstance(functional, Tsallis):
        return value
    if isinstance(functional, PowerSum):
        return (1.0 - value) / delta
    with np.errstate(over="ignore"):
        return float(-np.expm1(-delta * value) / delta)


def from_tsallis(functional: OfOneOrder, tsallis: float) -> float:
    """Return the functional at a Tsallis entropy of its order; a Renyi entropy is infinite where P <= 0.

    Examples
    --------
    >>> from_tsallis(PowerSum(2), 0.25), round(from_tsallis(Renyi(2), 0.5), 6)
    (0.75, 0.693147)
    """
    delta = functional.order - 1.0
    if isinstance(functional, Tsallis):
        return tsallis
    if isinstance(functional, PowerSum):
        return 1.0 - delta * tsallis
    return -math.log1p(-delta * tsallis) / delta if delta * tsallis < 1.0 else math.inf


def slope_from_tsallis(functional: OfOneOrder, tsallis: float) -> float:
    """Return the absolute derivative of the functional with respect to the Tsallis entropy of its order."""
    delta = functional.order - 1.0
    if isinstance(functional, Tsallis):
        return 1.0
    if isinstance(functional, PowerSum):
        return abs(delta)
    return 1.0 / (1.0 - delta * tsallis) if delta * tsallis < 1.0 else math.inf


def possible_range(functional: Functional, dim: int | None) -> Range:
    """Return the range of a functional over all spectra of a dimension (None: any dimension), in nats.

    Divergences other than the trace distance, and the varentropy, are only known not to be negative here.

    Examples
    --------
    >>> possible_range(PowerSum(2), 4)
    Range(lower=0.25, upper=1.0)
    """
    most = math.inf if dim is None else math.log(dim)
    if isinstance(functional, VonNeumann | MinEntropy | Renyi):
        return Range(lower=0.0, upper=most)
    if isinstance(functional, Tsallis):
        return Range(lower=0.0, upper=_tsallis_of_uniform(functional.order, most))
    if isinstance(functional, PowerSum):
        uniform = from_tsallis(functional, _tsallis_of_uniform(functional.order, most))
        return Range(lower=min(1.0, uniform), upper=max(1.0, uniform))
    return Range(lower=0.0, upper=1.0 if isinstance(functional, TraceDistance | Fidelity) else math.inf)


def _tsallis_of_uniform(order: float, log_dim: float) -> float:
    """Return (1 - dim^(1 - order)) / (order - 1)."""
    if order == 1.0:
        return log_dim
    if log_dim == math.inf:
        return 1.0 / (order - 1.0) if order > 1.0 else math.inf
    return math.expm1((1.0 - order) * log_dim) / (1.0 - order)

"""Entropies and power sums of a spectrum."""

import math
from dataclasses import dataclass, field
from typing import ClassVar

import numpy as np
from scipy.special import xlogy

from entropest._checks import as_real, log_of_base
from entropest._functional import Functional
from entropest._types import FloatArray
from entropest.errors import ArgumentValueError

__all__ = ["MinEntropy", "PowerSum", "Renyi", "Tsallis", "Varentropy", "VonNeumann"]


def _log(p: FloatArray) -> FloatArray:
    """Logarithm with log 0 = -inf and no warning."""
    with np.errstate(divide="ignore"):
        return np.asarray(np.log(p))


def _power(p: FloatArray, order: float) -> FloatArray:
    """Return p^order with 0^order = 0 for every order, so that order 0 counts the positive eigenvalues."""
    with np.errstate(divide="ignore", over="ignore", under="ignore"):
        return np.where(p > 0.0, np.power(p, order), 0.0)


def _excess(p: FloatArray, order: float) -> FloatArray:
    """Return p^order - p, accurate also where the order is close to 1."""
    delta = order - 1.0
    if abs(delta) > 0.25:
        return np.asarray(_power(p, order) - p)
    with np.errstate(invalid="ignore", under="ignore"):
        return np.where(p > 0.0, p * np.expm1(delta * _log(p)), 0.0)


def _slope(p: FloatArray, order: float) -> FloatArray:
    """Return (order p^(order - 1) - 1) / (order - 1), which is log p + 1 at order 1; -inf for a jump at 0."""
    delta = order - 1.0
    log_p = _log(p)
    if delta == 0.0:
        return log_p + 1.0
    with np.errstate(invalid="ignore", over="ignore", under="ignore"):
        slope = 1.0 + order * np.expm1(delta * log_p) / delta
    return np.where(p > 0.0, slope, -np.inf) if order <= 1.0 else slope


def _as_order(value: float, *, infinite: bool) -> float:
    """Return an order: a real number >= 0, or infinity where that is meant."""
    if infinite and isinstance(value, int | float) and value == math.inf:
        return math.inf
    order = as_real(value, "order")
    if order < 0.0:
        raise ArgumentValueError(f"order must not be negative, got {order}")
    return order


@dataclass(frozen=True, slots=True)
class VonNeumann(Functional):
    """The von Neumann entropy -sum p log p.

    Parameters
    ----------
    base : float, optional
        Base of the logarithm; default: nats.

    Examples
    --------
    >>> VonNeumann(base=2)([0.5, 0.25, 0.25])
    1.5
    """

    log_power: ClassVar[int] = 1
    base: float | None = field(default=None, kw_only=True)

    def __post_init__(self) -> None:
        log_of_base(self.base)

    @property
    def name(self) -> str:
        """Name of the functional, as printed."""
        return "von Neumann entropy"

    def _value(self, p: FloatArray) -> FloatArray:
        return np.asarray(-xlogy(p, p).sum(axis=-1)) + 0.0

    def _gradient(self, p: FloatArray) -> FloatArray:
        return -_log(p) - 1.0


@dataclass(frozen=True, slots=True)
class Renyi(Functional):
    """The Renyi entropy log(sum p^a / sum p) / (1 - a) of order a >= 0.

    Order 0 is the logarithm of the rank, order 1 (the limit) the von Neumann entropy, order infinity the
    min-entropy. On spectra, where sum p = 1, this is the usual expression; the division is Renyi's convention
    for weights that do not sum to 1, and it makes the values continuous through order 1 in the presence of
    rounding. Gradients belong to the expression as written.

    Parameters
    ----------
    order : float
        From 0 to infinity (``math.inf``).
    base : float, optional
        Base of the logarithm; default: nats.

    References
    ----------
    Renyi, Proc. Fourth Berkeley Symposium 1 (1961) 547.

    Examples
    --------
    >>> Renyi(2)([0.5, 0.5]) == Renyi(0)([0.5, 0.5, 0.0]) == math.log(2)
    True
    """

    log_power: ClassVar[int] = 1
    order: float
    base: float | None = field(default=None, kw_only=True)

    def __post_init__(self) -> None:
        object.__setattr__(self, "order", _as_order(self.order, infinite=True))
        log_of_base(self.base)

    @property
    def smooth(self) -> bool:
        """Whether the functional has two derivatives at every spectrum without zeros: every order but infinity."""
        return self.order != math.inf

    @property
    def name(self) -> str:
        """Name of the functional, as printed."""
        return f"Renyi entropy of order {self.order:g}"

    def _value(self, p: FloatArray) -> FloatArray:
        if self.order == math.inf:
            return _min_entropy(p)
        total = p.sum(axis=-1)
        delta = self.order - 1.0
        with np.errstate(divide="ignore", invalid="ignore"):
            if delta == 0.0:
                return np.asarray(-xlogy(p, p).sum(axis=-1) / total) + 0.0
            if abs(delta) <= 0.25:
                return np.asarray(-np.log1p(_excess(p, self.order).sum(axis=-1) / total) / delta) + 0.0
            top = p.max(axis=-1)
            relative = _power(p / top[..., None], self.order).sum(axis=-1)
            return np.asarray(-(self.order * np.log(top) + np.log(relative) - np.log(total)) / delta) + 0.0

    def _gradient(self, p: FloatArray) -> FloatArray:
        if self.order == math.inf:
            return _min_entropy_gradient(p)
        total = p.sum(axis=-1, keepdims=True)
        top = p.max(axis=-1, keepdims=True)
        with np.errstate(divide="ignore", invalid="ignore"):
            if self.order == 1.0:
                return np.asarray(-(_log(p) + 1.0 + self._value(p)[..., None]) / total)
            if abs(self.order - 1.0) <= 0.25:
                moment = total + _excess(p, self.order).sum(axis=-1, keepdims=True)
                excess = _excess(p, self.order).sum(axis=-1, keepdims=True) / (self.order - 1.0)
                return np.asarray((excess / total - _slope(p, self.order)) / moment)
            relative = p / top
            weight = self.order * _power(relative, self.order - 1.0)
            weight = np.where(p > 0.0, weight, np.inf if self.order < 1.0 else 0.0)
            moment = top * _power(relative, self.order).sum(axis=-1, keepdims=True)
            return np.asarray((weight / moment - 1.0 / total) / (1.0 - self.order))


@dataclass(frozen=True, slots=True)
class Tsallis(Functional):
    """The Tsallis entropy (sum p - sum p^q) / (q - 1) of order q >= 0; at q = 1 (the limit) -sum p log p in nats.

    It is dimensionless, so it takes no base.

    Parameters
    ----------
    order : float
        Not negative, finite.

    References
    ----------
    Tsallis, J. Stat. Phys. 52 (1988) 479, doi:10.1007/BF01016429.

    Examples
    --------
    >>> Tsallis(2)([0.5, 0.25, 0.25])
    0.625
    """

    order: float

    def __post_init__(self) -> None:
        object.__setattr__(self, "order", _as_order(self.order, infinite=False))

    @property
    def name(self) -> str:
        """Name of the functional, as printed."""
        return f"Tsallis entropy of order {self.order:g}"

    def _value(self, p: FloatArray) -> FloatArray:
        if self.order == 1.0:
            return np.asarray(-xlogy(p, p).sum(axis=-1)) + 0.0
        return np.asarray(-_excess(p, self.order).sum(axis=-1) / (self.order - 1.0)) + 0.0

    def _gradient(self, p: FloatArray) -> FloatArray:
        return -_slope(p, self.order)


@dataclass(frozen=True, slots=True)
class PowerSum(Functional):
    """The power sum sum p^s of order s >= 0: the purity at s = 2, the rank at s = 0.

    Parameters
    ----------
    order : float
        Not negative, finite.

    Examples
    --------
    >>> PowerSum(2)([[0.5, 0.5], [1.0, 0.0]])
    array([0.5, 1. ])
    """

    order: float

    def __post_init__(self) -> None:
        object.__setattr__(self, "order", _as_order(self.order, infinite=False))

    @property
    def name(self) -> str:
        """Name of the functional, as printed."""
        return "purity" if self.order == 2.0 else f"power sum of order {self.order:g}"

    def _value(self, p: FloatArray) -> FloatArray:
        return np.asarray(_power(p, self.order).sum(axis=-1))

    def _gradient(self, p: FloatArray) -> FloatArray:
        if self.order == 0.0:
            return np.where(p > 0.0, 0.0, np.inf)
        with np.errstate(divide="ignore", over="ignore", under="ignore"):
            return np.asarray(self.order * np.power(p, self.order - 1.0))


def _min_entropy(p: FloatArray) -> FloatArray:
    return np.asarray(-_log(p.max(axis=-1))) + 0.0


def _min_entropy_gradient(p: FloatArray) -> FloatArray:
    top = p.max(axis=-1, keepdims=True)
    at_top = p == top
    with np.errstate(divide="ignore"):
        return np.where(at_top, -1.0 / top / at_top.sum(axis=-1, keepdims=True), 0.0)


@dataclass(frozen=True, slots=True)
class MinEntropy(Functional):
    """The min-entropy -log max p.

    Where several eigenvalues share the maximum the functional has no gradient; the slope -1/max p is then
    shared equally between them.

    Parameters
    ----------
    base : float, optional
        Base of the logarithm; default: nats.

    Examples
    --------
    >>> MinEntropy(base=2)([0.5, 0.25, 0.25])
    1.0
    """

    log_power: ClassVar[int] = 1
    base: float | None = field(default=None, kw_only=True)

    def __post_init__(self) -> None:
        log_of_base(self.base)

    @property
    def smooth(self) -> bool:
        """False: the functional has kinks."""
        return False

    @property
    def name(self) -> str:
        """Name of the functional, as printed."""
        return "min-entropy"

    def _value(self, p: FloatArray) -> FloatArray:
        return _min_entropy(p)

    def _gradient(self, p: FloatArray) -> FloatArray:
        return _min_entropy_gradient(p)


@dataclass(frozen=True, slots=True)
class Varentropy(Functional):
    """The varentropy sum p (log p + S)^2, S = -sum p log p: the variance of -log p under p.

    Parameters
    ----------
    base : float, optional
        Base of the logarithm; default: nats (the unit is then nat^2).

    Examples
    --------
    >>> Varentropy()([0.5, 0.5])
    0.0
    """

    log_power: ClassVar[int] = 2
    base: float | None = field(default=None, kw_only=True)

    def __post_init__(self) -> None:
        log_of_base(self.base)

    @property
    def name(self) -> str:
        """Name of the functional, as printed."""
        return "varentropy"

    def _value(self, p: FloatArray) -> FloatArray:
        return np.asarray((p * _centred_log(p) ** 2).sum(axis=-1))

    def _gradient(self, p: FloatArray) -> FloatArray:
        log_p = _log(p)
        entropy = -xlogy(p, p).sum(axis=-1, keepdims=True)
        surplus = p.sum(axis=-1, keepdims=True) - 1.0
        centred = log_p + entropy
        with np.errstate(invalid="ignore"):
            gradient = centred * (centred + 2.0) - 2.0 * entropy * surplus * (log_p + 1.0)
        return np.where(p > 0.0, gradient, np.inf)


def _centred_log(p: FloatArray) -> FloatArray:
    """Return log p + S, and 0 where p = 0."""
    entropy = -xlogy(p, p).sum(axis=-1, keepdims=True)
    return np.where(p > 0.0, _log(np.where(p > 0.0, p, 1.0)) + entropy, 0.0)

"""The base class of the functionals of a spectrum."""

from abc import ABC, abstractmethod
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from entropest._checks import log_of_base, unit_of
from entropest._types import FloatArray
from entropest.errors import ArgumentTypeError, ArgumentValueError

__all__ = ["Functional"]


class Functional(ABC):
    """A function of a spectrum: callable on (..., d) arrays, with a gradient, a name and a unit.

    A new functional defines `name`, `_value` and `_gradient` (both in nats), and `log_power`, the number of
    logarithms that its values are proportional to: 1 for an entropy, 2 for a varentropy, 0 for a power sum.
    """

    __slots__ = ()
    log_power: ClassVar[int] = 0

    @property
    def smooth(self) -> bool:
        """Whether the functional has two derivatives at every spectrum without zeros, ties included."""
        return True

    @property
    @abstractmethod
    def name(self) -> str:
        """Name of the functional, as printed."""

    @abstractmethod
    def _value(self, p: FloatArray) -> FloatArray:
        """Values in nats, (...)."""

    @abstractmethod
    def _gradient(self, p: FloatArray) -> FloatArray:
        """Partial derivatives in nats, (..., d)."""

    def __call__(self, spectrum: npt.ArrayLike, *, base: float | None = None) -> float | FloatArray:
        """Return the values of the functional.

        Parameters
        ----------
        spectrum : (..., d) array_like
            Eigenvalues, not negative, finite.
        base : float, optional
            Base of the logarithm; overrides the base given at construction. Default: nats.

        Returns
        -------
        float for a one-dimensional argument, else a float64 array of shape (...).

        Raises
        ------
        ArgumentValueError
            For a negative, infinite or NaN eigenvalue, or a base for a functional without logarithms.
        """
        values = self._value(_eigenvalues(spectrum)) / self.scale(base)
        return float(values) if values.ndim == 0 else values

    def gradient(self, spectrum: npt.ArrayLike, *, base: float | None = None) -> FloatArray:
        """Return the partial derivatives with respect to every eigenvalue, infinite where they are.

        Parameters
        ----------
        spectrum, base
            As in the call.

        Returns
        -------
        (..., d) float64 array.
        """
        return np.asarray(self._gradient(_eigenvalues(spectrum)) / self.scale(base))

    def scale(self, base: float | None = None) -> float:
        """Return the number of nats (or squared nats) in one unit; 1 for a dimensionless functional."""
        chosen = self._base_or(base)
        return 1.0 if self.log_power == 0 else log_of_base(chosen) ** self.log_power

    def unit(self, base: float | None = None) -> str:
        """Return the unit of the values: "nat", "bit", "nat^2", ..., and "1" for a dimensionless functional."""
        chosen = self._base_or(base)
        if self.log_power == 0:
            return "1"
        log_of_base(chosen)
        unit = unit_of(chosen)
        if self.log_power == 1:
            return unit
        return f"{unit}^2" if " " not in unit else f"({unit})^2"

    def _base_or(self, base: float | None) -> float | None:
        """Return the base to use: the one of the call, else the one given at construction."""
        if base is not None and self.log_power == 0:
            raise ArgumentValueError(f"base must not be given for the {self.name}: it has no unit, got {base}")
        own: float | None = getattr(self, "base", None)
        return own if base is None else base


def _eigenvalues(spectrum: npt.ArrayLike) -> FloatArray:
    """Return the argument of a functional as a checked float64 array."""
    try:
        p = np.asarray(spectrum, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise ArgumentTypeError(f"spectrum must be an array of real numbers, got {spectrum!r}") from error
    if p.ndim == 0 or p.shape[-1] == 0:
        raise ArgumentValueError(f"spectrum must have eigenvalues along its last axis, got shape {p.shape}")
    if not np.isfinite(p).all():
        raise ArgumentValueError(f"eigenvalues must be finite, got {p[~np.isfinite(p)][0]}")
    if p.min(initial=0.0) < 0.0:
        raise ArgumentValueError(f"eigenvalues must not be negative, got {p.min()}")
    return p

"""Divergences of a spectrum from a reference spectrum, both in decreasing order."""

from abc import abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import ClassVar

import numpy as np
import numpy.typing as npt
from scipy.special import rel_entr

from entropest._checks import log_of_base
from entropest._functional import Functional
from entropest._types import FloatArray
from entropest.errors import ArgumentValueError
from entropest.spectra import as_spectrum

__all__ = ["ChiSquare", "Fidelity", "HilbertSchmidtDistance", "RelativeEntropy", "TraceDistance"]


class _Divergence(Functional):
    """A functional with a reference spectrum, compared entry by entry in decreasing order."""

    __slots__ = ()
    reference: Sequence[float] | FloatArray

    @property
    def smooth(self) -> bool:
        """False: the functional has a kink where eigenvalues tie, because the order of the spectrum matters."""
        return False

    def _paired(self, p: FloatArray) -> tuple[FloatArray, FloatArray, npt.NDArray[np.intp]]:
        """Return p in decreasing order, the reference, and the order that was used."""
        q = np.asarray(self.reference, dtype=np.float64)
        if p.shape[-1] != len(q):
            raise ArgumentValueError(
                f"spectrum must have as many eigenvalues as the reference, {len(q)}, got {p.shape[-1]}"
            )
        order = np.argsort(-p, axis=-1, kind="stable")
        return np.take_along_axis(p, order, axis=-1), q, order

    def _value(self, p: FloatArray) -> FloatArray:
        ordered, q, _ = self._paired(p)
        return self._of_total(np.asarray(self._terms(ordered, q).sum(axis=-1)))

    def _gradient(self, p: FloatArray) -> FloatArray:
        ordered, q, order = self._paired(p)
        gradient = np.empty_like(p)
        np.put_along_axis(gradient, order, self._slopes(ordered, q), axis=-1)
        return gradient * self._slope_of_total(np.asarray(self._terms(ordered, q).sum(axis=-1)))[..., None]

    def _of_total(self, total: FloatArray) -> FloatArray:
        """Return the functional of the sum of all terms: the sum itself, unless a subclass says otherwise."""
        return total

    def _slope_of_total(self, total: FloatArray) -> FloatArray:
        """Return the derivative of :meth:`_of_total`."""
        return np.ones_like(total)

    @abstractmethod
    def _terms(self, p: FloatArray, q: FloatArray) -> FloatArray:
        """Return the term of each eigenvalue."""

    @abstractmethod
    def _slopes(self, p: FloatArray, q: FloatArray) -> FloatArray:
        """Return the derivative of each term."""


def _as_reference(values: Sequence[float] | FloatArray) -> tuple[float, ...]:
    return tuple(float(value) for value in as_spectrum(values))


@dataclass(frozen=True, slots=True)
class RelativeEntropy(_Divergence):
    """The relative entropy sum p log(p / q) to a reference spectrum q; +inf where q lacks support.

    Both spectra are put in decreasing order and compared entry by entry. This is the relative entropy of the
    states if they commute and their eigenvalues are ordered alike, and a lower bound on it otherwise.

    Parameters
    ----------
    reference : sequence of float
        A spectrum (sums to 1); kept in decreasing order.
    base : float, optional
        Base of the logarithm; default: nats.

    Examples
    --------
    >>> RelativeEntropy([0.5, 0.5], base=2)([1.0, 0.0])
    1.0
    >>> RelativeEntropy([1.0, 0.0])([0.5, 0.5])
    inf
    """

    log_power: ClassVar[int] = 1
    reference: Sequence[float] | FloatArray
    base: float | None = field(default=None, kw_only=True)

    def __post_init__(self) -> None:
        object.__setattr__(self, "reference", _as_reference(self.reference))
        log_of_base(self.base)

    @property
    def name(self) -> str:
        """Name of the functional, as printed."""
        return "relative entropy"

    def _terms(self, p: FloatArray, q: FloatArray) -> FloatArray:
        return np.asarray(rel_entr(p, q))

    def _slopes(self, p: FloatArray, q: FloatArray) -> FloatArray:
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(q > 0.0, np.log(p) - np.log(q) + 1.0, np.inf)


@dataclass(frozen=True, slots=True)
class ChiSquare(_Divergence):
    """The chi-square divergence sum (p - q)^2 / q to a reference spectrum q; +inf where q lacks support.

    Both spectra are put in decreasing order and compared entry by entry. It is dimensionless.

    Parameters
    ----------
    reference : sequence of float
        A spectrum (sums to 1); kept in decreasing order.

    Examples
    --------
    >>> ChiSquare([0.5, 0.5])([0.75, 0.25])
    0.25
    """

    reference: Sequence[float] | FloatArray

    def __post_init__(self) -> None:
        object.__setattr__(self, "reference", _as_reference(self.reference))

    @property
    def name(self) -> str:
        """Name of the functional, as printed."""
        return "chi-square divergence"

    def _terms(self, p: FloatArray, q: FloatArray) -> FloatArray:
        supported = q > 0.0
        terms = (p - q) ** 2 / np.where(supported, q, 1.0)
        return np.where(supported, terms, np.where(p > 0.0, np.inf, 0.0))

    def _slopes(self, p: FloatArray, q: FloatArray) -> FloatArray:
        supported = q > 0.0
        return np.where(supported, 2.0 * (p - q) / np.where(supported, q, 1.0), np.inf)


@dataclass(frozen=True, slots=True)
class TraceDistance(_Divergence):
    """The trace distance sum |p - q| / 2 to a reference spectrum q.

    Both spectra are put in decreasing order and compared entry by entry, which gives the least trace distance
    of states with these spectra. Where p = q the slope is taken as 0.

    Parameters
    ----------
    reference : sequence of float
        A spectrum (sums to 1); kept in decreasing order.

    Examples
    --------
    >>> TraceDistance([0.5, 0.5])([0.25, 0.75])
    0.25
    """

    reference: Sequence[float] | FloatArray

    def __post_init__(self) -> None:
        object.__setattr__(self, "reference", _as_reference(self.reference))

    @property
    def name(self) -> str:
        """Name of the functional, as printed."""
        return "trace distance"

    def _terms(self, p: FloatArray, q: FloatArray) -> FloatArray:
        return np.asarray(np.abs(p - q) / 2.0)

    def _slopes(self, p: FloatArray, q: FloatArray) -> FloatArray:
        return np.asarray(np.sign(p - q) / 2.0)


@dataclass(frozen=True, slots=True)
class HilbertSchmidtDistance(_Divergence):
    """The Hilbert-Schmidt distance sqrt(sum (p - q)^2) to a reference spectrum q.

    Both spectra are put in decreasing order and compared entry by entry, which gives the least distance of states
    with these spectra. Where p = q the slope is taken as 0.

    Parameters
    ----------
    reference : sequence of float
        A spectrum (sums to 1); kept in decreasing order.

    References
    ----------
    Hoffman, Wielandt, Duke Math. J. 20 (1953) 37, doi:10.1215/S0012-7094-53-02004-3.

    Examples
    --------
    >>> round(HilbertSchmidtDistance([0.5, 0.5])([0.25, 0.75]), 6)
    0.353553
    """

    reference: Sequence[float] | FloatArray

    def __post_init__(self) -> None:
        object.__setattr__(self, "reference", _as_reference(self.reference))

    @property
    def name(self) -> str:
        """Name of the functional, as printed."""
        return "Hilbert-Schmidt distance"

    def _terms(self, p: FloatArray, q: FloatArray) -> FloatArray:
        return np.asarray((p - q) ** 2)

    def _slopes(self, p: FloatArray, q: FloatArray) -> FloatArray:
        return np.asarray(2.0 * (p - q))

    def _of_total(self, total: FloatArray) -> FloatArray:
        return np.asarray(np.sqrt(total))

    def _slope_of_total(self, total: FloatArray) -> FloatArray:
        return np.where(total > 0.0, 0.5 / np.sqrt(np.where(total > 0.0, total, 1.0)), 0.0)


@dataclass(frozen=True, slots=True)
class Fidelity(_Divergence):
    """The fidelity (sum sqrt(p q))^2 with a reference spectrum q.

    Both spectra are put in decreasing order and compared entry by entry, which gives the largest fidelity
    (Tr |sqrt(rho) sqrt(sigma)|)^2 of states with these spectra.

    Parameters
    ----------
    reference : sequence of float
        A spectrum (sums to 1); kept in decreasing order.

    References
    ----------
    Markham, Miszczak, Puchala, Zyczkowski, Phys. Rev. A 77 (2008) 042111, doi:10.1103/PhysRevA.77.042111.

    Examples
    --------
    >>> round(Fidelity([0.5, 0.5])([1.0, 0.0]), 12)
    0.5
    """

    reference: Sequence[float] | FloatArray

    def __post_init__(self) -> None:
        object.__setattr__(self, "reference", _as_reference(self.reference))

    @property
    def name(self) -> str:
        """Name of the functional, as printed."""
        return "fidelity"

    def _terms(self, p: FloatArray, q: FloatArray) -> FloatArray:
        return np.asarray(np.sqrt(p * q))

    def _slopes(self, p: FloatArray, q: FloatArray) -> FloatArray:
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(q > 0.0, 0.5 * np.sqrt(q / p), 0.0)

    def _of_total(self, total: FloatArray) -> FloatArray:
        return total**2

    def _slope_of_total(self, total: FloatArray) -> FloatArray:
        return 2.0 * total

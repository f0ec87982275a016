"""The plug-in estimate of a smooth functional to second order: bias, variance and skewness; the exact jackknife."""

from dataclasses import dataclass

import numpy as np

from entropest._types import FloatArray, IntArray
from entropest.errors import NotCoveredError
from entropest.functionals import Functional
from entropest.shapes import down_probabilities

__all__ = ["Expansion", "expand", "jackknife_variance", "require_smooth"]

_RELATIVE_STEP = 1e-4
_RELATIVE_TIE = 1e-6
_ELEMENTS_AT_ONCE = 2**20


@dataclass(frozen=True, slots=True, kw_only=True)
class Expansion:
    """Second-order quantities of F(rows/n) around a spectrum, in nats.

    The rows of n copies have covariance n (diag p - p p^T) and mean shifts sum_{j > i} p_j/(p_i - p_j)
    - sum_{j < i} p_i/(p_j - p_i), so F(rows/n) has bias (curvature/2 + shift)/n. Its variance is
    first_order/n to first order; the unbiased or continued estimate of F has first_order/n + second_order/(2 n^2). Both
    hold while n times every eigenvalue is large; divided differences
    of the gradient keep them finite at ties.

    Attributes
    ----------
    curvature : float
        sum_ij F_ij (delta_ij p_i - p_i p_j).
    shift : float
        sum_{i<j} p_j (F_i - F_j)/(p_i - p_j).
    first_order : float
        Variance of the gradient under p: the varentropy for the von Neumann entropy.
    second_order : float
        tr (F'' C)^2 + sum_{i != j} p_i p_j [(F_i - F_j)/(p_i - p_j)]^2 with C = diag p - p p^T.
    third_moment : float
        Third central moment of the gradient under p.
    """

    curvature: float
    shift: float
    first_order: float
    second_order: float
    third_moment: float

    def bias(self, copies: int, blocks: int = 1) -> float:
        """Return the bias of F(added rows / copies) when the copies were measured in as many blocks.

        With several blocks it is for separated eigenvalues: at exact ties the rows of a block are pushed apart by
        sqrt(n), and the bias is larger (by a quarter for ten blocks of a maximally mixed qubit).
        """
        return (0.5 * self.curvature + blocks * self.shift) / copies


def expand(functional: Functional, spectrum: FloatArray) -> Expansion:
    """Return the second-order quantities of a functional at a spectrum in decreasing order.

    Only positive eigenvalues count. Second derivatives are central differences of the gradient with relative
    step 1e-4 (relative error about 1e-8). For a functional with kinks only the gradient is used, and the
    quantities of second order are zero.

    References
    ----------
    Its, Tracy, Widom, MSRI Publ. 40 (2001) 245, arXiv:math/9909169 (mean shift of the first row); the other
    rows and the expansion are derived in docs/theory-estimation.md.

    Examples
    --------
    >>> from entropest.functionals import VonNeumann
    >>> round(expand(VonNeumann(), np.array([0.7, 0.3])).bias(1600) * 1600, 4)
    -1.1355
    """
    gradient = _slopes(functional, spectrum[None])[0]
    support = spectrum > 0.0
    p = spectrum[support]
    mean = p @ gradient
    first_order = float(p @ (gradient - mean) ** 2)
    third_moment = float(p @ (gradient - mean) ** 3)
    if not functional.smooth:
        return Expansion(curvature=0.0, shift=0.0, first_order=first_order, second_order=0.0, third_moment=third_moment)
    hessian = _hessian(functional, spectrum)
    covariance = np.diag(p) - np.outer(p, p)
    gaps = p[:, None] - p[None, :]
    tied = np.abs(gaps) <= _RELATIVE_TIE * np.maximum(p[:, None], p[None, :])
    at_tie = np.diag(hessian)[:, None] - hessian
    ratios = np.where(tied, at_tie, (gradient[:, None] - gradient[None, :]) / np.where(tied, 1.0, gaps))
    np.fill_diagonal(ratios, 0.0)
    product = hessian @ covariance
    return Expansion(
        curvature=float(np.trace(product)),
        shift=float((np.triu(ratios) * p[None, :]).sum()),
        first_order=first_order,
        second_order=float(np.trace(product @ product) + p @ ratios**2 @ p),
        third_moment=third_moment,
    )


def _slopes(functional: Functional, spectra: FloatArray) -> FloatArray:
    """Return the gradient in nats on the support common to all the spectra."""
    gradient = functional.gradient(spectra) * functional.scale()
    return gradient[:, spectra[0] > 0.0]


def _hessian(functional: Functional, spectrum: FloatArray) -> FloatArray:
    """Return the second derivatives on the support, by central differences of the gradient."""
    support = np.flatnonzero(spectrum > 0.0)
    steps = np.zeros((len(support), len(spectrum)))
    steps[np.arange(len(support)), support] = _RELATIVE_STEP * spectrum[support]
    up = _slopes(functional, spectrum + steps)
    down = _slopes(functional, spectrum - steps)
    hessian = (up - down) / (2.0 * _RELATIVE_STEP * spectrum[support])[:, None]
    return np.asarray(0.5 * (hessian + hessian.T))


def require_smooth(functional: Functional) -> None:
    """Raise NotCoveredError for a functional with kinks."""
    if not functional.smooth:
        raise NotCoveredError(f"the first-order correction needs a smooth functional, not the {functional.name}")


def jackknife_variance(functional: Functional, shapes: IntArray) -> FloatArray:
    """Return the delete-one variance of F(rows/n) for each shape, exactly, in squared nats.

    Dropping one of the n copies at random takes a shape to the shape without one box with probability f^mu/f^shape,
    so (n - 1) Var F(mu/(n - 1)) is the jackknife averaged over all orders of the copies, with no resampling.

    Parameters
    ----------
    functional : Functional
        The functional F.
    shapes : (K, d) int array
        Shapes with at least one box each; 0 is returned for a single box.

    Examples
    --------
    >>> from entropest.functionals import PowerSum
    >>> jackknife_variance(PowerSum(2), np.array([[2, 1]])).round(6)
    array([0.125])
    """
    d = shapes.shape[1]
    step = max(1, _ELEMENTS_AT_ONCE // (d * d))
    pieces = [_jackknife(functional, shapes[i : i + step]) for i in range(0, len(shapes), step)]
    return np.concatenate(pieces)


def _jackknife(functional: Functional, shapes: IntArray) -> FloatArray:
    d = shapes.shape[1]
    left = shapes.sum(axis=1) - 1
    weights = down_probabilities(shapes)
    smaller = np.maximum(shapes[:, None, :] - np.eye(d, dtype=np.int64), 0)
    values = np.asarray(functional(smaller / np.maximum(left, 1)[:, None, None])) * functional.scale()
    values = np.where(weights > 0.0, values, 0.0)
    mean = (weights * values).sum(axis=1, keepdims=True)
    spread = (weights * (values - mean) ** 2).sum(axis=1)
    return np.where(left > 0, left * spread, 0.0)

"""The Gaussian unitary ensemble as the limit of the rows: blocks of tied eigenvalues, samples and exact means."""

import math

import numpy as np
import numpy.typing as npt
from scipy.special import erfc

from entropest._checks import as_integer, as_real
from entropest._types import FloatArray, RngLike
from entropest.spectra import as_spectrum

__all__ = ["gue_eigenvalues", "gue_row_means", "limit_row_means", "limit_rows", "tie_groups"]

LARGEST_GUE = 100
ENTRIES_AT_ONCE = 1 << 20
TIE = 1e-12


def tie_groups(spectrum: npt.ArrayLike, *, tie: float = TIE) -> tuple[slice, ...]:
    """Return the groups of equal eigenvalues, as slices of the decreasing spectrum.

    Parameters
    ----------
    spectrum : array_like
        Eigenvalues, as accepted by :func:`entropest.spectra.as_spectrum`.
    tie : float
        Neighbours whose ratio is at least 1 - tie count as equal.

    Examples
    --------
    >>> tie_groups([0.4, 0.4, 0.2])
    (slice(0, 2, None), slice(2, 3, None))
    """
    p = as_spectrum(spectrum)
    tie = as_real(tie, "tie")
    cuts = (np.flatnonzero(p[1:] < p[:-1] * (1.0 - tie)) + 1).tolist()
    return tuple(slice(start, stop) for start, stop in zip([0, *cuts], [*cuts, len(p)], strict=True))


def gue_eigenvalues(size: int, samples: int, *, traceless: bool = False, rng: RngLike = None) -> FloatArray:
    """Draw the eigenvalues of Hermitian Gaussian matrices with density proportional to exp(-Tr H^2 / 2).

    Parameters
    ----------
    size : int
        Rows of each matrix.
    samples : int
        Number of matrices.
    traceless : bool
        Subtract the mean of each matrix's eigenvalues.
    rng : int, Generator, SeedSequence or None
        Source of randomness.

    Returns
    -------
    (samples, size) float array, decreasing along the last axis.

    References
    ----------
    Mehta, Random Matrices (2004), chapter 2.

    Examples
    --------
    >>> gue_eigenvalues(3, 5, traceless=True, rng=1).shape
    (5, 3)
    """
    size = as_integer(size, "size", at_least=1)
    samples = as_integer(samples, "samples", at_least=0)
    generator = np.random.default_rng(rng)
    eigenvalues = np.empty((samples, size))
    at_once = max(1, ENTRIES_AT_ONCE // size**2)
    upper, lower = np.triu_indices(size, k=1)
    for start in range(0, samples, at_once):
        count = min(at_once, samples - start)
        matrices = np.zeros((count, size, size), dtype=np.complex128)
        matrices[:, np.arange(size), np.arange(size)] = generator.standard_normal((count, size))
        real, imaginary = generator.standard_normal((2, count, len(upper))) * math.sqrt(0.5)
        matrices[:, lower, upper] = real + 1j * imaginary
        eigenvalues[start : start + count] = np.linalg.eigvalsh(matrices)[:, ::-1]
    if traceless:
        eigenvalues -= eigenvalues.mean(axis=-1, keepdims=True)
    return eigenvalues


def gue_row_means(size: int) -> FloatArray:
    """Return the mean of each ordered eigenvalue of :func:`gue_eigenvalues`, the largest first.

    The number of eigenvalues above s is a sum of independent indicators whose probabilities are the eigenvalues
    of the matrix of int_s^inf phi_j phi_k dx, phi_j being the normalised Hermite functions; the mean of the i-th
    eigenvalue is int_0^inf [P(at least i above s) - P(at least size + 1 - i above s)] ds. Subtracting the trace
    does not change it. The result is good to about 1e-12.

    Raises
    ------
    ArgumentValueError
        If `size` is not between 1 and 100.

    References
    ----------
    Mehta, Random Matrices (2004), chapter 6; Hough, Krishnapur, Peres, Virag, Probab. Surv. 3 (2006) 206,
    doi:10.1214/154957806000000078 (theorem 7).

    Examples
    --------
    >>> gue_row_means(2).round(6)
    array([ 1.128379, -1.128379])
    """
    size = as_integer(size, "size", at_least=1, at_most=LARGEST_GUE)
    nodes, weights = np.polynomial.legendre.leggauss(80 + 10 * size)
    edge = 2.0 * math.sqrt(size) + 10.0
    above = _tail_counts(size, 0.5 * edge * (nodes + 1.0))
    return np.asarray((0.5 * edge * weights) @ (above - above[:, ::-1]))


def limit_row_means(spectrum: npt.ArrayLike, *, tie: float = TIE) -> FloatArray:
    """Return the limit of (E row_i - n p_i) / sqrt(n) for every row.

    A group of t equal eigenvalues p contributes sqrt(p) times the ordered means of the t x t Gaussian unitary
    ensemble; a single eigenvalue contributes 0 (its shift is of order 1, see
    :func:`entropest.law.limits.mean_shifts`).

    Parameters
    ----------
    spectrum : array_like
        Eigenvalues, as accepted by :func:`entropest.spectra.as_spectrum`.
    tie : float
        Neighbours whose ratio is at least 1 - tie count as equal.

    References
    ----------
    Johansson, Ann. Math. 153 (2001) 259, doi:10.2307/2661375 (all equal); Its, Tracy, Widom, MSRI Publications 40
    (2001), arXiv:math/9909169, and Houdre, Xu, arXiv:0901.4138 (groups).

    Examples
    --------
    >>> limit_row_means([0.25, 0.25, 0.25, 0.25]).round(3)
    array([ 1.264,  0.395, -0.395, -1.264])
    """
    p = as_spectrum(spectrum)
    means = np.zeros(len(p))
    for group in tie_groups(p, tie=tie):
        if p[group.start] > 0.0:
            means[group] = math.sqrt(p[group.start]) * gue_row_means(group.stop - group.start)
    return means


def limit_rows(spectrum: npt.ArrayLike, size: int, *, tie: float = TIE, rng: RngLike = None) -> FloatArray:
    """Draw from the limit law of (row_i - n p_i) / sqrt(n).

    Within a group of t equal eigenvalues p the rows are the ordered eigenvalues of a t x t Gaussian Hermitian
    matrix with off-diagonal E|H_ij|^2 = p; all diagonal entries together have covariance diag(p) - p p^T. For the
    uniform spectrum this is sqrt(1/d) times the traceless Gaussian unitary ensemble.

    Parameters
    ----------
    spectrum : array_like
        Eigenvalues, as accepted by :func:`entropest.spectra.as_spectrum`.
    size : int
        Number of draws.
    tie : float
        Neighbours whose ratio is at least 1 - tie count as equal.
    rng : int, Generator, SeedSequence or None
        Source of randomness.

    Returns
    -------
    (size, d) float array; the rows of a draw sum to 0.

    References
    ----------
    Johansson, Ann. Math. 153 (2001) 259, doi:10.2307/2661375; Kuperberg, Methods Appl. Anal. 9
    (2002) 99, arXiv:math/9909104; Houdre, Xu, arXiv:0901.4138; Meliot, arXiv:1009.4034.

    Examples
    --------
    >>> limit_rows([0.5, 0.25, 0.25], 4, rng=1).shape
    (4, 3)
    """
    p = as_spectrum(spectrum)
    size = as_integer(size, "size", at_least=0)
    generator = np.random.default_rng(rng)
    common = np.zeros(size)
    rows = np.empty((size, len(p)))
    for group in tie_groups(p, tie=tie):
        weight = p[group.start]
        rows[:, group] = math.sqrt(weight) * gue_eigenvalues(group.stop - group.start, size, rng=generator)
        common += rows[:, group].sum(axis=-1)
    rows -= common[:, None] * p
    return rows


def _tail_counts(size: int, points: FloatArray) -> FloatArray:
    """Return P(at least i eigenvalues exceed s) for the points s and i = 1..size, (points, size)."""
    above = np.zeros((len(points), size + 1))
    above[:, 0] = 1.0  # becomes the law of the number above
    for probability in np.clip(np.linalg.eigvalsh(_overlaps(size, points)), 0.0, 1.0).T:
        raised = above[:, :-1] * probability[:, None]
        above *= 1.0 - probability[:, None]
        above[:, 1:] += raised
    return np.asarray(np.cumsum(above[:, ::-1], axis=-1)[:, -2::-1])


def _overlaps(size: int, points: FloatArray) -> FloatArray:
    """Return int_s^inf phi_j phi_k dx of the Hermite functions, (points, size, size).

    From phi_j'' = (x^2/4 - j - 1/2) phi_j the product integrates to a Wronskian for j != k, and from
    (phi_j phi_{j-1})' = sqrt(j) (phi_{j-1}^2 - phi_j^2) the squares follow one another.
    """
    phi = np.zeros((size + 1, len(points)))
    phi[0] = np.exp(-0.25 * points**2) / (2.0 * math.pi) ** 0.25
    phi[1] = points * phi[0]
    for j in range(1, size):
        phi[j + 1] = (points * phi[j] - math.sqrt(j) * phi[j - 1]) / math.sqrt(j + 1)
    order = np.arange(size)
    raised = np.sqrt(order + 1.0)[:, None] * phi[1:]
    difference = order[None, :] - order[:, None]
    np.fill_diagonal(difference, 1)
    products = raised[:, None] * phi[None, :-1] - phi[:-1, None] * raised[None, :]
    overlaps = products / difference[:, :, None]
    squares = np.empty((size, len(points)))
    squares[0] = 0.5 * erfc(points / math.sqrt(2.0))
    for j in range(1, size):
        squares[j] = squares[j - 1] + phi[j] * phi[j - 1] / math.sqrt(j)
    overlaps[order, order] = squares
    return np.ascontiguousarray(overlaps.transpose(2, 0, 1))

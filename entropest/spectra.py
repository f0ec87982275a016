"""Checked spectra, and reference families of spectra."""

import math

import numpy as np
import numpy.typing as npt

from entropest._checks import as_integer, as_real
from entropest._types import FloatArray, RngLike
from entropest.errors import ArgumentTypeError, ArgumentValueError

__all__ = [
    "as_spectrum",
    "free_fermion_half_chain",
    "free_fermion_occupations",
    "geometric",
    "low_rank",
    "maximally_mixed",
    "power_law",
    "random_reduced",
    "spectrum_of_state",
    "spiked",
    "thermal",
]


def as_spectrum(values: npt.ArrayLike, *, tol: float = 1e-9, normalize: bool = False) -> FloatArray:
    """Return eigenvalues of a state as a float64 array in decreasing order.

    Parameters
    ----------
    values : array_like
        One-dimensional, real, finite.
    tol : float
        Eigenvalues from -tol to 0 are taken as 0; the sum must be within tol of 1.
    normalize : bool
        Divide by the sum instead of checking it (the sum must be positive).

    Raises
    ------
    ArgumentValueError
        For NaN or infinite values, an eigenvalue below -tol, or a sum off by more than tol.

    Examples
    --------
    >>> as_spectrum([0.25, 0.5, 0.25])
    array([0.5 , 0.25, 0.25])
    """
    tol = _as_tolerance(tol)
    array = _real_numbers(values, "a spectrum")
    if array.ndim != 1 or array.size == 0:
        raise ArgumentValueError(f"a spectrum must be one-dimensional and not empty, got shape {array.shape}")
    if not np.isfinite(array).all():
        raise ArgumentValueError(f"eigenvalues must be finite, got {array[~np.isfinite(array)][0]}")
    if array.min() < -tol:
        raise ArgumentValueError(f"eigenvalues must not be negative, got {array.min()}")
    ordered = np.sort(np.maximum(array, 0.0))[::-1].copy()
    total = math.fsum(ordered)
    if normalize:
        if total <= 0.0:
            raise ArgumentValueError(f"the sum of eigenvalues must be positive to normalise, got {total}")
        return np.asarray(ordered / total)
    if abs(total - 1.0) > tol:
        raise ArgumentValueError(f"eigenvalues must sum to 1 within {tol:g}, got sum {total!r}")
    return ordered


def spectrum_of_state(state: npt.ArrayLike, *, tol: float = 1e-9, normalize: bool = False) -> FloatArray:
    """Return the eigenvalues of a density matrix in decreasing order.

    Parameters
    ----------
    state : (d, d) array_like
        Hermitian within tol (largest entry of the anti-Hermitian part), positive and of trace 1 within tol.
    tol, normalize
        As in :func:`as_spectrum`.

    Raises
    ------
    ArgumentValueError
        If the matrix is not square, not finite, not Hermitian, not positive or not of trace 1.

    Examples
    --------
    >>> spectrum_of_state([[0.5, 0.5], [0.5, 0.5]]).round(12)
    array([1., 0.])
    """
    tol = _as_tolerance(tol)
    try:
        matrix = np.asarray(state, dtype=np.complex128)
    except (TypeError, ValueError, OverflowError) as error:
        raise ArgumentTypeError("a state must be a square matrix of complex numbers") from error
    if matrix.ndim != 2 or matrix.shape[0] != matrix.shape[1] or matrix.size == 0:
        raise ArgumentValueError(f"a state must be a square matrix, got shape {matrix.shape}")
    if not np.isfinite(matrix).all():
        raise ArgumentValueError("the entries of a state must be finite")
    asymmetry = float(np.abs(matrix - matrix.conj().T).max())
    if asymmetry > tol:
        raise ArgumentValueError(f"a state must be Hermitian within {tol:g}, got asymmetry {asymmetry:g}")
    return as_spectrum(np.linalg.eigvalsh(matrix), tol=tol, normalize=normalize)


def maximally_mixed(d: int) -> FloatArray:
    """Return d equal eigenvalues.

    Examples
    --------
    >>> maximally_mixed(2)
    array([0.5, 0.5])
    """
    d = as_integer(d, "d", at_least=1)
    return np.full(d, 1.0 / d)


def geometric(d: int, ratio: float) -> FloatArray:
    """Return eigenvalues proportional to 1, ratio, ratio^2, ... for a ratio in [0, 1].

    Examples
    --------
    >>> geometric(3, 0.5).round(6)
    array([0.571429, 0.285714, 0.142857])
    """
    d = as_integer(d, "d", at_least=1)
    ratio = _in_unit_interval(ratio, "ratio")
    return _normalised(np.asarray(ratio ** np.arange(d), dtype=np.float64))


def low_rank(d: int, rank: int) -> FloatArray:
    """Return `rank` equal eigenvalues and d - rank zeros.

    Examples
    --------
    >>> low_rank(4, 2)
    array([0.5, 0.5, 0. , 0. ])
    """
    d = as_integer(d, "d", at_least=1)
    rank = as_integer(rank, "rank", at_least=1, at_most=d)
    spectrum = np.zeros(d)
    spectrum[:rank] = 1.0 / rank
    return spectrum


def spiked(d: int, weight: float) -> FloatArray:
    """Return the spectrum of weight * (a pure state) + (1 - weight) * (the maximally mixed state).

    Examples
    --------
    >>> spiked(2, 0.5)
    array([0.75, 0.25])
    """
    d = as_integer(d, "d", at_least=1)
    weight = _in_unit_interval(weight, "weight")
    spectrum = np.full(d, (1.0 - weight) / d)
    spectrum[0] += weight
    return spectrum


def power_law(d: int, exponent: float) -> FloatArray:
    """Return eigenvalues proportional to 1, 2^-exponent, 3^-exponent, ... for an exponent >= 0.

    Examples
    --------
    >>> power_law(3, 1).round(6)
    array([0.545455, 0.272727, 0.181818])
    """
    d = as_integer(d, "d", at_least=1)
    exponent = as_real(exponent, "exponent")
    if exponent < 0.0:
        raise ArgumentValueError(f"exponent must not be negative, got {exponent}")
    ranks = np.arange(1.0, d + 1.0)
    return _normalised(ranks**-exponent)


def random_reduced(d: int, environment: int, *, rng: RngLike = None) -> FloatArray:
    """Return the spectrum of the reduced state of a Haar-random pure state on d x environment dimensions.

    Its mean entropy is Page's value, its mean purity Lubkin's (d + environment)/(d environment + 1).

    References
    ----------
    Page, Phys. Rev. Lett. 71 (1993) 1291, doi:10.1103/PhysRevLett.71.1291;
    Lubkin, J. Math. Phys. 19 (1978) 1028, doi:10.1063/1.523763.

    Examples
    --------
    >>> spectrum = random_reduced(4, 8, rng=1)
    >>> spectrum.shape, float(spectrum.sum().round(12))
    ((4,), 1.0)
    """
    d = as_integer(d, "d", at_least=1)
    environment = as_integer(environment, "environment", at_least=1)
    generator = np.random.default_rng(rng)
    shape = (d, environment)
    amplitudes = generator.standard_normal(shape) + 1j * generator.standard_normal(shape)
    singular = np.linalg.svd(amplitudes, compute_uv=False)
    spectrum = np.zeros(d)
    spectrum[: len(singular)] = singular**2
    return _normalised(spectrum)


def thermal(energies: npt.ArrayLike, beta: float) -> FloatArray:
    """Return the Gibbs weights exp(-beta E_i)/Z in decreasing order.

    Examples
    --------
    >>> thermal([0.0, 1.0], 2.0).round(6)
    array([0.880797, 0.119203])
    """
    levels = _real_numbers(energies, "energies")
    if levels.ndim != 1 or levels.size == 0 or not np.isfinite(levels).all():
        raise ArgumentValueError("energies must be a non-empty one-dimensional array of finite numbers")
    beta = as_real(beta, "beta")
    ground = levels.min() if beta >= 0.0 else levels.max()
    with np.errstate(over="ignore"):
        weights = np.exp(-beta * (levels - ground))
    return np.sort(_normalised(weights))[::-1].copy()


def free_fermion_occupations(sites: int) -> FloatArray:
    """Return the occupations of the `sites` modes of a block in the infinite half-filled hopping (XX) chain.

    They are the eigenvalues of the correlation matrix C_jk = sin(pi (j-k)/2) / (pi (j-k)), C_jj = 1/2; the
    von Neumann entropy of the block is the sum of the binary entropies of the occupations.

    References
    ----------
    Peschel, J. Phys. A 36 (2003) L205, doi:10.1088/0305-4470/36/14/101.

    Examples
    --------
    >>> free_fermion_occupations(2).round(6)
    array([0.81831, 0.18169])
    """
    sites = as_integer(sites, "sites", at_least=1)
    distance = np.subtract.outer(np.arange(sites), np.arange(sites))
    correlations = 0.5 * np.sinc(distance / 2.0)
    return np.asarray(np.clip(np.linalg.eigvalsh(correlations)[::-1], 0.0, 1.0))


def free_fermion_half_chain(sites: int) -> FloatArray:
    """Return the 2^sites eigenvalues of a block of `sites` in the infinite half-filled hopping (XX) chain.

    Each eigenvalue is a product over the modes of the occupation or of one minus it; at most 20 sites.

    References
    ----------
    Peschel, J. Phys. A 36 (2003) L205, doi:10.1088/0305-4470/36/14/101.

    Examples
    --------
    >>> free_fermion_half_chain(2).round(6)
    array([0.669631, 0.148679, 0.148679, 0.033011])
    """
    sites = as_integer(sites, "sites", at_least=1, at_most=20)
    spectrum = np.ones(1)
    for occupation in free_fermion_occupations(sites):
        spectrum = np.multiply.outer([occupation, 1.0 - occupation], spectrum).reshape(-1)
    return np.sort(_normalised(spectrum))[::-1].copy()


def _real_numbers(values: npt.ArrayLike, name: str) -> FloatArray:
    """Return real numbers as float64; text and complex numbers are refused, not converted."""
    try:
        array = np.asarray(values)
        if array.dtype.kind not in "iufO":
            raise TypeError(f"dtype {array.dtype}")
        return np.asarray(array, dtype=np.float64)
    except (TypeError, ValueError, OverflowError) as error:
        raise ArgumentTypeError(f"{name} must be a sequence of real numbers, got {values!r}") from error


def _as_tolerance(tol: float) -> float:
    number = as_real(tol, "tol")
    if number < 0.0:
        raise ArgumentValueError(f"tol must not be negative, got {number}")
    return number


def _in_unit_interval(value: float, name: str) -> float:
    number = as_real(value, name)
    if not 0.0 <= number <= 1.0:
        raise ArgumentValueError(f"{name} must lie between 0 and 1, got {number}")
    return number


def _normalised(weights: FloatArray) -> FloatArray:
    return np.asarray(weights / math.fsum(weights))

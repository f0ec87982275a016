"""The Gaussian surrogate of the outcome law: approximate diagrams at a cost that does not depend on n."""

import math

import numpy as np

from entropest._types import FloatArray, IntArray

__all__ = ["draw_surrogate"]

ENTRIES_AT_ONCE = 1 << 20


def draw_surrogate(probabilities: FloatArray, copies: int, size: int, generator: np.random.Generator) -> IntArray:
    """Draw approximate diagrams of n copies, for n too large for exact draws; say so beside every result.

    The shifted rows row_i + d - i, i = 1..d, are taken as (d - 1)/2 plus the eigenvalues of n diag(p) + sqrt(n) H,
    where H is Hermitian and Gaussian with mean 0: its diagonal has covariance diag(p) - p p^T, and off the
    diagonal E|H_ij|^2 = (p_i + p_j)/2, all independent. The rows are then moved to the nearest non-negative rows
    that sum to n, and rounded to integers by largest remainders. As n grows this has the limit law of the rows at
    every spectrum, ties included, and for distinct eigenvalues their mean shifts (derived in docs/derivations.md).

    Measured against exact draws while the smallest positive eigenvalue has n p_i >= 10: the mean of every row is
    within 0.6 boxes for ties of at most four eigenvalues, and off by about 2 and 5 boxes in the first row of 8 and 16
    equal eigenvalues (a known shift of order 1 that is left out, see docs/derivations.md); the distance of the
    distribution functions of a row falls like 1/sqrt(n) and was at most 0.10, 0.03, 0.01 for four equal eigenvalues at
    n = 100, 1000, 10^4, and 0.06, 0.02, 0.01 for (.4, .4, .1, .1); the mean entropy of rows/n is within 0.2/n and its
    standard deviation within 11, 1.5, 1 percent. Below that, at n p_i = 1, a row is off by up to 0.4 boxes, which then
    is much of it.

    Parameters
    ----------
    probabilities : (d,) float array
        The spectrum, decreasing; the rows of zeros stay empty.
    copies : int
        Number n of copies.
    size : int
        Number of diagrams.
    generator : numpy.random.Generator
        Source of randomness.

    Returns
    -------
    (size, d) int array of rows, each summing to n.

    References
    ----------
    For the limits: Johansson, Ann. Math. 153 (2001) 259, doi:10.2307/2661375; Kuperberg, Methods Appl. Anal. 9
    (2002) 99, arXiv:math/9909104; Houdre, Xu, arXiv:0901.4138; Meliot, arXiv:1009.4034.

    Examples
    --------
    >>> int(draw_surrogate(np.array([0.6, 0.4]), 10**12, 1, np.random.default_rng(1)).sum())
    1000000000000
    """
    rank = int((probabilities > 0.0).sum())
    shapes = np.zeros((size, len(probabilities)), dtype=np.int64)
    at_once = max(1, ENTRIES_AT_ONCE // rank**2)
    for start in range(0, size, at_once):
        samples = min(at_once, size - start)
        rows = _gaussian_rows(probabilities[:rank], copies, samples, generator)
        shapes[start : start + samples, :rank] = _rounded(_without_negative_rows(rows, copies), copies)
    return shapes


def _gaussian_rows(spectrum: FloatArray, copies: int, samples: int, generator: np.random.Generator) -> FloatArray:
    """Return real rows that sum to `copies`; small ones may be negative."""
    d = len(spectrum)
    upper, lower = np.triu_indices(d, k=1)
    diagonal = generator.standard_normal((samples, d)) * np.sqrt(spectrum)
    diagonal -= diagonal.sum(axis=-1, keepdims=True) * spectrum
    matrices = np.zeros((samples, d, d), dtype=np.complex128)
    matrices[:, np.arange(d), np.arange(d)] = copies * spectrum + math.sqrt(copies) * diagonal
    spread = np.sqrt(copies * (spectrum[upper] + spectrum[lower]) / 4.0)
    real, imaginary = generator.standard_normal((2, samples, len(upper))) * spread
    matrices[:, lower, upper] = real + 1j * imaginary
    return np.asarray(np.linalg.eigvalsh(matrices)[:, ::-1] + (np.arange(d) - (d - 1) / 2.0))


def _without_negative_rows(rows: FloatArray, copies: int) -> FloatArray:
    """Return the nearest decreasing non-negative rows that sum to `copies` (projection on a simplex)."""
    ordered = -np.sort(-rows, axis=-1)
    surplus = (np.cumsum(ordered, axis=-1) - copies) / np.arange(1, rows.shape[-1] + 1)
    kept = np.maximum((ordered > surplus).sum(axis=-1, keepdims=True), 1)
    return np.asarray(np.maximum(ordered - np.take_along_axis(surplus, kept - 1, axis=-1), 0.0))


def _rounded(rows: FloatArray, copies: int) -> IntArray:
    """Round decreasing rows to decreasing integers of the given sum by largest remainders."""
    whole = np.floor(rows).astype(np.int64)
    missing = copies - whole.sum(axis=-1, keepdims=True)
    order = np.argsort(whole - rows, axis=-1, kind="stable")
    ranks = np.argsort(order, axis=-1, kind="stable")
    return np.asarray(-np.sort(-(whole + (ranks < missing)), axis=-1))

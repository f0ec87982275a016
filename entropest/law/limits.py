"""Limit laws and bounds of the outcome law: row means, risks and bias in closed form.

For the limit law itself see :mod:`entropest.law.gue`, for vanishing eigenvalues :mod:`entropest.law.plancherel`.
"""

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from entropest._checks import as_integer
from entropest._types import FloatArray
from entropest.errors import ArgumentValueError
from entropest.law.gue import TIE, tie_groups
from entropest.spectra import as_spectrum

__all__ = [
    "FirstRow",
    "RowBounds",
    "chi_square_limit",
    "first_order_bias",
    "limit_covariance",
    "mean_row_bounds",
    "mean_shifts",
    "plug_in_bias",
    "squared_error_limit",
    "uniform_first_row",
]

CONFLUENT = 1e-5  # relative gap below which a divided difference is taken as the mean of derivatives
TRACY_WIDOM_MEAN = -1.771086807412  # Bornemann, Math. Comp. 79 (2010) 871, doi:10.1090/S0025-5718-09-02280-7
TRACY_WIDOM_VARIANCE = 0.813194792833  # the same


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RowBounds:
    """Bounds on the mean of each row: lower[i] <= E row_i <= upper[i], (d,) float arrays."""

    lower: FloatArray
    upper: FloatArray


@dataclass(frozen=True, slots=True, kw_only=True)
class FirstRow:
    """Approximate mean and standard deviation of the longest row."""

    mean: float
    standard_deviation: float


def mean_shifts(spectrum: npt.ArrayLike) -> FloatArray:
    """Return the limit of E row_i - n p_i for distinct positive eigenvalues.

    It is sum_{j>i} p_j/(p_i - p_j) - sum_{j<i} p_i/(p_j - p_i), and 0 for eigenvalues that are 0.

    Parameters
    ----------
    spectrum : array_like
        Eigenvalues, as accepted by :func:`entropest.spectra.as_spectrum`.

    Raises
    ------
    ArgumentValueError
        If two positive eigenvalues are equal: then the shift grows like sqrt(n), see
        :func:`entropest.law.gue.limit_row_means`.

    References
    ----------
    Its, Tracy, Widom, MSRI Publications 40 (2001), arXiv:math/9909169, for the first row; the others are derived in
    docs/derivations.md.

    Examples
    --------
    >>> mean_shifts([0.6, 0.3, 0.1]).round(9)
    array([ 1.2, -0.5, -0.7])
    """
    p = _distinct(spectrum)
    gaps = p[:, None] - p
    quotients = np.divide(np.minimum(p[:, None], p), gaps, out=np.zeros_like(gaps), where=gaps != 0.0)
    return np.asarray(quotients.sum(axis=1))


def limit_covariance(spectrum: npt.ArrayLike) -> FloatArray:
    """Return the limit of Cov(row_i, row_j) / n for distinct positive eigenvalues: diag(p) - p p^T.

    Raises
    ------
    ArgumentValueError
        If two positive eigenvalues are equal; draw from :func:`entropest.law.gue.limit_rows` then.

    References
    ----------
    Alicki, Rudnicki, Sadowski, J. Math. Phys. 29 (1988) 1158, doi:10.1063/1.527958; Houdre, Xu, arXiv:0901.4138.

    Examples
    --------
    >>> limit_covariance([0.75, 0.25])
    array([[ 0.1875, -0.1875],
           [-0.1875,  0.1875]])
    """
    p = _distinct(spectrum)
    return np.asarray(np.diag(p) - np.outer(p, p))


def mean_row_bounds(spectrum: npt.ArrayLike, copies: int) -> RowBounds:
    """Return bounds on the mean of every row that hold for every n.

    |E row_i - n p_i| <= 2 sqrt(n min(1, d p_i)), d the number of positive eigenvalues; besides E row_1 >= n p_1,
    E row_d <= n p_d (the rows majorize the letters of the word they come from) and row_i <= n / i.

    Parameters
    ----------
    spectrum : array_like
        Eigenvalues, as accepted by :func:`entropest.spectra.as_spectrum`.
    copies : int
        Number n of copies.

    References
    ----------
    O'Donnell, Wright, STOC (2017) 962, doi:10.1145/3055399.3055454, arXiv:1612.00034.

    Examples
    --------
    >>> mean_row_bounds([0.5, 0.5], 100).upper
    array([70., 50.])
    """
    p = as_spectrum(spectrum)
    n = as_integer(copies, "copies", at_least=0)
    rank = int((p > 0.0).sum())
    margin = 2.0 * np.sqrt(n * np.minimum(1.0, rank * p))
    lower = np.maximum(n * p - margin, 0.0)
    upper = np.minimum(n * p + margin, n / np.arange(1, len(p) + 1))
    lower[0] = n * p[0]
    upper[rank - 1] = n * p[rank - 1]
    return RowBounds(lower=lower, upper=upper)


def uniform_first_row(d: int, copies: int) -> FirstRow:
    """Return mean and standard deviation of the longest row for d equal eigenvalues, d and n large.

    The limit shape has its edge at row_1 = n/d + 2 sqrt(n), whatever c = sqrt(n)/d tends to, and the fluctuations
    there are a = (1 + c)^(2/3) n^(1/6) times the unitary Tracy-Widom law. Hence mean n/d + 2 sqrt(n) + 1/2 -
    1.7711 a and variance 0.8132 a^2 - (1 + c)^2. Here 1/2 is the next order, known for permutations (c = 0), and
    (1 + c)^2 is what fixing n takes from the variance at a Poisson number of copies; both were checked against
    simulation for words, n = 60 .. 10^4: the mean is off by at most 0.4 boxes for d >= 16 and a tenth of the
    standard deviation for d >= 8, the standard deviation by at most 5 percent for d >= 8. Where the variance comes
    out negative (n or d of a few) the standard deviation is given as 0. For every d and n,
    E row_1 <= n/d + 2 sqrt(n).

    Parameters
    ----------
    d : int
        Number of eigenvalues 1/d.
    copies : int
        Number n of copies.

    References
    ----------
    Biane, Int. Math. Res. Not. (2001) 179, arXiv:math/0006111 (limit shape); Johansson, Ann. Math. 153
    (2001) 259, doi:10.2307/2661375 (fluctuations); Bornemann, Forum Math. Sigma 12 (2024) e36, arXiv:2301.02022
    (the 1/2); O'Donnell, Wright, arXiv:1612.00034 (the bound).

    Examples
    --------
    >>> round(uniform_first_row(16, 10**4).mean, 1)
    794.7
    """
    d = as_integer(d, "d", at_least=1)
    n = as_integer(copies, "copies", at_least=1)
    root = math.sqrt(n)
    edge = 1.0 + root / d
    scale = edge ** (2.0 / 3.0) * n ** (1.0 / 6.0)
    mean = n / d + 2.0 * root + 0.5 + TRACY_WIDOM_MEAN * scale
    variance = TRACY_WIDOM_VARIANCE * scale**2 - edge**2
    return FirstRow(mean=mean, standard_deviation=math.sqrt(max(variance, 0.0)))


def squared_error_limit(spectrum: npt.ArrayLike, *, tie: float = TIE) -> float:
    """Return the limit of n E sum_i (row_i/n - p_i)^2.

    It is sum_i p_i (1 - p_i) + sum over groups of t equal eigenvalues p of t (t - 1) p; d - 1/d for the uniform
    spectrum. For every n it is at most d.

    References
    ----------
    O'Donnell, Wright, STOC (2016) 899, doi:10.1145/2897518.2897544, arXiv:1508.01907 (the bound d); the limit
    follows from Houdre, Xu, arXiv:0901.4138.

    Examples
    --------
    >>> squared_error_limit([0.25, 0.25, 0.25, 0.25])
    3.75
    """
    p = as_spectrum(spectrum)
    return float((p * (1.0 - p)).sum() + sum(p[group].sum() * (_size(group) - 1) for group in tie_groups(p, tie=tie)))


def chi_square_limit(spectrum: npt.ArrayLike, *, tie: float = TIE) -> float:
    """Return the limit of n E sum_i (row_i/n - p_i)^2 / p_i, zeros left out.

    It is r - 1 + sum over groups of t equal eigenvalues of t (t - 1), r being the number of positive ones; d^2 - 1
    for the uniform spectrum.

    References
    ----------
    O'Donnell, Wright, STOC (2017) 962, doi:10.1145/3055399.3055454, arXiv:1612.00034 (a bound of order d^2 for every
    n); the limit follows from Houdre, Xu, arXiv:0901.4138.

    Examples
    --------
    >>> chi_square_limit([0.25, 0.25, 0.25, 0.25])
    15.0
    """
    p = as_spectrum(spectrum)
    p = p[p > 0.0]
    return float(len(p) - 1 + sum(_size(group) * (_size(group) - 1) for group in tie_groups(p, tie=tie)))


def plug_in_bias(spectrum: npt.ArrayLike, copies: int) -> float:
    """Return the bias of the plug-in von Neumann entropy S(rows/n) to first order in 1/n, in nats.

    It is -(1/n) [(r - 1)/2 + sum_{i<j} p_j log(p_i/p_j) / (p_i - p_j)] over the r positive eigenvalues, where
    every tie contributes its limit 1: -(d^2 - 1)/(2n) for the uniform spectrum. The error is o(1/n), of order
    n^(-3/2) at ties; the formula fails while n times the smallest positive eigenvalue is below about 3.

    Parameters
    ----------
    spectrum : array_like
        Eigenvalues, as accepted by :func:`entropest.spectra.as_spectrum`.
    copies : int
        Number n of copies.

    References
    ----------
    Derived in docs/derivations.md; the term (r - 1)/2 is Miller's (in Information Theory in Psychology, 1955).

    Examples
    --------
    >>> round(1000 * plug_in_bias([0.7, 0.3], 1000), 5)
    -1.13547
    """
    p = as_spectrum(spectrum)
    p = p[p > 0.0]
    return first_order_bias(p, copies, gradient=-np.log(p) - 1.0, hessian=np.diag(-1.0 / p))


def first_order_bias(spectrum: npt.ArrayLike, copies: int, *, gradient: npt.ArrayLike, hessian: npt.ArrayLike) -> float:
    """Return the bias of the plug-in F(rows/n) to first order in 1/n, for a symmetric function F of the spectrum.

    It is (1/2n) sum_ij F_ij (p_i delta_ij - p_i p_j) + (1/n) sum_{i<j} p_j (F_i - F_j)/(p_i - p_j), where
    F_i and F_ij are derivatives at p. The quotient tends to F_ii - F_ij as p_i - p_j tends to 0.

    Parameters
    ----------
    spectrum : array_like
        Positive eigenvalues.
    copies : int
        Number n of copies.
    gradient : (d,) array_like
        F_i, in the order of the decreasing spectrum.
    hessian : (d, d) array_like
        F_ij, in the same order.

    Raises
    ------
    ArgumentValueError
        If an eigenvalue is 0 or the sizes disagree.

    References
    ----------
    Derived in docs/derivations.md.

    Examples
    --------
    >>> p = np.array([0.6, 0.4])  # the purity
    >>> round(first_order_bias(p, 10, gradient=2 * p, hessian=2 * np.eye(2)), 12)
    0.128
    """
    p = as_spectrum(spectrum)
    n = as_integer(copies, "copies", at_least=1)
    slope = np.asarray(gradient, dtype=np.float64)
    curvature = np.asarray(hessian, dtype=np.float64)
    if p[-1] <= 0.0:
        raise ArgumentValueError("eigenvalues must be positive for the bias of a general function, got 0")
    if slope.shape != p.shape or curvature.shape != (len(p), len(p)):
        raise ArgumentValueError(
            f"gradient and hessian must have shapes ({len(p)},) and ({len(p)}, {len(p)}), "
            f"got {slope.shape} and {curvature.shape}"
        )
    upper, lower = np.triu_indices(len(p), k=1)
    gap = p[upper] - p[lower]
    near = gap <= CONFLUENT * p[upper]
    confluent = 0.5 * (curvature[upper, upper] + curvature[lower, lower]) - curvature[upper, lower]
    quotient = np.where(near, confluent, (slope[upper] - slope[lower]) / np.where(near, 1.0, gap))
    spread = p @ np.diag(curvature) - p @ curvature @ p
    return float((0.5 * spread + p[lower] @ quotient) / n)


def _distinct(spectrum: npt.ArrayLike) -> FloatArray:
    p = as_spectrum(spectrum)
    for group in tie_groups(p):
        if _size(group) > 1 and p[group.start] > 0.0:
            raise ArgumentValueError(
                f"positive eigenvalues must be distinct, got {p[group.start]} {_size(group)} times"
            )
    return p


def _size(group: slice) -> int:
    return int(group.stop - group.start)

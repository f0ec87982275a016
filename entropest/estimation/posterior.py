"""The Hilbert-Schmidt posterior of a spectrum given one diagram: closed forms and exact draws.

The prior density on the spectra of r levels is proportional to Delta(p)^2 prod p_i^alpha, Delta the Vandermonde
product; alpha = 0 is the flat (Hilbert-Schmidt) measure on density matrices, alpha = e - r the reduced states of random
pure states with an environment of e levels. Times the Schur polynomial of the diagram it stays a determinant times
Delta, so that moments and evidence are products of Gamma functions of l_i = row_i + r - i.
"""

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.special import digamma, gammaln, polygamma

from entropest._checks import as_integer, as_real
from entropest._types import FloatArray, IntArray, RngLike
from entropest.errors import ArgumentValueError
from entropest.shapes import as_shapes, shifted_rows

__all__ = ["HilbertSchmidtPosterior", "block_entropies", "block_evidence", "gap_products", "log_dimension"]


@dataclass(frozen=True, slots=True)
class HilbertSchmidtPosterior:
    """The posterior of a spectrum of `rank` levels after one diagram, for the prior Delta(p)^2 prod p_i^alpha.

    Parameters
    ----------
    rows : sequence of int
        Rows of the diagram; empty rows or none at all give the prior.
    rank : int
        Number r of levels, at least the number of rows.
    concentration : float
        The exponent alpha of the prior, above -1; 0 is the Hilbert-Schmidt measure.

    Raises
    ------
    ArgumentValueError, ArgumentTypeError
        If a rule above is broken.

    References
    ----------
    Zyczkowski and Sommers, J. Phys. A 34 (2001) 7111, doi:10.1088/0305-4470/34/35/335 (the prior);
    the posterior moments are derived in docs/theory-estimation.md.

    Examples
    --------
    >>> posterior = HilbertSchmidtPosterior((60, 30, 10), 3)
    >>> round(posterior.mean_entropy(), 4), round(posterior.entropy_variance() ** 0.5, 4)
    (0.8777, 0.0523)
    >>> round(HilbertSchmidtPosterior((), 2).mean_entropy(), 6)
    0.333333
    """

    rows: npt.ArrayLike
    rank: int
    concentration: float = 0.0

    def __post_init__(self) -> None:
        rank = as_integer(self.rank, "rank", at_least=1)
        concentration = as_real(self.concentration, "concentration")
        if concentration <= -1.0:
            raise ArgumentValueError(f"concentration must be above -1, got {concentration}")
        rows = np.asarray(getattr(self.rows, "rows", self.rows))
        height = int((rows > 0).sum()) if rows.ndim == 1 and rows.dtype.kind in "iuf" else 0
        if height > rank:
            raise ArgumentValueError(f"rank must be at least the number of rows {height}, got {rank}")
        shape = as_shapes(rows, dim=rank, name="rows")
        if shape.ndim != 1:
            raise ArgumentValueError(f"rows must be the rows of one diagram, got an array of shape {shape.shape}")
        object.__setattr__(self, "rank", rank)
        object.__setattr__(self, "concentration", concentration)
        object.__setattr__(self, "rows", tuple(shape.tolist()))

    @property
    def _shape(self) -> IntArray:
        """The diagram with all rank rows, (1, rank)."""
        return np.asarray(self.rows, dtype=np.int64)[None, :]

    @property
    def _parts(self) -> FloatArray:
        """The numbers l_i = row_i + r - i, (rank,)."""
        return np.asarray(shifted_rows(self._shape)[0], dtype=np.float64)

    @property
    def _weight(self) -> float:
        """The total weight n + r^2 + r alpha of the unnormalised matrix behind the posterior."""
        return float(self._shape.sum() + self.rank**2 + self.rank * self.concentration)

    def mean_power_sum(self, order: float) -> float:
        """Return E[Tr rho^order] for a real order >= 0.

        It is Gamma(D)/Gamma(D+s) sum_i Gamma(x_i+s)/Gamma(x_i) prod_{m != i} (l_i-l_m+s)/(l_i-l_m), where
        x_i = l_i + alpha + 1 and D = n + r^2 + r alpha.
        """
        order = as_real(order, "order")
        if order < 0.0:
            raise ArgumentValueError(f"order must not be negative, got {order}")
        parts = self._parts
        terms = np.prod(1.0 + order / _gaps(parts), axis=1)
        x = parts + self.concentration + 1.0
        logs = gammaln(x + order) - gammaln(x) + gammaln(self._weight) - gammaln(self._weight + order)
        return float(np.exp(logs) @ terms)

    def mean_entropy(self) -> float:
        """Return the posterior mean of the von Neumann entropy in nats, -d/ds E[Tr rho^s] at s = 1."""
        concentrations = np.array([self.concentration])
        return float(block_entropies(self._shape, concentrations)[0, 0])

    def entropy_variance(self) -> float:
        """Return the posterior variance of the von Neumann entropy, in squared nats.

        E[S^2] is the mixed derivative at s = t = 1 of E[Tr rho^s Tr rho^t], a sum over pairs (i, j) of the same
        products of Gamma functions with l_i raised by s and l_j by t. Costs O(r^3).
        """
        slope, mixed, total = self._second_moments()
        D = self._weight
        psi = float(digamma(D + 2.0))
        second = (psi**2 - float(polygamma(1, D + 2.0))) * total - psi * slope + mixed
        return max(0.0, second / (D * (D + 1.0)) - self.mean_entropy() ** 2)

    def _second_moments(self) -> tuple[float, float, float]:
        """Return (Q_s + Q_t, Q_st, Q) at s = t = 1 of Q(s, t), the sum over raised pairs without 1/Gamma(D + s + t)."""
        parts = self._parts
        x = parts + self.concentration + 1.0
        gaps = _gaps(parts)
        # Both raised in one place: a function of u = s + t, at u = 2.
        value, first, second = _power_series(1.0 + 2.0 / gaps, 1.0 / gaps)
        psi, trigamma = digamma(x + 2.0), polygamma(1, x + 2.0)
        same = x * (x + 1.0)
        total = float(same @ value)
        slope = 2.0 * float(same @ (first + psi * value))
        mixed = float(same @ (2.0 * second + 2.0 * psi * first + (psi**2 + trigamma) * value))
        # Raised in two places i != j: the factor of the pair itself is (gap + s - t)/gap.
        psi = digamma(x + 1.0)
        for j in range(self.rank):
            others = gaps.copy()
            others[:, j] = np.inf
            lifted, lift, _ = _power_series(1.0 + 1.0 / others, 1.0 / others)
            towards = np.broadcast_to(gaps[j], gaps.shape).copy()
            towards[np.arange(self.rank), np.arange(self.rank)] = np.inf
            lowered, lower, _ = _power_series(1.0 + 1.0 / towards, 1.0 / towards)
            g, g_s = x * lifted, x * (lift + psi * lifted)
            k, k_t = x[j] * lowered, x[j] * (lower + psi[j] * lowered)
            inverse = 1.0 / gaps[:, j]
            keep = np.arange(self.rank) != j
            total += float((g * k)[keep].sum())
            slope += float((g_s * k + g * k_t)[keep].sum())
            mixed += float((g_s * k_t + inverse * (g * k_t - g_s * k))[keep].sum())
        return slope, mixed, total

    def log_evidence(self) -> float:
        """Return log E[s_lambda(p)] under the prior: the log probability of the diagram is this plus log f^lambda.

        f^lambda is the number of standard tableaux, the same for every prior and rank.
        """
        shape = self._shape
        return float(block_evidence(shape, np.array([self.concentration]))[0, 0] + log_dimension(shape)[0])

    def rvs(self, size: int | tuple[int, ...] | None = None, *, rng: RngLike = None) -> FloatArray:
        """Return exact draws of the spectrum in decreasing order.

        They are the normalised squared singular values of an upper triangular matrix T with complex standard normals
        above the diagonal and |T_kk|^2 ~ Gamma(l_k + alpha + 1).

        Parameters
        ----------
        size : int or tuple of int, optional
            Shape of the array of draws.
        rng : seed or numpy.random.Generator, optional
            Source of randomness.

        Returns
        -------
        (*size, rank) float64 array.

        Examples
        --------
        >>> draws = HilbertSchmidtPosterior((60, 30, 10), 3).rvs(2000, rng=1)
        >>> draws.mean(axis=0).round(2)
        array([0.61, 0.3 , 0.1 ])
        """
        generator = np.random.default_rng(rng)
        extent = () if size is None else tuple(np.atleast_1d(size).tolist())
        r = self.rank
        normals = generator.standard_normal((*extent, r, r, 2)) * math.sqrt(0.5)
        matrix = np.triu(normals[..., 0] + 1j * normals[..., 1], 1)
        diagonal = np.arange(r)
        weights = self._parts + self.concentration + 1.0
        matrix[..., diagonal, diagonal] = np.sqrt(generator.standard_gamma(weights, (*extent, r)))
        spectrum = np.linalg.svd(matrix, compute_uv=False) ** 2
        return np.asarray(spectrum / spectrum.sum(axis=-1, keepdims=True))


def block_evidence(shapes: IntArray, concentrations: FloatArray) -> FloatArray:
    """Return log E[s_lambda(p)]/s_lambda(1, ..., 1) of each shape for each concentration, (K, A).

    Parameters
    ----------
    shapes : (K, r) int array
        Shapes with all r rows of the prior, empty ones included.
    concentrations : (A,) array
        Finite exponents alpha, above -1.
    """
    r = shapes.shape[1]
    size = shapes.sum(axis=1)[:, None]
    x = shifted_rows(shapes)[:, None, :] + (concentrations[:, None] + 1.0)
    x0 = np.arange(r) + (concentrations[:, None] + 1.0)
    total = r**2 + r * concentrations
    return np.asarray(
        gammaln(x).sum(axis=2) - gammaln(x0).sum(axis=1) - gammaln(size + total) + gammaln(total), dtype=np.float64
    )


def block_entropies(shapes: IntArray, concentrations: FloatArray) -> FloatArray:
    """Return the posterior mean entropy of each shape for each concentration in nats, (K, A); see block_evidence.

    With gap_products v, w: digamma(D + 1) - (1/D) sum_i x_i (w_i + v_i digamma(x_i + 1)).
    """
    r = shapes.shape[1]
    parts = shifted_rows(shapes)
    value, slope = gap_products(parts)
    x = parts[:, None, :] + (concentrations[:, None] + 1.0)
    total = shapes.sum(axis=1)[:, None] + r**2 + r * concentrations
    weighted = (x * (slope[:, None, :] + value[:, None, :] * digamma(x + 1.0))).sum(axis=2)
    return np.asarray(digamma(total + 1.0) - weighted / total)


def gap_products(parts: IntArray) -> tuple[FloatArray, FloatArray]:
    """Return prod_{m != i} (l_i - l_m + s)/(l_i - l_m) at s = 1 and its derivative in s, (K, r) each.

    Examples
    --------
    >>> value, slope = gap_products(np.array([[3, 1]]))
    >>> value, slope
    (array([[1.5, 0.5]]), array([[ 0.5, -0.5]]))
    """
    real = parts.astype(np.float64)
    value, slope = np.ones_like(real), np.zeros_like(real)
    for m in range(real.shape[1]):
        gaps = real - real[:, m : m + 1]
        gaps[:, m] = np.inf
        inverse = 1.0 / gaps
        slope *= 1.0 + inverse
        slope += inverse * value
        value *= 1.0 + inverse
    return value, slope


def _gaps(parts: FloatArray) -> FloatArray:
    """Return l_i - l_m, with infinity on the diagonal."""
    gaps = parts[:, None] - parts[None, :]
    np.fill_diagonal(gaps, np.inf)
    return gaps


def _power_series(values: FloatArray, slopes: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the coefficients 0, 1, 2 of prod_m (values_im + slopes_im h), (r,) each."""
    zeroth, first, second = np.ones(len(values)), np.zeros(len(values)), np.zeros(len(values))
    for m in range(values.shape[1]):
        second = second * values[:, m] + first * slopes[:, m]
        first = first * values[:, m] + zeroth * slopes[:, m]
        zeroth = zeroth * values[:, m]
    return zeroth, first, second


def log_dimension(shapes: IntArray) -> FloatArray:
    """Return log s_lambda(1, ..., 1) of shapes with all their rows, (K,)."""
    upper, lower = np.triu_indices(shapes.shape[1], k=1)
    parts = shifted_rows(shapes)
    return np.asarray(np.log((parts[:, upper] - parts[:, lower]) / (lower - upper)).sum(axis=1))

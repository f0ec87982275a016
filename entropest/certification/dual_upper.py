"""The dual upper bound on the von Neumann entropy from large diagrams in a known dimension.

The mean energy of a random tableau, sum_i -log p_i times the number of letters i, exceeds that of its rows by at most
sum_{i<j} p_j log(p_i/p_j)/(p_i - p_j) <= d (d - 1)/2. So the rows give an upper confidence limit on the Renyi entropies
of all orders 1 + t > 1 at once, in terms of the cross entropy -sum h_i log p_i, which :mod:`.localiser` limits. Weak
duality bounds the entropy over all spectra that satisfy both by an explicit function of a few numbers. Any choice of
these is valid, a poor one only loosens the bound. Proofs: docs/theory-large-diagrams.md.
"""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt
from scipy.special import entr

from entropest._checks import as_confidence, as_integer
from entropest._types import FloatArray
from entropest.certification.dual_bound import STATED_SLACK
from entropest.certification.dual_rows import ROUNDING, Multipliers, row_minima
from entropest.certification.dual_search import DualProblem, coarse_rows, search_multipliers
from entropest.certification.localiser import Localisation, localise
from entropest.errors import ArgumentValueError
from entropest.shapes import as_shapes

__all__ = ["LARGEST_DIM", "LOCALISER_SHARE", "DualUpperBound", "dual_upper_bound"]

LOCALISER_SHARE: Final = 0.1
"""Share of the error spent on locating the spectrum; the rest is spent on the Renyi entropies."""

LARGEST_DIM: Final = 1 << 20
START_WEIGHT: Final = 0.1


@dataclass(frozen=True, slots=True, kw_only=True)
class DualUpperBound:
    """An upper bound on the von Neumann entropy, with the numbers from which it can be computed again.

    Attributes
    ----------
    value : float
        The bound in nats, at most log(dim).
    t, mu, log_z0, shift, weight : float
        The parameters of the dual: exponent, multiplier, log Z0, s = nu - mu/(t Z0), and the weight g of the rows.
    dim : int
        The dimension that was believed.
    """

    value: float
    t: float
    mu: float
    log_z0: float
    shift: float
    weight: float
    dim: int


def dual_upper_bound(rows: npt.ArrayLike, *, error: float, dim: int) -> DualUpperBound:
    """Return a bound that falls below the von Neumann entropy with probability at most `error`.

    Assumes identical, independent copies of a state of dimension `dim`, their number n fixed beforehand. With h the
    rows over n, e and r the bounds on excess and relative entropy of the localiser, a = log(1/error')/n, k =
    mu/(t Z0) and theta = mu + g it is::

        s + theta (r + S(h)) + mu (e/n + a/t) + k (1 - Z0 + Z0 log Z0) + sum_i max over y >= 0 of
            e^-y (y - s + k (e^(-t y) - 1)) - g h_i y

    Parameters
    ----------
    rows : (d,) or (m, d) array_like of int
        One diagram, or one in each line; row lengths, the longest first.
    error : float
        Strictly between 0 and 1.
    dim : int
        The dimension, known and not guessed; at least the number of non-empty rows, at most 2^20.

    Returns
    -------
    DualUpperBound

    Raises
    ------
    ArgumentValueError
        For an empty diagram, a diagram of more rows than `dim`, or an `error` outside (0, 1).

    References
    ----------
    Derived in docs/theory-large-diagrams.md; Gelfand and Tsetlin, Dokl. Akad. Nauk SSSR 71 (1950) 825 (patterns);
    Macdonald, Symmetric Functions and Hall Polynomials (1995), I.4 (Cauchy's identity).

    Examples
    --------
    >>> round(dual_upper_bound([5333, 2667, 1333, 667], error=0.05, dim=4).value, 3)
    1.155
    """
    dim = as_integer(dim, "dim", at_least=1, at_most=LARGEST_DIM)
    dual = _Dual(_checked_diagrams(rows, dim), as_confidence(error, "error"))
    best, value = dual.search()
    return DualUpperBound(
        value=min(value + STATED_SLACK, math.log(dim) * (1.0 + ROUNDING)),
        t=best.t,
        mu=best.kappa,
        log_z0=best.log_z0,
        shift=best.shift,
        weight=best.weight,
        dim=dim,
    )


def _checked_diagrams(rows: npt.ArrayLike, dim: int) -> FloatArray:
    """Return the diagrams as (m, dim) floats."""
    shapes = as_shapes(rows, dim=dim, name="rows")
    if shapes.ndim not in (1, 2):
        raise ArgumentValueError(f"rows must be one diagram or a list of diagrams, got shape {shapes.shape}")
    diagrams = np.atleast_2d(shapes).astype(np.float64)
    if len(diagrams) == 0 or (diagrams[:, 0] == 0.0).any():
        raise ArgumentValueError("rows must hold at least one box, got an empty diagram")
    return diagrams


class _Dual:
    """The dual function of diagrams (m, d)."""

    def __init__(self, diagrams: FloatArray, error: float) -> None:
        share = LOCALISER_SHARE * error
        self.dim = diagrams.shape[1]
        self.size = float(diagrams.sum())
        self.level = -math.log(error - share) / self.size
        self.local: Localisation = localise(diagrams, share)
        self.excess = len(diagrams) * self.local.excess / self.size
        h = diagrams.sum(axis=0) / self.size
        self.entropy = float(entr(h).sum())
        self.heights, counts = np.unique(h, return_counts=True)
        self.counts = counts.astype(np.float64)

    def value(self, m: Multipliers) -> float:
        """Return the dual at any parameters, rounded up by a proven slack, from 0 to log d."""
        minima = row_minima(m, self.heights, math.inf)
        minima = np.where(self.heights == 0.0, np.minimum(minima, 0.0), minima)
        rows = -math.fsum(self.counts * minima)
        linear = (m.kappa + m.weight) * (self.local.radius + self.entropy)
        linear += m.kappa * (self.excess + self.level / m.t)
        slack = ROUNDING * (abs(linear) + math.fsum(self.counts * np.abs(minima))) + m.constant_rounding()
        value = linear - m.constant() + rows + slack
        return float(max(0.0, min(value, math.log(self.dim) * (1.0 + ROUNDING))))

    def search(self) -> tuple[Multipliers, float]:
        """Return good parameters and the dual there."""
        heights, counts = coarse_rows(self.heights, self.counts)
        cross = self.local.radius + self.entropy
        problem = DualProblem(
            sign=-1,
            heights=heights,
            counts=counts,
            per_kappa=cross + self.excess,
            per_kappa_t=self.level,
            per_weight=cross,
            cap=math.inf,
            any_dimension=False,
        )
        start = self.start()
        best = min([start, *search_multipliers(problem, start)], key=self.value)
        return best, self.value(best)

    def start(self) -> Multipliers:
        """Return parameters near the optimum when n is large: p about h and the Chernoff exponent of that p."""
        h, counts = self.heights[self.heights > 0.0], self.counts[self.heights > 0.0]
        variance = float(counts @ (h * np.log(h) ** 2)) - self.entropy**2
        t = min(2.0, math.sqrt(2.0 * self.level / max(variance, 1e-3)))
        log_z0 = math.log(float(counts @ h ** (1.0 + t)))
        return Multipliers(sign=-1, t=t, kappa=0.95, log_z0=log_z0, shift=0.0, weight=START_WEIGHT)

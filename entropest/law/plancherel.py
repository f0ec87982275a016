"""The Plancherel law: the limit of the outcome law when no two copies share an eigenstate."""

import math
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from scipy.special import gammaln

from entropest._checks import as_integer
from entropest._types import FloatArray
from entropest.diagrams import YoungDiagram
from entropest.shapes import all_shapes, log_standard_tableaux

__all__ = ["PlancherelRows", "longest_increasing_bound", "plancherel_probability", "plancherel_rows"]

LARGEST_EXACT = 70
SHAPES_AT_ONCE = 1 << 13


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PlancherelRows:
    """Moments of the rows under the Plancherel law.

    Attributes
    ----------
    size : int
        Number n of boxes.
    mean, variance : (n,) float array
        Of each row, the longest first.
    """

    size: int
    mean: FloatArray
    variance: FloatArray

    def __repr__(self) -> str:
        rows = ", ".join(f"{row:.6g}" for row in self.mean[:4])
        return f"PlancherelRows(size={self.size}, mean=[{rows}{', ...' if self.size > 4 else ''}])"


def plancherel_probability(diagram: YoungDiagram) -> Fraction:
    """Return f^2 / n! exactly: the law of the shape of a uniformly random permutation of n.

    It is the limit of the outcome law of n copies when all eigenvalues tend to 0.

    References
    ----------
    Schensted, Canad. J. Math. 13 (1961) 179, doi:10.4153/CJM-1961-015-3.

    Examples
    --------
    >>> plancherel_probability(YoungDiagram((3, 1)))
    Fraction(3, 8)
    """
    return Fraction(diagram.standard_tableaux**2, math.factorial(diagram.size))


def plancherel_rows(size: int) -> PlancherelRows:
    """Return mean and variance of every row under the Plancherel law, by a sum over all diagrams.

    The first row is the longest increasing subsequence of a random permutation. Relative error about 1e-13; a
    second and 100 MB at 60 boxes, some four times that at 70.

    Parameters
    ----------
    size : int
        Number n of boxes, from 1 to 70.

    Raises
    ------
    ArgumentValueError
        If `size` is out of range.

    References
    ----------
    Baer, Brock, Math. Comp. 22 (1968) 385.

    Examples
    --------
    >>> float((plancherel_rows(10).mean[0] * math.factorial(10)).round(3))
    15730705.0
    """
    size = as_integer(size, "size", at_least=1, at_most=LARGEST_EXACT)
    first, second = np.zeros(size), np.zeros(size)
    for height in range(1, size + 1):
        shapes = all_shapes(size - height, height) + 1
        for start in range(0, len(shapes), SHAPES_AT_ONCE):
            part = shapes[start : start + SHAPES_AT_ONCE]
            weights = np.exp(2.0 * log_standard_tableaux(part) - gammaln(size + 1.0))
            first[:height] += weights @ part
            second[:height] += weights @ part**2
    return PlancherelRows(size=size, mean=first, variance=second - first**2)


def longest_increasing_bound(size: int) -> float:
    """Return 2 sqrt(n), above the mean longest increasing subsequence of a random permutation for every n.

    References
    ----------
    Vershik, Kerov, Funct. Anal. Appl. 19 (1985) 21, doi:10.1007/BF01086021; O'Donnell, Wright, arXiv:1612.00034.

    Examples
    --------
    >>> longest_increasing_bound(100)
    20.0
    """
    return 2.0 * math.sqrt(as_integer(size, "size", at_least=0))

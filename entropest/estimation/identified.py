"""The range of entropies that the purity of a state allows, and polynomial bounds from more power sums.

All entropies here are in nats.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from itertools import combinations, pairwise
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from entropest import _mp
from entropest._checks import as_integer, as_real
from entropest._types import FloatArray
from entropest.errors import ArgumentValueError

__all__ = [
    "PolynomialBound",
    "Range",
    "entropy_range_from_purity",
    "harremoes_topsoe_lower",
    "harremoes_topsoe_upper",
    "polynomial_bound",
    "polynomial_table",
]

Side = Literal["lower", "upper"]

_DIGITS = 60
_GRID_NODES = 40
_GRID_RATIO = 1.26


@dataclass(frozen=True, slots=True, kw_only=True)
class Range:
    """A range of values; `upper` is infinite where nothing bounds it."""

    lower: float
    upper: float


def harremoes_topsoe_lower(purity: float) -> float:
    """Return the least von Neumann entropy of a state of given purity, of any dimension.

    It is reached by r equal eigenvalues and one smaller: r = floor(1/P), and the equal ones are
    (1 + sqrt(1 - (1 + 1/r)(1 - P)))/(r + 1).

    Parameters
    ----------
    purity : float
        P = Tr rho^2, from 0 to 1; at 0 the answer is infinite.

    References
    ----------
    Harremoes and Topsoe, IEEE Trans. Inf. Theory 47 (2001) 2944, doi:10.1109/18.959272.

    Examples
    --------
    >>> round(harremoes_topsoe_lower(0.4), 12)
    0.980132210439
    """
    purity = _as_purity(purity)
    if purity == 0.0:
        return math.inf
    r = math.floor(1.0 / purity)
    equal = (1.0 + math.sqrt(max(0.0, 1.0 - (1.0 + 1.0 / r) * (1.0 - purity)))) / (r + 1.0)
    return max(0.0, r * _surprise(equal) + _surprise(max(0.0, 1.0 - r * equal)))


def harremoes_topsoe_upper(purity: float, dim: int | None) -> float:
    """Return the largest von Neumann entropy of a state of given purity and dimension.

    It is reached by one large eigenvalue (1 + sqrt((d - 1)(d P - 1)))/d and d - 1 equal ones.

    Parameters
    ----------
    purity : float
        P = Tr rho^2, from 1/d to 1.
    dim : int or None
        Dimension d; None for any dimension, where the entropy is unbounded unless the state is pure.

    References
    ----------
    Harremoes and Topsoe, IEEE Trans. Inf. Theory 47 (2001) 2944, doi:10.1109/18.959272.

    Examples
    --------
    >>> round(harremoes_topsoe_upper(0.4, 4), 11)
    1.13395903446
    """
    purity = _as_purity(purity)
    if dim is None:
        return 0.0 if purity == 1.0 else math.inf
    dim = as_integer(dim, "dim", at_least=1)
    if purity * dim < 1.0 - 1e-12:
        raise ArgumentValueError(f"purity must be at least 1/dim = {1.0 / dim:g}, got {purity}")
    if dim == 1:
        return 0.0
    large = (1.0 + math.sqrt(max(0.0, (dim - 1.0) * (dim * purity - 1.0)))) / dim
    return max(0.0, _surprise(large) + (dim - 1) * _surprise(max(0.0, 1.0 - large) / (dim - 1)))


def entropy_range_from_purity(purity: float, dim: int | None = None) -> Range:
    """Return the exact range of von Neumann entropies of states of given purity.

    Examples
    --------
    >>> found = entropy_range_from_purity(0.4, 4)
    >>> round(found.lower, 4), round(found.upper, 4)
    (0.9801, 1.134)
    """
    return Range(lower=harremoes_topsoe_lower(purity), upper=harremoes_topsoe_upper(purity, dim))


@dataclass(frozen=True, slots=True, kw_only=True)
class PolynomialBound:
    """A bound on the entropy that is linear in power sums: S >= or <= sum_j coefficients[j] Tr rho^j.

    Attributes
    ----------
    side : "lower" or "upper"
        Which bound it is. A lower bound holds in every dimension; in an upper bound Tr rho^0 is the dimension.
    nodes : tuple of float
        Where the polynomial touches the function that it bounds.
    coefficients : tuple of float
        For j = 0, 1, ..., order; entry 0 vanishes for a lower bound.
    """

    side: Side
    nodes: tuple[float, ...]
    coefficients: tuple[float, ...]


def polynomial_bound(side: Side, nodes: tuple[float, ...], *, at_one: bool) -> PolynomialBound:
    """Return the bound made by Hermite interpolation at positive nodes, from 60-digit arithmetic.

    Lower: a polynomial q <= -log x on (0, 1] gives S >= Tr rho q(rho). Upper: a polynomial Q >= -x log x on [0, 1]
    gives S <= Tr Q(rho). Both follow from interpolating value and slope at every node, and the value at 1 as well
    if `at_one`: the remainder has the sign of one derivative, which -log x and -x log x keep on (0, 1].
    For a lower bound of order k that means (k - at_one)/2 nodes with k - at_one even, for an upper bound of order k
    it means (k + 1 - at_one)/2 nodes; the lower one needs `at_one` when k is odd, the upper one when k is even.

    Parameters
    ----------
    side : "lower" or "upper"
        Which bound.
    nodes : tuple of float
        In (0, 1]; equal nodes mean higher contact, different ones must differ by a factor of 1.001.
    at_one : bool
        Whether the value at 1 is interpolated too.

    References
    ----------
    Golub and Meurant, Matrices, Moments and Quadrature (2010), ch. 6 (the sign of quadrature remainders).

    Examples
    --------
    >>> polynomial_bound("lower", (0.5,), at_one=False).coefficients  # S >= log 2 + 1 - 2 Tr rho^2
    (0.0, 1.6931471805599454, -2.0)
    """
    points = sorted(as_real(node, "nodes") for node in nodes)
    if not points or points[0] <= 0.0 or points[-1] > 1.0:
        raise ArgumentValueError(f"nodes must lie in (0, 1] and not be empty, got {nodes}")
    for a, b in pairwise(points):
        if a != b and b < 1.001 * a:
            raise ArgumentValueError(f"nodes must be equal or differ by a factor of 1.001, got {a} and {b}")
    coefficients = exact_coefficients(side, [points], at_one=at_one)[0]
    return PolynomialBound(side=side, nodes=tuple(points), coefficients=tuple(coefficients.tolist()))


def exact_coefficients(side: Side, nodes: Sequence[Sequence[float]], *, at_one: bool) -> FloatArray:
    """Return coefficients (M, order + 1) of the bounds at M sets of increasing nodes, from 60-digit arithmetic."""
    ctx = _mp.context(_DIGITS)
    last = [ctx.one] if at_one else []
    points = np.array([[ctx.mpf(node) for node in row for _ in range(2)] + last for row in nodes], dtype=object)
    logs = np.array([[ctx.log(point) for point in row] for row in points], dtype=object)
    return _hermite(side, points, logs).astype(np.float64)


@lru_cache(maxsize=16)
def polynomial_table(side: Side, order: int) -> tuple[FloatArray, FloatArray]:
    """Return nodes (M, N) and coefficients (M, order + 1) of bounds of one order at all nodes of a fixed grid.

    The grid holds 40 nodes from 1 down to 1e-4. The coefficients are float64 divided differences, good for
    choosing nodes; take the chosen bound from :func:`polynomial_bound`.

    Examples
    --------
    >>> nodes, coefficients = polynomial_table("lower", 4)
    >>> nodes.shape, coefficients.shape
    ((780, 2), (780, 5))
    """
    grid = _GRID_RATIO ** -np.arange(_GRID_NODES, dtype=np.float64)
    nodes = np.array(list(combinations(grid[::-1], nodes_of_order(side, order))))
    coefficients = polynomial_coefficients(side, nodes, order)
    nodes.flags.writeable = False
    coefficients.flags.writeable = False
    return nodes, coefficients


def nodes_of_order(side: Side, order: int) -> int:
    """Return the number of nodes of a bound of given order (the highest power sum in it, from 2).

    Examples
    --------
    >>> [nodes_of_order("lower", k) for k in (2, 3, 4, 5, 6)], [nodes_of_order("upper", k) for k in (2, 3, 4, 5, 6)]
    ([1, 1, 2, 2, 3], [1, 2, 2, 3, 3])
    """
    order = as_integer(order, "order", at_least=2)
    return order // 2 if side == "lower" else (order + 1) // 2


def value_at_one(side: Side, order: int) -> bool:
    """Say whether a bound of given order interpolates the value at 1 as well."""
    return (order % 2 == 1) == (side == "lower")


def polynomial_coefficients(side: Side, nodes: FloatArray, order: int) -> FloatArray:
    """Return coefficients (M, order + 1) of the bounds at many sets of increasing nodes (M, N), in float64."""
    points = np.repeat(nodes, 2, axis=1)
    if value_at_one(side, order):
        points = np.concatenate([points, np.ones((len(nodes), 1))], axis=1)
    return np.asarray(_hermite(side, points, np.log(points)), dtype=np.float64)


def _hermite(side: Side, points: npt.NDArray[Any], logs: npt.NDArray[Any]) -> npt.NDArray[Any]:
    """Return the coefficients of the power sums for interpolation at non-decreasing points, (M, W).

    Works on float64 arrays and on object arrays of multiprecision numbers alike.
    """
    width = points.shape[1]
    column = -logs if side == "lower" else -points * logs
    newton = [column[:, 0]]
    for w in range(1, width):
        left = points[:, : width - w]
        gap = points[:, w:] - left
        touching = gap == 0
        if side == "lower":
            contact = (-1) ** w / (w * left**w)
        elif w == 1:
            contact = -logs[:, : width - w] - 1
        else:
            contact = (-1) ** (w - 1) / (w * (w - 1) * left ** (w - 1))
        column = np.where(touching, contact, (column[:, 1:] - column[:, :-1]) / np.where(touching, 1, gap))
        newton.append(column[:, 0])
    coefficients = 0 * points
    for w in range(width - 1, -1, -1):
        raised = coefficients[:, :-1] - points[:, w : w + 1] * coefficients[:, 1:]
        lowest = newton[w] - points[:, w] * coefficients[:, 0]
        coefficients = np.concatenate([lowest[:, None], raised], axis=1)
    if side == "lower":
        coefficients = np.concatenate([0 * points[:, :1], coefficients], axis=1)
    return coefficients


def _as_purity(purity: float) -> float:
    purity = as_real(purity, "purity")
    if not 0.0 <= purity <= 1.0:
        raise ArgumentValueError(f"purity must lie between 0 and 1, got {purity}")
    return purity


def _surprise(x: float) -> float:
    """Return -x log x."""
    return -x * math.log(x) if x > 0.0 else 0.0

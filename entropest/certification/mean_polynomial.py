"""Statistics of one outcome whose mean is a polynomial in the power sums of the spectrum.

E(lambda) = sum_{j=1..k} c_j T_j(lambda) + e T_22(lambda), where T_j is the normalised character of a j-cycle and T_22
that of two disjoint transpositions, has mean c_1 + sum_{j>=2} c_j P_j + e P_2^2 over the outcomes of a block of k
copies. Proof: docs/theory-suprema.md.
"""

import math
from dataclasses import dataclass
from fractions import Fraction
from functools import cache

import numpy as np

from entropest._types import FloatArray
from entropest.diagrams import YoungDiagram, cycle_character, young_diagrams
from entropest.errors import ArgumentValueError

__all__ = ["MeanPolynomial", "character_columns", "double_transposition_character"]


@dataclass(frozen=True, slots=True, kw_only=True)
class MeanPolynomial:
    """The function c_1 + sum_{j=2..k} c_j P_j + e P_2^2 of a spectrum.

    Attributes
    ----------
    coefficients : tuple of float
        c_1, ..., c_k with k >= 3; c_j <= 0 for j >= 4.
    square : float
        e >= 0.

    Raises
    ------
    ArgumentValueError
        If a sign is wrong, a number is not finite or there are fewer than three coefficients.

    Examples
    --------
    >>> polynomial = MeanPolynomial(coefficients=(1.0, -1.0, 0.5), square=0.0)
    >>> float(polynomial.at(np.array([[0.5]]), np.array([[2.0]]))[0])  # two eigenvalues 1/2
    0.625
    """

    coefficients: tuple[float, ...]
    square: float

    def __post_init__(self) -> None:
        numbers = (*self.coefficients, self.square)
        if len(self.coefficients) < 3:
            raise ArgumentValueError(f"coefficients must be at least 3, got {len(self.coefficients)}")
        if not all(math.isfinite(number) for number in numbers):
            raise ArgumentValueError(f"coefficients must be finite, got {numbers}")
        if any(number > 0.0 for number in self.coefficients[3:]):
            raise ArgumentValueError(f"coefficients from the fourth on must not be positive, got {self.coefficients}")
        if self.square < 0.0:
            raise ArgumentValueError(f"square must not be negative, got {self.square}")

    def at(self, levels: FloatArray, multiplicities: FloatArray) -> FloatArray:
        """Return the value at spectra given by levels and how often each occurs, both (L, N): (N,)."""
        purity = (multiplicities * levels**2).sum(axis=0)
        value = self.coefficients[0] + self.coefficients[1] * purity + self.square * purity**2
        for power, coefficient in enumerate(self.coefficients[2:], start=3):
            value = value + coefficient * (multiplicities * levels**power).sum(axis=0)
        return np.asarray(value, dtype=np.float64)


def double_transposition_character(diagram: YoungDiagram) -> Fraction:
    """Return chi(two disjoint transpositions) / chi(identity) of a diagram of at least four boxes.

    The sum of all transpositions acts as a number C; its square is 2 K_22 + 3 K_3 + n(n-1)/2 with the sums of all pairs
    of disjoint transpositions and of all 3-cycles, whose values are those of T_2 and T_3.

    Examples
    --------
    >>> double_transposition_character(YoungDiagram((2, 2)))
    Fraction(1, 1)
    """
    n = diagram.size
    pairs, threes = n * (n - 1) // 2, n * (n - 1) * (n - 2) // 3
    disjoint = n * (n - 1) * (n - 2) * (n - 3) // 8
    square = (pairs * cycle_character(diagram, 2)) ** 2
    return (square - 3 * threes * cycle_character(diagram, 3) - pairs) / (2 * disjoint)


@cache
def character_columns(copies: int) -> tuple[tuple[YoungDiagram, ...], FloatArray]:
    """Return the diagrams of a block, K of them, and T_1 .. T_k and T_22 (zero for three copies) at each, (K, k + 1).

    Examples
    --------
    >>> diagrams, columns = character_columns(4)
    >>> [str(diagram) for diagram in diagrams], columns.shape
    (['4', '3+1', '2+2', '2+1+1', '1+1+1+1'], (5, 5))
    """
    diagrams = tuple(young_diagrams(copies))
    rows = [
        [
            *(float(cycle_character(diagram, length)) for length in range(1, copies + 1)),
            float(double_transposition_character(diagram)) if copies >= 4 else 0.0,
        ]
        for diagram in diagrams
    ]
    return diagrams, np.array(rows)

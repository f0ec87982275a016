"""Schur polynomials of one diagram: exact for integers and fractions, rounded once for floats and mpf."""

from __future__ import annotations

import math
import sys
from collections.abc import Sequence
from fractions import Fraction
from numbers import Integral, Rational, Real
from typing import Any, TypeVar, overload

from entropest import _mp
from entropest.diagrams import YoungDiagram
from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.law import high_precision
from entropest.law.jacobi_trudi import complete_homogeneous, integer_determinant, jacobi_trudi_matrix

__all__ = ["schur_polynomial"]

# Above this longest row the complete homogeneous polynomials cost more than the powers of the bialternant.
LONGEST_JACOBI_TRUDI_ROW = 1000
MOST_BIALTERNANT_VARIABLES = 24
# Above this size dyadic fractions have too many digits to be kept exactly.
MOST_EXACT_BOXES = 1000
FLOAT_DIGITS = 25


Number = TypeVar("Number", int, Fraction, float)


@overload
def schur_polynomial(diagram: YoungDiagram | Sequence[int], variables: Sequence[Number]) -> Number: ...
@overload
def schur_polynomial(diagram: YoungDiagram | Sequence[int], variables: Sequence[Any]) -> Any: ...
def schur_polynomial(diagram: YoungDiagram | Sequence[int], variables: Sequence[Any]) -> Any:
    """Return the Schur polynomial of a diagram, the sum over semistandard tableaux of their monomials.

    Integers and fractions go through an exact integer determinant (Jacobi-Trudi for short rows, the confluent
    bialternant for long ones). Floats and mpf are taken as the dyadic fractions they are, and only the result
    is rounded: nothing is lost to cancellation, whatever the ties among the variables. Diagrams of more than
    1,000 boxes with non-negative floats or mpf use the bialternant at a working precision that is proved to
    suffice.

    Parameters
    ----------
    diagram : YoungDiagram or sequence of int
        The shape; it gives zero when it has more rows than there are non-zero variables.
    variables : sequence of int, Fraction, float or mpf
        Any real numbers, in any order.

    Returns
    -------
    int for integers, Fraction when a fraction is among them, float when a float is, and mpf when an mpf is:
    an mpf of a private context with as many digits as the most precise context among the inputs.

    Raises
    ------
    ArgumentTypeError, ArgumentValueError
        For a variable that is not a finite real number, rows that are no diagram, or a value too large for a
        float.

    References
    ----------
    Macdonald, Symmetric Functions and Hall Polynomials (1995), I.3; Bareiss, Math. Comp. 22 (1968) 565,
    doi:10.1090/S0025-5718-1968-0226829-0 (determinants of integers).

    Examples
    --------
    >>> schur_polynomial((2, 1), [1, 1, 1])
    8
    >>> schur_polynomial((2, 1), [Fraction(1, 2), Fraction(1, 3), Fraction(1, 6)])
    Fraction(5, 18)
    >>> schur_polynomial((2,), [0.5, 0.5])
    0.75
    """
    shape = diagram if isinstance(diagram, YoungDiagram) else YoungDiagram(diagram)
    values = [exact_value(value) for value in variables]
    if all(isinstance(value, Rational) for value in variables):
        result = exact_schur(shape.rows, values)
        return result.numerator if all(isinstance(value, Integral) for value in variables) else result
    digits = [value.context.dps for value in variables if _mp.is_mpf(value)]
    rounded = rounded_schur(shape.rows, values, max(digits, default=FLOAT_DIGITS))
    if digits:
        return rounded
    if rounded > sys.float_info.max:
        raise ArgumentValueError(
            f"the Schur polynomial of {shape} must fit a float: pass integers, fractions or mpf instead"
        )
    return float(rounded)


def exact_value(value: Any) -> Fraction:
    """Return the exact value of a finite real number: int, fraction, float or mpf."""
    if _mp.is_mpf(value):
        sign, mantissa, exponent, _ = value._mpf_
        if mantissa == 0 and exponent != 0:
            raise ArgumentValueError(f"a variable must be finite, got {value}")
        return Fraction((-1) ** sign * int(mantissa)) * Fraction(2) ** int(exponent)
    if isinstance(value, bool) or not isinstance(value, Real):
        raise ArgumentTypeError(f"a variable must be a real number, got {value!r}")
    if isinstance(value, Rational):
        return Fraction(int(value.numerator), int(value.denominator))
    number = float(value)
    if not math.isfinite(number):
        raise ArgumentValueError(f"a variable must be finite, got {number}")
    return Fraction(number)


def exact_schur(rows: tuple[int, ...], values: Sequence[Fraction]) -> Fraction:
    """Return the Schur polynomial of non-empty rows at exact values."""
    nonzero = [value for value in values if value != 0]
    if len(rows) > len(nonzero):
        return Fraction(0)
    if not rows:
        return Fraction(1)
    scale = math.lcm(*(value.denominator for value in nonzero))
    numerators = [value.numerator * (scale // value.denominator) for value in nonzero]
    if rows[0] <= LONGEST_JACOBI_TRUDI_ROW or len(nonzero) > MOST_BIALTERNANT_VARIABLES:
        complete = complete_homogeneous(rows[0] + len(rows) - 1, numerators)
        value = integer_determinant(jacobi_trudi_matrix(rows, complete))
    else:
        value = _bialternant(rows, numerators)
    return Fraction(value, scale ** sum(rows))


def rounded_schur(rows: tuple[int, ...], values: Sequence[Fraction], digits: int) -> Any:
    """Return the Schur polynomial as an mpf of a private context with `digits` digits."""
    ctx = _mp.context(digits)
    if sum(rows) <= MOST_EXACT_BOXES or min(values) < 0:
        exact = exact_schur(rows, values)
        return ctx.mpf(exact.numerator) / exact.denominator
    positive = sorted((value for value in values if value > 0), reverse=True)
    if len(rows) > len(positive):
        return ctx.zero
    return ctx.convert(high_precision.schur(positive, padded(rows, len(positive)), digits))


def _bialternant(rows: tuple[int, ...], values: Sequence[int]) -> int:
    """Return the quotient of alternants; a value repeated t times takes t derivatives of its row."""
    shifted = [row + len(values) - j for j, row in enumerate(padded(rows, len(values)), start=1)]
    distinct = sorted(set(values), reverse=True)
    sizes = [values.count(value) for value in distinct]
    matrix = [
        [math.comb(part, r) * value ** (part - r) if part >= r else 0 for part in shifted]
        for value, size in zip(distinct, sizes, strict=True)
        for r in range(size - 1, -1, -1)
    ]
    vandermonde: int = math.prod(
        (distinct[a] - distinct[b]) ** (sizes[a] * sizes[b])
        for a in range(len(distinct))
        for b in range(a + 1, len(distinct))
    )
    return integer_determinant(matrix) // vandermonde


def padded(rows: tuple[int, ...], length: int) -> tuple[int, ...]:
    """Return rows with zeros appended up to `length`."""
    return rows + (0,) * (length - len(rows))

"""The probability of single shapes: which way of computing it, and its gradient.

Three routes lead to log P(lambda) = log f^lambda + log s_lambda(p), and each is chosen by a bound on its error:
the float64 determinant while the bound stays below 5e-10, otherwise arbitrary precision with a sufficient
number of digits, and the exact Jacobi-Trudi determinant when there are more eigenvalues than copies.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property

import numpy as np

from entropest import _mp
from entropest._types import BoolArray, FloatArray, IntArray
from entropest.diagrams import YoungDiagram
from entropest.law import bialternant, high_precision
from entropest.law.bialternant import TiedSpectrum
from entropest.law.jacobi_trudi import (
    complete_homogeneous,
    integer_determinant,
    jacobi_trudi_matrix,
    log_derivatives,
)
from entropest.law.leading import log_probability
from entropest.shapes import down_probabilities

FLOAT64, PRECISE, EXACT, IMPOSSIBLE = range(4)
ROUTES = ("float64 determinant", "arbitrary precision", "exact integers", "impossible shape")
FLOAT64_DIGITS = 15
# Digits of a result that is rounded to float64 afterwards.
RESULT_DIGITS = 20
# Relative accuracy asked of mean contents, and a merging of near ties tight enough for it.
CONTENT_ACCURACY = 1e-9
CONTENT_MERGE_LIMIT = 1e-10


@dataclass(frozen=True, slots=True, kw_only=True)
class LogpmfReport:
    """How the log-probability of one shape was computed.

    Attributes
    ----------
    value : float
        The log-probability in nats, -inf for an impossible shape.
    route : str
        "float64 determinant", "arbitrary precision", "exact integers" or "impossible shape".
    condition : float
        Growth of relative errors of the entries of the float64 matrix in its determinant; nan if none was made.
    digits : int
        Decimal digits worked with; 0 where no rounding happened before the final logarithm.
    error : float
        Bound on the absolute error of `value`, apart from its rounding to float64.
    """

    value: float
    route: str
    condition: float
    digits: int
    error: float


@dataclass(frozen=True, slots=True)
class Evaluation:
    """Log-probabilities of a batch of shapes and how they were computed; `route` indexes ROUTES."""

    values: FloatArray
    route: IntArray
    condition: FloatArray
    digits: IntArray
    error: FloatArray

    @classmethod
    def impossible(cls, count: int) -> Evaluation:
        """Return the evaluation of `count` shapes of probability zero, to be overwritten where possible."""
        zeros = np.zeros(count, dtype=np.int64)
        values, condition = np.full(count, -np.inf), np.full(count, np.nan)
        return cls(values, zeros + IMPOSSIBLE, condition, zeros.copy(), np.zeros(count))

    def put(self, where: BoolArray, part: Evaluation) -> None:
        """Overwrite the shapes selected by `where`."""
        for name in ("values", "route", "condition", "digits", "error"):
            getattr(self, name)[where] = getattr(part, name)

    def report(self, index: int) -> LogpmfReport:
        """Return the report on one shape."""
        return LogpmfReport(
            value=float(self.values[index]),
            route=ROUTES[self.route[index]],
            condition=float(self.condition[index]),
            digits=int(self.digits[index]),
            error=float(self.error[index]),
        )


class ExactSpectrum:
    """Eigenvalues as integers over a common denominator; floats are taken as the dyadic fractions they are."""

    def __init__(self, spectrum: FloatArray, copies: int) -> None:
        fractions = [Fraction(float(value)) for value in spectrum]
        self.copies = copies
        self.denominator = math.lcm(*(value.denominator for value in fractions))
        self.numerators = [value.numerator * (self.denominator // value.denominator) for value in fractions]

    @cached_property
    def complete(self) -> list[int]:
        """The complete homogeneous polynomials that shapes of `copies` boxes need."""
        return complete_homogeneous(max(2 * self.copies - 1, 0), self.numerators)

    def log_probability(self, rows: Sequence[int]) -> float:
        """Return the log-probability of rows under the eigenvalues divided by their sum."""
        diagram = YoungDiagram(rows)
        schur = integer_determinant(jacobi_trudi_matrix(diagram.rows, self.complete))
        numerator = diagram.standard_tableaux * schur
        return _log(Fraction(numerator, sum(self.numerators) ** self.copies))

    def gradient(self, rows: Sequence[int]) -> list[float]:
        """Return d log s_rows / d p_i."""
        derivatives = log_derivatives(YoungDiagram(rows).rows, self.complete, self.numerators)
        return [float(self.denominator * derivative) for derivative in derivatives]


def log_probabilities(shapes: IntArray, spectrum: FloatArray, copies: int) -> Evaluation:
    """Evaluate shapes (B, d) of `copies` boxes at d positive, decreasing eigenvalues.

    The law is that of the eigenvalues divided by their exact sum.
    """
    count, letters = shapes.shape
    full = np.full(count, 0, dtype=np.int64)
    if letters > copies:
        exact = ExactSpectrum(spectrum, copies)
        values = np.array([exact.log_probability(rows) for rows in shapes.tolist()], dtype=np.float64)
        return Evaluation(values, full + EXACT, np.full(count, np.nan), full, np.zeros(count))
    merged = TiedSpectrum.merging(spectrum, copies)
    ratios = bialternant.log_ratios(shapes, merged)
    values = log_probability(shapes, merged.values, copies, ratios.log_ratio)
    error = ratios.error + bialternant.MERGE_LIMIT**2 / 8.0
    result = Evaluation(values, full + FLOAT64, ratios.condition, full + FLOAT64_DIGITS, error)
    doubtful = ratios.error > bialternant.ERROR_LIMIT
    if doubtful.any():
        fractions = [Fraction(float(value)) for value in spectrum]
        ratio, digits = high_precision.log_schur_ratios(fractions, shapes[doubtful].tolist(), RESULT_DIGITS)
        result.values[doubtful] = log_probability(shapes[doubtful], spectrum, copies, np.array(ratio))
        result.route[doubtful], result.digits[doubtful], result.error[doubtful] = PRECISE, digits, 0.0
    return result


def log_schur_gradients(shapes: IntArray, spectrum: FloatArray, copies: int) -> FloatArray:
    """Return d log s / d p_i of shapes (B, r) at d >= r eigenvalues of which the first r are positive."""
    rank = shapes.shape[1]
    if rank > copies:
        exact = ExactSpectrum(spectrum, copies)
        rows = [exact.gradient(shape) for shape in shapes.tolist()]
        return np.array(rows, dtype=np.float64).reshape(len(rows), len(spectrum))
    gradients = np.empty((len(shapes), len(spectrum)))
    gradients[:, :rank] = _mean_contents(shapes, spectrum[:rank], copies) / spectrum[:rank]
    if len(spectrum) > rank:
        gradients[:, rank:] = _gradient_at_zero(shapes, spectrum[:rank], copies)[:, None]
    return gradients


def _mean_contents(shapes: IntArray, spectrum: FloatArray, copies: int) -> FloatArray:
    """Return p_i d log s / d p_i, in float64 where its error bound allows."""
    merged = TiedSpectrum.merging(spectrum, copies, CONTENT_MERGE_LIMIT)
    contents, errors = bialternant.mean_contents(shapes, merged)
    doubtful = ~(errors <= CONTENT_ACCURACY * contents).all(axis=1)
    if doubtful.any():
        fractions = [Fraction(float(value)) for value in spectrum]
        precise = high_precision.mean_contents(fractions, shapes[doubtful].tolist(), RESULT_DIGITS)
        contents[doubtful] = np.array(precise)
    return contents


def _gradient_at_zero(shapes: IntArray, spectrum: FloatArray, copies: int) -> FloatArray:
    """Return the derivative by a further eigenvalue at 0, sum of s_mu / s_shape over mu = shape less a box."""
    weights = down_probabilities(shapes)
    here = log_probabilities(shapes, spectrum, copies).values
    total = np.zeros(len(shapes))
    for row in range(shapes.shape[1]):
        removable = weights[:, row] > 0.0
        smaller = shapes[removable].copy()
        smaller[:, row] -= 1
        there = log_probabilities(smaller, spectrum, copies - 1).values
        total[removable] += np.exp(there - here[removable]) / weights[removable, row]
    return total


def _log(value: Fraction) -> float:
    """Return the logarithm of a positive fraction of any size."""
    ctx = _mp.context(RESULT_DIGITS + 10)
    return float(ctx.log(ctx.mpf(value.numerator) / value.denominator))

"""Probabilities of given shapes: the pointwise half of the outcome law."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from entropest import _mp
from entropest._checks import as_integer
from entropest._types import FloatArray, IntArray
from entropest.diagrams import YoungDiagram
from entropest.errors import ArgumentValueError
from entropest.law import high_precision
from entropest.law.eigenvalues import Eigenvalues
from entropest.law.evaluation import Evaluation, LogpmfReport, log_probabilities, log_schur_gradients
from entropest.law.moments import Moments
from entropest.law.schur import exact_schur, rounded_schur
from entropest.shapes import as_shapes

LARGEST_COPIES = 2**53
GUARD_DIGITS = 10


class PointwiseLaw:
    """Eigenvalues, number of copies, and the probability of any given shape; see :class:`SchurWeyl`."""

    __slots__ = ("_eigenvalues", "_moments", "copies")
    copies: int
    _eigenvalues: Eigenvalues
    _moments: Moments | None

    def __init__(self, spectrum: npt.ArrayLike | Sequence[Any], copies: int) -> None:
        number = as_integer(copies, "copies", at_least=1, at_most=LARGEST_COPIES)
        self.__setstate__({"copies": number, "_eigenvalues": Eigenvalues.of(spectrum), "_moments": None})

    def __getstate__(self) -> dict[str, object]:
        return {name: getattr(self, name) for name in PointwiseLaw.__slots__}

    def __setstate__(self, state: dict[str, object]) -> None:
        for name, value in state.items():
            object.__setattr__(self, name, value)

    def __setattr__(self, name: str, value: object) -> None:
        raise AttributeError(f"SchurWeyl is immutable, {name!r} cannot be set")

    def __delattr__(self, name: str) -> None:
        raise AttributeError(f"SchurWeyl is immutable, {name!r} cannot be deleted")

    def __repr__(self) -> str:
        return f"{type(self).__name__}({self._eigenvalues}, copies={self.copies})"

    @property
    def spectrum(self) -> FloatArray:
        """The eigenvalues in decreasing order, read-only."""
        return self._eigenvalues.floats

    @property
    def dim(self) -> int:
        """Number of eigenvalues d, zeros included."""
        return len(self.spectrum)

    @property
    def rank(self) -> int:
        """Number of positive eigenvalues: no outcome has more rows."""
        return int((self.spectrum > 0.0).sum())

    def exact_pmf(self, shape: npt.ArrayLike | YoungDiagram, dps: int = 50) -> Any:
        """Return the probability of one shape without rounding, or to `dps` digits.

        Parameters
        ----------
        shape : sequence of int or YoungDiagram
            Rows with `copies` boxes in all.
        dps : int
            Decimal digits of the result when it is an mpf.

        Returns
        -------
        Fraction if the spectrum was given in integers and fractions, else an mpf of a private context.

        Raises
        ------
        ArgumentValueError, ArgumentTypeError
            If the rows are no diagram of `copies` boxes.

        Examples
        --------
        >>> from entropest.law.schur_weyl import SchurWeyl
        >>> SchurWeyl([1, 0], 3).exact_pmf((3,))
        Fraction(1, 1)
        >>> print(SchurWeyl([0.75, 0.25], 2).exact_pmf((1, 1), dps=30))
        0.1875
        """
        digits = as_integer(dps, "dps", at_least=1)
        flat, leading = self._rows(shape)
        if leading:
            raise ArgumentValueError(f"exact_pmf takes one shape at a time, got shape {(*leading, flat.shape[1])}")
        diagram = YoungDiagram(flat[0].tolist())
        values = self._eigenvalues.exact
        if self._eigenvalues.rational:
            return diagram.standard_tableaux * exact_schur(diagram.rows, values)
        ctx = _mp.context(digits + GUARD_DIGITS)
        value = high_precision.standard_tableaux(ctx, diagram.rows) * rounded_schur(diagram.rows, values, ctx.dps)
        return _mp.context(digits).convert(value) + 0

    def pmf(self, shapes: npt.ArrayLike | YoungDiagram) -> Any:
        """Return probabilities, 0 for shapes with more rows than positive eigenvalues.

        Parameters
        ----------
        shapes : (..., d) array_like of int, or YoungDiagram
            Shapes with `copies` boxes each; the last axis may be shorter or longer than the spectrum.

        Returns
        -------
        float for one shape, else an array of the leading axes. Probabilities below 1e-308 come out as 0; see
        :meth:`logpmf`.

        Raises
        ------
        ArgumentValueError, ArgumentTypeError
            If a shape is no diagram or has another number of boxes.

        Examples
        --------
        >>> from entropest.law.schur_weyl import SchurWeyl
        >>> SchurWeyl([0.5, 0.25, 0.25], 3).pmf([[3, 0, 0], [2, 1, 0], [1, 1, 1]]).round(6)
        array([0.40625, 0.5625 , 0.03125])
        """
        value = np.exp(self.logpmf(shapes))
        return float(value) if np.ndim(value) == 0 else value

    def logpmf(self, shapes: npt.ArrayLike | YoungDiagram) -> Any:
        """Return natural logarithms of probabilities, -inf exactly where the probability is zero.

        The absolute error is below 1e-9 (up to rounding of the result) for 10^6 copies and 16 eigenvalues and
        beyond, whatever the ties: a scaled float64 determinant is used while a bound on its error allows, then
        arbitrary precision. :meth:`logpmf_report` tells which.

        Parameters
        ----------
        shapes : (..., d) array_like of int, or YoungDiagram
            Shapes with `copies` boxes each; the last axis may be shorter or longer than the spectrum.

        Returns
        -------
        float for one shape, else an array of the leading axes, in nats.

        Raises
        ------
        ArgumentValueError, ArgumentTypeError
            If a shape is no diagram or has another number of boxes.

        Examples
        --------
        >>> from entropest.law.schur_weyl import SchurWeyl
        >>> law = SchurWeyl([0.5, 0.25, 0.25], 10**6)
        >>> round(law.logpmf((500_500, 250_000, 249_500)), 6)
        -14.662281
        """
        flat, leading = self._rows(shapes)
        values = self._evaluate(flat).values
        return values.reshape(leading) if leading else float(values[0])

    def logpmf_report(self, shape: npt.ArrayLike | YoungDiagram) -> LogpmfReport:
        """Return the log-probability of one shape and how it was computed.

        Raises
        ------
        ArgumentValueError, ArgumentTypeError
            If `shape` is not one diagram of `copies` boxes.

        Examples
        --------
        >>> from entropest.law.schur_weyl import SchurWeyl
        >>> SchurWeyl([0.5, 0.3, 0.2], 12).logpmf_report((7, 3, 2)).route
        'float64 determinant'
        >>> SchurWeyl([0.5 + 1e-8, 0.5 - 1e-8], 1000).logpmf_report((505, 495)).route
        'arbitrary precision'
        """
        flat, leading = self._rows(shape)
        if leading:
            raise ArgumentValueError(f"logpmf_report takes one shape, got shape {(*leading, flat.shape[1])}")
        return self._evaluate(flat).report(0)

    def logpmf_gradient(self, shapes: npt.ArrayLike | YoungDiagram) -> FloatArray:
        """Return the partial derivatives of log P by the eigenvalues, finite at ties and at zero.

        log f^lambda s_lambda(p) is differentiated as a function of d free variables, without keeping their sum;
        the derivatives are ordered like `spectrum`. Then sum_i p_i d/dp_i log P = n, p_i d/dp_i log P is the
        mean number of letters i in a random semistandard tableau of that shape, and equal eigenvalues have equal
        derivatives. At an eigenvalue 0 it is the derivative from above. The relative error is about 1e-9.

        Parameters
        ----------
        shapes : (..., d) array_like of int, or YoungDiagram
            Shapes with `copies` boxes each.

        Returns
        -------
        (..., d) float array; nan for shapes of probability zero.

        Raises
        ------
        ArgumentValueError, ArgumentTypeError
            If a shape is no diagram or has another number of boxes.

        Examples
        --------
        >>> from entropest.law.schur_weyl import SchurWeyl
        >>> SchurWeyl([0.5, 0.5, 0.0], 3).logpmf_gradient((2, 1))
        array([3., 3., 4.])
        """
        flat, leading = self._rows(shapes)
        rank = self.rank
        possible = ~(flat[:, rank:] > 0).any(axis=1)
        gradients = np.full((len(flat), self.dim), np.nan)
        gradients[possible] = log_schur_gradients(flat[possible, :rank], self.spectrum, self.copies)
        return gradients.reshape((*leading, self.dim))

    @property
    def _positive(self) -> FloatArray:
        return self.spectrum[: self.rank]

    def _rows(self, shapes: npt.ArrayLike | YoungDiagram) -> tuple[IntArray, tuple[int, ...]]:
        """Return shapes as (B, w) rows with w >= rank, and the leading axes they came with."""
        rows = as_shapes(shapes)
        leading, width = rows.shape[:-1], rows.shape[-1]
        flat = rows.reshape(-1, width) if width else np.zeros((int(np.prod(leading)), 0), dtype=np.int64)
        wrong = flat.sum(axis=1) != self.copies
        if wrong.any():
            example = "+".join(map(str, flat[np.argmax(wrong)]))
            raise ArgumentValueError(f"shapes must have {self.copies} boxes, got {example or 'an empty shape'}")
        padding = np.zeros((len(flat), max(self.rank - width, 0)), dtype=np.int64)
        return np.concatenate([flat, padding], axis=1), leading

    def _evaluate(self, flat: IntArray) -> Evaluation:
        rank = self.rank
        possible = ~(flat[:, rank:] > 0).any(axis=1)
        result = Evaluation.impossible(len(flat))
        result.put(np.asarray(possible), log_probabilities(flat[possible, :rank], self._positive, self.copies))
        return result

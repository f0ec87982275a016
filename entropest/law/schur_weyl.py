"""SchurWeyl: the law of the Young diagram that a joint measurement of n copies of a state shows."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt

from entropest._checks import as_integer
from entropest._types import FloatArray, IntArray, RngLike
from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.law.drawing import Draws, Method, draw
from entropest.law.moments import Moments, exact_moments, is_cheap, limit_moments
from entropest.law.pointwise import PointwiseLaw
from entropest.law.table import (
    LawTable,
    StatisticLaw,
    build_statistic_law,
    build_table,
    check_budget,
    expectation,
)
from entropest.shapes import all_shapes

__all__ = ["SchurWeyl"]

MAX_BYTES = 2.0**30


class SchurWeyl(PointwiseLaw):
    """The law of the outcome of a joint measurement of n copies of a state.

    The outcome is a Young diagram lambda with n boxes. With f^lambda the number of standard tableaux of that
    shape and s_lambda the Schur polynomial, its probability is::

        P(lambda) = f^lambda s_lambda(p)

    Parameters
    ----------
    spectrum : sequence of float, Fraction, int or mpf
        The eigenvalues p. Integers and fractions are kept exactly and must sum to exactly 1. Floats and mpf must
        sum to 1 within 1e-9, and the law is that of the eigenvalues divided by their sum.
    copies : int
        The number n of copies measured jointly, at least 1.

    Attributes
    ----------
    spectrum : (d,) float array
        The eigenvalues in decreasing order, read-only.
    copies : int
        The number of copies.

    Raises
    ------
    ArgumentValueError, ArgumentTypeError
        If the eigenvalues are no spectrum, or `copies` is not a positive integer.

    Notes
    -----
    Shapes are integer arrays whose last axis holds the rows; one shape may also be a YoungDiagram. Objects are
    immutable and can be pickled.

    References
    ----------
    Alicki, Rudnicki, Sadowski, J. Math. Phys. 29 (1988) 1158, doi:10.1063/1.527958;
    Keyl, Werner, Phys. Rev. A 64 (2001) 052311, doi:10.1103/PhysRevA.64.052311.

    Examples
    --------
    >>> from fractions import Fraction
    >>> law = SchurWeyl([Fraction(1, 2), Fraction(1, 2)], 4)
    >>> law.exact_pmf((3, 1))
    Fraction(9, 16)
    >>> law.pmf([[4, 0], [3, 1], [2, 2]]).round(6)
    array([0.3125, 0.5625, 0.125 ])
    """

    __slots__ = ()

    def support(self, *, max_bytes: float = MAX_BYTES) -> IntArray:
        """Return all shapes of positive probability, (K, d), lexicographically decreasing.

        Raises
        ------
        MemoryBudgetError
            If they would need more than `max_bytes` bytes.

        Examples
        --------
        >>> SchurWeyl([0.5, 0.5, 0.0], 3).support()
        array([[3, 0, 0],
               [2, 1, 0]])
        """
        check_budget(self.copies, self.rank, self.dim, max_bytes, held=True)
        shapes = all_shapes(self.copies, self.rank)
        return np.concatenate([shapes, np.zeros((len(shapes), self.dim - self.rank), dtype=np.int64)], axis=1)

    def table(self, *, max_bytes: float = MAX_BYTES) -> LawTable:
        """Return the probabilities of all shapes, each with a relative error of about 1e-13 in its logarithm.

        The letters are added one at a time by the branching rule, positive terms only, so that ties and zeros
        are harmless. Besides the result, one layer is held: the shapes of at most n boxes with one row fewer. The
        time grows like n times the number of shapes (n itself for two eigenvalues).

        Parameters
        ----------
        max_bytes : float
            Budget for the result (held twice while it is sorted) and the working memory.

        Raises
        ------
        MemoryBudgetError
            If more would be needed; the message says how much.

        Examples
        --------
        >>> table = SchurWeyl([0.6, 0.3, 0.1], 120).table()
        >>> len(table.shapes), float(abs(table.probabilities.sum() - 1.0).round(11))
        (1261, 0.0)
        >>> (table.mean() - [72, 36, 12]).round(5)
        array([ 1.19994, -0.49997, -0.69997])
        """
        check_budget(self.copies, self.rank, self.dim, max_bytes, held=True)
        return build_table(self._positive, self.copies, self.dim)

    def expect(self, function: Callable[[IntArray], npt.ArrayLike], *, max_bytes: float = MAX_BYTES) -> Any:
        """Return the exact expectation of any function of the shape, holding no more than one layer.

        Parameters
        ----------
        function : callable
            Takes shapes (k, d), returns an array whose first axis has length k; called on batches.
        max_bytes : float
            Budget for the working memory.

        Returns
        -------
        float, or an array of the trailing axes of what `function` returns.

        Raises
        ------
        MemoryBudgetError
            If the layer would not fit.
        ArgumentValueError
            If `function` returns an array of another length.

        Examples
        --------
        >>> law = SchurWeyl([0.7, 0.3], 10)
        >>> purity = lambda shapes: (shapes**2 - [1, 3] * shapes).sum(axis=1) / 90
        >>> round(law.expect(purity), 12)
        0.58
        """
        check_budget(self.copies, self.rank, self.dim, max_bytes, held=False)
        return expectation(self._positive, self.copies, self.dim, function)

    def linear_law(self, weights: npt.ArrayLike, *, max_bytes: float = MAX_BYTES) -> StatisticLaw:
        """Return the exact law of sum_i weights_i row_i, holding no more than one layer.

        Parameters
        ----------
        weights : (d,) array_like of int
            Whole numbers.
        max_bytes : float
            Budget for the working memory.

        Raises
        ------
        MemoryBudgetError
            If the layer would not fit.
        ArgumentValueError, ArgumentTypeError
            If the weights are not d whole numbers.

        Examples
        --------
        >>> law = SchurWeyl([0.5, 0.5], 4).linear_law([1, -1])
        >>> law.values, law.probabilities.round(6)
        (array([0, 2, 4]), array([0.125 , 0.5625, 0.3125]))
        """
        numbers = np.asarray(weights)
        if numbers.dtype.kind not in "iu":
            raise ArgumentTypeError(f"weights must be integers, got dtype {numbers.dtype}")
        if numbers.shape != (self.dim,):
            raise ArgumentValueError(f"weights must have shape ({self.dim},), got {numbers.shape}")
        check_budget(self.copies, self.rank, self.dim, max_bytes, held=False)
        return build_statistic_law(self._positive, self.copies, numbers.astype(np.int64))

    def row_law(self, row: int = 1, *, max_bytes: float = MAX_BYTES) -> StatisticLaw:
        """Return the exact law of the length of one row; row 1 is the longest.

        Raises
        ------
        MemoryBudgetError
            If the layer would not fit `max_bytes`.
        ArgumentValueError
            If `row` is not between 1 and d.

        Examples
        --------
        >>> SchurWeyl([0.5, 0.5], 4).row_law().values
        array([2, 3, 4])
        """
        index = as_integer(row, "row", at_least=1, at_most=self.dim)
        return self.linear_law(np.eye(self.dim, dtype=np.int64)[index - 1], max_bytes=max_bytes)

    def moments(self, *, exact: bool | None = None) -> Moments:
        """Return mean and covariance of the rows, and the method they come from.

        Parameters
        ----------
        exact : bool, optional
            True: sum over all shapes whatever it costs. False: use a limit law. None: sum where that costs up
            to 2e8 additions (about a second), else use a limit law.

        Returns
        -------
        Moments, whose `method` says which of these it is:

        - "exact sum over all shapes";
        - "limit for distinct eigenvalues", neighbouring n p_i being at least 8 standard deviations apart: mean
          n p_i + sum_{j>i} p_j/(p_i - p_j) - sum_{j<i} p_i/(p_j - p_i), covariance n (diag p - p p^T);
        - "limit for groups of equal eigenvalues": the rows of a group of t follow, besides, the ordered eigenvalues
          of the t x t Gaussian unitary ensemble times sqrt(n p), whose covariance is sampled to about 1%;
        - "Gaussian surrogate" for near ties: averages over many spectra of n diag p + sqrt(n) H drawn with a fixed
          seed, with the standard error of the mean.

        Raises
        ------
        MemoryBudgetError
            If `exact` is True and one layer needs more than 1 GiB.

        References
        ----------
        Its, Tracy, Widom, MSRI Publications 40 (2001), arXiv:math/9909169; Houdre, Xu, arXiv:0901.4138; Meliot,
        arXiv:1009.4034.

        Examples
        --------
        >>> SchurWeyl([0.6, 0.3, 0.1], 120).moments()
        Moments(mean=[73.1999, 35.5, 11.3], method='exact sum over all shapes')
        >>> SchurWeyl([0.6, 0.3, 0.1], 10**9).moments().method
        'limit for distinct eigenvalues'
        """
        if exact is None and self._moments is not None:
            return self._moments
        if exact or (exact is None and is_cheap(self.copies, self.rank)):
            check_budget(self.copies, self.rank, self.dim, MAX_BYTES, held=False)
            moments = exact_moments(self._positive, self.copies, self.dim)
        else:
            moments = limit_moments(self._positive, self.copies, self.dim)
        if exact is None:
            object.__setattr__(self, "_moments", moments)
        return moments

    def mean(self) -> FloatArray:
        """Return the mean of the rows, (d,); :meth:`moments` says how it was obtained."""
        return self.moments().mean

    def cov(self) -> FloatArray:
        """Return the covariance of the rows, (d, d); :meth:`moments` says how it was obtained."""
        return self.moments().cov

    def rvs(
        self, size: int | tuple[int, ...] | None = None, *, rng: RngLike = None, method: Method = "auto"
    ) -> IntArray:
        """Draw shapes, (d,) or (*size, d); :meth:`draw` has the details and the label of the draws.

        Examples
        --------
        >>> SchurWeyl([0.6, 0.3, 0.1], 100).rvs((2, 5), rng=1).shape
        (2, 5, 3)
        """
        return self.draw(size, rng=rng, method=method).shapes

    def draw(self, size: int | tuple[int, ...] | None = None, *, rng: RngLike = None, method: Method = "auto") -> Draws:
        """Draw shapes, with the sampler that was used.

        Parameters
        ----------
        size : int or tuple of int, optional
            How many; one shape if omitted.
        rng : int, Generator, SeedSequence or None
            Source of randomness.
        method : {"auto", "insertion", "determinantal", "surrogate"}
            "insertion" (row insertion of letters, time proportional to n) and "determinantal" (d <= 16, time
            hardly depending on n) are exact; "surrogate" is approximate and used only when named. "auto"
            takes the cheaper exact one, and insertion where the determinantal sampler declines.

        Returns
        -------
        Draws with `shapes`, `method` and `approximate`.

        Raises
        ------
        NotCoveredError
            If the determinantal sampler declines, and by "auto" if insertion would then take more than 10^11
            letters.

        Examples
        --------
        >>> SchurWeyl([0.6, 0.3, 0.1], 100).draw(5, rng=1)
        Draws(shapes of shape (5, 3), method='insertion')
        """
        extents = () if size is None else size if isinstance(size, tuple) else (size,)
        axes = tuple(as_integer(extent, "size", at_least=0) for extent in extents)
        generator = np.random.default_rng(rng)
        return draw(self.spectrum, self.copies, axes, generator, method)

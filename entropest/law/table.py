"""The whole outcome law: streamed layer by layer, as a table, and as the law of a linear statistic."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from entropest._types import FloatArray, IntArray
from entropest.errors import ArgumentValueError, MemoryBudgetError
from entropest.law.branching import Slice, last_layer_size, slices
from entropest.law.evaluation import ExactSpectrum
from entropest.law.leading import log_probability
from entropest.shapes import all_shapes, count_shapes

SHAPES_AT_ONCE = 2**15
# Copies times rank up to which shapes are counted exactly just to say how many there are.
MOST_COUNTED = 10**6
LETTERS_PER_SHAPE = 4
MOST_COPIES_OF_FEW_SHAPES = 30


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LawTable:
    """All shapes of positive probability, with their probabilities.

    Attributes
    ----------
    shapes : (K, d) int array
        Rows of each shape, lexicographically decreasing.
    probabilities : (K,) float array
        They sum to 1 up to rounding. A probability below 1e-308 is 0 here but not in `log_probabilities`.
    log_probabilities : (K,) float array
        Natural logarithms of the probabilities.
    """

    shapes: IntArray
    probabilities: FloatArray
    log_probabilities: FloatArray

    def __repr__(self) -> str:
        return f"LawTable({len(self.shapes)} shapes of {self.shapes[0].sum()} boxes)"

    def expect(self, function: Callable[[IntArray], npt.ArrayLike]) -> Any:
        """Return the expectation of a function of the shape.

        Parameters
        ----------
        function : callable
            Takes (K, d) shapes, returns an array whose first axis has length K.

        Returns
        -------
        float, or an array of the trailing axes of what `function` returns.
        """
        return weighted_sum(self.probabilities, function(self.shapes))

    def mean(self) -> FloatArray:
        """Return the mean length of each row, (d,)."""
        return np.asarray(self.probabilities @ self.shapes)

    def cov(self) -> FloatArray:
        """Return the covariance of the row lengths, (d, d)."""
        centred = self.shapes - self.mean()
        return np.asarray((centred * self.probabilities[:, None]).T @ centred)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StatisticLaw:
    """The exact law of an integer-valued statistic of the shape.

    Attributes
    ----------
    values : (V,) int array
        Values of positive probability, increasing.
    probabilities : (V,) float array
        Their probabilities.
    """

    values: IntArray
    probabilities: FloatArray

    def __repr__(self) -> str:
        return f"StatisticLaw({len(self.values)} values from {self.values[0]} to {self.values[-1]})"

    def mean(self) -> float:
        """Return the mean."""
        return float(self.probabilities @ self.values)

    def variance(self) -> float:
        """Return the variance."""
        return float(self.probabilities @ (self.values - self.mean()) ** 2)

    def cdf(self, value: float) -> float:
        """Return the probability of values up to `value`."""
        return float(self.probabilities[self.values <= value].sum())


def stream(spectrum: FloatArray, copies: int) -> Iterator[tuple[IntArray, FloatArray]]:
    """Yield batches of shapes (k, h) and their log-probabilities, h the largest number of rows.

    `spectrum` holds the positive eigenvalues in decreasing order. Many more eigenvalues than shapes are not added
    one at a time: exact determinants of the few shapes take less.
    """
    if copies <= MOST_COPIES_OF_FEW_SHAPES and len(spectrum) > LETTERS_PER_SHAPE * count_shapes(copies, copies):
        shapes = all_shapes(copies, copies)
        exact = ExactSpectrum(spectrum, copies)
        yield shapes, np.array([exact.log_probability(rows) for rows in shapes.tolist()])
        return
    waiting: list[Slice] = []
    held = 0
    for part in slices(spectrum, copies):
        waiting.append(part)
        held += len(part.shapes)
        if held >= SHAPES_AT_ONCE:
            yield from _with_leading(waiting, spectrum, copies)
            waiting, held = [], 0
    yield from _with_leading(waiting, spectrum, copies)


def build_table(spectrum: FloatArray, copies: int, dim: int) -> LawTable:
    """Collect the whole law in lexicographically decreasing order, with `dim` columns."""
    count = support_size(copies, len(spectrum))
    shapes, log_probabilities = np.zeros((count, dim), dtype=np.int64), np.empty(count)
    start = 0
    for part, values in stream(spectrum, copies):
        shapes[start : start + len(part), : part.shape[1]] = part
        log_probabilities[start : start + len(part)] = values
        start += len(part)
    order = np.lexsort(shapes.T[::-1])[::-1]
    shapes, log_probabilities = shapes[order], log_probabilities[order]
    return LawTable(shapes=shapes, probabilities=np.exp(log_probabilities), log_probabilities=log_probabilities)


def build_statistic_law(spectrum: FloatArray, copies: int, weights: IntArray) -> StatisticLaw:
    """Add up the law of sum_i weights_i row_i, one slice of the last layer at a time."""
    law: dict[int, float] = {}
    for shapes, log_probabilities in stream(spectrum, copies):
        values, index = np.unique(shapes @ weights[: shapes.shape[1]], return_inverse=True)
        sums = np.bincount(index, weights=np.exp(log_probabilities))
        for value, probability in zip(values.tolist(), sums.tolist(), strict=True):
            law[value] = law.get(value, 0.0) + probability
    values = np.array(sorted(law), dtype=np.int64)
    return StatisticLaw(values=values, probabilities=np.array([law[value] for value in values.tolist()]))


def expectation(spectrum: FloatArray, copies: int, dim: int, function: Callable[[IntArray], npt.ArrayLike]) -> Any:
    """Add up the expectation of a function of shapes with `dim` columns, a batch of shapes at a time."""
    total: Any = 0.0
    for shapes, log_probabilities in stream(spectrum, copies):
        padded = np.zeros((len(shapes), dim), dtype=np.int64)
        padded[:, : shapes.shape[1]] = shapes
        total = total + weighted_sum(np.exp(log_probabilities), function(padded))
    return total


def weighted_sum(weights: FloatArray, values: npt.ArrayLike) -> Any:
    """Return sum_k weights_k values_k along the first axis, as float if nothing is left."""
    array = np.asarray(values, dtype=np.float64)
    if array.ndim == 0 or len(array) != len(weights):
        raise ArgumentValueError(
            f"the function must return one entry for each of {len(weights)} shapes, got shape {array.shape}"
        )
    total = np.tensordot(weights, array, axes=1)
    return float(total) if total.ndim == 0 else total


def support_size(copies: int, rank: int) -> int:
    """Return the number of shapes of positive probability."""
    if rank <= 3:
        return (1, copies // 2 + 1, ((copies + 3) ** 2 + 6) // 12)[rank - 1]
    return count_shapes(copies, rank)


def check_budget(copies: int, rank: int, dim: int, max_bytes: float, *, held: bool) -> None:
    """Refuse a law that needs more memory than `max_bytes`.

    `held` says that all shapes are kept (twice, while they are sorted); otherwise only one layer is.
    """
    shape_bytes = 8.0 * (2 * dim + 4) if held else 0.0
    layer_bytes = 64.0 * copies if rank > 2 else 0.0
    if rank <= 3 or copies * rank <= MOST_COUNTED:
        shapes = support_size(copies, rank)
        asked, needed = f"{shapes} shapes need", shapes * shape_bytes + layer_bytes
    else:
        asked = "shapes need at least"
        needed = _fewest_shapes(copies, rank) * shape_bytes + 8.0 * _fewest_shapes(copies, rank - 1) + layer_bytes
    if needed <= max_bytes:
        needed = support_size(copies, rank) * shape_bytes + last_layer_size(copies, rank)[0]
    if needed > max_bytes:
        raise MemoryBudgetError(
            f"the law must fit max_bytes={max_bytes:.4g}, got {copies} copies of rank {rank}, "
            f"whose {asked} {needed:.4g} bytes"
        )


def _fewest_shapes(copies: int, rank: int) -> float:
    """Return binom(n + r - 1, r - 1) / r!, at most the number of shapes with n boxes and r rows."""
    rows = np.arange(1, rank, dtype=np.float64)
    log_count = float(np.log1p(copies / rows).sum()) - math.lgamma(rank + 1.0)
    return math.exp(min(log_count, 600.0))


def _with_leading(parts: list[Slice], spectrum: FloatArray, copies: int) -> Iterator[tuple[IntArray, FloatArray]]:
    """Yield the shapes of some slices with their log-probabilities, a bounded number at a time."""
    if parts:
        shapes = np.concatenate([part.shapes for part in parts])
        ratios = np.concatenate([part.log_ratio for part in parts])
        for start in range(0, len(shapes), SHAPES_AT_ONCE):
            batch = shapes[start : start + SHAPES_AT_ONCE]
            yield batch, log_probability(batch, spectrum, copies, ratios[start : start + SHAPES_AT_ONCE])

"""Arrays of Young diagrams: (..., d) integer arrays whose last axis holds the rows, padded with zeros.

These are the vectorised counterparts of :mod:`entropest.diagrams` for the hot paths.
"""

from collections.abc import Iterable

import numpy as np
import numpy.typing as npt
from scipy.special import gammaln

from entropest._checks import as_integer
from entropest._types import BoolArray, FloatArray, IntArray
from entropest.diagrams import YoungDiagram
from entropest.errors import ArgumentTypeError, ArgumentValueError

__all__ = [
    "all_shapes",
    "as_shapes",
    "count_shapes",
    "dominates",
    "down_probabilities",
    "log_standard_tableaux",
    "rows_of",
    "shifted_rows",
]

LARGEST_ROW = 2**53


def as_shapes(rows: npt.ArrayLike | YoungDiagram, *, dim: int | None = None, name: str = "shapes") -> IntArray:
    """Return rows as a checked (..., dim) int64 array.

    Parameters
    ----------
    rows : array_like or YoungDiagram
        Non-negative, non-increasing whole numbers along the last axis, at most 2^53.
    dim : int, optional
        Length of the last axis; shorter rows are padded with zeros, further rows must be empty.

    Raises
    ------
    ArgumentValueError, ArgumentTypeError
        If a rule is broken; the message shows the offending diagram.

    Examples
    --------
    >>> as_shapes((3, 1), dim=3)
    array([3, 1, 0])
    """
    raw = np.asarray(rows.rows if isinstance(rows, YoungDiagram) else rows)
    if raw.ndim == 0:
        raise ArgumentTypeError(f"{name} must have rows along a last axis, got the scalar {raw[()]!r}")
    if raw.size == 0 and raw.dtype.kind == "f":
        raw = raw.astype(np.int64)
    if raw.dtype.kind == "f":
        bad = raw[~(np.isfinite(raw) & (raw == np.floor(raw)) & (np.abs(raw) <= LARGEST_ROW))]
        if bad.size:
            raise ArgumentValueError(f"{name} must hold whole numbers up to 2^53, got {bad[0]}")
    elif raw.dtype.kind not in "iu":
        raise ArgumentTypeError(f"{name} must be an array of integers, got dtype {raw.dtype}")
    if raw.size and raw.max() > LARGEST_ROW:
        raise ArgumentValueError(f"{name} must hold whole numbers up to 2^53, got {raw.max()}")
    array = raw.astype(np.int64)
    flat = array.reshape(-1, array.shape[-1]) if array.shape[-1] else array.reshape(0, 0)
    wrong = (flat < 0).any(axis=-1) | (np.diff(flat, axis=-1) > 0).any(axis=-1)
    if wrong.any():
        example = "+".join(map(str, flat[np.argmax(wrong)]))
        raise ArgumentValueError(f"{name} must have non-negative rows that do not increase, got {example}")
    if dim is None:
        return array
    width = array.shape[-1]
    if width > dim:
        if (array[..., dim:] > 0).any():
            height = int((flat > 0).sum(axis=-1).max())
            raise ArgumentValueError(f"dim must be at least the number of rows {height}, got {dim}")
        return array[..., :dim]
    return np.concatenate([array, np.zeros((*array.shape[:-1], dim - width), dtype=np.int64)], axis=-1)


def rows_of(diagrams: Iterable[YoungDiagram], dim: int) -> IntArray:
    """Return diagrams as one (K, dim) array.

    Examples
    --------
    >>> rows_of([YoungDiagram((3, 1)), YoungDiagram((2, 2))], 3)
    array([[3, 1, 0],
           [2, 2, 0]])
    """
    rows = [diagram.rows + (0,) * (dim - len(diagram.rows)) for diagram in diagrams]
    return np.array(rows, dtype=np.int64).reshape(len(rows), dim)


def shifted_rows(shapes: IntArray) -> IntArray:
    """Return l_i = row_i + d - i, strictly decreasing along the last axis."""
    d = shapes.shape[-1]
    return shapes + np.arange(d - 1, -1, -1)


def log_standard_tableaux(shapes: IntArray) -> FloatArray:
    """Return the logarithm of the number of standard tableaux of each shape, to a few ulps of log n!.

    Examples
    --------
    >>> float(np.exp(log_standard_tableaux(np.array([3, 1, 0]))).round(12))
    3.0
    """
    parts = shifted_rows(shapes)
    upper, lower = np.triu_indices(shapes.shape[-1], k=1)
    gaps = (parts[..., upper] - parts[..., lower]).astype(np.float64)
    size = shapes.sum(axis=-1)
    value = gammaln(size + 1.0) - gammaln(parts + 1.0).sum(axis=-1) + np.log(gaps).sum(axis=-1)
    return np.asarray(value, dtype=np.float64)


def down_probabilities(shapes: IntArray) -> FloatArray:
    """Return the law of the row that loses a box when one of the n copies is dropped at random.

    With l_i = row_i + d - i it is f^(shape - box in row i) / f^shape
    = (l_i / n) prod_{m != i} (l_i - l_m - 1) / (l_i - l_m), exactly zero where no box can be removed.

    Parameters
    ----------
    shapes : (..., d) int array
        Shapes with at least one box each.

    Returns
    -------
    (..., d) float array summing to 1 along the last axis.

    Examples
    --------
    >>> down_probabilities(np.array([2, 1, 0]))
    array([0.5, 0.5, 0. ])
    """
    d = shapes.shape[-1]
    parts = shifted_rows(shapes).astype(np.float64)
    gaps = parts[..., :, None] - parts[..., None, :]
    diagonal = np.eye(d, dtype=bool)
    ratios = np.where(diagonal, 1.0, (gaps - 1.0) / np.where(diagonal, 1.0, gaps))
    size = shapes.sum(axis=-1, keepdims=True).astype(np.float64)
    return np.asarray(parts / size * ratios.prod(axis=-1), dtype=np.float64)


def dominates(first: IntArray, second: IntArray) -> BoolArray:
    """Say, shape by shape, whether `first` dominates `second` (equal sizes and equal numbers of rows)."""
    return np.asarray((np.cumsum(first - second, axis=-1) >= 0).all(axis=-1))


def count_shapes(size: int, dim: int) -> int:
    """Return the exact number of Young diagrams with `size` boxes and at most `dim` rows.

    Examples
    --------
    >>> count_shapes(100, 4)
    8037
    """
    size = as_integer(size, "size", at_least=0)
    dim = as_integer(dim, "dim", at_least=0)
    counts = [1] + [0] * size
    for part in range(1, min(dim, size) + 1):
        for total in range(part, size + 1):
            counts[total] += counts[total - part]
    return counts[size]


def all_shapes(size: int, dim: int) -> IntArray:
    """Return all shapes of `size` boxes in at most `dim` rows, (K, dim), lexicographically decreasing.

    Examples
    --------
    >>> all_shapes(3, 2)
    array([[3, 0],
           [2, 1]])
    """
    size = as_integer(size, "size", at_least=0)
    dim = as_integer(dim, "dim", at_least=1)
    shapes = np.zeros((1, 0), dtype=np.int64)
    left = np.array([size], dtype=np.int64)
    longest = left.copy()
    for rows_left in range(dim, 0, -1):
        shortest = -(-left // rows_left)
        choices = np.minimum(longest, left) - shortest + 1
        parent = np.repeat(np.arange(len(left)), choices)
        offset = np.arange(len(parent)) - np.repeat(np.cumsum(choices) - choices, choices)
        row = np.minimum(longest, left)[parent] - offset
        shapes = np.concatenate([shapes[parent], row[:, None]], axis=1)
        left, longest = left[parent] - row, row
    return shapes

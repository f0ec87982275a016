"""The blocks of a record as arrays, and averages of statistics over them."""

from dataclasses import dataclass

import numpy as np

from entropest._types import FloatArray, IntArray
from entropest.estimation.continuation import Continued
from entropest.functionals import Functional
from entropest.records.counts import DiagramCounts

__all__ = ["Blocks", "as_blocks", "with_zeros"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Blocks:
    """Distinct shapes of a record and how often they were seen.

    Attributes
    ----------
    shapes : (K, R) int array
        The shapes; R is the largest number of rows seen.
    counts : (K,) int array
        Number of blocks of each shape.
    dim : int or None
        Dimension of one copy.
    """

    shapes: IntArray
    counts: IntArray
    dim: int | None

    @property
    def rows(self) -> int:
        """Largest number of rows seen."""
        return int(self.shapes.shape[1])

    @property
    def sizes(self) -> IntArray:
        """Number of copies of each shape, (K,)."""
        return np.asarray(self.shapes.sum(axis=1))

    @property
    def copies(self) -> int:
        """Total number of copies."""
        return int(self.sizes @ self.counts)

    @property
    def blocks(self) -> int:
        """Total number of blocks."""
        return int(self.counts.sum())

    @property
    def spectrum(self) -> FloatArray:
        """All diagrams added row by row, over the number of copies, (R,)."""
        return np.asarray((self.counts @ self.shapes) / self.copies)

    @property
    def unseen_levels(self) -> float:
        """Number of eigenvalues beyond the rows seen; infinite when the dimension is unknown."""
        return np.inf if self.dim is None else float(self.dim - self.rows)

    def average(self, values: FloatArray) -> FloatArray:
        """Return the average of per-shape values (K, c) over all copies, (c,)."""
        return np.asarray((self.counts * self.sizes) @ values / self.copies)

    def sum_of_squared_weights(self, values: FloatArray) -> float:
        """Return sum over blocks of (size/copies)^2 times a per-shape value (K,)."""
        return float(self.counts @ ((self.sizes / self.copies) ** 2 * values))

    def statistics(self, functional: Continued, rows: int | None) -> FloatArray:
        """Return continuation statistics of each shape, (K, c), with `rows` rows, or with its own non-empty rows."""
        if rows is not None:
            return functional.statistics(self.shapes, rows)
        heights = (self.shapes > 0).sum(axis=1)
        parts = [(heights == height, int(height)) for height in np.unique(heights)]
        results = [functional.statistics(self.shapes[chosen], height) for chosen, height in parts]
        values = np.empty((len(self.shapes), results[0].shape[1]))
        for (chosen, _), result in zip(parts, results, strict=True):
            values[chosen] = result
        return values


def as_blocks(counts: DiagramCounts) -> Blocks:
    """Return the blocks of a record as arrays."""
    return Blocks(shapes=counts.compact_shapes, counts=counts.counts, dim=counts.dim)


def with_zeros(functional: Functional, spectra: FloatArray) -> FloatArray:
    """Return spectra (..., d) with zeros added up to the length of the functional's reference, if it has one."""
    missing = len(getattr(functional, "reference", ())) - spectra.shape[-1]
    if missing <= 0:
        return spectra
    return np.concatenate([spectra, np.zeros((*spectra.shape[:-1], missing))], axis=-1)

"""Letters drawn independently from a spectrum, one small integer each."""

from typing import Any

import numpy as np
import numpy.typing as npt

from entropest._types import FloatArray

CELLS = 1 << 16
AT_ONCE = 1 << 16
CodeArray = npt.NDArray[np.unsignedinteger[Any]]


def code_dtype(letters: int) -> np.dtype[np.unsignedinteger[Any]]:
    """Return the smallest unsigned type that holds the letters and one code beyond them."""
    return np.min_scalar_type(letters)


class LetterLaw:
    """Independent letters 0, 1, ... with given probabilities, drawn from 16 random bits each where that is exact.

    The law is written as a mixture: of the 2^16 values of a 16-bit number, letter j owns floor(2^16 p_j); the
    R < d values left over stand for "draw from the remainder", whose law, proportional to the fractional parts
    of 2^16 p_j, is inverted with a 53-bit uniform number. The probability of every letter is p_j up to the
    rounding of float64.

    Parameters
    ----------
    probabilities : (d,) float array
        Non-negative, not all zero; divided by their sum.
    """

    __slots__ = ("_remainder", "_table", "size")

    def __init__(self, probabilities: FloatArray) -> None:
        self.size = len(probabilities)
        scaled = probabilities / probabilities.sum() * CELLS
        owned = np.floor(scaled).astype(np.int64)
        left_over = max(0, CELLS - int(owned.sum()))
        codes = np.repeat(np.arange(self.size + 1), [*owned, left_over])
        self._table: CodeArray = codes[:CELLS].astype(code_dtype(self.size))
        remainder = np.cumsum(scaled - owned)
        self._remainder = remainder / remainder[-1] if left_over else None

    def draw(self, count: int, generator: np.random.Generator) -> CodeArray:
        """Return `count` independent letters."""
        codes = np.empty(count, dtype=self._table.dtype)
        for start in range(0, count, AT_ONCE):
            part = codes[start : start + AT_ONCE]
            words = generator.integers(0, 2**64 - 1, size=-(-len(part) // 4), dtype=np.uint64, endpoint=True)
            self._table.take(words.view(np.uint16)[: len(part)], out=part, mode="clip")
        if self._remainder is not None:
            where = np.flatnonzero(codes == self.size)
            codes[where] = np.searchsorted(self._remainder, generator.random(len(where)), side="right")
        return codes

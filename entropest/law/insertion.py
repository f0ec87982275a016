"""Row insertion of random words: exact draws of diagrams, shapes of given words, and growing diagrams."""

import math
from collections.abc import Callable, Sequence
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from entropest._checks import as_integer
from entropest._types import FloatArray, IntArray, RngLike
from entropest.errors import ArgumentTypeError, ArgumentValueError, MemoryBudgetError
from entropest.law.letters import CodeArray, LetterLaw, code_dtype
from entropest.law.tableaux import Tableaux
from entropest.spectra import as_spectrum

__all__ = ["draw_by_insertion", "grow", "shapes_of_words"]

MOST_LANES = 1 << 14
LANES_TIMES_LETTERS = 1 << 16
LANES_TIMES_CELLS = 1 << 22
BYTES_PER_CELL = 40  # two tableaux with two copies each, of eight bytes, and working space
MEMORY_BUDGET = 300 * 10**6
LONGEST_SMALL_ROW = 255
SHORTEST_PIECE = 3  # times d: below it merging costs more than it saves


def draw_by_insertion(probabilities: FloatArray, copies: int, size: int, generator: np.random.Generator) -> IntArray:
    """Draw diagrams exactly, each as the shape of a word of independent letters.

    The time grows like copies * size * d^2, from some nanoseconds a letter at d = 4 to about a hundred at d = 32 (more
    for a single word below 10^5 letters); the working memory stays under 300 MB for every `copies` and `size`, the
    result apart.

    Parameters
    ----------
    probabilities : (d,) float array
        The spectrum; zeros are allowed.
    copies : int
        Letters n of each word.
    size : int
        Number of diagrams.
    generator : numpy.random.Generator
        Source of randomness.

    Returns
    -------
    (size, d) int array of rows.

    Raises
    ------
    MemoryBudgetError
        If one tableau alone needs more than 300 MB (some 2,700 letters of positive probability, and as many copies).

    References
    ----------
    Schensted, Canad. J. Math. 13 (1961) 179, doi:10.4153/CJM-1961-015-3; Knuth, Pacific J. Math. 34 (1970) 709,
    doi:10.2140/pjm.1970.34.709; Lascoux, Schuetzenberger, Le monoide plaxique (1981), for the merging of words.

    Examples
    --------
    >>> shapes = draw_by_insertion(np.array([0.75, 0.25]), 100, 3, np.random.default_rng(1))
    >>> shapes.sum(axis=-1)
    array([100, 100, 100])
    """
    law, shapes = _letter_law(probabilities, (size,))
    max_rows = min(law.size, copies)
    most_lanes = _most_lanes(law.size, max_rows)
    for start in range(0, size if max_rows else 0, most_lanes):
        samples = min(most_lanes, size - start)
        tableaux = _random_tableaux(law, copies, samples, max_rows, generator)
        shapes[start : start + samples, :max_rows] = tableaux.shapes()
    return shapes


def shapes_of_words(words: npt.ArrayLike, dim: int) -> IntArray:
    """Return the shape that the Robinson-Schensted-Knuth correspondence gives to each word.

    Its first r rows together are the most letters that r disjoint weakly increasing subsequences can cover
    (Greene).

    Parameters
    ----------
    words : (..., n) array_like of int
        Letters 0 to dim - 1.
    dim : int
        Size d of the alphabet.

    Returns
    -------
    (..., dim) int array.

    Raises
    ------
    ArgumentValueError
        If a letter is negative or not below `dim`.
    ArgumentTypeError
        If the letters are not integers.

    References
    ----------
    Knuth, Pacific J. Math. 34 (1970) 709, doi:10.2140/pjm.1970.34.709;
    Greene, Adv. Math. 14 (1974) 254, doi:10.1016/0001-8708(74)90031-0.

    Examples
    --------
    >>> shapes_of_words([[0, 1, 0, 1], [1, 1, 0, 0]], dim=2)
    array([[3, 1],
           [2, 2]])
    """
    dim = as_integer(dim, "dim", at_least=1)
    letters = _checked_words(words, dim)
    copies = letters.shape[-1]
    flat = letters.reshape(math.prod(letters.shape[:-1]), copies)
    shapes = np.zeros((len(flat), dim), dtype=np.int64)
    max_rows = min(dim, copies)
    most_lanes = _most_lanes(dim, max_rows)
    for start in range(0, len(flat) if max_rows else 0, most_lanes):
        part = flat[start : start + most_lanes]
        pieces = _pieces(dim, copies, len(part), most_lanes)
        steps = -(-copies // pieces)
        codes = np.full((len(part), pieces * steps), dim, dtype=code_dtype(dim))
        codes[:, :copies] = part
        columns = codes.reshape(len(part), pieces, steps).transpose(2, 1, 0).reshape(steps, -1)
        tableaux = _tableaux_of(columns.__getitem__, steps, pieces, len(part), dim, max_rows)
        shapes[start : start + len(part), :max_rows] = tableaux.shapes()
    return shapes.reshape(*letters.shape[:-1], dim)


def grow(spectrum: npt.ArrayLike, sizes: Sequence[int], *, paths: int | None = None, rng: RngLike = None) -> IntArray:
    """Draw growing diagrams: the outcomes of one run, had it been stopped after each number of copies in `sizes`.

    Every diagram contains the one before it; their joint law is exact (that of the shapes of the prefixes of
    one word of independent letters).

    Parameters
    ----------
    spectrum : array_like
        Eigenvalues, as accepted by :func:`entropest.spectra.as_spectrum`.
    sizes : sequence of int
        Numbers of copies, non-negative and non-decreasing.
    paths : int, optional
        Number of independent runs; None for one run without that axis.
    rng : int, Generator, SeedSequence or None
        Source of randomness.

    Returns
    -------
    (len(sizes), d) int array, or (paths, len(sizes), d).

    Raises
    ------
    ArgumentValueError
        If `sizes` decreases or `paths` is negative.

    References
    ----------
    O'Connell, J. Phys. A 36 (2003) 3049, doi:10.1088/0305-4470/36/12/312 (the growing shape is a Markov chain).

    Examples
    --------
    >>> path = grow([0.5, 0.5], [10, 20, 40], rng=3)
    >>> path.sum(axis=-1)
    array([10, 20, 40])
    """
    checked = [as_integer(size, "each of sizes", at_least=0) for size in sizes]
    if any(later < earlier for earlier, later in pairwise(checked)):
        raise ArgumentValueError(f"sizes must not decrease, got {checked}")
    count = 1 if paths is None else as_integer(paths, "paths", at_least=0)
    generator = np.random.default_rng(rng)
    law, shapes = _letter_law(as_spectrum(spectrum), (count, len(checked)))
    max_rows = min(law.size, max(checked, default=0))
    most_lanes = _most_lanes(law.size, max_rows)
    for start in range(0, count if max_rows else 0, most_lanes):
        samples = min(most_lanes, count - start)
        running = Tableaux(law.size, samples, max_rows, np.min_scalar_type(checked[-1]))
        reached = 0
        for position, size in enumerate(checked):
            added = size - reached
            if added <= law.size:
                running.insert_letters(law.draw(added * samples, generator).reshape(added, samples))
            else:
                running.multiply(_random_tableaux(law, added, samples, max_rows, generator))
            reached = size
            shapes[start : start + samples, position, :max_rows] = running.shapes()
    return shapes[0] if paths is None else shapes


def _letter_law(probabilities: FloatArray, shape: tuple[int, ...]) -> tuple[LetterLaw, IntArray]:
    """Return the law of the letters of positive probability, and room for shapes with all rows."""
    law = LetterLaw(probabilities[probabilities > 0.0])
    return law, np.zeros((*shape, len(probabilities)), dtype=np.int64)


def _random_tableaux(
    law: LetterLaw, copies: int, samples: int, max_rows: int, generator: np.random.Generator
) -> Tableaux:
    """Return the tableaux of `samples` random words."""
    pieces = _pieces(law.size, copies, samples, _most_lanes(law.size, max_rows))
    steps = -(-copies // pieces)
    lanes = pieces * samples
    complete = (copies - (steps - 1) * pieces) * samples  # lanes that have a letter in the last step

    def source(piece: slice) -> CodeArray:
        codes = law.draw((piece.stop - piece.start) * lanes, generator).reshape(-1, lanes)
        if piece.stop == steps:
            codes[-1, complete:] = law.size
        return codes

    return _tableaux_of(source, steps, pieces, samples, law.size, max_rows)


def _tableaux_of(
    source: Callable[[slice], CodeArray], steps: int, pieces: int, samples: int, letters: int, max_rows: int
) -> Tableaux:
    """Return the tableaux of words whose letters come as (steps, pieces * samples) codes."""
    short = Tableaux(letters, pieces * samples, max_rows, np.uint8)
    whole = short
    if steps > LONGEST_SMALL_ROW:
        whole = Tableaux(letters, pieces * samples, max_rows, np.min_scalar_type(steps))
    for start in range(0, steps, LONGEST_SMALL_ROW):
        short.clear()
        short.insert_letters(source(slice(start, min(start + LONGEST_SMALL_ROW, steps))))
        if whole is not short:
            whole.multiply(short)
    while pieces > 1:
        steps *= 2
        whole = whole.halve(samples, np.min_scalar_type(steps))
        pieces //= 2
    return whole


def _pieces(letters: int, copies: int, samples: int, most_lanes: int) -> int:
    """Return into how many pieces, a power of two, each word is cut."""
    most = min(most_lanes // samples, copies // (SHORTEST_PIECE * letters))
    return 1 << max(0, most.bit_length() - 1)


def _most_lanes(letters: int, max_rows: int) -> int:
    """Return the number of lanes that fits the caches and the memory."""
    cells = max(1, letters * max_rows)
    if cells * BYTES_PER_CELL > MEMORY_BUDGET:
        raise MemoryBudgetError(
            f"row insertion with {letters} letters needs {cells * BYTES_PER_CELL / 1e6:.0f} MB, "
            f"more than the budget of {MEMORY_BUDGET / 1e6:.0f} MB"
        )
    return max(1, min(MOST_LANES, LANES_TIMES_LETTERS // letters, LANES_TIMES_CELLS // cells))


def _checked_words(words: npt.ArrayLike, dim: int) -> npt.NDArray[np.integer]:
    letters = np.asarray(words)
    if letters.ndim == 0:
        raise ArgumentTypeError(f"words must have letters along a last axis, got the scalar {letters.item()!r}")
    if letters.size == 0:
        return letters.astype(np.int64)
    if letters.dtype.kind not in "iu":
        raise ArgumentTypeError(f"words must hold integers, got dtype {letters.dtype}")
    for extreme in (letters.min(), letters.max()):
        if not 0 <= extreme < dim:
            raise ArgumentValueError(f"letters must lie between 0 and dim - 1 = {dim - 1}, got {extreme}")
    return letters

"""Row insertion: against the textbook algorithm, against the exact law, and against itself when words are cut."""

import bisect
import tracemalloc
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from entropest._types import IntArray
from entropest.errors import ArgumentTypeError, ArgumentValueError, MemoryBudgetError
from entropest.law import insertion
from entropest.law.insertion import draw_by_insertion, grow, shapes_of_words
from entropest.law.letters import CELLS, LetterLaw
from entropest.law.tableaux import Tableaux
from entropest.shapes import down_probabilities
from entropest.spectra import geometric, maximally_mixed
from tests.law.goodness import Rows, assert_follows, rows_law, tallies

# Tests of goodness of fit fail by chance once in 10^5 seeds each; the seeds are fixed.

SPECTRA = {
    "uniform qubit": [Fraction(1, 2)] * 2,
    "uniform qutrit": [Fraction(1, 3)] * 3,
    "distinct": [Fraction(6, 10), Fraction(3, 10), Fraction(1, 10)],
    "tie": [Fraction(2, 5), Fraction(2, 5), Fraction(1, 5)],
    "zeros": [Fraction(3, 4), Fraction(1, 4), Fraction(0), Fraction(0)],
    "pure": [Fraction(1), Fraction(0)],
    "one letter": [Fraction(1)],
    "four": [Fraction(8, 15), Fraction(4, 15), Fraction(2, 15), Fraction(1, 15)],
    "tiny": [Fraction(999, 1000), Fraction(1, 1000)],
}


def textbook_shape(word: list[int], dim: int) -> list[int]:
    """Robinson-Schensted-Knuth row insertion, one letter at a time."""
    rows: list[list[int]] = []
    for letter in word:
        bumped = letter
        for row in rows:
            place = bisect.bisect_right(row, bumped)
            if place == len(row):
                row.append(bumped)
                break
            row[place], bumped = bumped, row[place]
        else:
            rows.append([bumped])
    return [len(row) for row in rows] + [0] * (dim - len(rows))


def queue_shape(word: IntArray, dim: int) -> list[int]:
    """The shape by running maxima of the letter counts along the word (O'Connell 2003, arXiv:math/0207143)."""
    rows: list[IntArray] = []
    for letter in range(dim):
        carried = np.cumsum(word == letter)
        for i, row in enumerate(rows):
            highest = np.maximum(np.maximum.accumulate(row - carried), 0)
            rows[i], carried = carried + highest, row - highest
        rows.append(carried)
    return [int(row[-1]) for row in rows]


@pytest.mark.parametrize("dim", [1, 2, 3, 4, 7, 20])
@pytest.mark.parametrize("length", [1, 2, 5, 60, 700])
@pytest.mark.parametrize("count", [1, 3, 20])
def test_shapes_are_those_of_the_textbook_algorithm(dim: int, length: int, count: int) -> None:
    words = np.random.default_rng(dim * length + count).integers(0, dim, (count, length))
    expected = [textbook_shape(word, dim) for word in words.tolist()]
    assert shapes_of_words(words, dim).tolist() == expected


@given(st.integers(1, 6).flatmap(lambda d: st.tuples(st.just(d), st.lists(st.integers(0, d - 1), max_size=40))))
def test_shape_of_any_word_is_that_of_the_textbook_algorithm(case: tuple[int, list[int]]) -> None:
    dim, word = case
    assert shapes_of_words(np.array(word, dtype=int), dim).tolist() == textbook_shape(word, dim)


@pytest.mark.parametrize(("dim", "length"), [(150, 600), (300, 80), (90, 1)])
def test_large_alphabets_and_words_of_several_rounds(dim: int, length: int) -> None:
    words = np.random.default_rng(dim).integers(0, dim, (2, length))
    expected = [textbook_shape(word, dim) for word in words.tolist()]
    assert shapes_of_words(words, dim).tolist() == expected


@pytest.mark.parametrize("dim", [2, 5])
def test_one_long_word_has_the_shape_of_running_maxima(dim: int) -> None:
    word = np.random.default_rng(dim).integers(0, dim, 200_001)
    assert shapes_of_words(word, dim).tolist() == queue_shape(word, dim)


@given(st.lists(st.integers(0, 4), max_size=60))
def test_reversing_word_and_alphabet_keeps_the_shape(word: list[int]) -> None:
    letters = np.array(word, dtype=int)
    assert (shapes_of_words(letters, 5) == shapes_of_words(4 - letters[::-1], 5)).all()


@settings(max_examples=60, deadline=None)
@given(st.integers(1, 5), st.integers(0, 30), st.integers(0, 30), st.integers(0, 2**32))
def test_product_of_tableaux_is_the_tableau_of_the_joined_word(dim: int, first: int, second: int, seed: int) -> None:
    words = np.random.default_rng(seed).integers(0, dim, (first + second, 7)).astype(np.uint8)
    left, right, whole = (Tableaux(dim, 7, dim, np.uint8) for _ in range(3))
    left.insert_letters(words[:first])
    right.insert_letters(words[first:])
    whole.insert_letters(words)
    left.multiply(right)
    assert (left.levels == whole.levels).all()


def test_cleared_tableaux_are_empty() -> None:
    words = np.random.default_rng(1).integers(0, 3, (20, 5)).astype(np.uint8)
    used, fresh = Tableaux(3, 5, 3, np.uint8), Tableaux(3, 5, 3, np.uint8)
    used.insert_letters(words[::-1])
    used.clear()
    used.insert_letters(words)
    fresh.insert_letters(words)
    assert (used.levels == fresh.levels).all()


@pytest.mark.parametrize("name", SPECTRA)
@pytest.mark.parametrize("copies", [1, 2, 5, 9])
def test_draws_follow_the_exact_law(name: str, copies: int) -> None:
    spectrum = SPECTRA[name]
    draws = draw_by_insertion(np.array(spectrum, dtype=float), copies, 60_000, np.random.default_rng(copies))
    assert_follows(draws, rows_law(spectrum, copies))


@pytest.mark.parametrize(("name", "copies"), [("uniform qubit", 24), ("distinct", 18), ("tie", 19)])
def test_draws_from_words_cut_in_pieces_follow_the_exact_law(name: str, copies: int) -> None:
    spectrum = SPECTRA[name]
    size, dim = 4000, len(spectrum)
    assert insertion._pieces(dim, copies, size, insertion._most_lanes(dim, dim)) >= 2
    generator = np.random.default_rng(copies)
    parts = [draw_by_insertion(np.array(spectrum, dtype=float), copies, size, generator) for _ in range(8)]
    assert_follows(np.concatenate(parts), rows_law(spectrum, copies))


def test_published_laws_of_uniform_spectra() -> None:
    # Schur-Weyl duality, recomputed: 5/16, 9/16, 1/8 and 10/27, 16/27, 1/27.
    laws: list[tuple[int, int, dict[Rows, float]]] = [
        (2, 4, {(4, 0): 5 / 16, (3, 1): 9 / 16, (2, 2): 1 / 8}),
        (3, 3, {(3, 0, 0): 10 / 27, (2, 1, 0): 16 / 27, (1, 1, 1): 1 / 27}),
    ]
    for dim, copies, law in laws:
        assert_follows(draw_by_insertion(maximally_mixed(dim), copies, 50_000, np.random.default_rng(7)), law)


def test_long_words_have_the_right_mean_and_covariance() -> None:
    # Limits n p_i + shift and n (diag p - p p^T); five standard errors, false alarm below 1e-5 over the entries.
    p, copies, size = np.array([0.6, 0.3, 0.1]), 20_000, 2_000
    draws = draw_by_insertion(p, copies, size, np.random.default_rng(3))
    covariance = copies * (np.diag(p) - np.outer(p, p))
    shifts = np.array([1.2, -0.5, -0.7])
    assert (np.abs(draws.mean(axis=0) - copies * p - shifts) < 5 * np.sqrt(np.diag(covariance) / size) + 0.02).all()
    variances = np.diag(covariance)
    spread = np.sqrt((covariance**2 + np.outer(variances, variances)) / size)
    assert (np.abs(np.cov(draws.T) - covariance) < 5 * spread + 0.01 * np.abs(covariance)).all()


def test_draws_are_diagrams_of_the_asked_size() -> None:
    generator = np.random.default_rng(0)
    for copies, size in [(0, 3), (1, 4), (7, 0), (300, 5), (70_001, 1), (11, 20_000)]:
        draws = draw_by_insertion(np.array([0.5, 0.25, 0.25, 0.0]), copies, size, generator)
        assert draws.shape == (size, 4)
        assert draws.dtype == np.int64
        assert (draws.sum(axis=-1) == copies).all()
        assert (np.diff(draws, axis=-1) <= 0).all()
        assert (draws[:, 3] == 0).all()


def test_one_seed_gives_one_result() -> None:
    first, second = (draw_by_insertion(geometric(3, 0.5), 50, 10, np.random.default_rng(5)) for _ in range(2))
    assert (first == second).all()
    assert (grow(geometric(3, 0.5), [5, 50], rng=5) == grow(geometric(3, 0.5), [5, 50], rng=5)).all()


@pytest.mark.parametrize(("dim", "copies", "size"), [(32, 10**6, 1), (64, 4, 200_000), (3, 10**6, 2), (64, 40_000, 4)])
def test_memory_stays_within_its_budget(dim: int, copies: int, size: int) -> None:
    generator = np.random.default_rng(1)
    tracemalloc.start()
    draws = draw_by_insertion(maximally_mixed(dim), copies, size, generator)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert peak - draws.nbytes < insertion.MEMORY_BUDGET


def test_too_many_letters_are_refused() -> None:
    with pytest.raises(MemoryBudgetError, match="row insertion with 3000 letters needs 360 MB"):
        draw_by_insertion(maximally_mixed(3000), 10_000, 1, np.random.default_rng(1))


def test_many_letters_with_few_copies_are_drawn() -> None:
    draws = draw_by_insertion(maximally_mixed(3000), 4, 5, np.random.default_rng(1))
    assert (draws.sum(axis=-1) == 4).all()


@pytest.mark.parametrize(
    ("words", "error", "message"),
    [
        ([0, 2], ArgumentValueError, "letters must lie between 0 and dim - 1 = 1, got 2"),
        ([-1, 0], ArgumentValueError, "letters must lie between 0 and dim - 1 = 1, got -1"),
        ([0.5, 1.0], ArgumentTypeError, "words must hold integers, got dtype float64"),
        (1, ArgumentTypeError, "words must have letters along a last axis, got the scalar 1"),
    ],
)
def test_bad_words_are_refused(words: object, error: type[Exception], message: str) -> None:
    with pytest.raises(error, match=message):
        shapes_of_words(words, 2)  # type: ignore[arg-type]  # wrong on purpose


def test_batches_of_words_keep_their_axes() -> None:
    words = np.random.default_rng(1).integers(0, 3, (2, 4, 6))
    assert shapes_of_words(words, 3).shape == (2, 4, 3)
    assert shapes_of_words(np.zeros((5, 0)), 3).tolist() == [[0, 0, 0]] * 5


@pytest.mark.parametrize("probabilities", [[0.7, 0.2, 0.1], [0.5, 0.25, 0.25], [1 - 3e-5, 2e-5, 1e-5], [1.0]])
def test_letters_have_their_probabilities_exactly(probabilities: list[float]) -> None:
    law = LetterLaw(np.array(probabilities))
    owned = np.bincount(law._table, minlength=len(probabilities) + 1)
    rest = 0.0 if law._remainder is None else np.diff(law._remainder, prepend=0.0)
    assert np.abs((owned[:-1] + owned[-1] * rest) / CELLS - probabilities).max() < 1e-15


def test_letters_are_drawn_with_their_probabilities() -> None:
    probabilities = np.array([0.6, 0.3999, 7e-5, 3e-5])
    draws = LetterLaw(probabilities).draw(2_000_003, np.random.default_rng(11))
    assert len(draws) == 2_000_003
    assert_follows(draws[:, None].astype(np.int64), {(j,): p for j, p in enumerate(probabilities.tolist())})


def test_neighbouring_letters_are_independent() -> None:
    p = np.array([0.55, 0.45])
    pairs = LetterLaw(p).draw(400_000, np.random.default_rng(2)).reshape(-1, 2)
    law: dict[Rows, float] = {(i, j): float(p[i] * p[j]) for i in range(2) for j in range(2)}
    assert_follows(pairs.astype(np.int64), law)


@pytest.mark.parametrize("sizes", [(2, 5), (1, 3)])
@pytest.mark.parametrize("name", ["uniform qubit", "tie"])
def test_growth_has_the_exact_joint_law(name: str, sizes: tuple[int, int]) -> None:
    # Given the later diagram, the earlier one follows from down-steps, whatever the spectrum.
    spectrum, dim = SPECTRA[name], len(SPECTRA[name])
    joint: dict[Rows, float] = {}
    for later, probability in rows_law(spectrum, sizes[1]).items():
        for earlier, weight in thinned_law(later, sizes[0]).items():
            joint[earlier + later] = joint.get(earlier + later, 0.0) + probability * weight
    paths = grow(np.array(spectrum, dtype=float), sizes, paths=50_000, rng=4)
    assert paths.shape == (50_000, 2, dim)
    assert_follows(paths.reshape(50_000, -1), joint)


def thinned_law(shape: Rows, copies: int) -> dict[Rows, float]:
    """Return the law of the shape after repeated down-steps."""
    law = {shape: 1.0}
    for _ in range(sum(shape) - copies):
        lower: dict[Rows, float] = {}
        for rows, probability in law.items():
            for i, weight in enumerate(down_probabilities(np.array(rows)).tolist()):
                if weight > 0.0:
                    below = (*rows[:i], rows[i] - 1, *rows[i + 1 :])
                    lower[below] = lower.get(below, 0.0) + probability * weight
        law = lower
    return law


def test_grown_diagrams_are_nested() -> None:
    sizes = [0, 1, 1, 4, 50, 51, 900]
    paths = grow([0.5, 0.3, 0.1, 0.1], sizes, paths=30, rng=2)
    assert (paths.sum(axis=-1) == sizes).all()
    assert (np.diff(paths, axis=1) >= 0).all()
    assert (np.diff(paths, axis=-1) <= 0).all()
    assert grow([0.5, 0.5], [3, 4], rng=1).shape == (2, 2)
    assert grow([0.5, 0.5], [], rng=1).shape == (0, 2)


@pytest.mark.parametrize(
    ("sizes", "paths", "message"),
    [
        ([3, 2], None, r"sizes must not decrease, got \[3, 2\]"),
        ([-1], None, "each of sizes must be at least 0, got -1"),
        ([1], -1, "paths must be at least 0, got -1"),
    ],
)
def test_bad_growth_is_refused(sizes: list[int], paths: int | None, message: str) -> None:
    with pytest.raises(ArgumentValueError, match=message):
        grow([0.5, 0.5], sizes, paths=paths)


def test_tallies_count_rows() -> None:
    assert tallies(np.array([[2, 1], [3, 0], [2, 1]])) == {(2, 1): 2, (3, 0): 1}

"""Down-steps and thinning: against exact enumeration, and against identities where that is out of reach."""

from collections.abc import Sequence
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from entropest import _mp
from entropest._types import FloatArray, IntArray
from entropest.diagrams import YoungDiagram
from entropest.errors import ArgumentValueError
from entropest.law import thinning
from entropest.law.insertion import draw_by_insertion
from entropest.law.thinning import down_step, thin
from entropest.spectra import geometric, maximally_mixed, spiked
from tests.law.goodness import Rows, assert_follows, rows_law

# Tests of goodness of fit fail by chance once in 10^5 seeds each; the seeds are fixed.


def thinned_law(rows: Sequence[int], copies: int) -> dict[Rows, float]:
    """f^mu f^(shape/mu) / f^shape, the paths from shape down to mu counted one box at a time."""
    shape = YoungDiagram(rows)
    paths = {shape: 1}
    for _ in range(shape.size - copies):
        lower: dict[YoungDiagram, int] = {}
        for diagram, count in paths.items():
            for below in diagram.down_neighbours():
                lower[below] = lower.get(below, 0) + count
        paths = lower
    law = {mu: Fraction(mu.standard_tableaux * count, shape.standard_tableaux) for mu, count in paths.items()}
    assert sum(law.values()) == 1
    return {mu.rows + (0,) * (len(rows) - len(mu.rows)): float(p) for mu, p in law.items()}


@pytest.mark.parametrize("rows", [(1,), (2, 1), (3, 3, 1), (4, 2, 2, 0), (6, 0), (1, 1, 1)])
def test_down_steps_follow_the_exact_law(rows: Rows) -> None:
    draws = down_step(np.tile(rows, (30_000, 1)), rng=1)
    assert_follows(draws, thinned_law(rows, sum(rows) - 1))


@pytest.mark.parametrize(
    ("rows", "copies"), [((4, 2, 1), 3), ((3, 3, 3), 4), ((5, 2, 1, 1), 5), ((9, 4), 3), ((7, 0), 2), ((3, 2), 0)]
)
def test_thinning_follows_the_exact_law(rows: Rows, copies: int) -> None:
    draws = thin(np.tile(rows, (30_000, 1)), copies, rng=2)
    assert_follows(draws, thinned_law(rows, copies))


@pytest.mark.parametrize(
    ("rows", "copies"), [((60, 30, 10), 88), ((60, 30, 10), 40), ((90, 9, 1), 70), ((80, 1, 1), 40), ((100, 2), 20)]
)
def test_thinning_in_blocks_follows_the_exact_law(rows: Rows, copies: int) -> None:
    assert thinning._block_sizes(np.array([rows]), np.array([sum(rows) - copies]))[0] >= thinning.SMALLEST_BLOCK
    draws = thin(np.tile(rows, (20_000, 1)), copies, rng=3)
    assert_follows(draws, thinned_law(rows, copies))


@pytest.mark.parametrize(
    ("rows", "block"), [((5, 3, 1), 4), ((4, 4, 1), 3), ((7, 2, 2, 1, 0), 5), ((9, 1), 8), ((3, 3), 2), ((6, 4, 0), 6)]
)
def test_a_block_is_exact_whatever_its_size(rows: Rows, block: int) -> None:
    generator = np.random.default_rng(block)
    waiting, done = np.tile(rows, (10_000, 1)), []
    while len(waiting):
        tried = thinning._try_block(waiting, np.full(len(waiting), block), generator)
        accepted = (tried != waiting).any(axis=-1)
        done.append(tried[accepted])
        waiting = waiting[~accepted]
    assert_follows(np.concatenate(done), thinned_law(rows, sum(rows) - block))


@pytest.mark.parametrize(
    "spectrum",
    [[Fraction(1, 2)] * 2, [Fraction(1, 2), Fraction(1, 4), Fraction(1, 4)], [Fraction(9, 10), Fraction(1, 10)]],
)
def test_thinned_outcomes_follow_the_law_of_fewer_copies(spectrum: list[Fraction]) -> None:
    many = draw_by_insertion(np.array(spectrum, dtype=float), 40, 30_000, np.random.default_rng(1))
    assert_follows(thin(many, 8, rng=2), rows_law(spectrum, 8))


def character(rows: IntArray, length: int) -> FloatArray:
    """Normalised character of one cycle (Frobenius), an unbiased estimate of Tr rho^length for any n."""
    parts = (rows + np.arange(rows.shape[-1] - 1, -1, -1)).astype(float)
    total = np.zeros(len(rows))
    for i in range(rows.shape[-1]):
        term = np.prod([parts[:, i] - a for a in range(length)], axis=0)
        for m in range(rows.shape[-1]):
            if m != i:
                term = term * (parts[:, i] - parts[:, m] - length) / (parts[:, i] - parts[:, m])
        total += term
    return np.asarray(total / np.prod([rows.sum(axis=-1) - float(a) for a in range(length)], axis=0))


@pytest.mark.parametrize(
    ("spectrum", "copies", "kept"),
    [
        (maximally_mixed(3), 1000, 300),
        (geometric(4, 0.5), 10**5, 2000),
        (spiked(3, 0.9), 10**4, 9900),
        (np.array([0.99999, 1e-5]), 10**6, 10**5),
    ],
)
def test_thinning_keeps_the_mean_of_every_character(spectrum: FloatArray, copies: int, kept: int) -> None:
    # The mean of a normalised character over the thinned shapes is its value at the shape: five standard errors.
    shape = draw_by_insertion(spectrum, copies, 1, np.random.default_rng(8))
    thinned = thin(np.repeat(shape, 4000, axis=0), kept, rng=9)
    for length in (2, 3):
        values = character(thinned, length)
        assert abs(values.mean() - character(shape, length)[0]) < 5 * values.std() / 4000**0.5 + 1e-12


def test_very_large_shapes_are_thinned() -> None:
    # A row of independent thinnings has relative spread 1/sqrt(row); ten of them allow for the repulsion of rows.
    shape = np.array([4 * 10**15, 3 * 10**15, 10**15])
    thinned = thin(shape, 10**13, rng=1)
    assert thinned.sum() == 10**13
    expected = shape / shape.sum() * 10**13
    assert (np.abs(thinned - expected) < 10 * np.sqrt(expected)).all()


@settings(max_examples=50, deadline=None)
@given(st.lists(st.integers(0, 400), min_size=1, max_size=6), st.integers(0, 100), st.integers(0, 2**32))
def test_thinned_shapes_are_contained_in_the_shapes(rows: list[int], percent: int, seed: int) -> None:
    shape = np.sort(np.array(rows))[::-1]
    kept = int(shape.sum()) * percent // 100
    thinned = thin(shape, kept, rng=seed)
    assert thinned.sum() == kept
    assert (thinned <= shape).all()
    assert (thinned >= 0).all()
    assert (np.diff(thinned) <= 0).all()


def test_shapes_of_different_sizes_and_axes() -> None:
    shapes = np.array([[[3, 1], [50, 20]], [[2, 2], [1000, 10]]])
    assert (thin(shapes, 4, rng=1).sum(axis=-1) == 4).all()
    assert down_step(shapes, rng=1).shape == shapes.shape
    assert thin(np.zeros((0, 3), dtype=int), 4).shape == (0, 3)
    assert down_step(np.zeros((0, 3), dtype=int)).shape == (0, 3)
    assert thin(np.zeros((2, 0), dtype=int), 0).shape == (2, 0)
    assert (thin([[3, 1]], 4, rng=1) == [[3, 1]]).all()


def test_arguments_are_not_changed_and_seeds_repeat() -> None:
    shapes = np.array([[30, 10], [25, 15]])
    kept = shapes.copy()
    assert (thin(shapes, 7, rng=3) == thin(shapes, 7, rng=3)).all()
    assert (down_step(shapes, rng=3) == down_step(shapes, rng=3)).all()
    assert (shapes == kept).all()


def test_bad_requests_are_refused() -> None:
    with pytest.raises(ArgumentValueError, match="shapes must have at least 5 boxes to be thinned to, got 4"):
        thin([[3, 1], [9, 0]], 5)
    with pytest.raises(ArgumentValueError, match="copies must be at least 0, got -1"):
        thin([[3, 1]], -1)
    with pytest.raises(ArgumentValueError, match="shapes must have at least one box each to lose one"):
        down_step([[3, 1], [0, 0]])
    with pytest.raises(ArgumentValueError, match="rows that do not increase, got 1\\+2"):
        thin([[1, 2]], 1)


@pytest.mark.parametrize(
    ("x", "drop"), [(3.0, 1.5), (40.5, -7.25), (9_000.5, 80.0), (2e4, -300.5), (3e8, 2e4), (1e12, 1e6)]
)
def test_rest_of_log_gamma_is_accurate(x: float, drop: float) -> None:
    ctx = _mp.context(60)
    exact = ctx.loggamma(ctx.mpf(x) - drop) - ctx.loggamma(x) + drop * ctx.digamma(x)
    assert thinning._log_gamma_rest(np.array([x]), np.array([drop]))[0] == pytest.approx(float(exact), abs=1e-9)

"""Grids of nodes: sums over them, interpolation between them, and the windows they cover."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from entropest.law.poisson_grid import grid_of_windows


@pytest.mark.parametrize("mean", [1100.0, 1e5, 1e9])
def test_sum_over_nodes_is_the_sum_over_all_integers(mean: float) -> None:
    # A Gaussian with a mean between the integers sums to 1 over them, up to exp(-2 pi^2 mean).
    grid = grid_of_windows(np.array([mean]))
    y = (grid.nodes - mean - 0.37) / math.sqrt(mean)
    density = np.exp(-0.5 * y**2) / math.sqrt(2 * math.pi * mean)
    assert (grid.steps * density).sum() == pytest.approx(1.0, abs=1e-13)
    assert (grid.steps * density * y**2).sum() == pytest.approx(1.0, abs=1e-13)


def test_interpolation_recovers_the_steepest_basis_function() -> None:
    # Hermite functions of degree 15 are the steepest ones that 16 tied eigenvalues need.
    mean = 1e8
    grid = grid_of_windows(np.array([mean]))

    def wave(x: np.ndarray) -> np.ndarray:
        y = (x - mean) / math.sqrt(mean)
        series = np.polynomial.hermite_e.HermiteE.basis(15)(y) / math.sqrt(math.factorial(15))
        return np.asarray(series * np.exp(-(y**2) / 4) / (2 * math.pi) ** 0.25)

    cells = np.arange(len(grid.nodes) - 1)
    for fraction in (0.0, 0.01, 0.3, 0.5, 0.97):
        offsets = np.floor(fraction * grid.steps[cells])
        got = grid.interpolate(wave(grid.nodes)[None, :, None], np.zeros_like(cells), cells, offsets)
        np.testing.assert_allclose(got[:, 0], wave(grid.nodes[cells] + offsets), atol=1e-13)


def test_interpolation_at_nodes_returns_the_table() -> None:
    grid = grid_of_windows(np.array([4e4, 2.0]))
    tables = np.random.default_rng(3).standard_normal((2, len(grid.nodes), 3))
    cells = np.arange(len(grid.nodes))
    np.testing.assert_array_equal(grid.interpolate(tables, np.ones_like(cells), cells, np.zeros(len(cells))), tables[1])


def test_stencils_stay_inside_their_region() -> None:
    grid = grid_of_windows(np.array([9e8, 8e8, 3e5, 10.0]))
    first = np.concatenate([[0], grid.ends[:-1] + 1])
    region = np.searchsorted(grid.ends, np.arange(len(grid.nodes)))
    assert (grid.stencils >= first[region]).all()
    assert (grid.stencils + 15 <= grid.ends[region]).all()
    for start, end in zip(first, grid.ends, strict=True):
        assert np.unique(np.diff(grid.nodes[start : end + 1])).tolist() == [grid.steps[start]]


@settings(deadline=None, max_examples=50)
@given(means=st.lists(st.floats(1e-9, 1e9), min_size=1, max_size=16))
def test_every_window_is_covered_by_a_bounded_number_of_nodes(means: list[float]) -> None:
    t = np.sort(np.array(means))[::-1].copy()
    grid = grid_of_windows(t)
    assert (np.diff(grid.nodes) > 0).all()
    width = np.maximum(np.sqrt(t), 1.0)
    for y in (-13.9, -1.0, 0.0, 5.5, 13.9):
        points = np.floor(np.maximum(t + y * width, 0.0)).astype(np.int64)
        assert (grid.locate(points) >= 0).all()
    assert len(grid.nodes) < 60_000


def test_locate_says_what_lies_outside() -> None:
    grid = grid_of_windows(np.array([1e6]))
    outside = np.array([-5, 0, int(grid.nodes[0]) - 1, int(grid.nodes[-1] + grid.steps[-1]), 10**9])
    assert grid.locate(outside).tolist() == [-1] * 5
    assert grid.locate(grid.nodes).tolist() == list(range(len(grid.nodes)))

"""Ranges of the entropy from the purity, and polynomial bounds from more power sums."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from entropest._mp import context
from entropest.errors import ArgumentValueError
from entropest.estimation.identified import (
    Range,
    entropy_range_from_purity,
    harremoes_topsoe_lower,
    harremoes_topsoe_upper,
    nodes_of_order,
    polynomial_bound,
    polynomial_table,
    value_at_one,
)
from entropest.estimation.ladders import bound_ladder, statistic_range
from entropest.functionals import PowerSum, VonNeumann
from entropest.shapes import all_shapes
from entropest.spectra import geometric, low_rank, maximally_mixed, random_reduced

weights = st.lists(st.floats(1e-6, 1.0), min_size=1, max_size=8)


def test_range_at_a_published_purity(check_values):
    """Source: Harremoes and Topsoe, IEEE Trans. Inf. Theory 47 (2001) 2944, recomputed, in check_values.json."""
    lower, upper = check_values("range of entropy at index of coincidence 0.4, d=4")
    found = entropy_range_from_purity(0.4, 4)
    assert found.lower == pytest.approx(lower, abs=1e-12)
    assert found.upper == pytest.approx(upper, abs=1e-11)
    assert found.lower > check_values("chord lower bound at index of coincidence 0.4")


@given(values=weights)
def test_every_spectrum_lies_in_its_range(values):
    p = np.array(values) / math.fsum(values)
    found = entropy_range_from_purity(min(1.0, PowerSum(2)(p)), len(p))
    assert found.lower - 1e-9 <= VonNeumann()(p) <= found.upper + 1e-9


@given(st.integers(1, 7), st.floats(0.0, 1.0), st.integers(2, 8))
def test_the_ends_are_reached(r, x, d):
    equal_and_smaller = np.array([1.0] * r + [x]) / (r + x)
    purity = PowerSum(2)(equal_and_smaller)
    assert harremoes_topsoe_lower(purity) == pytest.approx(VonNeumann()(equal_and_smaller), abs=1e-6)
    large_and_equal = np.array([1.0] + [x] * (d - 1)) / (1 + x * (d - 1))
    purity = min(1.0, PowerSum(2)(large_and_equal))
    assert harremoes_topsoe_upper(purity, d) == pytest.approx(VonNeumann()(large_and_equal), abs=1e-6)


def test_ends_of_the_purity():
    assert entropy_range_from_purity(1.0, 5) == Range(lower=0.0, upper=0.0)
    assert harremoes_topsoe_lower(0.0) == math.inf
    assert harremoes_topsoe_upper(0.4, None) == math.inf
    assert harremoes_topsoe_upper(1.0, None) == harremoes_topsoe_upper(1.0, 1) == 0.0
    for d in range(1, 9):
        assert harremoes_topsoe_lower(1 / d) == pytest.approx(math.log(d), abs=1e-7)
        assert harremoes_topsoe_upper(1 / d, d) == pytest.approx(math.log(d), abs=1e-7)


def test_a_qubit_leaves_no_gap():
    for purity in np.linspace(0.5, 1.0, 21):
        found = entropy_range_from_purity(float(purity), 2)
        assert found.upper - found.lower == pytest.approx(0.0, abs=1e-7)


@pytest.mark.parametrize("side", ["lower", "upper"])
@pytest.mark.parametrize("order", [2, 3, 4, 5, 6])
def test_polynomials_lie_on_their_side(side, order):
    """x q(x) <= -x log x <= Q(x) on (0, 1], checked in 40 digits on a grid dense at 0 and at the nodes."""
    ctx = context(40)
    rng = np.random.default_rng(order)
    for _ in range(5):
        nodes = tuple(np.exp(-rng.uniform(0.0, 6.0, nodes_of_order(side, order))))
        bound = polynomial_bound(side, nodes, at_one=value_at_one(side, order))
        assert len(bound.coefficients) == order + 1
        scale = math.fsum(map(abs, bound.coefficients))
        near = [node * (1 + shift) for node in bound.nodes for shift in (-1e-3, 0.0, 1e-3)]
        for x in [*np.geomspace(1e-9, 1.0, 150), *(x for x in near if x <= 1.0)]:
            point = ctx.mpf(float(x))
            value = sum(ctx.mpf(c) * point**j for j, c in enumerate(bound.coefficients))
            excess = float(value + point * ctx.log(point))
            assert excess <= 1e-15 * scale if side == "lower" else excess >= -1e-15 * scale


def test_tangent_and_repeated_nodes():
    assert polynomial_bound("lower", (0.5,), at_one=False).coefficients == pytest.approx((0.0, 1 + math.log(2), -2.0))
    triple = polynomial_bound("lower", (0.5, 0.5), at_one=False)
    close = polynomial_bound("lower", (0.5, 0.5005), at_one=False)
    assert close.coefficients == pytest.approx(triple.coefficients, rel=0.02)


@pytest.mark.parametrize("side", ["lower", "upper"])
@pytest.mark.parametrize("order", [2, 4, 6])
def test_fast_table_agrees_with_sixty_digits(side, order):
    nodes, coefficients = polynomial_table(side, order)
    for i in np.random.default_rng(1).integers(0, len(nodes), 8):
        exact = polynomial_bound(side, tuple(nodes[i]), at_one=value_at_one(side, order)).coefficients
        assert coefficients[i] == pytest.approx(exact, rel=1e-9, abs=1e-9 * max(map(abs, exact)))


@pytest.mark.parametrize(
    ("spectrum", "order", "gap"),
    [
        (geometric(16, 0.5), 3, 0.217),
        (geometric(16, 0.5), 4, 0.084),
        (geometric(16, 0.5), 6, 0.034),
        (maximally_mixed(8), 4, 0.0),
        (low_rank(4, 2), 3, 0.0),
    ],
)
def test_the_best_lower_bounds_leave_the_known_gaps(spectrum, order, gap):
    """Source: own earlier computation with nodes from Gauss quadrature; the grid of nodes costs up to 0.004 nat."""
    sums = np.array([PowerSum(j)(spectrum) if j else 0.0 for j in range(order + 1)])
    best = float((polynomial_table("lower", order)[1] @ sums).max())
    assert gap - 1e-3 <= VonNeumann()(spectrum) - best <= gap + 4e-3


@pytest.mark.parametrize("order", [2, 3, 4, 5, 6])
def test_ladders_bound_random_spectra(order):
    rng = np.random.default_rng(3)
    for _ in range(40):
        spectrum = random_reduced(5, int(rng.integers(1, 30)), rng=rng)
        sums = np.array([PowerSum(j)(spectrum) if j else 5.0 for j in range(order + 1)])
        entropy = VonNeumann()(spectrum)
        for side, sign in (("lower", 1.0), ("upper", -1.0)):
            values = bound_ladder(side, order, None if side == "lower" else 5) @ sums
            assert (sign * (values - entropy) <= 1e-9).all()


@pytest.mark.parametrize("order", [3, 4])
def test_statistic_ranges_hold_for_larger_blocks(order):
    """Characters of larger blocks are averages over sub-blocks, so their statistics stay in the range."""
    from entropest.estimation.moments import characters

    for side, dim in (("lower", None), ("upper", 4)):
        least, largest = statistic_range(side, order, dim)
        for size in (order, order + 1, order + 5):
            values = characters(all_shapes(size, 4), order)
            values[:, 0] = dim or 0.0
            statistics = bound_ladder(side, order, dim) @ values.T
            assert (statistics >= least[:, None]).all()
            assert (statistics <= largest[:, None]).all()


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: harremoes_topsoe_lower(1.1), "purity must lie between 0 and 1, got 1.1"),
        (lambda: harremoes_topsoe_upper(0.2, 4), "purity must be at least 1/dim = 0.25, got 0.2"),
        (lambda: harremoes_topsoe_upper(0.5, 0), "dim must be at least 1, got 0"),
        (lambda: polynomial_bound("lower", (0.0,), at_one=False), r"nodes must lie in \(0, 1\]"),
        (lambda: polynomial_bound("upper", (), at_one=False), r"nodes must lie in \(0, 1\]"),
        (lambda: polynomial_bound("lower", (0.5, 0.5001), at_one=False), "equal or differ by a factor of 1.001"),
        (lambda: nodes_of_order("lower", 1), "order must be at least 2, got 1"),
    ],
)
def test_wrong_arguments_are_refused(call, message):
    with pytest.raises(ArgumentValueError, match=message):
        call()

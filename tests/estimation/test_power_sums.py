"""Unbiased power sums from diagrams, and their continuation to real orders."""

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from entropest._mp import context
from entropest.diagrams import YoungDiagram, cycle_character, young_diagrams
from entropest.errors import ArgumentValueError
from entropest.estimation.power_sums import (
    continuation_jet,
    continuation_power_excess,
    continuation_power_sum,
    entropy_continuation,
    power_sum,
)
from entropest.functionals import Varentropy, VonNeumann
from entropest.law.schur_weyl import SchurWeyl
from entropest.shapes import all_shapes, rows_of
from tests.certification.exact import SPECTRA, outcome_law

shapes = st.lists(st.integers(0, 30), min_size=1, max_size=6).map(lambda x: sorted(x, reverse=True)).filter(sum)


def plain_power_sum(rows, order, ctx):
    """The formula of T_s as it is written, with gamma functions in arbitrary precision."""
    n = sum(rows)
    parts = [row + len(rows) - 1 - i for i, row in enumerate(rows)]
    total = ctx.zero
    for i, part in enumerate(parts):
        others = [other for m, other in enumerate(parts) if m != i]
        ratio = ctx.gamma(part + 1) * ctx.rgamma(part + 1 - order)
        total += ratio * ctx.fprod((part - other - order) / ctx.mpf(part - other) for other in others)
    return ctx.gamma(n + 1 - order) / ctx.factorial(n) * total


def plain_entropy_continuation(rows):
    """G_N by dual numbers, one row at a time: start (l, l digamma(l)) or (0, -1), factors ((D-1)/D, -1/D)."""
    ctx = context(40)
    n = sum(rows)
    parts = [row + len(rows) - 1 - i for i, row in enumerate(rows)]
    total = ctx.zero
    for i, part in enumerate(parts):
        value, slope = (ctx.mpf(part), part * ctx.digamma(part)) if part else (ctx.zero, -ctx.one)
        for m, other in enumerate(parts):
            if m != i:
                gap = ctx.mpf(part - other)
                value, slope = value * (gap - 1) / gap, slope * (gap - 1) / gap - value / gap
        total += slope
    return float(ctx.digamma(n) - total / n)


@pytest.mark.parametrize("size", [1, 2, 5, 9])
def test_power_sums_equal_the_exact_characters(size):
    diagrams = list(young_diagrams(size))
    array = rows_of(diagrams, size + 2)
    for order in range(1, size + 1):
        exact = [float(cycle_character(diagram, order)) for diagram in diagrams]
        assert power_sum(array, order) == pytest.approx(exact, abs=1e-14)
        assert continuation_power_sum(array, float(order), size + 2) == pytest.approx(exact, abs=1e-14)


def test_power_sums_of_large_and_flat_shapes_keep_their_digits():
    """Shapes where the products of Frobenius' formula grow large, against exact fractions."""
    for rows in [(9, 7, 5, 4, 3, 2, 1, 1), (1,) * 32, tuple(range(20, 0, -1)), (10**6, 10**6 - 1, 3), (40,) * 16]:
        for order in (2, 3, 5, 16):
            exact = float(cycle_character(YoungDiagram(rows), order))
            assert float(power_sum(np.array(rows), order)) == pytest.approx(exact, abs=1e-13)


@pytest.mark.parametrize("name", list(SPECTRA))
def test_power_sums_are_unbiased_exactly(name):
    """sum over shapes of f s(p) T_k = Tr rho^k, in fractions."""
    spectrum = SPECTRA[name]
    law = outcome_law(spectrum, 6)
    for order in range(1, 7):
        mean = sum((p * cycle_character(diagram, order) for diagram, p in law.items()), Fraction(0))
        assert mean == sum(p**order for p in spectrum)


@given(rows=shapes, order=st.floats(0.0, 8.0), further=st.integers(0, 3))
@settings(max_examples=60)
def test_real_orders_agree_with_the_formula(rows, order, further):
    order = min(order, float(sum(rows)))
    rows = rows + [0] * further
    exact = plain_power_sum(rows, order, context(60))
    found = continuation_power_sum(np.array(rows), order, len(rows))
    assert float(found) == pytest.approx(float(exact), rel=1e-9, abs=1e-11)


@given(rows=shapes, further=st.integers(0, 3))
@settings(max_examples=60)
def test_the_entropy_continuation_agrees_with_dual_numbers(rows, further):
    rows = rows + [0] * further
    found = float(entropy_continuation(np.array(rows), len(rows)))
    assert found == pytest.approx(plain_entropy_continuation(rows), rel=1e-11, abs=1e-12)


def test_jets_are_the_taylor_coefficients_at_order_one():
    """Third order against numerical differentiation of the plain formula in 60 digits."""
    ctx = context(60)
    for rows in [(5, 3, 0), (4, 4, 1, 0, 0), (12,), (1, 1, 1)]:
        jet = continuation_jet(np.array(rows), len(rows), 3)
        exact = ctx.taylor(lambda s, rows=rows: plain_power_sum(rows, s, ctx), ctx.one, 3)
        assert jet == pytest.approx([float(c) for c in exact], rel=1e-10, abs=1e-10)


@pytest.mark.parametrize("delta", [1e-13, 1e-9, 9.99e-4, 1.01e-3, 0.1])
def test_the_excess_is_accurate_near_order_one(delta):
    ctx = context(60)
    array = all_shapes(9, 3)
    for order in (1.0 - delta, 1.0 + delta):
        found = continuation_power_excess(array, order, 4)
        real = ctx.mpf(order)
        exact = [(plain_power_sum([*map(int, row), 0], real, ctx) - 1) / (real - 1) for row in array]
        assert found == pytest.approx([float(x) for x in exact], rel=1e-8)
    assert continuation_power_excess(array, 1.0, 4) == pytest.approx(-entropy_continuation(array, 4), rel=1e-13)


def test_order_one_is_the_trace_and_order_zero_the_number_of_rows_counted():
    array = all_shapes(7, 3)
    assert continuation_jet(array, 5)[:, 0] == pytest.approx(np.ones(len(array)))
    assert continuation_power_sum(array, 0.0, 5) == pytest.approx(np.full(len(array), 5.0))


@pytest.mark.parametrize(
    ("name", "spectrum"),
    [
        ("continuation estimator: exact bias of G_3 and of plug-in, p=(.6,.3,.1)", [0.6, 0.3, 0.1]),
        ("continuation estimator: exact bias of G_3 and of plug-in, uniform d=3", [1 / 3, 1 / 3, 1 / 3]),
    ],
)
def test_bias_of_the_continuation_estimator_and_of_plug_in(name, spectrum, check_values):
    """Source: exact enumeration of all shapes in 40 digits, in check_values.json (five digits given)."""
    entropy = VonNeumann()(spectrum)
    for copies, (continuation, plug_in) in check_values(name).items():
        table = SchurWeyl(spectrum, int(copies)).table()
        found = table.probabilities @ entropy_continuation(table.shapes, 3) - entropy
        assert float(f"{found:.5g}") == continuation
        found = table.probabilities @ VonNeumann()(table.shapes / int(copies)) - entropy
        assert float(f"{found:.5g}") == plug_in


def test_bias_is_exponentially_small_and_of_known_sign():
    """Counting all rows is high on average, counting the seen rows low: exact for 40 spectra and five sizes.

    Nothing here is proved; the brackets of the estimates rest on this sign.
    """
    rng = np.random.default_rng(7)
    for d in (2, 3):
        for copies in (2, 3, 5, 8, 13):
            array = all_shapes(copies, d)
            heights = (array > 0).sum(axis=1)
            full = entropy_continuation(array, d)
            own = np.array([entropy_continuation(row, int(h)) for row, h in zip(array, heights, strict=True)])
            for _ in range(20):
                p = np.sort(rng.dirichlet(np.full(d, rng.choice([0.3, 1.0, 20.0]))))[::-1]
                table = SchurWeyl(p, copies).table()
                assert np.array_equal(table.shapes, array)
                entropy = VonNeumann()(p)
                assert table.probabilities @ full >= entropy - 1e-12
                assert table.probabilities @ own <= entropy + 1e-12
    table = SchurWeyl([0.5, 0.3, 0.2], 60).table()
    assert table.probabilities @ entropy_continuation(table.shapes, 3) == pytest.approx(
        VonNeumann()([0.5, 0.3, 0.2]), abs=1e-7
    )


def test_the_second_derivative_estimates_the_mean_squared_surprisal():
    """T''_1 has mean sum p log^2 p up to an exponentially small bias, so the varentropy follows."""
    p = np.array([0.5, 0.3, 0.2])
    table = SchurWeyl(p, 60).table()
    jets = table.probabilities @ continuation_jet(table.shapes, 3)
    assert 2 * jets[2] == pytest.approx(float((p * np.log(p) ** 2).sum()), abs=1e-6)
    assert 2 * jets[2] - jets[1] ** 2 == pytest.approx(Varentropy()(p), abs=1e-6)


def test_non_integer_power_sums_are_nearly_unbiased():
    p = np.array([0.45, 0.35, 0.2])
    table = SchurWeyl(p, 60).table()
    for order in (0.5, 1.5, 2.5):
        mean = table.probabilities @ continuation_power_sum(table.shapes, order, 3)
        assert mean == pytest.approx(float((p**order).sum()), abs=2e-6)


def test_batches_equal_single_shapes_and_are_cut_into_pieces(monkeypatch):
    monkeypatch.setattr("entropest.estimation.power_sums._ELEMENTS_AT_ONCE", 16)
    array = all_shapes(12, 4)
    assert power_sum(array, 3).tolist() == [float(power_sum(row, 3)) for row in array]
    assert entropy_continuation(array.reshape(2, -1, 4), 4).ravel() == pytest.approx(
        [float(entropy_continuation(row, 4)) for row in array]
    )
    assert continuation_jet(array[:0], 4).shape == (0, 3)


def test_large_diagrams_are_accurate():
    """n = 10^9: G agrees with the plug-in entropy plus the first-order correction to 1e-9."""
    rows = np.array([6 * 10**8, 3 * 10**8, 10**8])
    p = rows / 10**9
    shift = 1.0 + sum(p[j] * math.log(p[i] / p[j]) / (p[i] - p[j]) for i in range(3) for j in range(i + 1, 3))
    assert float(entropy_continuation(rows, 3)) == pytest.approx(VonNeumann()(p) + shift / 10**9, abs=1e-12)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: power_sum(np.array([2, 1]), 4), "order must be at most the number of boxes 3, got 4"),
        (lambda: power_sum(np.array([200]), 65), "order must be at most 64, got 65"),
        (lambda: continuation_power_sum(np.array([2, 1]), 3.5, 2), "order must lie between 0 and 3"),
        (lambda: continuation_power_sum(np.array([2, 1]), -0.5, 2), "order must lie between 0 and 3"),
        (lambda: entropy_continuation(np.array([2, 1]), 1), "rows must be at least the number of non-empty rows 2"),
        (lambda: entropy_continuation(np.array([0, 0]), 2), "shapes must have at least one box each"),
    ],
)
def test_wrong_arguments_are_refused(call, message):
    with pytest.raises(ArgumentValueError, match=message):
        call()

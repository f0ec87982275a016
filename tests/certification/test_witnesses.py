"""Polynomial witnesses: minorants of -log x, and their values at outcomes."""

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from entropest._mp import context, interval_context
from entropest.certification.plain import cycle_values, exact_chord, exact_interpolant, partitions
from entropest.certification.witnesses import chord, interpolant, ladder_nodes, witness_ladder, witness_values
from entropest.diagrams import YoungDiagram, cycle_character
from entropest.shapes import all_shapes, rows_of
from entropest.spectra import random_reduced
from tests.certification.exact import SPECTRA, entropy, outcome_law


@pytest.mark.parametrize("order", [3, 4, 5, 6])
def test_interpolants_stay_below_minus_log(order):
    """x q(x) <= -x log x on (0, 1], on a grid that is dense at 0 and at the nodes."""
    ctx = context(50)
    for nodes in ladder_nodes(order):
        coefficients = exact_interpolant(nodes, order, ctx)
        near = [node * (1 + shift) for node in nodes for shift in (-1e-3, -1e-6, 0.0, 1e-6, 1e-3)]
        for x in [*np.geomspace(1e-12, 1.0, 400), *(x for x in near if x <= 1.0)]:
            point = ctx.mpf(float(x))
            value = sum(c * point**j for j, c in enumerate(coefficients))
            assert value <= -ctx.log(point) + ctx.mpf(10) ** -35


@pytest.mark.parametrize("order", [3, 4, 5, 6])
def test_remainder_is_positive_in_interval_arithmetic_away_from_the_nodes(order):
    """-log x - q(x) > 0 is proved cell by cell on [0.02, 1], outside 0.01 around the nodes and around 1."""
    ctx, exact = interval_context(40), context(40)
    nodes = ladder_nodes(order)[7]
    coefficients = exact_interpolant(nodes, order, exact)
    bounds = [ctx.mpf([str(c - exact.mpf(10) ** -35), str(c + exact.mpf(10) ** -35)]) for c in coefficients]

    def proved(low: float, high: float) -> bool:
        cell, middle = ctx.mpf([low, high]), ctx.mpf((low + high) / 2)
        value = -ctx.log(middle) - sum(c * middle**j for j, c in enumerate(bounds))
        slope = -1 / cell - sum(j * c * cell ** (j - 1) for j, c in enumerate(bounds) if j)
        return bool((value + slope * (cell - middle)).a > 0)

    pending = [(0.02 + 0.02 * i, 0.04 + 0.02 * i) for i in range(49)]
    while pending:
        low, high = pending.pop()
        if any(node - 0.01 <= low and high <= node + 0.01 for node in (*nodes, 1.0)) or proved(low, high):
            continue
        assert high - low > 1e-6
        pending += [(low, (low + high) / 2), ((low + high) / 2, high)]


def test_divided_differences_agree_with_the_linear_system():
    ctx = context(50)
    for order in (3, 4, 5, 6):
        for nodes in ladder_nodes(order):
            exact = [float(c) for c in exact_interpolant(nodes, order, ctx)]
            assert interpolant(nodes, order % 2 == 1) == pytest.approx(exact, rel=1e-14)


def test_chords_join_the_points_of_equal_eigenvalues():
    for r in range(1, 40):
        alpha, minus_beta = chord(r)
        assert alpha + minus_beta / r == pytest.approx(math.log(r), abs=1e-13)
        assert alpha + minus_beta / (r + 1) == pytest.approx(math.log(r + 1), abs=1e-13)
        assert [float(c) for c in exact_chord(r, context(50))] == pytest.approx([alpha, minus_beta], rel=1e-14)


def test_chord_bound_of_the_literature(check_values):
    # Harremoes and Topsoe 2001: chord lower bound at index of coincidence 0.4
    best = max(alpha + slope * 0.4 for alpha, slope in map(chord, range(1, 10)))
    assert best == pytest.approx(check_values("chord lower bound at index of coincidence 0.4"), abs=1e-6)


@pytest.mark.parametrize("copies", [2, 3, 4, 5, 6, 7])
def test_mean_of_every_witness_is_at_most_the_entropy(copies):
    """Exact summation over the outcome law: E g <= S."""
    ladder = witness_ladder(copies)
    for spectrum in SPECTRA.values():
        law = outcome_law(spectrum, copies)
        values = witness_values(ladder, rows_of(law, len(spectrum)))
        means = values @ np.array([float(probability) for probability in law.values()])
        assert (means <= entropy(spectrum) + 1e-12).all()


def test_mean_is_at_most_the_entropy_for_random_spectra():
    generator = np.random.default_rng(7)
    for _ in range(300):
        p = random_reduced(int(generator.integers(2, 7)), int(generator.integers(1, 9)), rng=generator)
        p = p[p > 0]
        for copies in (2, 3, 4, 5, 6):
            powers = np.array([np.sum(p**j) for j in range(1, copies + 1)])
            assert (witness_ladder(copies).coefficients @ powers <= -np.sum(p * np.log(p)) + 1e-9).all()


@pytest.mark.parametrize("copies", [2, 3, 5, 6, 9])
def test_values_are_exact_characters_rounded_down(copies):
    ladder = witness_ladder(copies)
    shapes = all_shapes(copies, copies)
    values = witness_values(ladder, shapes)
    for column, rows in enumerate(shapes):
        diagram = YoungDiagram(rows.tolist())
        characters = [cycle_character(diagram, j) for j in range(1, ladder.order + 1)]
        for row, coefficients in enumerate(ladder.coefficients):
            exact = sum(Fraction(c) * t for c, t in zip(coefficients.tolist(), characters, strict=True))
            assert values[row, column] <= exact
            scale = float(np.abs(coefficients).sum())
            assert values[row, column] >= float(exact) - 1e-12 * scale


@pytest.mark.parametrize("copies", [17, 20])
def test_floors_of_sixteen_copies_hold_for_larger_blocks(copies):
    ladder = witness_ladder(copies)
    for rows in partitions(copies)[::7]:
        characters = np.array([float(value) for value in cycle_values(rows, ladder.order)])
        scale = np.abs(ladder.coefficients).sum(axis=1)
        assert (ladder.coefficients @ characters >= ladder.floors - 1e-12 * scale).all()


@given(st.lists(st.integers(1, 9), min_size=1, max_size=5), st.integers(1, 6))
def test_rim_hooks_agree_with_the_formula_of_frobenius(rows, length):
    diagram = YoungDiagram(sorted(rows, reverse=True))
    if length <= diagram.size:
        assert cycle_values(diagram.rows, length)[-1] == cycle_character(diagram, length)


def test_large_shapes_are_rounded_down_too():
    ladder = witness_ladder(1000)
    shape = (500, 300, 150, 50)
    values = witness_values(ladder, np.array([shape]))[:, 0]
    exact = [cycle_character(YoungDiagram(shape), j) for j in range(1, 7)]
    for value, coefficients in zip(values, ladder.coefficients, strict=True):
        truth = sum(Fraction(c) * t for c, t in zip(coefficients.tolist(), exact, strict=True))
        assert float(truth) - 1e-9 * np.abs(coefficients).sum() <= value <= truth

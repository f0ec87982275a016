"""Schur polynomials against tableaux, published tables and each other."""

import math
from fractions import Fraction
from itertools import permutations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from entropest import _mp
from entropest.diagrams import YoungDiagram, young_diagrams
from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.law import schur
from entropest.law.jacobi_trudi import (
    complete_homogeneous,
    integer_determinant,
    jacobi_trudi_matrix,
    log_derivatives,
)
from entropest.law.schur import schur_polynomial
from tests.law.spectra_for_tests import schur_by_tableaux

small_shapes = st.lists(st.integers(0, 4), min_size=0, max_size=3).map(lambda rows: sorted(rows, reverse=True))
small_integers = st.lists(st.integers(-3, 5), min_size=1, max_size=4)


def monomial(exponents, variables):
    """Sum over the distinct permutations of the exponents."""
    padded = (*exponents, *(0 for _ in range(len(variables) - len(exponents))))
    return sum(math.prod(x**e for x, e in zip(variables, term, strict=True)) for term in set(permutations(padded)))


def test_kostka_numbers(check_values):
    # Macdonald, Symmetric Functions and Hall Polynomials: s_shape = sum of Kostka numbers times monomials.
    kostka = check_values(
        "Kostka numbers n=4, shapes (rows) and weights (columns) in order 4, 3+1, 2+2, 2+1+1, 1+1+1+1"
    )
    shapes = [diagram.rows for diagram in young_diagrams(4)]
    variables = [2, 3, 5, 7]
    for shape, numbers in zip(shapes, kostka, strict=True):
        by_monomials = sum(k * monomial(mu, variables) for k, mu in zip(numbers, shapes, strict=True))
        assert schur_polynomial(shape, variables) == by_monomials


@given(small_shapes, small_integers)
@settings(max_examples=60, deadline=None)
def test_agrees_with_the_sum_over_tableaux(rows, variables):
    assert schur_polynomial(rows, variables) == schur_by_tableaux(rows, [Fraction(v) for v in variables])


@given(small_shapes, st.lists(st.fractions(0, 2, max_denominator=12), min_size=2, max_size=4), st.randoms())
@settings(max_examples=60, deadline=None)
def test_is_symmetric(rows, variables, random):
    shuffled = list(variables)
    random.shuffle(shuffled)
    assert schur_polynomial(rows, shuffled) == schur_polynomial(rows, variables)


@given(small_shapes, small_integers.filter(lambda values: 0 not in values))
@settings(max_examples=60, deadline=None)
def test_bialternant_and_jacobi_trudi_agree(rows, variables):
    rows = tuple(row for row in rows if row)
    if 0 < len(rows) <= len(variables):
        complete = complete_homogeneous(rows[0] + len(rows), variables)
        by_jacobi_trudi = integer_determinant(jacobi_trudi_matrix(rows, complete))
        assert schur._bialternant(rows, variables) == by_jacobi_trudi


def test_at_ones_it_counts_semistandard_tableaux():
    # Hook content formula (Stanley, Enumerative Combinatorics 2, theorem 7.21.2).
    for diagram in young_diagrams(6):
        contents = [c for row in diagram.contents() for c in row]
        hooks = [h for row in diagram.hook_lengths() for h in row]
        expected = math.prod(5 + c for c in contents) // math.prod(hooks)
        assert schur_polynomial(diagram, [1] * 5) == expected


def test_powers_of_the_sum_split_into_schur_polynomials():
    variables = [Fraction(1, 2), Fraction(1, 3), Fraction(-1, 5), Fraction(1, 7)]
    total = sum(d.standard_tableaux * schur_polynomial(d, variables) for d in young_diagrams(7))
    assert total == sum(variables) ** 7


def test_too_many_rows_give_zero_and_no_rows_give_one():
    assert schur_polynomial((1, 1, 1), [2, 3]) == 0
    assert schur_polynomial((1, 1), [Fraction(1, 2), Fraction(0), Fraction(0)]) == 0
    assert schur_polynomial((), [2, 3]) == 1
    assert schur_polynomial((1, 1), [0.5, 0.0]) == 0.0


def test_kind_of_number_is_kept():
    ctx = _mp.context(40)
    assert type(schur_polynomial((2, 1), [1, 2])) is int
    assert type(schur_polynomial((2, 1), [Fraction(1, 2), 2])) is Fraction
    assert type(schur_polynomial((2, 1), np.array([0.5, 0.25]))) is float
    assert type(schur_polynomial((2, 1), np.array([1, 2]))) is int
    assert _mp.is_mpf(schur_polynomial((2, 1), [ctx.mpf(1) / 3, 0.5]))


def test_floats_are_correctly_rounded():
    for rows in [(5, 3, 1), (40, 2, 2), (120, 119, 1)]:
        for variables in [(0.3, 0.3, 0.3), (0.5, 0.5 - 2**-50, 1e-300), (0.9, 0.1, -0.2)]:
            exact = schur_polynomial(rows, [Fraction(v) for v in variables])
            assert schur_polynomial(rows, variables) == float(exact)


def test_long_rows_of_floats_match_exact_rationals():
    rows, variables = (1400, 700, 400), (0.7, 0.7 - 1e-9, 0.6)
    exact = schur_polynomial(rows, [Fraction(v) for v in variables])
    assert schur_polynomial(rows, variables) == pytest.approx(float(exact), rel=1e-15)
    tied = (0.75, 0.75, 0.6)
    assert schur_polynomial(rows, tied) == pytest.approx(
        float(schur_polynomial(rows, [Fraction(v) for v in tied])), rel=1e-15
    )


def test_mpf_keeps_the_digits_of_its_context():
    ctx = _mp.context(60)
    thirds = [ctx.mpf(1) / 3] * 3
    for rows in [(5, 3, 1), (1400, 700, 400)]:
        dimension = schur_polynomial(rows, [1, 1, 1])
        value = schur_polynomial(rows, thirds) * ctx.mpf(3) ** sum(rows)
        assert abs(ctx.convert(value) / dimension - 1) < 10 ** (3 - ctx.dps) * sum(rows)
    assert schur_polynomial((2, 1), thirds).context.dps == 60


@given(st.lists(st.integers(0, 5), min_size=5, max_size=6), small_shapes.filter(any))
@settings(max_examples=40, deadline=None)
def test_derivatives_are_those_of_the_polynomial(values, rows):
    rows = [row for row in rows if row]
    if sum(value > 0 for value in values) <= len(rows):
        return
    complete = complete_homogeneous(2 * sum(rows), values)
    derivatives = log_derivatives(rows, complete, values)
    here = schur_polynomial(rows, values)
    step = Fraction(1, 10**12)
    for i, derivative in enumerate(derivatives):
        ahead, behind = ([Fraction(v) + sign * step * (j == i) for j, v in enumerate(values)] for sign in (1, -1))
        slope = (schur_polynomial(rows, ahead) - schur_polynomial(rows, behind)) / (2 * step)
        assert float(derivative) == pytest.approx(float(slope / here), rel=1e-12, abs=1e-12)


def test_singular_matrices_have_determinant_zero():
    assert integer_determinant([[0, 0], [0, 5]]) == 0
    assert integer_determinant([[0, 2], [3, 1]]) == -6
    assert integer_determinant([[1, 2], [2, 4]]) == 0


@pytest.mark.parametrize("bad", [float("nan"), float("inf"), _mp.context(20).inf])
def test_infinite_variables_are_refused(bad):
    with pytest.raises(ArgumentValueError, match="finite"):
        schur_polynomial((1,), [0.5, bad])


@pytest.mark.parametrize("bad", ["0.5", None, True, 1j])
def test_other_variables_are_refused(bad):
    with pytest.raises(ArgumentTypeError, match="real number"):
        schur_polynomial((1,), [0.5, bad])


def test_values_beyond_float_are_refused():
    with pytest.raises(ArgumentValueError, match="must fit a float"):
        schur_polynomial((900,), [10.0, 10.0])


def test_increasing_rows_are_refused():
    with pytest.raises(ArgumentValueError, match="must not increase"):
        schur_polynomial((1, 2), [1, 1])


def test_diagram_objects_are_accepted():
    assert schur_polynomial(YoungDiagram((2, 1)), [1, 1]) == 2

"""Probabilities of single shapes: exact rationals, explicit projectors, arbitrary precision, gradients."""

import copy
import math
import pickle
from fractions import Fraction
from itertools import permutations, product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from entropest import _mp
from entropest.diagrams import YoungDiagram, young_diagrams
from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.law.schur import schur_polynomial
from entropest.law.schur_weyl import SchurWeyl
from entropest.shapes import all_shapes, down_probabilities
from tests.law.spectra_for_tests import DEGENERATE, precise_logpmf, random_shape, schur_by_tableaux


def exact_law(spectrum, copies):
    """Probabilities of all shapes with at most d rows, by tableaux and hook lengths."""
    return {
        diagram: diagram.standard_tableaux * schur_by_tableaux(diagram.rows, spectrum)
        for diagram in young_diagrams(copies, len(spectrum))
    }


@pytest.mark.parametrize("name", DEGENERATE)
@pytest.mark.parametrize("copies", [1, 2, 3, 4, 5, 7, 10])
def test_every_small_shape_agrees_with_exact_rationals(name, copies):
    spectrum = DEGENERATE[name]
    law, floats = SchurWeyl(spectrum, copies), SchurWeyl([float(p) for p in spectrum], copies)
    for diagram, probability in exact_law(spectrum, copies).items():
        assert law.exact_pmf(diagram) == probability
        expected = pytest.approx(float(probability), rel=1e-10, abs=0.0)
        assert law.pmf(diagram) == expected
        assert floats.pmf(diagram) == pytest.approx(float(probability), rel=1e-8 if name == "tiny" else 1e-10, abs=0.0)


def test_published_outcome_laws(check_values):
    # Schur-Weyl duality; recomputed values of the reference file.
    for name, d, copies in [
        ("outcome law, uniform spectrum, d=2, n=4", 2, 4),
        ("outcome law, uniform spectrum, d=3, n=3", 3, 3),
    ]:
        law = SchurWeyl([Fraction(1, d)] * d, copies)
        for shape, probability in check_values(name).items():
            assert law.exact_pmf(YoungDiagram.parse(shape)) == Fraction(probability)


def test_uniform_law_is_plancherel_times_a_content_product(check_values):
    # f^2/n! prod (1 + content/d), from the hook content formula (Stanley, Enumerative Combinatorics 2, 7.21.2).
    plancherel = check_values("Plancherel measure n=4")
    law = SchurWeyl([Fraction(1, 1000)] * 1000, 4)
    for shape, probability in plancherel.items():
        diagram = YoungDiagram.parse(shape)
        contents = [c for row in diagram.contents() for c in row]
        expected = Fraction(probability) * math.prod(1 + Fraction(c, 1000) for c in contents)
        assert law.exact_pmf(diagram) == expected
        assert law.pmf(diagram) == pytest.approx(float(expected), rel=1e-13)


def transpositions_sum(d, copies):
    """Return the sum of all transpositions of the tensor factors of (C^d)^copies as a matrix."""
    words = list(product(range(d), repeat=copies))
    index = {word: i for i, word in enumerate(words)}
    matrix = np.zeros((len(words), len(words)))
    for word in words:
        for i in range(copies):
            for j in range(i):
                swapped = list(word)
                swapped[i], swapped[j] = word[j], word[i]
                matrix[index[tuple(swapped)], index[word]] += 1
    return matrix


@pytest.mark.parametrize(("d", "copies"), [(2, 2), (2, 4), (2, 5), (3, 3), (3, 4), (3, 5)])
def test_agrees_with_explicit_projectors(d, copies):
    """Tr(Pi rho^(x)n): the sum of transpositions is the sum of contents on the block of each shape.

    (Jucys 1974; Macdonald, I.7 example 7.) For n <= 5 the sums of contents tell all shapes apart.
    """
    rng = np.random.default_rng(5)
    spectrum = rng.dirichlet(np.ones(d))
    unitary, _ = np.linalg.qr(rng.standard_normal((d, d)) + 1j * rng.standard_normal((d, d)))
    state = (unitary * spectrum) @ unitary.conj().T
    power = np.eye(1)
    for _ in range(copies):
        power = np.kron(power, state)
    values, vectors = np.linalg.eigh(transpositions_sum(d, copies))
    weights = np.einsum("ij,ik,kj->j", vectors.conj(), power, vectors).real
    law = SchurWeyl(spectrum, copies)
    for diagram in young_diagrams(copies, d):
        contents = sum(c for row in diagram.contents() for c in row)
        assert law.pmf(diagram) == pytest.approx(weights[np.abs(values - contents) < 0.5].sum(), abs=1e-13)


def test_agrees_with_characters_of_permutation_matrices(check_values):
    """Pi = (f/n!) sum chi(pi) U_pi with the character table of S4 (James and Kerber)."""
    table = check_values("character table of S4, classes 4, 3+1, 2+2, 2+1+1, 1^4")
    classes = [(4,), (3, 1), (2, 2), (2, 1, 1), (1, 1, 1, 1)]
    spectrum = [Fraction(1, 2), Fraction(1, 3), Fraction(1, 6)]
    law = SchurWeyl(spectrum, 4)
    for shape, characters in table.items():
        total = Fraction(0)
        for permutation in permutations(range(4)):
            cycles, left = [], set(range(4))
            while left:
                length, position = 0, min(left)
                while position in left:
                    left.remove(position)
                    position, length = permutation[position], length + 1
                cycles.append(length)
            trace = math.prod(sum(p**length for p in spectrum) for length in cycles)
            total += characters[classes.index(tuple(sorted(cycles, reverse=True)))] * trace
        diagram = YoungDiagram.parse(shape)
        assert law.exact_pmf(diagram) == diagram.standard_tableaux * total / 24


@given(st.lists(st.integers(0, 6), min_size=1, max_size=4).filter(any), st.integers(1, 8))
@settings(max_examples=40, deadline=None)
def test_normalised_symmetric_and_consistent_under_down_steps(weights, copies):
    spectrum = [Fraction(w, sum(weights)) for w in weights]
    shapes = all_shapes(copies, len(weights))
    law = SchurWeyl(spectrum, copies)
    probabilities = law.pmf(shapes)
    assert probabilities.sum() == pytest.approx(1.0, abs=1e-13)
    assert np.array_equal(SchurWeyl(spectrum[::-1], copies).pmf(shapes), probabilities)
    if copies > 1:
        pushed = {}
        for shape, weight, down in zip(shapes, probabilities, down_probabilities(shapes), strict=True):
            for row in np.flatnonzero(down):
                smaller = tuple(shape - np.eye(len(shape), dtype=int)[row])
                pushed[smaller] = pushed.get(smaller, 0.0) + weight * down[row]
        fewer = SchurWeyl(spectrum, copies - 1)
        for smaller, weight in pushed.items():
            assert fewer.pmf(smaller) == pytest.approx(weight, rel=1e-12, abs=1e-300)


def hard_cases(seed, count):
    """Yield spectra of every kind of degeneracy with plausible and implausible shapes."""
    rng = np.random.default_rng(seed)
    for case in range(count):
        d, copies = int(rng.integers(1, 9)), round(10 ** rng.uniform(0, 6))
        base = rng.dirichlet(np.ones(d))
        spectrum = [
            base,
            rng.choice(base, d),
            rng.choice(base, d) * (1 + 10 ** rng.uniform(-15, -3) * rng.standard_normal(d)),
            base * 10.0 ** -rng.uniform(0, 15, d),
            np.ones(d),
            1 + 10 ** rng.uniform(-15, -3) * rng.standard_normal(d),
        ][case % 6]
        spectrum = spectrum / math.fsum(spectrum)
        typical = spectrum if rng.random() < 0.6 else rng.dirichlet(np.ones(d))
        yield spectrum, copies, random_shape(-np.sort(-typical), copies, rng)


def test_error_is_below_1e_9_for_all_degenerate_kinds():
    routes = set()
    for spectrum, copies, shape in hard_cases(seed=1, count=90):
        report = SchurWeyl(spectrum, copies).logpmf_report(shape)
        exact = precise_logpmf(SchurWeyl(spectrum, copies).spectrum.tolist(), shape.tolist(), digits=30)
        assert abs(report.value - exact) <= 1e-9 + np.spacing(abs(exact))
        assert abs(report.value - exact) <= report.error + 1e-10 + np.spacing(abs(exact))
        routes.add(report.route)
    assert routes == {"float64 determinant", "arbitrary precision", "exact integers"}


def test_a_billion_copies():
    for spectrum in ([0.6, 0.3, 0.1], [0.4, 0.4, 0.2]):
        law = SchurWeyl(spectrum, 10**9)
        shape = (np.array(law.spectrum) * 10**9 + [20_000, -15_000, -5_000]).round().astype(int)
        assert law.logpmf(shape) == pytest.approx(precise_logpmf(spectrum, shape.tolist()), abs=1e-9)


def test_sixteen_eigenvalues_with_gaps_of_every_size():
    rng = np.random.default_rng(2)
    for gap in (0.0, 1e-15, 1e-12, 1e-9, 1e-6, 1e-3):
        spectrum = 1.0 + gap * np.arange(16)
        law = SchurWeyl(spectrum / math.fsum(spectrum), 10**5)
        shape = random_shape(law.spectrum, 10**5, rng)
        precise = law.exact_pmf(shape, dps=40)
        assert law.logpmf(shape) == pytest.approx(float(precise.context.log(precise)), abs=1e-9)


def test_exact_pmf_does_not_depend_on_the_digits():
    """One value at two precisions."""
    for spectrum, copies, shape in hard_cases(seed=4, count=24):
        law = SchurWeyl(spectrum, copies)
        low, high = law.exact_pmf(shape, dps=15), law.exact_pmf(shape, dps=45)
        assert abs(high.context.convert(low) / high - 1) < 1e-13
        assert low.context.dps == 15


def test_exact_pmf_of_mpf_keeps_their_precision():
    ctx = _mp.context(60)
    third = ctx.mpf(1) / 3
    value = SchurWeyl([third, third, third], 9).exact_pmf((5, 3, 1), dps=55)
    expected = schur_polynomial((5, 3, 1), [1, 1, 1]) * YoungDiagram((5, 3, 1)).standard_tableaux / ctx.mpf(3) ** 9
    assert abs(ctx.convert(value) / expected - 1) < ctx.mpf(10) ** -53


def test_impossible_shapes_have_probability_zero():
    law = SchurWeyl([0.6, 0.4, 0.0], 4)
    shapes = [[4, 0, 0, 0], [2, 1, 1, 0], [1, 1, 1, 1]]
    assert np.array_equal(np.isneginf(law.logpmf(shapes)), [False, True, True])
    assert law.pmf((2, 1, 1)) == 0.0
    assert law.exact_pmf((2, 1, 1)) == 0
    assert SchurWeyl([Fraction(1), Fraction(0)], 4).exact_pmf((3, 1)) == 0
    report = law.logpmf_report((2, 1, 1))
    assert (report.value, report.route) == (-math.inf, "impossible shape")


def test_rare_shapes_do_not_underflow():
    law = SchurWeyl([1 - 1e-12, 1e-12], 100)
    shape = (50, 50)
    assert law.pmf(shape) == 0.0
    assert law.logpmf(shape) == pytest.approx(precise_logpmf(law.spectrum.tolist(), shape), abs=1e-9)


def test_float_spectra_are_divided_by_their_sum():
    law = SchurWeyl([0.5 + 4e-10, 0.5], 1000)
    assert math.fsum(law.spectrum) == pytest.approx(1.0, abs=2.0**-51)
    shapes = all_shapes(1000, 2)
    assert law.pmf(shapes).sum() == pytest.approx(1.0, abs=1e-12)


def test_shape_of_the_answer_follows_the_shapes():
    law = SchurWeyl([0.5, 0.3, 0.2], 4)
    block = np.array([[[4, 0, 0], [3, 1, 0]], [[2, 2, 0], [2, 1, 1]]])
    assert law.pmf(block).shape == (2, 2)
    assert law.logpmf_gradient(block).shape == (2, 2, 3)
    assert law.pmf(np.zeros((0, 3), dtype=int)).shape == (0,)
    assert type(law.pmf((3, 1))) is float
    assert type(law.logpmf(YoungDiagram((3, 1)))) is float
    assert law.pmf(block)[1, 0] == pytest.approx(law.pmf((2, 2)), rel=1e-14)
    assert law.pmf([[3, 1, 0, 0, 0]])[0] == pytest.approx(law.pmf((3, 1)), rel=1e-14)


def test_batches_agree_with_single_shapes():
    rng = np.random.default_rng(8)
    law = SchurWeyl([0.4, 0.4 - 1e-7, 0.1 + 1e-7, 0.1], 1000)
    shapes = np.stack([random_shape(law.spectrum, 1000, rng) for _ in range(20)])
    singly = [law.logpmf(shape) for shape in shapes]
    assert law.logpmf(shapes) == pytest.approx(singly, abs=1e-10)


# --- gradients -------------------------------------------------------------------------------------------------


def exact_gradient(spectrum, rows, step=Fraction(1, 10**25)):
    """Differences of exact rationals; forward at zero eigenvalues, central elsewhere."""

    def value(i, delta):
        moved = [Fraction(p) + delta * (j == i) for j, p in enumerate(spectrum)]
        return schur_polynomial(rows, moved)

    here = value(0, Fraction(0))
    return [
        float((value(i, step) - (value(i, -step) if p else here)) / (2 * step if p else step) / here)
        for i, p in enumerate(spectrum)
    ]


@pytest.mark.parametrize("name", DEGENERATE)
@pytest.mark.parametrize("copies", [1, 2, 3, 6, 9])
def test_gradient_agrees_with_exact_differences(name, copies):
    spectrum = DEGENERATE[name]
    law = SchurWeyl(spectrum, copies)
    for shape in law.support():
        expected = exact_gradient([Fraction(p) for p in law.spectrum.tolist()], [int(row) for row in shape])
        assert law.logpmf_gradient(shape) == pytest.approx(expected, rel=1e-8)


def test_gradient_of_large_shapes_agrees_with_exact_differences():
    rng = np.random.default_rng(3)
    for spectrum in ([0.5, 0.3, 0.2], [0.4, 0.4, 0.2], [0.4 + 1e-6, 0.4 - 1e-6, 0.2], [0.7, 0.3, 0.0], [1 / 3] * 3):
        law = SchurWeyl(spectrum, 300)
        shape = random_shape(law.spectrum, 300, rng)
        expected = exact_gradient([Fraction(p) for p in law.spectrum.tolist()], shape.tolist())
        assert law.logpmf_gradient(shape) == pytest.approx(expected, rel=1e-8)


def test_contents_add_up_to_the_number_of_copies():
    for spectrum, copies, shape in hard_cases(seed=6, count=60):
        law = SchurWeyl(spectrum, copies)
        assert law.spectrum @ law.logpmf_gradient(shape) == pytest.approx(copies, rel=1e-8)


def test_gradient_is_equal_at_ties_and_undefined_for_impossible_shapes():
    law = SchurWeyl([0.4, 0.4, 0.2, 0.0], 5)
    gradient = law.logpmf_gradient((3, 1, 1))
    assert gradient[0] == gradient[1]
    assert np.isfinite(gradient).all()
    assert np.isnan(law.logpmf_gradient((2, 1, 1, 1))).all()


# --- arguments -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("shape", "message"),
    [
        ((3, 2), "must have 4 boxes, got 3\\+2"),
        ((1, 3), "do not increase, got 1\\+3"),
        ((5, -1), "non-negative"),
        ((2.5, 1.5), "whole numbers"),
        ((), "must have 4 boxes, got an empty shape"),
        ((4, float("nan")), "whole numbers"),
    ],
)
def test_malformed_shapes_are_refused(shape, message):
    law = SchurWeyl([0.6, 0.4], 4)
    for method in (law.pmf, law.logpmf, law.exact_pmf, law.logpmf_gradient, law.logpmf_report):
        with pytest.raises(ArgumentValueError, match=message):
            method(shape)


def test_one_shape_at_a_time_where_one_is_meant():
    law = SchurWeyl([0.6, 0.4], 4)
    for method in (law.exact_pmf, law.logpmf_report):
        with pytest.raises(ArgumentValueError, match="one shape"):
            method([[4, 0], [3, 1]])


@pytest.mark.parametrize(
    ("spectrum", "message"),
    [
        ([0.5, 0.6], "sum to 1"),
        ([1.5, -0.5], "negative"),
        ([0.5, float("nan")], "finite"),
        ([], "not empty"),
        ([[0.5, 0.5]], "one-dimensional"),
        ([Fraction(1, 2), Fraction(1, 3)], "sum to exactly 1, got 5/6"),
        ([Fraction(3, 2), Fraction(-1, 2)], "negative, got -1/2"),
        ([_mp.context(30).mpf("0.4")] * 2, "sum to 1"),
    ],
)
def test_other_spectra_are_refused(spectrum, message):
    with pytest.raises(ArgumentValueError, match=message):
        SchurWeyl(spectrum, 3)


@pytest.mark.parametrize("spectrum", ["half", None, 1.0, [0.5, "x"]])
def test_things_that_are_no_spectrum_are_refused(spectrum):
    with pytest.raises(ArgumentTypeError, match="real numbers"):
        SchurWeyl(spectrum, 3)


@pytest.mark.parametrize(("copies", "error"), [(0, ValueError), (-1, ValueError), (2.5, ValueError), ("3", TypeError)])
def test_copies_must_be_a_positive_integer(copies, error):
    with pytest.raises(error, match="copies"):
        SchurWeyl([0.5, 0.5], copies)


def test_objects_are_immutable_and_can_be_copied_and_pickled():
    ctx = _mp.context(30)
    for spectrum in ([0.6, 0.4], [Fraction(2, 3), Fraction(1, 3)], [ctx.mpf(1) / 3, ctx.mpf(2) / 3]):
        law = SchurWeyl(spectrum, 5)
        with pytest.raises(AttributeError, match="immutable"):
            law.copies = 6
        with pytest.raises(AttributeError, match="immutable"):
            del law.copies
        with pytest.raises(ValueError, match="read-only"):
            law.spectrum[0] = 1.0
        for twin in (pickle.loads(pickle.dumps(law)), copy.deepcopy(law)):
            assert repr(twin) == repr(law)
            assert twin.exact_pmf((3, 2)) == law.exact_pmf((3, 2))


def test_repr_shows_the_spectrum_as_given():
    assert repr(SchurWeyl([Fraction(1, 3), Fraction(2, 3)], 5)) == "SchurWeyl([2/3, 1/3], copies=5)"
    assert repr(SchurWeyl([0.25, 0.75], 5)) == "SchurWeyl([0.75, 0.25], copies=5)"
    assert repr(SchurWeyl([0.1] * 10, 5)) == "SchurWeyl([0.1, 0.1, 0.1, 0.1, ..., 0.1, 0.1], copies=5)"

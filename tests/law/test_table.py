"""The table of all shapes, expectations and laws of statistics."""

import math
import tracemalloc
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from entropest.diagrams import YoungDiagram
from entropest.errors import ArgumentTypeError, ArgumentValueError, MemoryBudgetError
from entropest.law import table as table_module
from entropest.law.branching import Tails, last_layer_size, slices
from entropest.law.leading import log_probability
from entropest.law.schur_weyl import SchurWeyl
from entropest.law.table import support_size
from entropest.shapes import all_shapes, count_shapes, down_probabilities
from entropest.spectra import geometric, maximally_mixed
from tests.law.spectra_for_tests import DEGENERATE, precise_logpmf


@pytest.mark.parametrize("name", DEGENERATE)
@pytest.mark.parametrize("copies", [1, 2, 3, 4, 7, 10])
def test_agrees_with_exact_rationals(name, copies):
    law = SchurWeyl(DEGENERATE[name], copies)
    table = law.table()
    assert np.array_equal(table.shapes, law.support())
    for shape, probability, logarithm in zip(table.shapes, table.probabilities, table.log_probabilities, strict=True):
        exact = float(law.exact_pmf(shape))
        assert probability == pytest.approx(exact, rel=1e-11, abs=0.0)
        assert logarithm == pytest.approx(math.log(exact), rel=1e-13, abs=1e-13)


def test_more_eigenvalues_than_copies():
    spectrum = [Fraction(i, 78) for i in range(12, 0, -1)]
    law = SchurWeyl(spectrum, 5)
    table = law.table()
    assert table.shapes.shape == (7, 12)
    exact = [float(law.exact_pmf(shape)) for shape in table.shapes]
    assert table.probabilities == pytest.approx(exact, rel=1e-13)


def test_exact_determinants_of_few_shapes_agree_with_the_branching_rule():
    spectrum = geometric(60, 0.95)
    table = SchurWeyl(spectrum, 5).table()
    probabilities = {tuple(shape[:5]): p for shape, p in zip(table.shapes.tolist(), table.probabilities, strict=True)}
    for part in slices(spectrum, 5):
        values = np.exp(log_probability(part.shapes, spectrum, 5, part.log_ratio))
        for shape, value in zip(part.shapes.tolist(), values, strict=True):
            assert probabilities.pop(tuple(shape)) == pytest.approx(value, rel=1e-12)
    assert not probabilities


def test_one_and_two_copies_of_many_eigenvalues():
    assert SchurWeyl([1 / 7] * 7, 1).table().probabilities == pytest.approx([1.0])
    assert SchurWeyl([1 / 7] * 7, 2).table().probabilities == pytest.approx([4 / 7, 3 / 7])


@given(st.lists(st.integers(0, 9), min_size=1, max_size=5).filter(any), st.integers(1, 14))
@settings(max_examples=60, deadline=None)
def test_order_support_and_sum(weights, copies):
    law = SchurWeyl([Fraction(w, sum(weights)) for w in weights], copies)
    table = law.table()
    rank = sum(w > 0 for w in weights)
    assert len(table.shapes) == support_size(copies, rank) == count_shapes(copies, rank)
    assert np.array_equal(table.shapes[:, :rank], all_shapes(copies, rank))
    assert not table.shapes[:, rank:].any()
    assert table.probabilities.sum() == pytest.approx(1.0, abs=1e-13)


def test_down_steps_lead_to_the_law_of_fewer_copies():
    spectrum = [0.4, 0.4, 0.15, 0.05]
    above, below = SchurWeyl(spectrum, 21).table(), SchurWeyl(spectrum, 20).table()
    index = {tuple(shape): k for k, shape in enumerate(below.shapes)}
    pushed = np.zeros(len(below.shapes))
    for shape, weight, down in zip(above.shapes, above.probabilities, down_probabilities(above.shapes), strict=True):
        for row in np.flatnonzero(down):
            pushed[index[tuple(shape - np.eye(4, dtype=int)[row])]] += weight * down[row]
    assert pushed == pytest.approx(below.probabilities, rel=1e-12)


@pytest.mark.parametrize(
    ("spectrum", "copies"),
    [
        (geometric(4, 0.5), 100),
        ([0.7, 0.3 - 1e-10, 1e-10], 200),
        ([0.4, 0.4, 0.2], 150),
        (geometric(6, 0.8), 30),
        ([0.3, 0.2, 0.1, 0.1, 0.1, 0.1, 0.05, 0.05], 20),
    ],
)
def test_rare_shapes_have_eleven_digits(spectrum, copies):
    """Spot checks against the bialternant in arbitrary precision, the rarest shapes among them."""
    law = SchurWeyl(spectrum, copies)
    table = law.table()
    assert table.probabilities.sum() == pytest.approx(1.0, abs=1e-11)
    rng = np.random.default_rng(1)
    rarest = np.argsort(table.log_probabilities)[:5]
    for k in [*rarest, *rng.choice(len(table.shapes), 20)]:
        exact = precise_logpmf(law.spectrum.tolist(), table.shapes[k].tolist(), digits=30)
        assert table.log_probabilities[k] == pytest.approx(exact, rel=2e-15, abs=1e-11)


def test_agrees_with_single_shapes():
    law = SchurWeyl([0.35, 0.35, 0.2, 0.1], 60)
    table = law.table()
    assert table.log_probabilities == pytest.approx(law.logpmf(table.shapes), abs=1e-10)


def test_published_mean_rows(check_values):
    # First row: Its, Tracy, Widom 2001; recomputed exactly.
    expected = check_values("mean row shifts E lambda_i - n p_i, p=(.6,.3,.1), n=120")
    law = SchurWeyl([0.6, 0.3, 0.1], 120)
    assert law.table().mean() - [72, 36, 12] == pytest.approx(expected, abs=5e-6)
    assert law.mean() - [72, 36, 12] == pytest.approx(expected, abs=5e-6)


def test_published_first_row_of_uniform_spectra(check_values):
    # Johansson 2001: (E row_1 - n/d)/sqrt(n) tends to the mean largest eigenvalue of the traceless GUE / sqrt(d).
    limits = check_values("uniform spectrum: limit of (E lambda_1 - n/d)/sqrt(n), d=2,3,4")
    for d, copies, limit in zip((2, 3, 4), (2500, 250, 75), limits, strict=True):
        near, nearer = (
            (SchurWeyl(maximally_mixed(d), n).moments(exact=True).mean[0] - n / d) / math.sqrt(n)
            for n in (copies, 4 * copies)
        )
        # The distance from the limit falls like 1/sqrt(n): four times the copies, half the distance.
        assert 2 * nearer - near == pytest.approx(limit, abs=0.006)


def test_published_plug_in_bias(check_values):
    # Limit -1.13547 over n; recomputed exactly at n = 1600.
    expected = check_values("plug-in entropy bias times n, p=(.7,.3), n=1600")

    def entropy(shapes):
        frequencies = shapes / 1600
        return -(frequencies * np.log(np.where(shapes > 0, frequencies, 1.0))).sum(axis=1)

    truth = -(0.7 * math.log(0.7) + 0.3 * math.log(0.3))
    bias = SchurWeyl([0.7, 0.3], 1600).expect(entropy) - truth
    assert 1600 * bias == pytest.approx(expected, abs=5e-4)


def test_published_variance_of_the_purity_estimate(check_values):
    # Exact enumeration, n = 10, p = (.7, .3).
    expected = check_values("variance of the unbiased purity estimate, p=(.7,.3), one diagram n=10")

    def purity(shapes):
        return (shapes**2 - (2 * np.arange(2) + 1) * shapes).sum(axis=1) / 90

    law = SchurWeyl([0.7, 0.3], 10)
    assert law.expect(purity) == pytest.approx(0.58, abs=1e-13)
    assert law.expect(lambda shapes: (purity(shapes) - 0.58) ** 2) == pytest.approx(expected, abs=5e-8)


def test_squared_error_of_the_uniform_spectrum_is_near_its_limit():
    # The limit of n E |rows/n - p|^2 is d - 1/d (O'Donnell and Wright 2016 bound it by d).
    near, nearer = (
        SchurWeyl(maximally_mixed(3), n).expect(lambda shapes, n=n: ((shapes / n - 1 / 3) ** 2).sum(axis=1) * n)
        for n in (150, 600)
    )
    # The distance from the limit falls like 1/sqrt(n): four times the copies, half the distance.
    assert 2 * nearer - near == pytest.approx(3 - 1 / 3, abs=0.02)
    assert near < nearer < 3


def test_expectations_do_not_depend_on_the_batches(monkeypatch):
    law = SchurWeyl([0.5, 0.3, 0.2], 40)
    table = law.table()

    def powers(shapes):
        return np.stack([shapes.astype(float), shapes.astype(float) ** 2], axis=1)

    monkeypatch.setattr(table_module, "SHAPES_AT_ONCE", 7)
    assert law.expect(powers) == pytest.approx(table.expect(powers), rel=1e-13)
    assert table.expect(powers)[0] == pytest.approx(table.mean(), rel=1e-14)
    assert law.table().log_probabilities == pytest.approx(table.log_probabilities, abs=1e-12)


def test_moments_of_the_table():
    table = SchurWeyl([0.5, 0.3, 0.2], 12).table()
    mean = sum(p * shape for p, shape in zip(table.probabilities, table.shapes, strict=True))
    second = sum(p * np.outer(shape, shape) for p, shape in zip(table.probabilities, table.shapes, strict=True))
    assert table.mean() == pytest.approx(mean, rel=1e-13)
    assert table.cov() == pytest.approx(second - np.outer(mean, mean), abs=1e-11)


def test_law_of_one_row_is_the_marginal_of_the_table():
    law = SchurWeyl([0.5, 0.3, 0.1, 0.1], 30)
    table = law.table()
    for row in (1, 2, 4):
        marginal = law.row_law(row)
        sums = np.bincount(table.shapes[:, row - 1], weights=table.probabilities)
        assert np.array_equal(marginal.values, np.unique(table.shapes[:, row - 1]))
        assert marginal.probabilities == pytest.approx(sums[marginal.values], rel=1e-12)
        assert marginal.mean() == pytest.approx(table.mean()[row - 1], rel=1e-12)
        assert marginal.variance() == pytest.approx(table.cov()[row - 1, row - 1], rel=1e-10)
    assert law.row_law(1).cdf(30) == pytest.approx(1.0, abs=1e-12)
    assert law.row_law(1).cdf(7) == 0.0


def test_law_of_a_linear_statistic():
    law = SchurWeyl([0.6, 0.4, 0.0], 9)
    total_spin = law.linear_law([1, -1, 0])
    assert total_spin.values.tolist() == [1, 3, 5, 7, 9]
    assert total_spin.probabilities == pytest.approx([law.pmf(((9 + j) // 2, (9 - j) // 2)) for j in (1, 3, 5, 7, 9)])
    assert law.linear_law([1, 1, 1]).values.tolist() == [9]


def test_top_row_of_long_words_in_two_letters():
    # Ballot numbers (reflection principle): f = (2k - n + 1) / (k + 1) binom(n, k), and s = (2k - n + 1) / 2^n.
    copies = 1000
    law = SchurWeyl([0.5, 0.5], copies).row_law(1)
    exact = [
        Fraction(math.comb(copies, k) * (2 * k - copies + 1) ** 2, (k + 1) * 2**copies) for k in law.values.tolist()
    ]
    assert law.probabilities == pytest.approx([float(p) for p in exact], rel=1e-11)


# --- memory ----------------------------------------------------------------------------------------------------


def test_tables_beyond_the_budget_are_refused_with_their_size():
    law = SchurWeyl(geometric(4, 0.5), 100)
    with pytest.raises(MemoryBudgetError, match=r"8037 shapes need 7.\d+e\+05 bytes"):
        law.table(max_bytes=1e5)
    with pytest.raises(MemoryBudgetError, match="max_bytes=1e\\+05"):
        law.support(max_bytes=1e5)
    with pytest.raises(MemoryBudgetError, match="100 copies of rank 4"):
        law.expect(lambda shapes: shapes, max_bytes=1e3)


@pytest.mark.parametrize(("d", "copies"), [(16, 10**6), (4, 10**9), (2, 10**12), (3, 10**15)])
def test_huge_tables_are_refused_at_once(d, copies):
    law = SchurWeyl(maximally_mixed(d), copies)
    for method in (law.table, law.support, law.row_law):
        with pytest.raises(MemoryBudgetError, match=f"got {copies} copies of rank {d}"):
            method()


@pytest.mark.parametrize(("d", "copies"), [(3, 120), (4, 60), (6, 24), (8, 20), (12, 10)])
def test_working_memory_stays_within_what_is_stated(d, copies):
    spectrum = geometric(d, 0.8)
    tracemalloc.start()
    for _ in slices(spectrum, copies):
        pass
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    # Python objects that hold no numbers come on top, some tens of kilobytes.
    assert peak <= last_layer_size(copies, d)[0] + 2e5


def test_tables_of_pure_and_two_level_states_of_many_copies():
    assert SchurWeyl([1.0, 0.0], 10**12).table().probabilities == pytest.approx([1.0])
    table = SchurWeyl([0.9, 0.1], 10**5).table()
    assert len(table.shapes) == 50_001
    assert table.probabilities.sum() == pytest.approx(1.0, abs=1e-11)
    assert table.log_probabilities.min() < -40_000


# --- the tree of tails ------------------------------------------------------------------------------------------


def test_tails_list_every_diagram_below_the_second_row():
    tails = Tails.below(3, 12)
    tails.grow()
    tails.grow()
    rows = tails.rows().tolist()
    expected = [[a, b] for a in range(4) for b in range(a + 1) if a + b <= 6]
    assert rows == expected
    found = tails.find(np.array(expected), np.zeros(len(expected), dtype=int), 0)
    assert found.tolist() == list(range(len(expected)))
    for row in (3, 4):
        for upper, lower in tails.box_removals(tails.rows(), row):
            difference = tails.rows()[upper] - tails.rows()[lower]
            assert (difference == np.eye(2, dtype=int)[row - 3]).all()


# --- arguments -------------------------------------------------------------------------------------------------


def test_functions_must_return_one_entry_for_each_shape():
    law = SchurWeyl([0.6, 0.4], 6)
    with pytest.raises(ArgumentValueError, match="one entry for each of 4 shapes, got shape \\(2,\\)"):
        law.expect(lambda shapes: np.ones(2))
    with pytest.raises(ArgumentValueError, match="one entry"):
        law.table().expect(lambda shapes: 1.0)


@pytest.mark.parametrize("weights", [[1, 2, 3], [[1, 2]], 3])
def test_weights_must_match_the_spectrum(weights):
    with pytest.raises(ArgumentValueError, match="weights must have shape \\(2,\\)"):
        SchurWeyl([0.6, 0.4], 6).linear_law(weights)


def test_weights_must_be_integers():
    with pytest.raises(ArgumentTypeError, match="weights must be integers"):
        SchurWeyl([0.6, 0.4], 6).linear_law([0.5, 1.0])


@pytest.mark.parametrize("row", [0, 3])
def test_row_must_exist(row):
    with pytest.raises(ArgumentValueError, match="row must be at"):
        SchurWeyl([0.6, 0.4], 6).row_law(row)


def test_reprs_are_short():
    law = SchurWeyl([0.6, 0.4], 6)
    assert repr(law.table()) == "LawTable(4 shapes of 6 boxes)"
    assert repr(law.row_law(1)) == "StatisticLaw(4 values from 3 to 6)"
    assert YoungDiagram(law.table().shapes[0]) == YoungDiagram((6,))

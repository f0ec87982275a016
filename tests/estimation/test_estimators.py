"""The named estimators."""

import inspect
import math

import numpy as np
import pytest

from entropest.diagrams import YoungDiagram
from entropest.errors import NotCoveredError
from entropest.estimation import ESTIMATORS, Continuation, Corrected, Estimator, PlugIn
from entropest.estimation.estimators import Jackknife
from entropest.estimation.power_sums import continuation_jet, continuation_power_sum, entropy_continuation
from entropest.functionals import (
    ChiSquare,
    MinEntropy,
    PowerSum,
    RelativeEntropy,
    Renyi,
    Tsallis,
    Varentropy,
    VonNeumann,
)
from entropest.law.limits import plug_in_bias
from entropest.law.schur_weyl import SchurWeyl
from entropest.records import DiagramCounts

ONE = DiagramCounts({"60+30+10": 1}, dim=4)


def mean_over_diagrams(estimator, spectrum, copies):
    table = SchurWeyl(spectrum, copies).table()
    records = [DiagramCounts({tuple(r for r in row if r): 1}, dim=len(spectrum)) for row in table.shapes.tolist()]
    return sum(p * estimator(record) for p, record in zip(table.probabilities, records, strict=True))


def test_every_estimator_says_where_it_comes_from():
    posteriors = {"posterior mean", "averaged posterior", "split posterior"}
    assert {"plug-in", "corrected", "jackknife", "continuation", "likelihood", "moment fit"} | posteriors <= set(
        ESTIMATORS
    )
    for make in ESTIMATORS.values():
        text = inspect.getdoc(make)
        assert all(word in text for word in ("Source:", "Cost:", "Regime:"))
        estimator: Estimator = make(VonNeumann())
        assert isinstance(estimator(ONE), float)


def test_plug_in_is_rows_over_copies():
    assert PlugIn()(ONE) == VonNeumann()([0.6, 0.3, 0.1])
    several = DiagramCounts({"6+4": 2, "9+1": 1, "5+3+2": 1})
    assert PlugIn(PowerSum(2))(several) == pytest.approx(PowerSum(2)([0.65, 0.3, 0.05]))
    assert PlugIn(VonNeumann(base=2))(ONE) == pytest.approx(VonNeumann()([0.6, 0.3, 0.1]) / math.log(2))


def test_plug_in_pads_to_the_reference():
    assert PlugIn(ChiSquare([0.4, 0.3, 0.2, 0.1]))(ONE) == pytest.approx(0.1 + 0.0 + 0.05 + 0.1)


def test_corrected_takes_the_first_order_bias_off():
    assert Corrected()(ONE) == pytest.approx(PlugIn()(ONE) - plug_in_bias([0.6, 0.3, 0.1], 100), rel=1e-8)
    tied = DiagramCounts({"50+50": 1})
    assert Corrected()(tied) == pytest.approx(math.log(2) + 1.5 / 100, rel=1e-8)


def test_corrected_has_a_much_smaller_bias():
    p = [0.5, 0.3, 0.2]
    truth = VonNeumann()(p)
    plug_in = abs(mean_over_diagrams(PlugIn(), p, 60) - truth)
    corrected = abs(mean_over_diagrams(Corrected(), p, 60) - truth)
    continuation = abs(mean_over_diagrams(Continuation(), p, 60) - truth)
    assert corrected < 0.15 * plug_in
    assert continuation < 1e-3 * plug_in


def test_corrected_refuses_kinks():
    for functional in (MinEntropy(), RelativeEntropy([0.5, 0.3, 0.2])):
        with pytest.raises(NotCoveredError, match=f"needs a smooth functional, not the {functional.name}"):
            Corrected(functional)(ONE)


def test_continuation_counts_one_row_more_up_to_the_dimension():
    rows = np.array([60, 30, 10])
    assert Continuation()(ONE) == pytest.approx(float(entropy_continuation(rows, 4)))
    three = DiagramCounts({"60+30+10": 1}, dim=3)
    assert Continuation()(three) == pytest.approx(float(entropy_continuation(rows, 3)))
    unknown = DiagramCounts({"60+30+10": 1})
    assert Continuation()(unknown) == Continuation()(ONE)


def test_continuation_of_power_sums():
    power = float(continuation_power_sum(np.array([60, 30, 10]), 2.5, 4))
    assert Continuation(PowerSum(2.5))(ONE) == pytest.approx(power)
    assert Continuation(Tsallis(2.5))(ONE) == pytest.approx((1 - power) / 1.5)
    assert Continuation(Renyi(2.5))(ONE) == pytest.approx(math.log(power) / -1.5)
    assert Continuation(Renyi(2.5, base=2))(ONE) == pytest.approx(math.log2(power) / -1.5)
    jet = continuation_jet(np.array([60, 30, 10]), 4)
    assert Continuation(Varentropy())(ONE) == pytest.approx(2 * jet[2] - jet[1] ** 2)


def test_continuation_averages_power_sums_over_blocks_of_all_sizes():
    """The purity does not depend on the rows counted: an average over copies of the value of each diagram."""
    record = DiagramCounts({"6+4": 2, "15+5": 1, "30": 1})
    values = [float(continuation_power_sum(np.array(r), 2.0, 2)) for r in ([6, 4], [6, 4], [15, 5], [30, 0])]
    assert Continuation(PowerSum(2))(record) == pytest.approx(np.dot([10, 10, 20, 30], values) / 70)


def test_continuation_counts_the_further_row_in_one_share():
    """m equal blocks: the rows seen in the record in m - 1 of them, one more in one of them."""
    record = DiagramCounts({"20+5": 3, "25": 1}, dim=3)
    rows = np.array([[20, 5, 0], [25, 0, 0]])
    seen = np.dot([3, 1], entropy_continuation(rows, 2)) / 4
    further = np.dot([3, 1], entropy_continuation(rows, 3)) / 4
    assert Continuation()(record) == pytest.approx(0.75 * seen + 0.25 * further)


@pytest.mark.parametrize("functional", [MinEntropy(), ChiSquare([0.5, 0.5]), Renyi(0), Renyi(65), PowerSum(0)])
def test_continuation_refuses_what_is_not_made_of_power_sums(functional):
    with pytest.raises(NotCoveredError, match="no continuation of power sums gives"):
        Continuation(functional)(ONE)


@pytest.mark.parametrize("name", list(ESTIMATORS))
@pytest.mark.parametrize("text", ["1", "7", "1+1", "1+1+1+1", "1000000"])
def test_no_estimator_fails_at_the_edges(name, text):
    for dim in (4, None):
        value = ESTIMATORS[name](VonNeumann())(DiagramCounts({text: 2}, dim=dim))
        assert math.isfinite(value)


def test_jackknife_is_the_average_over_all_ways_to_drop_a_copy():
    """A plain twin: every standard tableau is as likely, and the copy to be dropped holds its last box."""
    record = DiagramCounts({"3+2": 1, "2+1": 2}, dim=2)
    blocks = [YoungDiagram((3, 2)), YoungDiagram((2, 1)), YoungDiagram((2, 1))]
    total, without = 11, 0.0
    for block in blocks:
        for row in range(2):
            rows = list(block.rows)
            rows[row] -= 1
            if rows[0] >= rows[1]:
                share = YoungDiagram(rows).standard_tableaux / block.standard_tableaux
                left = np.array([7, 4]) - np.eye(2)[row]
                without += block.size / total * share * VonNeumann()(left / 10)
    assert Jackknife()(record) == pytest.approx(11 * VonNeumann()([7 / 11, 4 / 11]) - 10 * without)


def test_jackknife_removes_the_bias_of_first_order():
    """Exact enumeration: the bias falls like n^-2 for distinct eigenvalues and stays below that of the plug-in."""
    spectrum = [0.7, 0.3]
    truth = VonNeumann()(spectrum)
    biases = [mean_over_diagrams(Jackknife(), spectrum, n) - truth for n in (60, 120)]
    assert abs(biases[1]) < 0.35 * abs(biases[0])
    assert abs(biases[0]) < 0.1 * abs(mean_over_diagrams(PlugIn(), spectrum, 60) - truth)


def test_jackknife_of_a_power_sum_is_nearly_unbiased():
    """The plug-in purity has a bias of the form a/n exactly in 1/n up to order 2: what is left is of order 1/n^2."""
    spectrum = [0.6, 0.3, 0.1]
    truth = PowerSum(2)(spectrum)
    left = [mean_over_diagrams(Jackknife(PowerSum(2)), spectrum, n) - truth for n in (10, 20)]
    plain = [mean_over_diagrams(PlugIn(PowerSum(2)), spectrum, n) - truth for n in (10, 20)]
    assert abs(left[0]) < 0.2 * abs(plain[0])
    assert abs(left[1]) < 0.2 * abs(plain[1])


def test_jackknife_keeps_what_is_infinite_or_has_one_copy():
    reference = RelativeEntropy([1.0, 0.0, 0.0])
    assert Jackknife(reference)(DiagramCounts({"3+1": 1}, dim=3)) == math.inf
    assert Jackknife(RelativeEntropy([0.5, 0.3, 0.2]))(DiagramCounts({"3": 1}, dim=3)) == pytest.approx(math.log(2))
    assert Jackknife()(DiagramCounts({"1": 1})) == 0.0

"""estimate: the choice of the way, the result, and what its notes say."""

import dataclasses
import json
import math

import pytest

from entropest.errors import ArgumentTypeError, ArgumentValueError, NotCoveredError
from entropest.estimation import Continuation, Corrected, Estimate, PlugIn, SplitPosterior, estimate
from entropest.estimation.identified import entropy_range_from_purity
from entropest.estimation.moments import power_sum_limits
from entropest.estimation.order_values import possible_range
from entropest.functionals import (
    ChiSquare,
    MinEntropy,
    PowerSum,
    RelativeEntropy,
    Renyi,
    TraceDistance,
    Tsallis,
    Varentropy,
    VonNeumann,
)
from entropest.law.schur_weyl import SchurWeyl
from entropest.records import DiagramCounts
from entropest.spectra import geometric

LARGE = DiagramCounts({"60+30+10": 1}, dim=4)
PAIRS = DiagramCounts.from_swap(symmetric=2100, antisymmetric=900, dim=4)
FOURS = DiagramCounts({"4": 700, "3+1": 600, "2+2": 130, "2+1+1": 65, "1+1+1+1": 5}, dim=4)
ALL = [
    VonNeumann(),
    Renyi(0.5),
    Renyi(2),
    Tsallis(3),
    PowerSum(2),
    Varentropy(),
    MinEntropy(),
    TraceDistance([0.25] * 4),
]


def test_a_large_diagram_goes_through_the_split_posterior():
    found = estimate(LARGE)
    assert found.method == "split posterior"
    assert found.value == SplitPosterior()(LARGE)
    assert "least error" in found.reason
    assert found.interval[0] < found.value < found.interval[1]
    assert (found.copies, found.blocks, found.identified, found.unit) == (100, 1, True, "nat")
    assert found.notes == ()


@pytest.mark.parametrize(
    ("functional", "method"),
    [
        (Renyi(0.5), "continuation"),
        (Renyi(1), "split posterior"),
        (Tsallis(2.5), "continuation"),
        (PowerSum(2), "continuation"),
        (Varentropy(), "continuation"),
        (MinEntropy(), "plug-in"),
        (Renyi(math.inf), "plug-in"),
        (Renyi(80), "plug-in"),
        (RelativeEntropy([0.4, 0.3, 0.2, 0.1]), "plug-in"),
        (ChiSquare([0.4, 0.3, 0.2, 0.1]), "plug-in"),
        (TraceDistance([0.4, 0.3, 0.2, 0.1]), "plug-in"),
    ],
)
def test_the_method_is_resolved_by_the_functional(functional, method):
    found = estimate(LARGE, functional)
    assert found.method == method
    assert found.interval[0] <= found.value <= found.interval[1]
    assert any("no correction" in note for note in found.notes) == (method == "plug-in")
    assert found.reason
    assert f"method: {method}, {found.reason} (1 block, 100 copies)" in str(found)


@pytest.mark.parametrize("name", ["plug-in", "corrected", "continuation"])
def test_named_methods_give_their_own_value(name):
    value = {"plug-in": PlugIn, "corrected": Corrected, "continuation": Continuation}[name]()(LARGE)
    found = estimate(LARGE, method=name)
    assert (found.method, found.reason) == (name, "")
    assert found.value == pytest.approx(value)
    assert found.interval[0] <= value <= found.interval[1]


def test_pairs_do_not_identify_the_entropy():
    found = estimate(PAIRS)
    assert not found.identified
    assert found.value is None
    assert found.standard_error is None
    limits = power_sum_limits(PAIRS, 2, error=0.05)
    assert found.interval[0] == pytest.approx(entropy_range_from_purity(limits.upper, 4).lower)
    assert found.interval[1] == pytest.approx(entropy_range_from_purity(limits.lower, 4).upper)
    assert "fix only Tr rho^2, not the entropy" in found.notes[0]
    assert "from 0.9801 to 1.134 nat" in found.notes[1]


def test_pairs_of_unknown_dimension_have_no_upper_end():
    found = estimate(DiagramCounts.from_swap(symmetric=2100, antisymmetric=900))
    assert found.interval[1] == math.inf
    assert found.interval[0] == estimate(PAIRS).interval[0]
    assert any("without the dimension nothing bounds the entropy" in note for note in found.notes)


def test_pairs_of_qubits_fix_the_entropy():
    """In two dimensions the entropy is a function of the purity."""
    found = estimate(DiagramCounts.from_swap(symmetric=900, antisymmetric=100, dim=2))
    larger = (1 + math.sqrt(2 * 0.8 - 1)) / 2
    assert found.identified
    assert found.value == pytest.approx(VonNeumann()([larger, 1 - larger]), abs=1e-9)


def test_pairs_give_the_renyi_entropy_of_order_two():
    found = estimate(PAIRS, Renyi(2), base=2)
    assert found.method == "power sum"
    assert found.value == pytest.approx(-math.log2(0.4))
    limits = power_sum_limits(PAIRS, 2, error=0.05)
    assert found.interval == pytest.approx((-math.log2(limits.upper), -math.log2(limits.lower)))
    deviation = 2 * math.sqrt(0.7 * 0.3 / 3000)
    assert found.standard_error == pytest.approx(deviation / 0.4 / math.log(2), rel=2e-3)
    assert estimate(PAIRS, PowerSum(2)).value == pytest.approx(0.4)
    assert estimate(PAIRS, Tsallis(2)).value == pytest.approx(0.6)


def test_blocks_as_large_as_the_dimension_identify_the_entropy():
    found = estimate(FOURS)
    assert found.identified
    assert found.method == "middle of moment range"
    assert found.interval[0] < found.value < found.interval[1]
    assert any("its bias can reach" in note for note in found.notes)
    wider = estimate(DiagramCounts(dict(FOURS.items()), dim=9))
    assert not wider.identified
    assert wider.value is None


def test_every_order_up_to_the_block_size_is_identified():
    for order in (2, 3, 4):
        for make in (Renyi, Tsallis, PowerSum):
            found = estimate(FOURS, make(order))
            assert found.method == "power sum"
            assert found.interval[0] <= found.value <= found.interval[1]


@pytest.mark.parametrize(
    "functional", [Renyi(0.5), Renyi(5), Renyi(2.5), Varentropy(), MinEntropy(), ChiSquare([0.25] * 4)]
)
def test_what_small_blocks_do_not_give_is_refused(functional):
    with pytest.raises(NotCoveredError, match=f"blocks of 4 copies do not give the {functional.name}: it needs blocks"):
        estimate(FOURS, functional)


def test_a_named_method_on_small_blocks_says_that_it_is_not_to_be_trusted():
    found = estimate(PAIRS, method="plug-in")
    assert found.value == PlugIn()(PAIRS)
    assert not found.identified
    assert found.interval == estimate(PAIRS).interval
    assert "too small for the plug-in value" in found.notes[0]


def test_orders_zero_and_one_need_no_data_or_cannot_be_had():
    found = estimate(PAIRS, PowerSum(1))
    assert (found.value, found.interval, found.method) == (1.0, (1.0, 1.0), "exact")
    for functional in (Renyi(0), Tsallis(0), PowerSum(0)):
        with pytest.raises(NotCoveredError, match="no record fixes the rank"):
            estimate(LARGE, functional)


def test_small_blocks_beside_a_large_diagram_are_left_out():
    mixed = LARGE + DiagramCounts({"2": 7, "1+1": 3})
    found = estimate(mixed)
    assert found.value == estimate(LARGE).value
    assert (found.blocks, found.copies) == (11, 120)
    assert found.notes[0] == "10 small blocks were left out"


def test_a_few_large_blocks_beside_many_small_ones_are_used_through_their_power_sums():
    mixed = DiagramCounts({"12+6+2": 1, "2": 700, "1+1": 300}, dim=3)
    found = estimate(mixed)
    assert found.method == "middle of moment range"
    pairs = estimate(DiagramCounts({"2": 700, "1+1": 300}, dim=3), Renyi(2)).value
    assert estimate(mixed, Renyi(2)).value == pytest.approx(pairs, abs=0.02)


def test_several_blocks_state_the_bracket_of_their_average():
    rows = SchurWeyl(geometric(4, 0.5), 30).rvs(8, rng=4)
    found = estimate(DiagramCounts.from_rows(rows, dim=4))
    note = next(note for note in found.notes if note.startswith("averaging blocks"))
    low, high = (float(part.split()[0]) for part in (note.split("all rows, ")[1].split(" and ")))
    assert found.interval[0] < low < found.value <= high + 1e-3 < found.interval[1]


def test_the_cap_at_log_d_is_noted():
    flat = DiagramCounts({"5+5": 1}, dim=2)
    assert Continuation()(flat) > math.log(2)
    assert 0.5 < estimate(flat).value < math.log(2)
    found = estimate(flat, method="continuation")
    assert found.value == math.log(2)
    assert found.interval[1] == math.log(2)
    assert any("was capped at 0.6931" in note for note in found.notes)
    assert any("not studied for fewer than 20 copies" in note for note in found.notes)


def test_an_unknown_dimension_is_noted():
    found = estimate(DiagramCounts({"60+30+10": 1}))
    assert found.value == SplitPosterior()(DiagramCounts({"60+30+10": 1}))
    assert found.value == pytest.approx(estimate(LARGE).value, abs=0.002)
    assert found.interval[1] == math.inf
    closed = estimate(DiagramCounts({"60+30+10": 1}, dim=3)).interval[1]
    text = " ".join(found.notes)
    assert "one row more than the 3 seen is counted, two more by posteriors" in text
    assert f"the upper end is {closed:.4g} nat" in text
    assert math.isfinite(estimate(DiagramCounts({"60+30+10": 1}), Renyi(2)).interval[1])


def test_a_power_sum_that_is_not_positive_gives_no_renyi_entropy():
    flat = DiagramCounts({"+".join(["1"] * 24): 1})
    found = estimate(flat, Renyi(2))
    assert found.value is None
    assert found.interval[1] == math.inf
    assert any("not positive" in note for note in found.notes)
    pairs = estimate(DiagramCounts({"1+1": 6, "2": 4}), Renyi(2))
    assert pairs.value is None
    assert estimate(DiagramCounts({"1+1": 6, "2": 4}, dim=3), Renyi(2)).value == pytest.approx(math.log(3))


def test_divergences_that_are_certainly_infinite_are_reported_as_such():
    found = estimate(LARGE, RelativeEntropy([0.6, 0.4, 0.0, 0.0]))
    assert found.value == math.inf
    assert found.interval == (math.inf, math.inf)
    assert found.to_dict()["value"] is None
    assert any("the relative entropy is infinite" in note for note in found.notes)
    possible = estimate(LARGE, RelativeEntropy([0.6, 0.3, 0.1, 0.0]))
    assert math.isfinite(possible.value)
    assert possible.interval[1] == math.inf


def test_references_must_have_the_dimension_of_the_record():
    with pytest.raises(ArgumentValueError, match="as many eigenvalues as the record has dimensions, 4, got 2"):
        estimate(LARGE, TraceDistance([0.5, 0.5]))
    with pytest.raises(ArgumentValueError, match="as many eigenvalues as the record has dimensions, 3, got 2"):
        estimate(DiagramCounts({"60+30+10": 1}), TraceDistance([0.5, 0.5]))
    assert estimate(DiagramCounts({"60+40": 1}), TraceDistance([0.5, 0.3, 0.2])).value == pytest.approx(0.2)


@pytest.mark.parametrize("base", [2, 10, 0.5])
def test_bases_scale_the_whole_result(base):
    for record in (LARGE, FOURS, PAIRS):
        nats, other = estimate(record), estimate(record, base=base)
        scale = math.log(base)
        assert other.interval == pytest.approx(tuple(sorted(end / scale for end in nats.interval)))
        own = estimate(record, VonNeumann(base=base))
        assert own.interval == pytest.approx(other.interval)
        assert (own.unit, own.notes) == (other.unit, other.notes)
        if nats.value is not None:
            assert other.value == pytest.approx(nats.value / scale)
    assert estimate(LARGE, Varentropy(), base=2).value == pytest.approx(
        estimate(LARGE, Varentropy()).value / math.log(2) ** 2
    )
    assert estimate(LARGE, Varentropy(base=2)).unit == "bit^2"
    with pytest.raises(ArgumentValueError, match="base must not be given for the purity"):
        estimate(LARGE, PowerSum(2), base=2)


@pytest.mark.parametrize("functional", ALL, ids=repr)
@pytest.mark.parametrize("tallies", [{"1": 1}, {"9": 1}, {"1+1+1+1": 8}, {"8": 30}, {"8+8+8+8": 3}, {"1000000000": 1}])
def test_edges_give_a_result_inside_the_possible_range_or_a_clear_refusal(functional, tallies):
    record = DiagramCounts(tallies, dim=4)
    try:
        found = estimate(record, functional)
    except NotCoveredError as error:
        assert "blocks of" in str(error)  # noqa: PT017
        return
    possible = possible_range(functional, 4)
    assert possible.lower - 1e-12 <= found.interval[0] <= found.interval[1] <= possible.upper + 1e-12
    if found.value is not None:
        assert found.interval[0] - 1e-12 <= found.value <= found.interval[1] + 1e-12


def test_one_dimension_has_no_entropy():
    found = estimate(DiagramCounts({"3": 2, "1": 5}, dim=1))
    assert (found.value, found.interval) == (0.0, (0.0, 0.0))


def test_huge_dimensions_cost_no_memory():
    record = DiagramCounts({"60+40": 1}, dim=10**9)
    found = estimate(record)
    assert found.interval[0] > 0.5
    assert found.interval[1] > found.interval[0]
    assert estimate(record, Renyi(2)).value == pytest.approx(estimate(DiagramCounts({"60+40": 1}), Renyi(2)).value)


def test_a_diagram_of_fewer_copies_than_dimensions_does_not_fix_the_entropy():
    record = DiagramCounts({"20+7+3": 1}, dim=64)
    found = estimate(record)
    assert not found.identified
    assert found.value is None
    assert 0.0 < found.interval[0] < found.interval[1]
    assert any("do not fix the von Neumann entropy" in note for note in found.notes)
    assert estimate(record, method="continuation").value == Continuation()(record)
    assert estimate(record, Renyi(2)).identified
    assert estimate(record, Renyi(0.5)).interval[1] == pytest.approx(math.log(64))


def test_the_order_of_merging_does_not_matter():
    assert estimate(PAIRS + LARGE + FOURS) == estimate(FOURS + PAIRS + LARGE)
    assert estimate(PAIRS + PAIRS, Renyi(2)).value == pytest.approx(estimate(PAIRS, Renyi(2)).value)


def test_zero_eigenvalues_of_the_reference_dimension_change_nothing_seen():
    """A larger dimension raises the upper end only: it adds levels that were not seen."""
    four, six = DiagramCounts({"60+30+10": 1}, dim=4), DiagramCounts({"60+30+10": 1}, dim=6)
    small, large = estimate(four, method="continuation"), estimate(six, method="continuation")
    assert small.value == large.value
    assert small.interval[0] == large.interval[0]
    assert small.interval[1] < large.interval[1]


def test_levels_that_were_not_seen_hardly_move_the_split_posterior():
    small, large = (estimate(DiagramCounts({"60+30+10": 1}, dim=dim)) for dim in (4, 6))
    assert small.value == pytest.approx(large.value, abs=0.002)
    assert small.interval[0] == pytest.approx(large.interval[0], abs=0.002)
    assert small.interval[1] < large.interval[1]


def test_more_than_256_dimensions_go_through_continuation():
    record = DiagramCounts({"200+100+20": 1}, dim=300)
    found = estimate(record)
    assert (found.method, found.value) == ("continuation", Continuation()(record))
    assert "256 dimensions" in found.reason


def test_results_are_frozen_values_that_print_in_a_few_lines():
    found = estimate(DiagramCounts({"60+40": 1}, dim=2), base=2)
    assert str(found) == (
        "von Neumann entropy: 0.9853 bit\n95% interval: 0.9097 to 1 bit\nmethod: split posterior, "
        "the least error in trials over spectra, dimensions and sizes of large blocks (1 block, 100 copies)"
    )
    assert "not identified by this record" in str(estimate(PAIRS))
    with pytest.raises(dataclasses.FrozenInstanceError):
        found.value = 1.0
    with pytest.raises(TypeError):
        Estimate(1.0)


@pytest.mark.parametrize("record", [LARGE, PAIRS, FOURS, DiagramCounts({"30+10": 2})])
def test_dicts_are_plain_json_without_infinity(record):
    for functional in (VonNeumann(), Renyi(2, base=2)):
        found = estimate(record, functional)
        text = json.dumps(found.to_dict(), allow_nan=False)
        back = json.loads(text)
        assert back["schema"] == "entropest-estimate/1"
        assert back["functional"] == functional.name
        assert back["copies"] == record.copies
        assert set(back) == {"schema", *(f.name for f in dataclasses.fields(Estimate))}
        assert back["interval"][1] == (found.interval[1] if math.isfinite(found.interval[1]) else None)


@pytest.mark.parametrize(
    ("call", "error", "message"),
    [
        (lambda: estimate({"2": 3}), ArgumentTypeError, "counts must be a DiagramCounts or MomentCounts, got dict"),
        (lambda: estimate(LARGE, Renyi), ArgumentTypeError, "functional must be a functional such as VonNeumann"),
        (lambda: estimate(LARGE, method="best"), ArgumentValueError, 'method must be "auto" or one of plug-in'),
        (lambda: estimate(LARGE, confidence=1.5), ArgumentValueError, "confidence must lie strictly between 0 and 1"),
        (lambda: estimate(LARGE, base=1), ArgumentValueError, "base must be positive and different from 1"),
        (lambda: estimate(DiagramCounts({"1": 9}, dim=2)), NotCoveredError, "blocks of one copy say nothing"),
        (lambda: estimate(LARGE, MinEntropy(), method="corrected"), NotCoveredError, "needs a smooth functional"),
        (
            lambda: estimate(LARGE, MinEntropy(), method="continuation"),
            NotCoveredError,
            "no continuation of power sums",
        ),
    ],
)
def test_wrong_arguments_are_refused(call, error, message):
    with pytest.raises(error, match=message):
        call()

"""Certificates of whole records: bounds, claims, options, words, files."""

import json
import math
import re
from importlib import resources

import jsonschema
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from entropest import Certificate, DiagramCounts, MinEntropy, PowerSum, Renyi, SchurWeyl, VonNeumann, certify, recheck
from entropest.certification.expectation import expected_blocks
from entropest.certification.plan import Options, plan_entropy_tests
from entropest.certification.rules import ENTROPY_CAP, error_split, large_sizes
from entropest.errors import ArgumentTypeError, ArgumentValueError, NotCoveredError, RecheckError
from tests.certification.exact import SPECTRA, entropy, outcome_law


def draw(name: str, copies: int, blocks: int, generator: np.random.Generator) -> DiagramCounts:
    law = outcome_law(SPECTRA[name], copies)
    counts = generator.multinomial(blocks, np.array([float(p) for p in law.values()]))
    return DiagramCounts({diagram: int(count) for diagram, count in zip(law, counts, strict=True)})


@pytest.mark.parametrize(
    ("name", "copies", "blocks", "options", "least_median"),
    [
        ("geometric", 2, 3_000, {}, 0.945),
        ("geometric", 4, 150, {}, 0.895),
        ("geometric", 4, 1_500, {}, 1.0),
        ("geometric", 4, 15_000, {}, 1.08),
        ("geometric", 4, 1_500, {"anytime": True, "planned_blocks": 1_500}, 1.01),
        ("geometric", 4, 1_500, {"drifting": True}, 0.97),
        ("geometric", 6, 1_000, {}, 1.045),
        ("uniform qubit", 2, 30_000, {}, 0.68),
    ],
)
def test_median_bounds(name, copies, blocks, options, least_median):
    # common practice, no source: figures this library promises, lowered by two standard errors of a median of 40
    generator = np.random.default_rng(20260102)
    bounds = [certify(draw(name, copies, blocks, generator), **options).lower for _ in range(40)]
    assert np.median(bounds) >= least_median


@pytest.mark.parametrize("name", ["uniform qubit", "geometric", "uniform qutrit", "pure", "step", "tiny eigenvalue"])
@pytest.mark.parametrize(("copies", "blocks"), [(2, 60), (3, 400), (4, 1200)])
@pytest.mark.parametrize(
    "options", [{}, {"anytime": True}, {"anytime": True, "planned_blocks": 300}, {"drifting": True}]
)
def test_false_certificates_are_as_rare_as_stated(name, copies, blocks, options):
    """Confidence 80%, 150 records: P(Binomial(150, 0.2) > 55) < 10^-6 a cell, 72 cells."""
    generator = np.random.default_rng(20260103)
    truth = entropy(SPECTRA[name])
    records = (draw(name, copies, blocks, generator) for _ in range(150))
    assert sum(certify(record, confidence=0.8, **options).lower > truth for record in records) <= 55


def test_mixed_block_sizes_are_used_together():
    generator = np.random.default_rng(5)
    pairs, quadruples = draw("geometric", 2, 2000, generator), draw("geometric", 4, 2000, generator)
    both = certify(pairs + quadruples)
    assert {size for test in both.tests for size in test.block_sizes} == {2, 4}
    assert both.lower <= entropy(SPECTRA["geometric"])
    assert both.lower > min(certify(pairs).lower, certify(quadruples).lower)


def test_order_of_merging_does_not_matter():
    generator = np.random.default_rng(6)
    first, second = draw("geometric", 2, 200, generator), draw("geometric", 3, 300, generator)
    assert certify(first + second) == certify(second + first)


def test_error_split_and_large_blocks_depend_on_the_block_sizes_alone():
    assert error_split(0.05, 999) == (0.04, 0.01)
    assert error_split(0.05, 1000) == (0.025, 0.025)
    assert large_sizes({2: 10, 100: 20, 500: 9}) == {100, 500}
    assert large_sizes({2: 10, 100: 20, 500: 10}) == frozenset()
    assert large_sizes({20: 9}) == {20}
    assert large_sizes({19: 1, 20: 10}) == frozenset()


@given(
    st.dictionaries(st.integers(1, 300), st.integers(1, 3000), min_size=1, max_size=5),
    st.sampled_from([(True, False), (True, True)]),
    st.sampled_from([None, 2, 7]),
)
def test_errors_of_the_planned_tests_add_up_to_the_error(sizes, sides, dim):
    lower, upper = sides
    upper = upper and dim is not None and bool(large_sizes(sizes))
    tests = plan_entropy_tests(sizes, Options(error=0.05, lower=lower, upper=upper, dim=dim))
    if any(size >= 2 for size in sizes):
        assert sum(test.error for test in tests) == pytest.approx(0.05)
    used = {size for test in tests for size in test.block_sizes}
    assert used == {size for size in sizes if size >= 2}


@pytest.mark.parametrize(
    ("sizes", "options", "kinds"),
    [
        ({2: 100}, {}, ["score"]),
        ({4: 100}, {}, ["score", "identical-blocks"]),
        ({2: 100, 4: 60}, {}, ["score", "identical-blocks"]),
        ({2: 100, 4: 40}, {}, ["score", "tuned-e-value"]),
        ({9: 100}, {}, ["score", "tuned-e-value"]),
        ({500: 1}, {}, ["large-lower"]),
        ({500: 1}, {"dim": 2}, ["qubit-lower"]),
        ({500: 2}, {"dim": 2, "upper": True}, ["large-upper", "large-lower"]),
        ({500: 1, 4: 9}, {}, ["large-lower", "score", "identical-blocks"]),
        ({4: 100}, {"anytime": True}, ["mixture-e-value"]),
        ({4: 100}, {"anytime": True, "planned_blocks": {4: 80}}, ["identical-blocks"]),
        ({2: 100}, {"anytime": True, "planned_blocks": {2: 80}}, ["tuned-e-value"]),
        ({4: 100}, {"drifting": True}, ["tuned-e-value"]),
    ],
)
def test_which_tests_are_run(sizes, options, kinds):
    assert [test.kind for test in plan_entropy_tests(sizes, Options(error=0.05, **options))] == kinds


def test_one_large_diagram_uses_the_rows():
    record = DiagramCounts({(5710, 2860, 950, 480): 1}, dim=4)
    plain, trusting = certify(record), certify(record, trusted_dim=True)
    assert 1.0 < plain.lower < 1.06
    assert plain.upper is None
    assert plain.lower - 0.02 < trusting.lower < 1.06 < trusting.upper < 1.15
    assert certify(record, trusted_dim=True, at_most=1.2).met is True
    assert certify(record, trusted_dim=True, at_most=1.2).lower is None
    assert "dimension 4, which is believed" in str(trusting).replace("\n", " ")


def test_a_qubit_diagram_is_inverted_exactly():
    record = DiagramCounts({(520, 480): 1}, dim=2)
    certificate = certify(record, trusted_dim=True, at_least=0.69)
    assert certificate.met is True
    assert certificate.tests[0].kind == "qubit-lower"


@pytest.mark.parametrize("options", [{}, {"drifting": True}, {"anytime": True, "planned_blocks": 300}])
@pytest.mark.parametrize("expecting", [[0.9, 0.1], 2.5])
def test_false_certificates_stay_rare_whatever_is_expected(options, expecting):
    """Confidence 80%, 150 records of 300 blocks: P(Binomial(150, 0.2) > 55) < 10^-6 a cell, 18 cells."""
    generator = np.random.default_rng(20260107)
    for name, copies in (("uniform qubit", 9), ("geometric", 4), ("step", 2)):
        truth = entropy(SPECTRA[name])
        records = (draw(name, copies, 300, generator) for _ in range(150))
        wrong = sum(certify(r, confidence=0.8, expecting=expecting, **options).lower > truth for r in records)
        assert wrong <= 55


def test_expecting_the_truth_raises_the_bound():
    record = draw("geometric", 4, 15_000, np.random.default_rng(9))
    plain, expecting = certify(record), certify(record, expecting=[8 / 15, 4 / 15, 2 / 15, 1 / 15])
    assert expecting.lower > plain.lower
    assert certify(record, drifting=True, expecting=1.1).lower > certify(record, drifting=True).lower
    for wrong in (0.0, -1.0, 9.0):
        with pytest.raises(ArgumentValueError, match="expecting must be an entropy"):
            certify(record, expecting=wrong)


def test_expected_outcomes_are_whole_and_complete():
    for part in expected_blocks({2: 7, 4: 1001, 50: 3}, [0.5, 0.3, 0.2]):
        assert int(part.counts.sum()) == {2: 7, 4: 1001}[part.copies]
        expected = part.counts.sum() * SchurWeyl([0.5, 0.3, 0.2], part.copies).pmf(part.shapes)
        assert (abs(part.counts - expected) < 1.0).all()


def test_a_plan_is_a_number_or_names_every_size():
    record = DiagramCounts({(3,): 50, (2, 1): 60})
    bound = certify(record, anytime=True, planned_blocks=100).lower
    assert certify(record, anytime=True, planned_blocks={3: 100}).lower == bound
    mixed = record + DiagramCounts({(2,): 5})
    for planned, words in ((100, "must map each block size"), ({3: 9}, "2 is missing"), ({2: 0, 3: 9}, "at least 1")):
        with pytest.raises(ArgumentValueError, match=words):
            certify(mixed, anytime=True, planned_blocks=planned)


def test_single_copies_certify_nothing():
    certificate = certify(DiagramCounts({(1,): 1000}))
    assert certificate.lower == 0.0
    assert certificate.notes == ("blocks of 1 copies are not used by these tests",)


def test_claim_is_met_only_by_the_stored_bound():
    record = DiagramCounts.from_swap(symmetric=2064, antisymmetric=936)
    lower = certify(record).lower
    assert certify(record, at_least=lower).met is True
    assert certify(record, at_least=math.nextafter(lower, math.inf)).met is False
    assert certify(record).met is None


@given(st.integers(1, 200), st.integers(0, 200), st.floats(0.5, 0.999), st.floats(0.5, 0.999))
def test_bound_falls_with_confidence(symmetric, antisymmetric, first, second):
    record = DiagramCounts.from_swap(symmetric=symmetric, antisymmetric=antisymmetric)
    low, high = sorted([first, second])
    bolder, safer = certify(record, confidence=low), certify(record, confidence=high)
    if bolder.notes == safer.notes == ():
        assert safer.lower <= bolder.lower + 1e-9


def test_units_of_the_bound():
    record = DiagramCounts.from_swap(symmetric=2064, antisymmetric=936)
    nats, bits = certify(record), certify(record, VonNeumann(base=2), at_least=1.3)
    assert bits.unit == "bit"
    assert bits.lower * math.log(2.0) <= nats.lower
    assert bits.lower * math.log(2.0) == pytest.approx(nats.lower, rel=1e-14)
    assert bits.met is (bits.lower >= 1.3)


def test_renyi_2_and_purity_bounds():
    record = DiagramCounts.from_swap(symmetric=700, antisymmetric=300)
    purity, renyi = certify(record, PowerSum(2)), certify(record, Renyi(2))
    assert purity.lower < 0.4 < purity.upper
    assert renyi.lower == pytest.approx(-math.log(purity.upper))
    assert renyi.upper == pytest.approx(-math.log(purity.lower))
    assert certify(record, PowerSum(2), at_most=0.46).met is True
    assert certify(record, PowerSum(2), at_most=0.46).lower is None
    assert certify(record, Renyi(2), at_least=0.8).met is True
    assert certify(record, Renyi(2), at_least=0.95).met is False


def test_impossible_records_certify_nothing_and_say_so():
    record = DiagramCounts.from_swap(symmetric=10, antisymmetric=4000)
    for functional in (VonNeumann(), Renyi(2), PowerSum(2)):
        certificate = certify(record, functional, at_least=0.1)
        assert certificate.met is False or functional == PowerSum(2)
        assert not certificate.lower
    assert "fault in the measurement" in str(certify(record))
    assert certify(record).tests[0].lower == ENTROPY_CAP


@pytest.mark.parametrize(
    ("functional", "options", "message"),
    [
        (VonNeumann(), {"anytime": True, "drifting": True}, "cannot both be true"),
        (VonNeumann(), {"at_most": 1.0}, "at_most needs large diagrams"),
        (VonNeumann(), {"trusted_dim": True}, "needs a record with a dimension"),
        ("entropy", {}, "functional must be a functional"),
        (MinEntropy(), {}, "functional must be"),
        (Renyi(3), {}, "functional must be"),
        (Renyi(2), {"anytime": True}, "must be false"),
        (VonNeumann(base=0.5), {}, "base must be above 1"),
        (VonNeumann(), {"confidence": 1.5}, "confidence must lie strictly between 0 and 1, got 1.5"),
        (VonNeumann(), {"at_least": math.nan}, "at_least must be finite"),
        (PowerSum(2), {"at_least": 0.5, "at_most": 0.4}, "at_least must not exceed at_most"),
    ],
)
def test_refusals_name_the_rule(functional, options, message):
    record = DiagramCounts.from_swap(symmetric=10, antisymmetric=5)
    with pytest.raises((ArgumentValueError, ArgumentTypeError), match=message):
        certify(record, functional, **options)


def test_purity_needs_pairs():
    with pytest.raises(NotCoveredError, match="blocks of two copies, got sizes 3"):
        certify(DiagramCounts({(3,): 5}), PowerSum(2))


def test_paragraph_states_bound_claim_and_assumptions():
    record = DiagramCounts.from_swap(symmetric=2064, antisymmetric=936)
    text = str(certify(record, at_least=0.9))
    assert text.startswith("The von Neumann entropy is at least 0.972")
    assert "The claim (at least 0.9 nat) is met." in text.replace("\n", " ")
    for words in ("identical and independent", "All blocks hold the same state", "fixed before", "device-independent"):
        assert words in text.replace("\n  ", " ")
    assert "averaged over the blocks" in str(certify(record, drifting=True))


def test_printed_bounds_are_rounded_outwards():
    record = DiagramCounts.from_swap(symmetric=700, antisymmetric=300)
    certificate = certify(record, PowerSum(2))
    low, high = map(float, re.findall(r"0\.\d{6}", str(certificate)))
    assert low <= certificate.lower
    assert high >= certificate.upper


@pytest.mark.parametrize("functional", [VonNeumann(), VonNeumann(base=2), Renyi(2), PowerSum(2)])
def test_json_round_trip(functional):
    record = DiagramCounts({(2,): 600, (1, 1): 300, (3,): 100, (2, 1): 120, (1, 1, 1): 10})
    certificate = certify(record, functional, at_least=0.2)
    assert Certificate.from_json(certificate.to_json()) == certificate
    assert json.loads(certificate.to_json())["schema"] == "entropest-certificate/2"


def test_a_certificate_of_the_first_schema_is_still_readable():
    """Version 1 had no trusted dimension, expectation, plans or parameters."""
    data = certify(DiagramCounts.from_swap(symmetric=700, antisymmetric=300), at_least=0.5).to_dict()
    for test in data["tests"]:
        test["kind"] = "symmetric-outcome"
        for name in ("planned", "leading", "parameters"):
            del test[name]
    del data["trusted_dim"], data["expecting"]
    old = Certificate.from_json(json.dumps({**data, "schema": "entropest-certificate/1"}))
    assert (old.lower, old.met, old.tests[0].kind) == (data["lower"], True, "symmetric-outcome")
    with pytest.raises(RecheckError, match="tests"):
        recheck(old, DiagramCounts.from_swap(symmetric=700, antisymmetric=300))


def test_the_published_schema_describes_every_field():
    schema = json.loads(
        resources.files("entropest.certification").joinpath("schemas/certificate-2.json").read_text(encoding="utf-8")
    )
    record = DiagramCounts({(571, 286, 95, 48): 2, (2,): 300, (1, 1): 150, (3,): 9}, dim=4)
    for options in ({}, {"drifting": True}, {"trusted_dim": True, "expecting": 1.0, "at_least": 0.5}):
        data = json.loads(certify(record, **options).to_json())
        jsonschema.validate(data, schema, cls=jsonschema.Draft202012Validator)
        assert set(schema["required"]) == set(schema["properties"]) == set(data)
        with pytest.raises(jsonschema.ValidationError):
            jsonschema.validate({**data, "lower": "high"}, schema)


@pytest.mark.parametrize(
    "text",
    [
        "",
        "[]",
        "{}",
        '{"schema": "entropest-certificate/99"}',
        '{"schema": "entropest-certificate/2"}',
        "NaN",
        "[" * 9999,
    ],
)
def test_damaged_json_is_refused(text):
    with pytest.raises(ArgumentValueError, match="certificate"):
        Certificate.from_json(text)

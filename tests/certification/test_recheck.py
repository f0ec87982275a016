"""The referee's re-check: intact certificates pass, tampered ones and other records do not."""

import dataclasses
import json
from typing import Any

import numpy as np
import pytest

from entropest import Certificate, DiagramCounts, PowerSum, Renyi, VonNeumann, certify, recheck
from entropest.errors import ArgumentValueError, RecheckError
from tests.certification.test_certify import draw

RECORD = DiagramCounts({(2,): 600, (1, 1): 300})
SEVERAL = RECORD + DiagramCounts({(3,): 20, (2, 1): 9, (571, 286, 95, 48): 2, (1,): 40})
OPTIONS = [{}, {"anytime": True}, {"anytime": True, "planned_blocks": 500}, {"drifting": True, "confidence": 0.9}]


@pytest.mark.parametrize("name", ["uniform qubit", "geometric", "pure", "tiny eigenvalue"])
@pytest.mark.parametrize(("copies", "blocks"), [(2, 300), (8, 50)])
@pytest.mark.parametrize("options", OPTIONS)
def test_intact_certificates_pass(name, copies, blocks, options):
    record = draw(name, copies, blocks, np.random.default_rng(copies))
    assert recheck(certify(record, at_least=0.3, **options), record)


@pytest.mark.parametrize(("name", "copies", "blocks"), [("geometric", 3, 60), ("uniform qubit", 4, 40)])
@pytest.mark.parametrize("options", OPTIONS[:3])
def test_intact_certificates_with_certified_suprema_pass(name, copies, blocks, options):
    record = draw(name, copies, blocks, np.random.default_rng(copies))
    certificate = certify(record, **options)
    assert recheck(certificate, record)
    if certificate.tests[-1].kind == "identical-blocks":
        higher = dataclasses.replace(certificate.tests[-1], lower=certificate.tests[-1].lower + 0.2)
        lower = max(certificate.lower, higher.lower)
        tampered = dataclasses.replace(certificate, tests=(*certificate.tests[:-1], higher), lower=lower)
        with pytest.raises(RecheckError, match="identical-blocks"):
            recheck(tampered, record)


@pytest.mark.parametrize("functional", [VonNeumann(), VonNeumann(base=2), Renyi(2), Renyi(2, base=10), PowerSum(2)])
@pytest.mark.parametrize("claim", [{}, {"at_least": 0.4}])
def test_every_functional_and_unit_passes_after_a_round_trip(functional, claim):
    certificate = Certificate.from_json(certify(RECORD, functional, **claim).to_json())
    assert recheck(certificate, RECORD)


@pytest.mark.parametrize("options", [{}, {"drifting": True}])
def test_mixed_sizes_and_large_diagrams_pass(options):
    assert recheck(certify(SEVERAL, **options), SEVERAL)


@pytest.mark.parametrize(("rows", "dim"), [((700, 300), 2), ((571, 286, 95, 48), 4)])
@pytest.mark.parametrize("claim", [{}, {"at_most": 1.3}, {"at_least": 0.4}, {"at_least": 0.4, "at_most": 1.3}])
def test_a_trusted_dimension_passes_and_its_bounds_cannot_be_moved(rows, dim, claim):
    record = DiagramCounts({rows: 1}, dim=dim)
    certificate = certify(record, trusted_dim=True, **claim)
    assert recheck(Certificate.from_json(certificate.to_json()), record)
    for i, test in enumerate(certificate.tests):
        side = "lower" if test.upper is None else "upper"
        for step in (0.01, -0.01):
            moved = dataclasses.replace(test, **{side: getattr(test, side) + step})
            tests = (*certificate.tests[:i], moved, *certificate.tests[i + 1 :])
            with pytest.raises(RecheckError):
                recheck(dataclasses.replace(certificate, tests=tests, **{side: getattr(moved, side)}), record)


def test_impossible_records_pass():
    record = DiagramCounts.from_swap(symmetric=10, antisymmetric=4000)
    for functional in (VonNeumann(), Renyi(2), PowerSum(2)):
        assert recheck(certify(record, functional), record)


def test_another_record_is_refused():
    certificate = certify(RECORD)
    with pytest.raises(RecheckError, match="record_digest"):
        recheck(certificate, RECORD + DiagramCounts({(2,): 1}))


def numbers_of(value: Any, path: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
    """Return the paths of all numbers inside nested lists and dicts."""
    if isinstance(value, dict):
        return [found for key, item in value.items() for found in numbers_of(item, (*path, key))]
    if isinstance(value, list):
        return [found for i, item in enumerate(value) for found in numbers_of(item, (*path, i))]
    return [path] if isinstance(value, int | float) and not isinstance(value, bool) else []


@pytest.mark.parametrize("factor", [1.001, 0.97])
@pytest.mark.parametrize(
    ("functional", "options"), [(VonNeumann(), {}), (VonNeumann(), {"drifting": True}), (Renyi(2), {})]
)
def test_changing_any_number_is_refused(functional, options, factor):
    data = json.loads(certify(RECORD, functional, at_least=0.9, **options).to_json())
    paths = [path for path in numbers_of(data) if path[0] not in ("claim", "versions")]
    assert len(paths) >= 7
    for path in paths:
        changed = json.loads(json.dumps(data))
        place = changed
        for key in path[:-1]:
            place = place[key]
        before = place[path[-1]]
        place[path[-1]] = before + (1 if factor > 1 else -1) if isinstance(before, int) else before * factor
        with pytest.raises((RecheckError, ArgumentValueError)):
            recheck(Certificate.from_json(json.dumps(changed)), RECORD)


@pytest.mark.parametrize(
    "change",
    [
        {"met": False},
        {"claim": None},
        {"unit": "bit"},
        {"functional": "purity"},
        {"anytime": True},
        {"drifting": True},
        {"assumptions": ()},
        {"method": "by looking"},
        {"tests": ()},
        {"trusted_dim": 3},
        {"fractions": (0.5,)},
        {"upper": 5.0},
    ],
)
def test_changing_a_statement_is_refused(change):
    certificate = certify(RECORD, at_least=0.3)
    assert certificate.met
    with pytest.raises(RecheckError):
        recheck(dataclasses.replace(certificate, **change), RECORD)


def test_a_weaker_bound_than_the_record_gives_is_refused_too():
    certificate = certify(RECORD)
    tests = tuple(dataclasses.replace(test, lower=test.lower / 2) for test in certificate.tests)
    weaker = dataclasses.replace(certificate, tests=tests, lower=max(test.lower for test in tests))
    with pytest.raises(RecheckError, match="is not the bound of this record"):
        recheck(weaker, RECORD)


@pytest.mark.slow
def test_two_hundred_random_certificates_intact_and_tampered():
    """Random states, sizes and options; a bound moved by 0.01 either way is refused. About a quarter of an hour."""
    generator = np.random.default_rng(20260108)
    for _ in range(200):
        name = str(generator.choice(["uniform qubit", "geometric", "uniform qutrit", "step", "tiny eigenvalue"]))
        copies, blocks = int(generator.integers(2, 7)), int(generator.integers(20, 400))
        record = draw(name, copies, blocks, generator)
        certificate = certify(record, **OPTIONS[generator.integers(4)])
        assert recheck(certificate, record)
        test = certificate.tests[0]
        for step in (0.01, -0.01):
            moved = dataclasses.replace(test, lower=max(0.0, test.lower + step))
            if moved.lower != test.lower:
                tests = (moved, *certificate.tests[1:])
                changed = dataclasses.replace(certificate, tests=tests, lower=max(t.lower for t in tests))
                with pytest.raises(RecheckError):
                    recheck(changed, record)

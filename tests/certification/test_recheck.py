"""The referee's re-check: intact certificates pass, tampered ones and other records do not."""

import dataclasses
import json
from typing import Any

import numpy as np
import pytest

from entropest import Certificate, DiagramCounts, PowerSum, Renyi, VonNeumann, certify, recheck
from entropest.errors import ArgumentValueError, RecheckError
from tests.certification.test_certify import draw

RECORD = DiagramCounts({(2,): 600, (1, 1): 300, (4,): 100, (3, 1): 220, (2, 2): 80, (2, 1, 1): 60, (1, 1, 1, 1): 1})


@pytest.mark.parametrize("name", ["uniform qubit", "geometric", "pure", "tiny eigenvalue"])
@pytest.mark.parametrize(("copies", "blocks"), [(2, 300), (3, 2000), (5, 400), (8, 50)])
@pytest.mark.parametrize("options", [{}, {"anytime": True}, {"drifting": True, "confidence": 0.9}])
def test_intact_certificates_pass(name, copies, blocks, options):
    record = draw(name, copies, blocks, np.random.default_rng(copies))
    assert recheck(certify(record, at_least=0.3, **options), record)


@pytest.mark.parametrize("functional", [VonNeumann(), VonNeumann(base=2), Renyi(2), Renyi(2, base=10), PowerSum(2)])
@pytest.mark.parametrize("claim", [{}, {"at_least": 0.4}])
def test_every_functional_and_unit_passes_after_a_round_trip(functional, claim):
    certificate = Certificate.from_json(certify(RECORD, functional, **claim).to_json())
    assert recheck(certificate, RECORD)


@pytest.mark.parametrize("options", [{}, {"drifting": True}])
def test_mixed_sizes_and_large_diagrams_pass(options):
    record = RECORD + DiagramCounts({(571, 286, 95, 48): 2, (1,): 40})
    assert recheck(certify(record, **options), record)


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
@pytest.mark.parametrize("functional", [VonNeumann(), Renyi(2)])
def test_changing_any_number_is_refused(functional, factor):
    data = json.loads(certify(RECORD, functional, at_least=0.9).to_json())
    paths = [path for path in numbers_of(data) if path[0] not in ("claim", "versions")]
    assert len(paths) >= 7
    for path in paths:
        changed = json.loads(json.dumps(data))
        place = changed
        for key in path[:-1]:
            place = place[key]
        place[path[-1]] = type(place[path[-1]])(
            place[path[-1]] * factor + (factor > 1) * isinstance(place[path[-1]], int)
        )
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
        {"witnesses": ()},
        {"upper": 5.0},
    ],
)
def test_changing_a_statement_is_refused(change):
    certificate = certify(RECORD, at_least=0.5)
    assert certificate.met
    with pytest.raises(RecheckError):
        recheck(dataclasses.replace(certificate, **change), RECORD)


def test_a_weaker_bound_than_the_record_gives_is_refused_too():
    certificate = certify(RECORD)
    tests = tuple(dataclasses.replace(test, lower=test.lower / 2) for test in certificate.tests)
    weaker = dataclasses.replace(certificate, tests=tests, lower=max(test.lower for test in tests))
    with pytest.raises(RecheckError, match="is not the bound of this record"):
        recheck(weaker, RECORD)

"""The mixture e-value and the bound it gives."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from entropest.certification.evidence import FRACTIONS, SizedBlocks, evidence_lower_bound, log_mixture_e_value
from entropest.certification.rules import ENTROPY_CAP
from entropest.certification.witnesses import witness_ladder, witness_values
from entropest.shapes import all_shapes, rows_of
from tests.certification.exact import SPECTRA, entropy, outcome_law


def record(copies: int, counts: dict[tuple[int, ...], int]) -> SizedBlocks:
    width = max(len(rows) for rows in counts)
    shapes = np.array([rows + (0,) * (width - len(rows)) for rows in counts])
    return SizedBlocks(copies=copies, shapes=shapes, counts=np.array(list(counts.values())))


def plain_e_value(parts: list[SizedBlocks], s: float) -> float:
    """A loop over witnesses, fractions and single blocks."""
    ladders = [witness_ladder(part.copies) for part in parts]
    products = []
    for w in range(len(ladders[0].floors)):
        for f in FRACTIONS:
            product = 1.0
            for part, ladder in zip(parts, ladders, strict=True):
                for value, count in zip(witness_values(ladder, part.shapes)[w], part.counts, strict=True):
                    for _ in range(count):
                        product *= 1.0 + f / (s - ladder.floors[w]) * (value - s)
            products.append(product)
    return sum(products) / len(products)


def test_e_value_equals_a_plain_loop():
    parts = [record(2, {(2,): 5, (1, 1): 3}), record(4, {(4,): 2, (3, 1): 4, (2, 1, 1): 1})]
    for s in (0.05, 0.4, 1.1, 3.0):
        assert log_mixture_e_value(parts, s) == pytest.approx(math.log(plain_e_value(parts, s)), abs=1e-10)


@pytest.mark.parametrize("name", SPECTRA)
@pytest.mark.parametrize("copies", [2, 3, 4])
def test_mean_of_the_e_value_is_at_most_one_at_the_boundary_of_the_null(name, copies):
    """Exact expectation over all tallies of two blocks."""
    spectrum = SPECTRA[name]
    truth = max(entropy(spectrum), 1e-6)
    law = outcome_law(spectrum, copies)
    shapes = rows_of(law, len(spectrum))
    probabilities = np.array([float(probability) for probability in law.values()])
    mean = 0.0
    for i, first in enumerate(probabilities):
        for j, second in enumerate(probabilities):
            pair = SizedBlocks(copies=copies, shapes=shapes[[i, j]], counts=np.array([1, 1]))
            mean += first * second * math.exp(log_mixture_e_value([pair], truth))
    assert mean <= 1.0 + 1e-12


@given(st.lists(st.integers(0, 40), min_size=3, max_size=3).filter(any), st.floats(0.01, 2.0), st.floats(0.01, 2.0))
def test_e_value_falls_with_the_tested_entropy(counts, first, second):
    part = SizedBlocks(copies=3, shapes=all_shapes(3, 3), counts=np.array(counts))
    low, high = sorted([first, second])
    assert log_mixture_e_value([part], high) <= log_mixture_e_value([part], low) + 1e-10


@given(st.integers(0, 60), st.floats(0.001, 0.5), st.floats(0.001, 0.5))
def test_bound_is_monotone_in_the_error(antisymmetric, first, second):
    part = SizedBlocks(copies=2, shapes=all_shapes(2, 2), counts=np.array([60 - antisymmetric, antisymmetric]))
    small, large = sorted([first, second])
    assert evidence_lower_bound([part], error=small) <= evidence_lower_bound([part], error=large)


def test_bound_is_where_the_e_value_crosses_one_over_the_error():
    part = record(4, {(4,): 300, (3, 1): 500, (2, 2): 120, (2, 1, 1): 80})
    bound = evidence_lower_bound([part], error=0.05)
    assert log_mixture_e_value([part], bound) >= math.log(20.0)
    assert log_mixture_e_value([part], bound + 1e-8) < math.log(20.0)


def test_pure_and_impossible_records():
    assert evidence_lower_bound([record(3, {(3,): 1000})], error=0.05) == 0.0
    assert evidence_lower_bound([record(2, {(1, 1): 1000})], error=0.05) == ENTROPY_CAP


def test_order_of_outcomes_and_splitting_of_counts_do_not_matter():
    whole = record(3, {(3,): 40, (2, 1): 50, (1, 1, 1): 10})
    split = SizedBlocks(copies=3, shapes=whole.shapes[[2, 1, 1, 0]], counts=np.array([10, 20, 30, 40]))
    assert evidence_lower_bound([whole], error=0.05) == pytest.approx(
        evidence_lower_bound([split], error=0.05), abs=1e-9
    )

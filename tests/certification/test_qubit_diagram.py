"""Exact bounds on a qubit's entropy from one diagram."""

import math
from fractions import Fraction
from functools import cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from entropest.certification.plain_qubit import qubit_lower_value, qubit_upper_value
from entropest.certification.qubit_diagram import (
    qubit_lower_bound,
    qubit_upper_bound,
    tail_at_least,
    tail_at_most,
)
from entropest.errors import ArgumentValueError, MemoryBudgetError
from entropest.law.insertion import draw_by_insertion
from tests.certification.exact import outcome_law

SMALLER = [Fraction(1, 2), Fraction(499, 1000), Fraction(2, 5), Fraction(1, 5), Fraction(1, 1000)]


@cache
def shorter_row_law(size: int, q: Fraction) -> list[Fraction]:
    """Standard tableaux times Schur polynomials, in fractions."""
    law = []
    for j in range(size // 2 + 1):
        count = math.comb(size, j) - (math.comb(size, j - 1) if j else 0)
        law.append(count * sum(((1 - q) ** i * q ** (size - i) for i in range(j, size - j + 1)), Fraction(0)))
    return law


def binary_entropy(q: float) -> float:
    return -q * math.log(q) - (1 - q) * math.log(1 - q) if q > 0 else 0.0


def test_the_plain_law_is_that_of_all_diagrams():
    for q in SMALLER:
        law = outcome_law([1 - q, q], 7)
        assert [law[d] for d in sorted(law, reverse=True)] == shorter_row_law(7, q)


@pytest.mark.parametrize("q", SMALLER)
def test_tails_are_upper_bounds_and_sharp(q):
    for size in (1, 2, 3, 8, 41):
        law = shorter_row_law(size, q)
        for j in range(size // 2 + 1):
            for exact, found in (
                (sum(law[j:]), tail_at_least(size, j, float(q))),
                (sum(law[: j + 1]), tail_at_most(size, j, float(q))),
            ):
                assert float(exact) * (1 - 1e-15) <= found <= float(exact) * (1 + 1e-11)


@settings(deadline=None)
@given(st.integers(2, 60), st.integers(0, 30), st.floats(1e-6, 0.5), st.floats(1e-6, 0.5))
def test_longer_shorter_rows_become_likelier_with_the_smaller_eigenvalue(size, row, first, second):
    low, high = sorted((Fraction(first), Fraction(second)))
    row = min(row, size // 2)
    assert sum(shorter_row_law(size, low)[row:]) <= sum(shorter_row_law(size, high)[row:])


@pytest.mark.parametrize("size", [1, 2, 7, 30])
@pytest.mark.parametrize("error", [0.05, 0.5, 0.9])
def test_bounds_miss_with_at_most_the_stated_error(size, error):
    """Exact law on a grid of spectra."""
    shapes = [(size - j, j) for j in range(size // 2 + 1)]
    lower = [qubit_lower_bound(rows, error=error).value for rows in shapes]
    upper = [qubit_upper_bound(rows, error=error).value for rows in shapes]
    for q in [Fraction(i, 100) for i in range(51)]:
        law = shorter_row_law(size, q)
        true = binary_entropy(float(q))
        assert sum(w for w, bound in zip(law, lower, strict=True) if bound > true) <= error
        assert sum(w for w, bound in zip(law, upper, strict=True) if bound < true) <= error


def test_error_is_spent_in_full():
    """At the limit the tail is the error itself, unless the limit is the end of the range."""
    for rows in [(520, 480), (900, 100), (999, 1), (20, 4)]:
        q = qubit_lower_bound(rows, error=0.05).smaller
        assert tail_at_least(sum(rows), rows[1], q) == pytest.approx(0.05, rel=1e-9)
    for rows in [(900, 100), (1000, 0), (20, 2)]:
        q = qubit_upper_bound(rows, error=0.05).smaller
        assert tail_at_most(sum(rows), rows[1], q) == pytest.approx(0.05, rel=1e-9)


def test_median_for_the_maximally_mixed_qubit():
    """Exact: with probability above one half, 1,000 copies certify 0.688 of log 2 = 0.693 nat."""
    law = shorter_row_law(1000, Fraction(1, 2))
    least = next(j for j in range(501) if qubit_lower_bound((1000 - j, j), error=0.05).value >= 0.688)
    assert sum(law[least:]) > Fraction(1, 2)


@pytest.mark.parametrize(
    "rows",
    [(1,), (1, 1), (2, 1), (1000,), (500, 500), (520, 480), (900, 100), (10**9 - 3, 3), (9 * 10**8, 10**8)],
)
def test_referee_confirms_the_bounds(rows):
    for error in (0.05, 1e-6):
        lower, upper = qubit_lower_bound(rows, error=error), qubit_upper_bound(rows, error=error)
        assert 0.0 <= lower.value <= upper.value <= math.log(2) + 1e-14
        confirmed = qubit_lower_value(rows, error=error, smaller=lower.smaller)
        assert lower.value <= confirmed <= lower.value + 1e-13
        confirmed = qubit_upper_value(rows, error=error, smaller=upper.smaller)
        assert upper.value - 1e-13 <= confirmed <= upper.value


def test_referee_refuses_a_limit_that_is_off():
    lower, upper = qubit_lower_bound((900, 100), error=0.05), qubit_upper_bound((900, 100), error=0.05)
    assert qubit_lower_value((900, 100), error=0.05, smaller=lower.smaller * (1 + 1e-6)) == 0.0
    assert qubit_upper_value((900, 100), error=0.05, smaller=upper.smaller * (1 - 1e-6)) == pytest.approx(math.log(2))
    assert qubit_lower_value((900, 100), error=0.05, smaller=0.6) == 0.0


def test_extreme_diagrams():
    assert qubit_lower_bound((1000,), error=0.05).value == 0.0
    assert qubit_lower_bound((500, 500), error=0.05).value == pytest.approx(math.log(2), abs=1e-12)
    assert qubit_upper_bound((500, 500), error=0.05).value == pytest.approx(math.log(2), abs=1e-12)
    pure = qubit_upper_bound((1000, 0), error=0.05).smaller
    assert pure == pytest.approx(math.log(20) / 1000, rel=2e-3)  # (1 - q)^1000 = 1/20 to leading order


@pytest.mark.parametrize("q", [0.5, 0.3, 0.01])
def test_false_bounds_at_ten_thousand_copies(q):
    """400 draws at error 0.05 each: more than 43 misses have probability below 1e-5 if the claim holds."""
    draws, counts = np.unique(
        draw_by_insertion(np.array([1 - q, q]), 10_000, 400, np.random.default_rng(5)), axis=0, return_counts=True
    )
    true = binary_entropy(q)
    too_high = np.array([qubit_lower_bound(rows, error=0.05).value > true for rows in draws])
    too_low = np.array([qubit_upper_bound(rows, error=0.05).value < true for rows in draws])
    assert counts[too_high].sum() <= 43
    assert counts[too_low].sum() <= 43


@pytest.mark.parametrize(
    ("rows", "error", "exception", "message"),
    [
        ((0, 0), 0.05, ArgumentValueError, "at least one box"),
        ((3, 2, 1), 0.05, ArgumentValueError, "dim must be at least the number of rows 3, got 2"),
        ((3, 2), 1.5, ArgumentValueError, "error must lie strictly between 0 and 1"),
        ((10**12, 5), 0.05, MemoryBudgetError, "at most 100,000,000,000 boxes"),
    ],
)
def test_wrong_arguments_are_refused(rows, error, exception, message):
    for function in (qubit_lower_bound, qubit_upper_bound):
        with pytest.raises(exception, match=message):
            function(rows, error=error)

"""The dual lower bound from a large diagram."""

import math
from functools import cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from entropest.certification.dual_bound import STATED_SLACK, DualLowerBound, _Dual, checked_rows, dual_lower_bound
from entropest.certification.dual_rows import Multipliers, last_roots, row_minima
from entropest.certification.dual_search import floor_of_shift
from entropest.certification.gap_terms import gap_lines
from entropest.certification.plain_large import dual_lower_value
from entropest.diagrams import young_diagrams
from entropest.errors import ArgumentValueError
from entropest.law.insertion import draw_by_insertion
from entropest.spectra import geometric, maximally_mixed, power_law
from tests.certification.exact import SPECTRA, entropy, outcome_law
from tests.certification.large_twins import (
    bounded_difference_value,
    gap_term,
    grid_minimum,
    lower_statistic,
    mean_energy,
    plain_lower_value,
    shannon,
)

Rows = tuple[int, ...]

SHAPES = st.lists(st.integers(1, 60), min_size=1, max_size=5).map(lambda rows: tuple(sorted(rows, reverse=True)))


@st.composite
def feasible(draw: st.DrawFn, rows: Rows, dim: int | None) -> tuple[Multipliers, tuple[float, ...]]:
    """Any parameters that the theorem allows for these rows."""
    t = draw(st.floats(0.01, 1.0))
    kappa = draw(st.floats(0.05, 3.0))
    log_z0 = draw(st.floats(-0.5, 3.0))
    shift = draw(st.floats(0.0, 2.0))
    kinks = draw(st.lists(st.floats(0.02, 5.0), min_size=len(rows) - 1, max_size=len(rows) - 1))
    if dim is None:
        cap = math.log(sum(rows))
        shift += floor_of_shift(kappa * math.exp(-log_z0) / t, t, cap) * (1 + 1e-9) + 1e-9
    else:
        shift -= 1.0
    m = Multipliers(sign=1, t=t, kappa=kappa, log_z0=log_z0, shift=shift, weight=kappa)
    return m, tuple(kinks) if draw(st.booleans()) else ()


@st.composite
def cases(draw: st.DrawFn) -> tuple[Rows, int | None, Multipliers, tuple[float, ...]]:
    rows = draw(SHAPES)
    dim = draw(st.sampled_from([None, len(rows), len(rows) + 3]))
    m, kinks = draw(feasible(rows, dim))
    return rows, dim, m, kinks


def value(rows: Rows, dim: int | None, m: Multipliers, kinks: tuple[float, ...], error: float = 0.05) -> float:
    return _Dual(checked_rows(rows, dim), error, dim).value(m, kinks)


@cache
def bound(rows: Rows, error: float, dim: int | None = None) -> float:
    return dual_lower_bound(rows, error=error, dim=dim).value


def referee(rows: Rows, error: float, b: DualLowerBound) -> float:
    return dual_lower_value(
        rows, error=error, t=b.t, kappa=b.kappa, log_z0=b.log_z0, shift=b.shift, kinks=b.kinks, dim=b.dim
    )


# The theorems


@pytest.mark.parametrize("weights", [(5, 3, 1), (4, 4, 1), (1, 1, 1), (97, 2, 1), (6, 3, 2, 1), (2, 2, 1, 1)])
def test_mean_energy_of_tableaux_is_at_least_rows_and_gap_terms(weights):
    """Every shape to 7 boxes (6 for four letters), every tableau; equality for two letters is tested below."""
    d = len(weights)
    p = [w / sum(weights) for w in weights]
    y = [-math.log(x) for x in p]
    for n in range(1, 8 if d == 3 else 7):
        for diagram in young_diagrams(n, d):
            rows = diagram.rows + (0,) * (d - len(diagram.rows))
            lower = sum(r * e for r, e in zip(rows, y, strict=True))
            lower += sum(gap_term(rows[i] - rows[i + 1], y[i + 1] - y[i]) for i in range(d - 1))
            assert mean_energy(rows, p, y) >= lower - 1e-12


@given(st.integers(0, 12), st.integers(0, 12), st.floats(0.5, 0.999))
def test_gap_term_is_exact_for_two_letters(gap, shorter, p):
    rows, y = (shorter + gap, shorter), [-math.log(p), -math.log1p(-p)]
    excess = mean_energy(rows, [p, 1 - p], y) - rows[0] * y[0] - rows[1] * y[1]
    assert excess == pytest.approx(gap_term(gap, y[1] - y[0]), abs=1e-10)


@given(st.integers(0, 1000), st.floats(0.02, 50.0), st.floats(0.0, 60.0))
def test_two_lines_stay_below_the_gap_term(gap, kink, z):
    lines = gap_lines(np.array([gap + 1.0, 1.0]), np.array([kink]))
    assert float((lines.offsets + lines.slopes * z).min()) <= gap_term(gap, z) + 1e-15


@pytest.mark.parametrize("name", SPECTRA)
def test_confidence_set_covers_the_spectrum(name):
    """Exact law: the statistic, gap terms included, exceeds log(1/error) with probability at most error."""
    spectrum = SPECTRA[name]
    p = sorted(map(float, spectrum), reverse=True)
    for copies in (1, 3, 6, 9):
        law = outcome_law(spectrum, copies)
        statistics = {d: lower_statistic(d.rows, p, math.log(copies)) for d in law}
        for error in (0.02, 0.1, 0.3, 0.7):
            missed = sum(w for d, w in law.items() if statistics[d] > math.log(1 / error) + 1e-9)
            assert float(missed) <= error


@pytest.mark.parametrize("name", SPECTRA)
@pytest.mark.parametrize("copies", [1, 2, 4, 7])
def test_bound_exceeds_the_entropy_with_at_most_the_stated_error(name, copies):
    """Exact law over all shapes, without and with the dimension."""
    spectrum = SPECTRA[name]
    law = outcome_law(spectrum, copies)
    for error in (0.05, 0.4):
        assert sum(w for d, w in law.items() if bound(d.rows, error) > entropy(spectrum)) <= error
    assert sum(w for d, w in law.items() if bound(d.rows, 0.4, len(spectrum)) > entropy(spectrum)) <= 0.4


@settings(deadline=None, max_examples=60)
@given(cases(), st.integers(0, 2**32 - 1), st.sampled_from([0.05, 0.5]))
def test_any_feasible_parameters_give_less_than_every_entropy_in_the_confidence_set(case, seed, error):
    rows, dim, m, kinks = case
    lower = value(rows, dim, m, kinks, error)
    n, cap = sum(rows), math.log(sum(rows))
    generator = np.random.default_rng(seed)
    base = np.array([*rows, *([0.0] * ((dim or len(rows) + 4) - len(rows)))]) / n
    for spread in (0.02, 0.3, 1.0):
        for dust in (0.0, 0.02):
            p = np.where(base > 0, base, dust / len(base)) * np.exp(generator.normal(0.0, spread, len(base)))
            p = np.sort(p / p.sum())[::-1]
            if lower_statistic(rows, p.tolist(), cap) <= math.log(1 / error):
                assert lower <= shannon(p.tolist()) + 1e-12


# The numbers


@settings(deadline=None, max_examples=40)
@given(cases())
def test_value_agrees_with_the_plain_twin(case):
    """Grids of 40,001 points miss a minimum by less than 1e-6 a row here; lines are chosen by enumeration."""
    rows, dim, m, kinks = case
    fast = value(rows, dim, m, kinks)
    plain = plain_lower_value(rows, 0.05, m.t, m.kappa, m.log_z0, m.shift, kinks, dim)
    plain = plain if dim is None else min(plain, math.log(dim))
    assert fast == pytest.approx(plain, abs=1e-5 * (1 + m.k * len(rows)))
    assert fast <= plain + 1e-9


def test_all_rows_can_lie_beyond_the_cap():
    """Parameters for which every row is cheapest at p = 0."""
    rows, kinks = (2, 1), (1.0,)
    m = Multipliers(sign=1, t=0.5, kappa=0.05, log_z0=3.0, shift=2.0, weight=0.05)
    plain = plain_lower_value(rows, 0.05, m.t, m.kappa, m.log_z0, m.shift, kinks)
    assert value(rows, None, m, kinks) == pytest.approx(plain, abs=1e-7)
    assert value(rows, None, m, kinks) == pytest.approx(m.constant() + 0.05 * (math.log(3) - math.log(20) / 1.5))


@settings(deadline=None, max_examples=60)
@given(cases(), st.sampled_from([0.05, 1e-9]))
def test_referee_confirms_any_value(case, error):
    rows, dim, m, kinks = case
    fast = value(rows, dim, m, kinks, error)
    plain = dual_lower_value(
        rows, error=error, t=m.t, kappa=m.kappa, log_z0=m.log_z0, shift=m.shift, kinks=kinks, dim=dim
    )
    assert fast <= plain
    assert plain <= max(0.0, fast) + 1e-9


@given(
    st.floats(1e-4, 1.0), st.floats(0.01, 3.0), st.floats(0.0, 3.0), st.floats(-3.0, 20.0), st.floats(1e-9, 1.0),
    st.floats(0.1, 30.0),
)  # fmt: skip
def test_row_minimum_is_proven_and_sharp(t, kappa, log_z0, shift, h, cap):
    m = Multipliers(sign=1, t=t, kappa=kappa, log_z0=log_z0, shift=shift, weight=kappa)
    proven = float(row_minima(m, np.array([h]), cap)[0])
    seen = grid_minimum(1, h, kappa, t, m.k, shift, cap)
    assert proven <= seen + 1e-12 * (1 + m.k * math.exp(t * cap))
    y = float(last_roots(m, np.array([h]), cap)[1][0])
    at_root = kappa * h * y + math.exp(-y) * (y + shift - m.k * math.expm1(t * y))
    assert proven == pytest.approx(min(shift, at_root), abs=1e-9 * (1 + m.k * math.exp(t * cap)))


def test_parameters_outside_the_theorem_prove_nothing():
    rows = (53, 27, 13, 7)
    b = dual_lower_bound(rows, error=0.05)
    good = {"t": b.t, "kappa": b.kappa, "log_z0": b.log_z0, "shift": b.shift, "kinks": b.kinks}
    assert dual_lower_value(rows, error=0.05, **good) > 0.8
    for change in ({"t": 1.01}, {"t": -0.1}, {"kappa": -1.0}, {"shift": b.shift - 0.01}, {"kinks": b.kinks[:-1]}):
        assert dual_lower_value(rows, error=0.05, **{**good, **change}) == 0.0
    below = Multipliers(sign=1, t=b.t, kappa=b.kappa, log_z0=b.log_z0, shift=b.shift - 0.01, weight=b.kappa)
    assert value(rows, None, below, ()) == -math.inf


@pytest.mark.parametrize(
    "rows",
    [
        (1,),
        (1000,),
        (1, 1),
        (6, 6),
        (5, 4, 2, 1),
        (3, 3, 3, 3),
        (12,) * 12,
        (26, 20, 16, 12, 11, 7, 5, 3),
        tuple(range(60, 0, -1)),
        (10**9,),
        (10**9 - 1, 1),
        (5 * 10**8, 25 * 10**7, 15 * 10**7, 10**8),
        (10**8,) * 10,
    ],
)
@pytest.mark.parametrize("error", [0.05, 1e-6])
def test_stated_bound_is_confirmed_by_the_referee(rows, error):
    for dim in (None, len(rows) + 2):
        b = dual_lower_bound(rows, error=error, dim=dim)
        confirmed = referee(rows, error, b)
        assert b.value <= confirmed <= b.value + 2 * STATED_SLACK
        assert b.value <= shannon([row / sum(rows) for row in rows])


# How good it is


@pytest.mark.parametrize("name", ["geometric", "power law", "nearly pure"])
@pytest.mark.parametrize("copies", [10**4, 10**6, 10**9])
def test_bound_comes_near_the_chernoff_radius(name, copies):
    """S(h) - sqrt(2 log(1/error) V / n) is the leading order; a quarter more is allowed from 10,000 copies on."""
    p = {"geometric": geometric(4, 0.5), "power law": power_law(20, 1.5), "nearly pure": np.array([0.97, 0.03])}[name]
    rows = np.round(p * copies).astype(np.int64)
    h = rows / rows.sum()
    variance = float(h @ np.log(h) ** 2) - shannon(h.tolist()) ** 2
    radius = math.sqrt(2 * math.log(20) * variance / rows.sum())
    found = dual_lower_bound(rows, error=0.05).value
    assert shannon(h.tolist()) - 1.25 * radius - 1e-8 <= found <= shannon(h.tolist()) - 0.8 * radius
    assert found > bounded_difference_value(rows, 0.05)


@pytest.mark.parametrize(
    ("spectrum", "copies", "least"),
    [
        (maximally_mixed(8), 100, 1.69),
        (geometric(4, 0.5), 1000, 1.06),
        (geometric(4, 0.5), 10_000, 1.115),
        (geometric(4, 0.5), 10**6, 1.134),
        (np.array([0.9, 0.1]), 1000, 0.25),
    ],
)
def test_median_of_the_bound(spectrum, copies, least):
    """Medians of 300, 80, 60, 15 and 60 draws: 1.725, 1.078, 1.121, 1.135, .274; 9 seeded draws, two sigma lower."""
    draws = draw_by_insertion(spectrum, copies, 9, np.random.default_rng(2024))
    assert np.median([dual_lower_bound(rows, error=0.05).value for rows in draws]) >= least


def test_false_bounds_are_rare():
    """At error 0.3, 36 draws: more than 25 false bounds have probability below 1e-6 if the claim holds."""
    generator = np.random.default_rng(7)
    false = 0
    for p in (maximally_mixed(3), geometric(4, 0.5), np.array([0.4, 0.4, 0.1, 0.1]), np.array([0.99, 0.009, 0.001])):
        for copies in (100, 1000, 10_000):
            draws = draw_by_insertion(p, copies, 3, generator)
            false += sum(dual_lower_bound(rows, error=0.3).value > shannon(p.tolist()) for rows in draws)
    assert false <= 25


@settings(deadline=None, max_examples=8)
@given(SHAPES, st.integers(0, 4))
def test_a_known_dimension_only_raises_the_bound(rows, more):
    free = bound(rows, 0.05)
    known = bound(rows, 0.05, len(rows) + more)
    assert known >= min(free, math.log(len(rows) + more)) - 1e-9


@settings(deadline=None, max_examples=8)
@given(SHAPES)
def test_a_smaller_error_gives_a_smaller_bound(rows):
    assert bound(rows, 0.01) <= bound(rows, 0.1) + 1e-3


def test_very_many_different_rows():
    """44,000 distinct rows, about 10^9 boxes; the search joins them, the value does not."""
    rows = np.arange(44_000, 0, -1)
    h = rows / rows.sum()
    variance = float(h @ np.log(h) ** 2) - shannon(h.tolist()) ** 2
    found = dual_lower_bound(rows, error=0.05).value
    assert shannon(h.tolist()) - 1.3 * math.sqrt(6 * variance / rows.sum()) <= found <= shannon(h.tolist())


def test_padding_does_not_matter():
    assert dual_lower_bound([30, 20, 0, 0], error=0.05) == dual_lower_bound([30, 20], error=0.05)


@pytest.mark.parametrize(
    ("rows", "options", "message"),
    [
        ([0, 0], {}, "at least one box"),
        ([3, 2, 1], {"dim": 2}, "dim must be at least the number of rows 3, got 2"),
        ([3, 2, 1], {"dim": 0}, "dim must be at least 1"),
        ([1, 2], {}, "do not increase"),
        ([[2, 1]], {}, "one-dimensional"),
        ([2, 1], {"error": 0.0}, "error must lie strictly between 0 and 1"),
        ([2, 1], {"error": 1.0}, "error must lie strictly between 0 and 1"),
    ],
)
def test_wrong_arguments_are_refused(rows, options, message):
    with pytest.raises(ArgumentValueError, match=message):
        dual_lower_bound(rows, **{"error": 0.05, **options})

"""The dual upper bound from large diagrams in a known dimension, and the localiser it rests on."""

import itertools
import math
from fractions import Fraction
from functools import cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from entropest.certification.dual_bound import STATED_SLACK
from entropest.certification.dual_rows import Multipliers, row_minima
from entropest.certification.dual_upper import _checked_diagrams, _Dual, dual_upper_bound
from entropest.certification.localiser import (
    _first_radius,
    _largest_ratios,
    _log_multiplicity_bound,
    _log_pair_dimensions,
    localise,
)
from entropest.certification.plain_large import dual_upper_value
from entropest.diagrams import YoungDiagram, young_diagrams
from entropest.errors import ArgumentValueError
from entropest.law.insertion import draw_by_insertion
from entropest.law.schur import schur_polynomial
from entropest.spectra import geometric
from tests.certification.exact import SPECTRA, entropy, outcome_law
from tests.certification.large_twins import grid_minimum, mean_energy, shannon, tableaux, upper_statistic

Rows = tuple[int, ...]

SHAPES = st.lists(st.integers(1, 60), min_size=1, max_size=4).map(lambda rows: tuple(sorted(rows, reverse=True)))


@st.composite
def cases(draw: st.DrawFn) -> tuple[Rows, int, Multipliers]:
    """Any rows, dimension and parameters that the theorem allows."""
    rows = draw(SHAPES)
    m = Multipliers(
        sign=-1,
        t=draw(st.floats(0.01, 5.0)),
        kappa=draw(st.floats(0.01, 3.0)),
        log_z0=draw(st.floats(-4.0, 0.5)),
        shift=draw(st.floats(-2.0, 3.0)),
        weight=draw(st.floats(1e-3, 3.0)),
    )
    return rows, len(rows) + draw(st.integers(0, 3)), m


def value(rows: Rows, dim: int, m: Multipliers, error: float = 0.05) -> float:
    return _Dual(_checked_diagrams(rows, dim), error).value(m)


def referee(diagrams: list[Rows], dim: int, error: float, m: Multipliers) -> float:
    return dual_upper_value(
        diagrams, error=error, dim=dim, t=m.t, mu=m.kappa, log_z0=m.log_z0, shift=m.shift, weight=m.weight
    )


@cache
def bound(diagrams: tuple[Rows, ...], error: float, dim: int) -> float:
    padded = [rows + (0,) * (dim - len(rows)) for rows in diagrams]
    return dual_upper_bound(padded, error=error, dim=dim).value


def padded(rows: Rows, dim: int) -> np.ndarray:
    return np.array([*rows, *([0] * (dim - len(rows)))], dtype=np.float64)


def excess_limit(p: list[float]) -> float:
    """sum_{i<j} p_j log(p_i/p_j) / (p_i - p_j), ties by their limit 1."""
    pairs = itertools.combinations(sorted(p, reverse=True), 2)
    return sum(1.0 if a == b else b * math.log(a / b) / (a - b) for a, b in pairs)


# The energy of tableaux


def test_tableaux_are_all_there():
    for diagram in young_diagrams(6, 3):
        rows = diagram.rows + (0,) * (3 - len(diagram.rows))
        assert len(list(tableaux(rows, 3))) == schur_polynomial(diagram, [1, 1, 1])


@pytest.mark.parametrize(
    "weights",
    [(3, 1), (1, 1), (999, 1), (5, 3, 1), (4, 4, 1), (1, 1, 1), (97, 2, 1), (6, 3, 2, 1), (2, 2, 1, 1), (1, 1, 1, 1)],
)
def test_mean_energy_of_tableaux_is_near_that_of_the_rows(weights):
    """Every shape to 9 (two letters), 7 (three), 6 boxes (four)."""
    d = len(weights)
    p = [w / sum(weights) for w in weights]
    y = [-math.log(x) for x in p]
    for n in range(1, {2: 10, 3: 8, 4: 7}[d]):
        for diagram in young_diagrams(n, d):
            rows = diagram.rows + (0,) * (d - len(diagram.rows))
            excess = mean_energy(rows, p, y) - sum(r * e for r, e in zip(rows, y, strict=True))
            assert -1e-12 <= excess <= excess_limit(p) + 1e-12 <= d * (d - 1) / 2 + 2e-12


@settings(deadline=None, max_examples=40)
@given(st.lists(st.floats(-6.0, 0.0), min_size=3, max_size=3), st.lists(st.integers(0, 6), min_size=3, max_size=3))
def test_mean_energy_with_any_three_probabilities(logs, rows):
    p = np.sort(np.exp(logs) / np.exp(logs).sum())[::-1].tolist()
    rows = sorted(rows, reverse=True)
    y = [-math.log(x) for x in p]
    excess = mean_energy(rows, p, y) - sum(r * e for r, e in zip(rows, y, strict=True))
    assert -1e-9 <= excess <= excess_limit(p) + 1e-9


# The localiser


@pytest.mark.parametrize("d", [1, 2, 3, 4])
@pytest.mark.parametrize("n", [1, 4, 7])
def test_squared_dimensions_are_a_law(n, d):
    """Cauchy's identity in whole numbers."""
    total = sum(schur_polynomial(diagram, [1] * d) ** 2 for diagram in young_diagrams(n, d))
    assert total == math.comb(n + d * d - 1, n)


@pytest.mark.parametrize("d", [2, 3, 4])
def test_first_radius_is_the_stated_formula(d):
    for diagram in young_diagrams(6, d):
        rows = padded(diagram.rows, d)
        n, dim_lambda = diagram.size, schur_polynomial(diagram, [1] * d)
        expected = math.log(20) + math.log(
            Fraction(math.comb(n + d * d - 1, n) * diagram.standard_tableaux, dim_lambda)
        )
        expected = expected / n - shannon((rows / n).tolist())
        assert _first_radius(rows[None], 0.05) == pytest.approx(expected, abs=1e-9)
        assert float(_log_pair_dimensions(rows).sum()) == pytest.approx(math.log(dim_lambda), abs=1e-12)


@settings(deadline=None, max_examples=80)
@given(
    st.lists(st.integers(1, 9), min_size=2, max_size=4),
    st.lists(st.integers(0, 6), min_size=2, max_size=4).filter(any),
)
def test_multiplicity_bound_covers_the_schur_polynomial(weights, rows):
    """With the true ratios of the spectrum, exact Schur polynomials."""
    d = max(len(weights), len(rows))
    p = sorted((Fraction(w, sum(weights)) for w in (weights * 4)[:d]), reverse=True)
    shape = sorted((rows + [0] * d)[:d], reverse=True)
    if not any(shape):
        return
    monomial = math.prod(x**row for x, row in zip(p, shape, strict=True))
    exact = math.log(schur_polynomial(YoungDiagram(shape), p) / monomial)
    ratios = np.triu(np.array([[float(b / a) for b in p] for a in p]), 1)
    assert exact <= _log_multiplicity_bound([_log_pair_dimensions(np.array(shape, dtype=float))], ratios) + 1e-9


@settings(deadline=None, max_examples=60)
@given(SHAPES, st.floats(1e-3, 1.0), st.integers(0, 2**32 - 1))
def test_ratios_hold_within_the_radius(rows, radius, seed):
    d = len(rows) + 1
    h = padded(rows, d) / sum(rows)
    limits = _largest_ratios(h, radius)
    generator = np.random.default_rng(seed)
    for spread in (0.1, 0.5, 1.0, 2.0):
        p = np.maximum(h, 0.05 / d) * np.exp(spread * generator.normal(size=d))
        p = np.sort(p / p.sum())[::-1]
        if sum(a * math.log(a / b) for a, b in zip(h, p, strict=True) if a > 0) <= radius:
            assert all(p[j] <= p[i] * limits[i, j] for i, j in itertools.combinations(range(d), 2))


@pytest.mark.parametrize("name", [name for name in SPECTRA if len(SPECTRA[name]) > 1])
def test_localiser_covers_the_spectrum(name):
    """Exact law; in d = the rank and one more. The refined radius holds on the same event as the first one."""
    spectrum = SPECTRA[name]
    p = sorted(map(float, spectrum), reverse=True)
    for copies in (2, 5, 9):
        law = outcome_law(spectrum, copies)
        for delta, d in itertools.product((0.05, 0.3, 0.8), (len(p), len(p) + 1)):
            missed = 0.0
            for diagram, weight in law.items():
                h = padded(diagram.rows, d) / copies
                divergence = sum(a * math.log(a / b) for a, b in zip(h, p, strict=False) if a > 0)
                found = localise(padded(diagram.rows, d)[None], delta)
                inside = divergence <= found.radius + 1e-12 and excess_limit(p) <= found.excess + 1e-9
                missed += 0.0 if inside else float(weight)
            assert missed <= delta


# The bound


@pytest.mark.parametrize("name", [name for name in SPECTRA if len(SPECTRA[name]) > 1])
def test_renyi_constraint_covers_the_spectrum(name):
    """Exact law: the statistic exceeds log(1/error) with probability at most error."""
    spectrum = SPECTRA[name]
    p = sorted(map(float, spectrum), reverse=True)
    for copies in (1, 4, 8):
        law = outcome_law(spectrum, copies)
        statistics = {d: upper_statistic(d.rows, p, excess_limit(p)) for d in law}
        for error in (0.02, 0.1, 0.3, 0.7):
            missed = sum(w for d, w in law.items() if statistics[d] > math.log(1 / error) + 1e-9)
            assert float(missed) <= error


@pytest.mark.parametrize("name", SPECTRA)
@pytest.mark.parametrize("copies", [1, 5, 9])
def test_bound_is_below_the_entropy_with_at_most_the_stated_error(name, copies):
    """Exact law over all shapes, at errors so large that the bound is not always log d."""
    spectrum = SPECTRA[name]
    law = outcome_law(spectrum, copies)
    for error in (0.1, 0.9):
        missed = sum(w for d, w in law.items() if bound((d.rows,), error, len(spectrum)) < entropy(spectrum))
        assert missed <= error


def test_two_diagrams_are_covered_too():
    """All pairs of diagrams of 6 copies of a qubit, exact law."""
    for name in ("uniform qubit", "tiny eigenvalue", "near tie"):
        spectrum = SPECTRA[name]
        law = outcome_law(spectrum, 6)
        for error in (0.1, 0.9):
            missed = sum(
                a * b
                for (first, a), (second, b) in itertools.product(law.items(), repeat=2)
                if bound((first.rows, second.rows), error, 2) < entropy(spectrum)
            )
            assert missed <= error


@settings(deadline=None, max_examples=60)
@given(cases(), st.integers(0, 2**32 - 1), st.sampled_from([0.05, 0.5]))
def test_any_parameters_give_more_than_every_entropy_in_the_confidence_set(case, seed, error):
    rows, dim, m = case
    upper = value(rows, dim, m, error)
    n = sum(rows)
    h = padded(rows, dim) / n
    radius = localise(padded(rows, dim)[None], 0.1 * error).radius
    generator = np.random.default_rng(seed)
    for spread in (0.02, 0.2, 0.6):
        for dust in (0.0, 0.02, 0.1):
            p = np.where(h > 0, h, dust / dim) * np.exp(generator.normal(0.0, spread, dim))
            p = np.sort(p / p.sum())[::-1]
            divergence = sum(a * math.log(a / b) for a, b in zip(h, p, strict=True) if a > 0)
            support = [x for x in p.tolist() if x > 0]
            if divergence <= radius and upper_statistic(rows, support, excess_limit(support)) <= math.log(
                1 / (0.9 * error)
            ):
                assert upper >= shannon(support) - 1e-12


@settings(deadline=None, max_examples=40)
@given(cases())
def test_rows_agree_with_a_dense_grid(case):
    rows, dim, m = case
    for h in {*(row / sum(rows) for row in rows), 0.0 if dim > len(rows) else 1.0}:
        end = 60.0 if h else 2.0 * (1.0 + abs(m.shift) + m.k)
        proven = float(row_minima(m, np.array([h]), math.inf)[0])
        seen = grid_minimum(-1, h, m.weight, m.t, m.k, m.shift, end)
        assert proven <= seen + 1e-12
        assert min(proven, 0.0 if h == 0.0 else proven) == pytest.approx(
            min(seen, 0.0 if h == 0.0 else seen), abs=1e-4 * (1 + m.k)
        )


@settings(deadline=None, max_examples=60)
@given(cases(), st.sampled_from([0.05, 1e-9]))
def test_referee_confirms_any_value(case, error):
    rows, dim, m = case
    fast = value(rows, dim, m, error)
    plain = referee([rows], dim, error, m)
    assert plain <= fast <= plain + 1e-8


@pytest.mark.parametrize(
    ("diagrams", "dim"),
    [
        ([(1,)], 1),
        ([(1,)], 3),
        ([(1000,)], 2),
        ([(6, 6)], 2),
        ([(5, 4, 2, 1)], 6),
        ([(300, 300, 300)], 3),
        ([(500, 300, 200), (480, 330, 190)], 4),
        ([(10**9,)], 2),
        ([(10**9 - 1, 1)], 2),
        ([(5 * 10**8, 25 * 10**7, 15 * 10**7, 10**8)], 4),
        ([tuple(range(60, 0, -1))], 70),
        ([tuple(range(20_000, 0, -400))], 50),
    ],
)
def test_stated_bound_is_confirmed_by_the_referee(diagrams, dim):
    for error in (0.05, 1e-6):
        b = dual_upper_bound([rows + (0,) * (dim - len(rows)) for rows in diagrams], error=error, dim=dim)
        confirmed = dual_upper_value(
            diagrams, error=error, dim=dim, t=b.t, mu=b.mu, log_z0=b.log_z0, shift=b.shift, weight=b.weight
        )
        assert confirmed <= b.value <= confirmed + 20 * STATED_SLACK
        total = np.sum([padded(rows, dim) for rows in diagrams], axis=0)
        assert min(math.log(dim), shannon((total / total.sum()).tolist())) - 1e-12 <= b.value <= math.log(dim) + 1e-12


def test_parameters_outside_the_theorem_prove_nothing():
    rows = (900, 100)
    b = dual_upper_bound(rows, error=0.05, dim=2)
    good = {"t": b.t, "mu": b.mu, "log_z0": b.log_z0, "shift": b.shift, "weight": b.weight}
    assert dual_upper_value([rows], error=0.05, dim=2, **good) < 0.42
    for change in ({"t": -0.1}, {"mu": 0.0}, {"weight": -1.0}):
        assert dual_upper_value([rows], error=0.05, dim=2, **{**good, **change}) == pytest.approx(math.log(2))


@pytest.mark.parametrize(("copies", "most"), [(1000, 1.235), (10_000, 1.165), (100_000, 1.145), (10**9, 1.13702)])
def test_bound_for_typical_rows(copies, most):
    """Rows at their means, entropy 1.1369; medians of 40 draws: 1.217, 1.157, 1.142."""
    rows = np.round(geometric(4, 0.5) * copies).astype(np.int64)
    assert dual_upper_bound(rows, error=0.05, dim=4).value <= most


def test_false_bounds_are_rare():
    """At error 0.3, 36 draws: more than 25 false bounds have probability below 1e-6 if the claim holds."""
    generator = np.random.default_rng(8)
    false = 0
    for p in (geometric(3, 0.3), geometric(4, 0.5), np.array([0.4, 0.4, 0.1, 0.1]), np.array([0.99, 0.009, 0.001])):
        for copies in (100, 1000, 10_000):
            draws = draw_by_insertion(p, copies, 3, generator)
            false += sum(dual_upper_bound(rows, error=0.3, dim=len(p)).value < shannon(p.tolist()) for rows in draws)
    assert false <= 25


@pytest.mark.parametrize(
    ("rows", "options", "message"),
    [
        ([0, 0], {}, "at least one box"),
        ([[2, 1], [0, 0]], {}, "at least one box"),
        ([3, 2, 1], {}, "dim must be at least the number of rows 3, got 2"),
        ([[[2, 1]]], {}, "one diagram or a list of diagrams"),
        ([2, 1], {"dim": 0}, "dim must be at least 1"),
        ([2, 1], {"dim": 2**21}, "dim must be at most"),
        ([2, 1], {"error": 1.0}, "error must lie strictly between 0 and 1"),
    ],
)
def test_wrong_arguments_are_refused(rows, options, message):
    with pytest.raises(ArgumentValueError, match=message):
        dual_upper_bound(rows, **{"error": 0.05, "dim": 2, **options})

"""The least probabilities of the sets of a chain: theorems by enumeration, the table by independent searches."""

import json
import math
from collections import Counter
from fractions import Fraction
from itertools import chain, combinations, pairwise

import numpy as np
import pytest

from entropest.certification import plain_chains
from entropest.certification.chain_minima import (
    UNITS,
    certified_minimum,
    chain_rows,
    chain_value,
    deepest,
    flat_limit,
)
from entropest.certification.score_test import step_entropy
from entropest.certification.tables import chain_minima, make_chain_minima
from entropest.diagrams import YoungDiagram, young_diagrams
from tests.certification.exact import as_fractions, outcome_law

SETS = [(copies, depth) for copies in range(3, 9) for depth in range(2, deepest(copies) + 1)]


@pytest.mark.parametrize(("x", "y", "repeats", "z"), [(5, 3, 2, 1), (4, 4, 1, 0), (7, 2, 3, 2), (1, 0, 1, 0)])
def test_set_probabilities_are_those_of_the_outcome_law(x, y, repeats, z):
    spectrum = as_fractions([x, *[y] * repeats, z])
    for copies in range(2, 9):
        law = outcome_law([p for p in spectrum if p], copies)
        for depth in range(1, deepest(copies) + 1):
            expected = sum(law.get(YoungDiagram(rows), Fraction(0)) for rows in chain_rows(copies)[:depth])
            value = chain_value(x, y, repeats, z, copies=copies, depth=depth)
            assert Fraction(value, (x + repeats * y + z) ** copies) == expected


@pytest.mark.parametrize(("copies", "depth"), [(2, 1), *SETS])
def test_flat_limit_is_the_plancherel_weight_and_the_limit_of_many_equal_eigenvalues(copies, depth):
    plancherel = Fraction(
        sum(YoungDiagram(rows).standard_tableaux ** 2 for rows in chain_rows(copies)[:depth]), math.factorial(copies)
    )
    assert flat_limit(Fraction(0), copies=copies, depth=depth) == plancherel
    many = 10**7
    value = chain_value(Fraction(2, 5), Fraction(3, 5 * many), many, 0, copies=copies, depth=depth)
    assert float(value) == pytest.approx(float(flat_limit(Fraction(2, 5), copies=copies, depth=depth)), abs=1e-5)


def up_sets(copies):
    """Every up-set of the dominance order on diagrams with `copies` boxes."""
    diagrams = list(young_diagrams(copies))
    subsets = chain.from_iterable(combinations(diagrams, size) for size in range(len(diagrams) + 1))
    for subset in subsets:
        members = set(subset)
        if all(upper in members for lower in members for upper in diagrams if upper.dominates(lower)):
            yield members


@pytest.mark.parametrize("copies", [2, 3, 4, 5, 6])
def test_up_sets_are_likelier_at_more_ordered_spectra(copies):
    generator = np.random.default_rng(copies)
    sets = list(up_sets(copies))
    assert len(sets) > copies
    for _ in range(6):
        weights = [int(w) for w in generator.integers(1, 30, size=4)]
        i, j = generator.choice(4, size=2, replace=False)
        moved = int(generator.integers(0, abs(weights[i] - weights[j]) // 2 + 1))
        evener = list(weights)
        larger, smaller = (i, j) if weights[i] >= weights[j] else (j, i)
        evener[larger] -= moved
        evener[smaller] += moved
        ordered, even = (outcome_law(as_fractions(w), copies) for w in (weights, evener))
        for members in sets:
            assert sum(ordered[d] for d in members if d in ordered) >= sum(even[d] for d in members if d in even)


def circular_arcs(word):
    """Pairs (place of 2, place of 1) of the bracket matching on a circle."""
    arcs, waiting = [], []
    for place in range(2 * len(word)):
        here = place % len(word)
        if any(here in arc for arc in arcs):
            continue
        if word[here] == 2:
            if here not in waiting:
                waiting.append(here)
        elif waiting:
            arcs.append((waiting.pop(), here))
    return arcs


def inside(inner, outer, length):
    """Say whether the arc `inner` lies on the way clockwise from the start to the end of `outer`, or equals it."""
    way = [(outer[0] + step) % length for step in range((outer[1] - outer[0]) % length + 1)]
    return inner[0] in way and inner[1] in way and way.index(inner[0]) < way.index(inner[1])


def longest_increasing(word):
    """Length of a longest weakly increasing subsequence of 1s and 2s: 1s before a cut, 2s behind it."""
    return max(word[:cut].count(1) + word[cut:].count(2) for cut in range(len(word) + 1))


@pytest.mark.parametrize("length", [2, 3, 4, 5, 6, 7, 8])
def test_opening_an_outer_arc_keeps_words_uniform_and_sequences_long(length):
    for twos in range(1, length // 2 + 1):
        weight_of = Counter()
        for places in combinations(range(length), twos):
            before = [2 if place in places else 1 for place in range(length)]
            arcs = circular_arcs(before)
            assert len(arcs) == twos
            for arc in arcs:
                if any(inside(arc, other, length) for other in arcs if other != arc):
                    continue
                after = list(before)
                after[arc[0]] = 1
                weight_of[tuple(after)] += sum(inside(other, arc, length) for other in arcs)
                for start, stop in combinations(range(length + 1), 2):
                    assert longest_increasing(after[start:stop]) >= longest_increasing(before[start:stop])
        assert len(weight_of) == math.comb(length, twos - 1)
        assert len(set(weight_of.values())) == 1


def series(spectrum, degree):
    """h_0..h_degree of spectra (..., n), by adding the eigenvalues one at a time."""
    h = np.zeros((*spectrum.shape[:-1], degree + 1))
    h[..., 0] = 1.0
    for i in range(spectrum.shape[-1]):
        for n in range(1, degree + 1):
            h[..., n] += spectrum[..., i] * h[..., n - 1]
    return h


def test_coefficients_change_sign_from_plus_to_minus_only():
    # derivative of the probability in one eigenvalue, from d h_m / d p_i = sum_j p_i^j h_{m-1-j}
    generator = np.random.default_rng(3)
    spectra = generator.gamma(np.repeat([0.1, 0.5, 2.0, 50.0], 500)[:, None], size=(2000, 6)) + 1e-12
    h = series(spectra / spectra.sum(axis=1, keepdims=True), 8)
    for copies, depth in SETS:
        tableaux = copies * (copies - 3) // 2 if depth == 3 else 0
        c = np.zeros((len(h), copies))
        for j in range(1, copies):
            c[:, j] = (copies - 1 - tableaux) * (h[:, copies - 2 - j] if j <= copies - 2 else 0.0)
            c[:, j] -= (copies - 2) * h[:, copies - 1 - j]
            if tableaux:
                c[:, j] += tableaux * h[:, 2] * (h[:, copies - 3 - j] if j <= copies - 3 else 0.0)
                c[:, j] += tableaux * h[:, copies - 2] * (j == 1)
        signs = np.sign(np.where(np.abs(c[:, 1:]) < 1e-12, 0.0, c[:, 1:]))
        assert (signs[:, 0] > 0).all()
        assert (signs[:, -1] < 0).all()
        for row in signs:
            kept = [sign for sign in row if sign]
            assert kept == sorted(kept, reverse=True)


def set_probabilities(levels, times, copies):
    """Probabilities of the sets of every depth at eigenvalues `levels` (..., n), each repeated `times`."""
    h = np.zeros((copies + 1, *levels.shape[:-1]))
    h[0] = 1.0
    for a in range(levels.shape[-1]):
        power = [np.ones(levels.shape[:-1])]
        for i in range(1, copies + 1):
            power.append(power[-1] * levels[..., a] * (times[..., a] - 1.0 + i) / i)
        h = np.array([sum(h[n - i] * power[i] for i in range(n + 1)) for n in range(copies + 1)])
    two_rows = [h[copies]]
    for b in range(1, deepest(copies)):
        tableaux = math.comb(copies, b) - math.comb(copies, b - 1)
        two_rows.append(two_rows[-1] + tableaux * (h[copies - b] * h[b] - h[copies - b + 1] * h[b - 1]))
    return two_rows


def entropies(levels, times):
    return -np.sum(times * levels * np.log(np.where(levels > 0.0, levels, 1.0)), axis=-1)


def tempered(logs, times, target):
    """Spectra proportional to exp(beta log) with the entropy `target`; nan where no beta gives it."""
    low, high = np.full(logs.shape[:-1], -12.0), np.full(logs.shape[:-1], 12.0)
    for _ in range(50):
        middle = 0.5 * (low + high)
        weights = np.exp(np.exp(middle)[..., None] * (logs - logs.max(axis=-1, keepdims=True)))
        levels = weights / np.sum(weights * times, axis=-1, keepdims=True)
        rise = entropies(levels, times) > target
        low, high = np.where(rise, middle, low), np.where(rise, high, middle)
    reached = np.abs(entropies(levels, times) - target) < 1e-9
    return np.where(reached[..., None], levels, np.nan)


def table_value(copies, depth, entropy):
    """The tabulated bound at the first entropy of the grid that is not below `entropy`."""
    table = chain_minima()
    return table.units_of[copies, depth][np.searchsorted(table.entropies, entropy)] / table.units


def test_no_spectrum_found_by_search_falls_below_the_table():
    """40,000 random spectra of up to five levels, each repeated up to 400 times; nothing random can fail but a bug."""
    generator = np.random.default_rng(20260301)
    count = 40_000
    shape = generator.choice([0.05, 0.3, 1.0, 5.0], size=(count, 1))
    levels = generator.gamma(shape, size=(count, 5)) * (generator.random((count, 5)) < 0.8) + 1e-300
    times = np.floor(np.exp(generator.exponential(generator.choice([0.3, 2.0], size=(count, 1)), size=(count, 5))))
    times = np.minimum(times, 400.0)
    levels /= np.sum(levels * times, axis=1, keepdims=True)
    entropy = entropies(levels, times)
    kept = entropy < 6.0 - 1e-9
    assert kept.mean() > 0.9
    for copies in range(3, 9):
        probabilities = set_probabilities(levels[kept], times[kept], copies)
        for depth in range(2, deepest(copies) + 1):
            bound = table_value(copies, depth, entropy[kept] + 1e-12)
            assert (probabilities[depth - 1] >= bound - 1e-12).all()


@pytest.mark.parametrize("entropy", [0.02, 0.693, 1.137, 2.5])
def test_climbing_from_random_spectra_comes_near_the_table_and_not_below(entropy):
    """40 climbs for every set: five levels change at random at constant entropy, improvements are kept."""
    generator = np.random.default_rng(round(1000 * entropy))
    sets, climbs = len(SETS), 40
    times = generator.choice([1.0, 1.0, 2.0, 5.0, 12.0, 30.0, 100.0], size=(sets, climbs, 5))
    logs = generator.normal(0.0, 2.0, size=(sets, climbs, 5))
    times[:, ::2, 0], logs[:, ::2, 0] = 1.0, 6.0
    best = np.full((sets, climbs), np.inf)
    for step in range(100):
        trial = logs + generator.normal(0.0, 0.5 * 0.97**step, size=logs.shape)
        levels = tempered(trial, times, entropy)
        found = {copies: set_probabilities(levels, times, copies) for copies in range(3, 9)}
        value = np.array([found[copies][depth - 1][i] for i, (copies, depth) in enumerate(SETS)])
        better = value < best
        best, logs = np.where(better, value, best), np.where(better[..., None], trial, logs)
    for i, (copies, depth) in enumerate(SETS):
        assert np.isfinite(best[i]).sum() >= 20
        least, floor = best[i].min(), float(flat_limit(0.0, copies=copies, depth=depth))
        above = least - table_value(copies, depth, entropy)
        assert -1e-11 <= above <= 0.02 * min(least - floor, 1.0 - least)


@pytest.mark.parametrize("entropy", [0.2, 0.693, 0.7, 1.137, 1.386, 2.0, 3.5])
def test_table_lies_close_below_the_best_spectra_found(entropy):
    """A grid over (x, y repeated, t y) comes within 2e-4 of the tabulated values, relative to both ends."""
    low, high = 1.0, math.exp(entropy) + 1e-9
    for _ in range(60):
        level = 0.5 * (low + high)
        low, high = (level, high) if step_entropy(level) < entropy else (low, level)
    # the step spectrum ends the interval of t; more points near it, where the probability falls fastest
    t = np.concatenate([np.linspace(0.0, 1.0, 201), high % 1.0 + (1.0 - high % 1.0) * np.logspace(-12.0, 0.0, 200)])
    repeats = np.arange(max(1, math.ceil(math.exp(entropy)) - 2), math.ceil(math.exp(entropy)) + 8)
    repeats, t = (part.ravel() for part in np.meshgrid(repeats, t))
    low, high = 1.0 / (repeats + 1.0 + t), np.ones(len(t))
    times = np.stack([np.ones(len(t)), repeats, np.ones(len(t))], axis=1)
    for _ in range(60):
        x = 0.5 * (low + high)
        y = (1.0 - x) / (repeats + t)
        levels = np.stack([x, y, t * y], axis=1)
        rise = entropies(levels, times) > entropy
        low, high = np.where(rise, x, low), np.where(rise, high, x)
    fits = np.abs(entropies(levels, times) - entropy) < 1e-9
    for copies in range(3, 9):
        for depth, probabilities in enumerate(set_probabilities(levels[fits], times[fits], copies), start=1):
            if depth > 1:
                best, floor = probabilities.min(), float(flat_limit(0.0, copies=copies, depth=depth))
                missing = best - table_value(copies, depth, entropy)
                assert -1e-12 <= missing <= 2e-4 * min(best - floor, 1.0 - best) + 2 / UNITS


def test_table_is_ordered():
    table = chain_minima()
    assert table.units == UNITS
    assert (np.diff(table.entropies) > 0.0).all()
    assert table.entropies.tolist() == make_chain_minima.grid()
    assert set(table.units_of) == set(SETS)
    for (copies, depth), row in table.units_of.items():
        assert len(row) == len(table.entropies)
        assert (np.diff(row) <= 0).all()
        assert 0 < row[-1] <= row[0] < UNITS
        assert row[-1] >= float(flat_limit(0.0, copies=copies, depth=depth)) * UNITS
        if depth == 3:
            assert (row >= table.units_of[copies, 2]).all()


@pytest.mark.parametrize(("copies", "depth"), SETS)
def test_table_entries_are_proved_again_by_the_plain_branch_and_bound(copies, depth):
    table = chain_minima()
    for i in np.random.default_rng(10 * copies + depth).choice(len(table.entropies), size=3, replace=False):
        value = Fraction(int(table.units_of[copies, depth][i]), UNITS)
        entropy = float(table.entropies[i])
        assert plain_chains.minimum_is_at_least(copies, depth, entropy, value)
        floor = flat_limit(Fraction(0), copies=copies, depth=depth)
        raised = value + min(1 - value, value - floor) / 1000 + Fraction(2, UNITS)
        assert not plain_chains.minimum_is_at_least(copies, depth, entropy, raised)


def test_a_smaller_gap_raises_the_certified_minimum():
    values = [certified_minimum(4, 3, 1.137, gap=gap) for gap in (0.1, 0.01, 1e-3, 1e-4)]
    assert all(small < large for small, large in pairwise(values))


def test_script_reproduces_the_table(monkeypatch, tmp_path):
    shipped = chain_minima()
    chosen = sorted(np.random.default_rng(8).choice(len(shipped.entropies), size=4, replace=False))
    few = [float(shipped.entropies[i]) for i in chosen]
    monkeypatch.setattr(make_chain_minima, "grid", lambda: few)
    make_chain_minima.main(["--output", str(tmp_path / "table.json")])
    data = json.loads((tmp_path / "table.json").read_text(encoding="utf-8"))
    assert (data["schema"], data["units"], data["gap"]) == ("chain-minima/1", UNITS, make_chain_minima.GAP)
    for copies, depth in SETS:
        first, *decrements = data["minima"][str(copies)][str(depth)]
        values = first - np.cumsum([0, *decrements])
        # another mathematics library may move the last digit
        assert np.abs(values - shipped.units_of[copies, depth][chosen]).max() <= 2

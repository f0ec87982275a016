"""The identical-blocks e-value, the bound it gives, its table, and the referee's re-check."""

import itertools
import math
from importlib.resources import files

import numpy as np
import pytest

from entropest.certification.evidence import SizedBlocks
from entropest.certification.identical_blocks import (
    identical_blocks_evidence,
    identical_blocks_lower_bound,
    log_identical_blocks_e_values,
)
from entropest.certification.identical_blocks_table import IDENTICAL_BLOCKS_FILE, identical_blocks_table
from entropest.certification.mean_polynomial import character_columns
from entropest.certification.plain import partitions
from entropest.certification.plain_identical_blocks import check_identical_blocks
from entropest.certification.spectra_at_entropy import spectra_at_entropy
from entropest.certification.tables.identical_blocks_design import (
    REFERENCES,
    alternative,
    best_statistic,
    null_means,
    outcome_law,
)
from entropest.certification.tables.make_identical_blocks import UNITS, cell_entropies, in_units, made_cell, main
from entropest.diagrams import cycle_character
from entropest.errors import ArgumentValueError, RecheckError
from entropest.shapes import all_shapes
from entropest.spectra import geometric, maximally_mixed
from tests.certification.exact import SPECTRA, as_fractions, entropy
from tests.certification.exact import outcome_law as exact_law

ERROR = 0.05


def record(copies: int, counts: np.ndarray) -> SizedBlocks:
    return SizedBlocks(copies=copies, shapes=all_shapes(copies, copies), counts=np.asarray(counts))


def draws(spectrum: np.ndarray, copies: int, blocks: int, records: int, seed: int) -> np.ndarray:
    return np.random.default_rng(seed).multinomial(blocks, outcome_law(spectrum, copies), size=records)


def outcomes_of(part: SizedBlocks) -> dict[tuple[int, ...], int]:
    rows = [tuple(row for row in shape if row) for shape in part.shapes.tolist()]
    return dict(zip(rows, part.counts.tolist(), strict=True))


def plain_log_e_value(parts: list[SizedBlocks], copies_planned: int, cell: int, point: int) -> float:
    """A loop over families and blocks."""
    table = identical_blocks_table()
    design = 0 if copies_planned < 3000 else 1
    value = 0.0
    for family, weight in enumerate(table.weights):
        product = weight
        for part in parts:
            c = table.coefficients[part.copies][cell, design, family]
            statistics = character_columns(part.copies)[1] @ c
            uppers = table.suprema[part.copies][cell, design, family]
            bet = min(math.sqrt(table.designs[design] / copies_planned), 0.97 / (1 - statistics.min() / uppers.max()))
            for statistic, count in zip(statistics, part.counts.tolist(), strict=True):
                product *= (1 + bet * (statistic / uppers[point] - 1)) ** count
        value += product
    return math.log(value)


def test_table_is_small_and_keeps_the_rules_of_the_theorem():
    assert len(files("entropest.certification.tables").joinpath(IDENTICAL_BLOCKS_FILE).read_bytes()) < 2_000_000
    table = identical_blocks_table()
    assert sorted(table.coefficients) == [3, 4, 5, 6]
    assert table.references == REFERENCES
    assert table.weights.sum() == pytest.approx(1.0, abs=1e-15)
    assert (np.diff(table.entropies.reshape(-1)) > 0).all()
    for copies, coefficients in table.coefficients.items():
        assert len(coefficients) == len(table.entropies)
        assert coefficients.shape[-1] == copies + 1
        assert (coefficients[..., 3:copies] <= 0).all()
        assert (coefficients[..., copies] >= 0).all()
        assert (np.diff(table.suprema[copies], axis=-1) >= 0).all()
        values = coefficients @ character_columns(copies)[1].T
        assert (values > 0.01).all()


def test_e_value_equals_a_plain_loop_and_is_rounded_down():
    parts = [record(3, [40, 30, 5]), record(4, [25, 20, 8, 3, 1])]
    for planned in ({3: 75, 4: 57}, {3: 75, 4: 5000}):
        logs = log_identical_blocks_e_values(parts, planned_blocks=planned)
        for cell, point in ((0, 0), (40, 7), (130, 3), (200, 5), (259, 7)):
            expected = plain_log_e_value(parts, sum(size * m for size, m in planned.items()), cell, point)
            got = logs[cell, point]
            assert expected - 1e-9 < got <= expected + 1e-13 * abs(expected)


@pytest.mark.parametrize("name", SPECTRA)
@pytest.mark.parametrize("copies", [3, 4, 6])
def test_mean_of_the_e_value_is_at_most_one_at_the_boundary_of_the_null(name, copies):
    """Exact expectation over all tallies of two blocks, at every entropy of the table from the spectrum's own on."""
    spectrum = SPECTRA[name]
    law = exact_law(spectrum, copies)
    probabilities = {diagram.rows: float(probability) for diagram, probability in law.items()}
    place = {rows: i for i, rows in enumerate(diagram.rows for diagram in character_columns(copies)[0])}
    for planned in ({copies: 2}, {copies: 900}):
        mean = 0.0
        for first, second in itertools.combinations_with_replacement(probabilities, 2):
            counts = np.zeros(len(place), dtype=int)
            counts[place[first]] += 1
            counts[place[second]] += 1
            weight = probabilities[first] * probabilities[second] * (1 if first == second else 2)
            logs = log_identical_blocks_e_values([record(copies, counts)], planned_blocks=planned)
            mean = mean + weight * np.exp(logs)
        assert (mean[identical_blocks_table().entropies >= entropy(spectrum)] <= 1.0 + 1e-12).all()


def test_mean_is_at_most_one_when_sizes_are_mixed():
    spectrum = as_fractions([5, 3, 1])
    laws = {copies: exact_law(spectrum, copies) for copies in (3, 5)}
    mean = 0.0
    for first, p in laws[3].items():
        for second, q in laws[5].items():
            parts = [
                record(copies, [diagram == other for other in character_columns(copies)[0]])
                for copies, diagram in ((3, first), (5, second))
            ]
            mean = mean + float(p * q) * np.exp(log_identical_blocks_e_values(parts, planned_blocks={3: 90, 5: 90}))
    assert (mean[identical_blocks_table().entropies >= entropy(spectrum)] <= 1.0 + 1e-12).all()


@pytest.mark.parametrize("copies", [3, 4, 6])
@pytest.mark.parametrize("copies_measured", [600, 6000])
def test_false_rejections_at_the_boundary(copies, copies_measured):
    """The e-value at one entropy exceeds 20 for hard spectra of that entropy no more often than 5%.

    Hard: the spectra of the search grid with the largest mean for one of the families. 9 cells of 4,000 records each; a
    test at exactly 5% would be above 5% + 4 standard errors in one run of 3,500.
    """
    table = identical_blocks_table()
    blocks = copies_measured // copies
    for cell in (60, 150, 200):
        s = float(table.entropies[cell, -1])
        grid = spectra_at_entropy(s)
        for family in range(len(REFERENCES)):
            c = table.coefficients[copies][cell, int(copies_measured >= 3000), family]
            powers = [(grid.multiplicities * grid.levels**j).sum(axis=0) for j in range(1, copies + 1)]
            worst = int(np.argmax(c @ np.stack([*powers, powers[1] ** 2])))
            spectrum = np.repeat(grid.levels[:, worst], grid.multiplicities[:, worst].astype(int))
            tallies, frequencies = np.unique(draws(spectrum, copies, blocks, 4000, cell), axis=0, return_counts=True)
            logs = log_of_tallies(tallies, copies, copies * blocks, cell)
            rejected = float(frequencies[logs >= math.log(20)].sum()) / 4000
            assert rejected <= ERROR + 4 * math.sqrt(ERROR * (1 - ERROR) / 4000)


def log_of_tallies(tallies: np.ndarray, copies: int, copies_planned: int, cell: int, point: int = -1) -> np.ndarray:
    """Logarithms of the e-values of many records at one entropy of a cell."""
    table = identical_blocks_table()
    design = 0 if copies_planned < 3000 else 1
    values = table.coefficients[copies][cell, design] @ character_columns(copies)[1].T
    uppers = table.suprema[copies][cell, design]
    room = 1 - values.min(axis=1) / uppers[:, -1]
    bets = np.minimum(math.sqrt(table.designs[design] / copies_planned), 0.97 / room)
    factors = 1 + bets[:, None] * (values / uppers[:, [point]] - 1)
    return np.logaddexp.reduce(np.log(table.weights)[:, None] + np.log(factors) @ tallies.T, axis=0)


def bounds_of_tallies(tallies: np.ndarray, copies: int, copies_planned: int) -> np.ndarray:
    """The bounds of many records at once."""
    entropies = identical_blocks_table().entropies
    bounds, alive = np.zeros(len(tallies)), np.arange(len(tallies))
    for cell, point in np.ndindex(*entropies.shape):
        logs = log_of_tallies(tallies[alive], copies, copies_planned, cell, point)
        alive = alive[logs >= -math.log(ERROR)]
        if not len(alive):
            break
        bounds[alive] = entropies[cell, point]
    return bounds


@pytest.mark.parametrize("name", ["uniform qutrit", "geometric", "step"])
def test_bound_rarely_exceeds_the_entropy_at_the_best_moment(name):
    """Twelve looks at a growing record, the largest bound counts: 400 runs, at most 5% + 4 standard errors."""
    spectrum = np.array([float(p) for p in SPECTRA[name]])
    steps = np.random.default_rng(8).multinomial(120, outcome_law(spectrum, 4), size=(400, 12))
    looks = np.cumsum(steps, axis=1).reshape(4800, -1)
    best = bounds_of_tallies(looks, 4, 2800).reshape(400, 12).max(axis=1)
    assert (best > entropy(SPECTRA[name])).mean() <= ERROR + 4 * math.sqrt(ERROR * (1 - ERROR) / 400)


@pytest.mark.parametrize(
    ("copies", "spectrum", "floors"),
    [
        (3, geometric(4, 0.5), (0.845, 0.975, 1.04, 1.08)),
        (4, geometric(4, 0.5), (0.905, 1.02, 1.085, 1.115)),
        (6, geometric(4, 0.5), (0.95, 1.06, 1.10, 1.12)),
        (4, maximally_mixed(8), (1.57, 1.89, 2.02, 2.06)),
    ],
)
def test_medians_are_as_high_as_measured(copies, spectrum, floors):
    """Medians of 400 seeded records at 600, 6,000, 60,000 and 600,000 copies."""
    for copies_measured, floor in zip((600, 6_000, 60_000, 600_000), floors, strict=True):
        tallies = draws(spectrum, copies, copies_measured // copies, 400, 5)
        assert np.median(bounds_of_tallies(tallies, copies, copies_measured // copies * copies)) >= floor


def test_bounds_of_single_records_are_those_of_many():
    for copies, blocks in ((3, 200), (5, 1200), (6, 100)):
        tallies = draws(geometric(4, 0.5), copies, blocks, 8, 9)
        singly = [identical_blocks_lower_bound([record(copies, tally)], error=ERROR) for tally in tallies]
        assert singly == bounds_of_tallies(tallies, copies, copies * blocks).tolist()


def test_bound_is_the_last_entropy_before_the_first_that_is_not_rejected():
    for seed in range(6):
        part = record(4, draws(geometric(5, 0.7), 4, 300 * 4**seed, 1, seed)[0])
        logs = log_identical_blocks_e_values([part]).reshape(-1)
        entropies = identical_blocks_table().entropies.reshape(-1)
        first = int(np.argmax(logs < math.log(20)))
        bound = identical_blocks_lower_bound([part], error=ERROR)
        assert bound == (entropies[first - 1] if first else 0.0)


def test_other_sizes_do_not_matter_and_nothing_certifies_nothing():
    pairs = record(2, [30, 30])
    sevens = SizedBlocks(copies=7, shapes=all_shapes(7, 2), counts=np.array([3, 2, 1, 0]))
    threes = record(3, [300, 280, 20])
    alone = identical_blocks_evidence([threes], error=ERROR)
    assert identical_blocks_evidence([pairs, threes, sevens], error=ERROR) == alone
    assert identical_blocks_lower_bound([pairs, sevens], error=ERROR) == 0.0
    assert identical_blocks_lower_bound([], error=ERROR) == 0.0
    assert identical_blocks_lower_bound([record(4, [50, 0, 0, 0, 0])], error=ERROR) == 0.0


def test_sizes_together_certify_more_than_alone():
    threes, fives = (record(copies, draws(geometric(4, 0.5), copies, 400, 1, 3)[0]) for copies in (3, 5))
    both = identical_blocks_lower_bound([threes, fives], error=ERROR)
    assert both > max(identical_blocks_lower_bound([part], error=ERROR) for part in (threes, fives))


def test_plan_tunes_the_bets():
    part = record(4, draws(geometric(4, 0.5), 4, 600, 1, 4)[0])
    as_measured = identical_blocks_evidence([part], error=ERROR)
    small, large = (identical_blocks_evidence([part], error=ERROR, planned_blocks={4: m}) for m in (600, 100_000))
    assert small == as_measured
    assert {entry.design for entry in small.entries} == {1200}
    assert {entry.design for entry in large.entries} == {30000}
    assert large.lower < small.lower


def test_plans_and_errors_are_checked():
    part = record(4, [10, 10, 1, 0, 0])
    with pytest.raises(ArgumentValueError, match="planned_blocks must plan blocks of 3 to 6 copies"):
        identical_blocks_lower_bound([part], error=ERROR, planned_blocks={2: 50})
    with pytest.raises(ArgumentValueError, match=r"planned_blocks\[4\] must be at least 0"):
        identical_blocks_lower_bound([part], error=ERROR, planned_blocks={4: -1})
    with pytest.raises(ArgumentValueError, match="error must lie strictly between 0 and 1"):
        identical_blocks_lower_bound([part], error=1.0)


def test_entries_reject_cell_by_cell():
    part = record(4, draws(geometric(4, 0.5), 4, 1500, 1, 6)[0])
    found = identical_blocks_evidence([part], error=ERROR)
    table = identical_blocks_table()
    ends = [float(end) for end in table.entropies[:, -1] if end < found.lower]
    assert sorted({entry.entropy for entry in found.entries}) == [*ends, found.lower]
    weights = dict(zip(table.references, table.weights, strict=True))
    for _, group in itertools.groupby(found.entries, key=lambda entry: entry.entropy):
        logs = []
        for entry in group:
            statistics = character_columns(4)[1] @ np.array(entry.coefficients)
            factors = 1 + entry.bet * (statistics / entry.upper - 1)
            logs.append(math.log(weights[entry.reference]) + float(part.counts @ np.log(factors)))
        assert np.logaddexp.reduce(logs) >= math.log(20)


@pytest.mark.parametrize(("copies", "blocks"), [((4,), 200), ((3, 6), 40), ((5,), 900)])
def test_referee_accepts_bounds_and_refuses_others(copies, blocks):
    spectrum = np.array([0.96, 0.03, 0.01])
    parts = [record(size, draws(spectrum, size, blocks, 1, size)[0]) for size in copies]
    planned = dict.fromkeys(copies, blocks)
    outcomes = {rows: count for part in parts for rows, count in outcomes_of(part).items()}
    bound = identical_blocks_lower_bound(parts, error=ERROR)
    assert bound > 0.05
    assert check_identical_blocks(outcomes, bound, error=ERROR, planned_blocks=planned) >= 50
    grid = identical_blocks_table().entropies.reshape(-1).tolist()
    after = grid[grid.index(bound) + 1]
    before = grid[grid.index(bound) - 1]
    for wrong, words in (
        (after, "does not reject|was not proved"),
        (before, "is not the bound"),
        (bound + 1e-6, "table"),
    ):
        with pytest.raises(RecheckError, match=words):
            check_identical_blocks(outcomes, wrong, error=ERROR, planned_blocks=planned)


def test_referee_has_nothing_to_prove_for_no_blocks():
    assert check_identical_blocks({(2,): 5}, 0.0, error=ERROR, planned_blocks={2: 5}) == 0


def test_float_laws_of_small_blocks_are_exact_to_rounding():
    for copies in (3, 6):
        for spectrum in SPECTRA.values():
            law = exact_law(spectrum, copies)
            expected = [float(law.get(diagram, 0)) for diagram in character_columns(copies)[0]]
            got = outcome_law(np.array([float(p) for p in spectrum]), copies)
            assert got == pytest.approx(expected, abs=1e-12)


@pytest.mark.parametrize("reference", REFERENCES)
@pytest.mark.parametrize("tested", [0.05, 0.7, 2.5])
def test_alternatives_have_the_entropy_asked_for_where_they_can(reference, tested):
    spectrum = alternative(reference, 1.02 * tested, tested)
    assert spectrum.sum() == pytest.approx(1.0, abs=1e-9)
    assert -float(spectrum @ np.log(spectrum)) == pytest.approx(1.02 * tested, abs=1e-6)


@pytest.mark.parametrize("copies", [3, 5])
def test_statistics_are_growth_optimal_within_their_constraints(copies):
    """No direction inside the constraints lets the growth rise: a first-order check against nearby feasible points."""
    rng = np.random.default_rng(copies)
    means = null_means(0.8, copies)
    mean = best_statistic(copies, 0.8, "gaussian", 300.0, means)
    best = np.array([*mean.coefficients, mean.square])
    assert (means @ best).max() <= 1.0 + 1e-6
    columns = character_columns(copies)[1]
    laws = [outcome_law(alternative("gaussian", s, 0.8), copies) for s in np.linspace(0.82, 1.4, 59)]
    growths = [float(law @ np.log(columns @ best)) for law in laws]
    law = laws[int(np.argmin([abs(300.0 * growth - 3.3) for growth in growths]))]
    own = float(law @ np.log(columns @ best))
    for _ in range(300):
        other = best + rng.normal(size=copies + 1) * 10.0 ** rng.uniform(-4, 0)
        other[3:copies], other[copies] = np.minimum(other[3:copies], 0.0), max(other[copies], 0.0)
        if (columns @ other).min() <= 0.0:
            continue
        other /= (means @ other).max()
        if (columns @ other).min() > 0.02:
            assert float(law @ np.log(columns @ other)) <= own + 3e-4


def test_a_cell_made_again_has_the_suprema_of_the_table():
    """Optimisers may differ in the last digits between machines; the numbers are near 1, their steps a few 1e-4."""
    table = identical_blocks_table()
    made = made_cell(3, 40)
    assert np.cumsum(made["suprema"], axis=-1) / UNITS == pytest.approx(table.suprema[3][40], abs=2e-5)
    assert cell_entropies(40) == table.entropies[40].tolist()


def test_table_is_made_in_pieces_and_resumed(tmp_path, monkeypatch):
    calls = []

    def fake(copies: int, cell: int) -> dict[str, list[float]]:
        calls.append((copies, cell))
        return {"coefficients": [float(copies)], "suprema": [float(cell)]}

    monkeypatch.setattr("entropest.certification.tables.make_identical_blocks.made_cell", fake)
    path = tmp_path / "table.json"
    main(["--output", str(path), "--cells", "2"])
    first = len(calls)
    main(["--output", str(path), "--cells", "3"])
    assert (first, len(calls)) == (8, 12)
    assert calls[first:] == [(copies, 2) for copies in (4, 3, 6, 5)]


def test_rounding_goes_up_by_less_than_a_unit():
    values = np.sort(np.random.default_rng(0).uniform(0.5, 2.0, size=200))
    stored = np.cumsum(in_units(values.tolist())) / UNITS
    assert (values <= stored).all()
    assert (stored <= values + 1.0001e-9).all()


def test_characters_in_the_columns_are_those_of_the_diagrams():
    for copies in (3, 6):
        diagrams, columns = character_columns(copies)
        assert [diagram.rows for diagram in diagrams] == partitions(copies)
        assert columns[:, 2].tolist() == [float(cycle_character(diagram, 3)) for diagram in diagrams]

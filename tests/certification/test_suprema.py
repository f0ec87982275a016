"""Certified suprema: the family, the cells, the search, and the referee's own proof."""

import math
import random
from fractions import Fraction

import numpy as np
import pytest

from entropest import _mp
from entropest.certification import plain_suprema
from entropest.certification.identical_blocks_table import identical_blocks_table
from entropest.certification.mean_polynomial import (
    MeanPolynomial,
    character_columns,
    double_transposition_character,
)
from entropest.certification.plain_identical_blocks import pair_of_swaps_value
from entropest.certification.plain_suprema import ONE, prove_supremum
from entropest.certification.spectra_at_entropy import spectra_at_entropy
from entropest.certification.suprema import certified_suprema
from entropest.certification.supremum_cells import Problem, bounded, first_cells, halves, narrowed
from entropest.diagrams import YoungDiagram, young_diagrams
from entropest.errors import ArgumentValueError, RecheckError
from tests.certification.exact import SPECTRA, outcome_law


def xi(x: np.ndarray) -> np.ndarray:
    return -x * np.log(np.maximum(x, 1e-300))


def random_mean(rng: np.random.Generator, copies: int) -> MeanPolynomial:
    coefficients = rng.normal(size=copies)
    coefficients[3:] = -np.abs(coefficients[3:])
    square = abs(float(rng.normal())) if copies > 3 else 0.0
    return MeanPolynomial(coefficients=tuple(coefficients.tolist()), square=square)


def tempered(rng: np.random.Generator, entropy: float, size: int) -> np.ndarray:
    """Random spectra as columns, their powers p^b normalised, with b such that the entropy is just below `entropy`."""
    d = int(rng.choice([2, 3, 4, 6, 10, 25]))
    kind = int(rng.integers(4))
    if kind == 0:
        weights = rng.dirichlet(np.full(d, rng.choice([0.1, 0.5, 1.0, 5.0])), size=size)
    elif kind == 1:
        weights = np.exp(-rng.exponential(size=(size, 1)) * np.arange(d) ** rng.choice([0.5, 1.0, 2.0]))
    elif kind == 2:
        weights = np.take_along_axis(rng.exponential(size=(size, 3)), rng.integers(0, 3, size=(size, d)), axis=1)
    else:
        weights = np.ones((size, d))
        weights[:, 0], weights[:, -1] = rng.uniform(0, 30, size=size), rng.uniform(size=size)
    logs = np.log(np.maximum(weights, 1e-12))
    logs -= logs.max(axis=1, keepdims=True)
    low, high = np.full(size, -8.0), np.full(size, 8.0)

    def spectra(power: np.ndarray) -> np.ndarray:
        rows = np.exp(np.exp(power)[:, None] * logs)
        return rows / rows.sum(axis=1, keepdims=True)

    for _ in range(45):
        middle = 0.5 * (low + high)
        too_much = xi(spectra(middle)).sum(axis=1) > entropy
        low, high = np.where(too_much, middle, low), np.where(too_much, high, middle)
    found = spectra(high)
    return found[xi(found).sum(axis=1) <= entropy].T


def members(cells, i: int, entropy: float, rng: np.random.Generator, size: int) -> tuple[np.ndarray, np.ndarray]:
    """Random spectra of one cell with at most that entropy: levels and multiplicities."""
    t, first, last = cells.top[i], cells.repeats_low[i], cells.repeats_high[i]
    r = np.clip(
        np.floor(np.exp(rng.uniform(0, np.log(min(last, 1000 * first) / first) + 1e-9, size)) * first), first, last
    )
    position = rng.uniform(size=(4, size))
    position = np.where(rng.uniform(size=(4, size)) < 0.15, np.round(position), position)
    levels = cells.low[:, [i]] + position * (cells.high - cells.low)[:, [i]]
    levels[2] = (1.0 - t * levels[0] - levels[1] - levels[3]) / r
    counts = np.stack([np.full(size, t), np.ones(size), r, np.ones(size)])
    top = np.where(t > 0, levels[0], 1.0)
    fits = (levels[2] >= levels[3]) & (levels[1] >= levels[2]) & (top >= levels[1]) & (levels.min(axis=0) >= 0)
    fits &= ((counts * xi(levels)).sum(axis=0) <= entropy) & (r * levels[2] <= cells.mass_high[i] + 1e-13)
    return levels[:, fits], counts[:, fits]


@pytest.mark.parametrize("copies", [3, 4, 5, 6])
@pytest.mark.parametrize("name", SPECTRA)
def test_mean_of_the_statistic_is_the_polynomial(copies, name):
    """Every character separately, against the exact outcome law."""
    spectrum = SPECTRA[name]
    diagrams, columns = character_columns(copies)
    law = outcome_law(spectrum, copies)
    probabilities = np.array([float(law.get(diagram, 0)) for diagram in diagrams])
    sums = [float(sum(p**j for p in spectrum)) for j in range(1, copies + 1)]
    expected = [*sums, sums[1] ** 2 if copies > 3 else 0.0]
    assert probabilities @ columns == pytest.approx(expected, abs=1e-14)


def test_pairs_of_swaps_agree_with_rim_hooks_and_the_table_of_s4():
    # character table of S4, class 2+2: James and Kerber, The Representation Theory of the Symmetric Group
    for rows, value in {(4,): 1, (3, 1): -1, (2, 2): 2, (2, 1, 1): -1, (1, 1, 1, 1): 1}.items():
        diagram = YoungDiagram(rows)
        assert double_transposition_character(diagram) == Fraction(value, diagram.standard_tableaux)
    for copies in (4, 5, 6, 7):
        for diagram in young_diagrams(copies):
            assert double_transposition_character(diagram) == pair_of_swaps_value(diagram.rows)


@pytest.mark.parametrize(
    ("coefficients", "square", "words"),
    [
        ((1.0, 2.0), 0.0, "at least 3"),
        ((1.0, 2.0, 3.0, 0.1), 0.0, "must not be positive"),
        ((1.0, 2.0, math.nan), 0.0, "finite"),
        ((1.0, 2.0, 3.0), -1.0, "square must not be negative"),
    ],
)
def test_polynomials_outside_the_theorem_are_refused(coefficients, square, words):
    with pytest.raises(ArgumentValueError, match=words):
        MeanPolynomial(coefficients=coefficients, square=square)


@pytest.mark.parametrize("level", [1.2, 2.0, 2.7, 5.5, 20.3])
def test_supremum_of_minus_the_purity_is_the_curve_of_harremoes_and_topsoe(level):
    """The least purity at given entropy belongs to equal eigenvalues and one smaller (doi:10.1109/18.959272)."""
    full, part = math.floor(level), level - math.floor(level)
    entropy = math.log(level) - (part * math.log(part) / level if part else 0.0)
    purity = (full + part**2) / level**2
    found = certified_suprema(MeanPolynomial(coefficients=(0.0, -1.0, 0.0), square=0.0), entropy, tolerance=1e-6)
    assert -purity - 1e-9 <= found.upper[0] <= -purity + 1e-6 + 1e-9


@pytest.mark.parametrize("copies", [3, 4, 5, 6])
def test_no_spectrum_has_a_larger_mean(copies):
    """An adversarial search over random spectra against random polynomials; the gap is as small as asked for."""
    rng = np.random.default_rng(copies)
    for _ in range(12):
        entropy = math.exp(rng.uniform(math.log(0.02), math.log(3.4)))
        mean = random_mean(rng, copies)
        found = certified_suprema(mean, [0.9 * entropy, entropy], tolerance=1e-3)
        assert (found.attained <= found.upper).all()
        assert (found.upper <= found.attained + 1e-3 * max(1.0, found.cells / 10_000)).all()
        for s, upper in zip((0.9 * entropy, entropy), found.upper, strict=True):
            for _ in range(6):
                spectra = tempered(rng, s, 300)
                assert (mean.at(spectra, np.ones_like(spectra)) <= upper).all()


@pytest.mark.parametrize("copies", [3, 4, 6])
def test_no_spectrum_of_a_cell_exceeds_its_bound(copies):
    """Random cells of the search, random spectra in them."""
    rng = np.random.default_rng(100 + copies)
    tried = 0
    for _ in range(15):
        entropy = math.exp(rng.uniform(math.log(0.02), math.log(3.4)))
        mean = random_mean(rng, copies)
        problem = Problem(mean=mean, entropies=np.array([entropy]), nu=rng.exponential(size=1), mu=rng.normal(size=1))
        cells = first_cells(problem)
        for _ in range(14):
            cells = narrowed(cells, problem)
            found = bounded(cells, problem)
            for i in rng.integers(0, len(cells), size=5):
                levels, counts = members(cells, i, entropy, rng, 40)
                tried += levels.shape[1]
                assert (mean.at(levels, counts) <= found.upper[i]).all()
            kept = rng.uniform(size=len(cells)) < 400 / len(cells)
            if not kept.any():
                break
            cells = halves(cells.take(kept), found.spread[:, kept])
    assert tried > 1000


@pytest.mark.parametrize("copies", [3, 6])
def test_narrowing_and_halving_lose_no_spectrum(copies):
    """Spectra of the family are followed through the search: each stays in some cell."""
    rng = np.random.default_rng(200 + copies)
    entropy = 1.3
    mean = MeanPolynomial(coefficients=(0.0, -1.0, 1.0, *[-1.0] * (copies - 3)), square=0.5)
    problem = Problem(mean=mean, entropies=np.array([entropy]), nu=np.zeros(1), mu=np.zeros(1))
    start = spectra_at_entropy(0.98 * entropy)
    chosen = rng.choice(start.levels.shape[1], size=60, replace=False)
    for levels, counts in zip(start.levels[:, chosen].T, start.multiplicities[:, chosen].T, strict=True):
        w, x, y, z = levels
        t, above, r = counts[:3]
        if not above:
            x, r = (y, r - 1.0) if r > 1 else (y, 1.0)
            y, z = (y, z) if counts[2] > 1 else (z, 0.0)
        cells = first_cells(problem)
        point = np.array([w, x, y, z])
        for _ in range(12):
            cells = narrowed(cells, problem)
            holds = (
                (cells.top == t)
                & (cells.repeats_low <= r)
                & (r <= cells.repeats_high)
                & (cells.low <= point[:, None] + 1e-12).all(axis=0)
                & (cells.high >= point[:, None] - 1e-12).all(axis=0)
                & (cells.mass_low <= r * y + 1e-12)
                & (cells.mass_high >= r * y - 1e-12)
            )
            assert holds.any()
            cells = cells.take(holds)
            cells = halves(cells, bounded(cells, problem).spread)


@pytest.mark.parametrize(
    ("entropies", "tolerance", "words"),
    [([0.0], 1e-3, "entropies must increase"), ([1.0, 0.9], 1e-3, "entropies must increase"), ([1.0], 0.0, "positive")],
)
def test_arguments_of_a_search_are_checked(entropies, tolerance, words):
    with pytest.raises(ArgumentValueError, match=words):
        certified_suprema(MeanPolynomial(coefficients=(0.0, 1.0, 0.0), square=0.0), entropies, tolerance=tolerance)


def pool_of_spectra(rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Entropies, increasing, and the power sums P_1 .. P_6 of many tempered random spectra."""
    entropies, sums = [], []
    for d in (2, 3, 4, 5, 8, 16, 40):
        base = np.concatenate(
            [rng.dirichlet(np.full(d, shape), size=25) for shape in (0.2, 1.0, 5.0)]
            + [np.take_along_axis(rng.exponential(size=(60, 3)), rng.integers(0, 3, size=(60, d)), axis=1)]
        )
        logs = np.log(np.maximum(base, 1e-9))
        logs -= logs.max(axis=1, keepdims=True)
        for power in np.exp(np.linspace(-4.0, 4.0, 160)):
            spectra = np.exp(power * logs)
            spectra /= spectra.sum(axis=1, keepdims=True)
            entropies.append(xi(spectra).sum(axis=1))
            sums.append(np.stack([(spectra**j).sum(axis=1) for j in range(1, 7)], axis=1))
    entropy, rows = np.concatenate(entropies), np.concatenate(sums)
    order = np.argsort(entropy)
    return entropy[order], rows[order]


def test_no_spectrum_exceeds_a_tabulated_supremum():
    """Every number of the table against random spectra of a little less entropy and against three-level spectra."""
    rng = np.random.default_rng(11)
    table = identical_blocks_table()
    pool_entropies, pool = pool_of_spectra(rng)
    for cell, row in enumerate(table.entropies):
        three = spectra_at_entropy(float(row[rng.integers(len(row))]))
        three_entropies = (three.multiplicities * xi(three.levels)).sum(axis=0)
        three_sums = np.stack([(three.multiplicities * three.levels**j).sum(axis=0) for j in range(1, 7)], axis=1)
        for point, entropy in enumerate(row):
            near = slice(np.searchsorted(pool_entropies, 0.97 * entropy), np.searchsorted(pool_entropies, entropy))
            sums = np.concatenate([pool[near], three_sums[three_entropies <= entropy]])
            for copies, coefficients in table.coefficients.items():
                if cell < len(coefficients):
                    columns = np.column_stack([sums[:, :copies], sums[:, 1] ** 2])
                    means = coefficients[cell] @ columns.T
                    assert (means.max(axis=-1, initial=-np.inf) <= table.suprema[copies][cell, ..., point]).all()


def test_referee_proves_tabulated_suprema_and_nothing_below_them():
    rng = np.random.default_rng(12)
    table = identical_blocks_table()
    for copies, coefficients in table.coefficients.items():
        for _ in range(3):
            cell, design, family = (int(rng.integers(n)) for n in coefficients.shape[:3])
            numbers = coefficients[cell, design, family].tolist()
            entropy, upper = float(table.entropies[cell, -1]), float(table.suprema[copies][cell, design, family, -1])
            assert prove_supremum(numbers[:-1], numbers[-1], entropy, upper + 1e-4) >= 1
            mean = MeanPolynomial(coefficients=tuple(numbers[:-1]), square=numbers[-1])
            attained = certified_suprema(mean, entropy, tolerance=1e-4).attained[0]
            with pytest.raises(RecheckError):
                prove_supremum(numbers[:-1], numbers[-1], entropy, attained - 1e-5, most_boxes=3000)


@pytest.mark.parametrize("bits", [3, 40, 70, 90, 120, 126])
def test_referee_bounds_one_level_on_intervals_of_any_scale(bits):
    """The bound of psi against 60-digit values at points of intervals near 2^(bits - 128), some of which start at 0."""
    rng = random.Random(bits)
    ctx = _mp.context(60)
    for _ in range(40):
        a, b = sorted(rng.randrange(1 << bits) for _ in range(2))
        a = 0 if rng.random() < 0.2 else a
        f, nu, mu = (round(rng.gauss(0, 1) * 3 * ONE) for _ in range(3))
        c = (0, 0, round(rng.gauss(0, 2) * ONE), -rng.randrange(ONE), -rng.randrange(ONE))
        upper, _ = plain_suprema._level(a, b, f, c, abs(nu), mu)
        for u in (a, b, *(rng.randint(a, b) for _ in range(6))):
            if u:
                x = ctx.mpf(u) / ONE
                psi = (f * x**2 + c[2] * x**3 + c[3] * x**4 + c[4] * x**5 + abs(nu) * x * ctx.log(x) - mu * x) / ONE
                assert psi * ONE <= upper + 2**20


@pytest.mark.parametrize("copies", [3, 4, 6])
def test_referee_agrees_with_the_search_on_random_polynomials(copies):
    rng = np.random.default_rng(300 + copies)
    for _ in range(4):
        entropy = math.exp(rng.uniform(math.log(0.05), math.log(1.5)))
        mean = random_mean(rng, copies)
        found = certified_suprema(mean, entropy, tolerance=2e-3)
        assert prove_supremum(mean.coefficients, mean.square, entropy, float(found.upper[0]) + 5e-3) >= 1


@pytest.mark.parametrize(
    ("numbers", "words"),
    [
        (([1.0, 0.0, 0.0, 1.0], 0.0, 1.0, 9.0), "no theorem"),
        (([1.0, 0.0, 0.0], -1.0, 1.0, 9.0), "no theorem"),
        (([1.0, 0.0, 0.0], 0.0, 0.0, 9.0), "must be above 0 and at most 5"),
        (([1.0, math.inf, 0.0], 0.0, 1.0, 9.0), "below 16384"),
        (([0.0, 1.0, 0.0], 0.0, 1.0, 0.9), "has mean"),
    ],
)
def test_referee_refuses_what_no_theorem_covers_and_what_is_false(numbers, words):
    with pytest.raises(RecheckError, match=words):
        prove_supremum(*numbers)

"""The split posterior: against a slow plain twin, exact identities in two dimensions, the bracket, and its accuracy."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import betaln, digamma

from entropest.errors import NotCoveredError
from entropest.estimation import AveragedPosterior, Continuation, PlugIn, PosteriorMean, SplitPosterior, estimate_many
from entropest.estimation.expansion import expand
from entropest.estimation.posterior import HilbertSchmidtPosterior
from entropest.estimation.power_sums import entropy_continuation
from entropest.estimation.split_posterior import clip_to_bracket, components, levels_considered, plug_in_variance
from entropest.functionals import PowerSum, Renyi, Tsallis, Varentropy, VonNeumann
from entropest.law.schur_weyl import SchurWeyl
from entropest.records import DiagramCounts
from entropest.spectra import geometric, low_rank, maximally_mixed

PER_LEVEL = [0.0, 0.25, 0.5, 1.0, 3.0, 15.0, 200.0]
WEIGHTS = [1, 2, 2, 2, 3, 3, 8, 2, 8]


def plain_block(rows, rank):
    """(log evidence, mean entropy) of every concentration, one posterior at a time; the last one is r equal levels."""
    for alpha in (-0.5, *(c * rank for c in PER_LEVEL)):
        posterior = HilbertSchmidtPosterior(rows, rank, alpha)
        yield posterior.log_evidence(), posterior.mean_entropy()
    parts = [row + rank - 1 - i for i, row in enumerate([*rows, *[0] * (rank - len(rows))])]
    pairs = [(parts[i] - parts[j]) / (j - i) for i in range(rank) for j in range(i + 1, rank)]
    yield math.log(math.prod(pairs)) - sum(rows) * math.log(rank), math.log(rank)


def plain_split(rows, k):
    """Log evidence of row k split off, and the two parameters of its weight."""
    m, a = sum(rows[k:]), rows[k]
    log_evidence = float(betaln(a + 1, m - a + 0.25) - betaln(1, 0.25))
    taken = 0.0
    for j in range(k + 1, len(rows)):
        ratio = min(rows[j] / m / ((a + 0.5) / (m + 1)), 1 - 1e-9) if m else 0.0
        reach = rows[j - 1] - rows[j] + 1
        log_evidence += math.log((1 - ratio**reach) / (1 - ratio))
        taken += ratio / (1 - ratio) - reach * ratio**reach / (1 - ratio**reach)
    first = max(a + 1 - taken, 1.0)
    return log_evidence, first, m + 1.25 - first


def plain_mean(rows, d):
    """The evidence-weighted mean entropy, component by component in plain numbers."""
    rows = list(rows)
    logs, entropies = [], []
    for k in range(min(6, len(rows), d - 1) + 1):
        log_split, entropy, mass = 0.0, 0.0, 1.0
        for row in range(k):
            log_one, a, b = plain_split(rows, row)
            log_split += log_one
            binary = digamma(a + b + 1) - a / (a + b) * digamma(a + 1) - b / (a + b) * digamma(b + 1)
            entropy += mass * float(binary)
            mass *= b / (a + b)
        levels, least = d - k, max(len(rows) - k, 1)
        grid = sorted({least, *(least + 2**i for i in range(12) if least + 2**i < levels), levels})
        harmonic = sum(1 / r for r in range(1, levels + 1))
        counted = least - 1
        for rank in grid:
            share = sum(0.9 / r / harmonic + 0.1 * (r == levels) for r in range(counted + 1, rank + 1))
            counted = rank
            for weight, (log_block, mean) in zip(WEIGHTS, plain_block(rows[k:], rank), strict=True):
                logs.append(log_split + log_block + math.log(share * weight / 31) - k * math.log(4))
                entropies.append(entropy + mass * mean)
    weights = np.exp(np.array(logs) - max(logs))
    return float(weights @ entropies / weights.sum())


@pytest.mark.parametrize(
    ("rows", "d"),
    [
        ((60, 30, 10), 3),
        ((60, 30, 10), 5),
        ((9,), 4),
        ((7, 7), 2),
        ((1, 1, 1), 3),
        ((1,), 1),
        ((20, 9, 8, 3, 1, 1, 1, 1), 12),
        ((1000, 3), 2),
        ((5, 4), 30),
    ],
)
def test_the_means_agree_with_a_plain_twin(rows, d):
    found = components(np.array([rows]), d)
    assert float(found.means()[0]) == pytest.approx(plain_mean(rows, d), abs=1e-9)
    if len(rows) == 1:
        assert np.exp(found.log_priors).sum() == pytest.approx(sum(4.0**-k for k in range(min(1, d - 1) + 1)))


@pytest.mark.parametrize(("rows", "x"), [((5, 2), 0.7), ((4, 4), 0.6), ((9, 0), 0.95)])
def test_splitting_a_level_is_the_branching_rule_at_qubits(rows, x):
    """s_(a,b)(x, y) = x^a y^b (1 + rho + ... + rho^(a-b)) with rho = y/x: the factor of one level split off."""
    a, b = rows
    y = 1 - x
    rho = y / x
    schur = sum(x ** (a - t) * y ** (b + t) for t in range(a - b + 1))
    assert schur == pytest.approx(x**a * y**b * (1 - rho ** (a - b + 1)) / (1 - rho))


def test_one_level_split_off_at_qubits_has_the_entropy_of_its_beta_law():
    """The component (1, 1, any) of a diagram (n): w ~ Beta(n + 1, 1/4), entropy by quadrature on 2^20 points."""
    n = 12
    found = components(np.array([[n]]), 2)
    a, b = n + 1.0, 0.25
    # 1 - w = t^4 takes the end point singularity of the density away.
    t = (np.arange(2**20) + 0.5) / 2**20
    w = 1.0 - t**4
    density = w ** (a - 1)
    entropy = -(w * np.log(w) + t**4 * np.log(t**4))
    assert found.entropies[0, -1] == pytest.approx(float(density @ entropy / density.sum()), abs=1e-6)
    assert a + b == n + 1.25


@settings(max_examples=40, deadline=None)
@given(
    rows=st.lists(st.integers(1, 60), min_size=1, max_size=6).map(lambda rows: sorted(rows, reverse=True)),
    extra=st.integers(0, 5),
)
def test_estimates_lie_in_the_widened_bracket(rows, extra):
    d = len(rows) + extra
    record = DiagramCounts({tuple(rows): 1}, dim=d)
    value = SplitPosterior()(record)
    shape = np.array([rows])
    ends = [min(max(float(entropy_continuation(shape, k)[0]), 0.0), math.log(d)) for k in (len(rows), d)]
    error = estimate_many(shape, dim=d).standard_errors[0]
    assert 0.0 <= value <= math.log(d) + 1e-12
    assert min(ends) - 0.5 * error - 1e-9 <= value <= max(ends) + 0.5 * error + 1e-9


def test_thousands_of_shapes_are_worked_on_in_pieces():
    shapes = np.sort(np.random.default_rng(0).integers(1, 9, (9000, 3)), axis=1)[:, ::-1]
    together = components(shapes, 7).means()
    assert together[8990:] == pytest.approx(components(shapes[8990:], 7).means(), rel=1e-12)


def test_clipping_keeps_what_is_inside():
    ends = np.array([[0.9, 1.2]])
    assert clip_to_bracket(np.array([1.0]), ends, np.array([0.1]), 2.0) == pytest.approx([1.0])
    assert clip_to_bracket(np.array([0.2]), ends, np.array([0.1]), 2.0) == pytest.approx([0.85])
    assert clip_to_bracket(np.array([1.9]), ends, np.array([0.1]), 2.0) == pytest.approx([1.25])
    assert clip_to_bracket(np.array([1.9]), ends, np.array([0.1]), 1.1) == pytest.approx([1.1])
    assert clip_to_bracket(np.array([0.5]), ends[:, ::-1], np.array([0.1]), 2.0) == pytest.approx([0.85])


def test_the_plug_in_variance_is_that_of_the_expansion():
    for rows in ([60, 30, 10], [50, 50], [9], [7, 4, 4, 1]):
        n = sum(rows)
        expansion = expand(VonNeumann(), np.array(rows) / n)
        expected = max(expansion.first_order, 0.0) / n + expansion.second_order / (2 * n**2)
        assert float(plug_in_variance(np.array([rows]))[0]) == pytest.approx(expected, rel=1e-5, abs=1e-9)


def test_levels_considered():
    assert levels_considered(3, 8) == 8
    assert levels_considered(3, None) == 5
    assert levels_considered(3, 10**6) == 256
    assert levels_considered(300, None) == 300


def test_several_blocks_share_one_component():
    """Evidence multiplies: m equal blocks of a flat diagram settle on equal eigenvalues more firmly than one."""
    one = AveragedPosterior()(DiagramCounts({"12+8": 1}, dim=2))
    many = AveragedPosterior()(DiagramCounts({"12+8": 1, "11+9": 6, "10+10": 3, "13+7": 2}, dim=2))
    assert one < many < math.log(2)
    assert SplitPosterior()(DiagramCounts({"12+8": 1}, dim=2)) == SplitPosterior()(DiagramCounts({(12, 8): 1}, dim=2))


def test_the_posterior_mean_is_the_closed_form():
    expected = HilbertSchmidtPosterior((60, 30, 10), 4).mean_entropy()
    assert PosteriorMean()(DiagramCounts({"60+30+10": 1}, dim=4)) == pytest.approx(expected)
    assert PosteriorMean()(DiagramCounts({"60+30+10": 3}, dim=4)) == pytest.approx(expected)
    assert PosteriorMean(VonNeumann(base=2))(DiagramCounts({"60+30+10": 1}, dim=4)) == pytest.approx(
        expected / math.log(2)
    )


@pytest.mark.parametrize("make", [PosteriorMean, AveragedPosterior, SplitPosterior])
def test_only_the_von_neumann_entropy_is_covered(make):
    record = DiagramCounts({"6+4": 1}, dim=2)
    assert make(Renyi(1))(record) == make(Tsallis(1))(record) == make()(record)
    for functional in (Renyi(2), PowerSum(2), Varentropy()):
        with pytest.raises(NotCoveredError, match="posterior means are for the von Neumann entropy"):
            make(functional)


def root_mean_square_errors(estimators, spectrum, copies):
    """Exact, by enumeration of all diagrams; values capped to [0, log d]."""
    table = SchurWeyl(spectrum, copies).table()
    records = [DiagramCounts({tuple(r for r in row if r): 1}, dim=len(spectrum)) for row in table.shapes.tolist()]
    errors = []
    for estimator in estimators:
        values = np.clip([estimator(record) for record in records], 0.0, math.log(len(spectrum)))
        errors.append(math.sqrt(table.probabilities @ (values - VonNeumann()(spectrum)) ** 2))
    return errors


@pytest.mark.parametrize(
    ("spectrum", "copies", "at_most"),
    [
        (maximally_mixed(3), 36, 0.95),
        (maximally_mixed(2), 16, 1.0),
        (low_rank(3, 2), 36, 0.8),
        (geometric(3, 0.5), 40, 1.1),
        (np.array([0.7, 0.3]), 30, 1.2),
    ],
    ids=str,
)
def test_errors_against_continuation_are_as_measured(spectrum, copies, at_most):
    """Nothing is simulated: the bounds are the measured ratios, rounded up."""
    split, continuation, plug_in = root_mean_square_errors(
        [SplitPosterior(), Continuation(), PlugIn()], spectrum, copies
    )
    assert split <= at_most * continuation
    assert split < plug_in


def test_equal_levels_have_a_quarter_of_the_error_of_the_plug_in():
    """d = 6, 200 copies, 300 draws; the ratio measured with 2,000 is below 0.2."""
    shapes = SchurWeyl(maximally_mixed(6), 200).rvs(300, rng=8)
    values = estimate_many(shapes, dim=6).values
    plug_in = VonNeumann()(shapes / 200)
    errors = [math.sqrt(float(((x - math.log(6)) ** 2).mean())) for x in (values, plug_in)]
    assert errors[0] <= 0.25 * errors[1]

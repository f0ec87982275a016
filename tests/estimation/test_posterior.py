"""The Hilbert-Schmidt posterior: closed forms against quadrature, importance sampling, draws and published means."""

import itertools
import math

import numpy as np
import pytest
from scipy.special import gammaln

from entropest._mp import context
from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.estimation.posterior import HilbertSchmidtPosterior, block_entropies, gap_products
from entropest.functionals import PowerSum, VonNeumann
from entropest.law.schur_weyl import SchurWeyl

DRAWS = 40_000


def qubit_moments(rows, alpha):
    """Log evidence, mean entropy, its variance and the mean of Tr rho^2.5 at d = 2, by quadrature."""
    ctx = context(20)
    a, b = rows

    def integral(function):
        def integrand(x):
            y = 1 - x
            schur = sum(x ** (a - t) * y ** (b + t) for t in range(a - b + 1))
            return (x - y) ** 2 * (x * y) ** alpha * schur * function(x, y)

        return ctx.quad(integrand, [ctx.mpf(1) / 2, 1])

    def entropy(x, y):
        return -x * ctx.log(x) - (y * ctx.log(y) if y > 0 else 0)

    norm = integral(lambda x, y: 1)
    prior = ctx.quad(lambda x: (2 * x - 1) ** 2 * (x * (1 - x)) ** alpha, [ctx.mpf(1) / 2, 1])
    mean = integral(entropy) / norm
    variance = integral(lambda x, y: entropy(x, y) ** 2) / norm - mean**2
    power = integral(lambda x, y: x ** ctx.mpf(2.5) + y ** ctx.mpf(2.5)) / norm
    return [float(value) for value in (ctx.log(norm / prior), mean, variance, power)]


@pytest.mark.parametrize("rows", [(0, 0), (1, 0), (7, 3), (5, 5), (9, 0)])
@pytest.mark.parametrize("alpha", [-0.5, 0.0, 2.0])
def test_closed_forms_agree_with_quadrature_at_qubits(rows, alpha):
    posterior = HilbertSchmidtPosterior(rows, 2, alpha)
    found = [
        posterior.log_evidence(),
        posterior.mean_entropy(),
        posterior.entropy_variance(),
        posterior.mean_power_sum(2.5),
    ]
    assert found == pytest.approx(qubit_moments(rows, alpha), abs=1e-9)


@pytest.mark.parametrize(("rows", "rank"), [((6, 3, 1), 3), ((4, 2), 4), ((3, 3, 3), 3)])
def test_closed_forms_agree_with_importance_sampling(rows, rank):
    """Prior draws weighted by the law of the diagram; tolerance 5 standard errors, a false alarm in 10^6."""
    prior = HilbertSchmidtPosterior((), rank, 0.5).rvs(2500, rng=7)
    padded = np.array([*rows, *[0] * (rank - len(rows))])
    log_law = np.array([float(SchurWeyl(p, sum(rows)).logpmf(padded)) for p in prior])
    posterior = HilbertSchmidtPosterior(rows, rank, 0.5)
    parts = padded + np.arange(rank - 1, -1, -1)
    gaps = [math.log(parts[i] - parts[j]) for i in range(rank) for j in range(i + 1, rank)]
    log_tableaux = gammaln(sum(rows) + 1.0) - gammaln(parts + 1.0).sum() + sum(gaps)
    weights = np.exp(log_law - log_tableaux)
    error = weights.std() / weights.mean() / math.sqrt(len(weights))
    assert math.log(weights.mean()) == pytest.approx(posterior.log_evidence(), abs=5 * error)
    for functional, expected in (
        (VonNeumann(), posterior.mean_entropy()),
        (PowerSum(1.5), posterior.mean_power_sum(1.5)),
    ):
        values = functional(prior)
        mean = np.average(values, weights=weights)
        error = np.sqrt((weights**2 * (values - mean) ** 2).sum()) / weights.sum()
        assert mean == pytest.approx(expected, abs=5 * error)


@pytest.mark.parametrize(
    ("rows", "rank", "alpha"),
    [((), 4, 0.0), ((12, 5, 1), 3, 0.3), ((8, 8, 2), 5, -0.5), ((40,), 3, 4.0), ((3,), 1, 0.0)],
)
def test_draws_have_the_moments_of_the_closed_forms(rows, rank, alpha):
    """Means and the variance of the entropy within 5 standard errors: false alarms below 10^-5 in all."""
    posterior = HilbertSchmidtPosterior(rows, rank, alpha)
    draws = posterior.rvs(DRAWS, rng=3)
    assert draws.shape == (DRAWS, rank)
    assert np.allclose(draws.sum(axis=1), 1.0)
    assert (np.diff(draws, axis=1) <= 0.0).all()
    entropies = VonNeumann()(draws)
    statistics = [
        (entropies, posterior.mean_entropy()),
        (PowerSum(0.5)(draws), posterior.mean_power_sum(0.5)),
        (PowerSum(3)(draws), posterior.mean_power_sum(3)),
        ((entropies - posterior.mean_entropy()) ** 2, posterior.entropy_variance()),
    ]
    for values, expected in statistics:
        error = values.std() / math.sqrt(DRAWS)
        assert values.mean() == pytest.approx(expected, abs=5 * error + 1e-12)


@pytest.mark.parametrize(("d", "environment"), [(2, 2), (3, 3), (4, 7), (6, 8)])
def test_without_data_the_means_are_those_of_random_pure_states(d, environment):
    """Page, Phys. Rev. Lett. 71 (1993) 1291: sum_{k=e+1}^{de} 1/k - (d-1)/(2e); Lubkin (1978): (d+e)/(de+1)."""
    prior = HilbertSchmidtPosterior((), d, environment - d)
    page = sum(1 / k for k in range(environment + 1, d * environment + 1)) - (d - 1) / (2 * environment)
    assert prior.mean_entropy() == pytest.approx(page, rel=1e-12)
    assert prior.mean_power_sum(2) == pytest.approx((d + environment) / (d * environment + 1), rel=1e-12)
    draws = prior.rvs(DRAWS, rng=environment)
    for values, mean in ((VonNeumann()(draws), page), (PowerSum(2)(draws), prior.mean_power_sum(2))):
        assert values.mean() == pytest.approx(mean, abs=5 * values.std() / math.sqrt(DRAWS))


def test_the_entropy_is_the_slope_of_the_power_sums():
    posterior = HilbertSchmidtPosterior((30, 12, 5), 5, 0.7)
    step = 1e-5
    slope = (posterior.mean_power_sum(1 + step) - posterior.mean_power_sum(1 - step)) / (2 * step)
    assert posterior.mean_entropy() == pytest.approx(-slope, rel=1e-8)
    assert posterior.mean_power_sum(1) == pytest.approx(1.0, rel=1e-12)
    assert posterior.mean_power_sum(0) == pytest.approx(5.0, rel=1e-12)


@pytest.mark.parametrize(("size", "rank", "alpha"), [(5, 3, 0.0), (6, 4, 1.5), (4, 2, -0.5)])
def test_the_evidence_is_a_law_on_diagrams(size, rank, alpha):
    """Probabilities f^lambda E[s_lambda(p)] sum to 1, and average the posterior means back to the prior mean."""
    table = SchurWeyl(np.full(rank, 1 / rank), size).table()
    posteriors = [HilbertSchmidtPosterior(shape, rank, alpha) for shape in table.shapes]
    evidence = np.exp([posterior.log_evidence() for posterior in posteriors])
    # Dividing the uniform law by s_lambda(1/r, ..., 1/r) leaves f^lambda.
    flat = []
    for shape in table.shapes:
        parts = shape + np.arange(rank - 1, -1, -1)
        pairs = itertools.combinations(range(rank), 2)
        flat.append(math.prod((parts[i] - parts[j]) / (j - i) for i, j in pairs) * rank**-size)
    weights = table.probabilities / np.array(flat) * evidence
    assert weights.sum() == pytest.approx(1.0, rel=1e-10)
    prior = HilbertSchmidtPosterior((), rank, alpha)
    assert weights @ [p.mean_entropy() for p in posteriors] == pytest.approx(prior.mean_entropy(), rel=1e-10)
    second = [p.entropy_variance() + p.mean_entropy() ** 2 for p in posteriors]
    assert weights @ second == pytest.approx(prior.entropy_variance() + prior.mean_entropy() ** 2, rel=1e-9)


def test_many_copies_leave_the_spectrum_of_the_diagram():
    posterior = HilbertSchmidtPosterior((600_000, 300_000, 100_000), 3)
    p = np.array([0.6, 0.3, 0.1])
    assert posterior.mean_entropy() == pytest.approx(VonNeumann()(p), abs=2e-5)
    varentropy = float(p @ np.log(p) ** 2) - VonNeumann()(p) ** 2
    assert posterior.entropy_variance() == pytest.approx(varentropy / 10**6, rel=0.01)


def test_gap_products_are_those_of_the_definition():
    parts = np.array([[9, 5, 4, 1], [3, 2, 1, 0]])
    value, slope = gap_products(parts)
    step = 1e-6
    for row, values, slopes in zip(parts.tolist(), value, slope, strict=True):
        for i in range(4):

            def product(s, row=row, i=i):
                return math.prod((row[i] - x + s) / (row[i] - x) for x in row if x != row[i])

            assert values[i] == pytest.approx(product(1.0))
            assert slopes[i] == pytest.approx((product(1 + step) - product(1 - step)) / (2 * step), abs=1e-8)


def test_stacks_of_shapes_and_concentrations_agree_with_single_ones():
    shapes = np.array([[7, 2, 0], [4, 4, 1]])
    found = block_entropies(shapes, np.array([0.0, 2.0]))
    for k, j in itertools.product(range(2), range(2)):
        assert found[k, j] == HilbertSchmidtPosterior(shapes[k], 3, (0.0, 2.0)[j]).mean_entropy()


def test_draws_take_a_size_and_a_seed():
    posterior = HilbertSchmidtPosterior((3, 1), 2)
    assert posterior.rvs(rng=1).shape == (2,)
    assert posterior.rvs((2, 3), rng=1).shape == (2, 3, 2)
    assert np.array_equal(posterior.rvs(4, rng=5), posterior.rvs(4, rng=np.random.default_rng(5)))


def test_equal_diagrams_give_equal_posteriors():
    assert HilbertSchmidtPosterior([3, 1], 3) == HilbertSchmidtPosterior((3, 1, 0), 3)
    assert HilbertSchmidtPosterior((3, 1, 0, 0), 3).rows == (3, 1, 0)


@pytest.mark.parametrize(
    ("call", "error", "message"),
    [
        (lambda: HilbertSchmidtPosterior((3, 2, 1), 2), ArgumentValueError, "rank must be at least .* rows 3, got 2"),
        (lambda: HilbertSchmidtPosterior((1, 2), 2), ArgumentValueError, "rows must have non-negative rows"),
        (lambda: HilbertSchmidtPosterior([[1, 0]], 2), ArgumentValueError, "rows must be the rows of one diagram"),
        (lambda: HilbertSchmidtPosterior((1,), 0), ArgumentValueError, "rank must be at least 1, got 0"),
        (lambda: HilbertSchmidtPosterior((1,), 2, -1.0), ArgumentValueError, "concentration must be above -1"),
        (lambda: HilbertSchmidtPosterior("21", 2), ArgumentTypeError, "rows"),
        (lambda: HilbertSchmidtPosterior((1,), 2).mean_power_sum(-1), ArgumentValueError, "order must not be negative"),
    ],
)
def test_wrong_arguments_are_refused(call, error, message):
    with pytest.raises(error, match=message):
        call()

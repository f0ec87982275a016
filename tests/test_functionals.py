"""Entropies, power sums and divergences, with their gradients."""

import math
import pickle
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from entropest._mp import context
from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.functionals import (
    ChiSquare,
    Fidelity,
    HilbertSchmidtDistance,
    MinEntropy,
    PowerSum,
    RelativeEntropy,
    Renyi,
    TraceDistance,
    Tsallis,
    Varentropy,
    VonNeumann,
)
from entropest.spectra import free_fermion_half_chain

P = np.array([0.5, 0.25, 0.15, 0.1])
Q = (0.4, 0.3, 0.2, 0.1)
SYMMETRIC = [
    VonNeumann(),
    Renyi(0),
    Renyi(0.3),
    Renyi(0.9),
    Renyi(1),
    Renyi(1.1),
    Renyi(2),
    Renyi(40),
    Renyi(math.inf),
    Tsallis(0),
    Tsallis(0.5),
    Tsallis(0.95),
    Tsallis(1),
    Tsallis(3),
    PowerSum(0),
    PowerSum(0.5),
    PowerSum(2),
    MinEntropy(),
    Varentropy(),
]
DIVERGENCES = [
    RelativeEntropy(Q),
    ChiSquare(Q),
    TraceDistance((0.4, 0.26, 0.2, 0.14)),
    HilbertSchmidtDistance(Q),
    Fidelity(Q),
]
WITH_LOGARITHM = [VonNeumann, MinEntropy, Varentropy]

weights = st.lists(st.floats(0.0, 1.0), min_size=1, max_size=6).filter(lambda x: sum(x) > 1e-3)


def normalised(values):
    return np.array(values) / math.fsum(values)


def plain(functional, p, ctx):
    """Each functional once more, for positive multiprecision numbers, straight from its definition."""
    entropy = -sum(x * ctx.log(x) for x in p)
    order = getattr(functional, "order", None)
    pairs = list(zip(p, [ctx.mpf(q) for q in getattr(functional, "reference", ())], strict=False))
    if isinstance(functional, Renyi | MinEntropy) and order in (None, math.inf):
        return -ctx.log(max(p))
    if isinstance(functional, VonNeumann) or (isinstance(functional, Tsallis) and order == 1):
        return entropy
    if isinstance(functional, Renyi):
        total = sum(x ** ctx.mpf(order) for x in p)
        return entropy / sum(p) if order == 1 else ctx.log(total / sum(p)) / (1 - ctx.mpf(order))
    if isinstance(functional, Tsallis):
        return (sum(p) - sum(x ** ctx.mpf(order) for x in p)) / (ctx.mpf(order) - 1)
    if isinstance(functional, PowerSum):
        return sum(x ** ctx.mpf(order) for x in p)
    if isinstance(functional, Varentropy):
        return sum(x * (ctx.log(x) + entropy) ** 2 for x in p)
    if isinstance(functional, RelativeEntropy):
        return sum(x * ctx.log(x / q) for x, q in pairs)
    if isinstance(functional, ChiSquare):
        return sum((x - q) ** 2 / q for x, q in pairs)
    if isinstance(functional, HilbertSchmidtDistance):
        return ctx.sqrt(sum((x - q) ** 2 for x, q in pairs))
    if isinstance(functional, Fidelity):
        return sum(ctx.sqrt(x * q) for x, q in pairs) ** 2
    return sum(abs(x - q) for x, q in pairs) / 2


@pytest.mark.parametrize("functional", SYMMETRIC + DIVERGENCES, ids=repr)
def test_values_agree_with_the_definition(functional):
    ctx = context(40)
    exact = plain(functional, [ctx.mpf(float(x)) for x in P], ctx)
    assert functional(P) == pytest.approx(float(exact), rel=1e-14, abs=1e-15)


@pytest.mark.parametrize("functional", SYMMETRIC + DIVERGENCES, ids=repr)
def test_gradients_are_the_derivatives_of_the_definition(functional):
    """Central differences in 60 digits with step 1e-20: their error, about 1e-38, is far below float64."""
    ctx = context(60)
    step = ctx.mpf(10) ** -20
    p = [ctx.mpf(float(x)) for x in P]
    gradient = functional.gradient(P)
    for i in range(len(p)):
        up, down = p.copy(), p.copy()
        up[i] += step
        down[i] -= step
        slope = float((plain(functional, up, ctx) - plain(functional, down, ctx)) / (2 * step))
        assert gradient[i] == pytest.approx(slope, rel=1e-12, abs=1e-13)


@pytest.mark.parametrize("functional", SYMMETRIC, ids=repr)
@settings(max_examples=25)
@given(values=weights, data=st.data())
def test_symmetric_functionals_ignore_order_and_zeros(functional, values, data):
    p = normalised(values)
    shuffled = data.draw(st.permutations([*p, 0.0, 0.0]))
    assert functional(shuffled) == pytest.approx(functional(p), rel=1e-9, abs=1e-12)


@given(values=weights)
def test_renyi_entropies_fall_with_the_order_and_lie_between_their_ends(values):
    p = normalised(values)
    orders = [0.0, 0.2, 0.8, 1 - 1e-9, 1.0, 1 + 1e-9, 1.3, 2.0, 5.0, 50.0, math.inf]
    entropies = [Renyi(order)(p) for order in orders]
    assert all(a >= b - 1e-12 for a, b in pairwise(entropies))
    assert entropies[0] == pytest.approx(math.log(np.count_nonzero(p)))
    assert entropies[-1] == MinEntropy()(p)


@pytest.mark.parametrize("delta", [1e-15, 1e-12, 1e-9, 1e-6, 1e-4])
@pytest.mark.parametrize("sign", [-1, 1])
def test_renyi_and_tsallis_are_continuous_through_order_one(delta, sign):
    """H_(1 + x) = S - x V/2 + O(x^2) with V the varentropy; 64 eigenvalues down to 1e-9."""
    p = free_fermion_half_chain(6)
    order = 1 + sign * delta
    first_order = VonNeumann()(p) - 0.5 * (order - 1) * Varentropy()(p)
    assert Renyi(order)(p) == pytest.approx(first_order, abs=5 * delta**2 + 1e-14)
    assert Renyi(order)(p) == pytest.approx(Renyi(1)(p), abs=1e-8 if delta <= 1e-9 else 10 * delta)
    assert Tsallis(order)(p) == pytest.approx(VonNeumann()(p), abs=10 * delta + 1e-14)
    assert Renyi(order).gradient(P) == pytest.approx(Renyi(1).gradient(P), abs=20 * delta + 1e-13)
    assert Tsallis(order).gradient(P) == pytest.approx(VonNeumann().gradient(P), abs=20 * delta + 1e-13)


def test_free_fermion_entropies_match_the_published_ones(check_values):
    """Source: Peschel, J. Phys. A 36 (2003) L205, correlation-matrix method, in check_values.json."""
    name = "half-filled XX chain, block of L sites in an infinite chain: von Neumann and Renyi-2 entropy"
    for sites, (entropy, renyi) in check_values(name).items():
        if int(sites) <= 10:
            p = free_fermion_half_chain(int(sites))
            assert VonNeumann()(p) == pytest.approx(entropy, abs=1e-12)
            assert Renyi(2)(p) == pytest.approx(renyi, abs=1e-12)


def test_pure_states_have_exact_zeros():
    pure = [1.0, 0.0, 0.0]
    for functional in (VonNeumann(), Renyi(0), Renyi(0.5), Renyi(1), Renyi(3), Tsallis(2), MinEntropy(), Varentropy()):
        value = functional(pure)
        assert value == 0.0
        assert math.copysign(1.0, value) == 1.0
    assert PowerSum(0)(pure) == PowerSum(7)(pure) == 1.0


def test_gradients_at_zero_are_infinite_where_they_are():
    pure = [1.0, 0.0]
    assert VonNeumann().gradient(pure).tolist() == [-1.0, math.inf]
    assert Tsallis(0.5).gradient(pure).tolist() == [-1.0, math.inf]
    assert Tsallis(0).gradient(pure).tolist() == [-1.0, math.inf]
    assert Tsallis(2).gradient(pure).tolist() == [-1.0, 1.0]
    assert Renyi(0.5).gradient(pure).tolist() == [-1.0, math.inf]
    assert Renyi(1).gradient(pure).tolist() == [-1.0, math.inf]
    assert Renyi(2).gradient(pure).tolist() == [-1.0, 1.0]
    assert PowerSum(2).gradient(pure).tolist() == [2.0, 0.0]
    assert PowerSum(0.5).gradient(pure).tolist() == [0.5, math.inf]
    assert Varentropy().gradient(pure).tolist() == [0.0, math.inf]
    assert MinEntropy().gradient(pure).tolist() == [-1.0, 0.0]
    assert RelativeEntropy([0.5, 0.5]).gradient(pure)[1] == -math.inf


def test_min_entropy_shares_its_slope_between_ties():
    assert MinEntropy().gradient([0.4, 0.4, 0.2]).tolist() == [-1.25, -1.25, 0.0]


def test_divergences_are_infinite_where_the_reference_lacks_support():
    reference = [0.6, 0.4, 0.0]
    for divergence in (RelativeEntropy(reference), ChiSquare(reference)):
        assert divergence([0.5, 0.3, 0.2]) == math.inf
        assert divergence([0.6, 0.4, 0.0]) == 0.0
        assert divergence.gradient([0.6, 0.4, 0.0])[2] == math.inf
    assert TraceDistance(reference)([0.5, 0.3, 0.2]) == pytest.approx(0.2)


@given(values=weights, others=weights)
def test_divergences_obey_their_inequalities(values, others):
    """Pinsker (2 T^2 <= D) and D <= log(1 + chi^2); textbook inequalities, values from memory."""
    size = max(len(values), len(others))
    p = normalised(values + [0.0] * (size - len(values)))
    q = normalised([x + 0.01 for x in others] + [0.01] * (size - len(others)))
    relative, chi, distance = RelativeEntropy(q)(p), ChiSquare(q)(p), TraceDistance(q)(p)
    assert 2 * distance**2 <= relative + 1e-12
    assert relative <= math.log1p(chi) + 1e-12
    assert RelativeEntropy(q)(q) == pytest.approx(0.0, abs=1e-15)


def test_divergences_sort_both_spectra():
    divergence = RelativeEntropy([0.1, 0.7, 0.2])
    assert divergence.reference == (0.7, 0.2, 0.1)
    assert divergence([0.3, 0.1, 0.6]) == divergence([0.6, 0.3, 0.1])
    assert divergence.gradient([0.3, 0.1, 0.6]).tolist() == divergence.gradient([0.6, 0.3, 0.1])[[1, 2, 0]].tolist()


@pytest.mark.parametrize("base", [2, 10, math.e, 0.5])
@pytest.mark.parametrize("make", [*WITH_LOGARITHM, lambda base=None: Renyi(2, base=base)])
def test_bases_at_construction_and_in_the_call(make, base):
    nats = make()
    scale = math.log(base) ** nats.log_power
    assert make(base=base)(P) == pytest.approx(nats(P) / scale)
    assert nats(P, base=base) == make(base=base)(P) == make(base=3)(P, base=base)
    assert make(base=base).gradient(P) == pytest.approx(nats.gradient(P) / scale)


def test_units():
    assert VonNeumann().unit() == VonNeumann(base=2).unit(math.e) == "nat"
    assert Renyi(2, base=2).unit() == "bit"
    assert MinEntropy().unit(10) == "log base 10"
    assert Varentropy().unit() == "nat^2"
    assert Varentropy(base=10).unit() == "(log base 10)^2"
    assert Tsallis(2).unit() == PowerSum(2).unit() == ChiSquare(Q).unit() == "1"


def test_names():
    names = [f.name for f in (VonNeumann(), Renyi(2), Tsallis(0.5), PowerSum(2), PowerSum(3), MinEntropy())]
    assert names == [
        "von Neumann entropy",
        "Renyi entropy of order 2",
        "Tsallis entropy of order 0.5",
        "purity",
        "power sum of order 3",
        "min-entropy",
    ]


def test_arrays_of_spectra_and_plain_sequences():
    stack = np.array([[[0.5, 0.5], [1.0, 0.0]], [[0.9, 0.1], [0.2, 0.8]]])
    values = VonNeumann()(stack)
    assert values.shape == (2, 2)
    assert values[1, 0] == VonNeumann()([0.9, 0.1])
    assert VonNeumann().gradient(stack).shape == stack.shape
    assert isinstance(VonNeumann()([0.5, 0.5]), float)
    assert Renyi(0.5)(np.zeros((0, 3))).shape == (0,)


def test_extreme_orders_and_eigenvalues_do_not_overflow():
    p = [1.0 - 1e-300, 1e-300]
    for order in (1e-12, 0.5, 1 + 1e-13, 30, 1e6):
        assert math.isfinite(Renyi(order)(p))
    assert Renyi(1e6)([0.5, 0.5]) == pytest.approx(math.log(2))
    assert Tsallis(0)([1.0, 5e-324]) == pytest.approx(1.0)


def test_nothing_is_normalised():
    assert VonNeumann()([1.0, 1.0]) == 0.0
    assert PowerSum(2)([2.0]) == 4.0
    assert Renyi(2)([0.5, 0.25]) == pytest.approx(-math.log(0.3125 / 0.75))


def test_functionals_are_values():
    for functional in SYMMETRIC + DIVERGENCES:
        assert pickle.loads(pickle.dumps(functional)) == functional
        assert len({functional, pickle.loads(pickle.dumps(functional))}) == 1
        with pytest.raises((AttributeError, TypeError)):
            functional.base = 2


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: VonNeumann()([0.5, -0.1]), "eigenvalues must not be negative, got -0.1"),
        (lambda: VonNeumann()([0.5, math.nan]), "eigenvalues must be finite, got nan"),
        (lambda: VonNeumann()([0.5, math.inf]), "eigenvalues must be finite, got inf"),
        (lambda: VonNeumann()(0.5), "spectrum must have eigenvalues along its last axis"),
        (lambda: VonNeumann()([]), "spectrum must have eigenvalues along its last axis"),
        (lambda: VonNeumann(base=1), "base must be positive and different from 1"),
        (lambda: VonNeumann()([1.0], base=-2), "base must be positive and different from 1"),
        (lambda: Renyi(-1), "order must not be negative, got -1"),
        (lambda: Renyi(math.nan), "order must be finite"),
        (lambda: Tsallis(math.inf), "order must be finite"),
        (lambda: Tsallis(2)([1.0], base=2), "base must not be given for the Tsallis entropy of order 2"),
        (lambda: PowerSum(2).unit(2), "base must not be given for the purity"),
        (lambda: ChiSquare([0.5, 0.4]), "eigenvalues must sum to 1"),
        (lambda: ChiSquare([0.5, 0.5])([1.0]), "as many eigenvalues as the reference, 2, got 1"),
    ],
)
def test_wrong_arguments_are_refused(make, message):
    with pytest.raises(ArgumentValueError, match=message.replace("(", r"\(")):
        make()


def test_wrong_types_are_refused():
    with pytest.raises(ArgumentTypeError, match="spectrum must be an array of real numbers"):
        VonNeumann()("half")
    with pytest.raises(ArgumentTypeError, match="order must be a real number"):
        Renyi("two")

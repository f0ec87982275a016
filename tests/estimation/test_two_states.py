"""Two unknown states: swap tests, and spectra."""

import json
import math

import numpy as np
import pytest

from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.estimation.two_spectra import compare_spectra
from entropest.estimation.two_states import Quantity, compare_states
from entropest.functionals import Fidelity, HilbertSchmidtDistance, RelativeEntropy, TraceDistance, VonNeumann
from entropest.law.schur_weyl import SchurWeyl
from entropest.records import DiagramCounts, MomentCounts
from entropest.spectra import geometric, maximally_mixed

SHOTS = 10**7


def random_state(d, rng, rank=None):
    amplitudes = rng.normal(size=(d, rank or d)) + 1j * rng.normal(size=(d, rank or d))
    state = amplitudes @ amplitudes.conj().T
    return state / np.trace(state).real


def square_root(state):
    values, vectors = np.linalg.eigh(state)
    return vectors * np.sqrt(np.maximum(values, 0.0)) @ vectors.conj().T


def facts(rho, sigma):
    """Quantities of two explicit density matrices."""
    trace = lambda *ms: float(np.real(np.trace(np.linalg.multi_dot(ms))))  # noqa: E731
    root = square_root(rho)
    return {
        "pp": trace(rho, rho),
        "qq": trace(sigma, sigma),
        "pq": trace(rho, sigma),
        "pqpq": trace(rho, sigma, rho, sigma),
        "fidelity": float(np.sqrt(np.maximum(np.linalg.eigvalsh(root @ sigma @ root), 0.0)).sum() ** 2),
        "distance": float(np.linalg.norm(rho - sigma)),
        "trace": 0.5 * float(np.abs(np.linalg.eigvalsh(rho - sigma)).sum()),
    }


def swaps(mean, dim, shots=SHOTS):
    even = round(0.5 * (1 + mean) * shots)
    return DiagramCounts.from_swap(symmetric=even, antisymmetric=shots - even, dim=dim)


@pytest.mark.parametrize(("d", "rank", "seed"), [(2, 2, 1), (2, 1, 2), (3, 3, 3), (4, 2, 4), (5, 5, 5), (3, 1, 6)])
def test_ranges_hold_the_quantities_of_explicit_matrices(d, rank, seed):
    """Outcomes equal to their means, so that only rounding of the tallies stands between."""
    rng = np.random.default_rng(seed)
    rho, sigma = random_state(d, rng, rank), random_state(d, rng)
    true = facts(rho, sigma)
    plus = round(0.5 * (1 + true["pqpq"]) * SHOTS)
    found = compare_states(
        first=swaps(true["pp"], d),
        second=swaps(true["qq"], d),
        between=swaps(true["pq"], d),
        cyclic=MomentCounts({4: (plus, SHOTS - plus)}),
    )
    assert found.overlap.value == pytest.approx(true["pq"], abs=1e-6)
    assert found.hilbert_schmidt.value == pytest.approx(true["distance"], abs=1e-5)
    assert found.fidelity[0] <= true["fidelity"] <= found.fidelity[1]
    assert found.trace_distance[0] <= true["trace"] <= found.trace_distance[1]
    assert found.sub_fidelity.interval[0] <= true["fidelity"] <= found.super_fidelity.interval[1]
    if d == 2:
        assert found.super_fidelity.value == pytest.approx(true["fidelity"], abs=1e-4)
        assert found.fidelity[1] - found.fidelity[0] < 0.01
    without = compare_states(first=swaps(true["pp"], d), second=swaps(true["qq"], d), between=swaps(true["pq"], d))
    assert without.sub_fidelity is None
    assert without.fidelity[0] <= true["fidelity"] <= without.fidelity[1]


def test_equal_states_and_orthogonal_states():
    pure = swaps(1.0, 3, 400)
    same = compare_states(first=pure, second=pure, between=pure)
    assert same.hilbert_schmidt.value == 0.0
    assert same.fidelity[1] == 1.0
    apart = compare_states(first=pure, second=pure, between=swaps(0.0, 3, 400))
    assert apart.hilbert_schmidt.value == pytest.approx(math.sqrt(2))
    assert apart.fidelity[0] == 0.0
    assert apart.trace_distance[1] == 1.0


def test_capping_is_said():
    pure = swaps(1.0, 2, 100)
    found = compare_states(first=swaps(0.4, 2, 100), second=pure, between=swaps(-0.1, 2, 100))
    assert sum("impossible" in note for note in found.notes) == 2
    close = compare_states(first=swaps(0.5, 2, 100), second=swaps(0.5, 2, 100), between=swaps(0.6, 2, 100))
    assert any("negative" in note for note in close.notes)


def test_confidence_widens_all_intervals():
    records = {"first": swaps(0.7, 3, 500), "second": swaps(0.5, 3, 500), "between": swaps(0.4, 3, 500)}
    wide, narrow = (compare_states(**records, confidence=c) for c in (0.99, 0.8))
    for name in ("purity_first", "purity_second", "overlap", "hilbert_schmidt", "super_fidelity"):
        outer, inner = getattr(wide, name).interval, getattr(narrow, name).interval
        assert outer[0] < inner[0] < inner[1] < outer[1]
    assert json.loads(json.dumps(wide.to_dict()))["sub_fidelity"] is None
    assert "super-fidelity" in str(wide)


def test_wrong_records_are_refused():
    pairs = swaps(0.5, 2, 10)
    with pytest.raises(ArgumentValueError, match="between must hold blocks of two copies only"):
        compare_states(first=pairs, second=pairs, between=DiagramCounts({"3": 1}, dim=2))
    with pytest.raises(ArgumentValueError, match="same dim, got 2, 3"):
        compare_states(first=pairs, second=pairs, between=swaps(0.5, 3, 10))
    with pytest.raises(ArgumentTypeError, match="DiagramCounts"):
        compare_states(first=pairs, second=pairs, between=0.5)
    for wrong, error in ((pairs, ArgumentTypeError), (MomentCounts({2: (1, 1)}), ArgumentValueError)):
        with pytest.raises(error, match="cyclic"):
            compare_states(first=pairs, second=pairs, between=pairs, cyclic=wrong)


def test_divergences_of_spectra_bound_those_of_states():
    """Explicit matrices that do not commute; sources: Hoffman and Wielandt, Mirsky, Markham et al., Klein."""
    rng = np.random.default_rng(8)
    for _ in range(20):
        rho, sigma = random_state(3, rng), random_state(3, rng)
        true = facts(rho, sigma)
        p, q = (np.sort(np.linalg.eigvalsh(state))[::-1] for state in (rho, sigma))
        rows = [np.floor(10**6 * x).astype(int) for x in (p, q)]
        found = compare_spectra(*(DiagramCounts({tuple(r.tolist()): 1}, dim=3) for r in rows))
        values, vectors = np.linalg.eigh(sigma)
        cross = float(np.real(np.einsum("ia,ij,ja->a", vectors.conj(), rho, vectors)) @ np.log(values))
        assert found.relative_entropy.value <= -VonNeumann()(p) - cross + 1e-4
        assert found.relative_entropy.value == pytest.approx(RelativeEntropy(q / q.sum())(p), abs=1e-4)
        assert found.trace_distance.value <= true["trace"] + 1e-5
        assert found.hilbert_schmidt.value <= true["distance"] + 1e-5
        assert found.fidelity.value >= true["fidelity"] - 1e-5


def test_estimated_entropies_obey_the_continuity_bound():
    """|S - S'| <= T log(d - 1) + h(T). Source: Audenaert, J. Phys. A 40 (2007) 8127."""
    rng = np.random.default_rng(2)
    for _ in range(50):
        rows = [np.sort(rng.multinomial(60, rng.dirichlet(np.ones(4))))[::-1] for _ in range(2)]
        found = compare_spectra(*(DiagramCounts({tuple(r.tolist()): 1}, dim=4) for r in rows))
        t = found.trace_distance.value
        gap = abs(VonNeumann()(rows[0] / 60) - VonNeumann()(rows[1] / 60))
        assert gap <= t * math.log(3) + VonNeumann()([t, 1 - t]) + 1e-12


def test_infinite_divergence_is_reported():
    found = compare_spectra(DiagramCounts({"6+3+1": 1}, dim=3), DiagramCounts({"6+4": 1}, dim=3))
    assert found.relative_entropy == Quantity(value=math.inf, interval=(0.0, math.inf))
    assert found.to_dict()["relative_entropy"]["value"] == "infinity"
    assert any("infinite" in note for note in found.notes)
    assert math.isfinite(found.trace_distance.value)
    single = compare_spectra(DiagramCounts({"1": 1}), DiagramCounts({"1": 1}))
    assert single.relative_entropy.value == 0.0
    assert "at most that of the states" in str(single)


@pytest.mark.parametrize(
    ("p", "q"), [(maximally_mixed(3), geometric(3, 0.6)), (geometric(3, 0.5), geometric(3, 0.5))], ids=["tie", "equal"]
)
def test_intervals_of_spectra_cover(p, q):
    """40 pairs of diagrams of 300 copies: with coverage .94 fewer than 31 hits come with probability below 2e-4."""
    rng = np.random.default_rng(11)
    first, second = SchurWeyl(p, 300).rvs(40, rng=rng), SchurWeyl(q, 300).rvs(40, rng=rng)
    hits = {"relative_entropy": 0, "trace_distance": 0, "hilbert_schmidt": 0, "fidelity": 0}
    makers = zip(hits, (RelativeEntropy, TraceDistance, HilbertSchmidtDistance, Fidelity), strict=True)
    truths = {name: make(q)(p) for name, make in makers}
    for a, b in zip(first, second, strict=True):
        found = compare_spectra(DiagramCounts.from_rows(a[None], dim=3), DiagramCounts.from_rows(b[None], dim=3))
        for name, truth in truths.items():
            low, high = getattr(found, name).interval
            hits[name] += low - 1e-9 <= truth <= high + 1e-9
    assert min(hits.values()) >= 31

"""Draws: the choice of the sampler, the label, and agreement with the exact law."""

import numpy as np
import pytest

from entropest.errors import ArgumentTypeError, ArgumentValueError, NotCoveredError
from entropest.law import determinantal
from entropest.law.schur_weyl import SchurWeyl
from entropest.spectra import geometric, maximally_mixed


def chi_square_excess(law, shapes):
    """Return (chi^2 - cells) / sqrt(2 cells) over the cells with at least 10 expected draws, the rest pooled."""
    table = law.table()
    index = {tuple(shape): k for k, shape in enumerate(table.shapes.tolist())}
    counts = np.bincount([index[tuple(shape)] for shape in shapes.tolist()], minlength=len(index))
    expected = len(shapes) * table.probabilities
    common = expected >= 10
    observed = np.append(counts[common], counts[~common].sum())
    means = np.append(expected[common], expected[~common].sum())
    observed, means = observed[means > 0], means[means > 0]
    return float((((observed - means) ** 2 / means).sum() - len(means)) / np.sqrt(2 * len(means)))


@pytest.mark.parametrize("method", ["auto", "insertion", "determinantal"])
@pytest.mark.parametrize("spectrum", [geometric(3, 0.5), [0.4, 0.4, 0.2, 0.0], maximally_mixed(3)])
def test_draws_follow_the_law(spectrum, method):
    """A seeded chi-square test; an excess of 5 has a probability below 1e-4 for the 10 to 60 cells here."""
    law = SchurWeyl(spectrum, 12)
    assert chi_square_excess(law, law.rvs(20_000, rng=11, method=method)) < 5


def test_surrogate_is_labelled_and_only_used_when_named():
    law = SchurWeyl([0.5, 0.3, 0.2], 1000)
    approximate = law.draw(10, rng=1, method="surrogate")
    assert (approximate.method, approximate.approximate) == ("surrogate", True)
    assert (approximate.shapes.sum(axis=1) == 1000).all()
    assert repr(approximate) == "Draws(shapes of shape (10, 3), method='surrogate', approximate)"
    for copies in (1, 10**3, 10**6, 10**9):
        draws = SchurWeyl([0.5, 0.3, 0.2], copies).draw(3, rng=1)
        assert not draws.approximate
        assert (draws.shapes.sum(axis=1) == copies).all()


def test_auto_takes_the_cheaper_exact_sampler():
    assert SchurWeyl([0.6, 0.4], 10).draw(5, rng=1).method == "insertion"
    assert SchurWeyl([0.6, 0.4], 10**9).draw(5, rng=1).method == "determinantal"
    assert SchurWeyl(maximally_mixed(20), 10**4).draw(5, rng=1).method == "insertion"


def test_insertion_takes_over_where_the_determinantal_sampler_declines(monkeypatch):
    def declines(*arguments):
        raise NotCoveredError("a measure of accuracy passed its limit")

    monkeypatch.setattr(determinantal, "draw_determinantal", declines)
    law = SchurWeyl([0.6, 0.4], 10**7)
    assert law.draw(rng=1).method == "insertion"
    with pytest.raises(NotCoveredError, match="accuracy"):
        law.draw(rng=1, method="determinantal")
    for spectrum in ([0.6, 0.4], maximally_mixed(20)):
        with pytest.raises(NotCoveredError, match="at most 1e\\+11 letters, got 1000000000000 copies times 2"):
            SchurWeyl(spectrum, 10**12).draw(2, rng=1)


def test_size_gives_the_leading_axes():
    law = SchurWeyl([0.5, 0.3, 0.2], 20)
    assert law.rvs(rng=1).shape == (3,)
    assert law.rvs(4, rng=1).shape == (4, 3)
    assert law.rvs(np.int64(4), rng=1).shape == (4, 3)
    assert law.rvs((2, 5), rng=1).shape == (2, 5, 3)
    assert law.rvs(0, rng=1).shape == (0, 3)
    assert law.rvs((), rng=1).shape == (3,)
    assert law.rvs(rng=1).dtype == np.int64


def test_same_seed_same_draws():
    law = SchurWeyl([0.5, 0.3, 0.2], 50)
    for method in ("auto", "insertion", "determinantal", "surrogate"):
        assert np.array_equal(law.rvs(6, rng=3, method=method), law.rvs(6, rng=3, method=method))
    generator = np.random.default_rng(3)
    assert not np.array_equal(law.rvs(20, rng=generator), law.rvs(20, rng=generator))


def test_pure_states_and_single_levels():
    assert SchurWeyl([1.0, 0.0], 7).rvs(2, rng=1).tolist() == [[7, 0], [7, 0]]
    assert SchurWeyl([1.0], 10**9).rvs(2, rng=1).tolist() == [[10**9], [10**9]]


@pytest.mark.parametrize("method", ["rsk", "", None])
def test_other_methods_are_refused(method):
    with pytest.raises(ArgumentValueError, match="method must be one of auto, insertion, determinantal, surrogate"):
        SchurWeyl([0.6, 0.4], 5).rvs(method=method)


@pytest.mark.parametrize(
    ("size", "error"), [(-1, ArgumentValueError), (2.5, ArgumentValueError), ("3", ArgumentTypeError)]
)
def test_other_sizes_are_refused(size, error):
    with pytest.raises(error, match="size"):
        SchurWeyl([0.6, 0.4], 5).rvs(size)

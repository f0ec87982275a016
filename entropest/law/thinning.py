"""Down-steps and thinning: what a diagram of n copies says about a run with fewer copies."""

import math

import numpy as np
import numpy.typing as npt
from scipy.special import digamma, gammaln

from entropest._checks import as_integer
from entropest._types import BoolArray, FloatArray, IntArray, RngLike
from entropest.errors import ArgumentValueError
from entropest.shapes import as_shapes, down_probabilities

__all__ = ["down_step", "thin"]

SHAPES_AT_ONCE = 1 << 14
SMALLEST_BLOCK = 4
STIRLING_FROM = 1e4


def down_step(shapes: npt.ArrayLike, *, rng: RngLike = None) -> IntArray:
    """Drop one copy at random from each outcome: every shape loses one box.

    The box is lost in row i with probability f^(shape - box in row i) / f^shape, f counting standard tableaux.
    If the shapes follow the law of n copies of any state, the result follows the law of n - 1 copies.

    Parameters
    ----------
    shapes : (..., d) array_like of int
        Shapes with at least one box each.
    rng : int, Generator, SeedSequence or None
        Source of randomness.

    Returns
    -------
    (..., d) int array.

    Raises
    ------
    ArgumentValueError
        If a shape is empty or its rows increase.

    References
    ----------
    Vershik, Kerov, Funct. Anal. Appl. 15 (1981) 246 (the Young graph and its central measures).

    Examples
    --------
    >>> down_step([[2, 2], [3, 0]], rng=1)
    array([[2, 1],
           [2, 0]])
    """
    array = as_shapes(shapes)
    if (array.sum(axis=-1) == 0).any():
        raise ArgumentValueError("shapes must have at least one box each to lose one, got an empty shape")
    generator = np.random.default_rng(rng)
    flat = array.reshape(math.prod(array.shape[:-1]), array.shape[-1])
    for start in range(0, len(flat), SHAPES_AT_ONCE):
        part = flat[start : start + SHAPES_AT_ONCE]
        part[...] = _one_step(part, generator)
    return flat.reshape(array.shape)


def thin(shapes: npt.ArrayLike, copies: int, *, rng: RngLike = None) -> IntArray:
    """Keep `copies` of the copies, chosen at random: every shape is taken down to that many boxes.

    The outcome mu has probability f^mu f^(shape/mu) / f^shape, where the counts are of standard tableaux; it is
    exactly the result of repeated down-steps. Where the rows are far enough apart, boxes are removed many at a
    time: with l_i = row_i + R - i for the R non-empty rows, removing s boxes is drawing s of the sum of l_i
    balls without replacement, reweighted by prod_{i<j} (l_i - l_j) after the draw, on the condition that no two
    l_i become equal on the way (derived in docs/derivations.md). Draws from a multinomial law are accepted with the
    probability that makes this exact. The number of rounds grows like log(n / copies) for well separated
    eigenvalues and like sqrt(n) at ties.

    Parameters
    ----------
    shapes : (..., d) array_like of int
        Shapes with at least `copies` boxes each; their sizes may differ.
    copies : int
        Boxes to keep.
    rng : int, Generator, SeedSequence or None
        Source of randomness.

    Returns
    -------
    (..., d) int array, each shape contained in the one given.

    Raises
    ------
    ArgumentValueError
        If a shape has fewer than `copies` boxes or its rows increase.

    References
    ----------
    Stanley, Enumerative Combinatorics 2 (1999), corollary 7.16.3, for f^(shape/mu); O'Connell, J. Phys. A 36
    (2003) 3049, doi:10.1088/0305-4470/36/12/312, for walks conditioned to stay apart.

    Examples
    --------
    >>> thin([[60, 30, 10], [50, 30, 20]], 10, rng=1).sum(axis=-1)
    array([10, 10])
    """
    array = as_shapes(shapes)
    copies = as_integer(copies, "copies", at_least=0)
    flat = array.reshape(math.prod(array.shape[:-1]), array.shape[-1])
    smallest = int(flat.sum(axis=-1).min(initial=copies))
    if smallest < copies:
        raise ArgumentValueError(f"shapes must have at least {copies} boxes to be thinned to, got {smallest}")
    generator = np.random.default_rng(rng)
    for start in range(0, len(flat), SHAPES_AT_ONCE):
        _thin_in_place(flat[start : start + SHAPES_AT_ONCE], copies, generator)
    return flat.reshape(array.shape)


def _thin_in_place(shapes: IntArray, copies: int, generator: np.random.Generator) -> None:
    while True:
        surplus = shapes.sum(axis=-1) - copies
        active = np.flatnonzero(surplus)
        if not len(active):
            return
        blocks = _block_sizes(shapes[active], surplus[active])
        large = blocks >= SMALLEST_BLOCK
        single = active[~large]
        if len(single):
            shapes[single] = _one_step(shapes[single], generator)
        several = active[large]
        if len(several):
            shapes[several] = _try_block(shapes[several], blocks[large], generator)


def _one_step(shapes: IntArray, generator: np.random.Generator) -> IntArray:
    """Return the shapes with one box fewer each."""
    cumulative = np.cumsum(down_probabilities(shapes), axis=-1)
    threshold = generator.random(len(shapes)) * cumulative[:, -1]
    rows = (cumulative <= threshold[:, None]).sum(axis=-1)
    lower = shapes.copy()
    lower[np.arange(len(shapes)), rows] -= 1
    return lower


def _walkers(shapes: IntArray) -> tuple[BoolArray, IntArray]:
    """Return which rows are not empty, and l_i = row_i + R - i for them (0 for the others)."""
    used = shapes > 0
    height = used.sum(axis=-1, keepdims=True)
    walkers = shapes + height - 1 - np.arange(shapes.shape[-1])
    return used, np.where(used, walkers, 0)


def _block_sizes(shapes: IntArray, surplus: IntArray) -> IntArray:
    """Return how many boxes to remove at once: a good draw is likely, the choice does not affect the law."""
    used, walkers = _walkers(shapes)
    height = used.sum(axis=-1)
    total = walkers.sum(axis=-1).astype(np.float64)
    pace = walkers / total[:, None]
    gaps = walkers[:, :-1] - walkers[:, 1:]
    rates = np.where(used[:, 1:], pace[:, :-1], 1.0)
    room = np.maximum(gaps / 8.0, gaps - 6.0 * np.sqrt(gaps))
    apart = np.where(used[:, 1:], room / rates, np.inf).min(axis=-1, initial=np.inf)
    upper, lower = np.triu_indices(shapes.shape[-1], k=1)
    both = used[:, lower]
    distance = np.where(both, walkers[:, upper] - walkers[:, lower], 1)
    spread = np.where(both, (pace[:, upper] + pace[:, lower]) / distance**2.0, 0.0).sum(axis=-1)
    likely = 2.0 / (spread + height / total)
    block = np.minimum(np.minimum(apart, likely), total / 4.0)
    return np.where(height == 1, surplus, np.minimum(surplus, block)).astype(np.int64)


def _try_block(shapes: IntArray, blocks: IntArray, generator: np.random.Generator) -> IntArray:
    """Propose to remove `blocks` boxes from each shape; return the shapes, unchanged where rejected.

    The wanted weight of removing k_i boxes is prod_i 1/(k_i! Gamma(l_i - k_i + 1)) prod_{i<j} (x_i - x_j),
    x = l - k. Its logarithm without the k_i! is concave in k, so the tangent plane at the expected k lies above
    it and makes a multinomial law a proposal.
    """
    used, walkers = _walkers(shapes)
    expected = blocks[:, None] * (walkers / walkers.sum(axis=-1, keepdims=True))
    centre = walkers - expected
    upper, lower = np.triu_indices(shapes.shape[-1], k=1)
    both = used[:, lower]
    distance = np.where(both, centre[:, upper] - centre[:, lower], 1.0)
    inverse = np.where(both, 1.0 / distance, 0.0)
    slope = digamma(centre + 1.0)
    for pair, (i, j) in enumerate(zip(upper, lower, strict=True)):
        slope[:, i] -= inverse[:, pair]
        slope[:, j] += inverse[:, pair]
    weights = np.where(used, np.exp(slope - slope.max(axis=-1, keepdims=True, where=used, initial=-np.inf)), 0.0)
    removed = generator.multinomial(blocks, weights / weights.sum(axis=-1, keepdims=True))
    excess = removed - expected
    closing = (excess[:, upper] - excess[:, lower]) * inverse
    possible = (removed <= walkers).all(axis=-1) & (closing < 1.0 - 0.5 * inverse).all(axis=-1)
    closing = np.where(possible[:, None], closing, 0.0)
    log_acceptance = (np.log1p(-closing) + closing).sum(axis=-1) - _log_gamma_rest(
        centre + 1.0, np.where(possible[:, None], excess, 0.0)
    ).sum(axis=-1)
    accepted = possible & (-generator.standard_exponential(len(shapes)) < log_acceptance)
    gaps = walkers[:, :-1] - walkers[:, 1:]
    doubtful = accepted & ((removed[:, :-1] >= gaps) & used[:, 1:]).any(axis=-1)
    for index in np.flatnonzero(doubtful):
        accepted[index] = _stay_apart(removed[index], gaps[index], used[index], generator)
    return np.where(accepted[:, None], shapes - removed, shapes)


def _log_gamma_rest(x: FloatArray, drop: FloatArray) -> FloatArray:
    """Return log Gamma(x - drop) - log Gamma(x) + drop digamma(x), by Stirling's series for large x."""
    y = x - drop
    large = x > STIRLING_FROM
    small_x, small_y = np.where(large, 1.0, x), np.where(large, 1.0, y)
    plain = gammaln(small_y) - gammaln(small_x) + drop * digamma(small_x)
    far = np.where(large, x, 2.0 * STIRLING_FROM)
    step = np.where(large, drop, 0.0)
    near = far - step
    series = (near - 0.5) * np.log1p(-step / far) + step - step / (2 * far) + step**2 / (12 * far**2 * near)
    return np.where(large, series, plain)


def _stay_apart(removed: IntArray, gaps: IntArray, used: BoolArray, generator: np.random.Generator) -> bool:
    """Put the removals in random order; say whether no l_i falls on l_{i+1} on the way."""
    times: dict[int, FloatArray] = {}

    def times_of(row: int) -> FloatArray:
        if row not in times:
            times[row] = np.sort(generator.random(removed[row]))
        return times[row]

    for row in np.flatnonzero((removed[:-1] >= gaps) & used[1:]).tolist():
        critical = times_of(row)[gaps[row] - 1 :]
        below = np.searchsorted(times_of(row + 1), critical)
        if (below <= np.arange(len(critical))).any():
            return False
    return True

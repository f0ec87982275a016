"""The outcome law for a Poisson number of copies, as a pair of projection ensembles.

With N ~ Poisson(theta) copies, t_i = theta p_i and l_i = row_i + d - i, an outcome has the probability

    P(l) = prod_{i<j} (l_i - l_j) det[Poisson(t_i; l_j)] / prod_{i<j} (t_i - t_j),

a product of two determinants: one belongs to U, the polynomials of degree below d, the other to V, the span of the
mass functions. For any weight w > 0 let B and A hold orthonormal bases of U w and of V / w. Then
P(l) = det A(l) det B(l) / det(A^T B), while det A(l)^2 and det B(l)^2 are laws of projection ensembles, easy to
draw from. The weight that maximises the overlap det(A^T B), a convex problem in log w, makes the two projections
equal on the diagonal; it is approached by steps each exact for one point with the others held fixed.

References
----------
Hough, Krishnapur, Peres, Virag, Probab. Surv. 3 (2006) 206, doi:10.1214/154957806000000078 (projection ensembles);
Johansson, Ann. Math. 153 (2001) 259, doi:10.2307/2661375 (the Poissonised law and the Charlier ensemble).
The pair of ensembles and its weight are derived in docs/derivations.md.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from entropest._types import FloatArray, IntArray
from entropest.errors import NotCoveredError
from entropest.law.poisson_bases import TwoSpaces, two_spaces, widest_tie
from entropest.law.poisson_grid import Grid, grid_of_windows

__all__ = ["PoissonEnsemble", "check_ensemble", "edge_mass", "orthogonality_residual", "poisson_ensemble"]

TIED_GAPS = (0.5, 1.0, 2.0, 4.0)
WIDEST_TIE = 10.0
GOOD_CONDITION = 100.0
MOST_ROUNDS = 40
GOOD_OVERLAP = 0.9
LEAST_GAIN = 0.02

EDGE_NODES = 16
LARGEST_CONDITION = 1e8
LARGEST_RESIDUAL = 1e-9
LARGEST_EDGE = 1e-12
LEAST_OVERLAP = 1e-3


@dataclass(frozen=True, slots=True, kw_only=True)
class PoissonEnsemble:
    """Orthonormal bases of the two projection ensembles, tabulated on a grid.

    Attributes
    ----------
    grid : Grid
    bases : (2, N, d) float array
        A and B at the nodes: the sums of A^T A and of B^T B over all integers are the identity.
    halfway : (2, N, d) float array
        The same, interpolated in the middle between each node and the next (at the node itself for step 1).
    overlap : float
        det(A^T B), made positive: the probability that a draw from the pair survives the step to P.
    condition : float
        The larger condition number of the two sets of functions that were orthonormalised.
    """

    grid: Grid
    bases: FloatArray
    halfway: FloatArray
    overlap: float
    condition: float


def poisson_ensemble(means: FloatArray, *, tied_gaps: tuple[float, ...] = TIED_GAPS) -> PoissonEnsemble:
    """Return the ensemble of decreasing positive means t_1 >= ... >= t_d, not yet checked for accuracy.

    Parameters
    ----------
    means : (d,) float array
    tied_gaps : tuple of float
        Gaps, in standard deviations, below which means are treated as tied: tried in turn until the mass functions
        make a well-conditioned basis.

    Examples
    --------
    >>> ensemble = poisson_ensemble(np.array([2e8, 2e8, 1e8]))
    >>> len(ensemble.grid.nodes), round(ensemble.overlap, 6)
    (899, 1.0)
    """
    grid = grid_of_windows(means)
    root_step = np.sqrt(grid.steps)[:, None]
    spaces = _best_spaces(means, grid.nodes.astype(np.float64), root_step, tied_gaps)
    log_weight = spaces.log_weight
    overlap = 0.0
    for _ in range(MOST_ROUNDS):
        before = overlap
        a, condition_a = _orthonormal(spaces.mass_columns(log_weight) * root_step)
        b, condition_b = _orthonormal(spaces.polynomial_columns(log_weight) * root_step)
        overlap = float(np.linalg.det(a.T @ b))
        if overlap < 0.0:
            b[:, 0] *= -1.0
            overlap = -overlap
        if overlap >= GOOD_OVERLAP or overlap <= before * (1.0 + LEAST_GAIN):
            break
        log_weight = log_weight + 0.25 * (_log_odds(a, grid.steps) - _log_odds(b, grid.steps))
    bases = np.stack([a, b]) / root_step
    return PoissonEnsemble(
        grid=grid,
        bases=bases,
        halfway=_halfway(grid, bases),
        overlap=overlap,
        condition=max(condition_a, condition_b),
    )


def check_ensemble(ensemble: PoissonEnsemble) -> None:
    """Raise NotCoveredError if a measure of accuracy passes its limit.

    Limits: condition number of the functions before orthonormalisation 1e8; deviation from orthonormality 1e-9,
    measured half-way between the nodes, so that the spacing and the interpolation are tested too; mass in the
    outer 16 nodes of a region 1e-12; overlap at least 1e-3.
    """
    for name, value, limit in (
        ("bases of condition", ensemble.condition, LARGEST_CONDITION),
        ("an orthogonality residual of", orthogonality_residual(ensemble), LARGEST_RESIDUAL),
        ("a mass at the ends of its windows of", edge_mass(ensemble), LARGEST_EDGE),
    ):
        if not value <= limit:
            raise NotCoveredError(f"the determinantal sampler needs {name} at most {limit:g}, got {value:.3g}")
    if not ensemble.overlap >= LEAST_OVERLAP:
        raise NotCoveredError(
            f"the determinantal sampler needs an overlap of at least {LEAST_OVERLAP:g}, got {ensemble.overlap:.3g}"
        )


def orthogonality_residual(ensemble: PoissonEnsemble) -> float:
    """Return the largest entry of |sum A^T A - 1| and |sum B^T B - 1|, summed half-way between the nodes."""
    grams = np.einsum("kni,knj,n->kij", ensemble.halfway, ensemble.halfway, ensemble.grid.steps)
    return float(np.abs(grams - np.eye(grams.shape[-1])).max())


def edge_mass(ensemble: PoissonEnsemble) -> float:
    """Return the largest expected number of points among the outer 16 nodes of a region, zero left aside."""
    density = (ensemble.bases**2).sum(axis=2).max(axis=0) * ensemble.grid.steps
    largest = 0.0
    start = 0
    for stop in (ensemble.grid.ends + 1).tolist():
        largest = max(largest, float(density[stop - EDGE_NODES : stop].sum()))
        if ensemble.grid.nodes[start] > 0:
            largest = max(largest, float(density[start : start + EDGE_NODES].sum()))
        start = stop
    return largest


def _best_spaces(means: FloatArray, x: FloatArray, root_step: FloatArray, tied_gaps: tuple[float, ...]) -> TwoSpaces:
    """Return the spaces for the first of the gaps that gives a good condition, else for the best."""
    best = two_spaces(means, x, tied_gap=tied_gaps[0])
    _, least = _orthonormal(best.mass_columns(best.log_weight) * root_step)
    for gap in tied_gaps[1:]:
        if least <= GOOD_CONDITION or widest_tie(means, gap) > WIDEST_TIE:
            break
        spaces = two_spaces(means, x, tied_gap=gap)
        _, condition = _orthonormal(spaces.mass_columns(spaces.log_weight) * root_step)
        if condition < least:
            best, least = spaces, condition
    return best


def _orthonormal(columns: FloatArray) -> tuple[FloatArray, float]:
    """Return an orthonormal basis of the columns, and the condition number of the columns at length 1."""
    lengths = np.linalg.norm(columns, axis=0)
    if not (np.isfinite(lengths).all() and lengths.min() > 0.0):
        raise NotCoveredError(
            "the determinantal sampler needs functions of finite positive norm, "
            f"got norms from {lengths.min()} to {lengths.max()}"
        )
    basis, triangle = np.linalg.qr(columns / lengths)
    return basis, float(np.linalg.cond(triangle))


def _log_odds(basis: FloatArray, steps: IntArray) -> FloatArray:
    """Return log(k/(1-k)) of the chance k of a point at each node, levelled off where it is negligible."""
    chance = (basis**2).sum(axis=1) / steps
    floor = 1e-12 * chance.max()
    return np.asarray(np.log((chance + floor) / (np.maximum(1.0 - chance, 0.0) + floor)), dtype=np.float64)


def _halfway(grid: Grid, bases: FloatArray) -> FloatArray:
    """Return the bases interpolated in the middle of each cell (at its node for step 1)."""
    cells = np.arange(len(grid.nodes))
    offsets = np.where(grid.steps > 1, 0.5 * grid.steps, 0.0)
    return np.stack([grid.interpolate(bases, np.full_like(cells, k), cells, offsets) for k in range(2)])

"""Maximum likelihood of a spectrum from all blocks of a record, whatever their sizes."""

from dataclasses import dataclass
from typing import Any

import numpy as np

from entropest._checks import as_integer
from entropest._types import FloatArray, IntArray
from entropest.errors import ArgumentValueError, NotCoveredError
from entropest.estimation.blocks import Blocks, as_blocks, with_zeros
from entropest.estimation.small_schur import LARGEST_SIZE, schur_and_contents
from entropest.functionals import Functional, VonNeumann
from entropest.law.schur_weyl import SchurWeyl
from entropest.records.counts import DiagramCounts
from entropest.shapes import log_standard_tableaux

__all__ = ["LikelihoodFit", "MaximumLikelihood", "fit_likelihood"]

_LARGEST_DIM = 64
_STEPS_AT_ONCE = 8
_LAST_STEPS = 300
_PASSES = 12
_POLISHING_STEPS = 200
_RESTARTS = 6
_GAP_PER_COPY = 1e-6
_GAIN = 1e-7
_TIE = 0.2
_SPLIT = 0.3
_SMALLEST_TALLY = 1e-3


@dataclass(frozen=True, slots=True, kw_only=True)
class LikelihoodFit:
    """A spectrum of large likelihood, with what certifies it.

    Attributes
    ----------
    spectrum : (d,) float array
        The eigenvalues in decreasing order.
    log_likelihood : float
        Sum over blocks of log P(diagram), in nats.
    gradient_gap : float
        max_i d(log likelihood)/dp_i - n, n the number of copies, in nats. It is the fastest first-order gain from
        moving weight to one eigenvalue, 0 at every stationary point on the simplex (Karush, Kuhn and Tucker). It
        does not see other maxima.
    converged : bool
        Whether the gap is below 1e-6 per copy.
    evaluations : int
        Number of likelihoods and gradients computed.
    restarts : int
        Number of restarts off tie walls that found a better spectrum.
    notes : tuple of str
        What limits the fit.
    """

    spectrum: FloatArray
    log_likelihood: float
    gradient_gap: float
    converged: bool
    evaluations: int
    restarts: int
    notes: tuple[str, ...] = ()

    def __str__(self) -> str:
        shown = ", ".join(f"{value:.4g}" for value in self.spectrum[:8]) + ", ..." * (len(self.spectrum) > 8)
        state = "converged" if self.converged else "not converged"
        lines = [
            f"maximum likelihood spectrum: {shown}",
            f"log likelihood {self.log_likelihood:.6f} nat, gradient gap {self.gradient_gap:.2g} nat ({state}, "
            f"{self.evaluations} evaluations, {self.restarts} restarts that helped)",
        ]
        return "\n".join(lines + [f"note: {note}" for note in self.notes])

    def to_dict(self) -> dict[str, Any]:
        """Return the fit as a dict of plain JSON values."""
        return {
            "schema": "entropest-likelihood-fit/1",
            "spectrum": self.spectrum.tolist(),
            "log_likelihood": self.log_likelihood,
            "gradient_gap": self.gradient_gap,
            "converged": self.converged,
            "evaluations": self.evaluations,
            "restarts": self.restarts,
            "notes": list(self.notes),
        }


def fit_likelihood(counts: DiagramCounts, *, dim: int | None = None) -> LikelihoodFit:
    """Return the spectrum of maximum likelihood of a record, all blocks and block sizes pooled.

    The likelihood is climbed in the logarithms of the eigenvalues by a quasi-Newton method with limited memory, then
    by steps p_i <- (mean number of letters i in a random tableau)/n, which never lower it (Dempster, Laird, Rubin;
    the tableau is the missing datum). At equal eigenvalues the derivative along their gap vanishes, so a search
    that meets such a wall stays there. Nearly equal eigenvalues are made equal between climbs, and at the end each
    group of equal ones is split in two: by symmetry the second derivative is the same for all ways to spread a
    group, so one split tells whether the wall is a maximum. If it is not, the climb starts again from the split.

    Parameters
    ----------
    counts : DiagramCounts
        The record.
    dim : int, optional
        Number of eigenvalues, at most 64; default: `counts.dim`, or the rows seen if that is unknown.

    Raises
    ------
    NotCoveredError
        Beyond 64 eigenvalues.
    ArgumentValueError
        If `dim` is not the dimension of the record or below its number of rows.

    References
    ----------
    Dempster, Laird, Rubin, J. R. Stat. Soc. B 39 (1977) 1, doi:10.1111/j.2517-6161.1977.tb01600.x;
    Byrd, Lu, Nocedal, Zhu, SIAM J. Sci. Comput. 16 (1995) 1190, doi:10.1137/0916069.

    Examples
    --------
    >>> fit = fit_likelihood(DiagramCounts({"60+30+10": 1}, dim=3))
    >>> fit.spectrum.round(4), fit.converged
    (array([0.5869, 0.3054, 0.1077]), True)
    """
    blocks = as_blocks(counts)
    letters = _letters(counts, blocks, dim)
    likelihood = _Likelihood(blocks)
    spectrum, value = likelihood.climb(_start(blocks, letters))
    restarts = 0
    while restarts < _RESTARTS:
        apart = max(_splits(spectrum, blocks.copies), key=likelihood.value, default=spectrum)
        if likelihood.value(apart) <= value + _GAIN:
            break
        spectrum, value = likelihood.climb(apart)
        restarts += 1
    gap = likelihood.gap(spectrum)
    notes = []
    if counts.dim is None and dim is None:
        notes.append(f"the dimension is not given: the {letters} rows seen are taken for all")
    if int(blocks.sizes.max()) < letters:
        notes.append(f"blocks of fewer than {letters} copies do not fix the spectrum: others are as likely")
    return LikelihoodFit(
        spectrum=spectrum,
        log_likelihood=value,
        gradient_gap=gap,
        converged=gap <= _GAP_PER_COPY * blocks.copies,
        evaluations=likelihood.evaluations,
        restarts=restarts,
        notes=tuple(notes),
    )


@dataclass(frozen=True, slots=True)
class MaximumLikelihood:
    """The functional at the spectrum of maximum likelihood, all blocks and block sizes pooled.

    Source: Dempster, Laird and Rubin (1977), doi:10.1111/j.2517-6161.1977.tb01600.x, for the monotone steps; the
    likelihood of diagrams is that of Keyl and Werner (2001), doi:10.1103/PhysRevA.64.052311. Cost: some 50 to 200
    likelihoods and gradients; at d = 8 about 60 ms (to 300 ms with near ties), also for 200 blocks of 8 copies.
    Regime: many blocks of at least d copies, where averages of per-block estimates keep a constant bias; single
    diagrams of n >= d^2 copies. Flat spectra come out exactly flat, so it is low there less than elsewhere. Up to
    64 dimensions.

    Parameters
    ----------
    functional : Functional
        What is estimated.

    Examples
    --------
    >>> round(MaximumLikelihood()(DiagramCounts({"60+30+10": 1}, dim=3)), 4)
    0.915
    """

    functional: Functional = VonNeumann()

    def __call__(self, counts: DiagramCounts) -> float:
        """Return the estimate."""
        return float(self.functional(with_zeros(self.functional, self.spectrum(counts))))

    def spectrum(self, counts: DiagramCounts) -> FloatArray:
        """Return the spectrum of maximum likelihood, (d,)."""
        return fit_likelihood(counts).spectrum


class _Likelihood:
    """The log-likelihood of a record and its gradient, with a count of evaluations."""

    def __init__(self, blocks: Blocks) -> None:
        self.copies = blocks.copies
        self.evaluations = 0
        self._parts: list[tuple[int, IntArray, IntArray]] = []
        for size in np.unique(blocks.sizes):
            chosen = blocks.sizes == size
            self._parts.append((int(size), blocks.shapes[chosen], blocks.counts[chosen]))

    def value(self, spectrum: FloatArray) -> float:
        """Return the log-likelihood at a decreasing spectrum."""
        self.evaluations += 1
        total = 0.0
        for size, shapes, tallies in self._parts:
            if size <= LARGEST_SIZE:
                schur = schur_and_contents(shapes, spectrum)[0]
                if not (schur > 0.0).all():
                    return -np.inf
                total += float(tallies @ (np.log(schur) + log_standard_tableaux(shapes)))
            else:
                total += float(tallies @ SchurWeyl(spectrum, size).logpmf(shapes))
        return total

    def gradient(self, spectrum: FloatArray) -> FloatArray:
        """Return the derivatives by the eigenvalues, (d,), as free variables."""
        self.evaluations += 1
        total = np.zeros(len(spectrum))
        for size, shapes, tallies in self._parts:
            if size <= LARGEST_SIZE and spectrum[-1] > 0.0:
                schur, contents = schur_and_contents(shapes, spectrum)
                total += (tallies / schur) @ contents / spectrum
            else:
                total += tallies @ SchurWeyl(spectrum, size).logpmf_gradient(shapes)
        return total

    def gap(self, spectrum: FloatArray) -> float:
        """Return max_i d(log likelihood)/dp_i - n."""
        return max(0.0, float(self.gradient(spectrum).max()) - self.copies)

    def climb(self, spectrum: FloatArray) -> tuple[FloatArray, float]:
        """Return the spectrum reached from a decreasing start, and its log-likelihood."""
        groups = _ties(spectrum, 0.0)
        for remaining in range(_PASSES, -1, -1):
            moved = self._moved(groups, _STEPS_AT_ONCE if remaining else _LAST_STEPS)
            better = self._without_vanishing(_ties(_joined(moved), _TIE / np.sqrt(self.copies)))
            if len(better) == len(groups):
                break
            groups = better
        spectrum = self._polished(_joined(self._moved(better, _LAST_STEPS)), len(spectrum))
        return spectrum, self.value(spectrum)

    def _moved(self, groups: list[FloatArray], steps: int) -> list[FloatArray]:
        """Return groups of equal eigenvalues after some quasi-Newton steps that keep them equal."""
        from scipy.optimize import minimize

        sizes = np.array([len(group) for group in groups])
        if len(sizes) == 1:
            return [np.full(sizes[0], 1.0 / sizes[0])]
        floor = np.log(_SMALLEST_TALLY / self.copies)

        def objective(logs: FloatArray) -> tuple[float, FloatArray]:
            weights = np.exp(np.maximum(logs - logs.max(), floor))
            weights /= sizes @ weights
            order = np.argsort(-weights, kind="stable")
            spectrum = np.repeat(weights[order], sizes[order])
            slopes = spectrum * (self.gradient(spectrum) - self.copies)
            ends = np.cumsum(sizes[order])
            by_group = np.empty(len(sizes))
            by_group[order] = np.add.reduceat(slopes, ends - sizes[order])
            return -self.value(spectrum) / self.copies, -by_group / self.copies

        start = np.log(np.array([group[0] for group in groups], dtype=np.float64))
        found = minimize(
            objective,
            start,
            jac=True,
            method="L-BFGS-B",
            options={"maxiter": steps, "gtol": 1e-10, "ftol": 1e-15, "maxcor": 20},
        )
        weights = np.exp(np.maximum(found.x - found.x.max(), floor))
        weights /= sizes @ weights
        return [np.full(sizes[g], weights[g]) for g in np.argsort(-weights, kind="stable")]

    def _without_vanishing(self, groups: list[FloatArray]) -> list[FloatArray]:
        """Drop the last groups while that does not lower the likelihood."""
        value = self.value(_joined(groups))
        while len(groups) > 1 and self.copies * groups[-1].sum() < 0.5:
            shorter = self.value(_joined(groups[:-1]))
            if shorter < value - _GAIN:
                break
            groups, value = groups[:-1], shorter
        return groups

    def _polished(self, positive: FloatArray, letters: int) -> FloatArray:
        """Return the spectrum with its zeros after monotone steps, as many as the gradient gap asks for."""
        for _ in range(_POLISHING_STEPS):
            gradient = self.gradient(positive)
            if gradient.max() - self.copies <= 0.1 * _GAP_PER_COPY * self.copies:
                break
            contents = positive * gradient
            positive = np.sort(contents / contents.sum())[::-1].copy()
        return np.concatenate([positive, np.zeros(letters - len(positive))])


def _letters(counts: DiagramCounts, blocks: Blocks, dim: int | None) -> int:
    """Return the number of eigenvalues to be fitted."""
    if dim is None:
        letters = blocks.rows if counts.dim is None else counts.dim
    else:
        letters = as_integer(dim, "dim", at_least=blocks.rows)
        if counts.dim is not None and letters != counts.dim:
            raise ArgumentValueError(f"dim must be that of the record, {counts.dim}, got {letters}")
    if letters > _LARGEST_DIM:
        raise NotCoveredError(f"maximum likelihood is offered up to {_LARGEST_DIM} eigenvalues, got {letters}")
    return letters


def _start(blocks: Blocks, letters: int) -> FloatArray:
    """Return the plug-in spectrum with half a box added to every row and half a box between neighbours."""
    rows = np.zeros(letters)
    rows[: blocks.rows] = blocks.counts @ blocks.shapes
    rows += 0.5 + 0.5 * np.arange(letters - 1, -1, -1)
    return np.asarray(rows / rows.sum())


def _ties(spectrum: FloatArray, width: float) -> list[FloatArray]:
    """Return groups of positive eigenvalues with neighbours within a factor exp(width), each made equal."""
    positive = spectrum[spectrum > 0.0]
    groups = np.split(positive, np.flatnonzero(-np.diff(np.log(positive)) > width) + 1)
    return [np.full(len(group), group.mean()) for group in groups]


def _joined(groups: list[FloatArray]) -> FloatArray:
    """Return the groups as one spectrum of sum 1."""
    together = np.concatenate(groups)
    return np.asarray(together / together.sum())


def _splits(spectrum: FloatArray, copies: int) -> list[FloatArray]:
    """Return the spectrum with one of its groups of equal positive eigenvalues split in two, for every group."""
    groups = _ties(spectrum, 0.0)
    zeros = np.zeros(len(spectrum) - sum(map(len, groups)))
    found = []
    for g, group in enumerate(groups):
        if len(group) > 1:
            half = len(group) // 2
            step = min(0.5, _SPLIT / np.sqrt(copies * group[0]))
            factors = np.repeat([1.0 + step, 1.0 - step * half / (len(group) - half)], [half, len(group) - half])
            apart = [*groups[:g], group * factors, *groups[g + 1 :]]
            found.append(np.concatenate([np.sort(np.concatenate(apart))[::-1], zeros]))
    return found

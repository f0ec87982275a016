"""estimate_many: the automatic entropy estimate with its interval for thousands of single diagrams at once."""

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.special import expit

from entropest._checks import as_confidence, as_integer
from entropest._types import FloatArray, IntArray
from entropest.errors import ArgumentValueError
from entropest.estimation.blocks import Blocks
from entropest.estimation.expansion import jackknife_variance
from entropest.estimation.intervals import CALIBRATED_DIMENSION, UNSEEN_COPIES_LARGE, WIDEST_FULL_DIMENSION
from entropest.estimation.large_dimensions import upper_end_from_moments
from entropest.estimation.power_sums import continuation_jet, entropy_continuation
from entropest.estimation.quantiles import UNSEEN_COPIES, copies_scale, inflated_quantile
from entropest.estimation.split_posterior import clip_to_bracket, components, levels_considered, plug_in_variance
from entropest.functionals import VonNeumann
from entropest.shapes import as_shapes

__all__ = ["ManyEstimates", "estimate_many"]

_ELEMENTS_AT_ONCE = 2**18


@dataclass(frozen=True, slots=True, kw_only=True)
class ManyEstimates:
    """Entropy estimates of single diagrams.

    Attributes
    ----------
    values : (K,) array
        One estimate for each diagram.
    intervals : (K, 2) array
        Lower and upper ends; the upper end is infinite without `dim`.
    standard_errors : (K,) array
    unit : str
        Unit of the three arrays.
    method : str
        "split posterior".
    confidence : float
        Nominal coverage of each interval by itself.
    """

    values: FloatArray
    intervals: FloatArray
    standard_errors: FloatArray
    unit: str
    method: str
    confidence: float


def estimate_many(
    rows: npt.ArrayLike, *, dim: int | None = None, confidence: float = 0.95, base: float | None = None
) -> ManyEstimates:
    """Estimate the von Neumann entropy from each of many diagrams by itself, vectorised.

    Each value and interval is the one of ``estimate`` for a record of that diagram alone, whose rules and limits hold;
    the method is the split posterior whatever the number of copies. Work space stays below some tens of megabytes.

    Parameters
    ----------
    rows : (K, R) array_like of int
        One diagram in each row, non-increasing, padded with zeros; numbers of copies may differ.
    dim : int, optional
        Dimension of one copy, at most 256.
    confidence : float
        Nominal coverage of each interval.
    base : float, optional
        Base of the logarithm. Default: nats.

    Raises
    ------
    ArgumentValueError, ArgumentTypeError
        For a wrong argument or an empty diagram.

    Examples
    --------
    >>> found = estimate_many([[60, 30, 10], [50, 50, 0]], dim=3)
    >>> found.values.round(3), found.intervals.round(2)
    (array([0.918, 0.702]), array([[0.78, 1.07],
           [0.64, 0.84]]))
    """
    confidence = as_confidence(confidence)
    functional = VonNeumann()
    unit, scale = functional.unit(base), functional.scale(base)
    shapes = as_shapes(rows, name="rows")
    if shapes.ndim != 2:
        raise ArgumentValueError(f"rows must hold one diagram in each row of a matrix, got {shapes.ndim} axes")
    heights = (shapes > 0).sum(axis=1)
    if (heights == 0).any():
        raise ArgumentValueError("rows must hold diagrams of at least one box each, got an empty diagram")
    if dim is not None:
        dim = as_integer(dim, "dim", at_least=max(1, int(heights.max(initial=1))), at_most=WIDEST_FULL_DIMENSION)
    results = np.zeros((len(shapes), 4))
    for height in np.unique(heights).tolist():
        chosen = np.flatnonzero(heights == height)
        step = max(1, _ELEMENTS_AT_ONCE // levels_considered(height, dim) ** 2)
        for start in range(0, len(chosen), step):
            part = chosen[start : start + step]
            results[part] = _of_one_height(shapes[part, :height], dim, confidence)
    results /= scale
    return ManyEstimates(
        values=results[:, 0],
        intervals=np.sort(results[:, 1:3], axis=1),
        standard_errors=np.abs(results[:, 3]),
        unit=unit,
        method="split posterior",
        confidence=confidence,
    )


def _of_one_height(shapes: IntArray, dim: int | None, confidence: float) -> FloatArray:
    """Return value, lower end, upper end and standard error of shapes without empty rows, (K, 4), in nats.

    The rule of the interval is that of :func:`entropest.estimation.intervals.continuation_interval`.
    """
    height = shapes.shape[1]
    n = shapes.sum(axis=1)
    log_dim = math.inf if dim is None else math.log(dim)
    unseen = math.inf if dim is None else float(dim - height)
    levels = levels_considered(height, dim)
    seen, considered = entropy_continuation(shapes, height), entropy_continuation(shapes, levels)
    jet = continuation_jet(shapes, height + (unseen > 0), 2)
    further, varentropy = -jet[:, 1], np.maximum(2.0 * jet[:, 2] - jet[:, 1] ** 2, 0.0)
    jackknife, plug_in = jackknife_variance(VonNeumann(), shapes), plug_in_variance(shapes)
    brackets = np.stack([seen, considered], axis=1)
    values = components(shapes, levels).means()
    values = clip_to_bracket(values, brackets, np.sqrt(np.maximum(jackknife, plug_in)), log_dim)
    spectra = shapes / n[:, None]
    first, third = _central_moments(spectra)
    second_order = plug_in - first / n
    first_order = np.where(n > 1, np.maximum(first, varentropy * n / np.maximum(n - 1, 1)), first)
    errors = np.sqrt(np.maximum(jackknife, first_order / n + second_order))
    sizes, which = np.unique(n, return_inverse=True)
    z = np.array([inflated_quantile(confidence, int(size)) for size in sizes])[which]
    skew = (1.0 + 2.0 * z**2) / 6.0 * third / (np.where(first > 0.0, first, 1.0) * n)
    copies = copies_scale(confidence)
    full = considered if dim is not None else np.full(len(n), math.inf)
    top = _with_unseen(further, UNSEEN_COPIES_LARGE * copies / n, unseen)
    upper = np.maximum(np.minimum(np.maximum(full, seen), top), values) + z * errors + np.maximum(skew, 0.0)
    if unseen > 0:
        upper = np.maximum(upper, _with_unseen(seen, UNSEEN_COPIES * copies / n, unseen))
    if dim is not None and dim > CALIBRATED_DIMENSION and unseen > 0:
        ends = [_end_from_moments(shape, dim, quantile) for shape, quantile in zip(shapes, z.tolist(), strict=True)]
        upper = np.maximum(upper, np.minimum(np.maximum(full, seen) + z * errors, ends))
    lower = np.clip(np.minimum(seen, values) - z * errors, 0.0, log_dim) + 0.0
    return np.stack([values, lower, np.clip(upper, 0.0, log_dim), errors], axis=1)


def _central_moments(spectra: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return variance and third central moment of -log p_i under p, (K,) each."""
    surprises = -np.log(spectra)
    centred = surprises - (spectra * surprises).sum(axis=1, keepdims=True)
    return (spectra * centred**2).sum(axis=1), (spectra * centred**3).sum(axis=1)


def _with_unseen(entropies: FloatArray, weights: FloatArray, levels: float) -> FloatArray:
    """Return entropies after weights, at most the ones that raise them most, went to unseen equal levels."""
    if levels == 0.0:
        return entropies
    with np.errstate(over="ignore"):
        w = np.minimum(np.minimum(weights, expit(math.log(levels) - entropies)), 1.0 - 1e-12)
    if levels == math.inf:
        return np.full(len(w), math.inf)
    return np.asarray((1.0 - w) * (entropies - np.log1p(-w)) + w * (math.log(levels) - np.log(w)))


def _end_from_moments(shape: IntArray, dim: int, z: float) -> float:
    blocks = Blocks(shapes=shape[None, :], counts=np.ones(1, dtype=np.int64), dim=dim)
    return upper_end_from_moments(blocks, z)

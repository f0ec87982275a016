"""Intervals for functionals that have nothing better than the plug-in estimate."""

import math

import numpy as np

from entropest._types import FloatArray
from entropest.estimation.blocks import Blocks
from entropest.estimation.estimators import plug_in_spectrum
from entropest.estimation.expansion import expand, jackknife_variance
from entropest.estimation.identified import Range
from entropest.estimation.intervals import LargeBlockInterval, tilted_changes
from entropest.estimation.quantiles import UNSEEN_COPIES, copies_scale, inflated_quantile
from entropest.functionals import Functional

__all__ = ["plug_in_interval"]

_EXTRA_INFLATION = 1.2
_MOST_UNSEEN_LEVELS = 256
_TIE_STEP = 0.5


def plug_in_interval(functional: Functional, blocks: Blocks, *, confidence: float) -> LargeBlockInterval:
    """Return an interval around the plug-in estimate F, for functionals that nothing better is known for.

    It runs from min(F, F_t) - z s to max(F, F_t) + z s. F_t stands for the functional at the spectra with rows that may
    be tied, at z or fewer deviations, replaced by their mean: ties push the rows apart, and the estimate with them.
    s is the exact delete-one jackknife or the first-order standard deviation, whichever is larger. The interval
    also follows F along a tilt of the spectrum and along up to 3.7/n (at 95%) of weight moved to levels not seen,
    and includes 0 for a divergence whose reference agrees with every row within its sampling error.
    """
    spectrum = plug_in_spectrum(functional, blocks)
    n = blocks.copies
    z = inflated_quantile(confidence, n) * _EXTRA_INFLATION
    padded = np.zeros((len(blocks.shapes), len(spectrum)), dtype=np.int64)
    padded[:, : blocks.rows] = blocks.shapes
    jackknife = blocks.sum_of_squared_weights(jackknife_variance(functional, padded))
    error = math.sqrt(max(jackknife, expand(functional, spectrum).first_order / n))
    tilt = tilted_changes(functional, spectrum, n, z)
    merged = [_merged_ties(spectrum, n / blocks.blocks, n, step) for step in np.arange(0.0, z, _TIE_STEP)]
    spectra = np.stack([spectrum, *merged])
    centres = np.asarray(functional(spectra)) * functional.scale()
    moved = np.asarray(functional(_moved_spectra(spectrum, blocks, confidence))) * functional.scale()
    bracket = Range(lower=float(centres.min()), upper=float(centres.max()))
    lower = min(bracket.lower + min(-z * error, tilt.lower), float(moved.min()))
    if _reference_within_reach(functional, spectrum, n, z):
        lower = min(lower, 0.0)
    return LargeBlockInterval(
        interval=Range(lower=lower, upper=max(bracket.upper + max(z * error, tilt.upper), float(moved.max()))),
        standard_error=error,
        bracket=bracket,
    )


def _merged_ties(spectrum: FloatArray, block_size: float, copies: int, z: float) -> FloatArray:
    """Return the spectrum with groups of rows that equal eigenvalues could explain replaced by their means.

    The rows of t equal eigenvalues p in a block of k copies spread up to 2 sqrt(t p/k) to either side of p, in the
    limit of large k (the edges of the semicircle law); z sqrt(p/n) is added for sampling.
    """
    merged = spectrum.copy()
    start = 0
    while start < len(spectrum):
        stop = start + 1
        for end in range(start + 2, len(spectrum) + 1):
            group = spectrum[start:end]
            mean = float(group.mean())
            reach = 2.0 * math.sqrt((end - start) * mean / block_size) + z * math.sqrt(mean / copies)
            if group[0] - mean <= reach and mean - group[-1] <= reach:
                stop = end
        merged[start:stop] = spectrum[start:stop].mean()
        start = stop
    return merged


def _reference_within_reach(functional: Functional, spectrum: FloatArray, copies: int, z: float) -> bool:
    """Say whether every eigenvalue of the reference is within z standard deviations of its row, plus z^2 copies."""
    reference = np.asarray(getattr(functional, "reference", ()), dtype=np.float64)
    if len(reference) != len(spectrum):
        return False
    reach = z * np.sqrt(spectrum * (1.0 - spectrum) / copies) + z**2 / copies
    return bool((np.abs(spectrum - reference) <= reach).all())


def _moved_spectra(spectrum: FloatArray, blocks: Blocks, confidence: float) -> FloatArray:
    """Return plug-in spectra after up to a weight that could have stayed unseen went to the levels not seen."""
    further = 1 if blocks.dim is None else min(blocks.dim - blocks.rows, _MOST_UNSEEN_LEVELS)
    length = max(len(spectrum), blocks.rows + further)
    unseen = length - blocks.rows
    moved = np.zeros((17, length))
    moved[:, : blocks.rows] = spectrum[: blocks.rows]
    if unseen > 0:
        weight = min(UNSEEN_COPIES * copies_scale(confidence) / blocks.copies, unseen / length)
        weights = weight * np.linspace(0.0, 1.0, len(moved))[:, None]
        moved[:, : blocks.rows] *= 1.0 - weights
        moved[:, blocks.rows :] = weights / unseen
    return moved

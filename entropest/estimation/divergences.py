"""Relative entropies of a state to known references that its own eigenbasis does not matter for, or is measured."""

import math
from dataclasses import replace

import numpy as np
import numpy.typing as npt
from scipy.special import logsumexp, ndtri

from entropest._checks import as_confidence, as_real
from entropest._types import IntArray
from entropest.errors import ArgumentValueError
from entropest.estimation.estimate import estimate
from entropest.estimation.result import Estimate
from entropest.functionals import RelativeEntropy, VonNeumann
from entropest.records.counts import DiagramCounts
from entropest.records.moment_counts import MomentCounts
from entropest.spectra import as_spectrum, maximally_mixed, thermal

__all__ = ["relative_entropy_in_eigenbasis", "relative_entropy_to_gibbs", "relative_entropy_to_mixed"]


def relative_entropy_to_mixed(
    counts: DiagramCounts | MomentCounts, *, method: str = "auto", confidence: float = 0.95, base: float | None = None
) -> Estimate:
    """Estimate the relative entropy to the maximally mixed state, D = log d - S, from a record of known dimension.

    Value and interval are those of the von Neumann entropy, turned round; they are exact statements about the
    states, because the maximally mixed state has every basis as its eigenbasis.

    Parameters
    ----------
    counts, method, confidence, base
        As for :func:`entropest.estimate`; the record must state its dimension.

    Raises
    ------
    ArgumentValueError
        If the dimension of the record is not known.

    Examples
    --------
    >>> found = relative_entropy_to_mixed(DiagramCounts({"571+286+143": 1}, dim=3))
    >>> round(found.value, 2), found.functional.name
    (0.14, 'relative entropy')
    """
    if counts.dim is None:
        raise ArgumentValueError("dim must be known for the relative entropy to the maximally mixed state, got None")
    entropy = estimate(counts, VonNeumann(), method=method, confidence=confidence)
    return _turned(entropy, math.log(counts.dim), 0.0, RelativeEntropy(maximally_mixed(counts.dim)), confidence, base)


def relative_entropy_to_gibbs(
    counts: DiagramCounts | MomentCounts,
    energies: npt.ArrayLike,
    beta: float,
    *,
    mean_energy: float,
    energy_error: float = 0.0,
    method: str = "auto",
    confidence: float = 0.95,
    base: float | None = None,
) -> Estimate:
    """Estimate the relative entropy to a Gibbs state, D = beta <H> + log Z - S, with <H> measured separately.

    Half of the error goes to the entropy and half to the energy, whose error is taken as normal. No relation
    between the eigenbasis of the state and that of H is assumed.

    Parameters
    ----------
    counts : DiagramCounts or MomentCounts
        The record.
    energies : (d,) array_like
        All eigenvalues of H, degenerate ones repeated; their number is the dimension of the record.
    beta : float
        Inverse temperature; beta times an energy is a number.
    mean_energy, energy_error : float
        Measured Tr rho H and its standard error.
    method, confidence, base
        As for :func:`entropest.estimate`.

    Raises
    ------
    ArgumentValueError
        If the number of energies is not the dimension, or the mean energy lies beyond the energies by more than
        five standard errors.

    References
    ----------
    Donald, J. Stat. Phys. 44 (1986) 81, doi:10.1007/BF01010905 (relative entropy to a Gibbs state as free energy).

    Examples
    --------
    >>> record = DiagramCounts({"731+269": 1}, dim=2)
    >>> found = relative_entropy_to_gibbs(record, [0.0, 1.0], 1.0, mean_energy=0.4, energy_error=0.01)
    >>> round(found.value, 2), round(found.standard_error, 3)
    (0.13, 0.017)
    """
    reference = thermal(energies, beta)
    levels = np.asarray(energies, dtype=np.float64)
    if counts.dim is not None and counts.dim != len(levels):
        raise ArgumentValueError(
            f"energies must be as many as the record has dimensions, {counts.dim}, got {len(levels)}"
        )
    confidence = as_confidence(confidence)
    mean, error = as_real(mean_energy, "mean_energy"), as_real(energy_error, "energy_error")
    if error < 0.0:
        raise ArgumentValueError(f"energy_error must not be negative, got {error}")
    if not levels.min() - 5.0 * error <= mean <= levels.max() + 5.0 * error:
        raise ArgumentValueError(
            f"mean_energy must lie between the energies {levels.min():g} and {levels.max():g}, got {mean:g}"
        )
    half = 0.5 * (1.0 + confidence)
    entropy = estimate(counts, VonNeumann(), method=method, confidence=half)
    offset = beta * mean + float(logsumexp(-beta * levels))
    found = _turned(entropy, offset, abs(beta) * error, RelativeEntropy(reference), half, base)
    notes = (*found.notes, f"half of the error for the entropy, half for the energy {mean:g} +- {error:g} (normal)")
    return replace(found, confidence=confidence, notes=notes)


def relative_entropy_in_eigenbasis(
    counts: DiagramCounts | MomentCounts,
    reference: npt.ArrayLike,
    populations: npt.ArrayLike,
    *,
    method: str = "auto",
    confidence: float = 0.95,
    base: float | None = None,
) -> Estimate:
    """Estimate the relative entropy to a known reference whose eigenbasis was measured on further copies.

    With w_j the populations of the state in the eigenbasis of the reference, D = sum_j w_j (-log q_j) - S. Half of the
    error goes to the entropy and half to the populations, whose mean of -log q_j is taken as normal.

    Parameters
    ----------
    counts : DiagramCounts or MomentCounts
        The record.
    reference : (d,) array_like
        Eigenvalues q_j of the reference, in any order.
    populations : (d,) array_like of int
        How often level j of the reference was found on single copies, in the order of `reference`.
    method, confidence, base
        As for :func:`entropest.estimate`.

    Returns
    -------
    Estimate
        Infinite (a value of inf) if a level was found that the reference gives no weight.

    Raises
    ------
    ArgumentValueError
        If reference and populations differ in length, nothing was counted, or the dimensions disagree.

    References
    ----------
    Umegaki, Kodai Math. Sem. Rep. 14 (1962) 59, doi:10.2996/kmj/1138844604 (quantum relative entropy).

    Examples
    --------
    >>> record = DiagramCounts({"731+269": 1}, dim=2)
    >>> found = relative_entropy_in_eigenbasis(record, [0.6, 0.4], [520, 480])
    >>> round(found.value, 2), round(found.standard_error, 3)
    (0.12, 0.015)
    """
    weights = np.asarray(reference, dtype=np.float64)
    as_spectrum(weights)
    tallies = _tallies(populations)
    if tallies.shape != weights.shape:
        raise ArgumentValueError(f"populations must be as many as the reference, {len(weights)}, got {tallies.shape}")
    if counts.dim is not None and counts.dim != len(weights):
        raise ArgumentValueError(f"reference must have the dimension {counts.dim} of the record, got {len(weights)}")
    shots = int(tallies.sum())
    if shots == 0:
        raise ArgumentValueError("populations must hold at least one count, got none")
    confidence = as_confidence(confidence)
    half = 0.5 * (1.0 + confidence)
    entropy = estimate(counts, VonNeumann(), method=method, confidence=half)
    functional = RelativeEntropy(np.sort(weights)[::-1])
    seen = tallies > 0
    if (weights[seen] <= 0.0).any():
        note = "a level was found that the reference gives no weight: the relative entropy is infinite"
        return replace(
            entropy,
            value=math.inf,
            interval=(math.inf, math.inf),
            standard_error=None,
            functional=functional,
            unit=functional.unit(base),
            confidence=confidence,
            notes=(*entropy.notes, note),
        )
    surprise = -np.log(weights[seen])
    mean = float(tallies[seen] @ surprise) / shots
    error = math.sqrt(float(tallies[seen] @ (surprise - mean) ** 2) / shots / max(1, shots - 1))
    found = _turned(entropy, mean, error, functional, half, base)
    note = f"half of the error for the entropy, half for {shots} measured populations (normal)"
    return replace(found, confidence=confidence, notes=(*found.notes, note))


def _tallies(populations: npt.ArrayLike) -> IntArray:
    """Return tallies as a one-dimensional array of non-negative whole numbers."""
    tallies = np.asarray(populations)
    if tallies.ndim != 1 or tallies.dtype.kind not in "iu" or (tallies.size and tallies.min() < 0):
        raise ArgumentValueError(f"populations must be non-negative whole numbers, one a level, got {populations!r}")
    return tallies.astype(np.int64)


def _turned(
    entropy: Estimate,
    offset: float,
    deviation: float,
    functional: RelativeEntropy,
    confidence: float,
    base: float | None,
) -> Estimate:
    """Return offset - S, the offset known up to a normal error, cut at zero."""
    reach = float(ndtri(0.5 + 0.5 * confidence)) * deviation
    ends = (offset - reach - entropy.interval[1], offset + reach - entropy.interval[0])
    scale = functional.scale(base)
    notes = list(entropy.notes)
    value = None if entropy.value is None else offset - entropy.value
    if value is not None and value < 0.0:
        notes.append(f"the estimate {value:.4g} nat is negative and was capped at 0")
        value = 0.0
    low, high = sorted(max(0.0, end) / scale for end in ends)
    error = entropy.standard_error
    return replace(
        entropy,
        value=None if value is None else value / scale,
        interval=(low, high),
        standard_error=None if error is None else math.hypot(error, deviation) / abs(scale),
        functional=functional,
        unit=functional.unit(base),
        notes=tuple(notes),
    )

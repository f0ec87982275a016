"""The classical baseline: entropy from letter frequencies, for studies where the eigenbasis is known."""

from typing import Literal, overload

import numpy as np
import numpy.typing as npt

from entropest._checks import log_of_base
from entropest._types import FloatArray
from entropest.errors import ArgumentValueError
from entropest.functionals import VonNeumann
from entropest.records.arguments import whole_numbers

__all__ = ["histogram_entropy"]

Correction = Literal["miller-madow", "none"]


@overload
def histogram_entropy(
    frequencies: list[int] | tuple[int, ...], *, correction: Correction = ..., base: float | None = ...
) -> float: ...
@overload
def histogram_entropy(
    frequencies: npt.ArrayLike, *, correction: Correction = ..., base: float | None = ...
) -> float | FloatArray: ...
def histogram_entropy(
    frequencies: npt.ArrayLike, *, correction: Correction = "miller-madow", base: float | None = None
) -> float | FloatArray:
    """Return the entropy of letter frequencies, corrected by (letters seen - 1)/(2 n).

    Measuring every copy in the known eigenbasis of the state gives n independent letters; this is what an analyst of
    letters would report. Source: Miller (1955), in Information Theory in Psychology, 95 (the correction, with the
    number of letters); Madow's form counts the letters seen. Cost: O(d). Regime: every letter expected some three
    times or more; below that it is low by up to the entropy of the letters not seen.

    Parameters
    ----------
    frequencies : (..., d) array_like of int
        How often each letter was seen; at least one letter in each histogram.
    correction : {"miller-madow", "none"}
        "none" gives the plug-in entropy.
    base : float, optional
        Base of the logarithm; default: nats.

    Returns
    -------
    float for one histogram, else an array of the leading axes. The value is not capped at log d.

    Raises
    ------
    ArgumentValueError, ArgumentTypeError
        For frequencies that are not whole numbers, an empty histogram, or another word for the correction.

    Examples
    --------
    >>> round(histogram_entropy([60, 30, 10]), 6), round(histogram_entropy([60, 30, 10], correction="none"), 6)
    (0.907946, 0.897946)
    """
    if correction not in ("miller-madow", "none"):
        raise ArgumentValueError(f'correction must be "miller-madow" or "none", got {correction!r}')
    tallies = whole_numbers(frequencies, "frequencies")
    if tallies.ndim == 0 or not tallies.shape[-1] or not tallies.any(axis=-1).all():
        raise ArgumentValueError("frequencies must have letters along the last axis, at least one of them seen")
    copies = tallies.sum(axis=-1, dtype=np.float64)
    values = np.asarray(VonNeumann()(tallies / copies[..., None]))
    if correction == "miller-madow":
        values = values + ((tallies > 0).sum(axis=-1) - 1.0) / (2.0 * copies)
    values = values / log_of_base(base)
    return float(values) if values.ndim == 0 else np.asarray(values)

"""Drawing shapes: which sampler, and what the draws carry with them."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal, TypeAlias, get_args

import numpy as np

from entropest._types import FloatArray, IntArray
from entropest.errors import ArgumentValueError, NotCoveredError

__all__ = ["Draws"]

Method: TypeAlias = Literal["auto", "insertion", "determinantal", "surrogate"]
Sampler: TypeAlias = Callable[[FloatArray, int, int, np.random.Generator], IntArray]
MOST_DETERMINANTAL_LETTERS = 16
# Letters that are inserted without being asked to, some minutes.
MOST_INSERTED_LETTERS = 10**11
# Rough costs in seconds, fitted at d = 2 .. 16 and n = 10 .. 10^8: a letter inserted costs d times the first;
# setting up the determinantal sampler d^2 times the second, a draw d^3 times the third.
INSERTED_LETTER = 1.5e-9
DETERMINANTAL_SETUP = 3e-4
DETERMINANTAL_DRAW = 4e-7


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Draws:
    """Shapes drawn from an outcome law.

    Attributes
    ----------
    shapes : int array
        Rows along the last axis.
    method : str
        "insertion", "determinantal" or "surrogate".
    approximate : bool
        Whether the sampler is approximate; only the surrogate is.
    """

    shapes: IntArray
    method: str
    approximate: bool

    def __repr__(self) -> str:
        label = ", approximate" if self.approximate else ""
        return f"Draws(shapes of shape {self.shapes.shape}, method={self.method!r}{label})"


def draw(
    spectrum: FloatArray, copies: int, axes: tuple[int, ...], generator: np.random.Generator, method: Method
) -> Draws:
    """Draw (*axes, d) shapes."""
    if method not in get_args(Method):
        raise ArgumentValueError(f"method must be one of {', '.join(get_args(Method))}, got {method!r}")
    size = math.prod(axes)
    chosen = _cheaper(int((spectrum > 0.0).sum()), copies, size) if method == "auto" else method
    try:
        if method == "auto" and chosen == "insertion":
            _check_letters(copies, size)
        shapes = _sampler(chosen)(spectrum, copies, size, generator)
    except NotCoveredError:
        if method != "auto" or chosen == "insertion":
            raise
        _check_letters(copies, size)
        chosen = "insertion"
        shapes = _sampler(chosen)(spectrum, copies, size, generator)
    return Draws(shapes=shapes.reshape(*axes, len(spectrum)), method=chosen, approximate=chosen == "surrogate")


def _check_letters(copies: int, size: int) -> None:
    """Refuse to insert more letters than can be waited for unless insertion was asked for."""
    if copies * size > MOST_INSERTED_LETTERS:
        raise NotCoveredError(
            f"exact draws that the determinantal sampler does not cover must take at most {MOST_INSERTED_LETTERS:.0e} "
            f"letters, got {copies} copies times {size}; name a method to draw anyway"
        )


def _sampler(method: str) -> Sampler:
    """Import a sampler when it is first needed."""
    if method == "insertion":
        from entropest.law.insertion import draw_by_insertion

        return draw_by_insertion
    if method == "determinantal":
        from entropest.law.determinantal import draw_determinantal

        return draw_determinantal
    from entropest.law.surrogate import draw_surrogate

    return draw_surrogate


def _cheaper(rank: int, copies: int, size: int) -> str:
    """Return the exact sampler that should take less time."""
    if rank > MOST_DETERMINANTAL_LETTERS:
        return "insertion"
    insertion = INSERTED_LETTER * rank * copies * size
    determinantal = DETERMINANTAL_SETUP * rank**2 + DETERMINANTAL_DRAW * rank**3 * size
    return "insertion" if insertion <= determinantal else "determinantal"

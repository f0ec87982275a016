"""The eigenvalues a law is made from: as floats, and exactly."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from numbers import Rational
from typing import Any

import numpy as np
import numpy.typing as npt

from entropest import _mp
from entropest._types import FloatArray
from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.law.schur import exact_value
from entropest.spectra import as_spectrum

# Sums of floats closer to 1 than this differ by rounding only.
SUM_ROUNDING = 2.0**-51


@dataclass(frozen=True, slots=True, eq=False)
class Eigenvalues:
    """Eigenvalues in decreasing order.

    `given` holds them exactly if they came as integers, fractions (`rational`) or mpf, and None for floats.
    """

    floats: FloatArray
    given: tuple[Fraction, ...] | None
    rational: bool

    @classmethod
    def of(cls, values: npt.ArrayLike | Sequence[Any]) -> Eigenvalues:
        """Check eigenvalues: exact ones must sum to exactly 1, others within 1e-9."""
        if isinstance(values, np.ndarray) and values.dtype.kind == "f":
            return cls._from_floats(values)
        if isinstance(values, str) or not isinstance(values, Iterable):
            raise ArgumentTypeError(f"a spectrum must be a sequence of real numbers, got {values!r}")
        entries: list[Any] = list(values)
        if entries and all(isinstance(value, Rational) for value in entries):
            return cls._from_rationals(sorted(map(exact_value, entries), reverse=True))
        if any(_mp.is_mpf(value) for value in entries):
            as_spectrum([float(value) for value in entries])
            exact = sorted((max(exact_value(value), Fraction(0)) for value in entries), reverse=True)
            total = sum(exact)
            return cls._exact([value / total for value in exact], rational=False)
        return cls._from_floats(entries)

    @classmethod
    def _from_floats(cls, values: npt.ArrayLike) -> Eigenvalues:
        floats = as_spectrum(values)
        total = math.fsum(floats)
        if abs(total - 1.0) > SUM_ROUNDING:
            floats = floats / total
        floats.flags.writeable = False
        return cls(floats, None, False)

    @classmethod
    def _from_rationals(cls, values: list[Fraction]) -> Eigenvalues:
        if values[-1] < 0:
            raise ArgumentValueError(f"eigenvalues must not be negative, got {values[-1]}")
        total = sum(values)
        if total != 1:
            raise ArgumentValueError(f"integers and fractions must sum to exactly 1, got {total}")
        return cls._exact(values, rational=True)

    @classmethod
    def _exact(cls, values: list[Fraction], *, rational: bool) -> Eigenvalues:
        floats = np.array([float(value) for value in values])
        floats.flags.writeable = False
        return cls(floats, tuple(values), rational)

    @property
    def exact(self) -> tuple[Fraction, ...]:
        """The eigenvalues as fractions of sum 1; floats are taken as they are and divided by their sum."""
        if self.given is not None:
            return self.given
        fractions = [Fraction(value) for value in self.floats.tolist()]
        total = sum(fractions)
        return tuple(value / total for value in fractions)

    def __str__(self) -> str:
        values = self.given if self.given is not None and self.rational else self.floats.tolist()
        shown = [str(value) for value in values]
        if len(shown) > 8:
            shown = [*shown[:4], "...", *shown[-2:]]
        return f"[{', '.join(shown)}]"

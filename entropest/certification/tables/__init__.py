"""Tables of certified numbers, each with the script that makes it; they are read on first use."""

import json
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from typing import Final

import numpy as np

from entropest._types import FloatArray, IntArray

__all__ = ["CHAIN_MINIMA_FILE", "ChainMinima", "chain_minima"]

CHAIN_MINIMA_FILE: Final = "chain_minima.json"


@dataclass(frozen=True, slots=True, kw_only=True)
class ChainMinima:
    """Lower bounds on the probabilities of the sets of a chain at an increasing grid of entropies.

    Every spectrum with entropy at most ``entropies[i]`` gives the set of (copies, depth) at least the probability
    ``units_of[copies, depth][i] / units``.
    """

    units: int
    entropies: FloatArray
    units_of: dict[tuple[int, int], IntArray]


@cache
def chain_minima() -> ChainMinima:
    """Read the table of chain minima; the file keeps the first value of each row, then the decrements.

    Examples
    --------
    >>> table = chain_minima()
    >>> len(table.entropies) == len(table.units_of[4, 3])
    True
    """
    data = json.loads(files(__package__).joinpath(CHAIN_MINIMA_FILE).read_text(encoding="utf-8"))
    return ChainMinima(
        units=data["units"],
        entropies=np.array(data["entropies"], dtype=np.float64),
        units_of={
            (int(copies), int(depth)): row[0] - np.cumsum([0, *row[1:]], dtype=np.int64)
            for copies, rows in data["minima"].items()
            for depth, row in rows.items()
        },
    )

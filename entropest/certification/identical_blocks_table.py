"""The table of the identical-blocks e-value: statistics and certified suprema, read on first use.

The entropies tested form cells; inside a cell the statistics stay the same, so their suprema rise with the entropy. For
every block size, cell, design (the number of copies a statistic is made for) and reference family there is one
statistic of :mod:`.mean_polynomial`, and for every entropy of the cell a number not below its supremum.
"""

import hashlib
import json
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from typing import Final

import numpy as np

from entropest._types import FloatArray

__all__ = ["IDENTICAL_BLOCKS_FILE", "IdenticalBlocksTable", "identical_blocks_table"]

IDENTICAL_BLOCKS_FILE: Final = "identical_blocks.json"


@dataclass(frozen=True, slots=True, kw_only=True)
class IdenticalBlocksTable:
    """Statistics and suprema.

    Attributes
    ----------
    entropies : (cells, points) array
        The entropies tested, increasing along both axes, in nat.
    designs : tuple of int
        Numbers of copies the statistics are made for, increasing.
    references : tuple of str
        The reference families.
    weights : (references,) array
        Weights of the mixture over the families, sum 1.
    coefficients : dict of (cells, designs, references, k + 1) arrays
        By block size k: c_1 .. c_k and e.
    suprema : dict of (cells, designs, references, points) arrays
        By block size: not below the supremum of the mean over all spectra with at most that entropy.
    digest : str
        SHA-256 of the file, in hexadecimal.
    """

    entropies: FloatArray
    designs: tuple[int, ...]
    references: tuple[str, ...]
    weights: FloatArray
    coefficients: dict[int, FloatArray]
    suprema: dict[int, FloatArray]
    digest: str


@cache
def identical_blocks_table() -> IdenticalBlocksTable:
    """Read the table; the file keeps the first supremum of a row, then the increments, in whole units.

    Examples
    --------
    >>> table = identical_blocks_table()
    >>> sorted(table.coefficients), table.designs
    ([3, 4, 5, 6], (1200, 30000))
    """
    raw = files("entropest.certification.tables").joinpath(IDENTICAL_BLOCKS_FILE).read_bytes()
    data = json.loads(raw)
    return IdenticalBlocksTable(
        entropies=np.array(data["entropies"], dtype=np.float64),
        designs=tuple(data["designs"]),
        references=tuple(data["references"]),
        weights=np.array(data["weights"], dtype=np.float64),
        coefficients={int(k): np.array([cell["coefficients"] for cell in cells]) for k, cells in data["sizes"].items()},
        suprema={
            int(k): np.cumsum([cell["suprema"] for cell in cells], axis=-1, dtype=np.int64) / data["units"]
            for k, cells in data["sizes"].items()
        },
        digest=hashlib.sha256(raw).hexdigest(),
    )

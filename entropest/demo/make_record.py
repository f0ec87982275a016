"""Make the demo record: an invented four-level memory cell, 50 blocks of 40 copies each.

Run ``python -m entropest.demo.make_record FILE`` to write it again; the seed is fixed.
"""

import sys
from typing import Final

import numpy as np

from entropest.law.schur_weyl import SchurWeyl
from entropest.records.counts import DiagramCounts
from entropest.records.files import write_record

SPECTRUM: Final = (0.5, 0.25, 0.15, 0.1)
BLOCKS: Final = 50
COPIES: Final = 40
SEED: Final = 11


def make_record() -> DiagramCounts:
    """Draw the record.

    Examples
    --------
    >>> make_record().copies
    2000
    """
    rows = SchurWeyl(SPECTRUM, COPIES).rvs(BLOCKS, rng=np.random.default_rng(SEED), method="insertion")
    return DiagramCounts.from_rows(rows, dim=len(SPECTRUM))


if __name__ == "__main__":
    write_record(make_record(), sys.argv[1])

"""Make identical_blocks.json: run ``python -m entropest.certification.tables.make_identical_blocks`` (half an hour).

The file is written as the work proceeds, and an interrupted run goes on where it stopped. The statistics come out of a
numerical optimisation and may differ in their last digits elsewhere; the suprema are certified for those stored.
"""

import argparse
import json
import math
import sys
from collections.abc import Sequence
from itertools import pairwise
from pathlib import Path
from typing import Any, Final

import numpy as np

from entropest._atomic import replace_file
from entropest.certification.identical_blocks_table import IDENTICAL_BLOCKS_FILE
from entropest.certification.mean_polynomial import MeanPolynomial
from entropest.certification.spectra_at_entropy import spectra_at_entropy
from entropest.certification.suprema import certified_suprema
from entropest.certification.tables.identical_blocks_design import REFERENCES, best_statistic, null_means

__all__ = ["cell_entropies", "in_units", "made_cell", "main"]

SCHEMA: Final = "entropest/identical-blocks/1"
UNITS: Final = 10**9
DESIGNS: Final = (1200, 30000)
WEIGHTS: Final = (0.4, 0.3, 0.3)
SIZES: Final = (4, 3, 6, 5)
_FIRST: Final = 0.02
_RATIO: Final = 1.02
_CELLS: Final = 260
_POINTS: Final = 16
_SLACK: Final = 4e-4
_SAVE_EVERY: Final = 10


def cell_entropies(cell: int) -> list[float]:
    """Return the entropies tabulated in one cell, increasing: sixteen steps within a ratio of 1.02, six decimals.

    Examples
    --------
    >>> cell_entropies(0)[0], cell_entropies(0)[-1], round(cell_entropies(259)[-1], 2)
    (0.020025, 0.0204, 3.44)
    """
    return [round(_FIRST * math.exp((cell + (point + 1) / _POINTS) * math.log(_RATIO)), 6) for point in range(_POINTS)]


def in_units(values: Sequence[float]) -> list[int]:
    """Return numbers in units of 10^-9, rounded up: the first, then the increments.

    Examples
    --------
    >>> in_units([1.00000000001, 1.5])
    [1000000001, 499999999]
    """
    units = []
    for value in values:
        number = math.ceil(value * UNITS)
        while number / UNITS < value:
            number += 1
        units.append(number)
    return [units[0], *(after - before for before, after in pairwise(units))]


def made_cell(copies: int, cell: int) -> dict[str, list[Any]]:
    """Return the statistics of one cell, by design and reference, and their certified suprema at its entropies."""
    entropies = cell_entropies(cell)
    middle = math.sqrt(entropies[0] * entropies[-1])
    means = null_means(middle, copies)
    coefficients: list[list[list[float]]] = []
    suprema: list[list[list[int]]] = []
    for design in DESIGNS:
        statistics = [best_statistic(copies, middle, name, design / copies, means) for name in REFERENCES]
        coefficients.append([[*mean.coefficients, mean.square] for mean in statistics])
        suprema.append([_suprema(mean, entropies) for mean in statistics])
    return {"coefficients": coefficients, "suprema": suprema}


def _suprema(mean: MeanPolynomial, entropies: Sequence[float]) -> list[int]:
    """Certify the suprema to within a small change of entropy."""
    largest = [_largest(mean, entropy) for entropy in (entropies[0], entropies[-1])]
    slope = (largest[1] - largest[0]) / (entropies[-1] - entropies[0])
    tolerance = max(_SLACK * min(1.0, entropies[-1]) * slope, 1e-6)
    found = certified_suprema(mean, entropies, tolerance=tolerance)
    return in_units(found.upper.tolist())


def _largest(mean: MeanPolynomial, entropy: float) -> float:
    spectra = spectra_at_entropy(entropy)
    return float(np.max(mean.at(spectra.levels, spectra.multiplicities)))


def main(arguments: Sequence[str] | None = None) -> None:
    """Compute what is missing in the table."""
    parser = argparse.ArgumentParser(prog="make_identical_blocks", description=__doc__)
    parser.add_argument("--output", type=Path, default=Path(__file__).with_name(IDENTICAL_BLOCKS_FILE))
    parser.add_argument("--cells", type=int, default=_CELLS, help=f"how many cells of entropy (default {_CELLS})")
    options = parser.parse_args(arguments)
    path: Path = options.output
    table = json.loads(path.read_text(encoding="utf-8")) if path.exists() else {"sizes": {}}
    table |= {
        "schema": SCHEMA,
        "units": UNITS,
        "designs": DESIGNS,
        "references": REFERENCES,
        "weights": WEIGHTS,
        "entropies": [cell_entropies(cell) for cell in range(options.cells)],
    }
    for copies in SIZES:
        cells = table["sizes"].setdefault(str(copies), [])
        for cell in range(len(cells), options.cells):
            cells.append(made_cell(copies, cell))
            if (cell + 1) % _SAVE_EVERY == 0 or cell + 1 == options.cells:
                _save(path, table)
                _report(f"{copies} copies: {cell + 1} of {options.cells} cells")


def _save(path: Path, table: dict[str, Any]) -> None:
    replace_file(path, [json.dumps(table, separators=(",", ":")).encode("utf-8"), b"\n"])


def _report(text: str) -> None:
    if sys.stderr.isatty():
        sys.stderr.write(text + "\n")


if __name__ == "__main__":
    main()

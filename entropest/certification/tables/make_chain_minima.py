"""Make chain_minima.json: run ``python -m entropest.certification.tables.make_chain_minima`` (a few minutes)."""

import argparse
import json
import sys
import time
from collections.abc import Sequence
from concurrent.futures import ProcessPoolExecutor
from itertools import accumulate, pairwise
from pathlib import Path
from typing import Final

from entropest._atomic import replace_file
from entropest.certification.chain_minima import UNITS, certified_minimum, deepest
from entropest.certification.tables import CHAIN_MINIMA_FILE

__all__ = ["GAP", "certified_minima", "grid", "main", "without_rises"]

GAP: Final = 5e-5
_LARGEST_COPIES: Final = 8
_AT_ONCE: Final = 100


def grid() -> list[float]:
    """Return the entropies of the table: steps of a hundredth part up to 0.1 nat, then 0.001, 0.002, 0.02 up to 6 nat.

    Examples
    --------
    >>> entropies = grid()
    >>> entropies[0], entropies[-1], 0.693 in entropies, 1.386 in entropies
    (0.0001, 6.0, True, True)
    """
    fine = [float(f"{1e-4 * 1.01**i:.4g}") for i in range(695)]
    steps = [(100, 2500, 1), (2500, 4500, 2), (4500, 6001, 20)]
    return [*fine, *(i / 1000 for start, stop, step in steps for i in range(start, stop, step))]


def certified_minima(copies: int, depth: int, entropies: Sequence[float]) -> list[int]:
    """Return the certified minimum, in units, at each entropy."""
    return [certified_minimum(copies, depth, entropy, gap=GAP) for entropy in entropies]


def without_rises(values: Sequence[int]) -> list[int]:
    """Raise each value to the largest of those after it: what holds at a larger entropy holds at a smaller one.

    Examples
    --------
    >>> without_rises([9, 6, 7, 2])
    [9, 7, 7, 2]
    """
    return list(accumulate(reversed(values), max))[::-1]


def main(arguments: Sequence[str] | None = None) -> None:
    """Compute all rows and write the table."""
    parser = argparse.ArgumentParser(prog="make_chain_minima", description=__doc__)
    parser.add_argument("--jobs", type=int, default=1, help="processes to use (default 1)")
    parser.add_argument("--output", type=Path, default=Path(__file__).with_name(CHAIN_MINIMA_FILE))
    options = parser.parse_args(arguments)
    entropies = grid()
    rows = [(copies, depth) for copies in range(3, _LARGEST_COPIES + 1) for depth in range(2, deepest(copies) + 1)]
    minima: dict[str, dict[str, list[int]]] = {}
    started = time.monotonic()
    with ProcessPoolExecutor(options.jobs) as pool:
        for done, (copies, depth) in enumerate(rows):
            pieces = [entropies[i : i + _AT_ONCE] for i in range(0, len(entropies), _AT_ONCE)]
            pending = [pool.submit(certified_minima, copies, depth, piece) for piece in pieces]
            values = without_rises([value for piece in pending for value in piece.result()])
            minima.setdefault(str(copies), {})[str(depth)] = [values[0], *(a - b for a, b in pairwise(values))]
            _report(f"{done + 1} of {len(rows)} rows after {time.monotonic() - started:.0f} s")
    data = {"schema": "chain-minima/1", "units": UNITS, "gap": GAP, "entropies": entropies, "minima": minima}
    text = json.dumps(data, separators=(",", ":")).replace("],", "],\n")
    replace_file(options.output, [text.encode(), b"\n"])
    _report(f"wrote {options.output}", last=True)


def _report(text: str, *, last: bool = False) -> None:
    """Show progress on a terminal, on one line."""
    if sys.stderr.isatty():
        sys.stderr.write(f"\r{text}" + ("\n" if last else ""))
        sys.stderr.flush()


if __name__ == "__main__":
    main()

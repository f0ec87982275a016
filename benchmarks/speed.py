"""Speed of the law, of the samplers and of estimates: one table on stdout, JSON with ``--json FILE``.

Run ``python benchmarks/speed.py`` (about five minutes; ``--quick`` leaves out the largest cases). Every figure is a
ratio of medians of interleaved repeats in one process, single-threaded, or says that it is a plain time.
"""

import os

os.environ["OPENBLAS_NUM_THREADS"] = "1"

import argparse
import json
import platform
import resource
import time
from collections.abc import Callable

import numpy as np

import entropest
from entropest import SchurWeyl, geometric, maximally_mixed
from entropest._mp import context
from entropest.estimation import estimate, estimate_many
from entropest.law.determinantal import draw_determinantal
from entropest.law.insertion import draw_by_insertion
from entropest.records import DiagramCounts

Row = dict[str, object]


def interleaved(first: Callable[[], object], second: Callable[[], object], repeats: int) -> tuple[float, float]:
    """Return the median times of two functions called in turns."""
    times: tuple[list[float], list[float]] = ([], [])
    for _ in range(repeats):
        for function, kept in zip((first, second), times, strict=True):
            start = time.perf_counter()
            function()
            kept.append(time.perf_counter() - start)
    return float(np.median(times[0])), float(np.median(times[1]))


def median_time(function: Callable[[], object], repeats: int) -> float:
    """Return the median time of one function."""
    return interleaved(function, lambda: None, repeats)[0]


def bialternant_seconds(p: np.ndarray, rows: np.ndarray, digits: int = 50) -> float:
    """Return the time of one textbook determinant quotient with `digits` digits."""
    ctx = context(digits)
    start = time.perf_counter()
    d = len(p)
    x = [ctx.mpf(float(value)) for value in p]
    upper = ctx.matrix(d, d)
    for i in range(d):
        for j in range(d):
            upper[i, j] = x[i] ** int(rows[j] + d - 1 - j)
    lower = ctx.one
    for i in range(d):
        for j in range(i + 1, d):
            lower *= x[i] - x[j]
    ctx.log(abs(ctx.det(upper) / lower))
    return time.perf_counter() - start


def insertion(rows: list[Row], quick: bool) -> None:
    """Draws by insertion against Generator.choice of the letters alone."""
    generator = np.random.default_rng(1)
    cases = [(2, 100, 20_000), (4, 100, 20_000), (8, 100, 20_000), (8, 10_000, 200), (32, 100, 20_000)]
    cases += [] if quick else [(4, 10**7, 1)]
    for d, copies, size in cases:
        p = geometric(d, 0.7)
        whole, letters = interleaved(
            lambda p=p, n=copies, m=size: draw_by_insertion(p, n, m, generator),
            lambda p=p, d=d, n=copies * size: generator.choice(d, n, p=p),
            5,
        )
        rows.append(row(f"insertion d={d} n={copies} x {size}", "Generator.choice of the letters", whole, letters))


def determinantal(rows: list[Row], quick: bool) -> None:
    """Draws at sqrt(n) cost: growth with n, and against the time of drawing the letters."""
    generator = np.random.default_rng(2)
    letters = median_time(lambda: generator.choice(4, 10**6, p=geometric(4, 0.5)), 5) / 10**6
    sizes = [10**4, 10**5, 10**6, 10**7, 10**8] + ([] if quick else [10**9])
    batch = 100
    for name, p in (("geometric", geometric(4, 0.5)), ("uniform", maximally_mixed(4))):
        times = []
        for n in sizes:
            spent = median_time(lambda p=p, n=n: draw_determinantal(p, n, batch, generator), 3)
            times.append(spent)
            rows.append(
                row(
                    f"determinantal {name} d=4 n={n:.0e}, {batch} draws",
                    "letters, scaled from 10^6",
                    spent,
                    letters * n * batch,
                )
            )
        exponent = np.polyfit(np.log(sizes[2:]), np.log(times[2:]), 1)[0]
        rows.append(
            {
                "case": f"determinantal {name} d=4: exponent of the cost in n from 10^6",
                "value": round(float(exponent), 3),
            }
        )
        growth = times[sizes.index(10**8)] / times[sizes.index(10**6)]
        rows.append({"case": f"determinantal {name} d=4: cost at 10^8 over 10^6", "value": round(growth, 2)})
    if not quick:
        spent = median_time(lambda: draw_determinantal(maximally_mixed(16), 10**9, 1, generator), 1)
        peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
        rows.append({"case": "determinantal uniform d=16 n=1e+09, 1 draw: seconds", "value": round(spent, 2)})
        rows.append({"case": "peak memory of this process after it, MB", "value": round(peak)})


def tables(rows: list[Row], quick: bool) -> None:
    """Tables of all shapes against 50-digit determinants, one a shape."""
    generator = np.random.default_rng(3)
    for d, n in ((4, 100), (3, 400), (4, 150), (6, 50), (8, 40)):
        law = SchurWeyl(geometric(d, 0.7), n)
        spent = median_time(law.table, 1 if quick else 3)
        shapes = law.table().shapes
        chosen = shapes[generator.choice(len(shapes), 20)]
        single = float(np.median([bialternant_seconds(law.spectrum, shape) for shape in chosen]))
        rows.append(
            row(f"table d={d} n={n}, {len(shapes)} shapes", "50-digit determinants", spent, single * len(shapes))
        )


def single_shapes(rows: list[Row]) -> None:
    """Evaluate logpmf, against a 50-digit determinant."""
    generator = np.random.default_rng(4)
    law = SchurWeyl(geometric(4, 0.6), 1000)
    batch = law.rvs(1000, rng=generator)
    spent = median_time(lambda: law.logpmf(batch), 5)
    rows.append(
        row(
            "logpmf d=4 n=1000, 1000 shapes",
            "50-digit determinants",
            spent,
            1000 * bialternant_seconds(law.spectrum, batch[0]),
        )
    )
    tied = SchurWeyl([0.2, 0.2, 0.2, 0.1, 0.1, 0.1, 0.05, 0.05], 10**6)
    shape = tied.rvs(rng=generator)
    spent = median_time(lambda: tied.logpmf(shape), 5)
    rows.append({"case": "logpmf d=8 n=1e6 with ties, one shape: seconds", "value": round(spent, 5)})


def estimates(rows: list[Row]) -> None:
    """One estimate with its interval, and thousands of diagrams at once; plain times."""
    for d, copies in ((8, 60), (8, 1000), (8, 10_000), (32, 1000)):
        shapes = SchurWeyl(geometric(d, 0.7), copies).rvs(2000, rng=np.random.default_rng(5))
        record = DiagramCounts.from_rows(shapes[:1], dim=d)
        spent = median_time(lambda record=record: estimate(record), 15)
        rows.append({"case": f"estimate with interval d={d} n={copies}: milliseconds", "value": round(1e3 * spent, 2)})
        spent = median_time(lambda shapes=shapes, d=d: estimate_many(shapes, dim=d), 3) / len(shapes)
        rows.append({"case": f"estimate_many d={d} n={copies}: milliseconds each", "value": round(1e3 * spent, 4)})


def row(case: str, against: str, spent: float, reference: float) -> Row:
    """Return one line of the table."""
    return {"case": case, "against": against, "seconds": round(spent, 5), "ratio": float(f"{spent / reference:.3g}")}


def main() -> None:
    """Run all cases and print them."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true")
    parser.add_argument("--json", metavar="FILE")
    options = parser.parse_args()
    rows: list[Row] = []
    single_shapes(rows)
    estimates(rows)
    tables(rows, options.quick)
    insertion(rows, options.quick)
    determinantal(rows, options.quick)
    width = max(len(str(entry["case"])) for entry in rows)
    for entry in rows:
        if "value" in entry:
            print(f"{entry['case']:<{width}}  {entry['value']}")
        else:
            print(f"{entry['case']:<{width}}  {entry['seconds']:>10} s  {entry['ratio']:>9} of {entry['against']}")
    if options.json:
        facts = {"schema": "entropest-speed/1", "entropest": entropest.__version__, "numpy": np.__version__}
        facts |= {"machine": platform.machine(), "cores": os.cpu_count(), "rows": rows}
        with open(options.json, "w", encoding="utf-8") as stream:
            json.dump(facts, stream, indent=1)


if __name__ == "__main__":
    main()

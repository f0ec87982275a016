"""Certified lower bounds against copies, false certificates, and costs: tables on stdout, JSON with ``--json FILE``.

Run ``python benchmarks/certificates.py`` (about ten minutes; ``--quick`` a tenth of the records). Medians are over
seeded records. "limit" is what the best polynomial witness of the tuned grid reaches with infinitely many blocks,
"oracle" what a single witness reaches when witness and bet are known in advance; the other tests can pass both.
"""

import os

os.environ["OPENBLAS_NUM_THREADS"] = "1"

import argparse
import json
import time

import numpy as np

import entropest
from entropest import DiagramCounts, SchurWeyl, VonNeumann, YoungDiagram, certify, cycle_character
from entropest.certification.tuned import tuned_nodes
from entropest.certification.witnesses import chord, interpolant, ladder_of
from entropest.spectra import geometric, low_rank, maximally_mixed, power_law, random_reduced, spiked

STATES = {
    "geometric 1/2, d=4": geometric(4, 0.5),
    "uniform d=2": maximally_mixed(2),
    "uniform d=3": maximally_mixed(3),
    "uniform d=8": maximally_mixed(8),
    "(.95, .05)": np.array([0.95, 0.05]),
    "near tie (.501, .499)": np.array([0.501, 0.499]),
    "rank 2 of 4": low_rank(4, 2),
    "spiked d=4, .7": spiked(4, 0.7),
    "power law d=6": power_law(6, 1.0),
    "random 8x8 reduced": random_reduced(8, 8, rng=20260106),
    "tiny (.999, .001)": np.array([0.999, 0.001]),
    "step (5,5,3)/13": np.array([5, 5, 3]) / 13,
    "pure": np.array([1.0, 0.0]),
}
COPIES = (600, 6_000, 60_000, 600_000)


def grid_witnesses(copies: int) -> np.ndarray:
    """Return the coefficients of the witnesses of the tuned grid, every second cell."""
    if copies == 2:
        return np.array([chord(r) for r in range(1, 200)])
    cells = range(0, 110, 2)
    return np.array([interpolant(n, copies % 2 == 1) for cell in cells for n in tuned_nodes(copies, cell)])


def limit(p: np.ndarray, rows: np.ndarray) -> float:
    """Return the largest mean of a witness."""
    return float((rows @ [np.sum(p**j) for j in range(1, rows.shape[1] + 1)]).max())


def oracle(p: np.ndarray, copies: int, blocks: int, rows: np.ndarray, error: float = 0.05) -> float:
    """Return the entropy at which the best single witness with the best bet grows to 1/error on average."""
    table = SchurWeyl(p, copies).table()
    order = range(1, rows.shape[1] + 1)
    characters = [[float(cycle_character(YoungDiagram(s), j)) for j in order] for s in table.shapes.tolist()]
    values = rows @ np.array(characters).T
    floors = ladder_of([tuple(row) for row in rows], copies).floors
    low, high = 1e-6, 10.0
    for _ in range(30):
        s = (low + high) / 2
        bets = np.linspace(0.0, 1.0 - 1e-9, 60) ** 3 / (s - floors)[:, None]
        growth = np.log1p(bets[..., None] * (values - s)[:, None, :]) @ table.probabilities
        low, high = (s, high) if blocks * growth.max() >= -np.log(error) else (low, s)
    return low


def records(p: np.ndarray, copies: int, blocks: int, number: int, seed: int) -> list[DiagramCounts]:
    """Draw tallies of many blocks, by the exact law."""
    table = SchurWeyl(p, copies).table()
    generator = np.random.default_rng(seed)
    tallies = generator.multinomial(blocks, table.probabilities / table.probabilities.sum(), size=number)
    return [DiagramCounts.from_rows(table.shapes, counts=counts) for counts in tallies]


def medians(number: int) -> list[dict[str, object]]:
    """Return the medians of the default, of any stopping time with the right plan, and under drift."""
    rows: list[dict[str, object]] = []
    for name, p in STATES.items():
        for copies in (2, 3, 4, 6):
            entry: dict[str, object] = {"state": name, "k": copies, "truth": round(float(VonNeumann()(p)), 4)}
            rows_of_k = grid_witnesses(copies)
            entry["limit"] = round(limit(p, rows_of_k), 4)
            entry["oracle"] = [round(oracle(p, copies, total // copies, rows_of_k), 4) for total in COPIES]
            for label in ("default", "anytime", "drifting"):
                found = []
                for total in COPIES:
                    blocks = total // copies
                    options = {"anytime": {"anytime": True, "planned_blocks": blocks}, "drifting": {"drifting": True}}
                    drawn = records(p, copies, blocks, number, total + copies)
                    found.append(float(np.median([certify(r, **options.get(label, {})).lower for r in drawn])))
                entry[label] = [round(value, 4) for value in found]
            rows.append(entry)
            print(f"{name:<22} k={copies} S={entry['truth']:<7} limit {entry['limit']:<7}", end="")
            for label in ("oracle", "default", "anytime", "drifting"):
                print(f"  {label}", *(f"{value:.3f}" for value in entry[label]), end="")  # type: ignore[attr-defined]
            print(flush=True)
    return rows


def false_bounds(number: int) -> list[dict[str, object]]:
    """Count bounds above the truth at 95%, over states, block sizes and options, also at the best moment to stop."""
    rows: list[dict[str, object]] = []
    for label, options in (
        ("default", {}),
        ("anytime, best of 20 moments", {"anytime": True, "planned_blocks": 400}),
        ("anytime without a plan, best of 20", {"anytime": True}),
        ("drifting", {"drifting": True}),
    ):
        wrong = runs = 0
        worst = 0.0
        for p in STATES.values():
            truth = float(VonNeumann()(p))
            for copies in (2, 3, 4):
                bad = 0
                for i in range(number):
                    if options.get("anytime"):
                        parts = records(p, copies, 20, 20, 1000 * copies + i)
                        record, best = parts[0], 0.0
                        for part in parts[1:]:
                            record += part
                            best = max(best, certify(record, **options).lower)
                    else:
                        (record,) = records(p, copies, 400, 1, 1000 * copies + i)
                        best = certify(record, **options).lower
                    bad += best > truth + 1e-12
                wrong, runs, worst = wrong + bad, runs + number, max(worst, bad / number)
        rows.append({"options": label, "runs": runs, "false": wrong, "rate": wrong / runs, "worst cell": worst})
        print(f"{label:<36} {wrong} false of {runs} ({wrong / runs:.4f}), worst cell {worst:.3f}", flush=True)
    return rows


def costs() -> list[dict[str, object]]:
    """Return the median time of one certificate after the tables are loaded, in milliseconds."""
    rows: list[dict[str, object]] = []
    for copies in (2, 3, 4, 6, 10):
        (record,) = records(STATES["geometric 1/2, d=4"], copies, 10_000, 1, copies)
        for label, options in (("default", {}), ("drifting", {"drifting": True})):
            certify(record, **options)
            times = []
            for _ in range(9):
                start = time.perf_counter()
                certify(record, **options)
                times.append(time.perf_counter() - start)
            rows.append({"k": copies, "options": label, "ms": round(1e3 * float(np.median(times)), 2)})
            print(f"k={copies} {label:<9} {rows[-1]['ms']} ms", flush=True)
    return rows


def large_diagrams(number: int) -> list[dict[str, object]]:
    """Return medians from one large diagram."""
    rows: list[dict[str, object]] = []
    for name, sizes in (
        ("geometric 1/2, d=4", (100, 1000, 10**4, 10**6)),
        ("uniform d=8", (100,)),
        ("uniform d=2", (1000,)),
    ):
        p = STATES[name]
        for n in sizes:
            shapes = SchurWeyl(p, n).rvs(number, rng=n)
            drawn = [DiagramCounts.from_rows(shape[None], dim=len(p)) for shape in shapes]
            plain = float(np.median([certify(r).lower for r in drawn]))
            believed = float(np.median([certify(r, trusted_dim=True, at_least=0.0).lower for r in drawn]))
            above = float(np.median([certify(r, trusted_dim=True, at_most=9.0).upper for r in drawn]))
            entry = {"state": name, "n": n, "lower": plain, "lower, dim trusted": believed, "upper, dim trusted": above}
            rows.append({key: round(value, 4) if isinstance(value, float) else value for key, value in entry.items()})
            print(*(f"{key} {value}" for key, value in rows[-1].items()), sep=", ", flush=True)
    return rows


def main() -> None:
    """Run everything."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true")
    parser.add_argument("--json", metavar="FILE")
    options = parser.parse_args()
    number = 10 if options.quick else 100
    found = {
        "schema": "entropest-certificates/1",
        "entropest": entropest.__version__,
        "costs": costs(),
        "large diagrams": large_diagrams(5 if options.quick else 21),
        "medians": medians(number),
        "false bounds": false_bounds(10 if options.quick else 130),
    }
    if options.json:
        with open(options.json, "w", encoding="utf-8") as stream:
            json.dump(found, stream, indent=1)


if __name__ == "__main__":
    main()

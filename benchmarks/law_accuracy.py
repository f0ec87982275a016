"""Accuracy of the outcome law against exact and 600-digit arithmetic: worst errors by kind of spectrum.

Run ``python benchmarks/law_accuracy.py`` (a few minutes). 504 random (spectrum, shape) cases for logpmf; 200
spot-checked shapes of each table.
"""

from fractions import Fraction

import numpy as np

from entropest import SchurWeyl
from entropest.law.high_precision import log_schur_ratios

KINDS = ("separated", "tied", "gap 1e-3", "gap 1e-8", "gap 1e-15", "tiny", "zeros")


def spectrum_of(kind: str, d: int, generator: np.random.Generator) -> np.ndarray:
    """Return a spectrum of d eigenvalues of the named kind."""
    p = generator.dirichlet(np.ones(d))
    if kind == "tied" and d > 1:
        p[1 : 1 + d // 2] = p[0]
    elif kind.startswith("gap") and d > 1:
        p[1] = p[0] * (1.0 - float(kind.split()[1]))
    elif kind == "tiny":
        p[-1] = 10.0 ** -generator.integers(5, 13)
    elif kind == "zeros" and d > 1:
        p[-1] = 0.0
    return np.sort(p / p.sum())[::-1]


def exact_logpmf(p: np.ndarray, rows: np.ndarray) -> float:
    """Return log f + log s with 60 digits, the spectrum read exactly and normalised exactly."""
    from entropest._mp import context

    ctx = context(60)
    total = sum(Fraction(float(x)) for x in p)
    values = [Fraction(float(x)) / total for x in p if x > 0]
    kept = [int(row) for row in rows[: len(values)]]
    d = len(kept)
    parts = [row + d - 1 - i for i, row in enumerate(kept)]
    log_f = ctx.loggamma(sum(kept) + 1) - sum(ctx.loggamma(part + 1) for part in parts)
    log_f += sum(ctx.log(parts[i] - parts[j]) for i in range(d) for j in range(i + 1, d))
    (ratio,), _ = log_schur_ratios(values, [kept], 40)
    leading = sum(row * (ctx.log(x.numerator) - ctx.log(x.denominator)) for row, x in zip(kept, values, strict=True))
    return float(log_f + leading + ctx.mpf(ratio))


def main() -> None:
    """Print the worst error of every kind."""
    generator = np.random.default_rng(20260105)
    print("logpmf: worst absolute error, routes taken")
    for kind in KINDS:
        worst, routes = 0.0, {}
        for _ in range(72):
            d = int(generator.integers(2, 17))
            n = int(10.0 ** generator.uniform(1, 6))
            p = spectrum_of(kind, d, generator)
            law = SchurWeyl(p, n)
            shape = law.rvs(rng=generator)
            report = law.logpmf_report(shape)
            routes[report.route] = routes.get(report.route, 0) + 1
            worst = max(worst, abs(report.value - exact_logpmf(p, shape)))
        print(f"  {kind:<10} {worst:.1e}  {routes}")
    print("tables: worst relative error on 200 shapes, sum of probabilities minus 1")
    for d, n in ((3, 400), (4, 150), (6, 50), (8, 40)):
        for kind in ("separated", "tied"):
            p = spectrum_of(kind, d, generator)
            table = SchurWeyl(p, n).table()
            chosen = generator.choice(len(table.shapes), 200)
            errors = [
                abs(np.expm1(table.log_probabilities[i] - exact_logpmf(p, table.shapes[i]))) for i in chosen.tolist()
            ]
            print(f"  d={d} n={n} {kind:<10} {max(errors):.1e}  {abs(table.probabilities.sum() - 1):.1e}")


if __name__ == "__main__":
    main()

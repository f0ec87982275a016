"""Chi-square comparison of drawn rows with an exact law."""

from collections.abc import Mapping
from fractions import Fraction

import numpy as np
from scipy import stats

from entropest._types import IntArray
from tests.certification.exact import outcome_law

FALSE_ALARM = 1e-5
Rows = tuple[int, ...]


def rows_law(spectrum: list[Fraction], copies: int) -> dict[Rows, float]:
    """Return the exact law of the outcome, by Jacobi-Trudi determinants of fractions; rows padded with zeros."""
    law = outcome_law([p for p in spectrum if p], copies)
    return {d.rows + (0,) * (len(spectrum) - len(d.rows)): float(probability) for d, probability in law.items()}


def tallies(draws: IntArray) -> dict[Rows, int]:
    rows, counts = np.unique(draws.reshape(len(draws), -1), axis=0, return_counts=True)
    return {tuple(row): int(count) for row, count in zip(rows.tolist(), counts, strict=True)}


def assert_follows(draws: IntArray, law: Mapping[Rows, float]) -> None:
    """Fail if the draws leave the support, or by chance with probability FALSE_ALARM under the law."""
    seen = tallies(draws)
    assert set(seen) <= {rows for rows, probability in law.items() if probability > 0.0}
    expected = np.array(list(law.values())) * len(draws)
    observed = np.array([seen.get(rows, 0) for rows in law])
    common = expected >= 10.0
    if not common.all():  # rare outcomes are one cell, if that is common enough
        expected = np.append(expected[common], expected[~common].sum())
        observed = np.append(observed[common], observed[~common].sum())
        if expected[-1] < 10.0:
            expected, observed = expected[:-1], observed[:-1]
    statistic = ((observed - expected) ** 2 / expected).sum()
    assert statistic < stats.chi2.isf(FALSE_ALARM, max(1, len(expected) - 1))

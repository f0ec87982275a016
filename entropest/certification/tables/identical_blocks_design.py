"""Which statistics go into the table of the identical-blocks e-value: a matter of power, not of validity.

For a tested entropy s, an alternative spectrum q of larger entropy and blocks of k copies, the statistic E maximises
the mean growth of log E under q among the E >= 0 of the cone of :mod:`entropest.certification.mean_polynomial` whose
mean is at most 1 at many spectra of entropy at most s: the growth-optimal e-value (Grunwald, de Heide, Koolen, J. R.
Stat. Soc. B 86 (2024) 1091, arXiv:1906.07801). The alternative's entropy is the one at which m blocks grow by what
rejection needs.
"""

import math
from collections.abc import Callable
from typing import Final

import numpy as np

from entropest._types import FloatArray
from entropest.certification.mean_polynomial import MeanPolynomial, character_columns
from entropest.certification.spectra_at_entropy import spectra_at_entropy
from entropest.spectra import as_spectrum

__all__ = ["REFERENCES", "alternative", "best_statistic", "null_means", "outcome_law"]

REFERENCES: Final = ("gaussian", "step", "spiked")
_GROWTH: Final = 3.3
_GROWTH_TOLERANCE: Final = 0.25
_LARGEST_ALTERNATIVE: Final = 6.0
_LEAST_VALUE: Final = 0.02
_LARGEST_VALUE: Final = 20.0
_DIGITS: Final = 9


def alternative(reference: str, entropy: float, tested: float) -> FloatArray:
    """Return a spectrum of about the given entropy.

    "gaussian": proportional to exp(-b i^2), i >= 0; "step": r equal eigenvalues and one smaller; "spiked": one large
    and q equal ones, where q grows with the tested entropy and limits the entropy that is reached.

    Examples
    --------
    >>> alternative("step", 0.6931471805599453, 0.6).round(6)[:2]
    array([0.5, 0.5])
    """
    if reference == "gaussian":
        squares = np.arange(400.0) ** 2
        width = _root(lambda b: entropy - _entropy(_normalised(np.exp(-math.exp(b) * squares))), -9.0, 6.0)
        spectrum = _normalised(np.exp(-math.exp(width) * squares))
        return spectrum[spectrum > 1e-14]
    if reference == "step":
        full = int(math.exp(entropy) + 1e-12)
        part = _root(lambda y: _entropy(_normalised(np.array([1.0] * full + [y]))) - entropy, 0.0, 1.0)
        return _normalised(np.array([1.0] * full + [part]))
    equal = max(3, math.ceil(math.exp(1.15 * tested + 0.1)) - 1)
    reached = min(entropy, math.log(equal + 1) - 0.01)
    weight = _root(lambda a: _entropy(_spike(a, equal)) - reached, 1e-12, equal / (equal + 1))
    return _spike(weight, equal)


def null_means(entropy: float, copies: int) -> FloatArray:
    """Return the means of T_1 .. T_k, T_22 at spectra of entropy at most `entropy`, (N, k + 1)."""
    rows = [np.ones((1, copies + 1))]
    for fraction, stride in ((1.0, 1), (0.95, 3), (0.85, 3), (0.6, 3), (0.3, 3)):
        spectra = spectra_at_entropy(fraction * entropy)
        levels, counts = spectra.levels[:, ::stride], spectra.multiplicities[:, ::stride]
        sums = np.stack([(counts * levels**power).sum(axis=0) for power in range(1, copies + 1)], axis=1)
        rows.append(np.concatenate([sums, sums[:, 1:2] ** 2], axis=1))
    means = np.concatenate(rows)
    if copies == 3:
        means[:, -1] = 0.0
    return means


def outcome_law(spectrum: FloatArray, copies: int) -> FloatArray:
    """Return the probabilities of the diagrams of a small block, from determinants of complete symmetric sums."""
    complete = np.zeros(2 * copies + 1)  # h_{-copies} .. h_copies
    complete[copies] = 1.0
    for value in as_spectrum(spectrum).tolist():
        for degree in range(1, copies + 1):
            complete[copies + degree] += value * complete[copies + degree - 1]
    probabilities = []
    for diagram in character_columns(copies)[0]:
        rows = diagram.rows
        places = copies + np.array([[row - i + j for j in range(len(rows))] for i, row in enumerate(rows)])
        probabilities.append(diagram.standard_tableaux * max(0.0, float(np.linalg.det(complete[places]))))
    return _normalised(np.array(probabilities))


def best_statistic(copies: int, tested: float, reference: str, blocks: float, means: FloatArray) -> MeanPolynomial:
    """Return the statistic for blocks of `copies`, tested against spectra of one reference family.

    Parameters
    ----------
    copies : int
    tested : float
        The entropy s of the null.
    reference : str
        One of REFERENCES.
    blocks : float
        Number of blocks for which the statistic is made.
    means : (N, k + 1) array
        As returned by `null_means` for the same entropy.
    """
    low, high, entropy = tested, math.inf, 1.05 * tested + 0.002
    for _ in range(25):
        law = outcome_law(alternative(reference, entropy, tested), copies)
        coefficients, growth = _growth_optimum(law, copies, means)
        if abs(blocks * growth - _GROWTH) < _GROWTH_TOLERANCE or entropy > _LARGEST_ALTERNATIVE:
            break
        low, high = (entropy, high) if blocks * growth < _GROWTH else (low, entropy)
        entropy = 0.5 * (low + high) if math.isfinite(high) else entropy + max(entropy - tested, 0.01)
    rounded = [float(f"{value:.{_DIGITS}g}") for value in coefficients.tolist()]
    free, bounded = rounded[:3], [min(value, 0.0) for value in rounded[3:copies]]
    return MeanPolynomial(coefficients=(*free, *bounded), square=max(rounded[copies], 0.0))


def _growth_optimum(law: FloatArray, copies: int, means: FloatArray) -> tuple[FloatArray, float]:
    """Maximise law . log E by a barrier method: means at most 1, values in a range, signs of the cone."""
    columns = character_columns(copies)[1]
    signs = np.zeros((copies - 2, copies + 1))
    signs[range(copies - 3), range(3, copies)] = 1.0
    signs[-1, copies] = -1.0
    if copies == 3:
        columns, means, signs = columns[:, :3], means[:, :3], signs[:0, :3]
    rows = np.concatenate([means, -columns, columns, signs])
    limits = np.concatenate(
        [
            np.ones(len(means)),
            np.full(len(columns), -_LEAST_VALUE),
            np.full(len(columns), _LARGEST_VALUE),
            np.zeros(len(signs)),
        ]
    )
    point = np.zeros(rows.shape[1])
    point[0] = 0.5
    point[3:] = 1e-4 * -np.sign(signs.sum(axis=0)[3:])

    def objective(trial: FloatArray, sharpness: float) -> float:
        room = limits - rows @ trial
        if room.min() <= 0.0:
            return -math.inf
        return sharpness * float(law @ np.log(columns @ trial)) + float(np.log(room).sum())

    sharpness = 10.0
    while sharpness < 1e7:
        sharpness *= 8.0
        for _ in range(30):
            values, room = columns @ point, limits - rows @ point
            gradient = sharpness * (columns.T @ (law / values)) - rows.T @ (1.0 / room)
            hessian = sharpness * (columns.T * (law / values**2)) @ columns + (rows.T / room**2) @ rows
            scale = 1.0 / np.sqrt(np.diag(hessian))
            step = scale * np.linalg.lstsq(hessian * scale[:, None] * scale, gradient * scale, rcond=1e-13)[0]
            rise, length, here = float(gradient @ step), 1.0, objective(point, sharpness)
            while length > 1e-10 and not objective(point + length * step, sharpness) >= here + 0.1 * length * rise:
                length *= 0.5
            if length <= 1e-10:
                break
            point = point + length * step
            if rise < 1e-3:
                break
    growth = float(law @ np.log(columns @ point))
    return np.concatenate([point, np.zeros(copies + 1 - len(point))]), growth


def _root(rising: Callable[[float], float], low: float, high: float) -> float:
    """Bisect for the zero of a function that is negative below it."""
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if rising(middle) < 0.0 else (low, middle)
    return 0.5 * (low + high)


def _spike(weight: float, equal: int) -> FloatArray:
    return np.array([1.0 - weight] + [weight / equal] * equal)


def _normalised(weights: FloatArray) -> FloatArray:
    return np.asarray(weights / weights.sum(), dtype=np.float64)


def _entropy(spectrum: FloatArray) -> float:
    positive = spectrum[spectrum > 0.0]
    return -float(positive @ np.log(positive))

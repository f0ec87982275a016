"""Spectra with given power sums: the nearest one, and those of least and largest entropy."""

from typing import Any

import numpy as np

from entropest._types import FloatArray
from entropest.functionals import VonNeumann

__all__ = ["extreme_spectrum", "nearest_spectrum", "power_sums_of"]

_LONGEST_LOG = 60.0
_EVALUATIONS = 400
_STEPS = 400
_SMALLEST = 1e-15


def power_sums_of(spectrum: FloatArray, orders: FloatArray) -> FloatArray:
    """Return Tr rho^j for each order j, (k,)."""
    return np.asarray((spectrum[:, None] ** orders).sum(axis=0))


def nearest_spectrum(
    orders: FloatArray, values: FloatArray, whitening: FloatArray, start: FloatArray
) -> tuple[FloatArray, float]:
    """Return the spectrum whose power sums P are nearest to the values in |whitening (P - values)|, and that distance.

    A local search over the logarithms of the eigenvalues, (d,), by trust-region least squares from `start`.

    Examples
    --------
    >>> orders = np.array([2.0, 3.0])
    >>> spectrum, distance = nearest_spectrum(orders, np.array([0.38, 0.16]), np.eye(2), np.array([0.6, 0.25, 0.15]))
    >>> spectrum.round(3), distance < 1e-9
    (array([0.5, 0.3, 0.2]), True)
    """
    from scipy.optimize import least_squares

    def spectrum_of(logs: FloatArray) -> FloatArray:
        weights = np.exp(np.maximum(logs - logs.max(), -_LONGEST_LOG))
        return np.asarray(weights / weights.sum())

    def residuals(logs: FloatArray) -> FloatArray:
        return np.asarray(whitening @ (power_sums_of(spectrum_of(logs), orders) - values))

    def slopes(logs: FloatArray) -> FloatArray:
        p = spectrum_of(logs)
        by_eigenvalue = orders * p[:, None] ** (orders - 1.0)
        by_log = p[:, None] * (by_eigenvalue - p @ by_eigenvalue)
        return np.asarray(whitening @ by_log.T)

    first = np.log(np.maximum(start, 1e-12))
    found = least_squares(residuals, first, jac=slopes, xtol=1e-14, ftol=1e-15, gtol=1e-14, max_nfev=_EVALUATIONS)
    return np.sort(spectrum_of(found.x))[::-1].copy(), float(np.sqrt(2.0 * found.cost))


def extreme_spectrum(
    orders: FloatArray, values: FloatArray, sign: float, start: FloatArray
) -> tuple[FloatArray, float]:
    """Return a spectrum with given power sums where sign * entropy is locally least, and its largest relative misfit.

    Sequential quadratic programming from `start`, which should have these power sums (Kraft, 1988).
    """
    from scipy.optimize import minimize

    every = np.concatenate([[1.0], orders])
    targets = np.concatenate([[1.0], values])

    def objective(p: FloatArray) -> float:
        return sign * float(VonNeumann()(np.maximum(p, _SMALLEST)))

    def slopes(p: FloatArray) -> FloatArray:
        return np.asarray(-sign * (np.log(np.maximum(p, _SMALLEST)) + 1.0))

    constraint: Any = {
        "type": "eq",
        "fun": lambda p: power_sums_of(p, every) / targets - 1.0,
        "jac": lambda p: (every * p[:, None] ** (every - 1.0)).T / targets[:, None],
    }
    found = minimize(
        objective,
        start,
        jac=slopes,
        method="SLSQP",
        bounds=[(0.0, 1.0)] * len(start),
        constraints=constraint,
        options={"maxiter": _STEPS, "ftol": 1e-13},
    )
    spectrum = np.sort(np.clip(found.x, 0.0, 1.0))[::-1].copy()
    return spectrum, float(np.abs(power_sums_of(spectrum, every) / targets - 1.0).max())

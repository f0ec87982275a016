"""The leading part of the outcome law: f^lambda times the dominant monomial prod p_i^lambda_i.

With n boxes this is the multinomial probability of the rows times the share of the multinomial coefficient
that standard tableaux take:

    f^lambda prod p_i^lambda_i
        = multinomial(lambda; p) prod_{i<j} (lambda_i - lambda_j + j - i) / (lambda_i + j - i)

The multinomial probability is summed as deviances and Stirling remainders (Loader 2000, "Fast and accurate
computation of binomial probabilities"), so that nothing of size log n! is ever formed, and an error in the
eigenvalues counts only against the distance of the rows from n p.
"""

import math

import numpy as np
from scipy.special import gammaln

from entropest._types import FloatArray, IntArray

STIRLING_SERIES = (1 / 12, -1 / 360, 1 / 1260, -1 / 1680, 1 / 1188, -691 / 360360)
SERIES_FROM = 16.0
# log(2) as a number of 29 bits, whose products with whole numbers up to 2^24 are exact, and the rest.
LOG_2_HIGH = 372130558 / 2**29
LOG_2_LOW = 1.8206359985041462e-09


def stirling_remainder(count: FloatArray) -> FloatArray:
    """Return log(count!) - (count + 1/2) log(count) + count - log(2 pi)/2 for counts of at least 1."""
    square = 1.0 / (count * count)
    series = np.zeros_like(count)
    for coefficient in reversed(STIRLING_SERIES):
        series = series * square + coefficient
    small = np.minimum(count, SERIES_FROM)
    direct = gammaln(small + 1.0) - (small + 0.5) * np.log(small) + small - 0.5 * math.log(2 * math.pi)
    return np.asarray(np.where(count < SERIES_FROM, direct, series / count))


def deviance(count: FloatArray, mean: FloatArray) -> tuple[FloatArray, IntArray]:
    """Return count log(count/mean) - count + mean for positive counts and means, without cancellation.

    It is the first array plus log(2) times count times the second: the powers of two in quotients that are
    far from 1 stay whole numbers, as their sum can be millions and must not be rounded.
    """
    v = (count - mean) / (count + mean)
    square = v * v
    series = np.zeros_like(v)
    for order in range(19, 1, -2):
        series = series * square + 1.0 / order
    near = (count - mean) * v + 2.0 * count * v * square * series
    count_fraction, count_exponent = np.frexp(count)
    mean_fraction, mean_exponent = np.frexp(mean)
    far = count * np.log(count_fraction / mean_fraction) - (count - mean)
    is_near = np.abs(v) < 0.1
    exponents = np.where(is_near, 0, count_exponent.astype(np.int64) - mean_exponent)
    return np.asarray(np.where(is_near, near, far)), exponents


def log_probability(shapes: IntArray, spectrum: FloatArray, copies: int, log_ratio: FloatArray) -> FloatArray:
    """Return log(f^lambda prod p_i^lambda_i) + log_ratio of shapes (B, r) of `copies` boxes.

    `spectrum` holds at least r positive eigenvalues in decreasing order, rows after the r-th being empty. The
    law is that of the eigenvalues divided by their sum, which is 1 up to rounding: the deviances divide it out.
    """
    height = shapes.shape[1]
    means = copies * spectrum[:height]
    if len(shapes) > copies:
        weights, exponents = _log_poisson(np.arange(copies + 1)[:, None], means)
        columns = np.arange(height)
        weights, exponents = weights[shapes, columns], exponents[shapes, columns]
    else:
        weights, exponents = _log_poisson(shapes, means)
    total = log_ratio + weights.sum(axis=1) - copies * math.fsum(spectrum[height:])
    if copies:
        total += 0.5 * math.log(2 * math.pi * copies) + float(stirling_remainder(np.array(float(copies))))
    for upper in range(height):
        for lower in range(upper + 1, height):
            longer = shapes[:, upper] + float(lower - upper)
            total += np.log((longer - shapes[:, lower]) / longer)
    powers = (shapes * exponents).sum(axis=1).astype(np.float64)
    return np.asarray((total - powers * LOG_2_LOW) - powers * LOG_2_HIGH)


def _log_poisson(rows: IntArray, means: FloatArray) -> tuple[FloatArray, IntArray]:
    """Return the log-probability of each row under a Poisson law with the mean of its column.

    It is the first array less log(2) times row times the second.
    """
    filled = np.maximum(rows, 1).astype(np.float64)
    whole, exponents = deviance(filled, means)
    value = -whole - 0.5 * np.log(2 * math.pi * filled) - stirling_remainder(filled)
    return np.asarray(np.where(rows > 0, value, -means)), exponents

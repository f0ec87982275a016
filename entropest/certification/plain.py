"""Plain arbitrary-precision arithmetic for re-checking; nothing here is shared with the fast tests.

Characters come from rim hooks, witnesses from a linear system for their coefficients, binomial tails from sums of
exact terms. Slow and short on purpose: a referee should be able to read it in one sitting.
"""

import math
from collections.abc import Mapping, Sequence
from fractions import Fraction
from functools import cache
from typing import Any

from entropest import _mp

__all__ = [
    "binomial_sum_tail",
    "cycle_values",
    "exact_chord",
    "exact_interpolant",
    "partitions",
    "step_level",
    "symmetric_probability",
]

Rows = tuple[int, ...]
DIGITS = 50


def partitions(size: int, longest: int | None = None) -> list[Rows]:
    """Return all partitions of `size`.

    Examples
    --------
    >>> partitions(3)
    [(3,), (2, 1), (1, 1, 1)]
    """
    longest = size if longest is None else longest
    if size == 0:
        return [()]
    return [(first, *rest) for first in range(min(size, longest), 0, -1) for rest in partitions(size - first, first)]


@cache
def cycle_values(rows: Rows, order: int) -> tuple[Fraction, ...]:
    """Return chi(j-cycle)/chi(identity) for j = 1..order, by removing rim hooks (Murnaghan and Nakayama).

    With first-column hook lengths beta_i, removing a rim hook of length j turns one beta into beta - j; its sign is
    minus one to the number of betas jumped over; f = n! prod (beta_i - beta_m) / prod beta_i! gives the dimensions.

    Examples
    --------
    >>> cycle_values((3, 1), 3)
    (Fraction(1, 1), Fraction(1, 3), Fraction(0, 1))
    """
    size, height = sum(rows), len(rows)
    betas = [row + height - 1 - i for i, row in enumerate(rows)]
    values = []
    for length in range(1, order + 1):
        total = Fraction(0)
        for beta in betas:
            lower = beta - length
            if lower < 0 or lower in betas:
                continue
            others = [other for other in betas if other != beta]
            jumped = sum(lower < other < beta for other in others)
            before = math.prod(abs(beta - other) for other in others)
            after = math.prod(abs(lower - other) for other in others)
            total += (-1) ** jumped * Fraction(after * math.perm(beta, length), before)
        values.append(total / math.perm(size, length))
    return tuple(values)


def exact_chord(r: int, ctx: Any) -> list[Any]:
    """Return alpha, -beta of the chord through r and r + 1 equal eigenvalues."""
    beta = r * (r + 1) * ctx.log(1 + ctx.one / r)
    return [ctx.log(r) + beta / r, -beta]


def exact_interpolant(nodes: Sequence[float], order: int, ctx: Any) -> list[Any]:
    """Solve for the polynomial of `order` coefficients that meets -log x at the nodes, slopes included.

    A node named m times is met in value and 2m - 1 derivatives; an odd order adds the value at 1. The nodes are
    decimals of six digits, read exactly.
    """
    contacts = {Fraction(repr(node)): 2 * nodes.count(node) for node in nodes}
    if order % 2 == 1:
        contacts[Fraction(1)] = contacts.get(Fraction(1), 0) + 1
    conditions = [
        (ctx.mpf(node.numerator) / node.denominator, derivative)
        for node, contact in contacts.items()
        for derivative in range(contact)
    ]
    matrix, right = ctx.matrix(order, order), ctx.matrix(order, 1)
    for i, (x, derivative) in enumerate(conditions):
        for j in range(derivative, order):
            matrix[i, j] = math.perm(j, derivative) * x ** (j - derivative)
        right[i] = (
            -ctx.log(x) if derivative == 0 else (-1) ** derivative * math.factorial(derivative - 1) / x**derivative
        )
    return list(ctx.lu_solve(matrix, right))


def step_level(entropy: float, ctx: Any) -> Any:
    """Return a level whose step spectrum has at least `entropy`, larger by less than 1e-30 relatively."""
    target = ctx.mpf(entropy)

    def entropy_at(level: Any) -> Any:
        part = level - ctx.floor(level)
        return ctx.log(level) - (part * ctx.log(part) / level if part > 0 else 0)

    low, high = ctx.one, ctx.exp(target) + 1
    while high - low > ctx.mpf(10) ** -30 * high:
        middle = (low + high) / 2
        low, high = (low, middle) if entropy_at(middle) >= target else (middle, high)
    return high


def symmetric_probability(level: Any, copies: int, ctx: Any) -> Any:
    """Return h_copies of the step spectrum at `level`, by its generating function term by term."""
    full = int(ctx.floor(level))
    part = level - full
    total = ctx.zero
    term = ctx.one  # C(full - 1 + i, i)
    for i in range(copies + 1):
        total += term * part ** (copies - i)
        term = term * (full + i) / (i + 1)
    return total / level**copies


def binomial_sum_tail(observed: int, trials: Mapping[int, int], probabilities: Mapping[int, Any], ctx: Any) -> Any:
    """Bound P(sum of independent binomials <= observed) from above, to about 25 digits.

    Weights are kept as whole multiples of 10^-40, rounded up; what lies outside the windows is added as well.
    """
    unit = 10**40
    start, weights, outside = 0, [unit], 0
    largest = max(trials, key=lambda size: trials[size])
    for size in trials:
        if size == largest:
            continue
        low, window, lost = _binomial_window(trials[size], probabilities[size], unit, ctx)
        product = [0] * (len(weights) + len(window) - 1)
        for i, a in enumerate(weights):
            for j, b in enumerate(window):
                product[i + j] += a * b
        start, weights, outside = start + low, [-(-value // unit) for value in product], outside + lost
    low, window, lost = _binomial_window(trials[largest], probabilities[largest], unit, ctx)
    outside += lost
    below = [0]
    for value in window:
        below.append(below[-1] + value)
    total = 0
    for i, weight in enumerate(weights):
        room = observed - start - i - low
        total += weight * below[max(0, min(room + 1, len(window)))]
    return ctx.mpf(total) / unit**2 + ctx.mpf(outside) / unit


def _binomial_window(trials: int, probability: Any, unit: int, ctx: Any) -> tuple[int, list[int], int]:
    """Return start, weights and left-out mass of a binomial law in multiples of 1/unit, all rounded up."""
    if probability <= 0 or probability >= 1:
        return (trials if probability >= 1 else 0), [unit], 0
    mode = int(ctx.floor((trials + 1) * probability))
    log_peak = (
        ctx.loggamma(trials + 1)
        - ctx.loggamma(mode + 1)
        - ctx.loggamma(trials - mode + 1)
        + mode * ctx.log(probability)
        + (trials - mode) * ctx.log(1 - probability)
    )
    peak = ctx.exp(log_peak) * (1 + ctx.mpf(10) ** -30)
    odds = probability / (1 - probability)
    least = ctx.mpf(10) ** -38
    upward, value, count = [], peak, mode
    while count < trials and value > least:
        value = value * (trials - count) / (count + 1) * odds
        count += 1
        upward.append(value)
    downward, value, count = [], peak, mode
    while count > 0 and value > least:
        value = value * count / (trials - count + 1) / odds
        count -= 1
        downward.append(value)
    # beyond both ends the law falls at least geometrically, and no end has more than `trials` further terms
    lost = 2 * int(ctx.ceil(least * trials * unit)) + 2
    window = [*reversed(downward), peak, *upward]
    return mode - len(downward), [int(ctx.ceil(value * unit)) for value in window], lost


def fresh_context() -> Any:
    """Return the context all re-checks use."""
    return _mp.context(DIGITS)

"""A lower bound on the entropy from one or a few large diagrams, without knowing the dimension."""

import math

from scipy.special import entr

from entropest._types import IntArray
from entropest.errors import ArgumentValueError

__all__ = ["large_diagram_lower_bound"]


def large_diagram_lower_bound(rows: IntArray, *, error: float) -> float:
    """Return max(0, S(rows/n) - (1 + log n) sqrt(log(1/error) / (2n))) in nats.

    The rows majorize the histogram of the underlying letters, so E S(rows/n) <= S; one copy changes S(rows/n) by at
    most (1 + log n)/n, so McDiarmid's inequality applies. Several diagrams: add them row by row, n is the total.
    Assumes n identical, independent copies, n fixed beforehand. Proof: docs/theory.md, "One large diagram".

    Parameters
    ----------
    rows : (d,) int array
        Row lengths, the longest first.
    error : float
        Probability with which the bound may exceed the entropy.

    References
    ----------
    Greene, Adv. Math. 14 (1974) 254, doi:10.1016/0001-8708(74)90031-0; McDiarmid, Surveys in Combinatorics (1989) 148.

    Examples
    --------
    >>> import numpy as np
    >>> round(large_diagram_lower_bound(np.array([5000, 3000, 2000]), error=0.05), 3)
    0.905
    """
    size = int(rows.sum())
    if size < 1:
        raise ArgumentValueError("rows must hold at least one box, got an empty diagram")
    entropy = float(entr(rows / size).sum())
    spread = (1.0 + math.log(size)) * math.sqrt(math.log(1.0 / error) / (2.0 * size))
    return max(0.0, entropy - spread - 1e-12)

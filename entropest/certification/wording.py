"""What a certificate says in words: its method and its assumptions."""

from collections.abc import Sequence
from typing import Final

from entropest.certification.certificate import Test

__all__ = ["assumptions", "describe_method"]

_COPIES: Final = "The copies inside each block are identical and independent of each other."
_INDEPENDENT: Final = "The blocks are independent of each other."
_IDENTICAL: Final = "All blocks hold the same state."
_FIXED: Final = "The number of blocks and their sizes were fixed before the data were seen."
_STOPPING: Final = (
    "When to stop may depend on the outcomes seen so far, never on outcomes still to come; "
    "the block sizes, and the planned numbers of blocks if given, were fixed before the data were seen."
)
_DRIFT: Final = "The state may change from block to block; the bound is on the average of the entropies of the blocks."
_READOUT: Final = "Every outcome is identified correctly, and no block was left out because of its outcome."
_NO_DIMENSION: Final = "Nothing is assumed about the dimension or the spectrum."
_DIMENSION: Final = (
    "One copy has dimension {dim}, which is believed and not tested; nothing else about the spectrum is."
)
_LIMITS: Final = "It trusts the measuring device: it is not device-independent, and not meant for security decisions."

_WORDS: Final = {
    "score": "exact score test on the topmost outcomes",
    "identical-blocks": "e-value with certified suprema",
    "tuned-e-value": "e-value tuned to the tested entropy and the planned number of blocks",
    "mixture-e-value": "mixture e-value over a fixed grid of polynomial witnesses",
    "large-lower": "dual bound from the rows of the large diagrams",
    "large-upper": "dual upper bound from the rows of the large diagrams",
    "qubit-lower": "exact law of the shorter row of a qubit diagram",
    "qubit-upper": "exact law of the shorter row of a qubit diagram, from above",
    "swap-purity": "Clopper-Pearson limits on the purity from swap outcomes",
}


def describe_method(tests: Sequence[Test]) -> str:
    """Name the tests and the share of the error each may use."""
    return "; ".join(f"{_WORDS[test.kind]} (error {test.error:.4g})" for test in tests)


def assumptions(*, anytime: bool, drifting: bool, trusted_dim: int | None = None) -> tuple[str, ...]:
    """Return what the statement rests on, one sentence each."""
    blocks = (_DRIFT, _FIXED) if drifting else (_IDENTICAL, _STOPPING if anytime else _FIXED)
    dimension = _NO_DIMENSION if trusted_dim is None else _DIMENSION.format(dim=trusted_dim)
    return (_COPIES, _INDEPENDENT, *blocks, _READOUT, dimension, _LIMITS)

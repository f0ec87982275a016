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
    "The block sizes and when to stop may depend on the outcomes seen so far, never on outcomes still to come."
)
_DRIFT: Final = "The state may change from block to block; the bound is on the average of the entropies of the blocks."
_READOUT: Final = "Every outcome is identified correctly, and no block was left out because of its outcome."
_NO_DIMENSION: Final = "Nothing is assumed about the dimension or the spectrum."
_LIMITS: Final = "It trusts the measuring device: it is not device-independent, and not meant for security decisions."

_WORDS: Final = {
    "symmetric-outcome": "exact test on the fully symmetric outcome",
    "mixture-e-value": "mixture e-value over a fixed grid of polynomial witnesses",
    "large-diagram": "entropy of the rows of the large diagrams, less a bounded-difference term",
    "swap-purity": "Clopper-Pearson limits on the purity from swap outcomes",
}


def describe_method(tests: Sequence[Test]) -> str:
    """Name the tests and the share of the error each may use."""
    return "; ".join(f"{_WORDS[test.kind]} (error {test.error:.4g})" for test in tests)


def assumptions(*, anytime: bool, drifting: bool) -> tuple[str, ...]:
    """Return what the statement rests on, one sentence each."""
    blocks = (_DRIFT, _FIXED) if drifting else (_IDENTICAL, _STOPPING if anytime else _FIXED)
    return (_COPIES, _INDEPENDENT, *blocks, _READOUT, _NO_DIMENSION, _LIMITS)

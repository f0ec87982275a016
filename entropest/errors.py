"""Exceptions: every error this library raises on purpose derives from EntropestError."""

__all__ = [
    "ArgumentTypeError",
    "ArgumentValueError",
    "EntropestError",
    "MemoryBudgetError",
    "NotCoveredError",
    "RecheckError",
    "RecordFileError",
]


class EntropestError(Exception):
    """Base class of all errors raised by entropest."""


class ArgumentValueError(EntropestError, ValueError):
    """An argument has the right type but a value that breaks a stated rule."""


class ArgumentTypeError(EntropestError, TypeError):
    """An argument has a type that is not accepted."""


class MemoryBudgetError(ArgumentValueError):
    """A result would need more memory than the stated budget; the message says how much."""


class NotCoveredError(ArgumentValueError):
    """The question is well formed, but nothing proved here answers it; the message says why."""


class RecordFileError(ArgumentValueError):
    """A record file has a bad line; the message names file, line, text and what was expected."""


class RecheckError(ArgumentValueError):
    """A certificate does not follow from the record it is checked against."""

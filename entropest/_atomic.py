"""Writing files so that an interrupted write leaves the older file as it was."""

import os
import secrets
from collections.abc import Iterable
from pathlib import Path

__all__ = ["replace_file"]


def replace_file(path: str | os.PathLike[str], pieces: Iterable[bytes]) -> None:
    """Write bytes to a temporary file beside `path`, then put it in the place of `path`."""
    target = Path(path).resolve()
    temporary = target.with_name(f".{secrets.token_hex(8)}.tmp")
    try:
        with open(temporary, "xb") as stream:
            for piece in pieces:
                stream.write(piece)
            stream.flush()
            os.fsync(stream.fileno())
        os.replace(temporary, target)
    finally:
        temporary.unlink(missing_ok=True)

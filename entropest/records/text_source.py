"""Record files as blocks of whole lines, and the words for a bad line."""

from collections.abc import Iterable, Iterator
from typing import IO

from entropest.errors import RecordFileError

BLOCK = 2**20
LONGEST_LINE = 2**20


class FieldError(Exception):
    """A line does not say what it should: what was expected, and what was got."""

    def __init__(self, expected: str, got: str) -> None:
        super().__init__(f"expected {expected}, got {shown(got)}")


def shown(text: str) -> str:
    """Return text fit for one line of a message: at most 80 characters, control characters escaped."""
    escaped = "".join(
        letter if letter.isprintable() else letter.encode("unicode_escape").decode("ascii") for letter in text[:81]
    )
    return escaped if len(escaped) <= 80 else escaped[:77] + "..."


def decoded(line: bytes) -> str:
    """Return a line as text; bytes that are not UTF-8 are shown as escapes."""
    return line.decode("utf-8", "backslashreplace")


def bad_line(file: str, number: int, line: str, problem: FieldError) -> RecordFileError:
    """Return the error about one line of a file."""
    return RecordFileError(f"{file}, line {number}: {shown(line.strip())}: {problem}")


def pieces(stream: IO[str] | IO[bytes], file: str) -> Iterator[bytes]:
    """Yield a stream in pieces of about one megabyte of UTF-8, without a byte-order mark at the start."""
    try:
        first = True
        while piece := stream.read(BLOCK):
            data = piece.encode("utf-8", "surrogatepass") if isinstance(piece, str) else piece
            yield data.removeprefix(b"\xef\xbb\xbf") if first else data
            first = False
    except UnicodeDecodeError as error:
        raise RecordFileError(f"{file}: expected text in {error.encoding}, got other bytes") from error


def line_blocks(data: Iterable[bytes], file: str) -> Iterator[bytes]:
    """Yield pieces cut anew at line ends; CRLF becomes LF, and the last line gets the LF it may lack."""
    rest = b""
    lines = 0
    for piece in data:
        joined = rest + piece
        cut = joined.rfind(b"\n") + 1
        block, rest = joined[:cut].replace(b"\r\n", b"\n"), joined[cut:]
        if block:
            yield block
            lines += block.count(b"\n")
        if len(rest) > LONGEST_LINE:
            problem = FieldError(f"a line of at most {LONGEST_LINE} bytes", "a longer one")
            raise bad_line(file, lines + 1, decoded(rest[:200]), problem)
    if rest:
        yield rest.removesuffix(b"\r") + b"\n"

"""The tables that a CSV record can hold; each collects blocks of lines into one record."""

from abc import ABC, abstractmethod
from typing import Any

import numpy as np
import numpy.typing as npt

from entropest._types import IntArray
from entropest.records import csv_blocks, fields
from entropest.records.counts import DiagramCounts
from entropest.records.grouping import grouped, stacked, tabulated
from entropest.records.moment_counts import MomentCounts
from entropest.records.text_source import FieldError
from entropest.records.two_copy import TwoCopyShots


class Table(ABC):
    """What reads the lines below a header with these columns."""

    def __init__(self, columns: tuple[str, ...]) -> None:
        self.columns = columns

    @abstractmethod
    def take_block(self, block: bytes) -> bool:
        """Take a block of plainly written lines; return False, having taken nothing, for any other."""

    @abstractmethod
    def read_line(self, values: list[str]) -> Any:
        """Read the fields of one line, as many as there are columns."""

    @abstractmethod
    def take_lines(self, lines: list[Any]) -> None:
        """Take what `read_line` returned for the lines of a block, in their order."""

    @abstractmethod
    def record(self) -> DiagramCounts | MomentCounts | TwoCopyShots:
        """Return the record of all that was taken."""


class TallyTable(Table):
    """Diagrams, total spins or swap outcomes, one block a line or with counts."""

    def __init__(self, columns: tuple[str, ...], dim: int | None) -> None:
        super().__init__(columns)
        self._kind = columns[0]
        self._counted = columns[-1] == "count"
        self._dim = dim
        self._parts: list[tuple[IntArray, IntArray]] = []

    def take_block(self, block: bytes) -> bool:
        """Parse diagrams and total spins as arrays; swap outcomes are words, read line by line."""
        if self._kind == "diagram":
            parsed = csv_blocks.diagram_block(block, counted=self._counted, dim=self._dim)
        elif self._kind == "two_j":
            parsed = csv_blocks.spin_block(block, counted=self._counted)
        else:
            parsed = None
        if parsed is not None:
            self._add(*parsed)
        return parsed is not None

    def read_line(self, values: list[str]) -> tuple[tuple[int, ...], int]:
        """Return the rows and the count of one line."""
        count = fields.read_count(values[-1]) if self._counted else 1
        if self._kind == "diagram":
            return fields.read_rows(values[0], self._dim), count
        if self._kind == "two_j":
            return fields.read_spin(values[0], values[1]), count
        return fields.read_swap(values[0], self._dim), count

    def take_lines(self, lines: list[tuple[tuple[int, ...], int]]) -> None:
        """Add up the counts of equal diagrams, then take them as arrays."""
        tallies: dict[tuple[int, ...], int] = {}
        for rows, count in lines:
            tallies[rows] = tallies.get(rows, 0) + count
        self._add(*tabulated(tallies))

    def _add(self, rows: IntArray, counts: IntArray) -> None:
        if counts.any():
            self._parts.append(grouped(rows, counts))

    def record(self) -> DiagramCounts:
        """Merge the blocks, letting go of each as it is copied."""
        return DiagramCounts.from_checked(*stacked(self._parts), self._dim)


class MomentTable(Table):
    """Orders of cyclic-shift tests with their tallies of + and -; an order may come more than once."""

    def __init__(self, columns: tuple[str, ...], dim: int | None) -> None:
        super().__init__(columns)
        self._dim = dim
        self._tallies: dict[int, tuple[int, int]] = {}

    def take_block(self, block: bytes) -> bool:
        """Take nothing: such records are a few lines long and read line by line."""
        return False

    def read_line(self, values: list[str]) -> tuple[int, int, int]:
        """Return order, plus and minus of one line."""
        return fields.read_order(values[0]), fields.read_count(values[1]), fields.read_count(values[2])

    def take_lines(self, lines: list[tuple[int, int, int]]) -> None:
        """Add up the tallies of each order."""
        for order, plus, minus in lines:
            before = self._tallies.get(order, (0, 0))
            self._tallies[order] = (before[0] + plus, before[1] + minus)

    def record(self) -> MomentCounts:
        """Return the tallies as a record."""
        return MomentCounts(self._tallies, dim=self._dim)


class SiteTable(Table):
    """One 0/1 column per site, and perhaps a column `accepted`."""

    def __init__(self, columns: tuple[str, ...], site_dim: int, rejected: int) -> None:
        super().__init__(columns)
        self._site_dim = site_dim
        self._rejected = rejected
        self._parts: list[npt.NDArray[np.uint8]] = []

    def take_block(self, block: bytes) -> bool:
        """Take the zeros and ones at their fixed places."""
        bits = csv_blocks.bit_block(block, len(self.columns))
        if bits is not None:
            self._parts.append(bits)
        return bits is not None

    def read_line(self, values: list[str]) -> bytes:
        """Return the zeros and ones of one line."""
        for column, value in zip(self.columns, values, strict=True):
            if value not in ("0", "1"):
                raise FieldError(f"0 or 1 for {column}", value or "nothing")
        return bytes(map(int, values))

    def take_lines(self, lines: list[bytes]) -> None:
        """Take lines as rows of an array."""
        self._parts.append(np.frombuffer(b"".join(lines), dtype=np.uint8).reshape(-1, len(self.columns)))

    def record(self) -> TwoCopyShots:
        """Join the blocks in order."""
        bits = np.concatenate(self._parts).view(np.bool_)
        accepted = None
        if "accepted" in self.columns:
            at = self.columns.index("accepted")
            accepted = bits[:, at]
            bits = np.delete(bits, at, axis=1)
        return TwoCopyShots(bits, site_dim=self._site_dim, accepted=accepted, rejected=self._rejected)

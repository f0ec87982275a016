"""DiagramCounts: how often each Young diagram was seen, the form in which every record reaches the estimators."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from itertools import islice
from types import MappingProxyType
from typing import Any, SupportsIndex, TypeAlias

import numpy as np
import numpy.typing as npt

from entropest._checks import as_count, as_integer
from entropest._types import IntArray, RngLike
from entropest.diagrams import YoungDiagram
from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.law.thinning import thin
from entropest.records.arguments import as_diagram, digest_of, read_only, whole_numbers
from entropest.records.grouping import check_table_size, grouped, stacked, tabulated, trimmed
from entropest.shapes import LARGEST_ROW, as_shapes

__all__ = ["DiagramCounts"]

LINES_AT_ONCE = 2**14
BLOCKS_AT_ONCE = 2**16
Tallies: TypeAlias = (
    Mapping[YoungDiagram, SupportsIndex]
    | Mapping[tuple[int, ...], SupportsIndex]
    | Mapping[str, SupportsIndex]
    | Mapping[YoungDiagram | tuple[int, ...] | str, SupportsIndex]
)


class DiagramCounts:
    """Tallies of the Young diagrams that joint measurements showed, one diagram a block.

    Parameters
    ----------
    mapping : Mapping
        From a diagram (YoungDiagram, rows such as ``(3, 1)``, or text such as ``"3+1"``) to the number of
        blocks that showed it, a whole number from 0 to 2^62. Diagrams counted zero times are left out.
    dim : int, optional
        Dimension of one copy; None when it is unknown. No diagram may have more rows.

    Raises
    ------
    ArgumentValueError, ArgumentTypeError
        For a count that is fractional, negative, too large or not a number; for the empty diagram; for more
        rows than `dim`; for a record without a block; for 2^62 copies or more in total.
    MemoryBudgetError
        If the table of distinct shapes would need more than 1 GiB.

    Notes
    -----
    Records are immutable and hashable, and equal when their contents (tallies and dim) are. ``a + b`` merges
    two records; an unknown dimension gives way to a known one, two different known ones are refused.

    Examples
    --------
    >>> record = DiagramCounts({"4": 12, "3+1": 5, "2+2": 1}, dim=2)
    >>> record.blocks, record.copies, dict(record.block_sizes)
    (18, 72, {4: 18})
    >>> record.shapes
    array([[4, 0],
           [3, 1],
           [2, 2]])
    """

    __slots__ = ("_counts", "_digest", "_dim", "_padded", "_rows")
    _rows: IntArray
    _counts: IntArray
    _dim: int | None
    _padded: IntArray | None
    _digest: str | None

    def __init__(self, mapping: Tallies, *, dim: int | None = None) -> None:
        if not isinstance(mapping, Mapping):
            raise ArgumentTypeError(
                f"a record is made from a mapping of diagrams to counts, got {type(mapping).__name__}"
            )
        tallies: dict[tuple[int, ...], int] = {}
        for key, count in mapping.items():
            diagram = as_diagram(key)
            tallies[diagram.rows] = tallies.get(diagram.rows, 0) + as_count(count, f"count of {diagram}")
        self._fill(*tabulated(tallies), dim)

    def _fill(self, rows: IntArray, counts: IntArray, dim: int | None) -> None:
        """Set the contents from checked rows and counts in any order; check dim, emptiness and the total."""
        dim = None if dim is None else as_integer(dim, "dim", at_least=1, at_most=LARGEST_ROW)
        if not rows.any(axis=1).all():
            raise ArgumentValueError("a block must hold at least one copy, got the empty diagram")
        height = trimmed(rows).shape[1]
        if dim is not None and height > dim:
            raise ArgumentValueError(f"dim must be at least the number of rows {height}, got {dim}")
        rows, counts = grouped(rows, counts)
        object.__setattr__(self, "_rows", read_only(rows))
        object.__setattr__(self, "_counts", read_only(counts))
        object.__setattr__(self, "_dim", dim)
        object.__setattr__(self, "_padded", None)
        object.__setattr__(self, "_digest", None)

    @classmethod
    def from_checked(cls, rows: IntArray, counts: IntArray, dim: int | None) -> DiagramCounts:
        """Count rows as `from_rows` does, for callers inside the package that have checked them."""
        record = cls.__new__(cls)
        record._fill(rows, counts, dim)
        return record

    @classmethod
    def from_rows(
        cls, rows: npt.ArrayLike, *, counts: npt.ArrayLike | None = None, dim: int | None = None
    ) -> DiagramCounts:
        """Count an (m, d) array of rows: one block each, or `counts` blocks each.

        Examples
        --------
        >>> DiagramCounts.from_rows([[3, 1], [4, 0], [3, 1]])
        DiagramCounts({'4': 1, '3+1': 2})
        """
        shapes = as_shapes(rows, name="rows")
        if shapes.ndim != 2:
            raise ArgumentValueError(f"rows must be an (m, d) array, one shape a row, got shape {shapes.shape}")
        return cls.from_checked(shapes, _tallies(counts, len(shapes), "rows"), dim)

    @classmethod
    def from_total_spin(
        cls, two_j: npt.ArrayLike, *, copies: npt.ArrayLike, counts: npt.ArrayLike | None = None
    ) -> DiagramCounts:
        """Count total spins of qubits: spin j of n copies has rows n/2 + j and n/2 - j, and dim is 2.

        Parameters
        ----------
        two_j : array_like
            Twice the total spin, one value per block (or per entry of `counts`): 0 <= two_j <= copies, of the
            same parity as copies.
        copies : array_like
            Number of qubits in each block: one number for all, or one per entry of `two_j`.
        counts : array_like, optional
            How many blocks showed each value of `two_j`; 1 each when left out.

        Examples
        --------
        >>> DiagramCounts.from_total_spin([4, 2, 2, 0], copies=4)
        DiagramCounts({'4': 1, '3+1': 2, '2+2': 1}, dim=2)
        """
        spin = np.atleast_1d(whole_numbers(two_j, "two_j", LARGEST_ROW))
        size = whole_numbers(copies, "copies", LARGEST_ROW)
        if spin.ndim != 1 or size.shape not in ((), spin.shape):
            raise ArgumentValueError(
                f"copies must be one number or as many as two_j, got shapes {size.shape} and {spin.shape}"
            )
        size = np.broadcast_to(size, spin.shape)
        wrong = (spin > size) | ((size - spin) % 2 == 1)
        if wrong.any():
            at = int(np.argmax(wrong))
            raise ArgumentValueError(
                f"two_j must be at most copies and of the same parity, got {spin[at]} of {size[at]} copies"
            )
        tallies = _tallies(counts, len(spin), "two_j")
        return cls.from_checked(np.stack([size + spin, size - spin], axis=1) // 2, tallies, 2)

    @classmethod
    def from_swap(cls, *, symmetric: int, antisymmetric: int, dim: int | None = None) -> DiagramCounts:
        """Count swap tests on pairs of copies: diagram 2 for symmetric, 1+1 for antisymmetric outcomes.

        Examples
        --------
        >>> DiagramCounts.from_swap(symmetric=80, antisymmetric=20, dim=2)
        DiagramCounts({'2': 80, '1+1': 20}, dim=2)
        """
        tallies = {
            YoungDiagram((2,)): as_count(symmetric, "symmetric"),
            YoungDiagram((1, 1)): as_count(antisymmetric, "antisymmetric"),
        }
        return cls({diagram: count for diagram, count in tallies.items() if count}, dim=dim)

    @property
    def dim(self) -> int | None:
        """Dimension of one copy, None when it is unknown."""
        return self._dim

    @property
    def compact_shapes(self) -> IntArray:
        """The distinct shapes as a (K, R) array, R the largest number of rows seen, whatever `dim` is."""
        return self._rows

    @property
    def shapes(self) -> IntArray:
        """The distinct shapes in canonical order as a (K, dim) array, or (K, R) when dim is unknown.

        Canonical order: size increasing, then rows lexicographically decreasing. R is the largest number of
        rows seen. The array is read-only. A table beyond 1 GiB is refused (MemoryBudgetError): for a very
        large dimension use `compact_shapes`.
        """
        if self._padded is None:
            distinct, height = self._rows.shape
            width = height if self._dim is None else self._dim
            check_table_size(distinct, width, "compact_shapes holds the rows that are not empty")
            padded = np.zeros((distinct, width), dtype=np.int64)
            padded[:, :height] = self._rows
            object.__setattr__(self, "_padded", self._rows if width == height else read_only(padded))
        assert self._padded is not None
        return self._padded

    @property
    def counts(self) -> IntArray:
        """How many blocks showed each of `shapes`, (K,), read-only."""
        return self._counts

    @property
    def blocks(self) -> int:
        """Total number of blocks."""
        return int(self._counts.sum())

    @property
    def copies(self) -> int:
        """Total number of copies consumed: the boxes of all blocks."""
        return int((self._rows.sum(axis=1) * self._counts).sum())

    @property
    def block_sizes(self) -> Mapping[int, int]:
        """Number of blocks for each block size, sizes increasing; read-only."""
        sizes, first = np.unique(self._rows.sum(axis=1), return_index=True)
        blocks = np.add.reduceat(self._counts, first)
        return MappingProxyType(dict(zip(sizes.tolist(), blocks.tolist(), strict=True)))

    @property
    def digest(self) -> str:
        r"""SHA-256 of the canonical form, as "sha256:" and 64 hexadecimal digits.

        The canonical form is the CSV text that :func:`entropest.records.write_record` writes, in ASCII with
        every line ended by one newline: ``# dim: 4`` (left out when the dimension is unknown), then
        ``diagram,count``, then one line ``3+1,12`` for each shape in canonical order.

        Examples
        --------
        >>> record = DiagramCounts({"3+1": 12}, dim=4)
        >>> record.digest[:20]
        'sha256:86ac0f65d053a'
        >>> import hashlib
        >>> hashlib.sha256(b"# dim: 4\ndiagram,count\n3+1,12\n").hexdigest()[:13]
        '86ac0f65d053a'
        """
        if self._digest is None:
            object.__setattr__(self, "_digest", digest_of(self.canonical_csv()))
        assert self._digest is not None
        return self._digest

    def canonical_csv(self) -> Iterator[str]:
        """Iterate over pieces of the canonical CSV text, the form that `digest` is taken of.

        Examples
        --------
        >>> print("".join(DiagramCounts({"3+1": 12}, dim=4).canonical_csv()), end="")
        # dim: 4
        diagram,count
        3+1,12
        """
        yield ("" if self._dim is None else f"# dim: {self._dim}\n") + "diagram,count\n"
        lines = (f"{diagram},{count}\n" for diagram, count in self.text_items())
        while piece := "".join(islice(lines, LINES_AT_ONCE)):
            yield piece

    def text_items(self) -> Iterator[tuple[str, int]]:
        """Iterate over (text of the diagram, count) in canonical order, faster than `items`.

        Examples
        --------
        >>> list(DiagramCounts({"1+1": 3, "2": 9}).text_items())
        [('2', 9), ('1+1', 3)]
        """
        for start in range(0, len(self._counts), LINES_AT_ONCE):
            part = slice(start, start + LINES_AT_ONCE)
            for shape, count in zip(self._rows[part].tolist(), self._counts[part].tolist(), strict=True):
                yield "+".join([str(row) for row in shape if row]), count

    def items(self) -> Iterator[tuple[YoungDiagram, int]]:
        """Iterate over (diagram, count) in canonical order.

        Examples
        --------
        >>> [(str(diagram), count) for diagram, count in DiagramCounts({"1+1": 3, "2": 9}).items()]
        [('2', 9), ('1+1', 3)]
        """
        for shape, count in zip(self._rows, self._counts, strict=True):
            yield YoungDiagram(shape.tolist()), int(count)

    def of_size(self, copies: int) -> DiagramCounts:
        """Return the record of the blocks of `copies` copies alone.

        Examples
        --------
        >>> DiagramCounts({"2": 9, "3+1": 4}).of_size(2)
        DiagramCounts({'2': 9})
        """
        copies = as_integer(copies, "copies", at_least=1)
        chosen = self._rows.sum(axis=1) == copies
        if not chosen.any():
            sizes = list(self.block_sizes)
            shown = ", ".join(map(str, sizes[:6])) + (", ..." if len(sizes) > 6 else "")
            raise ArgumentValueError(f"copies must be one of the block sizes {shown} of the record, got {copies}")
        return self.from_checked(self._rows[chosen], self._counts[chosen], self._dim)

    def thinned(self, copies: int, *, rng: RngLike = None) -> DiagramCounts:
        """Return a record as if every block had held at most `copies` copies.

        From each larger block copies are dropped at random by :func:`entropest.law.thinning.thin`, so that its
        diagram follows the law of `copies` copies of the same state. Smaller blocks stay. Time grows with the
        number of larger blocks, memory does not.

        Examples
        --------
        >>> DiagramCounts({"4": 3, "2": 5}).thinned(3, rng=1)
        DiagramCounts({'2': 5, '3': 3})
        """
        copies = as_integer(copies, "copies", at_least=1)
        generator = np.random.default_rng(rng)
        large = self._rows.sum(axis=1) > copies
        rows, counts = self._rows[~large], self._counts[~large]
        ends = np.cumsum(self._counts[large])
        for start in range(0, int(ends[-1]) if len(ends) else 0, BLOCKS_AT_ONCE):
            blocks = np.arange(start, min(start + BLOCKS_AT_ONCE, ends[-1]))
            shapes = self._rows[large][np.searchsorted(ends, blocks, side="right")]
            thinner = grouped(thin(shapes, copies, rng=generator), np.ones(len(blocks), dtype=np.int64))
            rows, counts = grouped(*stacked([(rows, counts), thinner]))
        return self.from_checked(rows, counts, self._dim)

    def __add__(self, other: DiagramCounts) -> DiagramCounts:
        if not isinstance(other, DiagramCounts):
            return NotImplemented
        if self._dim is not None and other._dim is not None and self._dim != other._dim:
            raise ArgumentValueError(f"records to be merged must have the same dim, got {self._dim} and {other._dim}")
        rows, counts = stacked([(self._rows, self._counts), (other._rows, other._counts)])
        return self.from_checked(rows, counts, other._dim if self._dim is None else self._dim)

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, DiagramCounts):
            return NotImplemented
        return (
            self._dim == other._dim
            and np.array_equal(self._rows, other._rows)
            and np.array_equal(self._counts, other._counts)
        )

    def __hash__(self) -> int:
        return hash((self._dim, self._rows.tobytes(), self._counts.tobytes()))

    def __setattr__(self, name: str, value: object) -> None:
        raise AttributeError(f"DiagramCounts is immutable, {name!r} cannot be set")

    def __delattr__(self, name: str) -> None:
        raise AttributeError(f"DiagramCounts is immutable, {name!r} cannot be deleted")

    def __reduce__(self) -> tuple[Any, ...]:
        return (_restored, (self._rows, self._counts, self._dim))

    def __repr__(self) -> str:
        shown = [f"'{_short(diagram)}': {count}" for diagram, count in islice(self.items(), 3)]
        if len(self._counts) > 3:
            shown.append(f"... {len(self._counts)} shapes")
        dim = "" if self._dim is None else f", dim={self._dim}"
        return f"DiagramCounts({{{', '.join(shown)}}}{dim})"

    def __str__(self) -> str:
        dim = "unknown" if self._dim is None else str(self._dim)
        sizes = self.block_sizes
        lines = [f"{self.blocks} blocks, {self.copies} copies in total, dimension {dim}"]
        for size, blocks in islice(sizes.items(), 5):
            part = self.of_size(size)
            often = np.argsort(-part._counts, kind="stable")[:4]
            shown = [f"{_short(YoungDiagram(part._rows[i].tolist()))} x {part._counts[i]}" for i in often]
            more = f", ... ({len(part._counts)} shapes)" if len(part._counts) > 4 else ""
            lines.append(f"  blocks of {size} copies: {blocks} ({', '.join(shown)}{more})")
        if len(sizes) > 5:
            lines.append(f"  ... {len(sizes)} block sizes, the largest {max(sizes)}")
        return "\n".join(lines)


def _restored(rows: IntArray, counts: IntArray, dim: int | None) -> DiagramCounts:
    """Rebuild a pickled record, checks included."""
    return DiagramCounts.from_checked(as_shapes(rows), whole_numbers(counts, "counts"), dim)


def _tallies(counts: npt.ArrayLike | None, entries: int, name: str) -> IntArray:
    """Return one tally for each entry of the argument `name`, 1 each when none are given."""
    if counts is None:
        return np.ones(entries, dtype=np.int64)
    tallies = whole_numbers(counts, "counts")
    if tallies.shape != (entries,):
        raise ArgumentValueError(f"counts must be as many as {name}, {entries}, got shape {tallies.shape}")
    return tallies


def _short(diagram: YoungDiagram) -> str:
    """Return the text of a diagram, cut when it is long."""
    text = str(diagram)
    return text if len(text) <= 40 else text[:37] + "..."

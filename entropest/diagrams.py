"""Young diagrams: rows, hooks, contents, neighbours, enumeration, and characters of one cycle.

All numbers here are exact integers and fractions. For whole arrays of diagrams see :mod:`entropest.shapes`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from fractions import Fraction
from functools import total_ordering

from entropest._checks import as_integer
from entropest.errors import ArgumentValueError

__all__ = ["YoungDiagram", "cycle_character", "young_diagrams"]


@total_ordering
class YoungDiagram:
    """A Young diagram: rows of boxes, the longest first.

    Parameters
    ----------
    rows : iterable of int
        Row lengths, non-negative and non-increasing; zeros at the end are dropped.

    Attributes
    ----------
    rows : tuple of int
        The lengths of the non-empty rows.

    Raises
    ------
    ArgumentValueError
        If a row is negative or longer than the row before it.
    ArgumentTypeError
        If a row is not an integer.

    Notes
    -----
    Diagrams are ordered by size, then by rows lexicographically. For diagrams of one size this total order
    refines dominance: if ``a.dominates(b)`` then ``a >= b``.

    Examples
    --------
    >>> diagram = YoungDiagram((3, 1))
    >>> str(diagram), diagram.size, diagram.standard_tableaux
    ('3+1', 4, 3)
    >>> YoungDiagram.parse("3+1").dominates(YoungDiagram((2, 2)))
    True
    """

    __slots__ = ("rows",)
    rows: tuple[int, ...]

    def __init__(self, rows: Iterable[int]) -> None:
        checked = [as_integer(row, f"row {i}", at_least=0) for i, row in enumerate(rows, start=1)]
        for i in range(1, len(checked)):
            if checked[i] > checked[i - 1]:
                raise ArgumentValueError(
                    f"rows of a Young diagram must not increase, got {'+'.join(map(str, checked))}"
                )
        while checked and checked[-1] == 0:
            checked.pop()
        object.__setattr__(self, "rows", tuple(checked))

    @classmethod
    def parse(cls, text: str) -> YoungDiagram:
        """Read rows joined by "+", such as "3+1"; "0" is the empty diagram.

        Examples
        --------
        >>> YoungDiagram.parse("2+2+1")
        YoungDiagram((2, 2, 1))
        """
        parts = [part.strip() for part in text.split("+")]
        if not all(part.isascii() and part.isdigit() for part in parts):
            raise ArgumentValueError(f'a Young diagram is written as rows joined by "+", got {text!r}')
        if any(len(part) > 18 for part in parts):
            raise ArgumentValueError(f"a row of a Young diagram may have at most 18 digits, got {text!r}")
        return cls(int(part) for part in parts)

    def __setattr__(self, name: str, value: object) -> None:
        raise AttributeError(f"YoungDiagram is immutable, {name!r} cannot be set")

    def __delattr__(self, name: str) -> None:
        raise AttributeError(f"YoungDiagram is immutable, {name!r} cannot be deleted")

    def __reduce__(self) -> tuple[type[YoungDiagram], tuple[tuple[int, ...]]]:
        return (YoungDiagram, (self.rows,))

    def __repr__(self) -> str:
        return f"YoungDiagram({self.rows})"

    def __str__(self) -> str:
        return "+".join(map(str, self.rows)) or "0"

    def __hash__(self) -> int:
        return hash(self.rows)

    def __eq__(self, other: object) -> bool:
        return self.rows == other.rows if isinstance(other, YoungDiagram) else NotImplemented

    def __lt__(self, other: object) -> bool:
        if not isinstance(other, YoungDiagram):
            return NotImplemented
        return (self.size, self.rows) < (other.size, other.rows)

    @property
    def size(self) -> int:
        """Number of boxes."""
        return sum(self.rows)

    @property
    def conjugate(self) -> YoungDiagram:
        """The diagram reflected in its diagonal: rows become columns.

        Examples
        --------
        >>> YoungDiagram((3, 1)).conjugate
        YoungDiagram((2, 1, 1))
        """
        rows = self.rows
        columns: list[int] = []
        for length in range(len(rows), 0, -1):
            shorter = rows[length] if length < len(rows) else 0
            columns.extend([length] * (rows[length - 1] - shorter))
        return YoungDiagram(columns)

    def contents(self) -> tuple[tuple[int, ...], ...]:
        """Return column minus row of every box, row by row.

        Examples
        --------
        >>> YoungDiagram((3, 1)).contents()
        ((0, 1, 2), (-1,))
        """
        return tuple(tuple(range(-i, row - i)) for i, row in enumerate(self.rows))

    def hook_lengths(self) -> tuple[tuple[int, ...], ...]:
        """Return, for every box, one more than the boxes right of it and below it.

        Examples
        --------
        >>> YoungDiagram((3, 1)).hook_lengths()
        ((4, 2, 1), (1,))
        """
        columns = self.conjugate.rows
        return tuple(tuple(row - j + columns[j] - i - 1 for j in range(row)) for i, row in enumerate(self.rows))

    @property
    def standard_tableaux(self) -> int:
        """Number of standard tableaux, the dimension of the irreducible representation of S_n.

        With l_i = row_i + (number of rows) - i it is n! prod_{i<j} (l_i - l_j) / prod_i l_i!, which equals n!
        over the product of the hook lengths (Frame, Robinson, Thrall 1954, doi:10.4153/CJM-1954-030-1).
        """
        shifted = self._shifted()
        gaps = math.prod(a - b for i, a in enumerate(shifted) for b in shifted[i + 1 :])
        return math.factorial(self.size) * gaps // math.prod(math.factorial(part) for part in shifted)

    def dominates(self, other: YoungDiagram) -> bool:
        """Say whether every sum of first rows is at least that of `other`; sizes must agree.

        Examples
        --------
        >>> YoungDiagram((3, 3)).dominates(YoungDiagram((4, 1, 1)))
        False
        """
        if self.size != other.size:
            raise ArgumentValueError(f"dominance compares diagrams of one size, got sizes {self.size} and {other.size}")
        difference = 0
        for i, row in enumerate(self.rows):
            difference += row - (other.rows[i] if i < len(other.rows) else 0)
            if difference < 0:
                return False
        return True

    def up_neighbours(self, max_rows: int | None = None) -> tuple[YoungDiagram, ...]:
        """Return the diagrams with one box more, the box added lowest coming last.

        Examples
        --------
        >>> [str(up) for up in YoungDiagram((2, 1)).up_neighbours()]
        ['3+1', '2+2', '2+1+1']
        """
        rows = (*self.rows, 0)
        limit = len(rows) if max_rows is None else min(len(rows), as_integer(max_rows, "max_rows", at_least=0))
        return tuple(
            YoungDiagram((*rows[:i], rows[i] + 1, *rows[i + 1 :]))
            for i in range(limit)
            if i == 0 or rows[i - 1] > rows[i]
        )

    def down_neighbours(self) -> tuple[YoungDiagram, ...]:
        """Return the diagrams with one box fewer, the box removed lowest coming last.

        Examples
        --------
        >>> [str(down) for down in YoungDiagram((2, 1)).down_neighbours()]
        ['1+1', '2']
        """
        rows = (*self.rows, 0)
        return tuple(
            YoungDiagram((*rows[:i], rows[i] - 1, *rows[i + 1 :]))
            for i in range(len(self.rows))
            if rows[i] > rows[i + 1]
        )

    def _shifted(self) -> tuple[int, ...]:
        """Strictly decreasing l_i = row_i + (number of rows) - i."""
        height = len(self.rows)
        return tuple(row + height - i for i, row in enumerate(self.rows, start=1))


def young_diagrams(size: int, max_rows: int | None = None) -> Iterator[YoungDiagram]:
    """Iterate over the diagrams with `size` boxes and at most `max_rows` rows, lexicographically decreasing.

    Examples
    --------
    >>> [str(diagram) for diagram in young_diagrams(4, max_rows=2)]
    ['4', '3+1', '2+2']
    """
    size = as_integer(size, "size", at_least=0)
    height = size if max_rows is None else as_integer(max_rows, "max_rows", at_least=0)

    def rows_below(left: int, longest: int, height: int) -> Iterator[tuple[int, ...]]:
        if left == 0:
            yield ()
            return
        if height == 0:
            return
        for row in range(min(left, longest), -(-left // height) - 1, -1):
            for rest in rows_below(left - row, row, height - 1):
                yield (row, *rest)

    return (YoungDiagram(rows) for rows in rows_below(size, size, height))


def cycle_character(diagram: YoungDiagram, length: int) -> Fraction:
    """Return the normalised character chi(one cycle of `length`) / chi(identity) of a diagram.

    It is the value that one joint measurement with outcome `diagram` contributes to the unbiased estimate of
    Tr rho^length. With l_i = row_i + N - i for N rows and n boxes, Frobenius' formula reads::

        (1 / n^{falling k}) sum_i l_i^{falling k} prod_{m != i} (l_i - l_m - k) / (l_i - l_m)

    Parameters
    ----------
    diagram : YoungDiagram
        The outcome, with n boxes.
    length : int
        Length k of the cycle, from 1 to n.

    Raises
    ------
    ArgumentValueError
        If `length` is below 1 or above n.

    References
    ----------
    Frobenius (1900); Macdonald, Symmetric Functions and Hall Polynomials (1995), I.7 example 7.

    Examples
    --------
    >>> cycle_character(YoungDiagram((3, 1)), 2)
    Fraction(1, 3)
    """
    length = as_integer(length, "length", at_least=1)
    if length > diagram.size:
        raise ArgumentValueError(
            f"length must be at most the number of boxes {diagram.size} of {diagram}, got {length}"
        )
    shifted = diagram._shifted()
    total = Fraction(0)
    for i, part in enumerate(shifted):
        others = [other for m, other in enumerate(shifted) if m != i]
        total += Fraction(
            math.perm(part, length) * math.prod(part - other - length for other in others),
            math.prod(part - other for other in others),
        )
    return total / math.perm(diagram.size, length)

"""MomentCounts: tallies of cyclic-shift tests, whose mean of +1 and -1 is a power sum of the state."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from types import MappingProxyType
from typing import Any, SupportsIndex

from entropest._checks import LARGEST_COUNT, as_count, as_integer
from entropest.errors import ArgumentTypeError, ArgumentValueError, NotCoveredError
from entropest.records.arguments import digest_of
from entropest.records.counts import DiagramCounts
from entropest.shapes import LARGEST_ROW

__all__ = ["MomentCounts"]

LARGEST_SHIFT = 64


class MomentCounts:
    """Tallies of the outcomes + and - of cyclic-shift interference tests, order by order.

    A test of order k takes k copies and gives +1 or -1 with mean Tr rho^k.

    Parameters
    ----------
    mapping : Mapping
        From the order, a whole number from 2 to 64, to the pair (number of +, number of -). Orders without a
        test are left out.
    dim : int, optional
        Dimension of one copy; None when it is unknown.

    Raises
    ------
    ArgumentValueError, ArgumentTypeError
        For an order or a tally that is no whole number in its range, a value that is no pair, or a record without
        a test.

    Notes
    -----
    Records are immutable and hashable, and equal when their contents (tallies and dim) are. ``a + b`` merges two of
    them; an unknown dimension gives way to a known one, two different known ones are refused. A test of order 2 is
    a swap test: ``record.swaps()`` gives these tallies as a DiagramCounts, to be merged with diagrams of the same
    state; for the other orders see :func:`entropest.estimation.moment_tallies.estimate_together`.

    References
    ----------
    Ekert, Alves, Oi, Horodecki, Horodecki, Kwek, Phys. Rev. Lett. 88 (2002) 217901,
    doi:10.1103/PhysRevLett.88.217901.

    Examples
    --------
    >>> record = MomentCounts({2: (700, 300), 3: (600, 400)}, dim=4)
    >>> record.orders, record.tests, record.copies, record.means
    ((2, 3), 2000, 5000, {2: 0.4, 3: 0.2})
    """

    __slots__ = ("_digest", "_dim", "_tallies")
    _tallies: dict[int, tuple[int, int]]
    _dim: int | None
    _digest: str | None

    def __init__(self, mapping: Mapping[int, tuple[SupportsIndex, SupportsIndex]], *, dim: int | None = None) -> None:
        if not isinstance(mapping, Mapping):
            raise ArgumentTypeError(f"a record is made from a mapping of orders to pairs, got {type(mapping).__name__}")
        tallies = {}
        for key, pair in mapping.items():
            order = as_integer(key, "order", at_least=2, at_most=LARGEST_SHIFT)
            if not isinstance(pair, tuple | list) or len(pair) != 2:
                raise ArgumentTypeError(f"the tallies of order {order} must be a pair (plus, minus), got {pair!r}")
            plus, minus = (
                as_count(count, f"{sign} of order {order}") for count, sign in zip(pair, ("plus", "minus"), strict=True)
            )
            if plus + minus:
                tallies[order] = (plus, minus)
        if not tallies:
            raise ArgumentValueError("a record must hold at least one test, got none")
        total = sum(order * (plus + minus) for order, (plus, minus) in tallies.items())
        if total >= LARGEST_COUNT:
            raise ArgumentValueError(f"a record must hold fewer than 2^62 copies, got {total}")
        object.__setattr__(self, "_tallies", dict(sorted(tallies.items())))
        object.__setattr__(
            self, "_dim", None if dim is None else as_integer(dim, "dim", at_least=1, at_most=LARGEST_ROW)
        )
        object.__setattr__(self, "_digest", None)

    @property
    def dim(self) -> int | None:
        """Dimension of one copy, None when it is unknown."""
        return self._dim

    @property
    def orders(self) -> tuple[int, ...]:
        """Orders that were tested, increasing."""
        return tuple(self._tallies)

    @property
    def tallies(self) -> Mapping[int, tuple[int, int]]:
        """The pairs (plus, minus) of each order, orders increasing; read-only."""
        return MappingProxyType(self._tallies)

    @property
    def tests(self) -> int:
        """Total number of tests."""
        return sum(self.block_sizes.values())

    @property
    def blocks(self) -> int:
        """The number of tests under the name that other records have for it: each test is one block of copies."""
        return self.tests

    @property
    def block_sizes(self) -> Mapping[int, int]:
        """Number of tests of each order, orders increasing; read-only."""
        return MappingProxyType({order: plus + minus for order, (plus, minus) in self._tallies.items()})

    @property
    def copies(self) -> int:
        """Total number of copies consumed."""
        return sum(order * (plus + minus) for order, (plus, minus) in self._tallies.items())

    @property
    def means(self) -> dict[int, float]:
        """The mean outcome of each order, the unbiased estimate of Tr rho^order."""
        return {order: (plus - minus) / (plus + minus) for order, (plus, minus) in self._tallies.items()}

    def swaps(self) -> DiagramCounts:
        """Return the tests of order 2 as swap outcomes: diagram 2 for +, diagram 1+1 for -.

        Raises
        ------
        NotCoveredError
            If no test of order 2 was made.

        Examples
        --------
        >>> MomentCounts({2: (80, 20), 3: (7, 3)}, dim=2).swaps() + DiagramCounts({"2+1": 5})
        DiagramCounts({'2': 80, '1+1': 20, '2+1': 5}, dim=2)
        """
        if 2 not in self._tallies:
            raise NotCoveredError(f"only tests of order 2 are swap tests, got orders {self._shown_orders()}")
        plus, minus = self._tallies[2]
        return DiagramCounts.from_swap(symmetric=plus, antisymmetric=minus, dim=self._dim)

    @property
    def digest(self) -> str:
        r"""SHA-256 of the canonical form, as "sha256:" and 64 hexadecimal digits.

        The canonical form is the CSV text that :func:`entropest.records.write_record` writes, in ASCII with every
        line ended by one newline: ``# dim: 4`` (left out when the dimension is unknown), then
        ``order,plus,minus``, then one line ``2,700,300`` for each order, increasing.
        """
        if self._digest is None:
            object.__setattr__(self, "_digest", digest_of(self.canonical_csv()))
        assert self._digest is not None
        return self._digest

    def canonical_csv(self) -> Iterator[str]:
        """Iterate over pieces of the canonical CSV text, the form that `digest` is taken of.

        Examples
        --------
        >>> print("".join(MomentCounts({2: (7, 3)}, dim=4).canonical_csv()), end="")
        # dim: 4
        order,plus,minus
        2,7,3
        """
        yield ("" if self._dim is None else f"# dim: {self._dim}\n") + "order,plus,minus\n"
        for order, (plus, minus) in self._tallies.items():
            yield f"{order},{plus},{minus}\n"

    def __add__(self, other: MomentCounts) -> MomentCounts:
        if not isinstance(other, MomentCounts):
            return NotImplemented
        if self._dim is not None and other._dim is not None and self._dim != other._dim:
            raise ArgumentValueError(f"records to be merged must have the same dim, got {self._dim} and {other._dim}")
        tallies = dict(self._tallies)
        for order, (plus, minus) in other._tallies.items():
            before = tallies.get(order, (0, 0))
            tallies[order] = (before[0] + plus, before[1] + minus)
        return MomentCounts(tallies, dim=other._dim if self._dim is None else self._dim)

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, MomentCounts):
            return NotImplemented
        return self._dim == other._dim and self._tallies == other._tallies

    def __hash__(self) -> int:
        return hash((self._dim, tuple(self._tallies.items())))

    def __setattr__(self, name: str, value: object) -> None:
        raise AttributeError(f"MomentCounts is immutable, {name!r} cannot be set")

    def __delattr__(self, name: str) -> None:
        raise AttributeError(f"MomentCounts is immutable, {name!r} cannot be deleted")

    def __reduce__(self) -> tuple[Any, ...]:
        return (_restored, (self._tallies, self._dim))

    def __repr__(self) -> str:
        dim = "" if self._dim is None else f", dim={self._dim}"
        return f"MomentCounts({self._tallies}{dim})"

    def __str__(self) -> str:
        dim = "unknown" if self._dim is None else str(self._dim)
        lines = [f"{self.tests} cyclic-shift tests, {self.copies} copies in total, dimension {dim}"]
        lines += [
            f"  order {order}: {plus} +, {minus} - (mean {self.means[order]:.4g})"
            for order, (plus, minus) in self._tallies.items()
        ]
        return "\n".join(lines)

    def _shown_orders(self) -> str:
        return ", ".join(map(str, self._tallies))


def _restored(tallies: dict[int, tuple[int, int]], dim: int | None) -> MomentCounts:
    """Rebuild a pickled record, checks included."""
    return MomentCounts(tallies, dim=dim)

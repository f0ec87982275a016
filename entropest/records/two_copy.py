"""TwoCopyShots: which sites of two copies were found antisymmetric, shot by shot; one record serves every region."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from functools import reduce
from typing import Any

import numpy as np
import numpy.typing as npt

from entropest._checks import as_count, as_integer
from entropest._types import BoolArray
from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.records.arguments import digest_of, zeros_and_ones
from entropest.records.counts import DiagramCounts
from entropest.shapes import LARGEST_ROW

__all__ = ["JointSwapCounts", "TwoCopyShots"]

SHOTS_AT_ONCE = 2**15


@dataclass(frozen=True, slots=True, kw_only=True)
class JointSwapCounts:
    """Swap outcomes of two regions on the same shots.

    The swap of a region is +1 (symmetric) for an even number of singlets in it and -1 for an odd number.

    Attributes
    ----------
    first, second : tuple of int
        Sites of the two regions.
    both_even, only_first_odd, only_second_odd, both_odd : int
        Numbers of shots; they add up to `shots`.

    Examples
    --------
    >>> joint = TwoCopyShots([[0, 0], [1, 0], [1, 1]]).joint([0], [0, 1])
    >>> joint.both_even, joint.only_first_odd, joint.only_second_odd, joint.both_odd
    (1, 1, 0, 1)
    """

    first: tuple[int, ...]
    second: tuple[int, ...]
    both_even: int
    only_first_odd: int
    only_second_odd: int
    both_odd: int

    @property
    def shots(self) -> int:
        """Number of accepted shots."""
        return self.both_even + self.only_first_odd + self.only_second_odd + self.both_odd


class TwoCopyShots:
    """Outcomes of site-by-site swap measurements on two copies of a state of several sites.

    Every shot measures, for each site, whether its two copies are in the antisymmetric subspace (for qubits,
    the singlet). The swap of a region A is the product of the swaps of its sites, so that
    Tr rho_A^2 is the mean of (-1)^(number of singlets in A): one record serves every region.

    Parameters
    ----------
    singlets : (shots, sites) array_like of 0 and 1
        1 where the two copies of the site were found antisymmetric.
    site_dim : int
        Dimension of one site, at least 2.
    accepted : (shots,) array_like of 0 and 1, optional
        Shots marked 0 are left out of all counts; how many is kept in `rejected`.
    rejected : int
        Number of shots left out before, added to those that `accepted` leaves out.

    Raises
    ------
    ArgumentValueError, ArgumentTypeError
        If an entry is not 0 or 1, shapes disagree, there is no site, or no shot is accepted.

    Notes
    -----
    Records are immutable, hashable and equal when their contents are, the order of the shots included.
    ``a + b`` puts the shots of b after those of a. Each site is stored as one bit a shot.

    References
    ----------
    Garcia-Escartin, Chamorro-Posada, Phys. Rev. A 87 (2013) 052330, doi:10.1103/PhysRevA.87.052330;
    Daley, Pichler, Schachenmayer, Zoller, Phys. Rev. Lett. 109 (2012) 020505,
    doi:10.1103/PhysRevLett.109.020505.

    Examples
    --------
    >>> record = TwoCopyShots([[0, 0], [1, 1], [0, 0], [1, 0]], accepted=[1, 1, 1, 0])
    >>> record.shots, record.rejected
    (3, 1)
    >>> record.region([0, 1])
    DiagramCounts({'2': 3}, dim=4)
    """

    __slots__ = ("_columns", "_digest", "_rejected", "_shots", "_site_dim")
    _columns: npt.NDArray[np.uint64]
    _shots: int
    _rejected: int
    _site_dim: int
    _digest: str | None

    def __init__(
        self,
        singlets: npt.ArrayLike,
        *,
        site_dim: int = 2,
        accepted: npt.ArrayLike | None = None,
        rejected: int = 0,
    ) -> None:
        seen = zeros_and_ones(singlets, "singlets")
        if seen.ndim != 2:
            raise ArgumentValueError(f"singlets must be a (shots, sites) array, got shape {seen.shape}")
        if not seen.shape[1]:
            raise ArgumentValueError("singlets must have at least one site")
        rejected = as_count(rejected, "rejected")
        if accepted is not None:
            keep = zeros_and_ones(accepted, "accepted")
            if keep.shape != seen.shape[:1]:
                raise ArgumentValueError(
                    f"accepted must hold one value for each of the {len(seen)} shots, got shape {keep.shape}"
                )
            rejected = as_count(rejected + int((~keep).sum()), "rejected")
            seen = seen[keep]
        if not len(seen):
            raise ArgumentValueError(f"a record must hold at least one accepted shot ({rejected} were rejected)")
        packed = np.packbits(seen.T, axis=1)
        columns = np.zeros((seen.shape[1], -(-len(seen) // 64)), dtype=np.uint64)
        columns.view(np.uint8)[:, : packed.shape[1]] = packed
        columns.flags.writeable = False
        object.__setattr__(self, "_columns", columns)
        object.__setattr__(self, "_shots", len(seen))
        object.__setattr__(self, "_rejected", rejected)
        object.__setattr__(self, "_site_dim", as_integer(site_dim, "site_dim", at_least=2, at_most=LARGEST_ROW))
        object.__setattr__(self, "_digest", None)

    @property
    def shots(self) -> int:
        """Number of accepted shots."""
        return self._shots

    @property
    def rejected(self) -> int:
        """Number of shots left out of all counts."""
        return self._rejected

    @property
    def sites(self) -> int:
        """Number of sites."""
        return len(self._columns)

    @property
    def site_dim(self) -> int:
        """Dimension of one site."""
        return self._site_dim

    @property
    def singlets(self) -> BoolArray:
        """The accepted shots as a new (shots, sites) boolean array."""
        return np.unpackbits(self._columns.view(np.uint8), axis=1, count=self._shots).T.astype(bool)

    @property
    def digest(self) -> str:
        """SHA-256 of the canonical form, as "sha256:" and 64 hexadecimal digits.

        The canonical form is the CSV text that :func:`entropest.records.write_record` writes, in ASCII with
        every line ended by one newline: ``# site_dim: 2``, ``# rejected: 3`` (left out when it is 0), then
        ``site0,site1,...``, then one line such as ``0,1,...`` for each accepted shot in the order measured.
        """
        if self._digest is None:
            object.__setattr__(self, "_digest", digest_of(self.canonical_csv()))
        assert self._digest is not None
        return self._digest

    def canonical_csv(self) -> Iterator[str]:
        """Iterate over pieces of the canonical CSV text, the form that `digest` is taken of.

        Examples
        --------
        >>> print("".join(TwoCopyShots([[0, 1]]).canonical_csv()), end="")
        # site_dim: 2
        site0,site1
        0,1
        """
        rejected = f"# rejected: {self._rejected}\n" if self._rejected else ""
        header = ",".join(f"site{site}" for site in range(self.sites))
        yield f"# site_dim: {self._site_dim}\n{rejected}{header}\n"
        packed = self._columns.view(np.uint8)
        for start in range(0, self._shots, SHOTS_AT_ONCE):
            count = min(SHOTS_AT_ONCE, self._shots - start)
            bits = np.unpackbits(packed[:, start // 8 : (start + count + 7) // 8], axis=1, count=count)
            text = np.full((count, 2 * self.sites), ord(","), dtype=np.uint8)
            text[:, ::2] = bits.T + ord("0")
            text[:, -1] = ord("\n")
            yield text.tobytes().decode("ascii")

    def region(self, sites: Iterable[int]) -> DiagramCounts:
        """Count the swap outcomes of a region: diagram 2 for an even number of singlets, 1+1 for an odd one.

        Parameters
        ----------
        sites : iterable of int
            Sites of the region, counted from 0, each at most once, at least one.

        Returns
        -------
        DiagramCounts of blocks of two copies; dim is site_dim^(number of sites), or None beyond 2^53.

        Examples
        --------
        >>> TwoCopyShots([[0, 1], [1, 1]]).region([1])
        DiagramCounts({'1+1': 2}, dim=2)
        """
        return self._counts_of(self._checked(sites, "region"))

    def regions(self, regions: Iterable[Iterable[int]]) -> dict[tuple[int, ...], DiagramCounts]:
        """Count the swap outcomes of many regions; the keys are their sites as given.

        Examples
        --------
        >>> TwoCopyShots([[0, 1], [1, 1]]).regions([[0], [0, 1]])[0, 1]
        DiagramCounts({'2': 1, '1+1': 1}, dim=4)
        """
        checked = [self._checked(sites, "region") for sites in regions]
        return {sites: self._counts_of(sites) for sites in checked}

    def joint(self, first: Iterable[int], second: Iterable[int]) -> JointSwapCounts:
        """Count the swap outcomes of two regions, which may overlap, on the same shots."""
        a, b = self._checked(first, "first"), self._checked(second, "second")
        odd_a, odd_b = self._odd(a), self._odd(b)
        both = _ones(odd_a & odd_b)
        only_a, only_b = _ones(odd_a) - both, _ones(odd_b) - both
        return JointSwapCounts(
            first=a,
            second=b,
            both_even=self._shots - only_a - only_b - both,
            only_first_odd=only_a,
            only_second_odd=only_b,
            both_odd=both,
        )

    def _checked(self, sites: Iterable[int], name: str) -> tuple[int, ...]:
        """Return the sites of a region as a tuple of distinct numbers in range."""
        if isinstance(sites, str) or not isinstance(sites, Iterable):
            raise ArgumentTypeError(f"{name} must be a list of sites, got {sites!r}")
        chosen = tuple(as_integer(site, f"site of {name}", at_least=0, at_most=self.sites - 1) for site in sites)
        if not chosen:
            raise ArgumentValueError(f"{name} must hold at least one site")
        if len(set(chosen)) < len(chosen):
            twice = next(site for i, site in enumerate(chosen) if site in chosen[:i])
            raise ArgumentValueError(f"{name} must hold each site at most once, got site {twice} twice")
        return chosen

    def _odd(self, sites: tuple[int, ...]) -> npt.NDArray[np.uint64]:
        """Return one bit a shot: whether the number of singlets in the region is odd."""
        return reduce(np.bitwise_xor, (self._columns[site] for site in sites))

    def _counts_of(self, sites: tuple[int, ...]) -> DiagramCounts:
        odd = _ones(self._odd(sites))
        dim = self._site_dim ** len(sites)
        return DiagramCounts.from_swap(
            symmetric=self._shots - odd, antisymmetric=odd, dim=dim if dim <= LARGEST_ROW else None
        )

    def __add__(self, other: TwoCopyShots) -> TwoCopyShots:
        if not isinstance(other, TwoCopyShots):
            return NotImplemented
        if (self.sites, self._site_dim) != (other.sites, other._site_dim):
            raise ArgumentValueError(
                f"records to be merged must have the same sites and site_dim, got {self.sites} sites of "
                f"dimension {self._site_dim} and {other.sites} of dimension {other._site_dim}"
            )
        return TwoCopyShots(
            np.concatenate([self.singlets, other.singlets]),
            site_dim=self._site_dim,
            rejected=self._rejected + other._rejected,
        )

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, TwoCopyShots):
            return NotImplemented
        return (
            (self._shots, self._rejected, self._site_dim) == (other._shots, other._rejected, other._site_dim)
        ) and np.array_equal(self._columns, other._columns)

    def __hash__(self) -> int:
        return hash((self._shots, self._rejected, self._site_dim, self._columns.tobytes()))

    def __setattr__(self, name: str, value: object) -> None:
        raise AttributeError(f"TwoCopyShots is immutable, {name!r} cannot be set")

    def __delattr__(self, name: str) -> None:
        raise AttributeError(f"TwoCopyShots is immutable, {name!r} cannot be deleted")

    def __reduce__(self) -> tuple[Any, ...]:
        return (_restored, (self.singlets, self._site_dim, self._rejected))

    def __repr__(self) -> str:
        return (
            f"<TwoCopyShots: {self._shots} shots ({self._rejected} rejected) of {self.sites} sites "
            f"of dimension {self._site_dim}>"
        )

    def __str__(self) -> str:
        shown = [f"{_ones(column) / self._shots:.3g}" for column in self._columns[:12]]
        more = ", ..." if self.sites > 12 else ""
        return (
            f"{self._shots} accepted shots ({self._rejected} rejected) of {self.sites} sites of dimension "
            f"{self._site_dim}\n  singlets per shot, site by site: {', '.join(shown)}{more}"
        )


def _restored(singlets: BoolArray, site_dim: int, rejected: int) -> TwoCopyShots:
    """Rebuild a pickled record, checks included."""
    return TwoCopyShots(singlets, site_dim=site_dim, rejected=rejected)


def _ones(bits: npt.NDArray[np.uint64]) -> int:
    """Count the ones among packed bits; the bits beyond the last shot are zero."""
    return int(np.bitwise_count(bits).sum(dtype=np.int64))

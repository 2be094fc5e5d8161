"""Where the sites lie: a ring or an open chain of unit cells, or a lattice given by its bonds.

Floor: lattice (standard library only). Site 0 is the most significant factor of the tensor product: the index of a
basis state is row-major over the sites, as in `np.kron` and `reshape(dims)`. The sites of cell 0 come first, in the
order in which the cell names them, then those of cell 1; inside a site the slots follow the order of the species. Must
not know formulas, words or matrices.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping, Sequence
from functools import cached_property
from math import prod
from typing import Any

from maxent.lattice.kinds import Kind, Spin, check_names
from maxent.lattice.local import LocalOperators

Bond = tuple[int, int]


class Sites(ABC):
    """Arrangement of sites: made as `Ring`, `Chain` or `Lattice`.

    Attributes
    ----------
    length : int
        Number of positions, the `L` of formulas: unit cells on a ring or chain, sites on a lattice.
    cell : tuple of str
        Names of the sites of a unit cell; one empty name where a subscript needs none.
    kinds : tuple of Kind
        What lives on each site of a cell.
    bonds : dict from str to tuple of (site, site)
        The named bonds.
    """

    is_ring = False
    has_order = True

    def __init__(
        self,
        length: int,
        kind: Kind | Mapping[str, Kind],
        cell: Sequence[str],
        owner: str,
    ) -> None:
        if isinstance(length, bool) or not isinstance(length, int):
            raise TypeError(f"{owner}: the number of sites must be an integer, not {length!r}")
        if length < 1:
            raise ValueError(f"{owner}: the number of sites must be at least 1, not {length}")
        self.length = length
        if isinstance(cell, Mapping):
            raise TypeError(f"{owner}: cell takes names; a mapping of names to kinds comes second, {owner}(3, {{...}})")
        if isinstance(kind, Mapping):
            if cell and set(cell) != set(kind):
                raise ValueError(f"{owner}: cell {tuple(cell)} and kinds {tuple(kind)} do not name the same sites")
            names: tuple[str, ...] = tuple(cell) or tuple(kind)
            kinds = tuple(kind[name] for name in names)
            if not names:
                raise ValueError(f"{owner}: a unit cell has at least one site")
        else:
            names = (cell,) if isinstance(cell, str) else tuple(cell)
            kinds = (kind,) * max(len(names), 1)
        for item in kinds:
            if not isinstance(item, Kind):
                raise TypeError(f"{owner}: expected Spin(...), Fermions(...) or Bosons(...), not {item!r}")
        self.cell = check_names(owner, "site", names) or ("",)
        self.kinds = kinds
        self.bonds: dict[str, tuple[Bond, ...]] = {}

    # --- counting

    @property
    def size(self) -> int:
        """Number of sites."""
        return self.length * len(self.cell)

    @property
    def dims(self) -> tuple[int, ...]:
        """Dimension of every site, in site order.

        Raises
        ------
        ValueError
            For bosons without a cut-off.
        """
        dims = tuple(kind.dimension for kind in self.kinds)
        if 0 in dims:
            raise ValueError("bosons without a cut-off have no matrices and vectors: give Bosons(cutoff=...)")
        return dims * self.length

    @property
    def states(self) -> int:
        """Number of basis states."""
        return prod(self.dims)

    @cached_property
    def slots(self) -> tuple[LocalOperators, ...]:
        """Operators of every slot: the slots of site 0 first."""
        return tuple(slot for kind in self.kinds for slot in kind.slots) * self.length

    @cached_property
    def homes(self) -> tuple[tuple[int, str], ...]:
        """Site and species of every slot."""
        return tuple((site, name) for site in range(self.size) for name in self.kind(site).species)

    @cached_property
    def slot_numbers(self) -> dict[tuple[int, str], int]:
        """Slot of every site and species."""
        return {home: slot for slot, home in enumerate(self.homes)}

    @cached_property
    def first_slots(self) -> tuple[int, ...]:
        """First slot of every site, and the number of slots as the last entry."""
        starts = [0]
        for site in range(self.size):
            starts.append(starts[-1] + len(self.kind(site).species))
        return tuple(starts)

    @cached_property
    def symbols(self) -> frozenset[str]:
        """Names of the operators that some site has."""
        return frozenset(name for kind in self.kinds for slot in kind.slots for name in slot.symbols)

    @cached_property
    def is_spin_half(self) -> bool:
        """Whether all sites are spins 1/2."""
        return all(kind == Spin() for kind in self.kinds)

    def kind(self, site: int) -> Kind:
        """What lives on a site."""
        return self.kinds[site % len(self.cell)]

    def site(self, position: int, member: int) -> int:
        """Site number of a member of the cell at a position."""
        return position * len(self.cell) + member

    # --- geometry

    @abstractmethod
    def place(self, position: int) -> int | None:
        """Position 0..length-1 that a position may wrap to; None when there is none."""

    @abstractmethod
    def reach(self, sites: Sequence[int]) -> int:
        """Count the neighbouring positions needed to cover the given sites (0 for none)."""

    def __eq__(self, other: object) -> bool:
        return type(self) is type(other) and isinstance(other, Sites) and self._key == other._key

    def __hash__(self) -> int:
        return hash((type(self).__name__, self._key))

    def __repr__(self) -> str:
        return f"{type(self).__name__}({', '.join([str(self.length), *self._shown])})"

    @property
    def _key(self) -> tuple[Any, ...]:
        return self.length, self.cell, self.kinds, tuple(sorted(self.bonds.items()))

    @property
    def _shown(self) -> list[str]:
        if len(set(self.kinds)) > 1:
            return [f"{{{', '.join(f'{n!r}: {k!r}' for n, k in zip(self.cell, self.kinds, strict=True))}}}"]
        shown = [] if self.kinds[0] == Spin() else [repr(self.kinds[0])]
        return shown + ([f"cell={self.cell!r}"] if self.cell != ("",) else [])


class _Line(Sites):
    """Cells in a row; bonds repeat from cell to cell."""

    def __init__(
        self,
        length: int,
        /,
        kind: Kind | Mapping[str, Kind] = Spin(),  # noqa: B008  (immutable)
        *,
        cell: Sequence[str] = (),
        bonds: Mapping[str, Sequence[Any]] | None = None,
    ) -> None:
        super().__init__(length, kind, cell, type(self).__name__)
        default = {"neighbours": [1]} if len(self.cell) == 1 else {}
        given = default if bonds is None else bonds
        if not isinstance(given, Mapping):
            raise TypeError(f"{self._owner}: bonds are given by name, {{'name': [...]}}, not {bonds!r}")
        check_names(self._owner, "bond", tuple(given))
        for name, entries in given.items():
            steps = [self._step(name, entry) for entry in entries]
            self.bonds[name] = tuple(
                (self.site(i, a), self.site(j, b))
                for i in range(length)
                for a, b, shift in steps
                if (j := self.place(i + shift)) is not None and (i, a) != (j, b)
            )

    @property
    def _owner(self) -> str:
        return type(self).__name__

    def _step(self, name: str, entry: Any) -> tuple[int, int, int]:
        parts = entry if isinstance(entry, tuple | list) else (entry,)
        shift = parts[-1] if parts and isinstance(parts[-1], int) and not isinstance(parts[-1], bool) else None
        ends = tuple(parts if shift is None else parts[:-1])
        if len(self.cell) == 1 and shift is not None and not ends:
            ends = self.cell * 2
        if len(ends) != 2 or any(end not in self.cell for end in ends):
            form = "a shift such as 1" if len(self.cell) == 1 else f"(site, site) or (site, site, shift) of {self.cell}"
            raise ValueError(f"{self._owner}: bond {entry!r} of '{name}' is no bond: expected {form}")
        a, b = (self.cell.index(end) for end in ends)
        if a == b and not shift:
            raise ValueError(f"{self._owner}: bond {entry!r} of '{name}' joins a site with itself")
        return a, b, shift or 0

    @property
    def _shown(self) -> list[str]:
        default = len(self.cell) == 1 and self.bonds == type(self)(self.length).bonds
        names = ", ".join(f"{name}: {len(pairs)}" for name, pairs in self.bonds.items())
        return super()._shown + ([] if default or not names else [f"bonds {names}"])


class Ring(_Line):
    """Unit cells 0..length-1 on a ring: positions wrap.

    Parameters
    ----------
    length : int
        Number of cells, at least 1. A nearest-neighbour sum over a ring of 2 runs over its bond twice.
    kind : Kind or mapping from str to Kind
        What lives on the sites, default spin 1/2; a mapping names the sites of a unit cell and gives each its kind.
    cell : sequence of str, optional
        Names of the sites of a unit cell that are all of one kind, e.g. ``("left", "right")`` for a ladder.
    bonds : mapping from str to sequence of (site, site) or (site, site, shift), optional
        Named bonds of one cell, repeated along the ring: from a site of a cell to a site of the cell `shift` further.
        With one site per cell a bond is the shift alone. Default: ``{"neighbours": [1]}`` with one site per cell,
        none otherwise.

    Raises
    ------
    TypeError, ValueError
        When a number, a name or a bond is not usable.

    Examples
    --------
    >>> Ring(4).dims, Ring(4).place(5)
    ((2, 2, 2, 2), 1)
    >>> ladder = Ring(3, cell=("a", "b"), bonds={"rungs": [("a", "b")], "legs": [("a", "a", 1), ("b", "b", 1)]})
    >>> ladder.size, ladder.bonds["rungs"]
    (6, ((0, 1), (2, 3), (4, 5)))
    """

    is_ring = True

    def place(self, position: int) -> int | None:
        """Position wrapped around the ring."""
        return position % self.length

    def reach(self, sites: Sequence[int]) -> int:
        """Count the positions of the shortest arc that covers the given sites (0 for none)."""
        if not sites:
            return 0
        ordered = sorted({site // len(self.cell) for site in sites})
        gaps = [b - a for a, b in zip(ordered, ordered[1:], strict=False)]
        gaps.append(ordered[0] + self.length - ordered[-1])
        return self.length - max(gaps) + 1


class Chain(_Line):
    """Unit cells 0..length-1 on an open chain: positions outside it do not exist.

    Parameters
    ----------
    length, kind, cell, bonds
        As for `Ring`; bonds that leave the chain are left out.

    Raises
    ------
    TypeError, ValueError
        When a number, a name or a bond is not usable.

    Examples
    --------
    >>> Chain(4).place(3), Chain(4).place(4)
    (3, None)
    """

    def place(self, position: int) -> int | None:
        """Position itself, or None outside the chain."""
        return position if 0 <= position < self.length else None

    def reach(self, sites: Sequence[int]) -> int:
        """Count the positions from the first to the last of the given sites (0 for none)."""
        cells = [site // len(self.cell) for site in sites]
        return max(cells) - min(cells) + 1 if cells else 0


class Lattice(Sites):
    """Sites 0..length-1 joined by named bonds, in any geometry.

    Parameters
    ----------
    length : int
        Number of sites, at least 1.
    bonds : mapping from str to sequence of (site, site)
        Named bonds; every pair is summed once, in the order in which it is written.
    kind : Kind
        What lives on the sites, default spin 1/2.

    Raises
    ------
    TypeError, ValueError
        When a number, a name or a bond is not usable.

    Examples
    --------
    >>> triangle = Lattice(3, {"sides": [(0, 1), (1, 2), (2, 0)]})
    >>> triangle.size, len(triangle.bonds["sides"])
    (3, 3)
    """

    has_order = False

    def __init__(
        self,
        length: int,
        /,
        bonds: Mapping[str, Sequence[Sequence[int]]],
        kind: Kind = Spin(),  # noqa: B008  (immutable)
    ) -> None:
        if isinstance(kind, Mapping):
            raise TypeError("Lattice: one kind for all sites; unit cells are for Ring and Chain")
        super().__init__(length, kind, (), "Lattice")
        if not isinstance(bonds, Mapping):
            raise TypeError(f"Lattice: bonds are given by name, {{'name': [...]}}, not {bonds!r}")
        check_names("Lattice", "bond", tuple(bonds))
        for name, pairs in bonds.items():
            self.bonds[name] = tuple(self._pair(name, pair) for pair in pairs)
            seen: set[frozenset[int]] = set()
            for pair in self.bonds[name]:
                if frozenset(pair) in seen:
                    raise ValueError(f"Lattice: bond {pair} of '{name}' occurs twice")
                seen.add(frozenset(pair))

    @classmethod
    def grid(
        cls,
        columns: int,
        rows: int,
        *,
        wrap: tuple[bool, bool] = (False, False),
        kind: Kind = Spin(),  # noqa: B008  (immutable)
    ) -> Lattice:
        """Rectangle of sites with the bonds 'along' (within a row) and 'across' (within a column).

        Parameters
        ----------
        columns, rows : int
            Site number = row * columns + column.
        wrap : (bool, bool)
            Whether rows and columns close to rings; a direction with fewer than 3 sites stays open, as its closing
            bond is there already.
        kind : Kind
            What lives on the sites.

        Examples
        --------
        >>> square = Lattice.grid(3, 3, wrap=(True, True))
        >>> len(square.bonds["along"]), len(square.bonds["across"])
        (9, 9)
        """
        for count in (columns, rows):
            if isinstance(count, bool) or not isinstance(count, int) or count < 1:
                raise ValueError(f"Lattice.grid: columns and rows must be whole numbers from 1 on, not {count!r}")
        along, across = [], []
        for y in range(rows):
            for x in range(columns):
                if x + 1 < columns or (wrap[0] and columns > 2):
                    along.append((y * columns + x, y * columns + (x + 1) % columns))
                if y + 1 < rows or (wrap[1] and rows > 2):
                    across.append((y * columns + x, (y + 1) % rows * columns + x))
        return cls(columns * rows, {"along": along, "across": across}, kind)

    def _pair(self, name: str, pair: Any) -> Bond:
        ends = tuple(pair) if isinstance(pair, tuple | list) else ()
        if len(ends) != 2 or any(isinstance(x, bool) or not isinstance(x, int) for x in ends):
            raise ValueError(f"Lattice: bond {pair!r} of '{name}' is no pair of site numbers")
        for end in ends:
            if not 0 <= end < self.length:
                raise ValueError(f"Lattice: bond {pair!r} of '{name}': sites run from 0 to {self.length - 1}")
        if ends[0] == ends[1]:
            raise ValueError(f"Lattice: bond {pair!r} of '{name}' joins a site with itself")
        return ends[0], ends[1]

    @property
    def _shown(self) -> list[str]:
        return [*(f"{name}: {len(pairs)} bonds" for name, pairs in self.bonds.items()), *super()._shown]

    def place(self, position: int) -> int | None:
        """Site itself, or None where there is none."""
        return position if 0 <= position < self.length else None

    def reach(self, sites: Sequence[int]) -> int:
        """Count the given sites."""
        return len(set(sites))

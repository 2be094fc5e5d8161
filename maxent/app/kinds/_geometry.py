"""Tables `[sites]` of the lattice kinds: where the sites lie and what lives on them.

Floor: app/kinds.  One table per kind of site, all made from the same keys of the geometry.
Must not know: formulas, starts, families.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from math import log2, prod
from typing import Any, Literal

from maxent.app.job import STRICT, Problems, says

__all__ = ["BosonSites", "FermionSites", "Geometry", "SpinSites"]

Step = int | list[int | str]

#: Cells of a ladder, and its bonds.
_LADDER = ("left", "right")
_LADDER_BONDS = {"rungs": [("left", "right")], "legs": [("left", "left", 1), ("right", "right", 1)]}


@dataclass(frozen=True)
class Geometry:
    """Where the sites lie."""

    __pydantic_config__ = STRICT

    geometry: Literal["ring", "chain", "ladder", "bonds"] = field(
        metadata=says(
            "`ring`: subscripts wrap around; `chain`: only terms that fit are kept; `ladder`: a ring of rungs with the "
            "sites `left` and `right` and the bonds `rungs` and `legs`; `bonds`: any lattice, given by its bonds."
        )
    )
    size: int | None = field(
        default=None,
        metadata=says("Number of positions, the `L` of formulas: sites, or cells (rungs) where a cell has several."),
    )
    sizes: list[int] | None = field(
        default=None, metadata=says("Several sizes instead of one, for `[quench]`; the fit itself takes the largest.")
    )
    cell: list[str] = field(
        default_factory=list, metadata=says("Names of the sites of a unit cell of a ring or chain.")
    )
    bonds: dict[str, list[Step]] | None = field(
        default=None,
        metadata=says(
            'Name -> bonds. On a ring or chain those of one cell, repeated: a shift such as `1`, or `["a", "b"]`, '
            '`["a", "a", 1]` with named sites; for `geometry = "bonds"` all of them as pairs of site numbers.'
        ),
    )
    open: bool = field(default=False, metadata=says("Whether the legs of a ladder end instead of closing to rings."))

    @property
    def all_sizes(self) -> tuple[int, ...]:
        """Sizes, ascending."""
        if self.sizes is not None:
            return tuple(sorted(self.sizes))
        return () if self.size is None else (self.size,)

    @property
    def largest(self) -> int:
        """Largest size."""
        return max(self.all_sizes)

    def kind(self) -> Any:
        """What lives on a site, or a mapping from the sites of a cell to that."""
        raise NotImplementedError

    def arrange(self, problems: Problems, *, listed: bool = True) -> dict[int, Any]:
        """Make the sites of every size; empty after a problem. `listed`: the states will be listed one by one."""
        from maxent import lattice

        found = len(problems.found)
        self._check_sizes(problems)
        try:
            kind = self.kind()
        except (TypeError, ValueError) as bad:
            problems.add(("sites", self._kind_key), str(bad))
        if len(problems.found) > found:
            return {}
        if listed:
            self._refuse_endless(kind, problems)
        if len(problems.found) > found:
            return {}
        bonds = None if self.bonds is None else {name: list(map(_step, steps)) for name, steps in self.bonds.items()}
        out = {}
        for size in self.all_sizes:
            try:
                if self.geometry == "bonds":
                    out[size] = lattice.Lattice(size, bonds or {}, kind)
                elif self.geometry == "ladder":
                    line: Any = lattice.Chain if self.open else lattice.Ring
                    out[size] = line(size, kind, cell=_LADDER, bonds=_LADDER_BONDS | (bonds or {}))
                else:
                    line = {"ring": lattice.Ring, "chain": lattice.Chain}[self.geometry]
                    out[size] = line(size, kind, cell=tuple(self.cell), bonds=bonds)
            except (TypeError, ValueError) as bad:
                problems.add(("sites", self._blame(str(bad))), str(bad))
                return {}
        return out

    @property
    def _kind_key(self) -> str:
        return "geometry"

    @property
    def _size_key(self) -> str:
        return "size" if self.sizes is None else "sizes"

    def _blame(self, text: str) -> str:
        """Key that an error of the lattice speaks of."""
        if "bond" in text:
            return "bonds"
        return "cell" if any(word in text for word in ("cell", "name of a site", "site names")) else self._size_key

    def _check_sizes(self, problems: Problems) -> None:
        if self.size is not None and self.sizes is not None:
            problems.add(("sites", "sizes"), "give `size` or `sizes`, not both")
        elif self.size is None and self.sizes is None:
            problems.add(("sites", "size"), "missing; give `size`, or `sizes` for a series with [quench]")
        elif self.sizes is not None and (not self.sizes or len(set(self.sizes)) < len(self.sizes)):
            problems.add(("sites", "sizes"), f"expected different numbers, at least one, got {self.sizes}")
        for size in self.all_sizes:
            if size < 1:
                problems.add(("sites", self._size_key), f"the number of sites must be at least 1, not {size}")
        if self.geometry == "bonds":
            if not self.bonds:
                problems.add(("sites",), 'geometry = "bonds" needs the table `bonds`, {sides = [[0, 1], [1, 2]]}')
            if self.sizes is not None:
                problems.add(("sites", "sizes"), "bonds given by site numbers belong to one `size`")
        if self.geometry in ("ladder", "bonds") and self.cell:
            what = "a ladder has the sites `left` and `right`" if self.geometry == "ladder" else "bonds have no cells"
            problems.add(("sites", "cell"), f"for rings and chains; {what}")
        if self.open and self.geometry != "ladder":
            problems.add(("sites", "open"), f"for ladders; a {self.geometry} is what it is")

    def _refuse_endless(self, kind: Any, problems: Problems) -> None:
        """Refuse sizes whose number of states is beyond any machine, before anybody lists the sites."""
        kinds = list(kind.values()) if isinstance(kind, dict) else [kind] * max(1, len(self.cell))
        if any(k.dimension == 0 for k in kinds):
            problems.add(("sites",), "bosons need a `cutoff`, the largest occupation of a mode that is kept")
            return
        if self.geometry == "ladder" and not isinstance(kind, dict):
            kinds = [kind] * len(_LADDER)
        states = prod(k.dimension for k in kinds)
        for size in self.all_sizes:
            if size * log2(states) > 100:
                problems.add(("sites", self._size_key), f"{states}^{size} states fit into no machine")


@dataclass(frozen=True)
class SpinSites(Geometry):
    """Sites with a spin."""

    __pydantic_config__ = STRICT

    spin: float | str | dict[str, float | str] = field(
        default="1/2",
        metadata=says(
            'Spin of every site, a multiple of 1/2 such as `1` or `"3/2"`; or a table with one per site of a cell, '
            '`{a = "1/2", b = 1}`.'
        ),
    )

    def kind(self) -> Any:
        """Spins."""
        from maxent.lattice import Spin

        return {n: Spin(s) for n, s in self.spin.items()} if isinstance(self.spin, dict) else Spin(self.spin)

    @property
    def _kind_key(self) -> str:
        return "spin"


@dataclass(frozen=True)
class FermionSites(Geometry):
    """Sites with fermion modes."""

    __pydantic_config__ = STRICT

    species: list[str] = field(
        default_factory=list,
        metadata=says('Names of the modes of a site, `["up", "down"]`; nothing for one mode without a name.'),
    )

    def kind(self) -> Any:
        """Fermions."""
        from maxent.lattice import Fermions

        return Fermions(*self.species)

    @property
    def _kind_key(self) -> str:
        return "species"


@dataclass(frozen=True)
class BosonSites(Geometry):
    """Sites with boson modes."""

    __pydantic_config__ = STRICT

    cutoff: int | None = field(
        default=None,
        metadata=says(
            "Largest occupation of a mode that is kept; the report says how much it is felt. "
            'Not for `method = "gaussian"`, which keeps all.'
        ),
    )
    species: list[str] = field(
        default_factory=list,
        metadata=says("Names of the modes of a site; nothing for one mode without a name."),
    )

    def kind(self) -> Any:
        """Bosons."""
        from maxent.lattice import Bosons

        return Bosons(*self.species, cutoff=self.cutoff)

    @property
    def _kind_key(self) -> str:
        return "cutoff"


def _step(given: Step) -> Any:
    return tuple(given) if isinstance(given, list) else given

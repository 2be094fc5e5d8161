"""What stands in the square brackets behind a name: position, site of the unit cell, species.

The first subscript is a position, or the end of a bond, which is a site. With several sites per unit cell a position
is followed by the name of one of them; with several species the last subscript names one. A list parameter has one
value per position, or, with the name of a site or the end of a bond as subscript, one per site.
Floor: lattice. Must not know how a formula is read beyond the pieces it is given.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NoReturn

from maxent.lattice.nodes import Node
from maxent.lattice.sites import Sites
from maxent.lattice.tokens import Token, fail


@dataclass(frozen=True)
class Subscripts:
    """The subscripts of one name.

    Attributes
    ----------
    sites : Ring, Chain or Lattice
    text, name : str
        The formula, and the name that carries the subscripts.
    index : Node
        The first subscript.
    more : list of Token
        The others; what is no plain name has an empty text.
    is_end : bool
        Whether the first subscript is the end of a bond.
    """

    sites: Sites
    text: str
    name: str
    index: Node
    more: list[Token]
    is_end: bool

    def __post_init__(self) -> None:
        """Refuse arithmetic where neighbours are told by bonds alone."""
        if not self.index.free or self.index.kind == "position":
            return
        if not self.sites.has_order:
            self._fail("the sites of a lattice have no order: use bonds, '... for <a, b>'")
        if self.is_end and self._has_cell:
            self._fail("the end of a bond is a site: there is no arithmetic with it")

    def density(self) -> str:
        """Name of a density, which has a position only."""
        if self.more:
            self._fail(f"density '{self.name}' has one subscript", self.more[0].start)
        if self.is_end and self._has_cell:
            self._fail(f"density '{self.name}' has a position, not the end of a bond")
        return self.name

    def entry(self, values: tuple[object, ...], start: int, end: int) -> tuple[str, int | None, bool]:
        """Name of a list parameter, member of the cell, and whether it has one value per site of several in a cell.

        Parameters
        ----------
        values : tuple
            The list.
        start, end : int
            Place of the entry in the text.
        """
        name, cell, more = self.name, self.sites.cell, self.more
        member, per_site = None, False
        if self._has_cell and (self.is_end or more):
            per_site = True
            if not self.is_end:
                member, more = self._member(more[0]), more[1:]
        elif self._has_cell and len(values) == self.sites.size:
            place = self.text[self.index.start : end - 1].strip()
            self._fail(f"parameter '{name}' has one value per site: write '{name}[{place}, {cell[0]}]'", start)
        if more:
            self._fail(f"parameter '{name}' has one subscript less", more[0].start)
        count, what = (self.sites.size, "sites") if per_site else (self.sites.length, "positions")
        if len(values) > count or ((self.sites.is_ring or per_site) and len(values) != count):
            self._fail(f"parameter '{name}' has {len(values)} values, but there are {count} {what}", start)
        return name, member, per_site

    def operator(self) -> tuple[str, int | None, str]:
        """Name of an operator, member of the cell (None when the subscript is a site), species."""
        name, cell, kinds, more = self.name, self.sites.cell, self.sites.kinds, list(self.more)
        member: int | None = 0
        if self._has_cell and self.is_end:
            member = None
            if more and more[0].text in cell:
                self._fail("the end of a bond is a site already: leave its name out", more[0].start)
        elif self._has_cell:
            if not more:
                form = f"write '{name}[..., {cell[0]}]' (sites: {', '.join(cell)})"
                self._fail(f"'{name}' needs a site of the unit cell: {form}")
            member = self._member(more.pop(0))
        if member is not None:
            kinds = (kinds[member],)
        fitting = [kind for kind in kinds if name in kind.slots[0].symbols]
        if not fitting:
            self._fail(f"'{name}' does not exist on a {kinds[0].name} site")
        species = list(dict.fromkeys(s for kind in fitting for s in kind.species))
        if not more:
            if "" not in species:
                forms = " or ".join(f"'{name}[..., {s}]'" for s in species)
                self._fail(f"'{name}' needs a species: write {forms}")
            return name, member, ""
        if species == [""]:
            needed = "two subscripts" if self._has_cell and not self.is_end else "one subscript"
            self._fail(f"{fitting[0].name} operators have {needed}", more[0].start)
        if more[0].text not in species or not more[0].text:
            self._fail(f"unknown species; expected {' or '.join(s for s in species if s)}", more[0].start)
        if len(more) > 1:
            self._fail(f"'{name}' has too many subscripts", more[1].start)
        return name, member, more[0].text

    @property
    def _has_cell(self) -> bool:
        return len(self.sites.cell) > 1

    def _member(self, token: Token) -> int:
        if token.text not in self.sites.cell:
            self._fail(f"unknown site of the unit cell; expected {' or '.join(self.sites.cell)}", token.start)
        return self.sites.cell.index(token.text)

    def _fail(self, message: str, start: int | None = None) -> NoReturn:
        fail(message, self.text, self.index.start if start is None else start)

"""Kinds of sites: spins, fermions and bosons, and the slots that each of them has.

Floor: lattice. A spin is one slot; fermions and bosons have one slot per species, in the order in which the species
were named. The local basis of a site is row-major over its slots. Must not know where sites lie.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from functools import cache
from math import prod
from numbers import Real
from typing import Any

from maxent.lattice.local import LocalOperators
from maxent.lattice.particles import BosonOperators, FermionOperators
from maxent.lattice.spins import LARGEST, SpinOperators


class Kind:
    """What lives on a site. Made as `Spin`, `Fermions` or `Bosons`."""

    @property
    def name(self) -> str:
        """What such a site is called in messages."""
        raise NotImplementedError

    @property
    def species(self) -> tuple[str, ...]:
        """Names of the species, one per slot; one empty name where a subscript needs none."""
        return ("",)

    @property
    def slots(self) -> tuple[LocalOperators, ...]:
        """Operators of every slot."""
        raise NotImplementedError

    @property
    def dimension(self) -> int:
        """Number of basis states of the site."""
        return prod(slot.dimension for slot in self.slots)


@dataclass(frozen=True, repr=False)
class Spin(Kind):
    """Spin s: operators Sx, Sy, Sz, Splus, Sminus, for s = 1/2 also X, Y, Z; basis m = s, s-1, ..., -s.

    Parameters
    ----------
    s : float, Fraction or str
        Multiple of 1/2 from 1/2 to 9/2; text such as ``"3/2"`` is taken too.

    Raises
    ------
    TypeError, ValueError
        For anything else.

    Examples
    --------
    >>> Spin(1), Spin("3/2").dimension
    (Spin(1), 4)
    """

    s: Any = Fraction(1, 2)

    def __post_init__(self) -> None:
        """Check the number and keep it as a fraction."""
        if isinstance(self.s, bool) or not isinstance(self.s, Real | str):
            raise TypeError(f"Spin: s must be a number such as 1/2 or 1, not {self.s!r}")
        try:
            spin = Fraction(self.s)  # type: ignore[arg-type]
        except (ValueError, OverflowError, ZeroDivisionError):
            raise ValueError(f"Spin: s must be a number such as 1/2 or 1, not {self.s!r}") from None
        if spin <= 0 or (2 * spin).denominator != 1 or spin > LARGEST:
            raise ValueError(f"Spin: s must be a multiple of 1/2 from 1/2 to {LARGEST}, not {self.s}")
        object.__setattr__(self, "s", spin)

    def __repr__(self) -> str:
        return f"Spin({self.s})"

    @property
    def name(self) -> str:
        """For example spin-1/2."""
        return f"spin-{self.s}"

    @property
    def slots(self) -> tuple[LocalOperators, ...]:
        """The spin."""
        return (_spin(self.s),)


@dataclass(frozen=True, init=False, repr=False)
class Fermions(Kind):
    """Fermions, one mode per species: operators c and n; basis (empty, occupied) of every mode.

    Parameters
    ----------
    *names : str
        Species, written behind the position, ``c[i, up]``; none for spinless fermions, ``c[i]``.

    Raises
    ------
    ValueError
        For names that are not usable or not different.

    Examples
    --------
    >>> Fermions().dimension, Fermions("up", "down").dimension
    (2, 4)
    """

    names: tuple[str, ...] = ()

    def __init__(self, *names: str) -> None:
        object.__setattr__(self, "names", check_names("Fermions", "species", names))

    def __repr__(self) -> str:
        return f"Fermions({', '.join(map(repr, self.names))})"

    @property
    def name(self) -> str:
        """Fermions with their species."""
        return f"fermion ({', '.join(self.names)})" if self.names else "fermion"

    @property
    def species(self) -> tuple[str, ...]:
        """Names of the modes."""
        return self.names or ("",)

    @property
    def slots(self) -> tuple[LocalOperators, ...]:
        """One mode per species."""
        return tuple(_fermion(name) for name in self.species)


@dataclass(frozen=True, init=False, repr=False)
class Bosons(Kind):
    """Bosons, one mode per species: operators b and n; basis by occupation 0, 1, ..., cutoff of every mode.

    Formulas follow the exact algebra, b dagger(b) = dagger(b) b + 1. A matrix is the ordered sum (all dagger(b) to the
    left) between the states that are kept: the compression of the exact operator, whatever way it was written.

    Parameters
    ----------
    *names : str
        Species, written behind the position, ``b[i, left]``; none for one species, ``b[i]``.
    cutoff : int, optional
        Largest occupation of a mode in matrices and vectors, from 1 to 255. Without it there are formulas and
        one-body matrices only.

    Raises
    ------
    TypeError, ValueError
        For names or a cut-off that are not usable.

    Examples
    --------
    >>> Bosons(cutoff=3).dimension
    4
    """

    names: tuple[str, ...] = ()
    cutoff: int | None = None

    def __init__(self, *names: str, cutoff: int | None = None) -> None:
        if cutoff is not None:
            if isinstance(cutoff, bool) or not isinstance(cutoff, int):
                raise TypeError(f"Bosons: the cut-off must be a whole number, not {cutoff!r}")
            if not 1 <= cutoff <= 255:
                raise ValueError(f"Bosons: the cut-off must be from 1 to 255, not {cutoff}")
        object.__setattr__(self, "names", check_names("Bosons", "species", names))
        object.__setattr__(self, "cutoff", cutoff)

    def __repr__(self) -> str:
        parts = [*map(repr, self.names), *([] if self.cutoff is None else [f"cutoff={self.cutoff}"])]
        return f"Bosons({', '.join(parts)})"

    @property
    def name(self) -> str:
        """Bosons with their species."""
        return f"boson ({', '.join(self.names)})" if self.names else "boson"

    @property
    def species(self) -> tuple[str, ...]:
        """Names of the modes."""
        return self.names or ("",)

    @property
    def slots(self) -> tuple[LocalOperators, ...]:
        """One mode per species."""
        return tuple(_boson(name, self.cutoff) for name in self.species)


def check_names(owner: str, what: str, names: Any) -> tuple[str, ...]:
    """Check names that stand in subscripts: usable, different from one another.

    Raises
    ------
    ValueError
        When they are not.
    """
    for name in names:
        if not isinstance(name, str) or not name.isidentifier() or name.startswith("_") or name in ("for", "in"):
            raise ValueError(f"{owner}: the name of a {what} must be a plain word, not {name!r}")
    if len(set(names)) != len(names):
        raise ValueError(f"{owner}: two {what} names are equal: {', '.join(names)}")
    return tuple(names)


# one table per kind of slot, so that products are worked out once
@cache
def _spin(spin: Fraction) -> SpinOperators:
    return SpinOperators(spin)


@cache
def _fermion(species: str) -> FermionOperators:
    return FermionOperators(species)


@cache
def _boson(species: str, cutoff: int | None) -> BosonOperators:
    del species  # two species commute: they need tables of their own only in name
    return BosonOperators(cutoff)

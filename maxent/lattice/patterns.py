"""Start states of sharp occupation: patterns that repeat along the sites, and domain walls.

Floor: lattice. Must not know multipliers or targets.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from fractions import Fraction
from numbers import Real
from typing import Any

import numpy as np

from maxent.lattice.kinds import Bosons, Kind, Spin
from maxent.lattice.particles import NUMBER, BosonOperators, FermionOperators
from maxent.lattice.sites import Sites
from maxent.lattice.starts import LocalProduct, fitting_pattern


class PatternState(LocalProduct):
    """Basis state given by a pattern that repeats along the sites.

    Parameters
    ----------
    sites : Ring, Chain or Lattice
        Where the state lives.
    pattern : sequence
        One entry per site; on a ring its length must divide the number of sites. Spins: ``"up"``, ``"down"`` (the
        largest and the smallest Sz) or a value of Sz. Fermions and bosons of one species: the occupation. With several
        species: one occupation per species as a list, a name (that species once), or 0 (empty).

    Attributes
    ----------
    levels : tuple of int
        Index of the basis state of every slot.

    Raises
    ------
    TypeError, ValueError
        When an entry is no state of its site, or the pattern does not fit.

    Examples
    --------
    >>> from maxent.lattice import Chain, Fermions, formula
    >>> start = PatternState(Chain(4, Fermions()), [1, 0])
    >>> start.mean(formula("n[i]", start.sites)), start.variance(formula("dagger(c[i])*c[i+1] + h.c.", start.sites))
    (2.0, 3.0)

    Notes
    -----
    For bosons the variance is that of the exact algebra: it differs from the one of cut-off matrices when a mode is
    filled up to the cut-off.
    """

    def __init__(self, sites: Sites, pattern: Sequence[Any]) -> None:
        super().__init__(sites)
        entries = _entries("pattern", pattern)
        length = fitting_pattern("the pattern", "entries", len(entries), sites)
        self.levels = tuple(
            level
            for site in range(sites.size)
            for level in _levels(f"pattern[{site % length}]", entries[site % length], sites.kind(site))
        )

    def vector(self, *, limit: int | None = None) -> np.ndarray:
        """Amplitudes in the basis of the sites; see `LocalProduct.vector`."""
        for level, (site, _), slot in zip(self.levels, self.sites.homes, self.sites.slots, strict=True):
            if level >= slot.dimension > 0:
                raise ValueError(f"{level} bosons on site {site} lie above the cut-off {slot.dimension - 1}")
        return super().vector(limit=limit)

    def _letter_mean(self, slot: int, letter: int) -> complex:
        local, level = self.sites.slots[slot], self.levels[slot]
        if isinstance(local, FermionOperators):
            return float(letter == NUMBER and level == 1)
        if isinstance(local, BosonOperators):
            created, removed = local.powers(letter)
            return float(math.perm(level, removed)) if created == removed else 0.0
        return complex(local.matrix(letter)[level, level])

    def _amplitudes(self, slot: int) -> np.ndarray:
        amplitudes = np.zeros(self.sites.slots[slot].dimension, np.complex128)
        amplitudes[self.levels[slot]] = 1.0
        return amplitudes


def domain_wall(sites: Sites, left: Sequence[Any], right: Sequence[Any], *, at: int | None = None) -> PatternState:
    """Make the state with one pattern on the sites before `at` and another from there on.

    Parameters
    ----------
    sites : Ring, Chain or Lattice
        Where the state lives.
    left, right : sequence
        Patterns as for `PatternState`, each repeated from the start of its part and cut off at its end.
    at : int, optional
        First site of the right part; default half of the sites.

    Raises
    ------
    TypeError, ValueError
        When an entry is no state of its site, or one of the parts is empty.

    Examples
    --------
    >>> from maxent.lattice import Chain
    >>> domain_wall(Chain(4), ["up"], ["down"]).levels
    (0, 0, 1, 1)
    """
    wall = sites.size // 2 if at is None else at
    if isinstance(wall, bool) or not isinstance(wall, int) or not 0 < wall < sites.size:
        raise ValueError(f"domain wall: at must be a site from 1 to {sites.size - 1}, not {wall!r}")
    parts = [_entries(name, given) for name, given in (("left", left), ("right", right))]
    for name, part in zip(("left", "right"), parts, strict=True):
        if not part:
            raise ValueError(f"domain wall: the pattern '{name}' is empty")
    counts = (wall, sites.size - wall)
    return PatternState(
        sites, [part[k % len(part)] for part, count in zip(parts, counts, strict=True) for k in range(count)]
    )


def _entries(name: str, given: Any) -> list[Any]:
    if isinstance(given, np.ndarray):
        given = given.tolist()
    if not isinstance(given, list | tuple):
        raise TypeError(f"{name}: expected a list with one entry per site, not {given!r}")
    return list(given)


def _levels(name: str, entry: Any, kind: Kind) -> tuple[int, ...]:
    """Index of the basis state of every slot of a site."""
    if isinstance(kind, Spin):
        return (_spin_level(name, entry, kind),)
    if isinstance(entry, list | tuple):
        if len(entry) != len(kind.species):
            raise ValueError(f"{name}: expected {len(kind.species)} occupations of {kind.name}, not {entry!r}")
        return tuple(_occupation(name, x, kind) for x in entry)
    if isinstance(entry, str):
        if entry not in kind.species or not entry:
            known = ", ".join(f"'{s}'" for s in kind.species if s) or "an occupation"
            raise ValueError(f"{name}: {entry!r} is no species of a {kind.name} site; expected {known}")
        return tuple(int(entry == s) for s in kind.species)
    if len(kind.species) > 1 and entry != 0:
        raise ValueError(f"{name}: {entry!r} does not tell the species; give a name or a list of occupations")
    return tuple(_occupation(name, entry, kind) for _ in kind.species)


def _spin_level(name: str, entry: Any, kind: Spin) -> int:
    top = kind.dimension - 1
    if entry in ("up", "down"):
        return 0 if entry == "up" else top
    expected = f"{name}: expected 'up', 'down' or a value of Sz from {-kind.s} to {kind.s}, not {entry!r}"
    if isinstance(entry, bool) or not isinstance(entry, Real | str):
        raise TypeError(expected)
    try:
        level = kind.s - Fraction(entry)  # type: ignore[arg-type]
    except (ValueError, OverflowError, ZeroDivisionError):
        raise ValueError(expected) from None
    if level.denominator != 1 or not 0 <= level <= top:
        raise ValueError(expected)
    return int(level)


def _occupation(name: str, entry: Any, kind: Kind) -> int:
    most = kind.cutoff if isinstance(kind, Bosons) else 1
    limit = f"from 0 to {most}" if most is not None else "from 0 on"
    if isinstance(entry, bool) or not isinstance(entry, Real):
        raise TypeError(f"{name}: expected an occupation {limit}, not {entry!r}")
    value = float(entry)
    if not value.is_integer() or value < 0 or (most is not None and value > most):
        raise ValueError(f"{name}: expected an occupation {limit}, not {entry!r}")
    return int(value)

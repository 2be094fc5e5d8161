"""Hamiltonians read for the search: from sums on a ring or an open chain, or from Pauli strings.

A sum is translation-invariant when all its words run through all translates by whole cells with one coefficient. On an
open chain those translates count that fit: its bulk is read, as a piece of the infinite chain. Floor: quench. Must
not know null spaces.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np

from maxent.lattice import Bosons, Fermions, OperatorSum, Sites, Spin
from maxent.lattice.words import order_sign
from maxent.quench.fermion_words import strings_of
from maxent.quench.strings import WIDEST, Density, bits, ranges

__all__ = ["density"]

_SPINS = "XYZ"
#: A word from its first site on: (letter place from that site, letter number) each.
Pattern = tuple[tuple[int, int], ...]


def density(operator: OperatorSum | Iterable[Sequence[Any]], *, cell: int | None = None) -> Density:
    """Density of a translation-invariant Hermitian operator of spins 1/2 or fermions.

    Parameters
    ----------
    operator : OperatorSum or iterable of (coefficient, letters) or (coefficient, letters, place)
        A sum on a ring or an open chain, whose invariance under translations is checked. Or Pauli strings such as
        ``(0.5, "XIX")`` that stand for themselves and all their translates by whole cells; the place (default 0) is
        the site in the cell at which the letters start. Multiples of the identity are dropped.
    cell : int, optional
        Sites per unit cell. Default: for a sum the smallest that it has; for strings 1.

    Returns
    -------
    Density

    Raises
    ------
    TypeError
        Neither spins 1/2 nor fermions on a line, or a coefficient or letters of the wrong kind.
    ValueError
        Not translation-invariant, not Hermitian, too long-ranged for the ring, or zero.
    """
    if cell is not None and (isinstance(cell, bool) or not isinstance(cell, int) or cell < 1):
        raise ValueError(f"cell: the sites per unit cell must be a whole number from 1 on, not {cell!r}")
    if not isinstance(operator, OperatorSum):
        return _density(_from_letters(operator, cell or 1), cell or 1)
    sites = operator.sites
    species = _species(sites)
    if not sites.has_order:
        raise TypeError("the search needs a ring or an open chain: a lattice given by its bonds has no translations")
    if not operator.is_hermitian:
        raise ValueError(f"not Hermitian: it holds {operator.non_hermitian_word}")
    words, cell = _repeated(operator, cell, max(len(species), 1))
    strings: dict[tuple[int, int], float] = {}
    for pattern, place, value in words:
        for (x, z), factor in (strings_of(pattern) if species else _spin_string(pattern)).items():
            if x | z:
                first = ((x | z) & -(x | z)).bit_length() - 1
                at = (place * max(len(species), 1) + first) % (cell * max(len(species), 1))
                key = x >> first << at, z >> first << at
                strings[key] = strings.get(key, 0.0) + (value * factor).real
    return _density(
        strings, cell * max(len(species), 1), names=sites.cell if len(sites.cell) > 1 else (), species=species,
        is_open=not sites.is_ring,
    )  # fmt: skip


def _density(strings: dict[tuple[int, int], float], cell: int, **more: Any) -> Density:
    """Strings in order, without those that cancel."""
    largest = max((abs(c) for c in strings.values()), default=0.0)
    keys = np.array([key for key, c in strings.items() if abs(c) > 1e-15 * largest], np.int64).reshape(-1, 2)
    if not len(keys):
        raise ValueError("the Hamiltonian is zero (or a multiple of the identity): everything commutes with it")
    keys = keys[np.lexsort((keys[:, 1], keys[:, 0], ranges(keys[:, 0], keys[:, 1])))]
    return Density(keys[:, 0], keys[:, 1], np.array([strings[int(x), int(z)] for x, z in keys]), cell, **more)


def _from_letters(words: Iterable[Sequence[Any]], cell: int) -> dict[tuple[int, int], float]:
    found: dict[tuple[int, int], float] = {}
    for word in words:
        value, text, *rest = word
        place = rest[0] if rest else 0
        number = complex(value)
        if number.imag != 0.0:
            raise ValueError(f"not Hermitian: {text} with the coefficient {value}")
        if not np.isfinite(number.real):
            raise ValueError(f"{text}: the coefficient {value} is no finite number")
        if not isinstance(text, str) or set(text) - set("IXYZ"):
            raise TypeError(f"a Pauli string is text of the letters I, X, Y, Z, not {text!r}")
        first = len(text) - len(text.lstrip("I"))
        text = text.strip("I")
        if len(text) > WIDEST:
            raise ValueError(f"a term covers {len(text)} sites; the most is {WIDEST}")
        x, z = bits(text, (place + first) % cell)
        if x | z:
            found[x, z] = found.get((x, z), 0.0) + number.real
    return found


def _species(sites: Sites) -> tuple[str, ...]:
    """Species of fermions, one empty name where they need none; nothing for spins."""
    kind = sites.kinds[0]
    if any(isinstance(k, Bosons) for k in sites.kinds):
        raise TypeError(
            "the search is for spins 1/2 and fermions: a boson mode has no end of local operators, and a cut-off "
            "changes their commutators"
        )
    wrong = next((k for k in sites.kinds if isinstance(k, Spin) and k != Spin()), None)
    if wrong is not None:
        raise TypeError(f"the search is for spins 1/2 and fermions so far, not for {wrong.name} sites")
    if any(k != kind for k in sites.kinds):
        raise TypeError(
            "the search needs sites of one kind: " + " and ".join(dict.fromkeys(k.name for k in sites.kinds))
        )
    return kind.species if isinstance(kind, Fermions) else ()


def _repeated(operator: OperatorSum, cell: int | None, modes: int) -> tuple[list[tuple[Pattern, int, complex]], int]:
    """Words of one cell as (pattern, site at which it starts, coefficient), and the sites per cell."""
    sites, size, step = operator.sites, operator.sites.size, len(operator.sites.cell)
    found: dict[Pattern, np.ndarray] = {}
    for word, value in zip(operator.words, operator.coefficients, strict=True):
        if word:
            start, pattern = _unwound(word, size, modes, ring=sites.is_ring)
            sign = order_sign(
                [(slot - start * modes) % (size * modes) for slot, x in word if x in sites.slots[slot].odd]
            )
            found.setdefault(pattern, np.zeros(size, complex))[start] += sign * value
            if sum(x in sites.slots[slot].odd for slot, x in word) % 2:
                raise ValueError(f"it holds an odd number of fermion operators: {operator.word_text(word)}")
    widths = {pattern: pattern[-1][0] // modes + 1 for pattern in found}
    widest = max(widths.values(), default=0)
    if sites.is_ring and 2 * (widest - 1) >= size:
        raise ValueError(
            f"a term covers {widest} of {size} sites, so that which way around the ring it goes is open; "
            f"take a ring of at least {2 * widest - 1} sites"
        )
    if widest * modes > WIDEST:
        raise ValueError(f"a term covers {widest} sites; the most is {WIDEST // modes}")
    largest = max((float(np.abs(c).max()) for c in found.values()), default=0.0)
    # on an open chain a word starts at the sites from which it fits
    fits = [c if sites.is_ring else c[: size - widths[pattern] + 1] for pattern, c in found.items()]

    def repeats(shift: int, spare: int) -> bool:
        if sites.is_ring:
            return size % shift == 0 and all(_same(c, np.roll(c, shift), largest) for c in fits)
        return all(len(c) >= shift + spare and _same(c[shift:], c[:-shift], largest) for c in fits)

    if cell is None:
        cell = next((p for p in range(step, size + 1, step) if repeats(p, 1)), size)
        if cell == size > step:
            bulk = "" if sites.is_ring else " in the bulk"
            raise ValueError(f"not translation-invariant{bulk}: no shift by fewer than {size} sites leaves it as it is")
    elif cell % step:
        raise ValueError(f"cell: {cell} sites are no multiple of the {step} sites of the lattice's cells")
    elif not repeats(cell, 0):
        raise ValueError(f"not invariant under translation by {cell} of {size} sites")
    return [(pattern, place, complex(c[place])) for pattern, c in found.items() for place in range(cell)], cell


def _same(a: np.ndarray, b: np.ndarray, largest: float) -> bool:
    return not len(a) or float(np.abs(a - b).max()) <= 1e-12 * largest


def _unwound(word: Pattern, size: int, modes: int, *, ring: bool) -> tuple[int, Pattern]:
    """First site of a word along the shortest arc that covers it, and its slots counted from there."""
    places = sorted({slot // modes for slot, _ in word})
    start = places[0]
    if ring:
        after = [(b - a) % size for a, b in zip(places, [*places[1:], places[0]], strict=True)]
        start = places[(after.index(max(after)) + 1) % len(places)]
    return start, tuple(sorted(((slot - start * modes) % (size * modes), letter) for slot, letter in word))


def _spin_string(word: Pattern) -> dict[tuple[int, int], float]:
    """The Pauli string of a word of Sx, Sy and Sz."""
    at = dict(word)
    text = "".join(_SPINS[at[site]] if site in at else "I" for site in range(word[-1][0] + 1))
    return {bits(text, 0): 0.5 ** len(word)}

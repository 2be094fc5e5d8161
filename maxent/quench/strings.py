"""Pauli strings on the infinite chain: as bits, as densities of translation-invariant operators, and their commutators.

An operator is Q = sum_c t^c T^(p c)(q): a density q of real numbers times Pauli strings, translated by whole cells of p
sites, with the sign t = +1 (momentum 0) or t = -1 (momentum pi). Every string of q starts in the cell 0, that is, its
first site that is no identity lies in 0..p-1. This form is unique, total derivatives T^p(a) - t a never appear, and so
Q = 0 only for q = 0. Floor: quench. Must not know null spaces.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np

from maxent.lattice import OperatorSum

__all__ = ["Brackets", "Density", "brackets", "density", "fraction", "letters", "ranges", "strings"]

#: Most sites that a string may cover: two strings of bits and their sum share 63 bits.
WIDEST = 30
_LETTERS = "IXZY"
_SPINS = {"Sx": "X", "Sy": "Y", "Sz": "Z"}


@dataclass(frozen=True, eq=False)
class Density:
    """Density of a translation-invariant operator: real numbers times Pauli strings that start in the cell 0.

    Attributes
    ----------
    x, z : (n,) int64 ndarrays
        Bits of the strings: site s carries X^x_s Z^z_s, and Y where both bits are set.
    coefficients : (n,) float64 ndarray
    cell : int
        Sites per unit cell.
    names : tuple of str
        Names of the sites of a cell of the lattice, where they have some; `cell` is a multiple of their number.
    """

    x: np.ndarray
    z: np.ndarray
    coefficients: np.ndarray
    cell: int = 1
    names: tuple[str, ...] = ()

    @property
    def range(self) -> int:
        """Sites that the widest string covers, from its first to its last; 0 without strings."""
        return int(ranges(self.x, self.z).max(initial=0))

    @cached_property
    def fractions(self) -> tuple[int, ...]:
        """Whole numbers proportional to the coefficients, where each ratio is read as the nearest simple fraction.

        A ratio that is no simple fraction to 8 units in the last place is taken as the number it is in binary.
        """
        first = float(self.coefficients[0])
        ratios = [fraction(float(c) / first, 8 * 2.0**-52) or Fraction(float(c) / first) for c in self.coefficients]
        common = np.lcm.reduce([r.denominator for r in ratios], dtype=object)
        return tuple(int(r * common) for r in ratios)

    @property
    def terms(self) -> tuple[tuple[float, str, int], ...]:
        """Coefficient, letters and place of the first letter in the cell, of each string."""
        return tuple(
            (float(c), *letters(int(x), int(z))) for c, x, z in zip(self.coefficients, self.x, self.z, strict=True)
        )


def density(operator: OperatorSum | Iterable[Sequence[Any]], *, cell: int | None = None) -> Density:
    """Density of a translation-invariant Hermitian operator of spins 1/2.

    Parameters
    ----------
    operator : OperatorSum or iterable of (coefficient, letters) or (coefficient, letters, place)
        A sum on a ring, whose invariance under translations is checked. Or Pauli strings such as ``(0.5, "XIX")``,
        that stand for themselves and all their translates by whole cells; the place (default 0) is the site in the
        cell at which the letters start. Multiples of the identity are dropped.
    cell : int, optional
        Sites per unit cell. Default: for a sum on a ring the smallest that it has; for strings 1.

    Returns
    -------
    Density

    Raises
    ------
    TypeError
        No spins 1/2 on a ring, or a coefficient or letters of the wrong kind.
    ValueError
        Not translation-invariant, not Hermitian, too long-ranged for the ring, or zero.
    """
    if cell is not None and (isinstance(cell, bool) or not isinstance(cell, int) or cell < 1):
        raise ValueError(f"cell: the sites per unit cell must be a whole number from 1 on, not {cell!r}")
    names: tuple[str, ...] = ()
    if isinstance(operator, OperatorSum):
        found, cell, names = _from_sum(operator, cell)
    else:
        cell = cell or 1
        found = _from_words(operator, cell)
    found = {string: c for string, c in found.items() if c != 0.0}
    if not found:
        raise ValueError("the Hamiltonian is zero (or a multiple of the identity): everything commutes with it")
    keys = sorted(found, key=lambda key: (_width(*key), *key))
    if _width(*keys[-1]) > WIDEST:
        raise ValueError(f"a term covers {_width(*keys[-1])} sites; the most is {WIDEST}")
    pairs = np.array(keys, np.int64)
    return Density(pairs[:, 0], pairs[:, 1], np.array([found[key] for key in keys]), cell, names)


def _from_words(words: Iterable[Sequence[Any]], cell: int) -> dict[tuple[int, int], float]:
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
        at = (place + first) % cell
        x = sum(1 << (at + s) for s, a in enumerate(text[first:]) if a in "XY")
        z = sum(1 << (at + s) for s, a in enumerate(text[first:]) if a in "YZ")
        if x | z:
            found[x, z] = found.get((x, z), 0.0) + number.real
    return found


def _from_sum(
    operator: OperatorSum, cell: int | None
) -> tuple[dict[tuple[int, int], float], int, tuple[str, ...]]:
    sites = operator.sites
    names = sites.cell if len(sites.cell) > 1 else ()
    step = max(len(names), 1)
    if any(d != 2 for d in sites.dims) or any(o not in _SPINS for t in operator.terms for o in t.operators):
        raise TypeError("the search is for spin-1/2 sites so far: spins Sx, Sy, Sz, or X, Y, Z")
    if not sites.is_ring:
        raise TypeError("the search needs a ring: the ends of an open chain break the translations")
    if not operator.is_hermitian:
        raise ValueError(f"not Hermitian: it holds {operator.non_hermitian_word}")
    size = sites.size
    if 2 * (operator.range - 1) >= size:
        raise ValueError(
            f"a term covers {operator.range} of {size} sites, so that which way around the ring it goes is open; "
            f"take a ring of at least {2 * operator.range - 1} sites"
        )
    patterns: dict[str, np.ndarray] = {}
    for term, value in zip(operator.terms, operator.coefficients, strict=True):
        if term.positions:
            start, text = _unwound(term.positions, term.operators, size)
            here = patterns.setdefault(text, np.zeros(size))
            here[start] += float(value.real) / 2 ** len(term.positions)
    largest = max((float(np.abs(c).max()) for c in patterns.values()), default=0.0)

    def repeats(shift: int) -> bool:
        return all(float(np.abs(c - np.roll(c, shift)).max()) <= 1e-12 * largest for c in patterns.values())

    if cell is None:
        cell = next(p for p in range(step, size + 1, step) if size % p == 0 and repeats(p))
        if cell == size > step:
            raise ValueError(f"not translation-invariant: no shift by fewer than {size} sites leaves it as it is")
    elif cell % step:
        raise ValueError(f"cell: {cell} sites are no multiple of the {step} sites of the lattice's cells")
    elif size % cell or not repeats(cell):
        raise ValueError(f"not invariant under translation by {cell} of {size} sites")
    words = [(float(c[s]), text, s) for text, c in patterns.items() for s in range(cell)]
    return _from_words(words, cell), cell, names


def _unwound(positions: Sequence[int], names: Sequence[str], size: int) -> tuple[int, str]:
    """First site and letters of a word along the shortest arc that covers it."""
    after = [(b - a) % size for a, b in zip(positions, [*positions[1:], positions[0]], strict=True)]
    start = positions[(after.index(max(after)) + 1) % len(positions)] if len(positions) > 1 else positions[0]
    at = {(s - start) % size: _SPINS[name] for s, name in zip(positions, names, strict=True)}
    return start, "".join(at.get(s, "I") for s in range(max(at) + 1))


def letters(x: int, z: int) -> tuple[str, int]:
    """Letters of a string from its first site that is no identity on, and the place of that site."""
    first = ((x | z) & -(x | z)).bit_length() - 1
    x, z = x >> first, z >> first
    return "".join(_LETTERS[(x >> s & 1) + 2 * (z >> s & 1)] for s in range((x | z).bit_length())), first


def ranges(x: np.ndarray, z: np.ndarray) -> np.ndarray:
    """Sites that each string covers, from its first to its last; strings of bits (n,), not the identity."""
    bits = x | z
    return _length(bits) - _first(bits)


def strings(up_to: int, cell: int) -> tuple[np.ndarray, np.ndarray]:
    """All strings that start in the cell 0 and cover at most `up_to` sites, ordered by range, letters and place.

    Parameters
    ----------
    up_to : int
        Largest range.
    cell : int
        Sites per unit cell.

    Returns
    -------
    x, z : (n,) int64 ndarrays
        Bits, n = 3 * 4**(up_to-1) * cell.
    """
    code = np.arange(4**up_to, dtype=np.int64)
    x, z = np.zeros_like(code), np.zeros_like(code)
    for s in range(up_to):
        # the last site varies fastest; X before Y before Z before the identity
        digit = code >> 2 * (up_to - 1 - s) & 3
        x |= (digit < 2).astype(np.int64) << s
        z |= ((digit == 1) | (digit == 2)).astype(np.int64) << s
    starts = ((x | z) & 1) == 1
    x, z = (np.concatenate([bits[starts] << place for place in range(cell)]) for bits in (x, z))
    weight = np.bitwise_count(x | z)
    order = np.lexsort((weight, ranges(x, z)))
    return x[order], z[order]


class Brackets(NamedTuple):
    """Commutators of single strings, [T^(p m) A, B] = 2i * sign * T^(p r) C; pairs that commute have no entry."""

    left: np.ndarray
    right: np.ndarray
    shift: np.ndarray
    x: np.ndarray
    z: np.ndarray
    moved: np.ndarray
    sign: np.ndarray

    def keys(self) -> np.ndarray:
        """One number per string C."""
        return self.x << 31 | self.z

    def signs(self, left: int, right: int) -> np.ndarray:
        """Sign of each entry in the density of the commutator of two operators with the signs t of `left`, `right`."""
        odd = (self.shift * (left < 0) + self.moved * (left * right < 0)) & 1
        return self.sign * (1 - 2 * odd)


def brackets(ax: np.ndarray, az: np.ndarray, bx: np.ndarray, bz: np.ndarray, cell: int) -> Brackets:
    """Commutators of all translates of strings A with strings B.

    Parameters
    ----------
    ax, az : (k,) int64 ndarrays
        Bits of the strings A.
    bx, bz : (n,) int64 ndarrays
        Bits of the strings B.
    cell : int
        Sites per unit cell.

    Returns
    -------
    Brackets
        `left`, `right` say which A and B; `shift` is m and `moved` is r of [T^(p m) A, B] = 2i sign T^(p r) C; `x`, `z`
        are the bits of C, which starts in the cell 0.
    """
    reach = int(_length(ax | az).max(initial=1)) - 1
    lift = cell * (reach // cell)  # so that no translate has a bit below 0
    bx, bz = bx << lift, bz << lift
    n_y = np.bitwise_count(bx & bz).astype(np.int64)
    parts = []
    for shift in range(-(lift // cell), (int(_length(bx | bz).max(initial=1)) - 1 - lift) // cell + 1):
        tx, tz = (bits[:, None] << (lift + shift * cell) for bits in (ax, az))
        odd = (np.bitwise_count(tx & bz) + np.bitwise_count(tz & bx)) & 1
        left, right = np.nonzero(odd)
        if not len(left):
            continue
        tx, tz = tx[left, 0], tz[left, 0]
        cx, cz = tx ^ bx[right], tz ^ bz[right]
        # A B = i^turns C with every string written as i^(number of Y) X^x Z^z
        turns = (
            np.bitwise_count(tx & tz).astype(np.int64) + n_y[right]
            - np.bitwise_count(cx & cz) + 2 * np.bitwise_count(tz & bx[right]).astype(np.int64)
        ) % 4  # fmt: skip
        cells = _first(cx | cz) // cell
        back = cells * cell
        parts.append((left, right, np.full(len(left), shift), cx >> back, cz >> back, cells - lift // cell, 2 - turns))
    if not parts:
        none = np.zeros(0, np.int64)
        return Brackets(*([none] * 7))
    return Brackets(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def fraction(value: float, rtol: float, largest: int = 10**6) -> Fraction | None:
    """Fraction with a small denominator that a number is to a relative tolerance, or None."""
    if value == 0.0:
        return Fraction(0)
    near = Fraction(value).limit_denominator(largest)
    return near if abs(float(near) - value) <= rtol * abs(value) else None


def _width(x: int, z: int) -> int:
    bits = x | z
    return bits.bit_length() - (bits & -bits).bit_length() + 1


def _length(bits: np.ndarray) -> np.ndarray:
    """Number of bits up to the last one that is set; exact, since 2**53 is far above all bits used."""
    return np.frexp(bits.astype(np.float64))[1].astype(np.int64)


def _first(bits: np.ndarray) -> np.ndarray:
    return _length(bits & -bits) - 1

"""Pauli strings on the infinite chain: as bits, as densities of translation-invariant operators, and their commutators.

An operator is Q = sum_c t^c T^(p c)(q): a density q of real numbers times Pauli strings, translated by whole cells of p
sites, with the sign t = +1 (momentum 0) or t = -1 (momentum pi). Every string of q starts in the cell 0, that is, its
first site that is no identity lies in 0..p-1. This form is unique, total derivatives T^p(a) - t a never appear, and so
Q = 0 only for q = 0. Fermions are strings too, one letter per mode, see `maxent.quench.fermion_words`.
Floor: quench. Must not know null spaces, formulas or lattices.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property
from typing import NamedTuple

import numpy as np

__all__ = ["Brackets", "Density", "bits", "brackets", "count", "fraction", "letters", "ranges", "strings"]

#: Most letters that a string may cover: two strings of bits and their sum share 63 bits.
WIDEST = 30
_LETTERS = "IXZY"


@dataclass(frozen=True, eq=False)
class Density:
    """Density of a translation-invariant operator: real numbers times Pauli strings that start in the cell 0.

    Attributes
    ----------
    x, z : (n,) int64 ndarrays
        Bits of the strings: letter s is X^x_s Z^z_s, and Y where both bits are set.
    coefficients : (n,) float64 ndarray
    cell : int
        Letters per unit cell: sites, or modes of fermions.
    names : tuple of str
        Names of the sites of a cell of the lattice, where they have some.
    species : tuple of str
        Species of fermions, one letter per site each; one empty name where they need none. Empty for spins.
    is_open : bool
        Whether it was read from an open chain, whose ends are not part of it.
    """

    x: np.ndarray
    z: np.ndarray
    coefficients: np.ndarray
    cell: int = 1
    names: tuple[str, ...] = ()
    species: tuple[str, ...] = ()
    is_open: bool = False

    @property
    def modes(self) -> int:
        """Letters per site."""
        return max(len(self.species), 1)

    @property
    def sites(self) -> int:
        """Sites per unit cell."""
        return self.cell // self.modes

    @property
    def range(self) -> int:
        """Sites that the widest string covers, from its first to its last; 0 without strings."""
        return int(ranges(self.x, self.z, self.modes).max(initial=0))

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


def letters(x: int, z: int) -> tuple[str, int]:
    """Letters of a string from its first site that is no identity on, and the place of that site."""
    first = ((x | z) & -(x | z)).bit_length() - 1
    x, z = x >> first, z >> first
    return "".join(_LETTERS[(x >> s & 1) + 2 * (z >> s & 1)] for s in range((x | z).bit_length())), first


def bits(text: str, place: int) -> tuple[int, int]:
    """Bits x, z of a string of letters that starts at a place."""
    x = sum(1 << place + s for s, a in enumerate(text) if a in "XY")
    return x, sum(1 << place + s for s, a in enumerate(text) if a in "YZ")


def ranges(x: np.ndarray, z: np.ndarray, modes: int = 1) -> np.ndarray:
    """Sites that each string covers, from its first to its last; strings of bits (n,), not the identity."""
    bits = x | z
    return (_length(bits) - 1) // modes - _first(bits) // modes + 1


def count(up_to: int, cell: int, modes: int = 1, *, even: bool = False) -> int:
    """Number of strings that `strings` would give, without making them."""
    # of the even strings, the letters after the first one decide whether X and Y are even in number
    free = [up_to * modes - place % modes - 1 for place in range(cell)]
    return sum(1 if even and not n else 3 * 4**n // (2 if even else 1) for n in free)


def strings(up_to: int, cell: int, modes: int = 1, *, even: bool = False) -> tuple[np.ndarray, np.ndarray]:
    """All strings that start in the cell 0 and cover at most `up_to` sites, ordered by range, letters and place.

    Parameters
    ----------
    up_to : int
        Largest range.
    cell : int
        Letters per unit cell.
    modes : int
        Letters per site.
    even : bool
        Whether X and Y together must be even in number: the strings of fermions that are local.

    Returns
    -------
    x, z : (n,) int64 ndarrays
        Bits; n = 3 * 4**(up_to-1) * cell with one letter per site.
    """
    parts = [_starting(up_to * modes - place % modes, place) for place in range(cell)]
    x, z = (np.concatenate(bits) for bits in zip(*parts, strict=True))
    if even:
        local = np.bitwise_count(x) % 2 == 0
        x, z = x[local], z[local]
    order = np.lexsort((np.bitwise_count(x | z), ranges(x, z, modes)))
    return x[order], z[order]


def _starting(most: int, place: int) -> tuple[np.ndarray, np.ndarray]:
    """Strings of at most so many letters whose first one is at a place."""
    code = np.arange(4**most, dtype=np.int64)
    x, z = np.zeros_like(code), np.zeros_like(code)
    for s in range(most):
        # the last letter varies fastest; X before Y before Z before the identity
        digit = code >> 2 * (most - 1 - s) & 3
        x |= (digit < 2).astype(np.int64) << s
        z |= ((digit == 1) | (digit == 2)).astype(np.int64) << s
    starts = ((x | z) & 1) == 1
    return x[starts] << place, z[starts] << place


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
        Letters per unit cell.

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


def _length(bits: np.ndarray) -> np.ndarray:
    """Number of bits up to the last one that is set; exact, since 2**53 is far above all bits used."""
    return np.frexp(bits.astype(np.float64))[1].astype(np.int64)


def _first(bits: np.ndarray) -> np.ndarray:
    return _length(bits & -bits) - 1

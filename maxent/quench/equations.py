"""The equations for conserved operators: the matrix of the commutator with H on all strings up to a range.

M maps the density q of Q to that of [H, Q]/(2i). Where fermions keep their number, M is turned into the basis of
`maxent.quench.ladder_basis`, in which it falls into small blocks. Floor: quench. Must not know which basis of a null
space reads well.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from fractions import Fraction
from functools import cached_property

import numpy as np
import scipy.sparse as sp

from maxent.quench.charges import LocalCharge, Momentum, NearlyConserved
from maxent.quench.ladder_basis import ladder_basis
from maxent.quench.null_spaces import Level, components, null_space
from maxent.quench.simplify import Word, echelon, rational
from maxent.quench.strings import Density, brackets, letters, ranges, strings

__all__ = ["Space"]

#: So many columns are turned at a time.
_COLUMNS = 4096


class Space:
    """Operators up to a range, ordered by range, and the matrix of the commutator with H.

    Parameters
    ----------
    h : Density
        The Hamiltonian.
    up_to : int
        Largest range.
    momentum : "0" or "pi"

    Attributes
    ----------
    x, z, ranges : (n,) int64 ndarrays
        Bits of the strings that are the unknowns, and the sites that they cover.
    matrix : (k, n) scipy.sparse.csc_array
        From coefficients of strings to those of the commutator.
    equations : (k', n) scipy.sparse.csc_array
        The same in a basis in which it falls into smaller blocks, where there is one.
    turn : (n, n) scipy.sparse.csr_array or None
        That basis as rows, in the order of the ranges.
    scale : float
        Bound of the largest singular value.
    """

    def __init__(self, h: Density, up_to: int, momentum: Momentum):
        self.h, self.momentum, self.up_to = h, momentum, up_to
        self.sign = -1 if momentum == "pi" else 1
        self.x, self.z = strings(up_to, h.cell, h.modes, even=bool(h.species))
        self.size = len(self.x)
        self.ranges = ranges(self.x, self.z, h.modes)
        found = brackets(h.x, h.z, self.x, self.z, h.cell)
        keys, place = np.unique(found.keys(), return_inverse=True)
        values = h.coefficients[found.left] * found.signs(1, self.sign)
        self.matrix = sp.csc_array((values, (place, found.right)), shape=(len(keys), self.size))
        self.matrix.data[np.abs(self.matrix.data) <= 1e-15 * np.abs(h.coefficients).max()] = 0.0
        self.matrix.eliminate_zeros()
        self.turn: sp.csr_array | None = None
        self.equations = self.matrix
        if self._keeps_number():
            turn = ladder_basis(self.x, self.z)
            self.turn = turn[np.argsort(self.ranges[turn.indices[turn.indptr[:-1]]], kind="stable")]
            self.equations = self._turned(ladder_basis(keys >> 31, keys & (1 << 31) - 1))
        size = abs(self.matrix)
        self.scale = float(np.sqrt(size.sum(axis=0).max(initial=0.0) * size.sum(axis=1).max(initial=0.0)))

    def _keeps_number(self) -> bool:
        """Whether these are fermions whose total number is conserved."""
        h = self.h
        if not h.species:
            return False
        z = 1 << np.arange(h.cell, dtype=np.int64)
        found = brackets(h.x, h.z, np.zeros_like(z), z, h.cell)
        place = np.unique(found.keys(), return_inverse=True)[1]
        changed = np.bincount(place, h.coefficients[found.left] * found.sign)
        return bool(np.all(np.abs(changed) <= 1e-14 * np.abs(h.coefficients).max()))

    def _turned(self, left: sp.csr_array) -> sp.csc_array:
        """The matrix in the ladder basis, some columns at a time, as most of what is added up cancels."""
        assert self.turn is not None
        parts = []
        for first in range(0, self.size, _COLUMNS):
            part = left @ (self.matrix @ sp.csc_array(self.turn[first : first + _COLUMNS].T))
            part.data[np.abs(part.data) <= 1e-14 * np.abs(self.h.coefficients).max()] = 0.0
            part.eliminate_zeros()
            parts.append(part)
        return sp.csc_array(sp.hstack(parts))

    def level(self, k: int, say: Callable[[str], None]) -> Level:
        """Null space and next singular value of the operators up to a range."""
        n = self.below(k)
        found = null_space(self.equations[:, :n], self.scale, say)
        if self.turn is None:
            return found
        back = self.turn[:n, :n]
        parts = [(np.arange(n), rows @ back[some]) for some, rows in found.parts]
        return Level(parts, found.value, found.lowest @ back, found.largest_zero)

    @property
    def widest(self) -> int:
        """Unknowns of the largest block."""
        return max(map(len, components(self.equations)))

    def below(self, up_to: int) -> int:
        """Number of operators with at most this range; they come first."""
        return int(np.searchsorted(self.ranges, up_to, side="right"))

    def place(self, x: int, z: int) -> int:
        """Number of a string."""
        return self._places[x << 31 | z]

    @cached_property
    def _places(self) -> dict[int, int]:
        return {key: n for n, key in enumerate((self.x << 31 | self.z).tolist())}

    def hamiltonian(self) -> np.ndarray | None:
        """H as a row (size,), or None if it is no member of the space."""
        if self.h.range > self.up_to or self.momentum == "pi":
            return None
        row = np.zeros(self.size)
        for x, z, coefficient in zip(self.h.x.tolist(), self.h.z.tolist(), self.h.coefficients, strict=True):
            row[self.place(x, z)] = coefficient
        return row

    def charge(self, row: np.ndarray, *, fractions: bool = True) -> LocalCharge:
        """Operator with a row (size,) as coefficients."""
        on = np.flatnonzero(row)
        norm = float(np.linalg.norm(row) * np.linalg.norm(self.h.coefficients))
        defect = float(np.linalg.norm(self.matrix @ row)) / norm
        simple = rational(row[on]) if fractions else None
        exact = simple is not None and self.commutes(on, simple)
        values: list[Fraction | float] = [*simple] if simple and exact else row[on].tolist()
        words: list[Word] = []
        for value, n in zip(values, on, strict=True):
            words.append((value, *letters(int(self.x[n]), int(self.z[n]))))
        return LocalCharge(
            int(self.ranges[on].max()), tuple(words), self.h.cell, self.momentum, defect, exact, names=self.h.names,
            species=self.h.species,
        )  # fmt: skip

    def commutes(self, on: np.ndarray, values: Sequence[Fraction]) -> bool:
        """Whether fractions times some of the operators commute with H, in whole numbers."""
        common = np.lcm.reduce([v.denominator for v in values], dtype=object)
        q = np.array([int(v * common) for v in values], dtype=object)
        h = np.array(self.h.fractions, dtype=object)
        found = brackets(self.h.x, self.h.z, self.x[on], self.z[on], self.h.cell)
        keys, place = np.unique(found.keys(), return_inverse=True)
        total = np.zeros(len(keys), dtype=object)
        np.add.at(total, place, h[found.left] * q[found.right] * found.signs(1, self.sign).astype(object))
        return not total.any()

    def nearly(self, level: Level) -> NearlyConserved | None:
        """The most nearly conserved operator of a level."""
        if not len(level.lowest):
            return None
        rows = np.zeros((len(level.lowest), self.size))
        rows[:, : level.lowest.shape[1]] = level.lowest
        row = echelon(rows, [(np.arange(self.size), len(rows))])[0]
        charge = self.charge(row / np.linalg.norm(row), fractions=False)
        return NearlyConserved(level.value, len(rows), charge)

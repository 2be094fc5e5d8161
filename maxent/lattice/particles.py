"""Letters of one fermion mode and of one boson mode.

Fermions: dagger(c), c and n = dagger(c) c with c c = 0 and c dagger(c) = 1 - n; letters of different modes with one
operator each are odd and anticommute. Bosons: the letters are the ordered products dagger(b)^m b^n with
b dagger(b) = dagger(b) b + 1, so that

    b^n dagger(b)^p = sum_k k! C(n,k) C(p,k) dagger(b)^(p-k) b^(n-k);

a cut-off enters the matrices only, which are those of the ordered products between the states that are kept.
Floor: lattice (standard library and NumPy). Must not know sites.
"""

from __future__ import annotations

import math

import numpy as np

from maxent.lattice.local import IDENTITY, Combination, LocalOperators, power_text

CREATE, ANNIHILATE, NUMBER = range(3)
_ONE, _MINUS = (1, 0), (-1, 0)
_BASE = 64


class FermionOperators(LocalOperators):
    """Operators of one fermion mode in the basis (empty, occupied).

    Parameters
    ----------
    species : str
        Name of the species, written behind the position; empty when there is one only.
    """

    def __init__(self, species: str = "") -> None:
        self.species = species
        symbols = {"c": ((_ONE, ANNIHILATE),), "n": ((_ONE, NUMBER),)}
        super().__init__("fermion", 2, symbols, odd=(CREATE, ANNIHILATE))

    def text(self, letter: int, subscript: str) -> str:
        """One of dagger(c), c, n."""
        place = f"[{subscript}]" if subscript else ""
        return (f"dagger(c{place})", f"c{place}", f"n{place}")[letter]

    def rank(self, letter: int) -> int:
        """Creators first, annihilators last."""
        return (0, 2, 1)[letter]

    def _product(self, left: int, right: int) -> Combination:
        table: dict[tuple[int, int], Combination] = {
            (CREATE, ANNIHILATE): ((_ONE, NUMBER),),
            (ANNIHILATE, CREATE): ((_ONE, IDENTITY), (_MINUS, NUMBER)),
            (NUMBER, NUMBER): ((_ONE, NUMBER),),
            (NUMBER, CREATE): ((_ONE, CREATE),),
            (ANNIHILATE, NUMBER): ((_ONE, ANNIHILATE),),
        }
        return table.get((left, right), ())

    def _adjoint(self, letter: int) -> Combination:
        return ((_ONE, (ANNIHILATE, CREATE, NUMBER)[letter]),)

    def _matrix(self, letter: int) -> np.ndarray:
        matrix = np.zeros((2, 2))
        matrix[((1, 0), (0, 1), (1, 1))[letter]] = 1.0
        return matrix


class BosonOperators(LocalOperators):
    """Operators of one boson mode; the letter of dagger(b)^m b^n is 64 m + n.

    Parameters
    ----------
    cutoff : int or None
        Largest occupation in the matrices; None: there are no matrices.
    """

    def __init__(self, cutoff: int | None) -> None:
        self.cutoff = cutoff
        symbols = {"b": ((_ONE, 1),), "n": ((_ONE, _BASE + 1),)}
        super().__init__("boson", 0 if cutoff is None else cutoff + 1, symbols)

    @staticmethod
    def powers(letter: int) -> tuple[int, int]:
        """Powers of dagger(b) and of b."""
        return divmod(letter, _BASE)

    def text(self, letter: int, subscript: str) -> str:
        """Product of powers of dagger(b) and b, or n."""
        place = f"[{subscript}]" if subscript else ""
        created, removed = self.powers(letter)
        if created == removed == 1:
            return f"n{place}"
        return "*".join(power_text(f"dagger(b{place})", created) + power_text(f"b{place}", removed))

    def rank(self, letter: int) -> int:
        """Creators first, annihilators last."""
        created, removed = self.powers(letter)
        return 1 if created and removed else 0 if created else 2

    def _product(self, left: int, right: int) -> Combination:
        (m, n), (p, q) = self.powers(left), self.powers(right)
        if max(m + p, n + q) >= _BASE:
            raise ValueError(f"a power of b above {_BASE - 1} is out of range")
        found = []
        for k in range(min(n, p) + 1):
            created, removed = m + p - k, n + q - k
            letter = _BASE * created + removed if created or removed else IDENTITY
            found.append(((math.factorial(k) * math.comb(n, k) * math.comb(p, k), 0), letter))
        return tuple(sorted(found, key=lambda item: item[1]))

    def _adjoint(self, letter: int) -> Combination:
        created, removed = self.powers(letter)
        return ((_ONE, _BASE * removed + created),)

    def _matrix(self, letter: int) -> np.ndarray:
        if self.cutoff is None:
            raise ValueError("bosons without a cut-off have no matrices: give Bosons(cutoff=...)")
        created, removed = self.powers(letter)
        matrix = np.zeros((self.dimension, self.dimension))
        for n in range(removed, self.dimension):
            m = n - removed + created
            if m < self.dimension:
                matrix[m, n] = math.sqrt(math.perm(n, removed) * math.perm(m, created))
        return matrix

"""Operators of one slot: the letters that words are made of, and how two letters on the same slot multiply.

A slot is the smallest piece of a lattice that has operators of its own: a spin, one fermion mode, one boson mode.
Letters are numbered, independent, and with the identity span the algebra of the slot; products and conjugates of
letters are sums over letters with exact numbers, so a sum of words has one form only, and equality of two sums,
hence hermiticity too, is decided without matrices.
Floor: lattice (standard library and NumPy). Must not know where slots lie or how many there are: another kind of
slot is another subclass.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping
from fractions import Fraction

import numpy as np

Exact = int | Fraction
Factor = tuple[Exact, Exact]
"""Exact complex number as (real part, imaginary part)."""
Combination = tuple[tuple[Factor, int], ...]
"""Sum over letters: (factor, letter) each."""
IDENTITY = -1
"""Letter number that stands for the identity; it never appears inside a word."""


class LocalOperators(ABC):
    """Table of the operators of one kind of slot.

    Parameters
    ----------
    name : str
        What such a slot is called in messages.
    dimension : int
        Number of basis states of the slot.
    symbols : mapping from str to tuple of (factor, letter)
        Every operator name a formula may use, as a sum over letters.
    odd : collection of int
        Letters that change sign when they pass an odd letter of another slot (one fermion operator).
    has_hermitian_letters : bool
        Whether every letter is its own conjugate.
    """

    def __init__(
        self,
        name: str,
        dimension: int,
        symbols: Mapping[str, Combination],
        *,
        odd: tuple[int, ...] = (),
        has_hermitian_letters: bool = False,
    ) -> None:
        self.name, self.dimension, self.symbols = name, dimension, dict(symbols)
        self.odd, self.has_hermitian_letters = frozenset(odd), has_hermitian_letters
        self.products: dict[tuple[int, int], Combination] = {}
        self._adjoints: dict[int, Combination] = {}
        self._matrices: dict[int, np.ndarray] = {}

    def product(self, left: int, right: int) -> Combination:
        """Product of two letters, as a sum over letters; `IDENTITY` stands for the identity."""
        found = self.products.get((left, right))
        if found is None:
            found = self.products[left, right] = self._product(left, right)
        return found

    def adjoint(self, letter: int) -> Combination:
        """Hermitian conjugate of a letter, as a sum over letters."""
        found = self._adjoints.get(letter)
        if found is None:
            found = self._adjoints[letter] = self._adjoint(letter)
        return found

    def matrix(self, letter: int) -> np.ndarray:
        """Letter in the local basis, shape (dimension, dimension); read-only."""
        found = self._matrices.get(letter)
        if found is None:
            found = self._matrices[letter] = self._matrix(letter)
            found.setflags(write=False)
        return found

    def rank(self, letter: int) -> int:
        """Place of a letter in a printed word: 0 creators first, 1 neutral, 2 annihilators last."""
        return 1

    @abstractmethod
    def text(self, letter: int, subscript: str) -> str:
        """Letter as the formula language reads it, e.g. ``Sx[i]*Sz[i]**2``; an empty subscript leaves it out."""

    @abstractmethod
    def _product(self, left: int, right: int) -> Combination: ...

    @abstractmethod
    def _adjoint(self, letter: int) -> Combination: ...

    @abstractmethod
    def _matrix(self, letter: int) -> np.ndarray: ...


def power_text(name: str, exponent: int, most: int = 16) -> list[str]:
    """Factors of a power, none of them above the largest exponent that formulas take."""
    parts = [f"{name}**{most}"] * (exponent // most)
    rest = exponent % most
    return parts + ([name] if rest == 1 else [f"{name}**{rest}"] if rest else [])

"""Operators of one site: the letters that words are made of, and how two letters on the same site multiply.

Floor: lattice (standard library and NumPy). Equation: spin 1/2 in the basis (up, down), S_a = sigma_a / 2,
S_a S_b = delta_ab / 4 + (i / 2) epsilon_abc S_c. Letters are Hermitian and, with the identity, a basis of
the one-site matrices; so a sum of words is Hermitian exactly when all its coefficients are real. Must not
know where sites lie or how many there are: another kind of site is another table here.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

Exact = int | Fraction
Factor = tuple[Exact, Exact]
"""Exact complex number as (real part, imaginary part)."""
IDENTITY = -1
"""Letter number that stands for the identity; it never appears inside a word."""


@dataclass(frozen=True, eq=False)
class LocalOperators:
    """Table of the operators of one kind of site.

    Parameters
    ----------
    name : str
        What such a site is called in messages.
    dimension : int
        Number of basis states of the site.
    letters : tuple of str
        Names of the Hermitian basis operators without the identity; a letter is its index in this tuple.
    symbols : mapping from str to tuple of (factor, letter)
        Every operator name a formula may use, as a sum over letters.
    products : mapping from (letter, letter) to tuple of (factor, letter)
        Product of two letters on one site, as a sum over letters; `IDENTITY` stands for the identity.
    matrices : tuple of ndarray, each of shape (dimension, dimension)
        The letters as matrices in the local basis.
    """

    name: str
    dimension: int
    letters: tuple[str, ...]
    symbols: Mapping[str, tuple[tuple[Factor, int], ...]]
    products: Mapping[tuple[int, int], tuple[tuple[Factor, int], ...]]
    matrices: tuple[np.ndarray, ...]


def _spin_half() -> LocalOperators:
    half, quarter = Fraction(1, 2), Fraction(1, 4)
    products: dict[tuple[int, int], tuple[tuple[Factor, int], ...]] = {}
    for a in range(3):
        products[a, a] = (((quarter, 0), IDENTITY),)
        b, c = (a + 1) % 3, (a + 2) % 3
        products[a, b] = (((0, half), c),)
        products[b, a] = (((0, -half), c),)
    symbols: dict[str, tuple[tuple[Factor, int], ...]] = {
        "Sx": (((1, 0), 0),),
        "Sy": (((1, 0), 1),),
        "Sz": (((1, 0), 2),),
        "Splus": (((1, 0), 0), ((0, 1), 1)),
        "Sminus": (((1, 0), 0), ((0, -1), 1)),
        "X": (((2, 0), 0),),
        "Y": (((2, 0), 1),),
        "Z": (((2, 0), 2),),
    }
    matrices = (
        np.array([[0.0, 0.5], [0.5, 0.0]]),
        np.array([[0.0, -0.5j], [0.5j, 0.0]]),
        np.array([[0.5, 0.0], [0.0, -0.5]]),
    )
    for matrix in matrices:
        matrix.setflags(write=False)
    return LocalOperators("spin-1/2", 2, ("Sx", "Sy", "Sz"), symbols, products, matrices)


SPIN_HALF = _spin_half()
"""Spin 1/2: letters Sx, Sy, Sz; basis (up, down)."""

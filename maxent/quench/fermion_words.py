"""Fermion words and Pauli strings on a line of modes, both ways, and charges of fermions printed as formulas.

    c_j = Z_0 .. Z_{j-1} (X_j + i Y_j)/2,   n_j = (1 - Z_j)/2

with the modes in site-major order: all species of a site, then those of the next. In words with an even number of c and
dagger(c) the strings of Z to the left cancel, so that a local word is a sum of local strings, on a ring as on the
infinite line. A word is (mode, letter) in order of the modes, with the letters of `maxent.lattice`: dagger(c), c, n.
Factors are powers of two times 1 or i and exact in floating point. Floor: quench. Must not know null spaces.

References
----------
P. Jordan, E. Wigner, Z. Phys. 47, 631 (1928).
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from fractions import Fraction

from maxent.lattice.local import IDENTITY
from maxent.lattice.particles import ANNIHILATE, CREATE, NUMBER
from maxent.lattice.words import order_sign

__all__ = [
    "FermionWord",
    "expand",
    "fermion_words",
    "in_reading_order",
    "moves_particles",
    "span",
    "strings_of",
    "word_text",
    "words_of",
]

#: Modes and letters, in order of the modes.
FermionWord = tuple[tuple[int, int], ...]
#: Coefficients of Hermitian words: real and imaginary part, each kept exact where it is a fraction.
Hermitian = dict[tuple[FermionWord, bool], Fraction | float]


#: One mode of a string as letters, by x, z and whether an odd number of odd letters follows.
_LETTERS: dict[tuple[int, int, int], tuple[tuple[complex, int], ...]] = {
    (0, 0, 0): ((1, IDENTITY),),
    (0, 1, 0): ((1, IDENTITY), (-2, NUMBER)),
    (1, 0, 0): ((1, ANNIHILATE), (1, CREATE)),
    (1, 1, 0): ((-1j, ANNIHILATE), (1j, CREATE)),
    (0, 0, 1): ((1, IDENTITY), (-2, NUMBER)),
    (0, 1, 1): ((1, IDENTITY),),
    (1, 0, 1): ((-1, ANNIHILATE), (1, CREATE)),
    (1, 1, 1): ((1j, ANNIHILATE), (1j, CREATE)),
}
#: One letter as x and z, by the letter and whether an odd number of odd letters follows.
_STRINGS: dict[tuple[int, int], tuple[tuple[complex, int, int], ...]] = {
    (IDENTITY, 0): ((1, 0, 0),),
    (IDENTITY, 1): ((1, 0, 1),),
    (NUMBER, 0): ((0.5, 0, 0), (-0.5, 0, 1)),
    (NUMBER, 1): ((-0.5, 0, 0), (0.5, 0, 1)),
    (ANNIHILATE, 0): ((0.5, 1, 0), (0.5j, 1, 1)),
    (ANNIHILATE, 1): ((-0.5, 1, 0), (-0.5j, 1, 1)),
    (CREATE, 0): ((0.5, 1, 0), (-0.5j, 1, 1)),
    (CREATE, 1): ((0.5, 1, 0), (-0.5j, 1, 1)),
}


def moves_particles(word: FermionWord) -> bool:
    """Whether a word holds more than products of n."""
    return any(letter != NUMBER for _, letter in word)


def span(word: FermionWord, modes: int) -> int:
    """Sites that a word covers, from its first to its last."""
    return word[-1][0] // modes - word[0][0] // modes + 1


def words_of(x: int, z: int) -> dict[FermionWord, complex]:
    """Fermion words of a Pauli string with an even number of X and Y; the empty word is the identity."""
    found: list[tuple[complex, FermionWord]] = [(1, ())]
    after = 0
    for s in reversed(range((x | z).bit_length())):
        bits = x >> s & 1, z >> s & 1
        found = [
            (a * b, rest if letter == IDENTITY else ((s, letter), *rest))
            for a, rest in found
            for b, letter in _LETTERS[*bits, after]
        ]
        after ^= bits[0]
    return {word: a for a, word in found}


def strings_of(word: FermionWord) -> dict[tuple[int, int], complex]:
    """Pauli strings (x, z) of a word with an even number of c and dagger(c)."""
    letters = dict(word)
    found: list[tuple[complex, int, int]] = [(1, 0, 0)]
    after = 0
    for s in reversed(range(word[-1][0] + 1)):
        letter = letters.get(s, IDENTITY)
        found = [(a * b, x | u << s, z | v << s) for a, x, z in found for b, u, v in _STRINGS[letter, after]]
        after ^= letter not in (IDENTITY, NUMBER)
    return {(x, z): a for a, x, z in found}


def expand(word: FermionWord, imaginary: bool) -> dict[tuple[int, int], float]:
    """Pauli strings of a Hermitian word: w + h.c., i w + h.c., or w where it is its own conjugate."""
    factor = (1j if imaginary else 1) * (2 if moves_particles(word) else 1)  # w + h.c. is twice the Hermitian part
    strings = {string: (a * factor).real for string, a in strings_of(word).items()}
    return {string: a for string, a in strings.items() if a}


def fermion_words(strings: Iterable[tuple[Fraction | float, int, int]], *, cell: int, sign: int = 1) -> Hermitian:
    """Write a sum over all translates of Pauli strings in Hermitian words.

    Parameters
    ----------
    strings : iterable of (coefficient, x, z)
        Real coefficients, and bits of strings with an even number of X and Y that start in the cell 0.
    cell : int
        Modes per unit cell.
    sign : +1 or -1
        Sign between neighbouring cells.

    Returns
    -------
    dict from (word, imaginary) to coefficient
        The operator is the sum over all translates of ``a w + h.c.`` for pairs w, dagger(w), of which w is the one
        whose first odd letter is dagger(c), and of ``a w`` for products of n; a is real, or imaginary where that is
        said. Words start in the cell 0. The identity is left out, and so is what is rounding.
    """
    total: Hermitian = {}
    largest = 0.0
    for value, x, z in strings:
        for word, factor in words_of(x, z).items():
            if not word or (moves_particles(word) and not _creates_first(word)):
                continue  # the conjugate has the conjugate coefficient
            cells = word[0][0] // cell
            word = tuple((mode - cells * cell, letter) for mode, letter in word)
            for imaginary, part in ((False, factor.real), (True, factor.imag)):
                if part:
                    added = value * int(part) * sign ** (cells % 2)
                    key = word, imaginary
                    total[key] = added + total[key] if key in total else added
                    largest = max(largest, abs(float(added)))
    return {key: a for key, a in total.items() if abs(float(a)) > 1e-11 * largest}


def word_text(word: FermionWord, places: Sequence[str]) -> tuple[int, str]:
    """Sign and text of a word, creators first and annihilators last; `places` has the subscript of each mode."""
    rank = {CREATE: 0, NUMBER: 1, ANNIHILATE: 2}
    shown = sorted(range(len(word)), key=lambda k: rank[word[k][1]])
    sign = order_sign([k for k in shown if word[k][1] != NUMBER])
    names = {CREATE: "dagger(c[{}])", NUMBER: "n[{}]", ANNIHILATE: "c[{}]"}
    return sign, "*".join(names[word[k][1]].format(places[word[k][0]]) for k in shown)


def in_reading_order(words: Iterable[tuple[FermionWord, bool]], modes: int) -> list[tuple[FermionWord, bool]]:
    """Words by range, number of letters and place: products of n before what moves particles, real before imaginary."""
    return sorted(words, key=lambda key: (span(key[0], modes), len(key[0]), moves_particles(key[0]), key[0], key[1]))


def _creates_first(word: FermionWord) -> bool:
    return next(letter for _, letter in word if letter != NUMBER) == CREATE

"""Pfaffians with sign and logarithm apart, and spin operators as words of Majorana operators.

A string of Pauli matrices is a product of ``g_{2j} = (prod_{l<j} Z_l) X_j`` and ``g_{2j+1} = (prod_{l<j} Z_l) Y_j`` up
to a phase, and in a Gaussian state of fermions ``<phase g_word> = phase (-i)^m Pf(G_word)`` for a word of 2m letters
(P. Jordan, E. Wigner, Z. Phys. 47, 631 (1928); G. C. Wick, Phys. Rev. 80, 268 (1950)).  Floor: families; must not know
lattices.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping

import numpy as np

__all__ = ["Word", "added", "complement", "log_pfaffian", "log_word", "parity_word", "pauli_word", "word_mean"]

#: A phase and the Majorana operators it multiplies, in ascending order.
Word = tuple[complex, tuple[int, ...]]

#: ``(-i)^m`` by m modulo 4, exact where a power is not.
TURNS = (1 + 0j, -1j, -1 + 0j, 1j)


def log_pfaffian(matrix: np.ndarray) -> tuple[complex, float]:
    """Sign (or phase) and logarithm of the size of the Pfaffian of an antisymmetric matrix.

    Parlett-Reid elimination with pivoting (B. N. Parlett, J. K. Reid, BIT 10, 386 (1970); M. Wimmer, ACM Trans. Math.
    Softw. 38, 30 (2012), from memory).

    Parameters
    ----------
    matrix : (n, n) array_like
        Real or complex; the part above the diagonal counts.

    Returns
    -------
    sign : float or complex
        0 for a singular matrix or odd n, 1 for n = 0.
    log_size : float
        -inf for a singular matrix or odd n.
    """
    a = np.array(matrix, complex if np.iscomplexobj(matrix) else float)
    n = len(a)
    if n % 2:
        return 0.0, -np.inf
    sign, total = a.dtype.type(1), 0.0
    for k in range(0, n - 1, 2):
        pivot = k + 1 + int(np.argmax(np.abs(a[k + 1 :, k])))
        if a[pivot, k] == 0:
            return 0.0, -np.inf
        if pivot != k + 1:
            a[[k + 1, pivot]] = a[[pivot, k + 1]]
            a[:, [k + 1, pivot]] = a[:, [pivot, k + 1]]
            sign = -sign
        head = a[k, k + 1]
        size = abs(head)
        sign, total = sign * (head / size), total + float(np.log(size))
        ratio, column = a[k, k + 2 :] / head, a[k + 2 :, k + 1].copy()
        a[k + 2 :, k + 2 :] += np.outer(ratio, column) - np.outer(column, ratio)
    return sign.item(), total


def pauli_word(letters: Mapping[int, str]) -> Word:
    """The Majorana word of a product of Pauli matrices on different sites, such as ``{0: "X", 3: "X"}``.

    Raises
    ------
    ValueError
        A letter that is not X, Y or Z.
    """
    for site, letter in letters.items():
        if letter not in ("X", "Y", "Z"):
            raise ValueError(f"a Pauli matrix is X, Y or Z, not {letter!r} at site {site}")
    flips = [site for site in sorted(letters) if letters[site] != "Z"]
    start = 0 if len(flips) % 2 else min(letters, default=0)
    phase, word = 1.0 + 0j, []
    # an odd word carries its string from the first site on
    is_open = bool(len(flips) % 2)
    for site in range(start, max(letters, default=-1) + 1):
        letter, even, odd = letters.get(site, "I"), 2 * site, 2 * site + 1
        if letter in ("X", "Y"):
            # opening: X Z = -i g_odd, Y Z = i g_even; closing: the letter after its string
            turn, g = ((1.0, even) if letter == "X" else (1.0, odd)) if is_open else (
                (-1j, odd) if letter == "X" else (1j, even)
            )  # fmt: skip
            phase, is_open = phase * turn, not is_open
            word.append(g)
        elif is_open != (letter == "Z"):  # a string over a free site, or a Z outside of strings; both cancel
            phase *= -1j
            word += [even, odd]
    return phase, tuple(word)


def parity_word(sites: int) -> Word:
    """The parity ``prod_j Z_j`` of all sites."""
    return TURNS[sites % 4], tuple(range(2 * sites))


def complement(word: Word, sites: int) -> Word:
    """`word` times the parity of all sites: the letters it does not have."""
    phase, letters = parity_word(sites)
    own = set(word[1])
    # g_a moves past the a letters before its like; letters below are not moved when the last ones go first
    turn = (-1) ** sum(own)
    return word[0] * phase * turn, tuple(g for g in letters if g not in own)


def word_mean(covariance: np.ndarray, word: Word) -> complex:
    """``<phase g_word>`` in the Gaussian state of a covariance G (2n, 2n)."""
    turn, size = _wick(covariance, word)
    return complex(turn * np.exp(size))


def log_word(covariance: np.ndarray, word: Word) -> tuple[float, float]:
    """Sign and logarithm of the size of ``<phase g_word>`` of a Hermitian word, where the mean may be below 1e-308.

    Returns
    -------
    sign : {1.0, -1.0, 0.0}
    log_size : float
        -inf where the mean is 0.
    """
    turn, size = _wick(covariance, word)
    return float(turn.real), size


def _wick(covariance: np.ndarray, word: Word) -> tuple[complex, float]:
    phase, letters = word
    sign, size = log_pfaffian(covariance[np.ix_(letters, letters)])
    return complex(phase * TURNS[len(letters) // 2 % 4] * sign), size


def added(terms: Iterable[tuple[float, float]]) -> tuple[float, float]:
    """Sign and logarithm of the size of ``sum factor exp(log)`` of pairs (factor, log)."""
    kept = [(factor, log) for factor, log in terms if factor and log > -np.inf]
    top = max((log for _, log in kept), default=0.0)
    total = float(sum(factor * np.exp(log - top) for factor, log in kept))
    return (float(np.sign(total)), top + float(np.log(abs(total)))) if total else (0.0, -np.inf)

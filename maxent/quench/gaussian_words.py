"""Sums of products of Pauli matrices as sums of words of Majorana operators, and their means by Wick's theorem.

A word of 2m operators has the mean ``(-i)^m Pf(G_word)`` in the Gaussian state with the covariance G.  Where a state is
the same in every cell of a ring, words that are translates of one another are one word.  Floor: quench.  Must not know
families, starts or dynamics.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import NamedTuple

import numpy as np

from maxent.families.pfaffians import complement, log_pfaffian, pauli_word
from maxent.lattice import OperatorSum

__all__ = ["WordSum", "spin_period", "word_sum"]


class WordSum(NamedTuple):
    """A sum of words of Majorana operators, ``sum_w coefficient_w <g_word>``.

    Attributes
    ----------
    coefficients : tuple of complex
    words : tuple of tuple of int
        Each of an even number of operators.
    """

    coefficients: tuple[complex, ...]
    words: tuple[tuple[int, ...], ...]

    @property
    def longest(self) -> int:
        """Operators of the longest word."""
        return max(map(len, self.words), default=0)

    @property
    def letters(self) -> list[int]:
        """Every Majorana operator that occurs, ascending."""
        return sorted({g for word in self.words for g in word})

    def mean(self, g: np.ndarray, at: Mapping[int, int] | None = None) -> float:
        """Mean in the Gaussian state of a covariance; `at` says where it holds each operator, itself by default."""
        total = 0.0
        for coefficient, word in zip(self.coefficients, self.words, strict=True):
            index = list(word) if at is None else [at[x] for x in word]
            total += float((coefficient * (-1j) ** (len(word) // 2) * _pfaffian(g[np.ix_(index, index)])).real)
        return total


def _pfaffian(a: np.ndarray) -> float:
    if len(a) == 2:
        return float(a[0, 1])
    if len(a) == 4:
        return float(a[0, 1] * a[2, 3] - a[0, 2] * a[1, 3] + a[0, 3] * a[1, 2])
    sign, size = log_pfaffian(a)
    return float(sign * np.exp(size))


def word_sum(operator: OperatorSum, *, parity: int = 0, period: int | None = None) -> WordSum:
    """The words of a sum of spins 1/2.

    Parameters
    ----------
    operator : OperatorSum
    parity : {1, -1, 0}, optional
        Value of the product of all Z, by which words longer than half are shortened; 0: none are.
    period : int, optional
        Sites after which a ring and its state repeat: translates by so many sites count as one word.

    Raises
    ------
    ValueError
        Not a Hermitian sum of spins 1/2.
    """
    sites = operator.sites.size
    found: dict[tuple[int, ...], complex] = {}
    for coefficient, letters in operator.pauli_terms():
        phase, word = pauli_word(_moved(letters, sites, period or sites))
        if len(word) % 2:
            continue  # changes the parity, and has no mean
        if parity and len(word) > sites:
            phase, word = complement((phase * parity, word), sites)
        found[word] = found.get(word, 0.0) + coefficient * phase
    return WordSum(tuple(found.values()), tuple(found))


def _moved(letters: Mapping[int, str], sites: int, period: int) -> dict[int, str]:
    """A word moved around the ring by whole periods so that it begins early and ends as early as possible."""
    if not letters:
        return {}
    at = sorted(letters)
    gaps = [(b - a) % sites or sites for a, b in zip(at, at[1:] + at[:1], strict=True)]
    first = at[(int(np.argmax(gaps)) + 1) % len(at)]
    shift = first - first % period
    return {(site - shift) % sites: letter for site, letter in letters.items()}


def spin_period(matrices: Iterable[tuple[np.ndarray, int]], sites: int) -> int:
    """Sites after which a ring of spins repeats; all of them where nothing does.

    Parameters
    ----------
    matrices : iterable of ((2 sites, 2 sites) ndarray, {1, -1, 0})
        Forms and covariances over Majorana operators, each with its parity: it decides how the ring is closed.
    sites : int
    """
    given = list(matrices)
    if any(not parity for _, parity in given):
        return sites
    for period in range(1, sites // 2 + 1):
        if sites % period == 0 and all(_repeats(a, 2 * period, -parity) for a, parity in given):
            return period
    return sites


def _repeats(a: np.ndarray, step: int, closing: int) -> bool:
    place = np.arange(len(a)) + step
    sign = np.where(place >= len(a), closing, 1)
    moved = a[np.ix_(place % len(a), place % len(a))] * np.outer(sign, sign)
    return bool(np.abs(moved - a).max(initial=0.0) <= 1e-12 * max(float(np.abs(a).max(initial=0.0)), 1e-300))

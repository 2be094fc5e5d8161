"""States of spin rings in sectors of sharp parity: means of quadratic forms, and of any spin word by Pfaffians.

Inside a sector ``<O> = (<O>_G + eta <O P>_G)/(1 + eta <P>_G)`` with the Gaussian state G that ignores the parity.
Where the denominator is small (an odd number of quasiparticles at low temperature) the states are sorted by their
lowest filled level instead: each term fills one level, leaves those below it empty and has an even number above,
so that nothing cancels.  Floor: families.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import product
from typing import Any, ClassVar

import numpy as np

from maxent.families.gaussian_states import WordState, checked_letters, checked_modes
from maxent.families.pfaffians import Word, added, complement, log_word, parity_word, pauli_word, word_mean

__all__ = ["RingState", "SectorState"]

#: Sites of a reduced state: all 4^l products of Pauli matrices are taken.
MOST_SITES = 5


@dataclass(frozen=True, eq=False)
class SectorState:
    """One sector.

    Attributes
    ----------
    parity : {1, -1, 0}
        P, or 0 where the parity is not looked at.
    weight : float
        Probability of the sector.
    frame : (2L, 2n) ndarray
        Majorana operators of the free quasiparticles.
    levels : (n,) ndarray
    mean : (n,) ndarray
        Occupations of the quasiparticles.
    parity_of_levels : {1, -1, 0}
        ``(-1)^(number of quasiparticles)``.
    pinned : (2L, 2L) ndarray
        Covariance of what is not free.
    alone : bool
        Whether there is exactly one quasiparticle.
    """

    parity: int
    weight: float
    frame: np.ndarray
    levels: np.ndarray
    mean: np.ndarray
    parity_of_levels: int
    pinned: np.ndarray
    alone: bool = False

    def covariance(self, filling: np.ndarray) -> np.ndarray:
        """``<i g_a g_b>`` where ``<i g' g''>`` of quasiparticle k is ``filling[k]``."""
        half = self.frame[:, 0::2] * filling @ self.frame[:, 1::2].T
        return self.pinned + half - half.T

    def mean_form(self, a: np.ndarray) -> float:
        """Mean of ``(i/4) sum A_ab g_a g_b``."""
        return 0.25 * float(np.sum(a * self.covariance(2 * self.mean - 1)))

    def terms(self) -> Iterator[tuple[float, np.ndarray, int]]:
        """Probability, filling and sign of Gaussian states that make up the sector; sign 0: not projected."""
        s, e = self.parity_of_levels, self.levels
        if self.alone:
            for j in np.flatnonzero(self.mean > 1e-18):
                yield float(self.mean[j]), np.where(np.arange(len(e)) == j, 1.0, -1.0), 0
            return
        thermal = -np.tanh(0.5 * e)
        if s >= 0 or 1 - np.prod(-thermal) > 0.1:
            yield 1.0, thermal, s
            return
        order = np.argsort(e, kind="stable")
        small = np.exp(-e[order])
        above = np.concatenate([np.cumsum(np.log1p(small[::-1]))[::-1][1:], [0.0]])
        even = 1 + np.array([np.prod(np.tanh(0.5 * e[order[j + 1 :]])) for j in range(len(e))])
        share = np.exp(-(e[order] - e[order[0]]) + above) * even
        share = share / share.sum()
        for j in np.flatnonzero(share > 1e-18):
            filling = thermal.copy()
            filling[order[:j]] = -1.0
            filling[order[j]] = 1.0
            yield float(share[j]), filling, -1

    def log_word(self, word: Word, sites: int) -> tuple[float, float]:
        """Sign and logarithm of the size of the mean of a Hermitian word of Majorana operators."""
        if not self.parity:
            return log_word(self.covariance(-np.tanh(0.5 * self.levels)), word)
        parts = []
        for share, filling, projected in self.terms():
            g = self.covariance(filling)
            sign, size = log_word(g, word)
            if projected:
                share = share / (1 + self.parity * word_mean(g, parity_word(sites)).real)
                other, other_size = log_word(g, complement(word, sites))
                parts.append((share * self.parity * other, other_size))
            parts.append((share * sign, size))
        return added(parts)


@dataclass(frozen=True, eq=False)
class RingState(WordState):
    """A state of L spins, diagonal in the parity.

    Attributes
    ----------
    sites : int
    sectors : tuple of SectorState
    form : callable
        ``form(terms, parity)`` makes (A, c) of an operator in a sector.
    entropy, log_partition : float
    """

    sites: int
    sectors: tuple[SectorState, ...]
    form: Callable[[Any, int], tuple[np.ndarray, float]]
    entropy: float
    log_partition: float = float("nan")
    #: These families have no prior.
    relative_entropy: ClassVar[None] = None

    def mean(self, operator: Any) -> float:
        """Expectation value of a sum of products of Pauli matrices, given as charges are; quadratic or not."""
        terms, total = list(operator), 0.0
        try:
            for s in self.sectors:
                a, c = self.form(terms, s.parity)
                total += s.weight * (s.mean_form(a) + c)
        except ValueError:
            return float(sum(c * self.mean_word(letters) for c, letters in terms))
        return float(total)

    def log_word(self, letters: Mapping[int, str]) -> tuple[float, float]:
        """Sign and logarithm of the size of the mean of a product of Pauli matrices.

        Returns
        -------
        sign : {1.0, -1.0, 0.0}
            0 where the word changes the parity.
        log_size : float
            -inf where the mean is 0.

        Raises
        ------
        ValueError
            A site that does not exist, or a letter that is none.
        """
        word = pauli_word(checked_letters(letters, self.sites))
        if len(word[1]) % 2:
            return 0.0, -np.inf
        means = [(s.weight, *s.log_word(word, self.sites)) for s in self.sectors]
        return added((weight * sign, size) for weight, sign, size in means)

    def reduced(self, sites: Sequence[int]) -> np.ndarray:
        """Density matrix (2^l, 2^l) of some spins, the others traced out; the first one is the slowest index.

        Raises
        ------
        ValueError
            Sites that do not exist or repeat, or more than five.
        """
        kept = checked_modes(sites, self.sites)
        if len(kept) > MOST_SITES:
            raise ValueError(f"reduced states of spin rings have up to {MOST_SITES} sites, not {len(kept)}")
        pauli = {
            "I": np.eye(2), "X": np.array([[0, 1], [1, 0]]), "Y": np.array([[0, -1j], [1j, 0]]), "Z": np.diag([1, -1]),
        }  # fmt: skip
        rho = np.zeros((1 << len(kept), 1 << len(kept)), complex)
        for choice in product("IXYZ", repeat=len(kept)):
            letters = {x: c for x, c in zip(kept, choice, strict=True) if c != "I"}
            value = self.mean_word(letters)
            if value:
                matrix = np.eye(1)
                for c in choice:
                    matrix = np.kron(matrix, pauli[c])
                rho += value * matrix / (1 << len(kept))
        return rho

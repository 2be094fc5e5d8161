"""What a sharp parity does to means and blocks of a ring of spins, without words around the ring.

A sector is ``(1 + eta P) G`` over its trace, G a Gaussian state with the covariance g.  The operator ``P G / <P>``
obeys Wick's theorem too, with ``-g^-1`` in place of g: for one mode ``<i g' g'' P>/<P> = 1/y`` where
``<i g' g''> = y``.  So

    <O> = (<O>_g + s <O>_(-1/g)) / (1 + s),      s = eta <P>_g,

for means and for density matrices of blocks, at the cost of the block.  Its trace norm, ``|s| prod_k max(1, 1/|y_k|)``
with the levels of the block of ``-g^-1``, bounds what is missed where s is left out.  Floor: quench.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from maxent.families.gaussian_states import FermionState
from maxent.families.ring_states import RingState
from maxent.lattice import OperatorSum
from maxent.quench.gaussian_words import WordSum, word_sum

__all__ = ["ParityTerm", "block_density", "block_rest", "parity_terms", "projected_mean", "ring_mean"]

#: Means of levels closer to zero than this are moved there.
SMALLEST = 1e-13


@dataclass(frozen=True, eq=False)
class ParityTerm:
    """One Gaussian state of which a sector is made.

    Attributes
    ----------
    weight : float
        Probability.
    parity : {1, -1}
    covariance : (2n, 2n) ndarray
        g.
    share : float
        s; 0 where the parity is not looked at.
    twin : (2n, 2n) ndarray
        ``-g^-1``.
    """

    weight: float
    parity: int
    covariance: np.ndarray
    share: float
    twin: np.ndarray


def parity_terms(state: RingState) -> tuple[ParityTerm, ...]:
    """The Gaussian states that a state of a ring is made of."""
    found = []
    for sector in state.sectors:
        for probability, filling, sign in sector.terms() if sector.weight else ():
            g, weight = sector.covariance(filling), sector.weight * probability
            if not sign or not sector.parity:
                found.append(ParityTerm(weight, sector.parity or 1, g, 0.0, np.zeros_like(g)))
                continue
            # s falls with y as its inverse grows: what moves a level away from zero is felt by no more than itself
            y = np.where(np.abs(filling) < SMALLEST, -SMALLEST, filling)
            # eta P = sign (-1)^(number of quasiparticles), of which each has the mean -y
            share = sign * float(np.prod(-y))
            found.append(ParityTerm(weight, sector.parity, g, share, sector.covariance(1 / y)))
    return tuple(found)


def projected_mean(terms: Sequence[ParityTerm], sums: Sequence[WordSum]) -> float:
    """Mean of a sum of words; `sums` has its words in the parity of each term."""
    total = 0.0
    for term, words in zip(terms, sums, strict=True):
        value = words.mean(term.covariance)
        if term.share:
            value = (value + term.share * words.mean(term.twin)) / (1 + term.share)
        total += term.weight * value
    return total


def ring_mean(state: RingState, operator: OperatorSum) -> float:
    """Mean of a sum of spins that is not quadratic."""
    terms, words = parity_terms(state), word_sum(operator)
    return projected_mean(terms, [words] * len(terms))


def block_density(terms: Sequence[ParityTerm], modes: Sequence[int]) -> np.ndarray:
    """Density matrix of spins in a row, the first one the slowest index."""
    at = _operators(modes)
    total = np.zeros((1 << len(modes),) * 2, complex)
    for term in terms:
        rho = FermionState(term.covariance[at], 0.0).density()
        if term.share:
            rho = (rho + term.share * FermionState(term.twin[at], 0.0).density()) / (1 + term.share)
        total += term.weight * rho
    return total


def block_rest(terms: Sequence[ParityTerm], modes: Sequence[int]) -> float:
    """Bound of what means of operators on a block miss, those of norm 1, where the parity is left out."""
    at = _operators(modes)
    total = 0.0
    for term in terms:
        if term.share:
            y = np.abs(np.linalg.eigvalsh(1j * term.twin[at]))
            size = abs(term.share) * float(np.exp(0.5 * np.log(np.maximum(y, 1.0)).sum()))
            total += term.weight * 2 * size / (1 - min(abs(term.share), 0.5))
    return min(total, 2.0)


def _operators(modes: Sequence[int]) -> tuple[np.ndarray, ...]:
    at = np.array([i for s in modes for i in (2 * s, 2 * s + 1)], int)
    return np.ix_(at, at)

"""One-body form of quadratic sums of fermion or boson operators.

    H = constant + sum_st A_st dagger(a_s) a_t + 1/2 sum_st (B_st dagger(a_s) dagger(a_t) + h.c.),

A Hermitian; B antisymmetric for fermions, symmetric for bosons. Modes are counted site by site, the species of a site
in their order. Floor: lattice (NumPy). Must not know formulas, nor what the form is used for.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from maxent.lattice.particles import ANNIHILATE, CREATE, NUMBER, BosonOperators, FermionOperators
from maxent.lattice.sites import Sites
from maxent.lattice.words import Word


@dataclass(frozen=True, eq=False)
class OneBody:
    """Quadratic operator of m modes; see the module for the equation.

    Attributes
    ----------
    statistics : str
        "fermions" or "bosons".
    matrix : (m, m) ndarray
        A; real when it can be.
    pairing : (m, m) ndarray or None
        B; None when there is none.
    constant : float
        Number that multiplies the identity.
    modes : tuple of (int, str)
        Site and species of every mode; an empty name where there is one species.
    """

    statistics: str
    matrix: np.ndarray
    pairing: np.ndarray | None
    constant: float
    modes: tuple[tuple[int, str], ...]


class NotQuadraticError(ValueError):
    """A word is not quadratic; carries the word."""

    def __init__(self, word: Word) -> None:
        super().__init__(word)
        self.word = word


def one_body(words: Iterable[tuple[Word, complex]], sites: Sites) -> OneBody:
    """Collect the one-body form of a Hermitian sum.

    Parameters
    ----------
    words : iterable of (word, complex)
        Words with their numeric coefficients; those that are zero are passed over.
    sites : Ring, Chain or Lattice
        All sites with fermions, or all with bosons.

    Raises
    ------
    NotQuadraticError
        At the first word that is not quadratic.
    ValueError
        When the sites hold spins, or fermions and bosons together.
    """
    slots = sites.slots
    for site in range(sites.size):
        if not isinstance(slots[sites.first_slots[site]], FermionOperators | BosonOperators):
            raise ValueError(f"one_body: {sites.kind(site).name} sites have no one-body matrix")
    is_fermion = isinstance(slots[0], FermionOperators)
    if any(isinstance(slot, FermionOperators) != is_fermion for slot in slots):
        raise ValueError("one_body: fermions and bosons together have no one-body matrix")
    matrix = np.zeros((len(slots), len(slots)), np.complex128)
    pairing = np.zeros_like(matrix)
    constant = 0.0
    for word, value in words:
        if value == 0:
            continue
        if not word:
            constant += value.real
            continue
        read = _fermions(word) if is_fermion else _bosons(word)
        if read is None:
            raise NotQuadraticError(word)
        (s, t), sign, created = read
        if created == 1:
            matrix[s, t] += sign * value
        elif created == 2:
            # both orders of the two modes, or twice one mode, stand behind the 1/2
            pairing[s, t] += value
            pairing[t, s] += -value if is_fermion else value
    return OneBody(
        "fermions" if is_fermion else "bosons",
        _real_if_possible(matrix),
        _real_if_possible(pairing) if np.any(pairing) else None,
        constant,
        sites.homes,
    )


def _fermions(word: Word) -> tuple[tuple[int, int], int, int] | None:
    """Modes, sign and number of creators of a quadratic word in the order creator, annihilator."""
    if len(word) == 1 and word[0][1] == NUMBER:
        return (word[0][0], word[0][0]), 1, 1
    if len(word) != 2 or any(letter == NUMBER for _, letter in word):
        return None
    (s, first), (t, second) = word
    if first == ANNIHILATE and second == CREATE:
        return (t, s), -1, 1
    return (s, t), 1, (first == CREATE) + (second == CREATE)


def _bosons(word: Word) -> tuple[tuple[int, int], int, int] | None:
    powers = [(slot, *BosonOperators.powers(letter)) for slot, letter in word]
    if sum(created + removed for _, created, removed in powers) != 2:
        return None
    creators = [slot for slot, created, _ in powers for _ in range(created)]
    others = [slot for slot, _, removed in powers for _ in range(removed)]
    s, t = creators + others
    return (s, t), 1, len(creators)


def _real_if_possible(matrix: np.ndarray) -> np.ndarray:
    return matrix if np.any(matrix.imag) else matrix.real.copy()

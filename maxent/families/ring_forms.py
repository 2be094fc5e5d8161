"""Sums of products of Pauli matrices as quadratic forms of Majorana operators, in blocks by momentum on a ring.

    Q = (i/4) sum A_ab g_a g_b + c,     A real antisymmetric,

where the parity ``P = prod_j Z_j`` shortens words that go around the ring.  A ring whose cells are all alike is a
block of 4 p Majorana operators for each pair of momenta k, -k (p sites in a cell), in a real basis of cosines and
sines: k is an odd multiple of pi/N where the ring of N cells is closed with a minus sign (P = 1), an even one where
it is not (P = -1).  Floor: families; must not know lattices.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import NamedTuple

import numpy as np
import scipy.sparse as sp

from maxent.core.contract import EPS
from maxent.families.pfaffians import Word, complement, pauli_word
from maxent.memory import require_memory

__all__ = ["Blocked", "Terms", "blocked", "quadratic_form", "sparse_form"]

Terms = Iterable[tuple[float, Mapping[int, str]]]


class Blocked(NamedTuple):
    """Quadratic forms in blocks.

    Attributes
    ----------
    matrices : tuple of (m, B, d, d) ndarrays
        Real antisymmetric.
    frames : tuple of (B, 2L, d) ndarrays
        Orthonormal columns; side by side they have the determinant 1.
    """

    matrices: tuple[np.ndarray, ...]
    frames: tuple[np.ndarray, ...]


def quadratic_form(terms: Terms, sites: int, parity: int, label: str = "operator") -> tuple[np.ndarray, float]:
    """The form ``(i/4) sum A_ab g_a g_b + c`` of a sum of products of Pauli matrices.

    Parameters
    ----------
    terms : iterable of (float, dict of int to str)
        Coefficients and letters by site, such as ``(-1.0, {0: "X", 1: "X"})``.
    sites : int
    parity : {1, -1, 0}
        Value of P, by which words longer than half are shortened; 0: none are.
    label : str
        For messages.

    Returns
    -------
    A : (2 sites, 2 sites) ndarray
    c : float

    Raises
    ------
    ValueError
        A term that is not quadratic, or not Hermitian; sites that do not exist.
    """
    a, constant = sparse_form(terms, sites, parity, label)
    return a.toarray(), constant


def sparse_form(terms: Terms, sites: int, parity: int, label: str = "operator") -> tuple[sp.csr_array, float]:
    """`quadratic_form` with A as a sparse matrix.

    Raises
    ------
    ValueError
    """
    entries: dict[tuple[int, ...], float] = {}
    constant = 0.0
    for coefficient, letters in terms:
        if any(not 0 <= x < sites for x in letters):
            raise ValueError(f"{label}: sites must lie in 0..{sites - 1}, not {sorted(letters)}")
        phase, word = _shortened(pauli_word(letters), sites, parity)
        value = coefficient * phase
        if len(word) not in (0, 2):
            text = " ".join(f"{letters[x]}{x}" for x in sorted(letters))
            raise ValueError(f"{label}: {text} is not quadratic in fermions: its word has {len(word)} letters")
        value = value * -2j if word else value  # c g_a g_b = (i/4) (A_ab g_a g_b + A_ba g_b g_a)
        if not np.isfinite(value) or abs(value.imag) > 1e-12 * abs(value):
            raise ValueError(f"{label}: coefficients must be finite real numbers, not {coefficient!r}")
        if word:
            entries[word] = entries.get(word, 0.0) + value.real
        else:
            constant += value.real
    at = np.array(list(entries), int).reshape(-1, 2)
    upper = sp.csr_array((list(entries.values()), (at[:, 0], at[:, 1])), shape=(2 * sites, 2 * sites), dtype=float)
    return sp.csr_array(upper - upper.T), constant


def _shortened(word: Word, sites: int, parity: int) -> Word:
    """The same operator where P has the value `parity`, by the shorter of two words."""
    if not parity or len(word[1]) <= sites:
        return word
    phase, letters = complement(word, sites)
    return phase * parity, letters


def blocked(forms: list[sp.csr_array], sites: int, parity: int, doing: str) -> Blocked:
    """The forms of a sector in blocks by momentum, or in one block where the cells of the ring are not alike.

    Raises
    ------
    ResourceError
        A block that would not fit into memory; says `doing`, with ``{need}`` filled in.
    """
    sign = -1 if parity >= 0 else 1
    period = next((p for p in range(1, sites // 2 + 1) if sites % p == 0 and _alike(forms, p, sign)), sites)
    if period == sites:
        require_memory(8 * 12 * len(forms) * (2 * sites) ** 2, doing)
        dense = np.array([a.toarray() for a in forms])
        return Blocked((dense[:, None],), (np.eye(2 * sites)[None],))
    cells, width = sites // period, 2 * period
    first = [a[:width].toarray().reshape(width, cells, width) for a in forms]
    # momenta in units of pi/cells: odd ones for an antiperiodic ring
    units = np.arange(1 if sign < 0 else 0, cells + 1, 2)
    alone = (units == 0) | (units == cells)
    matrices, frames = [], []
    for which in (alone, ~alone):
        if not which.any():
            continue
        angle = np.pi / cells * (np.outer(units[which], np.arange(cells)) % (2 * cells))
        waves = [np.cos(angle)] if which is alone else [np.cos(angle), np.sin(angle)]
        even = np.array([np.einsum("kr,arc->kac", np.cos(angle), f) for f in first])
        if which is alone:
            matrices.append(even)
        else:
            odd = np.array([np.einsum("kr,arc->kac", np.sin(angle), f) for f in first])
            matrices.append(np.block([[even, odd], [-odd, even]]))
        basis = np.stack(waves, axis=2) * np.sqrt(len(waves) / cells)
        spread = np.einsum("kxw,ab->kxawb", basis, np.eye(width))
        frames.append(spread.reshape(len(basis), 2 * sites, len(waves) * width))
    exact = tuple(0.5 * (a - a.transpose(0, 1, 3, 2)) for a in matrices)
    return Blocked(exact, tuple(frames))


def _alike(forms: list[sp.csr_array], period: int, sign: int) -> bool:
    """Whether every form stays the same, to rounding, when it is moved by `period` sites around the ring."""
    for a in forms:
        size = a.shape[0]
        here = sp.coo_array(a)
        (rows, columns), entries = here.coords, here.data
        closing = np.where(np.arange(size) + 2 * period >= size, sign, 1)
        where = (rows + 2 * period) % size, (columns + 2 * period) % size
        moved = sp.csr_array((entries * closing[rows] * closing[columns], where), shape=a.shape)
        if abs(moved - a).max() > 4 * EPS * np.abs(entries).max(initial=0.0):
            return False
    return True

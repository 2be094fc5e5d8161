"""Fourier states on orbits of basis states, vectorised over all orbits at once.

Floor: lattice.  The group has the elements ``U_1^n1 U_2^n2 ...`` with 0 <= n_a < r_a, where ``U_a^r_a = c_a``; its
characters are ``lambda_a = c_a^(1/r_a) exp(-2 pi i k_a / r_a)``.  For a representative n with stabiliser S the sum

    sum_g (prod_a lambda_a^-n_a) U_g |n>

is non-zero exactly for the |G|/|S| characters that equal the phases of the maps in S.  Must not know sites.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.lattice.index_maps import EQUAL, IndexMap
from maxent.memory import require_memory

__all__ = ["fourier_states", "real_states"]


def fourier_states(
    maps: list[IndexMap], powers: list[tuple[int, complex]], wanted: Mapping[int, int]
) -> tuple[Any, np.ndarray, list[np.ndarray]]:
    """Simultaneous eigenstates of commuting maps.

    Parameters
    ----------
    maps : list of IndexMap
        On d states.
    powers : list of (int, complex)
        Orders r_a and constants c_a of the maps.
    wanted : mapping from position of a map to k
        Characters to keep; others are not made.

    Returns
    -------
    matrix : (d, n) scipy.sparse.csc_array
    representatives : (n,) ndarray
        A state on which each column has weight.
    numbers : list of (n,) ndarray
        k_a of each column.

    Raises
    ------
    ResourceError
        When the orbits would not fit into memory.
    """
    orders = [r for r, _ in powers]
    exponents = np.array(np.unravel_index(np.arange(int(np.prod(orders))), orders)).T  # (elements, maps)
    d = maps[0].dimension
    require_memory(d * len(exponents) // max(orders) * 64, f"orbits of {d} states need {{need}}")

    everything = np.arange(d)
    lowest = everything
    for images, _ in _elements(maps, exponents, everything):
        lowest = np.minimum(lowest, images)
    representatives = np.flatnonzero(lowest == everything)

    pairs = list(_elements(maps, exponents, representatives))
    images = np.array([i for i, _ in pairs])
    phases = np.array([np.broadcast_to(p, len(representatives)) for _, p in pairs])
    stays = images == representatives
    first = _first_visits(images)
    orbit = np.count_nonzero(first, axis=0)

    turns = [np.angle(c) / (2 * np.pi) for _, c in powers]
    rows, columns, data, sources, numbers = [], [], [], [], []
    made = 0
    for character in exponents:
        if any(character[a] != k % orders[a] for a, k in wanted.items()):
            continue
        angle = sum(exponents[:, a] * (turns[a] - character[a]) / orders[a] for a in range(len(maps)))
        weight = _roots(-angle)[:, None] * phases  # lambda^-n times the phase of the element
        there = np.flatnonzero(np.abs((weight * stays).sum(axis=0)) > 0.5)
        element, which = np.nonzero(first[:, there])
        rows.append(images[:, there][element, which])
        columns.append(made + which)
        data.append(weight[:, there][element, which] / np.sqrt(orbit[there])[which])
        sources.append(representatives[there])
        numbers.append(np.tile(character, (len(there), 1)))
        made += len(there)
    if not made:
        return sp.csc_array((d, 0)), np.zeros(0, int), [np.zeros(0, int) for _ in maps]
    values = np.concatenate(data)
    if np.iscomplexobj(values) and not values.imag.any():
        values = values.real
    matrix = sp.csc_array((values, (np.concatenate(rows), np.concatenate(columns))), shape=(d, made))
    return matrix, np.concatenate(sources), list(np.concatenate(numbers).T)


def _elements(maps: list[IndexMap], exponents: np.ndarray, states: np.ndarray) -> Any:
    """Images and phases of `states` under every element, in the order of `exponents` (last map fastest)."""
    held = [(states, np.ones(1))] * (len(maps) + 1)
    for i, element in enumerate(exponents):
        if i:
            moved = int(np.flatnonzero(element)[-1])  # one more of this map, none of the later ones
            images, phases = held[moved + 1]
            m = maps[moved]
            phases = phases if m.phases is None else phases * m.phases[images]
            held[moved + 1 :] = [(m.images[images], phases)] * (len(maps) - moved)
        yield held[-1]


def _first_visits(images: np.ndarray) -> np.ndarray:
    """Whether an element is the first one to reach its image, for each orbit (column)."""
    order = np.argsort(images, axis=0, kind="stable")
    ranked = np.take_along_axis(images, order, axis=0)
    new = np.ones(images.shape, bool)
    new[1:] = ranked[1:] != ranked[:-1]
    first = np.empty(images.shape, bool)
    np.put_along_axis(first, order, new, axis=0)
    return first


def _roots(turns: np.ndarray) -> np.ndarray:
    """``exp(2 pi i turns)``, exact at multiples of a quarter turn; real when all are."""
    quarters = np.round(4 * turns)
    exact = np.abs(4 * turns - quarters) < EQUAL
    quarter = np.array([1, 1j, -1, -1j])[quarters.astype(int) % 4]
    roots = np.where(exact, quarter, np.exp(2j * np.pi * turns))
    return roots if roots.imag.any() else roots.real


def real_states(antiunitary: IndexMap) -> Any:
    """Columns that an antiunitary involution leaves as they are, as a sparse (n, n) unitary.

    Raises
    ------
    ValueError
        Its square is not 1: no basis makes it the complex conjugation.
    """
    n = antiunitary.dimension
    images = antiunitary.images
    phases = np.ones(n) if antiunitary.phases is None else antiunitary.phases
    square = phases[images] * phases.conj()
    if not np.array_equal(images[images], np.arange(n)) or np.abs(square - 1).max(initial=0.0) > 1e-9:
        raise ValueError(f"the square of {antiunitary.name} is not 1: it makes no sector real")
    fixed = np.flatnonzero(images == np.arange(n))
    left = np.flatnonzero(images > np.arange(n))
    right, turn = images[left], phases[left]
    root = np.sqrt(0.5)
    data = [np.sqrt(phases[fixed].astype(complex)), np.full(len(left), root), root * turn]
    data += [np.full(len(left), 1j * root), -1j * root * turn]
    rows = [fixed, left, right, left, right]
    columns = [fixed, left, left, right, right]
    return sp.csc_array((np.concatenate(data), (np.concatenate(rows), np.concatenate(columns))), shape=(n, n))

"""Null spaces of the search as operators with few words, range by range.

Floor: quench. Must not know how null spaces are found.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from maxent.quench.equations import Space
from maxent.quench.fermion_words import FermionWord, expand, fermion_words, in_reading_order, span
from maxent.quench.null_spaces import Level
from maxent.quench.simplify import cleaned, echelon, shorten

__all__ = ["MANY", "readable"]

#: With more charges than this they are not shortened.
MANY = 100


def readable(space: Space, levels: Sequence[Level]) -> list[np.ndarray]:
    """Basis with few words, by range: what each range adds, in echelon form, shortened by what is there already.

    Parameters
    ----------
    space : Space
    levels : sequence of Level
        Of the operators up to range 1, 2, ...

    Returns
    -------
    list of (n,) ndarray
        Coefficients of strings, the narrow operators first; the first word among the widest has the coefficient 1.
    """
    return (_of_fermions if space.h.species else _of_spins)(space, levels)


def _of_spins(space: Space, levels: Sequence[Level]) -> list[np.ndarray]:
    """The basis of spins, block by block."""
    found: list[np.ndarray] = []
    for k, level in enumerate(levels, start=1):
        new = []
        for some, rows in level.parts:
            added = len(rows) - sum(bool(np.any(row[some])) for row in found)
            wide = space.ranges[some] == k
            narrower = np.flatnonzero(~wide)
            order = narrower[np.argsort(-space.ranges[some][narrower], kind="stable")]
            form = echelon(rows, [(np.flatnonzero(wide), added), (order, len(rows) - added)])
            for row in form[:added]:
                full = np.zeros(space.size)
                full[some] = row
                new.append(full)
        if level.count <= MANY:
            for j, row in enumerate(new):
                new[j] = shorten(row, [*found, *new[:j], *new[j + 1 :]])
        new.sort(key=lambda row: (np.count_nonzero(row), int(np.flatnonzero(row)[0])))
        found += [_leading(space, row) for row in new]
    return found


def _of_fermions(space: Space, levels: Sequence[Level]) -> list[np.ndarray]:
    """The basis of fermions, with few words of these in place of few strings."""
    h, null = space.h, []
    for k, level in enumerate(levels, start=1):
        for some, rows in level.parts:
            for row in cleaned(rows):
                full = np.zeros(space.size)
                full[some] = row
                null.append((k, full))
    written = [
        fermion_words(
            ((row[n], int(space.x[n]), int(space.z[n])) for n in np.flatnonzero(row)), cell=h.cell, sign=space.sign
        )
        for _, row in null
    ]
    words = in_reading_order({key for row in written for key in row}, h.modes)
    place = {key: n for n, key in enumerate(words)}
    table = np.zeros((len(null), len(words)))
    for j, row in enumerate(written):
        for key, value in row.items():
            table[j, place[key]] = value
    spans = np.array([span(word, h.modes) for word, _ in words])
    many = levels[-1].count > MANY
    found: list[np.ndarray] = []
    for k in range(1, len(levels) + 1):
        rows = table[[j for j, (at, _) in enumerate(null) if at == k]]
        added = len(rows) - len(found)
        if not added:
            continue
        turned = np.linalg.svd(rows, full_matrices=False)[2]
        form = echelon(turned, [(np.flatnonzero(spans == k), added), (np.flatnonzero(spans < k)[::-1], len(found))])
        new = list(form[:added])
        if not many:
            for j, row in enumerate(new):
                new[j] = shorten(row, [*found, *new[:j], *new[j + 1 :]])
        found += sorted(new, key=lambda row: (np.count_nonzero(row), int(np.flatnonzero(row)[0])))
    return [_leading(space, _as_strings(space, words, row)) for row in found]


def _as_strings(space: Space, words: Sequence[tuple[FermionWord, bool]], row: np.ndarray) -> np.ndarray:
    """Row of coefficients of strings from one of Hermitian words."""
    out = np.zeros(space.size)
    for n in np.flatnonzero(row).tolist():
        for (x, z), factor in expand(*words[n]).items():
            if x | z:
                first = ((x | z) & -(x | z)).bit_length() - 1
                cells = first // space.h.cell
                back = cells * space.h.cell
                out[space.place(x >> back, z >> back)] += row[n] * factor * space.sign ** (cells % 2)
    return cleaned(out)


def _leading(space: Space, row: np.ndarray) -> np.ndarray:
    """Row times the factor that makes its first word among the widest 1."""
    first = np.flatnonzero((row != 0.0) & (space.ranges == space.ranges[row != 0.0].max()))[0]
    return row / row[first]

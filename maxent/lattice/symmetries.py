"""Which symmetries a set of operators has, and the basis of their common sectors.

Floor: lattice.  The names of all that concerns symmetries are gathered here: maps (`maxent.lattice.site_maps`,
`maxent.lattice.index_maps`) and sectors (`maxent.lattice.sectors`).  Must not know families.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from maxent.lattice.index_maps import EQUAL, IndexMap
from maxent.lattice.sectors import SymmetryBasis, blocked, sector, sharp_value, symmetry_basis
from maxent.lattice.site_maps import (
    SiteMap,
    conjugated,
    is_invariant,
    reflection,
    site_permutation,
    species_exchange,
    spin_flip,
    translation,
)
from maxent.lattice.sites import Sites

__all__ = [
    "IndexMap",
    "SiteMap",
    "SymmetryBasis",
    "adapted_basis",
    "blocked",
    "conjugated",
    "find_symmetries",
    "is_invariant",
    "reflection",
    "sector",
    "sharp_sector",
    "sharp_value",
    "site_permutation",
    "species_exchange",
    "spin_flip",
    "symmetry_basis",
    "translation",
]


def find_symmetries(operators: Any, sites: Sites) -> tuple[SiteMap, ...]:
    """Which symmetries leave every operator invariant.

    Looked for are the translation by the smallest possible number of cells (rings), the spin flip, the exchange of two
    species, a reflection, and the complex conjugation in the basis of the sites, alone and with a reflection.

    Parameters
    ----------
    operators : sequence or mapping of OperatorSum, or of (D, D) ndarray or scipy.sparse
        Operator sums are decided on their words, at the current values of their parameters.
    sites : Sites

    Returns
    -------
    tuple of SiteMap
        Not all of them need commute: `adapted_basis` chooses.

    Examples
    --------
    >>> from maxent.lattice import Ring, formula
    >>> ring = Ring(6)
    >>> [m.name for m in find_symmetries([formula("Sz[i]*Sz[i+1] + 0.5*Sx[i]", ring)], ring)]
    ['translation', 'spin_flip', 'reflection', 'conjugation', 'reflection_conjugated']
    """
    every = list(operators.values()) if isinstance(operators, Mapping) else list(operators)
    kept = lambda m: all(is_invariant(op, m) for op in every)
    candidates: list[list[SiteMap]] = []
    if sites.is_ring:
        candidates.append([translation(sites, n) for n in range(1, sites.length) if sites.length % n == 0])
    if "Sz" in sites.symbols:
        candidates.append([spin_flip(sites)])
    if any(len(kind.species) == 2 for kind in sites.kinds):
        candidates.append([species_exchange(sites)])
    mirrors = _mirrors(sites)
    candidates.append(mirrors)
    plain = site_permutation(sites, range(sites.size))
    candidates.append([conjugated(plain, name="conjugation")])
    candidates.append([conjugated(m) for m in mirrors])
    found = (next(filter(kept, group), None) for group in candidates)
    return tuple(m for m in found if m is not None)


def _mirrors(sites: Sites) -> list[SiteMap]:
    """Reflections to be tried: through every centre on a ring, with and without turning the cells round."""
    found = []
    for within in (True, False)[: 1 + (len(sites.cell) > 1)]:
        for first in [sites.length - 1, *(range(sites.length - 1) if sites.is_ring else ())]:
            try:
                found.append(reflection(sites, first, within_cells=within))
            except ValueError:  # cells of different kinds of sites
                break
    return [m for m in found if m.permutation != tuple(range(len(m.permutation)))]


def adapted_basis(operators: Any, sites: Sites, *, more: Sequence[Any] = ()) -> SymmetryBasis | None:
    """Basis of the sectors of the symmetries that all operators share.

    Of the symmetries found, those that commute are used, translation first, then one antiunitary symmetry that makes
    the sectors real.

    Parameters
    ----------
    operators, sites
        As for `find_symmetries`.
    more : sequence of operators, optional
        Further operators that have to be invariant.

    Returns
    -------
    SymmetryBasis, or None when no symmetry is found.
    """
    every = [*(operators.values() if isinstance(operators, Mapping) else operators), *more]
    found = find_symmetries(every, sites)
    chosen: list[IndexMap] = []
    for m in found:
        candidate = m.index_map
        if m.conjugating:
            useful = bool(chosen) or m.name != "conjugation"  # alone it leaves the product basis as it is
            if useful and not any(u.conjugating for u in chosen) and all(_keeps_labels(candidate, u) for u in chosen):
                chosen.append(candidate)
        elif all(candidate.commutes_with(u) for u in chosen):
            chosen.append(candidate)
    return symmetry_basis(chosen) if chosen else None


def sharp_sector(
    basis: SymmetryBasis, vectors: np.ndarray, charges: Mapping[str, Any] | None = None, *, tolerance: float = EQUAL
) -> tuple[dict[str, int], dict[str, tuple[Any, float]]]:
    """What has no spread in a start: the labels and values that `SymmetryBasis.columns` and `sector` take.

    Parameters
    ----------
    basis : SymmetryBasis
    vectors : (D,) or (D, k) ndarray
        The start, or the vectors of a mixture.
    charges : mapping from name to charge, optional
        Charges that are diagonal in the product basis.
    tolerance : float
        As for `sharp_value`.

    Returns
    -------
    values : dict of str to int
        Labels of the maps of the basis that are sharp.
    charges : dict of str to (charge, float)
        Charges that are sharp.

    Examples
    --------
    >>> from maxent.lattice import ProductState, Ring, formula
    >>> ring = Ring(4)
    >>> start = ProductState(ring, ["pi", 0.0], 0.0).vector()
    >>> values, charges = sharp_sector(
    ...     symmetry_basis([translation(ring, 2), spin_flip(ring)]), start, {"M": formula("Sz[i]", ring)}
    ... )
    >>> values, list(charges)
    ({'translation_by_2': 0}, ['M'])
    """
    found = {m.name: sharp_value(m, vectors, tolerance=tolerance) for m in basis.maps}
    sharp = {name: (q, sharp_value(q, vectors, tolerance=tolerance)) for name, q in (charges or {}).items()}
    return (
        {name: int(label) for name, label in found.items() if label is not None},
        {name: (q, value) for name, (q, value) in sharp.items() if value is not None},
    )


def _keeps_labels(antiunitary: IndexMap, unitary: IndexMap) -> bool:
    """Whether U A U = A: eigenstates of U stay eigenstates with the same eigenvalue."""
    probe = np.random.default_rng(5).standard_normal((antiunitary.dimension, 2)) @ np.array([1, 1j])
    image = unitary.apply(antiunitary.apply(unitary.apply(probe)))
    return bool(np.abs(image - antiunitary.apply(probe)).max() <= 1e3 * EQUAL)

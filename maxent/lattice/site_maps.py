"""Symmetries that move sites: translation, reflection, spin flip, any permutation; and who is invariant under them.

Floor: lattice (NumPy and SciPy).  A map moves the slots of the sites and may flip spins; it acts on words and on the
indices of basis states,

    U A_s U^H = +-A_pi(s),

where a fermion operator takes its sign along, so that the vacuum stays the vacuum and U is a true representation of
the permutations.  Must not know sectors or charges.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from itertools import combinations
from math import prod
from typing import Any

import numpy as np

from maxent.lattice import words as algebra
from maxent.lattice.index_maps import EQUAL, IndexMap
from maxent.lattice.local import LocalOperators
from maxent.lattice.sites import Sites
from maxent.lattice.terms import OperatorSum
from maxent.lattice.words import Words
from maxent.memory import require_memory

__all__ = [
    "SiteMap",
    "conjugated",
    "defect",
    "is_invariant",
    "reflection",
    "site_permutation",
    "species_exchange",
    "spin_flip",
    "translation",
]


@dataclass(frozen=True, eq=False)
class SiteMap:
    """A permutation of the slots of all sites with a turn of each slot; acts on words and on indices.

    Made by `translation`, `reflection`, `spin_flip`, `species_exchange` and `site_permutation`.  Slots are the modes
    and spins of the sites in their order: a site with two species has two.

    Parameters
    ----------
    name : str
        What messages and labels call it.
    sites : Ring, Chain or Lattice
        Where it acts.
    permutation : tuple of int
        Slot s goes to ``permutation[s]``.
    flips : bool
        Spins exchange m and -m before they move.
    conjugating, momentum : bool
        As for `IndexMap`; amplitudes in the basis of the sites.

    Raises
    ------
    ValueError
        No permutation of the slots, or slots of different kinds are exchanged.
    """

    name: str
    sites: Sites
    permutation: tuple[int, ...]
    flips: bool = False
    conjugating: bool = False
    momentum: bool = False

    def __post_init__(self) -> None:
        """Check the permutation."""
        slots, moved = self.sites.slots, self.permutation
        if sorted(moved) != list(range(len(slots))):
            raise ValueError(f"{self.name}: {list(moved)} is no permutation of 0..{len(slots) - 1}")
        for s, t in enumerate(moved):
            if type(slots[s]) is not type(slots[t]) or slots[s].dimension != slots[t].dimension:
                raise ValueError(
                    f"{self.name}: {slots[s].name} number {s} would take the place of {slots[t].name} number {t}"
                )

    @cached_property
    def index_map(self) -> IndexMap:
        """The map on the basis states; cost O(slots * d), for fermions O(exchanged pairs * d)."""
        dims = [slot.dimension for slot in self.sites.slots]
        d = prod(dims)
        if not d:
            raise ValueError("bosons without a cut-off have no basis states: give Bosons(cutoff=...)")
        require_memory(8 * d * (len(dims) + 4), f"the map '{self.name}' on {d} states needs {{need}}")
        strides = [prod(dims[s + 1 :]) for s in range(len(dims))]
        n = np.arange(d)
        digits = [(n // stride) % dim for stride, dim in zip(strides, dims, strict=True)]
        images = np.zeros(d, n.dtype)
        for digit, slot, target in zip(digits, self.sites.slots, self.permutation, strict=True):
            turned = slot.dimension - 1 - digit if self.flips and _is_spin(slot) else digit
            images += turned * strides[target]
        return IndexMap(self.name, images, self._signs(digits), self.conjugating, self.momentum)

    def _signs(self, digits: list[np.ndarray]) -> np.ndarray | None:
        """Sign of bringing the moved fermions back into the order of the slots; None without fermions."""
        fermions = [s for s, slot in enumerate(self.sites.slots) if slot.odd]
        if not fermions:
            return None
        odd = {s: digits[s].astype(bool) for s in fermions}
        negative = np.zeros(len(digits[0]), bool)
        for s, t in combinations(fermions, 2):
            if self.permutation[s] > self.permutation[t]:
                negative ^= odd[s] & odd[t]
        return np.where(negative, -1.0, 1.0)

    def moved(self, op: OperatorSum) -> Words:
        """Words of ``U op U^H``.

        Raises
        ------
        ValueError
            The operator lives on other sites.
        """
        if op.sites != self.sites:
            raise ValueError(f"the operator lives on {op.sites}, the map '{self.name}' on {self.sites}")
        slots, signs = self.sites.slots, {}
        total: Words = {}
        for word, coefficient in op.words.items():
            image = tuple(sorted((self.permutation[slot], letter) for slot, letter in word))
            negative = 0
            for slot, letter in word if self.flips or self.conjugating else ():
                key = id(slots[slot]), letter
                if key not in signs:
                    signs[key] = _letter_sign(self, slots[slot], letter)
                negative += signs[key] < 0
            fermions = [self.permutation[slot] for slot, letter in word if letter in slots[slot].odd]
            negative += sum(a > b for a, b in combinations(fermions, 2))
            weight = coefficient.conjugate() if self.conjugating else coefficient
            algebra.accumulate(total, {image: -weight if negative % 2 else weight})
        return total


def _is_spin(slot: LocalOperators) -> bool:
    return "Sz" in slot.symbols


def _letter_sign(site_map: SiteMap, slot: LocalOperators, letter: int) -> int:
    """What becomes of a letter, turned and conjugated, before it moves: +1 or -1 times itself."""
    if not _is_spin(slot):
        return 1  # matrices of fermions and bosons are real, and nothing turns them
    matrix = slot.matrix(letter)
    image = matrix.conj() if site_map.conjugating else matrix
    image = image[::-1, ::-1] if site_map.flips else image
    return 1 if np.abs(image - matrix).max() <= np.abs(image + matrix).max() else -1


def site_permutation(sites: Sites, permutation: Sequence[int], *, name: str = "permutation") -> SiteMap:
    """Move the content of site s to ``permutation[s]``.

    Raises
    ------
    ValueError
        No permutation of the sites, or sites of different kinds are exchanged.
    """
    moved = [int(s) for s in permutation]
    if sorted(moved) != list(range(sites.size)):
        raise ValueError(f"{name}: {moved} is no permutation of the sites 0..{sites.size - 1}")
    for s, t in enumerate(moved):
        if sites.kind(s) != sites.kind(t):
            raise ValueError(
                f"{name}: site {s} ({sites.kind(s).name}) would take the place of site {t} ({sites.kind(t).name})"
            )
    return SiteMap(name, sites, _of_slots(sites, moved))


def _of_slots(sites: Sites, moved: Sequence[int]) -> tuple[int, ...]:
    """Permutation of slots that moves whole sites."""
    first = sites.first_slots
    return tuple(first[t] + k for s, t in enumerate(moved) for k in range(first[s + 1] - first[s]))


def translation(sites: Sites, cells: int = 1) -> SiteMap:
    """Move everything on a ring by a number of unit cells.

    Raises
    ------
    ValueError
        The sites are no ring.
    """
    if not sites.is_ring:
        raise ValueError(f"translation needs a ring: {sites!r} has ends")
    name = "translation" if cells == 1 else f"translation_by_{cells}"
    shift = cells * len(sites.cell)
    moved = [(s + shift) % sites.size for s in range(sites.size)]
    return SiteMap(name, sites, _of_slots(sites, moved), momentum=True)


def reflection(sites: Sites, image_of_first: int | None = None, *, within_cells: bool = True) -> SiteMap:
    """Exchange left and right: position p goes to ``image_of_first - p`` (on a ring modulo its length).

    Parameters
    ----------
    sites : Ring, Chain or Lattice
    image_of_first : int, optional
        Position where position 0 goes; default the last one.
    within_cells : bool
        Whether the order of the sites in a unit cell is turned round as well (a chain of cells) or kept (a ladder).
    """
    first = sites.length - 1 if image_of_first is None else image_of_first
    members = len(sites.cell)
    moved = []
    for s in range(sites.size):
        position, member = divmod(s, members)
        moved.append((first - position) % sites.length * members + (members - 1 - member if within_cells else member))
    return site_permutation(sites, moved, name="reflection")


def spin_flip(sites: Sites) -> SiteMap:
    """Exchange m and -m of all spins, ``prod_i 2 Sx_i`` for spin 1/2: Sy and Sz change their signs.

    Raises
    ------
    ValueError
        The sites carry no spins.
    """
    if not any(_is_spin(slot) for slot in sites.slots):
        raise ValueError(f"spin_flip needs spins, not {sites.kind(0).name} sites")
    return SiteMap("spin_flip", sites, tuple(range(len(sites.slots))), flips=True)


def species_exchange(sites: Sites) -> SiteMap:
    """Exchange the species on all sites that have two of them (spin flip of electrons).

    Raises
    ------
    ValueError
        No site has two species.
    """
    first, moved = sites.first_slots, []
    for s in range(sites.size):
        slots = list(range(first[s], first[s + 1]))
        moved += slots[::-1] if len(slots) == 2 else slots
    if moved == sorted(moved):
        raise ValueError(f"species_exchange needs sites with two species, not {sites.kind(0).name} sites")
    return SiteMap("species_exchange", sites, tuple(moved))


def conjugated(site_map: SiteMap, *, name: str | None = None) -> SiteMap:
    """The same map after complex conjugation in the basis of the sites: an antiunitary map."""
    m = site_map
    return SiteMap(name or f"{m.name}_conjugated", m.sites, m.permutation, m.flips, not m.conjugating, m.momentum)


def is_invariant(operator: Any, map_: SiteMap | IndexMap, *, tolerance: float = EQUAL) -> bool:
    """Whether ``U A U^H = A``.

    Parameters
    ----------
    operator : OperatorSum, or (d, d) ndarray or scipy.sparse
        An operator sum under a `SiteMap` is decided on its words: exactly, where its coefficients are exact.  With
        list parameters, whose entries differ as symbols, the current values decide.
    map_ : SiteMap or IndexMap
    tolerance : float
        Largest difference relative to the largest entry (coefficient) that counts as rounding.
    """
    return defect(operator, map_) <= tolerance


def defect(operator: Any, map_: SiteMap | IndexMap) -> float:
    """Largest entry of ``U A U^H - A`` relative to the largest of A; for operator sums of coefficients."""
    if isinstance(operator, OperatorSum):
        if isinstance(map_, SiteMap):
            return _defect_of_words(operator, map_)
        operator = operator.matrix()
    import scipy.sparse as sp

    u = map_.index_map if isinstance(map_, SiteMap) else map_
    a = sp.coo_array(operator)
    if a.shape != (u.dimension, u.dimension):
        raise ValueError(f"{u.name} acts on {u.dimension} states, the operator has shape {a.shape}")
    row, column = a.coords
    data = a.data.conj() if u.conjugating else a.data
    if u.phases is not None:
        data = u.phases[row] * data * u.phases[column].conj()
    moved = sp.csr_array((data, (u.images[row], u.images[column])), shape=a.shape)
    size = np.abs(a.data).max(initial=0.0)
    return float(np.abs((moved - a.tocsr()).data).max(initial=0.0) / size) if size else 0.0


def _defect_of_words(op: OperatorSum, site_map: SiteMap) -> float:
    left = site_map.moved(op)
    algebra.accumulate(left, algebra.negative(op.words))
    if not left:
        return 0.0
    size = np.abs(op.coefficients).max()
    rest = max(abs(complex(c.value(op.parameters))) for c in left.values())
    return float(rest / size) if size else float(rest)

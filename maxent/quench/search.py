"""Search for local conserved operators of a Hamiltonian, at infinite volume.

Which operators Q = sum_c t^c T^(p c)(q), with a density q on at most r neighbouring sites, commute with H? In the
unique normal form of `maxent.quench.strings` the map q -> density of [H, Q]/(2i) is a real sparse matrix M, and its
null space is the answer, without a ring, so without finite-size artefacts. Local operators of fermions, those with an
even number of c and dagger(c), are local Pauli strings too: the whole search runs on these, and only the basis with
few words is chosen in words of fermions. With Pauli strings normalised, |M q| is
|[H, Q]| / (2 |Q|) for |q| = 1 (Frobenius norms at infinite volume): the smallest singular value that is not zero says
how nearly the next operator is conserved.

The search is complete for strictly local operators up to its range. Operators with tails, such as quasi-local charges,
are no members of that space. Floor: quench. Must not know configs or how results are shown.

References
----------
M. P. Grabowski and P. Mathieu, Structure of the conservation laws in quantum integrable spin chains with short range
interactions, Ann. Phys. 243, 299 (1995): the charges of XYZ chains by this route, by hand.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable, Sequence
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.lattice import OperatorSum
from maxent.memory import require_memory
from maxent.quench.charges import LocalCharge, LocalCharges, Momentum
from maxent.quench.densities import density
from maxent.quench.equations import Space
from maxent.quench.readable import MANY, readable
from maxent.quench.simplify import cleaned
from maxent.quench.strings import WIDEST, Density, brackets, count
from maxent.text import plural

__all__ = ["search"]

#: With more unknowns than this, the memory is estimated from a smaller range first.
_MUCH = 100_000


def search(
    hamiltonian: OperatorSum | Iterable[Sequence[Any]],
    up_to: int = 4,
    *,
    cell: int | None = None,
    momentum: Momentum = "0",
    progress: Callable[[str], None] | None = None,
    limit: int | None = None,
) -> LocalCharges:
    """Find all translation-invariant conserved operators of a Hamiltonian of spins 1/2 or fermions up to a range.

    Parameters
    ----------
    hamiltonian : OperatorSum on a ring or chain, or iterable of (coefficient, letters) or (coefficient, letters, place)
        Pauli strings such as ``(0.5, "XIX")`` stand for themselves and all translates by whole cells. Of a sum the
        invariance is checked; the size of the ring plays no role for the answer, and of an open chain the bulk counts.
    up_to : int
        Largest range: neighbouring sites that an operator may act on.
    cell : int, optional
        Sites per unit cell, for the Hamiltonian and for the operators looked for. Default: the smallest that the sum
        on the ring has; 1 for strings.
    momentum : "0" or "pi"
        "pi": operators whose sign alternates from cell to cell.
    progress : callable, optional
        Receives lines of text when the work takes over 2 seconds.
    limit : int, optional
        Bytes that may be used; default what the machine has available.

    Returns
    -------
    LocalCharges

    Raises
    ------
    ResourceError
        When the range needs more memory than there is; with the numbers, before the work.
    TypeError, ValueError
        A Hamiltonian that is no Hermitian translation-invariant sum of spins 1/2 or fermions on a line, or a range
        below 1.

    Examples
    --------
    >>> found = search([(1.0, "XX"), (1.0, "YY"), (0.5, "ZZ")], 3)
    >>> found.counts
    (1, 2, 3)
    >>> [q.formula() for q in found.charges][:2]
    ['4*Sx[i]*Sx[i+1] + 4*Sy[i]*Sy[i+1] + 2*Sz[i]*Sz[i+1]', 'Sz[i]']
    """
    if isinstance(up_to, bool) or not isinstance(up_to, int) or up_to < 1:
        raise ValueError(f"the largest range must be a whole number from 1 on, not {up_to!r}")
    if momentum not in ("0", "pi"):
        raise ValueError(f"momentum must be '0' or 'pi', not {momentum!r}")
    say = _Slowly(progress)
    h = density(hamiltonian, cell=cell)
    _refuse_too_large(h, up_to, limit)
    space = Space(h, up_to, momentum)
    _refuse_wide(space.widest, "", up_to, limit)
    levels = []
    for k in range(1, up_to + 1):
        say(f"range {k} of {up_to}: {plural(space.below(k), 'operator')}")
        levels.append(space.level(k, say))
    rows = readable(space, levels)
    charges = [space.charge(row) for row in rows]
    rows, charges = _hamiltonian_first(space, rows, charges)
    by_range = np.argsort([q.range for q in charges], kind="stable")
    turned = np.zeros((len(rows), space.size))
    turned[by_range] = _orthonormal(np.array(rows).reshape(-1, space.size)[by_range])
    return LocalCharges(
        hamiltonian=h, momentum=momentum, counts=tuple(level.count for level in levels), charges=tuple(charges),
        orthonormal=tuple(space.charge(row, fractions=False) for row in turned),
        nearly=tuple(space.nearly(level) for level in levels),
        commutators=_mutual(space, rows) if len(rows) <= MANY else None,
        diagonal=_diagonal(space, turned),
        largest_zero=max(level.largest_zero for level in levels),
    )  # fmt: skip


class _Slowly:
    """Progress that stays quiet for the first two seconds."""

    def __init__(self, say: Callable[[str], None] | None):
        self.say, self.begun = say, time.monotonic()

    def __call__(self, line: str) -> None:
        if self.say is not None and time.monotonic() - self.begun > 2.0:
            self.say(line)


def _refuse_too_large(h: Density, up_to: int, limit: int | None) -> None:
    """Refuse what would not fit: bits, then memory of the sparse matrix."""
    if (up_to + h.range) * h.modes + 2 * h.cell > WIDEST:
        raise ValueError(
            f"range {up_to} of the search and {h.range} of the Hamiltonian with {h.sites} sites per cell are too wide: "
            f"range + range + 2 * cell may be {WIDEST // h.modes} at most"
        )
    unknowns = count(up_to, h.cell, h.modes, even=bool(h.species))
    shifts = (up_to + h.range) // h.sites + 2
    # half of the pairs do not commute; about twelve numbers of 8 bytes are kept for each while the matrix is made
    require_memory(
        unknowns * len(h.x) * shifts * 48,
        f"the search up to range {up_to} has {unknowns} unknowns and needs {{need}} for its equations alone",
        limit=limit,
    )
    if unknowns <= _MUCH:
        return
    # making the equations takes long: how wide their blocks will be shows at a smaller range
    known = max((k for k in range(1, up_to) if count(k, h.cell, h.modes, even=bool(h.species)) <= _MUCH), default=0)
    if known:
        smaller = Space(h, known, "0")
        _refuse_wide(smaller.widest * unknowns // smaller.size, "about ", up_to, limit)


def _refuse_wide(widest: int, about: str, up_to: int, limit: int | None) -> None:
    require_memory(
        3 * 8 * widest**2,
        f"the search up to range {up_to} couples {about}{widest} unknowns and needs {{need}} for their singular values",
        limit=limit,
    )


def _hamiltonian_first(
    space: Space, rows: list[np.ndarray], charges: list[LocalCharge]
) -> tuple[list[np.ndarray], list[LocalCharge]]:
    """Put the Hamiltonian in front, in place of the one of its range that holds most of it."""
    h, own = space.h, space.hamiltonian()
    if own is None:
        return rows, charges
    parts = np.linalg.lstsq(np.array(rows).T, own, rcond=None)[0]
    replaced = max(
        (j for j, q in enumerate(charges) if q.range == h.range), key=lambda j: (round(abs(parts[j]), 9), -j)
    )
    mine = LocalCharge(h.range, h.terms, h.cell, "0", 0.0, True, hamiltonian=True, names=h.names, species=h.species)
    others = [j for j in range(len(rows)) if j != replaced]
    return [own, *(rows[j] for j in others)], [mine, *(charges[j] for j in others)]


def _orthonormal(rows: np.ndarray) -> np.ndarray:
    """Rows orthonormalised in their order, with positive overlap with what they came from."""
    if not len(rows):
        return rows
    q, r = np.linalg.qr((rows / np.linalg.norm(rows, axis=1, keepdims=True)).T)
    return cleaned((q * np.sign(np.diag(r))).T)


def _mutual(space: Space, rows: Sequence[np.ndarray]) -> np.ndarray:
    """Relative commutators of all pairs."""
    out = np.zeros((len(rows), len(rows)))
    if not len(rows):
        return out
    used = np.flatnonzero(np.any(np.array(rows) != 0.0, axis=0))
    x, z, norms = space.x[used], space.z[used], np.linalg.norm(rows, axis=1)
    for j, row in enumerate(rows):
        on = np.flatnonzero(row)
        others = np.array(rows[j + 1 :]).reshape(-1, space.size)[:, used].T
        found = brackets(space.x[on], space.z[on], x, z, space.h.cell)
        keys, place = np.unique(found.keys(), return_inverse=True)
        values = row[on][found.left] * found.signs(space.sign, space.sign)
        product = sp.coo_array((values, (place, found.right)), shape=(len(keys), len(used))).tocsr() @ others
        sizes = np.linalg.norm(product, axis=0) / (norms[j] * norms[j + 1 :])
        out[j, j + 1 :] = out[j + 1 :, j] = np.where(sizes > 1e-12, sizes, 0.0)
    return out


def _diagonal(space: Space, rows: np.ndarray) -> int:
    """Dimension of the part of a space of orthonormal rows whose words use one letter only; the best of the three.

    Of fermions, Z is the only letter with a meaning: the occupation.
    """
    if not len(rows):
        return 0
    same = {"Z": space.x == 0}
    if not space.h.species:
        same |= {"X": space.z == 0, "Y": space.x == space.z}
    return max(
        int(np.sum(np.linalg.svd(rows[:, ~mask], compute_uv=False) < 1e-8)) + max(len(rows) - int((~mask).sum()), 0)
        for mask in same.values()
    )

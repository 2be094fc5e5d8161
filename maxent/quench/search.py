"""Search for local conserved operators of a Hamiltonian, at infinite volume.

Which operators Q = sum_c t^c T^(p c)(q), with a density q on at most r neighbouring sites, commute with H? In the
unique normal form of `maxent.quench.strings` the map q -> density of [H, Q]/(2i) is a real sparse matrix M, and its
null space is the answer, without a ring, so without finite-size artefacts. With Pauli strings normalised, |M q| is
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
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
import scipy.linalg
import scipy.sparse as sp
from scipy.sparse.csgraph import connected_components

from maxent.lattice import OperatorSum
from maxent.memory import require_memory
from maxent.quench.charges import LocalCharge, LocalCharges, Momentum, NearlyConserved
from maxent.quench.simplify import Word, cleaned, echelon, rational, shorten
from maxent.quench.strings import WIDEST, Density, brackets, density, letters, ranges, strings
from maxent.text import plural

__all__ = ["search"]

#: Singular values below this fraction of a bound of the largest are zero.
ZERO = 1e-9
#: Above this many columns the lowest singular vectors are taken from the Gram matrix, then refined.
_DENSE = 400
#: With more charges than this, neither are they shortened nor their mutual commutators computed.
_MANY = 100


def search(
    hamiltonian: OperatorSum | Iterable[Sequence[Any]],
    up_to: int = 4,
    *,
    cell: int | None = None,
    momentum: Momentum = "0",
    progress: Callable[[str], None] | None = None,
    limit: int | None = None,
) -> LocalCharges:
    """Find all translation-invariant conserved operators of a spin-1/2 Hamiltonian up to a range.

    Parameters
    ----------
    hamiltonian : OperatorSum on a ring, or iterable of (coefficient, letters) or (coefficient, letters, place)
        Pauli strings such as ``(0.5, "XIX")`` stand for themselves and all translates by whole cells. Of a sum on a
        ring the invariance is checked; the size of the ring plays no role for the answer.
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
        A Hamiltonian that is no Hermitian translation-invariant sum of spins 1/2 on a ring, or a range below 1.

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
    space = _Space(h, up_to, momentum)
    widest = max(map(len, _components(space.matrix)))
    require_memory(
        3 * 8 * widest**2,
        f"the search up to range {up_to} couples {widest} unknowns and needs {{need}} for their singular values",
        limit=limit,
    )
    levels = []
    for k in range(1, up_to + 1):
        say(f"range {k} of {up_to}: {plural(space.below(k), 'operator')}")
        levels.append(_null_space(space.matrix[:, : space.below(k)], space.scale, say))
    rows = _readable(space, levels)
    charges = [space.charge(row) for row in rows]
    rows, charges = _hamiltonian_first(space, rows, charges)
    by_range = np.argsort([q.range for q in charges], kind="stable")
    turned = np.zeros((len(rows), space.size))
    turned[by_range] = _orthonormal(np.array(rows).reshape(-1, space.size)[by_range])
    return LocalCharges(
        hamiltonian=h, momentum=momentum, counts=tuple(level.count for level in levels), charges=tuple(charges),
        orthonormal=tuple(space.charge(row, fractions=False) for row in turned),
        nearly=tuple(space.nearly(level) for level in levels),
        commutators=_mutual(space, rows) if len(rows) <= _MANY else None,
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
    unknowns = 3 * 4 ** (up_to - 1) * h.cell
    shifts = (up_to + h.range) // h.cell + 2
    # half of the pairs do not commute; about twelve numbers of 8 bytes are kept for each while the matrix is made
    require_memory(
        unknowns * len(h.x) * shifts * 48,
        f"the search up to range {up_to} has {unknowns} unknowns and needs {{need}} for its equations alone",
        limit=limit,
    )
    if up_to + h.range + 2 * h.cell > WIDEST:
        raise ValueError(
            f"range {up_to} of the search and {h.range} of the Hamiltonian with {h.cell} sites per cell are too wide: "
            f"range + range + 2 * cell may be {WIDEST} at most"
        )


class _Space:
    """Operators up to a range, ordered by range, and the matrix of the commutator with H."""

    def __init__(self, h: Density, up_to: int, momentum: Momentum):
        self.h, self.momentum, self.up_to = h, momentum, up_to
        self.sign = -1 if momentum == "pi" else 1
        self.x, self.z = strings(up_to, h.cell)
        self.size = len(self.x)
        self.ranges = ranges(self.x, self.z)
        found = brackets(h.x, h.z, self.x, self.z, h.cell)
        keys, place = np.unique(found.keys(), return_inverse=True)
        values = h.coefficients[found.left] * found.signs(1, self.sign)
        self.matrix = sp.csc_array((values, (place, found.right)), shape=(len(keys), self.size))
        self.matrix.data[np.abs(self.matrix.data) <= 1e-15 * np.abs(h.coefficients).max()] = 0.0
        self.matrix.eliminate_zeros()
        size = abs(self.matrix)
        self.scale = float(np.sqrt(size.sum(axis=0).max(initial=0.0) * size.sum(axis=1).max(initial=0.0)))

    def below(self, up_to: int) -> int:
        """Number of operators with at most this range; they come first."""
        return int(np.searchsorted(self.ranges, up_to, side="right"))

    def hamiltonian(self) -> np.ndarray | None:
        """H as a row (size,), or None if it is no member of the space."""
        if self.h.range > self.up_to or self.momentum == "pi":
            return None
        row = np.zeros(self.size)
        for x, z, coefficient in zip(self.h.x, self.h.z, self.h.coefficients, strict=True):
            row[(self.x == x) & (self.z == z)] = coefficient
        return row

    def charge(self, row: np.ndarray, *, fractions: bool = True) -> LocalCharge:
        """Operator with a row (size,) as coefficients."""
        on = np.flatnonzero(row)
        norm = float(np.linalg.norm(row) * np.linalg.norm(self.h.coefficients))
        defect = float(np.linalg.norm(self.matrix @ row)) / norm
        simple = rational(row[on]) if fractions else None
        exact = simple is not None and self.commutes(on, simple)
        values: list[Fraction | float] = [*simple] if simple and exact else row[on].tolist()
        words: list[Word] = []
        for value, n in zip(values, on, strict=True):
            words.append((value, *letters(int(self.x[n]), int(self.z[n]))))
        return LocalCharge(
            int(self.ranges[on].max()), tuple(words), self.h.cell, self.momentum, defect, exact, names=self.h.names
        )

    def commutes(self, on: np.ndarray, values: Sequence[Fraction]) -> bool:
        """Whether fractions times some of the operators commute with H, in whole numbers."""
        common = np.lcm.reduce([v.denominator for v in values], dtype=object)
        q = np.array([int(v * common) for v in values], dtype=object)
        h = np.array(self.h.fractions, dtype=object)
        found = brackets(self.h.x, self.h.z, self.x[on], self.z[on], self.h.cell)
        keys, place = np.unique(found.keys(), return_inverse=True)
        total = np.zeros(len(keys), dtype=object)
        np.add.at(total, place, h[found.left] * q[found.right] * found.signs(1, self.sign).astype(object))
        return not total.any()

    def nearly(self, level: _Level) -> NearlyConserved | None:
        """The most nearly conserved operator of a level."""
        if not len(level.lowest):
            return None
        rows = np.zeros((len(level.lowest), self.size))
        rows[:, : level.lowest.shape[1]] = level.lowest
        row = echelon(rows, [(np.arange(self.size), len(rows))])[0]
        charge = self.charge(row / np.linalg.norm(row), fractions=False)
        return NearlyConserved(level.value, len(rows), charge)


@dataclass(frozen=True)
class _Level:
    """Null space of the operators up to one range.

    `parts`: columns (n,) and orthonormal rows (d, n) of each component that has a null space; `value` and `lowest`
    (k, n): smallest singular value that is not zero, and the orthonormal vectors that have it.
    """

    parts: list[tuple[np.ndarray, np.ndarray]]
    value: float
    lowest: np.ndarray
    largest_zero: float

    @property
    def count(self) -> int:
        return sum(len(rows) for _, rows in self.parts)


def _components(matrix: sp.csc_array) -> list[np.ndarray]:
    """Columns of each component of the graph of rows and columns."""
    graph = sp.block_array([[None, matrix], [matrix.T, None]]).tocsr()
    labels = connected_components(graph, directed=False)[1][matrix.shape[0] :]
    order = np.argsort(labels, kind="stable")
    return np.split(order, np.flatnonzero(np.diff(labels[order])) + 1)


def _null_space(matrix: sp.csc_array, scale: float, say: _Slowly) -> _Level:
    """Null space and next singular value, component by component."""
    n = matrix.shape[1]
    parts, candidates, largest_zero, value = [], [], 0.0, np.inf
    for some in _components(matrix):
        if len(some) > _DENSE:
            say(f"  block of {len(some)} unknowns")
        sizes, vectors = _lowest(matrix[:, some], scale)
        null = sizes <= ZERO * scale
        if null.any():
            parts.append((some, vectors[null]))
            largest_zero = max(largest_zero, float(sizes[null].max()))
        if not null.all():
            value = min(value, float(sizes[~null].min()))
            candidates.append((some, sizes[~null], vectors[~null]))
    lowest = []
    for some, sizes, vectors in candidates:
        for vector in vectors[sizes <= value * (1 + 1e-7)]:
            row = np.zeros(n)
            row[some] = vector
            lowest.append(row)
    return _Level(parts, value, np.array(lowest).reshape(-1, n), largest_zero)


def _lowest(matrix: sp.csc_array, scale: float) -> tuple[np.ndarray, np.ndarray]:
    """Smallest singular values and their right vectors (as rows) of one component: all zero ones and the next."""
    n = matrix.shape[1]
    if not matrix.nnz:
        return np.zeros(n), np.eye(n)
    if n <= _DENSE:
        rows = np.unique(matrix.indices)
        dense = matrix.tocsr()[rows].toarray()
        if dense.shape[0] > 2 * n:
            dense = np.linalg.qr(dense, mode="r")
        sizes, vectors = scipy.linalg.svd(dense, full_matrices=True)[1:]
        return np.concatenate([sizes, np.zeros(n - len(sizes))]), vectors
    wanted = 32
    while True:
        # a null vector leaks out of the lowest eigenvectors by eps * scale^2 / (last eigenvalue kept), so that the
        # singular values on them are right to rounding if that one is not small
        squares = (matrix.T @ matrix).toarray().T
        wanted = min(wanted, n)
        levels, vectors = scipy.linalg.eigh(
            squares, subset_by_index=[0, wanted - 1], overwrite_a=True, check_finite=False
        )
        clear = levels[levels > 1e-6 * scale**2]
        if wanted == n or (len(clear) and clear[-1] > 1.001 * clear[0]):
            break
        wanted *= 4
    sizes, turn = scipy.linalg.svd(matrix @ vectors, full_matrices=False)[1:]
    return sizes, turn @ vectors.T


def _readable(space: _Space, levels: Sequence[_Level]) -> list[np.ndarray]:
    """Basis with few words, by range: what each range adds, in echelon form, shortened by what is there already."""
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
        if level.count <= _MANY:
            for j, row in enumerate(new):
                new[j] = shorten(row, [*found, *new[:j], *new[j + 1 :]])
        new.sort(key=lambda row: (np.count_nonzero(row), int(np.flatnonzero(row)[0])))
        found += [_leading(space, row) for row in new]
    return found


def _leading(space: _Space, row: np.ndarray) -> np.ndarray:
    """Row times the factor that makes its first word among the widest 1."""
    first = np.flatnonzero((row != 0.0) & (space.ranges == space.ranges[row != 0.0].max()))[0]
    return row / row[first]


def _hamiltonian_first(
    space: _Space, rows: list[np.ndarray], charges: list[LocalCharge]
) -> tuple[list[np.ndarray], list[LocalCharge]]:
    """Put the Hamiltonian in front, in place of the one of its range that holds most of it."""
    h, own = space.h, space.hamiltonian()
    if own is None:
        return rows, charges
    parts = np.linalg.lstsq(np.array(rows).T, own, rcond=None)[0]
    replaced = max(
        (j for j, q in enumerate(charges) if q.range == h.range), key=lambda j: (round(abs(parts[j]), 9), -j)
    )
    mine = LocalCharge(h.range, h.terms, h.cell, "0", 0.0, True, hamiltonian=True, names=h.names)
    others = [j for j in range(len(rows)) if j != replaced]
    return [own, *(rows[j] for j in others)], [mine, *(charges[j] for j in others)]


def _orthonormal(rows: np.ndarray) -> np.ndarray:
    """Rows orthonormalised in their order, with positive overlap with what they came from."""
    if not len(rows):
        return rows
    q, r = np.linalg.qr((rows / np.linalg.norm(rows, axis=1, keepdims=True)).T)
    return cleaned((q * np.sign(np.diag(r))).T)


def _mutual(space: _Space, rows: Sequence[np.ndarray]) -> np.ndarray:
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


def _diagonal(space: _Space, rows: np.ndarray) -> int:
    """Dimension of the part of a space of orthonormal rows whose words use one letter only; the best of the three."""
    if not len(rows):
        return 0
    same = {"X": space.z == 0, "Y": space.x == space.z, "Z": space.x == 0}
    return max(
        int(np.sum(np.linalg.svd(rows[:, ~mask], compute_uv=False) < 1e-8)) + max(len(rows) - int((~mask).sum()), 0)
        for mask in same.values()
    )



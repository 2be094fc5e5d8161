"""The sector that a start lives in: everything without spread in it, and the states that share these values.

Three kinds of values narrow the space in turn: charges that are diagonal in the product basis and labels of the
symmetry basis select its columns; symmetries that the basis has no label for (a reflection beside a translation, the
parity, products of these with the maps of the basis) and charges that are not diagonal select an eigenspace among the
states that are left.  An eigenspace counts where the operator keeps the states left so far and the Hamiltonian keeps
the eigenspace; what has no spread and does not count is told.  Floor: quench.  Must not know fits or windows.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from itertools import combinations, product
from typing import TYPE_CHECKING, Any

import numpy as np
import scipy.sparse as sp

from maxent.core.blocks import eigh
from maxent.errors import ResourceError
from maxent.lattice.symmetries import IndexMap, SymmetryBasis, find_symmetries, sharp_value
from maxent.memory import require_memory
from maxent.quench.conservation import TOLERANCE
from maxent.quench.operators import frobenius, largest_row_sum, traceless_norm, without_dirt
from maxent.quench.starts import Start
from maxent.text import listing

if TYPE_CHECKING:
    from maxent.quench.ensembles import Charges

__all__ = ["Sector", "find_sector", "parity_map", "sharp_labels"]

#: What an operator may lead out of a space, relative to its size, and an eigenvalue differ from the value of the start.
EQUAL = 1e-9


@dataclass(frozen=True, eq=False)
class Sector:
    """Values that have no spread in a start, and the states that share them.

    Attributes
    ----------
    labels : dict of str to int
        Labels of maps of the symmetry basis, of their powers and products.
    further : dict of str to int
        Labels of symmetries that the basis does not have, where they select states.
    charges : dict of str to float
    part : (k,) ndarray of int, or (d, k) scipy.sparse
        States of the basis, or an isometry onto the sector where its states are sums of them.
    notes : tuple of str
        What has no spread and is not used.
    """

    labels: dict[str, int]
    further: dict[str, int]
    charges: dict[str, float]
    part: Any
    notes: tuple[str, ...] = ()

    @property
    def values(self) -> dict[str, float]:
        """All sharp values by name."""
        return {**self.charges, **{name: float(v) for name, v in {**self.labels, **self.further}.items()}}

    @property
    def size(self) -> int:
        """Number of states."""
        return self.part.shape[-1]

    def columns(self, index: np.ndarray) -> np.ndarray:
        """States of the basis that some states of the sector are sums of."""
        return self.part[index] if self.part.ndim == 1 else np.unique(sp.csc_array(self.part)[:, index].indices)

    def states(self, basis: Any) -> Any:
        """The states as columns (D, k), `basis` (D, d) the basis."""
        return basis[:, self.part] if self.part.ndim == 1 else sp.csr_array(basis @ self.part)

    def inside(self, operator: Any) -> Any:
        """An operator (d, d) of the basis between the states of the sector."""
        if self.part.ndim == 1:
            return operator[self.part][:, self.part]
        return without_dirt(self.part.conj().T @ (operator @ self.part))


def find_sector(charges: Charges, start: Start, *, by_symmetry: bool = True) -> Sector | None:
    """Sector of all conserved charges and symmetries without spread in the start; None when there is none.

    Parameters
    ----------
    charges : Charges
        Those that do not commute with the Hamiltonian make no sector.
    start : Start
    by_symmetry : bool, optional
        Whether symmetries count, or charges alone.
    """
    basis, everything = charges.basis, charges.matrices[charges.hamiltonian].shape[0]
    labels: dict[str, int] = {}
    keep = np.ones(everything, bool)
    if basis is not None and by_symmetry:
        labels, keep = sharp_labels(basis, start)
    values, notes = _sharp_charges(charges, start)
    lines = {name: line for name in values if (line := _diagonal(charges.operators[name].matrix())) is not None}
    keep &= _selected(charges, {name: (line, values[name]) for name, line in lines.items()})
    states = _States(charges, np.flatnonzero(keep))
    further: dict[str, int] = {}
    for m, label, phase in _sharp_symmetries(charges, start) if by_symmetry else ():
        u = m.matrix()
        before = states.size
        if not states.narrow(0.5 * (np.conj(phase) * u + phase * u.conj().T), 1.0) and states.size < before:
            further[m.name] = label
    for name in [n for n in values if n not in lines]:
        q = charges.operators[name].matrix()
        refused = states.narrow(q, values[name])
        if refused:
            known = [*(n for n in values if n != name and n in {*lines, *states.used}), *labels, *further]
            notes.append(f"{name} has no spread in the start, but {refused.format(listing(known, 'and'))}: {UNUSED}.")
            del values[name]
        else:
            states.used.append(name)
    if not labels and not further and not values:
        return None
    return None if states.size == everything else Sector(labels, further, values, states.part, tuple(notes))


#: End of the note on a value that makes no sector.
UNUSED = "the columns in the sector of the start do not use it"


def sharp_labels(basis: SymmetryBasis, start: Start) -> tuple[dict[str, int], np.ndarray]:
    """Which symmetries, powers and products of them a start has a sharp value of, and the states that share them.

    A start that repeats after two sites has weight at momenta 0 and pi: the translation has spread there, its square
    has none.  In general the labels k of all maps, as elements of Z_r1 x Z_r2 x ..., that share every sharp value with
    the start are ``k_0`` plus the subgroup that the differences of the labels in the start generate.

    Returns
    -------
    values : dict of str to int
        Label by the name of a map, or `name^p` for its p-th power where that is the lowest sharp one; `joint sectors`
        where products of maps restrict the labels further, with the number of joint labels that are left.
    columns : (d,) bool ndarray
    """
    maps = basis.maps
    orders = np.array([m.order for m in maps])
    labels = np.array([basis.labels[m.name] for m in maps])
    raw = np.array([(1 - k) // 2 if (k < 0).any() else k for k in labels]).T  # parities +1, -1 are labels 0, 1
    weight = np.sum(np.abs(basis.matrix.conj().T @ start.vectors) ** 2 * start.weights, axis=1)
    tuples, which = np.unique(raw, axis=0, return_inverse=True)
    share = np.bincount(which.ravel(), weight)
    there = tuples[share > 1e-20]
    first = there[0]
    group = {tuple(0 for _ in maps)}
    while True:
        more = group | {tuple((np.array(g) + k - first) % orders) for g in group for k in there}
        if len(more) == len(group):
            break
        group = more
    allowed = np.array([tuple(k) in {tuple((np.array(g) + first) % orders) for g in group} for k in tuples])
    values: dict[str, int] = {}
    apart = 1
    for a, m in enumerate(maps):
        spread = {g[a] for g in group}
        power = len(spread)  # a cyclic subgroup of that many elements: the power of the map that is one on it
        if power == orders[a]:
            apart *= power
            continue
        apart *= power
        whole = int(first[a]) % (int(orders[a]) // power)
        sign = (labels[a] < 0).any()
        values[m.name if power == 1 else f"{m.name}^{power}"] = 1 - 2 * whole if sign else whole
    if len(group) < apart:
        values["joint sectors"] = len(group)
    return values, allowed[which.ravel()]


def parity_map(charges: Charges) -> IndexMap | None:
    """``(-1)^n`` of the product states, n the sum of the levels of all sites and species, where every charge keeps it.

    For spins 1/2 that is the product of all Pauli Z, for fermions and bosons the parity of their number.
    """
    line = np.ones(1)
    for slot in charges.sites.slots:  # one for every site and species
        line = np.multiply.outer(line, (-1.0) ** np.arange(slot.dimension)).ravel()
    for op in charges.operators.values():
        q = sp.coo_array(op.matrix())
        if np.any((line[q.coords[0]] != line[q.coords[1]]) & (q.data != 0)):
            return None
    return IndexMap("parity", np.arange(len(line)), line)


class _States:
    """States of the basis that share the values found so far: `part` as in `Sector`."""

    def __init__(self, charges: Charges, columns: np.ndarray) -> None:
        d = charges.matrices[charges.hamiltonian].shape[0]
        self.part: Any = columns
        self.used: list[str] = []
        self._hamiltonian = charges.matrices[charges.hamiltonian]
        self._basis = sp.eye_array(d, format="csr") if charges.basis is None else charges.basis.matrix
        self._one = sp.eye_array(d, format="csc")

    @property
    def size(self) -> int:
        return self.part.shape[-1]

    def narrow(self, operator: Any, value: float) -> str:
        """Keep the eigenspace of a Hermitian operator (D, D), or say why not, with a place for what it clashes with."""
        inner = self._one[:, self.part] if self.part.ndim == 1 else self.part
        w = sp.csr_array(self._basis @ inner)
        image = operator @ w
        q = without_dirt(w.conj().T @ image)
        size = max(largest_row_sum(operator), 1e-300)
        if abs(image - w @ q).max() > EQUAL * size:
            return "does not commute with {}"
        try:
            vectors = _eigenspace(q, value, EQUAL * size, w.nnz / max(self.size, 1))
        except ResourceError as refused:
            return f"its eigenstates take too much memory ({refused})".replace("{", "").replace("}", "")
        if not vectors.shape[1]:
            return "no state beside those of {} has its value"
        if vectors.nnz == vectors.shape[1] and self.part.ndim == 1:
            self.part = self.part[np.sort(vectors.indices)]
            return ""
        kept = sp.csc_array(inner @ vectors)
        image = self._hamiltonian @ kept
        if abs(image - kept @ (kept.conj().T @ image)).max() > TOLERANCE * largest_row_sum(self._hamiltonian):
            return "has further values too close to that of the start"
        self.part = kept
        return ""


def _eigenspace(q: Any, value: float, tolerance: float, fill: float) -> Any:
    """Eigenvectors of a sparse Hermitian matrix with one eigenvalue, as a sparse isometry (n, m), by connected parts.

    `fill` entries of the whole space belong to each of the n states.
    """
    number, which = sp.csgraph.connected_components(abs(q), directed=False)
    order = np.argsort(which, kind="stable")
    parts = np.split(order, np.cumsum(np.bincount(which, minlength=number))[:-1])
    largest = max(map(len, parts))
    room = sum(len(p) ** 2 for p in parts if len(p) > 1)
    require_memory(int(16 * (fill * room + 3 * largest**2)), f"{len(q.indptr) - 1} states need {{need}}")
    diagonal = np.real(q.diagonal())
    rows, columns, data, made = [np.empty(0, int)], [np.empty(0, int)], [np.empty(0)], 0
    for part in parts:
        if len(part) == 1:
            vectors = np.ones((1, int(abs(diagonal[part[0]] - value) <= tolerance)))
        else:
            values, vectors = eigh(q[part][:, part].toarray())
            vectors = vectors[:, np.abs(values - value) <= tolerance]
        m = vectors.shape[1]
        rows.append(np.repeat(part, m))
        columns.append(np.tile(np.arange(made, made + m), len(part)))
        data.append(vectors.ravel())
        made += m
    entries = np.concatenate(data)
    out = sp.csc_array((entries, (np.concatenate(rows), np.concatenate(columns))), shape=(q.shape[0], made))
    out.data[np.abs(out.data) <= 1e-15] = 0.0
    out.eliminate_zeros()
    return out


def _sharp_charges(charges: Charges, start: Start) -> tuple[dict[str, float], list[str]]:
    """Values of the conserved charges without spread, and a note on each one that is not conserved."""
    h = charges.matrices[charges.hamiltonian]
    values: dict[str, float] = {}
    notes = []
    for name, op in charges.operators.items():
        if name == charges.hamiltonian:
            continue
        value = sharp_value(op.matrix(), start.vectors)
        if value is None:
            continue
        q = charges.matrices[name]
        if frobenius(h @ q - q @ h) > TOLERANCE * largest_row_sum(h) * traceless_norm(q):
            notes.append(f"{name} has no spread in the start, but is not conserved: {UNUSED}.")
            continue
        small = abs(value) <= 1e-13 * largest_row_sum(op.matrix())
        values[name] = 0.0 if small else float(value)
    return values, notes


def _sharp_symmetries(charges: Charges, start: Start) -> Iterator[tuple[IndexMap, int, complex]]:
    """Symmetries outside the basis without spread in the start: map, label, and its eigenvalue.

    Those are reflections and the parity, and their products with one another and with the maps of the basis.  Two
    products that differ by maps of the basis differ by a label of the basis without spread, which is known: one is
    enough.
    """
    maps = () if charges.basis is None else charges.basis.maps
    found = [m.index_map for m in find_symmetries(charges.operators, charges.sites) if not m.conjugating]
    outside = [m for m in found if m.name not in {u.name for u in maps}]
    parity = parity_map(charges)
    if parity is not None:
        outside.append(parity)
    powers = [p for p in product(*(range(m.order) for m in maps))]
    powers.sort(key=lambda p: (sum(x > 0 for x in p), p))
    inner = [_product([(m, n) for m, n in zip(maps, p, strict=True) if n]) for p in powers]
    for count in range(1, len(outside) + 1):
        for some in combinations(outside, count):
            whole = _product([(m, 1) for m in some])
            for second in inner:
                m = whole if second is None else second.after(whole, name=f"{second.name} {whole.name}")
                vectors = start.vectors / np.linalg.norm(start.vectors, axis=0)
                overlap = np.einsum("ik,ik->k", vectors.conj(), m.apply(vectors))
                if np.abs(np.abs(overlap) - 1.0).max() > EQUAL:
                    continue
                label = sharp_value(m, start.vectors)
                if label is not None:
                    yield m, int(label), complex(overlap[0])
                    break


def _product(factors: list[tuple[IndexMap, int]]) -> Any:
    """Product of powers of maps, the last one done first; None of no factors."""
    out = None
    for m, power in factors:
        one = m
        for _ in range(power - 1):
            one = m.after(one, name=m.name)
        one = replace(one, name=m.name if power == 1 else f"{m.name}^{power}")
        out = one if out is None else out.after(one, name=f"{out.name} {one.name}")
    return out


def _diagonal(q: Any) -> np.ndarray | None:
    """Diagonal of a matrix that has no other entries."""
    line = q.diagonal()
    return None if (q - sp.diags_array(line)).count_nonzero() else line.real


def _selected(charges: Charges, lines: dict[str, tuple[np.ndarray, float]]) -> np.ndarray:
    """Which states (d,) of the basis have these values of diagonal charges."""
    if charges.basis is not None and lines:
        keep = np.zeros(charges.basis.size, bool)
        keep[charges.basis.columns({}, lines)] = True
        return keep
    keep = np.ones(charges.matrices[charges.hamiltonian].shape[0], bool)
    for line, value in lines.values():
        keep &= np.abs(line - value) <= EQUAL * max(1.0, float(np.abs(line).max()))
    return keep

"""Bases of symmetry sectors: Fourier states on the orbits of commuting index maps.

Floor: lattice.  For a commuting group with elements g and a character chi the state

    |chi, n> ~ sum_g chi(g)^* U_g |n>

of every orbit representative n is a simultaneous eigenstate of all maps; it vanishes unless chi agrees with the phases
of the maps that leave n in place.  Operators that are invariant have no entries between different characters, so that
the blocks found on the pattern of the conjugated matrices are momentum x parity x charge sectors.  An antiunitary
symmetry that keeps the labels makes every sector real (time reversal times reflection, on rings).  Must not know
families.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from itertools import combinations
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.lattice.index_maps import EQUAL, IndexMap
from maxent.lattice.orbits import fourier_states, real_states
from maxent.lattice.site_maps import SiteMap, defect
from maxent.lattice.terms import OperatorSum

__all__ = ["SymmetryBasis", "blocked", "sector", "sharp_value", "symmetry_basis"]

Map = SiteMap | IndexMap
#: Entries below this fraction of the largest one are rounding of the conjugation.
DIRT = 64 * 2.0**-52


@dataclass(frozen=True, eq=False)
class SymmetryBasis:
    """Orthonormal eigenstates of commuting maps, all of them or those of one sector.

    Attributes
    ----------
    matrix : (D, d) scipy.sparse.csr_array
        The states are its columns; unitary when it holds all sectors (d = D).  To be given as ``basis=``.
    maps : tuple of IndexMap
        The unitary maps.
    labels : dict of str to (d,) ndarray of int
        Label of every column by the name of the map: for a momentum k, with eigenvalue ``exp(-2 pi i k / order)``
        and momentum ``2 pi k / order``; for other maps of order 2 the parity +1 or -1; otherwise k as for a momentum.
    is_real : bool
        Whether an antiunitary symmetry has been used, so that operators that share it are real in this basis.
    """

    matrix: Any
    maps: tuple[IndexMap, ...]
    labels: dict[str, np.ndarray]
    is_real: bool = False

    @property
    def size(self) -> int:
        """Number of states d."""
        return self.matrix.shape[1]

    def momenta(self, name: str) -> np.ndarray:
        """Momentum ``2 pi k / order`` of every column in (-pi, pi], for one of the maps."""
        order = next(m.order for m in self.maps if m.name == name)
        k = self.labels[name]
        return 2 * np.pi * np.where(2 * k > order, k - order, k) / order

    def columns(
        self, values: Mapping[str, int] | None = None, charges: Mapping[str, tuple[Any, float]] | None = None
    ) -> np.ndarray:
        """Columns of one sector, for ``Matrices.restrict`` of a family written in this basis.

        Parameters
        ----------
        values : mapping from name of a map to label, optional
        charges : mapping from name to (charge, value), optional
            Charges that are diagonal in the product basis.

        Returns
        -------
        (k,) integer ndarray, ascending

        Raises
        ------
        ValueError
            Unknown names or labels, a charge that is not diagonal or not conserved by the maps, an empty sector.
        """
        keep = np.ones(self.size, bool)
        for name, value in (values or {}).items():
            if name not in self.labels:
                raise ValueError(f"the basis has no map '{name}'; it has {', '.join(self.labels) or 'none'}")
            keep &= self.labels[name] == _label(next(m for m in self.maps if m.name == name), value)
        if charges:
            inside = np.zeros(self.matrix.shape[0])
            inside[_states(charges, len(inside))] = 1.0
            weight = (abs(self.matrix) ** 2).T @ inside
            mixed = np.flatnonzero((weight > 1e-9) & (weight < 1 - 1e-9))
            if len(mixed):
                raise ValueError(
                    f"no sector {_sector_text({}, charges)}: {len(mixed)} states of the basis mix values of "
                    f"{', '.join(charges)}"
                )
            keep &= weight > 0.5
        if not keep.any():
            raise ValueError(f"no state in the sector {_sector_text(values or {}, charges or {})}")
        return np.flatnonzero(keep)

    def sectors(self) -> list[np.ndarray]:
        """Columns of every combination of labels that occurs."""
        if not self.labels:
            return [np.arange(self.size)]
        table = np.array(list(self.labels.values()))
        order = np.lexsort(table[::-1])
        changes = np.any(np.diff(table[:, order], axis=1) != 0, axis=0)
        return np.split(order, np.flatnonzero(changes) + 1)

    def only(self, columns: np.ndarray) -> SymmetryBasis:
        """The basis of some of its columns."""
        labels = {name: label[columns] for name, label in self.labels.items()}
        return replace(self, matrix=self.matrix[:, columns], labels=labels)


def symmetry_basis(
    maps: Iterable[Map], *, values: Mapping[str, int] | None = None, states: np.ndarray | None = None
) -> SymmetryBasis:
    """Basis of simultaneous eigenstates of symmetry maps.

    Parameters
    ----------
    maps : iterable of SiteMap or IndexMap
        Unitary maps that commute, and at most one antiunitary map, which makes the sectors real; it has to keep the
        labels of the others.  A map that does not commute with an earlier one (a reflection with a translation) is
        taken when `values` fixes the earlier one to a label that it keeps (momentum 0 or half the order).
    values : mapping from name of a map to label, optional
        Only the states with these labels are made.
    states : (n,) integers, optional
        Product states to start from, such as those of one value of a charge; every map must keep this set.

    Returns
    -------
    SymmetryBasis
        Columns in the order of their labels.

    Raises
    ------
    ValueError
        Maps that do not commute (named), repeated names, different dimensions, an unknown label, a set of states that
        a map leaves, no state in the sector.

    Examples
    --------
    >>> from maxent.lattice import Ring
    >>> from maxent.lattice.site_maps import translation
    >>> basis = symmetry_basis([translation(Ring(4))])
    >>> np.bincount(basis.labels["translation"]).tolist()
    [6, 3, 4, 3]
    """
    every = [_index_map(m) for m in maps]
    values = dict(values or {})
    if not every:
        raise ValueError("symmetry_basis needs at least one map")
    dimension = every[0].dimension
    for name in (names := [m.name for m in every]):
        if names.count(name) > 1:
            raise ValueError(f"two maps have the name '{name}'")
    for m in every:
        if m.dimension != dimension:
            raise ValueError(f"{every[0].name} acts on {dimension} states, {m.name} on {m.dimension}")
    unitary, turning = [m for m in every if not m.conjugating], [m for m in every if m.conjugating]
    for name in values:
        if name not in [m.name for m in unitary]:
            raise ValueError(f"a label is given for '{name}', which is none of the unitary maps")
    if len(turning) > 1:
        raise ValueError(f"one antiunitary map at most, not {', '.join(m.name for m in turning)}")
    _check_commuting(unitary, values)

    start = np.arange(dimension) if states is None else np.unique(np.asarray(states))
    matrix = sp.eye_array(dimension, format="csc")[:, start].tocsr()
    basis = SymmetryBasis(matrix, (), {})
    group: list[IndexMap] = []
    for i, m in enumerate(unitary):
        if all(m.commutes_with(other) for other in unitary[:i]):
            group.append(m)
    rest = [m for m in unitary if m not in group]
    if group:
        inside = [_inside(m, start) for m in group]
        basis = _refined(basis, group, inside, values)
    for m in rest:
        basis = _refined(basis, [m], [_on_columns(m, basis)], values)
    if turning:
        basis = replace(basis, matrix=_tidied(basis.matrix @ real_states(_on_columns(turning[0], basis))), is_real=True)
    order = np.lexsort([basis.labels[m.name] for m in reversed(basis.maps)]) if basis.maps else np.arange(basis.size)
    return basis.only(order)


def sector(
    maps: Iterable[Map], values: Mapping[str, int], charges: Mapping[str, tuple[Any, float]] | None = None
) -> SymmetryBasis:
    """Basis of one sector, made without the others.

    Parameters
    ----------
    maps : iterable of SiteMap or IndexMap
        May be empty when `charges` is given.
    values : mapping from name of a map to label
    charges : mapping from name to (charge, value), optional
        Charges that are diagonal in the product basis: OperatorSum, matrix, or (D,) values.

    Returns
    -------
    SymmetryBasis
        Its matrix (D, k) is an isometry onto the sector.

    Examples
    --------
    >>> from maxent.lattice import Ring, formula
    >>> from maxent.lattice.site_maps import translation
    >>> ring = Ring(12)
    >>> sector([translation(ring)], {"translation": 0}, {"magnetisation": (formula("Sz[i]", ring), 0)}).size
    80
    """
    every = [_index_map(m) for m in maps]
    states = None
    if charges:
        dimension = every[0].dimension if every else _diagonal(*next((n, c) for n, (c, _) in charges.items())).size
        states = _states(charges, dimension)
        for m in every:
            if not np.isin(m.images[states], states).all():
                raise ValueError(f"no sector {_sector_text({}, charges)}: {m.name} changes {', '.join(charges)}")
        if not every:
            matrix = sp.eye_array(dimension, format="csc")[:, states].tocsr()
            return SymmetryBasis(matrix, (), {})
    return symmetry_basis(every, values=values, states=states)


def blocked(charges: Mapping[str, Any], basis: SymmetryBasis | Any) -> dict[str, Any]:
    """Charges written in a basis, with the rounding of the conjugation removed.

    Parameters
    ----------
    charges : mapping from name to OperatorSum, (D, D) ndarray or scipy.sparse
    basis : SymmetryBasis, or (D, d) isometry

    Returns
    -------
    dict of str to (d, d) scipy.sparse.csr_array
        ``W^H Q W``, real where it is real.  With a `SymmetryBasis` entries between different labels are exactly zero
        and not stored, so that the blocks of `Matrices` are the sectors.

    Raises
    ------
    ValueError
        A charge of another dimension, or one that is not invariant under a map of the basis (both named).
    """
    isometry = basis.matrix if isinstance(basis, SymmetryBasis) else sp.csr_array(basis)
    groups = basis.sectors() if isinstance(basis, SymmetryBasis) else [np.arange(isometry.shape[1])]
    tall = isometry.tocsc()
    parts = [(index, tall[:, index].tocsr(), tall[:, index].conj().T.tocsr()) for index in groups]
    out: dict[str, Any] = {}
    for name, charge in charges.items():
        q = _matrix(charge)
        if q.shape != (isometry.shape[0],) * 2:
            raise ValueError(f"charge '{name}' has shape {q.shape}, the basis {isometry.shape[0]} rows")
        size = np.abs(q.data).max(initial=0.0)
        if isinstance(basis, SymmetryBasis):
            for m in basis.maps:
                off = defect(q, m)
                if off > EQUAL:
                    raise ValueError(
                        f"charge '{name}' is not invariant under {m.name}: its entries differ by {off:.1e}"
                    )
        row, column, data = _conjugate(q, parts)
        keep = np.abs(data) > DIRT * size
        row, column, data = row[keep], column[keep], data[keep]
        if np.iscomplexobj(data):
            real, imag = (np.where(np.abs(x) > DIRT * size, x, 0.0) for x in (data.real, data.imag))
            data = real + 1j * imag if imag.any() else real
        new = sp.csr_array((data, (row, column)), shape=(isometry.shape[1],) * 2)
        # entries (i, j) and (j, i) were rounded on their own, and one of them may have been dropped
        out[name] = 0.5 * (new + new.conj().T.tocsr())
    return out


def _conjugate(q: Any, parts: list[tuple[np.ndarray, Any, Any]]) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Rows, columns and entries of ``W^H q W`` within the parts of W (columns, W, W^H)."""
    rows, columns, data = [], [], []
    for index, part, adjoint in parts:
        inner = sp.coo_array(adjoint @ (q @ part))
        rows.append(index[inner.coords[0]])
        columns.append(index[inner.coords[1]])
        data.append(inner.data)
    return np.concatenate(rows), np.concatenate(columns), np.concatenate(data)


def sharp_value(what: Any, vectors: np.ndarray, *, tolerance: float = EQUAL) -> float | int | None:
    """Value of a symmetry or a charge in a start, when it has no spread there.

    Parameters
    ----------
    what : SiteMap, IndexMap, OperatorSum, matrix, or (D,) values of a diagonal charge
    vectors : (D,) or (D, k) ndarray
        The start, or the vectors of a mixture.
    tolerance : float
        Largest spread, relative to the size of the charge, that counts as rounding.

    Returns
    -------
    The label of a map as in `SymmetryBasis.labels` (int), the value of a charge (float), or None when it has spread.

    Raises
    ------
    ValueError
        Vectors of another dimension, or a vector that vanishes.
    """
    columns = np.asarray(vectors)
    columns = columns[:, None] if columns.ndim == 1 else columns
    norms = np.linalg.norm(columns, axis=0)
    if not norms.all():
        raise ValueError("a start vector vanishes")
    columns = columns / norms
    if isinstance(what, SiteMap | IndexMap):
        m = _index_map(what)
        if m.conjugating:
            raise ValueError(f"{m.name} is antiunitary and has no label")
        images, size = m.apply(columns), 1.0
    elif isinstance(what, OperatorSum):
        images, size = what.action(columns), max(what.norm_bound, 1e-300)
    else:
        q = np.asarray(what) if not sp.issparse(what) else sp.csr_array(what)
        if q.shape[0] != len(columns):
            raise ValueError(f"the charge has dimension {q.shape[0]}, the start {len(columns)} amplitudes")
        images = q[:, None] * columns if q.ndim == 1 else q @ columns
        size = max(float(np.abs(q).max()), 1e-300)
    means = np.einsum("ik,ik->k", columns.conj(), images)
    spread = np.linalg.norm(images - columns * means, axis=0)
    if np.any(spread > tolerance * size) or np.any(np.abs(means - means[0]) > tolerance * size):
        return None
    if not isinstance(what, SiteMap | IndexMap):
        return float(means[0].real)
    order, constant = m.powers()
    k = round(-(np.angle(means[0]) * order - np.angle(constant)) / (2 * np.pi)) % order
    return int(_names_of(m, np.array([k]))[0])


# ---------------------------------------------------------------------- helpers


def _index_map(m: Map) -> IndexMap:
    if isinstance(m, SiteMap):
        return m.index_map
    if not isinstance(m, IndexMap):
        raise TypeError(f"expected a SiteMap or an IndexMap, not {type(m).__name__}")
    return m


def _is_parity(m: IndexMap) -> bool:
    return m.order == 2 and not m.momentum


def _label(m: IndexMap, value: int) -> int:
    """A label as it is stored; momenta are taken modulo the order."""
    if isinstance(value, bool) or not isinstance(value, int | np.integer):
        raise ValueError(f"the label of {m.name} must be an integer, not {value!r}")
    if _is_parity(m):
        if value not in (1, -1):
            raise ValueError(f"the label of {m.name} must be 1 or -1, not {value}")
        return int(value)
    return int(value) % m.order


def _names_of(m: IndexMap, k: np.ndarray) -> np.ndarray:
    """Labels of the eigenvalue numbers k."""
    return 1 - 2 * k if _is_parity(m) else k


def _check_commuting(maps: list[IndexMap], values: Mapping[str, int]) -> None:
    for a, b in combinations(maps, 2):
        if not a.commutes_with(b) and a.name not in values:
            raise ValueError(f"{a.name} and {b.name} do not commute: leave one out, or fix the label of {a.name}")


def _inside(m: IndexMap, states: np.ndarray) -> IndexMap:
    """A map on some product states."""
    if len(states) == m.dimension:
        return m
    images = m.images[states]
    place = np.searchsorted(states, images)
    if np.any(place == len(states)) or np.any(states[np.minimum(place, len(states) - 1)] != images):
        raise ValueError(f"{m.name} leads out of the given states")
    return replace(m, images=place, phases=None if m.phases is None else m.phases[states])


def _on_columns(m: IndexMap, basis: SymmetryBasis) -> IndexMap:
    """A map on the columns of a basis, whose labels it must keep."""
    w = basis.matrix
    right = w.conj() if m.conjugating else w
    inner = (w.conj().T.tocsr() @ (m.matrix() @ right)).tocoo()
    keep = np.abs(inner.data) > 1e-9
    (row, column), data = (x[keep] for x in inner.coords), inner.data[keep]
    whole = len(data) == basis.size and len(np.unique(column)) == basis.size and np.allclose(np.abs(data), 1, atol=1e-9)
    same = whole and all(np.array_equal(label[row], label[column]) for label in basis.labels.values())
    if not same:
        others = ", ".join(basis.labels) or "the states"
        raise ValueError(f"{m.name} does not keep the labels of {others} that were asked for")
    images, phases = np.empty(basis.size, np.intp), np.empty(basis.size, data.dtype)
    images[column], phases[column] = row, data / np.abs(data)
    return replace(m, images=images, phases=phases)


def _refined(
    basis: SymmetryBasis, maps: list[IndexMap], inside: list[IndexMap], values: Mapping[str, int]
) -> SymmetryBasis:
    """Eigenstates of further maps, which are given on the product states and on the columns of the basis."""
    wanted = {}
    for i, m in enumerate(maps):
        if m.name in values:
            label = _label(m, values[m.name])
            wanted[i] = (1 - label) // 2 if _is_parity(m) else label
    inner, representatives, numbers = fourier_states(inside, [m.powers() for m in maps], wanted)
    if not inner.shape[1]:
        asked = {m.name: values[m.name] for m in maps if m.name in values}
        raise ValueError(f"no state in the sector {_sector_text(asked, {})}")
    labels = {name: label[representatives] for name, label in basis.labels.items()}
    for m, k in zip(maps, numbers, strict=True):
        labels[m.name] = _names_of(m, k)
    return SymmetryBasis(_tidied(basis.matrix @ inner), (*basis.maps, *maps), labels)


def _tidied(matrix: Any) -> Any:
    """CSR without the parts that are rounding, real where it is real."""
    matrix = sp.csr_array(matrix)
    data = matrix.data
    if np.iscomplexobj(data):
        real, imag = (np.where(np.abs(x) > 1e-15, x, 0.0) for x in (data.real, data.imag))
        matrix.data = real + 1j * imag if imag.any() else real
    matrix.eliminate_zeros()
    return matrix


def _matrix(charge: Any) -> Any:
    return sp.csr_array(charge.matrix() if isinstance(charge, OperatorSum) else charge)


def _diagonal(name: str, charge: Any) -> np.ndarray:
    """Diagonal (D,) of a charge.

    Raises
    ------
    ValueError
        It has other entries, or its values are not real.
    """
    if isinstance(charge, OperatorSum) or sp.issparse(charge) or np.ndim(charge) == 2:
        q = _matrix(charge)
        line = q.diagonal()
        off = np.abs((q - sp.diags_array(line)).data).max(initial=0.0)
        if off:
            raise ValueError(f"charge '{name}' is not diagonal in the product basis: an entry of {off:.1e} is not")
    else:
        line = np.asarray(charge)
    if line.ndim != 1 or np.iscomplexobj(line) and line.imag.any():
        raise ValueError(f"charge '{name}' must have real values")
    return line.real


def _states(charges: Mapping[str, tuple[Any, float]], dimension: int) -> np.ndarray:
    """Product states with the given values of the charges."""
    keep = np.ones(dimension, bool)
    for name, (charge, value) in charges.items():
        line = _diagonal(name, charge)
        if line.shape != (dimension,):
            raise ValueError(f"charge '{name}' has {line.size} values, the space {dimension} states")
        keep &= np.abs(line - value) <= 1e-9 * max(1.0, np.abs(line).max())
        if not keep.any():
            near = line[np.argmin(np.abs(line - value))]
            raise ValueError(f"no state has {name} = {value:g}; the nearest value is {near:g}")
    return np.flatnonzero(keep)


def _sector_text(values: Mapping[str, int], charges: Mapping[str, tuple[Any, float]]) -> str:
    parts = [f"{n} = {v:g}" for n, v in values.items()] + [f"{n} = {v:g}" for n, (_, v) in charges.items()]
    return ", ".join(parts) or "asked for"

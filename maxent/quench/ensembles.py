"""Ensembles fitted to one start: nested sets of charges, over all sectors and inside the one the start lives in.

`Charges` holds what all fits of one Hamiltonian share: the charges in a symmetry basis, their families, the observables
in the same basis.  When all charges commute the joint eigenbasis is found once and every further ensemble is a fit of
numbers.  Floor: quench.  Must not know windows, dynamics or tables.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.families.density import MatricesState
from maxent.families.matrices import Matrices
from maxent.lattice import OperatorSum
from maxent.lattice.symmetries import SymmetryBasis, adapted_basis, blocked, sharp_value
from maxent.quench.corrections import leading_correction, second_derivatives
from maxent.quench.spectrum import Spectrum
from maxent.quench.starts import Start
from maxent.result import Result
from maxent.solver import solve

__all__ = ["Charges", "Sector", "find_sector"]


@dataclass(frozen=True, eq=False)
class Sector:
    """Values that have no spread in a start, and the states that share them.

    Attributes
    ----------
    symmetries : dict of str to int
        Labels of maps, as in `SymmetryBasis.labels`.
    charges : dict of str to float
    columns : (k,) ndarray of int
        States of the basis.
    """

    symmetries: dict[str, int]
    charges: dict[str, float]
    columns: np.ndarray

    @property
    def values(self) -> dict[str, float]:
        """All sharp values by name."""
        return {**self.charges, **{name: float(v) for name, v in self.symmetries.items()}}


class Charges:
    """Charges of a Hamiltonian in the basis of their common symmetries.

    Parameters
    ----------
    charges : mapping from str to OperatorSum
        Hermitian, on the same sites; the Hamiltonian is one of them.
    hamiltonian : str
        Its name.
    observables : mapping from str to OperatorSum, optional

    Attributes
    ----------
    basis : SymmetryBasis or None
    matrices : dict of str to scipy.sparse
        Charges in the basis.
    """

    def __init__(
        self,
        charges: Mapping[str, OperatorSum],
        hamiltonian: str,
        *,
        observables: Mapping[str, OperatorSum] | None = None,
    ):
        if hamiltonian not in charges:
            raise ValueError(f"the Hamiltonian {hamiltonian!r} is none of the charges {', '.join(map(repr, charges))}")
        self.operators = dict(charges)
        self.hamiltonian = hamiltonian
        self.sites = charges[hamiltonian].sites
        for name, op in {**self.operators, **(observables or {})}.items():
            if op.sites != self.sites:
                raise ValueError(f"{name!r} lives on {op.sites}, the Hamiltonian on {self.sites}")
        self.basis: SymmetryBasis | None = adapted_basis(self.operators, self.sites)
        given = {name: op.matrix() for name, op in self.operators.items()}
        self.matrices = given if self.basis is None else blocked(given, self.basis)
        self.observables = {name: op.matrix() for name, op in (observables or {}).items()}

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the charges."""
        return tuple(self.operators)

    @property
    def isometry(self) -> Any:
        """The basis as a sparse matrix, or None."""
        return None if self.basis is None else self.basis.matrix

    @cached_property
    def family(self) -> Matrices:
        """Family of all charges."""
        return Matrices(self.matrices, basis=self.isometry, dims=self.sites.dims)

    @property
    def commute(self) -> bool:
        """Whether all charges commute with one another."""
        return not self.family.blocks.dense

    def subfamily(self, names: Sequence[str]) -> Matrices:
        """Family of some charges."""
        if tuple(names) == self.names:
            return self.family
        if self.commute:
            return self.family.select(names)
        return Matrices({n: self.matrices[n] for n in names}, basis=self.isometry, dims=self.sites.dims)

    def family_of(self, names: Sequence[str], sector: Sector | None) -> Matrices:
        """Family of some charges over all sectors, or inside one."""
        family = self.subfamily(names)
        return family if sector is None else family.restrict(sector.columns)

    @cached_property
    def conjugated(self) -> dict[str, Any]:
        """Observables in the basis."""
        if self.basis is None:
            return self.observables
        w = self.basis.matrix
        return {name: (w.conj().T @ (q @ w)).tocsr() for name, q in self.observables.items()}

    def means(self, state: MatricesState) -> dict[str, float]:
        """Means of all observables in a state of this basis (all of its columns)."""
        inner = replace(state, basis=None, dims=None)
        return {name: inner.mean(q) for name, q in self.conjugated.items()}

    @cached_property
    def lines(self) -> np.ndarray:
        """Means of every observable in every joint eigenstate, (observables, states), for charges that commute.

        In the order of the weights of a state of `family`: any ensemble is then a product of numbers.
        """
        state = self.family.state(np.zeros(len(self.names)))
        out = np.empty((len(self.observables), len(state.populations)))
        for row, q in zip(out, map(sp.csr_array, self.conjugated.values()), strict=True):
            n = len(state.flat)
            row[:n] = np.real(q.diagonal())[state.flat]
            for g in state.groups:
                image = q[g.index][:, g.index] @ g.vectors
                row[n : n + len(g.weights)] = np.real(np.einsum("ik,ik->k", g.vectors.conj(), image))
                n += len(g.weights)
        return out

    def fit(self, names: Sequence[str], targets: Mapping[str, tuple[float, float]], sector: Sector | None) -> Result:
        """Ensemble of some charges, over all sectors or inside one."""
        family = self.family_of(names, sector)
        return solve(family, {n: targets[n][0] for n in names}, accuracy={n: targets[n][1] for n in names})

    def correction(self, result: Result, names: Sequence[str], spread: np.ndarray) -> dict[str, float]:
        """Leading correction of every observable, `spread` (m, m) the covariance of these charges in the start."""
        family = self.subfamily(names)
        lam = np.array([result.multipliers[n] for n in names])

        def at(x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
            state, values = family.state(x), family.evaluate(x, 1).values
            if self.commute:
                return values, self.lines @ np.concatenate([state.flat_weights, *[g.weights for g in state.groups]])
            return values, np.array(list(self.means(state).values()))

        curvature = second_derivatives(at, lam, result.covariance)
        if curvature is None:
            return {}
        size = leading_correction(curvature, spread, self.fluctuations(result, names))
        return dict(zip(self.observables, map(float, size), strict=True))

    def fluctuations(self, result: Result, names: Sequence[str]) -> np.ndarray:
        """Symmetrised covariance of charges in an ensemble over all sectors, as it is taken in the start.

        The covariance of a result is the Kubo-Mori one, the response of the values to the multipliers.  The two differ
        for charges that do not commute with one another.
        """
        if self.commute:
            return result.covariance
        inner = replace(result.state, basis=None, dims=None)
        q = [self.matrices[n] for n in names]
        values = [result.values[n] for n in names]
        out = np.empty((len(q), len(q)))
        for i in range(len(q)):
            for j in range(i + 1):
                product = 0.5 * (q[i] @ q[j] + q[j] @ q[i])
                out[i, j] = out[j, i] = inner.mean(product) - values[i] * values[j]
        return out

    def spectrum(self, *, progress: Any = None) -> Spectrum:
        """Spectrum of the Hamiltonian, in blocks that no charge leaves when all commute."""
        others = [q for n, q in self.operators.items() if n != self.hamiltonian] if self.commute else []
        return Spectrum(self.operators[self.hamiltonian], basis=self.isometry, companions=others, progress=progress)


def find_sector(charges: Charges, start: Start, *, by_symmetry: bool = True) -> Sector | None:
    """Sector of all charges and symmetries without spread in the start; None when everything has spread.

    Charges count that are diagonal in the product basis (a magnetisation, a particle number), since only those select
    states.  With ``by_symmetry=False`` charges alone count.
    """
    basis = charges.basis
    symmetries: dict[str, int] = {}
    inside = None if basis is None else np.ones(basis.size, bool)
    if basis is not None and by_symmetry:
        symmetries, inside = sharp_labels(basis, start)
    sharp: dict[str, float] = {}
    lines: dict[str, np.ndarray] = {}
    for name, op in charges.operators.items():
        if name == charges.hamiltonian:
            continue
        q = op.matrix()
        line = q.diagonal().real
        if (q - sp.diags_array(line)).count_nonzero():
            continue
        value = sharp_value(line, start.vectors)
        if value is not None:
            small = abs(value) <= 1e-13 * float(np.abs(line).max(initial=0.0))
            sharp[name], lines[name] = 0.0 if small else float(value), line
    columns = _columns(charges, inside, lines, sharp)
    parity = _parity(charges) if by_symmetry else None
    if parity is not None:
        value = sharp_value(parity, start.vectors)
        if value is not None and not np.isin(parity[_kept(lines, sharp, len(parity))], [value]).all():
            try:
                columns = _columns(charges, inside, {**lines, "parity": parity}, {**sharp, "parity": value})
                sharp["parity"] = float(value)
            except ValueError:
                pass  # a map of the basis exchanges the parities: its label stands for both
    if not symmetries and not sharp:
        return None
    everything = charges.matrices[charges.hamiltonian].shape[0]
    return None if len(columns) == everything else Sector(symmetries, sharp, columns)


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


def _columns(
    charges: Charges, inside: np.ndarray | None, lines: dict[str, np.ndarray], sharp: dict[str, float]
) -> np.ndarray:
    """States of the basis with these values."""
    if charges.basis is None:
        return np.flatnonzero(_kept(lines, sharp, charges.matrices[charges.hamiltonian].shape[0]))
    assert inside is not None
    columns = charges.basis.columns({}, {name: (lines[name], sharp[name]) for name in sharp})
    return columns[inside[columns]]


def _kept(lines: dict[str, np.ndarray], sharp: dict[str, float], states: int) -> np.ndarray:
    """Which product states have these values of diagonal charges."""
    keep = np.ones(states, bool)
    for name, line in lines.items():
        keep &= np.abs(line - sharp[name]) <= 1e-9 * max(1.0, float(np.abs(line).max()))
    return keep


def _parity(charges: Charges) -> np.ndarray | None:
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
    return line

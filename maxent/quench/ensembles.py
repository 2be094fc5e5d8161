"""Ensembles fitted to one start: nested sets of charges, over all sectors and inside the one the start lives in.

`Charges` holds what all fits of one Hamiltonian share: the charges in a symmetry basis, their families, the observables
in the same basis.  When all charges commute the joint eigenbasis is found once and every further ensemble is a fit of
numbers.  Floor: quench.  Must not know windows, dynamics or tables.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from functools import cached_property
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.families.density import MatricesState
from maxent.families.matrices import Matrices
from maxent.lattice import OperatorSum
from maxent.lattice.symmetries import SymmetryBasis, adapted_basis, blocked
from maxent.quench.corrections import leading_correction, second_derivatives
from maxent.quench.spectrum import Spectrum
from maxent.quench.start_sectors import Sector, find_sector
from maxent.result import Result
from maxent.solver import solve

__all__ = ["Charges", "Sector", "find_sector"]


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
        self._inside: tuple[Sector, dict[str, Any]] | None = None

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
        if sector is None:
            return self.subfamily(names)
        if sector.part.ndim == 1:
            return self.subfamily(names).restrict(sector.part)
        # what is fixed there is a number, not what rounding leaves of it between sums of states
        one = sp.eye_array(sector.size, format="csr")
        fixed = sector.charges
        inside = {n: fixed[n] * one if n in fixed else sector.inside(self.matrices[n]) for n in names}
        basis = sector.part if self.isometry is None else sector.states(self.isometry)
        return Matrices(inside, basis=basis, dims=self.sites.dims)

    @cached_property
    def conjugated(self) -> dict[str, Any]:
        """Observables in the basis."""
        if self.basis is None:
            return self.observables
        w = self.basis.matrix
        return {name: (w.conj().T @ (q @ w)).tocsr() for name, q in self.observables.items()}

    def means(self, state: MatricesState, sector: Sector | None = None) -> dict[str, float]:
        """Means of all observables in a state of this basis (all of its columns), or of a sector."""
        size = self.matrices[self.hamiltonian].shape[0] if sector is None else sector.size
        if state.dimension != size:  # on a face, in a basis of its own
            return {name: state.mean(q) for name, q in self.observables.items()}
        inner = replace(state, basis=None, dims=None)
        return {name: inner.mean(q) for name, q in self.observables_in(sector).items()}

    def observables_in(self, sector: Sector | None) -> dict[str, Any]:
        """Observables in the basis, or between the states of a sector; the last sector asked for is kept."""
        if sector is None:
            return self.conjugated
        if self._inside is None or self._inside[0] is not sector:
            self._inside = sector, {name: sector.inside(sp.csr_array(q)) for name, q in self.conjugated.items()}
        return self._inside[1]

    @cached_property
    def lines(self) -> np.ndarray:
        """Means of every observable in every joint eigenstate, (observables, states), for charges that commute.

        In the order of the weights of a state of `family`: any ensemble is then a product of numbers.
        """
        return eigenstate_lines(self.family, self.conjugated)

    def fit(self, names: Sequence[str], targets: Mapping[str, tuple[float, float]], sector: Sector | None) -> Result:
        """Ensemble of some charges, over all sectors or inside one."""
        family = self.family_of(names, sector)
        return solve(family, {n: targets[n][0] for n in names}, accuracy={n: targets[n][1] for n in names})

    def correction(
        self, result: Result, names: Sequence[str], spread: np.ndarray, sector: Sector | None = None
    ) -> dict[str, float]:
        """Leading correction of every observable, `spread` (m, m) the covariance of these charges in the start.

        In a sector the charges that are fixed there take no part.
        """
        free = [k for k, n in enumerate(names) if sector is None or n not in sector.charges]
        if not free:
            return {}
        family = self.family_of([names[k] for k in free], sector)
        lam = np.array([result.multipliers[names[k]] for k in free])
        lines = None
        if sector is None and self.commute:
            lines = self.lines  # the same for all sets of charges
        elif not family.blocks.dense:
            lines = eigenstate_lines(family, self.observables_in(sector))

        def at(x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
            state, values = family.state(x), family.evaluate(x, 1).values
            if lines is not None:
                return values, lines @ np.concatenate([state.flat_weights, *[g.weights for g in state.groups]])
            return values, np.array(list(self.means(state, sector).values()))

        some = np.ix_(free, free)
        curvature = second_derivatives(at, lam, result.covariance[some])
        if curvature is None:
            return {}
        size = leading_correction(curvature, spread[some], self.fluctuations(result, names, sector)[some])
        return dict(zip(self.observables, map(float, size), strict=True))

    def fluctuations(self, result: Result, names: Sequence[str], sector: Sector | None = None) -> np.ndarray:
        """Symmetrised covariance of charges in an ensemble, as it is taken in the start.

        The covariance of a result is the Kubo-Mori one, the response of the values to the multipliers.  The two differ
        for charges that do not commute with one another.
        """
        if self.commute:
            return result.covariance
        inner = replace(result.state, basis=None, dims=None)
        q = [self.matrices[n] if sector is None else sector.inside(self.matrices[n]) for n in names]
        values = [result.values[n] for n in names]
        out = np.empty((len(q), len(q)))
        for i in range(len(q)):
            for j in range(i + 1):
                product = 0.5 * (q[i] @ q[j] + q[j] @ q[i])
                out[i, j] = out[j, i] = inner.mean(product) - values[i] * values[j]
        return out

    def spectrum(self, sector: Sector | None = None, *, progress: Any = None) -> Spectrum:
        """Spectrum of the Hamiltonian, in blocks that no charge leaves when all commute; or that of a sector alone."""
        others = [q for n, q in self.operators.items() if n != self.hamiltonian] if self.commute else []
        basis = self.isometry
        if sector is not None:
            whole = sp.eye_array(self.matrices[self.hamiltonian].shape[0], format="csr") if basis is None else basis
            basis = sector.states(whole)
        return Spectrum(self.operators[self.hamiltonian], basis=basis, companions=others, progress=progress)


def eigenstate_lines(family: Matrices, observables: Mapping[str, Any]) -> np.ndarray:
    """Means (observables, states) in the joint eigenstates of a family that commutes, in the order of its weights."""
    state = family.state(np.zeros(len(family.names)))
    out = np.empty((len(observables), len(state.populations)))
    for row, q in zip(out, map(sp.csr_array, observables.values()), strict=True):
        n = len(state.flat)
        row[:n] = np.real(q.diagonal())[state.flat]
        for g in state.groups:
            image = q[g.index][:, g.index] @ g.vectors
            row[n : n + len(g.weights)] = np.real(np.einsum("ik,ik->k", g.vectors.conj(), image))
            n += len(g.weights)
    return out

"""Hermitian matrices on a finite Hilbert space: ``ln Z = ln Tr exp(G - lam.Q)`` with an optional log-prior G.

Blocks are the connected components of the union pattern of all charges, found on the sparse pattern; nothing is
densified as a whole when blocks exist.  Inside a block, charges that commute are diagonalised once and are numbers
from then on.  Cost of one evaluation: one eigendecomposition and m rotations per block.  Floor: families.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import scipy.sparse as sp

from maxent.core.blocks import Blocks, Ground, eigh
from maxent.core.pytrees import register
from maxent.families.commuting import joint_eigenbasis
from maxent.families.density import Group, MatricesState
from maxent.families.finite import Finite, checked_charges, checked_multipliers, relative_to_prior
from maxent.families.operators import checked_basis, checked_dims, operator_matrix, to_csr
from maxent.memory import require_memory

__all__ = ["Matrices", "MatricesState"]

#: Blocks up to this size are taken dense from the start.
SMALL = 128


@register("names", "dims", "dimension", held=("basis",))
@dataclass(frozen=True, init=False)
class Matrices(Finite):
    """Charges that are Hermitian matrices.

    Parameters
    ----------
    charges : dict of str to (d, d) array_like or scipy.sparse
        Hermitian matrices, real or complex, commuting or not.
    basis : (D, d) array_like or scipy.sparse, optional
        Isometry whose columns are the states the charges are written in (a sector, a window, a face).  Operators
        given to ``mean`` are then (D, D).
    dims : sequence of int, optional
        Dimensions of the sites whose product is D (site 0 is the slowest index), for ``reduced``.
    log_prior : (d, d) array_like or scipy.sparse, optional
        Hermitian G: the state is ``exp(G - lam.Q)/Z``; its von Neumann entropy and its relative entropy to
        ``exp(G)/Tr exp(G)`` are then two fields.

    Raises
    ------
    TypeError, ValueError
        A charge that is not numeric, not square, not Hermitian to 1e-12, not finite, or of another dimension; names the
        charge.
    ResourceError
        Blocks that would not fit into memory, with the memory they would need.

    Examples
    --------
    >>> import numpy as np, maxent
    >>> spin = Matrices({"x": [[0, 1], [1, 0]], "z": [[1, 0], [0, -1]]})
    >>> maxent.solve(spin, {"x": 0.8, "z": 0.7}).verdict
    <Verdict.INFEASIBLE: 'infeasible'>
    """

    blocks: Blocks
    names: tuple[str, ...]
    flat: np.ndarray
    turned: tuple[tuple[np.ndarray, np.ndarray], ...]
    placed: tuple[tuple[np.ndarray, np.ndarray | None], ...]
    basis: Any
    dims: tuple[int, ...] | None
    dimension: int
    log_norm: float
    #: Charges (and prior) of the blocks in `turned` before they were diagonalised.  No field: a family that was
    #: combined, compressed or rebuilt from its arrays has lost them, and must not carry those of another one.
    _given: ClassVar[tuple[list[Any], ...] | None] = None

    def __init__(self, charges: Any, *, basis: Any = None, dims: Any = None, log_prior: Any = None):
        charges = checked_charges(charges, "Matrices")
        states = max((q.shape[0] for q in charges.values() if sp.issparse(q)), default=0)
        need = 8 * states * (4 * len(charges) + 6)
        require_memory(need, f"{states} states need {{need}} for the diagonals of {len(charges)} charges alone")
        operators = {name: operator_matrix(value, f"charge {name!r}") for name, value in charges.items()}
        prior = None if log_prior is None else operator_matrix(log_prior, "log_prior")
        basis = None if basis is None else checked_basis(basis)
        dims = None if dims is None else checked_dims(dims)
        sizes = {name: q.shape[0] for name, q in operators.items()} | (
            {} if prior is None else {"log_prior": prior.shape[0]}
        )
        if len(set(sizes.values())) > 1:
            raise ValueError("charges have different dimensions: " + ", ".join(f"{n!r} {d}" for n, d in sizes.items()))
        if sizes:
            d = next(iter(sizes.values()))
        elif basis is not None:
            d = basis.shape[1]
        elif dims is not None:
            d = int(np.prod(dims))
        else:
            raise ValueError("no charges given: Matrices needs at least one charge, or basis or dims")
        if d == 0:
            raise ValueError("the charges have dimension 0")
        if basis is not None and basis.shape[1] != d:
            raise ValueError(f"basis has {basis.shape[1]} columns, the charges have dimension {d}")
        whole = d if basis is None else basis.shape[0]
        if dims is not None and int(np.prod(dims)) != whole:
            raise ValueError(f"dims {dims} multiply to {int(np.prod(dims))}, the operators have dimension {whole}")
        self._build(list(operators.values()), prior, tuple(charges), d, basis, dims)

    # ------------------------------------------------------------------ blocks

    def _build(self, charges: list[Any], prior: Any, names: tuple[str, ...], d: int, basis: Any, dims: Any) -> None:
        """Find the blocks, diagonalise what commutes, and remember where each block sits."""
        every = charges if prior is None else [*charges, prior]
        m = len(charges)
        labels = _components(every, d)
        order = np.argsort(labels, kind="stable")
        counts = np.bincount(labels)
        need = 16 * max(len(every), 1) * int(np.sum(counts[counts > 1].astype(float) ** 2)) * 3
        require_memory(need, f"{d} states in blocks of up to {counts.max()} need {{need}} for {m} charges")
        stops = np.cumsum(counts)
        single = order[np.isin(labels[order], np.flatnonzero(counts == 1))]
        diagonal = [np.real(q.diagonal()[single]) for q in every]
        levels = [np.array(diagonal, float).reshape(len(every), len(single))]
        whole = len(counts) == 1
        permuted = every if whole else [_sorted(to_csr(q), order) for q in every]
        turned, given, placed, dense, prior_dense = [], [], [], [], []
        for b in np.flatnonzero(counts > 1):
            piece = slice(stops[b] - counts[b], stops[b])
            parts = permuted if whole else [_block(q, piece.start, piece.stop) for q in permuted]
            joint = joint_eigenbasis(parts)
            if joint is not None:
                levels.append(joint[0])
                turned.append((order[piece], joint[1]))
                given.append(parts)
                continue
            stack = np.array([p.toarray() if sp.issparse(p) else p for p in parts])
            stack = stack.real.copy() if np.iscomplexobj(stack) and not stack.imag.any() else stack
            dense.append(stack[:m])
            placed.append((order[piece], None))
            if prior is not None:
                prior_dense.append(stack[m])
        flat = np.concatenate(levels, axis=1)
        blocks = Blocks(flat[:m], tuple(dense), None if prior is None else flat[m], tuple(prior_dense))
        log_norm = 0.0 if prior is None else float(blocks.evaluate(np.zeros(m), 0).log_partition)
        self._set(blocks, names, single, tuple(turned), tuple(placed), basis, dims, d, log_norm)
        object.__setattr__(self, "_given", tuple(given))

    def _set(self, *values: Any) -> Matrices:
        fields = ("blocks", "names", "flat", "turned", "placed", "basis", "dims", "dimension", "log_norm")
        for key, value in zip(fields, values, strict=True):
            object.__setattr__(self, key, value)
        return self

    def _with(self, blocks: Blocks, ground: Ground | None) -> Matrices:
        names = self.names if len(self.names) == blocks.diagonal.shape[0] else ()
        flat, turned, placed = self.flat, self.turned, self.placed
        if ground is not None:
            n = len(flat)
            flat, rest = flat[ground.keep[ground.keep < n]], ground.keep
            kept = []
            for index, vectors in turned:
                inside = rest[(rest >= n) & (rest < n + vectors.shape[1])] - n
                n += vectors.shape[1]
                if len(inside):
                    kept.append((index, vectors[:, inside]))
            turned = tuple(kept)
            pairs = zip(placed, ground.isometries, strict=True)
            placed = tuple((i, p if v is None else v @ p) for (i, v), p in pairs if p.shape[1])
        new = object.__new__(Matrices)
        return new._set(blocks, names, flat, turned, placed, self.basis, self.dims, self.dimension, self.log_norm)

    @property
    def block_sizes(self) -> tuple[int, ...]:
        """Sizes of the blocks that stay matrices, largest first; everything else is diagonal."""
        return tuple(sorted((a.shape[1] for a in self.blocks.dense), reverse=True))

    def as_given(self) -> tuple[np.ndarray, tuple[Any, ...]] | None:
        """The charges to the last bit, before anything was diagonalised: what proofs start from.

        Returns
        -------
        diagonal : (m, n) ndarray
            Charges on the basis states in `flat`.
        blocks : tuple of sequences of m Hermitian (d, d) ndarrays or CSR
            Charges on the blocks in `turned`, then on those in `placed`.

        None for a family whose charges are results of arithmetic (combined, compressed to a face).
        """
        if self._given is None:
            return None
        m = self.blocks.diagonal.shape[0]
        return self.blocks.diagonal[:, : len(self.flat)], (*(parts[:m] for parts in self._given), *self.blocks.dense)

    def operators(self) -> dict[str, sp.csr_array]:
        """The charges as sparse (d, d) matrices, put together from the blocks."""
        return {name: self._operator(j) for j, name in enumerate(self.names)}

    def _operator(self, j: int, *, of_prior: bool = False) -> sp.csr_array:
        line = self.blocks.prior if of_prior else self.blocks.diagonal[j]
        parts: list[tuple[np.ndarray, Any]] = [(self.flat, sp.diags_array(line[: len(self.flat)]))]
        at = len(self.flat)
        for b, (index, vectors) in enumerate(self.turned):
            k = vectors.shape[1]
            if self._given is None:
                parts.append((index, (vectors * line[at : at + k]) @ vectors.conj().T))
            else:
                parts.append((index, self._given[b][-1 if of_prior else j]))
            at += k
        dense = self.blocks.prior_dense if of_prior else [a[j] for a in self.blocks.dense]
        for (index, frame), a in zip(self.placed, dense, strict=True):
            parts.append((index, a if frame is None else frame @ a @ frame.conj().T))
        pieces = [sp.coo_array(part) for _, part in parts]
        rows = np.concatenate([i[p.coords[0]] for (i, _), p in zip(parts, pieces, strict=True)])
        columns = np.concatenate([i[p.coords[1]] for (i, _), p in zip(parts, pieces, strict=True)])
        data = np.concatenate([p.data for p in pieces])
        total = sp.csr_array((data, (rows, columns)), shape=(self.dimension, self.dimension))
        total.eliminate_zeros()
        return total

    def select(self, names: Sequence[str]) -> Matrices:
        """The family of some of its charges, in the order asked for; nothing is diagonalised again.

        Raises
        ------
        ValueError
            No names, a name that is not there, or twice the same.
        """
        names = tuple(names)
        if not names or len(set(names)) < len(names) or not set(names) <= set(self.names):
            raise ValueError(f"select takes different names out of {', '.join(self.names)}, not {', '.join(names)}")
        rows = np.eye(len(self.names))[[self.names.index(n) for n in names]]
        new = self._with(self.blocks.combine(rows, np.zeros(len(names))), None)
        object.__setattr__(new, "names", names)
        return new

    # ------------------------------------------------------------------ sectors, windows

    def restrict(self, part: Any) -> Matrices:
        """The family on part of the space: a symmetry sector, an energy window, a face.

        Parameters
        ----------
        part : (k,) int or (d,) bool array_like, or (d, k) isometry
            Basis states to keep, or an isometry onto the subspace.

        Returns
        -------
        Matrices
            Its ``mean`` and ``reduced`` take the same operators as before.
        """
        selects = not (sp.issparse(part) or np.ndim(part) == 2)
        if not selects:
            isometry = checked_basis(part)
            if isometry.shape[0] != self.dimension:
                raise ValueError(f"the isometry has {isometry.shape[0]} rows, the family {self.dimension} states")
        else:
            from maxent.families.microstates import _positions

            keep = _positions(part, self.dimension)
            isometry = sp.eye_array(self.dimension, format="csc")[:, keep].tocsr()
        if not isometry.shape[1]:
            raise ValueError("no state left after the restriction")
        inside = lambda q: q[keep][:, keep] if selects else isometry.conj().T @ (q @ isometry)
        charges = [inside(self._operator(j)) for j in range(len(self.names))]
        has_prior = self.blocks.has_prior
        prior = inside(self._operator(0, of_prior=True)) if has_prior else None
        basis = isometry if self.basis is None else self.basis @ isometry
        new = object.__new__(Matrices)
        new._build(charges, prior, self.names, isometry.shape[1], basis, self.dims)
        if self._given is None or not selects:
            object.__setattr__(new, "_given", None)  # these charges were computed, not given
        return new

    # ------------------------------------------------------------------ the state

    def state(self, lam: Any) -> MatricesState:
        """State ``exp(G - lam.Q)/Z`` at multipliers `lam`, shape (m,)."""
        lam = checked_multipliers(lam, self.blocks)
        b = self.blocks
        log_flat = -(lam @ b.diagonal)
        if b.prior is not None:
            log_flat = log_flat + b.prior
        logs, vectors = [log_flat], []
        for i, a in enumerate(b.dense):
            k = np.tensordot(lam, a, axes=(0, 0))
            e, u = eigh(k - b.prior_dense[i] if b.prior_dense else k)
            logs.append(-e)
            vectors.append(u)
        every = np.concatenate(logs)
        top = every.max()
        log_z = float(top + np.log(np.exp(every - top).sum()))
        every = every - log_z
        p = np.exp(every)
        p = p / p.sum()
        entropy = -float(p[p > 0] @ every[p > 0])
        flat, at, groups = p[: len(self.flat)], len(self.flat), []
        for index, u in self.turned:
            groups.append(Group(index, u, p[at : at + u.shape[1]]))
            at += u.shape[1]
        for (index, v), u in zip(self.placed, vectors, strict=True):
            groups.append(Group(index, u if v is None else v @ u, p[at : at + u.shape[1]]))
            at += u.shape[1]
        relative = None
        if b.has_prior:
            mean = 0.0 if b.prior is None else float(p[: len(log_flat)] @ b.prior)
            at = len(log_flat)
            for g, u in zip(b.prior_dense, vectors, strict=True):
                mean += float(np.real(np.sum(u.conj() * (g @ u), axis=0)) @ p[at : at + u.shape[1]])
                at += u.shape[1]
            relative = relative_to_prior(every, p, mean, self.log_norm)
        return MatricesState(
            self.flat, flat, tuple(groups), self.dimension, self.basis, self.dims, log_z, entropy, relative
        )


def _sorted(q: sp.csr_array, order: np.ndarray) -> sp.csr_array:
    """`q` with rows and columns in the order of the blocks."""
    place = np.empty(len(order), q.indices.dtype)
    place[order] = np.arange(len(order))
    q = q[order]
    return sp.csr_array((q.data, place[q.indices], q.indptr), shape=q.shape)


def _block(q: sp.csr_array, start: int, stop: int) -> Any:
    """Diagonal block of a block-diagonal matrix: dense when small, where bookkeeping costs more than it saves."""
    pointer = q.indptr[start : stop + 1]
    data, column = q.data[pointer[0] : pointer[-1]], q.indices[pointer[0] : pointer[-1]] - start
    d = stop - start
    if d > SMALL:
        return sp.csr_array((data, column, pointer - pointer[0]), shape=(d, d))
    out = np.zeros((d, d), data.dtype)
    out[np.repeat(np.arange(d), np.diff(pointer)), column] = data
    return out


def _components(operators: list[Any], d: int) -> np.ndarray:
    """Connected component of each basis state in the union pattern of all operators."""
    pattern = sp.csr_array((d, d))
    for q in operators:
        q = to_csr(q)
        q.eliminate_zeros()
        pattern = pattern + sp.csr_array((np.ones(q.nnz), q.indices, q.indptr), shape=q.shape)
    return sp.csgraph.connected_components(pattern, directed=False)[1]

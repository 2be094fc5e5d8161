"""Density matrices in blocks: expectation values, entropies and reduced states.  Floor: families."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.families.operators import operator_matrix, to_csr
from maxent.memory import require_memory

__all__ = ["Group", "MatricesState"]

#: Entries of the tables that reduced states are summed from.
CHUNK = 1 << 20


@dataclass(frozen=True)
class Group:
    """States with support on the basis states `index`: vectors (len(index), k) and their probabilities (k,)."""

    index: np.ndarray
    vectors: np.ndarray
    weights: np.ndarray

    def density(self) -> np.ndarray:
        """Density block (len(index), len(index))."""
        return (self.vectors * self.weights) @ self.vectors.conj().T


@dataclass(frozen=True)
class MatricesState:
    """A state that is diagonal between blocks.

    Attributes
    ----------
    flat, flat_weights : (n,) ndarrays
        Basis states that are eigenstates, and their probabilities.
    groups : tuple of Group
        Eigenvectors and probabilities of the other blocks.
    dimension : int
        Dimension d of the space of the charges.
    basis : (D, d) isometry or None
    dims : tuple of int or None
    log_partition, entropy : float
        Entropy is the von Neumann entropy in nats.
    relative_entropy : float or None
        To the normalised prior, in nats.
    """

    flat: np.ndarray
    flat_weights: np.ndarray
    groups: tuple[Group, ...]
    dimension: int
    basis: Any
    dims: tuple[int, ...] | None
    log_partition: float
    entropy: float
    relative_entropy: float | None = None

    @property
    def populations(self) -> np.ndarray:
        """Eigenvalues of the density matrix, descending."""
        return np.sort(np.concatenate([self.flat_weights, *[g.weights for g in self.groups]]))[::-1]

    def mean(self, operator: Any) -> float:
        """Expectation value ``Tr rho O``.

        Parameters
        ----------
        operator : (D, D) array_like or scipy.sparse
            Hermitian, in the space the user works in.

        Raises
        ------
        ValueError
            Not Hermitian, or of another dimension.
        """
        q = operator_matrix(operator, "operator")
        whole = self.dimension if self.basis is None else self.basis.shape[0]
        if q.shape[0] != whole:
            raise ValueError(f"the operator has dimension {q.shape[0]}, the family {whole}")
        q = to_csr(q)
        line, *insides = self._inside(q)
        total = float(np.real(line) @ self.flat_weights)
        for g, inside in zip(self.groups, insides, strict=True):
            image = inside @ g.vectors
            total += float(np.real(np.einsum("ik,ik->k", g.vectors.conj(), image)) @ g.weights)
        return total

    def _inside(self, q: sp.csr_array) -> Iterator[Any]:
        """An operator of the user's space: its diagonal on `flat`, then its sparse blocks on the groups."""
        if self.basis is None:
            yield q.diagonal()[self.flat]
            for g in self.groups:
                yield q[g.index][:, g.index]
            return
        for i, columns in enumerate(self._columns):
            image = q @ columns
            yield columns.conj().multiply(image).sum(axis=0) if i == 0 else columns.conj().T @ image

    @cached_property
    def _columns(self) -> list[sp.csr_array]:
        """The states of `flat` and of every group in the user's space, sparse (D, k) each."""
        basis = sp.csc_array(self.basis)
        return [basis[:, index].tocsr() for index in (self.flat, *(g.index for g in self.groups))]

    def density(self) -> np.ndarray:
        """The whole density matrix (D, D), dense.

        Raises
        ------
        ResourceError
            When it would not fit into memory; `reduced` and `mean` do without it.
        """
        d = self.dimension if self.basis is None else self.basis.shape[0]
        require_memory(self._dtype.itemsize * d * d, f"the density matrix of {d} states needs {{need}}")
        rho = np.zeros((d, d), self._dtype)
        for rows, amplitudes, weights in self._amplitudes():
            block = (amplitudes * weights) @ amplitudes.conj().T
            if sp.issparse(block):
                block = block.tocoo()
                rho[rows[block.row], rows[block.col]] += block.data
            else:
                rho[np.ix_(rows, rows)] += block
        return rho

    @property
    def _dtype(self) -> np.dtype:
        """Of density matrices over the user's basis states."""
        every = [float, *(g.vectors.dtype for g in self.groups), *([] if self.basis is None else [self.basis.dtype])]
        return np.result_type(*every)

    def _amplitudes(self) -> Iterator[tuple[np.ndarray, Any, np.ndarray]]:
        """Eigenstates over the user's basis states: (rows (n,), amplitudes (n, k) sparse or dense, weights (k,))."""
        if self.basis is None:
            yield self.flat, sp.eye_array(len(self.flat), format="csr"), self.flat_weights
            for g in self.groups:
                yield g.index, g.vectors, g.weights
            return
        for columns, group in zip(self._columns, (None, *self.groups), strict=True):
            rows = np.flatnonzero(np.diff(columns.indptr))
            part = columns[rows]
            yield (rows, part, self.flat_weights) if group is None else (rows, part @ group.vectors, group.weights)

    def reduced(self, sites: Sequence[int]) -> np.ndarray:
        """Density matrix of some sites, the others traced out.

        Parameters
        ----------
        sites : sequence of int
            Sites to keep, in the order in which they shall index the result.

        Returns
        -------
        (k, k) ndarray
            k is the product of the dimensions of `sites`.

        Raises
        ------
        ValueError
            The family was made without `dims`, or a site does not exist or repeats.
        """
        if self.dims is None:
            raise ValueError("reduced states need the dimensions of the sites: give dims to the family")
        if np.ndim(sites) != 1:
            raise TypeError(f"sites must be a list of sites, not {sites!r}")
        kept = [int(s) for s in sites]
        if len(set(kept)) < len(kept) or any(not 0 <= s < len(self.dims) for s in kept):
            raise ValueError(f"sites must be different numbers in 0..{len(self.dims) - 1}, not {list(sites)}")
        shape = [self.dims[s] for s in kept]
        size = int(np.prod(shape, dtype=int))
        outside = [s for s in range(len(self.dims)) if s not in set(kept)]
        out = np.zeros((size, size), self._dtype)
        for rows, amplitudes, weights in self._amplitudes():
            digits = np.unravel_index(rows, self.dims)
            inner = np.ravel_multi_index([digits[s] for s in kept], shape) if kept else np.zeros(len(rows), int)
            rest = np.zeros(len(rows), int)
            for s in outside:
                rest = rest * self.dims[s] + digits[s]
            others, rest = np.unique(rest, return_inverse=True)
            roots = np.sqrt(np.maximum(weights, 0.0))
            if sp.issparse(amplitudes):
                entries = sp.coo_array(amplitudes * roots)
                where = (inner[entries.row], rest[entries.row] * amplitudes.shape[1] + entries.col)
                spread = sp.csr_array((entries.data, where), shape=(size, len(others) * amplitudes.shape[1]))
                out += (spread @ spread.conj().T).toarray()
                continue
            # the states of the other sites and the eigenstates are one index that is summed over, some at a time
            step = max(1, CHUNK // (size * len(others)))
            for k in range(0, amplitudes.shape[1], step):
                part = amplitudes[:, k : k + step] * roots[k : k + step]
                table = np.zeros((size, len(others), part.shape[1]), part.dtype)
                table[inner, rest] = part
                flat = table.reshape(size, -1)
                out += flat @ flat.conj().T
        return out

"""Density matrices in blocks: expectation values, entropies and reduced states.  Floor: families."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.families.operators import operator_matrix, to_csr

__all__ = ["Group", "MatricesState"]


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
        if self.basis is not None:
            q = self.basis.conj().T @ (q @ self.basis)
        total = float(np.real(q.diagonal())[self.flat] @ self.flat_weights)
        if self.groups:
            q = to_csr(q)
        for g in self.groups:
            image = q[g.index][:, g.index] @ g.vectors
            total += float(np.real(np.einsum("ik,ik->k", g.vectors.conj(), image)) @ g.weights)
        return total

    def density(self) -> np.ndarray:
        """The whole density matrix (D, D), dense."""
        groups = [Group(self.flat, np.eye(len(self.flat)), self.flat_weights), *self.groups]
        dtype = complex if any(np.iscomplexobj(g.vectors) for g in groups) else float
        rho = np.zeros((self.dimension, self.dimension), dtype)
        for g in groups:
            rho[np.ix_(g.index, g.index)] += g.density()
        if self.basis is None:
            return rho
        rho = self.basis @ rho @ self.basis.conj().T
        return np.asarray(rho)

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
        pieces = self._in_user_space()
        out = np.zeros((size, size), complex if any(np.iscomplexobj(p) for _, p in pieces) else float)
        for index, block in pieces:
            digits = np.unravel_index(index, self.dims)
            inner = np.ravel_multi_index([digits[s] for s in kept], shape) if kept else np.zeros(len(index), int)
            outside = [s for s in range(len(self.dims)) if s not in set(kept)]
            rest = (
                np.ravel_multi_index([digits[s] for s in outside], [self.dims[s] for s in outside])
                if outside
                else 0 * inner
            )
            if block.ndim == 1:
                np.add.at(out, (inner, inner), block)
                continue
            order = np.argsort(rest, kind="stable")
            for same in np.split(order, np.flatnonzero(np.diff(rest[order])) + 1):
                out[np.ix_(inner[same], inner[same])] += block[np.ix_(same, same)]
        return out

    def _in_user_space(self) -> list[tuple[np.ndarray, np.ndarray]]:
        """Blocks (index, density or diagonal) over the product basis of the sites."""
        if self.basis is None:
            return [(self.flat, self.flat_weights), *[(g.index, g.density()) for g in self.groups]]
        columns = sp.csr_array(self.basis)
        if columns.nnz == columns.shape[1] and np.all(columns.data == 1.0):
            where = columns.tocsc().indices  # a selection of product states
            return [
                (where[self.flat], self.flat_weights),
                *[(where[g.index], g.density()) for g in self.groups],
            ]
        return [(np.arange(columns.shape[0]), self.density())]

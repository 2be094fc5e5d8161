"""Spectrum of a Hamiltonian by blocks: energies, amplitudes, equal energies across blocks.

With a unitary basis B (of a symmetry, a sector) the Hamiltonian is ``B^H H B``; its blocks are the connected components
of its pattern, joined with the patterns of companions where asked.  Each block is diagonalised when first needed: its
energies for the spectrum, its vectors only where a start or a state has weight.  Floor: quench.  Must not know how the
basis was made.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.core.blocks import eigh, eigvalsh
from maxent.families.density import Group, MatricesState
from maxent.families.operators import checked_basis, checked_dims
from maxent.memory import require_memory
from maxent.quench.operators import as_matrix, site_dims, without_dirt

__all__ = ["Block", "Spectrum"]

#: Amplitudes below this are rounding.
NOTHING = 1e-15
#: Energies are known to about this fraction of the largest.
ROUNDING = 16 * float(np.finfo(float).eps)


@dataclass(frozen=True, eq=False)
class Block:
    """One block: which states of the basis it holds, and where its levels stand among all levels.

    Attributes
    ----------
    index : (n,) ndarray of int
        States of the basis.
    start : int
        Its levels are `start` to `start + n - 1`, ascending in energy.
    """

    index: np.ndarray
    start: int

    @property
    def size(self) -> int:
        """Number of states."""
        return len(self.index)

    @property
    def levels(self) -> slice:
        """Its levels among all levels."""
        return slice(self.start, self.start + self.size)


class Spectrum:
    """Energies and eigenvectors of a Hamiltonian, block by block.

    Parameters
    ----------
    hamiltonian : OperatorSum or (D, D) array_like or scipy.sparse
        Hermitian.
    basis : (D, d) array_like or scipy.sparse, optional
        Matrix with orthonormal columns in which the Hamiltonian falls into blocks: a symmetry basis (d = D), or a
        sector of one.  A Hamiltonian that leads out of the sector is refused.
    companions : iterable of operators, optional
        Operators whose patterns join that of the Hamiltonian, so that no block is left by them.
    dims : sequence of int, optional
        Dimensions of the sites, for reduced states; taken from an OperatorSum by itself.
    progress : callable, optional
        Told in one line what is being done.

    Raises
    ------
    TypeError, ValueError
        An operator that is not Hermitian, sizes that do not fit, a basis that is not orthonormal or not closed.
    ResourceError
        Blocks that would not fit into memory, before work begins.

    Examples
    --------
    >>> from maxent.lattice import Ring, formula
    >>> s = Spectrum(formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1]", Ring(4)))
    >>> [b.size for b in s.blocks], s.energies.round(12).min()
    ([1, 4, 6, 4, 1], np.float64(-2.0))
    """

    def __init__(
        self,
        hamiltonian: Any,
        *,
        basis: Any = None,
        companions: Iterable[Any] = (),
        dims: Any = None,
        progress: Callable[[str], None] | None = None,
    ):
        h = as_matrix(hamiltonian, "the Hamiltonian")
        if not h.shape[0]:
            raise ValueError("the Hamiltonian has dimension 0")
        self.dims = site_dims(hamiltonian) if dims is None else checked_dims(dims)
        if self.dims is not None and int(np.prod(self.dims)) != h.shape[0]:
            raise ValueError(
                f"dims {self.dims} multiply to {int(np.prod(self.dims))}, the Hamiltonian has dimension {h.shape[0]}"
            )
        self.whole = h.shape[0]
        self._progress = progress
        others = [as_matrix(q, f"companion {i}") for i, q in enumerate(companions)]
        for i, q in enumerate(others):
            if q.shape[0] != self.whole:
                raise ValueError(f"companion {i} has dimension {q.shape[0]}, the Hamiltonian {self.whole}")
        self.basis: Any = None if basis is None else _csr_basis(basis, self.whole)
        if self.basis is not None:
            h, others = self._inside(h), [self.conjugated(q) for q in others]
        self.hamiltonian = h if sp.issparse(h) else sp.csr_array(h)
        self._diagonal = np.real(self.hamiltonian.diagonal())
        labels = _components([self.hamiltonian, *map(sp.csr_array, others)])
        order, counts = np.argsort(labels, kind="stable"), np.bincount(labels)
        bounds = np.concatenate([[0], np.cumsum(counts)])
        self.blocks = tuple(Block(order[a:b], int(a)) for a, b in zip(bounds[:-1], bounds[1:], strict=True))
        self._check_memory(counts)
        self._values: list[np.ndarray | None] = [None] * len(self.blocks)
        self._vectors: list[np.ndarray | None] = [None] * len(self.blocks)
        self._energies: np.ndarray | None = None

    # ------------------------------------------------------------------ the spectrum

    @property
    def dimension(self) -> int:
        """Number of levels d."""
        return self.hamiltonian.shape[0]

    @property
    def energies(self) -> np.ndarray:
        """Energies (d,): block after block, ascending within each."""
        if self._energies is None:
            for i, block in enumerate(self.blocks):
                if self._values[i] is None:
                    self._say(i, "energies")
                    self._values[i] = eigvalsh(self._dense(block)) if block.size > 1 else self._single(block)
            self._energies = np.concatenate([v for v in self._values if v is not None])
            self._energies.setflags(write=False)
        return self._energies

    @property
    def width(self) -> float:
        """Highest minus lowest energy."""
        return float(np.ptp(self.energies))

    def clusters(self, rtol: float = 1e-10) -> np.ndarray:
        """Number (d,) of the distinct energy each level has, counted upwards, whatever block it is in.

        Neighbouring levels closer than `rtol` times the width, or than rounding, are one.
        """
        e = self.energies
        order = np.argsort(e, kind="stable")
        tolerance = max(rtol * self.width, ROUNDING * float(np.abs(e).max()))
        labels = np.empty(len(e), int)
        labels[order] = np.concatenate([[0], np.cumsum(np.diff(e[order]) > tolerance)])
        return labels

    def block_vectors(self, number: int) -> np.ndarray:
        """Eigenvectors of a block, columns over its own states; computed when first asked for."""
        found = self._vectors[number]
        if found is None:
            block = self.blocks[number]
            if block.size == 1:
                values, found = self._single(block), np.ones((1, 1))
            else:
                self._say(number, "eigenvectors")
                values, found = eigh(self._dense(block))
            self._vectors[number] = found
            if self._values[number] is None:
                self._values[number] = values
        return found

    # ------------------------------------------------------------------ to and fro

    def amplitudes(self, vector: Any) -> np.ndarray:
        """Amplitudes on the levels.

        Parameters
        ----------
        vector : (D,) or (D, k) array_like
            In the product basis of the sites.

        Returns
        -------
        (d,) or (d, k) ndarray

        Raises
        ------
        ValueError
            Another length, or (with a basis of a sector) a vector that leaves the sector by more than 1e-8.
        """
        v = np.asarray(vector)
        if v.ndim not in (1, 2) or v.shape[0] != self.whole:
            raise ValueError(f"the start has shape {v.shape}, the Hamiltonian dimension {self.whole}")
        inside = v if self.basis is None else self.basis.conj().T @ v
        if self.dimension < self.whole:
            before, after = np.linalg.norm(v, axis=0), np.linalg.norm(inside, axis=0)
            outside = float(np.max(before**2 - after**2, initial=0.0))
            if outside > 1e-8:
                raise ValueError(f"the start has weight {outside:.3g} outside the sector of the basis")
        parts: list[np.ndarray] = []
        for i, block in enumerate(self.blocks):
            part = inside[block.index]
            # symmetry-adapted sums leave rounding in blocks where a start has no weight
            small = np.abs(part).max(initial=0.0) <= NOTHING
            parts.append(np.zeros_like(part) if small else self.block_vectors(i).conj().T @ part)
        return np.concatenate(parts)

    def vector(self, amplitudes: Any) -> np.ndarray:
        """Vector (D,) or (D, k) in the product basis of the sites, from amplitudes on the levels."""
        c = np.asarray(amplitudes)
        if c.shape[:1] != (self.dimension,):
            raise ValueError(f"amplitudes must have first dimension {self.dimension}, not shape {c.shape}")
        pieces = [
            (block.index, self.block_vectors(i) @ c[block.levels])
            for i, block in enumerate(self.blocks)
            if np.any(c[block.levels])
        ]
        out = np.zeros(c.shape, np.result_type(c, *[p.dtype for _, p in pieces], float))
        for index, piece in pieces:
            out[index] = piece
        return out if self.basis is None else self.basis @ out

    def vectors(self, numbers: Any) -> np.ndarray:
        """Eigenvectors (D, k) of some levels, in the product basis of the sites."""
        numbers = np.asarray(numbers, int)
        where = np.searchsorted([b.start for b in self.blocks], numbers, side="right") - 1
        pieces = [(i, np.flatnonzero(where == i)) for i in np.unique(where)]
        dtype = np.result_type(float, *[self.block_vectors(int(i)).dtype for i, _ in pieces])
        out = np.zeros((self.dimension, len(numbers)), dtype)
        for i, columns in pieces:
            block = self.blocks[i]
            out[np.ix_(block.index, columns)] = self.block_vectors(int(i))[:, numbers[columns] - block.start]
        return out if self.basis is None else self.basis @ out

    def conjugated(self, operator: Any, *, states: Any = None) -> Any:
        """``B^H Q B`` as CSR, without what rounding left; the operator itself where there is no basis.

        Parameters
        ----------
        operator : OperatorSum or (D, D) array_like or scipy.sparse
        states : (k,) ndarray of int, optional
            Only between these states of the basis, in this order.
        """
        q = as_matrix(operator, "operator")
        if q.shape[0] != self.whole:
            raise ValueError(f"the operator has dimension {q.shape[0]}, the Hamiltonian {self.whole}")
        q = sp.csr_array(q)
        if self.basis is None:
            return q if states is None else q[states][:, states]
        basis = self.basis if states is None else self.basis[:, states]
        return without_dirt(basis.conj().T @ (q @ basis))

    def state(self, weights: Any, *, log_partition: float = float("nan")) -> MatricesState:
        """State with these probabilities on the levels.

        Parameters
        ----------
        weights : (d,) array_like
            Not negative, of sum 1.
        log_partition : float, optional
            Logarithm of the sum they were normalised with.

        Raises
        ------
        ValueError
            Another number of weights, negative ones, or a sum other than 1.
        """
        p = np.asarray(weights, float)
        if p.shape != (self.dimension,):
            raise ValueError(f"weights must have shape ({self.dimension},), one per level, not {p.shape}")
        if not p.min() >= 0.0 or abs(p.sum() - 1.0) > 1e-8:
            raise ValueError(f"weights must be probabilities: their sum is {p.sum():.10g}, the lowest {p.min():.3g}")
        groups = []
        single = [b for b in self.blocks if b.size == 1]
        for i, block in enumerate(self.blocks):
            part = p[block.levels]
            on = part > 0
            if block.size > 1 and on.any():
                vectors = self.block_vectors(i)
                groups.append(Group(block.index, vectors if on.all() else vectors[:, on], part[on]))
        positive = p[p > 0]
        return MatricesState(
            np.array([b.index[0] for b in single], int),
            p[[b.start for b in single]],
            tuple(groups),
            self.dimension,
            self.basis,
            self.dims,
            log_partition,
            -float(positive @ np.log(positive)),
        )

    # ------------------------------------------------------------------ helpers

    def _inside(self, h: Any) -> Any:
        """The Hamiltonian in the basis; refused when it leads out of it."""
        image = sp.csr_array(h) @ self.basis
        inside = without_dirt(self.basis.conj().T @ image)
        if self.basis.shape[1] < self.whole:
            left = abs(image - self.basis @ inside).max()
            size = max(abs(h).max(), np.finfo(float).tiny)
            if left > 1e-10 * size:
                raise ValueError(
                    f"the Hamiltonian leads out of the basis: entries of {left:.1e} where |H| is {size:.1e}"
                )
        return inside

    def _dense(self, block: Block) -> np.ndarray:
        whole = block.size == self.dimension
        part = self.hamiltonian if whole else self.hamiltonian[block.index][:, block.index]
        q = part.toarray()
        return q.real.copy() if np.iscomplexobj(q) and not q.imag.any() else q

    def _single(self, block: Block) -> np.ndarray:
        return self._diagonal[block.index]

    def _check_memory(self, counts: np.ndarray) -> None:
        each = 16 if np.iscomplexobj(self.hamiltonian) else 8
        sizes = counts[counts > 1].astype(float)
        need = int(each * (np.sum(sizes**2) + 3 * np.max(sizes, initial=0.0) ** 2))
        what = f"{self.dimension} states in blocks of up to {counts.max()}"
        require_memory(need, f"{what} need {{need}} for eigenvectors")

    def _say(self, number: int, what: str) -> None:
        if self._progress is not None and self.blocks[number].size > 64:
            size = self.blocks[number].size
            self._progress(f"{what}: block {number + 1} of {len(self.blocks)}, {size} states")


def _csr_basis(basis: Any, whole: int) -> sp.csr_array:
    b = sp.csr_array(checked_basis(basis))
    if b.shape[0] != whole:
        raise ValueError(f"the basis has {b.shape[0]} rows, the Hamiltonian dimension {whole}")
    return b


def _components(operators: list[Any]) -> np.ndarray:
    """Connected component of each basis state in the union pattern."""
    pattern = sum((abs(q) for q in operators[1:]), abs(operators[0]))
    return sp.csgraph.connected_components(sp.csr_array(pattern), directed=False)[1]

"""Dephased state: what is left of a start when every coherence between different energies has averaged out.

    rho_inf = sum_n P_n rho P_n,        p_n = Tr P_n rho,        d_eff = 1/sum_n p_n^2,

P_n the projector on *all* states of energy E_n, in whatever block they are: coherences between equal energies never
dephase, and a state that is diagonal in the eigenvectors a solver happens to return loses them.  For a pure start
``rho_inf = sum_n |phi_n><phi_n|`` with ``phi_n = P_n psi``.  Floor: quench.  Must not know observables.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from maxent.families.density import Group, MatricesState
from maxent.memory import require_memory
from maxent.quench.operators import site_dims
from maxent.quench.spectrum import Spectrum
from maxent.quench.starts import Start

__all__ = ["Dephased", "dephase"]

#: The lightest levels, with no more weight than this in total, are left out: rounding gives symmetric starts weights of
#: 1e-27 on levels of other symmetry.  A mean in time changes by less than 2e-12 of the norm of its operator.
LEAST = 1e-24


@dataclass(frozen=True, eq=False)
class Dephased:
    """A start in the energy basis, and its dephased state.

    Attributes
    ----------
    spectrum : Spectrum
    start : Start
    levels : (l,) ndarray of int
        Levels of the spectrum in which the start has weight, block after block.
    amplitudes : (l, k) ndarray
        Amplitudes of each vector of the start on them, times the square root of its probability.
    clusters : (l,) ndarray of int
        Number of the distinct energy of each of these levels, counted upwards from 0 over those with weight.
    energies : (n,) ndarray
        Distinct energies with weight, ascending.
    weights : (n,) ndarray
        p_n, of sum 1.
    dropped : float
        Weight on levels that were left out as rounding.
    """

    spectrum: Spectrum
    start: Start
    levels: np.ndarray
    amplitudes: np.ndarray
    clusters: np.ndarray
    energies: np.ndarray
    weights: np.ndarray
    dropped: float

    @property
    def effective_dimension(self) -> float:
        """``d_eff = 1/sum_n p_n^2`` over distinct energies: how many levels take part in the dynamics."""
        return 1.0 / float(np.sum(self.weights**2))

    @property
    def degenerate(self) -> int:
        """How many of the distinct energies with weight hold several levels with weight."""
        return int(np.sum(np.bincount(self.clusters) > 1))

    @property
    def energy(self) -> float:
        """Mean energy."""
        return float(self.weights @ self.energies)

    @property
    def entropy(self) -> float:
        """Von Neumann entropy of the dephased state in nats.

        Not comparable with entropies of ensembles: for starts built of pairs it is about half of theirs.
        """
        return self.state.entropy

    @cached_property
    def state(self) -> MatricesState:
        """The dephased state; reduced states and means work without a density matrix of the whole space.

        Eigenvectors of one energy are the left singular vectors of the amplitudes there, so that a pure start has one
        per energy.  Those of energies that live in the same blocks share a group; groups may overlap in basis states.
        """
        blocks = self.spectrum.blocks
        block_of = np.searchsorted([b.start for b in blocks], self.levels, side="right") - 1
        members: dict[tuple[int, ...], list[tuple[np.ndarray, np.ndarray, np.ndarray]]] = {}
        order = np.argsort(self.clusters, kind="stable")
        bounds = np.flatnonzero(np.diff(self.clusters[order])) + 1
        for inside in np.split(order, bounds):
            key = tuple(int(b) for b in np.unique(block_of[inside]))
            vectors, weights = _diagonalised(self.amplitudes[inside])
            members.setdefault(key, []).append((self.levels[inside], vectors, weights))
        total = float(sum(w.sum() for parts in members.values() for _, _, w in parts))
        groups = [self._group(key, parts, total) for key, parts in members.items()]
        positive = np.concatenate([g.weights for g in groups])
        return MatricesState(
            np.empty(0, int),
            np.empty(0),
            tuple(groups),
            self.spectrum.dimension,
            self.spectrum.basis,
            self.spectrum.dims,
            float("nan"),
            -float(positive @ np.log(positive)),
        )

    def _group(self, key: tuple[int, ...], parts: list[Any], total: float) -> Group:
        """Eigenvectors of the energies whose levels lie in these blocks, over the basis states of the blocks."""
        blocks = [self.spectrum.blocks[b] for b in key]
        columns = sum(w.shape[0] for _, _, w in parts)
        vectors = [self.spectrum.block_vectors(b) for b in key]
        rows = sum(b.size for b in blocks)
        dtype = np.result_type(self.amplitudes, *vectors)
        require_memory(dtype.itemsize * rows * columns, f"{columns} dephased vectors of {rows} entries need {{need}}")
        pieces = []
        for block, u in zip(blocks, vectors, strict=True):
            small = np.zeros((block.size, columns), dtype)
            at = 0
            for levels, mixed, w in parts:
                here = (levels >= block.start) & (levels < block.start + block.size)
                small[levels[here] - block.start, at : at + len(w)] = mixed[here]
                at += len(w)
            pieces.append(u @ small)
        return Group(
            np.concatenate([b.index for b in blocks]),
            np.concatenate(pieces),
            np.concatenate([w for _, _, w in parts]) / total,
        )


def dephase(
    spectrum: Any, start: Any, *, rtol: float = 1e-10, progress: Callable[[str], None] | None = None
) -> Dephased:
    """Dephased state of a start.

    Parameters
    ----------
    spectrum : Spectrum, OperatorSum or matrix
        Spectrum of the Hamiltonian that drives the dynamics, or the Hamiltonian.
    start : Start or vector
    rtol : float, optional
        Energies closer than this fraction of the spectral width are equal.
    progress : callable, optional
        Told in one line what is being done, when the spectrum is made here.

    Returns
    -------
    Dephased

    Raises
    ------
    TypeError, ValueError
        Not Hermitian, or a start of another length or norm.
    ResourceError
        Blocks or amplitudes that would not fit into memory.

    Examples
    --------
    Two levels of equal energy keep their coherence, the third loses its:

    >>> import numpy as np
    >>> found = dephase(np.diag([0.0, 0.0, 1.0]), np.array([0.48, 0.36, 0.8]))
    >>> round(found.effective_dimension, 6), round(found.state.mean(np.ones((3, 3))), 12)
    (1.854599, 1.3456)
    """
    if not isinstance(spectrum, Spectrum):
        spectrum = Spectrum(spectrum, dims=site_dims(spectrum), progress=progress)
    if not isinstance(start, Start):
        start = Start.from_vector(start)
    d, k = spectrum.dimension, start.vectors.shape[1]
    require_memory(32 * d * k, f"amplitudes of {k} vectors on {d} levels need {{need}}")
    c = spectrum.amplitudes(start.vectors) * np.sqrt(start.weights)
    weight = np.sum(np.abs(c) ** 2, axis=1)
    order = np.argsort(weight)
    levels = np.sort(order[np.cumsum(weight[order]) > LEAST])
    names, clusters = np.unique(spectrum.clusters(rtol)[levels], return_inverse=True)
    p = np.bincount(clusters, weight[levels])
    energies = np.bincount(clusters, spectrum.energies[levels]) / np.bincount(clusters)
    return Dephased(
        spectrum, start, levels, c[levels], clusters, energies, p / p.sum(), float(max(1.0 - p.sum(), 0.0))
    )


def _diagonalised(amplitudes: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Eigenvectors and eigenvalues of ``c c^H``, those with weight only."""
    if amplitudes.shape[0] == 1:
        return np.ones((1, 1)), np.sum(np.abs(amplitudes) ** 2, axis=1)
    if amplitudes.shape[1] == 1:
        norm = np.linalg.norm(amplitudes)
        return amplitudes / norm, np.array([norm**2])
    u, s, _ = np.linalg.svd(amplitudes, full_matrices=False)
    keep = s > 4 * np.finfo(float).eps * s[0]
    return u[:, keep], s[keep] ** 2

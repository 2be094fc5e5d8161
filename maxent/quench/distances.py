"""Distances between states of a block of sites.  Floor: quench.  Must not know where the states come from."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from maxent.families.density import MatricesState

__all__ = [
    "block_distances", "nested_blocks", "nested_states", "relative_entropy", "root_fidelity", "trace_distance",
]  # fmt: skip

#: Eigenvalues of a density matrix below this are rounding.
NOTHING = 1e-15


def trace_distance(a: Any, b: Any) -> float:
    """``(1/2) Tr |a - b|``: the largest difference of the probabilities of any event on the block.

    Parameters
    ----------
    a, b : (k, k) array_like
        Density matrices.

    Raises
    ------
    ValueError
        Matrices of different or of no square shape.

    Examples
    --------
    >>> trace_distance([[1, 0], [0, 0]], [[0.5, 0], [0, 0.5]])
    0.5
    """
    a, b = _pair(a, b)
    return 0.5 * float(np.abs(np.linalg.eigvalsh(a - b)).sum())


def root_fidelity(a: Any, b: Any) -> float:
    """``F = Tr (a^(1/2) b a^(1/2))^(1/2)``, 1 for equal states; ``1 - F <= T <= sqrt(1 - F^2)``, T the trace distance.

    Parameters
    ----------
    a, b : (k, k) array_like
        Density matrices.

    References
    ----------
    C. A. Fuchs, J. van de Graaf, IEEE Trans. Inf. Theory 45, 1216 (1999).
    """
    a, b = _pair(a, b)
    return float(np.linalg.svd(_root(a) @ _root(b), compute_uv=False).sum())


def relative_entropy(a: Any, b: Any) -> float:
    """``Tr a (ln a - ln b)`` in nats; infinite where `b` has no weight and `a` has.

    Parameters
    ----------
    a, b : (k, k) array_like
        Density matrices.
    """
    a, b = _pair(a, b)
    p = np.linalg.eigvalsh(a)
    q, v = np.linalg.eigh(b)
    weight = np.real(np.einsum("ik,ij,jk->k", v.conj(), a, v))
    if np.any((q < NOTHING) & (weight > 1e3 * NOTHING)):
        return float("inf")
    on, there = p > NOTHING, q > NOTHING
    return max(float(p[on] @ np.log(p[on]) - weight[there] @ np.log(q[there])), 0.0)


def nested_blocks(state: MatricesState, blocks: Sequence[tuple[int, ...]]) -> dict[tuple[int, ...], np.ndarray]:
    """Reduced states of nested blocks: the largest is formed from the state, the others are traced out of it."""
    if not blocks:
        return {}
    largest = max(blocks, key=len)
    assert state.dims is not None
    return nested_states(state.reduced(largest), state.dims, largest, blocks)


def nested_states(
    whole: np.ndarray, dims: Sequence[int], largest: tuple[int, ...], blocks: Sequence[tuple[int, ...]]
) -> dict[tuple[int, ...], np.ndarray]:
    """States of blocks that lie inside the largest, traced out of its state, or of many at once.

    Parameters
    ----------
    whole : (..., k, k) ndarray
        State of the largest block, its sites in the order given.
    dims : sequence of int
        Dimensions of all sites.
    largest : tuple of int
    blocks : sequence of tuples of int
        Each a run of neighbouring entries of the largest.
    """
    out = {}
    for sites in blocks:
        first = largest.index(sites[0])
        left, mid, right = (
            int(np.prod([dims[i] for i in part], dtype=int))
            for part in (largest[:first], sites, largest[first + len(sites) :])
        )
        shape = (*whole.shape[:-2], left, mid, right, left, mid, right)
        out[sites] = np.einsum("...aibajb->...ij", whole.reshape(shape))
    return out


def block_distances(state: MatricesState, reference: Mapping[tuple[int, ...], np.ndarray]) -> dict[int, float]:
    """Trace distance of the state of each block, by its number of sites, to a reference state by sites."""
    found = nested_blocks(state, list(reference))
    return {len(sites): trace_distance(found[sites], rho) for sites, rho in reference.items()}


def _root(a: np.ndarray) -> np.ndarray:
    p, v = np.linalg.eigh(a)
    return (v * np.sqrt(np.maximum(p, 0.0))) @ v.conj().T


def _pair(a: Any, b: Any) -> tuple[np.ndarray, np.ndarray]:
    a, b = np.asarray(a), np.asarray(b)
    if a.ndim != 2 or a.shape[0] != a.shape[1] or a.shape != b.shape:
        raise ValueError(f"two square density matrices of one size are needed, not shapes {a.shape} and {b.shape}")
    return a, b

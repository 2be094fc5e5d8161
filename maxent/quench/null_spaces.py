"""Null spaces and the next singular values of sparse matrices that fall into blocks.

Floor: quench. Must not know what the rows and columns stand for.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import scipy.linalg
import scipy.sparse as sp
from scipy.sparse.csgraph import connected_components

__all__ = ["Level", "components", "null_space"]

#: Singular values below this fraction of a bound of the largest are zero.
ZERO = 1e-9
#: Above this many columns the lowest singular vectors are taken from the Gram matrix, then refined.
DENSE = 400


@dataclass(frozen=True)
class Level:
    """Null space of the operators up to one range.

    `parts`: columns (n,) and orthonormal rows (d, n) of each component that has a null space; `value` and `lowest`
    (k, n): smallest singular value that is not zero, and the orthonormal vectors that have it.
    """

    parts: list[tuple[np.ndarray, np.ndarray]]
    value: float
    lowest: np.ndarray
    largest_zero: float

    @property
    def count(self) -> int:
        """Dimension of the null space."""
        return sum(len(rows) for _, rows in self.parts)


def components(matrix: sp.csc_array) -> list[np.ndarray]:
    """Columns of each component of the graph of rows and columns."""
    graph = sp.block_array([[None, matrix], [matrix.T, None]]).tocsr()
    labels = connected_components(graph, directed=False)[1][matrix.shape[0] :]
    order = np.argsort(labels, kind="stable")
    return np.split(order, np.flatnonzero(np.diff(labels[order])) + 1)


def null_space(matrix: sp.csc_array, scale: float, say: Callable[[str], None]) -> Level:
    """Null space and next singular value, component by component."""
    n = matrix.shape[1]
    parts, candidates, largest_zero, value = [], [], 0.0, np.inf
    for some in components(matrix):
        if len(some) > DENSE:
            say(f"  block of {len(some)} unknowns")
        sizes, vectors = _lowest(matrix[:, some], scale)
        null = sizes <= ZERO * scale
        if null.any():
            parts.append((some, vectors[null]))
            largest_zero = max(largest_zero, float(sizes[null].max()))
        if not null.all():
            value = min(value, float(sizes[~null].min()))
            candidates.append((some, sizes[~null], vectors[~null]))
    lowest = []
    for some, sizes, vectors in candidates:
        for vector in vectors[sizes <= value * (1 + 1e-7)]:
            row = np.zeros(n)
            row[some] = vector
            lowest.append(row)
    return Level(parts, value, np.array(lowest).reshape(-1, n), largest_zero)


def _lowest(matrix: sp.csc_array, scale: float) -> tuple[np.ndarray, np.ndarray]:
    """Smallest singular values and their right vectors (as rows) of one component: all zero ones and the next."""
    n = matrix.shape[1]
    if not matrix.nnz:
        return np.zeros(n), np.eye(n)
    if n <= DENSE:
        rows = np.unique(matrix.indices)
        dense = matrix.tocsr()[rows].toarray()
        if dense.shape[0] > 2 * n:
            dense = np.linalg.qr(dense, mode="r")
        sizes, vectors = scipy.linalg.svd(dense, full_matrices=True)[1:]
        return np.concatenate([sizes, np.zeros(n - len(sizes))]), vectors
    wanted = 32
    while True:
        # a null vector leaks out of the lowest eigenvectors by eps * scale^2 / (last eigenvalue kept), so that the
        # singular values on them are right to rounding if that one is not small
        squares = (matrix.T @ matrix).toarray().T
        wanted = min(wanted, n)
        levels, vectors = scipy.linalg.eigh(
            squares, subset_by_index=[0, wanted - 1], overwrite_a=True, check_finite=False
        )
        clear = levels[levels > 1e-6 * scale**2]
        if wanted == n or (len(clear) and clear[-1] > 1.001 * clear[0]):
            break
        wanted *= 4
    sizes, turn = scipy.linalg.svd(matrix @ vectors, full_matrices=False)[1:]
    return sizes, turn @ vectors.T

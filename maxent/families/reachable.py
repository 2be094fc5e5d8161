"""What occupations can reach: zonotopes (at most one fermion per copy) and cones (any number of particles).

Directions only: one that holds all vectors of a cone on its positive side, and normals of faces.  All of them are
verified by those who asked.  Floor: families.  Knows vectors, not levels.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from scipy.optimize import nnls

from maxent.core.contract import EPS, SAFETY
from maxent.core.polish import face_sizes, normals, separating
from maxent.core.whiten import tall_triangle

__all__ = ["face_normals", "inward", "triangle_rows"]

#: Vectors per pass: their charges stay in the cache.
PASS = 1 << 14

#: A direction that meets a vector at a smaller cosine than this does not hold it on its positive side.
FLAT = 1e-9


def inward(vectors: np.ndarray) -> np.ndarray | None:
    """A direction u with ``u.a > 0`` for every column a of `vectors` (m, n), or None where there is none.

    A single charge that is positive everywhere comes first, the most uniform one.  Otherwise the shortest point of the
    hull of the normalised vectors, found on a few of them: the one that lies lowest joins until none lies below zero.
    """
    m, n = vectors.shape
    if not (m and n):
        return None
    low, high = vectors.min(axis=1), vectors.max(axis=1)
    one_sided = np.flatnonzero((low > 0) | (high < 0))
    if len(one_sided):
        lengths = np.abs(np.array([low[one_sided], high[one_sided]]))
        j = int(one_sided[np.argmin(lengths.max(axis=0) / lengths.min(axis=0))])
        return np.eye(m)[j] * np.sign(low[j])
    unit = np.abs(vectors).max(axis=1)
    unit = np.where(unit > 0, unit, 1.0)
    length = np.sqrt(np.einsum("jk,jk->k", vectors / unit[:, None], vectors / unit[:, None]))
    if not length.min() > 0:
        return None
    held = (vectors[:, :1] / unit[:, None]) / length[0]
    for _ in range(20 * m + 20):
        weights = nnls(np.vstack([held, np.ones(held.shape[1])]), np.append(np.zeros(m), 1.0), maxiter=100 * m + 100)[0]
        u = held @ weights
        if not np.linalg.norm(u) > FLAT * weights.sum():
            return None
        u = u / np.linalg.norm(u)
        height = ((u / unit) @ vectors) / length
        k = int(np.argmin(height))
        if height[k] > FLAT:
            return np.asarray(u / unit)
        held = np.column_stack([held, vectors[:, k] / unit / length[k]])
    return None


def face_normals(vectors: np.ndarray, v: np.ndarray, *, signed: bool) -> Iterator[np.ndarray]:
    """`v` projected on the normals of candidate faces: some of the `vectors` (m, n) are orthogonal to it exactly.

    The face of the zonotope, or of the cone, that `v` exposes is spanned by the vectors with ``v.a = 0``; `signed`
    (zonotopes) keeps the side of all others as it is, otherwise all of them must lie above.
    """
    height = v @ vectors
    order = np.argsort(np.abs(height), kind="stable")
    # zero is a level of its own: the vectors of the face are those that are much closer to it than the next ones
    for size in face_sizes(np.append(0.0, np.abs(height))):
        k = size - 1
        if not 0 < k < len(order):
            continue
        on, off = vectors[:, order[:k]], vectors[:, order[k:]]
        tol = SAFETY * EPS * np.abs(on).max() * np.sqrt(k * len(v))
        basis = normals(on, tol)
        x = basis @ (basis.T @ v)
        if not np.linalg.norm(x):
            continue
        off = off * np.sign(height[order[k:]]) if signed else off
        if basis.shape[1] > 1 and (x @ off).min() <= 1e-14 * np.linalg.norm(x) * np.abs(off).max():
            y = separating(basis.T @ off)
            x = x if y is None else basis @ y
        yield x / np.linalg.norm(x)


def triangle_rows(vectors: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """Rows (m, p) with the inner products of ``vectors * sqrt(weights)``, p = m where there are many vectors.

    Never a Gram matrix, which would square the condition; many vectors are reduced pass by pass.
    """
    root = np.sqrt(weights)
    if vectors.shape[1] <= 2 * PASS:
        return vectors * root
    triangle = np.zeros((0, vectors.shape[0]))
    for i in range(0, vectors.shape[1], PASS):
        piece = (vectors[:, i : i + PASS] * root[i : i + PASS]).T
        triangle = tall_triangle(np.concatenate([triangle, piece]).T)
    return triangle.T

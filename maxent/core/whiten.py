"""Whitening with rank detection, in the noise units of the user's charges.

Whitened charges ``T (Q - q)`` have orthonormal traceless parts under the counting measure (never under the prior: a
prior that spans hundreds of decades is a point mass, and its covariance is singular), so that the Hessian at infinite
temperature is the identity whatever units the user chose.  Rank is decided on singular values of the charges
themselves, never on a Gram matrix, which would square the condition.  Floor: core.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from maxent.core.contract import EPS, SAFETY, Problem

__all__ = ["Whitening", "tall_triangle", "whiten"]


@dataclass(frozen=True)
class Whitening:
    """Coordinates in which the problem is solved.

    Attributes
    ----------
    transform : (r, m) ndarray
        T: whitened charges are ``T A`` for the shifted charges A; ``lam = T^T x``.
    inverse : (m, r) ndarray
        B with ``A - mean = B (T A - T mean)`` up to the null combinations.
    null : tuple of (m,) ndarrays
        Unit vectors c with ``c.A`` a multiple of the identity.
    mean : (m,) ndarray
        Infinite-temperature means of the shifted charges.
    spread : (m,) ndarray
        Root mean square of each charge about its mean; 1 for a charge that has none.
    singular : (r,) ndarray
        Kept singular values of the spread-normalised charges, descending.
    """

    transform: np.ndarray
    inverse: np.ndarray
    null: tuple[np.ndarray, ...]
    mean: np.ndarray
    spread: np.ndarray
    singular: np.ndarray

    @property
    def rank(self) -> int:
        """Number of independent charges."""
        return len(self.transform)

    def to_user(self, x: np.ndarray) -> np.ndarray:
        """Unit direction in the user's charges of a whitened direction."""
        v = self.transform.T @ x
        v = v / (np.abs(v).max() or 1.0)  # before it is squared: units may be extreme
        return v / np.linalg.norm(v)

    def values(self, whitened: np.ndarray) -> np.ndarray:
        """Shifted charges of a state from its whitened values, null combinations included."""
        return self.mean + self.inverse @ (whitened - self.transform @ self.mean)

    def contradictions(self) -> list[np.ndarray]:
        """Null combinations, and the one among their span that the targets contradict most."""
        found = list(self.null)
        if len(found) > 1:
            rows = np.array([c * self.spread / np.linalg.norm(c * self.spread) for c in found])
            _, size, basis = np.linalg.svd(rows, full_matrices=False)
            basis = basis[size > 1e-8 * size[0]]
            c = basis.T @ (basis @ (self.mean / self.spread)) / self.spread
            if np.linalg.norm(c) > 0:
                found.append(c / np.linalg.norm(c))
        return [c * (np.sign(c @ self.mean) or 1.0) for c in found]

    def minimum_norm(self, lam: np.ndarray) -> np.ndarray:
        """The multipliers of the same state that are smallest in units of each charge's spread."""
        if not self.null:
            return lam
        # adding t c to lam changes nothing, which in units of the spread is the direction s c
        q, _ = np.linalg.qr(np.array([c * self.spread for c in self.null]).T)
        y = lam * self.spread
        return (y - q @ (q.T @ y)) / self.spread


def tall_triangle(rows: np.ndarray, *, step: int = 1 << 15) -> np.ndarray:
    """Triangular factor R of ``rows.T = Q R`` for (m, p) `rows`, in passes that stay in the cache when p is large."""
    m, p = rows.shape
    if p <= m:
        return rows.T
    if p <= 2 * step:
        return np.asarray(np.linalg.qr(rows.T, mode="r"))
    triangle = np.zeros((0, m))
    for i in range(0, p, step):
        triangle = np.asarray(np.linalg.qr(np.concatenate([triangle, rows[:, i : i + step].T]), mode="r"))
    return triangle


def whiten(problem: Problem) -> Whitening:
    """Whitening of the charges of `problem`, with the combinations that carry no information."""
    noise = problem.noise
    mean, rows = problem.family.reference()
    m = len(mean)
    size = np.sqrt(np.einsum("jp,jp->j", rows, rows))
    if np.any((size < 1e-140) | (size > 1e140)):  # scaled before it is squared: charges of 1e-200 keep their norm
        largest = np.abs(rows).max(axis=1, initial=0.0)
        unit = np.where(largest > 0, largest, 1.0)
        size = np.linalg.norm(rows / unit[:, None], axis=1) * unit
    live = np.flatnonzero(size > SAFETY * noise)
    spread = np.where(size > 0, size, 1.0)
    null = [np.eye(m)[j] for j in range(m) if j not in set(live)]
    if not len(live):
        return Whitening(np.zeros((0, m)), np.zeros((m, 0)), tuple(null), mean, spread, np.zeros(0))
    _, singular, right = np.linalg.svd(tall_triangle(rows[live] / size[live, None]), full_matrices=True)
    singular = np.concatenate([singular, np.zeros(len(live) - len(singular))])
    # noise of a combination c of unit-spread charges: rounding of each of them, and of the sum
    limit = SAFETY * (np.sqrt((right**2) @ (noise[live] / size[live]) ** 2) + EPS)
    kept = singular > limit
    for c in right[~kept]:
        full = np.zeros(m)
        full[live] = c / size[live]
        full = full / np.abs(full).max()  # before it is squared: units may differ by hundreds of decades
        null.append(full / np.linalg.norm(full))
    transform = np.zeros((int(kept.sum()), m))
    transform[:, live] = right[kept] / singular[kept, None] / size[live]
    inverse = np.zeros((m, int(kept.sum())))
    inverse[live] = size[live, None] * right[kept].T * singular[kept]
    return Whitening(transform, inverse, tuple(null), mean, spread, singular[kept])

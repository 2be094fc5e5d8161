"""The shortest point of the hull of a few points, kept as a combination of as few of them as possible.

P. Wolfe, Math. Program. 11, 128 (1976), from memory.  Floor: diagnose; knows points only.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from maxent.core.contract import EPS, SAFETY
from maxent.core.polish import normals

__all__ = ["Corral"]

#: Weights below this are none.
LEAST = 1e-14


@dataclass(frozen=True)
class Corral:
    """Affinely independent points whose hull has its shortest point inside.

    Attributes
    ----------
    points : (r, k) ndarray
    weights : (k,) ndarray
        Of the shortest point; positive, sum 1.
    """

    points: np.ndarray
    weights: np.ndarray

    @classmethod
    def at(cls, y: np.ndarray) -> Corral:
        """A single point."""
        return cls(y[:, None], np.ones(1))

    @property
    def point(self) -> np.ndarray:
        """The shortest point of the hull, (r,)."""
        return self.points @ self.weights

    def normal(self) -> np.ndarray:
        """Its direction, (r,): zero when it is the origin.

        A short point is the difference of long ones, and its direction is lost to rounding; the direction is taken from
        the normals of the points' differences instead.
        """
        p = self.points
        if p.shape[1] == 1:
            basis = np.eye(len(p))
        else:
            d = p - p.mean(axis=1, keepdims=True)
            basis = normals(d, SAFETY * EPS * np.abs(p).max() * np.sqrt(p.size))
        v = basis @ (basis.T @ p.mean(axis=1))
        length = np.linalg.norm(v)
        return v / length if length > 0 else np.zeros(len(p))

    def joined(self, y: np.ndarray) -> Corral:
        """The corral of the hull with one more point; points that are not needed are dropped."""
        points = np.concatenate([self.points, y[:, None]], axis=1)
        weights = np.append(self.weights, 0.0)
        while True:
            flat = _affine_weights(points)
            if flat.min() > LEAST:
                return Corral(points, flat)
            down = flat <= LEAST
            fall = weights[down] - flat[down]
            step = float(np.min(weights[down] / np.where(fall > 0, fall, np.inf), initial=1.0))
            weights = weights + step * (flat - weights)
            keep = weights > LEAST
            if keep.all():  # rounding: the one that falls furthest goes
                keep[np.argmin(flat)] = False
            if not keep.any():
                return self
            points, weights = points[:, keep], weights[keep] / weights[keep].sum()
            if points.shape[1] == 1:
                return Corral(points, np.ones(1))


def _affine_weights(points: np.ndarray) -> np.ndarray:
    """Weights, sum 1 but of any sign, of the shortest point of the affine hull."""
    base = int(np.argmin(np.einsum("rk,rk->k", points, points)))
    rest = np.delete(np.arange(points.shape[1]), base)
    out = np.zeros(points.shape[1])
    z = np.linalg.lstsq(points[:, rest] - points[:, [base]], -points[:, base], rcond=1e-13)[0]
    out[rest] = z
    out[base] = 1.0 - z.sum()
    return out

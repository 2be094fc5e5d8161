"""A family with the required part of the contract and nothing more: points in space, 40 lines.

No evaluate, face, barrier, glance, sharpen, stiffness of its own: verdicts must be right with what is left.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from jax.nn import logsumexp

from maxent.core.contract import EPS, Family, Lowest
from maxent.core.pytrees import register


@register("names")
@dataclass(frozen=True)
class Toy(Family):
    points: Any
    names: tuple[str, ...] = ()

    @property
    def scale(self):
        return np.abs(self.points).max(axis=1)

    def log_partition(self, lam):
        return logsumexp(-(lam @ self.points))

    def reference(self):
        mean = self.points.mean(axis=1)
        return mean, (self.points - mean[:, None]) / np.sqrt(self.points.shape[1])

    def combine(self, matrix, offset):
        names = self.names if len(self.names) == len(matrix) else ()
        return Toy(matrix @ self.points - offset[:, None], names)

    def lowest(self, v, *, with_values=False):
        height = v @ self.points
        at = int(np.argmin(height))
        return Lowest(height[at], height.max(), EPS * np.abs(height).max(), self.points[:, at] if with_values else None)

    def state(self, lam):
        e = -(lam @ self.points)
        p = np.exp(e - e.max())
        p /= p.sum()
        log_z = float(e.max() + np.log(np.exp(e - e.max()).sum()))
        return ToyState(float(log_z), float(log_z + p @ (lam @ self.points)), p)


@dataclass(frozen=True)
class ToyState:
    log_partition: float
    entropy: float
    p: Any

    def mean(self, operator):
        return float(np.asarray(operator) @ self.p)

"""A family with an edge of its domain: x >= 0 with a fat tail, beside a coin y = +-1, in closed form.

ln Z = ln((1 + r) exp(-r)) + ln 2 cosh lam_y with r = sqrt(lam_x): finite for lam_x >= 0 alone, with slope -1/2 there.
So <x> = 1/(2 (1 + r)) lies in (0, 1/2], and states with any larger mean exist but none of largest entropy.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from maxent.core.contract import EPS, Evaluation, Family, Lowest


@dataclass(frozen=True)
class Tail(Family):
    matrix: Any = None
    offset: Any = None
    names: tuple[str, ...] = ("x", "y")

    def _matrix(self):
        return np.eye(2) if self.matrix is None else self.matrix

    def _offset(self):
        return np.zeros(2) if self.offset is None else self.offset

    @property
    def scale(self):
        return np.abs(self._matrix()).sum(axis=1) + np.abs(self._offset())

    def start(self):
        return np.linalg.lstsq(self._matrix().T, np.array([1.0, 0.0]), rcond=None)[0]

    def domain(self):
        return np.array([[1.0, 0.0]]) @ self._matrix().T

    def evaluate(self, lam, order=2):
        x, y = self._matrix().T @ lam
        blank = np.full(len(lam), np.nan)
        if x < 0:
            return Evaluation(np.inf, blank, np.outer(blank, blank), 0.0, 0.0)
        r = np.sqrt(x)
        values = np.array([0.5 / (1 + r), -np.tanh(y)])
        bend = np.diag(
            [0.25 / (max(r, 1e-100) * (1 + r) ** 2), 4 * np.exp(-2 * abs(y)) / (1 + np.exp(-2 * abs(y))) ** 2]
        )
        log_z = np.log1p(r) - r + np.logaddexp(y, -y) + lam @ self._offset()
        covariance = self._matrix() @ bend @ self._matrix().T
        size = abs(x) + abs(y) + abs(lam @ self._offset())
        return Evaluation(log_z, self._matrix() @ values - self._offset(), covariance, 16 * EPS * (1 + size), size)

    def log_partition(self, lam):
        return self.evaluate(lam).log_partition

    def reference(self):
        return self._matrix() @ np.array([0.3, 0.0]) - self._offset(), self._matrix() @ np.diag([0.3, 1.0])

    def combine(self, matrix, offset):
        names = self.names if len(matrix) == len(self.names) else ()
        return Tail(matrix @ self._matrix(), matrix @ self._offset() + offset, names)

    def lowest(self, v, *, with_values=False):
        x, y = self._matrix().T @ v
        shift = v @ self._offset()
        size = abs(x) + abs(y) + abs(shift)
        low = (-np.inf if x < -1e-14 * size else 0.0) - abs(y) - shift
        return Lowest(low, (np.inf if x > 1e-14 * size else 0.0) + abs(y) - shift, EPS * size)

    def state(self, lam):
        return None

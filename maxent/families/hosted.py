"""What families have in common whose sums only the host can make: everything follows from `evaluate` and `lowest`.

Floor: families.
"""

from __future__ import annotations

from functools import cached_property
from typing import Any, ClassVar

import numpy as np

from maxent.core.blocks import Blocks
from maxent.core.contract import Barrier, Family
from maxent.families.surroundings import surroundings

__all__ = ["Hosted"]


class Hosted(Family):
    """A family without a traceable ``ln Z``; it provides `constant` (m,), `evaluate` and `lowest`."""

    #: For messages.
    what: ClassVar[str]
    constant: Any

    @cached_property
    def scale(self) -> np.ndarray:
        """Operator norm of each charge, shape (m,)."""
        lows = [self.lowest(v) for v in np.eye(len(self.constant))]
        return np.array([max(abs(low.value), abs(low.highest)) for low in lows])

    def log_partition(self, lam: Any) -> float:
        """``ln Z(lam)``, on the host."""
        return float(self.evaluate(lam).log_partition)

    def require_host(self, lam: Any) -> None:
        """Refuse arrays of JAX.

        Raises
        ------
        TypeError
        """
        if not isinstance(lam, np.ndarray):
            raise TypeError(f"{self.what} run on the host driver: give NumPy arrays, or solve with driver='host'")

    def traced(self) -> Family:
        """Not there.

        Raises
        ------
        TypeError
        """
        raise TypeError(f"{self.what} run on the host driver: solve with driver='host'")

    def start(self) -> np.ndarray:
        """Infinite temperature."""
        return np.zeros(len(self.constant))

    def reference(self) -> tuple[np.ndarray, np.ndarray]:
        """Infinite-temperature means (m,) and charges minus mean as rows (m, p)."""
        ev = self.evaluate(self.start())
        assert ev.factor is not None
        return ev.values, ev.factor()

    def reach(self) -> np.ndarray:
        """Upper bounds (m,) of the spread of each charge."""
        return 2 * self.scale

    @cached_property
    def _around(self) -> Blocks:
        return surroundings(self)

    def barrier(self, lam: np.ndarray) -> Barrier | None:
        """Barrier of the values of states around 0."""
        return self._around.barrier(lam)

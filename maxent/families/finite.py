"""What all families on a finite spectrum share: they ask `core.blocks.Blocks`.  Floor: families."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np

from maxent.core.blocks import Blocks, Ground
from maxent.core.contract import Barrier, Evaluation, Face, Family, Lowest

__all__ = ["Finite", "checked_charges", "checked_multipliers", "relative_to_prior"]


class Finite(Family):
    """Charges held in `blocks`; a family adds where its states live (`_with`) and its state class."""

    blocks: Blocks
    names: tuple[str, ...]

    def _with(self, blocks: Blocks, ground: Ground | None) -> Family:
        """The same states, or those of a ground space, with other charges."""
        raise NotImplementedError

    @property
    def size(self) -> int:
        """Number of states; values are totals, not per site."""
        return self.blocks.size

    @property
    def entropy_floor(self) -> float:  # type: ignore[override]
        """Lower bound of the entropy: 0 without a prior."""
        return self.blocks.entropy_floor

    @property
    def scale(self) -> np.ndarray:
        """Operator norm of each charge, shape (m,)."""
        return self.blocks.scale

    def log_partition(self, lam: Any) -> Any:
        """``ln Z(lam)``, traceable by JAX, twice differentiable at any degeneracy."""
        return self.blocks.log_partition(lam)

    def evaluate(self, lam: Any, order: int = 2) -> Evaluation:
        """``ln Z``, values and covariance from one decomposition; NumPy or JAX by the type of `lam`."""
        return self.blocks.evaluate(lam, order)

    def reference(self) -> tuple[np.ndarray, np.ndarray]:
        """Infinite-temperature means (m,) and charges minus mean as rows (m, p)."""
        return self.blocks.reference()

    def traced(self) -> Family:
        """The blocks alone."""
        return self.blocks

    def start(self) -> np.ndarray:
        """Infinite temperature."""
        return np.zeros(self.blocks.diagonal.shape[0])

    def combine(self, matrix: np.ndarray, offset: np.ndarray) -> Family:
        """Family of the charges ``matrix @ Q - offset``."""
        return self._with(self.blocks.combine(matrix, offset), None)

    def lowest(self, v: np.ndarray, *, with_values: bool = False) -> Lowest:
        """Lowest value of ``<v.Q>``."""
        return self.blocks.lowest(v, with_values=with_values)

    def glance(self, v: np.ndarray) -> float:
        """Cheap upper bound of ``lowest(v).value``."""
        return self.blocks.glance(v)

    def face(self, v: np.ndarray, tol: float) -> Face | None:
        """Ground space of ``v.Q`` as a family of the same kind."""
        ground = self.blocks.ground(v, tol)
        if ground is None:
            return None
        family = self._with(self.blocks.compress(ground), ground)
        return Face(
            family,
            ground.gap,
            float(np.log(ground.dimension)),
            exact=not self.blocks.dense,
            width=ground.width,
        )

    def sharpen(self, v: np.ndarray) -> Iterable[np.ndarray]:
        """Candidates for exposing directions near `v`."""
        return self.blocks.sharpen(v)

    def barrier(self, lam: np.ndarray) -> Barrier | None:
        """``-ln det(1 + lam.Q)``."""
        return self.blocks.barrier(lam)

    def reach(self) -> Any:
        """Upper bounds of the spread of each charge."""
        return self.blocks.reach()

    def stiffness(self, lam: np.ndarray, u: np.ndarray, *, exact: bool = True) -> float | None:
        """Spread of ``u.Q``."""
        return self.blocks.stiffness(lam, u, exact=exact)


def checked_charges(charges: Any, kind: str) -> dict[str, Any]:
    """A dict of charges with names as text; the values are checked by the family."""
    if not hasattr(charges, "items"):
        raise TypeError(f"{kind} takes a dict name -> charge, not {type(charges).__name__}")
    out = dict(charges.items())
    for name in out:
        if not isinstance(name, str) or not name:
            raise TypeError(f"the name of a charge must be non-empty text, not {name!r}")
    return out


def checked_multipliers(lam: Any, blocks: Blocks) -> np.ndarray:
    """Multipliers of a state as (m,) finite numbers.

    Raises
    ------
    TypeError, ValueError
    """
    if isinstance(lam, dict):
        raise TypeError("multipliers are a list in the order of the family's names, not a dict")
    array = np.asarray(lam, float)
    m = blocks.diagonal.shape[0]
    if array.shape != (m,):
        raise ValueError(f"multipliers must have shape ({m},), not {array.shape}")
    if not np.all(np.isfinite(array)):
        raise ValueError(f"multipliers must be finite, not {array.tolist()}")
    return array


def relative_to_prior(log_p: np.ndarray, p: np.ndarray, log_prior_mean: float, log_norm: float) -> float:
    """Relative entropy ``sum p ln p - <ln prior> + ln sum prior`` in nats, never below zero."""
    on = p > 0
    return max(0.0, float(p[on] @ log_p[on]) - log_prior_mean + log_norm)

"""Infinite lists of classical states given by a rule, grown until the lost tail is below rounding.

The rule states an upper bound of what a list leaves out; every evaluation doubles the list until that bound is below
the rounding of ``ln Z``, values and covariance, or carries what is left as its error.  Cost as for listed states.
Floor: families.  Must not know what the states are.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np

from maxent.core.blocks import Blocks
from maxent.core.contract import EPS, Evaluation, Face, Family, Lowest, namespace
from maxent.families.microstates import Microstates, MicrostatesState

__all__ = ["GrownMicrostates", "GrownState", "Rule", "ratio_tail"]

#: Lists are not grown beyond this many states; what is lost then is carried as an error.
LONGEST = 1 << 22


class Rule(Protocol):
    """An infinite list of states x = 0, 1, 2, ... with charges f_x and weights w_x.

    Attributes
    ----------
    names : tuple of str
        The m charges.
    start : (m,) array_like
        Multipliers at which the sum converges.
    """

    names: tuple[str, ...]
    start: Any

    def states(self, first: int, stop: int) -> tuple[np.ndarray, np.ndarray | None]:
        """Charges (m, stop - first) and log weights (stop - first,) (None: all 1) of the states first..stop-1."""

    def log_tail(self, lam: np.ndarray, first: int, moment: int) -> float:
        """Upper bound of ``ln sum_{x >= first} w_x max_j|f_jx|^moment exp(-lam.f_x)`` for moment 0, 1, 2.

        ``+inf`` where the sum diverges; it may be ``+inf`` for small `first` where no bound is known.
        """

    def lowest(self, v: np.ndarray, first: int) -> float:
        """Lower bound of ``v.f_x`` over ``x >= first``; ``-inf`` where it is unbounded."""

    def domain(self) -> np.ndarray | None:
        """Rows g (c, m) when ``ln Z`` is finite exactly for ``g.lam >= 0`` with finite slope on the edge; else None."""


def ratio_tail(log_first: float, log_ratio: float) -> float:
    """Bound ``ln(t/(1 - r))`` of a tail whose first term is t and whose later terms shrink at least by the factor r.

    Parameters
    ----------
    log_first : float
        ``ln t``.
    log_ratio : float
        ``ln r``; not below zero gives ``+inf``.
    """
    return float("inf") if not log_ratio < 0 else float(log_first - np.log(-np.expm1(log_ratio)))


class _List:
    """The states listed so far, shared by all families of one rule."""

    def __init__(self, rule: Rule):
        self.rule = rule
        self.values, self.log_weights = self._take(0, 256)

    def _take(self, first: int, stop: int) -> tuple[np.ndarray, np.ndarray]:
        values, log_weights = self.rule.states(first, stop)
        values = np.asarray(values, float)
        m, n = len(self.rule.names), stop - first
        if values.shape != (m, n):
            raise ValueError(
                f"the rule gives charges of shape {values.shape} for states {first}..{stop - 1}, not {(m, n)}"
            )
        weights = np.zeros(n) if log_weights is None else np.asarray(log_weights, float)
        if weights.shape != (n,) or not np.all(np.isfinite(values)) or np.any(np.isnan(weights) | (weights == np.inf)):
            raise ValueError(
                f"the rule gives charges or log weights that are not finite for states {first}..{stop - 1}"
            )
        return values, weights

    def grow(self) -> bool:
        """Twice as many states; False when the list is as long as it may be."""
        n = self.values.shape[1]
        if n >= LONGEST:
            return False
        values, weights = self._take(n, 2 * n)
        self.values = np.concatenate([self.values, values], axis=1)
        self.log_weights = np.concatenate([self.log_weights, weights])
        return True


@dataclass(frozen=True, eq=False)
class GrownMicrostates(Family):
    """Charges of an infinite list; made by `Microstates.from_rule`.

    Attributes
    ----------
    rule : Rule
    names : tuple of str
    transform, offset : (r, m), (r,) ndarrays
        The charges of this family are ``transform @ f - offset``.
    """

    rule: Rule
    names: tuple[str, ...]
    transform: np.ndarray
    offset: np.ndarray
    listed: _List

    @classmethod
    def of(cls, rule: Rule) -> GrownMicrostates:
        """The family of a rule."""
        m = len(rule.names)
        start = np.asarray(rule.start, float)
        if start.shape != (m,):
            raise ValueError(f"the rule has {m} charges and a start of shape {start.shape}")
        family = cls(rule, tuple(rule.names), np.eye(m), np.zeros(m), _List(rule))
        if not np.isfinite(family.evaluate(start).log_partition):
            raise ValueError(f"the rule's sum does not converge at its start {start.tolist()}, to the bound it states")
        return family

    # ------------------------------------------------------------------ growing

    def _user(self, lam: np.ndarray) -> np.ndarray:
        return self.transform.T @ lam

    def _blocks(self) -> Blocks:
        return Blocks(self.transform @ self.listed.values - self.offset[:, None], prior=self.listed.log_weights)

    def _lost(self, lam: np.ndarray, log_z: float) -> tuple[float, np.ndarray]:
        """What the list leaves out, relative to Z: of Z itself, and of each value (m,) with its square."""
        n = self.listed.values.shape[1]
        user = self._user(lam)
        shift = float(lam @ self.offset) - log_z
        tails = [np.exp(min(self.rule.log_tail(user, n, k) + shift, 700.0)) for k in (0, 1, 2)]
        reach, off = np.abs(self.transform).sum(axis=1), np.abs(self.offset)
        first = reach * tails[1] + off * tails[0]
        second = 2 * (reach**2 * tails[2] + off**2 * tails[0])
        return tails[0], np.maximum(first, np.sqrt(second * EPS))

    def evaluate(self, lam: Any, order: int = 2) -> Evaluation:
        """``ln Z``, values and covariance on a list long enough; ``+inf`` where the tail has no finite bound."""
        if namespace(lam) is not np:
            return self._blocks().evaluate(lam, order)
        while True:
            blocks = self._blocks()
            ev = blocks.evaluate(lam, order)
            with np.errstate(over="ignore", invalid="ignore"):
                lost, error = self._lost(lam, float(ev.log_partition))
            small = EPS * (1 + ev.level)
            if lost <= small and np.all(error <= small * np.maximum(1.0, np.abs(ev.values))):
                return Evaluation(ev.log_partition, ev.values, ev.covariance, ev.rounding, ev.level, error, ev.factor)
            if not self.listed.grow():
                break
        m = len(lam)
        if not np.all(np.isfinite(error)) or lost > 1e-3 or error.max() > 1e-3 * (1 + np.abs(ev.values).max()):
            return Evaluation(np.inf, np.full(m, np.nan), np.eye(m), np.inf, np.inf)
        return Evaluation(ev.log_partition, ev.values, ev.covariance, ev.rounding, ev.level, error, ev.factor)

    def log_partition(self, lam: Any) -> Any:
        """``ln Z`` on the list as long as it is now, traceable by JAX."""
        return self._blocks().log_partition(lam)

    # ------------------------------------------------------------------ questions of the verdict logic

    def start(self) -> np.ndarray:
        """The rule's start in the multipliers of this family."""
        return np.linalg.lstsq(self.transform.T, np.asarray(self.rule.start, float), rcond=None)[0]

    @property
    def scale(self) -> np.ndarray:
        """Root mean square of each charge at the start."""
        ev = self.evaluate(self.start())
        return np.sqrt(ev.values**2 + np.diag(ev.covariance))

    def reference(self) -> tuple[np.ndarray, np.ndarray]:
        """Means and charges minus mean in the state at the start: an infinite list has no counting measure."""
        ev = self.evaluate(self.start())
        assert ev.factor is not None
        return ev.values, ev.factor()

    def combine(self, matrix: np.ndarray, offset: np.ndarray) -> GrownMicrostates:
        """Family of the charges ``matrix @ Q - offset``."""
        return GrownMicrostates(
            self.rule, self.names if len(matrix) == len(self.names) else (), matrix @ self.transform,
            matrix @ self.offset + offset, self.listed,
        )  # fmt: skip

    def _least(self, v: np.ndarray) -> tuple[float, float]:
        """Lowest value of ``v.Q`` and the size of the numbers it was computed from."""
        user = self._user(v)
        while True:
            height = user @ self.listed.values
            listed, tail = float(height.min()), float(self.rule.lowest(user, height.size))
            if tail >= listed or tail == -np.inf or not self.listed.grow():
                size = abs(listed) + abs(v) @ np.abs(self.offset) + np.abs(height[: np.argmin(height) + 1]).max()
                return min(listed, tail) - float(v @ self.offset), float(size)

    def lowest(self, v: np.ndarray, *, with_values: bool = False) -> Lowest:
        """Lowest value of ``v.Q`` over listed states and the stated bound of the tail."""
        low, size = self._least(v)
        high, _ = self._least(-v)
        values = None
        if with_values and np.isfinite(low):
            i = int(np.argmin(self._user(v) @ self.listed.values))
            values = self.transform @ self.listed.values[:, i] - self.offset
        return Lowest(low, -high, EPS * size if np.isfinite(low) else 0.0, values)

    def face(self, v: np.ndarray, tol: float) -> Face | None:
        """The listed states of lowest ``v.Q``, when the tail lies above them."""
        height = self._user(v) @ self.listed.values - float(v @ self.offset)
        spread = np.abs(height).max()
        cut = max(10 * tol, 1e-12 * spread)
        keep = np.flatnonzero(height <= cut)
        above = self.rule.lowest(self._user(v), height.size) - float(v @ self.offset)
        if not len(keep) or len(keep) == height.size or above <= cut:
            return None
        charges = self.transform @ self.listed.values[:, keep] - self.offset[:, None]
        family = Microstates(
            {str(j): row for j, row in enumerate(charges)}, log_weights=self.listed.log_weights[keep]
        ) if len(charges) else Microstates({}, log_weights=self.listed.log_weights[keep])  # fmt: skip
        gap = float(np.delete(height, keep).min() / spread)
        return Face(
            family,
            gap,
            float(np.log(len(keep))),
            exact=True,
            width=float(np.abs(height[keep]).max() / spread),
        )

    def sharpen(self, v: np.ndarray) -> Iterable[np.ndarray]:
        """Normals of candidate faces of the listed states."""
        from maxent.core.polish import normal_directions

        return normal_directions(self.transform @ self.listed.values - self.offset[:, None], v)

    def domain(self) -> np.ndarray | None:
        """Edges of the region where the sum converges with finite slope."""
        rows = self.rule.domain()
        return None if rows is None else np.asarray(rows, float) @ self.transform.T

    def state(self, lam: Any) -> GrownState:
        """The state on a list long enough for `lam`."""
        self.evaluate(np.asarray(lam, float), 1)
        b = self._blocks()
        charges = {str(j): row for j, row in enumerate(b.diagonal)}
        inner = Microstates(charges, log_weights=b.prior).state(lam)
        return GrownState(inner, inner.log_partition, inner.entropy)


@dataclass(frozen=True)
class GrownState:
    """Probabilities of an infinite list, as far as they matter.

    Attributes
    ----------
    inner : MicrostatesState
        The listed part.
    log_partition, entropy : float
        Weights count as degeneracies in the entropy, in nats.
    """

    inner: MicrostatesState
    log_partition: float
    entropy: float
    relative_entropy: float | None = None

    @property
    def probabilities(self) -> np.ndarray:
        """Probabilities of the listed states, shape (n,)."""
        return self.inner.probabilities

    def mean(self, operator: Callable[[int, int], Any]) -> float:
        """Expectation value of an observable given like the charges: ``operator(first, stop)`` lists its values."""
        if not callable(operator):
            raise TypeError("an observable of an infinite list is a function (first, stop) -> values of those states")
        return self.inner.mean(operator(0, self.inner.listed))

    def reduced(self, sites: Any) -> Any:
        """Listed states have no tensor structure; raises."""
        return self.inner.reduced(sites)

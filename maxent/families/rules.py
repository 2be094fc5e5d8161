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
#: Every list starts with this many.
SHORTEST = 256


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
        self.values, self.log_weights = self._take(0, SHORTEST)

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

    def first(self, n: int) -> tuple[np.ndarray, np.ndarray]:
        """Charges (m, n) and log weights (n,) of the first n states."""
        while self.values.shape[1] < n:
            have = self.values.shape[1]
            values, weights = self._take(have, 2 * have)
            self.values = np.concatenate([self.values, values], axis=1)
            self.log_weights = np.concatenate([self.log_weights, weights])
        return self.values[:, :n], self.log_weights[:n]


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

    def _blocks(self, n: int) -> Blocks:
        values, log_weights = self.listed.first(n)
        return Blocks(self.transform @ values - self.offset[:, None], prior=log_weights)

    def _lost(self, lam: np.ndarray, log_z: float, n: int) -> tuple[float, np.ndarray]:
        """What n states leave out, relative to Z: of Z itself, and of each value (m,) together with its square."""
        user = self._user(lam)
        shift = float(lam @ self.offset) - log_z
        tails = [np.exp(min(self.rule.log_tail(user, n, k) + shift, 300.0)) for k in (0, 1, 2)]
        reach, off = np.abs(self.transform).sum(axis=1), np.abs(self.offset)
        first = reach * tails[1] + off * tails[0]
        second = 2 * (reach**2 * tails[2] + off**2 * tails[0])
        return tails[0], np.maximum(first, np.sqrt(second * EPS))

    def _length(self, lam: np.ndarray) -> int:
        """Number of states after which the stated tail is below rounding, before any more of them are listed."""
        # Z only grows with the list, so judging the tail against a short one is on the safe side
        short = self._blocks(SHORTEST).evaluate(lam, 1)
        n = SHORTEST
        while n < LONGEST:
            lost, error = self._lost(lam, float(short.log_partition), n)
            small = EPS * (1 + short.level)
            if lost <= small and np.all(error <= small * np.maximum(1.0, np.abs(short.values))):
                break
            n *= 2
        return n

    def evaluate(self, lam: Any, order: int = 2) -> Evaluation:
        """``ln Z``, values and covariance on a list long enough; ``+inf`` where the tail has no small bound."""
        if namespace(lam) is not np:
            return self._blocks(self.listed.values.shape[1]).evaluate(lam, order)
        n, m = self._length(lam), len(lam)
        outside = Evaluation(np.inf, np.full(m, np.nan), np.eye(m), np.inf, np.inf)
        if not np.isfinite(self.rule.log_tail(self._user(lam), n, 2)):
            return outside
        ev = self._blocks(n).evaluate(lam, order)
        lost, error = self._lost(lam, float(ev.log_partition), n)
        if lost > 1e-3 or error.max(initial=0.0) > 1e-3 * (1 + np.abs(ev.values).max(initial=0.0)):
            return outside
        return Evaluation(ev.log_partition, ev.values, ev.covariance, ev.rounding, ev.level, error, ev.factor)

    def log_partition(self, lam: Any) -> Any:
        """``ln Z`` on the list as long as it is now, traceable by JAX."""
        return self._blocks(self.listed.values.shape[1]).log_partition(lam)

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

    def _heights(self, v: np.ndarray) -> tuple[np.ndarray, float]:
        """``v.Q`` on a list whose tail lies above its minimum, and the lower bound of that tail."""
        user, shift, n = self._user(v), float(v @ self.offset), SHORTEST
        while True:
            height = user @ self.listed.first(n)[0]
            tail = float(self.rule.lowest(user, n))
            least = float(height.min())
            # one more doubling leaves a gap between the face and the tail
            if tail > least + 1e-9 * np.abs(height).max() or tail == -np.inf or n >= LONGEST:
                return height - shift, tail - shift
            n *= 2

    def lowest(self, v: np.ndarray, *, with_values: bool = False) -> Lowest:
        """Lowest value of ``v.Q`` over listed states and the stated bound of the tail."""
        height, tail = self._heights(v)
        below, ceiling = self._heights(-v)
        low, high = min(float(height.min()), tail), -min(float(below.min()), ceiling)
        values = None
        if with_values and np.isfinite(low):
            values = self._blocks(len(height)).diagonal[:, int(np.argmin(height))]
        size = np.abs(height[: int(np.argmin(height)) + 1]).max() + np.abs(v) @ np.abs(self.offset)
        return Lowest(low, high, EPS * float(size) if np.isfinite(low) else 0.0, values)

    def face(self, v: np.ndarray, tol: float) -> Face | None:
        """The listed states of lowest ``v.Q``, when the tail lies above them."""
        height, tail = self._heights(v)
        spread = np.abs(height).max()
        cut = max(10 * tol, 1e-12 * spread)
        keep = np.flatnonzero(height <= cut)
        if not len(keep) or len(keep) == len(height) or tail <= cut:
            return None
        blocks = self._blocks(len(height))
        rows = {str(j): row for j, row in enumerate(blocks.diagonal[:, keep])}
        family = Microstates(rows, log_weights=None if blocks.prior is None else blocks.prior[keep])
        gap = float(min(np.delete(height, keep).min(), tail) / spread)
        return Face(family, gap, float(np.log(len(keep))), exact=True, width=float(np.abs(height[keep]).max() / spread))

    def sharpen(self, v: np.ndarray) -> Iterable[np.ndarray]:
        """Normals of candidate faces of the first states."""
        from maxent.core.polish import normal_directions

        return normal_directions(self._blocks(len(self._heights(v)[0])).diagonal, v)

    def obstacle(self, lam: np.ndarray) -> str:
        """Whether the list would have to be longer than it may be."""
        n = self._length(lam)
        if n < LONGEST:
            return ""
        z = self._blocks(n).evaluate(lam, 1)
        lost, _ = self._lost(lam, float(z.log_partition), n)
        if lost <= EPS * (1 + z.level):
            return ""
        limit = f"{LONGEST:,}".replace(",", " ")
        return (
            f"the infinite list would need more than the {limit} states it may hold: at the multipliers reached, the "
            f"rule's bound of what it leaves out is {lost:.0e} of Z"
        )

    def domain(self) -> np.ndarray | None:
        """Edges of the region where the sum converges with finite slope."""
        rows = self.rule.domain()
        return None if rows is None else np.asarray(rows, float) @ self.transform.T

    def state(self, lam: Any) -> GrownState:
        """The state on a list long enough for `lam`."""
        lam = np.asarray(lam, float)
        b = self._blocks(self._length(lam))
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

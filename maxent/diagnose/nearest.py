"""The reachable targets nearest to unreachable ones, in a stated metric, with a lower and an upper bound.

The distance is ``min |y|`` over the values ``y_j = <Q_j - q_j>/unit_j`` of all states, and also
``max lowest(v)`` over unit combinations v: every direction gives a lower bound, every state an upper one.
Three searches close the gap: the shortest point of the hull of states that `Family.lowest` hands out (exact for lists
of states after finitely many steps), the dual with a penalty ``eps |lam|^2/2`` that is taken to zero (any family), and
directions sharpened in the metric with the state of their face (second order).  Combinations of the charges that are
plain numbers are met first, by projection.  Floor: diagnose; calls core, never solve.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from maxent.core.contract import EPS, SAFETY, Evaluation, Family, Lowest, Problem, Verdict
from maxent.core.decide import decide
from maxent.core.newton import PATIENCE, at_floor, begin, newton_step
from maxent.core.outcome import Outcome
from maxent.core.whiten import Whitening, whiten
from maxent.diagnose.conflict import UNREACHABLE
from maxent.diagnose.corral import Corral

__all__ = ["Move", "Nearest", "default_units", "nearest"]

#: Bounds that differ by less than this, in units of the largest charge, need no further search ...
CLOSED = 4e-15
#: ... and those that differ by more after the quick searches are worth the slow one.
WIDE = 1e-13


@dataclass(frozen=True)
class Nearest:
    """The nearest reachable targets, by name.

    Attributes
    ----------
    targets : dict of str to float
        Values that a state, or a limit of states, has.
    moves : dict of str to float
        Their differences from the targets asked for.
    distance : float
        ``sqrt(sum_j (moves_j/unit_j)^2)``, equal to `upper`.
    lower, upper : float
        Proved bounds of the smallest distance of any reachable targets.
    unit : dict of str to float
        The metric: what counts as one unit of each charge.
    """

    targets: dict[str, float]
    moves: dict[str, float]
    distance: float
    lower: float
    upper: float
    unit: dict[str, float]


@dataclass(frozen=True)
class Move:
    """From the targets asked for to the nearest reachable ones, in the order of the charges.

    Attributes
    ----------
    shift : (m,) ndarray
        In units of the charges.
    lower, upper : float
        Bounds of the distance.
    unit : (m,) ndarray
        The metric.
    size : float
        Largest charge in its unit: rounding of the bounds is counted in this.
    """

    shift: np.ndarray
    lower: float
    upper: float
    unit: np.ndarray
    size: float

    def named(self, names: Sequence[str], targets: np.ndarray) -> Nearest:
        """By name, added to the targets asked for."""
        by_name = lambda x: {n: float(y) for n, y in zip(names, x, strict=True)}
        return Nearest(
            by_name(targets + self.shift), by_name(self.shift), self.upper, self.lower, self.upper, by_name(self.unit)
        )


def default_units(family: Family, whitening: Whitening) -> np.ndarray:
    """Spread of each charge at infinite temperature; its norm, or 1, where it has none.  Shape (m,)."""
    flat = ~whitening.transform.any(axis=0)
    return np.where(flat, np.where(family.scale > 0, family.scale, 1.0), whitening.spread)


def nearest(problem: Problem, outcome: Outcome, unit: np.ndarray) -> Move | None:
    """The reachable targets nearest to those of `problem`.

    Parameters
    ----------
    problem : Problem
    outcome : Outcome
        Verdict on it.
    unit : (m,) ndarray
        What counts as one unit of each charge; positive.

    Returns
    -------
    Move or None
        None unless the verdict is INFEASIBLE or INCONSISTENT.

    Notes
    -----
    The stated accuracy of the targets plays no part: distances are counted from the targets as given.
    """
    if outcome.verdict not in UNREACHABLE:
        return None
    fixed, basis = _numbers(outcome.whitening, unit)
    size = float(np.max(problem.size / unit, initial=0.0)) or 1.0
    if not basis.shape[1]:
        off = float(np.linalg.norm(fixed))
        return Move(_agreeing(problem, unit * fixed, unit), off, off, unit, size)
    # charges of norm one, counted from the targets that agree with the numbers
    matrix = basis.T / unit / size
    family = problem.family.combine(matrix, matrix @ (unit * fixed))
    free = Problem(family, np.abs(matrix) @ problem.noise, np.zeros(len(matrix)))
    y, lower = _shortest(free, outcome, basis.T @ (outcome.direction * unit))
    shift = unit * (fixed + size * (basis @ y))
    shift = _agreeing(problem, shift, unit) if outcome.whitening.null else shift
    off = float(np.linalg.norm(fixed))
    upper = float(np.linalg.norm(shift / unit))
    return Move(shift, min(upper, float(np.hypot(off, size * lower))), upper, unit, size)


def _numbers(whitening: Whitening, unit: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The part of ``(Q - q)/unit`` that is a number in every state, (m,), and a basis (m, r) of the rest."""
    m = len(unit)
    if not whitening.null:
        return np.zeros(m), np.eye(m)
    rows = np.array([c * unit for c in whitening.null])
    _, s, right = np.linalg.svd(rows / np.linalg.norm(rows, axis=1)[:, None])
    rank = int(np.sum(s > 1e-8 * s[0]))
    return right[:rank].T @ (right[:rank] @ (whitening.mean / unit)), right[rank:].T


def _agreeing(problem: Problem, shift: np.ndarray, unit: np.ndarray) -> np.ndarray:
    """`shift` met by all combinations that are numbers, to the rounding of every charge and not of the largest one."""
    there = replace(problem, family=problem.family.combine(np.eye(len(unit)), shift))
    return shift + unit * _numbers(whiten(there), unit)[0]


# ---------------------------------------------------------------- the search


class _Bracket:
    """The best bounds so far; charges have norm one or less.

    A length is blind to an error e across it (it enters as e^2), and so is the lowest value to an error of the
    direction.  What counts is therefore how far the values y of states on the face of v lie from the foot
    ``lowest(v) v``: that is zero at the answer and of first order around it.
    """

    def __init__(self, problem: Problem):
        self.problem = problem
        self.family = problem.family
        self.lower, self.upper, self.aside = -np.inf, np.inf, np.inf
        self.point = self.direction = np.zeros(len(problem.noise))
        self.lowest: Lowest | None = None

    @property
    def gap(self) -> float:
        return self.upper - max(self.lower, 0.0)

    @property
    def closed(self) -> bool:
        return self.gap <= CLOSED and self.aside <= CLOSED

    def look(self, v: np.ndarray) -> Lowest | None:
        """Use the lowest value along the unit vector `v` and the state that has it."""
        low = self.family.lowest(v, with_values=True)
        if not np.isfinite(low.value):
            return None
        if low.value > self.lower:
            self.lower, self.direction, self.lowest = low.value, v, low
        if low.values is not None:
            self.reach(low.values, low.value * v)
        return low

    def reach(self, y: np.ndarray, foot: np.ndarray) -> None:
        """Use the values `y` of a state and the foot of a perpendicular."""
        aside, length = float(np.linalg.norm(y - foot)), float(np.linalg.norm(y))
        if aside < self.aside or length < self.upper - CLOSED:
            self.aside, self.upper, self.point = aside, length, y

    def stand(self, v: np.ndarray, low: Lowest, *, beside: bool = False) -> bool:
        """Use the states of the face of `v`: the one at the foot of the perpendicular, if the face reaches there.

        With `beside`, else the one nearest to the foot.  Returns whether the face consists of listed states.
        """
        foot = low.value * v
        moved = self.family.combine(np.eye(len(v)), foot)
        face = moved.face(v, float(np.abs(v) @ self.problem.unit + SAFETY * low.error))
        if face is None:
            return False
        rounding = 0.0 if face.exact else 8 * EPS / max(face.gap, 1e-12)
        noise = self.problem.noise + rounding * moved.scale
        inner = Problem(face.family, noise, np.zeros(len(v)))
        below = decide(inner, depth=1)
        if below.values is not None and below.verdict in (Verdict.SOLVED, Verdict.BOUNDARY):
            self.reach(foot + below.values, foot)
        elif beside and (move := nearest(inner, below, np.ones(len(v)))) is not None:
            self.reach(foot + move.shift, foot)
        return face.exact


def _shortest(problem: Problem, outcome: Outcome, v: np.ndarray) -> tuple[np.ndarray, float]:
    """Values of least norm and a lower bound of that norm, from a first direction `v`."""
    bracket = _Bracket(problem)
    again = decide(problem) if outcome.verdict is Verdict.INCONSISTENT else outcome
    if again.verdict in (Verdict.SOLVED, Verdict.BOUNDARY) and again.values is not None:
        return again.values, 0.0
    if again is not outcome:
        v = np.zeros(0) if again.direction is None else again.direction
    if v.any():
        v = v / np.linalg.norm(v)
        low = bracket.look(v)
        if low is not None and bracket.stand(v, low):  # states are listed: finitely many corners
            _walk(bracket, [v])
    if not bracket.closed:
        seen = _penalised(bracket)
        if bracket.gap > WIDE and bracket.lowest is not None:
            bracket.stand(bracket.direction, bracket.lowest, beside=True)
        if bracket.gap > WIDE:
            _walk(bracket, seen, limit=40)
    return bracket.point, max(bracket.lower, 0.0)


def _walk(bracket: _Bracket, directions: Sequence[np.ndarray], *, limit: int = 1000) -> None:
    """Shortest point of the hull of states, one more state at a time: the lowest one along the last shortest point."""
    corral: Corral | None = None
    for v in directions:
        low = bracket.look(v)
        if low is not None and low.values is not None:
            corral = Corral.at(low.values) if corral is None else corral.joined(low.values)
    for _ in range(limit):
        if corral is None:
            return
        v = corral.normal()
        if not v.any():
            return
        lower = bracket.lower
        low = bracket.look(v)
        if low is None or low.values is None:
            return
        bracket.reach(corral.point, low.value * v)
        new = corral.joined(low.values)
        shorter = np.linalg.norm(new.point) < np.linalg.norm(corral.point)
        if v @ corral.point - low.value <= EPS or not (shorter or bracket.lower > lower):
            return
        corral = new


def _penalised(bracket: _Bracket) -> list[np.ndarray]:
    """Minimise ``ln Z + eps |lam|^2/2`` for falling eps; there ``<A> = eps lam``, so lam points at the answer."""
    family = bracket.family
    lam = family.start()
    seen: list[np.ndarray] = []
    for eps in 10.0 ** -np.arange(1, 13):

        def evaluate(x: np.ndarray, eps: float = eps) -> Evaluation:
            return _with_penalty(family.evaluate(x), x, eps)

        at = begin(evaluate, lam)
        for _ in range(40):
            if at_floor(at) or at.residual <= 1e-3 * eps * np.linalg.norm(at.lam) or at.rejected > PATIENCE:
                break
            at = newton_step(evaluate, at)
        length = np.linalg.norm(at.lam)
        if not length > 0:
            continue
        v = at.lam / length
        low = bracket.look(v)
        if low is not None:
            bracket.reach(at.evaluation.values + eps * at.lam, low.value * v)
        seen.append(v)
        if bracket.lower > 0 or eps < 1e-3:
            _sharpened(bracket, v)
        if bracket.closed:
            break
        lam = _longer(family, at.lam, eps / 10)
    return seen[-4:]


def _sharpened(bracket: _Bracket, v: np.ndarray) -> None:
    """Sharpen `v` in the metric, and stand on the faces that it leads to."""
    for w in bracket.family.sharpen(v):
        low = bracket.look(w)
        if low is not None and low.value >= bracket.lower - 10 * CLOSED and not bracket.closed:
            bracket.stand(w, low)
        if bracket.closed:
            return


def _longer(family: Family, lam: np.ndarray, eps: float) -> np.ndarray:
    """The start of the next stage: ten times as long, as the answer will be, if that is the better one."""
    cost = lambda x: float(family.evaluate(x, 1).log_partition) + 0.5 * eps * float(x @ x)
    return 10 * lam if cost(10 * lam) < cost(lam) else lam


def _with_penalty(ev: Evaluation, lam: np.ndarray, eps: float) -> Evaluation:
    """Evaluation of ``ln Z + eps |lam|^2/2``."""
    m, factor = len(lam), ev.factor
    return replace(
        ev,
        log_partition=ev.log_partition + 0.5 * eps * float(lam @ lam),
        values=ev.values - eps * lam,
        covariance=ev.covariance + eps * np.eye(m),
        factor=None if factor is None else lambda: np.concatenate([factor(), np.sqrt(eps) * np.eye(m)], axis=1),
    )

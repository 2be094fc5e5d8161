"""Newton steps for levels that can hold any number of particles: inside the domain, and as far as the dual falls.

The domain of bosons is ``lam.q_k > 0`` for every level.  A quadratic model of ``-ln(1 - e^-w)`` empties a level by a
factor two per step (e for distinguishable particles), fills it by far too much, and runs into the edge when a
condensate fills.  Three remedies, each of which spares steps: the level that limits the step keeps its own part of
``ln Z`` exactly; steps end before the edge; the slope of the dual at their end decides how far they go.  Floor:
families.
"""

from __future__ import annotations

from typing import Any, Protocol

import numpy as np
from scipy.optimize import brentq

from maxent.core.contract import Evaluation, namespace
from maxent.families.reachable import PASS
from maxent.families.statistics import SIGNS, level_terms, occupations

__all__ = ["kept_inside", "multiple"]

#: Steps end at this part of the way to the edge of the domain.
STAY = 0.99

#: Steps are stretched by no more than this, and shortened no further.
LONGEST, SHORTEST = 32.0, 1e-3


class Levels(Protocol):
    """Charges (m, n) of n levels, their copies, constants (m,), edges (m, e) of a continuum or None."""

    @property
    def charges(self) -> Any: ...
    @property
    def degeneracy(self) -> Any: ...
    @property
    def constant(self) -> Any: ...
    @property
    def edges(self) -> Any: ...
    @property
    def statistics(self) -> str: ...


def multiple(share: np.ndarray, weights: np.ndarray, falls: float, longest: float) -> float:
    """How many times a step that changes levels x by ``share x`` may be taken: where overfilled levels empty.

    Newton's step halves the occupation of such a level, whose ``ln Z`` is ``-ln x``.  With that for all of them the
    slope of the dual after t steps is ``-falls + sum w s (1 - 1/(1 + t s))``, above the true one, since the curvature
    ``n (1 + n)`` is below ``1/x^2``: the dual still falls where this vanishes.  1 where that is not beyond the step.

    Parameters
    ----------
    share, weights : (n,) ndarrays
    falls : float
        By how much the dual falls per step at its beginning, times minus one: ``values . step``.
    longest : float
        Steps that stay inside the domain.
    """
    slope = lambda t: float((weights * share) @ (t * share / (1.0 + t * share))) - falls
    end = min(LONGEST, longest)
    if not (falls > 0 and end > 1.0 and slope(1.0) < 0):
        return 1.0
    return end if slope(end) <= 0 else float(brentq(slope, 1.0, end, rtol=1e-3))


def kept_inside(levels: Levels, lam: Any, step: Any, evaluation: Evaluation) -> Any:
    """The step to take from `lam` where Newton's method proposes `step`; under a trace it is only shortened."""
    bosons = levels.statistics == "bosons"
    if namespace(lam) is not np:
        return _part(levels, lam, step)[0] * step if bosons else step
    if bosons:
        part, k = _part(levels, lam, step)
        if part < 1.0 and k >= 0:
            bent = _bent(levels, lam, k, evaluation)
            size, most = np.linalg.norm(bent), np.linalg.norm(step)
            if np.isfinite(size) and size > 0:
                step = bent * min(1.0, most / size)
                part = _part(levels, lam, step)[0]
        step = part * step
    return _along(levels, lam, step, evaluation) * step


def _rows(levels: Levels) -> list[Any]:
    return [levels.charges] if levels.edges is None else [levels.edges, levels.charges]


def _part(levels: Levels, lam: Any, step: Any) -> tuple[Any, int]:
    """Part of `step` that ends well inside the domain, and the level that limits it (-1: the continuum)."""
    xp = namespace(lam)
    longest, at = xp.asarray(1.0), -1
    for q in _rows(levels):
        for i in range(0, q.shape[1], PASS if xp is np else max(q.shape[1], 1)):
            w, change = lam @ q[:, i : i + PASS], step @ q[:, i : i + PASS]
            falling = change < 0
            ratio = STAY * xp.where(falling, w / xp.where(falling, -change, 1.0), xp.inf)
            if xp is np and ratio.min() < longest:
                at = -1 if q is levels.edges else i + int(np.argmin(ratio))
            longest = xp.minimum(longest, xp.min(ratio))
    return xp.maximum(longest, 0.0), at


def _along(levels: Levels, lam: np.ndarray, step: np.ndarray, evaluation: Evaluation) -> float:
    """How far to go along `step`, as a multiple of it.

    Trial points cost occupations alone, no products with the charges.
    """
    sign = SIGNS[levels.statistics]
    w, change = lam @ levels.charges, step @ levels.charges
    held, weight = float(step @ levels.constant), levels.degeneracy * change
    most, start = LONGEST, -float(evaluation.values @ step)
    if levels.statistics == "bosons":
        for q in _rows(levels):
            here, moved = (w, change) if q is levels.charges else (lam @ q, step @ q)
            falling = moved < 0
            if falling.any():
                most = min(most, STAY * float(np.min(here[falling] / -moved[falling])))

    more, bend = 0.0, 0.0
    if evaluation.lowest is None:  # a penalty in the same dual: what its slope and curvature add
        _, n, variance = level_terms(w, sign)
        more = start + float(weight @ n) + held
        bend = float(step @ evaluation.covariance @ step) - float((weight * change) @ variance)

    def slope(t: float) -> float:
        with np.errstate(over="ignore", invalid="ignore"):
            return more + t * bend - held - float(weight @ occupations(w + t * change, sign))

    t = min(1.0, most)
    at = slope(t)
    if not at <= -start:
        while t > SHORTEST and not slope(t) <= -0.5 * start:
            t *= 0.5
        return t
    if at < 0.3 * start:
        while 2 * t < most and slope(2 * t) < 0.3 * start:
            t *= 2
    return t


def _bent(levels: Levels, lam: np.ndarray, k: int, evaluation: Evaluation) -> np.ndarray:
    """Minimiser of the model that is quadratic but for level k: a scalar equation for the new exponent of k."""
    q, g = levels.charges[:, k], levels.degeneracy[k]
    w = float(lam @ q)
    _, n, variance = (float(x) for x in level_terms(np.float64(w), -1))
    h, axes = np.linalg.eigh(evaluation.covariance - g * variance * np.outer(q, q))
    inverse = (axes / np.maximum(h, 1e-12 * max(h[-1], 1e-300))) @ axes.T
    rest, along = inverse @ (g * n * q - evaluation.values), inverse @ q
    start, pull = w - float(q @ rest), g * float(q @ along)
    # new = start + pull n(new), and 1/w - 1/2 <= n(w) <= 1/w brackets the root
    low, high = _positive_root(start - 0.5 * pull, pull), _positive_root(start, pull)
    filled = lambda x: float(occupations(np.asarray(x), -1))
    excess = lambda x: x - start - pull * filled(x)
    inside = excess(low) < 0 < excess(high)
    new = brentq(excess, low, high, xtol=1e-300, rtol=1e-12) if inside else high
    return -rest + g * along * filled(new)


def _positive_root(a: float, b: float) -> float:
    """The positive root of ``x^2 = a x + b``, b > 0."""
    root = float(np.hypot(a, 2 * np.sqrt(b)))
    return 0.5 * (a + root) if a > 0 else 2 * b / (root - a)

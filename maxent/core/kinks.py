"""Newton's method on a dual with kinks: ``F(x) + sum_k max(x_k l_k, x_k u_k)``, F smooth and convex.

Each step minimises the quadratic model of F with the kinks kept as they are, so that multipliers which a tolerance
sets to zero are exactly zero from the first steps on and the set of edges that hold is known long before the iteration
converges (proximal Newton: J. D. Lee, Y. Sun, M. A. Saunders, SIAM J. Optim. 24, 1420 (2014), from memory).
Floor: core; knows no families.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from maxent.core.contract import EPS, Evaluation

__all__ = ["Kinks", "Point", "advance", "minimise_model"]


@dataclass(frozen=True)
class Kinks:
    """Slopes of the kinks at zero: ``l_k`` to the left, ``u_k`` to the right; both 0 for a smooth coordinate."""

    lower: np.ndarray
    upper: np.ndarray

    @property
    def bent(self) -> np.ndarray:
        """Coordinates that have a kink, (r,) bool."""
        return self.lower < self.upper

    def slope(self, x: np.ndarray) -> np.ndarray:
        """Slope of each kink at x, 0 on the kink."""
        return np.where(x > 0, self.upper, np.where(x < 0, self.lower, 0.0))

    def value(self, x: np.ndarray) -> float:
        """Sum over the kinks; inf on the wrong side of a one-sided coordinate."""
        on = x != 0
        return float(x[on] @ self.slope(x)[on])

    def steepest(self, x: np.ndarray, gradient: np.ndarray) -> np.ndarray:
        """The subgradient of least norm at x."""
        at_kink = np.where(self.bent & (x == 0), gradient - np.clip(gradient, -self.upper, -self.lower), np.nan)
        return np.where(np.isnan(at_kink), gradient + self.slope(x), at_kink)


@dataclass(frozen=True)
class Point:
    """State of the iteration.

    Attributes
    ----------
    x : (r,) ndarray
    radius : float
        Steps longer than this are not trusted.
    evaluation : Evaluation
        Of the smooth part; its gradient is ``-values``.
    value : float
        Smooth part and kinks.
    target : (r,) ndarray
        Where the quadratic model has its minimum; its zeros and signs are the guess of the edges that hold.
    model_decrease : float
        What the model promises for that step.
    rejected : int
        Rejected steps in a row.
    """

    x: np.ndarray
    radius: float
    evaluation: Evaluation
    value: float
    target: np.ndarray
    model_decrease: float
    rejected: int = 0

    @property
    def blind(self) -> float:
        """Differences of the value below this are rounding."""
        ev = self.evaluation
        return 160 * EPS * float(abs(ev.log_partition) + ev.level + abs(self.value) + 1)


def minimise_model(
    hessian: np.ndarray, gradient: np.ndarray, x: np.ndarray, kinks: Kinks, *, damping: float = 0.0
) -> np.ndarray:
    """Minimiser z of ``g.(z-x) + (z-x).(H + damping).(z-x)/2 + kinks(z)`` by an active set, from x.

    Along each segment the first kink that is met becomes active; a coordinate leaves its kink when the model falls on
    one side of it.  Finite because the model falls strictly with every change of the set.
    """
    h = hessian + damping * np.eye(len(x))
    unit = 1.0 / np.sqrt(np.maximum(np.diag(h), 1e-300))
    linear = gradient - h @ x
    z, side, fresh = x.copy(), np.sign(x), -1
    for _ in range(20 * len(x) + 20):
        on = ~kinks.bent | (side != 0)
        slope = np.where(side > 0, kinks.upper, np.where(side < 0, kinks.lower, 0.0)) * kinks.bent
        full = np.zeros_like(z)
        block = h[np.ix_(on, on)] * np.outer(unit[on], unit[on])
        full[on] = unit[on] * np.linalg.lstsq(block, -unit[on] * (linear + slope)[on], rcond=1e-15)[0]
        crossing = on & kinks.bent & (side * full <= 0)
        if np.any(crossing):
            share = np.where(crossing, z / np.where(crossing & (z != full), z - full, 1.0), np.inf)
            first = int(np.argmin(share))
            if first == fresh:  # it left its kink for rounding alone
                return z
            z = z + max(float(share[first]), 0.0) * np.where(on, full - z, 0.0)
            z[first], side[first] = 0.0, 0.0
            continue
        z, fresh = full, -1
        pull = h @ z + linear
        off = kinks.bent & (side == 0)
        noise = 1e-13 * (np.abs(h) @ np.abs(z) + np.abs(linear))
        right = np.where(off & np.isfinite(kinks.upper), -(pull + kinks.upper) - noise, -np.inf) * unit
        left = np.where(off & np.isfinite(kinks.lower), pull + kinks.lower - noise, -np.inf) * unit
        best = int(np.argmax(np.maximum(right, left))) if len(z) else 0
        if not len(z) or max(right[best], left[best]) <= 0:
            return z
        side[best], fresh = (1.0 if right[best] >= left[best] else -1.0), best
    return z


def look_ahead(x: np.ndarray, radius: float, evaluation: Evaluation, kinks: Kinks, rejected: int) -> Point:
    """The point with its model step, damped so that the step stays within `radius`."""
    hessian, gradient = evaluation.covariance, -evaluation.values
    pull = float(np.linalg.norm(kinks.steepest(x, gradient)))
    # without curvature a step is still no longer than 1e8 radii
    ridge = max(1e-13 * float(np.trace(hessian)), 1e-8 * pull / radius, 1e-300)
    target = minimise_model(hessian, gradient, x, kinks, damping=ridge)
    if not np.linalg.norm(target - x) <= radius:
        # |step| <= |steepest|/damping: the upper end is safe, and bisection finds a step of nearly full length
        low, high = ridge, max(pull / radius, 2 * ridge)
        target = minimise_model(hessian, gradient, x, kinks, damping=high)
        for _ in range(12):
            middle = np.sqrt(max(low, 1e-8 * high) * high)
            trial = minimise_model(hessian, gradient, x, kinks, damping=middle)
            if np.linalg.norm(trial - x) <= radius:
                high, target = middle, trial
                if np.linalg.norm(trial - x) > 0.5 * radius:
                    break
            else:
                low = middle
    s = target - x
    promise = -(gradient @ s + 0.5 * s @ hessian @ s + kinks.value(target) - kinks.value(x))
    value = float(evaluation.log_partition) + kinks.value(x)
    return Point(x, radius, evaluation, value, target, float(promise), rejected)


def advance(evaluate: Callable[[np.ndarray], Evaluation], at: Point, kinks: Kinks) -> Point:
    """One trial step; a trial that is not finite or does not fall as promised is rejected and the radius shrinks."""
    new = evaluate(at.target)
    length = float(np.linalg.norm(at.target - at.x))
    value = float(new.log_partition) + kinks.value(at.target)
    ratio = (at.value - value) / max(at.model_decrease, 1e-300)
    sound = bool(np.isfinite(value) and np.all(np.isfinite(new.values)))
    if at.model_decrease <= at.blind:  # the value is blind here: the steepest subgradient must not grow
        before = np.linalg.norm(kinks.steepest(at.x, -at.evaluation.values))
        ratio = 1.0 if sound and np.linalg.norm(kinks.steepest(at.target, -new.values)) <= before else -1.0
    if not sound or not ratio > 1e-3:
        return look_ahead(at.x, 0.25 * length, at.evaluation, kinks, at.rejected + 1)
    radius = at.radius
    if ratio > 0.7 and length > 0.4 * radius:
        radius = 3 * radius
    elif ratio < 0.25:
        radius = max(0.3 * length, 1e-3)
    return look_ahead(at.target, radius, new, kinks, 0)

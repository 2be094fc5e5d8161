"""The analytic centre of the multipliers: a self-concordant test of whether 0 is an interior point.

The barrier has a minimum exactly if it is, and a Newton decrement below one proves that a minimum exists
(Nesterov, Nemirovskii, Interior-Point Polynomial Algorithms, 1994, from memory).  Its divergence hands out directions.
Floor: core.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np

from maxent.core.contract import SAFETY, Barrier, Evaluation, Family
from maxent.core.newton import curvatures

__all__ = ["Centre", "centre", "starts_along"]


@dataclass(frozen=True)
class Centre:
    """How the search ended.

    `status` is ``interior``, ``found`` (the callback answered), ``unsure``, ``diverged``, ``stuck`` or ``none``.
    """

    status: str
    lam: np.ndarray | None
    found: Any
    count: int


def starts_along(family: Family, directions: Iterable[np.ndarray]) -> list[np.ndarray]:
    """Points near the centre along normals of nearby faces: for a depth delta it lies at ``(1 - k/d)/delta``."""
    starts = []
    for v in directions:
        size = np.linalg.norm(v)
        if not (size > 0 and np.isfinite(size)):
            continue
        v = v / size
        low = family.lowest(v)
        if low.value < 0:
            starts += [t * v / -low.value for t in (0.9, 0.75, 0.5, 0.03)]
    return starts


def centre(
    family: Family,
    unit: np.ndarray,
    starts: Iterable[np.ndarray],
    ask: Callable[[np.ndarray, np.ndarray, int], Any],
    *,
    limit: int = 400,
) -> Centre:
    """Newton's method on the family's barrier, from the best of `starts`.

    Parameters
    ----------
    family : Family
        Whitened charges minus targets.
    unit : (r,) ndarray
        Uncertainty of each whitened charge.
    starts : iterable of (r,) ndarrays
    ask : callable
        ``ask(lam, step, count)``; anything but None ends the search with status ``found``.
    limit : int
        Largest number of Newton steps.
    """
    lam, at = None, None
    for x in starts:
        b = family.barrier(x)
        if b is not None and (at is None or b.value < at.value):
            lam, at = x, b
    if lam is None or at is None:
        return Centre("none", None, None, 0)
    for count in range(limit):
        h, axes, step, decrement = _newton(at)
        noise = np.sqrt(np.sum((np.abs(axes.T) @ (at.complexity * unit)) ** 2 / h))
        # through 1 + lam.A the uncertainty is amplified by the smallest argument
        noise += np.sqrt(at.complexity) * (np.abs(lam) @ unit + SAFETY * at.rounding) / at.smallest
        if decrement < 0.1 and decrement + noise < 0.25:
            return Centre("interior", lam, None, count)
        if decrement < 1e-3:
            return Centre("unsure", lam, None, count)
        answer = ask(lam, step, count)
        if answer is not None:
            return Centre("found", lam, answer, count)
        moved = _advance(family, lam, step, at, decrement)
        if moved is None:
            return Centre("stuck", lam, None, count)
        lam, at = moved
        if np.linalg.norm(lam) > 1e15:
            return Centre("diverged", lam, None, count)
    return Centre("diverged", lam, None, limit)


def _newton(at: Barrier) -> tuple[np.ndarray, np.ndarray, np.ndarray, float]:
    """Curvatures, axes, Newton step and Newton decrement of a barrier."""
    h, axes = curvatures(Evaluation(0.0, at.gradient, at.factor @ at.factor.T, 0.0, 0.0, factor=lambda: at.factor))
    h = np.maximum(h, 1e-30 * h[-1])
    along = axes.T @ at.gradient
    return h, axes, -(axes @ (along / h)), float(np.sqrt(np.sum(along**2 / h)))


def _advance(
    family: Family, lam: np.ndarray, step: np.ndarray, at: Barrier, decrement: float
) -> tuple[np.ndarray, Barrier] | None:
    """Greedy long steps on which the value must fall; the damped step is always allowed."""
    damped = 1.0 / (1.0 + decrement) if decrement > 0.25 else 1.0
    for t in damped * 8.0 ** np.arange(6, -1, -1):
        new = family.barrier(lam + t * step)
        if new is not None and (new.value < at.value - 1e-3 * t * decrement**2 or t == damped):
            return lam + t * step, new
    return None

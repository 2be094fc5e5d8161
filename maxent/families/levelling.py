"""Exposing directions along which the lowest one-particle levels are equal.

Particles of which one (or any number of bosons) sits in the lowest of several levels leave a face where these levels
are equal: ``v.Q`` is a number on them, which is linear in v as long as the levels stand still.  Candidates only: all
are verified afterwards.  Floor: families.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator

import numpy as np

from maxent.core.blocks import real_rows

__all__ = ["levelled"]

#: Levels (n,) of a direction, and what makes the charges (m, g, g) over some of them.
Look = Callable[[np.ndarray], tuple[np.ndarray, Callable[[np.ndarray], np.ndarray]]]


def levelled(v: np.ndarray, look: Look) -> Iterator[np.ndarray]:
    """Directions near `v` for each number of lowest levels that stand apart from the others, and for all of them."""
    order = np.sort(look(v)[0])
    if len(v) < 2 or len(order) < 2 or not order[-1] > order[0]:
        return
    decades = np.log10(np.maximum((order[1:] - order[0]) / (order[-1] - order[0]), 1e-14))
    jumps = np.diff(decades)
    for g in [*[int(i) + 2 for i in np.argsort(-jumps, kind="stable")[:3] if jumps[i] > 0.7], len(order)]:
        better = _equal(v, look, g)
        if better is not None:
            yield better


def _equal(v: np.ndarray, look: Look, g: int) -> np.ndarray | None:
    """`v` turned until the g lowest levels are equal; None where that leads far away."""
    for _ in range(6):
        levels, charges_over = look(v)
        hops = charges_over(np.sort(np.argsort(levels, kind="stable")[:g]))
        even = np.einsum("jaa->j", hops).real / g
        axes, weights, _ = np.linalg.svd(real_rows(hops - even[:, None, None] * np.eye(g)))
        fixed = axes[:, : int(np.sum(weights > 1e-9 * weights[0]))]
        step = fixed @ (fixed.T @ v)
        left = float(np.linalg.norm(v - step))
        if left < 0.5:
            return None
        v = (v - step) / left
        if np.linalg.norm(step) < 1e-15:
            break
    return v

"""How far the values of free particles can be moved from those of a state: a proof that targets are interior.

With occupations n of the levels of ``lam.Q`` and ``s^2 = n (1 - n)`` for fermions, n for bosons, the correlation matrix
``n + s (y.Q) s`` is that of a state whenever the one-body norm of ``y.Q`` is at most 1, since it then lies between
``n - s^2`` and ``n + s^2``.  It moves the values by C y with

    C_ij = sum_ab s_a s_b (Q_i)_ab (Q_j)_ba .

So every target that is off by less than some C y with ``|y.Q| < 1`` is reached, and interior.  Unlike bounds of how
fast curvatures fall this needs no charge to commute with another.  Floor: families.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from maxent.core.blocks import real_rows
from maxent.families.statistics import occupations, vacancies

if TYPE_CHECKING:
    from maxent.families.stacks import Stacks

__all__ = ["norm_needed"]


def norm_needed(stacks: Stacks, lam: np.ndarray, off: np.ndarray, unit: np.ndarray) -> float:
    """Norm of ``y.Q`` that reaches every target within `unit` (m,) of values at `lam` moved by `off` (m,).

    Below 1 they are reached.
    """
    from maxent.families.stacks import eigh, rotated

    play = _play(lam @ stacks.flat, stacks.sign)
    rows = [stacks.flat * (np.sqrt(np.asarray(stacks.flat_weights)) * play)]
    for w, a, k in zip(stacks.weights, stacks.dense, stacks.exponent(lam), strict=True):
        e, u = eigh(k)
        play = _play(e, stacks.sign)
        rows.append(real_rows(rotated(a, u) * np.sqrt(w * play[:, :, None] * play[:, None, :])))
    factor = np.concatenate(rows, axis=1)
    axes, roots, _ = np.linalg.svd(factor, full_matrices=False)
    if len(roots) < len(lam) or not roots.min(initial=np.inf) > 1e-150:
        return np.inf
    far = np.abs(axes.T @ off) + np.abs(axes.T) @ unit
    norms = [float(np.abs(stacks.spectrum(axis)[0]).max(initial=0.0)) for axis in axes.T]
    return float(np.sum(far * norms / roots / roots))


def _play(x: np.ndarray, sign: int) -> np.ndarray:
    """The numbers s."""
    n = occupations(x, sign)
    return np.sqrt(n * vacancies(x, sign)) if sign > 0 else np.sqrt(n)

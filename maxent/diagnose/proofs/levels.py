"""Lower bounds over independent levels: sums of negative parts (at most one fermion per copy), and cones.

One pass in float64 with the bound ``gamma_(m+1) |w|.|q_k|`` tells which levels lie below zero for certain; what these
add up to is an exact sum, and the few levels in doubt are computed in fractions.  Floor: diagnose.
"""

from __future__ import annotations

from fractions import Fraction

import numpy as np

from maxent.diagnose.proofs.bounds import UNIT
from maxent.diagnose.proofs.listed import EXACT, heights
from maxent.diagnose.proofs.sums import dot, exact_dot

__all__ = ["deepest_level", "lowest_filled"]


def lowest_filled(w: np.ndarray, charges: np.ndarray, copies: np.ndarray) -> tuple[Fraction, bool]:
    """Lower bound of ``sum_k g_k min(w.q_k, 0)``, and whether it is that sum itself.

    Parameters
    ----------
    w : (m,) ndarray
    charges : (m, n) ndarray
    copies : (n,) ndarray
        g_k > 0.
    """
    exact = [Fraction(x) for x in w.tolist()]
    filled, doubtful = np.zeros(charges.shape[1], bool), np.zeros(charges.shape[1], bool)
    lost = Fraction(0)
    for part, height, radius in heights(w, charges):
        filled[part], doubtful[part] = height < -radius, np.abs(height) <= radius
        # a level in doubt lies above -2 radius; only needed if there are too many of them
        lost += Fraction(float(copies[part] @ np.where(doubtful[part], radius, 0.0))) * Fraction(5, 2)
    total, n = Fraction(0), charges.shape[0]
    for x, row in zip(exact, charges, strict=True):
        if x:
            total += x * exact_dot(row[filled], copies[filled])
    at = np.flatnonzero(doubtful)
    if len(at) * n > EXACT:
        return total - lost - Fraction(1, 2**900), False
    for k in at:
        total += Fraction(float(copies[k])) * min(dot(exact, charges[:, k]), Fraction(0))
    return total, True


def deepest_level(w: np.ndarray, charges: np.ndarray, anchor: np.ndarray) -> tuple[Fraction, Fraction] | None:
    """The smallest rho >= 0 with ``(w + rho u).q_k >= 0`` on every level, or a number above it; how deep levels lie.

    None where u is not positive on every level.

    Parameters
    ----------
    w : (m,) ndarray
    charges : (m, n) ndarray
    anchor : (m,) ndarray
        u.
    """
    exact, base = [Fraction(x) for x in w.tolist()], [Fraction(x) for x in anchor.tolist()]
    doubtful = np.zeros(charges.shape[1], bool)
    rough, depth = 0.0, 0.0
    for (part, height, radius), (_, confined, blur) in zip(heights(w, charges), heights(anchor, charges), strict=True):
        least = confined - blur
        if not least.min(initial=1.0) > 0:
            return None
        doubtful[part] = height < radius
        below = np.maximum(radius - height, 0.0)
        rough, depth = max(rough, float((below / least).max(initial=0.0))), max(depth, float(below.max(initial=0.0)))
    at = np.flatnonzero(doubtful)
    if len(at) * len(w) > EXACT:
        return Fraction(rough) * (1 + 8 * UNIT), Fraction(depth) * (1 + 8 * UNIT)
    pairs = [(dot(exact, q), dot(base, q)) for q in charges[:, at].T]
    ratios = [(-height / confined, -height) for height, confined in pairs if height < 0]
    return max((x for x, _ in ratios), default=Fraction(0)), max((y for _, y in ratios), default=Fraction(0))

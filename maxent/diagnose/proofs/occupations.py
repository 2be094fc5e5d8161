"""A ball of targets that occupations of independent levels can reach, proved from approximate occupations.

Theorem.  Let 0 <= n_k, for fermions n_k <= 1, be any numbers, D_k = n_k (1 - n_k) for fermions and n_k otherwise, T any
real (m, m) matrix, G any real (m, n) matrix with columns G_k, and

    B_ab = sum_kl T_al g_k q_lk D_k G_bk,    k_a = sum_l T_al (sum_k g_k q_lk n_k + c_l - q_l),    R = max_k |G_k| .

Then every q' with ``|T (q' - q)| < (1 - |B - 1|)/R - |k|`` is reached.

Proof.  Put delta = T (q' - q).  ``B y = delta - k`` has a solution with ``|y| <= (|delta| + |k|)/(1 - |B - 1|)``, so
that ``|y.G_k| < 1``, and the occupations ``n_k + D_k y.G_k`` are allowed: D_k is neither above n_k nor, for fermions,
above ``1 - n_k``.  Their values are q', since T is invertible.

It is the theorem of `maxent.diagnose.proofs.interior` without a normalisation: t = 1, g = 0.  Floor: diagnose.
"""

from __future__ import annotations

from fractions import Fraction

import numpy as np

from maxent.diagnose.proofs.bounds import TINY, gamma
from maxent.diagnose.proofs.interior import Sums, ball
from maxent.families.modes import Modes

__all__ = ["occupied_ball"]


def occupied_ball(
    family: Modes, occupations: np.ndarray, targets: np.ndarray, accuracy: np.ndarray
) -> tuple[Fraction, bool] | None:
    """Radius of a ball of reachable targets, and whether it holds all within the stated accuracy; None without one.

    Parameters
    ----------
    family : Modes
    occupations : (n,) ndarray
        Of a copy of each level, within what is allowed.
    targets, accuracy : (m,) ndarrays
    """
    q, g, c = family.charges, family.degeneracy, family.constant
    m, n = q.shape
    top = 1.0 if family.statistics == "fermions" else np.inf
    if not n or not (occupations.min() >= 0 and occupations.max() <= top):
        return None
    # neither factor is above 1, and rounding is monotone: D is above neither n nor 1 - n
    play = occupations * (1.0 - occupations) if family.statistics == "fermions" else occupations
    rate, tiny = float(gamma(4 * n + 4 * m + 32)), float(2 * n * (m + 8) * TINY)

    def sums(transform: np.ndarray) -> Sums:
        rows, sizes = transform @ q, np.abs(transform) @ np.abs(q)
        overlap, heavy = (rows * (g * play)) @ rows.T, (sizes * (g * play)) @ np.abs(rows).T
        rest = q @ (g * occupations) + (c - targets)
        added = np.abs(transform) @ (np.abs(q) @ (g * occupations) + np.abs(c) + np.abs(targets))
        heights = (rows * rows).sum(axis=0)
        square = Fraction(float(heights.max())) * (1 + gamma(m + 8)) + m * TINY
        return Sums(overlap, rate * heavy + tiny, transform @ rest, rate * added + tiny, 1.0, np.zeros(m), square)

    return ball(sums, accuracy)

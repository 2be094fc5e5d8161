"""The exact minimum of a combination over listed states: rational arithmetic where floats cannot decide.

Floor: diagnose.
"""

from __future__ import annotations

from collections.abc import Iterator
from fractions import Fraction

import numpy as np

from maxent.diagnose.proofs.bounds import UNIT

__all__ = ["EXACT", "heights", "lowest_listed"]

#: States per pass: the charges of one pass stay in the cache.
PASS = 1 << 15
#: Products of fractions that are worth computing; beyond it the bound of the float pass stands.
EXACT = 60_000


def heights(w: np.ndarray, listed: np.ndarray) -> Iterator[tuple[slice, np.ndarray, np.ndarray]]:
    """``w.f_x`` of every state with a rigorous bound of its error, pass by pass: slice, heights, radii.

    The bound is ``gamma_(m+1) |w|.|f_x|`` and the underflow, wide enough for the rounding of its own and of one
    difference of the two.

    Raises
    ------
    OverflowError
    """
    m, n = listed.shape
    unit, tiny = float(2 * (m + 4) * UNIT), (m + 1) * 2.0**-1020
    for i in range(0, n, PASS):
        f = listed[:, i : i + PASS]
        with np.errstate(over="ignore", invalid="ignore"):
            height, radius = w @ f, unit * (np.abs(w) @ np.abs(f)) + tiny
        if not np.isfinite(height).all() or not np.isfinite(radius).all():
            raise OverflowError("the charges overflow")
        yield slice(i, i + PASS), height, radius


def lowest_listed(w: np.ndarray, listed: np.ndarray, *, most: int = EXACT) -> tuple[Fraction, bool]:
    """Lower bound of ``min_x sum_j w_j f_jx`` over listed states, and whether it is that minimum itself.

    One pass in float64 leaves the states that can hold the minimum; those are computed in fractions.

    Parameters
    ----------
    w : (m,) ndarray
    listed : (m, n) ndarray
        n > 0.
    most : int
        Largest number of exact products; where more states compete, the float bound is returned.
    """
    m, n = listed.shape
    if not m:
        return Fraction(0), True
    least, ceiling = np.empty(n), np.inf
    for part, height, radius in heights(w, listed):
        least[part] = height - radius
        ceiling = min(ceiling, float((height + radius).min()))
    rivals = np.flatnonzero(least <= ceiling)
    if len(rivals) * m > most:
        distinct = np.unique(listed[:, rivals], axis=1)
        if distinct.size > most:
            return Fraction(float(least.min())), False
    else:
        distinct = listed[:, rivals]
    exact = [Fraction(x) for x in w.tolist()]
    live = [j for j in range(m) if exact[j]]
    columns = distinct.T.tolist()
    return min(sum((exact[j] * Fraction(c[j]) for j in live), Fraction(0)) for c in columns), True

"""Redundant charges by name: relations ``sum_j c_j Q_j = constant * 1``.  Floor: diagnose."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from maxent.core.whiten import Whitening

__all__ = ["Redundancy", "redundancies"]


@dataclass(frozen=True)
class Redundancy:
    """One relation ``sum_j coefficients[j] Q_j = constant * 1`` between the charges.

    Attributes
    ----------
    coefficients : dict of str to float
        Only charges that take part; the largest coefficient (in units of each charge's spread) is 1.
    constant : float
    """

    coefficients: dict[str, float]
    constant: float


def redundancies(names: Sequence[str], targets: np.ndarray, whitening: Whitening) -> tuple[Redundancy, ...]:
    """Relations spanned by the null combinations, in reduced form: each as few charges as possible.

    Parameters
    ----------
    names : sequence of str
    targets : (m,) ndarray
        The charges of `whitening` are counted from these.
    whitening : Whitening
    """
    if not whitening.null:
        return ()
    rows = np.array([c * whitening.spread for c in whitening.null])
    rows = rows / np.linalg.norm(rows, axis=1)[:, None]
    reduced = _reduced(rows)
    out = []
    for row in reduced:
        row = np.where(np.abs(row) > 1e-9 * np.abs(row).max(), row, 0.0)
        c = row / whitening.spread
        c = c / c[_last_largest(row)]
        coefficients = {n: float(x) for n, x in zip(names, c, strict=True) if x}
        out.append(Redundancy(coefficients, float(c @ (whitening.mean + targets))))
    return tuple(out)


def _reduced(rows: np.ndarray) -> np.ndarray:
    """Reduced echelon form with full pivoting; rows below 1e-8 are dropped."""
    a = rows.copy()
    done: list[np.ndarray] = []
    while len(a):
        i, j = np.unravel_index(_last_largest(a), a.shape)
        if abs(a[i, j]) < 1e-8:
            break
        pivot = a[i] / a[i, j]
        a = np.delete(a, i, axis=0)
        a = a - np.outer(a[:, j], pivot)
        done = [d - d[j] * pivot for d in done] + [pivot]
    return np.array(done)


def _last_largest(a: np.ndarray) -> int:
    """Flat index of the last of the largest entries, ties to rounding included: it must not depend on the machine."""
    size = np.abs(a).ravel()
    return int(np.flatnonzero(size >= (1 - 1e-6) * size.max())[-1])

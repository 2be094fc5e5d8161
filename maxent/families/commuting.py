"""Charges of one block that commute: found cheaply, diagonalised once, numbers from then on.

A few products with random vectors show whether all commutators vanish to rounding; one eigendecomposition of a fixed
generic combination then diagonalises all of them.  Diagonal entries are Rayleigh quotients, whose error is of second
order in what is left off the diagonal.  Floor: families.
"""

from __future__ import annotations

from itertools import combinations
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.core.blocks import eigh
from maxent.core.contract import EPS

__all__ = ["joint_eigenbasis"]

#: Off-diagonal remainder, relative to the charge, up to which Rayleigh quotients are right to rounding.
REMAINDER = 1e-9


def joint_eigenbasis(charges: list[Any]) -> tuple[np.ndarray, np.ndarray] | None:
    """Joint eigenvalues (m, d) and eigenvectors (d, d) of commuting Hermitian matrices, or None if they do not commute.

    Parameters
    ----------
    charges : list of (d, d) ndarray or CSR
    """
    d = charges[0].shape[0]
    shifts = [float(np.real(q.diagonal()).mean()) for q in charges]
    sizes = [_row_norm(q, c) for q, c in zip(charges, shifts, strict=True)]
    live = [j for j, size in enumerate(sizes) if size > 8 * EPS * max(abs(shifts[j]), 1e-300)]
    levels = np.tile(np.array(shifts)[:, None], (1, d))
    if not live:
        return levels, np.eye(d)
    if not all(
        _commute(charges[i], charges[j], sizes[i], sizes[j], shifts[i], shifts[j]) for i, j in combinations(live, 2)
    ):
        return None
    # irrational ratios of the coefficients: no two joint eigenvalues of a lattice model meet by accident
    weights = {j: np.sqrt(2.0 + 3.7 * k) / sizes[j] for k, j in enumerate(live)}
    total = sum(weights[j] * charges[j] for j in live)
    total = total.toarray() if sp.issparse(total) else np.asarray(total)
    if np.iscomplexobj(total) and not total.imag.any():
        total = total.real.copy()
    e, u = eigh(total)
    if len(live) == 1:
        levels[live[0]] = e / weights[live[0]]
        return levels, u
    u = np.ascontiguousarray(u)
    for j in live:
        image = np.asarray(charges[j] @ u)
        levels[j] = _overlaps(u, image)
        image = image - u * levels[j]
        if np.abs(_parts(image)).max() > REMAINDER * (sizes[j] + abs(shifts[j])):
            return None
    return levels, u


def _parts(a: np.ndarray) -> np.ndarray:
    """Real and imaginary parts of an (n, k) array as (n, k, 1 or 2), without a copy."""
    a = np.ascontiguousarray(a)
    return a.view(np.float64).reshape(*a.shape, -1)


def _overlaps(u: np.ndarray, image: np.ndarray) -> np.ndarray:
    """``Re <u_k|image_k>`` of all columns."""
    if np.iscomplexobj(u) != np.iscomplexobj(image):
        return np.real(np.einsum("ik,ik->k", u.conj(), image))
    return np.einsum("ikc,ikc->k", _parts(u), _parts(image))


def _row_norm(q: Any, shift: float) -> float:
    """Largest row sum of ``|q - shift|``, an upper bound of the norm."""
    rows = np.asarray(np.abs(q).sum(axis=1)).ravel()
    diagonal = np.real(q.diagonal())
    return float((rows - np.abs(diagonal) + np.abs(diagonal - shift)).max())


def _commute(a: Any, b: Any, size_a: float, size_b: float, shift_a: float, shift_b: float) -> bool:
    """Whether ``[a, b]`` vanishes to rounding, seen on four random vectors."""
    x = np.random.default_rng(7).standard_normal((a.shape[0], 4))
    ax, bx = a @ x - shift_a * x, b @ x - shift_b * x
    remainder = (a @ bx - shift_a * bx) - (b @ ax - shift_b * ax)
    # entries carry the rounding of the offset that was subtracted
    noise = 64 * EPS * ((size_a + abs(shift_a)) * size_b + (size_b + abs(shift_b)) * size_a)
    return bool(np.abs(remainder).max() <= noise * np.abs(x).max())

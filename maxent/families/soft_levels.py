"""Levels of ``lam.Q`` next to zero, to a relative accuracy: where bosons condense.

A decomposition finds levels to a rounding of the largest one, ``eps |K|``, and a level at ``1/N``, which holds N
bosons, must be known far better.  Its vector is good enough: the Rayleigh quotient errs by the square of the vector's
error.  It is evaluated with products and sums of twice the precision (T. Dekker, Numer. Math. 18, 224 (1971), whose
splitting of products it is, from memory), and the other levels come in to second order.  Floor: families.
"""

from __future__ import annotations

import numpy as np

from maxent.core.contract import EPS
from maxent.families.twofold import two_product, two_sum

__all__ = ["resolved"]

#: Levels below this part of the largest one are worked on.
SOFT = 1e-3

#: Sums of two doubles that do not overlap.
Pair = tuple[np.ndarray, np.ndarray]


def resolved(
    lam: np.ndarray, charges: np.ndarray, levels: np.ndarray, vectors: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Levels and vectors of the blocks ``lam.X`` with small ones resolved.

    Parameters
    ----------
    lam : (m,) ndarray
    charges : (m, B, d, d) ndarray
    levels : (B, d) ndarray
        Ascending, as a decomposition gives them; positive.
    vectors : (B, d, d) ndarray
    """
    soft = (levels[:, 0] < SOFT * levels[:, -1]) & (levels[:, 0] > -16 * EPS * levels[:, -1])
    if not soft.any():
        return levels, vectors
    levels, vectors = levels.copy(), vectors.copy()
    for b in np.flatnonzero(soft):
        k = int(np.sum(levels[b] < SOFT * levels[b, -1]))
        block, known = _added(two_product(lam[:, None, None], _real(charges[:, b]))), vectors[b]
        low, high = known[:, :k], known[:, k:]
        high_part, low_part = _product(block, _columns(low))
        flat = _real(low).T
        both = _product((flat, np.zeros_like(flat)), high_part, low_part)
        inner = both[0] + both[1]
        whole = high_part + low_part
        if np.iscomplexobj(known):
            inner, whole = inner[:k] + 1j * inner[k:], whole[: len(known)] + 1j * whole[len(known) :]
        apart = levels[b, k:, None] - levels[b, None, :k]
        mixing = high.conj().T @ whole
        inner = 0.5 * (inner + inner.conj().T) - mixing.conj().T @ (mixing / apart)
        low = low - high @ (mixing / apart)
        e, turn = np.linalg.eigh(inner)
        levels[b, :k], vectors[b, :, :k] = e, low @ turn
    return levels, vectors


def _real(matrices: np.ndarray) -> np.ndarray:
    """Complex matrices as real ones of twice the size."""
    if not np.iscomplexobj(matrices):
        return matrices
    a, b = matrices.real, matrices.imag
    return np.concatenate([np.concatenate([a, -b], axis=-1), np.concatenate([b, a], axis=-1)], axis=-2)


def _columns(vectors: np.ndarray) -> np.ndarray:
    return np.concatenate([vectors.real, vectors.imag]) if np.iscomplexobj(vectors) else vectors


def _added(terms: Pair) -> Pair:
    """The sum over the first axis, two halves at a time."""
    high, low = terms
    while len(high) > 1:
        half = len(high) // 2
        total, error = two_sum(high[:half], high[half : 2 * half])
        low_ = low[:half] + low[half : 2 * half] + error
        high = np.concatenate([total, high[2 * half :]])
        low = np.concatenate([low_, low[2 * half :]])
    return two_sum(high[0], low[0])


def _product(matrix: Pair, x: np.ndarray, y: np.ndarray | float = 0.0) -> Pair:
    """The matrix times ``x + y``, columns (d, k)."""
    left, rest = matrix[0].T[:, :, None], matrix[1].T[:, :, None]
    high, low = two_product(left, x[:, None, :])
    return _added((high, low + rest * x[:, None, :] + left * np.broadcast_to(y, x.shape)[:, None, :]))

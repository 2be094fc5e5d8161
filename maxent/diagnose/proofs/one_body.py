"""Traces of the negative parts of Hermitian matrices, and their lowest levels, bounded from below.

For ``K = P - S + R`` with ``P, S >= 0`` and every ``0 <= X <= 1``,

    Tr K X >= -Tr S - |R|_1,        hence  Tr min(K, 0) >= -Tr S - |R|_1 .

P and S are made of computed eigenvectors, ``F_+ F_+^H`` and ``F_- F_-^H`` with the columns ``sqrt|x| u``: positive
whatever their roundings.  Likewise ``K - t = F F^H + R`` shows that no level lies below ``t - |R|``.  The remainder R
tells how good the vectors are: of small blocks with its rounding bounded in advance, of large ones computed almost
without error (the idea is that of S. M. Rump's verified eigenvalues, BIT 46, 433 (2006)).  Floor: diagnose.
"""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.diagnose.proofs.bounds import TINY, UNIT, gamma, matrix_norm
from maxent.diagnose.proofs.cholesky import lowest_eigenvalue
from maxent.diagnose.proofs.combine import combined
from maxent.diagnose.proofs.remainder import remainder_trace_norm
from maxent.diagnose.proofs.sums import exact_sum

__all__ = ["SMALL", "Blocks", "block_filled", "block_lowest", "components", "stack_filled", "stack_lowest"]

#: Blocks up to this size are worked on in stacks, their remainders bounded in advance.
SMALL = 8


class Blocks:
    """Charges cut into the connected components of their common pattern.

    Attributes
    ----------
    listed : (m, n) ndarray
        Components of size one.
    stacks : list of (m, B, d, d) ndarrays
        Small components of one size.
    large : list of tuples of m (d, d) ndarrays
    """

    def __init__(self, listed: np.ndarray, stacks: list[np.ndarray], large: list[tuple[np.ndarray, ...]]):
        self.listed, self.stacks, self.large = listed, stacks, large


def components(charges: Sequence[Any]) -> Blocks:
    """The blocks of Hermitian charges (d, d), dense or sparse, with the numbers as they are."""
    rows = [sp.csr_array(q) for q in charges]
    pattern = sp.csr_array(sum((abs(q) for q in rows), sp.csr_array(rows[0].shape)))
    pattern.eliminate_zeros()
    count, labels = sp.csgraph.connected_components(pattern, directed=False)
    sizes = np.bincount(labels, minlength=count)
    members = np.split(np.argsort(labels, kind="stable"), np.cumsum(sizes)[:-1])
    one = np.array([b[0] for b in members if len(b) == 1], int)
    listed = np.array([np.real(q.diagonal())[one] for q in rows]).reshape(len(rows), len(one))
    stacks, large = [], []
    for d in np.unique(sizes[sizes > 1]):
        nodes = np.array([b for b in members if len(b) == d])
        if d <= SMALL:
            stacks.append(np.array([[q[b][:, b].toarray() for b in nodes] for q in rows]))
        else:
            large += [tuple(q[b][:, b].toarray() for q in rows) for b in nodes]
    return Blocks(listed, stacks, large)


def stack_of(w: np.ndarray, charges: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """``w.Q`` of a stack (m, B, d, d), and bounds (B, d, d) of the rounding of each entry."""
    total = np.tensordot(w, charges, axes=(0, 0))
    size = np.tensordot(np.abs(w), np.abs(charges), axes=(0, 0))
    return total, float(gamma(2 * len(w) + 8)) * size + 4 * len(w) * float(TINY)


def stack_filled(blocks: np.ndarray, error: np.ndarray) -> Fraction:
    """Lower bound of ``sum_b Tr min(K_b, 0)`` over blocks (B, d, d), entries off by at most `error` (B, d, d)."""
    e, u = np.linalg.eigh(blocks)
    factor = u * np.sqrt(np.abs(e))[:, None, :]
    off = _off(blocks, error, factor, np.sign(e)[:, None, :])
    held = np.sum(np.abs(factor) ** 2 * (e < 0)[:, None, :], axis=(1, 2))
    d = blocks.shape[1]
    lost = held * (1 + float(gamma(2 * d * d + 8))) + np.sqrt(d) * off
    return -exact_sum(lost * (1 + float(gamma(8)))) if np.isfinite(lost).all() else _overflow()


def stack_lowest(blocks: np.ndarray, error: np.ndarray) -> Fraction:
    """A number that no level of any block lies below; as `stack_filled`."""
    e, u = np.linalg.eigh(blocks)
    low = e[:, 0]
    factor = u * np.sqrt(e - low[:, None])[:, None, :]
    shifted = blocks - low[:, None, None] * np.eye(blocks.shape[1])
    shift = float(2 * UNIT) * (np.abs(low) + np.abs(blocks).max(axis=(1, 2)))
    off = _off(shifted, error + shift[:, None, None] * np.eye(blocks.shape[1]), factor, 1.0)
    bound = low - off
    if not np.isfinite(bound).all():
        _overflow()
    return Fraction(float(np.min(bound - float(4 * UNIT) * (np.abs(low) + off))))


def _off(blocks: np.ndarray, error: np.ndarray, factor: np.ndarray, signs: Any) -> np.ndarray:
    """Upper bounds (B,) of the Frobenius norm of ``K - F diag(s) F^H``."""
    d, size = blocks.shape[1], np.abs(factor)
    rest = np.abs(blocks - (factor * signs) @ factor.conj().transpose(0, 2, 1))
    # real and imaginary parts are real products of length 2 d; the difference loses u of itself
    rounding = 1.4143 * float(gamma(2 * d + 2)) * (size @ size.transpose(0, 2, 1)) + 64 * d * float(TINY)
    whole = (rest + rounding + error) * (1 + float(gamma(4 * d + 16)))
    return np.sqrt(np.sum(whole * whole, axis=(1, 2))) * (1 + float(gamma(d * d + 8)))


def block_filled(w: np.ndarray, charges: Sequence[np.ndarray]) -> Fraction:
    """Lower bound of ``Tr min(w.Q, 0)`` of one large block; charges (d, d)."""
    total, size = combined(w, charges)
    if not np.isfinite(total).all() or not np.isfinite(size).all():
        _overflow()
    d, m = len(total), len(w)
    spread = matrix_norm(size.__matmul__, d, d + m + 6) + d * m * TINY
    e, u = np.linalg.eigh(total)
    factor = u * np.sqrt(np.abs(e))
    held = exact_sum((np.abs(factor[:, e < 0]) ** 2).ravel()) * (1 + gamma(8)) + d * d * TINY
    lost = remainder_trace_norm(w, charges, factor, np.sign(e), spread)
    if lost is None:  # rows too small for exact products
        lost = _crude(total, factor, np.sign(e), w, spread)
    return -held - lost


def _crude(total: np.ndarray, factor: np.ndarray, signs: np.ndarray, w: np.ndarray, spread: Fraction) -> Fraction:
    """Trace norm of the remainder with its rounding bounded in advance."""
    d = len(total)
    off = float(_off(total[None], np.zeros((1, d, d)), factor[None], signs)[0])
    root = Fraction(float(np.sqrt(d))) * (1 + 2 * UNIT)
    return root * (Fraction(off) + root * (gamma(len(w) + 2) * spread + 2 * d * len(w) * TINY))


def block_lowest(w: np.ndarray, charges: Sequence[np.ndarray]) -> Fraction:
    """A number that no level of ``w.Q`` lies below, as large as can be had; one large block."""
    total, size = combined(w, charges)
    if not np.isfinite(total).all() or not np.isfinite(size).all():
        _overflow()
    # asked for next to the lowest level, so that no digit is given away
    near = Fraction(float(np.linalg.eigvalsh(total)[0])) - 16 * UNIT * Fraction(float(np.abs(size).sum(axis=0).max()))
    found = lowest_eigenvalue(w, charges, asked=near)
    if found is None:
        _overflow()
    assert found is not None
    return found[0]


def _overflow() -> Fraction:
    raise OverflowError("the charges overflow, or no decomposition could be completed")

"""Canonical form of real antisymmetric matrices: ``O^T A O`` in blocks [[0, e], [-e, 0]] with e >= 0.

A Householder reduction to tridiagonal form (all zeros on its diagonal) turns the problem into the singular values of a
bidiagonal matrix of half the size: real arithmetic throughout, every level exactly twice, zero levels no exception
(the idea of R. C. Ward, L. J. Gray, ACM Trans. Math. Softw. 4, 278 (1978), from memory).  The sign of ``det O`` is the
parity of the state without quasiparticles.  Floor: families.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
import scipy.linalg as sla

__all__ = ["Canonical", "canonical_form", "canonical_forms"]


class Canonical(NamedTuple):
    """Levels e (n,) >= 0, the orthogonal frame O (2n, 2n), and the sign of its determinant; or stacks of them."""

    levels: np.ndarray
    frame: np.ndarray
    orientation: Any


def canonical_form(matrix: np.ndarray) -> Canonical:
    """Canonical form of a real antisymmetric matrix of even size.

    Parameters
    ----------
    matrix : (2n, 2n) ndarray

    Returns
    -------
    Canonical
    """
    size = len(matrix)
    if not size:
        return Canonical(np.zeros(0), np.zeros((0, 0)), 1)
    reduced, turn = sla.hessenberg(matrix, calc_q=True, check_finite=False)
    beside = np.diag(reduced, 1).copy()
    # rows 0, 2, 4.. couple to columns 1, 3, 5..: B[j, j] = T[2j, 2j+1], B[j, j-1] = T[2j, 2j-1] = -T[2j-1, 2j]
    inner = np.diag(beside[0::2])
    inner[np.arange(1, size // 2), np.arange(size // 2 - 1)] = -beside[1::2]
    left, levels, right = np.linalg.svd(inner)
    frame = np.empty((size, size))
    frame[:, 0::2] = turn[:, 0::2] @ left
    frame[:, 1::2] = turn[:, 1::2] @ right.T
    return Canonical(levels, frame, int(np.sign(np.linalg.slogdet(frame)[0])))


def canonical_forms(stack: np.ndarray) -> Canonical:
    """Canonical forms of a stack of real antisymmetric matrices, all at once.

    Parameters
    ----------
    stack : (B, 2n, 2n) ndarray

    Returns
    -------
    Canonical
        With levels (B, n), frames (B, 2n, 2n) and orientations (B,).
    """
    count, size = stack.shape[:2]
    if count == 1 and size:
        return Canonical(*(np.asarray(x)[None] for x in canonical_form(stack[0])))
    reduced, turn = stack.copy(), np.broadcast_to(np.eye(size), stack.shape).copy()
    for k in range(size - 2):
        # the reflection that turns what stands below the entry beside the diagonal to zero
        mirror = reduced[:, k + 1 :, k].copy()
        mirror[:, 0] += np.copysign(np.linalg.norm(mirror, axis=1), mirror[:, 0])
        length = np.linalg.norm(mirror, axis=1)
        mirror = (mirror / np.where(length > 0, length, 1.0)[:, None])[:, :, None]
        across = mirror.transpose(0, 2, 1)
        reduced[:, k + 1 :] -= 2 * mirror @ (across @ reduced[:, k + 1 :])
        for x in (reduced, turn):
            x[:, :, k + 1 :] -= 2 * (x[:, :, k + 1 :] @ mirror) @ across
    beside = np.diagonal(reduced, 1, axis1=1, axis2=2)
    inner = np.zeros((count, size // 2, size // 2))
    i = np.arange(size // 2)
    inner[:, i, i] = beside[:, 0::2]
    inner[:, i[1:], i[:-1]] = -beside[:, 1::2]
    left, levels, right = np.linalg.svd(inner)
    frame = np.empty_like(stack)
    frame[:, :, 0::2] = turn[:, :, 0::2] @ left
    frame[:, :, 1::2] = turn[:, :, 1::2] @ right.transpose(0, 2, 1)
    return Canonical(levels, frame, np.sign(np.linalg.slogdet(frame)[0]).astype(int))

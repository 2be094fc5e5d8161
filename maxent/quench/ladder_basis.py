"""Pauli strings turned so that a conserved number of particles shows: S+ and S- in place of X and Y.

With a number N = sum_j (1 - Z_j)/2 conserved, the commutator with H keeps how much a string changes it. Products of
(X_j + i e_j Y_j)/sqrt(2), e_j = +1 or -1, have a definite change; their real and imaginary parts are orthonormal
combinations of the 2^k strings with X or Y at the same k places. In this basis the equations fall into as many blocks
as there are changes. Floor: quench. Must not know densities or null spaces.
"""

from __future__ import annotations

import numpy as np
import scipy.sparse as sp

__all__ = ["ladder_basis"]


def ladder_basis(x: np.ndarray, z: np.ndarray) -> sp.csr_array:
    """Orthonormal combinations of strings with a definite change of the number of particles.

    Parameters
    ----------
    x, z : (n,) int64 ndarrays
        Bits of different strings.

    Returns
    -------
    (m, n) scipy.sparse.csr_array
        Its columns are orthonormal; m = n where with a string all that exchange its X and Y are there, else m > n.
    """
    fixed = np.stack([x, z & ~x], axis=1)
    groups, group = np.unique(fixed, axis=0, return_inverse=True)
    sizes = 2 ** np.bitwise_count(groups[:, 0]).astype(np.int64)
    offsets = np.concatenate([[0], np.cumsum(sizes)])
    which = _packed(z, x)
    weights = np.bitwise_count(x)
    rows, columns, values = [], [], []
    for k in np.unique(weights):
        here = np.flatnonzero(weights == k)
        turn = _turn(int(k))[:, which[here]]
        row, column = np.nonzero(turn)
        rows.append(offsets[group.ravel()[here]][column] + row)
        columns.append(here[column])
        values.append(turn[row, column])
    shape = int(offsets[-1]), len(x)
    entries = np.concatenate(values), (np.concatenate(rows), np.concatenate(columns))
    return sp.coo_array(entries, shape=shape).tocsr()


def _turn(k: int) -> np.ndarray:
    """Combinations (row) of the strings of k letters X or Y; bit j of the column says whether letter j is Y."""
    if k == 0:
        return np.ones((1, 1))
    y, e = np.arange(2**k), np.arange(2 ** (k - 1))  # minus all e_j is the conjugate: half of them are enough
    signs = 1 - 2.0 * (np.bitwise_count(e[:, None] & y) & 1)
    amplitudes = np.array([1, 1j, -1, -1j])[np.bitwise_count(y) % 4] * signs / 2 ** ((k - 1) / 2)
    return np.concatenate([amplitudes.real, amplitudes.imag])


def _packed(bits: np.ndarray, mask: np.ndarray) -> np.ndarray:
    """Bits under a mask moved together."""
    out, at = np.zeros_like(bits), np.zeros_like(bits)
    for s in range(int(mask.max(initial=0)).bit_length()):
        here = mask >> s & 1
        out |= (bits >> s & here) << at
        at += here
    return out

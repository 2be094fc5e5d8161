"""Three ways to write one quadratic form of fermions, and what leads from one to the other.

    Q = sum h_ab c+_a c_b + 1/2 sum (D_ab c+_a c+_b + h.c.) = (i/4) sum A_ab g_a g_b + tr(h)/2

with Hermitian h, antisymmetric D, real antisymmetric A and ``g_{2j} = c_j + c+_j``, ``g_{2j+1} = -i (c_j - c+_j)``.
The covariance of a state is ``G_ab = <i g_a g_b>`` for a != b, so that ``<Q> = sum A_ab G_ab / 4 + tr(h)/2``; in terms
of ``N_ab = <c+_a c_b>`` and ``M_ab = <c_a c_b>``.  The transpose matters for complex h:
``<Q> = sum h_ab N_ab = Tr h N^T``.  Floor: families.
"""

from __future__ import annotations

import numpy as np

__all__ = ["correlations", "covariance", "from_majoranas", "to_majoranas"]


def to_majoranas(h: np.ndarray, pairing: np.ndarray | None = None) -> tuple[np.ndarray, float]:
    """The real antisymmetric A (2n, 2n) and the number ``tr(h)/2`` of a form given by h and D."""
    n = len(h)
    d = np.zeros_like(h) if pairing is None else pairing
    a = np.zeros((2 * n, 2 * n))
    a[0::2, 0::2], a[0::2, 1::2] = np.imag(h) + np.imag(d), np.real(h) - np.real(d)
    a[1::2, 0::2], a[1::2, 1::2] = -np.real(h) - np.real(d), np.imag(h) - np.imag(d)
    return a, 0.5 * float(np.trace(h).real)


def from_majoranas(a: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Hopping h and pairing D of a real antisymmetric A; the form differs from theirs by ``tr(h)/2``."""
    s, t, u, v = a[0::2, 0::2], a[0::2, 1::2], a[1::2, 0::2], a[1::2, 1::2]
    return 0.5 * (t - u + 1j * (s + v)), 0.5 * (-(t + u) + 1j * (s - v))


def covariance(number: np.ndarray, pair: np.ndarray | None = None) -> np.ndarray:
    """G (2n, 2n), real antisymmetric, of ``number[a, b] = <c+_a c_b>`` and ``pair[a, b] = <c_a c_b>``."""
    n = len(number)
    m = np.zeros_like(number) if pair is None else pair
    g = np.zeros((2 * n, 2 * n))
    g[0::2, 0::2], g[0::2, 1::2] = -2 * np.imag(m) - 2 * np.imag(number), 2 * np.real(m) + 2 * np.real(number)
    g[1::2, 0::2], g[1::2, 1::2] = 2 * np.real(m) - 2 * np.real(number), 2 * np.imag(m) - 2 * np.imag(number)
    i = np.arange(n)
    g[2 * i, 2 * i + 1] -= 1
    g[2 * i + 1, 2 * i] += 1
    return 0.5 * (g - g.T)


def correlations(g: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """``<c+_a c_b>`` and ``<c_a c_b>``, (n, n) each, of a covariance G."""
    s, t, u, v = g[0::2, 0::2], g[0::2, 1::2], g[1::2, 0::2], g[1::2, 1::2]
    number = 0.25 * (t - u) + 0.5 * np.eye(len(s)) - 0.25j * (s + v)
    return number, 0.25 * (t + u) + 0.25j * (v - s)

"""The remainder ``A - t 1 - L L^H`` of a Cholesky factor, computed almost without error.

L is cut into slices so short that the products of slices are sums of integers below 2^53: a matrix product gives them
exactly, in whatever order it sums (K. Ozaki, T. Ogita, S. Oishi, S. M. Rump, Numer. Algorithms 59, 95 (2012), from
memory).  Nothing is assumed of how L was found.  Floor: diagnose.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from fractions import Fraction
from typing import Any

import numpy as np

from maxent.diagnose.proofs.bounds import TINY, UNIT, gamma, matrix_norm
from maxent.diagnose.proofs.combine import combined_twice
from maxent.families.twofold import two_sum

__all__ = ["remainder_norm", "remainder_trace_norm"]


def remainder_norm(
    w: np.ndarray, charges: Sequence[Any], t: float, factor: np.ndarray, spread: Fraction
) -> Fraction | None:
    """Upper bound of the norm of ``sum_j w_j Q_j - t 1 - L L^H``.

    Parameters
    ----------
    w, charges
        The combination; charges Hermitian and exact.
    t : float
    factor : (d, d) ndarray
        L; any matrix.
    spread : Fraction
        Upper bound of the norm of ``sum_j |w_j| |Q_j|``.

    Returns
    -------
    Fraction or None
        None where a column of L is too small for exact products.

    Notes
    -----
    Real and imaginary parts are real matrices: with ``L = X + i Y`` and W = [X, Y], Z = [Y, -X],

        L L^H = W W^T + i Z W^T .

    A remainder that is rounded to float64 entry by entry loses u of itself, and what is dropped on the way is of second
    order: ``gamma^2`` times the moduli that were added.
    """
    d = len(factor)
    found = _remainder(w, charges, t, factor, np.ones(factor.shape[1]))
    if found is None:
        return None
    off, added, rest = found
    # the exact remainder is Hermitian: the larger of two bounds of the same modulus holds for both entries
    first = matrix_norm(np.maximum(off, off.T).__matmul__, d, d + 8)
    sums = matrix_norm(np.maximum(added, added.T).__matmul__, d, d + 16)
    return first * (1 + 8 * UNIT) + 2 * (_dropped(len(w)) * (sums + spread + abs(Fraction(t))) + rest)


def remainder_trace_norm(
    w: np.ndarray, charges: Sequence[Any], factor: np.ndarray, signs: np.ndarray, spread: Fraction
) -> Fraction | None:
    """Upper bound of the trace norm of ``sum_j w_j Q_j - F diag(s) F^H``, signs s of 1 and -1; as `remainder_norm`.

    The trace norm is at most ``sqrt d`` times the Frobenius norm.
    """
    d = len(factor)
    found = _remainder(w, charges, 0.0, factor, signs)
    if found is None:
        return None
    off, added, rest = found
    length = Fraction(float(np.linalg.norm(off))) * (1 + gamma(d * d + 16))
    sums = Fraction(float(np.linalg.norm(added))) * (1 + gamma(d * d + 32))
    root = Fraction(float(np.sqrt(d))) * (1 + 2 * UNIT)
    # `rest` bounds a Frobenius norm, too; that of sum_j |w_j| |Q_j| is at most sqrt d times its norm
    return root * (length + 2 * _dropped(len(w)) * (sums + root * spread) + 2 * rest)


def _dropped(m: int) -> Fraction:
    """What sums in twice the precision lose, relative to the moduli that were added."""
    return gamma(2 * m + 32) ** 2


def _remainder(
    w: np.ndarray, charges: Sequence[Any], t: float, factor: np.ndarray, signs: np.ndarray
) -> tuple[np.ndarray, np.ndarray, Fraction] | None:
    """Moduli of the entries of ``w.Q - t 1 - F diag(s) F^H``, moduli added up on the way, norm of what is left out."""
    d, m = len(factor), len(w)
    if np.iscomplexobj(factor):
        signs = np.concatenate([signs, signs])
        right = np.concatenate([factor.real, factor.imag], axis=1)
        lefts = [right, np.concatenate([factor.imag, -factor.real], axis=1)]
    else:
        right = factor
        lefts = [right]
    k = right.shape[1]
    bits = (53 - int(np.ceil(np.log2(k + 1)))) // 2
    rows = np.abs(right).max(axis=1)
    if not np.all(rows > 2.0**-400) or rows.max() > 2.0**400:
        return None
    exponent = np.frexp(rows)[1][:, None]
    pieces = _slices(right, exponent, bits)
    shift = np.zeros((d, d))
    np.fill_diagonal(shift, -t)
    off, added = np.zeros((d, d)), np.zeros((d, d))
    for left, (high, low) in zip(lefts, combined_twice(w, charges), strict=True):
        if left is right:
            high, carry = two_sum(high, shift)
            low = low + carry
        for product in _products(_slices(left * signs, exponent, bits), pieces, right):
            added += np.abs(product)
            high, carry = two_sum(high, -product)
            low = low + carry
        off = np.hypot(off, high + low)
    # entries of the last slice lie below 2^(e - 2 bits), of the others below 2^e: the norm of 2^(e_i + e_j) is a trace
    whole = sum((Fraction(4) ** int(e) for e in exponent.ravel()), Fraction(0))
    last = 2 * gamma(2 * k + 8) * k * Fraction(1, 4**bits) * whole
    return off, added, last + 32 * d * (k + m + 8) * TINY


def _slices(a: np.ndarray, exponent: np.ndarray, bits: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Three arrays with sum `a`: in each row multiples of 2^(e - bits), of 2^(e - 2 bits), and the rest."""
    first = np.ldexp(np.rint(np.ldexp(a, bits - exponent)), exponent - bits)
    rest = a - first
    second = np.ldexp(np.rint(np.ldexp(rest, 2 * bits - exponent)), exponent - 2 * bits)
    return first, second, rest - second


def _products(left: Any, pieces: Any, right: np.ndarray) -> Iterator[np.ndarray]:
    """Matrices whose sum is ``left right^T``: four without any rounding, the small last one with."""
    for a in left[:2]:
        for b in pieces[:2]:
            yield a @ b.T
    yield (left[0] + left[1]) @ pieces[2].T + left[2] @ right.T

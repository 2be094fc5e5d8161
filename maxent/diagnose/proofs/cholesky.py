"""Lower bounds of the smallest eigenvalue of a Hermitian combination, by floating-point Cholesky decompositions.

If the decomposition of ``A - t 1`` runs to completion, then ``A - t 1 + E = R^H R >= 0`` with a bounded E, so every
eigenvalue of A is at least ``t - |E|``.  E is bounded in advance by the rounding analysis (S. M. Rump, BIT 46, 433
(2006)), and where that gives too much away, computed: see `maxent.diagnose.proofs.remainder`.  Floor: diagnose.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from fractions import Fraction
from typing import Any

import numpy as np
import scipy.linalg as sla

from maxent.diagnose.proofs.bounds import TINY, UNIT, gamma, matrix_norm
from maxent.diagnose.proofs.combine import combined
from maxent.diagnose.proofs.remainder import remainder_norm

__all__ = ["ADVANCE", "COMPUTED", "lowest_eigenvalue"]

ADVANCE = "Cholesky with a rigorous shift"
COMPUTED = "Cholesky with its exact remainder"

#: Share of the distance to `asked` that the bound in advance must keep; below it the remainder is computed.
KEPT = Fraction(9, 10)


def lowest_eigenvalue(
    w: np.ndarray, charges: Sequence[Any], *, asked: Fraction, enough: Fraction | None = None
) -> tuple[Fraction, str] | None:
    """A number that no eigenvalue of ``sum_j w_j Q_j`` lies below, and how it was found; None where nothing is found.

    Parameters
    ----------
    w : (m,) ndarray
        Scaled such that ``w_j Q_j`` neither overflows nor is tiny.
    charges : sequence of m Hermitian (d, d) ndarrays or CSR
        Exact; only the lower triangles are read.
    asked : Fraction
        The bound is wanted to be above this number; effort is spent on it only where that can succeed.
    enough : Fraction, optional
        A bound above this one need not be improved (another block lies as low).

    Notes
    -----
    With ``L = R^H`` the computed factor, k = d (2 d for complex numbers, whose real and imaginary parts are real inner
    products of twice the length; then a factor sqrt 2), and the modulus taken entry by entry,

        |A - t 1 - L L^H| <= gamma_(k+2) |L| |L|^H  +  gamma_m sum_j |w_j| |Q_j|  +  u |diag(A - t 1)|  +  underflow

    (Higham 2002, theorem 10.3 and section 3.6, from memory): the decomposition, forming the matrix, shifting it.  The
    norm of the first term is at most ``gamma/(1 - gamma) Tr(A - t 1)``, which is the bound of Rump's paper, and at most
    the norm of ``|L| |L|^H``; the smaller one is taken.  Any order of summation and a division by way of the reciprocal
    are covered; a multiplication of matrices by Strassen's recursion would not be.
    """
    with np.errstate(over="ignore", invalid="ignore"):
        total, size = combined(w, charges)
        if not np.isfinite(total).all() or not np.isfinite(size).all():
            return None
        d, m = len(total), len(w)
        spread = matrix_norm(size.__matmul__, d, d + m + 6) + d * m * TINY
        formed = gamma(m) * spread + 2 * d * m * TINY
        low = float(np.linalg.eigvalsh(total)[0])
        in_advance = lambda t: _shifted(total, t, formed)
        unit = float(_decomposition(d, np.iscomplexobj(total)) * spread + formed)
        hope = Fraction(low) - asked
        if enough is not None and Fraction(low) - 8 * Fraction(unit) > enough:
            bound = in_advance(float(enough) + 4 * unit)
            if bound is not None and bound >= enough:
                return bound, ADVANCE
        bound = _largest(in_advance, low, unit)
        if bound is not None and (hope <= 0 or bound - asked >= KEPT * hope):
            return bound, ADVANCE
        unit = float(4 * UNIT * spread)
        better = _largest(lambda t: _computed(total, t, w, charges, spread), low, unit) if unit else None
    if better is not None and (bound is None or better > bound):
        return better, COMPUTED
    return None if bound is None else (bound, ADVANCE)


def _decomposition(d: int, is_complex: bool) -> Fraction:
    """Relative error of a decomposition, entry by entry of ``|L| |L|^H``."""
    return Fraction(141422, 100000) * gamma(2 * d + 2) if is_complex else gamma(d + 2)


def _factor(total: np.ndarray, t: float) -> tuple[np.ndarray, np.ndarray] | None:
    """Lower Cholesky factor of ``total - t 1`` and the diagonal that was decomposed; None where it breaks down."""
    shifted = np.array(total, order="F")
    i = np.arange(len(total))
    shifted[i, i] -= t
    diagonal = np.real(shifted[i, i]).copy()
    try:
        factor = sla.cholesky(shifted, lower=True, overwrite_a=True, check_finite=False)
    except np.linalg.LinAlgError:
        return None
    return (factor, diagonal) if np.isfinite(factor).all() else None


def _shifted(total: np.ndarray, t: float, formed: Fraction) -> Fraction | None:
    """``t - |E|`` with E bounded in advance."""
    found = _factor(total, t)
    if found is None:
        return None
    factor, diagonal = found
    d = len(total)
    size = np.abs(factor)
    rate = _decomposition(d, np.iscomplexobj(total))
    trace = sum((Fraction(x) for x in diagonal.tolist()), Fraction(0))
    product = matrix_norm(lambda x: size @ (size.T @ x), d, 2 * d + 8)
    lost = rate * min(trace / (1 - rate), product)
    shift = UNIT * Fraction(float(np.abs(diagonal).max()))
    underflow = d * (2 * d + 8) * TINY * (1 + Fraction(float(size.max())))
    return Fraction(t) - formed - lost - shift - underflow


def _computed(total: np.ndarray, t: float, w: np.ndarray, charges: Sequence[Any], spread: Fraction) -> Fraction | None:
    """``t - |E|`` with E computed."""
    found = _factor(total, t)
    if found is None:
        return None
    lost = remainder_norm(w, charges, t, found[0], spread)
    return None if lost is None else Fraction(t) - lost


def _largest(bound: Callable[[float], Fraction | None], low: float, unit: float) -> Fraction | None:
    """The best bound from shifts a little below `low`: doubling steps until one succeeds, then bisection."""
    if not np.isfinite(low) or not unit > 0:
        return bound(low) if np.isfinite(low) else None
    best, failed, step = None, low, unit / 8
    for _ in range(10):
        best = bound(low - step)
        if best is not None:
            break
        failed, step = low - step, 2 * step
    held = low - step
    for _ in range(3 if best is not None else 0):
        middle = 0.5 * (failed + held)
        if not held < middle < failed:
            break
        better = bound(middle)
        if better is None:
            failed = middle
            continue
        held = middle
        if best is None or better > best:
            best = better
    return best

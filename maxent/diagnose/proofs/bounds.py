"""Rounding bounds: u, gamma_k, directed conversion, and norms of non-negative matrices.

Scalars are exact fractions, so a bound never needs a bound of its own; arrays are float64 with a stated relative error.
Every bound holds for any order of summation, with or without fused multiply-add (N. J. Higham, Accuracy and Stability
of Numerical Algorithms, 2nd ed., SIAM 2002, section 3.1, from memory), with underflow gradual or flushed to zero.
Floor: diagnose.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

__all__ = ["TINY", "UNIT", "Bound", "above", "below", "gamma", "matrix_norm", "scaled"]

#: Unit roundoff of float64, rounding to nearest.
UNIT = Fraction(1, 2**53)

#: Largest absolute error that one underflow can bring, gradual or flushed to zero.
TINY = Fraction(1, 2**1022)


@dataclass(frozen=True)
class Bound:
    """``x.(Q - q)`` lies nowhere below a number, for a direction x.

    Attributes
    ----------
    lowest : Fraction or None
        That number; None where ``x.(Q - q)`` has no lowest value.
    exact : bool
        Whether it is the minimum itself.
    method : str
        How it was found.
    direction : tuple of Fraction
        x: the direction that was asked about, or one within rounding of it.
    """

    lowest: Fraction | None
    exact: bool
    method: str
    direction: tuple[Fraction, ...]


def gamma(k: int) -> Fraction:
    """``k u/(1 - k u)``: relative error of k successive roundings."""
    return k * UNIT / (1 - k * UNIT)


def below(x: Fraction) -> float:
    """Largest float64 that is not above `x`."""
    try:
        y = float(x)
    except OverflowError:
        return float(np.finfo(float).max) if x > 0 else -np.inf
    return y if Fraction(y) <= x else float(np.nextafter(y, -np.inf))


def above(x: Fraction) -> float:
    """Smallest float64 that is not below `x`."""
    return -below(-x)


def matrix_norm(apply: Callable[[np.ndarray], np.ndarray], d: int, roundings: int) -> Fraction:
    """Upper bound of the operator norm of a symmetric non-negative matrix M, given by its product with a vector.

    For every positive x the norm is at most ``max_i (M x)_i / x_i`` (Collatz 1942, Wielandt 1950); a few power steps
    make x a good one.

    Parameters
    ----------
    apply : callable
        ``x -> M x`` for x >= 0, with `roundings` successive roundings of non-negative numbers.
    d : int
        Dimension of M.
    """
    x, best = np.ones(d), np.inf
    for _ in range(6):
        y = apply(x)
        best = min(best, float((y / x).max(initial=0.0)))
        top = float(y.max(initial=0.0))
        if not np.isfinite(top) or top <= 0.0:
            break
        # entries far below the largest one would only amplify what flows into them
        x = np.maximum(y / top, 1e-6)
    if not np.isfinite(best):
        raise OverflowError("the bound of a norm overflows")
    return Fraction(best) * (1 + gamma(2 * roundings + 8)) + 2**20 * d * (d + roundings) * TINY


def scaled(v: np.ndarray, sizes: np.ndarray) -> tuple[np.ndarray, int] | None:
    """``v 2^-k`` and k such that the largest ``|v_j| sizes_j`` becomes about 1; None if that were not exact.

    Coefficients of charges that vanish become 0.
    """
    live = (v != 0) & (sizes != 0)
    if not np.all(np.isfinite(v)):
        return None
    if not live.any():
        return np.zeros(len(v)), 0
    k = int((np.frexp(v[live])[1] + np.frexp(sizes[live])[1]).max())
    v = np.where(live, v, 0.0)
    w = np.ldexp(v, -k)
    return (w, k) if np.all(np.isfinite(w)) and np.array_equal(np.ldexp(w, k), v) else None

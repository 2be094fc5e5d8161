"""Sums of float64 numbers and of products of two of them, without any rounding.

A float64 is an integer of 53 bits times a power of two.  Integers are cut in two halves and added up by exponent: sums
of up to 2^26 numbers below 2^27 are exact in float64 whatever their order.  Floor: diagnose.
"""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction

import numpy as np

from maxent.families.twofold import two_product

__all__ = ["dot", "exact_dot", "exact_sum"]

#: Numbers per pass; fewer than 2^26, so that the sums of their halves are exact.
PASS = 1 << 20


def dot(x: Sequence[Fraction], y: np.ndarray) -> Fraction:
    """``x.y`` of a few numbers."""
    return sum((a * Fraction(b) for a, b in zip(x, y.tolist(), strict=True) if b), Fraction(0))


def exact_sum(a: np.ndarray) -> Fraction:
    """The sum of all entries.

    Raises
    ------
    OverflowError
        Entries that are not finite.
    """
    total = Fraction(0)
    for i in range(0, len(a), PASS):
        total += _sum(*np.frexp(a[i : i + PASS]))
    return total


def exact_dot(a: np.ndarray, b: np.ndarray) -> Fraction:
    """``a.b``.

    Raises
    ------
    OverflowError
        Entries that are not finite.
    """
    total = Fraction(0)
    for i in range(0, len(a), PASS):
        # mantissas lie in 1/2..1, where a product and its rounding error are exact
        (x, p), (y, q) = np.frexp(a[i : i + PASS]), np.frexp(b[i : i + PASS])
        for part in two_product(x, y):
            fraction, exponent = np.frexp(part)
            total += _sum(fraction, exponent + p + q)
    return total


def _sum(fraction: np.ndarray, exponent: np.ndarray) -> Fraction:
    """The sum of ``fraction 2^exponent``, fractions below 1."""
    if not np.isfinite(fraction).all():
        raise OverflowError("numbers that are not finite have no sum")
    live = fraction != 0
    if not live.any():
        return Fraction(0)
    whole, exponent = np.ldexp(fraction[live], 53).astype(np.int64), exponent[live]
    lowest = int(exponent.min())
    first = whole >> 26
    at = exponent - lowest
    upper, lower = np.bincount(at, first), np.bincount(at, whole - (first << 26))
    total = sum(((int(a) << 26) + int(b)) << e for e, (a, b) in enumerate(zip(upper, lower, strict=True)) if a or b)
    return Fraction(total) * Fraction(2) ** (lowest - 53)

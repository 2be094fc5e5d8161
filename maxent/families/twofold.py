"""Sums and products of float64 numbers together with their rounding errors, which are float64 numbers themselves.

Floor: families.
"""

from __future__ import annotations

from typing import Any

import numpy as np

__all__ = ["two_product", "two_sum"]

#: Splits a float64 into two halves of 26 bits.
SPLITTER = 134217729.0


def two_sum(a: np.ndarray, b: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """``a + b`` and its rounding error, exactly (D. E. Knuth)."""
    s = a + b
    t = s - a
    return s, (a - (s - t)) + (b - t)


def two_product(a: Any, b: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """``a b`` and its rounding error, exactly unless it underflows (T. J. Dekker, G. W. Veltkamp)."""
    p = a * b
    (a1, a2), (b1, b2) = _halves(np.asarray(a)), _halves(b)
    return p, a2 * b2 - (((p - a1 * b1) - a2 * b1) - a1 * b2)


def _halves(a: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Two numbers of 26 bits with sum a."""
    c = SPLITTER * a
    high = c - (c - a)
    return high, a - high

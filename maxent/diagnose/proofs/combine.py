"""Forming ``w.Q`` of a block from the charges as given, with a bound of every rounding.  Floor: diagnose."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.families.twofold import two_product, two_sum

__all__ = ["combined", "combined_twice", "dense"]


def combined(w: np.ndarray, charges: Sequence[Any]) -> tuple[np.ndarray, np.ndarray]:
    """``w.Q`` in float64, and ``sum_j |w_j| |Q_j|``, both (d, d).

    Entry by entry, the first is off by at most ``gamma_m`` times the second, the second by a factor
    ``1 +- gamma_(m+4)`` (the modulus of a complex number costs up to four roundings); underflow adds m times the
    smallest normal number to each.
    """
    total: Any = None
    for weight, q in zip(w, charges, strict=True):
        a = dense(q)
        if total is None:
            total, size = weight * a, abs(weight) * np.abs(a)
        else:
            total = total + weight * a
            size = size + abs(weight) * np.abs(a)
    return total, size


def combined_twice(w: np.ndarray, charges: Sequence[Any]) -> Iterable[tuple[np.ndarray, np.ndarray]]:
    """Real part (and imaginary part of complex charges) of ``w.Q`` as unevaluated sums of two float64 arrays.

    Compensated products and sums (T. Ogita, S. M. Rump, S. Oishi, SIAM J. Sci. Comput. 26, 1955 (2005), from memory):
    high + low is off by at most ``gamma_2m^2 sum_j |w_j| |Q_j|``, and underflow.
    """
    parts = [dense(q) for q in charges]
    views = [np.real] if not any(np.iscomplexobj(a) for a in parts) else [np.real, np.imag]
    for view in views:
        high = low = np.zeros(parts[0].shape)
        for weight, a in zip(w, parts, strict=True):
            product, rest = two_product(weight, np.asarray(view(a)))
            high, carry = two_sum(high, product)
            low = low + (rest + carry)
        yield high, low


def dense(q: Any) -> np.ndarray:
    """The numbers of a charge as an ndarray."""
    return q.toarray() if sp.issparse(q) else np.asarray(q)

"""Averages over the momenta of an infinite chain: ``(1/pi) int_0^pi f(k) dk`` by double-exponential quadrature.

    k = pi / (1 + exp(-pi sinh t)),   dk = pi^2 cosh(t) exp(-pi sinh t) / (1 + exp(-pi sinh t))^2 dt

Nodes crowd at 0 and pi, where gaps close, occupations reach 0 or 1 and their logarithms diverge; such ends cost nothing
(H. Takahasi, M. Mori, Publ. RIMS 9, 721 (1974)).  The nodes and weights are also levels and degeneracies of a family of
independent levels, so that an ensemble of the infinite chain is fitted like any other.  Floor: quench.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache

import numpy as np

__all__ = ["average", "momentum_nodes", "resolving_level"]

#: Beyond this argument of the transformation the weights are below 1e-22.
REACH = 3.5
#: Numbers of intervals that are tried: the first, and the largest before giving up.
FIRST, MOST = 6, 15


@lru_cache(maxsize=16)
def momentum_nodes(level: int = 8) -> tuple[np.ndarray, np.ndarray]:
    """Momenta between 0 and pi and their weights, which sum to 1.

    Parameters
    ----------
    level : int
        There are ``2^level + 1`` nodes; each level contains the nodes of the one before.

    Returns
    -------
    k, weights : (n,) ndarray
        Read-only.
    """
    t = np.linspace(-REACH, REACH, 2**level + 1)
    small = np.exp(-np.pi * np.sinh(t))
    k = np.pi / (1 + small)
    weights = np.cosh(t) / (np.exp(np.pi * np.sinh(t)) + 2 + small)
    weights /= weights.sum()
    k.flags.writeable = weights.flags.writeable = False
    return k, weights


def average(f: Callable[[np.ndarray], np.ndarray], *, accuracy: float = 1e-13) -> np.ndarray:
    """Mean of a function over the momenta between 0 and pi.

    Parameters
    ----------
    f : callable
        Momenta (n,) -> values (..., n).
    accuracy : float
        Largest change between two numbers of nodes, relative to the mean of ``|f|``.

    Returns
    -------
    (...) ndarray

    Raises
    ------
    ValueError
        The means still change at 2^15 nodes; names the change.

    Examples
    --------
    >>> print(f"{average(lambda k: np.sqrt(2 - 2 * np.cos(k))):.12f}")  # 4/pi
    1.273239544735
    """
    return _converged(f, accuracy)[0]


def resolving_level(f: Callable[[np.ndarray], np.ndarray], *, accuracy: float = 1e-13) -> int:
    """Level of `momentum_nodes` at which the mean of a function no longer changes.

    Parameters
    ----------
    f, accuracy
        As for `average`.

    Raises
    ------
    ValueError
        As for `average`.

    Examples
    --------
    >>> [resolving_level(lambda k, a=a: 1 / (a + np.cos(2 * k))) for a in (1.5, 1.0005)]  # sharp at pi/2
    [9, 14]
    """
    return _converged(f, accuracy)[1]


def _converged(f: Callable[[np.ndarray], np.ndarray], accuracy: float) -> tuple[np.ndarray, int]:
    before, change, allowed = None, np.inf, 0.0
    for level in range(FIRST, MOST + 1):
        k, weights = momentum_nodes(level)
        values = np.asarray(f(k))
        found = values @ weights
        if before is not None:
            size = float(np.max(np.abs(values) @ weights, initial=0.0))
            change, allowed = float(np.max(np.abs(found - before), initial=0.0)), accuracy * size
            if change <= allowed:
                return found, level
        before = found
    raise ValueError(
        f"the average over momenta still changes by {change:.1e} at {len(k)} nodes, more than the {allowed:.1e} allowed"
    )

"""Quasiparticles whose number is even or odd: ``ln Z``, occupations and pair probabilities without cancellation.

For levels ``e_k >= 0`` with ``n_k = 1/(1 + e^{e_k})``, ``t_k = 1 - 2 n_k`` and s = 1 (even), -1 (odd), 0 (any):

    Z = prod (1 + e^{-e_k}) (1 + s prod t)/2,     <m_k> = n_k (1 - s prod_{l != k} t_l)/(1 + s prod t),
    P(k filled, l empty) = n_k (1 - n_l) (1 - s prod_{i != k, l} t_i)/(1 + s prod t),  and so on.

``1 - prod t = -expm1(sum ln(1 - 2 n))`` keeps its digits when it is small, and a zero level (t = 0) is no exception.
Floor: families.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

__all__ = ["Filled", "falls", "filled"]

#: Below this the odd sector is its lowest quasiparticle, and products of occupations underflow.
TINY = 1e-290


class Filled(NamedTuple):
    """Quasiparticles of one sector.

    Attributes
    ----------
    log_z : float
        ``ln sum exp(-sum e_k m_k)`` over the allowed fillings.
    mean : (n,) ndarray
    both, one, none : (n, n) ndarrays
        Probabilities that levels k and l are both filled, that k is filled and l empty, and that both are empty;
        diagonals mean nothing.
    """

    log_z: float
    mean: np.ndarray
    both: np.ndarray
    one: np.ndarray
    none: np.ndarray

    @property
    def covariance(self) -> np.ndarray:
        """Covariance of the occupations."""
        joint = self.both.copy()
        np.fill_diagonal(joint, self.mean)
        return joint - np.outer(self.mean, self.mean)


def filled(e: np.ndarray, s: int) -> Filled:
    """Levels `e` (n,) filled with an even (s = 1), an odd (-1) or any number (0) of quasiparticles."""
    small = np.exp(-e)
    n, hole = small / (1 + small), 1 / (1 + small)
    log_z = float(np.log1p(small).sum())
    if s == 0:
        return Filled(log_z, n, np.outer(n, n), np.outer(n, hole), np.outer(hole, hole))
    with np.errstate(divide="ignore"):
        logs = np.log1p(-2 * n)
    total, one_out, two_out = _sums(logs)
    plus, minus = (lambda x: 1 + np.exp(x)), (lambda x: -np.expm1(x))
    same, other = (plus, minus) if s > 0 else (minus, plus)
    weight = same(total)
    if weight < TINY:
        return _one_alone(e)
    return Filled(
        log_z + float(np.log(0.5 * weight)),
        n * other(one_out) / weight,
        np.outer(n, n) * same(two_out) / weight,
        np.outer(n, hole) * other(two_out) / weight,
        np.outer(hole, hole) * same(two_out) / weight,
    )


def falls(d: np.ndarray) -> np.ndarray:
    """``(1 - e^-d)/d``, 1 at d = 0: what becomes of a hop over the distance d >= 0 in the Kubo-Mori covariance."""
    return np.where(d > 1e-8, -np.expm1(-d) / np.where(d > 1e-8, d, 1.0), 1.0 - 0.5 * d)


def _one_alone(e: np.ndarray) -> Filled:
    """Exactly one quasiparticle; three would cost another factor exp(-600)."""
    low = e.min()
    p = np.exp(-(e - low))
    log_z = float(np.log(p.sum()) - low)
    p = p / p.sum()
    empty = np.maximum(1 - p[:, None] - p[None, :], 0.0)
    return Filled(log_z, p, np.zeros((len(e), len(e))), np.repeat(p[:, None], len(e), axis=1), empty)


def _sums(x: np.ndarray) -> tuple[float, np.ndarray, np.ndarray]:
    """Sum of entries <= 0, of all but one, and of all but two; -inf among them is not subtracted."""
    infinite = np.isneginf(x)
    finite, count, many = np.where(infinite, 0.0, x), infinite.astype(int), int(infinite.sum())
    total = float(finite.sum())
    one = np.minimum(total - finite, 0.0)
    two = np.minimum(total - finite[:, None] - finite[None, :], 0.0)
    one = np.where(many > count, -np.inf, one)
    two = np.where(many > count[:, None] + count[None, :], -np.inf, two)
    return -np.inf if many else total, one, two

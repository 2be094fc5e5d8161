"""Occupations of levels that hold a fixed number of particles, by sums of positive terms: no digit is lost anywhere.

Fermions.  With ``Z_k`` the sum over all fillings with k particles and ratios ``r_k = Z_k/Z_{k-1}``, a level of weight
``z = e^-x`` that is added changes them by ``r_k -> r_k (1 + z/r_k)/(1 + z/r_{k-1})``.  Its occupation follows from

    n(k) = (z/r_k) (1 - n(k-1)),        1 - n(k-1) = (r_k/z) n(k),

the first one upwards from k = 0 while n < 1/2, the second one downwards from above: errors shrink either way.  The same
steps in the levels without b give the occupation of a where b is empty, ``p``, and where it is filled, ``q <= p``.

Bosons.  ``Z_k`` is the complete homogeneous symmetric sum, built level by level, and with ``R_k = Z_{N-k}/Z_N``

    <n_a> = sum_{k >= 1} z_a^k R_k,      <n_a><n_b> - <n_a n_b> = sum_{k, l >= 1} z_a^k z_b^l (R_k R_l - R_{k+l})

(P. T. Landsberg, Thermodynamics with Quantum Statistical Illustrations, 1961, from memory).  Occupations of two levels
are anticorrelated for both (``Z_k`` is log-concave: I. Newton, for fermions; G. H. Hardy, J. E. Littlewood, G. Polya,
Inequalities, 1934, from memory), and rows of the covariance add up to zero, so that it is a sum of squares over pairs.
Floor: families.  Knows nothing of charges.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

__all__ = ["Levels", "canonical"]

#: What is left of the first guess in a sum that forgets it.
FORGOTTEN = 1e-20


class Levels(NamedTuple):
    """A fixed number of particles in levels.

    Attributes
    ----------
    excess : float
        ``ln Z_N`` plus the exponent of the lowest state.
    entropy : float
        In nats.
    mean : (n,) ndarray
    one : (n, n) ndarray
        ``<n_a (1 -+ n_b)>``: for fermions the probabilities that the first level is filled and the second one empty.
        The diagonal is zero.
    pull : (n, n) ndarray
        ``<n_a><n_b> - <n_a n_b> >= 0`` of different levels; zero on the diagonal.
    insertion : float
        ``ln Z_N - ln Z_{N+1}``; NaN where no further particle fits in.
    """

    excess: float
    entropy: float
    mean: np.ndarray
    one: np.ndarray
    pull: np.ndarray
    insertion: float

    @property
    def variances(self) -> np.ndarray:
        """Of the occupations, (n,)."""
        return np.asarray(self.pull.sum(axis=1))


def canonical(x: np.ndarray, number: int, sign: int) -> Levels:
    """Levels `x` (n,) with exactly `number` fermions (sign 1) or bosons (-1)."""
    return _fermions(x, number) if sign > 0 else _bosons(x, number)


def _fermions(x: np.ndarray, number: int) -> Levels:
    n = len(x)
    order = np.argsort(x, kind="stable")
    y = x[order]
    c, excess = _ratios(y, number)
    insertion = float(y[number] - c[number]) if number < n else np.nan
    if number in (0, n):
        nothing = np.zeros((n, n))
        return Levels(0.0, 0.0, np.full(n, float(number == n)), nothing, nothing, insertion)
    filled, empty = _tables(y, c)
    mean, hole = filled[number], empty[number]
    one, pull = np.empty((n, n)), np.empty((n, n))
    few = mean < 0.5
    p, q = _conditional(y, c, filled, empty, number, few)
    one[few], pull[few] = hole * p, mean * hole * (p - q)
    # mostly filled levels are those of holes that are mostly empty
    p, q = _conditional(-y[::-1], -c[::-1], empty[::-1, ::-1], filled[::-1, ::-1], n - number, ~few[::-1])
    p, q = p[::-1, ::-1], q[::-1, ::-1]
    one[~few], pull[~few] = hole * (1 - q), mean * hole * (p - q)
    np.fill_diagonal(one, 0.0)
    np.fill_diagonal(pull, 0.0)
    # energies from the middle of the edge: every particle above it and every hole below it counts as positive
    below = np.arange(n) < number
    away = np.where(below, -1.0, 1.0) * (y - 0.5 * (y[number - 1] + y[number]))
    entropy = excess + float(away @ np.where(below, hole, mean))
    back = np.argsort(order)
    table = back[:, None], back[None, :]
    return Levels(excess, entropy, mean[back], one[table], np.maximum(0.5 * (pull + pull.T), 0.0)[table], insertion)


def _ratios(y: np.ndarray, number: int) -> tuple[np.ndarray, float]:
    """``c_k = ln(Z_k/Z_{k-1}) + y_k`` (n,) of ascending levels, and ``ln Z_N`` relative to the lowest filling."""
    c, excess = np.zeros(len(y)), 0.0
    for i in range(1, len(y)):
        grown = np.log1p(np.exp(y[:i] - y[i] - c[:i]))  # of Z_k, k = 1..i, by level i
        if 0 < number <= i:
            excess += float(grown[number - 1])
        c[:i] += grown
        c[1 : i + 1] -= grown
    return c, excess


def _tables(y: np.ndarray, c: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Occupations and vacancies of all levels with k = 0..n particles, (n + 1, n) each."""
    n = len(y)
    filled, empty = np.zeros((n + 1, n)), np.zeros((n + 1, n))
    for k in range(n):
        filled[k + 1] = np.minimum(_bounded(y[k] - y - c[k]) * (1 - filled[k]), 1.0)
    for k in reversed(range(n)):
        empty[k] = np.minimum(_bounded(y - y[k] + c[k]) * (1 - empty[k + 1]), 1.0)
    upper = np.maximum.accumulate(filled > 0.5, axis=0)
    return np.where(upper, 1 - empty, filled), np.where(upper, empty, 1 - filled)


def _conditional(
    y: np.ndarray, c: np.ndarray, filled: np.ndarray, empty: np.ndarray, number: int, few: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Occupations of the levels `few` where each of all levels is empty, and where it is filled; diagonals say nothing.

    Without a level b the ratios are ``r_k h_b(k)/h_b(k-1)`` with the vacancy h, or ``r_{k+1} n_b(k+1)/n_b(k)``.
    """
    own = y[few]
    if not len(own):
        return np.zeros((0, len(y))), np.zeros((0, len(y)))
    # errors shrink at least by the ratio of the next step of the most filled level
    shrink = np.cumsum((y - own.min() - c)[: number - 1][::-1])
    start = max(0, number - 2 - int(np.searchsorted(-shrink, -np.log(FORGOTTEN))))
    p = np.repeat(filled[start, few][:, None], len(y), axis=1)
    q = p.copy()
    for k in range(start, number):
        p, q = q, p  # large arrays are used again
        np.subtract(1, q, out=p)
        split = int(np.sum(empty[k + 1] < 0.5))  # levels b that are mostly filled come first
        p[:, :split] *= _bounded(y[k + 1] - own - c[k + 1])[:, None]
        p[:, :split] *= filled[k + 1, :split] / filled[k + 2, :split]
        p[:, split:] *= _bounded(y[k] - own - c[k])[:, None]
        p[:, split:] *= empty[k, split:] / empty[k + 1, split:]
        np.minimum(p, 1.0, out=p)
    return p, q


def _bounded(exponent: np.ndarray) -> np.ndarray:
    return np.asarray(np.exp(np.minimum(exponent, 700.0)))


def _bosons(x: np.ndarray, number: int) -> Levels:
    n = len(x)
    if not n:
        return Levels(0.0, 0.0, np.zeros(0), np.zeros((0, 0)), np.zeros((0, 0)), np.nan)
    away = x - x.min()
    weights = np.exp(-np.delete(away, int(np.argmin(x))))  # of all others, 1 in the lowest level
    sums, steps = np.ones(n - 1), np.zeros(number + 1)  # Z_k of the first levels over Z_k, and ln(Z_{k+1}/Z_k)
    for count in range(number + 1):
        grown = np.cumsum(weights * sums)
        more = float(grown[-1]) if n > 1 else 0.0
        sums, steps[count] = grown / (1 + more), np.log1p(more)
    insertion = float(x.min() - steps[number])
    # A_k = ln(Z_N/Z_{N-k}), infinite beyond k = N
    loss = np.concatenate([[0.0], np.cumsum(steps[:number][::-1]), np.full(number, np.inf)])
    k = np.arange(number + 1)
    left = np.exp(-loss)
    powers = np.exp(-np.outer(k, away))
    mean = left[1 : number + 1] @ powers[1:]
    one = powers[1:].T @ left[k[1:, None] + k[None, :]] @ powers
    apart = loss[1 : number + 1, None] + loss[None, 1 : number + 1]
    # Z_k is log-concave: R_k R_l >= R_{k+l}
    bend = np.maximum(loss[k[1:, None] + k[None, 1:]] - apart, 0.0)
    pull = powers[1:].T @ (np.exp(-apart) * -np.expm1(-bend)) @ powers[1:]
    np.fill_diagonal(one, 0.0)
    np.fill_diagonal(pull, 0.0)
    excess = float(loss[number])
    return Levels(excess, excess + float(away @ mean), mean, one, 0.5 * (pull + pull.T), insertion)

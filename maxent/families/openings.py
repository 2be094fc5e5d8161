"""Where to open the search for levels that can hold any number of particles: near the minimum, by a primal-dual method.

Newton's method for ``ln Z`` empties a level that is overfilled by a factor 2 per step at best, or fills it by 100, and
all levels have to wait for the worst one.  Here the occupations n are unknowns beside the multipliers: with the curve
``w = ln(1/n - s)`` linearised between the level's own (w, n) and its point on the curve, the slope being the geometric
mean of both curvatures, one step solves weighted least squares

    sum_k g_k h_k q_k (q_k.lam - w(n_k)) = target - sum_k g_k q_k n_k,   h_k = sqrt(v(w_k) v(w(n_k))),  v = n (1 - s n),

the scaling of primal-dual interior-point methods (Nesterov, Todd 1997, from memory).  It works on at most `SAMPLE`
levels: all that hold a share of their own, and of the others some that stand for equal shares.  What comes out is a
point to start from, nothing rests on it.  Floor: families.
"""

from __future__ import annotations

import numpy as np

from maxent.families.reachable import triangle_rows
from maxent.families.statistics import exponents, log_weights, occupations, vacancies

__all__ = ["best_multiple", "opening"]

#: Levels that are looked at together, and how often they are chosen anew where there are more.
SAMPLE, ROUNDS = 512, 6

#: Newton steps with all levels after that: coordinates made near a condensate resolve it.
LAST = 2

#: Primal-dual steps per choice of levels, and the part of the way to the edge of the domain that one takes.
STEPS, STAY = 40, 0.95

#: Relative change of the largest exponents below which Newton's method is at home.
HOME = 0.1

#: Steps that lower the dual by less than this (per particle where there is less than one) end the search.
FLAT = 1e-8

#: Distinguishable particles have no lowest entropy: a dual that has fallen by this factor leads nowhere.
FAR = 1e3

#: Exponents below this part of what adds up to them are not told from zero in other coordinates.
BLUR = 1e-12


def best_multiple(x: np.ndarray, weights: np.ndarray, low: float) -> float:
    """The t > 0 that minimises ``sum w f(t x) - t low`` of bosons; 1/x of the lowest level where there is none."""
    if low >= 0:
        return 1.0 / float(x.min())
    total, mean = float(weights @ x), float(weights @ x) / float(weights.sum())
    # right for equal levels; where next to nothing is asked for, the first guess will do
    t = min(float(np.log1p(total / -low)) / mean, 30.0 / float(x.min()))
    for _ in range(20):
        n, v = occupations(t * x, -1), vacancies(t * x, -1)
        slope, bend = -(weights * x) @ n - low, (weights * x * x) @ (n * v)
        # in 1/t the slope is nearly linear: Newton's step there stays positive
        new = t / min(max(1.0 + slope / max(bend * t, 1e-300), 0.5), 2.0)
        if abs(new - t) <= 1e-3 * t:
            break
        t = new
    return t


def opening(charges: np.ndarray, copies: np.ndarray, target: np.ndarray, lam: np.ndarray, sign: int) -> np.ndarray:
    """Multipliers near those of the target, (m,).

    Parameters
    ----------
    charges : (m, n) ndarray
    copies : (n,) ndarray
    target : (m,) ndarray
    lam : (m,) ndarray
        A point of the domain.
    sign : {-1, 0}
        Bosons or distinguishable particles.
    """
    if charges.shape[1] <= SAMPLE:
        return _nearer(charges, copies, target, lam, sign)
    pressing = np.zeros(charges.shape[1], bool)
    for _ in range(ROUNDS):
        w = lam @ charges
        which, shares = _sample(copies * occupations(w, sign), pressing)
        new = _nearer(charges[:, which], copies[which] * shares, target, lam, sign)
        change = new @ charges - w
        part, crowded = _descent(w, change, copies, float((new - lam) @ target), sign)
        lam = lam + part * (new - lam)
        if part == 1.0 and np.all(np.abs(change[which]) <= HOME * np.minimum(np.abs(w[which]), 1.0)):
            break
        # levels that were not looked at and would have filled: next time each for itself
        pressing = np.zeros(len(w), bool)
        pressing[crowded] = True
    for _ in range(LAST):
        w = lam @ charges
        n = occupations(w, sign)
        rows = triangle_rows(charges, copies * (n * vacancies(w, sign) if sign else n))
        found = _least_squares(rows, np.zeros(rows.shape[1]), charges @ (copies * n) - target)
        if found is None:
            break
        part, _ = _descent(w, found[0] @ charges, copies, float(found[0] @ target), sign)
        lam = lam + part * found[0]
    return lam


def _descent(
    w: np.ndarray, change: np.ndarray, copies: np.ndarray, rises: float, sign: int
) -> tuple[float, np.ndarray]:
    """Part of a step at whose end the dual of all levels hardly rises, and the levels that crowd there."""
    part, weight = 1.0, copies * change
    crowded = np.zeros(0, int)
    allowed = 0.5 * abs(rises - float(weight @ occupations(w, sign)))
    for _ in range(4):
        there = w + part * change
        if sign < 0 and there.min() <= 0:
            crowded = np.argsort(there, kind="stable")[: SAMPLE // 8]
            falling = change < 0
            part = STAY * float(np.min(w[falling] / -change[falling]))
            there = w + part * change
        with np.errstate(over="ignore", invalid="ignore"):
            held = occupations(there, sign)
            if rises - weight @ held <= allowed:
                return part, crowded
        if not len(crowded):
            crowded = np.argsort(weight * held, kind="stable")[: SAMPLE // 8]
        part *= 0.1
    return 0.0, crowded


def _sample(held: np.ndarray, pressing: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Levels that stand for all of them, and how many each stands for, by the particles they hold."""
    alone = pressing | (held >= held.sum() / SAMPLE)
    ladder = np.cumsum(np.where(alone, 0.0, held))
    rungs = (np.arange(SAMPLE) + 0.5) / SAMPLE * ladder[-1]
    chosen, times = np.unique(np.minimum(np.searchsorted(ladder, rungs), len(held) - 1), return_counts=True)
    stands = times * ladder[-1] / SAMPLE / np.maximum(held[chosen], 1e-300)
    singles = np.flatnonzero(alone)
    keep = ~alone[chosen] & np.isfinite(stands)
    return np.concatenate([singles, chosen[keep]]), np.concatenate([np.ones(len(singles)), stands[keep]])


def _nearer(q: np.ndarray, g: np.ndarray, target: np.ndarray, lam: np.ndarray, sign: int) -> np.ndarray:
    """The best point of primal-dual steps from `lam`, until they no longer lower the dual."""
    w, sizes = lam @ q, np.abs(q)
    n = occupations(w, sign)
    best, lowest, rank = lam, np.inf, 0
    floor = 0.0 if sign < 0 else -np.inf
    with np.errstate(all="ignore"):
        for _ in range(STEPS):
            dual = float(g @ log_weights(w, sign) + lam @ target)
            if not dual < np.inf or np.any(np.abs(w) < BLUR * (np.abs(lam) @ sizes)):
                break
            if sign == 0 and lowest == np.inf:
                floor = -FAR * (1.0 + abs(dual) + abs(float(lam @ target)))
            fall = lowest - dual
            best, lowest = (lam, dual) if fall > 0 else (best, lowest)
            if dual < floor or abs(fall) < FLAT * min(1.0, float(g @ n)):
                break
            own = exponents(n, sign)
            variance = n * vacancies(own, sign) if sign else n
            slope = np.sqrt(variance * _variance(w, sign))
            found = _least_squares(q * np.sqrt(g * slope), np.sqrt(g * slope) * own, q @ (g * n) - target)
            if found is None or found[1] < rank:  # numbers run away, or a level drowns all others
                break
            new, rank = found
            change = (new - lam) @ q
            # fuller along the line, emptier along the curve: an occupation stays positive
            more = slope * (own - w - change)
            n = np.where(more > 0, n + more, occupations(own - np.minimum(more, 0.0) / variance, sign))
            n = np.maximum(n, 1e-300)
            nearer = float(np.max(-change / w)) if sign < 0 else 0.0
            part = min(1.0, STAY / nearer) if nearer > 0 else 1.0
            lam = lam + part * (new - lam)
            w = lam @ q
            if not np.all(np.isfinite(w)) or (sign < 0 and not w.min() > 0):
                break
    return best


def _variance(w: np.ndarray, sign: int) -> np.ndarray:
    n = occupations(w, sign)
    return n * vacancies(w, sign) if sign else n


def _least_squares(rows: np.ndarray, wanted: np.ndarray, pull: np.ndarray) -> tuple[np.ndarray, int] | None:
    """The x with ``rows (rows^T x - wanted) = pull`` and the rank; None where numbers have run away."""
    if not (np.all(np.isfinite(rows)) and np.all(np.isfinite(wanted))):
        return None
    size = np.sqrt(np.sum(rows * rows, axis=1))
    size = np.where(size > 0, size, 1.0)
    scaled = rows / size[:, None]
    triangle: np.ndarray = np.linalg.qr(scaled.T)[1]
    axes, roots, _ = np.linalg.svd(triangle.T)
    kept = roots > 1e-14 * roots.max(initial=0.0)
    axes, roots = axes[:, : len(roots)][:, kept], roots[kept]
    return axes @ ((axes.T @ (scaled @ wanted + pull / size)) / roots**2) / size, len(roots)

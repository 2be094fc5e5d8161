"""Exposing directions and interiority for free particles: what happens to levels at zero.

The lowest value ``min <v.Q> = c.v + sum_b w_b Tr min(X_b(v), 0)`` has its kinks where one-body levels pass zero.  A
direction that exposes a face holds k levels at zero, and the occupations R of those are what the targets leave open:

    c_j + Tr_filled X_j + Tr R X_j = 0  at the exposing direction,      0 <= R <= 1  (fermions),  R >= 0  (bosons).

Maximising the lowest value subject to ``P^H X(v) P = 0`` is the polish of core for a cluster whose level is known
(the idea of Overton, SIAM J. Matrix Anal. Appl. 13, 41 (1992), from memory).  Candidates only: all are verified
afterwards.  Floor: families.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from maxent.core.blocks import real_rows
from maxent.core.contract import EPS, Barrier
from maxent.core.polish import SphereStep, ascend, matrix_of, vectors_of

if TYPE_CHECKING:
    from maxent.families.stacks import Stacks

__all__ = ["barrier", "polished_directions"]

#: Directions closer than this lead to the same polished one.
SAME = 1e-9

#: Blocks that may hold levels at zero in one candidate; more would be polished one Python step at a time.
MOST_BLOCKS = 512


def polished_directions(stacks: Stacks, v: np.ndarray, *, most: int = 8) -> Iterator[np.ndarray]:
    """`v` polished for each candidate number of levels at zero, from the rough direction and from better ones."""
    if len(v) < 2:
        return
    queue = [(v, k, 0) for k in _counts(stacks, v)]
    known: list[tuple[int, np.ndarray]] = []
    while queue and most > 0:
        at, k, generation = queue.pop(0)
        if any(k == j and np.abs(at - x).max() < SAME for j, x in known):
            continue
        most -= 1
        known.append((k, at))
        try:
            better = polish(stacks, at, k)
        except np.linalg.LinAlgError:  # a candidate that cannot be refined is no candidate
            continue
        if better is None:
            continue
        if all(np.abs(better - x).max() > 0 for _, x in known):
            yield better
        known.append((k, better))
        if generation < 2:
            queue += [(better, j, generation + 1) for j in _counts(stacks, better) if j != k]


def _counts(stacks: Stacks, v: np.ndarray) -> list[int]:
    """Candidate numbers of levels at zero: below the widest gaps of their logarithms; none at all comes last."""
    size = np.sort(np.abs(stacks.spectrum(v)[0]))
    if not len(size) or not size[-1] > 0:
        return []
    decades = np.log10(np.maximum(size / size[-1], 1e-14))
    gaps = np.diff(decades)
    return [int(i) + 1 for i in np.argsort(-gaps, kind="stable")[:4] if gaps[i] > 0.7] + [0]


@dataclass
class Held:
    """The k levels of ``v.Q`` nearest to zero, held there, and everything the second-order step needs of them.

    Vectors over the held levels have the flat ones first, then each block in the layout of `core.polish.vectors_of`,
    all times the root of the weight.
    """

    stacks: Stacks
    lowest: float
    mean: np.ndarray
    flat: np.ndarray
    places: list[tuple[int, int, np.ndarray]]
    levels: list[np.ndarray]
    vectors: list[np.ndarray]
    turned: list[np.ndarray]
    charges: np.ndarray
    is_held: list[np.ndarray]

    @classmethod
    def find(cls, stacks: Stacks, v: np.ndarray, k: int) -> Held | None:
        from maxent.families.stacks import eigh, rotated

        x = v @ stacks.flat
        pairs = [eigh(b) for b in stacks.exponent(v)]
        every = np.concatenate([x, *[e.ravel() for e, _ in pairs]])
        chosen = np.zeros(len(every), bool)
        chosen[np.argsort(np.abs(every), kind="stable")[:k]] = True
        flat, at, is_held = np.flatnonzero(chosen[: len(x)]), len(x), []
        for e, _ in pairs:
            is_held.append(chosen[at : at + e.size].reshape(e.shape))
            at += e.size
        if sum(int(h.any(axis=1).sum()) for h in is_held) > MOST_BLOCKS:
            return None
        weights = np.asarray(stacks.flat_weights)
        fermions = stacks.sign > 0  # bosons fill nothing: below zero there is no lowest value
        filled = (x < 0) & ~chosen[: len(x)] & fermions
        mean = stacks.constant + stacks.flat @ (weights * filled)
        value = float(v @ stacks.constant + weights @ np.minimum(x, 0) * fermions)
        parts = [stacks.flat[:, flat] * np.sqrt(weights[flat])]
        places, turned = [], []
        for i, ((e, u), w, a, held) in enumerate(zip(pairs, stacks.weights, stacks.dense, is_held, strict=True)):
            y = rotated(a, u)
            turned.append(y)
            mean = mean + w * np.einsum("jbpp,bp->j", y, (e < 0) & ~held & fermions).real
            value += w * float(np.minimum(e, 0).sum()) * fermions
            for b in np.flatnonzero(held.any(axis=1)):
                inside = np.flatnonzero(held[b])
                places.append((i, int(b), inside))
                parts.append(np.sqrt(w) * vectors_of(y[:, b][:, inside][:, :, inside]))
        charges = np.concatenate(parts, axis=1)
        return cls(
            stacks, value, mean, flat, places, [e for e, _ in pairs], [u for _, u in pairs], turned, charges, is_held
        )  # fmt: skip

    def bend(self, filling: Filling, size: float) -> np.ndarray:
        """Second-order change of the filled and held levels through all the others, an (m, m) positive matrix."""
        m = len(self.mean)
        total, fermions = np.zeros((m, m)), self.stacks.sign > 0
        where: dict[int, list[int]] = {}
        for at, (i, _, _) in enumerate(self.places):
            where.setdefault(i, []).append(at)
        for i, (e, w, held) in enumerate(zip(self.levels, self.stacks.weights, self.is_held, strict=True)):
            n, y = np.where((e < 0) & fermions, 1.0, 0.0), self.turned[i]
            e = np.where(held, 0.0, e)
            if i in where:
                y = y.copy()
            for at in where.get(i, ()):
                _, b, inside = self.places[at]
                n[b, inside], basis = np.linalg.eigh(filling.dense[at])
                # the basis of the held levels in which their filling is diagonal
                block = y[:, b]
                block[:, :, inside] = block[:, :, inside] @ basis
                block[:, inside] = basis.conj().T @ block[:, inside]
            gap = e[:, None, :] - e[:, :, None]
            push = n[:, :, None] - n[:, None, :]
            # a level that touches the held ones must not blow up the curvature
            floor = 1e-10 * size
            both = held[:, :, None] & held[:, None, :]
            weight = np.where(both, 0.0, push / np.where(np.abs(gap) > floor, gap, np.where(gap < 0, -floor, floor)))
            rows = real_rows(y * np.sqrt(w * np.maximum(weight, 0.0)))
            total += rows @ rows.T
        return total

    def step(self, v: np.ndarray, filling: Filling) -> tuple[np.ndarray, Filling, bool]:
        """Step from v, the corrected filling, and whether levels and gradient are at rounding."""
        size = max((np.abs(e).max(initial=0.0) for e in self.levels), default=0.0)
        size = max(size, float(np.abs(v @ self.stacks.flat).max(initial=0.0)))
        move = SphereStep(self.charges, self.mean, self.bend(filling, size), v)
        if not move.done and len(self.places) + len(self.flat) and move.spread > 1e-13:
            filling = Filling.clipped(move.corrected(filling.vector(self)), self)
        return move.step, filling, move.done


@dataclass
class Filling:
    """Occupations of the held levels: numbers, and Hermitian matrices in the basis of each block."""

    flat: np.ndarray
    dense: list[np.ndarray]

    @classmethod
    def even(cls, held: Held) -> Filling:
        level = 0.5 if held.stacks.sign > 0 else 1.0
        dense = [level * np.eye(len(inside), dtype=held.vectors[i].dtype) for i, _, inside in held.places]
        return cls(np.full(len(held.flat), level), dense)

    def carried(self, old: Held, new: Held) -> Filling:
        """The same operators in the bases of `new`; a block that was not held starts evenly filled."""
        out = Filling.even(new)
        known = {(i, b): (inside, r) for (i, b, inside), r in zip(old.places, self.dense, strict=True)}
        for at, (i, b, inside) in enumerate(new.places):
            if (i, b) in known:
                before, r = known[i, b]
                overlap = new.vectors[i][b][:, inside].conj().T @ old.vectors[i][b][:, before]
                moved = overlap @ r @ overlap.conj().T
                out.dense[at] = 0.5 * (moved + moved.conj().T)
        place = dict(zip(old.flat.tolist(), self.flat, strict=True))
        out.flat = np.array([place.get(f, x) for f, x in zip(new.flat.tolist(), out.flat, strict=True)])
        return out

    def vector(self, held: Held) -> np.ndarray:
        roots = np.sqrt(np.asarray(held.stacks.flat_weights)[held.flat])
        parts = [roots * self.flat]
        for (i, _, _), r in zip(held.places, self.dense, strict=True):
            parts.append(np.sqrt(held.stacks.weights[i]) * vectors_of(r))
        return np.concatenate(parts)

    @classmethod
    def clipped(cls, vector: np.ndarray, held: Held) -> Filling:
        """The nearest occupations that particles can have, kept away from the ends."""
        top = 1 - 1e-10 if held.stacks.sign > 0 else np.inf
        n = len(held.flat)
        flat = np.clip(vector[:n] / np.sqrt(np.asarray(held.stacks.flat_weights)[held.flat]), 1e-10, top)
        dense, at = [], n
        for i, _, inside in held.places:
            k, is_complex = len(inside), np.iscomplexobj(held.vectors[i])
            length = k * k if is_complex else k * (k + 1) // 2
            r = matrix_of(vector[at : at + length] / np.sqrt(held.stacks.weights[i]), k, is_complex)
            level, basis = np.linalg.eigh(r)
            dense.append((basis * np.clip(level, 1e-10, top)) @ basis.conj().T)
            at += length
        return cls(flat, dense)


def polish(stacks: Stacks, v: np.ndarray, k: int, *, passes: int = 12) -> np.ndarray | None:
    """Maximise the lowest value of ``v.Q`` over unit vectors that hold the k smallest levels at zero."""
    found = ascend(lambda at: Held.find(stacks, at, k), Filling, v, passes)
    if found is None:
        return None
    last, best, value = found
    low = stacks.lowest(last)
    return last if low.value >= value - 8 * low.error or stacks.sign < 0 else best


def barrier(stacks: Stacks, lam: np.ndarray) -> Barrier | None:
    """Barrier of the multipliers with ``lowest(lam) > -1``; None outside.

    For fermions ``lowest`` is a trace of negative parts, ``1 + c.lam - Tr S`` with ``S >= 0``, ``X + S >= 0``, so that

        phi(lam) = min_S  -Tr ln S - Tr ln(X + S) - ln(1 + c.lam - Tr S)

    is self-concordant (partial minimisation of a sum of logarithms; Nesterov, Nemirovskii 1994, from memory).  The
    minimiser is a function of X: ``S = t + r - X/2``, ``r = sqrt(t^2 + X^2/4)``, and t solves one scalar equation.
    For bosons, ``-Tr ln X - ln(1 + c.lam)``.
    """
    from maxent.families.stacks import eigh

    pairs = [eigh(k) for k in stacks.exponent(lam)]
    flat = lam @ stacks.flat
    inside = [np.full(e.size, w) for w, (e, _) in zip(stacks.weights, pairs, strict=True)]
    weights = np.concatenate([np.asarray(stacks.flat_weights), *inside])
    x = np.concatenate([flat, *[e.ravel() for e, _ in pairs]])
    room = 1.0 + float(stacks.constant @ lam)
    rounding = EPS * float(weights @ np.abs(x) + abs(room))
    return (_fermions if stacks.sign > 0 else _bosons)(stacks, flat, pairs, x, weights, room, rounding)


def _fermions(
    stacks: Stacks, flat: np.ndarray, pairs: list, x: np.ndarray, weights: np.ndarray, room: float, rounding: float
) -> Barrier | None:
    total = float(weights.sum())
    if not room + weights @ np.minimum(x, 0) > 0:
        return None
    t = _slack(x, weights, room)
    if not t > 0:
        return None

    def above(x: np.ndarray) -> np.ndarray:
        """The function ``1/(x + s)``, without cancellation for negative x: ``(X + S) S = 2 t y``."""
        r = np.sqrt(t * t + x * x / 4)
        return np.where(x > 0, 1 / (t + r + np.abs(x) / 2), (t + r + np.abs(x) / 2) / (2 * t * (t + r)))

    def share(x: np.ndarray) -> np.ndarray:
        """The function ``1/2 - x/(4 r)``: what a level contributes to the slope of t."""
        r = np.sqrt(t * t + x * x / 4)
        return np.where(x > 0, t * t / (r * (2 * r + np.abs(x))), (2 * r + np.abs(x)) / (4 * r))

    p, b = above(flat) * stacks.flat_weights, share(flat) * stacks.flat_weights
    gradient = -stacks.flat @ p - stacks.constant / t
    line = stacks.constant + stacks.flat @ b
    # -dp/dx = p^2 (1/2 + x/(4 r))
    rows = [stacks.flat * np.sqrt(stacks.flat_weights * above(flat) ** 2 * share(-flat))]
    for w, a, (e, u) in zip(stacks.weights, stacks.dense, pairs, strict=True):
        y = u.conj().transpose(0, 2, 1)[None] @ (a @ u[None])
        diagonal = np.real(np.einsum("jbii->jbi", y))
        gradient = gradient - w * np.einsum("jbi,bi->j", diagonal, above(e))
        line = line + w * np.einsum("jbi,bi->j", diagonal, share(e))
        rows.append(real_rows(y * np.sqrt(w * _fall(e, t, above(e)))))
    r = np.sqrt(t * t + x * x / 4)
    rows.append((line / (t * np.sqrt(1 + total + weights @ (t / r))))[:, None])
    value = -float(weights @ np.log(2 * t * (t + r))) - float(np.log(t))
    return Barrier(gradient, np.concatenate(rows, axis=1), float(t), 1 + 2 * total, value, rounding)


def _fall(x: np.ndarray, t: float, p: np.ndarray) -> np.ndarray:
    """``-p[a, b]`` for ``p = 1/(x/2 + t + r)``: ``p_a p_b (1/2 + (a + b)/(4 (r_a + r_b)))``, without cancellation."""
    r = np.sqrt(t * t + x * x / 4)
    a, b = x[:, :, None], x[:, None, :]
    both = r[:, :, None] + r[:, None, :]
    # 1/2 + s/(4 R) with R >= |s|/2: for negative s through the squares, 4 R^2 - s^2 = (2R - s)(2R + s)
    s = a + b
    lift = 8 * t * t + 2 * (4 * r[:, :, None] * r[:, None, :] - a * b)
    weight = np.where(s > 0, 2 * both + s, lift / (2 * both + np.abs(s))) / (4 * both)
    return p[:, :, None] * p[:, None, :] * weight


def _slack(x: np.ndarray, weights: np.ndarray, room: float) -> float:
    """The root t of ``t (1 + n) + sum w (r(t) + x^-  - |x|/2) = room``: Newton from the right, monotone."""
    total = float(weights.sum())
    left = room + float(weights @ np.minimum(x, 0))  # sum of w min(x, 0), so that what remains is positive
    t = left / (1 + total)
    for _ in range(100):
        r = np.sqrt(t * t + x * x / 4)
        excess = t * t / (r + np.abs(x) / 2)  # r - |x|/2
        value = t * (1 + total) + float(weights @ excess) - left
        slope = 1 + total + float(weights @ (t / r))
        new = t - value / slope
        if not new > 0:
            new = 0.1 * t
        if abs(new - t) <= 4 * EPS * t:
            return new
        t = new
    return t


def _bosons(
    stacks: Stacks, flat: np.ndarray, pairs: list, x: np.ndarray, weights: np.ndarray, room: float, rounding: float
) -> Barrier | None:
    smallest = min(float(x.min(initial=np.inf)), room)
    if not smallest > 0:
        return None
    gradient = -stacks.flat @ (stacks.flat_weights / flat) - stacks.constant / room
    rows = [stacks.flat * np.sqrt(stacks.flat_weights) / flat, (stacks.constant / room)[:, None]]
    for w, a, (e, u) in zip(stacks.weights, stacks.dense, pairs, strict=True):
        root = u / np.sqrt(e)[:, None, :]
        y = root.conj().transpose(0, 2, 1)[None] @ (a @ root[None])
        gradient = gradient - w * np.real(np.einsum("jbii->j", y))
        rows.append(np.sqrt(w) * real_rows(y))
    value = -float(weights @ np.log(x)) - float(np.log(room))
    return Barrier(
        gradient, np.concatenate(rows, axis=1), smallest, 1 + float(weights.sum()), value, rounding
    )  # fmt: skip

"""Exposing directions to rounding: candidates only, every one of them is verified afterwards.

For matrices: second-order maximisation of the k-fold lowest eigenvalue of ``v.A`` over unit vectors v (the idea of
Overton, SIAM J. Matrix Anal. Appl. 13, 41 (1992), from memory).  For lists of states: normals of the affine hull of a
candidate face.  Floor: core.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from maxent.core.contract import EPS, SAFETY, Problem

if TYPE_CHECKING:
    from maxent.core.blocks import Blocks

__all__ = ["face_sizes", "normal_directions", "normals", "polished_directions"]


#: Longest step on the unit sphere.
LONGEST = 0.3


def face_sizes(levels: np.ndarray) -> list[int]:
    """Candidate dimensions of a ground space: the largest ratios between neighbouring levels come first.

    Levels below 1e-14 of the range are rounding; exact degeneracies are never split.
    """
    levels = np.sort(levels)
    levels = levels - levels[0]
    decades = np.log10(np.maximum(levels / max(levels[-1], 1e-300), 1e-14))
    gaps = np.diff(decades)
    return [int(i) + 1 for i in np.argsort(-gaps, kind="stable")[:4] if gaps[i] > 0.7]


# ---------------------------------------------------------------- lists of states


def normals(points: np.ndarray, tol: float) -> np.ndarray:
    """Orthonormal basis of the directions orthogonal to the columns of `points` (m, k).

    Rank is decided on the columns as given; pass differences, since the points themselves would absorb a small
    distance of their hull from the origin.
    """
    from maxent.core.whiten import tall_triangle

    columns = points if points.shape[1] < 4 * points.shape[0] else tall_triangle(points).T
    u, s, _ = np.linalg.svd(columns, full_matrices=True)
    s = np.concatenate([s, np.zeros(u.shape[1] - len(s))])
    return u[:, s <= tol]


def separating(points: np.ndarray) -> np.ndarray | None:
    """A direction y with ``y.a > 0`` for every column a of `points` (m, n), or None: the analytic centre's escape."""
    from maxent.core.blocks import Blocks
    from maxent.core.centre import centre
    from maxent.core.whiten import whiten

    noise = np.full(len(points), EPS * np.abs(points).max(initial=0.0))
    problem = Problem(Blocks(points), noise, np.zeros(len(points)))
    whitening = whiten(problem)
    if not whitening.rank:
        return next((c for c in whitening.contradictions() if (c @ points).min() > 0), None)
    family = problem.family.combine(whitening.transform, np.zeros(whitening.rank))
    assert isinstance(family, Blocks)

    def positive(lam: np.ndarray, step: np.ndarray, count: int) -> np.ndarray | None:
        for x in (lam, step):
            height = x @ family.diagonal
            if height.min() > 1e-9 * np.abs(height).max():
                return x
        return None

    end = centre(family, np.abs(whitening.transform) @ problem.unit, [np.zeros(whitening.rank)], positive, limit=100)
    return None if end.found is None else whitening.transform.T @ end.found


def normal_directions(points: np.ndarray, v: np.ndarray) -> Iterator[np.ndarray]:
    """`v` projected on the normals of candidate faces of the point set `points` (m, n), tightest gap first."""
    height = v @ points
    order = np.argsort(height, kind="stable")
    for k in face_sizes(height):
        on, off = points[:, order[:k]], points[:, order[k:]]
        if not off.shape[1]:
            continue
        tol = SAFETY * EPS * np.abs(on).max() * np.sqrt(k * len(v))
        basis = normals(on - on.mean(axis=1, keepdims=True), tol)
        x = basis @ (basis.T @ v)
        if not np.linalg.norm(x):
            continue
        x = x / np.linalg.norm(x)
        if basis.shape[1] > 1 and (x @ off).min() <= 1e-14 * np.abs(off).max():
            y = separating(basis.T @ off)  # choose the normal inside the cone of the face
            x = x if y is None else basis @ y
        yield x / np.linalg.norm(x)


# ---------------------------------------------------------------- matrices


def vectors_of(matrices: np.ndarray) -> np.ndarray:
    """(..., k, k) Hermitian to (..., k(k+1)/2 or k^2) real with the Frobenius inner product, diagonal first."""
    k = matrices.shape[-1]
    rows, columns = np.triu_indices(k, 1)
    diagonal = np.real(np.einsum("...ii->...i", matrices))
    off = np.sqrt(2) * matrices[..., rows, columns]
    parts = [diagonal, off.real, off.imag] if np.iscomplexobj(matrices) else [diagonal, off]
    return np.concatenate(parts, axis=-1)


def matrix_of(vector: np.ndarray, k: int, is_complex: bool) -> np.ndarray:
    """Inverse of `vectors_of` for one matrix."""
    rows, columns = np.triu_indices(k, 1)
    n = len(rows)
    out = np.zeros((k, k), complex if is_complex else float)
    out[np.arange(k), np.arange(k)] = vector[:k]
    off = vector[k : k + n] / np.sqrt(2)
    if is_complex:
        off = off + 1j * vector[k + n :] / np.sqrt(2)
    out[rows, columns] = off
    out[columns, rows] = off.conj()
    return out


@dataclass
class Cluster:
    """The k lowest levels of ``v.A`` over all blocks, and everything the second-order step needs of them.

    ``on`` are diagonal states, ``below[b]`` the cluster vectors of dense block b.  Vectors over the cluster hold the
    diagonal states first and then each block in the layout of `vectors_of`.
    """

    blocks: Blocks
    k: int
    lowest: float
    mean: float
    top: float
    on: np.ndarray
    below: list[np.ndarray]
    above: list[np.ndarray]
    gaps: list[np.ndarray]
    half: list[np.ndarray]

    @classmethod
    def find(cls, blocks: Blocks, v: np.ndarray, k: int) -> Cluster:
        from maxent.core.blocks import combination, eigh

        flat = v @ blocks.diagonal
        pairs = [eigh(combination(v, a)) for a in blocks.dense]
        every = np.concatenate([flat, *[e for e, _ in pairs]])
        order = np.argsort(every, kind="stable")[:k]
        mean = every[order].mean()
        top = every.max()
        owner = np.repeat(np.arange(-1, len(pairs)), [len(flat), *[len(e) for e, _ in pairs]])
        counts = [int(np.sum(owner[order] == b)) for b in range(len(pairs))]
        below = [u[:, :c] for (_, u), c in zip(pairs, counts, strict=True)]
        above = [u[:, c:] for (_, u), c in zip(pairs, counts, strict=True)]
        # a level that touches the cluster must not blow up the curvature
        gaps = [np.maximum(e[c:] - mean, 1e-10 * (1 + abs(top))) for (e, _), c in zip(pairs, counts, strict=True)]
        half = [a @ p for a, p in zip(blocks.dense, below, strict=True)]
        return cls(blocks, k, every.min(), mean, top, order[owner[order] < 0], below, above, gaps, half)

    def sizes(self) -> list[int]:
        return [p.shape[1] for p in self.below]

    def identity(self) -> np.ndarray:
        """The unit operator of the cluster as a vector."""
        parts = [np.ones(len(self.on))]
        for a, k in zip(self.blocks.dense, self.sizes(), strict=True):
            parts.append(vectors_of(np.eye(k, dtype=a.dtype)))
        return np.concatenate(parts)

    def charges(self) -> np.ndarray:
        """Charges compressed to the cluster, (r, p)."""
        parts = [self.blocks.diagonal[:, self.on]]
        parts += [vectors_of(p.conj().T @ h) for p, h in zip(self.below, self.half, strict=True)]
        return np.concatenate(parts, axis=1)

    def curvature(self, rho: State) -> np.ndarray:
        """``G = 2 Re Tr rho P^H A R (E_R - mean)^-1 R^H A P``, the bend of the cluster by the other levels."""
        r = self.blocks.diagonal.shape[0]
        total = np.zeros((r, r))
        for h, above, gap, block in zip(self.half, self.above, self.gaps, rho.dense, strict=True):
            if not block.shape[0] or not above.shape[1]:
                continue
            weight, basis = np.linalg.eigh(block)
            root = np.sqrt(np.maximum(weight, 0))[:, None] * basis.conj().T
            z = (root @ (h.conj().transpose(0, 2, 1) @ above) / np.sqrt(gap)).reshape(r, -1)
            total += 2 * np.real(z @ z.conj().T)
        return total

    def step(self, v: np.ndarray, rho: State) -> tuple[np.ndarray, State, bool]:
        """Step from v, the corrected state, and whether spread and gradient are at rounding."""
        charges, one = self.charges(), self.identity()
        mean = charges @ one / self.k
        move = SphereStep(charges - np.outer(mean, one), mean, self.curvature(rho), v)
        if not move.done and self.k > 1 and move.spread > 1e-13:
            # values of the traceless charges in the corrected state
            rho = State.clipped(move.corrected(rho.vector() - one / self.k) + one / self.k, self)
        return move.step, rho, move.done


@dataclass
class State:
    """A state on a cluster: weights of diagonal states, density blocks in the cluster bases."""

    flat: np.ndarray
    dense: list[np.ndarray]

    @classmethod
    def even(cls, cluster: Cluster) -> State:
        dense = [
            np.eye(k, dtype=a.dtype) / cluster.k for a, k in zip(cluster.blocks.dense, cluster.sizes(), strict=True)
        ]
        return cls(np.full(len(cluster.on), 1 / cluster.k), dense)

    def carried(self, old: Cluster, new: Cluster) -> State:
        """The same operator in the basis of a new cluster: eigenvectors of near-degenerate levels are arbitrary."""
        weights = np.zeros(old.blocks.diagonal.shape[1])
        weights[old.on] = self.flat
        dense = []
        for p, q, block in zip(old.below, new.below, self.dense, strict=True):
            overlap = q.conj().T @ p
            moved = overlap @ block @ overlap.conj().T
            dense.append(0.5 * (moved + moved.conj().T))
        flat = weights[new.on]
        trace = flat.sum() + sum(np.trace(b).real for b in dense)
        if not trace > 0.25:  # the cluster has changed: start the state afresh
            return State.even(new)
        return State(flat / trace, [b / trace for b in dense])

    def vector(self) -> np.ndarray:
        return np.concatenate([self.flat, *[vectors_of(b) for b in self.dense]])

    @classmethod
    def clipped(cls, vector: np.ndarray, cluster: Cluster) -> State:
        """Nearest thing to a state: eigenvalues floored, trace one."""
        n = len(cluster.on)
        flat, at = np.maximum(vector[:n], 1e-10), n
        dense = []
        for a, k in zip(cluster.blocks.dense, cluster.sizes(), strict=True):
            length = k * k if np.iscomplexobj(a) else k * (k + 1) // 2
            weight, basis = np.linalg.eigh(matrix_of(vector[at : at + length], k, np.iscomplexobj(a)))
            dense.append((basis * np.maximum(weight, 1e-10)) @ basis.conj().T)
            at += length
        trace = flat.sum() + sum(np.trace(b).real for b in dense)
        return cls(flat / trace, [b / trace for b in dense])


def polished_directions(blocks: Blocks, v: np.ndarray, *, most: int = 8) -> Iterator[np.ndarray]:
    """`v` polished for each candidate dimension of its ground space.

    A rough direction may show too few levels: dimensions that only the polished direction reveals are polished again
    from there.
    """
    if len(v) < 2:
        return
    queue = [(v, k, 0) for k in _dimensions(blocks, v)]
    tried: set[tuple[int, int]] = set()
    while queue and len(tried) < most:
        at, k, generation = queue.pop(0)
        if (k, generation) in tried:
            continue
        tried.add((k, generation))
        try:
            better = polish(blocks, at, k)
        except np.linalg.LinAlgError:  # a candidate that cannot be refined is no candidate
            continue
        yield better
        if generation < 2:
            queue += [(better, j, generation + 1) for j in _dimensions(blocks, better) if j != k]


def _dimensions(blocks: Blocks, v: np.ndarray) -> list[int]:
    """Candidate dimensions of the ground space of ``v.Q``, the whole space excluded."""
    flat, levels = blocks.spectra(v)
    every = np.concatenate([flat, *levels])
    return [k for k in face_sizes(every) if k < len(every)]


def polish(blocks: Blocks, v: np.ndarray, k: int, *, passes: int = 12) -> np.ndarray:
    """Maximise theta subject to ``P^H (v.A) P = theta 1``, ``|v| = 1``, P the k lowest levels; quadratic convergence.

    All linear algebra is r x r whatever k is.  The spread of the cluster is penalised with weight 1/omega,
    omega ~ (current spread)^2; theta itself is never set to zero, which would call a target just outside a boundary.
    """
    found = ascend(lambda at: Cluster.find(blocks, at, k), State, v, passes)
    assert found is not None
    last, best, value = found
    # the last direction is the sharpest one; lowest levels that agree to rounding do not tell them apart
    low = blocks.lowest(last)
    return last if low.value >= value - 1e-15 * abs(low.highest) else best


def ascend(
    find: Callable[[np.ndarray], Any], content: Any, v: np.ndarray, passes: int
) -> tuple[np.ndarray, np.ndarray, float] | None:
    """Second-order steps on the unit sphere towards the direction that a set of levels is pinned in.

    Parameters
    ----------
    find : callable
        Direction -> the levels held there (`lowest`, `step(v, content)`), or None where they cannot be told.
    content : type
        What the levels hold: ``even(levels)`` to begin with, ``carried(old, new)`` from there.
    v : (m,) ndarray
    passes : int

    Returns
    -------
    last, best : (m,) ndarrays
        Last direction, and the one of largest lowest value, which is the third entry.
    """
    best, value, last = v, -np.inf, float("inf")
    held: Any = None
    filled: Any = None
    for _ in range(passes):
        before, held = held, find(v)
        if held is None:
            return None
        filled = content.even(held) if before is None else filled.carried(before, held)
        if held.lowest > value:
            best, value = v, held.lowest
        step, filled, done = held.step(v, filled)
        if done:
            break
        length = float(np.linalg.norm(step))
        if length > LONGEST:
            step = step * (LONGEST / length)
        v = (v + step) / np.linalg.norm(v + step)
        if length < 2e-16 or 0.5 * last < length < 1e-12:
            break
        last = length
    return v, best, float(value)


class SphereStep:
    """One second-order step in the complement of a unit vector v.

    Parameters
    ----------
    charges : (m, p) ndarray
        What each charge does to the held levels; `v` shall bring ``charges.T @ v`` to zero.
    mean : (m,) ndarray
        Slope of the lowest value.
    bend : (m, m) ndarray
        Curvature of the lowest value, positive.
    v : (m,) ndarray
    """

    def __init__(self, charges: np.ndarray, mean: np.ndarray, bend: np.ndarray, v: np.ndarray):
        self.charges, self.mean, self.bend, self.v = charges, mean, bend, v
        # the unit sphere bends as well; on a boundary theta is zero, outside it is the distance
        self.kappa = max(float(mean @ v), 0.0)
        complement = complement_of(v)
        self.left, size, right = _thin_svd(charges.T @ complement)
        self.size = size = np.where(size > 1e-12, size, 0.0)
        residual = charges.T @ v
        self.spread = float(np.linalg.norm(residual))
        omega = max(self.spread**2, 1e-24)
        self.axes = axes = complement @ right.T
        hessian = axes.T @ bend @ axes + np.diag(size**2 / omega) + self.kappa * np.eye(len(v) - 1)
        pull = axes.T @ mean - size * (self.left.T @ residual) / omega
        gradient = np.linalg.norm((axes.T @ mean)[size < 1e-3])
        self.done = bool(self.spread < 4e-14 and gradient < 4e-14)  # both at rounding
        if self.done:
            self.step = np.zeros_like(v)
            return
        hessian = hessian + 1e-9 * np.eye(len(pull))  # directions without curvature do not move theta: leave them alone
        d = 1 / np.sqrt(np.maximum(np.diag(hessian), 1e-9))
        self.step = axes @ (d * np.linalg.lstsq(d[:, None] * hessian * d, d * pull, rcond=1e-13)[0])

    def corrected(self, content: np.ndarray) -> np.ndarray:
        """What the held levels have to hold at the new direction, from what they hold (p,)."""
        shown = self.step * min(1.0, LONGEST / max(float(np.linalg.norm(self.step)), 1e-300))
        wanted = self.bend @ shown + self.kappa * shown + (self.mean @ self.v) * self.v - self.mean
        strong = self.size > 1e-2 * self.size.max(initial=0.0)
        missing = (self.axes.T @ (wanted - self.charges @ content))[strong]
        return content + self.left[:, strong] @ (missing / self.size[strong])


def _thin_svd(tall: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """SVD of a (p, r) array with exactly r singular values and right vectors, p of any size."""
    p, r = tall.shape
    if p > r:
        q, triangle = np.linalg.qr(tall)
        u, s, right = np.linalg.svd(triangle)
        return q @ u, s, right
    u, s, right = np.linalg.svd(tall, full_matrices=True)
    s = np.concatenate([s, np.zeros(r - len(s))])
    return np.concatenate([u, np.zeros((p, max(0, r - p)))], axis=1)[:, :r], s, right


def complement_of(v: Any) -> np.ndarray:
    """Orthonormal basis (m, m-1) of the complement of a unit vector."""
    return np.linalg.svd(np.asarray(v)[None, :], full_matrices=True)[2][1:].T

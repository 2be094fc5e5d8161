"""Problems with relaxed targets whose truth is put in by construction; nothing here calls the solver.

Solved: a state exp(-lam.Q)/Z is written down first, then targets are laid around its values so that every multiplier
has the sign of its edge, and everything without a multiplier lies strictly inside.  The dual is convex and the charges
are independent, so this is the only answer.  Boundary: a combination v of some charges is zero on a few states and
positive on all others; the targets let v.Q reach zero and no more, and the rest is laid around a state on the face.
Outside and close to the boundary: the same with the targets moved along v.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from maxent import AtLeast, AtMost, Exact, Measured, Within
from maxent.families import Matrices, Microstates
from tests.corpus import pieces

KINDS = ("exact", "within", "at most", "at least", "measured")


@dataclass(frozen=True)
class Case:
    """Charges (m, n) or (m, d, d), targets, and the truth."""

    charges: np.ndarray
    log_weights: np.ndarray | None
    targets: tuple
    verdict: str
    multipliers: np.ndarray | None = None
    values: np.ndarray | None = None
    dimension: int | None = None
    distance: float | None = None
    direction: np.ndarray | None = None

    @property
    def names(self):
        return tuple(f"q{j}" for j in range(len(self.charges)))

    @property
    def asked(self):
        return dict(zip(self.names, self.targets, strict=True))

    @property
    def centres(self):
        return np.array([t if isinstance(t, float) else t.value for t in self.targets])

    @property
    def sizes(self):
        """Largest level of each charge, and its target."""
        if self.charges.ndim == 2:
            return np.abs(self.charges).max(axis=1) + np.abs(self.centres)
        return np.array([np.linalg.norm(q, 2) for q in self.charges]) + np.abs(self.centres)

    def family(self):
        named = dict(zip(self.names, self.charges, strict=True))
        return Microstates(named, log_weights=self.log_weights) if self.charges.ndim == 2 else Matrices(named)

    def state(self, lam):
        """The state at multipliers lam, from the raw arrays."""
        exponent = np.tensordot(lam, self.charges, axes=1)
        return pieces.gibbs(exponent if self.log_weights is None else exponent - self.log_weights)[0]

    def scaled(self, factors) -> Case:
        """The same problem with every charge in another unit."""
        shape = (-1,) + (1,) * (self.charges.ndim - 1)
        named = {"multipliers": 1 / factors, "values": factors}
        moved = {k: None if getattr(self, k) is None else getattr(self, k) * f for k, f in named.items()}
        targets = tuple(_scaled(t, f) for t, f in zip(self.targets, factors, strict=True))
        return replace(self, charges=self.charges * factors.reshape(shape), targets=targets, direction=None,
                       distance=None, **moved)  # fmt: skip


def _scaled(target, f):
    if isinstance(target, float):
        return target * f
    if isinstance(target, Within):
        return Within(target.value * f, target.tolerance * f)
    if isinstance(target, Measured):
        return Measured(target.value * f, target.sigma * f)
    return type(target)(target.value * f)


def interval(target):
    """Ends of the residual that a target allows, from its meaning."""
    if isinstance(target, Within):
        return -target.tolerance, target.tolerance
    return {AtMost: (-np.inf, 0.0), AtLeast: (0.0, np.inf), Measured: (-np.inf, np.inf)}.get(type(target), (0.0, 0.0))


def charges(rng, sort: str, m: int, size: int):
    """Independent charges of spread about one, with offsets, and log weights or None."""
    weights = rng.uniform(-1, 1, size) * 6 if sort == "weights" else None
    if sort in ("listed", "weights"):
        return rng.standard_normal((m, size)) + 0.5 * rng.standard_normal((m, 1)), weights
    stack = np.array([pieces.hermitian(rng, size, is_complex=sort == "complex") for _ in range(m)])
    if sort == "commuting":
        frame = pieces.unitary(rng, size)
        stack = pieces.rotate([np.diag(x) for x in rng.standard_normal((m, size))], frame)
    return stack + 0.5 * rng.standard_normal(m)[:, None, None] * np.eye(size), None


def target(rng, kind: str, value: float, lam: float, tolerance: float):
    """A target of this kind to which a state with this value and multiplier is the answer."""
    side = np.sign(lam)
    if kind == "exact":
        return float(value) if rng.random() < 0.5 else Exact(float(value))
    if kind == "within":
        inside = tolerance * rng.uniform(-0.95, 0.95)
        return Within(float(value - side * tolerance if side else value + inside), float(tolerance))
    if kind == "at most":
        return AtMost(float(value if side else value + tolerance * rng.uniform(0.05, 1)))
    if kind == "at least":
        return AtLeast(float(value if side else value - tolerance * rng.uniform(0.05, 1)))
    sigma = tolerance
    return Measured(float(value - sigma**2 * lam), float(sigma))


def multipliers(rng, kinds, width: float):
    """Multipliers that fit the kinds; about half of those that may vanish do."""
    lam = rng.standard_normal(len(kinds)) * width / np.sqrt(len(kinds))
    for j, kind in enumerate(kinds):
        if kind in ("within", "at most", "at least") and rng.random() < 0.5:
            lam[j] = 0.0
        elif kind in ("at most", "at least"):
            lam[j] = abs(lam[j]) * (1 if kind == "at most" else -1)
    return lam


SORTS = ("listed", "real", "complex", "commuting", "weights")


def solvable(rng, index: int) -> Case:
    """Targets laid around a state of full support."""
    sort = SORTS[index % len(SORTS)]
    size = int(rng.integers(3, 13))
    m = int(rng.integers(1, min(7, size)))
    kinds = [KINDS[int(k)] for k in rng.integers(0, 5, m)]
    if index % 4 == 1:
        kinds = [("within", "at most", "at least")[int(k)] for k in rng.integers(0, 3, m)]
    stack, weights = charges(rng, sort, m, size)
    lam = multipliers(rng, kinds, rng.uniform(0.5, 6))
    case = Case(stack, weights, (0.0,) * m, "solved", lam)
    values = pieces.values_in(stack, case.state(lam))
    widths = 10.0 ** rng.uniform(-4, 0.3, m)
    targets = tuple(target(rng, k, x, y, w) for k, x, y, w in zip(kinds, values, lam, widths, strict=True))
    return replace(case, targets=targets, values=values)


def _touching(rng, index: int):
    """A face: charges of which v.Q is zero on k states and positive on the others; a state on it, multipliers."""
    sort = SORTS[index % 4]
    size = int(rng.integers(4, 13))
    k = int(rng.integers(1, size - 1))
    m = int(rng.integers(1, min(5, size - 1) + 1))
    stack, _ = charges(rng, sort, m, size)
    involved = np.zeros(m, bool)
    involved[rng.permutation(m)[: int(rng.integers(1, m + 1))]] = True
    v = np.where(involved, rng.choice([-1, 1], m) * rng.uniform(0.3, 1, m), 0.0)
    v = v / np.linalg.norm(v)
    j = int(np.flatnonzero(involved)[0])
    levels = np.concatenate([np.zeros(k), rng.uniform(0.3, 2, size - k)])
    if stack.ndim == 2:
        order = rng.permutation(size)
        height, ground = levels[order], np.flatnonzero(order < k)
    else:
        frame = pieces.unitary(rng, size, is_complex=sort == "complex")
        if sort == "commuting":
            frame = np.linalg.eigh(np.tensordot(rng.standard_normal(m), stack, axes=1))[1]
        height, ground = pieces.tidy((frame * levels) @ frame.conj().T), frame[:, :k]
    stack[j] = 0
    stack[j] = (height - np.tensordot(v, stack, axes=1)) / v[j]
    offset = rng.standard_normal(m) * 0.5
    unit = 1.0 if stack.ndim == 2 else np.eye(size)
    stack = stack + offset.reshape((-1,) + (1,) * (stack.ndim - 1)) * unit
    on_face = stack[:, ground] if stack.ndim == 2 else pieces.tidy(ground.conj().T @ stack @ ground)
    return sort, stack, v, on_face, k


def boundary(rng, index: int, *, move: float = 0.0) -> Case:
    """Targets that touch the reachable values along v.

    With `move` > 0 they are laid around a point that is moved by this share towards the middle of the reachable
    values, with `move` < 0 they are moved out along v.
    """
    _, stack, v, on_face, k = _touching(rng, index)
    m = len(v)
    fits = {1: ("exact", "within", "at most"), -1: ("exact", "within", "at least"), 0: KINDS}
    kinds = [str(rng.choice(fits[int(np.sign(x))])) for x in v]
    if all(kind == "exact" for kind in kinds):
        j = int(np.argmax(np.abs(v)))
        kinds[j] = "within"
    lam = multipliers(rng, kinds, rng.uniform(0.3, 2))
    if k == 1:
        lam[v == 0] = 0.0  # one state: no multiplier has anything to do
    state, _ = pieces.gibbs(np.tensordot(lam, on_face, axes=1))
    values = pieces.values_in(on_face, state)
    widths = 10.0 ** rng.uniform(-3, 0.3, m)
    middle = pieces.values_in(stack, pieces.gibbs(0 * stack[0])[0])
    point = values + move * (middle - values if move > 0 else v)
    targets = []
    for j in range(m):
        side = lam[j] if v[j] == 0 else np.sign(v[j])
        kind = kinds[j]
        if v[j] != 0 and kind == "within":
            side = np.sign(v[j])
        targets.append(target(rng, kind, point[j], side, widths[j]))
    verdict = "boundary" if move == 0 else "solved" if move > 0 else "infeasible"
    known = values if move == 0 else None
    return Case(stack, None, tuple(targets), verdict, values=known, dimension=k if move == 0 else None,
                distance=-move if move < 0 else None, direction=v)  # fmt: skip


def contradictory(rng, index: int) -> Case:
    """A charge and its multiple, asked for intervals that do not meet (inconsistent), or just do (solved)."""
    sort = SORTS[index % len(SORTS)]
    size = int(rng.integers(3, 9))
    stack, weights = charges(rng, sort, 2, size)
    factor = float(rng.uniform(0.5, 2))
    stack = np.array([stack[0], stack[1], factor * stack[0]])
    lam = np.array([0.0, 0.3, 0.0])
    values = pieces.values_in(stack, Case(stack, weights, (0.0,) * 3, "").state(lam))
    gap = float(10.0 ** rng.uniform(-9, -1))
    apart = index % 2 == 0
    width = float(rng.uniform(0.05, 0.5))
    low = Within(float(values[0] - width), width) if index % 3 else AtMost(float(values[0]))
    shift = gap if apart else -2 * gap
    high = Within(float(values[2] + shift * factor + width), width) if index % 5 else AtLeast(
        float(values[2] + shift * factor)
    )  # fmt: skip
    return Case(stack, weights, (low, float(values[1]), high), "inconsistent" if apart else "solved")

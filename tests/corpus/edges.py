"""Points on the edge of the reachable set, and what lies a known step inside or outside of them.

An `Edge` is a point q0 with a unit vector v such that v.Q - v.q0 >= 0 in every state, reached by states on
a known subspace.  Three problems follow from each:

- *boundary*: targets q0.  All states with these values live on the ground space of v.Q; the generator names
  one with full support on the subspace of `face_dimension` states that no state with these values can
  leave.
- *inside*: targets (1-t) q0 + t centre, centre = means of the fully mixed state.  They are the means of a
  full-rank state, hence interior; their distance to the edge is at most t v.(centre - q0), the stated
  depth.
- *outside*: targets q0 - s v.  v is a normal at q0, so q0 is the nearest reachable point: the distance is s
  exactly.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import scipy.linalg
import scipy.sparse

from tests.corpus import pieces
from tests.corpus.problem import Draft


@dataclass(frozen=True)
class Edge:
    """A point of the edge: charges (m, n) or (m, d, d), inward normal v, the point and the face that holds
    it."""

    charges: np.ndarray
    normal: np.ndarray
    point: np.ndarray
    face_dimension: int
    entropy: float | None
    note: str
    directions: int = 1
    log_weights: np.ndarray | None = None
    log_prior: np.ndarray | None = None
    is_sparse: bool = False

    @property
    def centre(self) -> np.ndarray:
        """Means when every live state counts the same."""
        if self.charges.ndim == 3:
            return np.trace(self.charges, axis1=1, axis2=2).real / self.charges.shape[1]
        live = (
            np.ones(self.charges.shape[1], bool)
            if self.log_weights is None
            else np.isfinite(self.log_weights)
        )
        return self.charges[:, live].mean(1)

    def turned(self, rng) -> Edge:
        """The same edge asked with charges turned among each other by a random rotation and given offsets."""
        m = len(self.point)
        turn = pieces.unitary(rng, m)
        offset = 0.5 * rng.standard_normal(m)
        unit = np.ones(self.charges.shape[1]) if self.charges.ndim == 2 else np.eye(self.charges.shape[1])
        shift = np.multiply.outer(offset, unit)
        return replace(
            self,
            charges=np.tensordot(turn, self.charges, axes=1) + shift,
            normal=turn @ self.normal,
            point=turn @ self.point + offset,
        )

    def draft(self, verdict: str, targets, **fields) -> Draft:
        stack = self.charges
        return Draft(
            charges=tuple(scipy.sparse.csr_array(a) for a in stack) if self.is_sparse else tuple(stack),
            targets=targets,
            verdict=verdict,
            rank=len(stack),
            family="Microstates" if stack.ndim == 2 else "Matrices",
            size=stack.shape[-1],
            log_weights=self.log_weights,
            log_prior=self.log_prior,
            **fields,
        )

    def boundary(self) -> Draft:
        return self.draft(
            "boundary",
            self.point,
            face_dimension=self.face_dimension,
            directions=self.directions,
            entropy=self.entropy,
            note=f"{self.note}, face {self.face_dimension}",
        )

    def inside(self, depth: float) -> Draft:
        t = depth / (self.normal @ (self.centre - self.point))
        targets = (1 - t) * self.point + t * self.centre
        return self.draft("solved", targets, depth=depth, note=f"{self.note}, depth {depth:.0e}")

    def outside(self, step: float) -> Draft:
        return self.draft(
            "infeasible",
            self.point - step * self.normal,
            distance=step,
            distance_is_exact=True,
            displacement=-step * self.normal,
            note=f"{self.note}, outside by {step:.0e}",
        )


def _unit(rng, m: int) -> np.ndarray:
    v = rng.standard_normal(m)
    return v / np.linalg.norm(v)


def curved(rng, index: int) -> Edge:
    """Random charges; the pure ground state of a random combination v, with a gap of at least 0.2.

    The ground level of v.Q is simple, so the pure state is the only one with these values.
    """
    is_complex = bool(index % 2)
    d = (2, 3, 4, 6, 8, 12)[index % 6]
    m = min(2 + index % 4, d * d - 1 if is_complex else d * (d + 1) // 2 - 1)
    while True:
        charges = np.array([pieces.hermitian(rng, d, is_complex=is_complex) for _ in range(m)])
        v = _unit(rng, m)
        e, u = np.linalg.eigh(np.tensordot(v, charges, axes=1))
        if e[1] - e[0] > 0.2:
            break
    state = np.outer(u[:, 0], u[:, 0].conj())
    edge = Edge(charges, v, pieces.values_in(charges, state), 1, 0.0, f"d={d} m={m}")
    return edge.turned(rng)


def _with_ground_space(rng, d: int, k: int, m: int, is_complex: bool) -> np.ndarray:
    """First charge: level 0 on the first k states, levels in 0.5..2 above; the others random."""
    levels = np.concatenate([np.zeros(k), rng.uniform(0.5, 2, d - k)])
    others = [pieces.hermitian(rng, d, is_complex=is_complex) for _ in range(m - 1)]
    return np.array([np.diag(levels).astype(others[0].dtype), *others])


def _gibbs_on(rng, charges, k: int, width: float = 2.0):
    """State of the charges restricted to the first k states, exp(-lam.PQP)/Z: its means and entropy."""
    small = charges[:, :k, :k]
    lam = rng.standard_normal(len(charges))
    h = np.tensordot(lam, small, axes=1)
    h = h * (width / max(np.ptp(np.linalg.eigvalsh(h)), 1e-12)) if k > 1 else h
    state, entropy = pieces.gibbs(h)
    return pieces.values_in(small, state), entropy


def flat(rng, index: int) -> Edge:
    """A face of 2..4 dimensions on which the charges do not commute; the state is full on it.

    v.Q vanishes exactly there and is at least 0.5 elsewhere, so no state with these values leaves the face.
    """
    is_complex = bool(index % 2)
    k = 2 + index % 3
    d = k + int(rng.integers(2, 8))
    m = int(rng.integers(2, 6))
    charges = _with_ground_space(rng, d, k, m, is_complex)
    point, entropy = _gibbs_on(rng, charges, k)
    charges = pieces.rotate(charges, pieces.unitary(rng, d, is_complex=is_complex))
    return Edge(charges, np.eye(m)[0], point, k, entropy, f"d={d} m={m}").turned(rng)


def nonexposed(rng, index: int) -> Edge:
    """A face inside a face that no single direction exposes: two steps are needed.

    The first charge v has ground space P (k1 states).  On P the second charge has the ground space P2 (k2
    states); values (lowest of the first, lowest of the second on P) force every state into P2.  The second
    charge couples P2 to the rest, so tilting v towards it lowers the energy below the target at second
    order: v is the only normal.
    """
    is_complex = bool(index % 2)
    k2 = 1 + index % 3
    k1 = k2 + 1 + index % 2
    d = k1 + int(rng.integers(2, 6))
    m = 2 + (index // 2) % 2
    charges = _with_ground_space(rng, d, k1, m, is_complex)
    second = charges[1]
    second[:k1, :k1] = np.diag(np.concatenate([np.zeros(k2), rng.uniform(0.5, 2, k1 - k2)]))
    point, entropy = _gibbs_on(rng, charges, k2, width=1.0)
    charges = pieces.rotate(charges, pieces.unitary(rng, d, is_complex=is_complex))
    return Edge(charges, np.eye(m)[0], point, k2, entropy, f"d={d} m={m}", directions=2).turned(rng)


def ball(rng, index: int) -> Edge:
    """Spin matrices of spin J, g copies: the reachable set is the ball (disc) of radius J.

    The coherent state along u is the only state of one copy with <J> = J u; g copies give a face of g states.
    """
    j = (0.5, 1, 1.5, 2)[index % 4]
    g = 1 + index // 4 % 3
    stack = pieces.spin(j)[[0, 2]].real if index % 2 else pieces.spin(j)
    u = _unit(rng, len(stack))
    charges = np.array([np.kron(a, np.eye(g)) for a in stack])
    frame = pieces.unitary(rng, charges.shape[1], is_complex=np.iscomplexobj(charges))
    edge = Edge(pieces.rotate(charges, frame), -u, j * u, g, float(np.log(g)), f"J={j} copies={g}")
    return edge.turned(rng)


def cone(rng, index: int) -> Edge:
    """Unit ball joined to an apex p > 1 outside it: the point where the tangent from the apex touches.

    The tangent plane v.Q = -1 holds the coherent state and the apex state; the target lies at one end of that
    segment, an extreme point that no direction exposes alone.  g copies give a face of g states.
    """
    apex = rng.uniform(1.3, 3)
    g = 1 + index // 2 % 3
    letters = "xyz" if index % 2 else "xz"
    heights = [apex, 0.0, 0.0][: len(letters)]
    stack = np.array(
        [scipy.linalg.block_diag(pieces.PAULI[a], h) for a, h in zip(letters, heights, strict=True)]
    )
    charges = np.array([np.kron(a, np.eye(g)) for a in stack])
    side = _unit(rng, len(letters) - 1)
    u = np.concatenate([[1 / apex], np.sqrt(1 - 1 / apex**2) * side])
    frame = pieces.unitary(rng, charges.shape[1], is_complex=np.iscomplexobj(charges))
    note = f"apex={apex:.2f} copies={g}"
    return Edge(pieces.rotate(charges, frame), -u, u, g, float(np.log(g)), note, directions=2).turned(rng)


STABILISERS = (
    (("zz", "xx"), ("x1", "1y")),
    (("zz",), ("x1", "y1")),
    (("zz1", "1zz"), ("x11",)),
    (("zzz",), ("x11", "1xz", "yy1")),
    (("zz1", "1zz", "xxx"), ("z11",)),
    (("xz1", "zxz", "1zx"), ()),
)


def stabiliser(rng, index: int) -> Edge:
    """Commuting independent Pauli strings all at +1, others that anticommute with one of them or lie outside.

    n qubits and k strings pin a space of 2^(n-k) states.  Its mixed state gives 0 to every string outside
    the group they generate, which is the target of the further charges; its entropy (n-k) ln 2 is then the
    largest possible.
    """
    fixed, free = STABILISERS[index % len(STABILISERS)]
    charges = np.array([pieces.pauli(w) for w in fixed + free]).astype(complex)
    k, m, n = len(fixed), len(fixed) + len(free), len(fixed[0])
    v = np.concatenate([-np.ones(k), np.zeros(m - k)]) / np.sqrt(k)
    point = np.concatenate([np.ones(k), np.zeros(m - k)])
    charges = pieces.rotate(charges, pieces.unitary(rng, 2**n, is_complex=True))
    note = "+".join(fixed)
    return Edge(charges, v, point, 2 ** (n - k), float((n - k) * np.log(2)), note).turned(rng)


def ferromagnet(rng, index: int) -> Edge:
    """Heisenberg ferromagnet on a ring of L spins at its lowest energy -L/4, with total spin components.

    The ground space is the multiplet of spin L/2 (L+1 states); the spin components do not commute on it.
    """
    length = 2 + index % 3
    picked = ("z", "xz", "xyz")[index % 3]
    energy = -(sum(pieces.coupling(a + a, length) for a in "xyz"))
    charges = np.array([energy, *[pieces.field_of(a, length) for a in picked]])
    _, u = np.linalg.eigh(energy)
    inner = np.array([u.conj().T @ a @ u for a in charges])
    point, entropy = _gibbs_on(rng, inner, length + 1, width=2.0)
    point[0] = -length / 4
    v = np.eye(len(charges))[0]
    return Edge(charges, v, point, length + 1, entropy, f"ring of {length}, S{picked}").turned(rng)


def blocks(rng, index: int) -> Edge:
    """Block-diagonal sparse charges; the ground space of v.Q has a part in each of two blocks."""
    m = 2 + index % 3
    parts = [(3 + index % 3, 1), (4, 2), (5, 0)]
    stacks = []
    for size, k in parts:
        stack = _with_ground_space(rng, size, k, m, bool(index % 2))
        frame = scipy.linalg.block_diag(pieces.unitary(rng, size, is_complex=bool(index % 2)))
        stacks.append((stack, frame, k))
    face = [np.arange(k) for _, _, k in stacks]
    joined = np.array([scipy.linalg.block_diag(*[s[j] for s, _, _ in stacks]) for j in range(m)])
    starts = np.cumsum([0, *[size for size, _ in parts]])[:-1]
    inside = np.concatenate([a + start for a, start in zip(face, starts, strict=True)])
    point, entropy = _gibbs_on(rng, joined[np.ix_(range(m), inside, inside)], len(inside))
    joined = pieces.rotate(joined, scipy.linalg.block_diag(*[f for _, f, _ in stacks]))
    order = rng.permutation(joined.shape[1])
    joined = joined[np.ix_(range(m), order, order)]
    turn = pieces.unitary(rng, m)
    return Edge(
        np.tensordot(turn, joined, axes=1),
        turn[:, 0],
        turn @ point,
        len(inside),
        entropy,
        f"blocks {[size for size, _ in parts]} m={m}",
        is_sparse=True,
    )


def _facet(rng, n: int, m: int, k: int) -> np.ndarray:
    """Microstates: the first k at level 0 of the first charge, the others at 0.3..2; other charges random."""
    charges = rng.standard_normal((m, n))
    charges[0] = np.concatenate([np.zeros(k), rng.uniform(0.3, 2, n - k)])
    return charges


def face(rng, index: int) -> Edge:
    """Microstates: k = 2..8 points on one side of the hull, a positive distribution on them."""
    n, m = (8, 12, 30, 80)[index % 4], 2 + index % 5
    k = 2 + int(rng.integers(0, 7)) if n > 8 else 2 + index % 3
    charges = _facet(rng, n, m, k)
    p, entropy = pieces.gibbs(pieces.multipliers(rng, charges[:, :k], 2.0) @ charges[:, :k])
    order = rng.permutation(n)
    edge = Edge(charges[:, order], np.eye(m)[0], charges[:, :k] @ p, k, entropy, f"n={n} m={m}")
    return edge.turned(rng)


def vertex(rng, index: int) -> Edge:
    """Microstates: a corner of the hull, every other one held by two or three identical states."""
    n, m = (6, 10, 25, 60)[index % 4], 1 + index % 4
    copies = (1, 2, 1, 3)[index // 2 % 4]
    charges = _facet(rng, n, m, copies)
    charges[:, :copies] = charges[:, :1]
    order = rng.permutation(n)
    point = charges[:, 0].copy()
    edge = Edge(charges[:, order], np.eye(m)[0], point, copies, float(np.log(copies)), f"n={n} m={m}")
    return edge.turned(rng)


def ising(rng, index: int) -> Edge:
    """Integer charges: ring of L classical spins, energy -sum s s' = -L and a magnetisation in between.

    Only the two ordered states have the lowest energy; target magnetisation x L mixes them.
    """
    length = 3 + index % 4
    spins = 1 - 2 * ((np.arange(2**length)[:, None] >> np.arange(length)) & 1)
    energy = -(spins * np.roll(spins, 1, axis=1)).sum(1)
    charges = np.array([energy, spins.sum(1)], float)
    x = (-0.5, 0.0, 0.25, 0.75)[index % 4]
    p = np.array([1 + x, 1 - x]) / 2
    point = np.array([-length, x * length])
    return Edge(charges, np.array([1.0, 0.0]), point, 2, float(-p @ np.log(p)), f"ring of {length}, x={x}")


def commuting(rng, index: int) -> Edge:
    """A face of microstates, written as commuting matrices in a random basis."""
    base = (face, vertex)[index % 2](rng, 4 * (index // 2) + index % 2)
    n = base.charges.shape[1]
    frame = pieces.unitary(rng, n, is_complex=bool(index % 2))
    return replace(base, charges=pieces.rotate([np.diag(row) for row in base.charges], frame))


def weighted(rng, index: int) -> Edge:
    """A face or corner of microstates under weights over +-200 (+-299) decades; weights move no edge."""
    base = (face, vertex)[index % 2](rng, 4 * (index // 2) + index % 2)
    decades = (200, 299)[index // 2 % 2]
    logs = rng.uniform(-1, 1, base.charges.shape[1]) * decades * np.log(10)
    return replace(base, log_weights=logs, entropy=None, note=f"{base.note} weights 1e+-{decades}")


def dropped(rng, index: int) -> Edge:
    """A face or corner of microstates; states beyond it exist in the list but have weight zero."""
    base = (face, vertex)[index % 2](rng, index)
    n = base.charges.shape[1]
    beyond = base.point[:, None] - base.normal[:, None] * rng.uniform(0.1, 1, 3)
    extra = beyond + 0.1 * rng.standard_normal((len(base.point), 3))
    logs = np.concatenate([np.zeros(n), np.full(3, -np.inf)])
    return replace(
        base, charges=np.column_stack([base.charges, extra]), log_weights=logs, note=f"{base.note} dropped"
    )


def with_prior(rng, index: int) -> Edge:
    """A non-commuting face under a log-prior operator; a finite prior moves no edge."""
    base = (flat, curved)[index % 2](rng, index)
    d = base.charges.shape[1]
    prior = rng.uniform(0.5, 5) * pieces.hermitian(rng, d, is_complex=np.iscomplexobj(base.charges))
    entropy = 0.0 if base.face_dimension == 1 else None
    return replace(base, log_prior=prior, entropy=entropy, note=f"{base.note} prior")


SHAPES = {
    "curved": curved,
    "flat": flat,
    "nonexposed": nonexposed,
    "ball": ball,
    "cone": cone,
    "stabiliser": stabiliser,
    "ferromagnet": ferromagnet,
    "blocks": blocks,
    "face": face,
    "vertex": vertex,
    "ising": ising,
    "commuting": commuting,
    "weighted": weighted,
    "dropped": dropped,
    "prior": with_prior,
}


def depth(index: int) -> float:
    """1e-2..1e-10, turning with the index."""
    return 10.0 ** -(2 + index % 9)


def step(index: int) -> float:
    """1e-1..1e-10, turning with the index."""
    return 10.0 ** -(1 + index % 10)


def near(shape):
    """Inside by 1e-2..1e-10."""
    return lambda rng, index: SHAPES[shape](rng, index).inside(depth(index))


def boundary(shape):
    """Exactly on the edge."""
    return lambda rng, index: SHAPES[shape](rng, index).boundary()


def outside(shape):
    """Outside by 1e-1..1e-10."""
    return lambda rng, index: SHAPES[shape](rng, index).outside(step(index))


def tangent(rng, index: int) -> Draft:
    """Outside along a tangent of a ball or cone: the exposing direction of the edge point shows no margin
    at all.

    From the touching point of a sphere of radius R a step s along the tangent (for the cone: away from the
    apex) is sqrt(R^2 + s^2) - R away from the reachable set.
    """
    length = 10.0 ** -(1 + index % 5)
    edge = (ball, cone)[index // 5 % 2](rng, index)
    if index // 5 % 2:
        # the apex state is the one that shares the tangent plane: its value is the other end of the segment
        h = np.tensordot(edge.normal, edge.charges, axes=1) - edge.normal @ edge.point * np.eye(
            edge.charges.shape[1]
        )
        _, u = np.linalg.eigh(h)
        ground = u[:, : 2 * edge.face_dimension]
        mixed = pieces.values_in(edge.charges, ground @ ground.conj().T / ground.shape[1])
        along = edge.point - mixed
        radius = 1.0
    else:
        along = _unit(rng, len(edge.point))
        along = along - (along @ edge.normal) * edge.normal
        radius = (0.5, 1, 1.5, 2)[index % 4]
    along = along / np.linalg.norm(along)
    distance = float(np.hypot(radius, length) - radius)
    draft = edge.outside(length)
    note = f"{edge.note}, tangent by {length:.0e}, outside by {distance:.1e}"
    return draft.change(
        targets=edge.point + length * along, displacement=length * along, distance=distance, note=note
    )


def scaled(verdict: str):
    """An edge of any shape asked in units from 1e-8 to 1e8."""
    shapes = ("flat", "face", "curved", "vertex", "nonexposed", "blocks")

    def make(rng, index: int) -> Draft:
        shape = SHAPES[shapes[index % len(shapes)]]
        edge = shape(rng, index)
        if verdict == "boundary":
            base = edge.boundary()
        elif verdict == "inside":
            base = edge.inside(depth(index))
        else:
            base = edge.outside(step(index))
        factors = 10 ** rng.uniform(-8, 8, len(base.charges))
        return base.transformed(np.diag(factors), note=f"{shapes[index % len(shapes)]}, units 1e+-8")

    return make

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
        live = np.ones(self.charges.shape[1], bool) if self.log_weights is None else np.isfinite(self.log_weights)
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


def unit(rng, m: int) -> np.ndarray:
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
        v = unit(rng, m)
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
    u = unit(rng, len(stack))
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
    stack = np.array([scipy.linalg.block_diag(pieces.PAULI[a], h) for a, h in zip(letters, heights, strict=True)])
    charges = np.array([np.kron(a, np.eye(g)) for a in stack])
    side = unit(rng, len(letters) - 1)
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


def narrow(rng, index: int) -> Edge:
    """A flat face whose next level is only 1e-2..1e-5 above it."""
    is_complex = bool(index % 2)
    k, d, m = 1 + index % 3, 6, 2 + index % 3
    charges = _with_ground_space(rng, d, k, m, is_complex)
    gap = 10.0 ** -(2 + index % 4)
    charges[0][k, k] = gap
    point, entropy = _gibbs_on(rng, charges, k)
    charges = pieces.rotate(charges, pieces.unitary(rng, d, is_complex=is_complex))
    return Edge(charges, np.eye(m)[0], point, k, entropy, f"d={d} m={m} gap={gap:.0e}").turned(rng)


def threefold(rng, index: int) -> Edge:
    """A face of a face of a face, each exposed only within the one before.

    As `nonexposed`, one level deeper: P > P2 > P3, the third charge lowest on P3 within P2 and coupled to the rest.
    """
    is_complex = bool(index % 2)
    k3 = 1 + index // 2 % 2
    k2, k1 = k3 + 1, k3 + 2 + index % 2
    d = k1 + int(rng.integers(2, 5))
    charges = _with_ground_space(rng, d, k1, 3, is_complex)
    charges[1][:k1, :k1] = np.diag(np.concatenate([np.zeros(k2), rng.uniform(0.5, 2, k1 - k2)]))
    charges[2][:k2, :k2] = np.diag(np.concatenate([np.zeros(k3), rng.uniform(0.5, 2, k2 - k3)]))
    point, entropy = _gibbs_on(rng, charges, k3, width=1.0)
    charges = pieces.rotate(charges, pieces.unitary(rng, d, is_complex=is_complex))
    return Edge(charges, np.eye(3)[0], point, k3, entropy, f"d={d} m=3", directions=3).turned(rng)


def tomography(rng, index: int) -> Edge:
    """Every observable of a small system is a charge; the targets are those of a state of rank k < d.

    The reachable set is the set of states itself: the state is the only one with these values, the projector on its
    null space is a normal, and (charges orthonormal) distances are Hilbert-Schmidt distances.
    """
    is_complex = bool(index % 2)
    d = 2 + index % 3
    k = 1 + index // 3 % (d - 1)
    basis = []
    for i in range(d):
        for j in range(i):
            pair = np.zeros((d, d), complex)
            pair[i, j] = pair[j, i] = np.sqrt(0.5)
            basis.append(pair)
            if is_complex:
                turned = np.zeros((d, d), complex)
                turned[i, j], turned[j, i] = 1j * np.sqrt(0.5), -1j * np.sqrt(0.5)
                basis.append(turned)
        if i:
            level = np.diag(np.concatenate([np.ones(i), [-i], np.zeros(d - i - 1)])) / np.sqrt(i * (i + 1))
            basis.append(level.astype(complex))
    charges = np.array(basis) if is_complex else np.array(basis).real
    frame = pieces.unitary(rng, d, is_complex=is_complex)
    p = pieces.probabilities(rng, k)
    state = (frame[:, :k] * p) @ frame[:, :k].conj().T
    null = frame[:, k:] @ frame[:, k:].conj().T
    normal = pieces.values_in(charges, null)
    entropy = pieces.gibbs(-np.log(p))[1]
    normal = normal / np.linalg.norm(normal)
    note = f"d={d} m={len(charges)} rank {k}"
    return Edge(charges, normal, pieces.values_in(charges, state), k, entropy, note).turned(rng)


def with_prior(rng, index: int) -> Edge:
    """A non-commuting face under a log-prior operator; a finite prior moves no edge."""
    base = (flat, curved)[index % 2](rng, index)
    d = base.charges.shape[1]
    prior = rng.uniform(0.5, 5) * pieces.hermitian(rng, d, is_complex=np.iscomplexobj(base.charges))
    entropy = 0.0 if base.face_dimension == 1 else None
    return replace(base, log_prior=prior, entropy=entropy, note=f"{base.note} prior")

"""Where the blocks of free particles sit in the user's modes, and the states they make there.

Nodes 0..n-1 are the ``c_a``, nodes n..2n-1 the ``c+_a``.  Blocks are the connected components of the union pattern of
all charges over the nodes; a component and its partner (particles and holes exchanged) hold the same, so that one of
them is kept with weight 1, and a component that is its own partner gets weight 1/2.  Without pairing only the ``c_a``
are left.  Momentum blocks follow the same rule with ``k`` and ``-k``.  Floor: families.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.families.gaussian_states import BosonState, FermionState, binary_entropy
from maxent.families.majoranas import covariance
from maxent.families.periodic import Periodic
from maxent.families.periodic_states import PeriodicState
from maxent.families.quadratic import Quadratic
from maxent.families.stacks import Free, Stacks, adjoint, eigh
from maxent.families.statistics import log_weights, occupations, vacancies
from maxent.memory import require_memory

__all__ = ["Momenta", "Nodes", "Places", "entropies", "from_modes", "from_momenta"]

#: Blocks of one size are stacked up to this size; larger ones are diagonalised one by one.
LARGE = 64


@dataclass(frozen=True, eq=False)
class Nodes:
    """Blocks of listed nodes: `flat` (n,) and one (B, d) array per stack; `holes` tells whether c+ nodes occur."""

    modes: int
    statistics: str
    flat: np.ndarray
    stacks: tuple[np.ndarray, ...]

    def state(self, flat: np.ndarray, dense: list[np.ndarray], entropy: float, log_z: float) -> Any:
        """The state with these occupations: ``<Psi_a+ Psi_b>`` is entry (b, a) of its block."""
        n = self.modes
        number, pair = np.zeros((n, n), complex), np.zeros((n, n), complex)
        if len(self.flat):
            a = self.flat % n
            number[a, a] = np.where(self.flat < n, flat, 1.0 - flat)
        for nodes, occupied in zip(self.stacks, dense, strict=True):
            for block, occ in zip(nodes, occupied, strict=True):
                plus, minus = block < n, block >= n
                a, b = block[plus], block[minus] - n
                number[np.ix_(a, a)] = occ[np.ix_(plus, plus)].T
                number[np.ix_(b, b)] = np.eye(len(b)) - occ[np.ix_(minus, minus)]
                # <c_b c_a> with c_b = Psi_{b-}^+
                cross = occ[np.ix_(plus, minus)].T
                pair[np.ix_(b, a)] = cross
                pair[np.ix_(a, b)] = -cross.T
        if self.statistics == "fermions":
            return FermionState(covariance(number, pair), entropy, log_z)
        real, imaginary = 0.5 * np.eye(n) + number.real, number.imag
        v = np.block([[real, imaginary], [imaginary.T, real]])
        return BosonState(v, np.zeros(2 * n), entropy, log_z)


@dataclass(frozen=True, eq=False)
class Momenta:
    """Momentum blocks, listed by momentum; a block holds ``c_k`` and, with pairing, ``turn * c+_{-k}``."""

    like: Periodic
    statistics: str
    flat: np.ndarray
    stacks: tuple[np.ndarray, ...]
    turn: complex = 1.0

    def state(self, flat: np.ndarray, dense: list[np.ndarray], entropy: float, log_z: float) -> PeriodicState:
        """The translation-invariant state with these occupations."""
        cells, p = self.like.cells, self.like.modes_per_cell
        number, pair = np.zeros((cells, p, p), complex), np.zeros((cells, p, p), complex)
        number[self.flat, 0, 0] = flat
        for k, occupied in zip(self.stacks, dense, strict=True):
            number[k] = occupied[:, :p, :p].transpose(0, 2, 1)
            if occupied.shape[1] > p:
                back = (-k - int(self.like.antiperiodic)) % cells
                number[back] = np.eye(p) - occupied[:, p:, p:]
                # M(k)_ab = <c_ka c_-kb> = -<c_-kb c_ka>
                pair[k] = -self.turn * occupied[:, :p, p:]
                pair[back] = -pair[k].transpose(0, 2, 1)
        return PeriodicState.of_momenta(self.like, self.statistics, number, pair, entropy, log_z)


@dataclass(frozen=True, eq=False)
class Places:
    """Where the blocks of a `Stacks` sit, and what is filled for good on a face.

    Attributes
    ----------
    layout : Nodes or Momenta
    flat : (n,) int ndarray
        Position in ``layout.flat`` of every flat level.
    parts : tuple of (int, (B,) ndarray, (B, d0, d) ndarray or None)
        Stack of the layout, blocks in it, and frame of each stack.
    pinned_flat : (n0,) ndarray
    pinned : tuple of (B, d, d) ndarrays or None
        Occupations of filled levels of the layout.
    """

    layout: Nodes | Momenta
    flat: np.ndarray
    parts: tuple[tuple[int, np.ndarray, np.ndarray | None], ...]
    pinned_flat: np.ndarray
    pinned: tuple[np.ndarray | None, ...]

    @classmethod
    def of(cls, layout: Nodes | Momenta) -> Places:
        """All blocks of a layout as they are."""
        parts = tuple((i, np.arange(len(b)), None) for i, b in enumerate(layout.stacks))
        n = len(layout.flat)
        return cls(layout, np.arange(n), parts, np.zeros(n), (None,) * len(parts))

    def on_face(self, ground: Free) -> Places:
        """The places of the free levels; what is filled stays filled."""
        pinned_flat = self.pinned_flat.copy()
        pinned_flat[self.flat[ground.flat == 1]] = 1.0
        pinned = list(self.pinned)
        for (source, which, frame), filled in zip(self.parts, ground.filled, strict=True):
            whole = filled if frame is None else frame @ filled @ adjoint(frame)
            size, d = len(self.layout.stacks[source]), whole.shape[1]
            before = pinned[source]
            total = np.zeros((size, d, d), whole.dtype) if before is None else before
            total = total.astype(np.result_type(total, whole))  # a copy
            total[which] += whole
            pinned[source] = total
        parts = []
        for part in ground.parts:
            source, which, frame = self.parts[part.source]
            inner = part.frame if frame is None else frame[part.which] @ part.frame
            parts.append((source, which[part.which], inner))
        return Places(self.layout, self.flat[ground.flat == 0], tuple(parts), pinned_flat, tuple(pinned))

    def fill(self, flat: np.ndarray, dense: list[np.ndarray]) -> tuple[np.ndarray, list[np.ndarray]]:
        """Occupations of the layout from those of the levels that are here."""
        whole = self.pinned_flat.copy()
        whole[self.flat] = flat
        out: list[Any] = [None if p is None else p.copy() for p in self.pinned]
        for (source, which, frame), occ in zip(self.parts, dense, strict=True):
            placed = occ if frame is None else frame @ occ @ adjoint(frame)
            if out[source] is None:
                d = placed.shape[1]
                out[source] = np.zeros((len(self.layout.stacks[source]), d, d), placed.dtype)
            out[source] = out[source].astype(np.result_type(out[source], placed))
            out[source][which] += placed
        return whole, out

    def state(self, stacks: Stacks, lam: np.ndarray) -> Any:
        """The state at multipliers `lam`."""
        pairs = [eigh(k) for k in stacks.exponent(lam)]
        x, s = lam @ stacks.flat, stacks.sign
        every, shares = [x], [np.asarray(stacks.flat_weights)]
        dense = []
        for w, (e, u) in zip(stacks.weights, pairs, strict=True):
            every.append(e.ravel())
            shares.append(np.full(e.size, w))
            dense.append((u * occupations(e, s)[:, None, :]) @ adjoint(u))
        levels, weights = np.concatenate(every), np.concatenate(shares)
        log_z = float(weights @ log_weights(levels, s) - lam @ stacks.constant)
        entropy = float(weights @ entropies(levels, s))
        return self.layout.state(*self.fill(occupations(x, s), dense), entropy, log_z)


def entropies(x: np.ndarray, sign: int) -> np.ndarray:
    """Entropy of each level, in nats; keeps its relative accuracy for levels far from zero."""
    n = occupations(x, sign)
    if sign > 0:
        near = binary_entropy(n)
        # -n ln n - (1-n) ln(1-n) = |x| n(|x|) + ln(1 + e^-|x|)
        return np.where(np.abs(x) < 1, near, np.abs(x) * occupations(np.abs(x), 1) + log_weights(np.abs(x), 1))
    return np.log(vacancies(x, -1)) + n * x


def from_modes(
    operators: list[Quadratic], statistics: str
) -> tuple[Nodes, np.ndarray, np.ndarray, np.ndarray, tuple[np.ndarray, ...], tuple[float, ...]]:
    """Blocks of charges given by matrices.

    Returns
    -------
    layout, constant (m,), flat (m, n), flat_weights (n,), dense, weights
    """
    n, m = operators[0].modes, len(operators)
    paired = statistics == "fermions" and any(not q.conserves_number for q in operators)
    whole = [_nodes(q, n) if paired else sp.csr_array(q.hopping) for q in operators]
    pattern = sum((abs(q) for q in whole), sp.csr_array(whole[0].shape))
    pattern.eliminate_zeros()
    count, labels = sp.csgraph.connected_components(pattern, directed=False)
    sizes = np.bincount(labels, minlength=count)
    partner = labels[(np.arange(2 * n) + n) % (2 * n)] if paired else np.full(n, -1)
    members = np.split(np.argsort(labels, kind="stable"), np.cumsum(sizes)[:-1])
    flat: list[int] = []
    grouped: dict[tuple[int, bool, int], list[np.ndarray]] = {}
    for b, nodes in enumerate(members):
        other = partner[nodes[0]]
        if other == b:
            grouped.setdefault((len(nodes), True, len(grouped) if len(nodes) > LARGE else 0), []).append(nodes)
        elif other < 0 or _kept(nodes, members[other], n):
            if len(nodes) == 1:
                flat.append(nodes[0])
            else:
                grouped.setdefault((len(nodes), False, len(grouped) if len(nodes) > LARGE else 0), []).append(nodes)
    need = 16 * 4 * m * sum(len(v) * k[0] ** 2 for k, v in grouped.items())
    require_memory(need, f"{n} modes in blocks of up to {sizes.max()} need {{need}} for {m} charges")
    flat_nodes = np.array(flat, int)
    constant = np.array([q.constant for q in operators])
    sign = np.where(flat_nodes < n, 0.0, -1.0)
    rows = np.array([np.real(q.diagonal()[flat_nodes]) for q in whole]).reshape(m, len(flat_nodes))
    constant = constant + rows @ sign  # -h of a hole level, whose energy is counted from a filled mode
    stacks, dense, weights = [], [], []
    for (_, is_half, _), blocks in grouped.items():
        nodes = np.array(blocks)
        charges = np.array([[_cut(q, b) for b in nodes] for q in whole])
        if np.iscomplexobj(charges) and not charges.imag.any():
            charges = np.ascontiguousarray(charges.real)
        diagonal = np.real(np.einsum("jbii->jbi", charges))
        # half blocks: tr(h)/2 of their modes; others: their holes are counted from filled modes
        lift = np.where(nodes < n, 0.5, 0.0) if is_half else np.where(nodes < n, 0.0, -1.0)
        constant = constant + np.einsum("jbi,bi->j", diagonal, lift)
        stacks.append(nodes)
        dense.append(charges)
        weights.append(0.5 if is_half else 1.0)
    layout = Nodes(n, statistics, flat_nodes, tuple(stacks))
    return layout, constant, rows, np.ones(len(flat_nodes)), tuple(dense), tuple(weights)


def _kept(nodes: np.ndarray, other: np.ndarray, n: int) -> bool:
    """Of two partners the one with more particles than holes; of equals, that of the first mode."""
    mine, theirs = int(np.sum(nodes < n)), int(np.sum(other < n))
    return mine > theirs or (mine == theirs and nodes.min() < other.min())


def _nodes(q: Quadratic, n: int) -> sp.csr_array:
    """``[[h, D], [-D*, -h*]]`` over the nodes."""
    h = sp.csr_array(q.hopping)
    d = sp.csr_array((n, n)) if q.pairing is None else sp.csr_array(q.pairing)
    return sp.csr_array(sp.block_array([[h, d], [-d.conj(), -h.conj()]]))


def _cut(q: sp.csr_array, nodes: np.ndarray) -> np.ndarray:
    if len(nodes) == q.shape[0]:
        return q.toarray()[np.ix_(nodes, nodes)]
    return q[nodes][:, nodes].toarray()


def from_momenta(
    operators: list[Quadratic], statistics: str
) -> tuple[Momenta, np.ndarray, np.ndarray, np.ndarray, tuple[np.ndarray, ...], tuple[float, ...]]:
    """Blocks of charges given by distances; as `from_modes`."""
    like, m = operators[0].hopping, len(operators)
    cells, p = like.cells, like.modes_per_cell
    paired = any(q.hopping.pairing for q in operators)
    constant = np.array([q.constant for q in operators])
    h, d = (np.array(x) for x in zip(*(q.hopping.blocks() for q in operators), strict=True))
    every = np.arange(cells)
    if not paired and p == 1:
        layout = Momenta(like, statistics, every, ())
        return layout, constant, h[:, :, 0, 0].real.copy(), np.ones(cells), (), ()
    nowhere, none = np.zeros(0, int), np.zeros((m, 0))
    if not paired:
        h = h.real.copy() if not h.imag.any() else h
        return Momenta(like, statistics, nowhere, (every,)), constant, none, np.zeros(0), (h,), (1.0,)
    back = (-every - int(like.antiperiodic)) % cells
    turn: complex = 1.0
    if not h.imag.any() and not d.real.any():  # real matrices, for half the work
        turn, h, d = 1j, h.real.copy(), d.imag.copy()
    whole = np.block([[h, d], [d.conj().transpose(0, 1, 3, 2), -h[:, back].transpose(0, 1, 3, 2)]])
    groups = [(every[every < back], False, 1.0), (every[every == back], True, 0.5)]
    groups = [g for g in groups if len(g[0])]
    dense = []
    for k, is_half, _ in groups:
        block = whole[:, k]
        trace = np.real(np.einsum("jbii->j", (h[:, k] if is_half else h[:, back[k]])))
        constant = constant + trace * (0.5 if is_half else 1.0)
        dense.append(0.5 * (block + adjoint(block)))
    layout = Momenta(like, statistics, nowhere, tuple(g[0] for g in groups), turn)
    return layout, constant, none, np.zeros(0), tuple(dense), tuple(g[2] for g in groups)

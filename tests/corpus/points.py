"""Points on the edge of a hull of microstates; see `edges` for what follows from each.

Truth: a supporting plane of the hull is put in by hand (or is known in closed form), the states on it are counted,
and the target is a distribution with positive probability on each of them.  Such a state is the largest support the
values allow, and the plane's normal makes the distance of a step outside exact.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from tests.corpus import pieces
from tests.corpus.edges import Edge


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
    return replace(base, charges=np.column_stack([base.charges, extra]), log_weights=logs, note=f"{base.note} dropped")


def moments(rng, index: int) -> Edge:
    """Integer levels x = 0..n-1 with the charges x, x^2 (x^3, x^4): the edge is known in closed form.

    For two charges (x-i)(x-i-1) >= 0 at every integer, zero at the two neighbours i, i+1; for four charges the product
    of two such factors, zero at four levels.
    """
    m, n = (2, 4)[index % 2], 8 + index % 5
    x = np.arange(float(n)) / (n - 1)
    first = [1 + index % 2] if m == 2 else [1, 4 + index // 2 % 2]
    on = np.array([level for i in first for level in (i, i + 1)])
    coefficients = np.poly(x[on])[::-1]
    charges = np.array([x**j for j in range(1, m + 1)])
    # the polynomial without its constant term; the leading coefficient is 1, so the length is at least 1
    normal = coefficients[1:] / np.linalg.norm(coefficients[1:])
    p = pieces.probabilities(rng, len(on))
    # m charges on m affinely independent points: the values fix the distribution
    entropy = pieces.gibbs(-np.log(p))[1]
    return Edge(charges, normal, charges[:, on] @ p, len(on), entropy, f"n={n} m={m} moments")

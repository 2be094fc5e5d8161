"""Unreachable targets whose nearest reachable ones are known in closed form, or known to lie at a known distance.

Every generator gives charges, targets, the metric (one unit per charge), and the nearest targets or only the distance.
`disguised` changes units of charges and metric together, which changes no distance.  Nothing here calls the solver.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import product

import numpy as np
from scipy.optimize import brentq

from tests.corpus import edges, pieces, points
from tests.explain.conflicts import ANTICOMMUTING


@dataclass(frozen=True)
class Outside:
    """Charges (m, n) or (m, d, d), unreachable targets, metric, distance, and the nearest targets where known."""

    charges: np.ndarray
    targets: np.ndarray
    unit: np.ndarray
    distance: float
    nearest: np.ndarray | None = None

    def family(self):
        from maxent.families import Matrices, Microstates

        named = {f"c{j}": a for j, a in enumerate(self.charges)}
        return Microstates(named) if self.charges.ndim == 2 else Matrices(named)

    def by_name(self, x: np.ndarray) -> dict[str, float]:
        return {f"c{j}": float(y) for j, y in enumerate(x)}

    def disguised(self, rng, decades: float) -> Outside:
        """Every charge in units of its own, the metric with it."""
        unit = 10.0 ** rng.uniform(-decades, decades, len(self.targets))
        shape = (-1,) + (1,) * (self.charges.ndim - 1)
        return replace(
            self,
            charges=unit.reshape(shape) * self.charges,
            targets=unit * self.targets,
            unit=unit * self.unit,
            nearest=None if self.nearest is None else unit * self.nearest,
        )

    def repeated(self, rng) -> Outside:
        """With a charge that is twice another one, asked consistently: the same states, another metric.

        A move x of the first then costs (1 + 4 / u^2) x^2 with the unit u of the second; giving each of the two
        half of what the one cost before keeps all distances.
        """
        charges = np.concatenate([self.charges, 2 * self.charges[:1]])
        unit = np.append(self.unit, 2 * np.sqrt(2) * self.unit[0])
        unit[0] *= np.sqrt(2)
        targets = np.append(self.targets, 2 * self.targets[0])
        near = None if self.nearest is None else np.append(self.nearest, 2 * self.nearest[0])
        return Outside(charges, targets, unit, self.distance, near)


def nearest_on_ellipsoid(axes: np.ndarray, q: np.ndarray) -> np.ndarray:
    """The point of ``sum (x/axes)^2 = 1`` nearest to q outside: ``x = q a^2/(a^2 + t)``, t by bisection."""
    excess = lambda t: float(np.sum((axes * q / (axes**2 + t)) ** 2)) - 1
    t = brentq(excess, 0.0, float(np.max(axes) * np.linalg.norm(q)), xtol=1e-300, rtol=1e-15)
    return q * axes**2 / (axes**2 + t)


def ball(rng, index: int) -> Outside:
    """k anticommuting matrices: values fill the unit ball; the metric makes it an ellipsoid."""
    k = 2 + index % 4
    frame = pieces.unitary(rng, 4, is_complex=True)
    charges = pieces.rotate(ANTICOMMUTING[:k], frame)
    unit = np.ones(k) if index % 3 == 0 else 10.0 ** rng.uniform(-0.7, 0.7, k)
    inner = rng.standard_normal(k)
    q = inner / np.linalg.norm(inner) * (1 + 10.0 ** rng.uniform(-5, 0.5))
    near = unit * nearest_on_ellipsoid(1 / unit, q / unit)
    return Outside(charges, q, unit, float(np.linalg.norm((near - q) / unit)), near)


def box(rng, index: int) -> Outside:
    """m independent two-state systems, a charge of each: values fill a box, and the nearest point clips to it."""
    m = 1 + index % 5
    lower, upper = -rng.uniform(0.5, 2, m), rng.uniform(0.5, 2, m)
    charges = np.array(list(product(*zip(lower, upper, strict=True)))).T
    q = rng.uniform(0.2, 0.8, m) * (upper - lower) + lower
    out = rng.permutation(m)[: 1 + index % m]
    step = 10.0 ** rng.uniform(-6, 0.5, len(out))
    q[out] = np.where(rng.random(len(out)) < 0.5, lower[out] - step, upper[out] + step)
    near, unit = np.clip(q, lower, upper), 10.0 ** rng.uniform(-1, 1, m)
    return Outside(charges, q, unit, float(np.linalg.norm((near - q) / unit)), near)


def turned_box(rng, index: int) -> Outside:
    """The same as commuting matrices in a random basis."""
    case = box(rng, index)
    frame = pieces.unitary(rng, case.charges.shape[1], is_complex=bool(index % 2))
    return replace(case, charges=pieces.rotate([np.diag(row) for row in case.charges], frame))


def simplex(rng, index: int) -> Outside:
    """Every indicator of n outcomes is a charge: values fill the probability simplex, the sum is always 1.

    The nearest distribution to q in the plain metric is max(q - t, 0) with sum 1; the targets sum to 1 (infeasible).
    """
    n = 3 + index % 5
    q = rng.standard_normal(n)
    q = q + (1 - q.sum()) / n
    if q.min() > -0.01:
        q[:2] += [-q[0] - 0.3, q[0] + 0.3]
    return Outside(np.eye(n), q, np.ones(n), *_projected(q))


def unnormalised(rng, index: int) -> Outside:
    """The same with targets that do not sum to 1: inconsistent; the projection is met first."""
    n = 3 + index % 5
    q = rng.dirichlet(np.ones(n)) * rng.uniform(0.5, 1.5) + 0.1 + (index % 2) * rng.standard_normal(n)
    return Outside(np.eye(n), q, np.ones(n), *_projected(q))


def _projected(q: np.ndarray) -> tuple[float, np.ndarray]:
    """Projection on the simplex by sorting (Held, Wolfe, Crowder, Math. Program. 6, 62 (1974), from memory)."""
    down = np.sort(q)[::-1]
    shift = (np.cumsum(down) - 1) / np.arange(1, len(q) + 1)
    t = shift[np.flatnonzero(down > shift)[-1]]
    near = np.maximum(q - t, 0)
    return float(np.linalg.norm(near - q)), near


def twins(rng, index: int) -> Outside:
    """A charge and a multiple of it with contradicting targets: weighted least squares, then clipped to its range."""
    is_quantum = bool(index % 2)
    a = pieces.hermitian(rng, 4, is_complex=True) if is_quantum else rng.standard_normal(6)
    one = np.eye(4) if is_quantum else np.ones(6)
    levels = np.linalg.eigvalsh(a) if is_quantum else a
    slope, offset = rng.uniform(0.3, 3) * rng.choice([-1, 1]), rng.uniform(-1, 1)
    unit = 10.0 ** rng.uniform(-1, 1, 2)
    q = np.array([rng.uniform(-0.5, 0.5), rng.uniform(-4, 4)])
    rows, wanted = np.array([1, slope]) / unit, (q - [0, offset]) / unit
    x = np.clip(rows @ wanted / (rows @ rows), levels.min(), levels.max())
    near = np.array([x, slope * x + offset])
    return Outside(np.array([a, slope * a + offset * one]), q, unit, float(np.linalg.norm((near - q) / unit)), near)


#: edges with a known inward normal: the nearest point is where one stepped out, in the plain metric
SHAPES = {
    "face": points.face, "vertex": points.vertex, "curved": edges.curved, "flat": edges.flat,
    "commuting": points.commuting, "tomography": edges.tomography,
}  # fmt: skip


def stepped(shape: str):
    """Generator of targets a step outside of an edge of the corpus."""

    def make(rng, index: int) -> Outside:
        edge = SHAPES[shape](rng, index)
        step = 10.0 ** -(index % 8)
        return Outside(edge.charges, edge.point - step * edge.normal, np.ones(len(edge.point)), step, edge.point)

    return make


KINDS = {f.__name__: f for f in (ball, box, turned_box, simplex, unnormalised, twins)} | {
    shape: stepped(shape) for shape in SHAPES
}


def make(kind: str, index: int, decades: float = 6.0) -> Outside:
    """One problem; the same on every call."""
    rng = np.random.default_rng([index, *kind.encode()])
    case = KINDS[kind](rng, index)
    if index % 4 == 3:
        case = case.repeated(rng)
    return case.disguised(rng, decades)

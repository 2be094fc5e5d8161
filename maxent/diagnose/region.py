"""What a pair of charges can be at all: the shadow of the reachable values on a plane, as a polygon.

The values ``(<Q_i>, <Q_j>)`` of all states fill a convex set, whose support function is ``lowest(v)``; a state that
attains it is a point of the edge.  Directions are added where polygon and supporting lines differ most: the normal of a
chord either finds a new corner or proves the chord to be an edge (sandwich algorithm: Rote, Computing 48, 337 (1992),
from memory).  Corners that stand out by more than the gap come out exactly; a smooth edge is met to the gap.  The other
charges are left free: a target can lie inside every shadow and still be out of reach.  Floor: diagnose; calls core,
never solve, and knows no clock: work is capped by the size of the family, so that equal input gives equal numbers.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import ArpackNoConvergence, eigsh

from maxent.core.blocks import Blocks
from maxent.core.contract import Family
from maxent.families.bilinears import Bilinears
from maxent.families.finite import Finite

__all__ = ["Region", "region"]

#: Gap between polygon and supporting lines that no picture shows, in units of the larger extent of each axis.
FINE = 1e-3
#: Directions at most; the number below which no picture is worth drawing; those that look for where a region ends.
MOST, LEAST, AROUND = 128, 16, 24

Support = Callable[[np.ndarray], tuple[float, np.ndarray | None]]
#: Angle of a direction, lowest value along it (may be -inf), and a point of the set that has it.
Side = tuple[float, float, np.ndarray | None]


@dataclass(frozen=True)
class Region:
    """Values that two charges can have together.

    Attributes
    ----------
    pair : tuple of int
        Positions of the two charges; the second is None for a charge alone, on the first axis.
    corners : (n, 2) ndarray
        Corners of the region counted counter-clockwise, in the units of the charges.  One corner is a point, two are a
        segment.
    outline : (n,) bool ndarray
        Whether the side from each corner to the next is an edge of the region; False where an unbounded region is cut.
    bounded : bool
    gap : float
        Largest distance from the corners to what the supporting lines allow, each axis in units of its extent.
    directions : int
        Number of questions ``lowest(v)`` asked.
    """

    pair: tuple[int, int | None]
    corners: np.ndarray
    outline: np.ndarray
    bounded: bool
    gap: float
    directions: int


def region(
    family: Family,
    pair: tuple[int, int | None],
    *,
    origin: Sequence[float] | np.ndarray = (0.0, 0.0),
    around: Sequence[Sequence[float] | np.ndarray] = (),
    seconds: float = 1.0,
) -> Region | None:
    """The reachable values of two charges of a family.

    Parameters
    ----------
    family : Family
        With m charges.
    pair : tuple of int
        Positions of the two charges; None in the second place asks for the first one alone.
    origin : sequence of 2 floats, optional
        Where the two charges are counted from: a family of charges minus targets is given the targets.
    around : sequence of (2,) array_like, optional
        Points that shall lie inside the window in which an unbounded region is drawn.
    seconds : float, optional
        Work to spend, as estimated from the sizes of the family; sets how many directions are asked.

    Returns
    -------
    Region or None
        None when the least number of directions costs five times more than `seconds`.

    Raises
    ------
    ValueError
        Positions that do not exist or are equal.
    """
    m = len(family.scale)
    i, j = pair
    if not 0 <= i < m or i == j or not (j is None or 0 <= j < m):
        raise ValueError(f"a pair is two different positions below {m}, not {pair}")
    zero, unit, rows = np.asarray(origin, float), np.ones(2), np.zeros((2, m))
    for row, k in enumerate(pair):
        if k is not None:
            unit[row] = family.scale[k] if family.scale[k] > 0 else 1.0
            rows[row, k] = 1 / unit[row]
    ask, cost = _support(family.combine(rows, np.zeros(2)))
    if LEAST * cost > 5 * seconds:
        return None
    budget = int(np.clip(seconds / cost, LEAST, MOST))
    axes = [(t, *ask(_unit(t))) for t in 0.5 * np.pi * np.arange(4)]
    low, high = np.array([axes[0][1], axes[1][1]]), -np.array([axes[2][1], axes[3][1]])
    if not np.all(np.isfinite([low, high])) or any(point is None for _, _, point in axes):
        window = [(np.asarray(p, float) - zero) / unit for p in around]
        corners, outline, asked = _unbounded(ask, budget, window)
        return Region((i, j), zero + corners * unit, outline, False, float("nan"), asked + 4)
    extent = np.where(high - low > 1e-12, high - low, 1.0)
    scaled = lambda theta: _scaled(ask, theta, extent)
    first: list[Side] = []
    for k, (theta, height, point) in enumerate(axes):
        first += [(theta, height / extent[k % 2], None if point is None else point / extent), scaled(theta + np.pi / 4)]
    found, gap = _sandwich(first, scaled, budget)
    corners = _corners(np.array([p for _, _, p in found if p is not None]) * extent)
    outline = np.ones(len(corners), bool)
    return Region((i, j), zero + corners * unit, outline, True, gap, len(found))


# ---------------------------------------------------------------------- the support function


def _support(family: Family) -> tuple[Support, float]:
    """``v -> (lowest value, charges in a state that attains it)``, and its cost in seconds of a usual processor.

    Large blocks that are sparse in their own basis are asked by Lanczos' iteration: a picture needs five digits.
    """
    whole: Support = lambda v: (lambda low: (low.value, low.values))(family.lowest(v, with_values=True))
    if isinstance(family, Bilinears):  # all levels of every block are needed
        return whole, 2e-4 + sum(a.shape[1] * _levels(a) for a in family.particles.dense)
    if not isinstance(family, Finite):
        return whole, 1e-3
    blocks = family.blocks
    n = blocks.size
    cost = 1e-4 + 4e-9 * n + sum(_levels(a) for a in blocks.dense)
    if cost < 5e-3:
        return whole, cost
    sparse = _sparse(blocks)
    entries = sparse[0].nnz + sparse[1].nnz
    iterated = 4e-3 + 4e-6 * n + (2e-7 if sparse[0].dtype.kind == "c" else 8e-8) * entries
    return (lambda v: _iterated(sparse, v), iterated) if iterated < cost else (whole, cost)


def _levels(block: np.ndarray) -> float:
    """Seconds for the levels and vectors of a block, from the last axis of an array."""
    d = block.shape[-1]
    return (4 if np.iscomplexobj(block) else 2) * (1e-7 * d**2 + 3e-10 * d**3)


def _sparse(blocks: Blocks) -> tuple[sp.csr_array, sp.csr_array]:
    """The two charges on all blocks together."""
    both = lambda j: [sp.diags_array(blocks.diagonal[j]), *[sp.csr_array(a[j]) for a in blocks.dense]]
    first, second = (sp.csr_array(sp.block_diag(both(j), format="csr")) for j in range(2))
    return first, second


def _iterated(charges: tuple[sp.csr_array, sp.csr_array], v: np.ndarray) -> tuple[float, np.ndarray]:
    """Lowest level by Lanczos' iteration, and the charges in its state.

    The start is the same pseudo-random vector every time, orthogonal to no symmetric state and without a clock.
    """
    matrix = sp.csr_array(v[0] * charges[0] + v[1] * charges[1])
    start = np.random.default_rng(1).standard_normal(matrix.shape[0]).astype(matrix.dtype)
    try:
        _, x = eigsh(matrix, k=1, which="SA", v0=start, tol=1e-7)
    except ArpackNoConvergence as stopped:
        x = stopped.eigenvectors if stopped.eigenvectors.shape[1] else start[:, None] / np.linalg.norm(start)
    x = x[:, 0]
    values = np.array([np.real(np.vdot(x, q @ x)) for q in charges])
    return float(v @ values), values


def _scaled(ask: Support, theta: float, extent: np.ndarray) -> Side:
    """A side of the set whose axes are divided by `extent`."""
    height, point = ask(_unit(theta) / extent)
    return theta, height, None if point is None else point / extent


# ---------------------------------------------------------------------- polygons


def _unit(theta: float) -> np.ndarray:
    return np.array([np.cos(theta), np.sin(theta)])


def _cross(a: np.ndarray, b: np.ndarray) -> float:
    return float(a[0] * b[1] - a[1] * b[0])


def _sandwich(found: list[Side], ask: Callable[[float], Side], budget: int) -> tuple[list[Side], float]:
    """Add directions where the polygon may miss most, until nothing is missed that can be seen."""
    misses = [_miss(a, b) for a, b in zip(found, [*found[1:], found[0]], strict=True)]
    while len(found) < budget and max(m for m, _ in misses) > FINE:
        k = int(np.argmax([m for m, _ in misses]))
        new = ask(misses[k][1])
        found.insert(k + 1, new)
        misses[k : k + 1] = [_miss(found[k], new), _miss(new, found[(k + 2) % len(found)])]
    return found, float(max(m for m, _ in misses))


def _miss(a: Side, b: Side) -> tuple[float, float]:
    """How far the set may reach beyond the chord between two supporting lines, and the direction that tells."""
    (s, h, p), (t, k, q) = a, b
    t = t + 2 * np.pi if t <= s else t
    u, v = _unit(s), _unit(t)
    turn = _cross(u, v)
    middle = 0.5 * (s + t)
    if p is None or q is None:  # where a set without end begins is found by halving, to a degree
        return 0.0 if p is q else 0.05 * (t - s), middle
    if turn < 1e-9:
        return 0.0, middle
    corner = np.array([h * v[1] - k * u[1], k * u[0] - h * v[0]]) / turn
    chord = q - p
    length = np.linalg.norm(chord)
    if length < 1e-12:
        return float(np.linalg.norm(corner - p)), middle
    # inward normal of the chord; rounding can turn it out of the cone between the two directions
    normal = float(np.arctan2(chord[0], -chord[1]))
    normal += 2 * np.pi * np.ceil((s - normal) / (2 * np.pi))
    along = np.clip((corner - p) @ chord / length**2, 0.0, 1.0)
    inside = s + 1e-9 < normal < t - 1e-9
    return float(np.linalg.norm(corner - p - along * chord)), normal if inside else middle


def _corners(points: np.ndarray) -> np.ndarray:
    """Corners of points that stand in order around a convex set; repetitions and points on a side are dropped."""
    size = float(np.ptp(points, axis=0).max())
    ring: list[np.ndarray] = []
    for p in points:
        if not any(np.abs(p - q).max() <= 1e-9 * size for q in (ring[-1:] + ring[:1])):
            ring.append(p)
    k, kept = 0, 0
    while kept < len(ring) > 2:
        p, q, r = ring[k - 1], ring[k], ring[(k + 1) % len(ring)]
        if _cross(q - p, r - q) <= 1e-9 * size * np.linalg.norm(r - p):
            del ring[k]
            k, kept = k - 1 if k else len(ring) - 1, 0
        else:
            k, kept = (k + 1) % len(ring), kept + 1
    if len(ring) > 2:
        return np.array(ring)
    along = np.linalg.svd(points - points.mean(axis=0))[2][0]
    ends = points[[np.argmin(points @ along), np.argmax(points @ along)]]
    return ends if np.abs(ends[1] - ends[0]).max() > 1e-9 * size else ends[:1]


def _unbounded(ask: Support, budget: int, around: list[np.ndarray]) -> tuple[np.ndarray, np.ndarray, int]:
    """A region without end: what all supporting lines leave of a window around its corners."""
    reach = 3.0
    far = max([reach, *[float(np.abs(p).max()) for p in around]])

    def near(theta: float) -> Side:
        """A side whose point is forgotten when it is far away, where no picture needs more directions."""
        _, height, point = _scaled(ask, theta, np.ones(2))
        return theta, height, point if point is not None and np.abs(point).max() < 5 * far else None

    asked, _ = _sandwich([near(t) for t in np.arange(AROUND) * 2 * np.pi / AROUND], near, max(budget, AROUND))
    points = [p for _, _, p in asked if p is not None and np.abs(p).max() < reach]
    inside = np.array([*points, *around] or [np.zeros(2)])
    low, high = inside.min(axis=0), inside.max(axis=0)
    margin = 0.5 * np.where(high > low, high - low, np.maximum(np.abs(high), 1.0))
    low, high = low - margin, high + margin
    ring = [(low[0], low[1]), (high[0], low[1]), (high[0], high[1]), (low[0], high[1])]
    polygon = [(np.array(p), False) for p in ring]
    for theta, height, _ in asked:
        if np.isfinite(height):
            polygon = _cut(polygon, _unit(theta), height)
    corners = np.array([p for p, _ in polygon]).reshape(-1, 2)
    return corners, np.array([edge for _, edge in polygon], bool), len(asked)


def _cut(polygon: list[tuple[np.ndarray, bool]], u: np.ndarray, height: float) -> list[tuple[np.ndarray, bool]]:
    """The part of a convex polygon with ``u.x >= height``; each corner knows whether its side is a supporting line."""
    out: list[tuple[np.ndarray, bool]] = []
    for (p, edge), (q, _) in zip(polygon, [*polygon[1:], *polygon[:1]], strict=True):
        a, b = float(u @ p - height), float(u @ q - height)
        if a >= 0:
            out.append((p, edge))
        if a * b < 0:
            # leaving, the next side runs along the line; entering, it is what is left of this side
            out.append((p + a / (a - b) * (q - p), edge if a < 0 else True))
    return out

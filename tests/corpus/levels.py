"""Independent levels: fermions, bosons and distinguishable particles; and what is asked of them without the solver.

Truth inside: multipliers are drawn, values follow from 1/(e^w + s).  Truth on the edge: the first charge is zero on k
levels; on the others it is positive, or for fermions of either sign.  A state that is empty where it is positive and
full where it is negative has the lowest value there is, and every state with that value is such a one; the target comes
from multipliers on the k levels.  The normal makes the distance of a step outside exact.  Bosons and distinguishable
particles have the particle number among their charges.
"""

from __future__ import annotations

import mpmath
import numpy as np

from tests.corpus import pieces
from tests.corpus.problem import Draft

SIGNS = {"fermions": 1, "bosons": -1, "distinguishable": 0}


def occupations(w, statistics: str) -> np.ndarray:
    """1/(e^w + s)."""
    w = np.minimum(w, 700.0)  # what exp can hold
    return np.exp(-w) if statistics == "distinguishable" else 1 / (np.expm1(w) + (SIGNS[statistics] + 1))


def entropy(w, copies, statistics: str) -> float:
    """Sum over levels of ln Z + w n, in 40 digits."""
    total = mpmath.mpf(0)
    with mpmath.workdps(40):
        for x, g in zip(w, copies, strict=True):
            x, s = mpmath.mpf(float(x)), SIGNS[statistics]
            n = 1 / (mpmath.exp(x) + s)
            log_z = s * mpmath.log1p(s * mpmath.exp(-x)) if s else n
            total += mpmath.mpf(float(g)) * (log_z + x * n)
    return float(total)


def _charges(rng, n: int, m: int, statistics: str) -> np.ndarray:
    charges = rng.standard_normal((m, n))
    if statistics != "fermions":
        charges[-1] = 1.0
    return charges


def _multipliers(rng, charges, statistics: str, smallest: float) -> np.ndarray:
    """Multipliers of size 1; for bosons the smallest exponent is `smallest`."""
    lam = rng.standard_normal(len(charges))
    if statistics == "bosons":
        lam[-1] += smallest - (lam @ charges).min()
    return lam


def _particles(charges, copies, n, statistics: str) -> float:
    return 1.0 if statistics == "fermions" else max(float(copies @ n), 1.0)


def inside(statistics: str, *, condensed: bool = False):
    """Random levels, charges and multipliers; condensed: one level holds 1e2..1e7 bosons."""

    def make(rng, index: int) -> Draft:
        n, m = (4, 9, 40, 300)[index % 4], 1 + index % 4
        charges = _charges(rng, n, m, statistics)
        copies = rng.integers(1, 4, n).astype(float)
        smallest = 10.0 ** -(2 + index % 6) if condensed else rng.uniform(0.1, 1)
        if condensed and m == 1:  # the number alone gives all levels the same exponent
            charges, m = np.vstack([rng.standard_normal(n), charges]), 2
        lam = _multipliers(rng, charges, statistics, smallest)
        w = lam @ charges
        if condensed:  # the level that holds the condensate exactly, not to the rounding of a sum
            charges[:-1] -= charges[:-1, [int(np.argmin(w))]]
            lam[-1] = smallest
            w = lam @ charges
        held = occupations(w, statistics)
        return Draft(
            charges=tuple(charges), targets=charges @ (copies * held), verdict="solved",
            rank=int(np.linalg.matrix_rank(charges)), family="Modes", size=n, statistics=statistics,
            degeneracy=copies, particles=_particles(charges, copies, held, statistics),
            multipliers=lam if m <= n else None, entropy=entropy(w, copies, statistics),
            note=f"{statistics} n={n} m={m} smallest exponent {w.min():.0e}",
        )  # fmt: skip

    return make


def edge(statistics: str, place: str):
    """On a face of k levels, inside of it by 1e-2..1e-8, or outside by 1e-1..1e-10; k = 0 is a single state."""

    def make(rng, index: int) -> Draft:
        n, m = (6, 12, 40, 200)[index % 4], 2 + index % 3
        k = (0, 1, 3, 5)[index % 4] if statistics == "fermions" else 1 + index % 4
        charges = _charges(rng, n, m, statistics)
        copies = rng.integers(1, 4, n).astype(float)
        beyond = rng.uniform(0.3, 2, n - k)
        beyond = beyond * rng.choice([-1, 1], n - k) if statistics == "fermions" else beyond
        charges[0] = np.concatenate([np.zeros(k), beyond])
        lam = _multipliers(rng, charges[:, :k], statistics, 0.3) if k else np.zeros(m)
        w = lam @ charges[:, :k]
        held = np.concatenate([occupations(w, statistics), (beyond < 0).astype(float)])
        normal, point = np.eye(m)[0], charges @ (copies * held)
        half = np.full(n, 0.5) if statistics == "fermions" else np.full(n, 1.0)
        centre = charges @ (copies * half)
        order, turn = rng.permutation(n), pieces.unitary(rng, m)
        charges, copies = turn @ charges[:, order], copies[order]
        normal, point, centre = turn @ normal, turn @ point, turn @ centre
        free = float(copies[np.argsort(order)[:k]].sum())
        common = {
            "charges": tuple(charges), "rank": m, "family": "Modes", "size": n, "statistics": statistics,
            "degeneracy": copies, "particles": max(_particles(charges, copies, held[order], statistics), 1.0),
        }  # fmt: skip
        note = f"{statistics} n={n} m={m}, face of {k} levels"
        if place == "boundary":
            dimension = 2**free if statistics == "fermions" else np.inf
            return Draft(
                targets=point, verdict="boundary", face_dimension=dimension, note=note, **common,
                entropy=entropy(w, copies[np.argsort(order)[:k]], statistics),
            )  # fmt: skip
        if place == "near":
            depth = 10.0 ** -(2 + index % 7)
            t = depth / (normal @ (centre - point))
            targets = (1 - t) * point + t * centre
            return Draft(targets=targets, verdict="solved", depth=depth, note=f"{note}, depth {depth:.0e}", **common)
        step = 10.0 ** -(1 + index % 10)
        return Draft(
            targets=point - step * normal, verdict="infeasible", distance=step, distance_is_exact=True,
            displacement=-step * normal, note=f"{note}, outside by {step:.0e}", **common,
        )  # fmt: skip

    return make


def redundant(source):
    """Combinations of the charges added, with the targets that follow."""

    def make(rng, index: int) -> Draft:
        base = source(rng, index)
        m = len(base.charges)
        rows = rng.standard_normal((1 + index % 2, m)) if index % 3 else 2 * np.eye(m)[:1]
        order = rng.permutation(m + len(rows))
        return base.transformed(np.vstack([np.eye(m), rows])[order], note=f"{len(rows)} combinations")

    return make


def contradicted(source):
    """A copy of one charge whose target is off by 1e-1..1e-9 of its size: no occupations have both values."""

    def make(rng, index: int) -> Draft:
        base = source(rng, index)
        m = len(base.charges)
        pick = int(rng.integers(m))
        off = 10.0 ** -(1 + index % 9) * (1 + abs(base.targets[pick]))
        draft = base.transformed(np.vstack([np.eye(m), np.eye(m)[pick]]), note=f"a copy off by {off:.0e}")
        shift = off * np.eye(m + 1)[m]
        return draft.change(
            targets=draft.targets + shift, verdict="inconsistent", displacement=shift, distance=off, entropy=None,
            multipliers=None, depth=None,
        )  # fmt: skip

    return make


# ---------------------------------------------------------------- questions, answered without the solver


def ends(problem, coefficients: dict) -> np.ndarray:
    """Lowest and highest value of sum_j v_j Q_j; a level within rounding of zero counts as zero."""
    height = sum(v * np.asarray(problem.charges[n]) for n, v in coefficients.items())
    if problem.statistics == "fermions":
        return np.array([problem.degeneracy @ np.minimum(height, 0), problem.degeneracy @ np.maximum(height, 0)])
    unit = 1e-13 * sum(abs(v) * np.abs(problem.charges[n]).max() for n, v in coefficients.items())
    return np.array([0.0 if height.min() > -unit else -np.inf, 0.0 if height.max() < unit else np.inf])


def replayed(problem, multipliers: dict) -> dict:
    """Values of all charges at these multipliers."""
    w = sum(x * np.asarray(problem.charges[n]) for n, x in multipliers.items())
    held = problem.degeneracy * occupations(w, problem.statistics)
    return {n: float(np.asarray(q) @ held) for n, q in problem.charges.items()}


def size(problem, name: str) -> float:
    """|Q_j|: of all levels for fermions, of the particles there are otherwise."""
    q = np.asarray(problem.charges[name])
    if problem.statistics != "fermions":
        return float(np.abs(q).max()) * problem.particles
    return float(max(problem.degeneracy @ np.maximum(q, 0), -(problem.degeneracy @ np.minimum(q, 0))))


def spread(problem, name: str) -> float:
    """Standard deviation with every copy half full, or with one particle in it."""
    variance = {"fermions": 0.25, "bosons": 2.0, "distinguishable": 1.0}[problem.statistics]
    return float(np.sqrt(variance * problem.degeneracy @ np.asarray(problem.charges[name]) ** 2))


def lowest_at_50_digits(problem, direction: dict):
    """min <sum_j v_j (Q_j - q_j)>; levels within rounding of zero count as zero unless fermions."""
    height = [
        mpmath.fsum(mpmath.mpf(v) * mpmath.mpf(float(problem.charges[n][k])) for n, v in direction.items())
        for k in range(problem.size)
    ]
    asked = mpmath.fsum(mpmath.mpf(v) * mpmath.mpf(problem.targets[n]) for n, v in direction.items())
    if problem.statistics == "fermions":
        copies = [mpmath.mpf(float(g)) for g in problem.degeneracy]
        return mpmath.fsum(g * min(h, 0) for g, h in zip(copies, height, strict=True)) - asked
    unit = 1e-13 * sum(abs(v) * np.abs(problem.charges[n]).max() for n, v in direction.items())
    assert min(height) > -unit
    return -asked

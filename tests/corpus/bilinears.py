"""Quadratic charges of fermions and bosons: one-body matrices that do not commute, and rings of given momentum.

Truth inside: multipliers are drawn, values follow from the occupations 1/(e^x + s) of the levels of lam.h.  Truth on
the edge: the first charge is zero on k modes; on the others it is positive, or for fermions of either sign.  A state
that is empty where it is positive and full where it is negative has the lowest value there is, and every state with
that value is such a one; the target comes from multipliers on the k modes.  A unitary turns the modes, an orthogonal
matrix the charges.  On rings all charges are diagonal before the modes are turned to sites by a Fourier transform.
Bosons have the particle number among their charges.
"""

from __future__ import annotations

import mpmath
import numpy as np

from tests.corpus import levels, pieces
from tests.corpus.problem import Draft


def _charges(rng, n: int, m: int, statistics: str, *, ring: bool) -> list[np.ndarray]:
    if ring:
        charges = [np.diag(rng.standard_normal(n)).astype(complex) for _ in range(m)]
    else:
        charges = [pieces.hermitian(rng, n, is_complex=True) for _ in range(m)]
    if statistics == "bosons":
        charges[-1] = np.eye(n, dtype=complex)
    return charges


def _frame(rng, n: int, *, ring: bool) -> np.ndarray:
    """Modes in the columns; on a ring the plane waves."""
    if ring:
        return np.exp(2j * np.pi * np.outer(np.arange(n), np.arange(n)) / n) / np.sqrt(n)
    return np.linalg.qr(rng.standard_normal((n, n)) + 1j * rng.standard_normal((n, n)))[0]


def _multipliers(rng, charges: list[np.ndarray], statistics: str, smallest: float) -> np.ndarray:
    lam = rng.standard_normal(len(charges))
    if statistics == "bosons":
        lam[-1] += smallest - np.linalg.eigvalsh(_sum(lam, charges))[0]
    return lam


def _sum(lam, charges) -> np.ndarray:
    return sum(x * q for x, q in zip(lam, charges, strict=True))


def _filled(lam, charges, statistics: str) -> tuple[np.ndarray, np.ndarray]:
    """Levels of lam.h, and the matrix 1/(e^h + s)."""
    e, u = np.linalg.eigh(_sum(lam, charges))
    return e, (u * levels.occupations(e, statistics)) @ u.conj().T


def _values(charges, filled) -> np.ndarray:
    return np.array([np.trace(q @ filled).real for q in charges])


def _turned(charges, frame, turn) -> tuple[np.ndarray, ...]:
    turned = [frame @ q @ frame.conj().T for q in charges]
    mixed = [_sum(row, turned) for row in turn]
    return tuple(0.5 * (q + q.conj().T) for q in mixed)


def inside(statistics: str, *, ring: bool = False):
    """Random charges and multipliers of size 1."""

    def make(rng, index: int) -> Draft:
        n, m = (4, 6, 9, 12)[index % 4], 1 + index % 4
        charges = _charges(rng, n, m, statistics, ring=ring)
        lam = _multipliers(rng, charges, statistics, 0.3)
        e, filled = _filled(lam, charges, statistics)
        point, frame = _values(charges, filled), _frame(rng, n, ring=ring)
        return Draft(
            charges=_turned(charges, frame, np.eye(m)), targets=point, verdict="solved", rank=m,
            family="Periodic" if ring else "Bilinears", size=n, statistics=statistics, multipliers=lam,
            entropy=levels.entropy(e, np.ones(n), statistics), particles=_particles(filled, statistics),
            note=f"{statistics} n={n} m={m}",
        )  # fmt: skip

    return make


def edge(statistics: str, place: str, *, ring: bool = False):
    """On a face of k modes, inside of it by 1e-2..1e-8, or outside by 1e-1..1e-10; k = 0 is a single state."""

    def make(rng, index: int) -> Draft:
        n, m = (4, 6, 9, 12)[index % 4], 2 + index % 3
        k = (0, 1, 2, 3)[index % 4] if statistics == "fermions" else 1 + index % 3
        charges = _charges(rng, n, m, statistics, ring=ring)
        beyond = rng.uniform(0.3, 2, n - k)
        beyond = beyond * rng.choice([-1, 1], n - k) if statistics == "fermions" else beyond
        charges[0] = np.diag(np.append(np.zeros(k), beyond)).astype(complex)
        inner = [q[:k, :k] for q in charges]
        filled, e = np.diag(np.append(np.zeros(k), beyond < 0)).astype(complex), np.zeros(0)
        if k:
            e, filled[:k, :k] = _filled(_multipliers(rng, inner, statistics, 0.3), inner, statistics)
        turn, frame = pieces.unitary(rng, m), _frame(rng, n, ring=ring)
        half = (0.5 if statistics == "fermions" else 1.0) * np.eye(n)
        point, centre = turn @ _values(charges, filled), turn @ _values(charges, half)
        common = {
            "charges": _turned(charges, frame, turn), "rank": m, "size": n, "statistics": statistics,
            "family": "Periodic" if ring else "Bilinears", "particles": _particles(filled, statistics),
        }  # fmt: skip
        normal, note = turn[:, 0], f"{statistics} n={n} m={m}, face of {k} modes"
        if place == "boundary":
            dimension = 2**k if statistics == "fermions" else np.inf
            return Draft(
                targets=point, verdict="boundary", face_dimension=dimension, note=note, **common,
                entropy=levels.entropy(e, np.ones(k), statistics),
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


def _particles(filled, statistics: str) -> float:
    return 1.0 if statistics == "fermions" else max(float(np.trace(filled).real), 1.0)


def distances(matrix: np.ndarray) -> dict[int, complex]:
    """Amplitudes by distance of a circulant matrix; the adjoint of each stands for the opposite direction."""
    n = len(matrix)
    return {r: matrix[0, r] / (2 if 2 * r == n else 1) for r in range(n // 2 + 1)}


# ---------------------------------------------------------------- questions, answered without the solver


def _combined(problem, coefficients: dict) -> np.ndarray:
    return sum(v * problem.charges[n] for n, v in coefficients.items())


def ends(problem, coefficients: dict) -> np.ndarray:
    """Lowest and highest value of sum_j v_j Q_j; a level within rounding of zero counts as zero."""
    e = np.linalg.eigvalsh(_combined(problem, coefficients))
    if problem.statistics == "fermions":
        return np.array([np.minimum(e, 0).sum(), np.maximum(e, 0).sum()])
    unit = 1e-13 * sum(abs(v) * np.linalg.norm(problem.charges[n]) for n, v in coefficients.items())
    return np.array([0.0 if e.min() > -unit else -np.inf, 0.0 if e.max() < unit else np.inf])


def replayed(problem, multipliers: dict) -> dict:
    """Values of all charges at these multipliers."""
    charges = list(problem.charges.values())
    filled = _filled(list(multipliers.values()), charges, problem.statistics)[1]
    return dict(zip(problem.charges, _values(charges, filled), strict=True))


def size(problem, name: str) -> float:
    """|Q_j|: of all levels for fermions, of the particles there are otherwise."""
    e = np.linalg.eigvalsh(problem.charges[name])
    if problem.statistics != "fermions":
        return float(np.abs(e).sum()) * problem.particles
    return float(max(np.maximum(e, 0).sum(), -np.minimum(e, 0).sum()))


def spread(problem, name: str) -> float:
    """Standard deviation with every mode half full, or with one particle in it."""
    return float(np.sqrt(0.25 if problem.statistics == "fermions" else 2.0) * np.linalg.norm(problem.charges[name]))


def lowest_at_50_digits(problem, direction: dict):
    """min <sum_j v_j (Q_j - q_j)>; levels within rounding of zero count as zero unless fermions."""
    total = mpmath.zeros(problem.size)
    for n, v in direction.items():
        total += mpmath.mpf(v) * mpmath.matrix(np.asarray(problem.charges[n], complex).tolist())
    asked = mpmath.fsum(mpmath.mpf(v) * mpmath.mpf(problem.targets[n]) for n, v in direction.items())
    e = mpmath.eighe(total, eigvals_only=True)
    if problem.statistics == "fermions":
        return mpmath.fsum(min(x, 0) for x in e) - asked
    unit = 1e-13 * sum(abs(v) * np.linalg.norm(problem.charges[n]) for n, v in direction.items())
    assert min(e) > -unit
    return -asked

"""What a result must satisfy, given the truth of a problem.

Each function returns a list of complaints, empty when all is well.  Whatever can be computed without the
solver is computed here again: levels of the certificate's combination, means in the state of the returned
multipliers, spreads.
"""

from __future__ import annotations

import numpy as np

from tests.corpus import pieces
from tests.corpus.problem import Problem, to_dense

RESIDUAL = 1e-10
# largest tolerance of a certificate in units of sum |v_j| (|Q_j| + |q_j|)
ROUNDING = 1e-13
# what float64 multipliers alone reproduce: rounding of each moves the exponent by eps |lam_j| |Q_j|
REPLAY, ROUNDING_OF_MULTIPLIERS = 1e-12, 4 * np.finfo(float).eps
MULTIPLIER = 1e-8
ENTROPY = 1e-8
# on a flat face the limit state follows the targets like a square root only: eps gives 1e-8, times a few
ENTROPY_ON_FACE = 1e-6


def combination(problem: Problem, coefficients: dict) -> np.ndarray:
    """sum_j v_j Q_j: a dense matrix, or values on the live microstates."""
    if problem.family == "Microstates":
        parts = [v * problem.live(problem.charges[n]) for n, v in coefficients.items()]
        return sum(parts, np.zeros(len(problem.live(np.zeros(problem.size)))))
    parts = [v * to_dense(problem.charges[n]) for n, v in coefficients.items()]
    return sum(parts, np.zeros((problem.size, problem.size)))


def levels(problem: Problem, coefficients: dict) -> np.ndarray:
    """Sorted levels of sum_j v_j Q_j; of many independent levels the lowest and the highest sum."""
    if problem.own:
        return problem.own.ends(problem, coefficients)
    h = combination(problem, coefficients)
    return np.sort(h) if h.ndim == 1 else np.linalg.eigvalsh(h)


def replayed(problem: Problem, multipliers: dict) -> float:
    """Largest relative residual of the state that the multipliers alone define, computed from scratch."""
    if problem.own:
        found = problem.own.replayed(problem, multipliers)
        return worst_residual(problem, {n: found[n] - q for n, q in problem.targets.items()})
    h = combination(problem, multipliers)
    for logs in (problem.log_weights, problem.log_prior):
        if logs is not None:
            h = h - (problem.live(logs) if problem.family == "Microstates" else logs)
    state, _ = pieces.gibbs(h)
    worst = 0.0
    for name, q in problem.targets.items():
        charge = combination(problem, {name: 1.0})
        worst = max(worst, abs(pieces.values_in(charge[None], state)[0] - q) / (problem.scale(name) or 1.0))
    return worst


def worst_residual(problem: Problem, residuals: dict) -> float:
    return max((abs(r) / (problem.scale(n) or 1.0) for n, r in residuals.items()), default=0.0)


def verdict(problem: Problem, result) -> list[str]:
    found = str(result.verdict)
    if found != problem.verdict:
        return [f"verdict {found}, truth {problem.verdict}: {result.message}"]
    complaints = []
    if result.success != (found == "solved"):
        complaints.append(f"success {result.success} with verdict {found}")
    is_finite = [bool(np.isfinite(x)) for x in result.multipliers.values()]
    if is_finite != [found == "solved"] * len(problem.targets):
        complaints.append(f"multipliers {result.multipliers} with verdict {found}")
    if (result.state is not None) != (found in ("solved", "boundary")):
        complaints.append(f"state {result.state} with verdict {found}")
    return complaints


def values(problem: Problem, result) -> list[str]:
    """Residuals as reported, as the state tells them, and as the multipliers alone reproduce them."""
    if problem.verdict not in ("solved", "boundary") or result.state is None:
        return []
    complaints = []
    worst = worst_residual(problem, result.residuals)
    if not worst <= RESIDUAL:
        complaints.append(f"relative residual {worst:.1e}")
    asked = {n: result.state.mean(problem.charges[n]) - q for n, q in problem.targets.items()}
    if not worst_residual(problem, asked) <= RESIDUAL:
        complaints.append(f"state.mean misses the targets by {worst_residual(problem, asked):.1e}")
    if problem.verdict == "solved":
        own = replayed(problem, result.multipliers)
        sizes = sum(abs(lam) * problem.scale(n) for n, lam in result.multipliers.items())
        limit = REPLAY + ROUNDING_OF_MULTIPLIERS * sizes + 2 * worst
        if not own <= limit:
            complaints.append(f"the multipliers alone miss the targets by {own:.1e}")
    return complaints


def certificate(problem: Problem, result, family) -> list[str]:
    """The certificate holds when computed again, and its margin bounds the distance from below."""
    kind = {"infeasible": "outside", "inconsistent": "contradiction", "boundary": "face"}.get(problem.verdict)
    claim = result.certificate
    if kind is None:
        return [] if claim is None else [f"certificate {claim} for a solved problem"]
    if claim is None:
        return ["no certificate"]
    complaints = []
    if claim.kind != kind:
        complaints.append(f"certificate of kind {claim.kind}, expected {kind}")
    if not claim.verify(family, problem.targets):
        complaints.append("certificate.verify does not hold")
    margin, tolerance = claim.margin, claim.tolerance
    length = np.linalg.norm(list(claim.direction.values()))
    spectrum = levels(problem, claim.direction)
    own = spectrum[0] - sum(v * problem.targets[n] for n, v in claim.direction.items())
    if not abs(own - margin) <= tolerance:
        complaints.append(f"margin {margin:.3e}, recomputed {own:.3e}, tolerance {tolerance:.1e}")
    if not tolerance <= ROUNDING * sum(abs(v) * problem.scale(n) for n, v in claim.direction.items()):
        complaints.append(f"tolerance {tolerance:.1e} is more than rounding explains")
    if kind == "face":
        if not abs(margin) <= tolerance:
            complaints.append(f"face certificate with margin {margin:.1e}, tolerance {tolerance:.1e}")
        if not spectrum[-1] - spectrum[0] > 1e3 * tolerance:
            complaints.append("the exposing direction is a multiple of the identity")
        return complaints
    if not margin > tolerance:
        complaints.append(f"margin {margin:.1e} does not exceed the tolerance {tolerance:.1e}")
    if not margin <= problem.distance * length * (1 + 1e-9) + 2 * tolerance:
        complaints.append(f"margin {margin / length:.3e} exceeds the distance {problem.distance:.3e}")
    return complaints


def face(problem: Problem, result) -> list[str]:
    """Dimension, number of exposing directions, and entropy of the limit state."""
    if problem.verdict != "boundary":
        return [] if result.face is None else [f"face {result.face} with verdict {result.verdict}"]
    if result.face is None:
        return ["no face"]
    complaints = []
    if result.face.dimension != problem.face_dimension:
        complaints.append(f"face of dimension {result.face.dimension}, truth {problem.face_dimension}")
    if not len(result.face.directions) >= problem.directions:
        complaints.append(f"{len(result.face.directions)} exposing directions, {problem.directions} needed")
    for direction in result.face.directions:
        if set(direction) != set(problem.targets):
            complaints.append(f"direction names {sorted(direction)}")
    if problem.entropy is not None and not abs(result.entropy - problem.entropy) <= ENTROPY_ON_FACE:
        complaints.append(f"entropy of the limit state {result.entropy!r}, truth {problem.entropy!r}")
    return complaints


def redundancy(problem: Problem, result) -> list[str]:
    """As many relations as charges are dependent, each true, independent of one another; smallest
    multipliers.

    Smallest means: sum_j (lam_j s_j)^2 with s_j the spread of charge j over the counting measure, so that s
    lam is orthogonal to s c for every relation sum_j c_j Q_j = constant; a charge without spread gets the
    multiplier 0.
    """
    if problem.verdict != "solved" or str(result.verdict) != "solved":
        return []
    m = len(problem.targets)
    if len(result.redundancies) != m - problem.rank:
        return [f"{len(result.redundancies)} redundancies, truth {m - problem.rank}"]
    if m == problem.rank:
        return []
    complaints = []
    spreads = np.array([problem.spread(n) for n in problem.targets])
    sizes = np.array([problem.scale(n) for n in problem.targets])
    is_flat = spreads <= 1e-13 * sizes
    rows = []
    for relation in result.redundancies:
        c = np.array([relation.coefficients.get(n, 0.0) for n in problem.targets])
        spectrum = levels(problem, relation.coefficients) - relation.constant
        if not max(abs(spectrum[0]), abs(spectrum[-1])) <= 1e-12 * (np.abs(c) @ sizes):
            complaints.append(f"relation {relation} is off by {np.max(np.abs(spectrum)):.1e}")
        units = np.where(is_flat, np.where(sizes > 0, sizes, 1.0), spreads)
        rows.append(c * units / np.linalg.norm(c * units))
    if np.linalg.svd(np.array(rows), compute_uv=False)[-1] < 1e-6:
        complaints.append("relations depend on one another")
    lam = np.array(list(result.multipliers.values()))
    if np.any(lam[is_flat] != 0):
        complaints.append(f"a multiple of the identity has a multiplier: {result.multipliers}")
    scaled = lam * np.where(is_flat, 0.0, spreads)
    overlap = np.abs(np.array(rows) @ scaled)
    if not np.all(overlap <= 1e-8 * max(np.linalg.norm(scaled), 1e-3)):
        complaints.append(f"not of minimum norm: {overlap.max():.1e} of {np.linalg.norm(scaled):.1e}")
    return complaints


def known(problem: Problem, result) -> list[str]:
    """Multipliers and entropy where the construction knows them."""
    if problem.verdict != "solved" or str(result.verdict) != "solved":
        return []
    complaints = []
    if problem.entropy is not None and not abs(result.entropy - problem.entropy) <= ENTROPY * max(
        1.0, abs(problem.entropy)
    ):
        complaints.append(f"entropy {result.entropy!r}, truth {problem.entropy!r}")
    if problem.multipliers is None:
        return complaints
    spreads = {n: problem.spread(n) for n in problem.targets}
    unit = max([abs(x) * spreads[n] for n, x in problem.multipliers.items()] + [1.0])
    for n, x in problem.multipliers.items():
        miss = abs(result.multipliers[n] - x) * spreads[n] / unit
        if not miss <= MULTIPLIER:
            complaints.append(f"multiplier of {n} is {result.multipliers[n]!r}, truth {x!r}")
        if not abs(result.multipliers[n] - x) <= 10 * result.multiplier_errors[n] + 4e-15 * unit / (spreads[n] or 1.0):
            complaints.append(
                f"multiplier of {n} is off by {abs(result.multipliers[n] - x):.1e}, "
                f"stated error {result.multiplier_errors[n]:.1e}"
            )
    return complaints


def everything(problem: Problem, result, family) -> list[str]:
    """All complaints; the later questions are asked only if the verdict is right."""
    wrong = verdict(problem, result)
    if str(result.verdict) != problem.verdict:
        return wrong
    return (
        wrong
        + values(problem, result)
        + certificate(problem, result, family)
        + face(problem, result)
        + redundancy(problem, result)
        + known(problem, result)
    )

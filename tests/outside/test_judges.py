"""Independent judges: linear and semidefinite programmes and general minimisers agree with the solver.

What a judge cannot resolve it does not decide (`RESOLUTION` of each oracle: 1e-8 for HiGHS, 1e-6 for
Clarabel, 1e-6 in the multipliers for SciPy's minimisers).  The tests ask that no answer contradicts another,
and that the judge does decide wherever the construction puts the target further from the edge than 1e-3.
"""

from __future__ import annotations

import numpy as np
import pytest

import maxent
from maxent.families import Matrices, Microstates
from tests.corpus import pieces, problems
from tests.corpus.problem import to_dense
from tests.oracles import descent, linear, semidefinite

SOLVER_SAYS = {"solved": "inside", "boundary": "edge", "infeasible": "outside", "inconsistent": "outside"}
DECIDED = 1e-3
SEED = 17


def named(rows) -> dict:
    return {f"c{j}": row for j, row in enumerate(rows)}


def arrays(problem) -> tuple[np.ndarray, np.ndarray]:
    """Charges as one array, (m, n) on the live microstates or (m, d, d), and the targets."""
    if problem.family == "Microstates":
        stack = np.array([problem.live(a) for a in problem.charges.values()])
    else:
        stack = np.array([to_dense(a) for a in problem.charges.values()])
    return stack, np.array(list(problem.targets.values()))


def judge_and_solver_agree(judge, result, stack, targets, label: str) -> str:
    """The judgement, after asking that the solver does not contradict it."""
    verdict = SOLVER_SAYS[str(result.verdict)]
    judged = judge.judgement(stack, targets)
    if judged != "edge":
        assert verdict == judged, f"{label}: judge says {judged}, solver {result.message}"
    elif verdict == "outside":
        length = np.linalg.norm(list(result.certificate.direction.values()))
        assert result.certificate.margin / length <= judge.RESOLUTION, label
    if verdict == "outside":
        # a Euclidean distance is never larger than the sum of the parts that HiGHS minimises
        length = np.linalg.norm(list(result.certificate.direction.values()))
        limit = judge.distance(stack, targets) + judge.RESOLUTION
        assert result.certificate.margin / length <= limit, label
    return judged


@pytest.mark.parametrize("seed", range(6))
def test_highs_agrees_on_random_targets_around_a_hull(seed):
    rng = np.random.default_rng([SEED, seed])
    seen = set()
    for trial in range(12):
        n, m = int(rng.integers(4, 40)), int(rng.integers(1, 4))
        points = rng.standard_normal((m, n))
        centre = points.mean(1)
        targets = centre + rng.uniform(0.3, 4) * (points @ rng.dirichlet(np.full(n, 0.1)) - centre)
        result = maxent.solve(Microstates(named(points)), named(targets))
        seen.add(judge_and_solver_agree(linear, result, points, targets, f"seed {seed} trial {trial}"))
    assert {"inside", "outside"} <= seen


@pytest.mark.parametrize("seed", range(4))
def test_clarabel_agrees_on_random_targets_around_a_reachable_set(seed):
    rng = np.random.default_rng([SEED, seed])
    seen = set()
    for trial in range(8):
        d, m = int(rng.integers(2, 6)), int(rng.integers(2, 4))
        charges = np.array([pieces.hermitian(rng, d, is_complex=bool(trial % 2)) for _ in range(m)])
        if m > d * (d + 1) // 2 - 1:
            charges = charges[:2]
        vector = rng.standard_normal(d) + (1j if trial % 2 else 0) * rng.standard_normal(d)
        pure = np.outer(vector, vector.conj()) / np.linalg.norm(vector) ** 2
        targets = rng.uniform(0.4, 2.0) * pieces.values_in(charges, pure)
        result = maxent.solve(Matrices(named(charges)), named(targets))
        seen.add(judge_and_solver_agree(semidefinite, result, charges, targets, f"seed {seed} trial {trial}"))
    assert {"inside", "outside"} <= seen


CLASSICAL = ["classical", "near-face", "near-vertex", "boundary-face", "outside-face", "outside-vertex"]
CLASSICAL += ["near-ising", "boundary-ising", "outside-ising", "outside-dropped", "redundant-classical"]


@pytest.mark.parametrize("kind", CLASSICAL)
def test_highs_agrees_on_the_corpus(kind):
    for problem in problems.problems(kind, SEED, 4):
        stack, targets = arrays(problem)
        result = maxent.solve(problem.build(), problem.targets)
        judged = judge_and_solver_agree(linear, result, stack, targets, problem.identity)
        if (problem.depth or problem.distance or 0.0) > DECIDED:
            assert judged == SOLVER_SAYS[problem.verdict], problem.identity


QUANTUM = ["quantum-complex", "near-curved", "near-ball", "boundary-flat", "boundary-cone", "outside-flat"]
QUANTUM += ["outside-curved", "outside-ball", "outside-nonexposed", "inconsistent-combination"]


@pytest.mark.parametrize("kind", QUANTUM)
def test_clarabel_agrees_on_the_corpus(kind):
    for problem in problems.problems(kind, SEED, 3):
        stack, targets = arrays(problem)
        if stack.ndim == 2:
            stack = np.array([np.diag(row) for row in stack])
        result = maxent.solve(problem.build(), problem.targets)
        judged = judge_and_solver_agree(semidefinite, result, stack, targets, problem.identity)
        if (problem.depth or problem.distance or 0.0) > DECIDED:
            assert judged == SOLVER_SAYS[problem.verdict], problem.identity
        if problem.distance_is_exact:
            assert semidefinite.distance(stack, targets) == pytest.approx(
                problem.distance, abs=semidefinite.RESOLUTION
            ), problem.identity


@pytest.mark.parametrize("kind", ["quantum-real", "degenerate"])
def test_entropy_is_the_maximum_that_clarabel_finds_for_matrices(kind):
    asked = [p for p in problems.problems(kind, SEED, 9) if p.family == "Matrices" and p.size <= 4]
    asked = [p for p in asked if not any(np.iscomplexobj(a) for a in p.charges.values())]
    rng = np.random.default_rng(SEED)
    cases = [arrays(problem) for problem in asked]
    for d in (2, 3, 4):
        charges = np.array([pieces.hermitian(rng, d) for _ in range(2)])
        state, _ = pieces.gibbs(np.tensordot(pieces.multipliers(rng, charges, 3.0), charges, axes=1))
        cases.append((charges, pieces.values_in(charges, state)))
    for charges, targets in cases:
        result = maxent.solve(Matrices(named(charges)), named(targets))
        assert result.entropy == pytest.approx(semidefinite.entropy(charges, targets), abs=1e-6)


@pytest.mark.parametrize("has_weights", [False, True])
def test_entropy_is_the_maximum_that_clarabel_finds_for_microstates(has_weights):
    rng = np.random.default_rng([SEED, has_weights])
    for _ in range(5):
        n, m = int(rng.integers(4, 15)), int(rng.integers(1, 3))
        points, p = rng.standard_normal((m, n)), pieces.probabilities(rng, n)
        logs = rng.uniform(-4, 4, n) if has_weights else None
        result = maxent.solve(Microstates(named(points), log_weights=logs), named(points @ p))
        largest = semidefinite.shannon(points, points @ p, logs)
        assert result.entropy == pytest.approx(largest, abs=1e-6)
        assert result.entropy > (pieces.gibbs(-np.log(p))[1] + (0 if logs is None else p @ logs)) - 1e-12


@pytest.mark.parametrize("method", ["BFGS", "trust-exact"])
@pytest.mark.parametrize("is_complex", [False, True])
def test_general_minimisers_find_the_same_multipliers(method, is_complex):
    rng = np.random.default_rng([SEED, is_complex])
    for d, m in ((2, 2), (4, 3), (6, 4), (8, 5)):
        charges = np.array([pieces.hermitian(rng, d, is_complex=is_complex) for _ in range(m)])
        lam = pieces.multipliers(rng, charges, 2.0)
        state, _ = pieces.gibbs(np.tensordot(lam, charges, axes=1))
        targets = pieces.values_in(charges, state)
        result = maxent.solve(Matrices(named(charges)), named(targets))
        mine = np.array(list(result.multipliers.values()))
        assert mine == pytest.approx(descent.multipliers(charges, targets, method), abs=descent.RESOLUTION)
        assert result.covariance == pytest.approx(descent.dual(charges, targets, mine)[2], abs=1e-10)


@pytest.mark.parametrize("method", ["BFGS", "trust-exact"])
def test_general_minimisers_find_the_same_multipliers_for_microstates(method):
    rng = np.random.default_rng(SEED)
    for n, m in ((5, 1), (12, 3), (30, 5)):
        points = rng.standard_normal((m, n))
        targets = points @ pieces.gibbs(pieces.multipliers(rng, points, 3.0) @ points)[0]
        result = maxent.solve(Microstates(named(points)), named(targets))
        found = descent.multipliers(np.array([np.diag(row) for row in points]), targets, method)
        assert np.array(list(result.multipliers.values())) == pytest.approx(found, abs=descent.RESOLUTION)


def test_the_judges_know_a_known_distance():
    """The judges themselves: a triangle and the Bloch ball, distances in closed form."""
    triangle = np.array([[0.0, 1.0, 0.0], [0.0, 0.0, 1.0]])
    assert linear.distance(triangle, np.array([-0.25, -0.5])) == pytest.approx(0.75, abs=1e-9)
    assert linear.slack(triangle, np.array([0.2, 0.3])) == pytest.approx(0.2, abs=1e-9)
    assert linear.judgement(triangle, np.array([0.5, 0.5])) == "edge"
    ball = np.array([pieces.PAULI[a] for a in "xyz"])
    assert semidefinite.distance(ball, np.array([0.8, 0.6, 0.3])) == pytest.approx(np.sqrt(1.09) - 1, abs=1e-7)
    assert semidefinite.slack(ball, np.array([0.0, 0.0, 0.5])) == pytest.approx(0.25, abs=1e-7)
    assert semidefinite.judgement(ball, np.array([0.0, 0.6, 0.8])) == "edge"

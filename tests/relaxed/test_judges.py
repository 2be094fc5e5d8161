"""Independent judges on small problems: conic solvers, linear programs, and all sign patterns of a quadratic model."""

import itertools

import cvxpy as cp
import numpy as np
import pytest
from scipy.optimize import linprog

import maxent
from maxent import AtLeast, AtMost, Measured, Within
from maxent.core.kinks import Kinks, minimise_model
from maxent.families import Microstates
from tests.relaxed import problems
from tests.relaxed.problems import interval

#: What Clarabel resolves of an entropy here.
RESOLUTION = 2e-5


def limits(case, values):
    """Limits on the values as CVXPY constraints, and the penalty of the measured ones."""
    rules, cost = [], 0.0
    for j, target in enumerate(case.targets):
        low, high = interval(target)
        off = values[j] - case.centres[j]
        if isinstance(target, Measured):
            cost = cost + cp.square(off / target.sigma) / 2
        elif low == high:
            rules.append(off == 0)
        else:
            rules += [off <= high] if np.isfinite(high) else []
            rules += [off >= low] if np.isfinite(low) else []
    return rules, cost


def compare(case, task, values):
    task.solve(solver=cp.CLARABEL)
    assert task.status == cp.OPTIMAL
    result = maxent.solve(case.family(), case.asked)
    penalty = sum((result.residuals[n] / t.sigma) ** 2 / 2 for n, t in case.asked.items() if isinstance(t, Measured))
    assert result.success
    assert result.entropy - penalty == pytest.approx(task.value, abs=RESOLUTION)
    reached = np.array([float(v.value) for v in values])
    assert list(result.values.values()) == pytest.approx(reached.tolist(), abs=1e-3)


def small(sort, count, widest):
    """Constructed problems of one sort of family with few states and tolerances that a conic solver sees."""
    made = []
    for i in itertools.count(problems.SORTS.index(sort), len(problems.SORTS)):
        case = problems.solvable(np.random.default_rng([5, i]), i)
        widths = [getattr(t, "tolerance", getattr(t, "sigma", 1.0)) for t in case.targets]
        if case.charges.shape[-1] <= widest and min(widths) > 1e-2:
            made.append(case)
            if len(made) == count:
                return made


@pytest.mark.parametrize("case", small("listed", 12, 12))
def test_listed_states(case):
    p = cp.Variable(case.charges.shape[1])
    values = [q @ p for q in case.charges]
    rules, cost = limits(case, values)
    compare(case, cp.Problem(cp.Maximize(cp.sum(-cp.rel_entr(p, 1)) - cost), [cp.sum(p) == 1, *rules]), values)


@pytest.mark.parametrize("case", small("real", 6, 6))
def test_matrices(case):
    d = case.charges.shape[1]
    state = cp.Variable((d, d), PSD=True)
    values = [cp.trace(q @ state) for q in case.charges]
    rules, cost = limits(case, values)
    compare(case, cp.Problem(cp.Maximize(cp.von_neumann_entr(state) - cost), [cp.trace(state) == 1, *rules]), values)


# ---------------------------------------------------------------- degenerate faces, by linear programming


def largest_support(charges, low, high):
    """Number of states that some allowed distribution occupies: a linear program, homogeneous in the weights."""
    m, n = charges.shape
    rows = [np.append(charges[j] - high[j], np.zeros(n)) for j in range(m) if np.isfinite(high[j])]
    rows += [np.append(low[j] - charges[j], np.zeros(n)) for j in range(m) if np.isfinite(low[j])]
    rows += [np.append(-np.eye(n)[x], np.eye(n)[x]) for x in range(n)]
    cost = np.append(np.zeros(n), -np.ones(n))
    bounds = [(0, None)] * n + [(0, 1)] * n
    found = linprog(cost, A_ub=np.array(rows), b_ub=np.zeros(len(rows)), bounds=bounds, method="highs")
    assert found.status == 0
    return int(np.sum(found.x[n:] > 0.5))


def whole_numbers(rng):
    """Charges and edges that are small whole numbers or halves: many corners, redundancies and ties."""
    n, m, big = int(rng.integers(2, 14)), int(rng.integers(1, 6)), int(rng.integers(1, 4))
    charges = rng.integers(-big, big + 1, (m, n)).astype(float)
    point = charges[:, rng.integers(n)] if rng.random() < 0.7 else charges @ rng.dirichlet(np.ones(n))
    targets = []
    for x in point:
        centre = float(np.round(2 * x) / 2 + rng.choice([0, 0, 0, 0.5, -0.5, 1, -1]))
        kind = rng.integers(5)
        measured = Measured(centre, float(rng.choice([0.1, 1, 10])))
        tolerance = float(rng.choice([0.5, 1, 0.25, 1e-3]))
        targets.append((centre, Within(centre, tolerance), AtMost(centre), AtLeast(centre), measured)[kind])
    return charges, targets


def test_whole_numbers_against_linear_programs():
    wrong, seen = {}, set()
    for seed in range(200):
        charges, targets = whole_numbers(np.random.default_rng([9, seed]))
        centres = np.array([t if isinstance(t, float) else t.value for t in targets])
        low, high = (centres + np.array(x) for x in zip(*map(interval, targets), strict=True))
        support, n = largest_support(charges, low, high), charges.shape[1]
        names = [str(j) for j in range(len(charges))]
        result = maxent.solve(
            Microstates(dict(zip(names, charges, strict=True))), dict(zip(names, targets, strict=True))
        )
        truth = {0: ("infeasible", "inconsistent"), n: ("solved",)}.get(support, ("boundary",))
        seen |= {str(result.verdict)}
        if str(result.verdict) not in truth or (result.face is not None and result.face.dimension != support):
            wrong[seed] = f"{result.verdict} ({result.face}), {support} of {n} states"
    assert wrong == {}
    assert seen == {"infeasible", "inconsistent", "solved", "boundary"}


# ---------------------------------------------------------------- the quadratic model


def by_all_patterns(h, g, x, kinks):
    """Least value over all sign patterns, each solved as if its kinks were smooth."""
    best, where = np.inf, None
    value = lambda z: g @ (z - x) + 0.5 * (z - x) @ h @ (z - x) + kinks.value(z)
    choices = [((-1, 0, 1) if bent else (2,)) for bent in kinks.bent]
    for pattern in map(np.array, itertools.product(*choices)):
        on = pattern != 0
        slope = np.where(pattern == 1, kinks.upper, np.where(pattern == -1, kinks.lower, 0.0))
        z = np.zeros(len(x))
        if np.all(np.isfinite(slope)):
            z[on] = np.linalg.solve(h[np.ix_(on, on)], -(g - h @ x + slope)[on])
            fits = np.all((pattern == 2) | (z * pattern >= 0))
            if fits and value(z) < best:
                best, where = value(z), z
    return where


def test_the_quadratic_model_against_all_sign_patterns(rng):
    for _ in range(150):
        m = int(rng.integers(1, 6))
        root = rng.standard_normal((m, m))
        h, g = root @ root.T + 0.05 * np.eye(m), 2 * rng.standard_normal(m)
        ends = {0: (0.0, 0.0), 1: (-1.0, 1.0), 2: (-np.inf, 0.0), 3: (0.0, np.inf), 4: (-0.3, 1.0)}
        low, high = np.array([ends[int(k)] for k in rng.integers(0, 5, m)]).T
        kinks = Kinks(low, high)
        x = rng.standard_normal(m)
        x = np.where(np.isfinite(kinks.slope(x)), x, 0.0)
        assert minimise_model(h, g, x, kinks) == pytest.approx(by_all_patterns(h, g, x, kinks), abs=1e-9)

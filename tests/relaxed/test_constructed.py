"""Constructed problems: verdicts, multipliers and limit states as put in, optimality checked from the raw arrays."""

import numpy as np
import pytest

import maxent
from maxent import Measured
from tests.corpus import pieces
from tests.relaxed import problems
from tests.relaxed.problems import interval

#: Residuals in units of |Q_j| + |q_j|; float64 multipliers alone move the exponent by eps |lam_j| |Q_j|.
RESIDUAL, EPS = 1e-10, np.finfo(float).eps


def optimality(case, result):
    """Complaints about the conditions that make the state of the multipliers the answer (Karush-Kuhn-Tucker)."""
    lam = np.array(list(result.multipliers.values()))
    residual = pieces.values_in(case.charges, case.state(lam)) - case.centres
    wrong = []
    for j, target in enumerate(case.targets):
        low, high = interval(target)
        close = (RESIDUAL + 8 * EPS * np.sum(np.abs(lam) * case.sizes)) * case.sizes[j]
        if isinstance(target, Measured):
            if abs(residual[j] - target.sigma**2 * lam[j]) > close:
                wrong.append(f"{j}: residual {residual[j]}, sigma^2 lam {target.sigma**2 * lam[j]}")
            continue
        if not low - close <= residual[j] <= high + close:
            wrong.append(f"{j}: residual {residual[j]} outside {low}, {high}")
        edge = high if lam[j] > 0 else low
        if lam[j] != 0 and not abs(residual[j] - edge) <= close:
            wrong.append(f"{j}: multiplier {lam[j]} but residual {residual[j]}, edge {edge}")
    return wrong


def words(case, result):
    """Complaints about how the result tells it: places, what is not needed, residuals, the state."""
    wrong = []
    for name, target in case.asked.items():
        place, lam, r = result.slack[name], result.multipliers[name], result.residuals[name]
        low, high = interval(target)
        if isinstance(target, Measured):
            expected = {"penalised"}
        elif low == high:
            expected = {"exact"}
        else:
            expected = {"inside"} if lam == 0 else {"at the upper edge" if lam > 0 else "at the lower edge"}
        if result.success and place not in expected:
            wrong.append(f"{name}: {place}, expected {expected}")
        if (name in result.not_needed) != (place == "inside"):
            wrong.append(f"{name}: {place}, not needed: {result.not_needed}")
        index = case.names.index(name)
        operator, size = case.charges[index], case.sizes[index]
        if not abs(result.mean(operator) - result.values[name]) <= 1e-11 * size:
            wrong.append(f"{name}: the state gives {result.mean(operator)}, the result {result.values[name]}")
        centre = result.targets[name]
        if not abs(result.values[name] - centre - r) <= 1e-15 * size:
            wrong.append(f"{name}: residual {r}")
    return wrong


def certificate(case, result):
    """Complaints about the certificate, computed again from the raw arrays."""
    claim, wrong = result.certificate, []
    v = np.array([claim.direction[n] for n in case.names])
    combination = np.tensordot(v, case.charges, axes=1)
    lowest = combination.min() if combination.ndim == 1 else np.linalg.eigvalsh(combination)[0]
    slack = sum(max(x * e for e in interval(t)) for x, t in zip(v, case.targets, strict=True) if x != 0)
    margin = lowest - v @ case.centres - slack
    rounding = 1e-13 * np.abs(v) @ case.sizes
    if not (claim.tolerance <= rounding and abs(margin - claim.margin) <= rounding):
        wrong.append(f"margin {claim.margin}, recomputed {margin}, tolerance {claim.tolerance}")
    if not (abs(claim.slack - slack) <= rounding and abs(claim.lowest - claim.asked - slack - margin) <= rounding):
        wrong.append(f"slack {claim.slack}, recomputed {slack}, lowest {claim.lowest}, asked {claim.asked}")
    outside = claim.margin > claim.tolerance
    if outside != (case.verdict != "boundary"):
        wrong.append(f"margin {claim.margin}, tolerance {claim.tolerance}")
    if case.distance is not None and not claim.margin <= case.distance * (1 + 1e-9) + rounding:
        wrong.append(f"margin {claim.margin} exceeds the distance {case.distance}")
    check = claim.verify(case.family(), case.asked)
    if not check or abs(check.margin - claim.margin) > rounding or abs(check.slack - slack) > rounding:
        wrong.append(f"verify: {check}")
    return wrong


def judge(case):
    result = maxent.solve(case.family(), case.asked)
    found = str(result.verdict)
    if found != case.verdict:
        return [f"{found}, truth {case.verdict}: {result.message}"]
    if found in ("infeasible", "inconsistent"):
        return certificate(case, result)
    if found == "boundary":
        wrong = certificate(case, result) + words(case, result)
        off = np.abs(np.array(list(result.values.values())) - case.values) / case.sizes
        if not off.max() <= 1e-9:
            wrong.append(f"limit state off by {off.max()}")
        if result.face.dimension != case.dimension:
            wrong.append(f"face of dimension {result.face.dimension}, truth {case.dimension}")
        return wrong
    wrong = optimality(case, result) + words(case, result)
    if case.multipliers is not None:
        off = np.abs(np.array(list(result.multipliers.values())) - case.multipliers)
        allowed = 10 * np.array(list(result.multiplier_errors.values())) + 1e-9 * np.abs(case.multipliers).max()
        if np.any(off > allowed):
            wrong.append(f"multipliers off by {off}, errors {result.multiplier_errors}")
        zero = [result.multipliers[n] == 0.0 for n in case.names]
        if zero != list(case.multipliers == 0):
            wrong.append(f"zeros {zero}, truth {case.multipliers}")
    return wrong


def cases(kind, count):
    """The cases of one kind; every third one in units between 1e-4 and 1e4 of its own."""
    make = {
        "solvable": problems.solvable,
        "boundary": problems.boundary,
        "contradictory": problems.contradictory,
    }.get(kind)
    if make is None:
        move = float(kind.split()[1])
        make = lambda rng, i: problems.boundary(rng, i, move=move if kind.startswith("inside") else -move)
    for i in range(count):
        rng = np.random.default_rng([sum(map(ord, kind)), i])
        case = make(rng, i)
        yield case.scaled(10.0 ** rng.uniform(-4, 4, len(case.charges))) if i % 3 == 2 else case


OUTSIDE = [f"outside 1e-{k}" for k in range(1, 10)]
INSIDE = [f"inside 1e-{k}" for k in (2, 4, 6, 8)]


@pytest.mark.parametrize(
    ("kind", "count"),
    [("solvable", 120), ("boundary", 60), ("contradictory", 24), *[(kind, 10) for kind in OUTSIDE + INSIDE]],
)
def test_constructed(kind, count):
    complaints = {i: wrong for i, case in enumerate(cases(kind, count)) if (wrong := judge(case))}
    assert complaints == {}


def test_every_kind_of_target_in_every_kind_of_family_is_there():
    seen = set()
    for case in cases("solvable", 120):
        sort = "weights" if case.log_weights is not None else f"{case.charges.ndim} {case.charges.dtype.kind}"
        for target, lam in zip(case.targets, case.multipliers, strict=True):
            seen.add((sort, "float" if isinstance(target, float) else type(target).__name__, lam == 0))
    sorts = ("weights", "2 f", "3 f", "3 c")
    expected = {(s, k, True) for s in sorts for k in ("Within", "AtMost", "AtLeast")}
    expected |= {(s, k, False) for s in sorts for k in ("float", "Exact", "Within", "AtMost", "AtLeast", "Measured")}
    assert expected <= seen


def test_few_steps_on_the_boundary():
    steps = [maxent.solve(c.family(), c.asked).iterations for c in cases("boundary", 30)]
    assert max(steps) <= 100
    assert np.median(steps) <= 30


def test_a_wrong_answer_is_noticed():
    case = next(c for c in cases("solvable", 10) if np.all(c.multipliers) and len(c.targets) > 1)
    result = maxent.solve(case.family(), case.asked)
    assert optimality(case, result) == []
    result.multipliers[case.names[0]] *= 1 + 1e-6
    assert optimality(case, result) != []

"""The verdict: a list of stages, each of which looks at the problem once and answers or passes on.

Stages propose directions; the margin of a direction in the user's own charges (`Problem.verify`) and the existence
proof decide.  Nothing is decided by the size of the multipliers, by the residual alone, or by an iteration count.
Floor: core.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from maxent.core.centre import centre, starts_along
from maxent.core.contract import EPS, SAFETY, Family, Problem, Verdict
from maxent.core.exists import minimiser_exists
from maxent.core.faces import EARLY, LATE, look, outside
from maxent.core.newton import PATIENCE, at_floor, begin, newton_step, settle
from maxent.core.outcome import Memo, Outcome
from maxent.core.whiten import whiten

__all__ = ["decide", "decide_targets"]

#: Targets this many times larger than the charge are judged on the charge as it was given.
FAR = 1e6

#: Relative depth below which rounding, amplified by the closeness of the boundary, defeats the existence proof.
CLOSE = 1e-8

#: Ratio of the largest to the smallest variance at which the coordinates of unbounded charges are made anew
#: at once, and when the Newton decrement is below NEAR.
WIDE, CLEAR, NEAR = 1e6, 1e2, 1e-3

#: Relative distance to the edge of the domain at which a residual that no longer falls is what the edge leaves.
EDGE = 1e-9

#: Newton steps before the search turns to faces and the analytic centre.
LIMIT = 200


def decide(problem: Problem, *, driver: str = "host", depth: int = 0) -> Outcome:
    """Verdict on `problem`.

    Parameters
    ----------
    problem : Problem
    driver : {"host", "jax"}
        Who runs the Newton iteration; faces and certificates are always decided on the host.
    depth : int
        Number of faces this problem lies inside.
    """
    whitening = whiten(problem)
    family = problem.family.combine(whitening.transform, np.zeros(whitening.rank))
    memo = Memo(whitening, family, np.abs(whitening.transform) @ problem.unit, driver=driver, depth=depth)
    for stage in STAGES:
        answer = stage(problem, memo)
        if answer is not None:
            return answer
    values = whitening.values(memo.here.evaluation.values)
    reproduced = memo.floored and np.all(np.abs(values) <= EARLY * problem.size)
    reason = memo.reason or family.obstacle(memo.here.lam)
    reason = reason or "no stage could prove or refute that the targets can be reached"
    if reproduced:
        reason = (
            "targets reproduced to rounding; whether they lie inside or on the boundary is not decidable at this "
            "precision"
        )
    return memo.outcome(problem, Verdict.UNFINISHED, family=family, values=values, reason=reason, evidence="tested")


def decide_targets(family: Family, targets: np.ndarray, accuracy: np.ndarray, *, driver: str = "host") -> Outcome:
    """Verdict on giving the charges of `family` the values `targets`.

    Targets so far away that counting from them would swallow the charge itself are answered before.
    """
    problem = Problem.pose(family, targets, accuracy)
    scale = family.scale
    for j in np.flatnonzero(np.abs(targets) / FAR > scale):
        v = np.eye(len(targets))[j] * -np.sign(targets[j])
        low = family.lowest(v)
        constant = low.highest - low.value <= SAFETY * EPS * scale[j]
        margin, tolerance = low.value - float(v @ targets), float(np.abs(v) @ problem.unit + SAFETY * low.error)
        if not constant and margin > tolerance:
            at_zero = whiten(Problem(family, EPS * scale, accuracy))
            whitening = replace(at_zero, mean=at_zero.mean - targets)
            return Outcome(Verdict.INFEASIBLE, problem, whitening, direction=v, margin=margin, tolerance=tolerance)
    return decide(problem, driver=driver)


# ---------------------------------------------------------------- stages


def contradiction(problem: Problem, memo: Memo) -> Outcome | None:
    """Inconsistent: a combination of the charges is a number, and the targets give it another value."""
    worst = None
    for c in memo.whitening.contradictions():
        margin, tolerance = problem.verify(c)
        # on a face the restriction itself leaves a remainder; only a gross contradiction counts there
        real = memo.depth == 0 or margin > 1e-6 * np.abs(problem.family.scale).max()
        if margin > tolerance and real and (worst is None or margin / tolerance > worst[1] / worst[2]):
            worst = (c, margin, tolerance)
    if worst is None:
        return None
    c, margin, tolerance = worst
    return memo.outcome(problem, Verdict.INCONSISTENT, direction=c, margin=margin, tolerance=tolerance)


def nothing_free(problem: Problem, memo: Memo) -> Outcome | None:
    """Solved without multipliers: no charge has any spread, the state is the prior."""
    if memo.whitening.rank:
        return None
    values = problem.family.evaluate(np.zeros(len(problem.noise))).values if len(problem.noise) else np.zeros(0)
    if not np.all(np.isfinite(values)):
        memo.reason = "the charges or targets are too large for float64 arithmetic"
        return memo.outcome(problem, Verdict.UNFINISHED, reason=memo.reason, evidence="tested")
    return memo.outcome(problem, Verdict.SOLVED, family=problem.family, values=values)


def first_look(problem: Problem, memo: Memo) -> Outcome | None:
    """Steepest direction at the start; settles many unreachable targets without any iteration."""
    start = memo.whitening.inverse.T @ problem.family.start()
    memo.at = begin(memo.family.evaluate, start)
    hit = outside(problem, memo, memo.at.evaluation.values)
    if hit is None and np.any(problem.accuracy):
        # single charges: the coarse accuracy of another one hides what lies outside along a mixture with it
        sides = (side * memo.whitening.inverse[j] for j in range(len(problem.accuracy)) for side in (1.0, -1.0))
        hit = next(filter(None, (outside(problem, memo, x) for x in sides)), None)
    return hit


def descend(problem: Problem, memo: Memo) -> Outcome | None:
    """Newton's iteration; looks for faces on the way, and stops on a certificate that comes free of charge."""
    if memo.driver == "jax":
        from maxent.core.compiled import minimise
        from maxent.core.limited import MANY, minimise_limited

        route = minimise if memo.whitening.rank <= MANY else minimise_limited
        lam, memo.iterations = route(memo.family.traced(), memo.here.lam)
        memo.at = begin(memo.family.evaluate, lam)
    best, lowest, before, stalled = np.inf, np.inf, np.inf, 0
    rows = None if memo.depth else problem.family.domain()
    unbounded, renewed = _is_unbounded(memo.family), False
    for count in range(LIMIT):
        if unbounded and _skewed(memo, renewed):
            # the last steps in coordinates made for this state: they resolve a condensate to its last digits
            renewed, best = _decrement(memo) < NEAR, np.inf
            _whiten_anew(problem, memo)
        at = memo.here
        ev, size = at.evaluation, float(at.residual)
        memo.trace.append((size, float(ev.log_partition), float(ev.level)))
        if _promises_separation(problem, memo) and (hit := outside(problem, memo, at.lam)):
            return hit
        if at_floor(at):
            memo.floored = True
            return None
        # along a diverging path a step gains a factor e at best; faster ones are on their way to a minimum
        slow = count >= 8 and count % 4 == 0 and size > 0.1 * before
        if slow and ev.level > 20 and (hit := look(problem, memo, at.lam, decide, step=memo.step)):
            return hit
        # on a plateau (one state holds everything) F falls while the residual stands still: that is progress
        falls = ev.log_partition < lowest - 160 * EPS * (abs(ev.log_partition) + ev.level + 1)
        if not at.rejected:  # a rejected step only shrinks the trust region
            stalled = 0 if size < 0.5 * best or falls else stalled + 1
        best = size if size < 0.5 * best else best
        lowest = min(lowest, float(ev.log_partition))
        if (stalled >= 4 and size <= 1e3 * ev.rounding) or at.rejected > PATIENCE:
            memo.floored = bool(size <= 1e4 * ev.rounding)
            return None
        if rows is not None and size > 0.9 * before and _at_edge(rows, memo.whitening.transform.T @ at.lam):
            return None
        before = size
        memo.at = newton_step(memo.family.evaluate, at, memo.family.inside)
        memo.step = memo.at.lam - at.lam
        memo.iterations += 1
    return None


def _is_unbounded(family: Family) -> bool:
    """Whether the charges have no largest or no lowest value; a family that knows its reach is not even asked."""
    reach = family.reach()
    if not len(reach) or np.all(np.isfinite(reach)):
        return False
    low = family.lowest(np.eye(len(reach))[0])
    return not np.isfinite(low.highest - low.value)


def _at_edge(rows: np.ndarray, lam: np.ndarray) -> bool:
    """Whether the multipliers have come so near to the edge of the domain that it is what holds them."""
    return bool(np.any(rows @ lam <= EDGE * (np.abs(rows) @ np.abs(lam))))


def _skewed(memo: Memo, renewed: bool) -> bool:
    """Whether the coordinates of unbounded charges no longer fit the state, near the end more narrowly."""
    h = memo.here.curvature
    return bool(h[-1] > WIDE * h[0] or (not renewed and _decrement(memo) < NEAR and h[-1] > CLEAR * h[0]))


def _decrement(memo: Memo) -> float:
    """Newton decrement: the residual in units of the fluctuations, whatever the coordinates."""
    along, h = memo.here.axes.T @ memo.here.evaluation.values, memo.here.curvature
    return float(np.sqrt(np.sum(along**2 / np.maximum(h, 1e-150))))


def _whiten_anew(problem: Problem, memo: Memo) -> None:
    """Coordinates in which the covariance at hand is the identity.

    For unbounded charges alone: a level with n particles has a variance of n^2, and coordinates made for a few
    particles resolve its exponent ~1/n with a relative error of eps n only.
    """
    at = memo.here
    root = np.sqrt(np.maximum(at.curvature, 1e-30 * at.curvature[-1]))
    renewed = lambda x: root * (at.axes.T @ x)
    memo.whitening = replace(
        memo.whitening,
        transform=(at.axes / root).T @ memo.whitening.transform,
        inverse=memo.whitening.inverse @ (at.axes * root),
        mean=memo.whitening.values(at.evaluation.values),
    )
    memo.family = problem.family.combine(memo.whitening.transform, np.zeros(len(root)))
    memo.unit = np.abs(memo.whitening.transform) @ problem.unit
    memo.near = [(margin, renewed(x)) for margin, x in memo.near]
    memo.at = begin(memo.family.evaluate, renewed(at.lam))


def _promises_separation(problem: Problem, memo: Memo) -> bool:
    """Whether ``lam`` itself may separate the targets: a trigger, not evidence."""
    at, ev = memo.here, memo.here.evaluation
    if not np.any(at.lam):
        return False
    if ev.lowest is not None:
        return bool(ev.lowest > np.abs(at.lam) @ memo.unit + SAFETY * EPS * ev.level)
    return bool(ev.log_partition < problem.family.entropy_floor - 1e-9)


def edge_of_domain(problem: Problem, memo: Memo) -> Outcome | None:
    """Unattained: the minimiser lies on the edge of the domain of ``ln Z``, where the slope does not vanish.

    The multiplier across the edge is held at zero and the rest solved.  The dual is convex, so a slope that points out
    of the domain there proves the minimum; the slope is the excess that no state of largest entropy can take up.
    """
    rows = problem.family.domain()
    if rows is None or memo.depth or not memo.whitening.rank or memo.floored:
        return None
    height = rows @ (memo.whitening.transform.T @ memo.here.lam)
    for i in np.argsort(height):
        basis = np.linalg.svd(rows[i : i + 1])[2][1:]
        unit = np.abs(basis) @ problem.noise, np.abs(basis) @ problem.accuracy
        below = decide(Problem(problem.family.combine(basis, np.zeros(len(basis))), *unit), depth=memo.depth + 1)
        memo.iterations += below.iterations
        if below.verdict is not Verdict.SOLVED:
            continue
        x = np.zeros(0) if below.at is None else below.whitening.transform.T @ below.at.lam
        lam = basis.T @ x
        excess = -problem.family.evaluate(lam).values
        inside = np.all(np.delete(rows, i, axis=0) @ lam >= 0)
        if inside and excess @ rows[i] > problem.unit @ np.abs(rows[i]):
            return memo.outcome(
                problem,
                Verdict.UNATTAINED,
                family=below.family,
                values=-excess,
                excess=excess,
                evidence="tested",
            )
    return None


def existence(problem: Problem, memo: Memo) -> Outcome | None:
    """Solved: residual at its floor, and a minimiser exists for every target within the noise."""
    if not memo.floored:
        return None
    ok, memo.shift, evidence = minimiser_exists(memo.family, memo.here, memo.unit)
    return _solved(problem, memo, evidence) if ok else None


def face_in_sight(problem: Problem, memo: Memo) -> Outcome | None:
    """A certificate near the direction in which the iteration ended."""
    return look(problem, memo, memo.here.lam, decide, step=memo.step)


def interior(problem: Problem, memo: Memo) -> Outcome | None:
    """The analytic centre: a minimum of the barrier proves the targets interior, its escape hands out directions."""

    def ask(lam: np.ndarray, step: np.ndarray, count: int) -> Outcome | None:
        hit = outside(problem, memo, step)
        size = np.linalg.norm(lam)
        if hit or not (size > 1e12 or (size > 1e2 and count % 4 == 0)):
            return hit
        return look(problem, memo, lam, decide, step=step)

    memo.near.sort(key=lambda pair: -pair[0])
    starts = starts_along(memo.family, [memo.here.lam, *[v for _, v in memo.near[:4]]])
    end = centre(memo.family, memo.unit, [np.zeros(memo.whitening.rank), *starts], ask)
    if end.found is not None:
        return end.found
    if end.status != "interior":
        last = memo.here.lam if end.lam is None else end.lam
        return look(problem, memo, last, decide, late=True)
    for _ in range(2 * LIMIT):
        if memo.floored or memo.here.rejected > PATIENCE:
            break
        memo.at = newton_step(memo.family.evaluate, memo.here, memo.family.inside)
        memo.floored = bool(at_floor(memo.at))
        memo.iterations += 1
    if memo.floored or memo.here.residual <= 1e3 * memo.here.evaluation.rounding:
        return _solved(problem, memo, "proved")
    memo.reason = f"the targets are interior, but the residual stays at {float(memo.here.residual):.1e}"
    return None


def nominal(problem: Problem, memo: Memo) -> Outcome | None:
    """Solved for the targets as given, though their stated accuracy reaches to the boundary or beyond.

    Not all targets within the accuracy have multipliers, or not provably: "tested" is the most that can be said.
    """
    if not (memo.floored and np.any(problem.accuracy)):
        return None
    exact = SAFETY * np.abs(memo.whitening.transform) @ problem.noise
    ok, memo.shift, _ = minimiser_exists(memo.family, memo.here, exact)
    return _solved(problem, memo, "tested") if ok else None


def close_call(problem: Problem, memo: Memo) -> Outcome | None:
    """Solved, tested: interior to every face that was seen, by more than the tolerance, though not provably so.

    The noise of the charges, amplified by the closeness of the boundary, defeats the proofs within about 1e-11 of it;
    the depths that were measured on the way are still larger than what rounding leaves undecided.
    """
    off = np.abs(memo.whitening.values(memo.here.evaluation.values))
    # a depth that does not explain why the proofs failed is no sign of closeness: the exposing direction was not seen
    close = memo.near and -max(margin for margin, _ in memo.near) <= CLOSE * np.max(problem.size)
    if not memo.floored or not close or memo.touched or np.any(off > EARLY * problem.size):
        return None
    return _solved(problem, memo, "tested")


def _solved(problem: Problem, memo: Memo, evidence: str) -> Outcome | None:
    """Solved, unless the state misses the targets.

    A residual far below the spread of a charge may be large beside its target: a condensate spreads as far as it is.
    """
    memo.at = settle(memo.family.evaluate, memo.here)
    values = memo.whitening.values(memo.here.evaluation.values)
    if np.any(np.abs(values) > EARLY * problem.size):
        memo.at = settle(memo.family.evaluate, memo.here, anyway=True)
        values = memo.whitening.values(memo.here.evaluation.values)
    off = np.abs(values)
    if np.any(off > LATE * problem.size + problem.accuracy):
        missed = float(np.max(off / problem.size))
        memo.reason = f"the targets can be reached, but to rounding a state misses them by {missed:.0e} of their size"
        return None
    return memo.outcome(problem, Verdict.SOLVED, family=memo.family, values=values, evidence=evidence)


STAGES = (
    contradiction, nothing_free, first_look, descend, edge_of_domain, existence, face_in_sight, interior, nominal,
    close_call,
)  # fmt: skip

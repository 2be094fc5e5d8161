"""The verdict on relaxed targets: find the edges that hold, decide the equality problem on them, check the rest.

The dual ``F(lam) + h(lam) + lam.C.lam/2`` (`Slack`) is descended by Newton steps that keep its kinks (`kinks`).  As
soon as two steps in a row agree on the edges that hold, the equality problem on these edges goes to the certified
`decide`; its answer is taken over only when it also answers the relaxed problem:

* solved, and every multiplier has the sign of its edge, and every other residual lies in its interval;
* outside by a direction v whose signs fit: then ``lowest(v) > h(v)``, no state is allowed;
* on the boundary by such a direction: allowed states have the charges in v at their edges and live on its ground space,
  where the relaxed problem is decided in turn.

Otherwise the descent goes on.  Charges with slack are not whitened with one another, for their kinks lie along the
user's own charges; they are only freed of what the exact charges fix already.  Floor: core.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, replace

import numpy as np

from maxent.core.contract import EPS, SAFETY, Face, Family, Problem, Verdict
from maxent.core.decide import decide
from maxent.core.faces import on_face
from maxent.core.kinks import Kinks, Point, advance, look_ahead
from maxent.core.newton import Iterate, curvatures
from maxent.core.outcome import Outcome
from maxent.core.penalised import Penalised
from maxent.core.slack import Slack
from maxent.core.whiten import Whitening, whiten

__all__ = ["Relaxed", "decide_relaxed", "limit_on_face"]

#: Steps of the descent, rejected steps in a row, faces inside faces.
LIMIT, PATIENCE, DEEPEST = 200, 12, 12
#: Relative violation up to which a limit state counts as one that is allowed.
ALLOWED = 1e-8


@dataclass(frozen=True)
class Relaxed:
    """Verdict on a relaxed problem.

    Attributes
    ----------
    outcome : Outcome
        In all charges, counted from the centres of their targets.
    side : (m,) ndarray
        1 at the upper edge, -1 at the lower edge, 0 inside or without edges.
    active : Outcome or None
        The equality problem that settled it, in the charges `kept`; its iterate holds their multipliers.
    kept : (k,) int ndarray
    last : (m,) ndarray
        Multipliers where the search ended.
    """

    outcome: Outcome
    side: np.ndarray
    last: np.ndarray
    active: Outcome | None = None
    kept: np.ndarray = field(default_factory=lambda: np.zeros(0, int))


def decide_relaxed(problem: Problem, slack: Slack, *, driver: str = "host", depth: int = 0) -> Relaxed:
    """Verdict on `problem` with residuals left open by `slack`.

    Parameters
    ----------
    problem : Problem
        Charges counted from the centres of their targets.
    slack : Slack
    driver : {"host", "jax"}
        Who runs the Newton iteration of equality problems without a penalty.
    depth : int
        Number of faces this problem lies inside.
    """
    if not slack.any:
        none = np.zeros(len(problem.noise))
        return Relaxed(decide(problem, driver=driver, depth=depth), none, none)
    search = _Search.begin(slack.noisy(problem), slack, driver, depth)
    return search.contradiction() or search.descend()


def _unconstrained(problem: Problem) -> Outcome:
    """The problem without any charge: solved by the prior."""
    none, empty = np.zeros(0), np.zeros((0, 0))
    whitening = Whitening(empty, empty, (), none, none, none)
    return Outcome(Verdict.SOLVED, Problem(problem.family, none, none), whitening)


def limit_on_face(
    problem: Problem, slack: Slack, v: np.ndarray, tolerance: float, *, depth: int = 0, late: bool = True
) -> tuple[Face, Relaxed, np.ndarray] | None:
    """The ground space of a direction that touches what is allowed, the allowed limit state on it, and the edges.

    Charges that take part in `v` are exact there, at the edges (m,) from which the charges on the face are counted.
    None when there is no such state.
    """
    pinned, edge = slack.pinned(v)
    ground = problem.family.combine(np.eye(len(edge)), edge).face(v, tolerance)
    if ground is None or (ground.gap < 1e-6 and not late):
        return None
    below = decide_relaxed(on_face(problem, ground), pinned, depth=depth + 1)
    found = below.outcome
    if found.verdict not in (Verdict.SOLVED, Verdict.BOUNDARY) or found.values is None:
        return None
    off = np.where(pinned.is_penalised, 0.0, pinned.excess(found.values))
    if np.any(np.abs(off) > ALLOWED * problem.size + problem.accuracy):
        return None
    return ground, below, edge


@dataclass
class _Search:
    """One relaxed problem on the way to its verdict: the one mutable object here."""

    problem: Problem
    slack: Slack
    driver: str
    depth: int
    whitening: Whitening
    rows: np.ndarray
    transform: np.ndarray
    family: Family
    kinks: Kinks
    curvature: np.ndarray
    iterations: int = 0
    reason: str = ""
    trace: list[tuple[float, float, float]] = field(default_factory=list)
    lam: np.ndarray = field(default_factory=lambda: np.zeros(0))
    hints: list[np.ndarray] = field(default_factory=list)
    known: dict[bytes, tuple[Outcome | None, np.ndarray]] = field(default_factory=dict)

    @classmethod
    def begin(cls, problem: Problem, slack: Slack, driver: str, depth: int) -> _Search:
        """Coordinates of the descent: exact charges whitened, the others freed of them and scaled."""
        m = len(problem.noise)
        _, rows = problem.family.reference()
        fixed, free = np.flatnonzero(slack.is_exact), np.flatnonzero(~slack.is_exact)
        pick = np.eye(m)
        sub = Problem(
            problem.family.combine(pick[fixed], slack.lower[fixed]), problem.noise[fixed], problem.accuracy[fixed]
        )
        inner = whiten(sub) if len(fixed) else None
        top = np.zeros((0, m))
        if inner is not None:
            top = inner.transform @ pick[fixed]
        frame = top @ rows
        share = rows[free] @ frame.T
        share = share + (rows[free] - share @ frame) @ frame.T  # twice, for orthogonality to rounding
        left = np.linalg.norm(rows[free] - share @ frame, axis=1)
        whole = np.linalg.norm(rows[free], axis=1)
        known = left > SAFETY * problem.noise[free]
        unit = np.where(known, left, np.where(whole > SAFETY * problem.noise[free], whole, 1.0))
        transform = np.concatenate([top, (pick[free] - share @ top) / unit[:, None]])
        centre = np.where(slack.is_exact, slack.lower, 0.0)
        penalty = transform @ slack.penalty @ transform.T
        family = problem.family.combine(transform, transform @ centre)
        zero = np.zeros(len(top))
        penalised = slack.is_penalised[free]
        ends = [np.where(penalised, 0.0, x[free] / unit) for x in (slack.lower, slack.upper)]
        kinks = Kinks(np.concatenate([zero, ends[0]]), np.concatenate([zero, ends[1]]))
        return cls(problem, slack, driver, depth, whiten(problem), rows, transform, family, kinks, penalty)

    # ------------------------------------------------------------------ answers

    def contradiction(self) -> Relaxed | None:
        """Inconsistent: a combination of the charges is a number which the slack does not reach."""
        for c in self.whitening.contradictions():
            for sign in (1.0, -1.0):
                hit = self.outside(sign * c)
                if hit is not None:
                    return hit
        return None

    def outside(self, v: np.ndarray) -> Relaxed | None:
        """No state is allowed, when `v`, freed of wrong signs, separates all states from what is asked."""
        direction = self.slack.admissible(v)
        if direction is None:
            return None
        margin, tolerance, constant = self.slack.verify(self.problem, direction)
        if not margin > tolerance:
            return None
        # on a face the restriction itself leaves a remainder; only a gross contradiction counts there
        if constant and self.depth and not margin > 1e-6 * np.abs(self.problem.family.scale).max():
            return None
        verdict = Verdict.INCONSISTENT if constant else Verdict.INFEASIBLE
        return self.answer(verdict, direction=direction, margin=margin, tolerance=tolerance)

    def answer(self, verdict: Verdict, **known) -> Relaxed:
        """Answer without a state of full support."""
        side = known.pop("side", np.zeros(len(self.problem.noise)))
        outcome = Outcome(
            verdict, self.problem, self.whitening, iterations=self.iterations, trace=tuple(self.trace), **known
        )
        last = self.lam if len(self.lam) else np.zeros(len(self.problem.noise))
        return Relaxed(outcome, side, last)

    # ------------------------------------------------------------------ the descent

    def evaluate(self, x: np.ndarray):
        """The smooth part of the dual."""
        ev = self.family.evaluate(x)
        pull = self.curvature @ x
        return replace(
            ev,
            log_partition=ev.log_partition + 0.5 * float(x @ pull),
            values=ev.values - pull,
            covariance=ev.covariance + self.curvature,
        )

    def descend(self) -> Relaxed:
        """Newton steps with kinks; an attempt to finish whenever the edges that hold have settled."""
        x = np.linalg.lstsq(self.transform.T, self.problem.family.start(), rcond=None)[0] if len(self.transform) else []
        x = np.asarray(x, float)
        x = np.where(np.isfinite(self.kinks.slope(x)), x, 0.0)
        first = self.evaluate(x)
        if not np.isfinite(first.log_partition):
            reason = "ln Z is infinite at all multipliers tried that the limits allow: there is no largest entropy"
            return self.answer(Verdict.UNFINISHED, reason=reason, evidence="tested")
        at = look_ahead(x, 1.0 + float(np.linalg.norm(x)), first, self.kinks, 0)
        before: bytes | None = None
        tried: dict[bytes, int] = {}
        for count in range(LIMIT):
            self.note(at)
            hit = self.separation(at)
            if hit is not None:
                return hit
            side = self.side(at.target)
            key = side.tobytes()
            floored = at.model_decrease <= at.blind and at.rejected == 0 and count > 0
            ended = floored or at.rejected > PATIENCE
            if ended or (key == before and count >= tried.get(key, 0)):
                self.hints = [at.x, at.target - at.x]
                hit = self.finish(side, tried, late=ended)
                if hit is not None:
                    return hit
                tried[key] = count + 4
                if ended:
                    break
            before = key
            at = advance(self.evaluate, at, self.kinks)
            self.iterations += 1
        reason = self.reason or (
            "the edges on which the targets hold were not found: the state is so close to the boundary of what can be "
            "reached that rounding hides them"
        )
        values = self.in_whitened(at.x)[2]
        return self.answer(Verdict.UNFINISHED, values=values, reason=reason, evidence="tested")

    def note(self, at: Point) -> None:
        """Keep the books."""
        pull = self.kinks.steepest(at.x, -at.evaluation.values)
        level = float(at.evaluation.level)
        self.trace.append((float(np.linalg.norm(pull)), float(at.evaluation.log_partition), level))
        self.lam = self.transform.T @ at.x

    def separation(self, at: Point) -> Relaxed | None:
        """The iterate itself as a certificate: free of charge when the evaluation knows its lowest value."""
        lowest = at.evaluation.lowest
        if not np.any(at.x) or (lowest is not None and not lowest > self.kinks.value(at.x)):
            return None
        if lowest is None and not at.value < self.problem.family.entropy_floor:
            return None
        return self.outside(self.lam)

    def side(self, x: np.ndarray) -> np.ndarray:
        """Edges that hold at x, (m,)."""
        out = np.zeros(len(self.problem.noise))
        free = np.flatnonzero(~self.slack.is_exact)
        out[free] = np.sign(x[len(x) - len(free) :])
        return np.where(self.slack.has_edge, out, 0.0)

    # ------------------------------------------------------------------ the finish

    def finish(self, side: np.ndarray, tried: dict[bytes, int], *, late: bool) -> Relaxed | None:
        """Decide the equality problem on the edges `side`; flip what disagrees and repeat a few times."""
        seen: set[bytes] = set()
        while side.tobytes() not in seen and len(seen) < (len(side) + 3 if late else 3):
            seen.add(side.tobytes())
            below, kept = self.equality(side)
            if below is None:
                return None
            if below.verdict is Verdict.SOLVED:
                hit, new, grazed = self.solved(below, kept, side)
                if hit is None:
                    side = new
                    continue
                return (self.edge_of_reach(new, late=late) if grazed else None) or hit
            if below.verdict is Verdict.UNATTAINED and below.excess is not None and below.values is not None:
                return self.unattained(below, kept, side)
            self.reason = below.reason
            hit = self.certified(below, kept, side, late=late)
            if hit is not None or below.direction is None:
                return hit
            # a direction against an edge says that this edge cannot be passed: nothing has to hold it
            against = np.zeros(len(side))
            against[kept] = below.direction
            if not np.any(against * side < 0):
                return None
            side = np.where(against * side < 0, 0.0, side)
        return None

    def equality(self, side: np.ndarray) -> tuple[Outcome | None, np.ndarray]:
        """Outcome of the problem with the charges on their edges and the penalised ones, and which these are."""
        key = side.tobytes()
        if key not in self.known:
            self.known[key] = self._equality(side)
            below = self.known[key][0]
            self.iterations += 0 if below is None else below.iterations
        return self.known[key]

    def _equality(self, side: np.ndarray) -> tuple[Outcome | None, np.ndarray]:
        m = len(side)
        edge = self.slack.edges(side)
        held = np.flatnonzero(self.slack.is_exact | (side != 0))
        soft = np.flatnonzero(self.slack.is_penalised)
        both = np.sort(np.concatenate([held, soft]))
        pose = lambda idx: Problem(
            self.problem.family.combine(np.eye(m)[idx], edge[idx]), self.problem.noise[idx], self.problem.accuracy[idx]
        )
        below = None
        if not len(both):  # nothing holds: the prior, if there is one
            sound = np.isfinite(self.problem.family.evaluate(np.zeros(m), 1).log_partition)
            return (_unconstrained(self.problem) if sound else None), both
        if len(held):
            exact = pose(held)
            # an infinite list may not converge without the charges that are left out
            if len(held) < m and not np.isfinite(exact.family.evaluate(exact.family.start(), 1).log_partition):
                return None, held
            below = decide(exact, driver=self.driver, depth=self.depth)
            if below.verdict is not Verdict.SOLVED or not len(soft):
                return below, held
        whole = pose(both)
        penalised = Penalised.of(whole.family, self.slack.penalty[np.ix_(both, both)])
        above = decide(replace(whole, family=penalised), depth=self.depth)
        if below is not None:
            above = replace(above, iterations=above.iterations + below.iterations)
        return above, both

    def edge_of_reach(self, side: np.ndarray, *, late: bool) -> Relaxed | None:
        """Boundary, when the values that an answer leaves at an edge to rounding can only be had on a face.

        Far out, where the weights of whole faces fall below rounding, such values look as if they were met by accident.
        """
        below, kept = self.equality(side)
        if below is None:
            return None
        return self.certified(below, kept, side, late=late) if below.verdict is Verdict.BOUNDARY else None

    def solved(self, below: Outcome, kept: np.ndarray, side: np.ndarray) -> tuple[Relaxed | None, np.ndarray, bool]:
        """The optimality conditions at a solved equality problem.

        The answer, or None; the edges to try next, or those on which values lie without need; whether there are any.
        """
        m = len(side)
        lam = np.zeros(m)
        embed = np.eye(m)[kept]
        inner = np.zeros(0)
        if below.at is not None and below.whitening.rank:
            inner = below.at.lam
            lam[kept] = below.whitening.minimum_norm(below.whitening.transform.T @ inner)
        x, ev, values = self.in_whitened(inner, below.whitening.transform @ embed)
        residual = np.where(self.slack.is_penalised, 0.0, values)
        rounding = SAFETY * self.problem.noise + SAFETY * EPS * (1 + float(ev.level)) * self.whitening.spread
        over = self.slack.excess(residual)
        wrong = (side != 0) & (lam * side < 0)
        missed = self.slack.has_edge & (side == 0) & (np.abs(over) > rounding + self.problem.accuracy)
        if np.any(wrong) or np.any(missed):
            self.lam = lam
            return None, np.where(wrong, 0.0, np.where(missed, np.sign(over), side)), False
        # fresh, and against the sizes of the charges: `rounding` grows without bound with the multipliers
        kept_off = np.abs(np.where(self.slack.is_penalised, 0.0, over))
        kept_off = np.where(side != 0, np.maximum(kept_off, np.abs(residual - self.slack.edges(side))), kept_off)
        if not np.all(kept_off <= ALLOWED * self.problem.size + self.problem.accuracy):
            cause = "charges counted from a far value lose digits"
            if np.any(self.slack.is_penalised) and ev.level > 1 / ALLOWED:
                cause = "a standard error may be too small for a measured value that no state has"
            self.reason = (
                f"rounding leaves a target or limit missed by {kept_off.max():.0e}, with multipliers as large as "
                f"{np.abs(lam).max():.0e}: {cause}"
            )
            return None, side, False
        at, family = None, self.problem.family
        if self.whitening.rank:
            at = Iterate(x, 1.0, ev, *curvatures(ev), 0)
            family = family.combine(self.whitening.transform, np.zeros(self.whitening.rank))
        outcome = Outcome(
            Verdict.SOLVED, self.problem, self.whitening, evidence=below.evidence, family=family, at=at, values=values,
            shift=below.shift, depth=below.depth, iterations=self.iterations, trace=tuple(self.trace),
        )  # fmt: skip
        top, bottom = (np.abs(residual - end) <= rounding for end in (self.slack.upper, self.slack.lower))
        free = self.slack.has_edge & (side == 0)
        near = np.where(free, top.astype(float) - bottom.astype(float), 0.0)
        return Relaxed(outcome, side, lam, below, kept), side + near, bool(np.any(near))

    def in_whitened(self, x: np.ndarray, rows: np.ndarray | None = None):
        """Multipliers of the charges ``rows @ Q`` in the whitened coordinates of all, evaluation, the user's values.

        The change of frame is made from the charges' own rows: multipliers in the user's charges would lose the digits
        that nearly dependent charges cost.
        """
        if not self.whitening.rank:
            ev = self.problem.family.evaluate(np.zeros(len(self.whitening.mean)))
            return np.zeros(0), ev, ev.values
        rows = self.transform if rows is None else rows
        y = ((rows @ self.rows) @ (self.whitening.transform @ self.rows).T).T @ x
        family = self.problem.family.combine(self.whitening.transform, np.zeros(self.whitening.rank))
        ev = family.evaluate(y)
        return y, ev, self.whitening.values(ev.values)

    def unattained(self, below: Outcome, kept: np.ndarray, side: np.ndarray) -> Relaxed:
        """Hand on that no state of largest entropy exists on these edges."""
        excess, values = np.zeros(len(side)), np.full(len(side), np.nan)
        assert below.excess is not None and below.values is not None
        excess[kept], values[kept] = below.excess, below.values + self.slack.edges(side)[kept]
        return self.answer(Verdict.UNATTAINED, excess=excess, values=values, side=side, evidence=below.evidence)

    def certified(self, below: Outcome, kept: np.ndarray, side: np.ndarray, *, late: bool) -> Relaxed | None:
        """A certificate for the relaxed problem from the direction of the equality problem, or near the iterate."""
        for v in self.directions(below, kept, side):
            hit = self.outside(v) or self.face(v, side, late=late)
            if hit is not None:
                return hit
        return None

    def directions(self, below: Outcome, kept: np.ndarray, side: np.ndarray) -> Iterator[np.ndarray]:
        """Candidates in the user's charges; every one is verified afterwards."""
        embed = np.eye(len(side))[kept]
        if below.direction is not None:
            yield embed.T @ below.direction
        last = self.hints[0]
        near = [self.transform.T @ x for x in reversed(self.hints) if np.linalg.norm(x) > 0]
        yield from near
        if not np.any(last):
            return
        v = (self.transform.T @ last)[kept]
        shifted = self.problem.family.combine(embed, self.slack.edges(side)[kept])
        size = np.where(self.whitening.spread > 0, self.whitening.spread, 1.0)[kept]
        if np.linalg.norm(v) > 0:
            unit = shifted.combine(np.diag(1 / size), np.zeros(len(kept)))
            for y in unit.sharpen(v * size / np.linalg.norm(v * size)):
                yield embed.T @ (y / size)

    def face(self, v: np.ndarray, side: np.ndarray, *, late: bool) -> Relaxed | None:
        """Boundary: `v` touches what is allowed, and a limit state on its ground space is allowed."""
        for direction in self.shortened(v):
            margin, tolerance, constant = self.slack.verify(self.problem, direction)
            if constant or abs(margin) > tolerance or self.depth >= DEEPEST:
                continue
            hit = limit_on_face(self.problem, self.slack, direction, tolerance, depth=self.depth, late=late)
            if hit is None:
                continue
            ground, below, edge = hit
            found = below.outcome
            self.iterations += found.iterations
            outcome = Outcome(
                Verdict.BOUNDARY, self.problem, self.whitening, direction=direction, margin=margin,
                tolerance=tolerance, face=found, values=found.values + edge, gap=ground.gap,
                log_dimension=ground.log_dimension, evidence=found.evidence, iterations=self.iterations,
                trace=tuple(self.trace),
            )  # fmt: skip
            here = np.where(self.slack.has_edge & (direction != 0), np.sign(direction), below.side)
            return Relaxed(outcome, here, self.lam)
        return None

    def shortened(self, v: np.ndarray) -> Iterator[np.ndarray]:
        """`v` with parts that are rounding left out: a charge in it is pinned to its edge, which needs a reason."""
        v = np.where(np.isfinite(v), v, 0.0)
        weight = np.abs(v) * self.whitening.spread
        for level in (1e-6, 1e-10, 0.0):
            cut = np.where(weight > level * weight.max(initial=0.0), v, 0.0)
            direction = self.slack.admissible(cut)
            if direction is not None:
                yield direction

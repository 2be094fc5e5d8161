"""A minimal set of charges whose targets cannot hold together.  Floor: diagnose; calls core, never solve.

The certificate is shortened while it still verifies, then charges are deleted one at a time, smallest weight first.
Every deletion is decided by a certified verdict on the remaining charges, so that the set is irreducible: it cannot be
met, and without any one of its charges it can.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from maxent.core.contract import Problem, Verdict
from maxent.core.outcome import Outcome
from maxent.core.relaxed import decide_relaxed
from maxent.core.slack import Slack

__all__ = ["UNREACHABLE", "conflict", "part"]

#: Verdicts that say: no state has these values.
UNREACHABLE = (Verdict.INFEASIBLE, Verdict.INCONSISTENT)


def part(problem: Problem, charges: Sequence[int] | np.ndarray) -> Problem:
    """The problem of some of the charges, with their targets, noise and accuracy."""
    keep = list(charges)
    family = problem.family.combine(np.eye(len(problem.noise))[keep], np.zeros(len(keep)))
    return Problem(family, problem.noise[keep], problem.accuracy[keep])


def conflict(problem: Problem, outcome: Outcome, slack: Slack | None = None) -> tuple[int, ...]:
    """A minimal set of charges whose targets no state has.

    Parameters
    ----------
    problem : Problem
    outcome : Outcome
        Verdict on it, with its certificate.
    slack : Slack, optional
        What the targets leave open; they are exact without it.

    Returns
    -------
    tuple of int
        Positions of the charges, ascending; empty unless the verdict is INFEASIBLE or INCONSISTENT.  Several minimal
        sets may exist; this is one of them.

    Notes
    -----
    Cost: at most one verdict per charge of the shortened certificate.  What is met without some charge is met without
    more of them, so a charge that was needed once is needed for good.
    """
    if outcome.verdict not in UNREACHABLE or outcome.direction is None:
        return ()
    slack = Slack.exact(len(problem.noise)) if slack is None else slack
    v = _shortened(problem, slack, outcome.direction, set())
    needed: set[int] = set()
    while True:
        weight = np.abs(v) * problem.size
        held = np.flatnonzero(weight)
        doubtful = [int(j) for j in held[np.argsort(weight[held], kind="stable")] if j not in needed]
        if not doubtful or len(held) == 1:
            return tuple(int(j) for j in held)
        left = held[held != doubtful[0]]
        trial = _trial(part(problem, left), _part_of(slack, left))
        if trial is not None and trial.verdict in UNREACHABLE and trial.direction is not None:
            v = np.zeros(len(v))
            v[left] = trial.direction
            v = _shortened(problem, slack, v, needed)
        else:
            needed.add(doubtful[0])


def _trial(problem: Problem, slack: Slack) -> Outcome | None:
    """Verdict on some of the charges; None where they have no state to start from (sums that need the others)."""
    start = problem.family.evaluate(problem.family.start(), 1)
    return decide_relaxed(problem, slack).outcome if np.isfinite(start.log_partition) else None


def _part_of(slack: Slack, keep: np.ndarray) -> Slack:
    return Slack(slack.lower[keep], slack.upper[keep], slack.penalty[np.ix_(keep, keep)])


def _shortened(problem: Problem, slack: Slack, v: np.ndarray, needed: set[int]) -> np.ndarray:
    """The certificate `v` without parts that it verifies without, smallest first (in units of each charge's size)."""
    weight = np.abs(v) * problem.size
    for j in np.argsort(weight, kind="stable"):
        shorter = v.copy()
        shorter[j] = 0.0
        length = np.linalg.norm(shorter)
        if not weight[j] or int(j) in needed or not length:
            continue
        margin, tolerance, _ = slack.verify(problem, shorter / length)
        if margin > tolerance:
            v = shorter / length
    return v

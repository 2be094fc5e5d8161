"""A minimal set of charges whose targets cannot hold together.  Floor: diagnose; calls core, never solve.

The certificate is shortened while it still verifies, then charges are deleted one at a time, smallest weight first.
Every deletion is decided by a certified verdict on the remaining charges, so that the set is irreducible: it cannot be
met, and without any one of its charges it can.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from maxent.core.contract import Problem, Verdict
from maxent.core.decide import decide
from maxent.core.outcome import Outcome

__all__ = ["UNREACHABLE", "conflict", "part"]

#: Verdicts that say: no state has these values.
UNREACHABLE = (Verdict.INFEASIBLE, Verdict.INCONSISTENT)


def part(problem: Problem, charges: Sequence[int]) -> Problem:
    """The problem of some of the charges, with their targets, noise and accuracy."""
    keep = list(charges)
    family = problem.family.combine(np.eye(len(problem.noise))[keep], np.zeros(len(keep)))
    return Problem(family, problem.noise[keep], problem.accuracy[keep])


def conflict(problem: Problem, outcome: Outcome) -> tuple[int, ...]:
    """A minimal set of charges whose targets no state has.

    Parameters
    ----------
    problem : Problem
    outcome : Outcome
        Verdict on it, with its certificate.

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
    v = shortened(problem, outcome.direction, frozenset())
    needed: set[int] = set()
    while True:
        weight = np.abs(v) * problem.size
        held = np.flatnonzero(weight)
        open_ = [int(j) for j in held[np.argsort(weight[held], kind="stable")] if j not in needed]
        if not open_ or len(held) == 1:
            return tuple(int(j) for j in held)
        left = [int(j) for j in held if j != open_[0]]
        trial = decide(part(problem, left))
        if trial.verdict in UNREACHABLE and trial.direction is not None:
            v = np.zeros(len(v))
            v[left] = trial.direction
            v = shortened(problem, v, frozenset(needed))
        else:
            needed.add(open_[0])


def shortened(problem: Problem, v: np.ndarray, needed: frozenset[int]) -> np.ndarray:
    """The certificate `v` without its smallest parts (in units of each charge's size), as long as it verifies."""
    weight = np.abs(v) * problem.size
    for j in np.argsort(weight, kind="stable"):
        if not weight[j]:
            continue
        shorter = v.copy()
        shorter[j] = 0.0
        length = np.linalg.norm(shorter)
        if int(j) in needed or not length:
            break
        margin, tolerance = problem.verify(shorter / length)
        if not margin > tolerance:
            break
        v = shorter / length
    return v

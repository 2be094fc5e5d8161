"""Relaxed targets far outside what their charges can reach, before the search for the edges that hold.

Charges are counted from their targets, so a limit of 1e16 would swallow a charge of size 1.  Limits that forbid nothing
are brought near (`Slack.brought_near`); targets out of reach on their own are answered on the charge as it was given:
for v the unit vector of one charge, ``lowest(v) > v.q + h(v)``.  Floor: core.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from maxent.core.contract import EPS, SAFETY, Family, Problem, Verdict
from maxent.core.decide import FAR
from maxent.core.outcome import Outcome
from maxent.core.relaxed import Relaxed, decide_relaxed
from maxent.core.slack import Slack
from maxent.core.whiten import whiten

__all__ = ["decide_relaxed_targets"]


def decide_relaxed_targets(
    family: Family, targets: np.ndarray, accuracy: np.ndarray, slack: Slack, *, driver: str = "host"
) -> tuple[Relaxed, np.ndarray, Slack]:
    """Verdict on giving the charges of `family` the values `targets` with residuals left open by `slack`.

    Far targets are no trouble to digits: edges that no state can reach are brought near, and what is out of reach on
    its own is answered before.

    Returns
    -------
    relaxed : Relaxed
    centre : (m,) ndarray
        What its charges are counted from.
    slack : Slack
        Counted from there.
    """
    centre, slack, moved = slack.brought_near(family, targets)
    problem = Problem.pose(family, centre, accuracy)
    relaxed = _far(family, centre, slack, problem) or decide_relaxed(problem, slack, driver=driver)
    outcome, v = relaxed.outcome, relaxed.outcome.direction
    if v is not None and outcome.verdict is not Verdict.BOUNDARY:
        # an edge that was moved can only weaken a certificate, and means something else in the targets as given
        kept = slack.admissible(np.where(np.where(v > 0, *moved), 0.0, v))
        if kept is not None and np.any((kept == 0) & (v != 0)):
            margin, tolerance, _ = slack.verify(slack.noisy(problem), kept)
            relaxed = replace(relaxed, outcome=replace(outcome, direction=kept, margin=margin, tolerance=tolerance))
    return relaxed, centre, slack


def _far(family: Family, centre: np.ndarray, slack: Slack, problem: Problem) -> Relaxed | None:
    """Infeasible, when a target so far away that counting from it swallows the charge is out of reach on its own."""
    m, scale = len(centre), family.scale
    for j in np.flatnonzero((np.abs(centre) > FAR * scale) & ~slack.is_penalised):
        v = np.eye(m)[j] * -np.sign(centre[j])
        low, noisy = family.lowest(v), slack.noisy(problem)
        margin = low.value - float(v @ centre) - slack.support(v)
        tolerance = float(np.abs(v) @ noisy.unit + SAFETY * low.error)
        if low.highest - low.value > SAFETY * EPS * scale[j] and margin > tolerance:
            at_zero = whiten(Problem(family, EPS * scale, problem.accuracy))
            whitening = replace(at_zero, mean=at_zero.mean - centre)
            outcome = Outcome(
                Verdict.INFEASIBLE, noisy, whitening, direction=v, margin=margin, tolerance=tolerance
            )  # fmt: skip
            return Relaxed(outcome, np.zeros(m), np.zeros(m))
    return None

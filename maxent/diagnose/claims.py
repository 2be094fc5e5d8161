"""The claim of a certificate, computed again from the charges and the targets.

A claim is a unit combination v of the charges, a kind, and five numbers.  For targets q that leave ``h(v)`` open

    outside        lowest(v) - v.q - h(v) > tolerance: no state has these values;
    contradiction  the same, and v.Q is one number in every state;
    face           the same difference is zero within the tolerance, and states of lowest v.Q have these values.

Floor: diagnose; calls core.  Must not know who makes the claim.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np

from maxent.core.contract import Family, Problem
from maxent.core.decide import decide
from maxent.core.faces import on_face, touching
from maxent.core.relaxed import limit_on_face
from maxent.core.slack import Slack

__all__ = ["Check", "check_claim"]

KINDS = ("outside", "face", "contradiction")
#: By how much the length of a unit combination may miss 1: its own rounding, and that of the file it was written to.
UNIT = 1e-9
#: Values on a face that count as reproduced, relative to the size of the charges.
REPRODUCED = 1e-8
#: Spread of a combination that is one number, in units of its rounding: dependence is found on root mean squares, and
#: the extreme values of a sum of many parts lie further out.
CONSTANT = 64.0
#: Tolerances up to this factor apart are estimates of the same rounding.
ALIKE = 8.0


@dataclass(frozen=True)
class Check:
    """A certificate computed again from scratch; true when its claim holds and its numbers are the ones found.

    Attributes
    ----------
    holds : bool
    lowest, asked, margin, tolerance, slack : float
        As in the certificate, computed anew; NaN when its direction cannot be used.
    faults : tuple of str
        What does not hold, in words; empty when all does.
    """

    holds: bool
    lowest: float
    asked: float
    margin: float
    tolerance: float
    slack: float = 0.0
    faults: tuple[str, ...] = ()

    def __bool__(self) -> bool:
        return self.holds


def check_claim(
    family: Family, q: np.ndarray, accuracy: np.ndarray, slack: Slack, *,
    v: np.ndarray, kind: str, stated: Mapping[str, float],
) -> Check:  # fmt: skip
    """Compute a claim again.

    Parameters
    ----------
    family : Family
        Charges as the user gave them.
    q, accuracy : (m,) ndarray
        Targets, and their stated accuracy.
    slack : Slack
        What the targets leave open.
    v : (m,) ndarray
        The combination.
    kind : str
        What is claimed of it.
    stated : mapping of str to float
        The numbers written beside it: lowest, asked, margin, tolerance, slack.  They prove nothing, but a claim whose
        numbers are not the ones found is not confirmed.
    """
    unusable = tuple(_unusable(v, kind))
    if unusable:
        return Check(False, np.nan, np.nan, np.nan, np.nan, np.nan, unusable)
    problem = slack.noisy(Problem.pose(family, q, accuracy))
    asked, open_ = float(v @ q), slack.support(v)
    margin, tolerance, _ = slack.verify(problem, v)
    rounding = tolerance - float(np.abs(v) @ accuracy)
    found = {"lowest": margin + asked + open_, "asked": asked, "margin": margin, "tolerance": tolerance, "slack": open_}
    faults = []
    if kind != "face" and not margin > tolerance:
        faults.append(f"the margin {margin:.6g} is not above the tolerance {tolerance:.2g}")
    if kind == "contradiction" and not _is_number(problem, v, rounding):
        faults.append("the combination of the charges is not one number in every state")
    if kind == "face" and not abs(margin) <= tolerance:
        faults.append(f"the margin {margin:.6g} is not zero within the tolerance {tolerance:.2g}")
    elif kind == "face" and not _lives_on_face(problem, slack, v, margin, tolerance):
        faults.append("no state of the lowest value of the combination has these values")
    faults += _differences(stated, found, rounding)
    return Check(not faults, **found, faults=tuple(faults))


def _unusable(v: np.ndarray, kind: str) -> Iterator[str]:
    """Why a claim cannot even be computed."""
    if kind not in KINDS:
        yield f"kind {kind!r} is none of {', '.join(KINDS)}"
    if not np.all(np.isfinite(v)):
        yield "the direction is not finite"
    elif not abs(np.hypot.reduce(v) - 1.0) <= UNIT:
        yield f"the direction has the length {np.hypot.reduce(v):.6g}, not 1"


def _is_number(problem: Problem, v: np.ndarray, rounding: float) -> bool:
    """Whether ``v.Q`` has one value in every state; the accuracy of the targets does not make it one."""
    low = problem.family.lowest(v)
    return bool(low.highest - low.value <= CONSTANT * rounding)


def _lives_on_face(problem: Problem, slack: Slack, v: np.ndarray, margin: float, tolerance: float) -> bool:
    """Whether some state on the ground space of ``v.Q`` has what is asked."""
    if slack.any:
        return limit_on_face(problem, slack, v, tolerance) is not None
    found = touching(problem, v, margin, tolerance)
    below = None if found is None else decide(on_face(problem, found.face), depth=1).values
    if found is None or below is None:
        return False
    return bool(np.all(np.abs(below + found.shift) <= REPRODUCED * problem.size + problem.accuracy))


def _differences(stated: Mapping[str, float], found: Mapping[str, float], rounding: float) -> Iterator[str]:
    """Stated numbers that are not the ones found."""
    for name, number in found.items():
        if name == "tolerance":
            # an estimate of the rounding: other forms of the same charges have another one
            fits = number <= ALIKE * stated[name] and stated[name] <= ALIKE * number
        else:
            fits = abs(stated[name] - number) <= 2 * rounding
        if not fits:
            yield f"{name} is {number:.10g}, not {stated[name]:.10g}"

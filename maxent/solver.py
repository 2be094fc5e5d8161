"""Operators and targets in, multipliers and a provable verdict out.  Floor: solve."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from maxent.core.contract import Family, Verdict
from maxent.core.decide import FAR, decide_targets
from maxent.core.far import decide_relaxed_targets
from maxent.core.outcome import Outcome
from maxent.core.relaxed import Relaxed
from maxent.core.slack import Slack
from maxent.diagnose.conditioning import conditioning
from maxent.diagnose.conflict import UNREACHABLE, conflict
from maxent.diagnose.explanation import Findings
from maxent.diagnose.explanation import explain as sentences
from maxent.diagnose.multipliers import (
    Multipliers,
    closer,
    relaxed_multipliers,
    replay,
    user_covariance,
    user_multipliers,
)
from maxent.diagnose.nearest import default_units, nearest
from maxent.diagnose.redundancy import redundancies
from maxent.diagnose.wording import LARGEST_LOG, message, places
from maxent.result import Certificate, FaceChain, Result
from maxent.targets import collect, collect_slack, collect_units

__all__ = ["solve"]

DRIVERS = ("auto", "host", "jax")

_KINDS = {Verdict.INFEASIBLE: "outside", Verdict.INCONSISTENT: "contradiction", Verdict.BOUNDARY: "face"}


def solve(
    family: Family,
    targets: Mapping[str, Any],
    *,
    accuracy: float | Mapping[str, float] = 0.0,
    driver: str = "auto",
    explain: bool = False,
    metric: Mapping[str, float] | None = None,
) -> Result:
    """Lagrange multipliers of the maximum-entropy state with given values of the charges.

    Minimises the dual ``F(lam) = ln Z(lam) + lam.q``, whose minimiser has ``<Q_j> = q_j``; the state is
    ``exp(-sum_j lam_j Q_j)/Z`` (E. T. Jaynes, Phys. Rev. 106, 620 (1957)).  Ends in a verdict with its evidence: an
    unreachable target is an answer, not an error.

    Parameters
    ----------
    family : Family
        Charges Q_j, such as `maxent.families.Matrices` or `maxent.families.Microstates`.
    targets : dict of str to float, Exact, Within, AtMost, AtLeast or Measured
        What is asked of every charge: a value q_j, a value within a tolerance, a limit, or a measured value.  With
        tolerances and limits the state is the one of largest entropy among all that keep them; with measured values
        the one of largest ``S - chi^2/2``.  Every stage of the decision then includes what the targets leave open.
    accuracy : float or dict of str to float, optional
        Accuracy of the targets, in units of each charge (not a standard error): what the verdict must survive.
        Default 0: exact to rounding.
    driver : {"auto", "host", "jax"}, optional
        Who runs Newton's iteration.  ``host``: LAPACK, for one-off fits.  ``jax``: one compiled loop.  ``auto`` takes
        the host (compiling costs more than it saves in every one-off fit measured, up to 1e6 states and 30 charges),
        except for families that answer nothing but `log_partition`.  Verdicts are decided on the host for both.
    explain : bool, optional
        Fill `Result.conflict`, `Result.nearest` and `Result.explanation`; costs further verdicts when the targets are
        unreachable, and next to nothing otherwise.
    metric : dict of str to float, optional
        What counts as one unit of a charge for the nearest reachable targets.  By default its spread, the root mean
        square about its mean over all states.

    Returns
    -------
    Result

    Raises
    ------
    TypeError, ValueError
        A family that is none, unknown or missing names, targets that are not finite real numbers, a metric that is not
        positive or was given without ``explain``; before any work.

    Examples
    --------
    >>> import numpy as np, maxent
    >>> from maxent.families import Microstates
    >>> result = maxent.solve(Microstates({"pips": np.arange(1, 7)}), {"pips": 6.2})
    >>> print(result.verdict, f"{result.certificate.margin:.1f}")
    infeasible 0.2
    """
    if not isinstance(family, Family):
        raise TypeError(f"family must be a Family such as Matrices or Microstates, not {type(family).__name__}")
    if driver not in DRIVERS:
        raise ValueError(f"driver must be one of {', '.join(map(repr, DRIVERS))}, not {driver!r}")
    names = tuple(family.names)  # type: ignore[attr-defined]
    q, stated = collect(names, targets, accuracy)
    if metric is not None and not explain:
        raise ValueError("metric states the units of the nearest reachable targets: it needs explain=True")
    units = collect_units(names, {} if metric is None else metric)
    if driver == "auto":
        driver = "jax" if type(family).evaluate is Family.evaluate else "host"
    slack, centre = collect_slack(names, targets), q
    if slack.any:
        relaxed, centre, slack = decide_relaxed_targets(family, q, stated, slack, driver=driver)
        result = _result(names, q, slack, relaxed.outcome, driver, relaxed, centre)
    else:
        result = _result(names, q, slack, decide_targets(family, q, stated, driver=driver), driver)
    return _explained(result, family, centre, slack, units) if explain else result


def _explained(result: Result, family: Family, q: np.ndarray, slack: Slack, units: np.ndarray) -> Result:
    """The result with its conflict, nearest targets and explanation; `units` that are NaN take their default."""
    names, outcome = result.names, result.outcome
    at = np.zeros(len(q)) if outcome.direction is None else outcome.direction
    far = np.flatnonzero((np.abs(q) / FAR > family.scale) & (at != 0))
    if outcome.verdict is Verdict.INFEASIBLE and len(far):
        # counted from such a target the charges have no digits left to explain anything with
        worst = far[np.argmax(np.abs(q[far]) / np.maximum(family.scale[far], 1e-300))]
        size = family.scale[worst]
        text = f"The target of {names[worst]} is {q[worst]:.3g}, where the charge has the size {size:.3g}"
        return replace(result, conflict=(names[worst],), explanation=(f"{text}: check its units.",))
    clash = tuple(names[j] for j in conflict(outcome.problem, outcome, slack))
    move = None
    if outcome.verdict in UNREACHABLE and not slack.any:
        units = np.where(np.isnan(units), default_units(family, outcome.whitening), units)
        move = nearest(outcome.problem, outcome, units)
    near = None if move is None else move.named(names, q)
    in_order = lambda x: np.array([x[n] for n in names])
    found = Multipliers(in_order(result.last_multipliers), in_order(result.multiplier_errors), result.loose)
    findings = Findings(
        names, q, outcome, found, result.replay, result.conditioning, clash, near, result.not_needed, slack.any
    )
    return replace(result, conflict=clash or None, nearest=near, explanation=sentences(findings))


def _result(
    names: tuple[str, ...],
    q: np.ndarray,
    slack: Slack,
    outcome: Outcome,
    driver: str,
    relaxed: Relaxed | None = None,
    centre: np.ndarray | None = None,
) -> Result:
    centre = q if centre is None else centre  # what the charges of `outcome` and `slack` are counted from
    found = user_multipliers(outcome) if relaxed is None else relaxed_multipliers(relaxed)
    solved, stated = outcome.verdict is Verdict.SOLVED, outcome.problem.accuracy
    blank = np.full(len(names), np.nan)
    met = None if relaxed is None else outcome.values
    off, replayed = blank if outcome.values is None else outcome.values, float("nan")
    if solved:
        replayed, again = replay(outcome.problem, found.values, met)
        off = off if relaxed is not None else closer(outcome.problem, off, again)
    has_state = outcome.verdict in (Verdict.SOLVED, Verdict.BOUNDARY)
    covariance, factor = user_covariance(outcome) if has_state else (np.full((len(names), len(names)), np.nan), None)
    named = lambda x: _named(names, x)
    return Result(
        verdict=outcome.verdict,
        evidence=outcome.evidence,
        message=message(names, outcome, found, replayed, slack, relaxed),
        names=names,
        targets=named(q),
        values=named(centre + off),
        residuals=named(off + (centre - q)),
        multipliers=named(found.values if solved else blank),
        last_multipliers=named(found.values),
        multiplier_errors=named(found.errors if solved else blank),
        loose=solved and found.loose,
        replay=replayed,
        covariance=covariance,
        certificate=_certificate(names, centre, stated, slack, outcome),
        face=_faces(names, outcome),
        excess=None if outcome.excess is None else named(outcome.excess),
        redundancies=redundancies(names, centre, outcome.whitening),
        conditioning=conditioning(names, factor) if factor is not None else None,
        iterations=outcome.iterations,
        driver=driver,
        trace=outcome.trace,
        outcome=outcome,
        slack=places(names, slack, outcome, relaxed),
        not_needed=_not_needed(names, slack, relaxed) if has_state else (),
        sigmas=named(np.sqrt(np.diag(slack.penalty))),
    )


def _not_needed(names: Sequence[str], slack: Slack, relaxed: Relaxed | None) -> tuple[str, ...]:
    if relaxed is None:
        return ()
    return tuple(n for n, free, side in zip(names, slack.has_edge, relaxed.side, strict=True) if free and not side)


def _named(names: Sequence[str], x: np.ndarray) -> dict[str, float]:
    return {n: float(y) for n, y in zip(names, x, strict=True)}


def _certificate(
    names: Sequence[str], q: np.ndarray, stated: np.ndarray, slack: Slack, outcome: Outcome
) -> Certificate | None:
    v = outcome.direction
    if v is None:
        return None
    asked, open_ = float(v @ q), slack.support(v)
    return Certificate(
        _named(names, v), outcome.margin + asked + open_, asked, outcome.margin, outcome.tolerance,
        _KINDS[outcome.verdict], _named(names, stated), open_,
    )  # fmt: skip


def _faces(names: Sequence[str], outcome: Outcome) -> FaceChain | None:
    if outcome.face is None:
        return None
    chain = []
    at: Outcome | None = outcome
    while at is not None and at.face is not None:
        chain.append(at)
        at = at.face
    log_dimension = chain[-1].log_dimension
    directions = tuple(_named(names, x.direction) for x in chain if x.direction is not None)
    dimension = float(np.exp(log_dimension)) if log_dimension < LARGEST_LOG else float("inf")
    # a count, up to the rounding of its logarithm
    if np.isfinite(dimension) and abs(dimension - np.rint(dimension)) < 1e-9 * dimension:
        dimension = float(np.rint(dimension))
    return FaceChain(dimension, log_dimension, len(chain), directions, tuple(x.gap for x in chain))

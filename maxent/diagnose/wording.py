"""Verdicts as sentences with numbers: what happened, and what to try.  Floor: diagnose."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from maxent.core.contract import Verdict
from maxent.core.outcome import Outcome
from maxent.core.relaxed import Relaxed
from maxent.core.slack import Slack
from maxent.diagnose.multipliers import Multipliers

__all__ = ["combination_text", "message", "places"]

#: Margins below this are a close call: the verdict hangs on the last digits of the targets.
CLOSE = 1e-9

#: Logarithms of larger dimensions overflow; independent levels and bosons have faces of that size.
LARGEST_LOG = 700.0
#: Most parts of a combination that a sentence spells out.
MOST = 12


def combination_text(names: Sequence[str], v: np.ndarray, *, digits: int = 4) -> str:
    """``0.8 energy - 0.6 magnetisation``; parts below 1e-12 of the largest are left out.

    Of more than `MOST` parts the largest are written, in the order of the names, and the others counted.
    """
    parts: list[str] = []
    size = np.abs(v)
    told = size > 1e-12 * size.max(initial=0.0)
    count = int(told.sum())
    if count > MOST:
        told[np.argsort(-size, kind="stable")[MOST:]] = False
    for name, x, there in zip(names, v, told, strict=True):
        if there:
            sign = ("-" if x < 0 else "") if not parts else (" - " if x < 0 else " + ")
            number = f"{abs(x):.{digits}g}"
            parts.append(sign + (name if number == "1" else f"{number} {name}"))
    rest = f" + {count - MOST} smaller parts" if count > MOST else ""
    return "".join(parts) + rest or "0"


def message(
    names: Sequence[str],
    outcome: Outcome,
    multipliers: Multipliers,
    replayed: float,
    slack: Slack | None = None,
    relaxed: Relaxed | None = None,
) -> str:
    """One sentence (sometimes two) for the verdict of `outcome`; with `relaxed` targets in their words."""
    if slack is None or relaxed is None:
        return _SENTENCES[outcome.verdict](names, outcome, multipliers, replayed)
    if outcome.verdict is Verdict.SOLVED:
        return _solved_relaxed(names, outcome, multipliers, replayed, slack, relaxed)
    text = _SENTENCES[outcome.verdict](names, outcome, multipliers, replayed)
    if outcome.direction is not None and (width := slack.support(outcome.direction)) > 0:
        text += f" The tolerances, worth {width:.3g} in this combination, are counted in."
    return text


def places(names: Sequence[str], slack: Slack, outcome: Outcome, relaxed: Relaxed | None) -> dict[str, str]:
    """Where each value lies in what its target leaves open, in words."""
    has_state = outcome.verdict in (Verdict.SOLVED, Verdict.BOUNDARY)
    out = {}
    for j, name in enumerate(names):
        if slack.is_exact[j] or relaxed is None:
            out[name] = "exact"
        elif slack.is_penalised[j]:
            out[name] = "penalised"
        elif not has_state:
            out[name] = "unknown"
        else:
            side = relaxed.side[j]
            out[name] = "at the upper edge" if side > 0 else "at the lower edge" if side < 0 else "inside"
    return out


def _solved_relaxed(
    names: Sequence[str], o: Outcome, m: Multipliers, replayed: float, slack: Slack, relaxed: Relaxed
) -> str:
    place = places(names, slack, o, relaxed)
    count = {word: sum(p == word for p in place.values()) for word in ("exact", "penalised", "inside")}
    at_edge = len(names) - sum(count.values())
    parts = [f"{n} {word}" for word, n in (("exact", count["exact"]), ("at an edge", at_edge)) if n]
    parts += [f"{count['inside']} inside and not needed"] if count["inside"] else []
    parts += [f"{count['penalised']} penalised"] if count["penalised"] else []
    text = f"All targets are kept: {', '.join(parts)}"
    if o.values is not None and count["penalised"]:
        off = o.values[slack.is_penalised]
        inverse = np.linalg.inv(slack.penalty[np.ix_(slack.is_penalised, slack.is_penalised)])
        text += f" (chi squared {off @ inverse @ off:.3g})"
    if o.whitening.null:
        text += f"; {len(o.whitening.null)} redundant combination(s)"
    text += "."
    if m.loose:
        text += " Fewer than six digits of the multipliers are fixed by the inputs; see their errors."
    if replayed > 1e-10:
        text += (
            f" The listed multipliers alone reproduce the values to {replayed:.0e} (nearly dependent charges: predict "
            "from the state, not from the multipliers)."
        )
    return text


def _solved(names: Sequence[str], o: Outcome, m: Multipliers, replayed: float) -> str:
    count = o.whitening.rank
    text = f"Reached: {count} independent multiplier{'s' * (count != 1)}, relative residual {o.relative():.0e}"
    if o.whitening.null:
        text += f"; {len(o.whitening.null)} redundant combination(s), multipliers of least norm"
    text += "."
    if m.loose:
        if 0 < o.depth < CLOSE:
            text += (
                f" Only {o.depth:.0e} inside the boundary: the size of the multipliers reflects the last digits of the "
                "targets."
            )
        else:
            text += " Fewer than six digits of the multipliers are fixed by the inputs; see their errors."
    if o.evidence == "tested" and np.any(o.problem.accuracy):
        text += (
            " The multipliers are those of the targets as given: that all values within the stated accuracy can be "
            "reached is not proved."
        )
    if replayed > 1e-10 and replayed > 10 * o.relative():
        text += (
            f" State accurate to {max(o.relative(), 1e-16):.0e}; the listed multipliers alone reproduce it to "
            f"{replayed:.0e} (nearly dependent charges: predict from the state, not from the multipliers)."
        )
    return text


def _boundary(names: Sequence[str], o: Outcome, m: Multipliers, replayed: float) -> str:
    assert o.direction is not None
    last = o
    depth = 1
    while last.face is not None and last.face.face is not None:
        last, depth = last.face, depth + 1
    dimension = "infinite"
    if np.isfinite(last.log_dimension):
        large = last.log_dimension > 30
        dimension = f"10^{last.log_dimension / np.log(10):.1f}" if large else f"{np.exp(last.log_dimension):.0f}"
    chain = f" after {depth} faces" if depth > 1 else ""
    return (
        f"On the boundary of what any state can reach, to the accuracy of the inputs (margin {o.margin:.0e}, "
        f"resolvable {o.tolerance:.0e}): no finite multipliers; limit state on a {dimension}-dimensional "
        f"face{chain}, exposing combination {combination_text(names, o.direction)}."
    )


def _infeasible(names: Sequence[str], o: Outcome, m: Multipliers, replayed: float) -> str:
    assert o.direction is not None
    text = (
        f"No state has these values: {combination_text(names, o.direction)} is asked to lie {o.margin:.3g} below its "
        f"lowest possible value (resolvable {o.tolerance:.0e})."
    )
    if o.margin < CLOSE * max(1.0, float(np.abs(o.direction) @ o.problem.size)):
        text += " If the targets are accurate to no more than that, treat this as the boundary: state their accuracy."
    return text


def _inconsistent(names: Sequence[str], o: Outcome, m: Multipliers, replayed: float) -> str:
    assert o.direction is not None
    return (
        f"The targets contradict one another: {combination_text(names, o.direction)} is the same number in every "
        f"state, and the targets miss it by {o.margin:.3g} (resolvable {o.tolerance:.0e}); drop or correct one of "
        "these targets."
    )


def _unattained(names: Sequence[str], o: Outcome, m: Multipliers, replayed: float) -> str:
    assert o.excess is not None
    parts = ", ".join(
        f"{n} {x:.4g}" for n, x in zip(names, o.excess, strict=True) if abs(x) > 1e-12 * np.abs(o.excess).max()
    )
    return f"States with these values exist, but none has the largest entropy; what stays unmatched: {parts}."


def _unfinished(names: Sequence[str], o: Outcome, m: Multipliers, replayed: float) -> str:
    reason = o.reason[:1].upper() + o.reason[1:]
    return f"{reason} (relative residual {o.relative():.0e} after {o.iterations} steps)."


_SENTENCES = {
    Verdict.SOLVED: _solved, Verdict.BOUNDARY: _boundary, Verdict.INFEASIBLE: _infeasible,
    Verdict.INCONSISTENT: _inconsistent, Verdict.UNATTAINED: _unattained, Verdict.UNFINISHED: _unfinished,
}  # fmt: skip

"""A verdict explained in sentences, by the names of the charges.

Unreachable: which targets cannot hold together, and the nearest ones that can.  Boundary: the chain of faces.  Solved:
which combinations are fixed well and which are open; loose: which combination is missing.
Floor: diagnose.  Takes numbers that others computed, and words them.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from maxent.core.contract import Verdict
from maxent.core.outcome import Outcome
from maxent.diagnose.conditioning import Conditioning
from maxent.diagnose.multipliers import Multipliers, left_open, uncertainty, user_covariance
from maxent.diagnose.nearest import Nearest
from maxent.text import combination, listing, number, plural, with_error

__all__ = ["Findings", "explain", "left_by_sigmas"]

#: Up to this condition number of the correlations no combination is worth singling out.
EVEN = 100.0
#: Charges with less than this share of the largest coefficient are left out of a combination.
SHARE = 0.02


@dataclass(frozen=True)
class Findings:
    """What there is to explain.

    Attributes
    ----------
    names : tuple of str
    targets : (m,) ndarray
    outcome : Outcome
    multipliers : Multipliers
    replay : float
    conditioning : Conditioning or None
    conflict : tuple of str
    nearest : Nearest or None
    not_needed : tuple of str
        Charges whose tolerance or limit is met anyway.
    is_relaxed : bool
        Whether any target leaves something open.
    """

    names: tuple[str, ...]
    targets: np.ndarray
    outcome: Outcome
    multipliers: Multipliers
    replay: float
    conditioning: Conditioning | None
    conflict: tuple[str, ...]
    nearest: Nearest | None
    not_needed: tuple[str, ...] = ()
    is_relaxed: bool = False


def explain(found: Findings) -> tuple[str, ...]:
    """Sentences that explain the verdict; empty where the message says it all."""
    return tuple(_WORDS.get(found.outcome.verdict, lambda f: [])(found))


def left_by_sigmas(multipliers: Mapping[str, float], sigmas: Mapping[str, float]) -> str:
    """Say what the standard errors of the targets leave of the multipliers.

    Parameters
    ----------
    multipliers, sigmas : mapping of str to float
        By charge; the standard errors as `maxent.diagnose.multipliers.propagated` gives them.

    Examples
    --------
    >>> left_by_sigmas({"energy": 0.73112, "number": -2.0}, {"energy": 0.021, "number": 0.0})
    'The standard errors of the targets leave of the multipliers: energy 0.731(21) and number -2.'
    """
    left = listing((f"{n} {with_error(x, sigmas[n])}" for n, x in multipliers.items()), last="and")
    return f"The standard errors of the targets leave of the multipliers: {left}."


# ---------------------------------------------------------------- unreachable


def _unreachable(f: Findings) -> list[str]:
    return [_conflict(f), *(_nearest(f, f.nearest) if f.nearest is not None else [])]


def _conflict(f: Findings) -> str:
    names, every = f.conflict, listing(f.conflict, last="and")
    if len(names) == 1:
        return f"The target of {names[0]} is out of reach on its own: {_range(f, f.names.index(names[0]))}."
    rest = [n for n in f.names if n not in names]
    text = f"The targets of {every} cannot hold together; without any one of them the others can."
    if rest:
        text += f" {listing(rest, last='and')} {'takes' if len(rest) == 1 else 'take'} no part in this conflict."
    return text


def _range(f: Findings, j: int) -> str:
    """Between which numbers a charge lies in every state."""
    low = f.outcome.problem.family.lowest(np.eye(len(f.names))[j])
    bottom, top = low.value + f.targets[j], low.highest + f.targets[j]
    asked = f"and {number(f.targets[j], 12)} is asked"
    if np.isfinite(bottom) and np.isfinite(top):
        if top - bottom <= 16 * f.outcome.problem.unit[j]:
            return f"it is {number(bottom, 12)} in every state, {asked}"
        return f"it lies between {number(bottom, 12)} and {number(top, 12)} in every state, {asked}"
    if np.isfinite(bottom):
        return f"it is at least {number(bottom, 12)} in every state, {asked}"
    return f"it is at most {number(top, 12)} in every state, {asked}"


def _nearest(f: Findings, at: Nearest) -> list[str]:
    moved = {n: x for n, x in at.moves.items() if abs(x) > 1e-9 * at.distance * at.unit[n]}
    steps = [f"{n} {number(at.targets[n], 12)} (moved by {number(x, 3)})" for n, x in moved.items()]
    rest = " The other targets stay." if len(moved) < len(f.names) else ""
    units = listing((f"{number(u, 4)} for {n}" for n, u in at.unit.items()), last="and")
    gap = at.upper - at.lower
    if gap > 1e-6 * at.distance:
        bounds = f"no reachable targets are nearer than {number(at.lower, 6)}; the search ended in between"
    else:
        bounds = "both bounds agree" if gap == 0 else f"proved to {number(gap, 1)}"
    return [
        f"Nearest reachable targets: {listing(steps, last='and')}.{rest}",
        f"Their distance is {number(at.distance, 6)} ({bounds}), the root of the sum of (move/unit)^2; unit {units}.",
    ]


# ---------------------------------------------------------------- boundary


def _boundary(f: Findings) -> list[str]:
    text = []
    at: Outcome | None = f.outcome
    lead, dimension = "Only states of lowest", 0.0
    while at is not None and at.face is not None and at.direction is not None:
        dimension = float(np.rint(np.exp(at.log_dimension))) if at.log_dimension < 30 else np.inf
        states = "infinitely many" if at.log_dimension == np.inf else f"10^{at.log_dimension / np.log(10):.1f}"
        states = number(dimension, 12) if np.isfinite(dimension) else states
        face = "a single state" if dimension == 1 else f"a face of {states} states"
        text.append(
            f"{lead} {_exposing(f, at)} can have these values: {face}, with a gap of {number(at.gap, 2)} of the whole "
            "range to the next level."
        )
        lead, at = "Among them, only those of lowest", at.face
    free = f.outcome.deepest.whitening.rank
    if free:
        left = "one combination" if free == 1 else f"{number(free)} combinations"
        text.append(f"The limit state is fixed by {left} of the targets; the others hold in every state of the face.")
    elif dimension > 1:
        text.append("Every state of the last face has these values; the limit state is the one of largest entropy.")
    text.append(
        f"Multipliers that approach the limit state grow without end along t ({_exposing(f, f.outcome)}); finite ones "
        "exist for targets a little inside, where this combination is larger."
    )
    return text


def _exposing(f: Findings, at: Outcome) -> str:
    assert at.direction is not None
    return _text(f.names, at.direction, at.problem.size, 1e-9)


# ---------------------------------------------------------------- solved


def _solved(f: Findings) -> list[str]:
    if f.is_relaxed:
        if not f.not_needed:
            return []
        every = listing(f.not_needed, last="and")
        return [f"The state is the same without the targets of {every}: what they leave open is kept anyway."]
    text = _fixed(f)
    if f.multipliers.loose:
        text.append(_missing(f))
    if np.isfinite(f.replay) and len(f.names):
        text.append(f"The printed multipliers alone give the targets back to {number(f.replay, 1)} of their size.")
    return text


def _fixed(f: Findings) -> list[str]:
    """Which combinations of the targets fix their multipliers well, and which hardly; sampling is not in it."""
    c, m = f.conditioning, f.multipliers
    if c is None or f.outcome.at is None:
        return []
    within = bool(np.any(f.outcome.problem.accuracy))
    taken = "within their stated accuracy" if within else "when they are taken as exact numbers"
    size = np.maximum(np.abs(m.values), m.errors)
    digits = _digits(m.errors, size)
    each = listing((f"{n} {d}" for n, d in zip(f.names, digits, strict=True)), last="and")
    if len(c.spectrum) < 2 or c.condition_number < EVEN:
        even = ""
        if len(c.spectrum) > 1:
            even = f" No combination of them stands out (condition number {number(c.condition_number, 3)})."
        return [f"Digits of the multipliers that the targets fix {taken}: {each}.{even}"]
    deviation = np.linalg.norm(user_covariance(f.outcome)[1], axis=1)
    stiff, slack = (_upright([x.coefficients[n] for n in f.names]) for x in (c.stiffest, c.sloppiest))
    # multipliers of charges that are counted in their standard deviations
    weights = np.array([stiff, slack]) * deviation
    values, errors = weights @ m.values, left_open(f.outcome, weights)
    together = [n for n, x in zip(f.names, stiff, strict=True) if abs(x) >= 0.3]
    fixed = listing(together, last="and") + (" together" if len(together) > 1 else "")
    best = _digits(errors[:1], np.maximum(np.abs(values[:1]), errors[:1]))[0]
    return [
        f"With each charge in units of its standard deviation: the targets fix {fixed} {taken} (multiplier of "
        f"{_text(f.names, stiff)} to {plural(best, 'digit')}), but {_text(f.names, slack)} is open by "
        f"{number(errors[1], 1)} where its multiplier is {number(values[1], 6)} (condition number "
        f"{number(c.condition_number, 2)}).",
        f"Digits of the multipliers that the targets fix {taken}: {each}.",
    ]


def _missing(f: Findings) -> str:
    """The combination of the targets that would have to be known better."""
    o = f.outcome
    assert o.at is not None
    open_ = uncertainty(o)
    h = np.maximum(o.at.curvature, 1e-300)
    k = int(np.argmax(open_ / h))
    deviation = np.linalg.norm(user_covariance(o)[1], axis=1)
    c = _upright((o.whitening.transform.T @ o.at.axes[:, k]) * deviation)
    spread = float(np.sqrt(h[k]))
    text = (
        f"What is missing is {_text(f.names, c)} to more digits (each charge in units of its standard deviation): the "
        f"targets give it to {number(open_[k], 1)} of its spread over all states, and in this state it fluctuates by "
        f"{number(spread, 2)} of that spread."
    )
    if spread < 1e-2:
        return f"{text} So close to a boundary the limit state says more than the multipliers."
    return f"{text} Give this combination as a charge of its own, with its own target."


def _digits(errors: np.ndarray, sizes: np.ndarray) -> list[int]:
    relative = np.maximum(errors, 1e-300) / np.maximum(sizes, 1e-300)
    return [int(x) for x in np.clip(np.floor(-np.log10(relative)), 0, 16)]


def _upright(v: Sequence[float] | np.ndarray) -> np.ndarray:
    """The combination or its negative, whichever begins with a positive coefficient."""
    v = np.asarray(v)
    first = v[np.flatnonzero(np.abs(v) >= SHARE * np.abs(v).max(initial=0.0))[:1]]
    return -v if np.any(first < 0) else v


def _text(names: Sequence[str], v: np.ndarray, size: np.ndarray | float = 1.0, least: float = SHARE) -> str:
    """A combination with largest coefficient 1, without charges that hardly take part (counted in their `size`)."""
    share = np.abs(v) * size
    scaled = v / np.abs(v).max(initial=1e-300)
    parts = zip(names, scaled, share >= least * share.max(initial=0.0), strict=True)
    return combination({n: float(x) for n, x, kept in parts if kept}, 3)


# ---------------------------------------------------------------- undecided


def _unattained(f: Findings) -> list[str]:
    assert f.outcome.excess is not None
    left = {n: float(x) for n, x in zip(f.names, f.outcome.excess, strict=True)}
    return [
        "States of largest entropy can take up only part of what is asked; the rest, "
        f"{combination(left, 4)}, can be carried by states of vanishing weight in the entropy."
    ]


def _unfinished(f: Findings) -> list[str]:
    return [
        "Nothing is claimed about these targets. Where they come from a computation, state their accuracy: within it "
        "the boundary and the inside need not be told apart to the last digit."
    ]


_WORDS: dict[Verdict, Callable[[Findings], list[str]]] = {
    Verdict.SOLVED: _solved, Verdict.BOUNDARY: _boundary, Verdict.UNATTAINED: _unattained,
    Verdict.INFEASIBLE: _unreachable, Verdict.INCONSISTENT: _unreachable, Verdict.UNFINISHED: _unfinished,
}  # fmt: skip

"""Certificates and faces: directions are proposed, `Problem.verify` decides, faces are solved in turn.

A target on the boundary needs both halves of the evidence: a direction v whose lowest value is the target's to
rounding, and a state on the ground space of ``v.Q`` that reproduces all targets.  The direction alone also exists for
targets outside (a tangent touches).  Floor: core.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np

from maxent.core.contract import EPS, Face, Problem, Verdict
from maxent.core.outcome import Memo, Outcome

__all__ = ["Touching", "look", "on_face", "outside", "touching"]

#: Recursion depth of faces of faces; each level removes at least one charge.
DEEPEST = 12
#: Relative residual a limit state must have to end the search early, and at its end.
EARLY, LATE = 1e-11, 1e-8

#: A stated accuracy that reaches the boundary makes it one up to this depth, relative to the charges; from farther
#: inside the targets have multipliers as they are, which say more than a limit state that is so far away.
NARROW = 1e-6

#: A gap that needs no second thought, and the width of a ground space whose direction is right to rounding.
CLEAR, SHARP = 1e-3, 1e-14

Decide = Callable[..., Outcome]


class Touching(NamedTuple):
    """A direction that touches the reachable values at the targets, as far as rounding and accuracy tell.

    Attributes
    ----------
    v : (m,) ndarray
    margin, tolerance : float
    face : Face
        Ground space of ``v.Q``, its charges counted from the targets moved by `shift`.
    shift : (m,) ndarray
        What moves the targets onto the plane that v touches, shared out by their stated accuracies; zero where
        rounding alone has them on it.
    """

    v: np.ndarray
    margin: float
    tolerance: float
    face: Face
    shift: np.ndarray


def touching(problem: Problem, v: np.ndarray, margin: float, tolerance: float) -> Touching | None:
    """The face that `v` exposes, or None where there is none.

    Parameters
    ----------
    problem : Problem
    v : (m,) ndarray
    margin, tolerance : float
        As `Problem.verify` finds them, the margin within the tolerance.
    """
    stated = float(np.abs(v) @ problem.accuracy)
    rounding = tolerance - stated
    family, shift = problem.family, np.zeros(len(v))
    if stated and abs(margin) > rounding:
        along = problem.accuracy**2 * v
        shift = margin * along / (v @ along)
        family = family.combine(np.eye(len(v)), shift)
    face = family.face(v, rounding)
    return None if face is None else Touching(v, margin, tolerance, face, shift)


def outside(problem: Problem, memo: Memo, x: np.ndarray) -> Outcome | None:
    """Infeasible, when the whitened direction `x` separates the targets from all states."""
    if not np.linalg.norm(x) > 0:
        return None
    v = memo.whitening.to_user(x)
    if problem.family.glance(v) <= 0.0:
        return None
    margin, tolerance = problem.verify(v)
    if margin > tolerance:
        return memo.outcome(problem, Verdict.INFEASIBLE, direction=v, margin=margin, tolerance=tolerance)
    return None


def look(
    problem: Problem,
    memo: Memo,
    x: np.ndarray,
    decide: Decide,
    *,
    step: np.ndarray | None = None,
    late: bool = False,
) -> Outcome | None:
    """Try to end on a verified certificate near the whitened direction `x`.

    The last Newton step is a candidate too: it is free, and along a diverging path it points at the exposing direction.
    Depths of faces seen on the way are remembered in `memo` as starts for the analytic centre.
    """
    if not np.linalg.norm(x) > 0:
        return None
    x = x / np.linalg.norm(x)
    hit = outside(problem, memo, x)
    if hit:
        return hit
    found: Touching | None = None
    for candidate in _candidates(memo, x, step):
        v = memo.whitening.to_user(candidate)
        margin, tolerance = problem.verify(v)
        if margin > tolerance:
            return memo.outcome(problem, Verdict.INFEASIBLE, direction=v, margin=margin, tolerance=tolerance)
        too_coarse = float(np.abs(v) @ problem.accuracy) - NARROW * float(np.abs(v) @ problem.size)
        if margin < -tolerance + max(too_coarse, 0.0):
            memo.near.append((margin, candidate))
            continue
        memo.touched = True
        seen = touching(problem, v, margin, tolerance)
        if seen is not None and (found is None or _sharper(seen.face, found.face)):
            found = seen
            if seen.face.gap > CLEAR and seen.face.width < SHARP:
                break
    if found is None or memo.depth >= DEEPEST or (found.face.gap < 1e-6 and not late):
        return None
    return _descend(problem, memo, found, decide, late=late)


def _sharper(face: Face, than: Face) -> bool:
    """Whether `face` is the better one: clear gaps first, then the sharper direction.

    On a flat face the lowest level is blind to an error e of the direction (it enters as e^2); the width sees it.
    """
    if face.gap > CLEAR and than.gap > CLEAR:
        return face.width < than.width
    return face.gap > than.gap


def _candidates(memo: Memo, x: np.ndarray, step: np.ndarray | None):
    # sharpened ones first: a one-dimensional ground space cannot tell an approximate direction by its width
    yield from memo.family.sharpen(x)
    if step is not None and np.linalg.norm(step) > 0:
        yield step / np.linalg.norm(step)
    yield x


def on_face(problem: Problem, face: Face) -> Problem:
    """The problem on a face, with the noise that the restriction adds.

    A direction that is off by an angle e turns the ground space by e/gap; the width of the ground space shows e.
    """
    turned = 0.0 if face.exact else (8 * EPS + (face.width if face.width > SHARP else 0.0)) / max(face.gap, 1e-12)
    return Problem(face.family, problem.noise + turned * problem.family.scale, problem.accuracy)


def _descend(problem: Problem, memo: Memo, found: Touching, decide: Decide, *, late: bool) -> Outcome | None:
    """Solve on the face, and accept the boundary only if its state reproduces the targets."""
    v, margin, tolerance, face, shift = found
    below = decide(on_face(problem, face), depth=memo.depth + 1)
    memo.iterations += below.iterations
    settled = below.verdict in (Verdict.SOLVED, Verdict.BOUNDARY)
    values = below.values + shift if settled and below.values is not None else None
    residual = np.inf if values is None else np.abs(values)
    allowed = (LATE if late else EARLY) * problem.size + problem.accuracy
    if not np.all(residual <= allowed):
        memo.reason = (
            f"a direction touches the set of reachable values (margin {margin:.1e}, tolerance {tolerance:.1e}), "
            "but no state on its ground space reproduces the targets"
        )
        return None
    return memo.outcome(
        problem, Verdict.BOUNDARY, direction=v, margin=margin, tolerance=tolerance, face=below, values=values,
        gap=face.gap, log_dimension=face.log_dimension, evidence=below.evidence,
    )  # fmt: skip

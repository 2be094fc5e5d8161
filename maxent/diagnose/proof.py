"""Verdicts as theorems about the numbers given: proofs of certificates, and of solved targets.

The float64 numbers in the charges, the targets and the direction are taken as exact.  Where `Certificate.verify` says
that a margin is above what rounding can explain, a proof bounds every rounding and says what is left.  Floor: diagnose.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import singledispatch
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.core.contract import Family
from maxent.core.slack import Slack
from maxent.diagnose.proofs.bounds import Bound, above, below, scaled
from maxent.diagnose.proofs.cholesky import lowest_eigenvalue
from maxent.diagnose.proofs.free import bound_of_bilinears, bound_of_modes
from maxent.diagnose.proofs.interior import Part, reachable_ball
from maxent.diagnose.proofs.listed import lowest_listed
from maxent.diagnose.proofs.occupations import occupied_ball
from maxent.diagnose.proofs.sums import dot
from maxent.families.bilinears import Bilinears
from maxent.families.matrices import Matrices
from maxent.families.microstates import Microstates
from maxent.families.modes import Modes

__all__ = ["NOT_PROVABLE", "NO_METHOD", "PROVED", "Proof", "prove_interior", "prove_outside"]

PROVED = "proved"
NOT_PROVABLE = "not provable at this margin"
NO_METHOD = "no proof method for this family"

EXACT = "exact rational arithmetic"
FLOAT = "float64 with a rigorous error bound"
BALL = "ball of corrections to the state found"


@dataclass(frozen=True)
class Proof:
    """What could be proved; true exactly when the status is "proved".

    Attributes
    ----------
    status : {"proved", "not provable at this margin", "no proof method for this family"}
    margin : float
        For a certificate: no state has a smaller ``<v.(Q - q)>``, less what the targets leave open; a rigorous lower
        bound, rounded down.  For a solved result: every target closer than this (Euclidean, in the units of the
        charges) is reachable.  NaN when nothing is known.
    exact : str or None
        The smallest ``v.(Q - q)``, less what the targets leave open, as a fraction where listed states decide it.
    method : str
        How the bound was found; empty without one.
    detail : str
        One sentence.
    """

    status: str
    margin: float
    exact: str | None
    method: str
    detail: str

    def __bool__(self) -> bool:
        return self.status == PROVED


@singledispatch
def _bound(family: Any, v: np.ndarray, targets: np.ndarray) -> Bound | None:
    """Lower bound of ``v.(Q - q)`` from the charges as they were given; None where the numbers overflow.

    Raises
    ------
    _NoMethodError
    """
    return _lowest(_given(family), v, targets)


@_bound.register
def _(family: Modes, v: np.ndarray, targets: np.ndarray) -> Bound | None:
    return bound_of_modes(family, v, targets)


@_bound.register
def _(family: Bilinears, v: np.ndarray, targets: np.ndarray) -> Bound | None:
    if not family.is_given:
        raise _NoMethodError("the charges of this family were computed (combined, or cut to a face), not given")
    if any(not q.conserves_number for q in family.operators().values()) and family.statistics == "bosons":
        raise _NoMethodError("for bosons with pairing or linear terms there is none")
    return bound_of_bilinears(family, v, targets)


class _NoMethodError(Exception):
    """Nothing can be proved of a family; the text says why."""


def _no_method(why: str) -> Proof:
    return Proof(NO_METHOD, float("nan"), None, "", f"{why}; the evidence is the one of float64")


@dataclass(frozen=True)
class _Given:
    """Charges to the last bit: numbers on single states (m, n), and blocks of m matrices each."""

    listed: np.ndarray
    blocks: Sequence[Any]

    def sizes(self) -> np.ndarray:
        """Largest modulus of an entry of each charge, (m,)."""
        largest = np.abs(self.listed).max(axis=1, initial=0.0)
        for block in self.blocks:
            entries = [q.data if sp.issparse(q) else q for q in block]
            largest = np.maximum(largest, [np.abs(x).max(initial=0.0) for x in entries])
        return largest


def _given(family: Family) -> _Given:
    """The charges of a family as they were given.

    Raises
    ------
    _NoMethodError
    """
    if isinstance(family, Microstates):
        return _Given(np.asarray(family.blocks.diagonal, float), ())
    if not isinstance(family, Matrices):
        raise _NoMethodError(f"{type(family).__name__} does not list its charges exactly")
    charges = family.as_given()
    if charges is None:
        raise _NoMethodError("the charges of this family were computed (combined, compressed or rebuilt), not given")
    return _Given(*charges)


# ---------------------------------------------------------------- certificates


def prove_outside(
    family: Family, v: np.ndarray, targets: np.ndarray, accuracy: np.ndarray, slack: Slack, *, kind: str, margin: float
) -> Proof:
    """Prove ``v.(Q - q) - h(v) >= margin' 1 > 0`` for the numbers given, with the largest margin' that can be had.

    h(v) is the largest ``v.r`` of residuals r that tolerances and limits allow, 0 for exact targets.  Then no state has
    these values, nor values within the stated accuracy: ``margin' > sum_j |v_j| t_j`` is asked for.  A contradiction is
    the same inequality; that v.Q is a number need not be proved for it.

    Parameters
    ----------
    family : Family
    v, targets, accuracy : (m,) ndarrays
    slack : Slack
        What tolerances and limits leave open.
    kind : {"outside", "contradiction", "face"}
        A face is an equality, which no margin proves; its bound is computed all the same.
    margin : float
        What float64 says, for the sentence.
    """
    try:
        found = _bound(family, v, targets) if np.isfinite(v).all() else None
    except _NoMethodError as none:
        return _no_method(str(none))
    except (OverflowError, np.linalg.LinAlgError):  # the latter: no convergence of the eigenvalues
        found = None
    if found is None:
        detail = "the numbers overflow, or no decomposition could be completed"
        return Proof(NOT_PROVABLE, float("nan"), None, "", detail)
    if found.lowest is None:
        detail = "v.(Q - q) has no lowest value: a level lies below zero by more than rounding"
        return Proof(NOT_PROVABLE, float("-inf"), None, found.method, detail)
    open_ = _support(slack, found.direction)
    if open_ is None:
        detail = "the targets do not limit v.(Q - q): the direction has a charge with no limit on that side"
        return Proof(NOT_PROVABLE, float("-inf"), None, "", detail)
    lowest, exact, method = found.lowest - open_, found.exact, found.method
    loss = dot([abs(x) for x in found.direction], accuracy)
    low = below(lowest)
    left = f" - {float(open_):.6g}, which the targets leave open," if open_ else ""
    moved = found.direction != tuple(Fraction(x) for x in v.tolist())
    where = " for a direction within rounding of v" if moved else ""
    claim = f"v.(Q - q){left} >= {low:.6g} in every state{where} ({method}; float64 says {margin:.6g})"
    if kind == "face":
        status, detail = NOT_PROVABLE, f"the targets lie on the boundary: an equality, which no margin proves; {claim}"
        detail += ": taken to the last bit, the targets lie outside" if lowest > loss else ""
    elif lowest > loss:
        status, detail = PROVED, f"{claim}, so no state has these values"
        detail += f", nor any within the stated accuracy, which takes {float(loss):.3g}" if loss else ""
    elif lowest > 0:
        status, detail = NOT_PROVABLE, f"{claim}, but the stated accuracy takes {float(loss):.6g}"
    else:
        status, detail = NOT_PROVABLE, f"{claim}, which excludes nothing"
    return Proof(status, low, str(lowest) if exact else None, method, detail)


def _support(slack: Slack, direction: Sequence[Fraction]) -> Fraction | None:
    """Largest ``x.r`` of the residuals r that are allowed, exactly; None where there is none."""
    on = np.array([x != 0 for x in direction], bool)
    ends = np.where([x > 0 for x in direction], slack.upper, slack.lower)[on]
    return dot([x for x in direction if x], ends) if np.isfinite(ends).all() else None


def _lowest(given: _Given, v: np.ndarray, targets: np.ndarray) -> Bound | None:
    """Lower bound of ``v.(Q - q)`` over single states and blocks."""
    pair = scaled(v, given.sizes())
    if pair is None:
        return None
    (w, exponent), direction = pair, tuple(Fraction(x) for x in v.tolist())
    back = Fraction(2) ** exponent
    asked = dot(direction, targets)
    lowest: Fraction | None = None
    exact, method = False, ""
    if given.listed.shape[1]:
        lowest, exact = lowest_listed(w, given.listed)
        method = EXACT if exact else FLOAT
    for block in given.blocks:
        found = lowest_eigenvalue(w, block, asked=asked / back, enough=lowest)
        if found is None:
            return None
        if lowest is None or found[0] < lowest:
            (lowest, method), exact = found, False
    return None if lowest is None else Bound(lowest * back - asked, exact, method, direction)


# ---------------------------------------------------------------- solved targets


def prove_interior(
    family: Family, state: Any, targets: np.ndarray, accuracy: np.ndarray, slack: Slack, values: np.ndarray
) -> Proof:
    """Prove that a ball of targets around these is reachable, hence that the multipliers exist.

    Where targets leave something open, the ball lies around allowed values q' near those of the state: the dual with
    its kinks and penalties lies above ``ln Z + lam.q'``, which grows in every direction, so it has a minimum, too.

    Parameters
    ----------
    family : Family
    state : MicrostatesState or MatricesState
        The state found; anything near it proves the same.
    targets, accuracy : (m,) ndarrays
    slack : Slack
    values : (m,) ndarray
        Of the state.

    Notes
    -----
    The theorem and its proof stand in `maxent.diagnose.proofs.interior`.  Redundant charges allow no ball.
    """
    if not len(targets):
        return Proof(PROVED, float("inf"), None, BALL, "nothing is asked")
    centre = "allowed values" if slack.any else "these"
    try:
        found = _ball(family, state, _allowed(slack, targets, values), accuracy)
    except _NoMethodError as none:
        return _no_method(str(none))
    except OverflowError:
        found = None
    if found is None:
        detail = f"no ball of reachable targets could be proved around {centre}: the charges are redundant"
        detail += " or nearly so, or the boundary is too near for the roundings of float64"
        return Proof(NOT_PROVABLE, 0.0, None, BALL, detail)
    radius, covers = found
    low = below(radius)
    claim = f"every target within {low:.6g} of {centre} is reachable ({BALL})"
    if not covers:
        return Proof(NOT_PROVABLE, low, None, BALL, f"{claim}, but not all within the stated accuracy are proved")
    return Proof(PROVED, low, None, BALL, f"{claim}, so finite multipliers exist")


def _allowed(slack: Slack, targets: np.ndarray, values: np.ndarray) -> np.ndarray:
    """Float64 values near those of the state that every tolerance and limit allows, to the last bit."""
    out = np.where(slack.is_exact, targets, np.clip(values, targets + slack.lower, targets + slack.upper))
    for j in np.flatnonzero(~slack.is_exact):
        q = Fraction(float(targets[j]))
        if np.isfinite(slack.upper[j]) and Fraction(float(out[j])) - q > Fraction(float(slack.upper[j])):
            out[j] = below(q + Fraction(float(slack.upper[j])))
        if np.isfinite(slack.lower[j]) and Fraction(float(out[j])) - q < Fraction(float(slack.lower[j])):
            out[j] = above(q + Fraction(float(slack.lower[j])))
    return out


def _ball(family: Family, state: Any, targets: np.ndarray, accuracy: np.ndarray) -> tuple[Fraction, bool] | None:
    """A ball of reachable targets around these, and whether it covers the stated accuracy; None without one.

    Raises
    ------
    _NoMethodError
    """
    if isinstance(family, Modes):
        if family.edges is not None:
            raise _NoMethodError("at the edge of a continuum reachable targets need not have multipliers")
        return occupied_ball(family, state.occupations, targets, accuracy)
    if isinstance(family, Bilinears):
        raise _NoMethodError("of quadratic charges certificates are proved, solved targets are not")
    given = _given(family)
    if isinstance(family, Microstates):
        return reachable_ball([Part(given.listed, state.weights)], targets, accuracy)
    parts = [Part(given.listed, state.flat_weights)]
    parts += [Part(block, g.weights, g.vectors) for block, g in zip(given.blocks, state.groups, strict=True)]
    return reachable_ball(parts, targets, accuracy)

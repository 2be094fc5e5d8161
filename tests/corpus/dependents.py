"""Charges that are not independent: redundant, contradictory, nearly dependent, one state, no charge.

Redundant problems append exact linear combinations of the charges and the identity to a problem of known
verdict, with the targets that follow from it: the set of states does not change, so neither does the
verdict.  Inconsistent ones append a combination with a target that contradicts the others: no state of any
kind has these values.
"""

from __future__ import annotations

import numpy as np

from tests.corpus import around, feasible, pieces
from tests.corpus.problem import Draft


def _appended(rng, base: Draft, rows, offset=None, note: str = "") -> Draft:
    """`base` with the charges rows @ Q + offset added, in random order."""
    rows = np.atleast_2d(rows)
    m = len(base.charges)
    offset = np.zeros(len(rows)) if offset is None else offset
    order = rng.permutation(m + len(rows))
    matrix = np.vstack([np.eye(m), rows])[order]
    return base.transformed(matrix, np.concatenate([np.zeros(m), offset])[order], note=note)


def _dependent_rows(rng, index: int, m: int):
    """Rows and offsets of 1..3 dependent charges: duplicate, opposite, combination, zero charge, identity."""
    duplicate, pick = np.zeros(m), rng.integers(m)
    duplicate[pick] = 1
    mixed = rng.standard_normal(m)
    zero = np.zeros(m)
    constant = rng.standard_normal()
    choices = {
        "duplicate": ([duplicate], [0.0]),
        "opposite, shifted": ([-2 * duplicate], [constant]),
        "combination": ([mixed], [0.0]),
        "zero": ([zero], [0.0]),
        "identity": ([zero], [constant]),
        "duplicate and zero": ([duplicate, zero], [0.0, 0.0]),
        "two combinations and identity": ([mixed, rng.standard_normal(m), zero], [constant, 0.0, 2.0]),
    }
    name = list(choices)[index % len(choices)]
    rows, offsets = choices[name]
    return np.array(rows), np.array(offsets), name


def redundant(source):
    """Dependent charges with consistent targets added to the problems of `source`; same verdict, same
    state."""

    def make(rng, index: int) -> Draft:
        base = source(rng, index)
        rows, offsets, name = _dependent_rows(rng, index, len(base.charges))
        return _appended(rng, base, rows, offsets, note=name)

    return make


def redundant_scaled(rng, index: int) -> Draft:
    """A dependent charge among charges in units from 1e-6 to 1e6."""
    base = (feasible.classical, feasible.quantum_real)[index % 2](rng, 1 + index)
    m = len(base.charges)
    base = base.transformed(np.diag(10 ** rng.uniform(-6, 6, m)), note="units 1e+-6")
    rows, offsets, name = _dependent_rows(rng, (0, 1, 3)[index % 3], m)
    return _appended(rng, base, rows, offsets, note=name)


def all_trivial(rng, index: int) -> Draft:
    """Only zero charges and multiples of the identity at their own values: counting state, multipliers 0."""
    size, m = 2 + index % 5, 1 + index % 3
    constants = np.where(rng.random(m) < 0.4, 0.0, rng.standard_normal(m))
    unit = np.ones(size) if index % 2 else np.eye(size)
    return Draft(
        charges=tuple(c * unit for c in constants),
        targets=constants,
        verdict="solved",
        rank=0,
        family="Microstates" if index % 2 else "Matrices",
        size=size,
        multipliers=np.zeros(m),
        entropy=float(np.log(size)),
        note=f"{m} multiples of the identity",
    )


def _calm(rng, index: int) -> Draft:
    """A problem deep inside, for contradictions small and large."""
    if index % 2:
        charges = rng.standard_normal((1 + index % 4, 12))
    else:
        charges = np.array([pieces.hermitian(rng, 5, is_complex=bool(index % 4)) for _ in range(1 + index % 3)])
    lam = pieces.multipliers(rng, charges, rng.uniform(0.5, 2))
    return feasible.from_multipliers(charges, lam, f"size {charges.shape[-1]} m={len(lam)}")


def _contradicted(rng, base: Draft, row, constant: float, step: float, note: str) -> Draft:
    """`base` and the charge row.Q + constant whose target is `step` too large.

    The reachable point is `step` away along the last target, so `step` bounds the distance.
    """
    draft = base.transformed(np.vstack([np.eye(len(base.charges)), row]), np.append(np.zeros(len(row)), constant))
    shift = np.append(np.zeros(len(row)), step)
    order = rng.permutation(len(shift))
    return draft.change(
        charges=tuple(draft.charges[i] for i in order),
        targets=(draft.targets + shift)[order],
        displacement=shift[order],
        distance=abs(step),
        verdict="inconsistent",
        multipliers=None,
        entropy=None,
        note=f"{base.note}; {note} off by {step:.0e}",
    )


def _step(index: int) -> float:
    return (-1) ** index * 10.0 ** -(1 + index % 9)


def inconsistent_duplicate(rng, index: int) -> Draft:
    """The same charge twice with targets that differ by 1e-1..1e-9."""
    base = _calm(rng, index)
    row = np.zeros(len(base.charges))
    row[0] = 1
    return _contradicted(rng, base, row, 0.0, _step(index), "duplicate")


def inconsistent_identity(rng, index: int) -> Draft:
    """A multiple of the identity (or the zero charge) with a wrong target, off by 1e-1..1e-9."""
    base = _calm(rng, index)
    constant = 0.0 if index % 3 == 0 else float(rng.standard_normal())
    return _contradicted(rng, base, np.zeros(len(base.charges)), constant, _step(index), "identity")


def inconsistent_combination(rng, index: int) -> Draft:
    """A linear combination of the charges with a target off by 1e-1..1e-9."""
    base = _calm(rng, index + 1)
    row = rng.standard_normal(len(base.charges))
    return _contradicted(rng, base, row, float(rng.standard_normal()), _step(index), "combination")


def inconsistent_scaled(rng, index: int) -> Draft:
    """A contradiction between charges in units from 1e-6 to 1e6."""
    base = (inconsistent_duplicate, inconsistent_combination)[index % 2](rng, index)
    factors = 10 ** rng.uniform(-6, 6, len(base.charges))
    return base.transformed(np.diag(factors), note="units 1e+-6")


def nearly_dependent_outside(rng, index: int) -> Draft:
    """Charges A and A + eta B, targets that ask B for more than its largest value; eta = 1e-3..1e-7.

    q1 = <A> and q2 = q1 + eta (largest B + 1/2), in the top state of B.  In that state the values are (q1,
    q1 + eta largest B), at the distance eta/2 of the target; and B > largest is impossible in every state.
    """
    eta = 10.0 ** -(3 + index % 5)
    is_classical = bool(index % 2)
    if is_classical:
        a, b = rng.standard_normal((2, 20))
        top = int(np.argmax(b))
        state = np.eye(20)[top]
        highest = b[top]
    else:
        a, b = (pieces.hermitian(rng, 5, is_complex=bool(index % 4)) for _ in range(2))
        e, u = np.linalg.eigh(b)
        state = np.outer(u[:, -1], u[:, -1].conj())
        highest = e[-1]
    q = pieces.values_in(np.array([a]), state)[0]
    return Draft(
        charges=(a, a + eta * b),
        targets=np.array([q, q + eta * (highest + 0.5)]),
        verdict="infeasible",
        rank=2,
        family="Microstates" if is_classical else "Matrices",
        size=a.shape[-1],
        distance=eta / 2,
        displacement=np.array([0.0, eta / 2]),
        note=f"eta={eta:.0e}",
    )


def single(rng, index: int) -> Draft:
    """One state only: every charge is a number; solved at it, inconsistent (1e-1..1e-6) beside it."""
    m = 1 + index % 3
    values = rng.standard_normal(m)
    step = np.zeros(m)
    is_off = index % 4 >= 2
    if is_off:
        step[0] = 10.0 ** -(1 + index // 4 % 6)
    is_classical = bool(index % 2)
    return Draft(
        charges=tuple(np.array([x]) if is_classical else np.array([[x]]) for x in values),
        targets=values + step,
        verdict="inconsistent" if is_off else "solved",
        rank=0,
        family="Microstates" if is_classical else "Matrices",
        size=1,
        distance=float(step[0]) if is_off else None,
        displacement=step if is_off else None,
        multipliers=None if is_off else np.zeros(m),
        entropy=None if is_off else 0.0,
        note=f"one state, m={m}",
    )


def empty(rng, index: int) -> Draft:
    """No charge at all: the counting state (or the state of the weights or of the prior)."""
    style = index % 4
    size = 4 if style == 1 else 2 + index
    logs = rng.uniform(-460, 460, size) if style == 2 else None
    prior = rng.uniform(-3, 3, size) if style == 3 else None
    entropy = float(np.log(size))
    if logs is not None:
        p, own = pieces.gibbs(-logs)
        entropy = own + float(p @ logs)
    if prior is not None:
        entropy = pieces.gibbs(-prior)[1]
    return Draft(
        charges=(),
        targets=np.zeros(0),
        verdict="solved",
        rank=0,
        family="Matrices" if style == 1 else "Microstates",
        size=size,
        log_weights=logs,
        log_prior=prior,
        multipliers=np.zeros(0),
        entropy=entropy,
        note=("counting", "two qubits", "weights", "prior")[style],
    )


REDUNDANT = {
    "redundant-quantum": redundant(feasible.quantum_complex),
    "redundant-classical": redundant(feasible.classical),
    **{f"redundant-{place}": redundant(around.at(place, around.any_edge)) for place in ("boundary", "outside", "near")},
}

"""Matrices judged by semidefinite programming: CVXPY with Clarabel.

Resolution: Clarabel stops at gaps and infeasibilities of 1e-7 here (with 1e-8 it misses its own goal on some
problems); known distances come out to 1e-7, and below `RESOLUTION` a distance or a slack says nothing.
"""

from __future__ import annotations

import cvxpy as cp
import numpy as np

RESOLUTION = 1e-6
OPTIONS = {"tol_gap_abs": 1e-7, "tol_gap_rel": 1e-7, "tol_feas": 1e-7}


def _real(matrix: np.ndarray) -> np.ndarray:
    """Real symmetric matrix of twice the size with every level doubled."""
    a = np.asarray(matrix)
    return np.block([[a.real, -a.imag], [a.imag, a.real]])


def distance(charges: np.ndarray, targets: np.ndarray) -> float:
    """max over |v| <= 1 of min <v.(Q - q)>: the Euclidean distance to the reachable set, 0 inside."""
    m = len(targets)
    v, low = cp.Variable(m), cp.Variable()
    shifted = [_real(a - q * np.eye(len(a))) for a, q in zip(charges, targets, strict=True)]
    total = sum(v[j] * shifted[j] for j in range(m))
    task = cp.Problem(cp.Maximize(low), [total - low * np.eye(len(shifted[0])) >> 0, cp.norm(v) <= 1])
    task.solve(solver=cp.CLARABEL, **OPTIONS)
    assert task.status == cp.OPTIMAL, task.status
    return float(task.value)


def slack(charges: np.ndarray, targets: np.ndarray) -> float:
    """Largest t such that a state with every eigenvalue at least t has these values; -inf if none."""
    d = charges.shape[1]
    rest, t = cp.Variable((d, d), hermitian=True), cp.Variable()
    state = rest + t * np.eye(d)
    means = [cp.real(cp.trace(a @ state)) == q for a, q in zip(charges, targets, strict=True)]
    task = cp.Problem(cp.Maximize(t), [rest >> 0, cp.real(cp.trace(state)) == 1, *means])
    task.solve(solver=cp.CLARABEL, **OPTIONS)
    return float(task.value) if task.status == cp.OPTIMAL else -np.inf


def judgement(charges: np.ndarray, targets: np.ndarray) -> str:
    """One of "inside", "outside", or "edge" where the resolution does not suffice."""
    if distance(charges, targets) > RESOLUTION:
        return "outside"
    return "inside" if slack(charges, targets) > RESOLUTION else "edge"


def entropy(charges: np.ndarray, targets: np.ndarray) -> float:
    """Largest von Neumann entropy of a real state with these values (real symmetric charges, small d)."""
    d = charges.shape[1]
    state = cp.Variable((d, d), PSD=True)
    means = [cp.trace(a @ state) == q for a, q in zip(charges, targets, strict=True)]
    task = cp.Problem(cp.Maximize(cp.von_neumann_entr(state)), [cp.trace(state) == 1, *means])
    task.solve(solver=cp.CLARABEL, **OPTIONS)
    assert task.status == cp.OPTIMAL, task.status
    return float(task.value)


def shannon(points: np.ndarray, targets: np.ndarray, log_weights: np.ndarray | None = None) -> float:
    """Largest -sum p ln(p/w) of a distribution with these values, as an exponential-cone programme."""
    n = points.shape[1]
    p = cp.Variable(n)
    gain = cp.sum(cp.entr(p)) + (0 if log_weights is None else log_weights @ p)
    task = cp.Problem(cp.Maximize(gain), [points @ p == targets, cp.sum(p) == 1])
    task.solve(solver=cp.CLARABEL, **OPTIONS)
    assert task.status == cp.OPTIMAL, task.status
    return float(task.value)

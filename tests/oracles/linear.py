"""Microstates judged by linear programming: SciPy's HiGHS decides what lies in the hull of the points.

Resolution: HiGHS keeps its constraints to 1e-10 here; with points of order 1 and up to a hundred of them a
distance or a slack below `RESOLUTION` says nothing.
"""

from __future__ import annotations

import numpy as np
from scipy.optimize import linprog

RESOLUTION = 1e-8
OPTIONS = {"primal_feasibility_tolerance": 1e-10, "dual_feasibility_tolerance": 1e-10}


def distance(points: np.ndarray, targets: np.ndarray) -> float:
    """Sum of |q_j - <Q_j>| at the distribution that makes it smallest; points of shape (m, n)."""
    m, n = points.shape
    cost = np.concatenate([np.zeros(n), np.ones(2 * m)])
    equal = np.block([[points, np.eye(m), -np.eye(m)], [np.ones((1, n)), np.zeros((1, 2 * m))]])
    found = linprog(cost, A_eq=equal, b_eq=np.append(targets, 1.0), method="highs", options=OPTIONS)
    assert found.status == 0, found.message
    return float(found.fun)


def slack(points: np.ndarray, targets: np.ndarray) -> float:
    """Largest t such that a distribution with every probability at least t has these values; -inf if none."""
    m, n = points.shape
    # p = t + r with r >= 0
    equal = np.block([[points, points.sum(1, keepdims=True)], [np.ones((1, n)), np.full((1, 1), n)]])
    cost = np.append(np.zeros(n), -1.0)
    found = linprog(cost, A_eq=equal, b_eq=np.append(targets, 1.0), method="highs", options=OPTIONS)
    return -float(found.fun) if found.status == 0 else -np.inf


def judgement(points: np.ndarray, targets: np.ndarray) -> str:
    """One of "inside", "outside", or "edge" where the resolution does not suffice."""
    if distance(points, targets) > RESOLUTION:
        return "outside"
    return "inside" if slack(points, targets) > RESOLUTION else "edge"

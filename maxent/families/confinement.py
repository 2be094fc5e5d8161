"""Whether some combination of the charges confines bosons, and which one.

``ln Z`` of bosons is finite where every level of ``lam.Q`` is positive.  Such a combination of one-body matrices exists
exactly if 0 is not among the values that they can take in a state of one particle, which is the question of core about
a target, with its certificate.  Floor: families.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from maxent.core.blocks import Blocks
from maxent.core.contract import EPS, Problem, Verdict
from maxent.core.decide import decide

__all__ = ["confined"]


def confined(particles: Any) -> Any:
    """The same particles with a confining combination.

    Parameters
    ----------
    particles : Stacks or PhaseSpace

    Raises
    ------
    ValueError
        There is none: ``ln Z`` is infinite for all multipliers.
    """
    matrices: Blocks = particles.one_particle()
    m = matrices.diagonal.shape[0]
    tries = [s * e for e in np.eye(m) for s in (1.0, -1.0)]
    found = next((v for v in tries if _height(matrices, v) > 1e-6), None)
    if found is None:
        noise = EPS * np.maximum(matrices.scale, 1e-300)
        outcome = decide(Problem(matrices, noise, np.zeros(m)))
        found = outcome.direction if outcome.verdict in (Verdict.INFEASIBLE, Verdict.INCONSISTENT) else None
    if found is None or not _height(matrices, found) > 0:
        raise ValueError(
            "no charge confines the bosons: every combination of the charges has a level at or below zero, so that "
            "ln Z is infinite for all multipliers; add the particle number or an energy with a lowest level"
        )
    return replace(particles, confining=found)


def _height(matrices: Blocks, v: np.ndarray) -> float:
    """Lowest level of ``v.Q`` over the largest one."""
    low = matrices.lowest(v)
    return low.value / max(abs(low.highest), abs(low.value), 1e-300)

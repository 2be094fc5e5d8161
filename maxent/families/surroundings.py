"""Interiority where the reachable values have no barrier of closed form: states all around the targets.

If the values ``q_1 .. q_p`` of some states have 0 in the interior of their convex hull, 0 is an interior point of all
that can be reached.  The states are thermal ones around the point that Newton's iteration reaches, and those of lowest
and highest value along its axes; the question to the hull is the barrier ``-sum_i ln(1 + lam.q_i)``, which has a
minimum only if 0 lies inside (Nesterov, Nemirovskii 1994, from memory).  Nothing is claimed where it has none.  Floor:
families.
"""

from __future__ import annotations

import numpy as np

from maxent.core.blocks import Blocks
from maxent.core.contract import Family
from maxent.core.newton import PATIENCE, at_floor, begin, newton_step

__all__ = ["surroundings"]

#: Distances of the thermal states, in standard deviations of each axis: far ones for room, near ones where ``ln Z``
#: bends so quickly that far ones lie all on one side.
DISTANCES = (1.0, 1 / 16, 1 / 256)
#: Longest step from the point reached: axes that would need more are left to the states of extreme value.
FARTHEST = 1e6


def surroundings(family: Family, *, limit: int = 100) -> Blocks:
    """Values of states around 0 as the diagonal charges of listed states.

    Parameters
    ----------
    family : Family
        Charges minus targets.
    limit : int
        Largest number of Newton steps.
    """
    at = begin(family.evaluate, family.start())
    for _ in range(limit):
        if at_floor(at) or at.rejected > PATIENCE:
            break
        at = newton_step(family.evaluate, at, family.inside)
    points = []
    for h, axis in zip(at.curvature, at.axes.T, strict=True):
        for sign in (1.0, -1.0):
            extreme = family.lowest(sign * axis, with_values=True).values
            points += [] if extreme is None else [extreme]
            for distance in DISTANCES:
                step = distance / np.sqrt(max(float(h), 1e-300))
                if step <= FARTHEST * (1 + np.linalg.norm(at.lam)):
                    points.append(family.evaluate(at.lam + sign * step * axis).values)
    return Blocks(np.array(points).T.reshape(len(at.lam), -1), ())

"""What independent levels have to show: their occupations, and what a condensate means.

Floor: app/kinds.  Must not know: configs, figures.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from maxent.app.sections import Column, Section
from maxent.text import number

__all__ = ["condensate_remarks", "occupation_section"]

#: Levels up to which every one stands in the table; of more the first half, and then ever fewer.
LISTED = 400
#: Share of the bosons in one level that is told.
MUCH = 0.05
#: Share of the particles in the last level of an open list that is told.
LEFT_OUT = 1e-6


def occupation_section(
    state: Any, index: np.ndarray, charges: Mapping[str, np.ndarray], where: np.ndarray | None
) -> list[Section]:
    """Occupations of the levels; nothing without a state.

    Parameters
    ----------
    state : ModesState or None
    index : (n,) ndarray
        Numbers of the levels.
    charges : mapping of str to (n,) ndarray
    where : (n,) ndarray or None
        Nodes of a continuous density of states.
    """
    if state is None:
        return []
    n = len(index)
    shown = np.arange(n)
    if n > LISTED:
        late = np.geomspace(LISTED // 2, n - 1, LISTED - LISTED // 2)
        shown = np.unique(np.concatenate([np.arange(LISTED // 2), late.astype(int)]))
    first = Column("level", index[shown].tolist(), "number of the level, from 0")
    if where is not None:
        first = Column("x", where[shown].tolist(), "node of the quadrature")
    occupied = state.occupations[shown]
    own = len(charges) == n and n > 1 and all(np.count_nonzero(v) == 1 for v in charges.values())
    columns = [first]
    if not own:
        one = "of one particle there"
        columns += [Column(f"charge {name}", values[shown].tolist(), one) for name, values in charges.items()]
    columns += [
        Column("copies", state.degeneracy[shown].tolist(), "number of copies of the level, or weight"),
        Column("occupation", occupied.tolist(), "mean number of particles in one copy"),
        Column("spread", np.sqrt(state.fluctuations[shown]).tolist(), "standard deviation of that number"),
    ]
    some = occupied[occupied > 0]
    wide = state.statistics != "fermions" and len(some) > 1 and some.max() > 100 * some.min()
    return [
        Section(
            "levels",
            "Occupations of the levels",
            "Mean number of particles in one copy of each level, and its standard deviation in this ensemble.",
            tuple(columns),
            curves=("occupation",),
            ordinate="occupation",
            scale="log" if wide else "linear",
        )
    ]


def condensate_remarks(state: Any, index: np.ndarray, *, open_end: bool) -> list[str]:
    """What a reader must know of the filling: a condensate and its fluctuations, levels that were left out.

    Parameters
    ----------
    state : ModesState or None
    index : (n,) ndarray
    open_end : bool
        Whether the list of levels ends where somebody chose to, and not where the spectrum does.
    """
    if state is None:
        return []
    filled = state.degeneracy * state.occupations
    total, said = float(filled.sum()), []
    k = int(np.argmax(filled))
    if state.statistics == "bosons" and len(index) > 10 and filled[k] > MUCH * total:
        spread = float(np.sqrt(state.degeneracy[k] * state.fluctuations[k]))
        said.append(
            f"Level {index[k]} holds {number(filled[k], 6)} of {number(total, 6)} bosons, a share of "
            f"{number(filled[k] / total, 3)}. In this ensemble, whose number of particles is free, that number has a "
            f"standard deviation of {number(spread, 3)}; with a fixed number it would be far smaller."
        )
    if open_end and filled[-1] > LEFT_OUT * total:
        said.append(
            f"The list ends at level {index[-1]}, which still holds {number(filled[-1], 2)} of {number(total, 6)} "
            "particles: levels above it were left out and would matter."
        )
    return said

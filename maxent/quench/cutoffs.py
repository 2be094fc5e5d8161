"""What the cut-off of bosons takes from the states of a comparison: the start, the long-time state and every fit.

The measure is that of `maxent.lattice.cutoff_loss`, the weight of the highest level that is kept.  Windows are not
measured.  Floor: quench.  Must not know how the columns are shown.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import TYPE_CHECKING

import numpy as np

from maxent.lattice import cutoff_loss
from maxent.lattice.particles import BosonOperators
from maxent.quench.columns import Ensemble
from maxent.text import listing, number

if TYPE_CHECKING:
    from maxent.quench.eigenstate_tests import EigenstateTests
    from maxent.quench.setting import Setting

__all__ = ["cutoff_notes"]

#: Weight in the highest level of a mode from which it is told.
TOLERANCE = 1e-3


def cutoff_notes(setting: Setting, columns: Iterable[Ensemble], tests: EigenstateTests | None) -> list[str]:
    """Which states feel the cut-off, in sentences; none without bosons.

    Parameters
    ----------
    setting : Setting
    columns : iterable of Ensemble
        Of those that are fitted, the state is made again from their multipliers.
    tests : EigenstateTests or None
    """
    sites, charges, start = setting.charges.sites, setting.charges, setting.start
    if not any(isinstance(slot, BosonOperators) for slot in sites.slots):
        return []
    first = cutoff_loss(sites, start.vectors, weights=start.weights)
    found = {"the start": first.worst, "the long-time state": cutoff_loss(sites, setting.dephased.state).worst}
    for e in columns:
        lam = np.array([e.multipliers.get(n, np.nan) for n in e.charges])
        if e.verdict and np.isfinite(lam).all():
            state = charges.family_of(e.charges, setting.sector if e.sector else None).state(lam)
            where = f"{e.label} in the sector of the start" if e.sector else e.label
            found[where] = cutoff_loss(sites, state).worst
    notes = []
    felt = [f"{number(x, 2)} ({where})" for where, x in found.items() if x > TOLERANCE]
    if felt:
        notes.append(
            f"The cut-off at {listing(sorted({str(n) for n in first.cutoffs}), 'and')} bosons is felt: weight in the "
            f"highest level of a mode {listing(felt, 'and')}, above the tolerance {TOLERANCE:g}; raise the cut-off. "
            "Windows were not measured."
        )
    if tests is not None and any(not t.of_start for t in tests.sectors):
        notes.append("The sectors whose eigenstates are tested are the largest because of the cut-off: it shapes them.")
    return notes

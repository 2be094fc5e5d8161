"""Ranking of quadratic charges: fits and distances of free particles for `maxent.quench.ranking`.  Floor: quench."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from maxent.core.contract import Evaluation
from maxent.families.gaussian_states import FermionState
from maxent.quench.gaussian_blocks import BlockDistances, closeness, moments_of
from maxent.quench.gaussian_fits import GaussianSetting
from maxent.quench.ranking import Fits, Ranking, rank
from maxent.result import Result

__all__ = ["rank_gaussian"]

#: Smaller gains of distance are not counted.
FLOOR = 1e-3


def rank_gaussian(setting: GaussianSetting) -> Ranking | None:
    """Rank the charges; None, with a note, for bosons: without charges they have no state to begin with."""
    if setting.charges.statistics == "bosons":
        setting.notes.append("The charges are not ranked: bosons without charges have no state to begin with.")
        return None
    if set(setting.reference.states) != set(setting.reference.densities):
        setting.notes.append("The ranking by distance takes upper bounds for the blocks that have no more than bounds.")
    return rank(_GaussianFits(setting), floor=FLOOR)


class _GaussianFits(Fits):
    """Ensembles over all states of fermions."""

    def __init__(self, setting: GaussianSetting) -> None:
        super().__init__(setting.progress)
        self.setting, self.names, self.targets = setting, setting.charges.names, setting.targets
        self.largest_entropy = setting.charges.modes * float(np.log(2.0))

    def fitted(self, names: Sequence[str]) -> Result:
        return self.setting.fit(tuple(names))

    def evaluate(self, names: Sequence[str], lam: np.ndarray) -> Evaluation:
        return self.setting.charges.evaluate(names, lam)

    def distances_of(self, result: Result) -> dict[int, float]:
        return _upper(closeness(result.state, moments_of(result.state), self.setting.reference))

    def distance_without(self, block: int) -> float:
        state = FermionState.of_correlations(0.5 * np.eye(self.setting.charges.modes))
        return _upper(closeness(state, moments_of(state), self.setting.reference))[block]


def _upper(found: BlockDistances) -> dict[int, float]:
    """Distances, or their upper bounds."""
    return found.exact | {b: high for b, (_, high) in found.bounds.items()}

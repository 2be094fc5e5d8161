"""Which charges an ensemble needs: greedy ranking by entropy and by the reduced states of blocks.

For nested sets of charges fitted to the same targets the entropy drop is a relative entropy,
``S_k - S_(k+1) = S(rho_(k+1) || rho_k)``.  A cheap predictor of the drop that a further charge brings is
``r^2 / (2 chi_perp)``: r the target minus the prediction of the present ensemble, chi_perp the part of the variance of
the charge that the charges already there do not carry.  The two orders answer different questions: entropy counts
everything a charge knows, distances of blocks what a local observer can see.  Floor: quench.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from maxent.core.contract import Evaluation
from maxent.quench.distances import block_distances, trace_distance
from maxent.quench.ensembles import Charges
from maxent.result import Result

__all__ = ["Fits", "Ranking", "Step", "rank", "rank_charges"]


@dataclass(frozen=True)
class Step:
    """A charge joins.

    Attributes
    ----------
    charge : str
    entropy : float
        Of the ensemble with it, in nats.
    entropy_drop : float
        By how much the entropy fell; equal to the relative entropy of the new state to the old one.
    predicted_drop : float
        ``r^2/(2 chi_perp)``, from the ensemble before.
    distances : dict of int to float
        Trace distance to the dephased state on blocks of so many sites, afterwards.
    """

    charge: str
    entropy: float
    entropy_drop: float
    predicted_drop: float
    distances: dict[int, float]


@dataclass(frozen=True)
class Ranking:
    """Both orders, and where one may stop.

    Attributes
    ----------
    by_entropy, by_distance : tuple of Step
    suggestion : str
    stuck : str
        Why an order is shorter than the list of charges; empty otherwise.
    """

    by_entropy: tuple[Step, ...]
    by_distance: tuple[Step, ...]
    suggestion: str
    stuck: str = ""


def rank_charges(
    charges: Charges,
    targets: Mapping[str, tuple[float, float]],
    reference: Mapping[tuple[int, ...], np.ndarray],
    *,
    floor: float = 0.0,
    progress: Callable[[str], None] | None = None,
) -> Ranking:
    """Rank the charges.

    Parameters
    ----------
    charges : Charges
    targets : mapping from str to (value, accuracy)
    reference : mapping from sites to reduced state
        Of the dephased state, for the blocks to be compared.
    floor : float, optional
        Trace distance that the finite system explains by itself: smaller gains are not counted.
    progress : callable, optional
    """
    return rank(_MatrixFits(charges, targets, reference, progress), floor=floor)


def rank(fits: Fits, *, floor: float = 0.0) -> Ranking:
    """Rank charges whose ensembles someone else fits.

    Parameters
    ----------
    fits : Fits
    floor : float, optional
        As for `rank_charges`.
    """
    by_entropy, stuck = _greedy(fits, lambda step: -step.entropy_drop)
    by_distance, also = _greedy(fits, lambda step: step.distances[max(step.distances)])
    return Ranking(by_entropy, by_distance, _suggestion(by_entropy, by_distance, fits, floor), stuck or also)


class Fits(ABC):
    """Ensembles by their set of charges, each fitted once.

    Attributes
    ----------
    names : tuple of str
        Of all charges, in the user's order.
    targets : dict of str to (float, float)
    largest_entropy : float
        Of the state without charges.
    """

    names: tuple[str, ...]
    targets: Mapping[str, tuple[float, float]]
    largest_entropy: float

    def __init__(self, progress: Callable[[str], None] | None) -> None:
        self.progress = progress
        self._found: dict[frozenset[str], Result] = {}
        self._distances: dict[frozenset[str], dict[int, float]] = {}

    @abstractmethod
    def fitted(self, names: Sequence[str]) -> Result:
        """Fit some charges, in their order."""

    @abstractmethod
    def evaluate(self, names: Sequence[str], lam: np.ndarray) -> Evaluation:
        """Their family at multipliers, to second order."""

    @abstractmethod
    def distances_of(self, result: Result) -> dict[int, float]:
        """Trace distance to the dephased state by the number of sites of a block."""

    @abstractmethod
    def distance_without(self, block: int) -> float:
        """The same for the state without charges."""

    def result(self, names: Sequence[str]) -> Result:
        """Ensemble of a set of charges."""
        key = frozenset(names)
        if key not in self._found:
            ordered = [n for n in self.names if n in key]
            if self.progress is not None:
                self.progress(f"ranking: fit of {', '.join(ordered)}")
            self._found[key] = self.fitted(ordered)
        return self._found[key]

    def distances(self, names: Sequence[str]) -> dict[int, float]:
        """Distances of the ensemble of a set of charges."""
        key = frozenset(names)
        if key not in self._distances:
            self._distances[key] = self.distances_of(self.result(names))
        return self._distances[key]

    def step(self, before: tuple[str, ...], name: str) -> Step | None:
        """A charge joins others; None where there is no such fit."""
        after = self.result((*before, name))
        if not after.success:
            return None
        entropy = self.result(before).entropy if before else self.largest_entropy
        return Step(
            name, after.entropy, entropy - after.entropy, self._predicted(before, name), self.distances((*before, name))
        )

    def _predicted(self, before: tuple[str, ...], name: str) -> float:
        """``r^2/(2 chi_perp)`` in the ensemble of `before` (all states when it is empty)."""
        ordered = [n for n in self.names if n in {*before, name}]
        lam = np.zeros(len(ordered))
        if before:
            found = self.result(before)
            lam = np.array([found.multipliers.get(n, 0.0) for n in ordered])
        ev = self.evaluate(ordered, lam)
        at = ordered.index(name)
        rest = [k for k in range(len(ordered)) if k != at]
        chi = ev.covariance
        perp = chi[at, at]
        if rest:
            inner = chi[np.ix_(rest, rest)]
            perp = perp - chi[at, rest] @ np.linalg.lstsq(inner, chi[rest, at], rcond=1e-12)[0]
        r = self.targets[name][0] - ev.values[at]
        return float(0.5 * r * r / perp) if perp > 1e-14 * max(chi[at, at], 1e-300) else float("nan")


class _MatrixFits(Fits):
    """Ensembles of matrices."""

    def __init__(self, charges: Charges, targets: Any, reference: Any, progress: Any) -> None:
        super().__init__(progress)
        self.charges, self.targets, self.reference, self.names = charges, targets, reference, charges.names
        self.largest_entropy = float(np.log(charges.matrices[charges.hamiltonian].shape[0]))

    def fitted(self, names: Sequence[str]) -> Result:
        return self.charges.fit(names, self.targets, None)

    def evaluate(self, names: Sequence[str], lam: np.ndarray) -> Evaluation:
        return self.charges.subfamily(names).evaluate(lam, 2)

    def distances_of(self, result: Result) -> dict[int, float]:
        return block_distances(result.state, self.reference)

    def distance_without(self, block: int) -> float:
        rho = self.reference[next(s for s in self.reference if len(s) == block)]
        return trace_distance(np.eye(len(rho)) / len(rho), rho)


def _greedy(fits: Fits, badness: Callable[[Step], float]) -> tuple[tuple[Step, ...], str]:
    chosen: list[Step] = []
    rest = list(fits.names)
    while rest:
        before = tuple(s.charge for s in chosen)
        options = [s for s in (fits.step(before, n) for n in rest) if s is not None]
        if not options:
            word = fits.result((*before, rest[0])).verdict
            return tuple(chosen), f"no fit with {' or '.join(rest)} on top of {', '.join(before) or 'nothing'}: {word}"
        least = min(map(badness, options))
        best = next(s for s in options if badness(s) <= least + 1e-9)  # of equals the first in the user's order
        chosen.append(best)
        rest.remove(best.charge)
    return tuple(chosen), ""


def _suggestion(by_entropy: Sequence[Step], by_distance: Sequence[Step], fits: Fits, floor: float) -> str:
    """Where the gains end: what remains is below the floor, or below a hundredth of what was there."""
    if not by_distance:
        return ""
    size = max(by_distance[0].distances)
    at_first = fits.distance_without(size)
    gains, before, kept = [], at_first, 0
    for k, step in enumerate(by_distance):
        gain = before - step.distances[size]
        gains.append(gain)
        if gain > max(floor, 0.01 * at_first):
            kept = k + 1
        before = step.distances[size]
    needed = [s.charge for s in by_distance[:kept]]
    left = [s.charge for s in by_distance[kept:]]
    no_entropy = [s.charge for s in by_entropy if s.entropy_drop <= 1e-9 * max(fits.largest_entropy, 1.0)]
    if not needed:
        return f"No charge brings the state of {size} sites closer to the dephased one by more than this size explains."
    text = f"On blocks of {size} sites the gains end with {', '.join(needed)}"
    if left:
        text += f"; {', '.join(left)} {'adds' if len(left) == 1 else 'add'} nothing that this size could resolve"
    text += "."
    if no_entropy:
        text += f" {', '.join(no_entropy)}: multiplier zero, no entropy drop for this start."
    return text

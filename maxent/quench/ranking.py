"""Which charges an ensemble needs: greedy ranking by entropy and by the reduced states of blocks.

For nested sets of charges fitted to the same targets the entropy drop is a relative entropy,
``S_k - S_(k+1) = S(rho_(k+1) || rho_k)``.  A cheap predictor of the drop that a further charge brings is
``r^2 / (2 chi_perp)``: r the target minus the prediction of the present ensemble, chi_perp the part of the variance of
the charge that the charges already there do not carry.  The two orders answer different questions: entropy counts
everything a charge knows, distances of blocks what a local observer can see.  Floor: quench.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from maxent.quench.distances import block_distances, trace_distance
from maxent.quench.ensembles import Charges
from maxent.result import Result

__all__ = ["Ranking", "Step", "rank_charges"]


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
    fits = _Fits(charges, targets, reference, progress)
    largest = max(map(len, reference))
    by_entropy, stuck = _greedy(fits, lambda step: -step.entropy_drop)
    by_distance, also = _greedy(fits, lambda step: step.distances[largest])
    return Ranking(by_entropy, by_distance, _suggestion(by_entropy, by_distance, fits, floor), stuck or also)


class _Fits:
    """Ensembles by their set of charges, each fitted once."""

    def __init__(self, charges: Charges, targets: Any, reference: Any, progress: Any):
        self.charges, self.targets, self.reference, self.progress = charges, targets, reference, progress
        self.size = charges.sites.size
        self._found: dict[frozenset[str], Result] = {}
        self._distances: dict[frozenset[str], dict[int, float]] = {}
        states = charges.matrices[charges.hamiltonian].shape[0]
        self.largest_entropy = float(np.log(states))

    def result(self, names: Sequence[str]) -> Result:
        key = frozenset(names)
        if key not in self._found:
            ordered = [n for n in self.charges.names if n in key]
            if self.progress is not None:
                self.progress(f"ranking: fit of {', '.join(ordered)}")
            self._found[key] = self.charges.fit(ordered, self.targets, None)
        return self._found[key]

    def distances(self, names: Sequence[str]) -> dict[int, float]:
        key = frozenset(names)
        if key not in self._distances:
            self._distances[key] = block_distances(self.result(names).state, self.reference)
        return self._distances[key]

    def step(self, before: tuple[str, ...], name: str) -> Step | None:
        after = self.result((*before, name))
        if not after.success:
            return None
        entropy = self.result(before).entropy if before else self.largest_entropy
        return Step(
            name, after.entropy, entropy - after.entropy, self._predicted(before, name), self.distances((*before, name))
        )

    def _predicted(self, before: tuple[str, ...], name: str) -> float:
        """``r^2/(2 chi_perp)`` in the ensemble of `before` (all states when it is empty)."""
        ordered = [n for n in self.charges.names if n in {*before, name}]
        family = self.charges.subfamily(ordered)
        lam = np.zeros(len(ordered))
        if before:
            found = self.result(before)
            lam = np.array([found.multipliers.get(n, 0.0) for n in ordered])
        ev = family.evaluate(lam, 2)
        at = ordered.index(name)
        rest = [k for k in range(len(ordered)) if k != at]
        chi = ev.covariance
        perp = chi[at, at]
        if rest:
            inner = chi[np.ix_(rest, rest)]
            perp = perp - chi[at, rest] @ np.linalg.lstsq(inner, chi[rest, at], rcond=1e-12)[0]
        r = self.targets[name][0] - ev.values[at]
        return float(0.5 * r * r / perp) if perp > 1e-14 * max(chi[at, at], 1e-300) else float("nan")


def _greedy(fits: _Fits, badness: Callable[[Step], float]) -> tuple[tuple[Step, ...], str]:
    chosen: list[Step] = []
    rest = list(fits.charges.names)
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


def _suggestion(by_entropy: Sequence[Step], by_distance: Sequence[Step], fits: _Fits, floor: float) -> str:
    """Where the gains end: what remains is below the floor, or below a hundredth of what was there."""
    if not by_distance:
        return ""
    size = max(by_distance[0].distances)
    infinite = fits.reference[next(s for s in fits.reference if len(s) == size)]
    at_first = trace_distance(np.eye(len(infinite)) / len(infinite), infinite)
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


"""Columns of a comparison of free particles: nested sets of charges, and the complete generalised state.

Floor: quench.  Must not know dynamics.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np

from maxent.families.ring_states import RingState
from maxent.quench.columns import COMPLETE, Ensemble
from maxent.quench.fits import nested_sets
from maxent.quench.gaussian_blocks import Reference, closeness, moments_of
from maxent.quench.gaussian_charges import GaussianCharges, moment_covariance
from maxent.quench.gaussian_evolution import GaussianEvolution, Motion
from maxent.quench.gaussian_starts import GaussianStart, Part
from maxent.quench.potentials import Potentials
from maxent.quench.selfchecks import SelfCheck, check_result
from maxent.quench.thermodynamics import Quantity, thermodynamics
from maxent.result import Result

__all__ = ["GaussianSetting", "complete_column", "gaussian_columns"]

#: Most modes for which the self-checks, some twenty evaluations per charge, are made.
CHECKED = 64
#: What the parity does to means of large blocks is told from here on.
TOLD = 1e-6
#: Occupations closer to their ends than this have no multiplier.
PINNED = 1e-14


@dataclass(frozen=True, eq=False)
class GaussianSetting:
    """Everything the columns are made from.

    Attributes
    ----------
    charges : GaussianCharges
    start, dephased : GaussianStart
    targets : dict of str to (float, float)
    parity : {1, -1, 0}
        Of the start, where it selects states of a ring of spins.
    reference : Reference
        Blocks of the dephased state.
    potentials : Potentials
    commute : bool
        Whether the charges commute with one another.
    progress : callable or None
    notes : list of str
        Grows as the parts find what the reader must know.
    """

    charges: GaussianCharges
    start: GaussianStart
    dephased: GaussianStart
    targets: dict[str, tuple[float, float]]
    parity: int
    reference: Reference
    potentials: Potentials
    commute: bool
    progress: Callable[[str], None] | None = None
    notes: list[str] = field(default_factory=list)

    @cached_property
    def _fits(self) -> dict[tuple[tuple[str, ...], int], Result]:
        return {}

    def fit(self, names: tuple[str, ...], parity: int = 0) -> Result:
        """Ensemble of some charges, over all states or those of one parity; each fitted once."""
        if (names, parity) not in self._fits:
            self._fits[names, parity] = self.charges.fit(names, self.targets, parity)
        return self._fits[names, parity]

    @cached_property
    def spread(self) -> np.ndarray:
        """Covariance (m, m) of all charges in the start."""
        return moment_covariance(self.start, list(self.charges.operators.values()))

    @property
    def sharp(self) -> dict[str, float]:
        """Values without spread in the start that have a column of their own."""
        return {"parity": float(self.parity)} if self.parity else {}


def gaussian_columns(setting: GaussianSetting) -> list[Ensemble]:
    """Every nested set of charges fitted to the start, over all states and inside the parity of the start."""
    out, missed = [], 0.0
    for kind, names in nested_sets(setting):
        label = kind if kind != "generalised" else f"generalised: {', '.join(names)}"
        for parity in (0, setting.parity) if setting.parity else (0,):
            if setting.progress is not None:
                setting.progress(f"{label}{', in the sector of the start' if parity else ''}")
            sharp = setting.sharp if parity else {}
            try:
                result = setting.fit(names, parity)
            except ValueError as bad:  # bosons that nothing confines
                out.append(Ensemble(label, kind, names, sharp, "no state", str(bad)))
                continue
            plain = Ensemble(label, kind, names, sharp, str(result.verdict), result.message)
            if result.state is not None:
                plain, rest = _filled(setting, plain, result)
                missed = max(missed, rest)
            out.append(plain)
    if missed > TOLD:
        setting.notes.append(
            "Large blocks of the ring are taken from second moments, which misses what the sharp parity does to means: "
            f"up to {missed:.2g}."
        )
    return out


def _filled(setting: GaussianSetting, plain: Ensemble, result: Result) -> tuple[Ensemble, float]:
    """The ensemble with what its state says, and what its blocks may miss."""
    charges, names, state = setting.charges, plain.charges, result.state
    index = [charges.names.index(n) for n in names]
    spread = setting.spread[np.ix_(index, index)]
    moments = moments_of(state)
    chi = np.full((len(names), len(names)), np.nan)
    corrections: dict[str, float] = {}
    if result.success:
        exact = setting.commute or isinstance(state, RingState)
        chi = result.covariance if exact else moment_covariance(moments, [charges.operators[n] for n in names])
        if not plain.sector and charges.observables:
            corrections = charges.correction(result, names, spread, chi)
    blocks = closeness(state, moments, setting.reference)
    quantities, checks = _thermodynamic_facts(setting, result, 0 if not plain.sector else setting.parity)
    filled = replace(
        plain,
        multipliers=dict(result.multipliers),
        multiplier_errors=dict(result.multiplier_errors),
        entropy=result.entropy,
        means=charges.means(state),
        distances=blocks.exact,
        distance_bounds=blocks.bounds,
        relative_entropies=blocks.entropies,
        corrections=corrections,
        variances={n: (float(spread[k, k]), float(chi[k, k])) for k, n in enumerate(names)},
        quantities=quantities,
        self_checks=checks,
    )
    return filled, blocks.rest


def _thermodynamic_facts(
    setting: GaussianSetting, result: Result, parity: int
) -> tuple[tuple[Quantity, ...], tuple[SelfCheck, ...]]:
    if not result.success:
        return (), ()
    cheap = setting.charges.modes <= CHECKED
    family = setting.charges.family(result.names, parity) if cheap else None
    numbers, fields = setting.potentials.among(result.names)
    found = thermodynamics(result, energy=setting.charges.hamiltonian, numbers=numbers, fields=fields, family=family)
    return found.quantities, check_result(result, family) if family is not None else ()


# ---------------------------------------------------------------------- the complete generalised state


def complete_column(setting: GaussianSetting, evolution: GaussianEvolution) -> tuple[Ensemble, dict[str, np.ndarray]]:
    """The state of largest entropy with the start's means of all quadratic operators that the dynamics conserves.

    These are the occupations of the single-particle levels, and what couples equal levels.  It is the Gaussian state
    of the dephased second moments, one that ignores the parity.

    Returns
    -------
    Ensemble
    levels : dict of str to (n,) ndarray
        ``energy``, ``occupation`` and ``multiplier`` of every level, of the largest part of the start.
    """
    charges, state = setting.charges, setting.dephased
    largest = int(np.argmax([p.weight for p in state.parts]))
    parts = [GaussianStart(state.statistics, (p,), "", 0.0).state for p in state.parts]
    weights = np.array([p.weight for p in state.parts])
    # of two parities, each state is half of a Gaussian one
    mixing = -float(weights @ np.log(weights)) - np.log(len(parts))
    energy, occupation = _occupations(evolution.motions[largest], state.parts[largest], charges.statistics)
    sign = 1.0 if charges.statistics == "bosons" else -1.0
    inside = (occupation > PINNED) & (occupation < 1 - PINNED if sign < 0 else True)
    n = np.where(inside, occupation, 0.5)
    multiplier = np.where(inside, np.log1p(sign * n) - np.log(n), np.nan)
    facts: dict[str, float] = {"levels": len(energy)}
    if inside.any():
        facts |= {"lowest multiplier": float(multiplier[inside].min()), "highest": float(multiplier[inside].max())}
    if not inside.all():
        facts["levels without multiplier"] = int(np.sum(~inside))
    blocks = setting.reference.states
    found = Ensemble(
        COMPLETE,
        COMPLETE,
        (),
        {},
        entropy=float(weights @ [s.entropy for s in parts] + mixing),
        means={name: charges.mean_of_moments(name, state) for name in charges.observables},
        distances=dict.fromkeys(blocks, 0.0),
        relative_entropies=dict.fromkeys(blocks, 0.0),
        facts=facts,
    )
    return found, {"energy": energy, "occupation": occupation, "multiplier": multiplier}


def _occupations(motion: Motion, part: Part, statistics: str) -> tuple[np.ndarray, np.ndarray]:
    """Energies and occupations (n,) of the quasiparticle levels; equal levels in the frame where they do not mix."""
    moments = motion.inverse @ part.covariance @ motion.inverse.conj().T
    energies, occupations = [], []
    for group in np.unique(motion.clusters):
        at = np.flatnonzero(motion.clusters == group)
        x = float(motion.levels[at].mean())
        inside = moments[np.ix_(at, at)]
        if statistics == "fermions":
            n = 0.5 * (1 + np.linalg.eigvalsh(1j * inside))
        else:
            n = np.linalg.eigvalsh(inside) / abs(x) - 0.5
        energies += [x] * len(at)
        occupations += n.tolist()
    order = np.argsort(energies, kind="stable")[len(energies) // 2 :]  # both signs are listed
    return np.maximum(np.array(energies)[order], 0.0), np.maximum(np.array(occupations)[order], 0.0)

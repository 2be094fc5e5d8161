"""What a comparison of ensembles holds: one column for every ensemble, and all that one size tells.

Floor: quench.  Data and reading them; must not know how they are made.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from typing import Any

import numpy as np

from maxent.quench.conservation import Conservation
from maxent.quench.eigenstate_tests import EigenstateTests
from maxent.quench.ranking import Ranking
from maxent.quench.selfchecks import SelfCheck
from maxent.quench.thermodynamics import Quantity
from maxent.quench.windows import WindowScan

__all__ = ["COMPLETE", "Comparison", "Ensemble"]

#: Kind and label of the generalised state of everything that free particles conserve.
COMPLETE = "complete generalised"


@dataclass(frozen=True)
class Ensemble:
    """One column of the table.

    Attributes
    ----------
    label : str
    kind : str
        `canonical`, `grand canonical`, `generalised`, `microcanonical`, `eigenstate` or `complete generalised`.
    charges : tuple of str
    sector : dict of str to float
        Empty: all sectors.  Otherwise the values without spread in the start, which all states of the ensemble share.
    verdict, message : str
        Of the fit; empty where nothing is fitted.
    multipliers, multiplier_errors : dict of str to float
    entropy : float or None
        In nats.
    means : dict of str to float
        Of every observable.
    ranges : dict of str to (float, float)
        10 % and 90 % quantile over single eigenstates.
    distances : dict of int to float
        Trace distance to the dephased state on blocks of so many sites; of single eigenstates the median.
    distance_ranges : dict of int to (float, float)
        10 % and 90 % quantile over single eigenstates.
    distance_bounds : dict of int to (float, float)
        Proved bounds of the trace distance on blocks of free particles that are too large for its value.
    relative_entropies : dict of int to float
        Of free particles: ``S(dephased||ensemble)`` of blocks of so many sites, in nats.
    corrections : dict of str to float
        Leading correction of each observable for the difference of the spreads of the charges.
    variances : dict of str to (float, float)
        Variance of each charge in the start and in the ensemble.
    facts : dict of str to float
        Further numbers: beta, centre and width of a window, energy of an eigenstate.
    quantities : tuple of Quantity
        Thermodynamics of a solved fit: temperature, potentials, heat capacities, each with its formula.
    self_checks : tuple of SelfCheck
        Checks of a solved fit by other routes; each can fail.
    """

    label: str
    kind: str
    charges: tuple[str, ...]
    sector: dict[str, float]
    verdict: str = ""
    message: str = ""
    multipliers: dict[str, float] = field(default_factory=dict)
    multiplier_errors: dict[str, float] = field(default_factory=dict)
    entropy: float | None = None
    means: dict[str, float] = field(default_factory=dict)
    ranges: dict[str, tuple[float, float]] = field(default_factory=dict)
    distances: dict[int, float] = field(default_factory=dict)
    distance_ranges: dict[int, tuple[float, float]] = field(default_factory=dict)
    distance_bounds: dict[int, tuple[float, float]] = field(default_factory=dict)
    relative_entropies: dict[int, float] = field(default_factory=dict)
    corrections: dict[str, float] = field(default_factory=dict)
    variances: dict[str, tuple[float, float]] = field(default_factory=dict)
    facts: dict[str, float] = field(default_factory=dict)
    quantities: tuple[Quantity, ...] = ()
    self_checks: tuple[SelfCheck, ...] = ()

    def farthest(self, block: int) -> float:
        """Trace distance on a block, or its upper bound; infinite where neither is known."""
        return self.distances.get(block, self.distance_bounds.get(block, (0.0, np.inf))[1])


@dataclass(frozen=True, eq=False)
class Comparison:
    """Everything that one size tells.

    Attributes
    ----------
    size : int
        Sites.
    dimension : int or None
        States; None of free particles.
    hamiltonian : str
        Name of the charge that drives the dynamics.
    start_label, start_note : str
    sharp : dict of str to float
        Charges and symmetries without spread in the start.
    conservation : Conservation
    targets : dict of str to float
    initial, truth : dict of str to float
        Mean of each observable in the start, and in the dephased state.
    fluctuations : dict of str to float
        Temporal standard deviation of each observable over infinite time.
    effective_dimension, dephased_entropy : float or None
        The entropy is not comparable with those of ensembles.  None of free particles.
    block_bounds : dict of int to float
        Bound on the time-averaged trace distance of a block from its dephased state; NaN without effective dimension.
    block_sites : dict of int to tuple of int
        Which sites form the block of each size.
    times : (t,) ndarray
    traces : dict of str to (t,) ndarray
    speed, revival : float or None
        Largest group velocity, given or estimated from the lowest levels of neighbouring momenta and from single
        excitations, and L/(2 v).
    plateau : (float, float) or None
    horizon : float
        1/(smallest gap that takes part): only longer averages dephase everything.
    ensembles : tuple of Ensemble
    levels : dict of str to (n,) ndarray
        ``energy``, ``weight`` (of the start) and every observable, of the eigenstates in the matching sector.
    window : dict of str to float
        Mean energy and width of the window in the matching sector; empty where there is none.
    window_scan : WindowScan or None
    eigenstate_tests : EigenstateTests or None
        Level spacings, scatter of eigenstate values and block distances inside one symmetry sector; None of free
        particles.
    ranking : Ranking or None
    notes : tuple of str
        What the reader must know, one sentence each.
    seconds : dict of str to float
        CPU time of each part.
    statistics : {"fermions", "bosons", ""}
        Of free particles; empty where states of all particles are compared.
    modes : dict of str to (n,) ndarray
        ``energy``, ``occupation`` and ``multiplier`` of the single-particle levels, of free particles.
    """

    size: int
    dimension: int | None
    hamiltonian: str
    start_label: str
    start_note: str
    sharp: dict[str, float]
    conservation: Conservation
    targets: dict[str, float]
    initial: dict[str, float]
    truth: dict[str, float]
    fluctuations: dict[str, float]
    effective_dimension: float | None
    dephased_entropy: float | None
    block_bounds: dict[int, float]
    block_sites: dict[int, tuple[int, ...]]
    times: np.ndarray
    traces: dict[str, np.ndarray]
    speed: float | None
    revival: float | None
    plateau: tuple[float, float] | None
    horizon: float
    ensembles: tuple[Ensemble, ...]
    levels: dict[str, np.ndarray]
    window: dict[str, float]
    window_scan: WindowScan | None
    eigenstate_tests: EigenstateTests | None
    ranking: Ranking | None
    notes: tuple[str, ...]
    seconds: dict[str, float]
    statistics: str = ""
    modes: dict[str, np.ndarray] = field(default_factory=dict)

    def ensemble(self, label: str, *, sector: bool = False) -> Ensemble:
        """The ensemble of a label, over all sectors or inside the matching one.

        Raises
        ------
        KeyError
            There is none.
        """
        for e in self.ensembles:
            if e.label == label and bool(e.sector) == sector:
                return e
        raise KeyError(f"no ensemble {label!r}{' in the sector' if sector else ''}")

    def deviation(self, label: str, observable: str, *, sector: bool = False) -> float:
        """Mean in an ensemble minus mean in the dephased state."""
        return self.ensemble(label, sector=sector).means[observable] - self.truth[observable]

    @property
    def labels(self) -> tuple[str, ...]:
        """Labels of the ensembles, each once, in order."""
        return tuple(dict.fromkeys(e.label for e in self.ensembles))

    def best(self, observable: str | None = None, *, sector: bool = False) -> str:
        """Fitted ensemble closest to the truth: in one observable, or on the largest block.

        Windows are left out, since they depend on a width and small ones hold few states, and so is the complete
        generalised state, which has as many charges as levels.  Of ensembles that lie equally close (within 1e-9) the
        one with fewest charges is taken.

        Parameters
        ----------
        observable : str, optional
            By default the state of the largest block is compared.
        sector : bool, optional
            Among the ensembles inside the sector of the start instead of those over all sectors.

        Returns
        -------
        str
            Its label; empty where there is none.
        """
        fitted = [e for e in self.ensembles if e.kind not in ("microcanonical", "eigenstate", COMPLETE)]
        usable = [e for e in fitted if (e.means or e.distances) and bool(e.sector) == sector]
        if not usable:
            return ""
        if observable is not None:
            off = {e.label: abs(e.means[observable] - self.truth[observable]) for e in usable}
        else:
            largest = max(self.block_bounds, default=0)
            off = {e.label: e.farthest(largest) for e in usable}
        least = min(off.values())
        return next(e.label for e in sorted(usable, key=lambda e: len(e.charges)) if off[e.label] <= least + 1e-9)

    def to_dict(self) -> dict[str, Any]:
        """Plain data for JSON, without the long arrays; NaN becomes None."""
        plain = {
            key: getattr(self, key)
            for key in (
                "size", "dimension", "hamiltonian", "start_label", "start_note", "sharp", "targets", "initial",
                "truth", "fluctuations", "effective_dimension", "dephased_entropy", "block_bounds", "block_sites",
                "speed", "revival", "plateau", "horizon", "window", "notes", "statistics",
            )
        }  # fmt: skip
        plain["conservation"] = {
            "charges": {n: asdict(c) | {"drift": c.drift} for n, c in self.conservation.charges.items()},
            "mutual": self.conservation.mutual,
            "message": self.conservation.message,
        }
        plain["ensembles"] = [
            asdict(e) | {"self_checks": [asdict(check) | {"agrees": bool(check)} for check in e.self_checks]}
            for e in self.ensembles
        ]
        plain["window_scan"] = None if self.window_scan is None else [
            {"width": w.width, "centre": w.centre, "mean": w.mean, "beta": w.beta, "entropy": w.entropy}
            for w in self.window_scan.windows
        ]  # fmt: skip
        plain["eigenstate_tests"] = None if self.eigenstate_tests is None else self.eigenstate_tests.to_dict()
        plain["ranking"] = None if self.ranking is None else asdict(self.ranking)
        return _plain(plain)


def _plain(x: Any) -> Any:
    """JSON-able copy: arrays as lists, keys as text, NaN and infinities as None."""
    if isinstance(x, Mapping):
        return {str(k): _plain(v) for k, v in x.items()}
    if isinstance(x, np.ndarray | list | tuple):
        return [_plain(v) for v in x]
    if isinstance(x, bool | np.bool_):
        return bool(x)
    if isinstance(x, int | np.integer):
        return int(x)
    if isinstance(x, float | np.floating):
        return float(x) if np.isfinite(x) else None
    return x

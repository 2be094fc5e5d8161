"""Ensembles side by side with the truth, for one size.

The truth is the dephased start and its dynamics.  Beside it stand the ensembles, each over all sectors and inside the
sector that the start lives in, a window, single eigenstates; beside every deviation stand the yardsticks that tell an
effect of the size from a failure of the ensemble.  Floor: quench.  Must not know configs or figures.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import asdict, dataclass, field, replace
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.errors import ResourceError
from maxent.families.density import MatricesState
from maxent.lattice import OperatorSum
from maxent.quench.conservation import Conservation, check_conservation, require_conserved
from maxent.quench.dephasing import Dephased, dephase
from maxent.quench.distances import block_distances, nested_blocks
from maxent.quench.eigenstates import eigenstate_range
from maxent.quench.ensembles import Charges, Sector, find_sector
from maxent.quench.evolution import Evolution, evolve
from maxent.quench.levels import levels
from maxent.quench.ranking import Ranking, rank_charges
from maxent.quench.spectrum import Spectrum
from maxent.quench.starts import Start
from maxent.quench.windows import GaussianWindow, WindowScan, gaussian_window, scan_widths
from maxent.quench.yardsticks import block_bound, plateau_window, revival_time
from maxent.result import Result
from maxent.text import plural

__all__ = ["Comparison", "Ensemble", "compare"]

#: A spread in energy up to here, as a share of the spectrum, is rounding: the start is an eigenstate.
SHARP = 1e-10
#: Columns of `Comparison.levels` that are no observables.
TAKEN = ("energy", "level", "weight")


@dataclass(frozen=True)
class Ensemble:
    """One column of the table.

    Attributes
    ----------
    label : str
    kind : str
        `canonical`, `grand canonical`, `generalised`, `microcanonical` or `eigenstate`.
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
        Trace distance to the dephased state on blocks of so many sites.
    corrections : dict of str to float
        Leading correction of each observable for the difference of the spreads of the charges.
    variances : dict of str to (float, float)
        Variance of each charge in the start and in the ensemble.
    facts : dict of str to float
        Further numbers: beta, centre and width of a window, energy of an eigenstate.
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
    corrections: dict[str, float] = field(default_factory=dict)
    variances: dict[str, tuple[float, float]] = field(default_factory=dict)
    facts: dict[str, float] = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class Comparison:
    """Everything that one size tells.

    Attributes
    ----------
    size, dimension : int
        Sites; states.
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
    effective_dimension, dephased_entropy : float
        The entropy is not comparable with those of ensembles.
    block_bounds : dict of int to float
        Bound on the time-averaged trace distance of a block from its dephased state.
    times : (t,) ndarray
    traces : dict of str to (t,) ndarray
    speed, revival : float or None
        Largest group velocity, given or estimated from the lowest excitations of neighbouring momenta, and L/(2 v).
    plateau : (float, float) or None
    horizon : float
        1/(smallest gap that takes part): only longer averages dephase everything.
    ensembles : tuple of Ensemble
    levels : dict of str to (n,) ndarray
        ``energy``, ``weight`` (of the start) and every observable, of the eigenstates in the matching sector.
    window : dict of str to float
        Mean energy and width of the window in the matching sector; empty where there is none.
    window_scan : WindowScan or None
    ranking : Ranking or None
    notes : tuple of str
        What the reader must know, one sentence each.
    seconds : dict of str to float
        CPU time of each part.
    """

    size: int
    dimension: int
    hamiltonian: str
    start_label: str
    start_note: str
    sharp: dict[str, float]
    conservation: Conservation
    targets: dict[str, float]
    initial: dict[str, float]
    truth: dict[str, float]
    fluctuations: dict[str, float]
    effective_dimension: float
    dephased_entropy: float
    block_bounds: dict[int, float]
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
    ranking: Ranking | None
    notes: tuple[str, ...]
    seconds: dict[str, float]

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

    def best(self, observable: str | None = None) -> str:
        """Ensemble closest to the truth: in one observable, or on the largest block.

        Of ensembles that lie equally close (within 1e-9) the one with fewest charges is taken.
        """
        usable = [e for e in self.ensembles if (e.means or e.distances) and not e.sector and e.kind != "eigenstate"]
        if not usable:
            return ""
        if observable is not None:
            off = {e.label: abs(e.means[observable] - self.truth[observable]) for e in usable}
        else:
            largest = max(self.block_bounds, default=0)
            off = {e.label: e.distances.get(largest, np.inf) for e in usable}
        least = min(off.values())
        return next(e.label for e in sorted(usable, key=lambda e: len(e.charges)) if off[e.label] <= least + 1e-9)

    def to_dict(self) -> dict[str, Any]:
        """Plain data for JSON, without the long arrays; NaN becomes None."""
        plain = {
            key: getattr(self, key)
            for key in (
                "size", "dimension", "hamiltonian", "start_label", "start_note", "sharp", "targets", "initial",
                "truth", "fluctuations", "effective_dimension", "dephased_entropy", "block_bounds", "speed",
                "revival", "plateau", "horizon", "window", "notes",
            )
        }  # fmt: skip
        plain["conservation"] = {
            "charges": {n: asdict(c) | {"drift": c.drift} for n, c in self.conservation.charges.items()},
            "mutual": self.conservation.mutual,
            "message": self.conservation.message,
        }
        plain["ensembles"] = [asdict(e) for e in self.ensembles]
        plain["window_scan"] = None if self.window_scan is None else [
            {"width": w.width, "centre": w.centre, "mean": w.mean, "beta": w.beta, "entropy": w.entropy}
            for w in self.window_scan.windows
        ]  # fmt: skip
        plain["ranking"] = None if self.ranking is None else asdict(self.ranking)
        return _plain(plain)


def compare(
    charges: Mapping[str, OperatorSum],
    start: Any,
    *,
    hamiltonian: str = "energy",
    observables: Mapping[str, OperatorSum] | None = None,
    blocks: Sequence[int] = (1, 2, 3, 4),
    width: float | None = None,
    times: Any = None,
    speed: float | None = None,
    insist: Iterable[str] = (),
    resolution: float | None = None,
    ranking: bool = True,
    by_symmetry: bool = True,
    progress: Callable[[str], None] | None = None,
) -> Comparison:
    """Compare the ensembles of some charges with the long-time state of a start.

    Parameters
    ----------
    charges : mapping from str to OperatorSum
        The Hamiltonian and further charges, in the order in which they shall join the ensembles.
    start : Start or vector
        In the product basis of the sites.
    hamiltonian : str, optional
        Which charge drives the dynamics.
    observables : mapping from str to OperatorSum, optional
    blocks : sequence of int, optional
        Sizes of the blocks of neighbouring sites whose states are compared; larger than half the system are left out.
    width : float, optional
        Width of the Gaussian window; by default the energy spread of the start.
    times : (t,) array_like, optional
        Times of the traces, in units of 1/energy; by default 400 up to four revival times.
    speed : float, optional
        Largest group velocity in sites per time; estimated where momenta are known.
    insist : iterable of str, optional
        Charges to be kept although they do not commute with the Hamiltonian.
    resolution : float, optional
        Time up to which equal gaps are told apart.
    ranking : bool, optional
        Whether the charges are ranked, which costs further fits.
    by_symmetry : bool, optional
        Whether symmetries without spread in the start (momentum, parity, their powers and products) narrow the sector
        of the second column, or sharp charges alone.
    progress : callable, optional
        Told in one line what is being done.

    Returns
    -------
    Comparison

    Raises
    ------
    TypeError, ValueError
        Operators that are not Hermitian or live on different sites, a start of another length or norm, a charge that
        is not conserved and not insisted on.
    ResourceError
        Blocks that would not fit into memory.
    """
    return _Study(charges, start, hamiltonian, observables or {}, blocks, by_symmetry, progress).run(
        width, times, speed, tuple(insist), resolution, ranking
    )


class _Study:
    """One comparison in the making; each method is one part of it."""

    def __init__(
        self,
        charges: Any,
        start: Any,
        hamiltonian: str,
        observables: Any,
        blocks: Sequence[int],
        by_symmetry: bool,
        progress: Any,
    ):
        for name, op in {**charges, **observables}.items():
            if not isinstance(op, OperatorSum):
                raise TypeError(f"{name!r} must be made by maxent.lattice.formula, not {type(op).__name__}")
            if op.non_hermitian_word is not None:
                raise ValueError(f"{name!r} is not Hermitian: it holds {op.non_hermitian_word}")
        taken = [name for name in observables if name in TAKEN]
        if taken:
            raise ValueError(f"observable {taken[0]!r}: this name is taken in the table of levels; choose another")
        self.progress = progress
        self.by_symmetry = by_symmetry
        self.seconds: dict[str, float] = {}
        self.notes: list[str] = []
        self.start = start if isinstance(start, Start) else Start.from_vector(start)
        self.charges = Charges(charges, hamiltonian, observables=observables)
        dimension = self.charges.matrices[hamiltonian].shape[0]
        if self.start.dimension != dimension:
            raise ValueError(f"the start has {self.start.dimension} amplitudes, the Hamiltonian dimension {dimension}")
        self.dimension = dimension
        self.sites = self.charges.sites
        self.blocks = tuple(b for b in blocks if 1 <= b <= self.sites.size // 2)
        if len(self.blocks) < len(tuple(blocks)):
            self.notes.append(
                f"Blocks larger than half of the {plural(self.sites.size, 'site')} are left out: "
                "they measure the complement."
            )

    def run(
        self, width: Any, times: Any, speed: Any, insist: tuple[str, ...], resolution: Any, ranking: bool
    ) -> Comparison:
        """All parts in order."""
        c, h = self.charges, self.charges.hamiltonian
        with self._clock("spectrum"):
            spectrum = c.spectrum(progress=self.progress)
            spectrum.energies  # noqa: B018  computed on first use; here, so that its time is counted here
        with self._clock("dephased state"):
            dephased = dephase(spectrum, self.start)
            truth_state = dephased.state
            reference = nested_blocks(truth_state, [self._sites_of(b) for b in self.blocks])
            truth = c.means(truth_state)
            initial = {n: self.start.mean(q)[0] for n, q in c.observables.items()}
        with self._clock("conservation"):
            conservation = check_conservation(c.operators[h], c.operators, dephased=dephased, width=spectrum.width)
            warning = require_conserved(conservation, c.names, insist=insist)
            if warning:
                self.notes.append(warning)
        targets = {n: self.start.mean(q.matrix()) for n, q in c.operators.items()}
        sector = find_sector(c, self.start, by_symmetry=self.by_symmetry)
        with self._clock("ensembles"):
            ensembles = self._fits(targets, reference, sector, conservation.broken)
        found_speed = speed if speed is not None else self._estimated_speed(spectrum)
        with self._clock("windows and eigenstates"):
            more, level_data, window, scan = self._windows(
                spectrum, dephased, targets[h][0], width, sector, reference
            )
        with self._clock("time averages"):
            times_, traces, fluctuations, groups = self._dynamics(dephased, truth, times, found_speed, resolution)
        bounds = {
            len(s): block_bound(len(rho), dephased.effective_dimension, equal_gaps=groups)
            for s, rho in reference.items()
        }
        ranked = None
        if ranking and len(c.names) > 1 and reference:
            with self._clock("ranking"):
                ranked = rank_charges(
                    c, targets, reference, floor=min(1e-3, *bounds.values()), progress=self.progress
                )
        revival = None if not found_speed else revival_time(self._length, found_speed)
        plateau = None
        if found_speed and self.blocks:
            span = plateau_window(self._length, found_speed, sites=max(self.blocks))
            plateau = (span.start, span.end)
            if not span.is_open:
                self.notes.append(
                    f"No plateau in time: excitations cross {plural(max(self.blocks), 'site')} after {span.start:.3g} "
                    f"and are back around the system after {span.end:.3g}; only averages over long times compare."
                )
        gaps = np.diff(dephased.energies)
        return Comparison(
            self.sites.size, self.dimension, h, self.start.label, self.start.note,
            {} if sector is None else sector.values, conservation, {n: t[0] for n, t in targets.items()}, initial,
            truth, fluctuations, dephased.effective_dimension, truth_state.entropy, bounds, times_, traces,
            found_speed, revival, plateau, float(1.0 / gaps.min()) if len(gaps) else 0.0, (*ensembles, *more),
            level_data, window, scan, ranked, tuple(self.notes), self.seconds,
        )  # fmt: skip

    # ------------------------------------------------------------------ fitted ensembles

    def _fits(
        self, targets: Any, reference: Any, sector: Sector | None, broken: Sequence[str]
    ) -> list[Ensemble]:
        covariance = _start_covariance(self.start, [op.matrix() for op in self.charges.operators.values()])
        out = []
        for kind, names in self._sets(broken):
            label = kind if kind != "generalised" else f"generalised: {', '.join(names)}"
            for inside in (None, sector) if sector is not None else (None,):
                if self.progress is not None:
                    self.progress(f"{label}{'' if inside is None else ', in the sector of the start'}")
                result = self.charges.fit(names, targets, inside)
                sharp = {} if inside is None else inside.values
                plain = Ensemble(label, kind, names, sharp, str(result.verdict), result.message)
                out.append(plain if result.state is None else self._filled(plain, result, covariance, reference))
        return out

    def _filled(self, plain: Ensemble, result: Result, covariance: np.ndarray, reference: Any) -> Ensemble:
        """The ensemble with what its state says."""
        names, state = plain.charges, result.state
        index = [self.charges.names.index(n) for n in names]
        spread = covariance[np.ix_(index, index)]
        corrections: dict[str, float] = {}
        if not plain.sector and result.success and self.charges.observables:
            corrections = self.charges.correction(result, names, spread)
        chi = np.full(len(names), np.nan)
        if result.success:
            whole = result.covariance if plain.sector else self.charges.fluctuations(result, names)
            chi = np.diagonal(whole)
        return replace(
            plain,
            multipliers=dict(result.multipliers),
            multiplier_errors=dict(result.multiplier_errors),
            entropy=result.entropy,
            means=self._direct_means(state) if plain.sector else self.charges.means(state),
            distances=block_distances(state, reference),
            corrections=corrections,
            variances={n: (float(spread[k, k]), float(chi[k])) for k, n in enumerate(names)},
        )

    def _sets(self, broken: Sequence[str]) -> list[tuple[str, tuple[str, ...]]]:
        """Nested sets of charges: the Hamiltonian, then the numbers, then the other charges in order.

        A number is a conserved sum of diagonal one-site operators.
        """
        c, h = self.charges, self.charges.hamiltonian
        numbers = tuple(n for n in c.names if n != h and n not in broken and self._is_number(c.operators[n]))
        sets: list[tuple[str, tuple[str, ...]]] = [("canonical", (h,))]
        if numbers:
            sets.append(("grand canonical", (h, *numbers)))
        joined = (h, *numbers)
        for name in c.names:
            if name not in joined:
                joined = (*joined, name)
                sets.append(("generalised", joined))
        return sets

    def _is_number(self, op: OperatorSum) -> bool:
        q = op.matrix() if op.range <= 1 else None
        return q is not None and not (q - sp.diags_array(q.diagonal())).count_nonzero()

    def _direct_means(self, state: MatricesState) -> dict[str, float]:
        return {n: state.mean(q) for n, q in self.charges.observables.items()}

    # ------------------------------------------------------------------ windows, eigenstates

    def _windows(
        self,
        spectrum: Spectrum,
        dephased: Dephased,
        energy: float,
        width: float | None,
        sector: Sector | None,
        reference: Any,
    ) -> tuple[list[Ensemble], dict[str, np.ndarray], dict[str, float], WindowScan | None]:
        h = self.charges.hamiltonian
        matching = self._matching(spectrum, sector)
        found = levels(spectrum, energy=h, further={"matching sector": matching.astype(float)})
        s = width if width is not None else self.start.spread(self.charges.operators[h].matrix())
        out: list[Ensemble] = []
        inner: GaussianWindow | None = None
        sharp = s <= SHARP * spectrum.width
        if sharp:
            self.notes.append("No Gaussian window: the start has no spread in energy that could be its width.")
        for inside in () if sharp else (False, True) if sector is not None else (False,):
            within = {"matching sector": 1.0} if inside else None
            try:
                window = gaussian_window(found, s, mean=energy, within=within)
            except ValueError as refused:
                where = " in the sector of the start" if inside else ""
                self.notes.append(f"No Gaussian window{where}: {refused}.")
                continue
            if inside or sector is None:  # levels of other sectors have no place beside single eigenstates
                inner = window
            facts = {"beta": window.beta, "centre": window.centre, "width": window.width, "spacing": window.spacing}
            out.append(
                Ensemble(
                    "Gaussian window",
                    "microcanonical",
                    (h,),
                    sector.values if inside and sector is not None else {},
                    entropy=window.entropy,
                    means=self.charges.means(window.state),
                    distances=block_distances(window.state, reference),
                    facts=facts,
                )
            )
        data = self._eigenstates(spectrum, dephased, matching)
        scan = None
        within = {"matching sector": 1.0} if sector is not None else None
        if inner is not None:
            out.append(self._single(inner, data, matching, sector, reference, spectrum))
        if out:  # where the sector has too few levels the scan is over all sectors
            limits = within if inner is not None else None
            scan = scan_widths(found, s * np.array([0.25, 0.5, 1.0, 2.0]), mean=energy, within=limits)
        window_facts = {} if inner is None else {"mean": inner.mean, "width": inner.width, "beta": inner.beta}
        return out, data, window_facts, scan

    def _matching(self, spectrum: Spectrum, sector: Sector | None) -> np.ndarray:
        """Which levels lie in the sector of the start."""
        if sector is None:
            return np.ones(spectrum.dimension, bool)
        inside = np.zeros(spectrum.dimension, bool)
        inside[sector.columns] = True
        keep = np.zeros(spectrum.dimension, bool)
        for block in spectrum.blocks:
            keep[block.levels] = inside[block.index].all()
        return keep

    def _eigenstates(self, spectrum: Spectrum, dephased: Dephased, matching: np.ndarray) -> dict[str, np.ndarray]:
        """Energy, weight in the start and means of every eigenstate of the matching sector."""
        weight = np.zeros(spectrum.dimension)
        weight[dephased.levels] = np.sum(np.abs(dephased.amplitudes) ** 2, axis=1)
        values = {n: np.full(spectrum.dimension, np.nan) for n in self.charges.observables}
        for i, block in enumerate(spectrum.blocks):
            if not matching[block.levels].all():
                continue
            vectors = spectrum.block_vectors(i)
            for name, q in self.charges.conjugated.items():
                part = q[block.index][:, block.index]
                values[name][block.levels] = np.real(np.einsum("ik,ik->k", vectors.conj(), part @ vectors))
        keep = np.flatnonzero(matching)
        keep = keep[np.argsort(spectrum.energies[keep], kind="stable")]
        return {
            "level": keep,
            "energy": spectrum.energies[keep],
            "weight": weight[keep],
            **{n: v[keep] for n, v in values.items()},
        }

    def _single(
        self,
        window: GaussianWindow,
        data: dict[str, np.ndarray],
        matching: np.ndarray,
        sector: Sector | None,
        reference: Any,
        spectrum: Spectrum,
    ) -> Ensemble:
        medians, ranges, level, count = {}, {}, -1, 1
        for name in self.charges.observables:
            full = np.zeros(len(matching))
            full[data["level"]] = data[name]
            r = eigenstate_range(window, full)
            medians[name], ranges[name], level, count = r.median, (r.low, r.high), r.index, r.degeneracy
        if level < 0:
            inside = np.flatnonzero(matching)
            level = int(inside[np.argmin(np.abs(spectrum.energies[inside] - window.mean))])
        if count > 1:
            self.notes.append(
                f"The eigenstate closest to the mean energy is {count}-fold degenerate inside its sector: "
                "its single values are one choice among many."
            )
        weights = np.zeros(spectrum.dimension)
        weights[level] = 1.0
        state = spectrum.state(weights)
        return Ensemble(
            "single eigenstate",
            "eigenstate",
            (self.charges.hamiltonian,),
            {} if sector is None else sector.values,
            means=medians,
            ranges=ranges,
            distances=block_distances(state, reference),
            facts={"energy": float(spectrum.energies[level])},
        )

    # ------------------------------------------------------------------ dynamics

    def _dynamics(
        self,
        dephased: Dephased,
        truth: Mapping[str, float],
        times: Any,
        speed: float | None,
        resolution: float | None,
    ) -> tuple[np.ndarray, dict[str, np.ndarray], dict[str, float], int]:
        observables = self.charges.observables or {"": sp.eye_array(self.dimension)}  # gaps are grouped in any case
        if times is None:
            scale = dephased.spectrum.width / self.sites.size
            last = 4 * revival_time(self._length, speed) if speed else 60.0 / scale if scale > 0 else 1.0
            times = np.linspace(0.0, last, 400)
        times = np.asarray(times, float)
        try:
            evolution: Evolution = evolve(dephased, observables, progress=self.progress)
        except ResourceError as refused:
            self.notes.append(f"No traces in time and no temporal fluctuations: {refused}.")
            return np.empty(0), {}, {}, max(len(dephased.energies) - 1, 1)  # no gap is shared by more pairs
        if not self.charges.observables:
            groups = evolution.fluctuation("", resolution=resolution).largest_group
            return np.empty(0), {}, {}, max(groups, 1)
        traces = {n: evolution.trace(n, times) for n in evolution.names}
        fluctuations, groups, closest = {}, 1, np.inf
        for name in evolution.names:
            f = evolution.fluctuation(name, resolution=resolution)
            fluctuations[name] = f.standard_deviation
            groups, closest = max(groups, f.largest_group), min(closest, f.closest)
            if resolution is not None and abs(f.mean - truth[name]) > 1e-9 * max(1.0, abs(truth[name])):
                self.notes.append(
                    f"Over times up to the resolution {f.resolution:.3g} not all levels dephase: there {name} averages "
                    f"{f.mean:.4g}, not {truth[name]:.4g}, and its temporal fluctuation is about that mean."
                )
            if f.cut:
                self.notes.append(
                    f"Temporal fluctuation of {name}: {plural(f.cut, 'chain')} of gaps closer than the resolution "
                    f"{f.resolution:.3g} in time had to be cut; the value is an estimate."
                )
        return times, traces, fluctuations, groups

    @property
    def _length(self) -> float:
        """Number of sites around the ring; an open chain is as good as a ring of twice its length."""
        return float(self.sites.size if self.sites.is_ring else 2 * self.sites.size)

    def _estimated_speed(self, spectrum: Spectrum) -> float | None:
        """Largest slope of the lowest level against momentum; None where there are no momenta.

        Slopes at the momentum of the ground state are left out: it is no excitation, and in a system with a gap its
        distance to the levels beside it is that gap, over a step of momentum that shrinks with the size.
        """
        basis = self.charges.basis
        name = "translation"
        if basis is None or name not in basis.labels:
            return None
        label = basis.labels[name]
        order = int(next(m.order for m in basis.maps if m.name == name))
        lowest = np.full(order, np.inf)
        for block in spectrum.blocks:
            k = int(label[block.index[0]])
            lowest[k] = min(lowest[k], float(spectrum.energies[block.levels].min()))
        if order < 3 or not np.isfinite(lowest).all():
            return None
        sites_per_step = self.sites.size / order
        steps = np.abs(np.diff(lowest, append=lowest[:1]))  # from each momentum to the next
        ground = int(np.argmin(lowest))
        steps[[ground, ground - 1]] = 0.0
        slope = float(steps.max() / (2 * np.pi / order)) * sites_per_step
        if slope <= 1e-9 * max(spectrum.width, 1e-300):
            return None
        self.notes.append(
            f"Largest group velocity {slope:.3g} sites per time: estimated from the lowest excitations of "
            "neighbouring momenta; give `speed` where it is known."
        )
        return slope

    # ------------------------------------------------------------------ helpers

    def _sites_of(self, block: int) -> tuple[int, ...]:
        """Neighbouring sites: the first ones of a ring, those in the middle of a chain."""
        first = 0 if self.sites.is_ring else (self.sites.size - block) // 2
        return tuple(range(first, first + block))

    def _clock(self, part: str) -> Any:
        return _Clock(self.seconds, part, self.progress)


class _Clock:
    """CPU time of one part."""

    def __init__(self, seconds: dict[str, float], part: str, progress: Any):
        self.seconds, self.part, self.progress = seconds, part, progress

    def __enter__(self) -> None:
        if self.progress is not None:
            self.progress(self.part)
        self.begun = time.process_time()

    def __exit__(self, *_: object) -> None:
        self.seconds[self.part] = time.process_time() - self.begun


def _start_covariance(start: Start, operators: Sequence[Any]) -> np.ndarray:
    """Symmetrised covariance of operators in a start."""
    images = [q @ start.vectors for q in operators]
    means = [float(start.weights @ np.real(np.einsum("ik,ik->k", start.vectors.conj(), x))) for x in images]
    off = [x - m * start.vectors for x, m in zip(images, means, strict=True)]
    n = len(operators)
    out = np.empty((n, n))
    for i in range(n):
        for j in range(i + 1):
            out[i, j] = out[j, i] = float(start.weights @ np.real(np.einsum("ik,ik->k", off[i].conj(), off[j])))
    return out


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



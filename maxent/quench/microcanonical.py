"""Windows and single eigenstates as columns of a comparison.

Gaussian windows and sharp ones stand beside each other, over all sectors and inside that of the start.  A sharp window
is as wide as a flat distribution of the same spread, ``sqrt(12)`` times the standard deviation in the start, and lies
where its mean comes closest to that of the start; numbers and field charges join it with limits of their own, or are
held where they have no spread.  The windows themselves are those of `maxent.quench.windows`.  Floor: quench.  Must not
know fits or dynamics.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import replace
from typing import Any, NamedTuple

import numpy as np

from maxent.quench.columns import Ensemble
from maxent.quench.distances import block_distances, nested_states, trace_distance
from maxent.quench.eigenstates import eigenstate_means, eigenstate_range, reduced_states, weighted_quantiles
from maxent.quench.ensembles import Sector
from maxent.quench.levels import Levels, levels
from maxent.quench.setting import Setting
from maxent.quench.spectrum import Spectrum
from maxent.quench.windows import SPACINGS, GaussianWindow, WindowScan, gaussian_window, scan_widths, sharp_window
from maxent.text import listing, number, plural

__all__ = ["Microcanonical", "eigenstate_table", "microcanonical_columns"]

#: A spread in energy up to here, as a share of the spectrum, is rounding: the start is an eigenstate.
SHARP = 1e-10
#: Widths of the scan, in units of that of the window.
SCAN = (0.25, 0.5, 1.0, 2.0)
#: A flat distribution of width D has the variance D^2/12.
FLAT = math.sqrt(12.0)
#: The entropy of a sharp window is smoothed over this part of its width before it is differentiated.
SMOOTHING = 0.25
#: Positions of a sharp window that are tried, and how often its limits are adjusted in turn.
POSITIONS, ROUNDS = 401, 3
#: Single eigenstates whose blocks are compared: at most so many, holding all but this weight of the window.
EIGENSTATES, LEFT_OUT = 1000, 1e-4


class Microcanonical(NamedTuple):
    """Columns, table of eigenstates, facts of the window in the matching sector, scan of widths."""

    columns: list[Ensemble]
    levels: dict[str, np.ndarray]
    window: dict[str, float]
    scan: WindowScan | None


def microcanonical_columns(setting: Setting, *, width: float | None) -> Microcanonical:
    """Windows over all sectors and inside that of the start, and single eigenstates there.

    Parameters
    ----------
    setting : Setting
    width : float or None
        Width of the Gaussian window; by default the energy spread of the start.
    """
    h = setting.charges.hamiltonian
    data = eigenstate_table(setting)
    found = _Lists(setting)
    s = width if width is not None else setting.start.spread(setting.charges.operators[h].matrix())
    if s <= SHARP * setting.spectrum.width:
        setting.notes.append("No window in energy: the start has no spread in energy that could be its width.")
        return Microcanonical([], data, {}, None)
    out, inner = _gaussian_columns(setting, found, s)
    energy = setting.targets[h][0]
    scan = None
    if out:  # where the sector has too few levels the scan is over all states of the last window
        scan = scan_widths(found.every if inner is None else found.matching, s * np.array(SCAN), mean=energy)
    out += _sharp_columns(setting, found, s)
    facts: dict[str, float] = {}
    if inner is not None:
        out.append(_single(setting, inner, data))
        facts = {"mean": inner.mean, "width": inner.width, "beta": inner.beta}
    return Microcanonical(out, data, facts, scan)


def eigenstate_table(setting: Setting) -> dict[str, np.ndarray]:
    """Energy, weight in the start and means of every eigenstate of the matching sector, ascending in energy."""
    spectrum, charges = setting.matching, setting.charges
    vectors = setting.start.vectors / np.linalg.norm(setting.start.vectors, axis=0)
    weight = np.abs(spectrum.amplitudes(vectors)) ** 2 @ setting.start.weights
    values = {n: np.empty(spectrum.dimension) for n in charges.observables}
    for i, block in enumerate(spectrum.blocks):
        vectors = spectrum.block_vectors(i)
        for name, q in charges.observables_in(setting.sector).items():
            values[name][block.levels] = eigenstate_means(vectors, q[block.index][:, block.index])
    order = np.argsort(spectrum.energies, kind="stable")
    columns = {"level": np.arange(spectrum.dimension), "energy": spectrum.energies, "weight": weight, **values}
    return {name: column[order] for name, column in columns.items()}


class _Lists:
    """Levels over all sectors, and in the sector of the start; the same where there is none."""

    def __init__(self, setting: Setting) -> None:
        h = setting.charges.hamiltonian
        numbers = _values(setting, setting.spectrum)
        self.every: Levels = levels(setting.spectrum, energy=h, further=numbers)
        self.matching: Levels = self.every
        if setting.sector is not None:
            numbers = _values(setting, setting.matching)
            self.matching = levels(setting.matching, energy=h, further=numbers)
        if setting.clashes:
            each = [f"{a} and {b}" for a, b in setting.clashes]
            setting.notes.append(
                f"No joint window in {listing(each, 'or')}: they do not commute and have no common levels; "
                f"windows are in {listing(self.every.names, 'and')}."
            )

    def of(self, inside: bool) -> Levels:
        return self.matching if inside else self.every

    def select_more(self, numbers: Mapping[str, float]) -> bool:
        """Whether more levels have these numbers than lie in the sector."""
        return int(np.count_nonzero(self.every.inside(numbers))) > self.matching.size


def _values(setting: Setting, spectrum: Spectrum) -> dict[str, np.ndarray]:
    """Value (d,) in each level of the numbers and field charges that have one there."""
    found = {}
    for name, line in setting.lines(spectrum).items():
        values = np.empty(spectrum.dimension)
        constant = True
        for block in spectrum.blocks:
            part = line[block.index]
            constant &= bool(np.ptp(part) <= 1e-9 * max(1.0, float(np.abs(line).max())))
            values[block.levels] = part[0]
        if constant:
            found[name] = values
    return found


# ---------------------------------------------------------------------- Gaussian windows


def _gaussian_columns(setting: Setting, found: _Lists, width: float) -> tuple[list[Ensemble], GaussianWindow | None]:
    """Gaussian windows over all sectors and in that of the start, and the window there.

    Where symmetries leave too few levels in the sector, the window is in all states with its numbers instead.
    """
    h = setting.charges.hamiltonian
    energy = setting.targets[h][0]
    out: list[Ensemble] = []
    inner: GaussianWindow | None = None
    numbers = {n: x for n, x in setting.sharp.items() if n in found.every.values}
    for inside in (False, True) if setting.sector is not None else (False,):
        label, sector, part = "Gaussian window", setting.sharp if inside else {}, setting.sector if inside else None
        where = " in the sector of the start" if inside else ""
        window = _gaussian(setting, found.of(inside), width, energy, None, where)
        if window is None and inside and numbers and found.select_more(numbers):
            label = f"Gaussian window at {_pairs(numbers)}"
            sector, part = numbers, None
            window = _gaussian(setting, found.every, width, energy, numbers, f" at {_pairs(numbers)}")
        elif window is not None and (inside or setting.sector is None):
            inner = window  # levels of other sectors have no place beside single eigenstates
        if window is not None:
            facts = {
                "beta": window.beta, "mean": window.mean, "centre": window.centre, "width": window.width,
                "spacing": window.spacing,
            }  # fmt: skip
            out.append(_column(setting, label, (h,), sector, part, window, facts))
    return out, inner


def _gaussian(
    setting: Setting, found: Levels, width: float, energy: float, within: Mapping[str, float] | None, where: str
) -> GaussianWindow | None:
    try:
        return gaussian_window(found, width, mean=energy, within=within)
    except ValueError as refused:
        setting.notes.append(f"No Gaussian window{where}: {refused}.")
        return None


# ---------------------------------------------------------------------- sharp windows


def _sharp_columns(setting: Setting, found: _Lists, width: float) -> list[Ensemble]:
    """Sharp windows in the energy, and jointly in the numbers and field charges."""
    h = setting.charges.hamiltonian
    out = []
    for inside in (False, True) if setting.sector is not None else (False,):
        among = found.of(inside)
        numbers = [n for n in among.names if n != h]
        held = {n: x for n, x in setting.sharp.items() if n in numbers}
        free = [n for n in numbers if n not in held]
        cases: list[tuple[list[str], dict[str, float]]] = [([], {})]  # numbers with limits, and numbers held
        # numbers held select nothing in the sector, nor beside it where they are all that it holds
        if free or (held and not inside and found.select_more(held)):
            cases.append((free, {} if inside else held))
        for limited, values in cases:
            names = [h, *(n for n in numbers if limited or values)]
            label = "sharp window" + (f": {', '.join(names)}" if len(names) > 1 else "")
            widths = {n: FLAT * setting.start.spread(setting.charges.operators[n].matrix()) for n in limited}
            column = _sharp(setting, among, {h: FLAT * width, **widths}, values, setting.sector if inside else None)
            if isinstance(column, str):
                setting.notes.append(f"No {label}{' in the sector of the start' if inside else ''}: {column}.")
                continue
            sector = setting.sharp if inside else {}
            out.append(replace(column, label=label, charges=tuple(names), sector=sector))
    return out


def _sharp(
    setting: Setting, found: Levels, widths: Mapping[str, float], held: Mapping[str, float], part: Sector | None
) -> Ensemble | str:
    """A sharp window whose means are as close to those of the start as its widths allow, or why there is none."""
    bounds = _placed(found, widths, {n: setting.targets[n][0] for n in widths}, held)
    kept = found.inside(bounds)
    distinct = len(np.unique(found.clusters[kept]))
    if distinct < SPACINGS:
        holds = f"only {plural(distinct, 'distinct level')}" if distinct else "no level"
        return f"a width of {number(widths[found.energy], 4)} holds {holds}"
    window = sharp_window(found, bounds)
    facts = {"states": float(np.count_nonzero(kept)), "mean": window.mean}
    for n in widths:
        name = "" if n == found.energy else f" of {n}"
        facts[f"width{name}"] = window.widths[n]
        facts |= {f"lowest{name}": window.lowest[n], f"highest{name}": window.highest[n]}
        if n != found.energy:
            facts[f"mean of {n}"] = float(window.weights @ found.values[n])
    smoothing = SMOOTHING * widths[found.energy]
    try:
        slope = window.slope(smoothing)
    except ValueError:
        pass  # too few levels for a slope; the column stands without beta
    else:
        facts = {"beta": slope.beta, "beta at": slope.energy, "smoothed over": smoothing, **facts}
    return _column(setting, "", (), {}, part, window, facts)


def _placed(
    found: Levels, widths: Mapping[str, float], means: Mapping[str, float], held: Mapping[str, float]
) -> dict[str, Any]:
    """Limits of the given widths where the mean of each charge among the states kept comes closest to the one asked."""
    centres = dict(means)
    pair = lambda n: (centres[n] - widths[n] / 2, centres[n] + widths[n] / 2)
    for _ in range(ROUNDS if len(widths) > 1 else 1):
        for n, width in widths.items():
            others = {**held, **{m: pair(m) for m in widths if m != n}}
            values = np.sort(found.values[n][found.inside(others)])
            if not len(values):
                continue
            tried = means[n] + width * np.linspace(-1.0, 1.0, POSITIONS)
            tried = tried[np.argsort(np.abs(tried - means[n]), kind="stable")]  # of equals the one nearest
            low = np.searchsorted(values, tried - width / 2)
            high = np.searchsorted(values, tried + width / 2, side="right")
            total = np.concatenate([[0.0], np.cumsum(values)])
            count = high - low
            mean = np.where(count > 0, (total[high] - total[low]) / np.maximum(count, 1), np.inf)
            centres[n] = float(tried[np.argmin(np.abs(mean - means[n]))])
    return {**held, **{n: pair(n) for n in widths}}


# ---------------------------------------------------------------------- columns


def _column(
    setting: Setting,
    label: str,
    names: tuple[str, ...],
    sector: dict[str, float],
    part: Sector | None,
    window: Any,
    facts: dict[str, float],
) -> Ensemble:
    """A window as a column; `part` the sector that its levels are those of, `sector` what its states share."""
    return Ensemble(
        label,
        "microcanonical",
        names,
        sector,
        entropy=window.entropy,
        means=setting.charges.means(window.state, part),
        distances=block_distances(window.state, setting.reference),
        facts=facts,
    )


def _single(setting: Setting, window: GaussianWindow, data: dict[str, np.ndarray]) -> Ensemble:
    """Median and quantiles over the single eigenstates of a window, each with its probability there."""
    medians, ranges = {}, {}
    for name in setting.charges.observables:
        by_level = np.empty(window.levels.size)
        by_level[data["level"]] = data[name]
        r = eigenstate_range(window, by_level)
        medians[name], ranges[name] = r.median, (r.low, r.high)
    closest = eigenstate_range(window, window.levels.energies)
    if closest.degeneracy > 1:
        setting.notes.append(
            f"The eigenstate closest to the mean energy is {closest.degeneracy}-fold degenerate"
            f"{' inside its sector' if setting.sharp else ''}: "
            "values of single eigenstates are one choice among many there."
        )
    distances, distance_ranges = _single_distances(setting, window)
    return Ensemble(
        "single eigenstate",
        "eigenstate",
        (setting.charges.hamiltonian,),
        setting.sharp,
        means=medians,
        ranges=ranges,
        distances=distances,
        distance_ranges=distance_ranges,
        facts={"energy": closest.energy},
    )


def _single_distances(
    setting: Setting, window: GaussianWindow
) -> tuple[dict[int, float], dict[int, tuple[float, float]]]:
    """Median and quantiles of the distances of the blocks of single eigenstates from the dephased state."""
    spectrum, blocks = setting.matching, list(setting.reference)
    if not blocks or spectrum.dims is None:
        return {}, {}
    heaviest = np.argsort(-window.weights, kind="stable")
    count = int(np.searchsorted(np.cumsum(window.weights[heaviest]), 1.0 - LEFT_OUT)) + 1
    chosen = np.sort(heaviest[:count])
    chosen = chosen[np.argsort(spectrum.energies[chosen], kind="stable")][:: -(-len(chosen) // EIGENSTATES)]
    largest = max(blocks, key=len)
    found: dict[int, list[float]] = {len(sites): [] for sites in blocks}
    for part in np.array_split(chosen, -(-len(chosen) // 64)):
        states = reduced_states(spectrum.vectors(part), spectrum.dims, largest)
        for sites, rho in nested_states(states, spectrum.dims, largest, blocks).items():
            found[len(sites)] += [trace_distance(x, setting.reference[sites]) for x in rho]
    medians, ranges = {}, {}
    for block, values in found.items():
        low, medians[block], high = weighted_quantiles(values, window.weights[chosen])
        ranges[block] = (low, high)
    return medians, ranges


def _pairs(values: Mapping[str, float]) -> str:
    return ", ".join(f"{n} = {number(x, 6)}" for n, x in values.items())

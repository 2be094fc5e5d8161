"""Windows and single eigenstates as columns of a comparison.

Floor: quench.  The windows themselves are those of `maxent.quench.windows`.  Must not know fits or dynamics.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from maxent.quench.columns import Ensemble
from maxent.quench.distances import block_distances
from maxent.quench.eigenstates import eigenstate_range
from maxent.quench.levels import levels
from maxent.quench.setting import Setting
from maxent.quench.windows import GaussianWindow, WindowScan, gaussian_window, scan_widths

__all__ = ["Microcanonical", "matching_levels", "microcanonical_columns"]

#: A spread in energy up to here, as a share of the spectrum, is rounding: the start is an eigenstate.
SHARP = 1e-10
#: Widths of the scan, in units of that of the window.
SCAN = (0.25, 0.5, 1.0, 2.0)


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
    charges, sector, spectrum = setting.charges, setting.sector, setting.spectrum
    h = charges.hamiltonian
    energy = setting.targets[h][0]
    matching = matching_levels(setting)
    found = levels(spectrum, energy=h, further={"matching sector": matching.astype(float)})
    s = width if width is not None else setting.start.spread(charges.operators[h].matrix())
    out: list[Ensemble] = []
    inner: GaussianWindow | None = None
    sharp = s <= SHARP * spectrum.width
    if sharp:
        setting.notes.append("No Gaussian window: the start has no spread in energy that could be its width.")
    for inside in () if sharp else (False, True) if sector is not None else (False,):
        within = {"matching sector": 1.0} if inside else None
        try:
            window = gaussian_window(found, s, mean=energy, within=within)
        except ValueError as refused:
            where = " in the sector of the start" if inside else ""
            setting.notes.append(f"No Gaussian window{where}: {refused}.")
            continue
        if inside or sector is None:  # levels of other sectors have no place beside single eigenstates
            inner = window
        facts = {"beta": window.beta, "centre": window.centre, "width": window.width, "spacing": window.spacing}
        out.append(
            Ensemble(
                "Gaussian window",
                "microcanonical",
                (h,),
                setting.sharp if inside else {},
                entropy=window.entropy,
                means=charges.means(window.state),
                distances=block_distances(window.state, setting.reference),
                facts=facts,
            )
        )
    data = eigenstate_table(setting, matching)
    scan = None
    within = {"matching sector": 1.0} if sector is not None else None
    if inner is not None:
        out.append(_single(setting, inner, data, matching))
    if out:  # where the sector has too few levels the scan is over all sectors
        limits = within if inner is not None else None
        scan = scan_widths(found, s * np.array(SCAN), mean=energy, within=limits)
    facts = {} if inner is None else {"mean": inner.mean, "width": inner.width, "beta": inner.beta}
    return Microcanonical(out, data, facts, scan)


def matching_levels(setting: Setting) -> np.ndarray:
    """Which levels (d,) lie in the sector of the start."""
    spectrum = setting.spectrum
    if setting.sector is None:
        return np.ones(spectrum.dimension, bool)
    inside = np.zeros(spectrum.dimension, bool)
    inside[setting.sector.columns] = True
    keep = np.zeros(spectrum.dimension, bool)
    for block in spectrum.blocks:
        keep[block.levels] = inside[block.index].all()
    return keep


def eigenstate_table(setting: Setting, matching: np.ndarray) -> dict[str, np.ndarray]:
    """Energy, weight in the start and means of every eigenstate of the matching sector."""
    spectrum, dephased, charges = setting.spectrum, setting.dephased, setting.charges
    weight = np.zeros(spectrum.dimension)
    weight[dephased.levels] = np.sum(np.abs(dephased.amplitudes) ** 2, axis=1)
    values = {n: np.full(spectrum.dimension, np.nan) for n in charges.observables}
    for i, block in enumerate(spectrum.blocks):
        if not matching[block.levels].all():
            continue
        vectors = spectrum.block_vectors(i)
        for name, q in charges.conjugated.items():
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


def _single(setting: Setting, window: GaussianWindow, data: dict[str, np.ndarray], matching: np.ndarray) -> Ensemble:
    spectrum = setting.spectrum
    medians, ranges, level, count = {}, {}, -1, 1
    for name in setting.charges.observables:
        full = np.zeros(len(matching))
        full[data["level"]] = data[name]
        r = eigenstate_range(window, full)
        medians[name], ranges[name], level, count = r.median, (r.low, r.high), r.index, r.degeneracy
    if level < 0:
        inside = np.flatnonzero(matching)
        level = int(inside[np.argmin(np.abs(spectrum.energies[inside] - window.mean))])
    if count > 1:
        setting.notes.append(
            f"The eigenstate closest to the mean energy is {count}-fold degenerate inside its sector: "
            "its single values are one choice among many."
        )
    weights = np.zeros(spectrum.dimension)
    weights[level] = 1.0
    state = spectrum.state(weights)
    return Ensemble(
        "single eigenstate",
        "eigenstate",
        (setting.charges.hamiltonian,),
        setting.sharp,
        means=medians,
        ranges=ranges,
        distances=block_distances(state, setting.reference),
        facts={"energy": float(spectrum.energies[level])},
    )

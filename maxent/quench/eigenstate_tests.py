"""Tests of single eigenstates inside one symmetry sector, as part of a comparison.

Three numbers tell whether eigenstates are alike: the ratio of neighbouring level spacings, the scatter of eigenstate
values about their smoothed mean, and the distance of the blocks of an eigenstate from those of the window around it.
All of them mean something inside one sector only, so that symmetries which map a block of the spectrum onto itself (a
reflection at momentum zero, a spin flip at magnetisation zero) are resolved first.  Floor: quench.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.core.blocks import eigh
from maxent.quench.distances import nested_states
from maxent.quench.eigenstates import (
    Scatter,
    block_scatter,
    eigenstate_means,
    eigenstate_scatter,
    reduced_states,
)
from maxent.quench.levels import distinct
from maxent.quench.setting import Setting
from maxent.quench.spacings import REFERENCES, Reference, SpacingRatio, spacing_ratio
from maxent.quench.spectrum import Spectrum
from maxent.quench.start_sectors import parity_map
from maxent.text import listing

__all__ = ["EigenstateTests", "SectorTest", "eigenstate_tests"]

#: Fewest levels of a sector that are tested.
LEAST = 30
#: How many sectors are tested where that of the start is too small.
OTHERS = 2
#: Reduced states of all levels of a sector may take so many bytes; larger blocks are left out.
ROOM = 2**29
#: A symmetry may leave this much of a block, and the start have this weight in a sector without living there.
NOTHING = 1e-9


@dataclass(frozen=True, eq=False)
class SectorTest:
    """What the eigenstates of one sector say.

    Attributes
    ----------
    sector : dict of str to float
        Labels of the symmetries and values of the charges that select it.
    size : int
        Number of levels.
    of_start : bool
        Whether the start has weight there.
    ratio : SpacingRatio or None
        None where it was refused.
    refusal : str
        Why something could not be tested, with numbers such as that of the exact degeneracies; may be empty.
    scatter : dict of str to Scatter
        Of each observable in the middle fifth of the levels.
    distances : dict of int to Scatter
        Trace distances of blocks from the window around each eigenstate there, by their number of sites.
    """

    sector: dict[str, float]
    size: int
    of_start: bool
    ratio: SpacingRatio | None
    refusal: str
    scatter: dict[str, Scatter]
    distances: dict[int, Scatter]

    def distance(self, block: int) -> tuple[float, float, float]:
        """Median, 10 % and 90 % quantile of the distances of a block."""
        median, low, high = np.quantile(self.distances[block].deviations, [0.5, 0.1, 0.9])
        return float(median), float(low), float(high)

    def to_dict(self) -> dict[str, Any]:
        """Plain data: the summaries."""
        return {
            "sector": self.sector,
            "size": self.size,
            "of_start": self.of_start,
            "ratio": None if self.ratio is None else vars(self.ratio),
            "refusal": self.refusal,
            "scatter": {n: s.std for n, s in self.scatter.items()},
            "smoothing": {n: s.width for n, s in self.scatter.items()},
            "distances": {b: self.distance(b) for b in self.distances},
        }


@dataclass(frozen=True, eq=False)
class EigenstateTests:
    """Tests of one comparison.

    Attributes
    ----------
    sectors : tuple of SectorTest
        That of the start, or the largest ones of the spectrum where it is too small; empty where these are, too.
    references : dict of str to Reference
        Spacing ratios to compare with, each with its source.
    """

    sectors: tuple[SectorTest, ...]
    references: dict[str, Reference]

    def to_dict(self) -> dict[str, Any]:
        """Plain data."""
        return {
            "sectors": [s.to_dict() for s in self.sectors],
            "references": {n: {"value": r.value, "source": r.source} for n, r in self.references.items()},
        }


@dataclass(frozen=True, eq=False)
class _Part:
    """Levels of one sector: energies (n,), vectors (k, n) in the states `index` of a spectrum, weight of the start."""

    sector: dict[str, float]
    spectrum: Spectrum
    index: np.ndarray
    energies: np.ndarray
    vectors: np.ndarray
    weight: float


def eigenstate_tests(setting: Setting) -> EigenstateTests:
    """Test the sector of the start, or the largest sectors of the spectrum where it is too small.

    What could not be tested is told in the notes of the setting.
    """
    chosen = _largest(setting, setting.matching, 1)
    if not chosen:
        most = max(_largest_size(setting, i) for i in range(len(setting.matching.blocks)))
        chosen = _largest(setting, setting.spectrum, OTHERS)
        text = f"Eigenstate tests: the sectors of the start have fewer than {LEAST} levels (at most {most})"
        if chosen:
            names = listing([f"{_name(p.sector)} with {len(p.energies)}" for p in chosen], "and")
            setting.notes.append(f"{text}; tested are the largest ones of the spectrum instead, {names}.")
        else:
            setting.notes.append(f"{text}, and so have all others: nothing is tested.")
    return EigenstateTests(tuple(_test(setting, p) for p in chosen), REFERENCES)


def _largest(setting: Setting, spectrum: Spectrum, count: int) -> list[_Part]:
    """The largest sectors of a spectrum with enough levels; of that of the start, those in which it has weight."""
    found: list[_Part] = []
    blocks = spectrum.blocks
    for i in sorted(range(len(blocks)), key=lambda i: -blocks[i].size):
        if blocks[i].size < LEAST or (len(found) == count and blocks[i].size <= len(found[-1].energies)):
            break
        parts = [p for p in _parts(setting, spectrum, i) if len(p.energies) >= LEAST]
        found += [p for p in parts if p.weight > NOTHING or spectrum is not setting.matching]
        found = sorted(found, key=lambda p: -len(p.energies))[:count]
    return found


def _largest_size(setting: Setting, number: int) -> int:
    """Most levels of the sectors that a block of the start falls into."""
    size = setting.matching.blocks[number].size
    return size if size < LEAST else max(len(p.energies) for p in _parts(setting, setting.matching, number))


def _test(setting: Setting, part: _Part) -> SectorTest:
    """All three tests of one sector."""
    setting.say(f"eigenstates of the sector {_name(part.sector)}, {len(part.energies)} levels")
    e, refusals = part.energies, []
    ratio = None
    try:
        ratio = spacing_ratio(e)
    except ValueError as refused:
        refusals.append(str(refused))
    scatter: dict[str, Scatter] = {}
    distances: dict[int, Scatter] = {}
    try:
        for name, q in setting.charges.observables.items():
            inside = part.spectrum.conjugated(q, states=part.index)
            scatter[name] = eigenstate_scatter(e, eigenstate_means(part.vectors, inside))
        for sites, states in _block_states(setting, part).items():
            distances[len(sites)] = block_scatter(e, states)
    except ValueError as refused:
        refusals.append(str(refused))
    return SectorTest(
        part.sector, len(e), part.weight > NOTHING, ratio, "; ".join(dict.fromkeys(refusals)), scatter, distances
    )


def _block_states(setting: Setting, part: _Part) -> dict[tuple[int, ...], np.ndarray]:
    """Reduced states (n, k, k) of every eigenvector on every block."""
    spectrum, count = part.spectrum, len(part.energies)
    blocks = [sites for sites, rho in setting.reference.items() if 16 * count * len(rho) ** 2 <= ROOM]
    if not blocks or spectrum.dims is None:
        return {}
    whole = sp.eye_array(spectrum.whole, format="csr") if spectrum.basis is None else spectrum.basis
    largest = max(blocks, key=len)
    states = reduced_states(
        part.vectors, spectrum.dims, largest, isometry=whole[:, part.index], progress=setting.progress
    )
    return nested_states(states, spectrum.dims, largest, blocks)


def _parts(setting: Setting, spectrum: Spectrum, number: int) -> Iterator[_Part]:
    """The sectors that a block of a spectrum falls into when the symmetries that keep it are resolved."""
    block = spectrum.blocks[number]
    vectors, energies = spectrum.block_vectors(number), spectrum.energies[block.levels]
    sector = _labels(setting, spectrum, block.index)
    start = setting.inside(spectrum)[block.index]
    weigh = lambda v: float(np.sum(np.abs(v.conj().T @ start) ** 2 @ setting.start.weights))
    found, constant = _inner_symmetries(setting, spectrum, block.index)
    sector = {**sector, **constant}
    if not found:
        yield _Part(sector, spectrum, block.index, energies, vectors, weigh(vectors))
        return
    code = sum(2**k * g for k, g in enumerate(found.values()))
    vectors, values = _resolved(vectors, energies, code)
    top = 2 ** len(found) - 1
    bits = np.rint((values + top) / 2).astype(int)  # sum of 2^k (+-1), as a number from 0 to 2^n - 1
    for label in np.unique(bits):
        which = np.flatnonzero(bits == label)
        signs = {name: 2.0 * (int(label) >> k & 1) - 1.0 for k, name in enumerate(found)}
        v = vectors[:, which]
        yield _Part({**sector, **signs}, spectrum, block.index, energies[which], v, weigh(v))


def _inner_symmetries(
    setting: Setting, spectrum: Spectrum, index: np.ndarray
) -> tuple[dict[str, Any], dict[str, float]]:
    """Involutions that commute with the Hamiltonian and map a block onto itself.

    Returns those that split it, as matrices (n, n) that commute, and the sign of those that are one number on it.
    """
    basis = setting.charges.basis
    known = set() if basis is None else {m.name for m in basis.maps}
    maps = [m.index_map for m in setting.hamiltonian_symmetries if not m.conjugating and m.name not in known]
    parity = parity_map(setting.charges)
    if parity is not None and not setting.potentials.numbers and not setting.potentials.fields:  # these tell it
        maps.append(parity)
    columns = None if spectrum.basis is None else spectrum.basis[:, index]
    found: dict[str, Any] = {}
    constant: dict[str, float] = {}
    for m in maps:
        u = m.matrix()
        g = sp.csr_array(u[index][:, index] if columns is None else columns.conj().T @ (u @ columns))
        one = sp.eye_array(len(index), format="csr")
        if abs(g @ g - one).max() > NOTHING or abs(g - g.conj().T).max() > NOTHING:
            continue
        if abs(g - g[0, 0] * one).max() <= NOTHING:
            constant[m.name] = float(np.rint(np.real(g[0, 0])))
        elif all(abs(g @ other - other @ g).max() <= NOTHING for other in found.values()):
            found[m.name] = g
    return found, constant


def _resolved(vectors: np.ndarray, energies: np.ndarray, code: Any) -> tuple[np.ndarray, np.ndarray]:
    """Eigenvectors turned inside equal energies until a commuting operator is diagonal, and its values (n,)."""
    image = code @ vectors
    values = np.real(np.einsum("ik,ik->k", vectors.conj(), image))
    out = np.array(vectors, dtype=np.result_type(vectors, image))
    clusters = distinct(energies)
    for c in np.flatnonzero(np.bincount(clusters) > 1):
        which = np.flatnonzero(clusters == c)
        values[which], turn = eigh(vectors[:, which].conj().T @ image[:, which])
        out[:, which] = vectors[:, which] @ turn
    return out, values


def _labels(setting: Setting, spectrum: Spectrum, index: np.ndarray) -> dict[str, float]:
    """What the states of a block share: labels of the basis, numbers and field charges, and what the start shares."""
    basis, sector = setting.charges.basis, setting.sector
    found: dict[str, float] = {}
    columns = index if sector is None or spectrum is not setting.matching else sector.columns(index)
    for name, label in ({} if basis is None else basis.labels).items():
        if np.all(label[columns] == label[columns[0]]):
            found[name] = float(label[columns[0]])
    for name, line in setting.lines(spectrum).items():
        found[name] = round(float(line[index[0]]), 10) + 0.0  # what the basis rounds is no value
    if sector is not None and spectrum is setting.matching:
        found |= {**sector.charges, **sector.further}
    return found


def _name(sector: Mapping[str, float]) -> str:
    return ", ".join(f"{n} = {x:g}" for n, x in sector.items()) or "of all states"

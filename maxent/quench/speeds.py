"""The largest group velocity, estimated from a finite spectrum by momentum.  Floor: quench."""

from __future__ import annotations

import numpy as np
import scipy.sparse as sp

from maxent.core.blocks import eigvalsh
from maxent.lattice.symmetries import SymmetryBasis
from maxent.quench.spectrum import Spectrum

__all__ = ["estimated_speed"]

#: Weight of a state of the basis on the states of one excitation that still counts as none or all.
NOTHING = 1e-9


def estimated_speed(spectrum: Spectrum, basis: SymmetryBasis | None, size: int) -> float | None:
    """Largest slope of energy against momentum of two kinds of excitations, in sites per time.

    The lowest level of each momentum, and, where the Hamiltonian keeps them among themselves, the states of a single
    excitation above the product state of the lowest levels of all sites: one flipped spin, one particle.  Other
    excitations may be faster and then shorten the times made from this speed.

    Slopes of lowest levels at the momentum of the ground state are left out: it is no excitation, and in a system with
    a gap its distance to the levels beside it is that gap, over a step of momentum that shrinks with the size.

    Parameters
    ----------
    spectrum : Spectrum
        In the basis.
    basis : SymmetryBasis or None
    size : int
        Number of sites.

    Returns
    -------
    float or None
        None where there are no momenta, fewer than three, or no dispersion.
    """
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
    steps = np.abs(np.diff(lowest, append=lowest[:1]))  # from each momentum to the next
    ground = int(np.argmin(lowest))
    steps[[ground, ground - 1]] = 0.0
    largest = float(steps.max())
    bands = _single_excitations(spectrum, basis, label, order)
    if bands is not None:
        largest = max(largest, float(np.abs(np.diff(bands, axis=0, append=bands[:1])).max()))
    slope = largest / (2 * np.pi / order) * size / order  # sites per cell
    return slope if slope > 1e-9 * max(spectrum.width, 1e-300) else None


def _single_excitations(spectrum: Spectrum, basis: SymmetryBasis, label: np.ndarray, order: int) -> np.ndarray | None:
    """Energies (momenta, bands) of one excitation, ascending at each momentum; None where others mix with it."""
    if spectrum.dims is None:
        return None
    levels = np.indices(spectrum.dims).reshape(len(spectrum.dims), -1).T
    low, high = levels.sum(axis=1) == 1, (np.array(spectrum.dims) - 1 - levels).sum(axis=1) == 1
    weight = abs(basis.matrix) ** 2
    for states in (low, low | high):  # maps that flip all spins mix the two
        inside = weight.T @ states.astype(float)
        if not np.any((inside > NOTHING) & (inside < 1 - NOTHING)):
            break
    else:
        return None
    columns = np.flatnonzero(inside > 0.5)
    h = sp.csc_array(spectrum.hamiltonian)[:, columns]
    outside = np.ones(h.shape[0], bool)
    outside[columns] = False
    parts = [columns[label[columns] == k] for k in range(order)]
    if h[outside].nnz or len({len(p) for p in parts}) > 1:
        return None
    return np.array([eigvalsh(spectrum.hamiltonian[p][:, p].toarray()) for p in parts])

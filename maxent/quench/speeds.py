"""The largest group velocity, estimated from a finite spectrum by momentum.  Floor: quench."""

from __future__ import annotations

import numpy as np

from maxent.lattice.symmetries import SymmetryBasis
from maxent.quench.spectrum import Spectrum

__all__ = ["estimated_speed"]


def estimated_speed(spectrum: Spectrum, basis: SymmetryBasis | None, size: int) -> float | None:
    """Largest slope of the lowest level against momentum, in sites per time.

    Slopes at the momentum of the ground state are left out: it is no excitation, and in a system with a gap its
    distance to the levels beside it is that gap, over a step of momentum that shrinks with the size.

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
    sites_per_step = size / order
    steps = np.abs(np.diff(lowest, append=lowest[:1]))  # from each momentum to the next
    ground = int(np.argmin(lowest))
    steps[[ground, ground - 1]] = 0.0
    slope = float(steps.max() / (2 * np.pi / order)) * sites_per_step
    return slope if slope > 1e-9 * max(spectrum.width, 1e-300) else None

"""What the parts of one comparison share: charges, start, spectrum, targets, sector, blocks, notes.  Floor: quench."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, field
from functools import cached_property
from types import TracebackType

import numpy as np
import scipy.sparse as sp

from maxent.lattice import Lattice
from maxent.lattice.symmetries import SiteMap, find_symmetries
from maxent.quench.blocks import largest_distance
from maxent.quench.dephasing import Dephased
from maxent.quench.ensembles import Charges, Sector
from maxent.quench.potentials import Potentials
from maxent.quench.spectrum import Spectrum
from maxent.quench.starts import Start

__all__ = ["Clock", "Setting"]


@dataclass(frozen=True, eq=False)
class Setting:
    """Everything the columns of a comparison are made from.

    Attributes
    ----------
    charges : Charges
    start : Start
    spectrum : Spectrum
    dephased : Dephased
    targets : dict of str to (float, float)
        Mean of each charge in the start, and its accuracy.
    sector : Sector or None
        That of the start; None when nothing is without spread.
    reference : dict of sites to ndarray
        Reduced states of the dephased state, by the sites of the block.
    potentials : Potentials
        Numbers and field charges.
    progress : callable or None
    clashes : tuple of (str, str)
        Charges that do not commute with one another.
    notes : list of str
        Grows as the parts find what the reader must know.
    """

    charges: Charges
    start: Start
    spectrum: Spectrum
    dephased: Dephased
    targets: dict[str, tuple[float, float]]
    sector: Sector | None
    reference: dict[tuple[int, ...], np.ndarray]
    potentials: Potentials
    progress: Callable[[str], None] | None = None
    clashes: tuple[tuple[str, str], ...] = ()
    notes: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        """Take over what finding the sector had to say."""
        self.notes.extend(() if self.sector is None else self.sector.notes)

    @cached_property
    def length(self) -> float:
        """Number of sites around the ring that excitations need as long to go around as to come back here.

        An open chain is as good as a ring of twice its length; on a lattice given by bonds the site farthest from
        another stands for the opposite side of the ring.
        """
        sites = self.charges.sites
        if isinstance(sites, Lattice):
            return float(max(2 * largest_distance(sites), 1))
        return float(sites.size if sites.is_ring else 2 * sites.size)

    @property
    def sharp(self) -> dict[str, float]:
        """Values without spread in the start."""
        return {} if self.sector is None else self.sector.values

    @cached_property
    def matching(self) -> Spectrum:
        """Spectrum of the sector of the start, with all eigenvectors; that of all states where there is no sector."""
        if self.sector is None:
            return self.spectrum
        found = self.charges.spectrum(self.sector, progress=self.progress)
        for number in range(len(found.blocks)):
            found.block_vectors(number)  # energies come with them
        return found

    def inside(self, spectrum: Spectrum) -> np.ndarray:
        """Vectors (d, k) of the start in the basis of a spectrum."""
        basis = spectrum.basis
        return np.asarray(self.start.vectors if basis is None else basis.conj().T @ self.start.vectors)

    @cached_property
    def hamiltonian_symmetries(self) -> tuple[SiteMap, ...]:
        """Symmetries of the Hamiltonian alone, those that further charges break included."""
        return find_symmetries([self.charges.operators[self.charges.hamiltonian]], self.charges.sites)

    def lines(self, spectrum: Spectrum) -> dict[str, np.ndarray]:
        """Value (d,) of numbers and field charges in each state of the basis of a spectrum, of those diagonal there."""
        found = {}
        for name in (*self.potentials.numbers, *self.potentials.fields):
            q = spectrum.conjugated(self.charges.operators[name])
            line = np.real(q.diagonal())
            rest = abs(q - sp.diags_array(line))
            if rest.nnz == 0 or rest.max() <= 1e-10 * max(float(np.abs(line).max()), 1e-300):
                found[name] = line
        return found

    def say(self, text: str) -> None:
        """Tell what is being done."""
        if self.progress is not None:
            self.progress(text)


class Clock:
    """CPU time of the parts."""

    def __init__(self, progress: Callable[[str], None] | None) -> None:
        self.seconds: dict[str, float] = {}
        self._progress = progress
        self._part, self._begun = "", 0.0

    def __call__(self, part: str) -> Clock:
        """Name the part that is timed next."""
        self._part = part
        if self._progress is not None:
            self._progress(part)
        return self

    def __enter__(self) -> None:
        self._begun = time.process_time()

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.seconds[self._part] = time.process_time() - self._begun

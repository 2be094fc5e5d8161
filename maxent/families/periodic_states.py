"""Translation-invariant Gaussian states: correlations by distance instead of a matrix of all modes.

``C(r)_ab = <c+_{x,a} c_{x+r,b}>`` is the Fourier transform of the momentum occupations.  Floor: families.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from maxent.families.gaussian_states import BosonState, FermionState, WordState, checked_letters, checked_modes
from maxent.families.majoranas import covariance
from maxent.families.periodic import Periodic
from maxent.families.pfaffians import pauli_word
from maxent.families.quadratic import quadratic

__all__ = ["PeriodicState"]


@dataclass(frozen=True, eq=False)
class PeriodicState(WordState):
    """A state that is the same in every cell of a ring.

    Attributes
    ----------
    like : Periodic
        Any operator of the ring: cells, modes per cell, boundary.
    statistics : {"fermions", "bosons"}
    number_at : (L, p, p) ndarray
        ``<c+_{x,a} c_{x+r,b}>`` by distance r.
    pair_at : (L, p, p) ndarray
        ``<c_{x,a} c_{x+r,b}>``.
    momentum_occupations : (L, p, p) ndarray
        ``<c+_{k,a} c_{k,b}>`` in the order of ``like.momenta()``.
    entropy, log_partition : float
        Of all cells.
    """

    like: Periodic
    statistics: str
    number_at: np.ndarray
    pair_at: np.ndarray
    momentum_occupations: np.ndarray
    entropy: float
    log_partition: float = float("nan")
    #: These families have no prior.
    relative_entropy: ClassVar[None] = None

    @classmethod
    def of_momenta(
        cls, like: Periodic, statistics: str, number: np.ndarray, pair: np.ndarray, entropy: float, log_z: float
    ) -> PeriodicState:
        """The state with ``number[k] = <c+_ka c_kb>`` and ``pair[k] = <c_ka c_-kb>``."""
        turn = np.exp(1j * np.pi * np.arange(like.cells) / like.cells)[:, None, None] if like.antiperiodic else 1.0
        by_distance = np.fft.ifft(number, axis=0) * turn
        # <c_x c_{x+r}> = sum_k e^{-ikr} <c_k c_-k> / L
        pairs = np.fft.fft(pair, axis=0) / like.cells * np.conj(turn)
        return cls(like, statistics, by_distance, pairs, number, entropy, log_z)

    @property
    def modes(self) -> int:
        """Number of modes."""
        return self.like.modes

    def mean(self, operator: Any) -> float:
        """Expectation value of a periodic operator of the same ring, or of any quadratic one on few modes.

        Raises
        ------
        TypeError, ValueError
        """
        q = quadratic(operator, "operator", self.statistics)
        if q.modes != self.modes:
            raise ValueError(f"the operator has {q.modes} modes, the state {self.modes}")
        if not q.is_periodic:
            return self.reduced(range(self.modes)).mean(q)
        if (q.hopping.modes_per_cell, q.hopping.antiperiodic) != (self.like.modes_per_cell, self.like.antiperiodic):
            raise ValueError("the operator has other cells or another boundary than the state")
        total = 0.0
        for r, t in q.hopping.hopping.items():
            total += float(np.sum(t * self._at(self.number_at, r)).real)
        for r, d in q.hopping.pairing.items():
            total -= float(np.sum(d * self._at(self.pair_at, r).conj()).real)
        return self.like.cells * total + q.constant

    def _at(self, table: np.ndarray, r: int) -> np.ndarray:
        turns, at = divmod(r, self.like.cells)
        return -table[at] if self.like.antiperiodic and turns % 2 else table[at]

    def correlations(self, modes: Sequence[int]) -> tuple[np.ndarray, np.ndarray]:
        """``<c+_a c_b>`` and ``<c_a c_b>`` of some modes."""
        at = np.array(checked_modes(modes, self.modes), int)
        x, a = np.divmod(at, self.like.modes_per_cell)
        turns, r = np.divmod(x[None, :] - x[:, None], self.like.cells)
        sign = np.where(self.like.antiperiodic & (turns % 2 == 1), -1.0, 1.0)
        pick = lambda table: sign * table[r, a[:, None], a[None, :]]
        return pick(self.number_at), pick(self.pair_at)

    def log_word(self, letters: Mapping[int, str]) -> tuple[float, float]:
        """Sign (1, -1 or 0) and logarithm of the size of the mean of a product of Pauli matrices on modes.

        Strings run through the modes in their order, from the first letter to the last one, and never around the ring.

        Raises
        ------
        ValueError
            A site that does not exist, a letter that is none, or bosons.
        """
        if self.statistics != "fermions":
            raise ValueError("products of Pauli matrices have means in states of fermions, not of bosons")
        if len(pauli_word(checked_letters(letters, self.modes))[1]) % 2:
            return 0.0, -np.inf
        first, last = min(letters, default=0), max(letters, default=-1)
        block = self.reduced(range(first, last + 1))
        assert isinstance(block, FermionState)
        return block.log_word({site - first: letter for site, letter in letters.items()})

    def reduced(self, modes: Sequence[int]) -> FermionState | BosonState:
        """The state of some modes, in the order given; mode a of cell x is ``x p + a``."""
        number, pair = self.correlations(modes)
        if self.statistics == "fermions":
            return FermionState.of(covariance(number, pair))
        n = len(number)
        real, imaginary = 0.5 * np.eye(n) + number.real, number.imag
        return BosonState.of(np.block([[real, imaginary], [imaginary.T, real]]))

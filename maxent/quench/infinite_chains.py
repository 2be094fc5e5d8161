"""Stationary states of infinite free-fermion chains after a quench, without any light cone: averages over momenta.

Two chains, J > 0, Pauli matrices, numbers per site:

    transverse field:   H = -sum_j (J X_j X_{j+1} + h Z_j),      e(k) = 2 sqrt(J^2 + h^2 - 2 J h cos k)
    hard-core bosons:   H = -J sum_j (b+_j b_{j+1} + h.c.),      e(k) = -2 J cos k

Long after a quench local means are those of the Gaussian state with the conserved occupations n(k) of the start.  That
is the ensemble with all of them as charges, whose multipliers are ``ln(1/n - 1)``.  Floor: quench.  Must not know how
finite systems are solved.

References
----------
P. Calabrese, F. H. L. Essler, M. Fagotti, Phys. Rev. Lett. 106, 227203 (2011); J. Stat. Mech. (2012) P07016, P07022
(occupations).  M. Rigol, A. Muramatsu, M. Olshanii, Phys. Rev. A 74, 053616 (2006) (hard-core bosons).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from maxent.families.gaussian_states import FermionState, binary_entropy
from maxent.families.modes import Modes
from maxent.quench.momentum_averages import average, momentum_nodes

__all__ = ["HardCoreChain", "StationaryState", "TransverseFieldChain", "block_at_nodes", "ensemble_occupations"]

Function = Callable[[np.ndarray], np.ndarray]


@dataclass(frozen=True)
class TransverseFieldChain:
    """``H = -sum (J X_j X_{j+1} + h Z_j)`` on the infinite chain.

    Parameters
    ----------
    field : float
        h, any finite number.
    coupling : float, optional
        J > 0.

    Raises
    ------
    ValueError

    Examples
    --------
    >>> after = TransverseFieldChain(0.5).after_quench(2.0)
    >>> f"{after.magnetisation:.10f} {after.energy:.10f}"
    '0.5173158092 -0.7257656334'
    """

    field: float
    coupling: float = 1.0

    def __post_init__(self) -> None:
        """Check the numbers."""
        if not np.isfinite(self.field) or not np.isfinite(self.coupling) or not self.coupling > 0:
            raise ValueError(f"the chain needs a finite field and coupling > 0, not {self.field} and {self.coupling}")

    def level(self, k: np.ndarray) -> np.ndarray:
        """Excitation energy e(k) >= 0."""
        j, h = self.coupling, self.field
        sign = 1.0 if h >= 0 else -1.0  # no cancellation where the gap closes
        close = 4 * j * abs(h) * (np.sin(k / 2) if h >= 0 else np.cos(k / 2)) ** 2
        return 2 * np.sqrt((j - sign * h) ** 2 + close)

    def offset(self, k: np.ndarray) -> np.ndarray:
        """Energy per momentum without excitations, -e(k)/2."""
        return -0.5 * self.level(k)

    def charge(self, m: int) -> Function:
        """One-particle values ``2 e(k) cos(m k)`` of the charge I_m; for m = 0 those of the Hamiltonian, e(k).

        I_m is the sum over j of ``-J (X_j Z..Z X_{j+m+1} + C_{1-m}) + h (X_j Z..Z X_{j+m} + Y_j Z..Z Y_{j+m})``, where
        C_{1-m} is -Z_j for m = 1 and ``Y_j Z..Z Y_{j+m-1}`` above: the convention map in docs/gaussian-conventions.md.
        """
        return lambda k: (1 if m == 0 else 2) * self.level(k) * np.cos(m * k)

    def constant(self, m: int) -> float:
        """Value per site of I_m without excitations, ``-(1/2) sum q(k)``."""
        q = self.charge(m)
        return -0.5 * float(average(q))

    def correlations(self, size: int, k: np.ndarray, n: np.ndarray) -> np.ndarray:
        """What each momentum adds to ``<i g_{2(j+r)} g_{2j+1}>``, r = 1-size .. size-1, at occupations n.

        These are X Z..Z X for r > 0, -Z for r = 0 and Y Z..Z Y for r < 0.
        """
        r = np.arange(1 - size, size)[:, None]
        half = np.maximum(self.level(k) / 2, 1e-300)
        return (self.coupling * np.cos((r - 1) * k) - self.field * np.cos(r * k)) / half * (1 - 2 * n)

    def block(self, values: np.ndarray) -> FermionState:
        """State of a block of sites with these correlations."""
        size = (len(values) + 1) // 2
        at = np.arange(size)
        part = values[at[:, None] - at[None, :] + size - 1]
        g = np.zeros((2 * size, 2 * size))
        g[0::2, 1::2], g[1::2, 0::2] = part, -part.T
        return FermionState.of(g)

    def cosine(self, k: np.ndarray, before: float) -> tuple[np.ndarray, np.ndarray]:
        """Cosine and sine of the angle between the modes of two fields; `before` may be infinite."""
        j, h, h0 = self.coupling, self.field, before
        ours = self.level(k) / 2
        if np.isinf(h0):
            sign = np.sign(h0)
            return sign * (h - j * np.cos(k)) / ours, sign * -j * np.sin(k) / ours
        theirs = TransverseFieldChain(h0, j).level(k) / 2
        both = np.where(ours * theirs > 0, ours * theirs, 1.0)
        return (h * h0 - (h + h0) * j * np.cos(k) + j * j) / both, j * (h - h0) * np.sin(k) / both

    def after_quench(self, before: float) -> StationaryState:
        """Stationary state of this Hamiltonian from the ground state at the field `before`, +-inf for Z = +-1.

        Raises
        ------
        ValueError
            Not a number.
        """
        if np.isnan(before):
            raise ValueError("the field before the quench must be a number")

        def occupations(k: np.ndarray) -> np.ndarray:
            c, s = self.cosine(k, before)
            small = 0.5 * s * s / (1 + np.abs(c))  # of (1 - |c|)/2 without cancellation
            return np.where(c >= 0, small, 1 - small)

        return StationaryState(self, occupations)


@dataclass(frozen=True)
class HardCoreChain:
    """``H = -J sum (b+_j b_{j+1} + h.c.)`` of hard-core bosons on the infinite chain, n = (1 - Z)/2.

    Parameters
    ----------
    coupling : float, optional
        J > 0.

    Raises
    ------
    ValueError

    Examples
    --------
    >>> released = HardCoreChain().after_superlattice(1.0)
    >>> f"{released.energy:.10f} {released.entropy:.10f}"
    '-0.5174861450 0.3696400494'
    """

    coupling: float = 1.0

    def __post_init__(self) -> None:
        """Check the number."""
        if not np.isfinite(self.coupling) or not self.coupling > 0:
            raise ValueError(f"the chain needs a coupling > 0, not {self.coupling}")

    def level(self, k: np.ndarray) -> np.ndarray:
        """Energy -2 J cos k of a particle."""
        return -2 * self.coupling * np.cos(k)

    def offset(self, k: np.ndarray) -> np.ndarray:
        """Energy without particles: 0."""
        return np.zeros_like(k)

    def charge(self, m: int) -> Function:
        """One-particle values ``2 cos(m k)`` of ``sum (c+_j c_{j+m} + h.c.)`` of the fermions; the number for m = 0.

        In spins ``c+_j c_{j+m} + h.c. = (X_j Z..Z X_{j+m} + Y_j Z..Z Y_{j+m})/2``.
        """
        return lambda k: (1 if m == 0 else 2) * np.cos(m * k)

    def constant(self, m: int) -> float:
        """Value of a charge without particles: 0."""
        return 0.0

    def correlations(self, size: int, k: np.ndarray, n: np.ndarray) -> np.ndarray:
        """What each momentum adds to ``<c+_{j+r} c_j>``, r = 1-size .. size-1, at occupations n."""
        return np.cos(np.arange(1 - size, size)[:, None] * k) * n

    def block(self, values: np.ndarray) -> FermionState:
        """State of a block of sites with these correlations."""
        size = (len(values) + 1) // 2
        at = np.arange(size)
        return FermionState.of_correlations(values[at[:, None] - at[None, :] + size - 1])

    def after_superlattice(self, amplitude: float) -> StationaryState:
        """Half-filled ground state of ``H + A sum (-1)^j n_j``, released into H.

        Parameters
        ----------
        amplitude : float
            A; infinite for one particle on every second site.

        Raises
        ------
        ValueError
            Not a number.
        """
        if np.isnan(amplitude):
            raise ValueError("the amplitude of the superlattice must be a number")
        if np.isinf(amplitude):
            return StationaryState(self, lambda k: np.full_like(k, 0.5))
        # n = (1 + x / sqrt(A^2 + x^2))/2, the small one of n and 1 - n without cancellation
        def occupations(k: np.ndarray) -> np.ndarray:
            x = 2 * self.coupling * np.cos(k)
            length = np.hypot(amplitude, x)
            length = np.where(length > 0, length, 1.0)
            small = 0.5 * (amplitude / length) * (amplitude / (length + np.abs(x)))
            return np.where(x >= 0, 1 - small, small)

        return StationaryState(self, occupations)


@dataclass(frozen=True)
class StationaryState:
    """Gaussian state of an infinite chain by its occupations n(k) = n(-k).

    Attributes
    ----------
    chain : TransverseFieldChain or HardCoreChain
    occupations : callable
        Momenta (n,) -> occupations of its modes.
    """

    chain: Any
    occupations: Function

    @property
    def energy(self) -> float:
        """Energy per site."""
        chain = self.chain
        return float(average(lambda k: chain.level(k) * self.occupations(k) + chain.offset(k)))

    @property
    def entropy(self) -> float:
        """Entropy per site in nats."""
        return float(average(lambda k: binary_entropy(self.occupations(k))))

    @property
    def density(self) -> float:
        """Occupied modes per site; the density of hard-core bosons."""
        return float(average(self.occupations))

    @property
    def magnetisation(self) -> float:
        """Mean of Z at a site."""
        return self.mean_word({0: "Z"})

    def multipliers(self, k: Any) -> np.ndarray:
        """``ln(1/n - 1)`` of the mode occupations; infinite where a mode is empty or full."""
        n = self.occupations(np.asarray(k, float))
        with np.errstate(divide="ignore"):
            return np.log1p(-n) - np.log(n)

    def mean(self, charge: Function) -> float:
        """Mean per site of a charge with the one-particle values `charge`, counted from the empty modes."""
        return float(average(lambda k: charge(k) * self.occupations(k)))

    def block(self, size: int) -> FermionState:
        """State of `size` neighbouring sites.

        Raises
        ------
        ValueError
            No sites.
        """
        if size < 1:
            raise ValueError(f"a block has at least one site, not {size}")
        values = average(lambda k: self.chain.correlations(size, k, self.occupations(k)))
        return self.chain.block(values)

    def mean_word(self, letters: Mapping[int, str]) -> float:
        """Mean of a product of Pauli matrices, sites counted from anywhere.

        Raises
        ------
        ValueError
            No letters, or others than X, Y, Z.
        """
        if not letters:
            raise ValueError("a word has at least one letter")
        first = min(letters)
        moved = {site - first: letter for site, letter in letters.items()}
        return self.block(max(moved) + 1).mean_word(moved)

    def ensemble(self, charges: Mapping[str, Function], *, level: int = 9) -> tuple[Any, StationaryState | None]:
        """Fit the state of largest entropy with the same means of some charges.

        Parameters
        ----------
        charges : dict of str to callable
            Name -> one-particle values at momenta; such as ``{"energy": chain.charge(0)}``.
        level : int, optional
            Number of momenta, ``2^level + 1``.

        Returns
        -------
        result : maxent.Result
            Of `maxent.solve`; log_partition and entropy are per site.
        state : StationaryState or None
            None unless the fit is solved.
        """
        from maxent.solver import solve

        k, weights = momentum_nodes(level)
        rows = {name: q(k) for name, q in charges.items()}
        n = self.occupations(k)
        family = Modes(rows, degeneracy=weights)
        result = solve(family, {name: float((row * n) @ weights) for name, row in rows.items()})
        if not result.success or result.state is None or not np.all(np.isfinite(list(result.multipliers.values()))):
            return result, None
        return result, StationaryState(self.chain, ensemble_occupations(result.multipliers, charges))


def ensemble_occupations(multipliers: Mapping[str, float], charges: Mapping[str, Function]) -> Function:
    """Occupations ``1/(1 + exp(sum lam_j q_j(k)))`` at any momenta.

    Parameters
    ----------
    multipliers : mapping of str to float
        Finite, by name.
    charges : mapping of str to callable
        One-particle values at momenta, by the same names.
    """
    lam = dict(multipliers)

    def occupations(at: np.ndarray) -> np.ndarray:
        x = sum((lam[name] * q(at) for name, q in charges.items()), np.zeros_like(at))
        small = np.exp(-np.abs(x))
        return np.where(x > 0, small, 1.0) / (1 + small)

    return occupations


def block_at_nodes(chain: Any, occupations: np.ndarray, size: int, *, level: int = 9) -> FermionState:
    """State of neighbouring sites where occupations are known at the nodes of `momentum_nodes` only.

    Parameters
    ----------
    chain : TransverseFieldChain or HardCoreChain
    occupations : (2^level + 1,) ndarray
    size : int
        Sites; correlations over `size` sites must be resolved by the nodes.
    level : int, optional
    """
    k, weights = momentum_nodes(level)
    return chain.block(chain.correlations(size, k, occupations) @ weights)

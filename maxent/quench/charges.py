"""Local conserved operators and what a search for them found, as values that print themselves as formulas.

Floor: quench. Must not know how they are found.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from maxent.quench.formula_texts import fermion_formula, formula_text
from maxent.quench.simplify import Word
from maxent.quench.strings import Density
from maxent.text import plural

__all__ = ["LocalCharge", "LocalCharges", "Momentum", "NearlyConserved"]

Momentum = Literal["0", "pi"]


@dataclass(frozen=True)
class LocalCharge:
    """One local operator, summed over all translates of its words.

    Attributes
    ----------
    range : int
        Sites that its widest word covers.
    words : tuple of (coefficient, letters, place)
        Pauli strings from their first letter that is no identity on, and the place of that letter in the unit cell. The
        coefficients are `fractions.Fraction` where all of them are recognised as such. For fermions there is one
        letter per mode, see `maxent.quench.fermion_words`.
    cell : int
        Letters per unit cell: sites, or modes of fermions.
    momentum : str
        "0", or "pi" where the sign alternates from cell to cell.
    defect : float
        |[H, Q]| / (2 |H| |Q|), Frobenius norms at infinite volume.
    exact : bool
        Whether the commutator with H is zero in exact arithmetic, for the fractions as they are printed.
    hamiltonian : bool
        Whether this is the Hamiltonian itself.
    names : tuple of str
        Names of the sites of a cell of the lattice, where they have some.
    species : tuple of str
        Species of fermions, one empty name where they need none; empty for spins.
    """

    range: int
    words: tuple[Word, ...]
    cell: int
    momentum: Momentum
    defect: float
    exact: bool
    hamiltonian: bool = False
    names: tuple[str, ...] = ()
    species: tuple[str, ...] = ()

    def formula(
        self, letters: Literal["spin", "pauli"] = "spin", *, subscript: str = "i", digits: int | None = None
    ) -> str:
        """Formula that `maxent.lattice.formula` reads on a ring, proportional to the operator up to a constant.

        Parameters
        ----------
        letters : "spin" or "pauli"
            Operators Sx, Sy, Sz or X, Y, Z. Fermions have c, dagger(c) and n, and their constant is left out.
        subscript : str
            Name of the free subscript; no parameter may have it.
        digits : int, optional
            Digits of coefficients that are no fractions, for people; default all.
        """
        if self.species:
            return fermion_formula(
                self.words, cell=self.cell, names=self.names, species=self.species, staggered=self.momentum == "pi",
                subscript=subscript, digits=digits,
            )  # fmt: skip
        return formula_text(
            self.words, cell=self.cell, names=self.names, staggered=self.momentum == "pi", spin=letters == "spin",
            subscript=subscript, digits=digits,
        )  # fmt: skip


@dataclass(frozen=True)
class NearlyConserved:
    """The operator of a range that is most nearly conserved without being conserved.

    Attributes
    ----------
    value : float
        Smallest singular value that is not zero, |[H, Q]| / (2 |Q|), in the unit of H.
    multiplicity : int
        Independent operators with this value.
    charge : LocalCharge
        One of them, with norm 1.
    """

    value: float
    multiplicity: int
    charge: LocalCharge


@dataclass(frozen=True, eq=False)
class LocalCharges:
    """What a search found.

    Attributes
    ----------
    hamiltonian : Density
    momentum : str
        "0" or "pi".
    counts : tuple of int
        Number of independent conserved operators with range <= 1, 2, ...; the identity is not counted.
    charges : tuple of LocalCharge
        A basis with few words: the Hamiltonian first, then by range.
    orthonormal : tuple of LocalCharge
        The same space in the same order, each of norm 1 and orthogonal to those of smaller range and to the earlier
        ones of its own.
    nearly : tuple of NearlyConserved or None
        For each range; None where every operator of the range is conserved.
    commutators : (m, m) ndarray or None
        |[Q_j, Q_k]| / (2 |Q_j| |Q_k|) of the charges; None for more than 100.
    diagonal : int
        Independent conserved operators whose words use one letter only.
    largest_zero : float
        Largest singular value that counts as zero.
    """

    hamiltonian: Density
    momentum: Momentum
    counts: tuple[int, ...]
    charges: tuple[LocalCharge, ...]
    orthonormal: tuple[LocalCharge, ...]
    nearly: tuple[NearlyConserved | None, ...]
    commutators: np.ndarray | None
    diagonal: int
    largest_zero: float

    @property
    def range(self) -> int:
        """Largest range that was searched."""
        return len(self.counts)

    @property
    def fragmented(self) -> bool:
        """Whether the number grows with the range as where states fall into many disconnected sets.

        True when there are more diagonal operators than sites of the range (modes, for fermions), or more than four new
        ones per site of the cell and three at the largest range: sets of charges of integrable chains grow more slowly.
        Every pair of species counts as a site: free fermions of several species mix them all.
        """
        h = self.hamiltonian
        new = self.counts[-1] - (self.counts[-2] if self.range > 1 else 0)
        return self.diagonal > h.cell * self.range or (self.range > 2 and new > 4 * h.cell * h.modes + 3)

    @property
    def shortest_ring(self) -> int:
        """Sites of the smallest ring on which the formulas are conserved for sure."""
        cells = self.hamiltonian.sites * (2 if self.momentum == "pi" else 1)
        return -(-(self.range + self.hamiltonian.range - 1) // cells) * cells

    @property
    def remarks(self) -> tuple[str, ...]:
        """What has to be known to read the result, one sentence each."""
        h, said = self.hamiltonian, []
        if h.is_open:
            said.append(
                "Found for the infinite chain, of which the open one is a piece: its ends may break what is found."
            )
        if h.range > self.range:
            said.append(f"The Hamiltonian covers {h.range} sites and is not among operators of range {self.range}.")
        if self.fragmented:
            said.append(
                f"Fragmented: {self.counts[-1]} operators, {self.diagonal} of them diagonal; their number grows with "
                "the range much faster than in integrable chains, and no short list fixes a stationary state."
            )
        if self.commutators is not None and self.commutators.max(initial=0.0) > 1e-9:
            said.append(
                "Not all of them commute with one another: each is stationary, but they have no common eigenstates."
            )
        inexact = sum(not q.exact for q in self.charges)
        if inexact:
            worst = max(q.defect for q in self.charges)
            said.append(
                f"{plural(inexact, 'operator')} with coefficients that are no short fractions commute to rounding "
                f"(largest defect {worst:.1e}), the others exactly."
            )
        said.append(
            f"Strictly local operators of momentum {self.momentum} up to range {self.range} only: quasi-local charges, "
            "larger ranges and other momenta are not found, so the list need not be complete."
        )
        return tuple(said)

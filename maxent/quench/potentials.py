"""Which charges have a chemical potential or a field, and what a fit then says about thermodynamics.

A conserved sum of diagonal one-site operators selects states: of particles it is a number, with a chemical potential,
of spins a field charge.  Floor: quench.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING, Any, NamedTuple

from maxent.lattice import OperatorSum
from maxent.quench.ensembles import Charges, Sector
from maxent.quench.selfchecks import SelfCheck, check_result
from maxent.quench.thermodynamics import Quantity, thermodynamics
from maxent.result import Result

if TYPE_CHECKING:
    from maxent.quench.gaussian_charges import GaussianCharges

__all__ = ["Potentials", "find_potentials", "potential_of", "thermodynamic_facts"]

#: Most states with charges that do not commute for which the self-checks, some twenty evaluations per charge, are made.
CHECKED = 512


class Potentials(NamedTuple):
    """Names of charges by what their multiplier stands for."""

    numbers: tuple[str, ...]
    fields: tuple[str, ...]

    def among(self, names: Sequence[str]) -> Potentials:
        """Those that are in a set of charges."""
        return Potentials(*(tuple(n for n in group if n in names) for group in self))


def find_potentials(
    charges: Charges | GaussianCharges,
    broken: Sequence[str] = (),
    *,
    numbers: Iterable[str] | None = None,
    fields: Iterable[str] | None = None,
) -> Potentials:
    """Numbers and field charges: the ones given, otherwise the ones recognised.

    Parameters
    ----------
    charges : Charges or GaussianCharges
    broken : sequence of str, optional
        Charges that are not conserved are never recognised.
    numbers, fields : iterable of str, optional

    Raises
    ------
    ValueError
        Names that are no charges, the Hamiltonian, or a name given twice.
    """
    given = {"numbers": numbers, "fields": fields}
    taken: list[str] = []
    for what, names in given.items():
        for n in (names,) if isinstance(names, str) else names or ():
            if n not in charges.names or n == charges.hamiltonian or n in taken:
                others = ", ".join(repr(x) for x in charges.names if x != charges.hamiltonian) or "none"
                why = "is named twice" if n in taken else f"is none of the charges beside the Hamiltonian: {others}"
                raise ValueError(f"{what}: {n!r} {why}")
            taken.append(n)
    found: dict[str, tuple[str, ...]] = {}
    for what, names in given.items():
        if names is not None:
            found[what] = (names,) if isinstance(names, str) else tuple(names)
            continue
        found[what] = tuple(
            n
            for n in charges.names
            if n not in (charges.hamiltonian, *broken, *taken) and potential_of(charges.operators[n]) == what
        )
    return Potentials(found["numbers"], found["fields"])


def thermodynamic_facts(
    result: Result, charges: Charges, potentials: Potentials, sector: Sector | None
) -> tuple[tuple[Quantity, ...], tuple[SelfCheck, ...]]:
    """Quantities with their formulas, and checks of the result that can fail; both empty for a fit without success."""
    if not result.success:
        return (), ()
    family = charges.family_of(result.names, sector)
    numbers, fields = potentials.among(result.names)
    cheap = charges.commute or family.size <= CHECKED
    found = thermodynamics(
        result, energy=charges.hamiltonian, numbers=numbers, fields=fields, family=family if cheap else None
    )
    return found.quantities, check_result(result, family) if cheap else ()


def potential_of(operator: OperatorSum) -> str:
    """`numbers` or `fields` for a sum of diagonal one-site operators of particles or of spins; empty otherwise.

    Told from the words of the formula: it takes no matrix, whatever the number of states.
    """
    if operator.range > 1:
        return ""
    sites, sorts = operator.sites, set()
    for word in operator.words:
        for slot, letter in word:
            if not _is_diagonal(sites.slots[slot], letter):
                return ""
            spin = any("Sz" in s.symbols for s in sites.kind(sites.homes[slot][0]).slots)
            sorts.add("fields" if spin else "numbers")
    return sorts.pop() if len(sorts) == 1 else ""


def _is_diagonal(slot: Any, letter: int) -> bool:
    if "Sz" not in slot.symbols:  # creators times annihilators: only those of equal powers are their own conjugates
        return [other for _, other in slot.adjoint(letter)] == [letter]
    matrix = slot.matrix(letter)
    return all(i == j for i, j in zip(*matrix.nonzero(), strict=True))

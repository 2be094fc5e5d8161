"""Which charges have a chemical potential or a field, and what a fit then says about thermodynamics.

A conserved sum of diagonal one-site operators selects states: of particles it is a number, with a chemical potential,
of spins a field charge.  Floor: quench.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import scipy.sparse as sp

from maxent.lattice import OperatorSum
from maxent.quench.ensembles import Charges, Sector
from maxent.quench.selfchecks import SelfCheck, check_result
from maxent.quench.thermodynamics import Quantity, thermodynamics
from maxent.result import Result

if TYPE_CHECKING:
    from maxent.quench.gaussian_charges import GaussianCharges

__all__ = ["Potentials", "find_potentials", "thermodynamic_facts"]

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
        Of the latter both `numbers` and `fields` are given: recognising takes matrices.
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
            if n not in (charges.hamiltonian, *broken, *taken) and _sort(charges.operators[n]) == what
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


def _sort(op: OperatorSum) -> str:
    """`numbers` or `fields` for a sum of diagonal one-site operators of particles or of spins; empty otherwise."""
    if op.range > 1:
        return ""
    q = op.matrix()
    line = q.diagonal()
    if (q - sp.diags_array(line)).count_nonzero():
        return ""
    sites = op.sites
    table = line.reshape([slot.dimension for slot in sites.slots])
    spins = []
    for axis, (site, _) in enumerate(sites.homes):
        if np.ptp(table.real, axis=axis).max() > 1e-12 * max(float(np.abs(line).max()), 1e-300):
            spins.append("Sz" in {name for slot in sites.kind(site).slots for name in slot.symbols})
    if not spins or (any(spins) and not all(spins)):
        return ""
    return "fields" if spins[0] else "numbers"

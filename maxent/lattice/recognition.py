"""Whether charges are quadratic in fermion or boson operators, and in which representation they have Gaussian states.

Fermions and bosons need words of two operators.  Spins 1/2 are fermions after the Jordan-Wigner map; then there are
three cases: every word is quadratic everywhere (open chains) and one Gaussian state is exact; some words are so only
where the parity of all spins is fixed (rings), and the state is a sum over the two parity sectors; or some word is
neither.  Floor: lattice (NumPy).  Must not know what is done with the forms.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from maxent.lattice.kinds import Bosons, Fermions
from maxent.lattice.onebody import OneBody
from maxent.lattice.terms import OperatorSum

__all__ = ["Recognition", "recognise"]


@dataclass(frozen=True, eq=False)
class Recognition:
    """What a set of charges is.

    Attributes
    ----------
    statistics : {"fermions", "bosons"} or None
        None when a charge is not quadratic.
    sectors : dict of int to (dict of str to OneBody)
        By the parity of all sites. One Gaussian state: the key 0 alone. Two parity sectors: the keys +1 and -1.
    obstacle : str or None
        A sentence that names the first charge and word that are not quadratic.
    crossing : str or None
        A charge and word that need parity sectors, as text.
    """

    statistics: str | None
    sectors: dict[int, dict[str, OneBody]] = field(default_factory=dict)
    obstacle: str | None = None
    crossing: str | None = None

    @property
    def is_quadratic(self) -> bool:
        """Whether every charge is."""
        return self.obstacle is None

    @property
    def has_sectors(self) -> bool:
        """Whether the states are sums over two parity sectors."""
        return len(self.sectors) == 2

    @property
    def representation(self) -> str:
        """One sentence for people."""
        if self.obstacle is not None:
            return self.obstacle
        if self.crossing is not None:
            return f"Quadratic in fermions inside each of the two parity sectors: {self.crossing}."
        return f"Quadratic in {self.statistics}: one Gaussian state."

    def forms(self, parity: int = 0) -> dict[str, OneBody]:
        """One-body forms of the charges, everywhere (0) or where the parity is +1 or -1.

        Raises
        ------
        ValueError
            Not quadratic, or quadratic in parity sectors only and none was named.
        """
        if self.obstacle is not None:
            raise ValueError(self.obstacle)
        if parity in self.sectors:
            return self.sectors[parity]
        if self.has_sectors:
            raise ValueError(f"{self.representation} Ask for the forms of the parity +1 or -1")
        return self.sectors[0]


def recognise(charges: Mapping[str, OperatorSum]) -> Recognition:
    """Tell whether every charge is quadratic, and give the one-body forms.

    Parameters
    ----------
    charges : dict of str to OperatorSum
        Hermitian sums on the same sites, at their current parameters.

    Returns
    -------
    Recognition

    Raises
    ------
    ValueError
        No charges, charges on different sites, one that is not Hermitian or has no value.

    Notes
    -----
    Bosons with a cut-off have Gaussian states only as far as the cut-off is not felt: their forms are those of the
    exact operators.

    Examples
    --------
    >>> from maxent.lattice import Chain, Ring, formula
    >>> energy = "-X[i]*X[i+1] - 0.5*Z[i]"
    >>> print(recognise({"energy": formula(energy, Chain(8))}).representation)
    Quadratic in fermions: one Gaussian state.
    >>> found = recognise({"energy": formula(energy, Ring(8)), "field": formula("X[i]", Ring(8))})
    >>> print(found.representation)
    Charge 'field' is not quadratic: it holds Sx[0] with the coefficient 2.
    """
    if not charges:
        raise ValueError("no charges given: there is nothing to recognise")
    sites = next(iter(charges.values())).sites
    for name, q in charges.items():
        if q.sites != sites:
            raise ValueError(f"charge {name!r} lives on {q.sites}, not on {sites}")
        if not q.is_hermitian:
            raise ValueError(f"charge {name!r} is not Hermitian: it holds {q.non_hermitian_word}")
    if not sites.is_spin_half:
        kinds = {type(kind) for kind in sites.kinds}
        if kinds not in ({Fermions}, {Bosons}):
            names = ", ".join(dict.fromkeys(kind.name for kind in sites.kinds))
            reason = f"Sites of {names} have no Gaussian states: spins 1/2, fermions or bosons do."
            return Recognition(None, obstacle=reason)
        forms = {}
        for name, q in charges.items():
            try:
                forms[name] = q.one_body()
            except ValueError as bad:
                return Recognition(None, obstacle=_obstacle(name, bad))
        return Recognition("fermions" if kinds == {Fermions} else "bosons", {0: forms})
    majoranas = {}
    for name, q in charges.items():
        try:
            majoranas[name] = q.majorana_form()
        except ValueError as bad:
            return Recognition(None, obstacle=_obstacle(name, bad))
    first = next((name for name, form in majoranas.items() if form.needs_parity), None)
    if first is None:
        return Recognition("fermions", {0: {name: form.sector(0) for name, form in majoranas.items()}})
    word = majoranas[first].crossing_word
    assert word is not None
    crossing = f"{charges[first].word_text(word)} of the charge {first!r} is so only where the parity is fixed"
    sectors = {eta: {name: form.sector(eta) for name, form in majoranas.items()} for eta in (1, -1)}
    return Recognition("fermions", sectors, crossing=crossing)


def _obstacle(name: str, error: ValueError) -> str:
    reason = str(error).split(": ", 1)[-1]
    return f"Charge {name!r} is {reason}." if reason.startswith("not ") else f"Charge {name!r}: {reason}."

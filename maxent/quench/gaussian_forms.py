"""Quadratic charges of a lattice as families and forms: what stands between formulas and Gaussian states.

Open chains, fermions and bosons are `Bilinears`; rings of spins 1/2, which are one quadratic form per parity, are a
`SpinRing`.  Floor: quench, as only it knows the lattice and the families.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from maxent.families.bilinears import Bilinears
from maxent.families.quadratic import Quadratic, quadratic
from maxent.families.spin_rings import SpinRing
from maxent.lattice import OneBody, OperatorSum, recognise

__all__ = ["as_quadratic", "gaussian_family", "sector_forms"]


def gaussian_family(charges: Mapping[str, OperatorSum], *, sectors: str = "both") -> Bilinears | SpinRing:
    """The family of Gaussian (or parity-projected) states of quadratic charges.

    Parameters
    ----------
    charges : dict of str to OperatorSum
        Spins 1/2, fermions or bosons; every charge quadratic.
    sectors : {"both", "even", "odd", "unprojected"}, optional
        For spins 1/2: all states, those with ``prod Z = 1`` or -1 alone, or one Gaussian state whatever the parity is.

    Returns
    -------
    Bilinears or SpinRing

    Raises
    ------
    ValueError
        A charge that is not quadratic, with the word that is not; parity sectors of something else than spins 1/2.

    Examples
    --------
    >>> from maxent.lattice import Chain, Ring, formula
    >>> energy = "-X[i]*X[i+1] - 0.5*Z[i]"
    >>> [type(gaussian_family({"energy": formula(energy, s)})).__name__ for s in (Chain(50), Ring(50))]
    ['Bilinears', 'SpinRing']
    """
    found = recognise(charges)
    if not found.is_quadratic:
        raise ValueError(found.obstacle)
    sites = next(iter(charges.values())).sites
    if sectors != "both" and not sites.is_spin_half:
        raise ValueError(f"parity sectors are for spins 1/2; sectors = {sectors!r} means nothing here")
    if found.has_sectors or sectors in ("even", "odd"):
        return SpinRing(sites.size, {name: q.pauli_terms() for name, q in charges.items()}, sectors=sectors)
    statistics = found.statistics or "fermions"
    return Bilinears({name: _given(form) for name, form in found.forms().items()}, statistics=statistics)


def sector_forms(operator: Any, statistics: str = "fermions") -> dict[int, Quadratic]:
    """The quadratic form of an operator by parity: the key 0 alone, or +1 and -1.

    Parameters
    ----------
    operator : OperatorSum, OneBody, or whatever `Bilinears` takes as a charge
    statistics : {"fermions", "bosons"}, optional
        Of the last of these.

    Raises
    ------
    TypeError, ValueError
        Not quadratic; names the word.
    """
    if isinstance(operator, OperatorSum):
        found = recognise({"operator": operator})
        if not found.is_quadratic:
            raise ValueError(f"the operator is no quadratic form. {found.obstacle}")
        return {eta: as_quadratic(forms["operator"]) for eta, forms in found.sectors.items()}
    return {0: as_quadratic(operator, statistics)}


def as_quadratic(operator: Any, statistics: str = "fermions") -> Quadratic:
    """A checked form that is the same everywhere."""
    if isinstance(operator, OneBody):
        return quadratic(_given(operator), "operator", operator.statistics)
    return quadratic(operator, "operator", statistics)


def _given(form: OneBody) -> Any:
    if form.pairing is None and form.constant == 0:
        return form.matrix
    return form.matrix, form.pairing, float(np.real(form.constant))

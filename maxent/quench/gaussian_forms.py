"""Quadratic charges of a lattice as families and forms: what stands between formulas and Gaussian states.

Open chains, fermions and bosons are `Bilinears`; rings of spins 1/2, which are one quadratic form per parity, are a
`SpinRing`.  Floor: quench, as only it knows the lattice and the families.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from maxent.families.bilinears import Bilinears, Periodic
from maxent.families.gaussian_states import FermionState
from maxent.families.periodic_states import PeriodicState
from maxent.families.quadratic import Quadratic, quadratic
from maxent.families.ring_states import RingState
from maxent.families.spin_rings import SpinRing
from maxent.lattice import OneBody, OperatorSum, recognise
from maxent.quench.gaussian_parity import ring_mean

__all__ = ["as_quadratic", "gaussian_family", "gaussian_mean", "sector_forms"]


def gaussian_family(charges: Mapping[str, OperatorSum], *, sectors: str = "both") -> Bilinears | SpinRing:
    """The family of Gaussian (or parity-projected) states of quadratic charges.

    Parameters
    ----------
    charges : dict of str to OperatorSum
        Spins 1/2, fermions or bosons; every charge quadratic.
    sectors : {"both", "even", "odd", "unprojected"}, optional
        For spins 1/2: all states, those with ``prod Z = 1`` or -1 alone, or one Gaussian state in which the ring is
        closed as for an even parity whatever the parity is: that is wrong by about exp(-L/xi).

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
    projected = sectors in ("even", "odd") or (found.has_sectors and sectors == "both")
    if projected:
        return SpinRing(sites.size, {name: q.pauli_terms() for name, q in charges.items()}, sectors=sectors)
    forms = {name: as_quadratic(form) for name, form in found.sectors[1 if found.has_sectors else 0].items()}
    statistics = found.statistics or "fermions"
    if sites.is_ring and sites.length > 2 and statistics == "fermions":
        cells, closed = sites.length, found.has_sectors
        by_distance = {name: _periodic(form, cells, closed) for name, form in forms.items()}
        if all(p is not None for p in by_distance.values()):
            return Bilinears({n: (p, None, forms[n].constant) for n, p in by_distance.items()}, statistics=statistics)
    return Bilinears(forms, statistics=statistics)


def _periodic(form: Quadratic, cells: int, antiperiodic: bool) -> Periodic | None:
    """The same form by distances, or None where it is not the same in every cell."""
    h, d = form.matrices()
    p = len(h) // cells
    rows: list[dict[int, np.ndarray]] = []
    for matrix in (h, np.zeros_like(h) if d is None else d):
        found = {}
        for r in range(cells // 2 + 1):
            amplitude = matrix[:p, r * p : (r + 1) * p]
            if amplitude.any():  # half of the ring away, both directions meet
                found[r] = amplitude / 2 if 2 * r == cells else amplitude
        rows.append(found)
    try:
        made = Periodic(cells, rows[0] or {0: np.zeros((p, p))}, pairing=rows[1] or None, antiperiodic=antiperiodic)
    except ValueError:
        return None
    back = made.matrices()
    size = max(float(np.abs(h).max()), 1e-300)
    same = [np.abs(x - (0 if y is None else y)).max() <= 1e-13 * size for x, y in zip(back, (h, d), strict=True)]
    return made if all(same) else None


def gaussian_mean(state: Any, operator: OperatorSum) -> float:
    """Mean of a sum of spins, fermions or bosons in a state of `gaussian_family`; of spins also what is not quadratic.

    Parameters
    ----------
    state : FermionState, BosonState, PeriodicState or RingState
    operator : OperatorSum

    Raises
    ------
    ValueError
        Fermions or bosons of which the operator is not quadratic.
    """
    found = recognise({"operator": operator})
    if isinstance(state, RingState):
        return state.mean(operator.pauli_terms()) if found.is_quadratic else ring_mean(state, operator)
    if isinstance(state, PeriodicState) and found.is_quadratic:
        form = as_quadratic(found.sectors[1 if found.has_sectors else 0]["operator"])
        made = _periodic(form, state.like.cells, state.like.antiperiodic)
        if made is not None:
            return float(state.mean((made, None, form.constant)))
    by_words = isinstance(state, PeriodicState) and operator.sites.is_spin_half
    if found.is_quadratic and not found.has_sectors and not by_words:
        return float(state.mean(as_quadratic(found.forms()["operator"])))
    if not operator.sites.is_spin_half:
        raise ValueError(found.obstacle)
    if isinstance(state, FermionState):
        return float(sum(c * state.mean_word(letters) for c, letters in operator.pauli_terms()))
    known: dict[tuple[tuple[int, str], ...], float] = {}
    total = 0.0
    for coefficient, letters in operator.pauli_terms():
        word = _from_zero(letters, state.like.cells)
        if word not in known:
            known[word] = state.reduced(range(word[-1][0] + 1)).mean_word(dict(word)) if word else 1.0
        total += coefficient * known[word]
    return total


def _from_zero(letters: Mapping[int, str], cells: int) -> tuple[tuple[int, str], ...]:
    """A word moved around the ring so that it begins at site 0 and ends as early as possible."""
    if not letters:
        return ()
    at = sorted(letters)
    gaps = [(b - a) % cells or cells for a, b in zip(at, at[1:] + at[:1], strict=True)]
    first = at[(int(np.argmax(gaps)) + 1) % len(at)]
    return tuple(sorted(((site - first) % cells, letter) for site, letter in letters.items()))


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

"""Ensembles of free particles side by side with the long-time state, for one size: hundreds of sites.

What `maxent.quench.comparison` is for matrices, with the same data.  The truth is the start with its second moments
averaged over all times; equal levels are kept coherent.  Means of two operators are those of the time average exactly.
The state of a block is the Gaussian state with these moments, which is the complete generalised Gibbs state there: at
finite size fluctuations in time make the average of the block differ from it by about 1/L.  Windows, single eigenstates
and level statistics are not for free particles.  Floor: quench.  Must not know configs or figures.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import Any

import numpy as np

from maxent.families.majoranas import to_majoranas
from maxent.lattice import OperatorSum
from maxent.lattice.sites import Sites
from maxent.quench.blocks import block_sites
from maxent.quench.columns import Comparison
from maxent.quench.conservation import require_conserved
from maxent.quench.gaussian_averages import gaussian_averages, slowest_time
from maxent.quench.gaussian_blocks import Reference
from maxent.quench.gaussian_charges import GaussianCharges, gaussian_potentials
from maxent.quench.gaussian_conservation import gaussian_conservation
from maxent.quench.gaussian_evolution import gaussian_evolve
from maxent.quench.gaussian_fits import GaussianSetting, complete_column, gaussian_columns
from maxent.quench.gaussian_ranking import rank_gaussian
from maxent.quench.gaussian_speeds import group_velocity
from maxent.quench.gaussian_starts import GaussianStart, vacuum_parity
from maxent.quench.gaussian_words import spin_period
from maxent.quench.potentials import find_potentials
from maxent.quench.setting import Clock
from maxent.quench.yardsticks import plateau_window, revival_time
from maxent.text import listing, plural

__all__ = ["compare_gaussian"]

#: Most sites of a block.
LARGEST = 64


def compare_gaussian(
    charges: Mapping[str, OperatorSum],
    start: GaussianStart,
    *,
    hamiltonian: str = "energy",
    observables: Mapping[str, OperatorSum] | None = None,
    blocks: Sequence[int] = (1, 2, 3, 4),
    times: Any = None,
    speed: float | None = None,
    insist: Iterable[str] = (),
    ranking: bool = True,
    numbers: Iterable[str] | None = None,
    fields: Iterable[str] | None = None,
    unprojected: bool = False,
    progress: Callable[[str], None] | None = None,
) -> Comparison:
    """Compare the ensembles of some quadratic charges with the long-time state of a start of free particles.

    Parameters
    ----------
    charges : mapping from str to OperatorSum
        The Hamiltonian and further charges, in the order in which they shall join the ensembles; quadratic in fermions
        or bosons, spins 1/2 after the Jordan-Wigner map.
    start : GaussianStart
    hamiltonian : str, optional
        Which charge drives the dynamics.
    observables : mapping from str to OperatorSum, optional
        Of spins 1/2 any; of fermions and bosons quadratic ones.
    blocks : sequence of int, optional
        Sizes of the blocks of neighbouring sites whose states are compared; larger than half the system, or than 64
        sites, are left out.
    times : (t,) array_like, optional
        Times of the traces, in units of 1/energy; by default 400 up to four revival times.
    speed : float, optional
        Largest group velocity in sites per time; by default that of the single-particle levels where cells are alike.
    insist : iterable of str, optional
        Charges to be kept although they do not commute with the Hamiltonian.
    ranking : bool, optional
        Whether the charges are ranked, which costs further fits.
    numbers, fields : iterable of str, optional
        Charges that have a chemical potential, or a field; by default the conserved sums of diagonal one-site
        operators.
    unprojected : bool, optional
        Whether ensembles of a ring of spins ignore the parity: one Gaussian state each, off by about exp(-L/xi).
    progress : callable, optional
        Told in one line what is being done.

    Returns
    -------
    Comparison

    Raises
    ------
    TypeError, ValueError
        Operators that are not quadratic, a start of another size, a charge that is not conserved and not insisted on.
    ResourceError
        Matrices of all modes that would not fit into memory.

    Examples
    --------
    >>> from maxent.lattice import Ring, formula
    >>> from maxent.quench import gaussian_ground
    >>> ring = Ring(60)
    >>> charges = {"energy": formula("-X[i]*X[i+1] - 0.5*Z[i]", ring)}
    >>> found = compare_gaussian(
    ...     charges, gaussian_ground(formula("-X[i]*X[i+1] - 2*Z[i]", ring)), observables={"z": formula("Z[i]/L", ring)}
    ... )
    >>> print(found.labels, f"{found.truth['z']:.4f} {found.deviation('canonical', 'z'):.4f}", f"{found.revival:.3f}")
    ('canonical', 'complete generalised') 0.5173 -0.2526 30.000
    """
    if not isinstance(start, GaussianStart):
        raise TypeError(f"free particles need a start with second moments, a GaussianStart, not {type(start).__name__}")
    c = GaussianCharges(charges, hamiltonian, observables=observables, unprojected=unprojected)
    clock, notes = Clock(progress), [_left_out(c)]
    with clock("dynamics"):
        pairs = start.paired(c.operators[hamiltonian])
        c.period = _period(c, start)
        quadratic = {n: q for n, q in c.observables.items() if c.is_quadratic(n)}
        evolution = gaussian_evolve(start, c.operators[hamiltonian], quadratic)
        dephased = evolution.dephased()
        reference = Reference.of(dephased, _blocks(c, blocks, notes), c.sites)
        initial = {n: c.mean_of_moments(n, start) for n in c.observables}
    with clock("conservation"):
        conservation = gaussian_conservation(c.operators[hamiltonian], c.operators, start=start, dephased=dephased)
        warning = require_conserved(conservation, c.names, insist=tuple(insist))
        if warning:
            notes.append(warning)
    found = gaussian_potentials(c, conservation.broken)
    known = {"numbers": found.numbers if numbers is None else tuple(numbers)}
    known["fields"] = tuple(n for n in found.fields if n not in known["numbers"]) if fields is None else tuple(fields)
    potentials = find_potentials(c, (), **known)
    _doubt(c, start, notes)
    setting = GaussianSetting(
        c,
        start,
        dephased,
        {n: start.mean(q) for n, q in c.operators.items()},
        0 if unprojected else _parity(c, start),
        reference,
        potentials,
        not conservation.clashes,
        progress,
        notes,
    )
    with clock("ensembles"):
        fitted = gaussian_columns(setting)
        complete, levels = complete_column(setting, evolution)
    v = speed
    if v is None:
        part, form = pairs[int(np.argmax([p.weight for p, _ in pairs]))]
        closing = (-part.parity if c.has_sectors else 1) if c.sites.is_ring else 0
        v = group_velocity(form, c.statistics, per_site=max(c.modes // c.sites.size, 1), closing=closing)
        if v is None:
            notes.append("No group velocity: cells are not alike, or nothing moves; give `speed` where it is known.")
    length = float(c.sites.size if c.sites.is_ring else 2 * c.sites.size)
    with clock("time averages"):
        averages = gaussian_averages(c, evolution, times=times, length=length, speed=v, notes=notes, progress=progress)
    ranked = None
    if ranking and len(c.names) > 1 and reference.states:
        with clock("ranking"):
            ranked = rank_gaussian(setting)
    return Comparison(
        size=c.sites.size,
        dimension=None,
        hamiltonian=hamiltonian,
        start_label=start.label,
        start_note=start.note,
        sharp=setting.sharp,
        conservation=conservation,
        targets={n: t[0] for n, t in setting.targets.items()},
        initial=initial,
        truth=averages.truth,
        fluctuations=averages.fluctuations,
        effective_dimension=None,
        dephased_entropy=None,
        block_bounds=dict.fromkeys(reference.sites, float("nan")),
        block_sites=reference.sites,
        times=averages.times if averages.traces else np.empty(0),
        traces=averages.traces,
        speed=v,
        revival=revival_time(length, v) if v else None,
        plateau=_plateau(length, v, max(reference.sites, default=0), notes),
        horizon=slowest_time(evolution),
        ensembles=(*fitted, complete),
        levels={},
        window={},
        window_scan=None,
        eigenstate_tests=None,
        ranking=ranked,
        notes=tuple(notes),
        seconds=clock.seconds,
        statistics=c.statistics,
        modes=levels,
    )


def _left_out(charges: GaussianCharges) -> str:
    what = f"{'Spins as free' if charges.sites.is_spin_half else 'Free'} {charges.statistics}"
    return (
        f"{what}: energy windows, single eigenstates, level statistics and "
        "effective dimensions are not for free particles. The long-time state of blocks is the complete generalised "
        "one, of every single-particle level; the average of a block over all times differs from it by about 1/L, "
        "means of two operators not at all."
    )


def _blocks(charges: GaussianCharges, blocks: Sequence[int], notes: list[str]) -> dict[int, tuple[int, ...]]:
    """Sites of each block that is neither too large nor, of spins, torn apart."""
    sites: Sites = charges.sites
    wanted = sorted({b for b in blocks if 1 <= b <= min(sites.size // 2, LARGEST)})
    if len(wanted) < len(set(blocks)):
        notes.append(
            f"Blocks larger than half of the {plural(sites.size, 'site')} or than {LARGEST} sites are left out."
        )
    found = block_sites(sites, wanted)
    if sites.is_spin_half:  # fermions are neighbours only along the order of the sites
        torn = [b for b, where in found.items() if list(where) != list(range(where[0], where[0] + b))]
        if torn:
            notes.append(f"Blocks of {listing(map(str, torn), 'and')} sites are left out: they are not in a row.")
        found = {b: where for b, where in found.items() if b not in torn}
    return found


def _period(charges: GaussianCharges, start: GaussianStart) -> int:
    """Sites after which start and dynamics repeat on a ring of spins."""
    if not charges.has_sectors:
        return charges.sites.size
    pairs = start.paired(charges.operators[charges.hamiltonian])
    given = [(to_majoranas(*form.matrices())[0], part.parity) for part, form in pairs]
    given += [(part.covariance, part.parity) for part in start.parts]
    return spin_period(given, charges.sites.size)


def _parity(charges: GaussianCharges, start: GaussianStart) -> int:
    """Parity of all spins, where the start has it and it selects states of a ring."""
    parities = {p.parity for p in start.parts}
    return parities.pop() if charges.has_sectors and len(parities) == 1 else 0


def _doubt(charges: GaussianCharges, start: GaussianStart, notes: list[str]) -> None:
    """Say where means of more than two operators in the start are not exact."""
    if all(charges.is_quadratic(n) for n in charges.observables):
        return
    mixed = [p for p in start.parts if p.parity and not vacuum_parity(p.covariance)]
    if charges.has_sectors and mixed:
        notes.append(
            "The start is mixed and of sharp parity: means of more than two operators are those of Gaussian states "
            "with its second moments."
        )


def _plateau(length: float, speed: float | None, largest: int, notes: list[str]) -> tuple[float, float] | None:
    """Times between which the largest block can look stationary, with a note where there are none."""
    if not speed or not largest:
        return None
    span = plateau_window(length, speed, sites=largest)
    if not span.is_open:
        notes.append(
            f"No plateau in time: excitations cross {plural(largest, 'site')} after {span.start:.3g} "
            f"and are back around the system after {span.end:.3g}; only averages over long times compare."
        )
    return span.start, span.end

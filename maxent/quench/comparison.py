"""Ensembles side by side with the truth, for one size.

The truth is the dephased start and its dynamics.  Beside it stand the ensembles, each over all sectors and inside the
sector that the start lives in, windows, single eigenstates; beside every deviation stand the yardsticks that tell an
effect of the size from a failure of the ensemble.  Here the parts are put together: fits (`maxent.quench.fits`),
windows and eigenstates (`maxent.quench.microcanonical`), traces in time (`maxent.quench.averages`); the data are those
of `maxent.quench.columns`.  Floor: quench.  Must not know configs or figures.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import Any

import numpy as np

from maxent.lattice import OperatorSum
from maxent.lattice.sites import Sites
from maxent.quench.averages import time_averages
from maxent.quench.blocks import block_sites
from maxent.quench.columns import Comparison, Ensemble
from maxent.quench.conservation import check_conservation, require_conserved
from maxent.quench.cutoffs import cutoff_notes
from maxent.quench.dephasing import dephase
from maxent.quench.distances import nested_blocks
from maxent.quench.eigenstate_tests import eigenstate_tests
from maxent.quench.ensembles import Charges, find_sector
from maxent.quench.fits import fitted_columns
from maxent.quench.microcanonical import microcanonical_columns
from maxent.quench.potentials import find_potentials
from maxent.quench.ranking import rank_charges
from maxent.quench.setting import Clock, Setting
from maxent.quench.speeds import estimated_speed
from maxent.quench.starts import Start
from maxent.quench.yardsticks import block_bound, plateau_window, revival_time
from maxent.text import plural

__all__ = ["Comparison", "Ensemble", "compare"]

#: Columns of `Comparison.levels` that are no observables.
TAKEN = ("energy", "level", "weight")


def compare(
    charges: Mapping[str, OperatorSum],
    start: Any,
    *,
    hamiltonian: str = "energy",
    observables: Mapping[str, OperatorSum] | None = None,
    blocks: Sequence[int] = (1, 2, 3, 4),
    width: float | None = None,
    times: Any = None,
    speed: float | None = None,
    insist: Iterable[str] = (),
    resolution: float | None = None,
    ranking: bool = True,
    numbers: Iterable[str] | None = None,
    fields: Iterable[str] | None = None,
    by_symmetry: bool = True,
    progress: Callable[[str], None] | None = None,
) -> Comparison:
    """Compare the ensembles of some charges with the long-time state of a start.

    Parameters
    ----------
    charges : mapping from str to OperatorSum
        The Hamiltonian and further charges, in the order in which they shall join the ensembles.
    start : Start or vector
        In the product basis of the sites.
    hamiltonian : str, optional
        Which charge drives the dynamics.
    observables : mapping from str to OperatorSum, optional
    blocks : sequence of int, optional
        Sizes of the blocks of neighbouring sites whose states are compared; larger than half the system are left out.
    width : float, optional
        Width of the Gaussian window; by default the energy spread of the start.
    times : (t,) array_like, optional
        Times of the traces, in units of 1/energy; by default 400 up to four revival times.
    speed : float, optional
        Largest group velocity in sites per time; estimated where momenta are known.
    insist : iterable of str, optional
        Charges to be kept although they do not commute with the Hamiltonian.
    resolution : float, optional
        Time up to which equal gaps are told apart.
    ranking : bool, optional
        Whether the charges are ranked, which costs further fits.
    by_symmetry : bool, optional
        Whether symmetries without spread in the start (momentum, parity, their powers and products) narrow the sector
        of the second column, or sharp charges alone.
    numbers, fields : iterable of str, optional
        Charges that have a chemical potential, or a field; they join after the Hamiltonian.  By default the conserved
        sums of diagonal one-site operators, those of particles as numbers and those of spins as field charges.
    progress : callable, optional
        Told in one line what is being done.

    Returns
    -------
    Comparison

    Raises
    ------
    TypeError, ValueError
        Operators that are not Hermitian or live on different sites, a start of another length or norm, a charge that
        is not conserved and not insisted on.
    ResourceError
        Blocks that would not fit into memory.
    """
    _check(charges, observables or {})
    given = start if isinstance(start, Start) else Start.from_vector(start)
    c = Charges(charges, hamiltonian, observables=observables or {})
    dimension = c.matrices[hamiltonian].shape[0]
    if given.dimension != dimension:
        raise ValueError(f"the start has {given.dimension} amplitudes, the Hamiltonian dimension {dimension}")
    clock = Clock(progress)
    notes: list[str] = []
    chosen = _blocks(c.sites, blocks, notes)
    with clock("spectrum"):
        spectrum = c.spectrum(progress=progress)
        spectrum.energies  # noqa: B018  computed on first use; here, so that its time is counted here
    with clock("dephased state"):
        dephased = dephase(spectrum, given)
        reference = nested_blocks(dephased.state, list(chosen.values()))
        truth = c.means(dephased.state)
        initial = {n: given.mean(q)[0] for n, q in c.observables.items()}
    with clock("conservation"):
        conservation = check_conservation(
            c.operators[hamiltonian], c.operators, dephased=dephased, width=spectrum.width
        )
        warning = require_conserved(conservation, c.names, insist=tuple(insist))
        if warning:
            notes.append(warning)
    targets = {n: given.mean(q.matrix()) for n, q in c.operators.items()}
    sector = find_sector(c, given, by_symmetry=by_symmetry)
    potentials = find_potentials(c, conservation.broken, numbers=numbers, fields=fields)
    setting = Setting(
        c, given, spectrum, dephased, targets, sector, reference, potentials, progress, conservation.clashes, notes
    )
    with clock("ensembles"):
        fitted = fitted_columns(setting)
    v = speed if speed is not None else _speed(setting)
    with clock("windows and eigenstates"):
        micro = microcanonical_columns(setting, width=width)
    with clock("eigenstate tests"):
        tests = eigenstate_tests(setting)
    notes += cutoff_notes(setting, fitted, tests)
    with clock("time averages"):
        averages = time_averages(setting, truth, times=times, speed=v, resolution=resolution)
    bounds = {
        len(s): block_bound(len(rho), dephased.effective_dimension, equal_gaps=averages.equal_gaps)
        for s, rho in reference.items()
    }
    ranked = None
    if ranking and len(c.names) > 1 and reference:
        with clock("ranking"):
            ranked = rank_charges(c, targets, reference, floor=min(1e-3, *bounds.values()), progress=progress)
    gaps = np.diff(dephased.energies)
    return Comparison(
        size=c.sites.size,
        dimension=dimension,
        hamiltonian=hamiltonian,
        start_label=given.label,
        start_note=given.note,
        sharp=setting.sharp,
        conservation=conservation,
        targets={n: t[0] for n, t in targets.items()},
        initial=initial,
        truth=truth,
        fluctuations=averages.fluctuations,
        effective_dimension=dephased.effective_dimension,
        dephased_entropy=dephased.state.entropy,
        block_bounds=bounds,
        block_sites=chosen,
        times=averages.times,
        traces=averages.traces,
        speed=v,
        revival=revival_time(setting.length, v) if v else None,
        plateau=_plateau(setting, v, max(bounds, default=0)),
        horizon=float(1.0 / gaps.min()) if len(gaps) else 0.0,
        ensembles=(*fitted, *micro.columns),
        levels=micro.levels,
        window=micro.window,
        window_scan=micro.scan,
        eigenstate_tests=tests,
        ranking=ranked,
        notes=tuple(notes),
        seconds=clock.seconds,
    )


def _check(charges: Mapping[str, Any], observables: Mapping[str, Any]) -> None:
    """Operators of the right make, and names that are free."""
    for name, op in {**charges, **observables}.items():
        if not isinstance(op, OperatorSum):
            raise TypeError(f"{name!r} must be made by maxent.lattice.formula, not {type(op).__name__}")
        if op.non_hermitian_word is not None:
            raise ValueError(f"{name!r} is not Hermitian: it holds {op.non_hermitian_word}")
    taken = [name for name in observables if name in TAKEN]
    if taken:
        raise ValueError(f"observable {taken[0]!r}: this name is taken in the table of levels; choose another")


def _blocks(sites: Sites, blocks: Sequence[int], notes: list[str]) -> dict[int, tuple[int, ...]]:
    """Sites of each block, no more than half of all, with a note on those that are left out."""
    wanted = [b for b in blocks if 1 <= b <= sites.size // 2]
    if len(wanted) < len(tuple(blocks)):
        notes.append(
            f"Blocks larger than half of the {plural(sites.size, 'site')} are left out: they measure the complement."
        )
    found = block_sites(sites, wanted)
    if len(found) < len(set(wanted)):
        notes.append(f"Blocks of more than {plural(max(found), 'site')} are left out: bonds connect no more.")
    return found


def _speed(setting: Setting) -> float | None:
    """Largest group velocity where momenta are known, with a note that it is an estimate."""
    slope = estimated_speed(setting.spectrum, setting.charges.basis, setting.charges.sites.size)
    if slope is not None:
        setting.notes.append(
            f"Largest group velocity {slope:.3g} sites per time: estimated from the lowest levels of neighbouring "
            "momenta and from single excitations, where these are kept; faster ones shorten the times. Give `speed` "
            "where it is known."
        )
    return slope


def _plateau(setting: Setting, speed: float | None, largest: int) -> tuple[float, float] | None:
    """Times between which the largest block can look stationary, with a note where there are none."""
    if not speed or not largest:
        return None
    span = plateau_window(setting.length, speed, sites=largest)
    if not span.is_open:
        setting.notes.append(
            f"No plateau in time: excitations cross {plural(largest, 'site')} after {span.start:.3g} "
            f"and are back around the system after {span.end:.3g}; only averages over long times compare."
        )
    return span.start, span.end

"""Option `method = "gaussian"` of the lattice kinds: quadratic charges as free particles instead of matrices.

Floor: app/kinds.  The config stays the same otherwise; what has no meaning for free particles is refused by name.
Must not know: the command line, the report.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from maxent.app.job import BadInput, Job, Problems, Study, Target
from maxent.app.kinds._momentum import as_gaussian, check_momentum, momentum_section
from maxent.errors import ResourceError
from maxent.text import number, plural

if TYPE_CHECKING:
    from maxent.app.sections import Section

__all__ = ["METHOD", "SECTORS", "check_gaussian", "gaussian_job"]

METHOD = (
    '`"matrices"`, or `"gaussian"` where every charge is quadratic in fermions or bosons (spins 1/2 after the '
    "Jordan-Wigner map): hundreds of sites then; docs/gaussian-conventions.md."
)
SECTORS = (
    'For spins 1/2 with `method = "gaussian"`: `"both"` parities of the number of spins down (all states), `"even"` or '
    '`"odd"` alone, or `"unprojected"`, one Gaussian state that ignores the parity: about as fast, and off by about '
    "exp(-L/xi)."
)
#: Ways to make a start that may have second moments.
_STARTS = ("pattern", "domain_wall", "ground_of", "thermal_of", "file")


def check_gaussian(options: Any, problems: Problems) -> None:
    """Note what goes with one method only."""
    check_momentum(options, problems)
    if options.method != "gaussian":
        if options.sectors != "both":
            problems.add(("sectors",), 'goes with method = "gaussian", which is not given')
        return
    if options.start is not None and "mixture" in options.start.ways:
        problems.add(("start", "mixture"), 'no mixtures with method = "gaussian"')
    if options.quench is not None:
        _check_quench(options, problems)


def _check_quench(options: Any, problems: Problems) -> None:
    """Note what [quench] cannot do for free particles."""
    if options.quench.window is not None:
        problems.add(("quench", "window"), 'no energy windows with method = "gaussian"')
    if options.quench.resolution is not None:
        problems.add(("quench", "resolution"), 'equal gaps are told apart by rounding alone with method = "gaussian"')
    if options.sectors in ("even", "odd"):
        problems.add(("sectors",), "[quench] compares all states and those of the parity of the start: leave it out")
    way = next(iter(options.start.ways), "") if options.start is not None else ""
    if way and way not in (*_STARTS, "mixture"):
        problems.add(
            ("start", way),
            'no Gaussian state, which [quench] needs with method = "gaussian": a pattern of spins along z or of '
            "fermions, ground_of, thermal_of, or a covariance from a file",
        )


def gaussian_job(options: Any, parts: Mapping[int, Any], facts: Mapping[str, str], digests: Mapping[str, str]) -> Job:
    """Job of one size, with the comparison of several.

    Parameters
    ----------
    options : LatticeOptions
    parts : mapping of int to _Part
        Charges, predictions and start of the config, by size; the largest is fitted.
    facts, digests : mapping

    Raises
    ------
    BadInput
        A charge or prediction that is not quadratic, with the word; a start without the means that are asked for.
    """
    from maxent.lattice import recognise
    from maxent.quench.gaussian_forms import gaussian_family, gaussian_mean

    part = parts[options.sites.largest]
    sites = part.sites
    problems = Problems()
    for name, operator in part.charges.items():
        found = recognise({name: operator})
        if not found.is_quadratic:
            problems.add(("charges", name), f'method = "gaussian" needs quadratic charges. {found.obstacle}')
    if not sites.is_spin_half:
        where = ("quench", "observables") if part.observables is not part.predictions else ("predictions",)
        further = {(*where, n): q for n, q in part.observables.items()}
        for path, operator in ({("predictions", n): q for n, q in part.predictions.items()} | further).items():
            found = recognise({path[-1]: operator})
            if not found.is_quadratic:
                problems.add(path, str(found.obstacle))
    problems.raise_any()
    if options.quench is not None:
        for each in parts.values():
            _refuse_not_conserved(options, each, problems)
        problems.raise_any()
    try:
        family = gaussian_family(part.charges, sectors=options.sectors)
    except (ValueError, ResourceError) as bad:
        raise BadInput([(("sectors",) if "sectors" in str(bad) else ("method",), str(bad))]) from bad
    try:
        targets: dict[str, Target] = part.targets(part.charges)
    except (TypeError, ValueError) as bad:
        raise BadInput([(("start",), str(bad))]) from bad
    _refuse_other_parity(options, part)
    what = f"free {getattr(family, 'statistics', 'fermions in parity sectors')}"
    method = f"gaussian: {what}, {plural(len(sites.slots), 'mode')}"
    if options.sectors != "both":
        method += f", sectors {options.sectors}"
    sections: Callable[[Any], list[Section]] = lambda result: []
    if options.momentum is not None:
        points, drives = options.momentum.points, part.drives
        sections = lambda result: [momentum_section(sites, points, part.start, drives, result)]
    study = None
    if options.quench is not None:
        study = Study(options.sites.all_sizes, lambda size: _arguments(options, parts[size]), gaussian=True)
    return Job(
        family,
        targets,
        part.predictions,
        dict(facts) | {"method": method, "form": recognise(part.charges).representation},
        digests=digests,
        remarks=lambda result: [*part.notes(result), *_not_stationary(options, part, result)],
        study=study,
        mean=gaussian_mean,
        unit="mode",
        count=len(sites.slots),
        further=sections,
    )


def _refuse_other_parity(options: Any, part: Any) -> None:
    """Refuse a sector that the start does not live in, where the start knows its parity."""
    wanted = {"even": 1, "odd": -1}.get(options.sectors)
    start = as_gaussian(part.start, part.sites) if wanted and part.start is not None else None
    weights = {p.parity: p.weight for p in start.parts} if start is not None else {}
    if wanted and 0 not in weights and weights.get(-wanted, 0.0) > 0:
        other, share = {1: "even", -1: "odd"}[-wanted], weights[-wanted] / sum(weights.values())
        raise BadInput([(("sectors",), f"the start has a weight of {share:.3g} in the {other} sector")])


def _broken(part: Any) -> Any:
    """What the Hamiltonian does to the charges; None where it conserves all of them."""
    from maxent.quench.gaussian_conservation import gaussian_conservation

    if part.drives is None:
        return None
    found = gaussian_conservation(part.drives, part.charges)
    return found if found.broken else None


def _refuse_not_conserved(options: Any, part: Any, problems: Problems) -> None:
    """Note charges of a stationary state that the Hamiltonian does not conserve."""
    from maxent.quench.conservation import require_conserved

    found = _broken(part)
    for name in () if found is None else found.broken:
        if name not in options.quench.insist and ("charges", name) not in [p for p, _ in problems.found]:
            try:
                require_conserved(found, [name])
            except ValueError as bad:
                problems.add(("charges", name), f"{bad}: insist = [{name!r}] in [quench]")


def _not_stationary(options: Any, part: Any, result: Any) -> list[str]:
    """What a reader of the result must know when a charge is not conserved."""
    found = None if result.state is None else _broken(part)
    if found is None:
        return []
    from maxent.quench.conservation import require_conserved
    from maxent.quench.gaussian_blocks import moments_of
    from maxent.quench.gaussian_conservation import moment_defect

    rate = moment_defect(part.drives, moments_of(result.state))
    return [
        f"{require_conserved(found, found.broken, insist=found.broken)} Its second moments change at {number(rate, 3)} "
        f"of the largest possible rate under {options.hamiltonian!r}."
    ]


def _arguments(options: Any, part: Any) -> dict[str, Any]:
    """Keyword arguments of `compare_gaussian`."""
    import numpy as np

    asked, label = options.quench, options.start.describe()
    start = as_gaussian(part.start, part.sites)
    if start is None:
        raise BadInput([(("start",), "no Gaussian state: of bosons give ground_of, thermal_of or a covariance file")])
    times: Any = asked.times
    if isinstance(times, float | int):
        times = np.linspace(0.0, times, 400)
    roles = options.thermodynamics
    return {
        "charges": part.charges,
        "start": replace(start, label=label),
        "hamiltonian": options.hamiltonian,
        "observables": part.observables,
        "blocks": tuple(sorted(set(asked.blocks))),
        "times": times,
        "speed": asked.speed,
        "insist": tuple(asked.insist),
        "ranking": asked.ranking,
        "numbers": None if roles is None else roles.numbers,
        "fields": None if roles is None else roles.fields,
        "unprojected": options.sectors == "unprojected",
    }

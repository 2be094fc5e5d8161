"""Option `method = "gaussian"` of the lattice kinds: quadratic charges as free particles instead of matrices.

Floor: app/kinds.  The config stays the same otherwise; what has no meaning for free particles is refused by name.
Must not know: the command line, the report.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any

from maxent.app.job import BadInput, Job, Problems, Target
from maxent.app.kinds._momentum import check_momentum, momentum_section
from maxent.errors import ResourceError
from maxent.text import plural

if TYPE_CHECKING:
    from maxent.app.sections import Section

__all__ = ["METHOD", "SECTORS", "check_gaussian", "gaussian_job"]

METHOD = (
    '`"matrices"`, or `"gaussian"` where every charge is quadratic in fermions or bosons (spins 1/2 after the '
    "Jordan-Wigner map): hundreds of sites then; docs/gaussian-conventions.md."
)
SECTORS = (
    'For spins 1/2 with `method = "gaussian"`: `"both"` parities of the number of spins down (all states), `"even"` or '
    '`"odd"` alone, or `"unprojected"`, one Gaussian state that ignores the parity, cheap and off by about exp(-L/xi).'
)


def check_gaussian(options: Any, problems: Problems) -> None:
    """Note what goes with one method only."""
    check_momentum(options, problems)
    if options.method != "gaussian":
        if options.sectors != "both":
            problems.add(("sectors",), 'goes with method = "gaussian", which is not given')
        return
    if options.quench is not None:
        problems.add(("quench",), 'compares vectors of many-body states; it needs method = "matrices"')
    if options.start is not None and "mixture" in options.start.ways:
        problems.add(("start", "mixture"), 'no mixtures with method = "gaussian"')


def gaussian_job(options: Any, sites: Any, part: Any, facts: Mapping[str, str], digests: Mapping[str, str]) -> Job:
    """Job of one size.

    Parameters
    ----------
    options : LatticeOptions
    sites : Ring, Chain or Lattice
    part : _Part
        Charges, predictions and start of the config.
    facts, digests : mapping

    Raises
    ------
    BadInput
        A charge or prediction that is not quadratic, with the word; a start without the means that are asked for.
    """
    from maxent.lattice import recognise
    from maxent.quench.gaussian_forms import gaussian_family, gaussian_mean

    problems = Problems()
    for name, operator in part.charges.items():
        found = recognise({name: operator})
        if not found.is_quadratic:
            problems.add(("charges", name), f'method = "gaussian" needs quadratic charges. {found.obstacle}')
    if not sites.is_spin_half:
        for name, operator in part.predictions.items():
            found = recognise({name: operator})
            if not found.is_quadratic:
                problems.add(("predictions", name), str(found.obstacle))
    problems.raise_any()
    try:
        family = gaussian_family(part.charges, sectors=options.sectors)
    except (ValueError, ResourceError) as bad:
        raise BadInput([(("sectors",) if "sectors" in str(bad) else ("method",), str(bad))]) from bad
    try:
        targets: dict[str, Target] = part.targets(part.charges)
    except (TypeError, ValueError) as bad:
        raise BadInput([(("start",), str(bad))]) from bad
    what = f"free {getattr(family, 'statistics', 'fermions in parity sectors')}"
    method = f"gaussian: {what}, {plural(family.size, 'mode')}"
    if options.sectors != "both":
        method += f", sectors {options.sectors}"
    further: Callable[[Any], list[Section]] = lambda result: []
    if options.momentum is not None:
        points, drives = options.momentum.points, part.drives
        further = lambda result: [momentum_section(sites, points, part.start, drives, result)]
    return Job(
        family,
        targets,
        part.predictions,
        dict(facts) | {"method": method, "form": recognise(part.charges).representation},
        digests=digests,
        remarks=part.notes,
        mean=gaussian_mean,
        unit="mode",
        further=further,
    )

"""Table `[momentum]` of the lattice kinds: the distribution of momenta in the ensemble, at the start, in the long run.

Floor: app/kinds.  Must not know: the command line, the report.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from maxent.app.job import STRICT, Problems, says

if TYPE_CHECKING:
    import numpy as np

    from maxent.app.sections import Section

__all__ = ["MOMENTUM", "Momentum", "check_momentum", "momentum_section"]

MOMENTUM = (
    'With `method = "gaussian"` on a chain: the momentum distribution of the particles (spins down are hard-core '
    "bosons) in the ensemble, at the start and in the long run."
)
#: Momenta that are taken at most.
MOST = 4001


@dataclass(frozen=True)
class Momentum:
    """Momenta of the distribution."""

    __pydantic_config__ = STRICT

    points: int = field(
        default=101,
        metadata=says("Number of momenta: from 0 to pi for spins, whose distribution is even, else from -pi to pi."),
    )


def check_momentum(options: Any, problems: Problems) -> None:
    """Note where a distribution of momenta has no meaning."""
    asked = options.momentum
    if asked is None:
        return
    if options.method != "gaussian":
        problems.add(("momentum",), 'needs method = "gaussian"')
    if options.sites.geometry != "chain" or len(options.sites.cell or ()) > 1:
        problems.add(("momentum",), 'needs geometry = "chain" with one site per cell')
    if options.sectors in ("even", "odd"):
        problems.add(("momentum",), f"states of one parity are not Gaussian; leave out sectors = {options.sectors!r}")
    species = getattr(options.sites, "species", None)
    if species is not None and len(species) > 1:
        problems.add(("momentum",), f"needs one mode per site, not {len(species)} species")
    if not 2 <= asked.points <= MOST:
        problems.add(("momentum", "points"), f"expected 2 to {MOST} momenta, got {asked.points}")


def momentum_section(sites: Any, points: int, start: Any, hamiltonian: Any, result: Any) -> Section:
    """Distributions of one run side by side.

    Parameters
    ----------
    sites : Chain
    points : int
        Number of momenta.
    start : GaussianStart, LocalProduct or None
    hamiltonian : OperatorSum or None
        Drives the dynamics.
    result : Result

    Returns
    -------
    Section
    """
    import numpy as np  # only here: bad configs are told without loading it

    from maxent.app.sections import Column, Section
    from maxent.quench.momentum_distributions import free_momentum_distribution, momentum_distribution

    spins = sites.is_spin_half
    k = np.linspace(0.0 if spins else -np.pi, np.pi, points)
    of: Callable[[Any, Any], np.ndarray] = momentum_distribution if spins else free_momentum_distribution
    columns = [Column("momentum", k.tolist(), "momentum in units of the inverse distance of sites")]
    missing = []

    def add(name: str, meaning: str, make: Callable[[], Any]) -> None:
        try:
            columns.append(Column(name, of(make(), k).tolist(), meaning))
        except ValueError as bad:
            missing.append(f"No distribution in the {name}: {bad}.")

    if result.state is not None:
        add("ensemble", "distribution in the state that was fitted", lambda: result.state)
    gaussian = as_gaussian(start, sites)
    if gaussian is not None and hamiltonian is not None:
        add("long run", "distribution from second moments averaged over all times", _averaged(gaussian, hamiltonian))
    if gaussian is not None:
        add("start", "distribution in the start", lambda: gaussian.state)
    if start is not None and gaussian is None:
        missing.append("The start is no Gaussian state: no distributions at the start and in the long run.")
    names = tuple(c.name for c in columns[1:])
    what = "hard-core bosons (spins down)" if spins else "the particles"
    return Section(
        "momentum",
        "Momentum distribution",
        f"n(k) of {what}; its mean over all momenta is their number per site.",
        tuple(columns),
        " ".join(missing + ([_LONG_RUN] if spins and "long run" in names else [])),
        curves=names,
        ordinate="n(k)",
    )


_LONG_RUN = (
    "Long run: Wick's theorem on second moments averaged over all times. The string between two sites is no quadratic "
    "operator; its own average over times differs by fluctuations, which shrink with size."
)


def _averaged(start: Any, hamiltonian: Any) -> Callable[[], Any]:
    from maxent.quench.gaussian_evolution import gaussian_evolve

    return lambda: gaussian_evolve(start, hamiltonian).dephased().state


def as_gaussian(start: Any, sites: Any) -> Any:
    """Give the start by its covariance; None where it has none."""
    from maxent.lattice import Bosons, PatternState
    from maxent.quench.gaussian_starts import GaussianStart, gaussian_pattern

    if isinstance(start, GaussianStart):
        return start
    if isinstance(start, PatternState) and not isinstance(sites.kind(0), Bosons):
        return gaussian_pattern(start.levels)
    return None

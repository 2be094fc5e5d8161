"""Kind `fermions`: fermion modes on a lattice, operators as formulas, targets from a start state.

Floor: app/kinds.  Everything but its own tables is shared with the other lattice kinds.
Must not know: the command line, the report.
"""

from __future__ import annotations

from dataclasses import dataclass, field

from maxent.app.job import STRICT, says
from maxent.app.kinds._geometry import FermionSites
from maxent.app.kinds._lattice import LatticeOptions, build, hamiltonian
from maxent.app.kinds._starts import OccupationStart

__all__ = ["Options", "build", "hamiltonian"]


@dataclass(frozen=True)
class Options(LatticeOptions):
    """Keys of a config of kind `fermions`."""

    __pydantic_config__ = STRICT

    sites: FermionSites = field(metadata=says("Where the fermions sit, and how many modes a site has."))
    start: OccupationStart | None = field(
        default=None, metadata=says("State that gives targets and that the quench starts from; one way to make it.")
    )

"""Kind `spins`: spins on a ring, chain, ladder or any bonds, operators as formulas, targets from a start state.

Floor: app/kinds.  Everything but its own tables is shared with the other lattice kinds.
Must not know: the command line, the report.
"""

from __future__ import annotations

from dataclasses import dataclass, field

from maxent.app.job import STRICT, says
from maxent.app.kinds._geometry import SpinSites
from maxent.app.kinds._lattice import LatticeOptions, build, hamiltonian
from maxent.app.kinds._starts import AngleStart

__all__ = ["Options", "build", "hamiltonian"]


@dataclass(frozen=True)
class Options(LatticeOptions):
    """Keys of a config of kind `spins`."""

    __pydantic_config__ = STRICT

    sites: SpinSites = field(metadata=says("Where the spins sit, and how large they are."))
    start: AngleStart | None = field(
        default=None, metadata=says("State that gives targets and that the quench starts from; one way to make it.")
    )

"""Families of charges: one file per family, each with its state class.  Floor: families.

The public names make the families known to JAX, so that they can be arguments of jitted functions; code of this package
that needs no JAX imports them from their files.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from maxent.families.bilinears import Bilinears as Bilinears
    from maxent.families.matrices import Matrices as Matrices
    from maxent.families.microstates import Microstates as Microstates
    from maxent.families.modes import Modes as Modes
    from maxent.families.periodic import Periodic as Periodic
    from maxent.families.spin_rings import SpinRing as SpinRing

__all__ = ["Bilinears", "Matrices", "Microstates", "Modes", "Periodic", "SpinRing"]

_HOME = {
    "Bilinears": "maxent.families.bilinears",
    "Matrices": "maxent.families.matrices",
    "Microstates": "maxent.families.microstates",
    "Modes": "maxent.families.modes",
    "Periodic": "maxent.families.periodic",
    "SpinRing": "maxent.families.spin_rings",
}


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module 'maxent.families' has no attribute {name!r}")
    from maxent.core.pytrees import announce

    value = getattr(import_module(_HOME[name]), name)
    announce()
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted([*globals(), *_HOME])

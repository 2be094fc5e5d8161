"""Families of charges: one file per family, each with its state class.  Floor: families."""

from maxent.families.matrices import Matrices
from maxent.families.microstates import Microstates

__all__ = ["Matrices", "Microstates"]

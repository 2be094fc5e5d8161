"""Operators on sites: formulas become canonical sums, sparse matrices and means in start states."""

from maxent.lattice.evaluate import position_values
from maxent.lattice.expand import formula
from maxent.lattice.kinds import Bosons, Fermions, Spin
from maxent.lattice.sites import Chain, Lattice, Ring, Sites
from maxent.lattice.starts import ProductState
from maxent.lattice.terms import OperatorSum, Term

__all__ = [
    "Bosons",
    "Chain",
    "Fermions",
    "Lattice",
    "OperatorSum",
    "ProductState",
    "Ring",
    "Sites",
    "Spin",
    "Term",
    "formula",
    "position_values",
]

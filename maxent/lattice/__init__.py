"""Operators on sites: formulas become canonical sums, sparse matrices and means in start states."""

from maxent.lattice.evaluate import position_values
from maxent.lattice.expand import formula
from maxent.lattice.sites import Chain, Ring
from maxent.lattice.starts import ProductState
from maxent.lattice.terms import OperatorSum, Term

__all__ = ["Chain", "OperatorSum", "ProductState", "Ring", "Term", "formula", "position_values"]

"""Operators on sites: formulas in subscript notation become canonical sums, sparse matrices and start values."""

from maxent.lattice.expand import formula, position_values
from maxent.lattice.sites import Chain, Ring
from maxent.lattice.starts import ProductState
from maxent.lattice.terms import OperatorSum, Term

__all__ = ["Chain", "OperatorSum", "ProductState", "Ring", "Term", "formula", "position_values"]

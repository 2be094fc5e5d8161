"""Operators on sites: formulas become canonical sums, sparse matrices and means in start states."""

from maxent.lattice.cutoffs import CutoffLoss, cutoff_loss
from maxent.lattice.evaluate import position_values
from maxent.lattice.expand import formula
from maxent.lattice.kinds import Bosons, Fermions, Spin
from maxent.lattice.onebody import OneBody
from maxent.lattice.patterns import PatternState, domain_wall
from maxent.lattice.recognition import Recognition, recognise
from maxent.lattice.sites import Chain, Lattice, Ring, Sites
from maxent.lattice.starts import ProductState
from maxent.lattice.terms import OperatorSum, Term

__all__ = [
    "Bosons",
    "Chain",
    "CutoffLoss",
    "Fermions",
    "Lattice",
    "OneBody",
    "OperatorSum",
    "PatternState",
    "ProductState",
    "Recognition",
    "Ring",
    "Sites",
    "Spin",
    "Term",
    "cutoff_loss",
    "domain_wall",
    "formula",
    "position_values",
    "recognise",
]

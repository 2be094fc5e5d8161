"""What operators do to a few basis states, however many there are: which ones they reach, how long the images are.

Floor: lattice (NumPy).  The states reached from one another are a block of the operators in the product basis,

    block(n) = smallest set with n in it that no operator leads out of,

and the length of a column, ``|A |n>|``, is a lower bound of the largest eigenvalue of a Hermitian A in magnitude.  Both
need rows of a matrix that would itself not fit into memory.  Must not know symmetries or families.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from maxent.lattice.terms import OperatorSum

__all__ = ["column_lengths", "reached"]

#: States whose images are computed at a time.
_CHUNK = 1 << 14


def reached(operators: Iterable[OperatorSum], state: int, *, most: int) -> np.ndarray:
    """Basis states that Hermitian operators lead to from one of them, in any number of steps.

    Parameters
    ----------
    operators : iterable of OperatorSum
        On the same sites.
    state : int
        Index of a basis state.
    most : int
        With more states than this found, the search ends early.

    Returns
    -------
    (k,) ndarray of int, ascending
        The whole block of the state when k <= `most`.

    Examples
    --------
    >>> from maxent.lattice import Ring, formula
    >>> reached([formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1]", Ring(3))], 1, most=8).tolist()
    [1, 2, 4]
    """
    rules = [op._arrays()._rows for op in operators]
    found = new = np.array([state])
    while len(new) and len(found) <= most:
        images = []
        for first in range(0, len(new), _CHUNK):
            for rule in rules:
                sources, values = rule(new[first : first + _CHUNK])
                images.append(np.unique(sources[values != 0]))
        new = np.setdiff1d(np.concatenate(images), found)
        found = np.union1d(found, new)
    return found


def column_lengths(operator: OperatorSum, states: np.ndarray) -> np.ndarray:
    """Lengths of the images of basis states under a Hermitian operator.

    Parameters
    ----------
    operator : OperatorSum
    states : (n,) ndarray of int

    Returns
    -------
    (n,) ndarray

    Examples
    --------
    >>> from maxent.lattice import Chain, formula
    >>> column_lengths(formula("3*Sx[i] + 4*Sz[i]", Chain(1)), np.array([0, 1])).tolist()
    [2.5, 2.5]
    """
    _, values = operator._arrays()._rows(np.asarray(states))
    return np.sqrt(np.sum(np.abs(values) ** 2, axis=0))

"""Momentum distributions: of free particles from their correlations, of hard-core bosons through their strings.

    n(k) = sum_ij exp(i k (j - i)) <b+_i b_j> / n

Its mean over all momenta is the number of particles per site.  Floor: quench.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from maxent.families.gaussian_states import BosonState, FermionState
from maxent.quench.hard_core import momentum_distribution

__all__ = ["free_momentum_distribution", "momentum_distribution"]


def free_momentum_distribution(state: FermionState | BosonState, momenta: Any) -> np.ndarray:
    """Momentum distribution of the fermions or bosons themselves, one mode per site of an open chain.

    Parameters
    ----------
    state : FermionState or BosonState
        With ``number``, ``<b+_i b_j>``.
    momenta : (q,) array_like
        In units of the inverse distance of sites; of states with currents n(k) and n(-k) differ.

    Returns
    -------
    (q,) ndarray

    Examples
    --------
    >>> both = FermionState.of_correlations([[0.5, 0.25j], [-0.25j, 0.5]])  # a current
    >>> free_momentum_distribution(both, [-1.0, 0.0, 1.0]).round(4)
    array([0.7104, 0.5   , 0.2896])
    """
    k = np.atleast_1d(np.asarray(momenta, float))
    number = state.number
    n = len(number)
    by_distance = np.array([np.trace(number, offset=r) for r in range(1, n)])
    phases = np.exp(1j * np.outer(k, np.arange(1, n)))
    return (np.real(np.trace(number)) + 2 * np.real(phases @ by_distance)) / n

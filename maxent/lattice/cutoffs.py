"""What the cut-off of bosons loses for a given state.

In the space with at most n_max bosons per mode the commutator is [b, dagger(b)] = 1 - (n_max + 1) P, P the projector on
the highest level, so the weight <P> measures how far a state notices the cut-off.
Floor: lattice (NumPy). Must not know how the state came about.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import prod
from typing import Any

import numpy as np

from maxent.lattice.particles import BosonOperators
from maxent.lattice.sites import Sites

_NORM = 1e-8


@dataclass(frozen=True, eq=False)
class CutoffLoss:
    """Measure of the cut-off, mode by mode.

    Attributes
    ----------
    modes : tuple of (int, str)
        Site and species of every boson mode.
    cutoffs : (n,) integer ndarray
        Largest occupation of every mode.
    weights : (n,) ndarray
        Weight of the state in the highest level.
    commutators : (n,) ndarray
        How far the mean of [b, dagger(b)] lies below 1: (cut-off + 1) times the weight.
    """

    modes: tuple[tuple[int, str], ...]
    cutoffs: np.ndarray
    weights: np.ndarray
    commutators: np.ndarray

    @property
    def worst(self) -> float:
        """Largest weight in a highest level."""
        return float(self.weights.max())

    def warning(self, tolerance: float = 1e-3) -> str | None:
        """One sentence when the largest weight exceeds a tolerance, else None."""
        if self.worst <= tolerance:
            return None
        k = int(np.argmax(self.weights))
        site, species = self.modes[k]
        mode = f"b[{site}, {species}]" if species else f"b[{site}]"
        return (
            f"the cut-off at {self.cutoffs[k]} bosons is felt: {mode} has the weight {self.weights[k]:.2g} in its "
            f"highest level (tolerance {tolerance:g}) and [b, dagger(b)] misses 1 by {self.commutators[k]:.2g}; "
            "raise the cut-off"
        )


def cutoff_loss(sites: Sites, state: Any, *, weights: Any = None) -> CutoffLoss:
    """Measure how much of a state lies in the highest levels that the cut-off keeps.

    Parameters
    ----------
    sites : Ring, Chain or Lattice
        With bosons.
    state : (d,) or (d, k) ndarray, or object with `mean` or `vector`
        Amplitudes of one state or of k states as columns; or a state whose method ``mean(matrix)`` gives the mean of
        a sparse (d, d) matrix, or whose method ``vector()`` gives amplitudes.
    weights : (k,) sequence, optional
        Weights of the columns; default equal.

    Returns
    -------
    CutoffLoss

    Raises
    ------
    ValueError
        When there are no bosons, or the state has another size or norm.

    Examples
    --------
    >>> from maxent.lattice import Bosons, Chain, PatternState
    >>> chain = Chain(2, Bosons(cutoff=3))
    >>> loss = cutoff_loss(chain, PatternState(chain, [1, 3]))
    >>> loss.weights.tolist(), loss.commutators.tolist()
    ([0.0, 1.0], [0.0, 4.0])
    """
    found = [k for k, slot in enumerate(sites.slots) if isinstance(slot, BosonOperators)]
    if not found:
        raise ValueError(f"{sites} holds no bosons: there is no cut-off")
    dims = [slot.dimension for slot in sites.slots]
    states = sites.states  # refuses bosons without a cut-off
    tops = [_top(k, dims) for k in found]
    if not isinstance(state, np.ndarray | list) and callable(getattr(state, "vector", None)):
        state = state.vector()
    if isinstance(state, np.ndarray | list):
        chances = _chances(np.asarray(state), states, weights)
        shares = [float(chances.reshape(top).sum(axis=(0, 2))[-1]) for top in tops]
    else:
        shares = [_mean(state, top) for top in tops]
    cutoffs = np.array([dims[k] - 1 for k in found])
    share = np.array(shares)
    return CutoffLoss(tuple(sites.homes[k] for k in found), cutoffs, share, (cutoffs + 1) * share)


def _top(slot: int, dims: list[int]) -> tuple[int, int, int]:
    return prod(dims[:slot]), dims[slot], prod(dims[slot + 1 :])


def _chances(vectors: np.ndarray, states: int, weights: Any) -> np.ndarray:
    """Probabilities of the basis states."""
    if vectors.ndim not in (1, 2) or vectors.shape[0] != states:
        raise ValueError(f"the state needs {states} amplitudes, its shape is {vectors.shape}")
    columns = vectors.reshape(states, -1)
    count = columns.shape[1]
    share = np.full(count, 1 / count) if weights is None else np.asarray(weights, float)
    if share.shape != (count,):
        raise ValueError(f"{count} states need {count} weights, not shape {share.shape}")
    chances = np.abs(columns) ** 2 @ share
    total = float(chances.sum())
    if not abs(total - 1) <= _NORM:
        raise ValueError(f"the state is not normalised: its probabilities add up to {total:.12g}")
    return chances


def _mean(state: Any, top: tuple[int, int, int]) -> float:
    import scipy.sparse

    before, levels, behind = top
    diagonal = np.zeros((before, levels, behind))
    diagonal[:, -1] = 1.0
    return float(state.mean(scipy.sparse.diags_array(diagonal.ravel()).tocsr()))

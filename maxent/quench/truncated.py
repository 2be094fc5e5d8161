"""How many local charges a stationary state needs: ensembles of the first M charges of an infinite chain.

Two measures, which answer different questions.  The gap of the entropy per site to the complete ensemble is the
relative entropy per site of the complete state against the truncated one; it falls algebraically with M, because the
multiplier ln(1/n - 1) of a mode diverges where its occupation is 0 or 1, and a sum of M cosines follows such a point
only slowly.  The state of a block of fixed size notices that point hardly: its relative entropy falls exponentially.
Floor: quench.

References
----------
M. Fagotti, F. H. L. Essler, Phys. Rev. B 87, 245107 (2013) (truncation by locality; from memory).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from maxent.families import gaussian_distances
from maxent.quench.distances import relative_entropy, trace_distance
from maxent.quench.infinite_chains import StationaryState

__all__ = ["TruncatedEnsemble", "block_relative_entropies", "truncated_ensembles"]

#: Blocks beyond this are not written as density matrices.
LARGEST_BLOCK = 8


@dataclass(frozen=True)
class TruncatedEnsemble:
    """The ensemble of the charges I_0 .. I_{M-1}.

    Attributes
    ----------
    count : int
        M.
    verdict : str
    multipliers : dict of str to float
    entropy : float
        Per site.
    entropy_gap : float
        What `entropy` is above that of the complete ensemble.
    relative_entropy, trace_distance : float
        Of the block: the complete state against this one.
    iterations : int
    state : StationaryState or None
        None where the fit has no multipliers.
    """

    count: int
    verdict: str
    multipliers: dict[str, float]
    entropy: float
    entropy_gap: float
    relative_entropy: float
    trace_distance: float
    iterations: int
    state: StationaryState | None = None


def truncated_ensembles(
    complete: StationaryState, counts: Sequence[int], *, block: int = 4, level: int = 9
) -> tuple[TruncatedEnsemble, ...]:
    """Fit the ensembles of the first charges of a chain to its stationary state and compare them with it.

    Parameters
    ----------
    complete : StationaryState
        Such as ``TransverseFieldChain(0.5).after_quench(2.0)``.
    counts : sequence of int
        Numbers M of charges, from 1 on.
    block : int, optional
        Sites of the block, at most 8.
    level : int, optional
        Numbers of momenta in the fits, ``2^level + 1``.

    Returns
    -------
    tuple of TruncatedEnsemble
        Measures are NaN where a fit has no multipliers (targets at the limit of what can be reached).

    Raises
    ------
    ValueError
        Counts or a block that are not possible.

    Examples
    --------
    >>> from maxent.quench.infinite_chains import TransverseFieldChain
    >>> chain = TransverseFieldChain(0.5).after_quench(2.0)
    >>> for found in truncated_ensembles(chain, [1, 4, 10]):
    ...     print(found.count, f"{found.entropy_gap:.1e} {found.relative_entropy:.1e}")
    1 1.6e-01 3.4e-01
    4 1.2e-02 2.5e-03
    10 1.0e-03 2.9e-08
    """
    if not counts or min(counts) < 1:
        raise ValueError(f"counts must be numbers of charges from 1 on, not {list(counts)}")
    if not 1 <= block <= LARGEST_BLOCK:
        raise ValueError(f"the block must have 1 to {LARGEST_BLOCK} sites, not {block}")
    whole = complete.block(block).density()
    entropy = complete.entropy
    found = []
    for count in counts:
        charges = {f"I{m}": complete.chain.charge(m) for m in range(count)}
        result, state = complete.ensemble(charges, level=level)
        ours = float("nan") if state is None else state.entropy
        part: Any = None if state is None else state.block(block).density()
        found.append(
            TruncatedEnsemble(
                count=count,
                verdict=str(result.verdict),
                multipliers=dict(result.multipliers),
                entropy=ours,
                entropy_gap=ours - entropy,
                relative_entropy=np.nan if part is None else relative_entropy(whole, part),
                trace_distance=np.nan if part is None else trace_distance(whole, part),
                iterations=result.iterations,
                state=state,
            )
        )
    return tuple(found)


def block_relative_entropies(
    complete: StationaryState, ensembles: Sequence[TruncatedEnsemble], blocks: Sequence[int]
) -> np.ndarray:
    """Relative entropy of blocks of any size, the complete state against truncated ones.

    Parameters
    ----------
    complete : StationaryState
    ensembles : sequence of TruncatedEnsemble
        Of this state, from `truncated_ensembles`.
    blocks : sequence of int
        Sites of each block; from the covariance, so that dozens are cheap.

    Returns
    -------
    (len(ensembles), len(blocks)) ndarray
        In nats; NaN where a fit has no multipliers.  Differences below about 1e-13 are rounding.

    Examples
    --------
    >>> from maxent.quench.infinite_chains import TransverseFieldChain
    >>> chain = TransverseFieldChain(0.5).after_quench(2.0)
    >>> few, many = block_relative_entropies(chain, truncated_ensembles(chain, [4, 12]), [4, 16])
    >>> print(f"{few[0]:.2e} {few[1]:.2e}", f"{many[0]:.2e} {many[1]:.2e}")
    2.49e-03 1.13e-01 9.56e-10 7.30e-04
    """
    whole = [complete.block(size) for size in blocks]
    out = np.full((len(ensembles), len(blocks)), np.nan)
    for row, found in zip(out, ensembles, strict=True):
        if found.state is not None:
            row[:] = [
                gaussian_distances.relative_entropy(w, found.state.block(size))
                for w, size in zip(whole, blocks, strict=True)
            ]
    return out

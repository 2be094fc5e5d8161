"""States of blocks of neighbouring sites in ensembles of free particles, and how far they are from a reference.

The reference is a Gaussian state.  States of ensembles are so too, but for rings of spins in parity sectors, see
`maxent.quench.gaussian_parity`.  Trace distances come from the density matrices of up to eight modes of fermions, from
proved bounds of Gaussian states beyond.  Floor: quench.  Must not know charges.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from maxent.families.gaussian_distances import relative_entropy, trace_distance_bounds
from maxent.families.gaussian_states import BosonState, FermionState
from maxent.families.periodic_states import PeriodicState
from maxent.families.ring_states import RingState
from maxent.lattice.sites import Sites
from maxent.quench import distances
from maxent.quench.gaussian_parity import block_density, block_rest, parity_terms
from maxent.quench.gaussian_starts import GaussianStart, Part

__all__ = ["BlockDistances", "Reference", "block_modes", "closeness", "moments_of"]

#: Modes up to which density matrices are compared.
DENSE = 8
#: What the parity may leave in a mean and still count as rounding.
NOTHING = 1e-13


@dataclass
class BlockDistances:
    """How far blocks are from the reference, by their number of sites.

    Attributes
    ----------
    exact : dict of int to float
        Trace distance.
    bounds : dict of int to (float, float)
        Proved bounds of the trace distance where it has no cheap value.
    entropies : dict of int to float
        Relative entropy ``S(reference||ensemble)`` in nats.
    rest : float
        Bound of what the parity does to means on the blocks that are taken as Gaussian states; 0 where it is rounding.
    """

    exact: dict[int, float] = field(default_factory=dict)
    bounds: dict[int, tuple[float, float]] = field(default_factory=dict)
    entropies: dict[int, float] = field(default_factory=dict)
    rest: float = 0.0


@dataclass(frozen=True)
class Reference:
    """State of each block that others are compared with.

    Attributes
    ----------
    sites, modes : dict of int to tuple of int
        By the number of sites.
    states : dict of int to FermionState or BosonState
    densities : dict of int to ndarray
        Density matrices of the small ones, of fermions.
    """

    sites: dict[int, tuple[int, ...]]
    modes: dict[int, tuple[int, ...]]
    states: dict[int, FermionState | BosonState]
    densities: dict[int, np.ndarray]

    @classmethod
    def of(cls, moments: GaussianStart, sites: Mapping[int, tuple[int, ...]], lattice: Sites) -> Reference:
        """The Gaussian states of some second moments."""
        modes = {b: block_modes(lattice, where) for b, where in sites.items()}
        states = {b: _reduced(moments, where) for b, where in modes.items()}
        small = [b for b, s in states.items() if isinstance(s, FermionState) and s.modes <= DENSE]
        found = cls(dict(sites), modes, states, {})
        if small:
            found.densities.update(found.nested(_density(moments, modes[max(small)]), small))
        return found

    def nested(self, whole: np.ndarray, blocks: Sequence[int]) -> dict[int, np.ndarray]:
        """Density matrices of blocks, traced out of that of the largest."""
        largest = self.modes[max(blocks)]
        dims = [2] * (max(largest) + 1)
        by_modes = distances.nested_states(whole, dims, largest, [self.modes[b] for b in blocks])
        return {b: by_modes[self.modes[b]] for b in blocks}


def block_modes(lattice: Sites, sites: Sequence[int]) -> tuple[int, ...]:
    """Modes that live on some sites, in the order of the sites."""
    return tuple(slot for site in sites for slot, (home, _) in enumerate(lattice.homes) if home == site)


def moments_of(state: FermionState | BosonState | PeriodicState | RingState) -> GaussianStart:
    """Second moments of a state of `gaussian_family`, by parity where it is a ring of spins."""
    if isinstance(state, RingState):
        parts = tuple(Part(s.weight, s.parity or 1, s.covariance(2 * s.mean - 1)) for s in state.sectors if s.weight)
        return GaussianStart("fermions", parts, "ensemble", 0.0)
    parity = 0
    if isinstance(state, PeriodicState):
        parity, state = int(state.like.antiperiodic), state.reduced(range(state.modes))
    if isinstance(state, BosonState):
        return GaussianStart("bosons", (Part(1.0, 0, state.covariance, state.displacement),), "ensemble", 0.0)
    return GaussianStart("fermions", (Part(1.0, parity, state.covariance),), "ensemble", 0.0)


def closeness(
    state: FermionState | BosonState | PeriodicState | RingState, moments: GaussianStart, reference: Reference
) -> BlockDistances:
    """Distance of every block of a state from the reference.

    Parameters
    ----------
    state : FermionState, BosonState, PeriodicState or RingState
    moments : GaussianStart
        Its `moments_of`.
    reference : Reference
    """
    found = BlockDistances()
    terms = parity_terms(state) if isinstance(state, RingState) else ()
    rests = {block: block_rest(terms, modes) for block, modes in reference.modes.items()}
    small = [b for b in reference.densities if rests[b] > NOTHING]
    exact = reference.nested(block_density(terms, reference.modes[max(small)]), small) if small else {}
    plain = [b for b in reference.densities if rests[b] <= NOTHING]
    gaussian = reference.nested(_density(moments, reference.modes[max(plain)]), plain) if plain else {}
    for block, modes in reference.modes.items():
        expected, mine = reference.states[block], _reduced(moments, modes)
        if block in exact:
            found.exact[block] = distances.trace_distance(exact[block], reference.densities[block])
            found.entropies[block] = distances.relative_entropy(reference.densities[block], exact[block])
            continue
        found.rest = max(found.rest, rests[block] if rests[block] > NOTHING else 0.0)
        found.entropies[block] = relative_entropy(expected, mine)
        if block in gaussian:
            found.exact[block] = distances.trace_distance(gaussian[block], reference.densities[block])
        else:
            found.bounds[block] = trace_distance_bounds(expected, mine)
    return found


def _reduced(moments: GaussianStart, modes: Sequence[int]) -> FermionState | BosonState:
    """The Gaussian state of the second moments of some modes, all parts together."""
    n = moments.modes
    if moments.statistics == "fermions":
        at = np.array([i for s in modes for i in (2 * s, 2 * s + 1)], int)
        return FermionState.of(sum(p.weight * p.covariance[np.ix_(at, at)] for p in moments.parts))
    (part,) = moments.parts
    at = np.array([*modes, *[s + n for s in modes]], int)
    r = None if part.displacement is None else part.displacement[at]
    return BosonState.of(part.covariance[np.ix_(at, at)], r)


def _density(moments: GaussianStart, modes: Sequence[int]) -> np.ndarray:
    """Density matrix of the Gaussian state of some modes of fermions."""
    state = _reduced(moments, modes)
    assert isinstance(state, FermionState)
    return state.density()

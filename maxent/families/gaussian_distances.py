"""How different two Gaussian states are: relative entropy, fidelity, trace distance.

Closed forms from the covariance matrices; the trace distance has none and is taken from the dense matrices of small
blocks, or enclosed: ``1 - F <= T <= sqrt(1 - F^2)`` with the root fidelity F (C. A. Fuchs, J. van de Graaf, IEEE Trans.
Inf. Theory 45, 1216 (1999)) and ``T <= sqrt(S(1||2)/2)`` (Pinsker).  A covariance in float64 does not tell how close to
pure a level is below some 1e-15; what that leaves open is added to the bounds.  Floor: families.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from maxent.families.boson_fidelity import fidelity_bounds, symplectic_frame, symplectic_rounding
from maxent.families.fermion_fidelity import Levels, covariance_distance, fidelity_ceiling, fidelity_floor
from maxent.families.gaussian_states import BosonState, FermionState

__all__ = [
    "Interval", "relative_entropy", "root_fidelity", "root_fidelity_bounds", "trace_distance", "trace_distance_bounds",
]  # fmt: skip

EPS = float(np.finfo(float).eps)
#: Modes up to which the trace distance is taken from the dense matrices.
DENSE = 10
#: With more than this of 1 in a level where 2 cannot be told from pure, the supports count as different.
OUTSIDE = 0.1


class Interval(NamedTuple):
    """Two-sided bounds."""

    lower: float
    upper: float


def _same(first: FermionState | BosonState, second: FermionState | BosonState) -> None:
    """Raise unless both are states of the same modes.

    Raises
    ------
    TypeError, ValueError
    """
    if type(first) is not type(second):
        raise TypeError(f"states of one kind are compared, not {type(first).__name__} and {type(second).__name__}")
    if first.modes != second.modes:
        raise ValueError(f"the states have {first.modes} and {second.modes} modes")


class _Entropy(NamedTuple):
    """Relative entropy to the nearest state with resolved levels.

    Attributes
    ----------
    value : float
    error : float
        What rounding may have taken away.
    outside : float
        Most that 1 has in a level where 2 was moved.
    apart : bool
        Whether 1 has more than rounding in a single mode where 2 is pure to the last bit.
    moved : float
        Bound of the trace distance by which 2 was moved.
    """

    value: float
    error: float
    outside: float
    apart: bool
    moved: float


def relative_entropy(first: FermionState | BosonState, second: FermionState | BosonState) -> float:
    """``S(1||2) = Tr rho_1 (ln rho_1 - ln rho_2)`` in nats.

    Levels of 2 closer to pure than rounding, 4 n eps for n fermion modes (times the condition number of the covariance
    for bosons), cannot be told from pure ones.  They are taken at that resolution: the value is then a lower bound up
    to rounding, short by what 1 has in the level times the logarithm of how much purer 2 is.  It is infinite where 1
    has more than a tenth in such a level, or more than rounding in a mode where 2 is pure to the last bit, as in
    patterns.
    Levels little above the resolution bring its ratio to the level as a relative error of theirs.

    Raises
    ------
    TypeError, ValueError
    """
    _same(first, second)
    found = _resolved_entropy(first, second)
    return float("inf") if found.apart or found.outside > OUTSIDE else found.value


def _resolved_entropy(first: FermionState | BosonState, second: FermionState | BosonState) -> _Entropy:
    if isinstance(first, FermionState) and isinstance(second, FermionState):
        return _fermion_entropy(first, second)
    assert isinstance(first, BosonState) and isinstance(second, BosonState)
    return _boson_entropy(first, second)


def _fermion_entropy(first: FermionState, second: FermionState) -> _Entropy:
    size, levels = 2 * first.modes, Levels.of(second)
    nearest = 2 * EPS * max(size, 1)
    # rho_2 is diagonal in these modes; of rho_1 only their mean occupations are asked
    mean = np.real(np.einsum("ai,ab,bi->i", levels.frame.conj(), 1j * first.covariance, levels.frame))
    value, outside = -first.entropy, 0.0
    for p, q in ((0.5 * (1 + mean), levels.full), (0.5 * (1 - mean), levels.empty)):
        p = np.clip(p, 0.0, 1.0)
        value -= 0.5 * float(p @ np.log(np.clip(q, nearest, 1 - nearest)))
        outside = max(outside, float(p[q <= nearest].max(initial=0.0)))
    # every level appears with both signs: n of them moved by as much, and 2n logarithms weighted by unsure occupations
    error = -size * nearest * float(np.log(nearest))
    # entries +-1 are pairs of Majorana operators in a pure state, exactly
    sharp = np.abs(second.covariance) == 1
    apart = bool(np.any(0.5 * (1 - first.covariance * second.covariance)[sharp] > nearest))
    return _Entropy(max(0.0, value), error, outside, apart, levels.slack + 0.5 * size * nearest)


def _boson_entropy(first: BosonState, second: BosonState) -> _Entropy:
    n = first.modes
    if not n:
        return _Entropy(0.0, 0.0, 0.0, False, 0.0)
    frame, nu = symplectic_frame(second.covariance)
    step = np.linalg.solve(frame, first.displacement - second.displacement)
    inverse = np.linalg.inv(frame)
    v = inverse @ first.covariance @ inverse.T
    number = 0.5 * (np.diag(v)[:n] + np.diag(v)[n:] + step[:n] ** 2 + step[n:] ** 2) - 0.5
    number = np.maximum(number, 0.0)
    nearest = symplectic_rounding(second.covariance) * nu
    excess = np.maximum(nu - 0.5, nearest)
    value = float(np.log1p(excess).sum() + number @ np.log1p(1 / excess)) - first.entropy
    outside = float(number[nu - 0.5 <= nearest].max(initial=0.0))
    rounding = float((symplectic_rounding(second.covariance) + symplectic_rounding(first.covariance)) * nu[-1])
    error = 2 * n * rounding * float(1 + number.sum() + np.log1p(1 / excess).sum())
    # modes in the vacuum or a coherent state, exactly
    sharp = (np.diag(second.covariance) == 0.5).reshape(2, n).all(axis=0)
    shift = first.displacement - second.displacement
    more = (0.5 * (np.diag(first.covariance) - 0.5 + shift**2)).reshape(2, n).sum(axis=0)
    apart = bool(np.any(more[sharp] > nearest.max()))
    return _Entropy(max(0.0, value), error, outside, apart, float(2 * n * nearest.max()))


def root_fidelity(first: FermionState | BosonState, second: FermionState | BosonState) -> float:
    """``Tr sqrt(sqrt(rho_1) rho_2 sqrt(rho_1))``, 1 for equal states, 0 for orthogonal ones.

    Fermions: to some n eps however pure the states are, see `maxent.families.fermion_fidelity`.  Bosons: to about 1e-8
    where the states are pure, see `maxent.families.boson_fidelity`.

    Raises
    ------
    TypeError, ValueError
    """
    _same(first, second)
    if isinstance(first, BosonState) and isinstance(second, BosonState):
        return fidelity_bounds(first, second)[1]
    assert isinstance(first, FermionState) and isinstance(second, FermionState)
    return fidelity_floor(Levels.of(first), Levels.of(second))[0]


def root_fidelity_bounds(first: FermionState | BosonState, second: FermionState | BosonState) -> Interval:
    """Bounds of `root_fidelity`, rounding included; of fermions for states within some n^(3/2) eps of those given.

    Raises
    ------
    TypeError, ValueError
    """
    _same(first, second)
    if isinstance(first, BosonState) and isinstance(second, BosonState):
        low, _, high = fidelity_bounds(first, second)
        return Interval(low, high)
    assert isinstance(first, FermionState) and isinstance(second, FermionState)
    levels = Levels.of(first), Levels.of(second)
    value, error = fidelity_floor(*levels)
    return Interval(float(np.sqrt(max(0.0, value**2 - error))), max(value, fidelity_ceiling(*levels)))


def trace_distance_bounds(first: FermionState | BosonState, second: FermionState | BosonState) -> Interval:
    """Proved bounds of ``|rho_1 - rho_2|_1/2`` for blocks of any size, rounding included.

    From the fidelity and the relative entropies; for fermions also ``|y|_max/2 <= T <= sum |y|/4`` with the eigenvalues
    y of ``i(G_1 - G_2)``.  Rounding is added: for fermions some n^(3/2) eps to T and to ``F^2``; for
    bosons what it leaves open of the levels, which between pure states raises the upper bound to some 1e-7 without
    squeezing and more with it.  Levels of 2 that are not resolved are moved, by a distance that is added as well.

    Raises
    ------
    TypeError, ValueError
    """
    _same(first, second)
    fidelity = root_fidelity_bounds(first, second)
    lower, upper = 1 - fidelity.upper, float(np.sqrt(1 - fidelity.lower**2))
    slack = 0.0
    if isinstance(first, FermionState) and isinstance(second, FermionState):
        slack = Levels.of(first).slack + Levels.of(second).slack
        lower = max(lower, _largest_difference(first, second)) - slack
        upper = min(upper, covariance_distance(first, second)) + slack
    for pair in ((first, second), (second, first)):
        found = _resolved_entropy(*pair)
        upper = min(upper, float(np.sqrt(0.5 * (found.value + found.error))) + found.moved + slack)
    return Interval(max(0.0, float(min(lower, upper))), min(1.0, float(upper)))


def _largest_difference(first: FermionState, second: FermionState) -> float:
    """Largest difference of an occupation: measuring it tells the states apart at least that well."""
    y = np.abs(np.linalg.eigvalsh(1j * (first.covariance - second.covariance)))
    largest = 0.5 * float(y.max(initial=0.0))
    return largest * (1 - EPS * len(y))


def trace_distance(first: FermionState, second: FermionState) -> float:
    """``|rho_1 - rho_2|_1/2`` of fermion states of up to ten modes, from the dense matrices.

    Raises
    ------
    TypeError, ValueError
        More modes: `trace_distance_bounds` encloses it.
    """
    _same(first, second)
    if not isinstance(first, FermionState) or first.modes > DENSE:
        raise ValueError(f"the trace distance is taken for fermions on up to {DENSE} modes; take bounds beyond")
    levels = np.linalg.eigvalsh(first.density() - second.density())
    return 0.5 * float(np.abs(levels).sum())

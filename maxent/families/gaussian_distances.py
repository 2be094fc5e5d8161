"""How different two Gaussian states are: relative entropy, fidelity, trace distance.

Closed forms from the covariance matrices; the trace distance has none and is taken from the dense matrices of small
blocks, or enclosed: ``1 - F <= T <= sqrt(1 - F^2)`` with the root fidelity F (C. A. Fuchs, J. van de Graaf, IEEE Trans.
Inf. Theory 45, 1216 (1999)) and ``T <= sqrt(S(1||2)/2)`` (Pinsker).  Floor: families.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from maxent.families.gaussian_states import BosonState, FermionState, symplectic_form

__all__ = ["Interval", "relative_entropy", "root_fidelity", "trace_distance", "trace_distance_bounds"]

#: Modes up to which the trace distance is taken from the dense matrices.
DENSE = 10
#: Levels closer to purity than this are pure.
PURE = 1e-15


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


def relative_entropy(first: FermionState | BosonState, second: FermionState | BosonState) -> float:
    """``S(1||2) = Tr rho_1 (ln rho_1 - ln rho_2)`` in nats; infinite where 2 is pure and 1 is not there.

    Raises
    ------
    TypeError, ValueError
    """
    _same(first, second)
    if isinstance(first, FermionState) and isinstance(second, FermionState):
        y, u = np.linalg.eigh(1j * second.covariance)
        # rho_2 is diagonal in these modes; of rho_1 only their mean occupations are asked
        mean = np.real(np.einsum("ai,ab,bi->i", u.conj(), 1j * first.covariance, u))
        full, empty = 0.5 * (1 + mean), 0.5 * (1 - mean)
        at = 0.5 * (1 + y), 0.5 * (1 - y)
        total = -first.entropy
        for p, q in ((full, at[0]), (empty, at[1])):
            pure = q <= PURE
            if np.any(p[pure] > 1e-12):
                return float("inf")
            total -= 0.5 * float(p[~pure] @ np.log(q[~pure]))
        return max(0.0, total)
    assert isinstance(first, BosonState) and isinstance(second, BosonState)
    n = first.modes
    frame, nu = _williamson(second.covariance)
    step = np.linalg.solve(frame, first.displacement - second.displacement)
    inverse = np.linalg.inv(frame)
    v = inverse @ first.covariance @ inverse.T
    number = 0.5 * (np.diag(v)[:n] + np.diag(v)[n:] + step[:n] ** 2 + step[n:] ** 2) - 0.5
    excess = np.maximum(nu - 0.5, 0.0)
    pure = excess <= PURE
    if np.any(number[pure] > 1e-12):
        return float("inf")
    mixed = excess[~pure]
    logs = float(np.log1p(mixed).sum() + number[~pure] @ np.log1p(1 / mixed))
    return max(0.0, logs - first.entropy)


def _williamson(v: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Symplectic S and levels nu with ``V = S diag(nu, nu) S^T``."""
    from maxent.families.antisymmetric import canonical_form

    n = len(v) // 2
    e, u = np.linalg.eigh(v)
    root = (u * np.sqrt(e)) @ u.T
    # root^-1 Omega root^-1 has the levels 1/nu
    inverse = (u / np.sqrt(e)) @ u.T
    form = canonical_form(inverse @ symplectic_form(n) @ inverse)
    nu = 1 / form.levels
    order = np.argsort(nu)
    frame = root @ np.concatenate([form.frame[:, 0::2][:, order], form.frame[:, 1::2][:, order]], axis=1)
    nu = nu[order]
    return frame / np.sqrt(np.concatenate([nu, nu])), nu


def root_fidelity(first: FermionState | BosonState, second: FermionState | BosonState) -> float:
    """``Tr sqrt(sqrt(rho_1) rho_2 sqrt(rho_1))``, 1 for equal states, 0 for orthogonal ones.

    For fermions ``F = det((1 - iG_1)/2)^(1/4) det((1 - iG_2)/2)^(1/4) det(1 + X)^(1/2)`` with the singular values X of
    ``r_2 r_1``, ``r^2 = (1 + iG)/(1 - iG)``.  Levels closer to purity than 2e-15 are moved there.  For bosons, with
    ``S = V_1 + V_2`` and the means d apart,

        F = exp(-d.S^-1.d/4) det(S)^(-1/4) prod_k sqrt(2 w_k + sqrt(4 w_k^2 - 1)),

    where ``+-i w_k`` are the eigenvalues of ``Omega^T S^-1 (Omega/4 + V_2 Omega V_1) Omega`` (L. Banchi, S. L.
    Braunstein, S. Pirandola, Phys. Rev. Lett. 115, 260501 (2015)).  Pure states are resolved to about 1e-8.

    Raises
    ------
    TypeError, ValueError
    """
    _same(first, second)
    if isinstance(first, BosonState) and isinstance(second, BosonState):
        return _boson_fidelity(first, second)
    parts = []
    for state in (first, second):
        y, u = np.linalg.eigh(1j * state.covariance)
        y = np.clip(y, -1 + 2 * PURE, 1 - 2 * PURE)
        parts.append((y, u))
    (y1, u1), (y2, u2) = parts
    first_half = (u1 * np.sqrt((1 + y1) / (1 - y1))) @ u1.conj().T
    second_half = (u2 * np.sqrt((1 + y2) / (1 - y2))) @ u2.conj().T
    size = np.linalg.svd(second_half @ first_half, compute_uv=False)
    log = 0.25 * float(np.sum(np.log((1 - y1) / 2)) + np.sum(np.log((1 - y2) / 2))) + 0.5 * float(np.log1p(size).sum())
    return min(1.0, float(np.exp(log)))


def _boson_fidelity(first: BosonState, second: BosonState) -> float:
    n = first.modes
    if not n:
        return 1.0
    omega, total = symplectic_form(n), first.covariance + second.covariance
    apart = first.displacement - second.displacement
    middle = omega / 4 + second.covariance @ omega @ first.covariance
    levels = np.linalg.eigvals(omega.T @ np.linalg.solve(total, middle) @ omega)
    w = np.maximum(np.sort(np.abs(levels))[::2], 0.5)  # each level twice
    log = 0.5 * float(np.log(2 * w + np.sqrt((2 * w - 1) * (2 * w + 1))).sum())
    log -= 0.25 * float(np.linalg.slogdet(total)[1] + apart @ np.linalg.solve(total, apart))
    return min(1.0, float(np.exp(log)))


def trace_distance_bounds(first: FermionState | BosonState, second: FermionState | BosonState) -> Interval:
    """Proved bounds of ``|rho_1 - rho_2|_1/2`` for blocks of any size.

    Raises
    ------
    TypeError, ValueError
    """
    f = root_fidelity(first, second)
    upper = float(np.sqrt(max(0.0, 1 - f * f)))
    for pair in ((first, second), (second, first)):
        upper = min(upper, float(np.sqrt(0.5 * relative_entropy(*pair))))
    lower = 1 - f
    if isinstance(first, FermionState) and isinstance(second, FermionState):
        lower = max(lower, _largest_difference(first, second))
    return Interval(min(lower, upper), upper)


def _largest_difference(first: FermionState, second: FermionState) -> float:
    """Largest difference of an occupation: measuring it tells the states apart at least that well."""
    y = np.abs(np.linalg.eigvalsh(1j * (first.covariance - second.covariance)))
    return 0.5 * float(y.max(initial=0.0))


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

"""Root fidelity of Gaussian fermion states between a lower and an upper bound that both hold in float64.

With ``P = (1 + iG)/2``, ``Q = 1 - P`` (2n, 2n) every unitary U and every Hermitian ``0 < K`` enclose F,

    |det(P_2^(1/2) P_1^(1/2) + Q_2^(1/2) U Q_1^(1/2))| <= F^2,    F^4 <= det(Q_1 + P_1 K) det(Q_2 + P_2 K^-1):

the first is the overlap of two Gaussian purifications (A. Uhlmann, Rep. Math. Phys. 9, 273 (1976)), the second
``F^2 <= Tr(rho_1 A) Tr(rho_2 A^-1)`` with a Gaussian A (P. M. Alberti, Lett. Math. Phys. 7, 25 (1983)).  Both are equal
to F where U is the unitary factor of ``r_2 r_1``, ``r^2 = P/Q``, and ``K = r_1^-1 U^H r_2``.  The matrices above have
entries of order 1 however pure the states are, and what goes wrong in the search for U and K costs tightness only.
Floor: families.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy.linalg import lapack

from maxent.families.gaussian_states import FermionState

__all__ = ["Levels", "covariance_distance", "fidelity_ceiling", "fidelity_floor"]

EPS = float(np.finfo(float).eps)
#: Occupations are kept this far from 0 and 1 while U is sought.
NEAREST = 1e-17
#: The same while K is sought: the nearest is best for some pairs, the farthest for large blocks.
TRIED = (1e-16, 1e-14, 1e-12, 1e-10)
#: Up to this largest ratio of levels an ordinary singular value decomposition resolves them.
FLAT = 100.0
#: Modes beyond which the decomposition for graded matrices takes too long.
GRADED = 150


class Levels(NamedTuple):
    """A state by the eigenvectors of iG, next to the one asked for.

    Attributes
    ----------
    full, empty : (2n,) ndarray
        Eigenvalues of P and Q.
    frame : (2n, 2n) ndarray
        Eigenvectors in columns.
    slack : float
        Bound of the trace distance from the state asked for.
    """

    full: np.ndarray
    empty: np.ndarray
    frame: np.ndarray
    slack: float

    @classmethod
    def of(cls, state: FermionState) -> Levels:
        """Diagonalise the covariance; what lies outside -1..1 by rounding is put there."""
        y, u = np.linalg.eigh(1j * state.covariance)
        y = np.clip(y, -1.0, 1.0)
        rest = float(np.linalg.norm(1j * state.covariance - (u * y) @ u.conj().T))
        bent = float(np.linalg.norm(u.conj().T @ u - np.eye(len(u))))
        # trace norm <= sqrt(2n) Frobenius norm
        return cls(0.5 * (1 + y), 0.5 * (1 - y), u, 0.25 * np.sqrt(len(u)) * (rest + bent + EPS * np.sqrt(len(u))))


def covariance_distance(first: FermionState, second: FermionState) -> float:
    """Upper bound ``|G_1 - G_2|_1/4`` of the trace distance, equal to it for one mode.

    On the way ``G_1 + t (G_2 - G_1)`` the state changes by ``sum_k d_k d rho/dG_k`` with the pairs k of Majorana
    operators in which the difference is canonical, and ``d rho/dG_k`` is the state of the other modes times
    ``i g_k' g_k''/2``, of trace norm 1.
    """
    y = np.linalg.eigvalsh(1j * (first.covariance - second.covariance))
    return 0.25 * float(np.abs(y).sum()) + EPS * len(y) ** 1.5 * float(np.abs(y).max(initial=0.0))


def fidelity_floor(first: Levels, second: Levels) -> tuple[float, float]:
    """Largest overlap of Gaussian purifications, F up to rounding.

    Returns
    -------
    value : float
    error : float
        What rounding may have added to ``value**2``.
    """
    size = len(first.full)
    across = second.frame.conj().T @ first.frame
    unitary = _unitary(first, second, across, NEAREST)
    overlap = np.sqrt(second.full)[:, None] * across * np.sqrt(first.full)
    overlap = overlap + np.sqrt(second.empty)[:, None] * unitary * np.sqrt(first.empty)
    # the matrix is a contraction: an error E of it moves the determinant by at most 2n |E|
    return min(1.0, float(np.exp(0.5 * np.linalg.slogdet(overlap)[1]))), 4 * EPS * size**1.5


def fidelity_ceiling(first: Levels, second: Levels) -> float:
    """Upper bound of F, what rounding may have taken away added."""
    across = second.frame.conj().T @ first.frame
    return min([1.0, *(_ceiling(first, second, across, nearest) for nearest in TRIED)])


def _ceiling(first: Levels, second: Levels, across: np.ndarray, nearest: float) -> float:
    """``Tr(rho_1 A) Tr(rho_2 A^-1)`` to the power 1/2 for the A found with occupations kept away from 0 and 1."""
    root = lambda x: np.sqrt(np.clip(x, nearest, 1 - nearest))
    unitary = _unitary(first, second, across, nearest)
    try:
        # kappa = K/(1 + K) = Q_1^(1/2) (P_2^(1/2) Q_1^(1/2) + Q_2^(1/2) U P_1^(1/2))^-1 P_2^(1/2)
        mixed = root(second.full)[:, None] * across * root(first.empty)
        mixed = mixed + root(second.empty)[:, None] * unitary * root(first.full)
        kappa = root(first.empty)[:, None] * np.linalg.solve(mixed, root(second.full)[:, None] * across)
        kappa, modes = np.linalg.eigh(0.5 * (kappa + kappa.conj().T))
    except np.linalg.LinAlgError:
        return float("inf")
    least = max(np.sqrt(nearest), 1e-8)
    kappa = np.clip(kappa, least, 1 - least)
    log = -float(np.log(kappa).sum() + np.log1p(-kappa).sum()) + 8 * EPS * len(kappa) ** 1.5
    for state, vectors, weight in ((first, modes, kappa), (second, across @ modes, 1 - kappa)):
        log += _log_determinant(state.empty[:, None] * (1 - weight) + state.full[:, None] * weight, vectors)
    return float(np.exp(min(0.25 * log, 1.0)))


def _log_determinant(factors: np.ndarray, vectors: np.ndarray) -> float:
    """Logarithm of ``|det(factors * vectors)|``, raised by what rounding may change to first order."""
    matrix = factors * vectors
    try:
        inverse = np.abs(np.linalg.inv(matrix))
    except np.linalg.LinAlgError:
        return float("inf")
    unsure = 4 * EPS * np.sqrt(len(matrix)) * (factors + np.abs(matrix).max(axis=0, initial=0.0))
    return float(np.linalg.slogdet(matrix)[1] + np.sum(inverse.T * unsure))


def _unitary(first: Levels, second: Levels, across: np.ndarray, nearest: float) -> np.ndarray:
    """Unitary factor of ``r_2 r_1`` from the modes of the first state to those of the second."""
    if len(across) > 2 * GRADED:
        nearest = max(nearest, 1e-10)
    ratio = [np.sqrt(np.maximum(x.full, nearest) / np.maximum(x.empty, nearest)) for x in (first, second)]
    product = ratio[1][:, None] * across * ratio[0]
    if len(across) <= 2 * GRADED and ratio[0].max(initial=0.0) * ratio[1].max(initial=0.0) > FLAT:
        # as a real matrix twice the size: Jacobi's method resolves singular values of D_2 C D_1 however far D spreads
        real = np.block([[product.real, -product.imag], [product.imag, product.real]])
        _, left, right, _, _, info = lapack.dgejsv(real, joba=2, jobu=0, jobv=0, jobr=0, jobt=0, jobp=0)
        if info == 0:
            n, turn = len(across), left @ right.T
            product = turn[:n, :n] + turn[n:, n:] + 1j * (turn[n:, :n] - turn[:n, n:])
    left, _, right = np.linalg.svd(product)
    return left @ right

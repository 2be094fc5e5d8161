"""Root fidelity of Gaussian boson states between bounds, and the symplectic frame of a covariance.

With ``S = V_1 + V_2`` and the means d apart,

    F = exp(-d.S^-1.d/4) det(S)^(-1/4) prod_k sqrt(2 w_k + sqrt(4 w_k^2 - 1)),

where ``+-i w_k`` are the eigenvalues of ``Omega^T S^-1 (Omega/4 + V_2 Omega V_1) Omega`` (L. Banchi, S. L. Braunstein,
S. Pirandola, Phys. Rev. Lett. 115, 260501 (2015)).  It is worked out in the modes in which S has no squeezing.  Near
``w = 1/2``, where a pair of modes is pure, rounding e of w turns into sqrt(e); the bounds carry it.  Floor: families.
"""

from __future__ import annotations

import numpy as np

from maxent.families.antisymmetric import canonical_form
from maxent.families.gaussian_states import BosonState, symplectic_form

__all__ = ["fidelity_bounds", "symplectic_frame", "symplectic_rounding"]

EPS = float(np.finfo(float).eps)


def symplectic_frame(v: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Symplectic T and levels nu (n,), ascending, with ``V = T diag(nu, nu) T^T``."""
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


def symplectic_rounding(v: np.ndarray) -> float:
    """What float64 leaves open of the levels of V, relative to the largest of them and with what squeezing adds."""
    e = np.linalg.eigvalsh(v) if len(v) else np.ones(1)
    return 2 * EPS * len(v) * float(e[-1] / e[0]) if e[0] > 0 else float("inf")


def fidelity_bounds(first: BosonState, second: BosonState) -> tuple[float, float, float]:
    """Lower bound, value and upper bound of F."""
    n = first.modes
    if not n:
        return 1.0, 1.0, 1.0
    frame, nu = symplectic_frame(first.covariance + second.covariance)
    rounding = symplectic_rounding(first.covariance + second.covariance)
    # the symplectic inverse is exact up to signs
    omega = symplectic_form(n)
    inverse = omega.T @ frame.T @ omega
    v1, v2 = (inverse @ x.covariance @ inverse.T for x in (first, second))
    sums = np.concatenate([nu, nu])
    apart = inverse @ (first.displacement - second.displacement)
    levels, vectors = np.linalg.eig(omega.T @ ((omega / 4 + v2 @ omega @ v1) / sums[:, None]) @ omega)
    w = np.sort(np.abs(levels.imag))[::2]  # each level twice
    # Bauer and Fike: eigenvalues move by no more than the matrix times the condition number of the eigenvectors
    unsure = 4 * rounding * float(nu[-1] ** 2 / nu[0]) * float(np.linalg.cond(vectors))
    shift = -0.5 * float(np.log(nu).sum()) - 0.25 * float(apart @ (apart / sums))
    loose = rounding * (2 * n + float(apart @ (apart / sums)))
    with np.errstate(over="ignore", invalid="ignore"):
        found = [np.maximum(w + off, 0.5) for off in (-unsure, 0.0, unsure)]
        logs = [0.5 * float(np.log(2 * x + np.sqrt((2 * x - 1) * (2 * x + 1))).sum()) + shift for x in found]
    if not np.isfinite(unsure + loose):
        return 0.0, min(1.0, float(np.exp(logs[1]))), 1.0
    low, value, high = (min(1.0, float(np.exp(x))) for x in (logs[0] - loose, logs[1], min(0.0, logs[2] + loose)))
    return low, value, high

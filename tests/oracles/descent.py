"""The dual F(lam) = ln Tr exp(-lam.Q) + lam.q minimised by SciPy, with gradient and Hessian, no whitening.

For small, well-conditioned problems well inside the reachable set, where a general minimiser is right to
`RESOLUTION` in the multipliers.
"""

from __future__ import annotations

import numpy as np
from scipy.optimize import minimize

RESOLUTION = 1e-6


def dual(charges: np.ndarray, targets: np.ndarray, lam: np.ndarray):
    """F, its gradient and its Hessian, from one eigendecomposition; charges (m, d, d)."""
    e, u = np.linalg.eigh(np.tensordot(lam, charges, axes=1))
    weights = np.exp(-(e - e[0]))
    p = weights / weights.sum()
    turned = np.array([u.conj().T @ a @ u for a in charges])
    means = np.einsum("aii,i->a", turned, p).real
    gap = e[:, None] - e[None, :]
    is_close = np.abs(gap) < 1e-6
    # divided differences of exp(-e): the inner product of the Hessian (Kubo, Mori)
    kernel = np.where(is_close, (p[:, None] + p[None, :]) / 2, -(p[:, None] - p[None, :]) / np.where(is_close, 1, gap))
    hessian = np.einsum("aij,ij,bij->ab", turned, kernel, turned.conj()).real - np.outer(means, means)
    value = np.log(weights.sum()) - e[0] + lam @ targets
    return value, targets - means, hessian


def multipliers(charges: np.ndarray, targets: np.ndarray, method: str) -> np.ndarray:
    """Minimiser of the dual by "BFGS" or "trust-exact" from lam = 0."""
    start = np.zeros(len(targets))
    value = lambda lam: dual(charges, targets, lam)[0]
    slope = lambda lam: dual(charges, targets, lam)[1]
    if method == "BFGS":
        found = minimize(value, start, jac=slope, method="BFGS", options={"gtol": 1e-9})
    else:
        curve = lambda lam: dual(charges, targets, lam)[2]
        found = minimize(value, start, jac=slope, hess=curve, method="trust-exact", options={"gtol": 1e-9})
    # the flag may report lost precision at the floor; what counts is the gradient
    assert np.max(np.abs(found.jac)) < 1e-7, found.message
    return found.x

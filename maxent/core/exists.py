"""Existence of the multipliers at a converged point: one number, R nu < 1/2.

With ``s.H(lam + s).s >= exp(-c(s)) s.H(lam).s`` along every ray (generalised self-concordance, F. Bach, Electron. J.
Stat. 4, 384 (2010), from memory) a minimiser of the dual exists for every target within the noise if

    R nu < 1/2,   nu^2 = sum_k (|g_k| + b_k)^2 / h_k,   R^2 = sum_k c(u_k)^2 / h_k,

where h_k, u_k are the curvatures and axes, g the residual and b its uncertainty.  For charges that do not commute some
families know the inequality from tests only; they may know another proof that the targets are interior.  Floor: core.
"""

from __future__ import annotations

import numpy as np

from maxent.core.contract import Family
from maxent.core.newton import Iterate

__all__ = ["minimiser_exists"]


def minimiser_exists(family: Family, at: Iterate, unit: np.ndarray) -> tuple[bool, float, str]:
    """Whether a minimiser exists for all targets within `unit`, the number R nu, and how it was found out.

    R nu also says that the iterate is near the minimiser.  Where the bound behind it is no theorem
    (`Family.stiffness_is_proved`), another proof of existence is tried, `Family.norm_needed`.

    Returns
    -------
    ok : bool
    shift : float
        R nu; NaN when no stiffness bound is known and the Hessian was probed instead.
    evidence : {"proved", "tested"}
    """
    ok, shift, evidence = _minimiser_near(family, at, unit)
    if ok and evidence == "proved" and not family.stiffness_is_proved:
        needed = family.norm_needed(at.lam, at.evaluation.values, unit + at.evaluation.error)
        evidence = "proved" if needed is not None and needed < 1 else "tested"
    return ok, shift, evidence


def _minimiser_near(family: Family, at: Iterate, unit: np.ndarray) -> tuple[bool, float, str]:
    h = np.maximum(at.curvature, 1e-150)  # below that nothing can be proved, and squares would overflow
    along = np.abs(at.axes.T) @ (unit + at.evaluation.error) + np.abs(at.axes.T @ at.evaluation.values)
    nu2 = float(np.sum(along**2 / h))
    nu = float(np.sqrt(nu2))  # roots before products: either sum may be near the end of the range
    # one pass over the charges settles most well-conditioned fits, however many multipliers there are
    reach = family.reach()
    if np.all(np.isfinite(reach)):
        crude = float(np.sqrt(np.sum((np.abs(at.axes.T) @ reach) ** 2 / h))) * nu
        if crude < 0.5:
            return True, crude, "proved"
    bounds = np.array([_bound(family, at, k, exact=False) for k in range(len(h))])
    if np.isnan(bounds).any():
        return _probed(family, at, h, nu2)
    for k in np.argsort(h):  # cheap bounds first, exact ones where they matter, softest direction first
        if float(np.sqrt(np.sum(bounds**2 / h))) * nu < 0.5:
            break
        bounds[k] = min(bounds[k], _bound(family, at, int(k), exact=True))
    shift = float(np.sqrt(np.sum(bounds**2 / h))) * nu
    return shift < 0.5, shift, "proved"


def _bound(family: Family, at: Iterate, k: int, *, exact: bool) -> float:
    c = family.stiffness(at.lam, at.axes[:, k], exact=exact)
    return np.nan if c is None else float(c)


def _probed(family: Family, at: Iterate, h: np.ndarray, nu2: float) -> tuple[bool, float, str]:
    """No bound is known: look at the Hessian on the ball that must hold the minimiser."""
    whitener = at.axes / np.sqrt(h)
    for k in range(len(h)):
        for sign in (-2, 2):
            there = family.evaluate(at.lam + sign * np.sqrt(nu2 / h[k]) * at.axes[:, k])
            if not np.isfinite(there.log_partition):
                return False, np.inf, "tested"
            if np.linalg.eigvalsh(whitener.T @ there.covariance @ whitener)[0] < 0.5:
                return False, np.inf, "tested"
    return True, np.nan, "tested"

"""One level: ``ln Z`` of a copy, mean occupation and its variance, for fermions, bosons, distinguishable particles.

With w the energy of one particle in units of the temperature, n = 1/(e^w + s), s = 1 for fermions, -1 for bosons, 0 for
distinguishable particles (of which ``ln Z = e^-w``, the 1/N! counted); variance n (1 - s n).  Every form is chosen so
that nothing overflows or cancels for w from 1e-8 to 1e5.  Floor: families.  Knows nothing of charges and levels.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from maxent.core.contract import namespace

__all__ = [
    "SIGNS", "dual_of_logs", "exponents", "level_entropy", "level_terms", "log_partitions", "log_weights",
    "occupations", "unmixing", "vacancies",
]  # fmt: skip

#: s in n = 1/(e^w + s).
SIGNS = {"fermions": 1, "bosons": -1, "distinguishable": 0}

#: Occupations of exponents beyond this are below 1e-304, whatever they are.
FAR = 700.0


def level_terms(x: Any, sign: int) -> tuple[Any, Any, Any]:
    """``ln Z``, mean and variance of the occupation of one copy of each level, in one pass.

    Parameters
    ----------
    x : array
        Exponents, such as ``lam.q_k``; positive for bosons.
    sign : {1, -1, 0}
        s: fermions, bosons, distinguishable particles.

    Returns
    -------
    log_z, occupation, variance : arrays
    """
    xp = namespace(x)
    if sign > 0:
        small = xp.exp(-xp.abs(x))
        sum_ = 1.0 + small
        return xp.maximum(-x, 0.0) + xp.log1p(small), xp.where(x > 0, small, 1.0) / sum_, small / sum_**2
    with np.errstate(divide="ignore", invalid="ignore"):  # bosons at trial points that do not confine them: no number
        n = occupations(x, sign)
        return (xp.log1p(n), n, n * (1.0 + n)) if sign else (n, n, n)


def log_weights(x: Any, sign: int) -> Any:
    """``ln Z`` alone: ``ln(1 + e^-x)``, ``-ln(1 - e^-x)``, ``e^-x``."""
    xp = namespace(x)
    if sign > 0:
        return xp.maximum(-x, 0.0) + xp.log1p(xp.exp(-xp.abs(x)))
    n = occupations(x, sign)
    return xp.log1p(n) if sign else n


def occupations(x: Any, sign: int) -> Any:
    """Mean occupation alone; keeps its relative accuracy wherever it is above 1e-304."""
    xp = namespace(x)
    if sign > 0:
        small = xp.exp(-xp.abs(x))
        return xp.where(x > 0, small, 1.0) / (1.0 + small)
    return 1.0 / xp.expm1(xp.minimum(x, FAR)) if sign else xp.exp(-x)


def vacancies(x: Any, sign: int) -> Any:
    """``1 - n`` for fermions, ``1 + n`` for bosons; keeps its relative accuracy."""
    return occupations(-x, 1) if sign > 0 else -1.0 / namespace(x).expm1(-x)


def log_partitions(w: Any, sign: int) -> Any:
    """``ln Z`` of one copy of each level, (n,), for JAX: differentiable twice; +inf where bosons are not confined."""
    import jax.numpy as jnp

    if sign > 0:
        return jnp.logaddexp(0.0, -w)
    if sign < 0:
        inside = jnp.where(w > 0, w, 1.0)
        return jnp.where(w > 0, -jnp.log(-jnp.expm1(-inside)), jnp.inf)
    return jnp.exp(-w)


def exponents(occupation: np.ndarray, sign: int) -> np.ndarray:
    """The exponents w with these occupations, ``ln((1 - s n)/n)``; infinite for empty and for full levels."""
    with np.errstate(divide="ignore"):
        return np.log1p(-sign * occupation) - np.log(occupation)


def level_entropy(w: np.ndarray, occupation: np.ndarray, sign: int) -> np.ndarray:
    """Entropy ``ln Z + w n`` of one copy of each level in nats, (n,); 0 where w is infinite."""
    finite = np.isfinite(w)
    w = np.where(finite, w, 1.0)
    if sign > 0:  # symmetric in particles and holes, as ln Z + w n is not
        e = np.exp(-np.abs(w))
        return np.where(finite, np.log1p(e) + np.abs(w) * e / (1 + e), 0.0)
    return np.where(finite, log_weights(w, sign) + w * occupation, 0.0)


def unmixing(w: np.ndarray, u: np.ndarray, sign: int) -> float:
    """A number c such that no variance falls faster than ``exp(-c |t|)`` along ``w + t u``.

    The logarithmic slope of the variance is tanh(w/2) for fermions, 1 for distinguishable particles and coth(w/2) for
    bosons, where it falls only as w grows, and the slope with it.
    """
    if not len(u):
        return 0.0
    size = np.abs(u)
    return float(np.max(size / np.tanh(0.5 * w)) if sign < 0 else size.max())


def dual_of_logs(w: np.ndarray, sign: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Value, occupation and curvature of ``max_n [ln n + ln(1 - n) - w n]``, without ``ln(1 - n)`` unless fermions.

    Conjugates of self-concordant barriers are self-concordant (Nesterov, Nemirovskii 1994, from memory).  For bosons
    and distinguishable particles w must be positive.
    """
    if sign <= 0:
        return -np.log(w) - 1.0, 1.0 / w, 1.0 / w**2
    root = np.hypot(w, 2.0)
    # the occupation 2/(2 + w + r) and the one of the holes, 2/(2 - w + r), without cancellation
    small = 4.0 / (root + np.abs(w))  # = r - |w|
    minority = 2.0 / (2.0 + root + np.abs(w))
    majority = 2.0 / (2.0 + small)
    n = np.where(w > 0, minority, majority)
    value = np.log(minority) + np.log(majority) - w * n
    return value, n, 1.0 / (minority**-2 + majority**-2)

"""Coherence and momentum distribution of hard-core bosons in Gaussian states of their fermions.

Bosons are spins, ``b_j = (X_j + i Y_j)/2`` with spin down = occupied, and ``<b+_i b_j>`` holds the whole string between
i and j: a Pfaffian of 2|i - j| Majorana operators.  Where no currents flow and everything is real it is half of two
determinants of |i - j| rows, as here.  At finite temperature, or after dephasing, coherence falls exponentially, and
the distances at which it is rounding are not looked at.  Floor: quench.

References
----------
E. Lieb, T. Schultz, D. Mattis, Ann. Phys. 16, 407 (1961).  M. Rigol, A. Muramatsu, Phys. Rev. A 72, 013604 (2005)
(momentum distributions; from memory).
"""

from __future__ import annotations

from typing import Any

import numpy as np

from maxent.families.gaussian_states import FermionState

__all__ = ["coherences", "momentum_distribution"]

#: Distances are taken until this many in a row hold nothing above the floor.
QUIET = 6


def coherences(state: FermionState, *, floor: float = 1e-13) -> np.ndarray:
    """``<b+_i b_j>`` of hard-core bosons.

    Parameters
    ----------
    state : FermionState
        Of consecutive sites, with ``<g_2a g_2b> = <g_2a+1 g_2b+1> = 0`` for a != b: real and without currents.
    floor : float, optional
        Six distances in a row without an entry above it end the calculation; what lies beyond counts as zero.

    Returns
    -------
    (n, n) ndarray
        Real symmetric; its diagonal holds the occupations, its largest eigenvalue the condensate.

    Raises
    ------
    ValueError
        A state with currents or complex correlations.
    """
    g = state.covariance
    same = max(float(np.abs(g[0::2, 0::2]).max(initial=0.0)), float(np.abs(g[1::2, 1::2]).max(initial=0.0)))
    if same > 1e-9:
        raise ValueError(f"coherences need a state without currents: <i g g> of one kind reaches {same:.3g}")
    part = g[0::2, 1::2]  # <i g_2a g_2b+1>
    n = len(part)
    out = np.diag(0.5 * (1 + np.diag(part)))
    quiet = 0
    for r in range(1, n):
        i = np.arange(n - r)
        rows, columns = i[:, None, None] + np.arange(1, r + 1)[None, :, None], i[:, None, None] + np.arange(r)
        # X_i X_{i+r}: <i g_2a g_2b+1> for a = i+1..i+r, b = i..i+r-1; Y_i Y_{i+r} the other way round
        xx = np.linalg.det(part[rows, columns])
        yy = np.linalg.det(part[columns.transpose(0, 2, 1), rows.transpose(0, 2, 1)])
        value = 0.25 * (xx + yy)
        out[i, i + r] = out[i + r, i] = value
        quiet = quiet + 1 if np.abs(value).max() < floor else 0
        if quiet == QUIET:
            break
    return out


def momentum_distribution(state: FermionState, momenta: Any, *, floor: float = 1e-13) -> np.ndarray:
    """``n(k) = sum_ij exp(i k (j - i)) <b+_i b_j> / n`` of hard-core bosons.

    Parameters
    ----------
    state : FermionState
        As for `coherences`.
    momenta : (q,) array_like
        In units of the inverse distance of sites.
    floor : float, optional

    Returns
    -------
    (q,) ndarray
        Its mean over the momenta ``2 pi m/n`` is the number of bosons per site.

    Raises
    ------
    ValueError

    Examples
    --------
    >>> alone = FermionState.pattern([0, 1, 0, 1])
    >>> momentum_distribution(alone, [0.0, 1.0])
    array([0.5, 0.5])
    """
    k = np.atleast_1d(np.asarray(momenta, float))
    c = coherences(state, floor=floor)
    n = len(c)
    by_distance = np.array([np.trace(c, offset=r) for r in range(n)])
    by_distance[1:] *= 2
    return np.cos(np.outer(k, np.arange(n))) @ by_distance / n

"""Leading correction of an ensemble in a finite system.

The values of the charges in a start have a distribution; its width differs from that in the ensemble.  To leading order
an observable that is a smooth function o(q) of the charges then differs by

    (1/2) sum_jk  d2o/dq_j dq_k  (V_start - V_ensemble)_jk,

which vanishes like 1/L for starts and ensembles of short-range correlations.  Beside a deviation it tells an effect of
the size from a failure of the ensemble.  Floor: quench.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

__all__ = ["leading_correction", "second_derivatives"]

#: Step in units of the spread of the charges: 1e-4 relative error by truncation, 1e-11 by rounding.
STEP = 1e-2


def second_derivatives(
    at: Callable[[np.ndarray], tuple[np.ndarray, np.ndarray]], lam: np.ndarray, covariance: np.ndarray
) -> np.ndarray | None:
    """Second derivatives of means by the values of the charges.

    Parameters
    ----------
    at : callable
        Multipliers (m,) -> values (m,) of the charges and means (n,) of the observables.
    lam : (m,) ndarray
    covariance : (m, m) ndarray
        Of the charges at `lam`.

    Returns
    -------
    (n, m, m) ndarray, or None where the charges are dependent.

    Notes
    -----
    Central differences in multipliers whitened by the covariance; with c these coordinates and G = dq/dc,
    ``d2o/dq2 = G^-T (d2o/dc2 - sum_l (do/dq)_l d2q_l/dc2) G^-1``.
    """
    m = len(lam)
    size = np.sqrt(np.diagonal(covariance))
    if not size.all() or np.linalg.cond(covariance / np.outer(size, size)) > 1e10:
        return None
    steps = np.linalg.inv(np.linalg.cholesky(covariance)).T * STEP  # columns
    centre = np.concatenate(at(lam))
    value = lambda c: np.concatenate(at(lam + steps @ c))
    unit = np.eye(m)
    plus = np.array([value(e) for e in unit])
    minus = np.array([value(-e) for e in unit])
    first = (plus - minus).T / (2 * STEP)
    second = np.empty((len(centre), m, m))
    for j in range(m):
        second[:, j, j] = (plus[j] - 2 * centre + minus[j]) / STEP**2
        for k in range(j):
            corners = value(unit[j] + unit[k]) + value(-unit[j] - unit[k])
            cross = corners - plus[j] - minus[j] - plus[k] - minus[k] + 2 * centre
            second[:, j, k] = second[:, k, j] = cross / (2 * STEP**2)
    g = np.linalg.inv(first[:m])
    slopes = first[m:] @ g
    curved = second[m:] - np.einsum("nl,ljk->njk", slopes, second[:m])
    return np.einsum("ja,njk,kb->nab", g, curved, g)


def leading_correction(curvature: np.ndarray, start: np.ndarray, ensemble: np.ndarray) -> np.ndarray:
    """Leading correction of every observable.

    Parameters
    ----------
    curvature : (n, m, m) ndarray
        From `second_derivatives`.
    start, ensemble : (m, m) ndarray
        Covariances of the charges in the start and in the ensemble.

    Returns
    -------
    (n,) ndarray
        To be added to the mean in the ensemble.
    """
    return 0.5 * np.einsum("njk,jk->n", curvature, start - ensemble)

"""States of independent levels: occupations, and everything that follows from them.

Also the closed form for the occupation of every level as a charge of its own: ``lam_k = ln((1 - s n_k)/n_k)``, no
iteration.  Floor: families.  Must not know which charges led to the state.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from maxent.families.finite import checked_charges
from maxent.families.statistics import SIGNS, exponents, level_entropy, level_terms, log_weights

__all__ = ["ModesState", "checked_degeneracy", "checked_edges", "checked_statistics", "fill", "level_values"]


@dataclass(frozen=True)
class ModesState:
    """Independent levels with given mean occupations; everything about the copies of a level is the same.

    Attributes
    ----------
    own_multipliers : (n,) ndarray
        ``w_k = ln((1 - s n_k)/n_k)``, the multiplier of each level's own occupation; +inf for empty and -inf for full
        levels.
    occupations : (n,) ndarray
        Mean number of particles in one copy of each level.
    degeneracy : (n,) ndarray
        Number of copies of each level.
    statistics : {"fermions", "bosons", "distinguishable"}
    log_partition : float
        NaN where it diverges: on a face.
    entropy : float
        In nats.  Distinguishable particles: ``sum g (n - n ln n)``, which may be negative.
    """

    own_multipliers: np.ndarray
    occupations: np.ndarray
    degeneracy: np.ndarray
    statistics: str
    log_partition: float
    entropy: float
    relative_entropy: float | None = None

    @property
    def fluctuations(self) -> np.ndarray:
        """Variance ``n (1 - s n)`` of the number of particles in one copy of each level, (n,).

        Without a fixed number of particles: the variance ``n0 (1 + n0)`` of a condensate is one of this ensemble.
        """
        out = np.zeros(len(self.occupations))
        on = np.isfinite(self.own_multipliers)
        out[on] = level_terms(self.own_multipliers[on], SIGNS[self.statistics])[2]
        return out

    def mean(self, operator: Any) -> float:
        """Expectation value of ``sum_k o_k N_k``.

        Parameters
        ----------
        operator : (n,) array_like
            Its value for one particle in each level.
        """
        return float(self._values(operator) @ (self.degeneracy * self.occupations))

    def variance(self, operator: Any) -> float:
        """Variance of ``sum_k o_k N_k``."""
        return self.covariance(operator, operator)

    def covariance(self, first: Any, second: Any) -> float:
        """Covariance of ``sum_k a_k N_k`` and ``sum_k b_k N_k``."""
        return float((self._values(first) * self._values(second)) @ (self.degeneracy * self.fluctuations))

    def reduced(self, sites: Any) -> Any:
        """Levels have no tensor structure of sites; raises."""
        raise ValueError("levels are no sites: a state of independent levels has no reduced states")

    def _values(self, operator: Any) -> np.ndarray:
        values = level_values("operator", operator)
        if len(values) != len(self.occupations):
            raise ValueError(f"the operator lists {len(values)} levels, the state {len(self.occupations)}")
        return values


def fill(occupations: Any, statistics: str = "fermions", *, degeneracy: Any = None) -> ModesState:
    """The state of largest entropy with the given occupation of every level, in closed form.

    Its multipliers are those of each level's own occupation, ``lam_k = ln((1 - s n_k)/n_k)``.  Empty levels, and full
    ones of fermions, are pinned: their multipliers are infinite, and they take no part in anything else.

    Parameters
    ----------
    occupations : (n,) array_like
        Mean number of particles in one copy of each level.
    statistics : {"fermions", "bosons", "distinguishable"}, optional
    degeneracy : (n,) array_like, optional
        Number of copies of each level; 1 by default.

    Returns
    -------
    ModesState

    Raises
    ------
    TypeError, ValueError
        Occupations that are negative, or above 1 for fermions.

    Examples
    --------
    >>> state = fill([0.9, 0.5, 0.0])
    >>> state.own_multipliers.round(6).tolist(), round(state.entropy, 6)
    ([-2.197225, 0.0, inf], 1.01823)
    """
    statistics = checked_statistics(statistics)
    n = level_values("occupations", occupations)
    top = 1.0 if statistics == "fermions" else np.inf
    bad = np.flatnonzero((n < 0) | (n > top))
    if len(bad):
        allowed = "0..1" if statistics == "fermions" else "0 or more"
        raise ValueError(f"the occupation of level {bad[0]} is {n[bad[0]]:.6g}: {statistics} have {allowed} per copy")
    g = checked_degeneracy(degeneracy, len(n))
    sign = SIGNS[statistics]
    w = exponents(n, sign)
    on = np.isfinite(w)
    log_z = float("nan")
    if not np.any(w == -np.inf):
        log_z = float(g[on] @ log_weights(w[on], sign))
    return ModesState(w, n, g, statistics, log_z, float(g @ level_entropy(w, n, sign)))


# ---------------------------------------------------------------- checked input


def checked_statistics(statistics: Any) -> str:
    """One of the three words."""
    if statistics not in SIGNS:
        raise ValueError(f"statistics must be one of {', '.join(map(repr, SIGNS))}, not {statistics!r}")
    return str(statistics)


def checked_degeneracy(degeneracy: Any, n: int) -> np.ndarray:
    """Number of copies of n levels, positive; ones when not given."""
    if degeneracy is None:
        return np.ones(n)
    g = level_values("degeneracy", degeneracy)
    if len(g) != n:
        raise ValueError(f"degeneracy lists {len(g)} levels where there are {n}")
    bad = np.flatnonzero(g <= 0)
    if len(bad):
        raise ValueError(f"degeneracy is {g[bad[0]]:.6g} at level {bad[0]}; it must be positive (leave the level out)")
    return g


def checked_edges(names: tuple[str, ...], continuum: Mapping[str, Any]) -> np.ndarray:
    """Charges (m, e) of one particle at the ends of a continuous spectrum."""
    given = checked_charges(continuum, "continuum")
    if set(given) != set(names):
        odd = sorted(set(given) ^ set(names))[0]
        raise ValueError(f"continuum must give the charges {', '.join(map(repr, names))} at the edge; see {odd!r}")
    rows = [level_values(f"continuum of {name!r}", np.atleast_1d(given[name])) for name in names]
    if len({len(r) for r in rows}) > 1:
        raise ValueError("continuum gives different numbers of edges for different charges")
    return np.array(rows)


def level_values(label: str, value: Any) -> np.ndarray:
    """(n,) finite real numbers.

    Raises
    ------
    TypeError, ValueError
    """
    array = np.asarray(value)
    if array.dtype == object or not (np.issubdtype(array.dtype, np.number) or array.dtype == bool):
        raise TypeError(f"{label} must be numbers, not {array.dtype}")
    if np.iscomplexobj(array):
        if np.any(array.imag):
            raise TypeError(f"{label} must be real, not complex")
        array = array.real
    if array.ndim != 1:
        raise ValueError(f"{label} must be a list of n values, one per level, not an array of shape {array.shape}")
    array = array.astype(float)
    bad = np.flatnonzero(~np.isfinite(array))
    if len(bad):
        raise ValueError(f"{label} is {array[bad[0]]} at level {bad[0]}; it must be finite")
    return array

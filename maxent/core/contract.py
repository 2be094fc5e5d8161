"""The contract: what a family of charges answers, and the words in which it answers.

Everything in this package is derived from one convex function, the log-partition function
``ln Z(lam) = ln Tr exp(-sum_j lam_j Q_j)``.  A *family* is that function together with the few questions about its
charges that the verdict logic asks.  Floor: core.  This module knows no array library beyond NumPy, no names of
charges, no files.
"""

from __future__ import annotations

import enum
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np

from maxent.core.pytrees import register

__all__ = [
    "EPS", "SAFETY", "Barrier", "Evaluation", "Face", "Family", "Lowest", "Problem", "Verdict", "namespace",
]  # fmt: skip

EPS = float(np.finfo(np.float64).eps)

#: Decision tolerances are this many noise units.  Calibrated on boundary problems of known truth, where the lowest
#: level along the exposing direction is off by at most 2.6 units for dimensions 2 to 512: a factor of six is left.
SAFETY = 16.0


class Verdict(enum.Enum):
    """What was found; ``str()`` gives the lower-case word."""

    SOLVED = "solved"
    BOUNDARY = "boundary"
    UNATTAINED = "unattained"
    INFEASIBLE = "infeasible"
    INCONSISTENT = "inconsistent"
    UNFINISHED = "unfinished"

    def __str__(self) -> str:
        return self.value


def namespace(x: Any) -> Any:
    """Array namespace of `x` (array API standard): NumPy on the host, ``jax.numpy`` under a trace."""
    return x.__array_namespace__()


@register("factor")
@dataclass(frozen=True)
class Evaluation:
    """``ln Z`` and its derivatives at one point: all that one decomposition gives.

    Attributes
    ----------
    log_partition : float
        ``ln Z``; ``+inf`` outside the domain.
    values : (m,) array
        ``<Q_j> = -d ln Z / d lam_j``.
    covariance : (m, m) array
        Hessian of ``ln Z``, the Kubo-Mori covariance.
    rounding : float
        Norm of the gradient that rounding alone explains (the stop rule, for whitened charges).
    level : float
        Size of the exponent ``|lam.Q|``; sets the rounding of ``ln Z``.
    error : (m,) array or 0.0
        Error of `values` by sampling or quadrature, added to the noise in every proof.
    factor : callable or None
        ``factor()`` is an (m, p) array with ``factor @ factor.T = covariance``; its singular values resolve
        curvatures that the product loses.  Host only.
    lowest : float or None
        ``min <lam.Q>``, when it came free of charge.
    """

    log_partition: Any
    values: Any
    covariance: Any
    rounding: Any
    level: Any
    error: Any = 0.0
    factor: Callable[[], np.ndarray] | None = None
    lowest: Any = None


@dataclass(frozen=True)
class Lowest:
    """The lowest value of ``<v.Q>`` over all states.

    Attributes
    ----------
    value, highest : float
        Minimum and maximum of ``<v.Q>``; infinite values are allowed.
    error : float
        Unit of the last digit of `value` (one rounding of the solver, quadrature error, ...).
    values : (m,) ndarray or None
        All charges in one state that attains the minimum, when asked for.
    log_degeneracy : float
        Logarithm of the number of independent states that attain it.
    """

    value: float
    highest: float
    error: float
    values: np.ndarray | None = None
    log_degeneracy: float = 0.0


@dataclass(frozen=True)
class Face:
    """The states that attain the lowest value of a combination, again as a family.

    Attributes
    ----------
    family : Family
        The same charges on the ground space.
    gap : float
        Distance to the next level, relative to the largest one.
    log_dimension : float
        Logarithm of the dimension of the ground space.
    exact : bool
        True when the restriction is a selection of states and brings no rounding of its own.
    width : float
        Spread of the levels inside the ground space, relative to the largest level: rounding for the exact
        direction, of the order of its error for an approximate one.
    """

    family: Family
    gap: float
    log_dimension: float
    exact: bool = False
    width: float = 0.0


@dataclass(frozen=True)
class Barrier:
    """A self-concordant function of the multipliers that has a minimum exactly if 0 is an interior point.

    Attributes
    ----------
    gradient : (m,) ndarray
    factor : (m, p) ndarray
        ``factor @ factor.T`` is the Hessian.
    smallest : float
        Smallest argument of the logarithm; noise in the charges is amplified by its inverse.
    complexity : float
        Parameter of the barrier (number of logarithms).
    value : float
        Value of the function, for the line search.
    rounding : float
        Unit of the last digit of the arguments.
    """

    gradient: np.ndarray
    factor: np.ndarray
    smallest: float
    complexity: float
    value: float
    rounding: float


class Family:
    """m charges and the convex function ``ln Z``.

    The first group of methods is required and makes verdicts right; the second group has defaults and makes them
    decided.  A family is a frozen dataclass whose arrays are pytree leaves.
    """

    #: Lower bound of the entropy of any state; the dual below it triggers a look, it is never evidence.
    entropy_floor: float = -np.inf

    #: Whether `stiffness` and `reach` are theorems; a verdict that rests on them alone is otherwise "tested".
    stiffness_is_proved: bool = True

    # ------------------------------------------------------------------ required

    @property
    def scale(self) -> np.ndarray:
        """Size of each charge, shape (m,): operator norm, or a typical value where unbounded."""
        raise NotImplementedError

    def log_partition(self, lam: Any) -> Any:
        """``ln Z(lam)``, traceable by JAX, derivatives right to second order everywhere."""
        raise NotImplementedError

    def reference(self) -> tuple[np.ndarray, np.ndarray]:
        """Mean (m,) under the counting measure, and charges minus mean as rows (m, p) of a Euclidean space."""
        raise NotImplementedError

    def combine(self, matrix: np.ndarray, offset: np.ndarray) -> Family:
        """Family of the charges ``matrix @ Q - offset``; matrix (r, m), offset (r,)."""
        raise NotImplementedError

    def lowest(self, v: np.ndarray, *, with_values: bool = False) -> Lowest:
        """Lowest value of ``<v.Q>`` over all states."""
        raise NotImplementedError

    def state(self, lam: np.ndarray) -> Any:
        """State at `lam`; answers ``mean(operator)``, ``entropy``, ``log_partition``."""
        raise NotImplementedError

    # ------------------------------------------------------------------ optional

    def evaluate(self, lam: Any, order: int = 2) -> Evaluation:
        """``ln Z`` and derivatives up to `order`; by default from `log_partition` through JAX."""
        from maxent.core.compiled import evaluate_by_derivatives

        return evaluate_by_derivatives(self, lam)

    def start(self) -> np.ndarray:
        """Multipliers to start from, a point of the domain."""
        return np.zeros(len(self.scale))

    def traced(self) -> Family:
        """What compiled code needs of the family: a pytree of arrays, without names and places."""
        return self

    def glance(self, v: np.ndarray) -> float:
        """Cheap upper bound of ``lowest(v).value``; spares the decomposition when `v` cannot separate anything."""
        return np.inf

    def face(self, v: np.ndarray, tol: float) -> Face | None:
        """Ground space of ``v.Q`` (levels within `tol` of zero) as a family, or None where there is none."""
        return None

    def sharpen(self, v: np.ndarray) -> Iterable[np.ndarray]:
        """Directions near `v` along which `lowest` is locally largest; heuristics, always verified afterwards."""
        return ()

    def barrier(self, lam: np.ndarray) -> Barrier | None:
        """Self-concordant test of interiority at `lam`; None outside its domain or where there is none."""
        return None

    def stiffness(self, lam: np.ndarray, u: np.ndarray, *, exact: bool = True) -> float | None:
        """A number c with ``u.H(lam + t u).u >= exp(-c |t|) u.H(lam).u``, or None where no bound is known.

        Along the ray only: as a matrix inequality it is false for charges that do not commute.

        The default is the spread highest - lowest of ``u.Q`` (Bach, Electron. J. Stat. 4, 384 (2010), from memory,
        for commuting charges; for non-commuting ones tested on random and extreme cases).  With ``exact=False`` a
        cheaper upper bound may be returned.
        """
        low = self.lowest(u)
        spread = low.highest - low.value
        return float(spread) if np.isfinite(spread) else None

    def reach(self) -> Any:
        """Upper bounds (m,) of the spread of each charge, for a first look; infinite where none is known."""
        return np.full(len(self.scale), np.inf)

    def norm_needed(self, lam: np.ndarray, off: np.ndarray, unit: np.ndarray) -> float | None:
        """A number that, below 1, proves every target within `unit` of the values at `lam` plus `off` to be interior.

        Asked where `stiffness` is not a theorem; None where no proof is known.
        """
        return None

    def inside(self, lam: Any, step: Any, evaluation: Evaluation) -> Any:
        """`step` as it is where ``ln Z`` is finite everywhere; otherwise one that stays inside the domain, traceable.

        It may be another step along which the dual falls, since the family knows what bends there.
        """
        return step

    def obstacle(self, lam: np.ndarray) -> str:
        """What keeps the family itself from going further than `lam`, as a clause; empty when nothing does."""
        return ""

    def domain(self) -> np.ndarray | None:
        """Rows g of an array (c, m): ``ln Z`` is finite only for ``g.lam >= 0``, with finite slope on that edge."""
        return None


@dataclass(frozen=True)
class Problem:
    """A family whose charges are counted from their targets, with the noise of each charge.

    Everything is then a statement about the point 0.  Noise and accuracy stay in the units of the charges the user
    gave; certificates are evaluated in those units, so that tolerances are not inflated by conditioning.

    Attributes
    ----------
    family : Family
        Charges minus targets.
    noise : (m,) ndarray
        Rounding unit of each charge, ``eps (|Q_j| + |q_j|)``.
    accuracy : (m,) ndarray
        Accuracy of each target as the user stated it.
    """

    family: Family
    noise: np.ndarray
    accuracy: np.ndarray

    @classmethod
    def pose(cls, family: Family, targets: np.ndarray, accuracy: np.ndarray | float = 0.0) -> Problem:
        """Problem of giving the charges of `family` the values `targets`."""
        q = np.asarray(targets, float)
        noise = EPS * (family.scale + np.abs(q))
        return cls(family.combine(np.eye(len(q)), q), noise, np.broadcast_to(np.asarray(accuracy, float), q.shape))

    @property
    def unit(self) -> np.ndarray:
        """Uncertainty of each charge that a proof has to survive, shape (m,)."""
        return SAFETY * self.noise + self.accuracy

    @property
    def size(self) -> np.ndarray:
        """``|Q_j| + |q_j|``, the yardstick of relative residuals, shape (m,); 1 for a charge that is zero."""
        return np.where(self.noise > 0, self.noise / EPS, 1.0)

    def verify(self, v: np.ndarray) -> tuple[float, float]:
        """Margin of the claim ``<v.(Q - q)> >= 0`` for every state, and its decision tolerance.

        The only evidence there is: a margin above the tolerance proves the targets unreachable.
        """
        low = self.family.lowest(v)
        return low.value, float(np.abs(v) @ self.unit + SAFETY * low.error)

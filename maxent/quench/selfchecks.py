"""Checks of a result against routes that do not use what they check; each can fail, and prints its numbers.

Differences of ln Z and of the values on Chebyshev nodes about the multipliers need no derivative formula: with 20 nodes
first derivatives come to about 1e-12 and second ones to 1e-9.  Floor: quench.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.polynomial import chebyshev

from maxent.core.contract import EPS, Family
from maxent.families.microstates import Microstates
from maxent.quench.forces import Response
from maxent.result import Result
from maxent.solver import solve

__all__ = ["SelfCheck", "chebyshev_slopes", "check_response", "check_result"]

NODES = 20
#: Allowed differences relative to the size of what is compared: sums, first and second derivatives.
SUM, FIRST, SECOND = 1e-10, 1e-8, 1e-6


@dataclass(frozen=True)
class SelfCheck:
    """One comparison of two routes to the same number.

    Attributes
    ----------
    name : str
    difference : float
        Largest difference between the two routes, relative to the size of what is compared.
    allowed : float
    detail : str
        The two numbers that differ most.
    """

    name: str
    difference: float
    allowed: float
    detail: str

    def __bool__(self) -> bool:
        return bool(self.difference <= self.allowed)

    def __str__(self) -> str:
        word = "agrees" if self else "FAILS"
        numbers = f"relative difference {self.difference:.1e} (allowed {self.allowed:.0e})"
        return f"{self.name}: {word}, {self.detail}, {numbers}"


def chebyshev_slopes(
    function: Callable[[float], Any], at: float, radius: float, *, nodes: int = NODES
) -> tuple[np.ndarray, np.ndarray]:
    """First and second derivative of a smooth function from its values on Chebyshev nodes.

    Parameters
    ----------
    function : callable
        float to float or array.
    at, radius : float
        Nodes lie in ``[at - radius, at + radius]``; singularities (complex ones, too) must be farther away.
    nodes : int, optional

    Returns
    -------
    first, second : ndarrays
        In the shape of the values.

    Examples
    --------
    >>> first, second = chebyshev_slopes(math.exp, 0.0, 0.5)
    >>> bool(abs(first - 1) < 1e-12 and abs(second - 1) < 1e-9)
    True
    """
    x = np.cos(np.pi * (np.arange(nodes) + 0.5) / nodes)
    values = np.array([np.asarray(function(at + radius * t), float) for t in x])
    fit = chebyshev.chebfit(x, values.reshape(nodes, -1), nodes - 1)
    slopes = [np.array(chebyshev.chebval(0.0, chebyshev.chebder(fit, k))) / radius**k for k in (1, 2)]
    return slopes[0].reshape(values.shape[1:]), slopes[1].reshape(values.shape[1:])


def check_result(
    result: Result, family: Family, *, nodes: int = NODES, progress: Callable[[str], None] | None = None
) -> tuple[SelfCheck, ...]:
    """Check a solved result: entropy, values and covariance against the spectrum and against differences.

    Parameters
    ----------
    result : Result
        Solved.
    family : Family
        The one that was solved.
    nodes : int, optional
        Evaluations per charge.
    progress : callable, optional

    Returns
    -------
    tuple of SelfCheck
        Values and covariances are in units of the standard deviations.  What is allowed grows where rounding of
        ln Z drowns the differences, as in very cold states.

    Raises
    ------
    SolveError
        Not solved.
    ValueError
        A family of other charges.
    """
    result.require()
    names = result.names
    if tuple(family.names) != names:  # type: ignore[attr-defined]
        raise ValueError("the family has other charges than the result: give the one that was solved")
    lam = np.array([result.multipliers[n] for n in names])
    q = np.array([result.values[n] for n in names])
    chi = result.covariance
    spread = np.sqrt(np.maximum(np.diag(chi), 0.0))
    spectral, dual = _entropy(result.state, family), float(family.evaluate(lam, 0).log_partition + lam @ q)
    checks = [_compared("entropy, spectrum against ln Z + lam.q", spectral, dual, 1 + np.abs(lam) @ np.abs(q), SUM)]
    level = 4 * EPS * (1 + float(family.evaluate(lam, 2).level))
    noise, slopes, bends, jacobian = (
        np.zeros((2, len(q))),
        np.zeros(len(q)),
        np.zeros(len(q)),
        np.zeros((len(q), len(q))),
    )
    live = np.flatnonzero(spread > 0)
    for j in live:
        if progress is not None:
            progress(f"differences of ln Z by the multiplier of {names[j]}")
        axis = np.zeros(len(lam))
        axis[j] = 1.0
        reach = -family.lowest(axis).value - family.lowest(-axis).value
        radius = min(0.3 / spread[j], 2.0 / reach)
        # rounding of ln Z, carried by the derivatives of the polynomials at the middle of the interval
        steep = 1 / (radius * spread[j])
        noise[:, j] = level * nodes**1.5 * steep, level * nodes**2.5 * steep**2

        def along(t: float, axis: np.ndarray = axis) -> np.ndarray:
            found = family.evaluate(lam + t * axis, 1)
            return np.concatenate([[found.log_partition], found.values])

        first, second = chebyshev_slopes(along, 0.0, radius, nodes=nodes)
        slopes[j], bends[j], jacobian[:, j] = -first[0], second[0], -first[1:]
    unit = spread[live]
    inner = lambda a: a[np.ix_(live, live)] / np.outer(unit, unit)
    size = np.max((np.abs(q[live]) + unit) / unit, initial=1.0)
    first, second = np.maximum((FIRST, SECOND), noise.max(axis=1, initial=0.0)).tolist()
    return (
        *checks,
        _compared("values against differences of ln Z", slopes[live] / unit, q[live] / unit, size, first),
        _compared("covariance against differences of the values", inner(jacobian), inner(chi), size, first),
        _compared("symmetry of these differences (Maxwell)", inner(jacobian), inner(jacobian).T, size, first),
        _compared("variances against second differences of ln Z", bends[live] / unit**2, np.ones(len(live)), 1, second),
    )


def check_response(
    response: Response,
    family_at: Callable[[float], Family],
    multipliers: Mapping[str, float],
    *,
    at: float,
    radius: float,
    nodes: int = NODES,
) -> tuple[SelfCheck, ...]:
    """Check the answer to a parameter against families built, and solved again, at other values of it.

    Parameters
    ----------
    response : Response
    family_at : callable
        Value of the parameter to family.
    multipliers : dict of str to float
        At the parameter `at`.
    at, radius : float
        Nodes lie in ``[at - radius, at + radius]``.
    nodes : int, optional

    Returns
    -------
    tuple of SelfCheck
        ``d ln Z/da`` and its curvature at fixed multipliers, and the Maxwell relation: ``d lam/da`` at fixed values.
    """
    names = tuple(response.values)
    lam = np.array([multipliers[n] for n in names])
    first, second = chebyshev_slopes(lambda a: family_at(a).evaluate(lam, 0).log_partition, at, radius, nodes=nodes)
    targets = dict(zip(names, np.asarray(family_at(at).evaluate(lam, 1).values).tolist(), strict=True))

    def refit(a: float) -> list[float]:
        found = solve(family_at(a), targets).require().multipliers
        return [found[n] for n in names]

    moved, _ = chebyshev_slopes(refit, at, radius, nodes=nodes)
    known = np.array([response.multipliers[n] for n in names])
    size = lambda x: 1.0 + float(np.max(np.abs(x)))
    return (
        _compared("d ln Z/da against differences", first, response.log_partition, size(first), FIRST),
        _compared("d2 ln Z/da2 against differences", second, response.curvature, size(second), SECOND),
        _compared("d lam/da at fixed values against new fits (Maxwell)", moved, known, size(known), SECOND),
    )


def _entropy(state: Any, family: Family) -> float:
    """Entropy from the populations alone."""
    if isinstance(family, Microstates):
        p, weights = state.weights, family.degeneracy
        logs = np.log(np.where(p > 0, p, 1.0)) - (0.0 if weights is None else weights)
        return -float(p @ logs)
    p = state.populations
    p = p[p > 0]
    return -math.fsum(p * np.log(p))


def _compared(name: str, found: Any, expected: Any, size: float, allowed: float) -> SelfCheck:
    a, b = np.atleast_1d(np.asarray(found, float)), np.atleast_1d(np.asarray(expected, float))
    if not a.size:
        return SelfCheck(name, 0.0, allowed, "nothing to compare")
    difference = np.abs(a - b)
    worst = np.unravel_index(int(np.argmax(np.where(np.isnan(difference), np.inf, difference))), a.shape)
    relative = float(difference[worst] / size)
    detail = f"{a[worst]:.12g} against {b[worst]:.12g}"
    return SelfCheck(name, relative if math.isfinite(relative) else math.inf, allowed, detail)

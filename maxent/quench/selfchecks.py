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
from maxent.families.density import MatricesState
from maxent.families.microstates import Microstates
from maxent.quench.forces import Response
from maxent.result import Result
from maxent.solver import solve

__all__ = ["SelfCheck", "chebyshev_slopes", "check_response", "check_result", "compared"]

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
    found, expected : float
        The two numbers that differ most; NaN where there was nothing to compare.
    """

    name: str
    difference: float
    allowed: float
    found: float = math.nan
    expected: float = math.nan

    def __bool__(self) -> bool:
        return bool(self.difference <= self.allowed)

    @property
    def detail(self) -> str:
        """The two numbers, in words."""
        if math.isnan(self.found) and math.isnan(self.expected):
            return "nothing to compare" if self else "no numbers to compare"
        return f"{self.found:.12g} against {self.expected:.12g}"

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
    result: Result,
    family: Family,
    *,
    nodes: int = NODES,
    every: bool = True,
    progress: Callable[[str], None] | None = None,
) -> tuple[SelfCheck, ...]:
    """Check a solved result: entropy, values and covariance against the spectrum and against differences.

    Parameters
    ----------
    result : Result
        Solved.
    family : Family
        The one that was solved.
    nodes : int, optional
        Evaluations along each direction.
    every : bool, optional
        Whether differences are taken along every multiplier, which costs `nodes` evaluations for each and compares the
        whole covariance and its symmetry; otherwise along one combination of all of them.
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
    checks = [compared("entropy, spectrum against ln Z + lam.q", spectral, dual, 1 + np.abs(lam) @ np.abs(q), SUM)]
    level = 4 * EPS * (1 + float(family.evaluate(lam, 2).level))
    live = np.flatnonzero(spread > 0)
    unit = spread[live]
    axes = np.eye(len(lam))[live] / unit[:, None]
    if not every and len(live) > 1:
        # unequal weights of both signs: no charge and no pair of charges drops out
        weights = (-1.0) ** np.arange(len(live)) / np.sqrt(1.0 + np.arange(len(live)))
        axes = weights[None] @ axes
        length = float(np.sqrt(axes[0] @ chi @ axes[0]))
        axes = axes / length if length > 0 else axes
    n = len(axes)
    noise, slopes, bends, moved = np.zeros((2, n)), np.zeros(n), np.zeros(n), np.zeros((len(live), n))
    for k, axis in enumerate(axes):
        if progress is not None:
            what = f"the multiplier of {names[live[k]]}" if n == len(live) else "one combination of the multipliers"
            progress(f"differences of ln Z by {what}")
        radius = _radius(family, lam, axis)
        # rounding of ln Z, carried by the derivatives of the polynomials at the middle of the interval
        noise[:, k] = level * nodes**1.5 / radius, level * nodes**2.5 / radius**2

        def along(t: float, axis: np.ndarray = axis) -> np.ndarray:
            found = family.evaluate(lam + t * axis, 1)
            return np.concatenate([[found.log_partition], found.values])

        first, second = chebyshev_slopes(along, 0.0, radius, nodes=nodes)
        slopes[k], bends[k], moved[:, k] = -first[0], second[0], -first[1:][live] / unit
    size = np.max((np.abs(q[live]) + unit) / unit, initial=1.0)
    first, second = np.maximum((FIRST, SECOND), noise.max(axis=1, initial=0.0)).tolist()
    checks += [
        compared("values against differences of ln Z", slopes, axes @ q, size, first),
        compared(
            "covariance against differences of the values", moved, chi[live] @ axes.T / unit[:, None], size, first
        ),
    ]
    if n == len(live):
        checks.append(compared("symmetry of these differences (Maxwell)", moved, moved.T, size, first))
    return (*checks, compared("variances against second differences of ln Z", bends, np.ones(n), 1, second))


def _radius(family: Family, lam: np.ndarray, axis: np.ndarray) -> float:
    """How far differences reach along a direction in which the standard deviation is 1.

    Zeros of Z are farther away than a small share of 1, and than one over the range of the combination; where the
    charges have no upper end, ln Z ends at some multipliers.
    """
    reach = -family.lowest(axis).value - family.lowest(-axis).value
    radius = min(0.3, 2.0 / reach) if math.isfinite(reach) else 0.3
    while not all(math.isfinite(family.evaluate(lam + s * radius * axis, 0).log_partition) for s in (-2, 2)):
        radius /= 2
    return radius


def check_response(
    response: Response,
    family_at: Callable[[float], Family],
    multipliers: Mapping[str, float],
    *,
    at: float,
    radius: float,
    nodes: int = NODES,
    fits: bool = True,
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
    fits : bool, optional
        Whether problems are solved again at every node, for the Maxwell relation.

    Returns
    -------
    tuple of SelfCheck
        ``d ln Z/da`` and its curvature at fixed multipliers, and the Maxwell relation: ``d lam/da`` at fixed values.
    """
    names = tuple(response.values)
    lam = np.array([multipliers[n] for n in names])
    first, second = chebyshev_slopes(lambda a: family_at(a).evaluate(lam, 0).log_partition, at, radius, nodes=nodes)
    size = lambda x: 1.0 + float(np.max(np.abs(x)))
    checks = (
        compared("d ln Z/da against differences", first, response.log_partition, size(first), FIRST),
        compared("d2 ln Z/da2 against differences", second, response.curvature, size(second), SECOND),
    )
    if not fits:
        return checks
    targets = dict(zip(names, np.asarray(family_at(at).evaluate(lam, 1).values).tolist(), strict=True))

    def refit(a: float) -> list[float]:
        found = solve(family_at(a), targets).require().multipliers
        return [found[n] for n in names]

    moved, _ = chebyshev_slopes(refit, at, radius, nodes=nodes)
    known = np.array([response.multipliers[n] for n in names])
    name = "d lam/da at fixed values against new fits (Maxwell)"
    return (*checks, compared(name, moved, known, size(known), SECOND))


def _entropy(state: Any, family: Family) -> float:
    """Entropy of the state by itself: from its populations where it has them, else from its spectrum of modes."""
    if isinstance(family, Microstates):
        p, weights = state.weights, family.degeneracy
        logs = np.log(np.where(p > 0, p, 1.0)) - (0.0 if weights is None else weights)
        return -float(p @ logs)
    if not isinstance(state, MatricesState):
        return float(state.entropy)
    p = state.populations
    p = p[p > 0]
    return -math.fsum(p * np.log(p))


def compared(name: str, found: Any, expected: Any, size: float, allowed: float) -> SelfCheck:
    """Compare two arrays or numbers; the check fails where one of them is not finite.

    Parameters
    ----------
    name : str
    found, expected : array_like
    size, allowed : float
        The largest difference is divided by `size`, and may be `allowed`.
    """
    a, b = np.atleast_1d(np.asarray(found, float)), np.atleast_1d(np.asarray(expected, float))
    if not a.size:
        return SelfCheck(name, 0.0, allowed)
    difference = np.abs(a - b)
    worst = np.unravel_index(int(np.argmax(np.where(np.isnan(difference), np.inf, difference))), a.shape)
    relative = float(difference[worst] / size)
    return SelfCheck(name, relative if math.isfinite(relative) else math.inf, allowed, float(a[worst]), float(b[worst]))

"""Chemical potential at fixed particle number: the free energy of one more particle, ``mu = F_{N+1} - F_N``.

Where the number has no spread there is no multiplier that could be called -beta mu; the sums Z_N over the levels of
each number still give one.  Floor: quench.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping

import numpy as np
from scipy.special import logsumexp

from maxent.families.microstates import Microstates
from maxent.quench.levels import Levels
from maxent.quench.levels import levels as joint_levels
from maxent.quench.thermodynamics import Quantity
from maxent.solver import solve

__all__ = ["at_fixed_number", "chemical_potential_at_number", "log_partitions_by_number"]


def log_partitions_by_number(levels: Levels, beta: float, *, number: str = "number") -> dict[int, float]:
    """``ln Z_N(beta)`` of every particle number among the levels.

    Parameters
    ----------
    levels : Levels
        From `maxent.quench.levels.levels`, with the number among the charges.
    beta : float
    number : str, optional
        Its name.

    Returns
    -------
    dict of int to float

    Raises
    ------
    ValueError
        No such charge, or values that are no integers.
    """
    if number not in levels.values:
        raise ValueError(f"no charge {number!r} among the levels: {', '.join(map(repr, levels.names))}")
    counts = levels.values[number]
    whole = np.rint(counts)
    if np.abs(counts - whole).max() > 1e-9 * max(1.0, float(np.abs(counts).max())):
        raise ValueError(
            f"{number!r} has values that are no integers, such as {counts[np.argmax(np.abs(counts - whole))]}"
        )
    logs = -beta * levels.energies
    if levels.log_degeneracies is not None:
        logs = logs + levels.log_degeneracies
    return {int(n): float(logsumexp(logs[whole == n])) for n in np.unique(whole)}


def chemical_potential_at_number(log_partitions: Mapping[int, float], number: int, beta: float) -> float:
    """Chemical potential at fixed particle number, ``mu = (ln Z_N - ln Z_{N+1})/beta``.

    It is the free energy of adding one particle to N, ``F_{N+1} - F_N``.

    Parameters
    ----------
    log_partitions : dict of int to float
        ``ln Z_N`` by number, at least of N and N + 1.
    number : int
        N.
    beta : float
        Not zero.

    Raises
    ------
    ValueError
        A number that is not there, or beta = 0.

    Examples
    --------
    >>> round(chemical_potential_at_number({0: 0.0, 1: -1.5}, 0, 1.0), 12)  # one level, at energy 1.5
    1.5
    """
    for n in (number, number + 1):
        if n not in log_partitions:
            raise ValueError(f"mu at {number} particles needs ln Z of {number} and {number + 1}; there is none of {n}")
    if beta == 0:
        raise ValueError("at beta = 0 only beta mu is defined")
    return (log_partitions[number] - log_partitions[number + 1]) / beta


def at_fixed_number(
    energies: Callable[[int], np.ndarray | None],
    number: int,
    energy: float,
    *,
    accuracy: float = 0.0,
    name: str = "number",
) -> tuple[Quantity, Quantity]:
    """Temperature and chemical potential of the state of largest entropy among those of N particles.

    Parameters
    ----------
    energies : callable
        Particle number -> levels of the Hamiltonian with so many particles; None where there are none.
    number : int
        N.
    energy : float
        Mean energy.
    accuracy : float, optional
        How far it may be off.
    name : str, optional
        What is counted.

    Returns
    -------
    tuple of Quantity
        Inverse temperature, fitted to the energy among N particles alone, and ``mu = (ln Z_N - ln Z_{N+1})/beta``; with
        the reason where one is not defined.

    Examples
    --------
    >>> levels = {1: np.array([0.0, 1.0]), 2: np.array([1.0])}       # two levels for fermions, at 0 and 1
    >>> for quantity in at_fixed_number(levels.get, 1, 0.3):
    ...     print(quantity)
    inverse temperature at number = 1 = 0.8472978604  [beta with <energy> = 0.3 among states of number = 1]
    chemical potential at number = 1 = 1.420955794  [mu = (ln Z_N - ln Z_{N+1})/beta, N = 1]
    """
    what = f"{name} = {number}"
    names = (f"inverse temperature at {what}", f"chemical potential at {what}")
    formulas = (
        f"beta with <energy> = {energy:.8g} among states of {what}",
        f"mu = (ln Z_N - ln Z_{{N+1}})/beta, N = {number}",
    )
    undefined = lambda k, reason: Quantity(names[k], formulas[k], math.nan, math.nan, math.nan, reason)
    own, more = energies(number), energies(number + 1)
    if own is None:
        return undefined(0, f"there is no state of {what}"), undefined(1, f"there is no state of {what}")
    fit = solve(Microstates({"energy": own}), {"energy": energy}, accuracy=accuracy)
    if not fit.success:
        reason = f"the energy among states of {what}: {fit.verdict}"
        return undefined(0, reason), undefined(1, reason)
    beta, error = fit.multipliers["energy"], fit.multiplier_errors["energy"]
    if fit.redundancies:
        reason = f"all states of {what} have the same energy"
        return undefined(0, reason), undefined(1, reason)
    first = Quantity(names[0], formulas[0], beta, error)
    if more is None:
        return first, undefined(1, f"there is no state of {name} = {number + 1}")
    if abs(beta) <= error:
        return first, undefined(1, f"beta is zero within its error {error:.1g}: only beta mu is defined")
    counts = np.repeat([number, number + 1], [len(own), len(more)])
    both = joint_levels(Microstates({"energy": np.concatenate([own, more]), "number": counts}))
    mu = lambda b: chemical_potential_at_number(log_partitions_by_number(both, b), number, b)
    step = 1e-4 * abs(beta)
    slope = (mu(beta + step) - mu(beta - step)) / (2 * step)
    return first, Quantity(names[1], formulas[1], mu(beta), abs(slope) * error)

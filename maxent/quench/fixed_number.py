"""Chemical potential at fixed particle number: the free energy of one more particle, ``mu = F_{N+1} - F_N``.

Where the number has no spread there is no multiplier that could be called -beta mu; the sums Z_N over the levels of
each number still give one.  Floor: quench.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from scipy.special import logsumexp

from maxent.quench.levels import Levels

__all__ = ["chemical_potential_at_number", "log_partitions_by_number"]


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

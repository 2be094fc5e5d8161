"""Yardsticks of a finite system: times between which a plateau can be read off, and how far blocks must fluctuate.

Without them an effect of the size reads as a failure of a state.  Floor: quench.  Must not know how states come about.
"""

from __future__ import annotations

import math
from typing import NamedTuple

from maxent.quench.levels import positive

__all__ = ["Plateau", "block_bound", "plateau_window", "revival_time"]


class Plateau(NamedTuple):
    """Times between which a block can look stationary; empty where the block is too large for the ring.

    Attributes
    ----------
    start : float
        When the fastest excitations have crossed the block, ``sites/(2 v_max)``.
    end : float
        When they return around the ring, ``L/(2 v_max)``.
    """

    start: float
    end: float

    @property
    def is_open(self) -> bool:
        """Whether it leaves at least a factor of two in time."""
        return self.end >= 2 * self.start


def revival_time(length: float, speed: float) -> float:
    """Time ``L/(2 v_max)`` after which excitations that parted at one place meet on the far side of a ring.

    Parameters
    ----------
    length : float
        Length L of the ring in sites; for an open chain with a start that is the same everywhere, twice its length.
    speed : float
        Largest group velocity v_max in sites per time.

    Raises
    ------
    ValueError
        Not positive numbers.

    Examples
    --------
    >>> revival_time(12, 1.0)
    6.0
    """
    return positive("length", length) / (2.0 * positive("speed", speed))


def plateau_window(length: float, speed: float, *, sites: int = 1) -> Plateau:
    """Times in which a block of some sites can show the stationary value of the infinite system.

    Parameters
    ----------
    length, speed : float
        As in `revival_time`.
    sites : int, optional
        Sites of the block.

    Raises
    ------
    ValueError
        Not positive numbers, or a block longer than the ring.
    """
    if positive("sites", sites) > length:
        raise ValueError(f"a block of {sites} sites does not fit into {length:g}")
    return Plateau(revival_time(sites, speed), revival_time(length, speed))


def block_bound(block_dimension: int, effective_dimension: float, *, equal_gaps: int = 1) -> float:
    """Bound on the average over all times of the trace distance of a block from its dephased state.

    ``(1/2) sqrt(g d_block^2/d_eff)``; above 1 it says nothing.

    Parameters
    ----------
    block_dimension : int
        d_block, the dimension of the block.
    effective_dimension : float
        d_eff over distinct energies.
    equal_gaps : int, optional
        g, the most pairs of levels that share one gap (`Fluctuation.largest_group`); 1 where all gaps differ.

    Raises
    ------
    ValueError
        Numbers below 1.

    References
    ----------
    N. Linden, S. Popescu, A. J. Short, A. Winter, Phys. Rev. E 79, 061103 (2009); degenerate gaps: A. J. Short,
    T. C. Farrelly, New J. Phys. 14, 013063 (2012).

    Examples
    --------
    >>> block_bound(2, 100.0)
    0.1
    """
    for name, value in (("block_dimension", block_dimension), ("equal_gaps", equal_gaps)):
        if not value >= 1:
            raise ValueError(f"{name} must be at least 1, not {value!r}")
    if not effective_dimension >= 1 - 1e-9:
        raise ValueError(f"effective_dimension must be at least 1, not {effective_dimension!r}")
    return 0.5 * block_dimension * math.sqrt(equal_gaps / effective_dimension)

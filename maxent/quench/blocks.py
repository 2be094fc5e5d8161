"""Which sites form the blocks whose states are compared: neighbours, each block inside the next larger one.

Floor: quench.  Must not know states.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence

from maxent.lattice.sites import Sites

__all__ = ["block_sites", "largest_distance"]


def block_sites(sites: Sites, sizes: Sequence[int]) -> dict[int, tuple[int, ...]]:
    """Sites of a block of each size.

    Consecutive sites, the first ones of a ring and those in the middle of a chain, where these are joined by bonds or
    no bonds are known; otherwise sites along bonds, breadth first from the site that is closest to all others.

    Parameters
    ----------
    sites : Sites
    sizes : sequence of int
        Numbers of sites, at most all.

    Returns
    -------
    dict of int to tuple of int
        In the order in which the sites index the reduced state; every block begins with the sites of the smaller ones,
        or lies around them.  Sizes beyond what bonds connect are left out.

    Examples
    --------
    >>> from maxent.lattice import Chain, Lattice
    >>> block_sites(Chain(10), [1, 2, 4])
    {1: (4,), 2: (4, 5), 4: (3, 4, 5, 6)}
    >>> block_sites(Lattice.grid(3, 3), [1, 2, 4])
    {1: (4,), 2: (4, 1), 4: (4, 1, 3, 5)}
    """
    first = {b: 0 if sites.is_ring else (sites.size - b) // 2 for b in sizes}
    rows = {b: tuple(range(first[b], first[b] + b)) for b in sizes}
    joined = _joined(sites)
    longest = max(rows.values(), key=len, default=())
    if not any(joined.values()) or all(b in joined[a] for a, b in zip(longest, longest[1:], strict=False)):
        return rows
    reached = [_breadth_first(joined, s) for s in range(sites.size)]
    order = min(reached, key=lambda steps: (-len(steps), max(steps.values())))
    return {b: tuple(order)[:b] for b in sizes if b <= len(order)}


def largest_distance(sites: Sites) -> int:
    """Number of bonds on the shortest way between the two sites that are farthest apart, of those that bonds connect.

    Examples
    --------
    >>> from maxent.lattice import Lattice
    >>> largest_distance(Lattice.grid(3, 2))
    3
    """
    joined = _joined(sites)
    return max(max(_breadth_first(joined, s).values()) for s in range(sites.size))


def _joined(sites: Sites) -> dict[int, set[int]]:
    """Neighbours of every site."""
    joined: dict[int, set[int]] = {s: set() for s in range(sites.size)}
    for pairs in sites.bonds.values():
        for a, b in pairs:
            joined[a].add(b)
            joined[b].add(a)
    return joined


def _breadth_first(joined: dict[int, set[int]], start: int) -> dict[int, int]:
    """Sites that bonds connect to a start with the number of bonds between, in the order in which they are found."""
    steps, waiting = {start: 0}, deque([start])
    while waiting:
        here = waiting.popleft()
        for there in sorted(joined[here]):
            if there not in steps:
                steps[there] = steps[here] + 1
                waiting.append(there)
    return steps

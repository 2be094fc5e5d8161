"""What a lattice problem will cost, estimated from its formulas before any matrix is built.

Basis states are drawn; the block of each in the product basis is searched and divided by the powers of the symmetry
maps that lead back into it (each momentum or parity takes its share).  With block sizes b(n) of the states n

    sum over blocks b^2 = sum over states b(n) = d <b>,       sum over blocks b^3 = d <b^2>,

so that a few states suffice at any size.  Floor: app/kinds.  Must not know: targets, starts, families.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import ceil, prod
from typing import Any

from maxent import memory
from maxent.errors import ResourceError
from maxent.memory import require_memory, size_text
from maxent.text import plural

__all__ = ["Workload", "estimate"]

#: Spaces with fewer states are built at once.
SMALL = 512
#: States that are drawn.
DRAWN = 24
#: Seconds per cube of a block for its eigenvectors (real, one thread; complex numbers take four times as long), and
#: per state and map for the basis of symmetries: measured on a 16-site ring, to a factor of two or so.
CUBE, STATE = 5e-10, 6e-6
#: Decompositions of one fit whose charges do not commute, and of one comparison with a long-time state.
ROUNDS, COMPARISON = 20, 150


@dataclass(frozen=True)
class Workload:
    """Estimates of one problem.

    Parameters
    ----------
    states : int
        Number of basis states.
    largest : int
        States of the largest block that was met.
    eigenvectors : int
        Bytes of all eigenvectors.
    at_once : int
        Bytes that have to be there at once before the blocks are built: what is refused when it does not fit.
    build, fit, study : float
        Seconds for the blocks, the fit and the comparison of this size with its long-time state.
    """

    states: int
    largest: int
    eigenvectors: int
    at_once: int
    build: float
    fit: float
    study: float

    @property
    def seconds(self) -> float:
        """All of it."""
        return self.build + self.fit + self.study

    @property
    def facts(self) -> dict[str, str]:
        """Rows of the table of sizes, where the blocks have not been built."""
        parts = [f"{_time(self.build)} for the blocks"] if self.build >= 1 else []
        parts += [f"{_time(self.fit)} for the fit"] if self.fit >= 1 else []
        parts += [f"{_time(self.study)} for the comparison"] if self.study >= 1 else []
        return {
            "blocks": f"of up to about {plural(self.largest, 'state')}; estimated",
            "memory": f"about {size_text(self.eigenvectors)} for eigenvectors, up to {size_text(self.at_once)} at once",
            "time": "about " + (", ".join(parts) or "a second") + ", on one core",
        }


def estimate(charges: Mapping[str, Any], sites: Any, *, study: bool) -> Workload | None:
    """Estimate blocks, memory and time.

    Parameters
    ----------
    charges : mapping of str to OperatorSum
    sites : Sites
    study : bool
        Whether ensembles are compared with the long-time state.

    Returns
    -------
    Workload or None
        None for problems that are small.

    Raises
    ------
    ResourceError
        When the blocks would not fit into memory; found within about a second at any size.
    """
    import numpy as np

    from maxent.lattice.reach import reached

    d, m = sites.states, len(charges)
    if d < SMALL:
        return None
    operators = list(charges.values())
    maps, real = _symmetries(operators, sites)
    group = prod(order for _, order in maps)
    limit, each = memory.available_memory(), 16 * 3 * m
    drawn = np.random.default_rng(0).choice(d, DRAWN) if d < 2**40 else np.arange(DRAWN)
    sizes: dict[int, float] = {}
    for state in map(int, drawn):
        if state in sizes:
            continue
        # beyond so many states of this block alone the mean is too large for the memory
        enough = d if limit is None else int(limit * DRAWN / (each * d)) * group
        block = reached(operators, state, most=min(enough, d))
        shares = _share(maps, block, state, sites, whole=len(block) <= enough)
        for other in set(map(int, drawn)) & set(block.tolist()) if len(block) <= enough else {state}:
            sizes[other] = len(block) / shares
        total = d * sum(sizes[int(s)] for s in drawn if int(s) in sizes) / DRAWN
        if limit is not None and each * total > limit and max(sizes.values()) > 1:
            raise ResourceError(
                f"{plural(d, 'state')} in blocks of {plural(ceil(max(sizes.values())), 'state')} and more need at "
                f"least {size_text(int(each * total))} for {plural(m, 'charge')}; available {size_text(limit)}"
            )
    b = np.array([sizes[int(s)] for s in drawn])
    squares, cubes = d * float(b.mean()), d * float(np.mean(b**2))
    blocks = b.max() > 1
    width = 8 if real else 16
    unit = CUBE * cubes * (1 if real else 4) if blocks else 0.0
    at_once = int(each * squares if blocks else 0) + 8 * d * (4 * m + 6)
    if study and blocks:  # the spectrum is there while ensembles are fitted
        at_once += int(16 * (squares + 3 * b.max() ** 2))
    largest = ceil(b.max())
    require_memory(at_once, f"{plural(d, 'state')} in blocks of up to {plural(largest, 'state')} need {{need}}")
    commuting = all(not p.commutator(q).words for i, p in enumerate(operators) for q in operators[:i])
    return Workload(
        states=d,
        largest=largest,
        eigenvectors=int(width * squares) if blocks else 0,
        at_once=at_once,
        build=unit + (STATE * d * group if blocks else 0.0),
        fit=0.0 if commuting or not blocks else ROUNDS * unit,
        study=COMPARISON * unit if study else 0.0,
    )


def _symmetries(operators: list[Any], sites: Any) -> tuple[list[tuple[Any, int]], bool]:
    """Commuting unitary maps that are shared, with their orders, and whether an antiunitary one makes blocks real."""
    from maxent.lattice.symmetries import find_symmetries

    chosen: list[tuple[Any, int]] = []
    real = False
    for found in find_symmetries(operators, sites):
        moved = found.permutation
        if found.conjugating:
            real |= all(_after(p.permutation, _after(moved, p.permutation)) == moved for p, _ in chosen)
        elif all(_after(p.permutation, moved) == _after(moved, p.permutation) for p, _ in chosen):
            chosen.append((found, _order(found)))
    return chosen, real


def _after(second: tuple[int, ...], first: tuple[int, ...]) -> tuple[int, ...]:
    return tuple(second[t] for t in first)


def _order(site_map: Any) -> int:
    identity, moved, order = tuple(range(len(site_map.permutation))), site_map.permutation, 1
    while moved != identity:
        moved, order = _after(site_map.permutation, moved), order + 1
    return order * (2 if site_map.flips and order % 2 else 1)


def _share(maps: list[tuple[Any, int]], block: Any, state: int, sites: Any, *, whole: bool) -> int:
    """Into how many sectors the maps divide a block: all their powers that lead back into it."""
    import numpy as np

    total = 1
    for site_map, order in maps:
        power, image = 1, _image(site_map, state, sites)
        while whole and power < order and block[min(np.searchsorted(block, image), len(block) - 1)] != image:
            power, image = power + 1, _image(site_map, image, sites)
        total *= max(order // power, 1)
    return min(total, len(block))


def _image(site_map: Any, state: int, sites: Any) -> int:
    """Index of the basis state that a map makes of another."""
    dims = [slot.dimension for slot in sites.slots]
    digits = []
    for dim in reversed(dims):
        state, digit = divmod(state, dim)
        digits.append(digit)
    digits.reverse()
    moved = [0] * len(dims)
    for s, digit in enumerate(digits):
        turned = dims[s] - 1 - digit if site_map.flips and "Sz" in sites.slots[s].symbols else digit
        moved[site_map.permutation[s]] = turned
    image = 0
    for digit, dim in zip(moved, dims, strict=True):
        image = image * dim + digit
    return image


def _time(seconds: float) -> str:
    """Seconds for people, to one digit or two: estimates deserve no more."""
    for unit, length in (("days", 86400.0), ("h", 3600.0), ("min", 60.0)):
        if seconds >= 2 * length:
            return f"{seconds / length:.2g} {unit}"
    return f"{seconds:.2g} s"

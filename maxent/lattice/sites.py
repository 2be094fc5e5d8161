"""Where the sites lie: a ring or an open chain of spin-1/2 sites.

Floor: lattice (standard library only). Site 0 is the most significant factor of the tensor product: the
index of a basis state is row-major over the sites, as in `np.kron` and `reshape(dims)`; the local basis is
(up, down). Must not know formulas, words or matrices; what operators a site has stands in the table
`local`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

from maxent.lattice.local import SPIN_HALF, LocalOperators


class Sites(Protocol):
    """What the rest of the floor asks of any arrangement of sites."""

    @property
    def size(self) -> int:
        """Number of sites."""

    @property
    def dims(self) -> tuple[int, ...]:
        """Dimension of every site, in site order."""

    @property
    def is_ring(self) -> bool:
        """Whether the last site is a neighbour of the first."""

    @property
    def local(self) -> LocalOperators:
        """Table of the operators of one site."""

    def place(self, position: int) -> int | None:
        """Site at a position that may lie outside 0..size-1; None when there is none."""

    def reach(self, positions: Sequence[int]) -> int:
        """Count the neighbouring sites needed to cover the given sites."""


def _check_size(size: int, name: str) -> None:
    if isinstance(size, bool) or not isinstance(size, int):
        raise TypeError(f"{name}: the number of sites must be an integer, not {size!r}")
    if size < 1:
        raise ValueError(f"{name}: the number of sites must be at least 1, not {size}")


@dataclass(frozen=True)
class Ring:
    """Spin-1/2 sites 0..size-1 on a ring: positions wrap.

    Parameters
    ----------
    size : int
        Number of sites, at least 1. A nearest-neighbour sum over a ring of 2 sites runs over its bond twice.

    Raises
    ------
    TypeError, ValueError
        When `size` is no integer or below 1.

    Examples
    --------
    >>> Ring(4).dims, Ring(4).place(5)
    ((2, 2, 2, 2), 1)
    """

    size: int

    def __post_init__(self) -> None:
        """Check the size."""
        _check_size(self.size, "Ring")

    @property
    def dims(self) -> tuple[int, ...]:
        """Dimension of every site."""
        return (self.local.dimension,) * self.size

    @property
    def is_ring(self) -> bool:
        """Always True."""
        return True

    @property
    def local(self) -> LocalOperators:
        """Operators of a spin-1/2 site."""
        return SPIN_HALF

    def place(self, position: int) -> int | None:
        """Site at a position, wrapped around the ring."""
        return position % self.size

    def reach(self, positions: Sequence[int]) -> int:
        """Count the sites of the shortest arc that covers the given sites (0 for none)."""
        if not positions:
            return 0
        ordered = sorted(positions)
        gaps = [b - a for a, b in zip(ordered, ordered[1:], strict=False)]
        gaps.append(ordered[0] + self.size - ordered[-1])
        return self.size - max(gaps) + 1


@dataclass(frozen=True)
class Chain:
    """Spin-1/2 sites 0..size-1 on an open chain: positions outside it do not exist.

    Parameters
    ----------
    size : int
        Number of sites, at least 1.

    Raises
    ------
    TypeError, ValueError
        When `size` is no integer or below 1.

    Examples
    --------
    >>> Chain(4).place(3), Chain(4).place(4)
    (3, None)
    """

    size: int

    def __post_init__(self) -> None:
        """Check the size."""
        _check_size(self.size, "Chain")

    @property
    def dims(self) -> tuple[int, ...]:
        """Dimension of every site."""
        return (self.local.dimension,) * self.size

    @property
    def is_ring(self) -> bool:
        """Always False."""
        return False

    @property
    def local(self) -> LocalOperators:
        """Operators of a spin-1/2 site."""
        return SPIN_HALF

    def place(self, position: int) -> int | None:
        """Site at a position, or None outside the chain."""
        return position if 0 <= position < self.size else None

    def reach(self, positions: Sequence[int]) -> int:
        """Count the sites from the first to the last of the given sites (0 for none)."""
        return max(positions) - min(positions) + 1 if positions else 0

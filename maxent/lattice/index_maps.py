"""Symmetries as index maps: every basis state goes to one basis state times a phase.

Floor: lattice (NumPy and SciPy).  A map sends |n> to ``phases[n] |images[n]>``; with `conjugating` the amplitudes are
complex conjugated first (an antiunitary map).  Must not know sites or sectors.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

__all__ = ["EQUAL", "IndexMap"]

#: Phases, and entries relative to the largest, that differ by less are equal.
EQUAL = 1e-12
#: A map that is not the identity (times a phase) after this many repetitions is refused.
MOST_REPETITIONS = 4096


@dataclass(frozen=True, eq=False)
class IndexMap:
    """A unitary (or antiunitary) that permutes basis states up to phases.

    Parameters
    ----------
    name : str
        What messages and labels call it.
    images : (d,) integer ndarray
        A permutation of 0..d-1: state n goes to ``images[n]``.
    phases : (d,) ndarray, optional
        Numbers of modulus one; default all 1.
    conjugating : bool
        Amplitudes are complex conjugated first.
    momentum : bool
        Its label is a momentum number k with eigenvalue ``exp(-2 pi i k / order)`` even when its order is 2; other
        maps of order 2 have the labels +1 and -1.

    Raises
    ------
    ValueError
        `images` is no permutation, or phases are not of modulus one or of another length.

    Examples
    --------
    >>> swap = IndexMap("swap", np.array([0, 2, 1, 3]))
    >>> swap.order, swap.apply(np.array([0.0, 1.0, 0.0, 0.0])).tolist()
    (2, [0.0, 0.0, 1.0, 0.0])
    """

    name: str
    images: np.ndarray
    phases: np.ndarray | None = None
    conjugating: bool = False
    momentum: bool = False

    def __post_init__(self) -> None:
        """Check that it is one."""
        images = np.asarray(self.images)
        if images.ndim != 1 or images.dtype.kind not in "iu":
            raise ValueError(f"{self.name}: images must be a list of integers, not of shape {images.shape}")
        d = len(images)
        if not d or images.min() < 0 or images.max() >= d or np.any(np.bincount(images, minlength=d) != 1):
            raise ValueError(f"{self.name}: images are no permutation of 0..{d - 1}")
        if self.phases is not None:
            phases = np.asarray(self.phases)
            if phases.shape != (d,):
                raise ValueError(f"{self.name}: {d} images but phases of shape {phases.shape}")
            off = np.abs(np.abs(phases) - 1.0).max()
            if not off <= EQUAL:
                raise ValueError(f"{self.name}: phases must have modulus 1; one is off by {off:.1e}")

    @property
    def dimension(self) -> int:
        """Number of basis states d."""
        return len(self.images)

    def powers(self) -> tuple[int, complex]:
        """Smallest r > 0 with ``U^r = c``, and the number c.

        Raises
        ------
        ValueError
            When r exceeds 4096.
        """
        start = np.arange(self.dimension)
        images, phases = start, np.ones(1)
        for r in range(1, MOST_REPETITIONS + 1):
            phases = phases if self.phases is None else phases * self.phases[images]
            images = self.images[images]
            if np.array_equal(images, start) and np.all(np.abs(phases - phases[0]) <= EQUAL):
                return r, complex(phases[0])
        raise ValueError(f"{self.name} is not the identity after {MOST_REPETITIONS} repetitions")

    @cached_property
    def order(self) -> int:
        """Smallest r > 0 with ``U^r`` proportional to 1."""
        return self.powers()[0]

    def apply(self, vectors: np.ndarray) -> np.ndarray:
        """Image of one vector (d,) or of the columns of (d, k)."""
        vectors = np.asarray(vectors)
        if vectors.ndim not in (1, 2) or vectors.shape[0] != self.dimension:
            raise ValueError(f"{self.name} acts on {self.dimension} amplitudes, not on shape {vectors.shape}")
        given = vectors.conj() if self.conjugating else vectors
        if self.phases is not None:
            given = given * (self.phases if vectors.ndim == 1 else self.phases[:, None])
        out = np.empty_like(given)
        out[self.images] = given
        return out

    def matrix(self) -> Any:
        """Sparse (d, d) matrix of U, without the conjugation."""
        import scipy.sparse as sp

        data = np.ones(self.dimension) if self.phases is None else self.phases
        return sp.csr_array((data, (self.images, np.arange(self.dimension))), shape=(self.dimension,) * 2)

    def after(self, first: IndexMap, *, name: str) -> IndexMap:
        """The map that does `first` and then this one."""
        phases = None if self.phases is None and first.phases is None else _weights(self, first)
        return IndexMap(name, self.images[first.images], phases, self.conjugating != first.conjugating)

    def commutes_with(self, other: IndexMap) -> bool:
        """Whether both orders of the two maps do the same to every state."""
        if not np.array_equal(self.images[other.images], other.images[self.images]):
            return False
        one, two = _weights(self, other), _weights(other, self)
        return bool(np.all(np.abs(one - two) <= EQUAL))


def _weights(second: IndexMap, first: IndexMap) -> np.ndarray:
    """Phases of `second` after `first`."""
    inner = np.ones(1) if first.phases is None else first.phases
    inner = inner.conj() if second.conjugating else inner
    return inner if second.phases is None else inner * second.phases[first.images]

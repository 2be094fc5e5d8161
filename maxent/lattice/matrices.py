"""Matrices and matrix-free action of sums of spin-1/2 words, by bit operations on the basis index.

Floor: lattice (NumPy and SciPy). Bit size-1-k of the index n is site k, 0 for up and 1 for down. A word
flips the bits of its Sx and Sy and weighs a state by signs of its Sy and Sz:

    word |n> = amplitude * (-1)^popcount(n & signs) |n xor flips>,
    amplitude = coefficient * (1/2)^letters * i^(number of Sy).

Words with the same flips are one generalised diagonal; the values on it are computed for all n at once, and
words of equal magnitude are counted as integers first, so that entries that vanish by symmetry are exactly
zero and never stored. Must not know formulas or parameters.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any, NamedTuple

import numpy as np

from maxent.lattice.assembly import assemble
from maxent.lattice.exact import EPS

_SX, _SY = 0, 1
_CHUNK = 1 << 14
_ACTION_CHUNK = 1 << 16
_MOST_SUPPORT = 12


class _Level(NamedTuple):
    """Words of one magnitude on one generalised diagonal, as (signs, plus or minus one)."""

    magnitude: float
    masks: tuple[tuple[int, int], ...]


class _Diagonal(NamedTuple):
    """One generalised diagonal: which bits it flips, and its real and imaginary weights."""

    flips: int
    real: tuple[_Level, ...]
    imag: tuple[_Level, ...]


class BitTable:
    """A sum of words prepared for bit operations.

    Parameters
    ----------
    words : iterable of (word, complex)
        Words of spin-1/2 letters with their numeric coefficients.
    size : int
        Number of sites.
    """

    def __init__(self, words: Iterable[tuple[tuple[tuple[int, int], ...], complex]], size: int) -> None:
        found: dict[int, dict[int, complex]] = {}
        for word, coefficient in words:
            flips = signs = turns = 0
            for site, letter in word:
                bit = 1 << (size - 1 - site)
                flips |= bit if letter in (_SX, _SY) else 0
                signs |= bit if letter != _SX else 0
                turns += letter == _SY
            amplitude = coefficient * 0.5 ** len(word) * (1, 1j, -1, -1j)[turns % 4]
            group = found.setdefault(flips, {})
            group[signs] = group.get(signs, 0) + amplitude
        self.size = size
        self.diagonals = [
            _Diagonal(
                flips,
                _levels((signs, a.real) for signs, a in group.items()),
                _levels((signs, a.imag) for signs, a in group.items()),
            )
            for flips, group in sorted(found.items())
        ]
        self.is_real = not any(d.imag for d in self.diagonals)
        self.dtype = np.dtype(np.float64 if self.is_real else np.complex128)

    def matrix(self, *, limit: int | None = None) -> Any:
        """Sparse matrix of the operator.

        Parameters
        ----------
        limit : int, optional
            Bytes that may be used; default what is available.

        Returns
        -------
        scipy.sparse.csr_array, shape (2**size, 2**size)
            float64 when the operator is real, otherwise complex128; no explicit zeros, indices sorted.

        Raises
        ------
        ResourceError
            When it would not fit; nothing has been allocated then.
        """
        return assemble(
            self._rows,
            dim=1 << self.size,
            most=sum(_most_entries(d, self.size) for d in self.diagonals),
            dtype=self.dtype,
            count=len(self.diagonals),
            chunk=_CHUNK,
            scratch=64,
            what=f"2^{self.size} states need {{need}} for this operator",
            limit=limit,
        )

    def action(self, vector: np.ndarray) -> np.ndarray:
        """Operator times vector, without a matrix.

        Parameters
        ----------
        vector : real or complex, shape (2**size,) or (2**size, k)
            One state, or k states as columns.

        Returns
        -------
        float64 or complex128, same shape
        """
        dim = 1 << self.size
        result = np.zeros(vector.shape, np.result_type(vector.dtype, self.dtype))
        for first in range(0, dim, _ACTION_CHUNK):
            rows = np.arange(first, min(first + _ACTION_CHUNK, dim))
            for diagonal in self.diagonals:
                sources = rows ^ diagonal.flips
                values = _values(diagonal, sources, self.dtype)
                result[rows] += (values if vector.ndim == 1 else values[:, None]) * vector[sources]
        return result

    def _rows(self, rows: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Columns and values of every generalised diagonal in the given rows."""
        sources = rows ^ np.array([d.flips for d in self.diagonals], dtype=np.int64)[:, None]
        values = np.empty(sources.shape, self.dtype)
        for k, diagonal in enumerate(self.diagonals):
            values[k] = _values(diagonal, sources[k], self.dtype)
        return sources, values


def _levels(weights: Iterable[tuple[int, float]]) -> tuple[_Level, ...]:
    """Group signed weights by magnitude; magnitudes that differ by rounding alone are one."""
    levels: list[tuple[float, list[tuple[int, int]]]] = []
    for signs, weight in sorted(weights, key=lambda item: -abs(item[1])):
        if weight == 0:
            continue
        if not levels or levels[-1][0] - abs(weight) > 4 * EPS * levels[-1][0]:
            levels.append((abs(weight), []))
        levels[-1][1].append((signs, 1 if weight > 0 else -1))
    return tuple(_Level(magnitude, tuple(masks)) for magnitude, masks in levels)


def _values(diagonal: _Diagonal, states: np.ndarray, dtype: np.dtype) -> np.ndarray:
    """Weights of a generalised diagonal at the given source states."""
    real = _weigh(diagonal.real, states)
    if dtype.kind != "c":
        return real
    values = np.empty(states.shape, dtype)
    values.real, values.imag = real, _weigh(diagonal.imag, states)
    return values


def _weigh(levels: tuple[_Level, ...], states: np.ndarray) -> np.ndarray:
    total = np.zeros(states.shape)
    for magnitude, masks in levels:
        count = np.zeros(states.shape, np.int32)
        for signs, sign in masks:
            odd = np.bitwise_count(states & signs) & 1
            if sign > 0:
                count -= odd
            else:
                count += odd
        offset = sum(sign for _, sign in masks)
        total += magnitude * (2 * count + offset)
    return total


def _most_entries(diagonal: _Diagonal, size: int) -> int:
    """Upper bound of the stored entries of a generalised diagonal; exact when few sites decide."""
    support = 0
    for level in diagonal.real + diagonal.imag:
        for signs, _ in level.masks:
            support |= signs
    bits = [1 << k for k in range(size) if support >> k & 1]
    if len(bits) > _MOST_SUPPORT or size > 62:
        return 1 << size
    states = np.zeros(1 << len(bits), np.int64)
    for k, bit in enumerate(bits):
        states |= np.where(np.arange(len(states)) >> k & 1, bit, 0)
    kept = (_weigh(diagonal.real, states) != 0) | (_weigh(diagonal.imag, states) != 0)
    return int(np.count_nonzero(kept)) << (size - len(bits))

"""Matrices and matrix-free action of sums of words on sites of any kind.

A letter is a sum of shifts, |x + k><x| times a weight, so a word is a sum of generalised diagonals: shifts k_s of some
slots, weights that depend on the digits x_s of the index, and for an odd number of fermion operators to the right of
a slot the sign (-1)^x there. With |1> = occupied and slot 0 most significant

    |x_0 x_1 ...> = dagger(c_0)^x_0 dagger(c_1)^x_1 ... |empty>,   c_s = (-1)^(x_0 + ... + x_(s-1)) |0><1|_s.

Words with the same shifts and signs are summed in tables over the few slots that their weights depend on; sums that
cancel up to rounding are exactly zero and never stored.
Floor: lattice (NumPy and SciPy). Must not know formulas or parameters.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any, NamedTuple

import numpy as np

from maxent.lattice.assembly import assemble
from maxent.lattice.exact import EPS
from maxent.lattice.words import Slots, Word

_CHUNK = 1 << 14
_ACTION_CHUNK = 1 << 16
_LARGEST_TABLE = 1 << 12
_NOISE = 8 * EPS


class _Factor(NamedTuple):
    """Sum over words of products of one vector of weights per slot, as a function of the digits of the row."""

    slots: tuple[int, ...]
    table: np.ndarray  # shape dims of the slots
    size: np.ndarray  # the same with absolute values: what rounding is measured by


class _Diagonal(NamedTuple):
    """One generalised diagonal: row minus column, slots whose digits give a sign, and weights."""

    shift: int
    signs: tuple[int, ...]
    factors: tuple[_Factor, ...]
    products: tuple[tuple[complex, tuple[tuple[int, np.ndarray], ...]], ...]
    fraction: float  # upper bound of the part of the rows that is not empty


class WordTable:
    """A sum of words prepared for arrays.

    Parameters
    ----------
    words : iterable of (word, complex)
        Words with their numeric coefficients.
    slots : sequence of LocalOperators
        Operators of every slot.
    """

    def __init__(self, words: Iterable[tuple[Word, complex]], slots: Slots) -> None:
        self.dims = tuple(slot.dimension for slot in slots)
        strides = [1]
        for d in reversed(self.dims[1:]):
            strides.append(strides[-1] * d)
        self.strides = tuple(reversed(strides))
        self.dim = self.strides[0] * self.dims[0]
        groups: dict[tuple[tuple[tuple[int, int], ...], tuple[int, ...]], dict[tuple[int, ...], list[Any]]] = {}
        for word, coefficient in words:
            for shifts, signs, weights in _pieces(word, slots):
                support = tuple(slot for slot, _ in weights)
                groups.setdefault((shifts, signs), {}).setdefault(support, []).append((coefficient, weights))
        self.diagonals = [self._diagonal(*key, groups[key]) for key in sorted(groups)]
        self.diagonals = [d for d in self.diagonals if d.factors or d.products]
        self.is_real = not any(
            any(np.iscomplexobj(f.table) for f in d.factors)
            or any(a.imag or any(np.iscomplexobj(w) for _, w in weights) for a, weights in d.products)
            for d in self.diagonals
        )
        self.dtype = np.dtype(np.float64 if self.is_real else np.complex128)

    def matrix(self, *, limit: int | None = None) -> Any:
        """Sparse matrix of the operator.

        Parameters
        ----------
        limit : int, optional
            Bytes that may be used; default what is available.

        Returns
        -------
        scipy.sparse.csr_array, shape (d, d)
            float64 when the operator is real, otherwise complex128; no explicit zeros, indices sorted.

        Raises
        ------
        ResourceError
            When it would not fit; nothing has been allocated then.
        """
        # whole numbers: d may be far beyond what a float holds, and must be refused with its size
        most = sum((int(d.fraction * 2**40) + 1) * self.dim // 2**40 + 1 for d in self.diagonals)
        kinds = set(self.dims)
        states = f"{kinds.pop()}^{len(self.dims)}" if len(kinds) == 1 else str(self.dim)
        return assemble(
            self._rows,
            dim=self.dim,
            most=most,
            dtype=self.dtype,
            count=len(self.diagonals),
            chunk=_CHUNK,
            scratch=64 + 8 * len(self.dims),
            what=f"{states} states need {{need}} for this operator",
            limit=limit,
        )

    def action(self, vector: np.ndarray) -> np.ndarray:
        """Operator times vector, without a matrix.

        Parameters
        ----------
        vector : real or complex, shape (d,) or (d, k)
            One state, or k states as columns.

        Returns
        -------
        float64 or complex128, same shape
        """
        result = np.zeros(vector.shape, np.result_type(vector.dtype, self.dtype))
        for first in range(0, self.dim, _ACTION_CHUNK):
            rows = np.arange(first, min(first + _ACTION_CHUNK, self.dim))
            digits = self._digits(rows)
            for diagonal in self.diagonals:
                values = self._values(diagonal, digits, len(rows))
                kept = np.flatnonzero(values)
                values, sources = values[kept], rows[kept] - diagonal.shift
                result[rows[kept]] += (values if vector.ndim == 1 else values[:, None]) * vector[sources]
        return result

    # --- preparation

    def _diagonal(
        self,
        shifts: tuple[tuple[int, int], ...],
        signs: tuple[int, ...],
        groups: dict[tuple[int, ...], list[Any]],
    ) -> _Diagonal:
        factors, products = [], []
        for support, members in sorted(groups.items()):
            shape = tuple(self.dims[slot] for slot in support)
            if int(np.prod(shape, dtype=np.int64)) > _LARGEST_TABLE or len(support) > 30:
                products += members
                continue
            table, size = np.zeros(shape, np.complex128), np.zeros(shape)
            for coefficient, weights in members:
                part = np.array(coefficient, np.complex128)
                for _, weight in weights:
                    part = np.multiply.outer(part, weight)
                table += part
                size += np.abs(part)
            table.real[np.abs(table.real) <= _NOISE * size] = 0.0
            table.imag[np.abs(table.imag) <= _NOISE * size] = 0.0
            if np.any(table):
                factors.append(_Factor(support, table if np.any(table.imag) else table.real.copy(), size))
        if len(factors) == 1 and not products:
            fraction = float(np.count_nonzero(factors[0].table) / factors[0].table.size)
        else:
            fraction = float(np.prod([1 - abs(k) / self.dims[slot] for slot, k in shifts]))
        shift = sum(k * self.strides[slot] for slot, k in shifts)
        return _Diagonal(shift, signs, tuple(factors), tuple(products), fraction)

    # --- values

    def _digits(self, rows: np.ndarray) -> list[np.ndarray]:
        return [rows // stride % d for stride, d in zip(self.strides, self.dims, strict=True)]

    def _rows(self, rows: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Columns and values of every generalised diagonal in the given rows."""
        digits = self._digits(rows)
        values = np.empty((len(self.diagonals), len(rows)), self.dtype)
        for k, diagonal in enumerate(self.diagonals):
            values[k] = self._values(diagonal, digits, len(rows))
        shifts = np.array([d.shift for d in self.diagonals], np.int64)[:, None]
        return rows - shifts, values

    def _values(self, diagonal: _Diagonal, digits: Sequence[np.ndarray], count: int) -> np.ndarray:
        several = len(diagonal.factors) + len(diagonal.products) > 1
        total: np.ndarray[Any, Any] = np.zeros(count, self.dtype)
        size = np.zeros(count) if several else total
        for factor in diagonal.factors:
            index = np.zeros(count, np.int64)
            for slot in factor.slots:
                index *= self.dims[slot]
                index += digits[slot]
            total += factor.table.ravel()[index]
            if several:
                size += factor.size.ravel()[index]
        for coefficient, weights in diagonal.products:
            part = np.full(count, coefficient if self.dtype.kind == "c" else coefficient.real, self.dtype)
            for slot, weight in weights:
                part *= weight[digits[slot]]
            total += part
            if several:
                size += np.abs(part)
        if several:
            noise = _NOISE * size
            if self.dtype.kind == "c":
                total.imag[np.abs(total.imag) <= noise] = 0.0
            total.real[np.abs(total.real) <= noise] = 0.0
        if diagonal.signs:
            odd = np.zeros(count, np.int64)
            for slot in diagonal.signs:
                odd += digits[slot]
            total[odd % 2 == 1] *= -1
        return total


def _pieces(
    word: Word, slots: Slots
) -> list[tuple[tuple[tuple[int, int], ...], tuple[int, ...], tuple[tuple[int, np.ndarray], ...]]]:
    """Word as a sum of (shifts, slots that give a sign, weights by the digit of the row)."""
    odd = [slot for slot, letter in word if letter in slots[slot].odd]
    found: list[tuple[tuple[tuple[int, int], ...], tuple[tuple[int, np.ndarray], ...]]] = [((), ())]
    for slot, letter in word:
        matrix = slots[slot].matrix(letter)
        if sum(s > slot for s in odd) % 2:
            # odd letters to the right act first: they see this slot as it was
            matrix = matrix * (-1.0) ** np.arange(len(matrix))
        options = []
        for k in range(1 - len(matrix), len(matrix)):
            weight = np.zeros(len(matrix), matrix.dtype)
            weight[max(k, 0) : len(matrix) + min(k, 0)] = np.diagonal(matrix, -k)
            if np.any(weight):
                options.append((k, weight))
        found = [
            ((*shifts, (slot, k)) if k else shifts, (*weights, (slot, weight)))
            for shifts, weights in found
            for k, weight in options
        ]
    own = {slot for slot, _ in word}
    between = range(odd[0] if len(odd) % 2 == 0 else 0, odd[-1]) if odd else ()
    signs = tuple(s for s in between if s not in own and slots[s].odd and sum(o > s for o in odd) % 2)
    return [(shifts, signs, weights) for shifts, weights in found]

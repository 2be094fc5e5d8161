"""Letters of a spin s: Hermitian polynomials in Sx, Sy and Sz, with exact structure constants.

The letters are made from Sx^a Sy^b Sz^c with b = 0 or 1 and 1 <= a + b + c <= 2s: a pure power is a letter, a mixed
product is one together with its conjugate, Sx^a Sy^b Sz^c + Sz^c Sy^b Sx^a. Since Sx^2 + Sy^2 + Sz^2 = s(s+1), these
and the identity are (2s+1)^2 independent matrices; for s = 1/2 they are Sx, Sy and Sz. Letters are Hermitian, so a
sum of words is Hermitian exactly when all its coefficients are real. Products are found with matrices over the
rationals: in the basis scaled so that

    S+ |m> = (s - m) |m+1>,  S- |m> = (s + m) |m-1>,  Sz |m> = m |m>

no root appears, and the scaled basis is left again only for numeric matrices.
Floor: lattice (standard library and NumPy). Must not know sites.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from fractions import Fraction
from functools import cached_property

import numpy as np

from maxent.lattice.local import IDENTITY, Combination, Exact, LocalOperators, power_text

LARGEST = Fraction(9, 2)
_Rows = list[list[Fraction]]


class SpinOperators(LocalOperators):
    """Operators of a spin s in the basis m = s, s-1, ..., -s.

    Parameters
    ----------
    spin : Fraction
        s: a positive multiple of 1/2, at most 9/2.
    """

    def __init__(self, spin: Fraction) -> None:
        self.spin = spin
        top = int(2 * spin)
        self.exponents = sorted(
            ((a, b, n - a - b) for n in range(1, top + 1) for b in (0, 1) for a in range(n - b + 1)),
            key=lambda x: (sum(x), [-e for e in x]),
        )
        symbols: dict[str, Combination] = {
            "Sx": (((1, 0), 0),),
            "Sy": (((1, 0), 1),),
            "Sz": (((1, 0), 2),),
            "Splus": (((1, 0), 0), ((0, 1), 1)),
            "Sminus": (((1, 0), 0), ((0, -1), 1)),
        }
        if top == 1:
            symbols |= {"X": (((2, 0), 0),), "Y": (((2, 0), 1),), "Z": (((2, 0), 2),)}
        super().__init__(f"spin-{spin}", top + 1, symbols, has_hermitian_letters=True)

    def text(self, letter: int, subscript: str) -> str:
        """Power of Sx, Sy or Sz, or a mixed product with its conjugate in brackets."""
        names = [name + (f"[{subscript}]" if subscript else "") for name in ("Sx", "Sy", "Sz")]
        factors = [power_text(n, e) for n, e in zip(names, self.exponents[letter], strict=True) if e]
        if len(factors) == 1:
            return "*".join(factors[0])
        forward, back = ("*".join(x for part in order for x in part) for order in (factors, factors[::-1]))
        return f"({forward} + {back})"

    def _product(self, left: int, right: int) -> Combination:
        (a, turns), (b, more) = self._scaled[left], self._scaled[right]
        return self._expand(_times(a, b), turns + more)

    def _adjoint(self, letter: int) -> Combination:
        return (((1, 0), letter),)

    def _matrix(self, letter: int) -> np.ndarray:
        rows, turns = self._scaled[letter]
        # |m> of the scaled basis is nu_m times the unit vector, nu_(m+1)^2 / nu_m^2 = (s+m+1) / (s-m)
        squares = [Fraction(1)]
        for k in range(1, self.dimension):
            m = self.spin - k
            squares.append(squares[-1] * (self.spin - m) / (self.spin + m + 1))
        values = [
            [math.copysign(math.sqrt(x * x * squares[r] / squares[c]), x) for c, x in enumerate(row)]
            for r, row in enumerate(rows)
        ]
        matrix = np.array(values)
        return matrix * 1j if turns else matrix

    @cached_property
    def _components(self) -> tuple[_Rows, _Rows, _Rows]:
        """Sx, Sy / i and Sz in the scaled basis."""
        d, s = self.dimension, self.spin
        plus, minus, z = ([[Fraction(0)] * d for _ in range(d)] for _ in range(3))
        for k in range(d):
            m = s - k
            z[k][k] = m
            if k > 0:
                plus[k - 1][k] = s - m
            if k < d - 1:
                minus[k + 1][k] = s + m
        x = [[(p + q) / 2 for p, q in zip(a, b, strict=True)] for a, b in zip(plus, minus, strict=True)]
        y = [[(q - p) / 2 for p, q in zip(a, b, strict=True)] for a, b in zip(plus, minus, strict=True)]
        return x, y, z

    @cached_property
    def _scaled(self) -> list[tuple[_Rows, int]]:
        """Every letter as a rational matrix times i to the power given."""
        found = []
        for exponents in self.exponents:
            factors = [m for m, exponent in zip(self._components, exponents, strict=True) for _ in range(exponent)]
            letter = _product(factors)
            if sum(e > 0 for e in exponents) > 1:
                back = _product(factors[::-1])
                letter = [[x + y for x, y in zip(a, b, strict=True)] for a, b in zip(letter, back, strict=True)]
            found.append((letter, exponents[1]))
        return found

    def _expand(self, rows: _Rows, turns: int) -> Combination:
        """Write i^turns times a rational matrix as a sum over letters."""
        # rational matrices are real combinations of the letters divided by their own power of i
        result: list[tuple[tuple[Exact, Exact], int]] = []
        entries = [x for row in rows for x in row]
        for places, inverse, letters in self._inverses:
            known = [entries[p] for p in places]
            if not any(known):
                continue
            for row, letter in zip(inverse, letters, strict=True):
                value = sum((a * b for a, b in zip(row, known, strict=True) if a and b), Fraction(0))
                if value:
                    own = 0 if letter == IDENTITY else self.exponents[letter][1]
                    number: Exact = value.numerator if value.denominator == 1 else value
                    result.append((((number, 0), (0, number), (-number, 0), (0, -number))[(turns - own) % 4], letter))
        return tuple(sorted(result, key=lambda item: item[1]))

    @cached_property
    def _inverses(self) -> list[tuple[list[int], _Rows, list[int]]]:
        """For even and odd shifts of m: matrix entries, inverse of letters -> entries, letters."""
        d = self.dimension
        found = []
        for parity in (0, 1):
            places = [r * d + c for r in range(d) for c in range(d) if (r - c) % 2 == parity]
            letters = [k for k, (a, b, _) in enumerate(self.exponents) if (a + b) % 2 == parity]
            columns = [[x for row in self._scaled[k][0] for x in row] for k in letters]
            if parity == 0:
                letters = [IDENTITY, *letters]
                columns = [[x for row in _identity(d) for x in row], *columns]
            found.append((places, _invert([[column[p] for column in columns] for p in places]), letters))
        return found


def _identity(size: int) -> _Rows:
    return [[Fraction(int(r == c)) for c in range(size)] for r in range(size)]


def _product(factors: Sequence[_Rows]) -> _Rows:
    product = factors[0]
    for factor in factors[1:]:
        product = _times(product, factor)
    return product


def _times(a: _Rows, b: _Rows) -> _Rows:
    def entry(row: Sequence[Fraction], column: Sequence[Fraction]) -> Fraction:
        return sum((x * y for x, y in zip(row, column, strict=True) if x and y), Fraction(0))

    columns = list(zip(*b, strict=True))
    return [[entry(row, column) for column in columns] for row in a]


def _invert(matrix: _Rows) -> _Rows:
    """Inverse by elimination, exactly."""
    size = len(matrix)
    rows = [[*row, *unit] for row, unit in zip(matrix, _identity(size), strict=True)]
    for k in range(size):
        pivot = next(r for r in range(k, size) if rows[r][k])
        rows[k], rows[pivot] = rows[pivot], rows[k]
        lead = rows[k][k]
        rows[k] = [x / lead if x else x for x in rows[k]]
        for r in range(size):
            factor = rows[r][k]
            if r != k and factor:
                rows[r] = [x - factor * y if y else x for x, y in zip(rows[r], rows[k], strict=True)]
    return [row[size:] for row in rows]

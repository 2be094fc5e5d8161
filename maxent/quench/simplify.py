"""Null spaces made readable: few words, simple coefficients, the same on every machine.

Any basis of a space of conserved operators is as good as any other; a reader wants the one with the fewest words. Rows
are brought to echelon form by a fixed order of the words, shorter ones are subtracted where that removes words, and
coefficients that are fractions are written as such. Floor: quench. Must not know where the operators come from.
"""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction

import numpy as np

from maxent.quench.strings import fraction

__all__ = ["Word", "cleaned", "echelon", "rational", "shorten"]

#: A word: coefficient, letters from its first site that is no identity on, place of that site in the cell.
Word = tuple[Fraction | float, str, int]
#: Entries below this fraction of the largest are rounding.
ROUNDING = 1e-11


def echelon(rows: np.ndarray, groups: Sequence[tuple[np.ndarray, int]]) -> np.ndarray:
    """Reduced echelon form of independent rows, with pivots in given columns.

    Parameters
    ----------
    rows : (d, n) ndarray
        Orthonormal.
    groups : sequence of ((k,) int ndarray, int)
        Columns in order of preference, and how many pivots they shall hold; d pivots in all.

    Returns
    -------
    (d, n) ndarray
        Same row space, in the order of the pivots; each row is 1 at its own pivot and 0 at those of the others.
    """
    left = rows.copy()
    pivots: list[int] = []

    def take(column: int) -> None:
        done = len(pivots)
        best = done + int(np.argmax(np.abs(left[done:, column])))
        left[[done, best]] = left[[best, done]]
        left[done + 1 :] -= np.outer(left[done + 1 :, column] / left[done, column], left[done])
        pivots.append(column)

    for columns, count in groups:
        end = len(pivots) + count
        for column in columns:
            if len(pivots) < end and np.abs(left[len(pivots) :, column]).max() > 1e-3:
                take(int(column))
        while len(pivots) < end:  # only small entries are left: the largest one, whatever its place
            sizes = np.abs(left[len(pivots) :, columns]).max(axis=0)
            take(int(columns[np.argmax(sizes)]))
    # solved anew from the orthonormal rows, so that the elimination leaves no rounding behind
    return cleaned(np.linalg.solve(rows[:, pivots], rows))


def cleaned(rows: np.ndarray) -> np.ndarray:
    """Rows without entries that are rounding."""
    return np.where(np.abs(rows) <= ROUNDING * np.abs(rows).max(axis=-1, keepdims=True), 0.0, rows)


def shorten(row: np.ndarray, others: Sequence[np.ndarray]) -> np.ndarray:
    """Subtract multiples of other rows as long as that leaves fewer words, or as many with fewer sizes.

    Parameters
    ----------
    row : (n,) ndarray
    others : sequence of (n,) ndarray

    Returns
    -------
    (n,) ndarray
        Independent of the others if `row` was.
    """
    best, cost = row, _cost(row)
    improved = True
    while improved:
        improved = False
        for other in others:
            on = np.flatnonzero(other)
            on = on[best[on] != 0.0]
            for ratio in np.unique(np.round(best[on] / other[on], 13)):
                tried = cleaned(best - ratio * other)
                new = _cost(tried)
                if new < cost:
                    best, cost, improved = tried, new, True
                    break
    return best


def _cost(row: np.ndarray) -> tuple[int, int]:
    """Number of words, and of different sizes of their coefficients."""
    sizes = np.abs(row[row != 0.0])
    return len(sizes), len(np.unique(np.round(sizes / sizes.max(initial=1.0), 9)))


def rational(values: np.ndarray) -> list[Fraction] | None:
    """Fractions with denominators up to 10000 that the values are to 1e-10 of the largest; None if they are not.

    Parameters
    ----------
    values : (n,) ndarray
        None of them zero.
    """
    found = [fraction(float(v), 1e-10, 10**4) for v in values]
    return [f for f in found if f is not None] if None not in found else None

"""Null spaces made readable: few words, simple coefficients, the same on every machine, printed as formulas.

Any basis of a space of conserved operators is as good as any other; a reader wants the one with the fewest words. Rows
are brought to echelon form by a fixed order of the words, shorter ones are subtracted where that removes words, and
coefficients that are fractions are written as such. Floor: quench. Must not know where the operators come from.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from fractions import Fraction
from math import gcd, lcm

import numpy as np

from maxent.quench.strings import fraction
from maxent.text import number

__all__ = ["echelon", "formula_text", "rational", "shorten"]

#: A word: coefficient, letters from its first site that is no identity on, place of that site in the cell.
Word = tuple[Fraction | float, str, int]
#: Entries below this fraction of the largest are rounding.
ROUNDING = 1e-11
_LARGEST = 9999


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


def formula_text(
    words: Sequence[Word],
    *,
    cell: int,
    names: Sequence[str],
    staggered: bool,
    spin: bool,
    subscript: str,
    digits: int | None,
) -> str:
    """Formula of the sum over all translates, up to a factor that makes it short.

    Parameters
    ----------
    words : sequence of (coefficient, letters, place)
    cell : int
        Sites per unit cell.
    names : sequence of str
        Names of the sites to one value of the subscript; empty if there is one without a name.
    staggered : bool
        Whether the sign alternates from cell to cell.
    spin : bool
        Operators Sx, Sy, Sz in place of X, Y, Z.
    subscript : str
        Name of the free subscript.
    digits : int or None
        Digits of coefficients that are no fractions; None keeps all.
    """
    scaled: list[Word] = [(c * 2 ** len(a.replace("I", "")) if spin else c, a, o) for c, a, o in words]
    sites = max(len(names), 1)
    period = cell // sites
    groups: dict[tuple[str, int], dict[int, Fraction | float]] = {}
    for c, pattern, place in scaled:
        groups.setdefault((pattern, place % sites), {})[place // sites] = c
    factor = _factor([c for c, _, _ in scaled])
    parts: list[tuple[Fraction | float, str]] = []
    for pattern, first in sorted(groups, key=_reading_order):
        operators = "*".join(
            f"{'S' + a.lower() if spin else a}[{_place(subscript, s, names)}]"
            for s, a in enumerate(pattern, start=first)
            if a != "I"
        )
        for c, where in _places(groups[pattern, first], period, subscript):
            parts.append((c * factor if isinstance(c, Fraction) else c * float(factor), where + operators))
    if parts[0][0] < 0 and all(isinstance(c, Fraction) for c, _ in parts):
        parts = [(-c, a) for c, a in parts]
    text = ""
    for value, operators in parts:
        size = _size(-value if value < 0 else value, digits)
        sign = ("-" if value < 0 else "") if not text else (" - " if value < 0 else " + ")
        text += sign + (operators if size == "1" else f"{size}*{operators}")
    if not staggered:
        return text
    cells = subscript if period == 1 else f"({subscript}//{period})"
    return f"(-1)**{cells}*{text}" if len(parts) == 1 and parts[0][0] > 0 else f"(-1)**{cells}*({text})"


def _reading_order(group: tuple[str, int]) -> tuple[int, int, str, int]:
    """Wide words last, like the normal form of formulas: by number of operators, width and letters."""
    pattern, first = group
    return len(pattern.replace("I", "")), len(pattern), pattern, first


def _place(subscript: str, site: int, names: Sequence[str]) -> str:
    """What stands between the brackets of an operator: subscript, and name of the site in its cell."""
    cells, at = divmod(site, max(len(names), 1))
    return f"{subscript}{f'+{cells}' if cells else ''}{f', {names[at]}' if names else ''}"


def _places(at: dict[int, Fraction | float], cell: int, subscript: str) -> Iterator[tuple[Fraction | float, str]]:
    """Coefficients of one pattern with the factor that picks their sites in the cell."""
    values = [at.get(place, Fraction(0)) for place in range(cell)]
    if all(v == values[0] for v in values):
        yield values[0], ""
    elif cell == 2 and values[0] == -values[1]:
        yield values[0], f"(-1)**{subscript}*"
    else:
        for place, value in enumerate(values):
            if value == 0:
                continue
            if cell == 2:
                yield value, f"({subscript}%2)*" if place else f"(1-{subscript}%2)*"
            else:
                back = cell - place
                yield value, f"(1-(({subscript}{f'+{back}' if place else ''})%{cell}+{cell - 1})//{cell})*"


def _factor(values: Sequence[Fraction | float]) -> Fraction:
    """Factor that makes fractions whole numbers without a common divisor, if these stay small; else 1."""
    exact = [v for v in values if isinstance(v, Fraction)]
    if len(exact) < len(values):
        return Fraction(1)
    common = lcm(*(v.denominator for v in exact))
    factor = Fraction(common, gcd(*(int(v * common) for v in exact)))
    return factor if max(abs(v * factor) for v in exact) <= _LARGEST else 1 / abs(exact[-1])


def _size(value: Fraction | float, digits: int | None) -> str:
    if isinstance(value, Fraction):
        return str(value)
    return repr(float(value)).removesuffix(".0") if digits is None else number(value, digits)

"""Local operators written as formulas of the formula language: short coefficients, one free subscript.

Floor: quench. Must not know where the operators come from.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from fractions import Fraction
from math import gcd, lcm

from maxent.quench.fermion_words import FermionWord, fermion_words, in_reading_order, moves_particles, word_text
from maxent.quench.simplify import Word
from maxent.quench.strings import bits
from maxent.text import number

__all__ = ["fermion_formula", "formula_text"]

#: Coefficient, and operators with the factor that picks their places.
Part = tuple[Fraction | float, str]
_LARGEST = 9999


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
    parts: list[Part] = []
    for pattern, first in sorted(groups, key=_reading_order):
        operators = "*".join(
            f"{'S' + a.lower() if spin else a}[{_place(subscript, s, names)}]"
            for s, a in enumerate(pattern, start=first)
            if a != "I"
        )
        for c, where in _places(groups[pattern, first], period, subscript):
            parts.append((_times(c, factor), where + operators))
    if parts[0][0] < 0 and all(isinstance(c, Fraction) for c, _ in parts):
        parts = [(-c, a) for c, a in parts]
    text = _joined(parts, digits)
    return _staggered(text, period, subscript, len(parts) == 1 and parts[0][0] > 0) if staggered else text


def fermion_formula(
    words: Sequence[Word],
    *,
    cell: int,
    names: Sequence[str],
    species: Sequence[str],
    staggered: bool,
    subscript: str,
    digits: int | None,
) -> str:
    """Formula of the sum over all translates in c, dagger(c) and n, up to a factor that makes it short and a constant.

    Parameters
    ----------
    words : sequence of (coefficient, letters, place)
        Pauli strings of the modes, see `maxent.quench.fermion_words`.
    cell : int
        Modes per unit cell.
    names : sequence of str
        Names of the sites to one value of the subscript; empty if there is one without a name.
    species : sequence of str
        One empty name where they need none.
    staggered, subscript, digits
        As for `formula_text`.
    """
    strings = [(c, *bits(text, place)) for c, text, place in words]
    hermitian = fermion_words(strings, cell=cell, sign=-1 if staggered else 1)
    modes, sites = len(species), max(len(names), 1)
    period = cell // (modes * sites)
    factor = _factor(list(hermitian.values()))
    groups: dict[tuple[FermionWord, bool], dict[int, Fraction | float]] = {}
    for word, imaginary in in_reading_order(hermitian, modes):
        shift = word[0][0] // (modes * sites)
        first = tuple((mode - shift * modes * sites, letter) for mode, letter in word)
        groups.setdefault((first, imaginary), {})[shift] = hermitian[word, imaginary]
    numbers: list[Part] = []
    moves: list[Part] = []
    for (word, imaginary), at in groups.items():
        most = word[-1][0] // modes + 1
        where = [
            ", ".join(part for part in (_place(subscript, site, names), name) if part)
            for site in range(most)
            for name in species
        ]
        sign, operators = word_text(word, where)
        parts = moves if moves_particles(word) else numbers
        for c, chosen in _places(at, period, subscript):
            parts.append((_times(c, sign * factor), chosen + ("1j*" if imaginary else "") + operators))
    if (numbers or moves)[0][0] < 0 and all(isinstance(c, Fraction) for c, _ in numbers + moves):
        numbers, moves = ([(-c, a) for c, a in parts] for parts in (numbers, moves))
    text = _joined(numbers, digits)
    if moves:
        pairs = _joined(moves, digits) + " + h.c."
        text = f"{text} + ({pairs})" if numbers else pairs
    alone = len(numbers) == 1 and not moves and numbers[0][0] > 0
    return _staggered(text, period, subscript, alone) if staggered else text


def _times(value: Fraction | float, factor: Fraction) -> Fraction | float:
    return value * factor if isinstance(value, Fraction) else value * float(factor)


def _joined(parts: Sequence[Part], digits: int | None) -> str:
    """Coefficients and operators as a sum."""
    text = ""
    for value, operators in parts:
        size = _size(-value if value < 0 else value, digits)
        sign = ("-" if value < 0 else "") if not text else (" - " if value < 0 else " + ")
        if size.replace(".", "").isdecimal() and operators.startswith("1j*"):
            text += f"{sign}{size}j*{operators.removeprefix('1j*')}"
        else:
            text += sign + (operators if size == "1" else f"{size}*{operators}")
    return text


def _staggered(text: str, period: int, subscript: str, alone: bool) -> str:
    """Text with the sign that alternates from cell to cell."""
    cells = subscript if period == 1 else f"({subscript}//{period})"
    return f"(-1)**{cells}*{text}" if alone else f"(-1)**{cells}*({text})"


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

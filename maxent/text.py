"""Numbers, tables and combinations as text: one way of writing them for terminal, report and messages.

Floor: above families, below diagnose.  Standard library only, so that error messages cost no start-up time.
Must not know: results, files, the command line.  Nothing here computes physics; it only rounds and aligns.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence

__all__ = [
    "combination",
    "listing",
    "number",
    "plural",
    "suggestion",
    "table",
    "with_error",
]


def number(x: float | None, significant: int = 10) -> str:
    """Write a number with at most `significant` digits, without trailing zeros.

    Parameters
    ----------
    x : float or None
        The number; None and NaN become an en dash, which no reader takes for a value.
    significant : int
        Most digits shown.

    Returns
    -------
    str

    Examples
    --------
    >>> number(-0.0337264913175683), number(1.0), number(3.2e-17, 3), number(None)
    ('-0.03372649132', '1', '3.2e-17', '–')
    """
    if x is None or math.isnan(x):
        return "–"
    if math.isinf(x):
        return "inf" if x > 0 else "-inf"
    out = f"{x:.{significant}g}"
    return "0" if float(out) == 0 else out


def with_error(value: float | None, error: float | None, most: int = 12) -> str:
    """Write a value with its standard error in brackets, `1.235(12)`.

    The error is rounded by the rule of the Particle Data Group: if its three leading digits lie in 100..354
    two digits are kept, in 355..949 one, and 950..999 becomes 1000 with two digits kept.  The value is
    rounded to the same place.

    Parameters
    ----------
    value, error : float or None
        Value and standard error, same unit.  Without a usable error (None, NaN, infinite, not positive) the
        value stands alone.
    most : int
        If the rounded value would need more than this many digits, the error is far below what is worth
        reading, and the value is written alone with `most` digits.

    Returns
    -------
    str

    References
    ----------
    Particle Data Group, Review of Particle Physics, Introduction, section 5.3 (rounding of errors).

    Examples
    --------
    >>> with_error(1.2345678, 0.01234), with_error(0.827, 0.119), with_error(0.827, 0.367)
    ('1.235(12)', '0.83(12)', '0.8(4)')
    >>> with_error(1.5e-7, 2.5e-9)
    '1.500(25)e-07'
    """
    if value is None or math.isnan(value) or math.isinf(value):
        return number(value)
    if error is None or not math.isfinite(error) or error < 1e-300:
        return number(value, most)
    power = math.floor(math.log10(error))
    lead = round(error / 10.0 ** (power - 2))
    if lead >= 1000:
        lead, power = 100, power + 1
    place = power - 1 if lead < 355 else power
    units = 10 if lead >= 950 else round(error / 10.0**place)
    size = max(abs(value), error)
    shift = math.floor(math.log10(size))
    if shift - place + 1 > most:
        return number(value, most)
    if place > 0 or shift < -4:
        # one power of ten for value and error together
        top = shift if shift >= place else place
        body = f"{value / 10.0**top:.{max(top - place, 0)}f}"
        return f"{_unsigned_zero(body)}({units})e{top:+03d}"
    body = f"{value:.{-place}f}"
    return f"{_unsigned_zero(body)}({units})"


def combination(coefficients: Mapping[str, float], significant: int = 6) -> str:
    """Write a linear combination of named charges.

    Parameters
    ----------
    coefficients : mapping of name to float
        Entries below 1e-12 of the largest are left out: they are rounding.
    significant : int
        Digits of each coefficient.

    Returns
    -------
    str

    Examples
    --------
    >>> combination({"energy": 0.5, "number": -1.0, "momentum": 0.0})
    '0.5 energy - number'
    """
    out = ""
    least = 1e-12 * max(map(abs, coefficients.values()), default=0.0)
    for name, c in coefficients.items():
        if abs(c) <= least:
            continue
        size = number(abs(c), significant)
        term = name if size == "1" else f"{size} {name}"
        if out:
            out += f" - {term}" if c < 0 else f" + {term}"
        else:
            out = f"-{term}" if c < 0 else term
    return out or "0"


def table(rows: Iterable[Sequence[str]], head: Sequence[str] = (), *, right: Iterable[int] = ()) -> str:
    """Align rows of text in columns.

    Parameters
    ----------
    rows : iterable of sequences of str
        All of one length.
    head : sequence of str
        Column heads; none by default.
    right : iterable of int
        Columns set flush right (numbers).

    Returns
    -------
    str
        Lines without trailing blanks and without a final newline.

    Examples
    --------
    >>> print(table([("energy", "-4.2"), ("number", "10")], ("charge", "target"), right=[1]))
    charge  target
    energy    -4.2
    number      10
    """
    lines = [tuple(head), *map(tuple, rows)] if head else [tuple(r) for r in rows]
    if not lines:
        return ""
    flush = set(right)
    widths = [max(len(line[k]) for line in lines) for k in range(len(lines[0]))]
    return "\n".join(
        "  ".join(
            cell.rjust(width) if k in flush else cell.ljust(width)
            for k, (cell, width) in enumerate(zip(line, widths, strict=True))
        ).rstrip()
        for line in lines
    )


def plural(count: int, noun: str) -> str:
    """Write a count with its noun.

    Examples
    --------
    >>> plural(1, "charge"), plural(20000, "throw")
    ('1 charge', '20 000 throws')
    """
    return f"{count:,} {noun}{'' if count == 1 else 's'}".replace(",", " ")


def listing(words: Iterable[str], last: str = "or") -> str:
    """Write a list of words as a phrase.

    Examples
    --------
    >>> listing(["ring"]), listing(["ring", "chain", "tree"])
    ('ring', 'ring, chain or tree')
    """
    every = list(words)
    return every[0] if len(every) == 1 else f"{', '.join(every[:-1])} {last} {every[-1]}" if every else ""


def suggestion(word: str, known: Iterable[str]) -> str:
    """Return `; did you mean 'x'?` for the closest known word, or nothing.

    Examples
    --------
    >>> suggestion("enrgy", ["energy", "number"]), suggestion("zzz", ["energy"])
    ("; did you mean 'energy'?", '')
    """
    from difflib import get_close_matches

    close = get_close_matches(word, list(known), n=1, cutoff=0.6)
    return f"; did you mean '{close[0]}'?" if close else ""


def _unsigned_zero(body: str) -> str:
    return body[1:] if body.startswith("-") and float(body) == 0 else body

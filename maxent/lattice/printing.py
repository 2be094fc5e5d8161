"""Printed normal form of a sum of words, which the formula language reads back to the same sum.

Floor: lattice. Words that run through all translates with one coefficient are written once with the free
subscript; all other words are written with fixed positions. Must not know how formulas are parsed.
"""

from __future__ import annotations

from collections.abc import Collection
from functools import partial

from maxent.lattice.coefficients import Coefficient, join
from maxent.lattice.local import LocalOperators
from maxent.lattice.sites import Sites
from maxent.lattice.words import Word, Words

_SUBSCRIPTS = ("i", "j", "k", "m", "r", "site")


def word_text(word: Word, local: LocalOperators) -> str:
    """Text of a word with fixed positions; empty for the identity."""
    return "*".join(f"{local.letters[letter]}[{site}]" for site, letter in word)


def sum_text(words: Words, sites: Sites, *, taken: Collection[str]) -> str:
    """Text of a sum in normal order: the constant, then by number of operators, width and place.

    The free subscript is a name that is not `taken` by a parameter.
    """
    candidates = (*_SUBSCRIPTS, *(f"i{k}" for k in range(len(taken))))
    subscript = next(name for name in candidates if name not in taken)
    groups: dict[Word, dict[int, tuple[Word, Coefficient]]] = {}
    for word, coefficient in words.items():
        if word:
            anchor, pattern = _anchored(word, sites)
            groups.setdefault(pattern, {})[anchor] = (word, coefficient)
    parts = words[()].parts() if () in words else []
    for pattern in sorted(groups, key=lambda p: (len(p), p[-1][0], p)):
        members = groups[pattern]
        folded = _folded(pattern, members, sites, subscript)
        if folded is not None:
            shown = "*".join(
                f"{sites.local.letters[letter]}[{_shifted(subscript, offset)}]" for offset, letter in pattern
            )
            parts.append(_product_text(folded, shown))
        else:
            for _, (word, coefficient) in sorted(members.items()):
                parts.append(_product_text(coefficient, word_text(word, sites.local)))
    return join(parts)


def _anchored(word: Word, sites: Sites) -> tuple[int, Word]:
    """Anchor of a word and its pattern of (offset, letter): the same pattern for all translates."""
    if not sites.is_ring:
        anchor = word[0][0]
        return anchor, tuple((site - anchor, letter) for site, letter in word)
    choices = []
    for anchor, _ in word:
        pattern = tuple(sorted(((site - anchor) % sites.size, letter) for site, letter in word))
        choices.append((pattern[-1][0], pattern, anchor))
    _, pattern, anchor = min(choices)
    return anchor, pattern


def _folded(
    pattern: Word, members: dict[int, tuple[Word, Coefficient]], sites: Sites, subscript: str
) -> Coefficient | None:
    """Coefficient with the free subscript when all translates are there with one coefficient, else None."""
    expected = sites.size if sites.is_ring else sites.size - pattern[-1][0]
    if len(members) != expected or expected < 2:
        return None

    def text(position: int, anchor: int) -> str:
        distance = position - anchor
        if sites.is_ring:
            distance = (distance + sites.size // 2) % sites.size - sites.size // 2
        return _shifted(subscript, distance)

    relative = {c.relabelled(partial(text, anchor=anchor)) for anchor, (_, c) in members.items()}
    return relative.pop() if len(relative) == 1 else None


def _shifted(subscript: str, offset: int) -> str:
    return f"{subscript}{offset:+d}" if offset else subscript


def _product_text(coefficient: Coefficient, operators: str) -> str:
    parts = coefficient.parts()
    if len(parts) > 1:
        return f"({join(parts)})*{operators}"
    if parts == ["1"]:
        return operators
    return f"-{operators}" if parts == ["-1"] else f"{parts[0]}*{operators}"

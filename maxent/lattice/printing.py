"""Printed normal form of a sum of words, which the formula language reads back to the same sum.

Floor: lattice. Words that run through all translates with one coefficient are written once with the free subscript;
all other words are written with fixed positions. In a word creators come first and annihilators last; the sign of
reordering fermion operators goes into the coefficient. Must not know how formulas are parsed.
"""

from __future__ import annotations

from collections.abc import Callable, Collection
from functools import partial

from maxent.lattice.coefficients import Coefficient, join
from maxent.lattice.sites import Sites
from maxent.lattice.words import Word, Words, order_sign

_SUBSCRIPTS = ("i", "j", "k", "m", "r", "site")
Pattern = tuple[tuple[int, int, int], ...]
"""A word relative to its anchor: (offset of the position, slot inside the cell, letter)."""


def word_text(word: Word, sites: Sites) -> tuple[int, str]:
    """Sign and text of a word with fixed positions; the text is empty for the identity."""
    return _text(_pattern(word, sites, 0), sites, str)


def sum_text(words: Words, sites: Sites, *, taken: Collection[str], per_site: Collection[str] = ()) -> str:
    """Text of a sum in normal order: the constant, then by number of operators, width and place.

    The free subscript is a name that is not `taken` by a parameter; `per_site` names the lists that have one value
    per site of a unit cell and not one per cell.
    """
    candidates = (*_SUBSCRIPTS, *(f"i{k}" for k in range(len(taken))))
    subscript = next(name for name in candidates if name not in taken)
    groups: dict[Pattern, dict[int, tuple[Word, Coefficient]]] = {}
    for word, coefficient in words.items():
        if word:
            anchor, pattern = _anchored(word, sites)
            groups.setdefault(pattern, {})[anchor] = (word, coefficient)
    fixed = partial(_entry, sites, per_site, str)
    parts = words[()].relabelled(fixed).parts() if () in words else []
    for pattern in sorted(groups, key=lambda p: (len(p), p[-1][0], p)):
        members = groups[pattern]
        folded = _folded(pattern, members, sites, subscript, per_site)
        if folded is not None:
            parts.append(_product_text(folded, _text(pattern, sites, partial(_shifted, subscript))[1]))
            continue
        for _, (word, coefficient) in sorted(members.items()):
            sign, shown = word_text(word, sites)
            parts.append(_product_text(coefficient.relabelled(fixed).times((sign, 0)), shown))
    return join(parts)


def _pattern(word: Word, sites: Sites, anchor: int) -> Pattern:
    width = len(sites.slots) // sites.length
    found = []
    for slot, letter in word:
        position, inner = divmod(slot, width)
        offset = position - anchor
        found.append((offset % sites.length if sites.is_ring else offset, inner, letter))
    return tuple(sorted(found))


def _placed(pattern: Pattern, anchor: int, sites: Sites) -> list[tuple[int, int]]:
    """Slots and letters of a pattern at an anchor, in the order of the pattern."""
    width = len(sites.slots) // sites.length
    return [((anchor + offset) % sites.length * width + inner, letter) for offset, inner, letter in pattern]


def _anchored(word: Word, sites: Sites) -> tuple[int, Pattern]:
    """Anchor of a word and its pattern: the same pattern for all translates."""
    width = len(sites.slots) // sites.length
    if not sites.is_ring:
        anchor = word[0][0] // width
        return anchor, _pattern(word, sites, anchor)
    choices = []
    for anchor in {slot // width for slot, _ in word}:
        pattern = _pattern(word, sites, anchor)
        choices.append((pattern[-1][0], pattern, anchor))
    _, pattern, anchor = min(choices)
    return anchor, pattern


def _text(pattern: Pattern, sites: Sites, place: Callable[[int], str]) -> tuple[int, str]:
    """Text of a pattern, and the sign of its order of odd letters against the order of the pattern."""
    width = len(sites.slots) // sites.length
    shown = list(enumerate(pattern))
    shown.sort(key=lambda item: sites.slots[item[1][1]].rank(item[1][2]))
    sign = order_sign([k for k, (_, inner, x) in shown if x in sites.slots[inner].odd])
    texts = []
    for _, (offset, inner, letter) in shown:
        site, species = sites.homes[inner % width]
        words = [place(offset), sites.cell[site] if len(sites.cell) > 1 else "", species]
        texts.append(sites.slots[inner].text(letter, ", ".join(word for word in words if word)))
    return sign, "*".join(texts)


def _folded(
    pattern: Pattern,
    members: dict[int, tuple[Word, Coefficient]],
    sites: Sites,
    subscript: str,
    per_site: Collection[str],
) -> Coefficient | None:
    """Coefficient with the free subscript when all translates are there with one coefficient, else None."""
    length = sites.length
    expected = length if sites.is_ring else length - pattern[-1][0]
    if len(members) != expected or expected < 2 or (pattern[-1][0] and not sites.has_order):
        return None

    def text(position: int, anchor: int) -> str:
        distance = position - anchor
        if sites.is_ring:
            distance = (distance + length // 2) % length - length // 2
        return _shifted(subscript, distance)

    sign, _ = _text(pattern, sites, str)
    relative = set()
    for anchor, (_, coefficient) in members.items():
        own = order_sign([s for s, x in _placed(pattern, anchor, sites) if x in sites.slots[s].odd])
        turned = coefficient.times((sign * own, 0))
        relative.add(turned.relabelled(partial(_entry, sites, per_site, partial(text, anchor=anchor))))
    return relative.pop() if len(relative) == 1 else None


def _entry(sites: Sites, per_site: Collection[str], text: Callable[[int], str], name: str, place: int) -> str:
    """Subscript of an entry of a list parameter."""
    if name not in per_site:
        return text(place)
    position, member = divmod(place, len(sites.cell))
    return f"{text(position)}, {sites.cell[member]}"


def _shifted(subscript: str, offset: int) -> str:
    return f"{subscript}{offset:+d}" if offset else subscript


def _product_text(coefficient: Coefficient, operators: str) -> str:
    parts = coefficient.parts()
    if len(parts) > 1:
        return f"({join(parts)})*{operators}"
    if parts == ["1"]:
        return operators
    return f"-{operators}" if parts == ["-1"] else f"{parts[0]}*{operators}"

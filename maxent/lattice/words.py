"""Sums of local words as plain dictionaries, and their algebra.

Floor: lattice (standard library only). A word is a tuple of (site, letter) in site order, each site at most
once; a sum maps words to coefficients. The functions here add, multiply and commute such sums by the
product table of the sites. Must not know where sites lie, formulas or matrices.
"""

from __future__ import annotations

from collections.abc import Iterator

from maxent.lattice import exact
from maxent.lattice.coefficients import Coefficient
from maxent.lattice.exact import ONE, Complex
from maxent.lattice.local import IDENTITY, LocalOperators

Word = tuple[tuple[int, int], ...]
Words = dict[Word, Coefficient]


def accumulate(total: Words, more: Words) -> None:
    """Add `more` to `total` in place; words whose coefficients cancel disappear."""
    for word, coefficient in more.items():
        if word in total:
            coefficient = total[word] + coefficient
        if coefficient.is_zero:
            total.pop(word, None)
        else:
            total[word] = coefficient


def add(*sums: Words) -> Words:
    """Sum of sums."""
    total: Words = {}
    for words in sums:
        accumulate(total, words)
    return total


def scale(words: Words, coefficient: Coefficient) -> Words:
    """Sum times a coefficient."""
    scaled = {word: c * coefficient for word, c in words.items()}
    return {word: c for word, c in scaled.items() if not c.is_zero}


def negative(words: Words) -> Words:
    """Sum times -1."""
    return {word: -c for word, c in words.items()}


def adjoint(words: Words) -> Words:
    """Hermitian conjugate: letters are Hermitian and letters on different sites commute."""
    return {word: c.conjugate() for word, c in words.items()}


def multiply(left: Words, right: Words, local: LocalOperators) -> Words:
    """Product of two sums."""
    total: Words = {}
    for first, a in left.items():
        for second, b in right.items():
            product = a * b
            for factor, word in word_product(first, second, local):
                accumulate(total, {word: product.times(factor)})
    return total


def commute(left: Words, right: Words, local: LocalOperators) -> Words:
    """Commutator of two sums; words without a common site are never multiplied."""
    places = _by_site(right)
    total: Words = {}
    for first, a in left.items():
        partners = {word for site, _ in first for word in places.get(site, ())}
        for second in sorted(partners):
            product: Coefficient | None = None
            for factor, word in _word_commutator(first, second, local):
                product = a * right[second] if product is None else product
                accumulate(total, {word: product.times(factor)})
    return total


def word_product(left: Word, right: Word, local: LocalOperators) -> Iterator[tuple[Complex, Word]]:
    """Product of two words as a sum of number times word."""
    if not left or not right or left[-1][0] < right[0][0]:
        yield ONE, left + right
        return
    branches: list[tuple[Complex, dict[int, int]]] = [(ONE, dict(left))]
    for site, letter in right:
        grown = []
        for factor, letters in branches:
            if site not in letters:
                letters[site] = letter
                grown.append((factor, letters))
                continue
            for number, result in local.products[letters[site], letter]:
                changed = dict(letters)
                if result == IDENTITY:
                    del changed[site]
                else:
                    changed[site] = result
                grown.append((exact.times(factor, number), changed))
        branches = grown
    for factor, letters in branches:
        yield factor, tuple(sorted(letters.items()))


def _word_commutator(left: Word, right: Word, local: LocalOperators) -> Iterator[tuple[Complex, Word]]:
    result: dict[Word, Complex] = {}
    for factor, word in word_product(left, right, local):
        result[word] = exact.plus(result[word], factor) if word in result else factor
    for factor, word in word_product(right, left, local):
        turned = (-factor[0], -factor[1])
        result[word] = exact.plus(result[word], turned) if word in result else turned
    for word, factor in result.items():
        if factor != exact.ZERO:
            yield factor, word


def _by_site(words: Words) -> dict[int, list[Word]]:
    places: dict[int, list[Word]] = {}
    for word in words:
        for site, _ in word:
            places.setdefault(site, []).append(word)
    return places

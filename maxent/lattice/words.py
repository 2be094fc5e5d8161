"""Sums of local words as plain dictionaries, and their algebra.

Floor: lattice (standard library only). A word is a tuple of (slot, letter) in slot order, each slot at most once, and
means the product of its letters in that order; a sum maps words to coefficients. Letters of different slots commute,
except that two odd letters (one fermion operator each) anticommute. The functions here add, multiply, conjugate and
commute such sums by the product tables of the slots. Must not know where sites lie, formulas or matrices.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from maxent.lattice import exact
from maxent.lattice.coefficients import Coefficient
from maxent.lattice.exact import ONE, Complex
from maxent.lattice.local import IDENTITY, LocalOperators

Word = tuple[tuple[int, int], ...]
Words = dict[Word, Coefficient]
Slots = Sequence[LocalOperators]


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


def odd_slots(word: Word, slots: Slots) -> list[int]:
    """Slots of the odd letters of a word, in its order."""
    return [slot for slot, letter in word if letter in slots[slot].odd]


def adjoint(words: Words, slots: Slots) -> Words:
    """Hermitian conjugate."""
    total: Words = {}
    for word, coefficient in words.items():
        turned = coefficient.conjugate()
        if all(slots[slot].has_hermitian_letters for slot, _ in word):
            accumulate(total, {word: turned})
            continue
        for factor, changed in word_adjoint(word, slots):
            accumulate(total, {changed: turned.times(factor)})
    return total


def word_adjoint(word: Word, slots: Slots) -> Iterator[tuple[Complex, Word]]:
    """Conjugate of a word as a sum of number times word."""
    count = len(odd_slots(word, slots))
    sign: Complex = (-1, 0) if count % 4 in (2, 3) else ONE  # reversing the order of the odd letters
    branches: list[tuple[Complex, Word]] = [(sign, ())]
    for slot, letter in word:
        branches = [
            (exact.times(factor, number), done if result == IDENTITY else (*done, (slot, result)))
            for factor, done in branches
            for number, result in slots[slot].adjoint(letter)
        ]
    yield from branches


def unpaired(words: Words, slots: Slots) -> Word | None:
    """First word whose coefficient differs from the one in the conjugate of the sum; None when Hermitian."""
    if all(slot.has_hermitian_letters for slot in {slots[s] for word in words for s, _ in word}):
        return next((word for word, c in words.items() if not c.is_real), None)
    difference = add(words, negative(adjoint(words, slots)))
    return next((word for word in words if word in difference), None) or next(iter(difference), None)


def multiply(left: Words, right: Words, slots: Slots) -> Words:
    """Product of two sums."""
    total: Words = {}
    for first, a in left.items():
        for second, b in right.items():
            product = a * b
            for factor, word in word_product(first, second, slots):
                accumulate(total, {word: product.times(factor)})
    return total


def commute(left: Words, right: Words, slots: Slots) -> Words:
    """Commutator of two sums; words that commute because they share no slot are never multiplied."""
    places: dict[int, list[Word]] = {}
    for word in right:
        for slot, _ in word:
            places.setdefault(slot, []).append(word)
    odd = [word for word in right if len(odd_slots(word, slots)) % 2]
    total: Words = {}
    for first, a in left.items():
        partners = {word for slot, _ in first for word in places.get(slot, ())}
        if odd and len(odd_slots(first, slots)) % 2:
            partners.update(odd)
        for second in sorted(partners):
            product: Coefficient | None = None
            for factor, word in _word_commutator(first, second, slots):
                product = a * right[second] if product is None else product
                accumulate(total, {word: product.times(factor)})
    return total


def word_product(left: Word, right: Word, slots: Slots) -> Iterator[tuple[Complex, Word]]:
    """Product of two words as a sum of number times word."""
    if not left or not right or left[-1][0] < right[0][0]:
        yield ONE, left + right
        return
    branches: list[tuple[Complex, dict[int, int]]] = [(ONE, dict(left))]
    for slot, letter in right:
        local = slots[slot]
        is_odd = letter in local.odd
        grown = []
        for factor, letters in branches:
            if is_odd and sum(s > slot and x in slots[s].odd for s, x in letters.items()) % 2:
                factor = (-factor[0], -factor[1])
            if slot not in letters:
                letters[slot] = letter
                grown.append((factor, letters))
                continue
            for number, result in local.product(letters[slot], letter):
                changed = dict(letters)
                if result == IDENTITY:
                    del changed[slot]
                else:
                    changed[slot] = result
                grown.append((exact.times(factor, number), changed))
        branches = grown
    for factor, letters in branches:
        yield factor, tuple(sorted(letters.items()))


def order_sign(order: Sequence[int]) -> int:
    """Sign of the permutation that sorts the slots of odd letters: +1 or -1."""
    swaps = sum(a > b for k, a in enumerate(order) for b in order[k + 1 :])
    return -1 if swaps % 2 else 1


def _word_commutator(left: Word, right: Word, slots: Slots) -> Iterator[tuple[Complex, Word]]:
    result: dict[Word, Complex] = {}
    for factor, word in word_product(left, right, slots):
        result[word] = exact.plus(result[word], factor) if word in result else factor
    for factor, word in word_product(right, left, slots):
        turned = (-factor[0], -factor[1])
        result[word] = exact.plus(result[word], turned) if word in result else turned
    for word, factor in result.items():
        if factor != exact.ZERO:
            yield factor, word

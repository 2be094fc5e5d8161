"""From formula to canonical sum: free subscripts are summed, words are multiplied out and merged.

Floor: lattice. A summand with one free subscript is summed over all positions. On a ring positions wrap;
outside an open chain an operator is zero and an entry of a list does not exist, so what they multiply drops
out. Where a formula could be meant in two ways it is refused. Must not know matrices.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any, NoReturn

from maxent.errors import FormulaError
from maxent.lattice import words as algebra
from maxent.lattice.coefficients import UNIT, Coefficient
from maxent.lattice.evaluate import Numbers, OutsideError
from maxent.lattice.grammar import Reader, reserved_names
from maxent.lattice.nodes import Node, brackets, carriers, is_loose
from maxent.lattice.parameters import check_name, check_parameters
from maxent.lattice.sites import Sites
from maxent.lattice.terms import OperatorSum
from maxent.lattice.tokens import fail
from maxent.lattice.words import Words


def formula(
    text: str,
    sites: Sites,
    parameters: Mapping[str, Any] | None = None,
    densities: Mapping[str, str] | None = None,
    *,
    hermitian: bool = False,
) -> OperatorSum:
    """Read a formula.

    Parameters
    ----------
    text : str
        Operator in subscript notation, e.g. ``"J*Sz[i]*Sz[i+1] + h*Sx[i]"``; the language is described in
        docs/formulas.md.
    sites : Ring, Chain or Lattice
        Where the operators act.
    parameters : mapping from str to number or sequence of numbers, optional
        Values of the names in the formula; a sequence has one value per position and is used with a
        subscript.
    densities : mapping from str to str, optional
        Named formulas with one free subscript, used as ``h[i]``, ``h[i+1]``; only those that occur are read.
    hermitian : bool
        Refuse a sum that is not Hermitian.

    Returns
    -------
    OperatorSum
        Canonical sum with coefficients symbolic in the parameters.

    Raises
    ------
    FormulaError
        When the text cannot be read or is ambiguous; names the column and what was expected.
    TypeError, ValueError
        When a parameter or a density has an unusable name or value.

    Examples
    --------
    >>> from maxent.lattice import Chain, formula
    >>> str(formula("J*(Splus[i]*Sminus[i+1] + h.c.)", Chain(3), {"J": 0.5}))
    '2*J*Sx[i]*Sx[i+1] + 2*J*Sy[i]*Sy[i+1]'
    """
    taken = reserved_names(sites)
    checked = check_parameters(parameters, taken)
    for name in densities or {}:
        check_name("density", name, taken)
        if name in checked:
            raise ValueError(f"'{name}' is both a parameter and a density")
    reader = Reader(text, sites, parameters=checked, densities=frozenset(densities or {}))
    node = reader.read()
    expander = _Expander(reader, densities or {})
    try:
        words = expander.total(node)
    except FormulaError:
        raise
    except ValueError as error:
        fail(str(error), text, node.start)
    except OverflowError:
        fail("a number leaves the range of floating point", text, node.start)
    except RecursionError:
        fail("too deeply nested; split the formula", text, node.start)
    result = OperatorSum(sites, words, parameters=checked, frozen=expander.integers)
    if hermitian:
        _require_hermitian(result, node, expander)
    return result


class _Expander:
    """Carries out the sums of one formula; densities are read when first used."""

    def __init__(self, reader: Reader, densities: Mapping[str, str], path: tuple[str, ...] = ()) -> None:
        self.reader, self.sites, self.parameters = reader, reader.sites, reader.parameters
        self.slots, self.slot_numbers = reader.sites.slots, reader.sites.slot_numbers
        self.numbers = Numbers(reader)
        self.texts, self.path = densities, path
        self.open: dict[str, tuple[Node, str, _Expander]] = {}
        self.cache: dict[tuple[str, int], Words] = {}
        self.operators: dict[tuple[str, int, str], Words] = {}

    @property
    def integers(self) -> set[str]:
        """Parameters that decided positions, also in the densities used."""
        return self.reader.integers.union(*(inner.integers for _, _, inner in self.open.values()))

    def _fail(self, message: str, node: Node) -> NoReturn:
        fail(message, self.reader.text, node.start)

    # --- sums over free subscripts

    def total(self, node: Node, inside: bool = False) -> Words:
        """Sum of a whole formula: every summand over its own free subscript.

        Numbers without a subscript distribute over brackets; `inside` tells that such a number, a quotient
        or a conjugation stands around this node.
        """
        if node.kind == "sum":
            if inside:
                self._refuse_mixed(node)
            words = algebra.add(*(self.total(x, inside) for x in node.items))
            return algebra.add(words, algebra.adjoint(words, self.slots)) if node.value else words
        if node.kind == "negative":
            return algebra.negative(self.total(node.items[0], inside))
        if node.kind == "dagger":
            return algebra.adjoint(self.total(node.items[0], True), self.slots)
        if node.kind == "quotient" and not node.items[1].free:
            divisor = self.numbers.coefficient(node.items[1], {}, True)
            return algebra.scale(self.total(node.items[0], True), self.numbers.inverse(divisor, node.items[1], {}))
        if node.kind == "product":
            plain = [x for x in node.items if not x.is_operator and not x.free]
            rest = [x for x in node.items if x.is_operator or x.free]
            if len(rest) == 1:
                words = self.total(rest[0], True)
                for factor in plain:
                    words = algebra.scale(words, self.numbers.coefficient(factor, {}, False))
                return words
        return self._summand(node)

    def _summand(self, node: Node) -> Words:
        """One summand over all values of its free subscript."""
        if len(node.free) > 1:
            self._refuse_two(node)
        if not node.free:
            return self.words(node, {})
        (name,) = node.free
        if name not in node.subscripts:
            self._fail(
                f"the free subscript '{name}' stands in no bracket of this summand; close with 'for {name}'",
                node,
            )
        self._refuse_loose(node)
        total: Words = {}
        for i in range(self.sites.length):
            try:
                algebra.accumulate(total, self.words(node, {name: i}))
            except OutsideError:
                continue
        return total

    def _refuse_two(self, node: Node) -> NoReturn:
        first, second = carriers(node)
        message = f"two free subscripts '{first[0]}' and '{second[0]}' in one summand are ambiguous"
        hint = f"close with 'for {first[0]} < {second[0]}' or 'for {first[0]} != {second[0]}'"
        self._fail(f"{message}; {hint}", second[1])

    def _refuse_loose(self, node: Node) -> None:
        """Refuse a product that would, multiplied out, hold a part without the free subscript."""
        if is_loose(node):
            for part in brackets(node):
                self._refuse_mixed(part)

    def _refuse_mixed(self, node: Node) -> None:
        if not node.free:
            return
        for item in node.items:
            if not item.free:
                name = sorted(node.free)[0]
                message = f"in brackets with the free subscript '{name}' this could count once or for every {name}"
                self._fail(f"{message}; write it outside the brackets, or close with 'for {name}'", item)

    # --- operators at given positions

    def words(self, node: Node, at: Mapping[str, int]) -> Words:
        """Words of a node at given values of the free subscripts; empty where it does not fit."""
        if not node.is_operator:
            value = self.numbers.coefficient(node, at, False)
            return {} if value.is_zero else {(): value}
        kind = node.kind
        if kind == "operator":
            return self._operator(node, at)
        if kind == "density":
            place = self.sites.place(self.reader.position(node.items[0], at))
            return {} if place is None else self._density(node, place)
        if kind == "sum":
            words = algebra.add(*self._fitting(node, at))
            return algebra.add(words, algebra.adjoint(words, self.slots)) if node.value else words
        if kind == "negative":
            return algebra.negative(self.words(node.items[0], at))
        if kind == "product":
            return self._product(node, at)
        if kind == "quotient":
            words = self.words(node.items[0], at)
            if not words:
                return words
            divisor = self.numbers.coefficient(node.items[1], at, True)
            return algebra.scale(words, self.numbers.inverse(divisor, node.items[1], at))
        if kind == "power":
            base = self.words(node.items[0], at)
            words = base
            for _ in range(int(node.items[1].value[0]) - 1):
                words = algebra.multiply(words, base, self.slots)
            return words
        if kind == "dagger":
            return algebra.adjoint(self.words(node.items[0], at), self.slots)
        if kind == "pairs":
            return algebra.add(*(words for words in self._pairs(node, at)))
        left, right = (self.words(x, at) for x in node.items)
        if kind == "commutator":
            return algebra.commute(left, right, self.slots)
        return algebra.add(algebra.multiply(left, right, self.slots), algebra.multiply(right, left, self.slots))

    def _operator(self, node: Node, at: Mapping[str, int]) -> Words:
        name, member, species = node.value
        index = self.reader.position(node.items[0], at)
        site: int | None = index
        if member is not None:
            place = self.sites.place(index)
            site = None if place is None else self.sites.site(place, member)
        if site is None:
            return {}
        known = self.operators.get((name, site, species))
        if known is not None:
            return known
        slot = self.slot_numbers.get((site, species))
        symbols = None if slot is None else self.slots[slot].symbols.get(name)
        if slot is None or symbols is None:
            written = f"{name}[..., {species}]" if species else name
            self._fail(f"site {site} is a {self.sites.kind(site).name} site: it has no '{written}'", node)
        words: Words = {((slot, letter),): Coefficient.constant(factor) for factor, letter in symbols}
        self.operators[name, site, species] = words  # sums of words are never changed in place
        return words

    def _fitting(self, node: Node, at: Mapping[str, int]) -> Iterator[Words]:
        for item in node.items:
            try:
                yield self.words(item, at)
            except OutsideError:
                continue

    def _product(self, node: Node, at: Mapping[str, int]) -> Words:
        # operators first: where they do not fit, the coefficients need not exist
        words: Words = {(): UNIT}
        for item in node.items:
            if item.is_operator:
                words = algebra.multiply(words, self.words(item, at), self.slots)
                if not words:
                    return words
        for item in node.items:
            if not item.is_operator:
                words = algebra.scale(words, self.numbers.coefficient(item, at, False))
        return words

    def _pairs(self, node: Node, at: Mapping[str, int]) -> Iterator[Words]:
        for positions in self.numbers.bound(node, at):
            try:
                yield self.words(node.items[0], positions)
            except OutsideError:
                continue

    def _density(self, node: Node, place: int) -> Words:
        name = node.value
        if (name, place) not in self.cache:
            body, subscript, inner = self._open(name, node)
            try:
                self.cache[name, place] = inner.words(body, {subscript: place})
            except OutsideError:
                self.cache[name, place] = {}
            except FormulaError as error:
                raise FormulaError(f"density '{name}': {error}", error.text, error.column) from None
        return self.cache[name, place]

    def _open(self, name: str, node: Node) -> tuple[Node, str, _Expander]:
        if name not in self.open:
            if name in self.path:
                self._fail(f"density '{name}' uses itself", node)
            try:
                reader = Reader(
                    self.texts[name], self.sites, parameters=self.parameters, densities=frozenset(self.texts)
                )
                body = reader.read()
                if len(body.free) != 1:
                    fail(
                        f"a density has one free subscript, this one has {len(body.free)}",
                        reader.text,
                        body.start,
                    )
            except FormulaError as error:
                raise FormulaError(f"density '{name}': {error}", error.text, error.column) from None
            (subscript,) = body.free
            self.open[name] = (body, subscript, _Expander(reader, self.texts, (*self.path, name)))
        return self.open[name]


def _require_hermitian(result: OperatorSum, node: Node, expander: _Expander) -> None:
    """Raise for a sum that is not Hermitian, at the first summand that holds an offending word."""
    reason = result.non_hermitian_word
    if reason is None:
        return
    bad = algebra.unpaired(result.words, result.sites.slots)
    for summand in node.items if node.kind == "sum" else ():
        if bad in expander.total(summand):
            node = summand
            break
    fail(
        f"not Hermitian: the word {reason}; add '+ h.c.' or make the coefficient real",
        expander.reader.text,
        node.start,
    )

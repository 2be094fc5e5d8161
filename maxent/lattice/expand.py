"""From formula to canonical sum: free subscripts are summed, words are multiplied out and merged.

Floor: lattice. A summand with one free subscript is summed over all positions. On a ring positions wrap; outside an open
chain an operator is zero and an entry of a list does not exist, so what they multiply drops out. Where a formula could be
meant in two ways it is refused. Must not know matrices.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from typing import Any, NoReturn

import numpy as np

from maxent.errors import FormulaError
from maxent.lattice import words as algebra
from maxent.lattice.coefficients import NOTHING, UNIT, Coefficient
from maxent.lattice.exact import Complex
from maxent.lattice.grammar import Node, Reader, integer_value, reserved_names
from maxent.lattice.parameters import check_name, check_parameters, is_complex
from maxent.lattice.sites import Sites
from maxent.lattice.terms import OperatorSum
from maxent.lattice.tokens import fail
from maxent.lattice.words import Words

_MOST_POWER = 64


class _OutsideError(Exception):
    """A list entry was asked for outside the chain: the summand does not fit."""


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
        Operator in subscript notation, e.g. ``"J*Sz[i]*Sz[i+1] + h*Sx[i]"``; the language is described in docs/formulas.md.
    sites : Ring or Chain
        Where the operators act.
    parameters : mapping from str to number or sequence of numbers, optional
        Values of the names in the formula; a sequence has one value per position and is used with a subscript.
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
    words = expander.total(node)
    result = OperatorSum(sites, words, parameters=checked, frozen=expander.integers)
    if hermitian:
        _require_hermitian(result, node, expander)
    return result


def position_values(text: str, sites: Sites, parameters: Mapping[str, Any] | None = None) -> np.ndarray:
    """Values of a function of the position, such as ``"2*pi*i/L"``, at all sites.

    Parameters
    ----------
    text : str
        Number in the formula language without operators; one name that is no parameter stands for the position.
    sites : Ring or Chain
        Gives the positions 0..size-1.
    parameters : mapping from str to number or sequence of numbers, optional
        Values of the other names.

    Returns
    -------
    float64, shape (size,)

    Raises
    ------
    FormulaError
        When the text cannot be read, or its value is not real somewhere.
    """
    checked = check_parameters(parameters, reserved_names(sites))
    reader = Reader(text, sites, parameters=checked, scalar=True)
    node = reader.read()
    expander = _Expander(reader, {})
    if len(node.free) > 1:
        names = " and ".join(f"'{name}'" for name in sorted(node.free))
        fail(f"expected one position, found {names}", text, node.start)
    values = np.empty(sites.size)
    for i in range(sites.size):
        try:
            value = expander.coefficient(node, dict.fromkeys(node.free, i), True).value(checked)
        except _OutsideError:
            fail(f"a subscript leaves the chain at position {i}", text, node.start)
        except (ArithmeticError, ValueError) as error:
            if isinstance(error, FormulaError):
                raise
            fail(f"no value at position {i}: {error}", text, node.start)
        if complex(value).imag != 0 or not math.isfinite(complex(value).real):
            fail(f"expected a real number, found {value} at position {i}", text, node.start)
        values[i] = complex(value).real
    return values


class _Expander:
    """Carries out the sums of one formula; densities are read when first used."""

    def __init__(self, reader: Reader, densities: Mapping[str, str], path: tuple[str, ...] = ()) -> None:
        self.reader, self.sites, self.parameters = reader, reader.sites, reader.parameters
        self.local = reader.sites.local
        self.texts, self.path = densities, path
        self.open: dict[str, tuple[Node, str, _Expander]] = {}
        self.cache: dict[tuple[str, int], Words] = {}

    @property
    def integers(self) -> set[str]:
        """Parameters that decided positions, also in the densities used."""
        return self.reader.integers.union(*(inner.integers for _, _, inner in self.open.values()))

    def _fail(self, message: str, node: Node) -> NoReturn:
        fail(message, self.reader.text, node.start)

    # --- sums over free subscripts

    def total(self, node: Node, inside: bool = False) -> Words:
        """Sum of a whole formula: every summand over its own free subscript.

        Numbers without a subscript distribute over brackets; `inside` tells that such a number, a quotient or a conjugation
        stands around this node.
        """
        if node.kind == "sum":
            if inside:
                self._refuse_mixed(node)
            words = algebra.add(*(self.total(x, inside) for x in node.items))
            return algebra.add(words, algebra.adjoint(words)) if node.value else words
        if node.kind == "negative":
            return algebra.negative(self.total(node.items[0], inside))
        if node.kind == "dagger":
            return algebra.adjoint(self.total(node.items[0], True))
        if node.kind == "quotient" and not node.items[1].free:
            divisor = self.coefficient(node.items[1], {}, True)
            return algebra.scale(self.total(node.items[0], True), self._inverse(divisor, node.items[1], {}))
        if node.kind == "product":
            plain = [x for x in node.items if not x.is_operator and not x.free]
            rest = [x for x in node.items if x.is_operator or x.free]
            if len(rest) == 1:
                words = self.total(rest[0], True)
                for factor in plain:
                    words = algebra.scale(words, self.coefficient(factor, {}, False))
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
        for i in range(self.sites.size):
            try:
                algebra.accumulate(total, self.words(node, {name: i}))
            except _OutsideError:
                continue
        return total

    def _refuse_two(self, node: Node) -> NoReturn:
        first, second = _carriers(node)
        message = f"two free subscripts '{first[0]}' and '{second[0]}' in one summand are ambiguous"
        hint = f"close with 'for {first[0]} < {second[0]}' or 'for {first[0]} != {second[0]}'"
        self._fail(f"{message}; {hint}", second[1])

    def _refuse_loose(self, node: Node) -> None:
        """Refuse a product that would, multiplied out, hold a part without the free subscript."""
        if _is_loose(node):
            for part in _walk(node):
                if part.kind == "sum":
                    self._refuse_mixed(part)

    def _refuse_mixed(self, node: Node) -> None:
        if not node.free:
            return
        for item in node.items:
            if not item.free:
                name = sorted(node.free)[0]
                message = f"inside brackets with the free subscript '{name}' this part could count once or for every {name}"
                self._fail(f"{message}; write it outside the brackets, or close with 'for {name}'", item)

    # --- operators at given positions

    def words(self, node: Node, at: Mapping[str, int]) -> Words:
        """Words of a node at given values of the free subscripts; empty where it does not fit."""
        if not node.is_operator:
            value = self.coefficient(node, at, False)
            return {} if value.is_zero else {(): value}
        kind = node.kind
        if kind == "operator":
            place = self.sites.place(integer_value(node.items[0], at, self.reader))
            if place is None:
                return {}
            symbols = self.local.symbols[node.value]
            return {((place, letter),): Coefficient.constant(factor) for factor, letter in symbols}
        if kind == "density":
            place = self.sites.place(integer_value(node.items[0], at, self.reader))
            return {} if place is None else self._density(node, place)
        if kind == "sum":
            words = algebra.add(*self._fitting(node, at))
            return algebra.add(words, algebra.adjoint(words)) if node.value else words
        if kind == "negative":
            return algebra.negative(self.words(node.items[0], at))
        if kind == "product":
            return self._product(node, at)
        if kind == "quotient":
            words = self.words(node.items[0], at)
            if not words:
                return words
            divisor = self.coefficient(node.items[1], at, True)
            return algebra.scale(words, self._inverse(divisor, node.items[1], at))
        if kind == "power":
            base = self.words(node.items[0], at)
            words = base
            for _ in range(int(node.items[1].value[0]) - 1):
                words = algebra.multiply(words, base, self.local)
            return words
        if kind == "dagger":
            return algebra.adjoint(self.words(node.items[0], at))
        if kind == "pairs":
            return algebra.add(*(words for words in self._pairs(node, at)))
        left, right = (self.words(x, at) for x in node.items)
        if kind == "commutator":
            return algebra.commute(left, right, self.local)
        return algebra.add(
            algebra.multiply(left, right, self.local), algebra.multiply(right, left, self.local)
        )

    def _fitting(self, node: Node, at: Mapping[str, int]) -> Iterator[Words]:
        for item in node.items:
            try:
                yield self.words(item, at)
            except _OutsideError:
                continue

    def _product(self, node: Node, at: Mapping[str, int]) -> Words:
        # operators first: where they do not fit, the coefficients need not exist
        words: Words = {(): UNIT}
        for item in node.items:
            if item.is_operator:
                words = algebra.multiply(words, self.words(item, at), self.local)
                if not words:
                    return words
        for item in node.items:
            if not item.is_operator:
                words = algebra.scale(words, self.coefficient(item, at, False))
        return words

    def _pairs(self, node: Node, at: Mapping[str, int]) -> Iterator[Words]:
        for positions in self._bound(node, at):
            try:
                yield self.words(node.items[0], positions)
            except _OutsideError:
                continue

    def _bound(self, node: Node, at: Mapping[str, int]) -> Iterator[dict[str, int]]:
        names, relation = node.value
        every = range(self.sites.size)
        if len(names) == 1:
            for i in every:
                yield {**at, names[0]: i}
            return
        for i in every:
            for j in every[i + 1 :] if relation == "<" else every:
                if i != j:
                    yield {**at, names[0]: i, names[1]: j}

    def _density(self, node: Node, place: int) -> Words:
        name = node.value
        if (name, place) not in self.cache:
            body, subscript, inner = self._open(name, node)
            try:
                self.cache[name, place] = inner.words(body, {subscript: place})
            except _OutsideError:
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

    # --- numbers at given positions

    def coefficient(self, node: Node, at: Mapping[str, int], strict: bool) -> Coefficient:
        """Coefficient of a node without operators; with `strict` no part of a sum may fall outside the chain."""
        kind = node.kind
        if kind == "number":
            return Coefficient.constant(node.value)
        if kind == "position":
            return Coefficient.constant((at[node.value], 0))
        if kind == "constant":
            return Coefficient.constant((math.pi if node.value == "pi" else self.sites.size, 0))
        if kind == "parameter":
            return self._symbol(node.value, None)
        if kind == "entry":
            return self._entry(node, at)
        if kind == "sum":
            total = NOTHING
            for item in node.items:
                try:
                    total = total + self.coefficient(item, at, strict)
                except _OutsideError:
                    if strict:
                        raise
            return total + total.conjugate() if node.value else total
        if kind == "negative":
            return -self.coefficient(node.items[0], at, strict)
        if kind == "product":
            product = UNIT
            for item in node.items:
                product = product * self.coefficient(item, at, strict)
            return product
        if kind == "dagger":
            return self.coefficient(node.items[0], at, strict).conjugate()
        if kind == "pairs":
            total = NOTHING
            for positions in self._bound(node, at):
                total = total + self.coefficient(node.items[0], positions, strict)
            return total
        if kind == "commutator":
            return NOTHING
        if kind == "anticommutator":
            left, right = (self.coefficient(x, at, strict) for x in node.items)
            return (left * right).times((2, 0))
        return self._computed(node, at)

    def _symbol(self, name: str, position: int | None) -> Coefficient:
        # a complex parameter carries a phase, so that its conjugate is told apart
        return Coefficient.symbol(name, position, 1 if is_complex(self.parameters[name]) else 0)

    def _entry(self, node: Node, at: Mapping[str, int]) -> Coefficient:
        values = self.parameters[node.value]
        assert isinstance(values, tuple)
        place = self.sites.place(integer_value(node.items[0], at, self.reader))
        if place is None:
            raise _OutsideError
        if place >= len(values):
            self._fail(f"parameter '{node.value}' has {len(values)} values, none for position {place}", node)
        return self._symbol(node.value, place)

    def _computed(self, node: Node, at: Mapping[str, int]) -> Coefficient:
        items = [self.coefficient(x, at, True) for x in node.items]
        try:
            if node.kind == "function":
                return items[0].apply(node.value)
            if node.kind == "quotient":
                return items[0] * self._inverse(items[1], node.items[1], at)
            if node.kind == "power":
                return self._raised(node, items)
            return self._rounded(node, items)
        except FormulaError:
            raise
        except (ArithmeticError, ValueError) as error:
            where = "".join(f" at {name} = {i}" for name, i in at.items())
            self._fail(f"no value{where}: {error}", node)

    def _raised(self, node: Node, items: list[Coefficient]) -> Coefficient:
        exponent = items[1].number
        if (
            exponent is not None
            and items[0].number is None
            and abs(complex(*map(float, exponent))) > _MOST_POWER
        ):
            self._fail(f"the exponent of a parameter must not exceed {_MOST_POWER}", node.items[1])
        if exponent is not None and abs(float(exponent[0])) > 4096:
            self._fail("the exponent must not exceed 4096", node.items[1])
        return items[0].raised(items[1])

    def _rounded(self, node: Node, items: list[Coefficient]) -> Coefficient:
        numbers: list[Complex] = []
        for item, part in zip(items, node.items, strict=True):
            number = item.number
            if number is None or number[1] != 0:
                self._fail("'//' and '%' need real numbers without parameters", part)
            numbers.append(number)
        (a, _), (b, _) = numbers
        return Coefficient.constant((a // b if node.kind == "floor" else a % b, 0))

    def _inverse(self, divisor: Coefficient, node: Node, at: Mapping[str, int]) -> Coefficient:
        if divisor.is_zero:
            where = "".join(f" at {name} = {i}" for name, i in at.items())
            self._fail(f"division by zero{where}", node)
        return divisor.inverse()


def _walk(node: Node) -> Iterator[Node]:
    yield node
    for item in node.items:
        yield from _walk(item)


def _carriers(node: Node) -> list[tuple[str, Node]]:
    """The free subscripts in order of appearance, each with the first piece that carries it alone."""
    found: dict[str, Node] = {}
    for part in _walk(node):
        if len(part.free) == 1 and not part.free <= found.keys():
            found[next(iter(part.free))] = part
    if len(found) < 2:  # all pieces carry both, as in c[i-j]
        names = sorted(node.free)
        return [(names[0], node), (names[1], node)]
    return sorted(found.items(), key=lambda item: item[1].start)


def _is_loose(node: Node) -> bool:
    """Whether a part without any free subscript is left when the node is multiplied out."""
    if not node.free:
        return True
    if node.kind == "sum":
        return any(_is_loose(x) for x in node.items)
    if node.kind in ("product", "commutator", "anticommutator"):
        return all(_is_loose(x) for x in node.items)
    if node.kind in ("negative", "dagger", "power", "quotient"):
        return _is_loose(node.items[0]) and not any(x.free for x in node.items[1:])
    return False


def _require_hermitian(result: OperatorSum, node: Node, expander: _Expander) -> None:
    """Raise for a sum that is not Hermitian, at the first summand that holds an offending word."""
    reason = result.non_hermitian_word
    if reason is None:
        return
    bad = next(word for word, c in result.words.items() if not c.is_real)
    for summand in node.items if node.kind == "sum" else ():
        if bad in expander.total(summand):
            node = summand
            break
    fail(
        f"not Hermitian: the word {reason}; add '+ h.c.' or make the coefficient real",
        expander.reader.text,
        node.start,
    )

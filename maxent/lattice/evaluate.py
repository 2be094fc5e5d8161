"""Numbers of a formula at given positions: coefficients, and functions of the position.

Floor: lattice. An entry of a list outside an open chain does not exist: asking for it raises
`OutsideError`, which the sum around it answers by leaving the summand out. Must not know operators.
"""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Iterator, Mapping
from typing import Any, NoReturn

import numpy as np

from maxent.errors import FormulaError
from maxent.lattice.coefficients import NOTHING, UNIT, Coefficient
from maxent.lattice.exact import Complex
from maxent.lattice.grammar import Reader, reserved_names
from maxent.lattice.nodes import Node
from maxent.lattice.parameters import check_parameters, is_complex
from maxent.lattice.sites import Sites
from maxent.lattice.tokens import fail

_MOST_POWER = 64


class OutsideError(Exception):
    """A list entry was asked for outside the chain: the summand does not fit."""


def position_values(text: str, sites: Sites, parameters: Mapping[str, Any] | None = None) -> np.ndarray:
    """Values of a function of the position, such as ``"2*pi*i/L"``, at all positions.

    Parameters
    ----------
    text : str
        Number in the formula language without operators; ``i`` stands for the position.
    sites : Ring, Chain or Lattice
        Gives the positions 0..length-1.
    parameters : mapping from str to number or sequence of numbers, optional
        Values of the other names.

    Returns
    -------
    float64, shape (length,)

    Raises
    ------
    FormulaError
        When the text cannot be read, or its value is not real somewhere.
    """
    checked = check_parameters(parameters, reserved_names(sites))
    reader = Reader(text, sites, parameters=checked, scalar=True)
    node = reader.read()
    numbers = Numbers(reader)
    if len(node.free) > 1:
        names = " and ".join(f"'{name}'" for name in sorted(node.free))
        fail(f"expected one position, found {names}", text, node.start)
    # a name that no bracket binds must be the position itself: a mistyped parameter must not pass for it
    unknown = [name for name in sorted(node.free - {"i"}) if not re.search(rf"\[[^\]]*\b{name}\b", text)]
    if unknown:
        known = sorted({"i", "L", "pi", *checked})
        close = difflib.get_close_matches(unknown[0], known, n=1)
        hint = f"; did you mean '{close[0]}'?" if close else "; the position is 'i'"
        fail(f"unknown symbol '{unknown[0]}'{hint}", text, max(text.find(unknown[0]), 0) + node.start)
    values = np.empty(sites.length)
    for i in range(sites.length):
        try:
            value = numbers.coefficient(node, dict.fromkeys(node.free, i), True).value(checked)
        except OutsideError:
            fail(f"a subscript leaves the chain at position {i}", text, node.start)
        except (ArithmeticError, ValueError) as error:
            if isinstance(error, FormulaError):
                raise
            fail(f"no value at position {i}: {error}", text, node.start)
        if complex(value).imag != 0 or not math.isfinite(complex(value).real):
            fail(f"expected a real number, found {value} at position {i}", text, node.start)
        values[i] = complex(value).real
    return values


class Numbers:
    """Evaluates the nodes without operators of one formula.

    Parameters
    ----------
    reader : Reader
        Has read the formula; gives text, sites and parameters.
    """

    def __init__(self, reader: Reader) -> None:
        self.reader, self.sites, self.parameters = reader, reader.sites, reader.parameters

    def _fail(self, message: str, node: Node) -> NoReturn:
        fail(message, self.reader.text, node.start)

    def bound(self, node: Node, at: Mapping[str, int]) -> Iterator[dict[str, int]]:
        """Positions a `pairs` node runs over, added to those given."""
        names, relation, bonds = node.value
        if relation == "<>":
            chosen = self.sites.bonds.values() if bonds is None else [self.sites.bonds[bonds]]
            for pairs in chosen:
                for a, b in pairs:
                    yield {**at, names[0]: a, names[1]: b}
            return
        every = range(self.sites.length)
        if len(names) == 1:
            for i in every:
                yield {**at, names[0]: i}
            return
        for i in every:
            for j in every[i + 1 :] if relation == "<" else every:
                if i != j:
                    yield {**at, names[0]: i, names[1]: j}

    def coefficient(self, node: Node, at: Mapping[str, int], strict: bool) -> Coefficient:
        """Coefficient of a node without operators; with `strict` no part may lie outside the chain."""
        kind = node.kind
        if kind == "number":
            return Coefficient.constant(node.value)
        if kind == "position":
            return Coefficient.constant((at[node.value], 0))
        if kind == "constant":
            return Coefficient.constant((math.pi if node.value == "pi" else self.sites.length, 0))
        if kind == "parameter":
            return self._symbol(node.value, None)
        if kind == "entry":
            return self._entry(node, at)
        if kind == "sum":
            total = NOTHING
            for item in node.items:
                try:
                    total = total + self.coefficient(item, at, strict)
                except OutsideError:
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
            for positions in self.bound(node, at):
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
        name, member, per_site = node.value
        values = self.parameters[name]
        assert isinstance(values, tuple)
        place: int | None = self.reader.position(node.items[0], at)
        if not per_site or member is not None:
            place = self.sites.place(self.reader.position(node.items[0], at))
        if place is None:
            raise OutsideError
        if per_site and member is not None:
            place = self.sites.site(place, member)
        if place >= len(values):
            self._fail(f"parameter '{name}' has {len(values)} values, none for position {place}", node)
        return self._symbol(name, place)

    def _computed(self, node: Node, at: Mapping[str, int]) -> Coefficient:
        items = [self.coefficient(x, at, True) for x in node.items]
        try:
            if node.kind == "function":
                return items[0].apply(node.value)
            if node.kind == "quotient":
                return items[0] * self.inverse(items[1], node.items[1], at)
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
        if exponent is not None and items[0].number is None and abs(complex(*map(float, exponent))) > _MOST_POWER:
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

    def inverse(self, divisor: Coefficient, node: Node, at: Mapping[str, int]) -> Coefficient:
        """Reciprocal; a zero is an error at the place of the divisor."""
        if divisor.is_zero:
            where = "".join(f" at {name} = {i}" for name, i in at.items())
            self._fail(f"division by zero{where}", node)
        return divisor.inverse()

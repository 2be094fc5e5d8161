"""Pieces of a formula that has been read: the tree between grammar and expansion.

Floor: lattice. A `Node` knows whether it is an operator and which free subscripts it carries; the functions
here answer questions of structure. Must not know text beyond the places it keeps for messages, nor words or
matrices.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from maxent.lattice.coefficients import Value
from maxent.lattice.tokens import fail


@dataclass(frozen=True)
class Node:
    """One piece of a formula.

    Attributes
    ----------
    kind : str
        number, position, parameter, entry, operator, density, sum, product, negative, quotient, power,
        floor, modulo, function, dagger, commutator, anticommutator, pairs.
    start : int
        Place in the text, counted from 0.
    value : object
        The number, the name, whether a sum ends in h.c., (names, relation, bonds) of `pairs`, (name, member of the
        cell, species) of an operator, (name, member of the cell, whether per site) of an entry.
    items : tuple of Node
        The parts.
    free : frozenset of str
        Free subscripts in it.
    subscripts : frozenset of str
        Those of them that stand in a subscript bracket.
    is_operator : bool
        Whether it holds an operator.
    """

    kind: str
    start: int
    value: Any = None
    items: tuple[Node, ...] = ()
    free: frozenset[str] = frozenset()
    subscripts: frozenset[str] = frozenset()
    is_operator: bool = False


def joined(kind: str, start: int, items: list[Node], value: Any = None) -> Node:
    """Make a node from parts, with what it inherits from them."""
    return Node(
        kind,
        start,
        value,
        tuple(items),
        frozenset().union(*(x.free for x in items)),
        frozenset().union(*(x.subscripts for x in items)),
        any(x.is_operator for x in items),
    )


def walk(node: Node) -> Iterator[Node]:
    """Run over a node and all its parts."""
    yield node
    for item in node.items:
        yield from walk(item)


def carriers(node: Node) -> list[tuple[str, Node]]:
    """List the free subscripts in order of appearance, each with the first piece that carries it alone."""
    found: dict[str, Node] = {}
    for part in walk(node):
        if len(part.free) == 1 and not part.free <= found.keys():
            found[next(iter(part.free))] = part
    return sorted(found.items(), key=lambda item: item[1].start)


def brackets(node: Node) -> Iterator[Node]:
    """Run over the sums in a node that are multiplied out; subscripts and arguments of functions are not."""
    if node.kind == "sum":
        yield node
    if node.kind not in ("operator", "density", "entry", "function", "pairs"):
        for item in node.items:
            yield from brackets(item)


def is_loose(node: Node) -> bool:
    """Whether a part without any free subscript is left when the node is multiplied out."""
    if not node.free:
        return True
    if node.kind == "sum":
        return any(is_loose(x) for x in node.items)
    if node.kind in ("product", "commutator", "anticommutator"):
        return all(is_loose(x) for x in node.items)
    if node.kind in ("negative", "dagger", "power", "quotient"):
        return is_loose(node.items[0]) and not any(x.free for x in node.items[1:])
    return False


def integer_value(
    index: Node, positions: Mapping[str, int], *, size: int, parameters: Mapping[str, Value], text: str
) -> int:
    """Value of a subscript at given values of the free subscripts.

    Raises
    ------
    FormulaError
        For a division by zero.
    """
    if index.kind == "number":
        return int(index.value[0])
    if index.kind == "position":
        return positions[index.value]
    if index.kind == "constant":
        return size
    if index.kind == "parameter":
        return int(parameters[index.value])  # type: ignore[arg-type]
    values = [integer_value(x, positions, size=size, parameters=parameters, text=text) for x in index.items]
    if index.kind == "negative":
        return -values[0]
    if index.kind == "sum":
        return values[0] + values[1]
    if index.kind == "product":
        return values[0] * values[1]
    if values[1] == 0:
        fail("division by zero in a subscript", text, index.items[1].start)
    return values[0] // values[1] if index.kind == "floor" else values[0] % values[1]

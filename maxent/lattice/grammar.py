"""Grammar of formulas: from text to a small tree in which every name has a meaning.

Floor: lattice. The text is checked by `tokens`, read by Python's `ast` (white-listed nodes; nothing is ever
executed) and turned into `Node`s that know whether they are operators and which free subscripts they carry.
All errors name the column and what was expected. Must not know how a sum over positions is carried out.
"""

from __future__ import annotations

import ast
import difflib
from collections.abc import Mapping
from fractions import Fraction
from typing import Any, NamedTuple, NoReturn

from maxent.lattice.coefficients import FUNCTIONS, Value
from maxent.lattice.exact import Complex
from maxent.lattice.nodes import Node, integer_value, joined
from maxent.lattice.sites import Sites
from maxent.lattice.subscripts import Subscripts
from maxent.lattice.tokens import CONJUGATE, Token, fail, read

CONSTANTS = ("pi", "L")
FORMS = {"dagger": 1, "commutator": 2, "anticommutator": 2}
_FOREIGN = {
    ("X", "Y", "Z"): "Pauli matrices are for spin-1/2 sites",
    ("Sx", "Sy", "Sz", "Splus", "Sminus"): "spin operators need sites with a spin, kind=Spin(...)",
    ("c",): "fermion operators need sites with fermions, kind=Fermions(...)",
    ("b",): "boson operators need sites with bosons, kind=Bosons(...)",
    ("n",): "number operators need sites with fermions or bosons",
}
_SIGNS: dict[type[ast.operator], str] = {
    ast.Div: "quotient",
    ast.Pow: "power",
    ast.FloorDiv: "floor",
    ast.Mod: "modulo",
}


def reserved_names(sites: Sites) -> set[str]:
    """Names the language itself uses on such sites; parameters and densities cannot have them."""
    return {*sites.symbols, *FUNCTIONS, *FORMS, *CONSTANTS, "for"}


class Reader:
    """Turns one text into a tree.

    Parameters
    ----------
    text : str
        The formula.
    sites : Ring, Chain or Lattice
        Gives the operators and the number of positions.
    parameters : mapping from str to value
        Checked parameters.
    densities : collection of str
        Names of the densities.
    scalar : bool
        Whether the text is a function of the position alone: then one unknown name is the position.
    """

    def __init__(
        self,
        text: str,
        sites: Sites,
        *,
        parameters: Mapping[str, Value],
        densities: frozenset[str] = frozenset(),
        scalar: bool = False,
    ) -> None:
        if not isinstance(text, str):
            raise TypeError(f"a formula is a text, not {text!r}")
        self.text, self.sites, self.parameters, self.densities = text, sites, parameters, densities
        self.scalar = scalar
        self.reserved = reserved_names(sites)
        self.positions: set[str] = set()
        self.integers: set[str] = set()  # parameters that decide positions
        self.ends: frozenset[str] = frozenset()  # subscripts that are ends of bonds, where the reading stands
        self.chunk_start = 0
        self.chunk = ""

    def read(self) -> Node:
        """Read the text.

        Returns
        -------
        Node

        Raises
        ------
        FormulaError
            With the column and what was expected.
        """
        cut = read(self.text)
        chunks = [(sign, start, self._parse(cut.source, start, end)) for sign, start, end in cut.summands]
        for _, _, tree in chunks:
            self._collect_positions(tree)
        clause = _clause(cut.clause)
        for token in clause.names:
            self.positions.add(token.text)
        self._check_clause(clause)
        self.ends = clause.ends
        summands = []
        has_conjugate = False
        try:
            for (sign, start, tree), (_, _, end) in zip(chunks, cut.summands, strict=True):
                self.chunk_start, self.chunk = start, cut.source[start:end]
                if isinstance(tree, ast.Name) and tree.id == CONJUGATE:
                    has_conjugate = True
                    continue
                node = self._node(tree)
                summands.append(node if sign > 0 else joined("negative", node.start, [node]))
        except RecursionError:
            fail("too deeply nested; split the formula", self.text, 0)
        total = self._sum(summands, has_conjugate)
        return self._pairs(total, clause) if cut.clause else total

    def position(self, index: Node, at: Mapping[str, int]) -> int:
        """Value of a subscript at given values of the free subscripts."""
        size = self.sites.length
        return integer_value(index, at, size=size, parameters=self.parameters, text=self.text)

    # --- text to ast

    def _parse(self, source: str, start: int, end: int) -> ast.expr:
        try:
            return ast.parse(f"({source[start:end]})", mode="eval").body
        except (SyntaxError, RecursionError, MemoryError):
            # the order of tokens has been checked: what is left is too deep for the parser
            fail("too deeply nested; split the formula", self.text, start)

    def _collect_positions(self, tree: ast.expr) -> None:
        for node in ast.walk(tree):
            names: list[ast.AST] = []
            if isinstance(node, ast.Subscript):
                first = node.slice.elts[0] if isinstance(node.slice, ast.Tuple) else node.slice
                names = [x for x in ast.walk(first) if isinstance(x, ast.Name)]
            elif isinstance(node, ast.BoolOp):
                names = [x for part in node.values[1:] for x in _chained(part)[:2]]
            for name in names:
                assert isinstance(name, ast.Name)
                if name.id not in self.parameters and name.id not in self.reserved:
                    self.positions.add(name.id)

    def _place(self, tree: ast.AST) -> int:
        offset = tree.col_offset  # type: ignore[attr-defined]
        if not self.chunk.isascii():
            offset = len(f"({self.chunk})".encode()[:offset].decode())  # ast counts UTF-8 bytes
        return self.chunk_start + offset - 1

    def _end(self, tree: ast.AST) -> int:
        offset = tree.end_col_offset  # type: ignore[attr-defined]
        if not self.chunk.isascii():
            offset = len(f"({self.chunk})".encode()[:offset].decode())
        return self.chunk_start + offset - 1

    def _fail(self, message: str, tree: ast.AST) -> NoReturn:
        fail(message, self.text, self._place(tree))

    # --- ast to nodes

    def _node(self, tree: ast.expr) -> Node:
        if isinstance(tree, ast.Constant):
            return Node("number", self._place(tree), self._number(tree))
        if isinstance(tree, ast.Name):
            return self._name(tree)
        if isinstance(tree, ast.Subscript):
            return self._subscript(tree)
        if isinstance(tree, ast.Call):
            return self._call(tree)
        if isinstance(tree, ast.UnaryOp) and isinstance(tree.op, ast.USub | ast.UAdd):
            node = self._node(tree.operand)
            return joined("negative", self._place(tree), [node]) if isinstance(tree.op, ast.USub) else node
        if isinstance(tree, ast.BinOp):
            return self._binary(tree)
        if isinstance(tree, ast.BoolOp) and isinstance(tree.op, ast.Or) and len(tree.values) == 2:
            return self._nested_pairs(tree)
        self._fail("has no meaning in a formula", tree)

    def _number(self, tree: ast.Constant) -> Complex:
        text = self.text[self._place(tree) : self._end(tree)]
        is_imaginary = text[-1] == "j"
        digits = text[:-1] if is_imaginary else text
        exact = Fraction(digits)
        value = exact.numerator if exact.denominator == 1 else exact
        return (0, value) if is_imaginary else (value, 0)

    def _name(self, tree: ast.Name) -> Node:
        name, place = tree.id, self._place(tree)
        if name in self.parameters:
            if isinstance(self.parameters[name], tuple):
                self._missing_subscript(f"parameter '{name}' is a list", name, tree)
            return Node("parameter", place, name)
        if name in CONSTANTS:
            return Node("constant", place, name)
        if name in self.sites.symbols:
            self._missing_subscript(f"operator '{name}'", name, tree)
        if name in self.densities:
            self._missing_subscript(f"density '{name}'", name, tree)
        if name in FUNCTIONS or name in FORMS:
            fail(f"expected '(' after the function '{name}'", self.text, self._end(tree))
        if name in self.positions:
            return Node("position", place, name, free=frozenset((name,)))
        if self.scalar and not self.positions and name.isidentifier() and not self._close(name):
            self.positions.add(name)
            return Node("position", place, name, free=frozenset((name,)))
        self._fail(self._unknown(name), tree)

    def _missing_subscript(self, what: str, name: str, tree: ast.AST) -> NoReturn:
        message = f"missing subscript: {what}, write '{name}[i]' or a fixed position such as '{name}[0]'"
        fail(message, self.text, self._end(tree))

    def _candidates(self) -> list[str]:
        known = set(FUNCTIONS) | set(CONSTANTS) if self.scalar else self.reserved - {"for"}
        return sorted(known | set(self.parameters) | set(self.densities))

    def _close(self, name: str) -> str | None:
        candidates = self._candidates()
        cutoff = 0.75 if self.scalar else 0.5  # in a function of the position a new name may be the position
        same = [c for c in candidates if c.lower() == name.lower()]
        close = same or (difflib.get_close_matches(name, candidates, n=1, cutoff=cutoff) if len(name) > 1 else [])
        return close[0] if close else None

    def _unknown(self, name: str) -> str:
        owner = next((what for names, what in _FOREIGN.items() if name in names and not self.scalar), "")
        close = self._close(name)
        if close is not None and not owner:
            return f"unknown symbol '{name}'; did you mean '{close}'?"
        known = ", ".join(self.parameters) or "none"
        hint = f"; {owner}" if owner else ""
        return f"unknown symbol '{name}'; expected an operator, a function or a parameter (given: {known}){hint}"

    def _subscript(self, tree: ast.Subscript) -> Node:
        base = tree.value
        assert isinstance(base, ast.Name)  # the order of tokens has been checked
        name = base.id
        if name in self.parameters:
            if not isinstance(self.parameters[name], tuple):
                self._fail(f"parameter '{name}' is a single number: write '{name}' without a subscript", tree)
            kind = "entry"
        elif name in self.sites.symbols:
            kind = "operator"
        elif name in self.densities:
            kind = "density"
        elif name in FUNCTIONS or name in FORMS:
            self._fail(f"'{name}' is a function: write '{name}(...)' with round brackets", tree)
        elif name in CONSTANTS:
            self._fail(f"'{name}' is a number: it has no subscript", tree)
        else:
            self._fail(self._unknown(name), tree)
        if self.scalar and kind != "entry":
            self._fail("operators have no meaning here: expected a number that may depend on the position", tree)
        first, *rest = tree.slice.elts if isinstance(tree.slice, ast.Tuple) else [tree.slice]
        index = self._index(first)
        more = [Token("name", x.id if isinstance(x, ast.Name) else "", self._place(x)) for x in rest]
        is_end = bool(index.free & self.ends)
        reader = Subscripts(self.sites, self.text, name, index, more, is_end)
        if kind == "entry":
            values = self.parameters[name]
            assert isinstance(values, tuple)
            value: Any = reader.entry(values, self._place(tree), self._end(tree))
        else:
            value = reader.operator() if kind == "operator" else reader.density()
        if not index.free:
            # decided positions outside the sites are mistakes on rings too: only a running subscript wraps
            place, last = self.position(index, {}), self.sites.length - 1
            if not 0 <= place <= last:
                fail(f"subscript {place} is out of range: positions run from 0 to {last}", self.text, index.start)
        return Node(kind, self._place(tree), value, (index,), index.free, index.free, kind != "entry")

    # --- subscripts: integers only

    def _index(self, tree: ast.expr) -> Node:
        place = self._place(tree)
        if isinstance(tree, ast.Constant) and isinstance(tree.value, int) and not isinstance(tree.value, bool):
            return Node("number", place, (tree.value, 0))
        if isinstance(tree, ast.Name):
            return self._index_name(tree)
        if isinstance(tree, ast.UnaryOp) and isinstance(tree.op, ast.USub | ast.UAdd):
            node = self._index(tree.operand)
            return joined("negative", place, [node]) if isinstance(tree.op, ast.USub) else node
        kinds = {
            ast.Add: "sum",
            ast.Sub: "sum",
            ast.Mult: "product",
            ast.FloorDiv: "floor",
            ast.Mod: "modulo",
        }
        if isinstance(tree, ast.BinOp) and type(tree.op) in kinds:
            left, right = self._index(tree.left), self._index(tree.right)
            if isinstance(tree.op, ast.Sub):
                right = joined("negative", right.start, [right])
            return joined(kinds[type(tree.op)], place, [left, right])
        self._fail("expected an integer subscript such as i, i+1 or 3", tree)

    def _index_name(self, tree: ast.Name) -> Node:
        name, place = tree.id, self._place(tree)
        if name == "L":
            return Node("constant", place, name)
        if name in self.parameters:
            value = self.parameters[name]
            if isinstance(value, tuple) or isinstance(value, complex) or not value.is_integer():
                message = f"subscript '{name}' is the parameter {value}, which is no integer"
                self._fail(message, tree)
            self.integers.add(name)
            return Node("parameter", place, name)
        if name in self.reserved or name in self.densities or name.startswith("_"):
            self._fail(f"'{name}' cannot be a subscript", tree)
        return Node("position", place, name, free=frozenset((name,)), subscripts=frozenset((name,)))

    # --- functions, sums, products

    def _call(self, tree: ast.Call) -> Node:
        assert isinstance(tree.func, ast.Name)  # the order of tokens has been checked
        name, place = tree.func.id, self._place(tree)
        if name not in FUNCTIONS and name not in FORMS:
            if name in self.sites.symbols or name in self.densities:
                self._fail(f"'{name}' takes a subscript: write '{name}[...]' with square brackets", tree)
            if name in self.parameters or name in CONSTANTS:
                self._fail(f"expected an operator between '{name}' and '('", tree)
            self._fail(self._unknown(name), tree)
        needed = FORMS.get(name, 1)
        if len(tree.args) != needed or tree.keywords:
            self._fail(f"'{name}' takes {needed} argument{'s' if needed > 1 else ''}, not {len(tree.args)}", tree)
        items = [self._node(x) for x in tree.args]
        if name in FORMS:
            return joined(name, place, items)
        if items[0].is_operator:
            fail(f"'{name}' takes a number, not an operator", self.text, items[0].start)
        return joined("function", place, items, name)

    def _binary(self, tree: ast.BinOp) -> Node:
        if isinstance(tree.op, ast.Add | ast.Sub):
            return self._nested_sum(tree)
        place = self._place(tree)
        left, right = self._node(tree.left), self._node(tree.right)
        if isinstance(tree.op, ast.Mult):
            items = [x for node in (left, right) for x in (node.items if node.kind == "product" else (node,))]
            return joined("product", place, items)
        kind = _SIGNS[type(tree.op)]
        if right.is_operator:
            what = "divide by" if kind == "quotient" else "use as exponent" if kind == "power" else "round with"
            fail(f"expected a number: an operator is nothing to {what}", self.text, right.start)
        if left.is_operator and kind in ("floor", "modulo"):
            fail("'//' and '%' are for numbers, not for operators", self.text, left.start)
        if left.is_operator and kind == "power":
            exponent = right.value[0] if right.kind == "number" and right.value[1] == 0 else None
            if not isinstance(exponent, int) or not 1 <= exponent <= 16:
                fail("the exponent of an operator must be an integer from 1 to 16", self.text, right.start)
        return joined(kind, place, [left, right])

    def _nested_sum(self, tree: ast.BinOp) -> Node:
        found: list[tuple[int, ast.expr]] = []
        has_conjugate = False
        node: ast.expr = tree
        while isinstance(node, ast.BinOp) and isinstance(node.op, ast.Add | ast.Sub):
            if isinstance(node.right, ast.Name) and node.right.id == CONJUGATE:
                if node is not tree:
                    break  # h.c. closes its own brackets: what stands left of here is a sum of its own
                has_conjugate = True
            else:
                found.append((1 if isinstance(node.op, ast.Add) else -1, node.right))
            node = node.left
        found.append((1, node))
        summands = []
        for sign, part in reversed(found):
            item = self._node(part)
            summands.append(item if sign > 0 else joined("negative", item.start, [item]))
        return self._sum(summands, has_conjugate)

    def _sum(self, summands: list[Node], has_conjugate: bool) -> Node:
        if len(summands) == 1 and not has_conjugate:
            return summands[0]
        return joined("sum", summands[0].start, summands, has_conjugate)

    def _nested_pairs(self, tree: ast.BoolOp) -> Node:
        body, clause = tree.values
        relation = ""
        if isinstance(clause, ast.Compare):
            relation = "!=" if isinstance(clause.ops[0], ast.NotEq) else "<"
        elif isinstance(clause, ast.BinOp):
            relation = "<>"
        names = [Token("name", part.id, self._place(part)) for part in _chained(clause)]
        found = _Clause(tuple(names[:2]), relation, names[2] if len(names) > 2 else None)
        self._check_clause(found)
        outside = self.ends
        self.ends = (outside - {token.text for token in found.names}) | found.ends
        node = self._node(body)
        self.ends = outside
        return self._pairs(node, found)

    def _pairs(self, body: Node, clause: _Clause) -> Node:
        bound = tuple(token.text for token in clause.names)
        summands = body.items if body.kind == "sum" else (body,)
        for summand in summands:
            missing = [name for name in bound if name not in summand.free]
            if missing:
                message = f"this summand does not carry '{missing[0]}'; put the sum in brackets: (... for ...)"
                fail(message, self.text, summand.start)
        value = (bound, clause.relation, clause.bonds.text if clause.bonds else None)
        left = set(bound)
        return Node("pairs", body.start, value, (body,), body.free - left, body.subscripts - left, body.is_operator)

    def _check_clause(self, clause: _Clause) -> None:
        """Refuse subscripts and bonds that cannot be, before the summands are read with them."""
        for token in clause.names:
            if token.text in self.parameters or token.text in self.densities or token.text in self.reserved:
                fail(f"'{token.text}' has a meaning already and cannot be a subscript", self.text, token.start)
        bound = tuple(token.text for token in clause.names)
        if len(set(bound)) != len(bound):
            fail("the two subscripts behind 'for' must differ", self.text, clause.names[1].start)
        if clause.relation != "<>":
            return
        known = ", ".join(self.sites.bonds)
        if not known:
            fail(f"{self.sites} has no bonds: give bonds={{'name': [...]}}", self.text, clause.names[0].start)
        if clause.bonds is not None and clause.bonds.text not in self.sites.bonds:
            fail(f"unknown bonds '{clause.bonds.text}'; expected {known}", self.text, clause.bonds.start)


class _Clause(NamedTuple):
    """What stands behind `for`: subscripts, relation ('', '<', '!=', or '<>' for bonds), name of the bonds."""

    names: tuple[Token, ...]
    relation: str
    bonds: Token | None

    @property
    def ends(self) -> frozenset[str]:
        """Subscripts that are ends of bonds."""
        return frozenset(token.text for token in self.names) if self.relation == "<>" else frozenset()


def _clause(tokens: list[Token]) -> _Clause:
    """Sort the tokens behind an outermost `for`, whose order has been checked."""
    if tokens and tokens[0].text == "<":
        return _Clause((tokens[1], tokens[3]), "<>", tokens[6] if len(tokens) > 5 else None)
    return _Clause(tuple(tokens[::2]), tokens[1].text if len(tokens) > 1 else "", None)


def _chained(tree: ast.AST) -> list[ast.Name]:
    """Names of a clause inside brackets, in order: of i, i < j, i != j, or a @ b @ name."""
    if isinstance(tree, ast.Compare):
        return [x for x in (tree.left, *tree.comparators) if isinstance(x, ast.Name)]
    if isinstance(tree, ast.BinOp) and isinstance(tree.op, ast.MatMult):
        return [*_chained(tree.left), *_chained(tree.right)]
    return [tree] if isinstance(tree, ast.Name) else []

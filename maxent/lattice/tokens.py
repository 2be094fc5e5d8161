"""Reading a formula as tokens: characters, brackets and the order of values and operators.

Floor: lattice (standard library only). Finds every error of form with its column before Python's `ast` sees
the text, and cuts the text at the outermost + and - so that long sums need no deep recursion. Must not know
what names mean.
"""

from __future__ import annotations

import keyword
import re
from typing import NamedTuple, NoReturn

from maxent.errors import FormulaError

CONJUGATE = "_hc_"
"""Stand-in for `h.c.`, of the same length, so that columns stay what they are."""

_TOKEN = re.compile(
    r"(?P<space>\s+)|(?P<conjugate>h\.c\.)|(?P<number>(?:\d+\.\d*|\.\d+|\d+)(?:[eE][+-]?\d+)?j?)"
    r"|(?P<name>[^\W\d]\w*)|(?P<sign>\*\*|//|!=|[-+*/%()\[\],<>])"
)
_FORMS = "'for i < j', 'for i != j' or 'for i'"
_CLOSING = {"(": ")", "[": "]"}
_MOST_CHARACTERS = 1_000_000
_MOST_BRACKETS = 40
_MOST_DIGITS = 40
_LARGEST_EXPONENT = 300


class Token(NamedTuple):
    """Kind, text and place (counted from 0) of one token."""

    kind: str
    text: str
    start: int

    @property
    def end(self) -> int:
        """Place behind the token."""
        return self.start + len(self.text)


class Cut(NamedTuple):
    """A formula cut at its outermost + and -.

    `summands` are (sign, start, end); `clause` holds the tokens behind an outermost `for`, or is empty;
    `source` is the text in the characters that Python's parser takes, with every column unchanged.
    """

    summands: list[tuple[int, int, int]]
    clause: list[Token]
    source: str


def fail(message: str, text: str, start: int) -> NoReturn:
    """Raise a FormulaError at a place counted from 0; the column it names counts from 1."""
    raise FormulaError(f"formula column {start + 1}: {message}", text, start + 1)


def read(text: str) -> Cut:
    """Check the form of a formula and cut it.

    Parameters
    ----------
    text : str
        The formula.

    Returns
    -------
    Cut

    Raises
    ------
    FormulaError
        For a character that has no meaning, an unbalanced bracket, or a missing value or operator.
    """
    if len(text) > _MOST_CHARACTERS:
        fail(f"the formula is longer than {_MOST_CHARACTERS} characters", text, _MOST_CHARACTERS)
    tokens = _split(text)
    if not tokens:
        fail("the formula is empty; expected an operator such as 'Sz[i]'", text, 0)
    _check_brackets(tokens, text)
    return _Order(tokens, text).check()


def _split(text: str) -> list[Token]:
    tokens = []
    place = 0
    while place < len(text):
        match = _TOKEN.match(text, place)
        if match is None:
            hint = {"^": "; powers are written '**'", "=": "; a formula has no '='"}.get(text[place], "")
            fail(f"unexpected character {text[place]!r}{hint}", text, place)
        assert match.lastgroup is not None
        if match.lastgroup == "number":
            _check_number(match.group(), text, place)
        if match.lastgroup != "space":
            tokens.append(Token(match.lastgroup, match.group(), place))
        place = match.end()
    return tokens


def _check_number(number: str, text: str, place: int) -> None:
    mantissa, _, exponent = number.lower().rstrip("j").partition("e")
    if len(mantissa) > _MOST_DIGITS or (exponent and abs(int(exponent[:8])) > _LARGEST_EXPONENT):
        fail("number out of range", text, place)
    if len(mantissa) > 1 and mantissa[0] == "0" and mantissa[1] != ".":
        fail("numbers do not start with 0", text, place)


def _check_brackets(tokens: list[Token], text: str) -> None:
    opened: list[Token] = []
    for token in tokens:
        if token.text in _CLOSING:
            opened.append(token)
            if len(opened) > _MOST_BRACKETS:
                fail(f"more than {_MOST_BRACKETS} brackets inside one another", text, token.start)
        elif token.text in (")", "]"):
            if not opened:
                fail(f"unbalanced bracket: '{token.text}' closes nothing", text, token.start)
            last = opened.pop()
            if _CLOSING[last.text] != token.text:
                column = last.start + 1
                expected = f"expected '{_CLOSING[last.text]}' for the '{last.text}' of column {column}"
                fail(f"unbalanced bracket: {expected}, found '{token.text}'", text, token.start)
    if opened:
        last = opened[-1]
        fail(f"unbalanced bracket: '{last.text}' is never closed", text, last.start)


class _Order:
    """Walk over the tokens that alternates between expecting a value and expecting an operator."""

    def __init__(self, tokens: list[Token], text: str) -> None:
        self.tokens, self.text = tokens, text
        self.source = [" " if c.isspace() else c for c in text]
        self.open: list[str] = []  # kind of each open bracket: group, call, subscript
        self.cuts: list[tuple[int, int]] = []  # place and sign of the outermost + and -
        self.clause_at: int | None = None

    def check(self) -> Cut:
        wants_value = True
        k = 0
        while k < len(self.tokens):
            token = self.tokens[k]
            if wants_value:
                wants_value = self._value(k)
            elif token.text == "for":
                k = self._clause(k)
                continue
            else:
                wants_value = self._operator(k)
            k += 1
        if wants_value:
            last = self.tokens[-1]
            self._fail(f"expected a value after '{last.text}'", last.end)
        return self._cut()

    def _fail(self, message: str, place: int) -> NoReturn:
        fail(message, self.text, place)

    def _value(self, k: int) -> bool:
        token = self.tokens[k]
        before = self.tokens[k - 1] if k else None
        if token.kind == "conjugate":
            self._conjugate(k)
            return False
        if token.text == "for":
            self._fail("expected a value before 'for'", token.start)
        if token.kind == "name" and keyword.iskeyword(token.text):
            self._fail(f"unknown symbol '{token.text}'; expected an operator, a function or a parameter", token.start)
        if token.kind in ("name", "number"):
            return False
        if token.text in ("+", "-"):
            return True
        if token.text == "(":
            self.open.append("group")
            return True
        if before is None:
            self._fail(f"expected a value before '{token.text}'", token.start)
        if token.text == "]" and before.text == "[":
            self._fail("missing subscript between '[' and ']'", token.start)
        self._fail(f"expected a value between '{before.text}' and '{token.text}'", token.start)

    def _conjugate(self, k: int) -> None:
        token = self.tokens[k]
        if k < 2 or self.tokens[k - 1].text != "+" or not _ends_value(self.tokens[k - 2]):
            self._fail("'h.c.' is written '+ h.c.' behind the summands it conjugates", token.start)
        if self.open and self.open[-1] == "subscript":
            self._fail("'h.c.' cannot stand in a subscript", token.start)
        after = self.tokens[k + 1] if k + 1 < len(self.tokens) else None
        if after is not None and after.text not in (")", ",", "for"):
            self._fail("'h.c.' must be the last summand in its brackets", token.start)
        self.source[token.start : token.end] = CONJUGATE

    def _operator(self, k: int) -> bool:
        token, before = self.tokens[k], self.tokens[k - 1]
        if token.text in (")", "]"):
            self.open.pop()
            return False
        if token.text in ("(", "["):
            if before.kind != "name":
                self._fail(f"expected an operator between '{before.text}' and '{token.text}'", token.start)
            self.open.append("call" if token.text == "(" else "subscript")
            return True
        if token.text == ",":
            if not self.open or self.open[-1] == "group":
                self._fail("unexpected ','; expected an operator such as + - *", token.start)
            return True
        if token.text in ("<", ">", "!="):
            self._fail(f"'{token.text}' has a meaning only behind 'for'", token.start)
        if token.kind == "sign":
            if token.text in ("+", "-") and not self.open:
                self.cuts.append((token.start, 1 if token.text == "+" else -1))
            return True
        self._fail(f"expected an operator between '{before.text}' and '{token.text}'", token.start)

    def _clause(self, k: int) -> int:
        """Check `for i`, `for i < j`, `for i != j` or `for <a, b> in name`; returns the index behind it."""
        token = self.tokens[k]
        if self.open and self.open[-1] == "subscript":
            self._fail("'for' cannot stand in a subscript", token.start)
        clause = self.tokens[k + 1 :]
        length = 1
        if clause and clause[0].text == "<":
            length = self._bond_clause(clause)
        elif not clause or clause[0].kind != "name":
            self._fail("expected a subscript after 'for', as in 'for i < j', 'for i != j' or 'for <a, b>'", token.end)
        elif len(clause) > 1 and clause[1].text in ("<", "!="):
            if len(clause) < 3 or clause[2].kind != "name":
                self._fail(f"expected a second subscript after '{clause[1].text}'", clause[1].end)
            length = 3
        if len(clause) > length and clause[length].text not in (")", ","):
            found = clause[length]
            forms = "'for <a, b>' or 'for <a, b> in name'" if clause[0].text == "<" else _FORMS
            self._fail(f"expected {forms}, found '{found.text}'", found.start)
        if len(clause) > length and clause[length].text == "," and not self.open:
            self._fail("unexpected ',' behind 'for'", clause[length].start)
        if self.open:
            self.source[token.start : token.end] = " or"  # same columns; `or` binds weaker than all else here
        else:
            self.clause_at = k
        return k + 1 + length

    def _bond_clause(self, clause: list[Token]) -> int:
        """Check `<a, b>` with or without `in name` behind it; returns how many tokens it has."""
        for k, expected in enumerate(("<", "", ",", "", ">")):
            found = clause[k] if k < len(clause) else None
            if found is None or (found.text != expected if expected else found.kind != "name"):
                what = f"'{expected}'" if expected else "a subscript"
                self._fail(f"expected {what} as in 'for <a, b>'", clause[k - 1].end if found is None else found.start)
        length = 5
        if len(clause) > 5 and clause[5].text == "in":
            if len(clause) < 7 or clause[6].kind != "name":
                self._fail("expected the name of bonds after 'in'", clause[5].end)
            length = 7
        if self.open:
            # Python reads a @ b @ name; '@' has no other meaning here
            for part, text in zip(clause[:length], (" ", "", "@", "", " ", "@ ", ""), strict=False):
                if text:
                    self.source[part.start : part.end] = text
        return length

    def _cut(self) -> Cut:
        end = len(self.text)
        clause: list[Token] = []
        if self.clause_at is not None:
            end = self.tokens[self.clause_at].start
            clause = self.tokens[self.clause_at + 1 :]
        starts = [(0, 1), *((place + 1, sign) for place, sign in self.cuts)]
        ends = [*(place for place, _ in self.cuts), end]
        summands = [(sign, start, stop) for (start, sign), stop in zip(starts, ends, strict=True)]
        return Cut(summands, clause, "".join(self.source))


def _ends_value(token: Token) -> bool:
    return token.kind in ("name", "number") or token.text in (")", "]")

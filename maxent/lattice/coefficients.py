"""Coefficients of words: polynomials in the parameters, with exact numbers where they are exact.

Floor: lattice (standard library only). A coefficient is a sum of numeric factor times monomial; a monomial
is a product of integer powers of atoms; an atom is a parameter (at a position, if the parameter is a list),
a function of a coefficient (abs, sqrt, exp, log, cos, sin), or a sum standing in a denominator. Equal terms
are merged, exp(a) exp(b) = exp(a + b) and sqrt(a)^2 = a are used, so for polynomials (also with phases) the
form is canonical; other identities, such as cos^2 + sin^2 = 1, are not looked for. Must not know operators
or sites.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from functools import lru_cache
from typing import NamedTuple

from maxent.lattice import exact
from maxent.lattice.exact import ONE, ZERO, Complex

Value = float | complex | tuple[float | complex, ...]
FUNCTIONS = ("sqrt", "exp", "log", "cos", "sin", "abs")


class Symbol(NamedTuple):
    """A parameter, or one entry of a list parameter.

    `phase` is 0 for a real parameter, 1 for a complex one, -1 for the conjugate of a complex one. A
    position given as text is used for printing only.
    """

    name: str
    position: int | str | None = None
    phase: int = 0


class Call(NamedTuple):
    """A function of a coefficient, or (function "group") a sum kept whole because it is divided by."""

    function: str
    argument: Coefficient


Atom = Symbol | Call
Monomial = tuple[tuple[Atom, int], ...]


class Coefficient:
    """Sum of number times monomial; immutable, hashable, equal when the canonical terms are equal.

    Parameters
    ----------
    terms : mapping from monomial to number
        Zero numbers are dropped.

    Examples
    --------
    >>> J = Coefficient.symbol("J")
    >>> str(J * J + J * J + (-J))
    '-J + 2*J**2'
    >>> str((J * J).derivative("J"))
    '2*J'
    """

    __slots__ = ("_hash", "terms")

    def __init__(self, terms: Mapping[Monomial, Complex]) -> None:
        self.terms = {m: n for m, n in terms.items() if n[0] != 0 or n[1] != 0}
        self._hash: int | None = None

    @classmethod
    def constant(cls, number: Complex) -> Coefficient:
        """Make the coefficient that is a number."""
        return cls({(): number})

    @classmethod
    def symbol(cls, name: str, position: int | None = None, phase: int = 0) -> Coefficient:
        """Make the coefficient that is a parameter."""
        return cls({((Symbol(name, position, phase), 1),): ONE})

    def __eq__(self, other: object) -> bool:
        """Compare canonical terms; numbers count as equal when their floating-point values are."""
        if not isinstance(other, Coefficient):
            return NotImplemented
        if self.terms.keys() != other.terms.keys():
            return False
        return all(
            number == other.terms[m] or exact.to_complex(number) == exact.to_complex(other.terms[m])
            for m, number in self.terms.items()
        )

    def __hash__(self) -> int:
        """Hash of the canonical terms."""
        if self._hash is None:
            self._hash = hash(frozenset((m, exact.to_complex(n)) for m, n in self.terms.items()))
        return self._hash

    @property
    def is_zero(self) -> bool:
        """Whether nothing is left."""
        return not self.terms

    @property
    def number(self) -> Complex | None:
        """The number this coefficient is, or None when it depends on a parameter."""
        if not self.terms:
            return ZERO
        if len(self.terms) == 1:
            return self.terms.get(())
        return None

    def __add__(self, other: Coefficient) -> Coefficient:
        """Sum."""
        terms = dict(self.terms)
        for monomial, number in other.terms.items():
            terms[monomial] = exact.plus(terms[monomial], number) if monomial in terms else number
        return Coefficient(terms)

    def __neg__(self) -> Coefficient:
        """Negative."""
        return Coefficient({m: (-n[0], -n[1]) for m, n in self.terms.items()})

    def times(self, number: Complex) -> Coefficient:
        """Multiply by a number."""
        if number == ONE:
            return self
        return Coefficient({m: exact.times(n, number) for m, n in self.terms.items()})

    def __mul__(self, other: Coefficient) -> Coefficient:
        """Product."""
        if len(other.terms) == 1 and () in other.terms:
            return self.times(other.terms[()])
        if len(self.terms) == 1 and () in self.terms:
            return other.times(self.terms[()])
        terms: dict[Monomial, Complex] = {}
        for left, a in self.terms.items():
            for right, b in other.terms.items():
                number = exact.times(a, b)
                for monomial, factor in _multiply(left, right).terms.items():
                    part = exact.times(number, factor)
                    terms[monomial] = exact.plus(terms[monomial], part) if monomial in terms else part
        return Coefficient(terms)

    def inverse(self) -> Coefficient:
        """Reciprocal.

        Raises
        ------
        ZeroDivisionError
            When the coefficient is zero.
        """
        if not self.terms:
            raise ZeroDivisionError("division by zero")
        if len(self.terms) == 1:
            ((monomial, number),) = self.terms.items()
            return _collect((a, -e) for a, e in monomial).times(exact.inverse(number))
        lead = self.terms[min(self.terms, key=_monomial_text)]
        scale = exact.inverse(lead)
        return Coefficient({((Call("group", self.times(scale)), -1),): scale})

    def power(self, exponent: int) -> Coefficient:
        """Integer power; a negative one inverts."""
        number = self.number
        if number is not None:
            return Coefficient.constant(exact.power(number, exponent))
        base = self.inverse() if exponent < 0 else self
        result = UNIT
        for _ in range(abs(exponent)):
            result = result * base
        return result

    def raised(self, exponent: Coefficient) -> Coefficient:
        """Power with any exponent: integers exactly, otherwise a root or exp(exponent * log(base)).

        Raises
        ------
        ValueError
            When the base is a negative or complex number and the exponent no integer.
        """
        number = exponent.number
        if number is not None and number[1] == 0 and number[0] == int(number[0]):
            return self.power(int(number[0]))
        if number == (0.5, 0):
            return self.apply("sqrt")
        if self.number == ONE:
            return UNIT
        return (exponent * self.apply("log")).apply("exp")

    def apply(self, function: str) -> Coefficient:
        """Value of a function of the formula language at this coefficient."""
        number = self.number
        if number is not None:
            return Coefficient.constant(exact.apply(function, number))
        return Coefficient({((Call(function, self), 1),): ONE})

    def conjugate(self) -> Coefficient:
        """Conjugate the coefficient; arguments of log and sqrt count as positive."""
        if all(n[1] == 0 and all(_is_real(a) for a, _ in m) for m, n in self.terms.items()):
            return self
        total = NOTHING
        for monomial, number in self.terms.items():
            turned = _collect((_conjugate(a), e) for a, e in monomial)
            total = total + turned.times((number[0], -number[1]))
        return total

    @property
    def is_real(self) -> bool:
        """Whether the coefficient equals its conjugate term by term."""
        return self == self.conjugate()

    def symbols(self) -> set[Symbol]:
        """All parameters in it, also inside functions."""
        found: set[Symbol] = set()
        for monomial in self.terms:
            for atom, _ in monomial:
                if isinstance(atom, Symbol):
                    found.add(atom)
                else:
                    found |= atom.argument.symbols()
        return found

    def value(self, parameters: Mapping[str, Value]) -> complex:
        """Value at given parameters.

        Raises
        ------
        ZeroDivisionError, ValueError, OverflowError
            When the coefficient has no finite value there.
        """
        total = 0j
        for monomial, number in self.terms.items():
            part: complex = exact.to_complex(number)
            for atom, exponent in monomial:
                part *= _atom_value(atom, parameters) ** exponent
            total += part
        return total

    def derivative(self, name: str, position: int | None = None) -> Coefficient:
        """Differentiate by a parameter (by one entry of it, for a list).

        Raises
        ------
        ValueError
            For a complex parameter: the derivative is not defined when the conjugate occurs too.
        """
        total = NOTHING
        for monomial, number in self.terms.items():
            for k, (atom, exponent) in enumerate(monomial):
                inner = _atom_derivative(atom, name, position)
                if inner.is_zero:
                    continue
                rest = monomial[:k] + (((atom, exponent - 1),) if exponent != 1 else ()) + monomial[k + 1 :]
                outer = _collect(rest).times(exact.times(number, (exponent, 0)))
                total = total + outer * inner
        return total

    def relabelled(self, rule: Callable[[str, int], int | str]) -> Coefficient:
        """Replace the positions of list parameters by a rule of (name, position)."""
        if not any(s.position is not None for s in self.symbols()):
            return self
        total = NOTHING
        for monomial, number in self.terms.items():
            part = _collect((_relabel(a, rule), e) for a, e in monomial)
            total = total + part.times(number)
        return total

    def parts(self) -> list[str]:
        """Texts of the terms in normal order; a negative term starts with a minus sign."""
        texts = []
        for monomial in sorted(self.terms, key=_monomial_text):
            number, text = self.terms[monomial], _monomial_text(monomial)
            if not text:
                texts.append(exact.complex_text(number))
            elif number == ONE:
                texts.append(text)
            elif number == (-1, 0):
                texts.append(f"-{text}")
            else:
                texts.append(f"{exact.complex_text(number)}*{text}")
        return texts

    def __str__(self) -> str:
        """Write the normal form, which the formula language reads back."""
        return join(self.parts())

    def __repr__(self) -> str:
        """Show the normal form in angle brackets."""
        return f"<Coefficient {self}>"


def join(parts: Iterable[str]) -> str:
    """Join signed terms to a sum; '0' when there are none."""
    text = ""
    for part in parts:
        if not text:
            text = part
        else:
            text += f" - {part[1:]}" if part.startswith("-") else f" + {part}"
    return text or "0"


NOTHING = Coefficient({})
UNIT = Coefficient({(): ONE})


def _is_real(atom: Atom) -> bool:
    if isinstance(atom, Symbol):
        return atom.phase == 0
    return atom.function == "abs" or atom.argument.is_real


def _conjugate(atom: Atom) -> Atom:
    if isinstance(atom, Symbol):
        return atom._replace(phase=-atom.phase)
    return atom if atom.function == "abs" else Call(atom.function, atom.argument.conjugate())


def _relabel(atom: Atom, rule: Callable[[str, int], int | str]) -> Atom:
    if isinstance(atom, Symbol):
        return atom._replace(position=rule(atom.name, atom.position)) if isinstance(atom.position, int) else atom
    return Call(atom.function, atom.argument.relabelled(rule))


@lru_cache(maxsize=4096)
def _multiply(left: Monomial, right: Monomial) -> Coefficient:
    return _collect(left + right)


def _collect(factors: Iterable[tuple[Atom, int]]) -> Coefficient:
    """Product of powers of atoms in canonical form."""
    powers: dict[Atom, int] = {}
    exponent_sum = NOTHING
    extra = UNIT
    for atom, exponent in factors:
        if isinstance(atom, Call) and atom.function == "exp":
            exponent_sum = exponent_sum + atom.argument.times((exponent, 0))
        else:
            powers[atom] = powers.get(atom, 0) + exponent
    for atom, exponent in list(powers.items()):
        if isinstance(atom, Call) and atom.function == "sqrt" and abs(exponent) > 1:
            whole, powers[atom] = divmod(exponent, 2)
            extra = extra * atom.argument.power(whole)
    if not exponent_sum.is_zero:
        phase = exponent_sum.apply("exp")
        number = phase.number
        if number is not None:
            extra = extra.times(number)
        else:
            powers[Call("exp", exponent_sum)] = 1
    monomial = tuple(sorted(((a, e) for a, e in powers.items() if e), key=lambda item: atom_text(item[0])))
    plain = Coefficient({monomial: ONE})
    return plain if extra is UNIT else plain * extra


def _atom_value(atom: Atom, parameters: Mapping[str, Value]) -> complex:
    if isinstance(atom, Symbol):
        value = parameters[atom.name]
        if isinstance(value, tuple):
            assert isinstance(atom.position, int)
            value = value[atom.position]
        return complex(value).conjugate() if atom.phase < 0 else value
    argument = atom.argument.value(parameters)
    if atom.function == "group":
        return argument
    return exact.to_complex(exact.apply(atom.function, exact.from_complex(argument)))


def _atom_derivative(atom: Atom, name: str, position: int | None) -> Coefficient:
    if isinstance(atom, Symbol):
        if atom.name != name or atom.position != position:
            return NOTHING
        if atom.phase:
            raise ValueError(f"parameter '{name}' is complex: there is no derivative by it")
        return UNIT
    a = atom.argument
    inner = a.derivative(name, position)
    if inner.is_zero or atom.function == "group":
        return inner
    if atom.function == "exp":
        return a.apply("exp") * inner
    if atom.function == "log":
        return a.inverse() * inner
    if atom.function == "cos":
        return -a.apply("sin") * inner
    if atom.function == "sin":
        return a.apply("cos") * inner
    if atom.function == "sqrt":
        return a.apply("sqrt").inverse().times(exact.inverse((2, 0))) * inner
    return a.apply("abs") * a.inverse() * inner  # d|x|/dx = |x| / x


@lru_cache(maxsize=4096)
def atom_text(atom: Atom) -> str:
    """Text of a parameter or a function as the formula language reads it."""
    if isinstance(atom, Symbol):
        text = atom.name if atom.position is None else f"{atom.name}[{atom.position}]"
        return f"dagger({text})" if atom.phase < 0 else text
    return f"({atom.argument})" if atom.function == "group" else f"{atom.function}({atom.argument})"


def _monomial_text(monomial: Monomial) -> str:
    return "*".join(atom_text(a) if e == 1 else f"{atom_text(a)}**{e}" for a, e in monomial)

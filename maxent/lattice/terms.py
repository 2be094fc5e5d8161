"""The canonical sum of local words that a formula becomes: `OperatorSum`.

Floor: lattice. Everything is derived from the one dictionary word -> coefficient: the conjugate,
hermiticity, products and commutators, range, derivatives by parameters, the printed normal form, the matrix
and the matrix-free action. Coefficients stay symbolic in the parameters, whose current values the sum
carries along. Must not know how formulas are written.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from fractions import Fraction
from numbers import Number
from typing import Any, NamedTuple

import numpy as np

from maxent.lattice import words as algebra
from maxent.lattice.coefficients import NOTHING, Coefficient, Value
from maxent.lattice.exact import Complex, from_complex
from maxent.lattice.jordan_wigner import MajoranaForm, majorana_form
from maxent.lattice.matrices import BitTable
from maxent.lattice.onebody import NotQuadraticError, OneBody, one_body
from maxent.lattice.parameters import check_parameter, is_complex
from maxent.lattice.printing import sum_text, word_text
from maxent.lattice.sites import Sites
from maxent.lattice.tables import WordTable
from maxent.lattice.words import Word, Words


class Term(NamedTuple):
    """One word of a sum: symbolic coefficient, and in order of the product the site, operator and species of each."""

    coefficient: Coefficient
    positions: tuple[int, ...]
    operators: tuple[str, ...]
    species: tuple[str, ...]


class OperatorSum:
    """Canonical sum of local words with coefficients symbolic in the parameters. Immutable.

    Made by `maxent.lattice.formula`; sums on the same sites can be added, subtracted, multiplied and scaled.

    Parameters
    ----------
    sites : Ring, Chain or Lattice
        Where the words live.
    words : mapping from word to Coefficient
        Canonical words; zero coefficients are not allowed.
    parameters : mapping from str to number or tuple of numbers
        Current values of the parameters.
    frozen : iterable of str
        Parameters that decided positions while the formula was read and can no longer change.

    Examples
    --------
    >>> from maxent.lattice import Ring, formula
    >>> energy = formula("J*Sz[i]*Sz[i+1] + h*Sx[i]", Ring(6), {"J": 1.0, "h": 0.5})
    >>> str(energy), energy.range, energy.is_hermitian
    ('h*Sx[i] + J*Sz[i]*Sz[i+1]', 2, True)
    >>> str(energy.derivative("J"))
    'Sz[i]*Sz[i+1]'
    """

    __slots__ = ("_parameters", "_table", "_words", "frozen", "sites")
    __array_ufunc__ = None  # a NumPy number on the left leaves the arithmetic to this class

    def __init__(
        self,
        sites: Sites,
        words: Words,
        *,
        parameters: Mapping[str, Value] | None = None,
        frozen: Iterable[str] = (),
    ) -> None:
        self.sites = sites
        self._words = dict(sorted(words.items()))
        self._parameters = dict(parameters or {})
        self.frozen = frozenset(frozen)
        self._table: BitTable | WordTable | None = None

    # --- what it is

    @property
    def words(self) -> Words:
        """Copy of the dictionary word -> coefficient; a word is a tuple of (slot, letter number).

        A slot is a site, or one mode of it: see `Sites.homes`.
        """
        return dict(self._words)

    @property
    def parameters(self) -> dict[str, Value]:
        """Copy of the current values of the parameters."""
        return dict(self._parameters)

    @property
    def terms(self) -> tuple[Term, ...]:
        """The words in canonical order, readable."""
        slots, homes = self.sites.slots, self.sites.homes
        return tuple(
            Term(
                c,
                tuple(homes[slot][0] for slot, _ in word),
                tuple(slots[slot].text(letter, "") for slot, letter in word),
                tuple(homes[slot][1] for slot, _ in word),
            )
            for word, c in self._words.items()
        )

    @property
    def coefficients(self) -> np.ndarray:
        """Numeric values of the coefficients, order of `terms`; complex128, shape (number of terms,).

        Raises
        ------
        ValueError
            When a coefficient has no finite value at the current parameters.
        """
        return np.array([a for _, a in self._numeric()], dtype=np.complex128)

    @property
    def non_hermitian_word(self) -> str | None:
        """None for a Hermitian sum, otherwise one word whose coefficient the conjugate does not have, as text."""
        word = algebra.unpaired(self._words, self.sites.slots)
        return None if word is None else self._shown(word)

    @property
    def is_hermitian(self) -> bool:
        """Whether the sum is Hermitian; decided from the canonical words, before any matrix exists."""
        return self.non_hermitian_word is None

    @property
    def range(self) -> int:
        """Number of positions that the widest word covers (shortest arc on a ring); 0 without operators.

        With several sites per unit cell these are cells; on a lattice given by bonds, sites of one word.
        """
        homes = self.sites.homes
        return max((self.sites.reach([homes[slot][0] for slot, _ in word]) for word in self._words), default=0)

    @property
    def norm_bound(self) -> float:
        """Upper bound of the operator norm: sum over words of |coefficient| times norms of letters."""
        slots = self.sites.slots
        norms: dict[tuple[int, int], float] = {}
        for word in self._words:
            for slot, letter in word:
                key = (id(slots[slot]), letter)
                if key not in norms:
                    norms[key] = float(np.linalg.norm(slots[slot].matrix(letter), 2))
        return float(sum(abs(a) * np.prod([norms[id(slots[s]), x] for s, x in word]) for word, a in self._numeric()))

    def __str__(self) -> str:
        """Write the normal form; `formula` reads it back to the same sum."""
        cells, size = self.sites.length, self.sites.size
        per_site = {n for n, v in self._parameters.items() if isinstance(v, tuple) and len(v) == size != cells}
        return sum_text(self._words, self.sites, taken=self._parameters, per_site=per_site)

    def __repr__(self) -> str:
        """Short description that fits a terminal."""
        text = str(self)
        shown = text if len(text) <= 60 else text[:57] + "..."
        return f"<OperatorSum of {len(self._words)} words on {self.sites}: {shown}>"

    def __eq__(self, other: object) -> bool:
        """Compare sites, canonical words, and the values of the parameters that occur."""
        if not isinstance(other, OperatorSum):
            return NotImplemented
        mine, theirs = ({n: s._parameters[n] for n in s._names()} for s in (self, other))
        return self.sites == other.sites and self._words == other._words and mine == theirs

    def __hash__(self) -> int:
        """Hash of the canonical words."""
        return hash((self.sites, frozenset(self._words)))

    # --- algebra

    def adjoint(self) -> OperatorSum:
        """Hermitian conjugate."""
        return self._like(algebra.adjoint(self._words, self.sites.slots))

    def __add__(self, other: object) -> OperatorSum:
        """Sum with another sum on the same sites, or with a number times the identity."""
        right = self._partner(other)
        return NotImplemented if right is None else self._join(right, algebra.add(self._words, right._words))

    __radd__ = __add__

    def __neg__(self) -> OperatorSum:
        """Negative."""
        return self._like(algebra.negative(self._words))

    def __sub__(self, other: object) -> OperatorSum:
        """Difference."""
        right = self._partner(other)
        return NotImplemented if right is None else self + (-right)

    def __rsub__(self, other: object) -> OperatorSum:
        """Difference, number first."""
        return (-self) + other

    def __mul__(self, other: object) -> OperatorSum:
        """Operator product, or product with a number."""
        right = self._partner(other)
        if right is None:
            return NotImplemented
        return self._join(right, algebra.multiply(self._words, right._words, self.sites.slots))

    def __rmul__(self, other: object) -> OperatorSum:
        """Product, number first."""
        left = self._partner(other)
        return NotImplemented if left is None else left * self

    def __truediv__(self, other: object) -> OperatorSum:
        """Divide by a number."""
        if not isinstance(other, Number):
            return NotImplemented
        return self._scaled(Coefficient.constant(_exact(other)).inverse())

    def commutator(self, other: OperatorSum) -> OperatorSum:
        """`self * other - other * self`; words without a common site cost nothing."""
        right = self._partner(other)
        if right is None:
            raise TypeError(f"commutator: expected an OperatorSum, not {type(other).__name__}")
        return self._join(right, algebra.commute(self._words, right._words, self.sites.slots))

    # --- parameters

    def derivative(self, name: str, position: int | None = None) -> OperatorSum:
        """Differentiate the operator by a parameter.

        Parameters
        ----------
        name : str
            A parameter.
        position : int, optional
            Which entry, for a list parameter.

        Returns
        -------
        OperatorSum

        Raises
        ------
        ValueError
            For an unknown or complex parameter, a parameter that decides positions, or a missing or wrong
            position.
        """
        value = self._known(name)
        if isinstance(value, tuple) != (position is not None):
            needed = "a position" if isinstance(value, tuple) else "no position"
            raise ValueError(f"derivative: parameter '{name}' needs {needed}")
        if isinstance(value, tuple) and not 0 <= (position or 0) < len(value):
            raise ValueError(f"derivative: parameter '{name}' has no position {position} (0..{len(value) - 1})")
        slopes = {word: c.derivative(name, position) for word, c in self._words.items()}
        return self._like({word: c for word, c in slopes.items() if not c.is_zero})

    def with_parameters(self, **values: Any) -> OperatorSum:
        """Set other values of some parameters.

        Raises
        ------
        TypeError, ValueError
            For an unknown name, a parameter that decides positions, a list of another length, a complex
            value where the formula was read with a real one, or a value that is no finite number.
        """
        changed = dict(self._parameters)
        for name, value in values.items():
            old, new = self._known(name), check_parameter(name, value)
            if isinstance(old, tuple) != isinstance(new, tuple):
                raise ValueError(f"parameter '{name}' was a {_shape(old)} and cannot become a {_shape(new)}")
            if isinstance(old, tuple) and isinstance(new, tuple) and len(old) != len(new):
                raise ValueError(f"parameter '{name}' needs {len(old)} values, not {len(new)}")
            phases = {s.phase != 0 for c in self._words.values() for s in c.symbols() if s.name == name}
            if phases == {False} and is_complex(new):
                raise ValueError(f"parameter '{name}' was real when the formula was read and cannot become complex")
            changed[name] = new
        return OperatorSum(self.sites, self._words, parameters=changed, frozen=self.frozen)

    # --- arrays

    def matrix(self, *, limit: int | None = None) -> Any:
        """Sparse matrix in the basis of the sites (site 0 most significant; local order as in docs/formulas.md).

        Parameters
        ----------
        limit : int, optional
            Bytes that may be used; default what the machine has available.

        Returns
        -------
        scipy.sparse.csr_array, shape (d, d)
            float64 when the operator is real in this basis, otherwise complex128; no explicit zeros.

        Raises
        ------
        ResourceError
            When the matrix would not fit, with the memory it would need; raised before anything is allocated.
        ValueError
            When a coefficient has no finite value at the current parameters, or bosons have no cut-off.

        Notes
        -----
        Cost O(words * d), d = number of basis states.
        """
        return self._arrays().matrix(limit=limit)

    def action(self, vector: np.ndarray) -> np.ndarray:
        """Operator times vector, without a matrix.

        Parameters
        ----------
        vector : real or complex, shape (d,) or (d, k)
            One state, or k states as columns.

        Returns
        -------
        float64 or complex128, same shape

        Raises
        ------
        ValueError
            When the first dimension is not the number of basis states d.
        """
        vector = np.asarray(vector)
        if vector.ndim not in (1, 2) or vector.shape[0] != self.sites.states:
            rows = f"2^{self.sites.size}" if self.sites.is_spin_half else self.sites.states
            raise ValueError(f"action: the vector needs {rows} rows, its shape is {vector.shape}")
        return self._arrays().action(vector)

    def one_body(self) -> OneBody:
        """One-body matrix, and pairing matrix where there is one, of a quadratic fermion or boson sum.

        Returns
        -------
        OneBody
            ``constant + sum A_st dagger(a_s) a_t + 1/2 sum (B_st dagger(a_s) dagger(a_t) + h.c.)`` at the current
            parameters. Needs no cut-off.

        Raises
        ------
        ValueError
            When the sum is not Hermitian, the sites hold spins or both fermions and bosons, or a word is not
            quadratic; names the first such word.

        Examples
        --------
        >>> from maxent.lattice import Fermions, Ring, formula
        >>> hopping = formula("-t*(dagger(c[i])*c[i+1] + h.c.)", Ring(3, Fermions()), {"t": 1.0})
        >>> hopping.one_body().matrix.tolist()
        [[0.0, -1.0, -1.0], [-1.0, 0.0, -1.0], [-1.0, -1.0, 0.0]]
        """
        bad = self.non_hermitian_word
        if bad is not None:
            raise ValueError(f"one_body: not Hermitian: it holds {bad}")
        try:
            return one_body(self._numeric(), self.sites)
        except NotQuadraticError as error:
            raise ValueError(f"one_body: not quadratic: it holds {self._shown(error.word)}") from None

    def majorana_form(self) -> MajoranaForm:
        """Quadratic form in Majorana operators of a sum of spins 1/2, at the current parameters.

        Raises
        ------
        ValueError
            When the sum is not Hermitian, a site is no spin 1/2, or a word is quadratic neither everywhere nor inside a
            parity sector; names the first such word.

        Examples
        --------
        >>> from maxent.lattice import Ring, formula
        >>> formula("X[i]*X[i+1]", Ring(4)).majorana_form().needs_parity
        True
        """
        bad = self.non_hermitian_word
        if bad is not None:
            raise ValueError(f"majorana_form: not Hermitian: it holds {bad}")
        try:
            return majorana_form(self._numeric(), self.sites)
        except NotQuadraticError as error:
            raise ValueError(f"majorana_form: not quadratic: it holds {self._shown(error.word)}") from None

    def pauli_terms(self) -> list[tuple[float, dict[int, str]]]:
        """Coefficients and Pauli letters by site of a Hermitian sum of spins 1/2, at the current parameters.

        Raises
        ------
        ValueError
            When a site is no spin 1/2, or the sum is not Hermitian.

        Examples
        --------
        >>> from maxent.lattice import Chain, formula
        >>> formula("2*Sx[i]*Sx[i+1] + 1", Chain(2)).pauli_terms()
        [(1.0, {}), (0.5, {0: 'X', 1: 'X'})]
        """
        if not self.sites.is_spin_half or not self.is_hermitian:
            raise ValueError("pauli_terms: a Hermitian sum of spins 1/2 is needed")
        return [(a.real * 0.5 ** len(word), {site: "XYZ"[x] for site, x in word}) for word, a in self._numeric()]

    def word_text(self, word: Word) -> str:
        """A word of `words` as formulas write it."""
        return word_text(word, self.sites)[1] or "1"

    # --- helpers

    def _shown(self, word: Word) -> str:
        """Word with its coefficient, for messages."""
        sign, name = word_text(word, self.sites)
        coefficient = self._words.get(word, NOTHING).times((sign, 0))
        return f"{name or '1'} with the coefficient {coefficient}"

    def _numeric(self) -> list[tuple[Word, complex]]:
        result = []
        for word, coefficient in self._words.items():
            try:
                value = complex(coefficient.value(self._parameters))
            except OverflowError:
                raise ValueError(f"coefficient {coefficient} leaves the range of floating point") from None
            except (ArithmeticError, ValueError) as error:
                raise ValueError(f"coefficient {coefficient} has no value: {error}") from None
            if not np.isfinite(value):
                raise ValueError(f"coefficient {coefficient} leaves the range of floating point")
            result.append((word, value))
        return result

    def _arrays(self) -> BitTable | WordTable:
        if self._table is None:
            if self.sites.is_spin_half:
                self._table = BitTable(self._numeric(), self.sites.size)
            else:
                self._table = WordTable(self._numeric(), self.sites.slots)
        return self._table

    def _names(self) -> set[str]:
        return {s.name for c in self._words.values() for s in c.symbols()}

    def _known(self, name: str) -> Value:
        if name in self.frozen:
            raise ValueError(f"parameter '{name}' decides positions in this formula: read the formula again instead")
        if name not in self._parameters:
            raise ValueError(f"unknown parameter '{name}'; known: {', '.join(self._parameters) or 'none'}")
        return self._parameters[name]

    def _like(self, words: Words) -> OperatorSum:
        return OperatorSum(self.sites, words, parameters=self._parameters, frozen=self.frozen)

    def _partner(self, other: object) -> OperatorSum | None:
        if isinstance(other, OperatorSum):
            return other
        if not isinstance(other, Number):
            return None
        return self._like({(): Coefficient.constant(_exact(other))} if other else {})

    def _scaled(self, factor: Coefficient) -> OperatorSum:
        return self._like(algebra.scale(self._words, factor))

    def _join(self, other: OperatorSum, words: Words) -> OperatorSum:
        if self.sites != other.sites:
            raise ValueError(f"operators on different sites cannot be combined: {self.sites} and {other.sites}")
        for name, value in other._parameters.items():
            if self._parameters.get(name, value) != value:
                raise ValueError(f"parameter '{name}' has two values: {self._parameters[name]} and {value}")
        parameters = self._parameters | other._parameters
        return OperatorSum(self.sites, words, parameters=parameters, frozen=self.frozen | other.frozen)


def _exact(number: Any) -> Complex:
    """Take a number into exact arithmetic: whole numbers and fractions stay exact."""
    if isinstance(number, int | Fraction):
        return int(number) if isinstance(number, int) else number, 0
    value = complex(number)
    if not np.isfinite(value):
        raise ValueError(f"an operator cannot be combined with {number}")
    return from_complex(value)


def _shape(value: Value) -> str:
    return "list" if isinstance(value, tuple) else "single number"

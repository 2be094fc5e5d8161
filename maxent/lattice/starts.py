"""Product start states: exact means of operators without a vector of all amplitudes.

In a product state the mean of a word is the product of the means of its letters. `LocalProduct` does everything from
the means of letters and the amplitudes of one slot; `ProductState` here gives them for spins that point in directions
n_i = (sin theta cos phi, sin theta sin phi, cos theta), <S_a> = s n_a, `PatternState` in `patterns` for states of
sharp occupation.
Floor: lattice. Must not know multipliers or targets.
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from collections.abc import Mapping, Sequence
from numbers import Real
from typing import Any

import numpy as np

from maxent.lattice.evaluate import position_values
from maxent.lattice.sites import Sites
from maxent.lattice.spins import SpinOperators
from maxent.lattice.terms import OperatorSum
from maxent.lattice.words import Word, word_product
from maxent.memory import require_memory

Angle = float | str | Sequence[float | str]


class LocalProduct(ABC):
    """Product over the slots of the sites; means and variances are exact up to rounding for any number of sites.

    Parameters
    ----------
    sites : Ring, Chain or Lattice
        Where the state lives.
    """

    def __init__(self, sites: Sites) -> None:
        self.sites = sites

    def __repr__(self) -> str:
        """Sites and size."""
        return f"<{type(self).__name__} on {self.sites}>"

    @abstractmethod
    def _letter_mean(self, slot: int, letter: int) -> complex:
        """Mean of a letter; an odd letter has none, so that the order of words plays no part."""

    @abstractmethod
    def _amplitudes(self, slot: int) -> np.ndarray:
        """Normalised amplitudes of one slot."""

    def mean(self, op: OperatorSum) -> float:
        """Mean of an operator.

        Parameters
        ----------
        op : OperatorSum
            Hermitian, on the same sites.

        Returns
        -------
        float

        Raises
        ------
        ValueError
            When the operator lives on other sites or is not Hermitian.

        Notes
        -----
        Cost O(words); exact up to rounding for any number of sites.
        """
        self._check(op)
        values = zip(op.words, op.coefficients.tolist(), strict=True)
        return math.fsum((a * self._word_mean(word)).real for word, a in values)

    def variance(self, op: OperatorSum) -> float:
        """Variance <op^2> - <op>^2 of a Hermitian operator.

        Parameters
        ----------
        op : OperatorSum
            Hermitian, on the same sites.

        Returns
        -------
        float
            Not negative.

        Raises
        ------
        ValueError
            When the operator lives on other sites or is not Hermitian.

        Notes
        -----
        Only pairs of words with a common site contribute; they are summed as covariances, so nothing large
        cancels.
        """
        self._check(op)
        words = list(op.words)
        weights = dict(zip(words, op.coefficients.tolist(), strict=True))
        places: dict[int, list[Word]] = {}
        for word in words:
            for site, _ in word:
                places.setdefault(site, []).append(word)
        parts = []
        for left in words:
            partners = sorted({right for site, _ in left for right in places[site]})
            parts += [(weights[left] * weights[right] * self._covariance(left, right)).real for right in partners]
        return max(math.fsum(parts), 0.0)

    def vector(self, *, limit: int | None = None) -> np.ndarray:
        """Amplitudes in the basis of the sites.

        Parameters
        ----------
        limit : int, optional
            Bytes that may be used; default what the machine has available.

        Returns
        -------
        complex128, shape (d,)
            Normalised.

        Raises
        ------
        ResourceError
            When it would not fit; raised before anything is allocated.
        """
        dims = self.sites.dims
        states = f"2^{len(dims)}" if self.sites.is_spin_half else str(self.sites.states)
        # the last outer product holds the old and the new vector
        need = 16 * self.sites.states * (dims[-1] + 1) // dims[-1]
        require_memory(need, f"{states} amplitudes of the start state need {{need}}", limit=limit)
        vector = np.ones(1, np.complex128)
        for slot in range(len(self.sites.slots)):
            vector = np.multiply.outer(vector, self._amplitudes(slot)).ravel()
        return vector

    def _check(self, op: OperatorSum) -> None:
        if not isinstance(op, OperatorSum):
            raise TypeError(f"expected an OperatorSum, not {type(op).__name__}")
        if op.sites != self.sites:
            raise ValueError(f"the operator lives on {op.sites}, the start state on {self.sites}")
        word = op.non_hermitian_word
        if word is not None:
            raise ValueError(f"the operator is not Hermitian: the word {word}")

    def _word_mean(self, word: Word) -> complex:
        return math.prod(self._letter_mean(slot, letter) for slot, letter in word)

    def _covariance(self, left: Word, right: Word) -> complex:
        """Covariance <left right> - <left><right> of two words."""
        common = {site for site, _ in left} & {site for site, _ in right}
        shared = [tuple(x for x in word if x[0] in common) for word in (left, right)]
        alone = [x for word in (left, right) for x in word if x[0] not in common]
        together = 0j
        for factor, word in word_product(shared[0], shared[1], self.sites.slots):
            together += complex(*map(float, factor)) * self._word_mean(word)
        apart = self._word_mean(shared[0]) * self._word_mean(shared[1])
        return (together - apart) * math.prod(self._letter_mean(*x) for x in alone)


class ProductState(LocalProduct):
    """Product state of spins by angles: on every site the coherent state of a direction.

    A spin 1/2 is cos(theta/2) |up> + exp(i phi) sin(theta/2) |down>; a spin s is the same as 2s spins 1/2 side by side.

    Parameters
    ----------
    sites : Ring, Chain or Lattice
        Where the spins are.
    theta, phi : float, str, or sequence of these
        Polar angle and azimuth in radians: one value for all sites, a function of the position such as
        ``"2*pi*i/L"`` (one value for all sites of a unit cell), or a pattern that is repeated along the sites (on a
        ring its length must divide the number of sites).
    parameters : mapping from str to number, optional
        Names that the functions of the position may use.

    Attributes
    ----------
    theta, phi : float64, shape (size,)
        Angles of every site.
    directions : float64, shape (size, 3)
        Unit vectors of the spins.

    Raises
    ------
    FormulaError
        When a function of the position cannot be read.
    TypeError, ValueError
        When an angle is no finite number, a pattern does not fit, or a site has no spin.

    Examples
    --------
    >>> from maxent.lattice import Ring, formula
    >>> spiral = ProductState(Ring(8), "pi/2", "2*pi*i/L")
    >>> round(spiral.mean(formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1]", Ring(8))), 12)  # 2 cos(2 pi / 8)
    1.414213562373
    """

    def __init__(self, sites: Sites, theta: Angle, phi: Angle, *, parameters: Mapping[str, Any] | None = None) -> None:
        super().__init__(sites)
        for site in range(len(sites.cell)):
            if not isinstance(sites.kind(site).slots[0], SpinOperators):
                raise ValueError(f"angles are for spins, not for {sites.kind(site).name} sites: give a pattern")
        self.theta = _angles("theta", theta, sites, parameters)
        self.phi = _angles("phi", phi, sites, parameters)
        sine = np.sin(self.theta)
        self.directions = np.stack([sine * np.cos(self.phi), sine * np.sin(self.phi), np.cos(self.theta)], axis=1)
        self.directions[np.abs(self.directions) < 2.0**-51] = 0.0  # cos(pi/2) and its like
        for array in (self.theta, self.phi, self.directions):
            array.setflags(write=False)
        self._means: dict[tuple[int, int], complex] = {}

    def _letter_mean(self, slot: int, letter: int) -> complex:
        known = self._means.get((slot, letter))
        if known is None:
            known = self._means[slot, letter] = self._compute_mean(slot, letter)
        return known

    def _compute_mean(self, slot: int, letter: int) -> complex:
        local = self.sites.slots[slot]
        assert isinstance(local, SpinOperators)
        if letter < 3:
            return float(local.spin) * float(self.directions[slot, letter])
        amplitudes, matrix = self._amplitudes(slot), local.matrix(letter)
        value = complex(np.vdot(amplitudes, matrix @ amplitudes))
        noise = 2.0**-50 * float(np.abs(matrix).max())
        return complex(*(x if abs(x) > noise else 0.0 for x in (value.real, value.imag)))

    def _amplitudes(self, slot: int) -> np.ndarray:
        top = self.sites.slots[slot].dimension - 1
        k = np.arange(top + 1)
        up, down = np.cos(self.theta[slot] / 2), np.exp(1j * self.phi[slot]) * np.sin(self.theta[slot] / 2)
        return np.sqrt([math.comb(top, x) for x in k]) * up ** (top - k) * down**k


def _angles(name: str, given: Angle, sites: Sites, parameters: Mapping[str, Any] | None) -> np.ndarray:
    if isinstance(given, str):
        return np.repeat(position_values(given, sites, parameters), len(sites.cell))
    if isinstance(given, list | tuple | np.ndarray) and np.ndim(given) == 1:
        length = fitting_pattern(f"{name}: the pattern", "angles", len(given), sites)
        columns = [_angles(f"{name}[{k}]", entry, sites, parameters) for k, entry in enumerate(given)]
        return np.array([columns[i % length][i] for i in range(sites.size)])
    if not isinstance(given, Real) or isinstance(given, bool):
        raise TypeError(f"{name}: expected an angle, a pattern or a function of the position, not {given!r}")
    if not math.isfinite(float(given)):
        raise ValueError(f"{name}: the angle must be finite, not {given}")
    return np.full(sites.size, float(given))


def fitting_pattern(what: str, entries: str, length: int, sites: Sites) -> int:
    """Return the length of a pattern that repeats along the sites, or refuse it.

    Raises
    ------
    ValueError
        When it is empty, longer than the sites, or does not fit a ring.
    """
    if length == 0:
        raise ValueError(f"{what} is empty")
    if length > sites.size or (sites.is_ring and sites.size % length):
        kind = "ring" if sites.is_ring else "chain" if sites.has_order else "lattice"
        reason = "is longer than" if length > sites.size else "does not fit"
        hint = f" ({length} does not divide {sites.size})" if length <= sites.size else ""
        raise ValueError(f"{what} of {length} {entries} {reason} a {kind} of {sites.size} sites{hint}")
    return length

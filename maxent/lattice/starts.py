"""Product start states: one spin direction per site, and exact means of operators in them.

Floor: lattice. The spin on site i points along n_i = (sin theta cos phi, sin theta sin phi, cos theta); in
a product state the mean of a word is the product of the means of its letters, <S_a> = n_a / 2, so no vector
of 2^L amplitudes is needed. Must not know multipliers or targets.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from numbers import Real
from typing import Any

import numpy as np

from maxent.lattice.evaluate import position_values
from maxent.lattice.sites import Sites
from maxent.lattice.terms import OperatorSum
from maxent.lattice.words import Word, word_product
from maxent.memory import require_memory

Angle = float | str | Sequence[float | str]


class ProductState:
    """Product state of spin-1/2 sites by angles.

    Parameters
    ----------
    sites : Ring or Chain
        Where the spins are.
    theta, phi : float, str, or sequence of these
        Polar angle and azimuth in radians: one value for all sites, a function of the position such as
        ``"2*pi*i/L"``, or a pattern that is repeated along the sites (on a ring its length must divide the
        number of sites).
    parameters : mapping from str to number, optional
        Names that the functions of the position may use.

    Attributes
    ----------
    theta, phi : float64, shape (L,)
        Angles of every site.
    directions : float64, shape (L, 3)
        Unit vectors of the spins.

    Raises
    ------
    FormulaError
        When a function of the position cannot be read.
    TypeError, ValueError
        When an angle is no finite number or a pattern does not fit.

    Examples
    --------
    >>> from maxent.lattice import Ring, formula
    >>> spiral = ProductState(Ring(8), "pi/2", "2*pi*i/L")
    >>> round(spiral.mean(formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1]", Ring(8))), 12)  # 2 cos(2 pi / 8)
    1.414213562373
    """

    def __init__(
        self, sites: Sites, theta: Angle, phi: Angle, *, parameters: Mapping[str, Any] | None = None
    ) -> None:
        self.sites = sites
        self.theta = _angles("theta", theta, sites, parameters)
        self.phi = _angles("phi", phi, sites, parameters)
        sine = np.sin(self.theta)
        self.directions = np.stack(
            [sine * np.cos(self.phi), sine * np.sin(self.phi), np.cos(self.theta)], axis=1
        )
        self.directions[np.abs(self.directions) < 2.0**-51] = 0.0  # cos(pi/2) and its like
        for array in (self.theta, self.phi, self.directions):
            array.setflags(write=False)

    def __repr__(self) -> str:
        """Sites and size."""
        return f"<ProductState on {self.sites}>"

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
        parts = [a.real * self._word_mean(word) for word, a in zip(op.words, op.coefficients, strict=True)]
        return math.fsum(parts)

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
        weights = dict(zip(words, op.coefficients.real, strict=True))
        places: dict[int, list[Word]] = {}
        for word in words:
            for site, _ in word:
                places.setdefault(site, []).append(word)
        parts = []
        for left in words:
            partners = sorted({right for site, _ in left for right in places[site]})
            parts += [weights[left] * weights[right] * self._covariance(left, right) for right in partners]
        return max(math.fsum(parts), 0.0)

    def vector(self, *, limit: int | None = None) -> np.ndarray:
        """Amplitudes in the basis of the sites.

        Parameters
        ----------
        limit : int, optional
            Bytes that may be used; default what the machine has available.

        Returns
        -------
        complex128, shape (2**L,)
            Normalised; on each site cos(theta/2) |up> + exp(i phi) sin(theta/2) |down>.

        Raises
        ------
        ResourceError
            When it would not fit; raised before anything is allocated.
        """
        size = self.sites.size
        # the last outer product holds the old and the new vector
        require_memory(24 << size, f"2^{size} amplitudes of the start state need {{need}}", limit=limit)
        vector = np.ones(1, np.complex128)
        for theta, phi in zip(self.theta, self.phi, strict=True):
            spinor = np.array([np.cos(theta / 2), np.exp(1j * phi) * np.sin(theta / 2)])
            vector = np.multiply.outer(vector, spinor).ravel()
        return vector

    def _check(self, op: OperatorSum) -> None:
        if not isinstance(op, OperatorSum):
            raise TypeError(f"expected an OperatorSum, not {type(op).__name__}")
        if op.sites != self.sites:
            raise ValueError(f"the operator lives on {op.sites}, the start state on {self.sites}")
        word = op.non_hermitian_word
        if word is not None:
            raise ValueError(f"the operator is not Hermitian: the word {word}")

    def _word_mean(self, word: Word) -> float:
        return math.prod(self._letter_mean(site, letter) for site, letter in word)

    def _letter_mean(self, site: int, letter: int) -> float:
        return 0.5 * float(self.directions[site, letter])

    def _covariance(self, left: Word, right: Word) -> float:
        """Real part of <left right> - <left><right>."""
        common = {site for site, _ in left} & {site for site, _ in right}
        shared = [tuple(x for x in word if x[0] in common) for word in (left, right)]
        alone = [x for word in (left, right) for x in word if x[0] not in common]
        together = 0j
        for factor, word in word_product(shared[0], shared[1], self.sites.slots):
            together += complex(*map(float, factor)) * self._word_mean(word)
        apart = self._word_mean(shared[0]) * self._word_mean(shared[1])
        return (together.real - apart) * math.prod(self._letter_mean(*x) for x in alone)


def _angles(name: str, given: Angle, sites: Sites, parameters: Mapping[str, Any] | None) -> np.ndarray:
    if isinstance(given, str):
        return position_values(given, sites, parameters)
    if isinstance(given, list | tuple | np.ndarray) and np.ndim(given) == 1:
        length = len(given)
        if length == 0:
            raise ValueError(f"{name}: the pattern is empty")
        if length > sites.size or (sites.is_ring and sites.size % length):
            kind = "ring" if sites.is_ring else "chain"
            reason = "is longer than" if length > sites.size else "does not fit"
            hint = f" ({length} does not divide {sites.size})" if length <= sites.size else ""
            raise ValueError(
                f"{name}: the pattern of {length} angles {reason} a {kind} of {sites.size} sites{hint}"
            )
        columns = [_angles(f"{name}[{k}]", entry, sites, parameters) for k, entry in enumerate(given)]
        return np.array([columns[i % length][i] for i in range(sites.size)])
    if not isinstance(given, Real) or isinstance(given, bool):
        raise TypeError(f"{name}: expected an angle, a pattern or a function of the position, not {given!r}")
    if not math.isfinite(float(given)):
        raise ValueError(f"{name}: the angle must be finite, not {given}")
    return np.full(sites.size, float(given))

"""Spins 1/2 as fermions: which sums of Pauli words are quadratic, and their one-body form.

    g_{2j} = Z_0 .. Z_{j-1} X_j,   g_{2j+1} = Z_0 .. Z_{j-1} Y_j,   Z_j = 1 - 2 n_j = -i g_{2j} g_{2j+1}

A word is usable when it is a product of no or two Majorana operators: Z_a, or X or Y at two sites with Z at every site
between them and nothing else.  Words that go the other way round a ring are not; but where the parity
``P = Z_0 .. Z_{n-1}`` has the value eta a word W equals ``eta W P``, and that may be usable: bonds across the end of a
ring come out with the factor eta, antiperiodic for eta = +1 and periodic for eta = -1.  Whether words have such a form
is tested, not derived from the geometry.  Floor: lattice (NumPy).  Must not know formulas, nor what the form is for.

References
----------
P. Jordan, E. Wigner, Z. Phys. 47, 631 (1928); E. Lieb, T. Schultz, D. Mattis, Ann. Phys. 16, 407 (1961).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from maxent.lattice.onebody import NotQuadraticError, OneBody
from maxent.lattice.sites import Sites
from maxent.lattice.words import Word

X, Y, Z = 0, 1, 2


@dataclass(frozen=True, eq=False)
class MajoranaForm:
    """``Q = (i/4) sum A_ab g_a g_b + constant`` with ``A = direct + eta crossing`` where the parity is eta.

    Attributes
    ----------
    direct, crossing : (2n, 2n) ndarray
        Real antisymmetric.
    constant, crossing_constant : float
        Numbers of the same two kinds; the second multiplies eta.
    crossing_word : tuple or None
        A word that is quadratic inside one parity sector only; None where all are quadratic everywhere.
    """

    direct: np.ndarray
    crossing: np.ndarray
    constant: float
    crossing_constant: float
    crossing_word: Word | None

    @property
    def needs_parity(self) -> bool:
        """Whether the sum is quadratic inside parity sectors only."""
        return self.crossing_word is not None

    def sector(self, parity: int) -> OneBody:
        """The sum where the parity is +1 or -1; 0 stands for everywhere.

        Raises
        ------
        ValueError
            0 for a sum that is quadratic inside parity sectors only.
        """
        if parity == 0 and self.needs_parity:
            raise ValueError("this sum is quadratic inside parity sectors only: ask for +1 or -1")
        a = self.direct + parity * self.crossing
        s, t, u, v = a[0::2, 0::2], a[0::2, 1::2], a[1::2, 0::2], a[1::2, 1::2]
        hopping, pairing = 0.5 * (t - u + 1j * (s + v)), 0.5 * (-(t + u) + 1j * (s - v))
        # particles are counted from the empty state, Majorana forms from half filling
        constant = self.constant + parity * self.crossing_constant - 0.5 * float(np.trace(hopping).real)
        real = lambda m: m if np.any(m.imag) else m.real.copy()
        modes = tuple((site, "") for site in range(len(s)))
        return OneBody("fermions", real(hopping), real(pairing) if np.any(pairing) else None, constant, modes)


def majorana_form(words: Iterable[tuple[Word, complex]], sites: Sites) -> MajoranaForm:
    """Collect the Majorana form of a Hermitian sum of spins 1/2.

    Parameters
    ----------
    words : iterable of (word, complex)
        Words with their numeric coefficients; those that are zero are passed over.
    sites : Ring, Chain or Lattice
        All spins 1/2; fermions in the order of the sites.

    Raises
    ------
    NotQuadraticError
        At the first word that is quadratic neither everywhere nor inside a parity sector.
    ValueError
        When a site holds something else than a spin 1/2.
    """
    if not sites.is_spin_half:
        raise ValueError("majorana_form: all sites must be spins 1/2")
    n = sites.size
    forms = np.zeros((2, 2 * n, 2 * n))
    constants = np.zeros(2)
    crossing_word = None
    for word, value in words:
        if value == 0:
            continue
        coefficient = value.real * 0.5 ** len(word)  # letters are Sx, Sy, Sz
        letters = dict(word)
        found, which = _pair(letters), 0
        if found is None:
            sign, turned = _times_parity(letters, n)
            found, which, coefficient = _pair(turned), 1, sign * coefficient
            if found is None:
                raise NotQuadraticError(word)
            crossing_word = word
        sign, a, b = found
        if a == b:
            constants[which] += coefficient
        else:
            # coefficient * (sign i) g_a g_b = (i/4) (A_ab g_a g_b + A_ba g_b g_a)
            forms[which, a, b] += 2 * sign * coefficient
            forms[which, b, a] -= 2 * sign * coefficient
    return MajoranaForm(forms[0], forms[1], float(constants[0]), float(constants[1]), crossing_word)


def _pair(letters: dict[int, int]) -> tuple[int, int, int] | None:
    """Sign s and a, b with ``word = s i g_a g_b``; (1, 0, 0) for the identity, None for longer words."""
    if not letters:
        return 1, 0, 0
    ends = sorted(site for site, letter in letters.items() if letter != Z)
    if not ends:
        (site, *more) = letters
        return None if more else (-1, 2 * site, 2 * site + 1)
    if len(ends) != 2:
        return None
    first, last = ends
    if len(letters) != last - first + 1 or min(letters) != first or max(letters) != last:
        return None
    # X_j Z = -i Y_j and Y_j Z = i X_j carry the string away from its first site
    a = 2 * first + (letters[first] == X)
    return (1 if letters[first] == Y else -1), a, 2 * last + (letters[last] == Y)


def _times_parity(letters: dict[int, int], n: int) -> tuple[int, dict[int, int]]:
    """Word times the product of all Z, real as every word here has an even number of X and Y; otherwise a dead end."""
    turned = {site: Z for site in range(n) if site not in letters}
    phase = 1 + 0j
    for site, letter in letters.items():
        if letter != Z:
            phase *= -1j if letter == X else 1j
            turned[site] = Y if letter == X else X
    return round(phase.real), turned

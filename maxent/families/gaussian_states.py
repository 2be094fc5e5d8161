"""Gaussian states of fermions and bosons: a covariance matrix answers everything.

Fermions: ``G_ab = <i g_a g_b>`` of the Majorana operators ``g_{2j} = c_j + c+_j``, ``g_{2j+1} = -i(c_j - c+_j)``, with
``-1 <= iG <= 1``.  Bosons: ``R = (x_1..x_n, p_1..p_n)``, ``[x, p] = i``, mean r and ``V = <{R - r, R - r}>/2``, with
``V + i Omega/2 >= 0``.  The state of some modes is the part of the matrix that belongs to them.  Under the
Jordan-Wigner map that holds for spins on consecutive sites; on other sets of sites spins have another state.
Floor: families.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import Any, ClassVar

import numpy as np

from maxent.families.majoranas import correlations, covariance, to_majoranas
from maxent.families.pfaffians import log_word, pauli_word
from maxent.families.quadratic import Quadratic, quadratic
from maxent.memory import require_memory

__all__ = [
    "BosonState", "FermionState", "NumberState", "WordState", "binary_entropy", "checked_letters", "checked_modes",
    "quadratic_of", "symplectic_form",
]  # fmt: skip

#: What a covariance matrix may miss its bounds by.
ROUNDING = 1e-10


def binary_entropy(n: np.ndarray) -> np.ndarray:
    """``-n ln n - (1 - n) ln(1 - n)``, 0 at the ends; values outside 0..1 by rounding are put there."""
    n = np.clip(n, 0.0, 1.0)
    part = lambda x: -np.where(x > 0, x, 1.0) * np.log(np.where(x > 0, x, 1.0))
    return part(n) * (n > 0) + part(1 - n) * (n < 1)


def symplectic_form(n: int) -> np.ndarray:
    """``Omega`` with ``[R_a, R_b] = i Omega_ab``, (2n, 2n)."""
    zero, one = np.zeros((n, n)), np.eye(n)
    return np.block([[zero, one], [-one, zero]])


def checked_modes(modes: Sequence[int], n: int) -> list[int]:
    """Different modes out of 0..n-1.

    Raises
    ------
    ValueError
    """
    kept = [int(s) for s in modes]
    if len(set(kept)) < len(kept) or any(not 0 <= s < n for s in kept):
        raise ValueError(f"modes must be different numbers in 0..{n - 1}, not {list(modes)}")
    return kept


def checked_letters(letters: Mapping[int, str], sites: int) -> Mapping[int, str]:
    """Letters of a word by sites out of 0..sites-1.

    Raises
    ------
    ValueError
    """
    if any(not 0 <= s < sites for s in letters):
        raise ValueError(f"sites must lie in 0..{sites - 1}, not {sorted(letters)}")
    return letters


def quadratic_of(operator: Any, statistics: str, modes: int) -> Quadratic:
    """A quadratic operator of so many modes, given as charges are.

    Raises
    ------
    TypeError, ValueError
    """
    q = operator if isinstance(operator, Quadratic) else quadratic(operator, "operator", statistics)
    if q.modes != modes:
        raise ValueError(f"the operator has {q.modes} modes, the state {modes}")
    return q


def _real_square(covariance: Any, statistics: str) -> np.ndarray:
    """A covariance as a matrix of finite real numbers with 2n rows and columns."""
    g = np.asarray(covariance)
    if g.ndim != 2 or g.shape[0] != g.shape[1] or g.shape[0] % 2:
        raise ValueError(f"a covariance of {statistics} is a (2n, 2n) matrix, not of shape {g.shape}")
    bad = np.argwhere(~np.isfinite(g))
    if len(bad):
        (a, b), verb = bad[0].tolist(), "is" if len(bad) == 1 else "are"
        raise ValueError(
            f"a covariance of {statistics} is finite: {len(bad)} of {g.size} entries {verb} not, "
            f"first [{a}, {b}] = {g[a, b]}"
        )
    if np.iscomplexobj(g):
        raise ValueError(
            f"a covariance of {statistics} is real: imaginary parts reach {np.abs(g.imag).max(initial=0.0):.3g}, "
            f"dtype {g.dtype}"
        )
    return g


class NumberState:
    """What states of free particles have in common that know ``number``, the matrix ``<c+_a c_b>``."""

    #: These families have no prior.
    relative_entropy: ClassVar[None] = None
    number: Any

    @property
    def modes(self) -> int:
        """Number of modes."""
        return len(self.number)

    @property
    def occupations(self) -> np.ndarray:
        """``<c+_a c_a>`` of every mode, (n,)."""
        return np.real(np.diag(self.number)).copy()


class WordState(ABC):
    """What states have in common that know the means of products of Pauli matrices."""

    @abstractmethod
    def log_word(self, letters: Mapping[int, str]) -> tuple[float, float]:
        """Sign and logarithm of the size of the mean, which may be too small for a number."""

    def mean_word(self, letters: Mapping[int, str]) -> float:
        """Expectation value of a product of Pauli matrices such as ``{0: "X", 3: "X"}``; 0 if it changes the parity.

        Sites are modes under the Jordan-Wigner map, with ``Z = 1 - 2n``.

        Raises
        ------
        ValueError
            A site that does not exist, or a letter that is none.
        """
        sign, size = self.log_word(letters)
        return sign * float(np.exp(size))


@dataclass(frozen=True)
class FermionState(NumberState, WordState):
    """A Gaussian state of n fermion modes.

    Attributes
    ----------
    covariance : (2n, 2n) ndarray
        G, real antisymmetric.
    entropy : float
        Von Neumann entropy in nats.
    log_partition : float
        NaN where the state comes from no multipliers.
    """

    covariance: np.ndarray
    entropy: float
    log_partition: float = float("nan")

    @classmethod
    def of(cls, covariance: Any) -> FermionState:
        """The state of a covariance matrix, such as one read from a file.

        Raises
        ------
        ValueError
            Not real antisymmetric of even size, or ``|iG| > 1``: no state has it.
        """
        g = _real_square(covariance, "fermions")
        off = float(np.abs(g + g.T).max(initial=0.0))
        if off > ROUNDING:
            raise ValueError(f"a covariance of fermions is real and antisymmetric: |G + G^T| is {off:.1e}")
        g = 0.5 * (g - g.T)
        largest = float(np.abs(np.linalg.eigvalsh(1j * g)).max(initial=0.0))
        if largest > 1 + ROUNDING:
            raise ValueError(f"no state has this covariance: |iG| reaches {largest:.12g}, at most 1 is possible")
        return cls(g, _fermion_entropy(g))

    @classmethod
    def of_correlations(cls, number: Any, pair: Any = None) -> FermionState:
        """The state with ``number[a, b] = <c+_a c_b>`` and ``pair[a, b] = <c_a c_b>``.

        Raises
        ------
        ValueError
            Occupations outside 0..1, or other matrices that no state has.
        """
        n = np.asarray(number)
        off = float(np.abs(n - n.conj().T).max(initial=0.0))
        if off > ROUNDING:
            raise ValueError(f"<c+_a c_b> must be Hermitian: |N - N^H| is {off:.1e}")
        if pair is None:
            levels = np.linalg.eigvalsh(n)
            if len(levels) and (levels[0] < -ROUNDING or levels[-1] > 1 + ROUNDING):
                raise ValueError(f"occupations must lie in 0..1, these reach from {levels[0]:.6g} to {levels[-1]:.6g}")
        return cls.of(covariance(n, None if pair is None else np.asarray(pair)))

    @classmethod
    def pattern(cls, occupied: Sequence[int]) -> FermionState:
        """Product state with given occupations 0 or 1 (or anything between)."""
        return cls.of_correlations(np.diag(np.asarray(occupied, float)))

    @property
    def modes(self) -> int:
        """Number of modes."""
        return len(self.covariance) // 2

    @property
    def number(self) -> np.ndarray:
        """``<c+_a c_b>``, (n, n)."""
        return correlations(self.covariance)[0]

    @property
    def pair(self) -> np.ndarray:
        """``<c_a c_b>``, (n, n)."""
        return correlations(self.covariance)[1]

    def mean(self, operator: Any) -> float:
        """Expectation value of a quadratic operator, given as charges are.

        Parameters
        ----------
        operator : (n, n) array_like or scipy.sparse, pair (h, D) or triple (h, D, constant), Periodic

        Raises
        ------
        TypeError, ValueError
        """
        return self.mean_of(quadratic_of(operator, "fermions", self.modes))

    def mean_of(self, q: Quadratic) -> float:
        """`mean` of an operator that was checked."""
        a, half = to_majoranas(*q.matrices())
        return float(0.25 * np.sum(a * self.covariance) + half + q.constant)

    def log_word(self, letters: Mapping[int, str]) -> tuple[float, float]:
        """Sign (1, -1 or 0) and logarithm of the size of the mean of a product of Pauli matrices.

        Right as far as entries of the covariance are, which are rounded to about 1e-16.  That leaves all digits of
        ``X_0 X_r`` at any distance where neighbours align (the transverse field below the coupling); where the field
        wins, correlations fall faster than the rounding does, and far away the logarithm is that of rounding.

        Raises
        ------
        ValueError
            A site that does not exist, or a letter that is none.
        """
        return log_word(self.covariance, pauli_word(checked_letters(letters, self.modes)))

    def reduced(self, modes: Sequence[int]) -> FermionState:
        """The state of some modes, in the order given, the others traced out."""
        kept = checked_modes(modes, self.modes)
        at = np.array([i for s in kept for i in (2 * s, 2 * s + 1)], int)
        g = self.covariance[np.ix_(at, at)]
        return FermionState(g, _fermion_entropy(g))

    def density(self) -> np.ndarray:
        """Density matrix (2^n, 2^n); mode 0 is the slowest index, 1 means occupied.

        Raises
        ------
        ResourceError
            When it would not fit into memory.
        """
        n = self.modes
        require_memory(64 * 4**n, f"the density matrix of {n} modes needs {{need}}")
        rho = np.eye(1 << n, dtype=complex)
        levels, frame = _pairs(self.covariance)
        operators = majorana_operators(n)
        # independent pairs: rho = prod (1 + i y g' g'')/2 with y = <i g' g''>
        for k, y in enumerate(levels):
            first = _combination(operators, frame[:, 2 * k])
            second = _combination(operators, frame[:, 2 * k + 1])
            rho = 0.5 * (rho + 1j * y * (first @ (second @ rho)))
        return 0.5 * (rho + rho.conj().T)


def _combination(operators: list[Any], coefficients: np.ndarray) -> Any:
    total = operators[0] * coefficients[0]
    for c, g in zip(coefficients[1:], operators[1:], strict=True):
        total = total + c * g
    return total


@lru_cache(maxsize=4)
def majorana_operators(n: int) -> list[Any]:
    """The operators ``g_0 .. g_{2n-1}`` of n modes as sparse (2^n, 2^n) matrices."""
    import scipy.sparse as sp

    x, y = sp.csr_array([[0, 1], [1, 0]], dtype=complex), sp.csr_array([[0, -1j], [1j, 0]])
    z = sp.csr_array([[1, 0], [0, -1]], dtype=complex)
    out = []
    for j in range(n):
        for letter in (x, y):
            op = sp.eye_array(1, dtype=complex, format="csr")
            for k in range(n):
                op = sp.kron(op, z if k < j else letter if k == j else sp.eye_array(2), format="csr")
            out.append(op)
    return out


def _pairs(g: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Levels y and a frame O (2n, 2n) with ``O^T G O`` made of blocks [[0, y], [-y, 0]]."""
    from maxent.families.antisymmetric import canonical_form

    form = canonical_form(g)
    return form.levels, form.frame


def _fermion_entropy(g: np.ndarray) -> float:
    y = np.linalg.eigvalsh(1j * g) if len(g) else np.zeros(0)
    return float(0.5 * binary_entropy(0.5 * (1 + y)).sum())


@dataclass(frozen=True)
class BosonState(NumberState):
    """A Gaussian state of n boson modes.

    Attributes
    ----------
    covariance : (2n, 2n) ndarray
        V, real symmetric, of ``R = (x_1..x_n, p_1..p_n)``.
    displacement : (2n,) ndarray
        Mean of R.
    entropy : float
    log_partition : float
        NaN where the state comes from no multipliers.
    """

    covariance: np.ndarray
    displacement: np.ndarray
    entropy: float
    log_partition: float = float("nan")

    @classmethod
    def of(cls, covariance: Any, displacement: Any = None) -> BosonState:
        """The state of a covariance matrix and a mean.

        Raises
        ------
        ValueError
            Not real symmetric of even size, or below the uncertainty relation ``V + i Omega/2 >= 0``.
        """
        v = _real_square(covariance, "bosons")
        off = float(np.abs(v - v.T).max(initial=0.0))
        if off > ROUNDING * max(1.0, np.abs(v).max(initial=0.0)):
            raise ValueError(f"a covariance of bosons is real and symmetric: |V - V^T| is {off:.1e}")
        v, n = 0.5 * (v + v.T), len(v) // 2
        r = np.zeros(2 * n) if displacement is None else np.asarray(displacement, float)
        if r.shape != (2 * n,):
            raise ValueError(f"the mean of R has shape ({2 * n},), not {r.shape}")
        smallest = float(np.linalg.eigvalsh(v + 0.5j * symplectic_form(n)).min(initial=0.0))
        if smallest < -ROUNDING * max(1.0, np.abs(v).max(initial=0.0)):
            raise ValueError(
                f"no state has this covariance: V + i Omega/2 has the eigenvalue {smallest:.6g}, below the uncertainty "
                "relation"
            )
        return cls(v, r, _boson_entropy(v))

    @property
    def modes(self) -> int:
        """Number of modes."""
        return len(self.covariance) // 2

    @cached_property
    def symplectic_levels(self) -> np.ndarray:
        """Symplectic eigenvalues of V, ascending, 1/2 for a pure mode."""
        return _symplectic(self.covariance)

    @property
    def number(self) -> np.ndarray:
        """``<b+_a b_b>``, (n, n), the displacement included."""
        n = self.modes
        v = self.covariance + np.outer(self.displacement, self.displacement)
        xx, xp, pp = v[:n, :n], v[:n, n:], v[n:, n:]
        return 0.5 * (xx + pp - np.eye(n)) + 0.5j * (xp - xp.T)

    def mean(self, operator: Any) -> float:
        """Expectation value of an operator that is quadratic and linear, given as charges are.

        Raises
        ------
        TypeError, ValueError
        """
        q = quadratic_of(operator, "bosons", self.modes)
        m, d, constant = q.phase_space()
        r = self.displacement
        return float(0.5 * np.sum(m * (self.covariance + np.outer(r, r))) + d @ r + constant)

    def reduced(self, modes: Sequence[int]) -> BosonState:
        """The state of some modes, in the order given, the others traced out."""
        kept = checked_modes(modes, self.modes)
        at = np.array([*kept, *[s + self.modes for s in kept]], int)
        v = self.covariance[np.ix_(at, at)]
        return BosonState(v, self.displacement[at], _boson_entropy(v))


def _symplectic(v: np.ndarray) -> np.ndarray:
    """Symplectic eigenvalues of a positive matrix, ascending."""
    n = len(v) // 2
    if not n:
        return np.zeros(0)
    try:
        root = np.linalg.cholesky(v)
    except np.linalg.LinAlgError:
        e, u = np.linalg.eigh(v)
        root = u * np.sqrt(np.maximum(e, 0.0))
    return np.linalg.eigvalsh(1j * root.T @ symplectic_form(n) @ root)[n:]


def _boson_entropy(v: np.ndarray) -> float:
    nu = np.maximum(_symplectic(v) - 0.5, 0.0)
    inside = np.where(nu > 0, nu, 1.0)
    return float(np.sum((nu > 0) * (np.log1p(nu) + nu * np.log1p(1 / inside))))

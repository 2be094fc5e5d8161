"""Start states by covariance matrices: ground and thermal states of quadratic Hamiltonians, patterns, files.

A start is a mixture of parts, each with a sharp parity (rings of spins 1/2, where a charge is one quadratic form per
parity) or with none (everything else), and each described by its second moments: ``<i g_a g_b>`` for fermions,
``<{R, R}>/2`` and ``<R>`` for bosons.  Quadratic charges need no more.  Floor: quench.  Must not know which
Hamiltonian drives the dynamics.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from maxent.families.antisymmetric import canonical_form
from maxent.families.gaussian_states import BosonState, FermionState, symplectic_form
from maxent.families.majoranas import covariance, to_majoranas
from maxent.families.pfaffians import log_pfaffian
from maxent.families.quadratic import Quadratic
from maxent.families.spin_rings import SpinRing
from maxent.lattice import OneBody, OperatorSum
from maxent.quench.gaussian_forms import sector_forms
from maxent.quench.starts import read_array
from maxent.text import plural

__all__ = [
    "GaussianStart",
    "Part",
    "gaussian_ground",
    "gaussian_pattern",
    "gaussian_state",
    "gaussian_thermal",
    "read_covariance",
    "vacuum_parity",
]

EPS = float(np.finfo(float).eps)
#: Levels closer than this fraction of the largest one are equal, and zero when closer than that to zero.
EQUAL = 1e-10


@dataclass(frozen=True, eq=False)
class Part:
    """One part of a start.

    Attributes
    ----------
    weight : float
        Probability.
    parity : {1, -1, 0}
        Product of all Z where it is sharp and matters; 0 otherwise.
    covariance : (2n, 2n) ndarray
    displacement : (2n,) ndarray or None
        Mean of R; None for fermions.
    """

    weight: float
    parity: int
    covariance: np.ndarray
    displacement: np.ndarray | None = None


@dataclass(frozen=True, eq=False)
class GaussianStart:
    """A start of free particles.

    Attributes
    ----------
    statistics : {"fermions", "bosons"}
        Spins 1/2 are fermions.
    parts : tuple of Part
    label : str
    accuracy : float
        Estimated error of the entries of the covariance.
    note : str
        What the reader must know, such as a degenerate ground level; empty otherwise.

    Examples
    --------
    >>> from maxent.lattice import Ring, formula
    >>> start = gaussian_ground(formula("-X[i]*X[i+1] - 2*Z[i]", Ring(60)))
    >>> value, accuracy = start.mean(formula("-X[i]*X[i+1] - 0.5*Z[i]", Ring(60)))
    >>> f"{value / 60:.10f}", accuracy < 1e-10
    ('-0.7257656334', True)
    """

    statistics: str
    parts: tuple[Part, ...]
    label: str
    accuracy: float
    note: str = ""

    @property
    def modes(self) -> int:
        """Number of modes or sites."""
        return len(self.parts[0].covariance) // 2

    @property
    def state(self) -> FermionState | BosonState:
        """The Gaussian state, of a start that is one.

        Raises
        ------
        ValueError
            A mixture of several, such as a thermal state of a ring of spins.
        """
        if len(self.parts) > 1:
            raise ValueError(f"the start {self.label!r} is a mixture of {len(self.parts)} parts, no Gaussian state")
        (part,) = self.parts
        if self.statistics == "fermions":
            return FermionState.of(part.covariance)
        return BosonState.of(part.covariance, part.displacement)

    def mean(self, operator: Any) -> tuple[float, float]:
        """Expectation value of a quadratic operator, and how accurate the calculation is.

        Parameters
        ----------
        operator : OperatorSum, OneBody, or whatever `Bilinears` takes as a charge

        Returns
        -------
        value, accuracy : float

        Raises
        ------
        TypeError, ValueError
            Not quadratic, of another size, or without a meaning in a state whose parity is not sharp.
        """
        value = size = 0.0
        for part, form in self.paired(operator):
            f, line, constant = phase_form(form, self.statistics)
            covariance, r = part.covariance, part.displacement
            value += part.weight * (float(np.sum(f * covariance)) + constant)
            amount = float(np.abs(f).sum())
            if r is not None:
                value += part.weight * float(r @ f @ r + line @ r)
                amount *= max(1.0, float(np.abs(covariance).max()) + float(np.abs(r).max()) ** 2)
                amount += float(np.abs(line) @ np.abs(r))
            size += part.weight * (amount + abs(constant))
        return value, size * (self.accuracy + EPS * math.sqrt(2 * self.modes))

    def paired(self, operator: Any) -> list[tuple[Part, Quadratic]]:
        """Every part with the form that the operator has there.

        Raises
        ------
        TypeError, ValueError
            As for `mean`.
        """
        forms = sector_forms(operator, self.statistics)
        size = next(iter(forms.values())).modes
        if size != self.modes:
            raise ValueError(f"the operator has {plural(size, 'mode')}, the start {self.label!r} {self.modes}")
        out = []
        for part in self.parts:
            if part.parity not in forms and 0 not in forms:
                raise ValueError(
                    f"the operator is quadratic inside parity sectors only, and the start {self.label!r} has no sharp "
                    "parity: make it from a Hamiltonian on the same ring"
                )
            out.append((part, forms[part.parity] if part.parity in forms else forms[0]))
        return out


def phase_form(form: Quadratic, statistics: str) -> tuple[np.ndarray, np.ndarray, float]:
    """F, l and c with the mean ``sum F_ab C_ab + l.r + c`` of second moments C (about r, for bosons plus r r^T)."""
    if statistics == "fermions":
        a, half = to_majoranas(*form.matrices())
        return 0.25 * a, np.zeros(len(a)), half + form.constant
    m, line, constant = form.phase_space()
    return 0.5 * m, line, constant


# ---------------------------------------------------------------------- ground and thermal states


def gaussian_ground(
    hamiltonian: Any, *, statistics: str = "fermions", label: str = "ground state", rtol: float = EQUAL
) -> GaussianStart:
    """Ground state of a quadratic Hamiltonian, in general another one than that of the dynamics.

    Levels within `rtol` of the largest one above zero are degenerate with zero; the start is then the equal mixture of
    the whole ground space, since no state in it is distinguished, and its note says so.

    Parameters
    ----------
    hamiltonian : OperatorSum, OneBody, or whatever `Bilinears` takes as a charge
        On a ring of spins 1/2 both parity sectors are searched, each with the number of quasiparticles that it allows.
    statistics : {"fermions", "bosons"}, optional
        Of matrices; operators know it themselves.
    label : str, optional
    rtol : float, optional

    Raises
    ------
    TypeError, ValueError
        Not quadratic; bosons without a lowest level.
    """
    statistics = _statistics(hamiltonian, statistics)
    forms = sector_forms(hamiltonian, statistics)
    if statistics == "bosons":
        (form,) = forms.values()
        v, r = _boson_moments(form, math.inf, label)
        note = f"{label}: energy {_energy(form, v, r):.10g}."
        return GaussianStart(statistics, (Part(1.0, 0, v, r),), label, 1e-14 * _size(v), note)
    found = [_ground_sector(form, eta, rtol) for eta, form in forms.items()]
    width = max(width for *_, width in found)
    lowest = min(energy for energy, *_ in found)
    tolerance = max(rtol * width, 4 * EPS * abs(lowest))
    kept = [x for x in found if x[0] - lowest <= tolerance]
    logs = np.array([log_count for _, _, log_count, _, _ in kept])
    shares = np.exp(logs - logs.max())
    shares = shares / shares.sum()
    parts = tuple(Part(float(s), x[1], x[3], None) for s, x in zip(shares, kept, strict=True))
    log_degeneracy = float(logs.max() + np.log(np.exp(logs - logs.max()).sum()))
    gaps = [x[0] - lowest for x in found if x[0] - lowest > tolerance]
    note = f"energy {lowest:.10g}"
    if log_degeneracy > 0.5:
        many = f"{round(math.exp(log_degeneracy))}" if log_degeneracy < 30 else f"e^{log_degeneracy:.4g}"
        note = f"{many}-fold degenerate ground level, taken as the equal mixture of all of it; " + note
    elif gaps:
        note += f", the other parity {min(gaps):.3g} higher"
    return GaussianStart(statistics, parts, label, 4 * EPS * math.sqrt(len(parts[0].covariance)), f"{label}: {note}.")


def _ground_sector(form: Quadratic, eta: int, rtol: float) -> tuple[float, int, float, np.ndarray, float]:
    """Lowest energy at the parity eta, eta, logarithm of the degeneracy, covariance, and the largest level."""
    if not eta and form.conserves_number:
        h, _ = form.matrices()
        levels, vectors = np.linalg.eigh(h)
        largest = float(np.abs(levels).max(initial=0.0))
        full = np.where(np.abs(levels) <= rtol * largest, 0.5, np.where(levels < 0, 1.0, 0.0))
        count = float(np.sum(full == 0.5)) * math.log(2.0)
        g = covariance((vectors.conj() * full) @ vectors.T)
        return form.constant + float(levels[full == 1.0].sum()), 0, count, g, largest
    a, half = to_majoranas(*form.matrices())
    x, u = np.linalg.eigh(1j * a)
    n = len(a) // 2
    if n and x[n] > 10 * rtol * x[-1]:
        return _gapped_sector(form.constant + half, eta, x, u, rtol)
    shape = canonical_form(a)
    e = shape.levels
    width = float(e.max(initial=0.0))
    free = e <= rtol * width
    f = int(free.sum())
    filling = np.where(free, 0.0, -1.0)
    energy, log_count = form.constant + half - 0.5 * float(e.sum()), f * math.log(2.0)
    wants_odd = eta * shape.orientation < 0  # number of quasiparticles
    if eta and f:
        log_count -= math.log(2.0)
        if f == 1:
            filling[free] = 1.0 if wants_odd else -1.0
    elif wants_odd:
        first = float(e.min())
        lowest = e - first <= rtol * width
        filling[lowest] += 2.0 / lowest.sum()
        energy, log_count = energy + first, math.log(lowest.sum())
    g = shape.frame[:, 0::2] * filling @ shape.frame[:, 1::2].T
    return energy, eta, log_count, g - g.T, width


def _gapped_sector(
    constant: float, eta: int, x: np.ndarray, u: np.ndarray, rtol: float
) -> tuple[float, int, float, np.ndarray, float]:
    """`_ground_sector` of levels x = -e, .., -e, e, .., e that all differ from zero."""
    n = len(x) // 2
    filling = -np.sign(x)
    moments = lambda f: np.real((u * f) @ u.conj().T / 1j)
    g, e = moments(filling), x[n:]
    energy, log_count = constant - 0.5 * float(e.sum()), 0.0
    # prod Z = (-1)^n Pf G
    if eta and np.sign(log_pfaffian(g)[0]) * (-1) ** n != eta:
        lowest = np.abs(x) - e[0] <= rtol * e[-1]
        d = int(lowest.sum()) // 2
        filling[lowest] *= 1 - 2.0 / d
        g, energy, log_count = moments(filling), energy + float(e[0]), math.log(d)
    return energy, eta, log_count, 0.5 * (g - g.T), float(e[-1])


def vacuum_parity(covariance: np.ndarray) -> int:
    """Parity ``prod Z`` of a pure Gaussian state of fermions: +1 or -1, and 0 for a mixed one."""
    shape = canonical_form(covariance)
    if np.abs(shape.levels - 1).max(initial=0.0) > 1e-8:
        return 0
    # prod Z = (-i)^n <g_0 .. g_2n-1> = (-1)^n Pf G, and Pf G = det O prod y
    return int(shape.orientation * (-1) ** len(shape.levels))


def gaussian_thermal(
    hamiltonian: Any, beta: float, *, statistics: str = "fermions", label: str | None = None
) -> GaussianStart:
    """Thermal state ``exp(-beta H)/Z`` of a quadratic Hamiltonian, in general another one than that of the dynamics.

    Parameters
    ----------
    hamiltonian : OperatorSum, OneBody, or whatever `Bilinears` takes as a charge
        A ring of spins 1/2 has both parity sectors, weighed by their partition functions.
    beta : float
        Inverse temperature; any sign for fermions, positive for bosons.
    statistics : {"fermions", "bosons"}, optional
        Of matrices; operators know it themselves.
    label : str, optional

    Raises
    ------
    TypeError, ValueError
        Not quadratic, beta not finite; bosons without a lowest level.
    """
    if isinstance(beta, bool) or not isinstance(beta, int | float | np.number) or not math.isfinite(beta):
        raise ValueError(f"beta must be a finite number, not {beta!r}")
    name = f"thermal state at beta = {beta:g}" if label is None else label
    statistics = _statistics(hamiltonian, statistics)
    forms = sector_forms(hamiltonian, statistics)
    if statistics == "bosons":
        (form,) = forms.values()
        if beta <= 0:
            raise ValueError(f"bosons need a positive beta, not {beta:g}")
        v, r = _boson_moments(form, float(beta), name)
        return GaussianStart(statistics, (Part(1.0, 0, v, r),), name, 1e-14 * _size(v))
    size = next(iter(forms.values())).modes
    accuracy = 4 * EPS * math.sqrt(2 * size)
    if len(forms) == 1:
        (form,) = forms.values()
        shape = canonical_form(to_majoranas(*form.matrices())[0])
        g = shape.frame[:, 0::2] * -np.tanh(0.5 * beta * shape.levels) @ shape.frame[:, 1::2].T
        return GaussianStart(statistics, (Part(1.0, 0, g - g.T),), name, accuracy)
    state = SpinRing(size, {"energy": hamiltonian.pauli_terms()}).state(np.array([float(beta)]))
    parts = tuple(Part(s.weight, s.parity, s.covariance(2 * s.mean - 1)) for s in state.sectors if s.weight > 0)
    return GaussianStart(statistics, parts, name, accuracy)


def _boson_moments(form: Quadratic, beta: float, label: str) -> tuple[np.ndarray, np.ndarray]:
    """Covariance and mean of R in the ground (beta infinite) or thermal state."""
    m, line, _ = form.phase_space()
    try:
        root = np.linalg.cholesky(m)
    except np.linalg.LinAlgError:
        lowest = float(np.linalg.eigvalsh(m)[0])
        raise ValueError(
            f"{label}: these bosons have no lowest level: the form over positions and momenta has the eigenvalue "
            f"{lowest:.6g}, not above 0"
        ) from None
    omega = symplectic_form(len(m) // 2)
    x, u = np.linalg.eigh(1j * root.T @ omega @ root)
    f = 0.5 * np.sign(x) if math.isinf(beta) else 0.5 / np.tanh(0.5 * beta * x)
    # V = W f(x) W^-1 i Omega with W = L^-T U: the columns of L^-T U are x^(-1/2) times symplectic vectors
    back = np.linalg.solve(root.T, u)
    v = np.real((back * (f * x)) @ back.conj().T)
    return 0.5 * (v + v.T), -np.linalg.solve(m, line)


def _energy(form: Quadratic, v: np.ndarray, r: np.ndarray) -> float:
    f, line, constant = phase_form(form, "bosons")
    return float(np.sum(f * (v + np.outer(r, r))) + line @ r + constant)


def _size(v: np.ndarray) -> float:
    return max(1.0, float(np.abs(v).max(initial=0.0)))


# ---------------------------------------------------------------------- patterns and files


def gaussian_pattern(occupied: Sequence[float], *, label: str | None = None) -> GaussianStart:
    """Product of fermion modes (or spins 1/2 along z) with given occupations.

    Parameters
    ----------
    occupied : sequence of float
        Occupation of every mode, 0..1: 0 empty or spin up, 1 filled or spin down.  If all are sharp, so is the parity.
    label : str, optional

    Raises
    ------
    ValueError
        Occupations outside 0..1, or none.
    """
    n = np.asarray(occupied, float)
    if n.ndim != 1 or not len(n) or not np.all((n >= 0) & (n <= 1)):
        raise ValueError(f"occupations must be numbers in 0..1, one per mode, not {n.tolist()}")
    g = np.zeros((2 * len(n), 2 * len(n)))
    i = 2 * np.arange(len(n))
    g[i, i + 1], g[i + 1, i] = 2 * n - 1, 1 - 2 * n
    sharp = bool(np.all((n == 0) | (n == 1)))
    parity = (-1) ** int(n.sum()) if sharp else 0
    text = "".join(str(int(x)) for x in n) if sharp else "product of occupations"
    return GaussianStart("fermions", (Part(1.0, parity, g),), text if label is None else label, EPS)


def gaussian_state(
    covariance: Any,
    displacement: Any = None,
    *,
    statistics: str = "fermions",
    label: str = "covariance matrix",
) -> GaussianStart:
    """Start from second moments, checked to be those of a state.

    Parameters
    ----------
    covariance : (2n, 2n) array_like
        ``<i g_a g_b>`` for fermions, V for bosons: the conventions of docs/gaussian-conventions.md.
    displacement : (2n,) array_like, optional
        Mean of R, for bosons.
    statistics : {"fermions", "bosons"}, optional
    label : str, optional

    Raises
    ------
    ValueError
        Not the moments of any state; names what is violated and by how much.
    """
    try:
        if statistics == "fermions":
            if displacement is not None:
                raise ValueError("fermions have no displacement")
            state = FermionState.of(covariance)
            part = Part(1.0, vacuum_parity(state.covariance), state.covariance)
        elif statistics == "bosons":
            bosons = BosonState.of(covariance, displacement)
            part = Part(1.0, 0, bosons.covariance, bosons.displacement)
        else:
            raise ValueError(f"statistics must be 'fermions' or 'bosons', not {statistics!r}")
    except ValueError as bad:
        raise ValueError(f"start {label!r}: {bad}") from None
    return GaussianStart(statistics, (part,), label, EPS * _size(part.covariance))


def read_covariance(file: str | Path, *, statistics: str = "fermions", label: str | None = None) -> GaussianStart:
    """Start from a file with a covariance matrix: `name.npy` or `name.npz:array`; pickled objects are never loaded.

    Raises
    ------
    OSError
        The file cannot be opened.
    TypeError, ValueError
        Not such a file, or not the covariance matrix of a state.
    """
    value, title = read_array(file)
    return gaussian_state(value, statistics=statistics, label=label or title)


def _statistics(operator: Any, given: str) -> str:
    if isinstance(operator, OneBody):
        return operator.statistics
    if isinstance(operator, OperatorSum):
        from maxent.lattice import Bosons

        return "bosons" if isinstance(operator.sites.kind(0), Bosons) else "fermions"
    return given

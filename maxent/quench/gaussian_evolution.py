"""Time evolution of free particles: second moments, quadratic observables, and what is left after all times.

The operators move linearly, ``g(t) = S(t) g`` with ``S = W exp(-i x t) W^-1`` over the one-particle levels x (each
with both signs), so that second moments move as ``C(t) = S C S^T`` and every quadratic mean is a sum over pairs of
levels,

    <O(t)> = sum_kl B_kl exp(-i (x_k - x_l) t) + sum_k b_k exp(-i x_k t) + constant,

the second sum for displaced bosons.  The average over all times keeps equal levels; the temporal variance adds up
*equal gaps* before it squares.  Thousands of one-particle gaps stand for exponentially many gaps of the many-body
system: free chains keep recurring where others would not, and a finite size has its revivals.  Dephased moments answer
quadratic questions only: a mean of four or more operators is not that of the Gaussian state with these moments, except
at infinite size.  Floor: quench.  Must not know charges or multipliers.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import scipy.linalg as sla

from maxent.families.gaussian_states import symplectic_form
from maxent.families.majoranas import to_majoranas
from maxent.families.quadratic import Quadratic
from maxent.memory import require_memory
from maxent.quench.gaussian_starts import EQUAL, GaussianStart, Part, phase_form

__all__ = ["GaussianEvolution", "Motion", "gaussian_evolve"]


@dataclass(frozen=True, eq=False)
class Motion:
    """Linear motion of the operators in one part of a start.

    Attributes
    ----------
    levels : (2n,) ndarray
        x, in pairs of both signs.
    frame, inverse : (2n, 2n) complex ndarray
        W and its inverse.
    rest : (2n,) ndarray
        Where displaced bosons rest; zero for fermions.
    """

    levels: np.ndarray
    frame: np.ndarray
    inverse: np.ndarray
    rest: np.ndarray

    @classmethod
    def of(cls, form: Quadratic, statistics: str) -> Motion:
        """The motion that a quadratic Hamiltonian makes.

        Raises
        ------
        ValueError
            Bosons without a lowest level: their motion is not a sum of oscillations.
        """
        if statistics == "fermions":
            a, _ = to_majoranas(*form.matrices())
            levels, frame = np.linalg.eigh(1j * a)
            return cls(levels, frame, frame.conj().T, np.zeros(len(a)))
        m, line, _ = form.phase_space()
        try:
            root = np.linalg.cholesky(m)
        except np.linalg.LinAlgError:
            lowest = float(np.linalg.eigvalsh(m)[0])
            raise ValueError(
                "the motion of these bosons is not a sum of oscillations: the form over positions and momenta has the "
                f"eigenvalue {lowest:.6g}, not above 0"
            ) from None
        levels, u = np.linalg.eigh(1j * root.T @ symplectic_form(len(m) // 2) @ root)
        frame = sla.solve_triangular(root.T, u, lower=False)
        return cls(levels, frame, u.conj().T @ root.T, -np.linalg.solve(m, line))

    def at(self, time: float) -> np.ndarray:
        """S(t), real (2n, 2n)."""
        return np.real((self.frame * np.exp(-1j * self.levels * time)) @ self.inverse)

    @cached_property
    def clusters(self) -> np.ndarray:
        """Number of the group of equal levels of every level."""
        width = float(np.abs(self.levels).max(initial=0.0))
        order = np.argsort(self.levels)
        steps = np.concatenate([[0], np.cumsum(np.diff(self.levels[order]) > EQUAL * width)])
        out = np.empty(len(order), int)
        out[order] = steps
        return out


@dataclass(frozen=True, eq=False)
class _Path:
    """What one observable does in one part: elements over pairs of levels, over levels, and a number."""

    levels: np.ndarray
    clusters: np.ndarray
    pairs: np.ndarray
    line: np.ndarray
    constant: float


def gaussian_evolve(
    start: GaussianStart, hamiltonian: Any, observables: Mapping[str, Any] | None = None
) -> GaussianEvolution:
    """Means of quadratic observables while a quadratic Hamiltonian drives the start.

    Parameters
    ----------
    start : GaussianStart
    hamiltonian : OperatorSum, OneBody, or whatever `Bilinears` takes as a charge
    observables : dict of str to the same, optional

    Returns
    -------
    GaussianEvolution

    Raises
    ------
    TypeError, ValueError
        Something that is not quadratic or of another size.
    ResourceError

    Examples
    --------
    >>> from maxent.lattice import Chain, formula
    >>> from maxent.quench.gaussian_starts import gaussian_pattern
    >>> hop = formula("-0.5*(X[i]*X[i+1] + Y[i]*Y[i+1])", Chain(60))
    >>> moved = gaussian_evolve(gaussian_pattern([1, 0] * 30), hop, {"z": formula("Z[30]", Chain(60))})
    >>> print(moved.trace("z", [0.0, 1.0]).round(6))  # -J_0(4 t)
    [-1.       0.39715]
    """
    operators = dict(observables or {})
    n = start.modes
    require_memory(16 * 4 * n * n * (6 + len(operators)), f"the motion of {n} modes needs {{need}}")
    motions = [Motion.of(form, start.statistics) for _, form in start.paired(hamiltonian)]
    paths = {name: _paths(start, motions, q) for name, q in operators.items()}
    return GaussianEvolution(start, tuple(motions), paths)


def _paths(start: GaussianStart, motions: list[Motion], operator: Any) -> list[_Path]:
    out = []
    for (part, form), motion in zip(start.paired(operator), motions, strict=True):
        f, line, constant = phase_form(form, start.statistics)
        rest = motion.rest
        away = _away(part, motion)
        moments = motion.inverse @ _second(part, away) @ motion.inverse.conj().T
        pairs = (motion.frame.T @ f @ motion.frame.conj()) * moments
        single = (motion.frame.T @ (2 * f @ rest + line)) * (motion.inverse @ away)
        total = constant + float(rest @ f @ rest + line @ rest)
        w = part.weight
        out.append(_Path(motion.levels, motion.clusters, w * pairs, w * single, w * total))
    return out


def _away(part: Part, motion: Motion) -> np.ndarray:
    return (np.zeros(len(part.covariance)) if part.displacement is None else part.displacement) - motion.rest


def _second(part: Part, away: np.ndarray) -> np.ndarray:
    return part.covariance if part.displacement is None else part.covariance + np.outer(away, away)


@dataclass(frozen=True, eq=False)
class GaussianEvolution:
    """Second moments and means in time.

    Attributes
    ----------
    start : GaussianStart
    motions : tuple of Motion
        One per part of the start.
    """

    start: GaussianStart
    motions: tuple[Motion, ...]
    _paths: dict[str, list[_Path]]

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the observables."""
        return tuple(self._paths)

    def at(self, time: float) -> GaussianStart:
        """The state at a time, as a start of its own.

        Raises
        ------
        ValueError
            Time not finite.
        """
        if not np.isfinite(time):
            raise ValueError(f"the time must be finite, not {time!r}")
        parts = []
        for part, motion in zip(self.start.parts, self.motions, strict=True):
            s = motion.at(time)
            r = None if part.displacement is None else motion.rest + s @ _away(part, motion)
            parts.append(Part(part.weight, part.parity, s @ part.covariance @ s.T, r))
        label = f"{self.start.label} at t = {time:g}"
        growth = max(float(np.abs(m.frame).max() * np.abs(m.inverse).max()) for m in self.motions)
        return GaussianStart(self.start.statistics, tuple(parts), label, self.start.accuracy * max(1.0, growth) ** 2)

    def dephased(self) -> GaussianStart:
        """Second moments averaged over all times: what two operators find there in the long run.

        Returns
        -------
        GaussianStart
            For bosons the average of ``<R>`` is its rest position, and the spread of the motion is in the covariance.
        """
        parts = []
        for part, motion in zip(self.start.parts, self.motions, strict=True):
            away = _away(part, motion)
            moments = motion.inverse @ _second(part, away) @ motion.inverse.conj().T
            same = motion.clusters[:, None] == motion.clusters[None, :]
            c = np.real(motion.frame @ np.where(same, moments, 0.0) @ motion.frame.conj().T)
            c = 0.5 * (c - c.T) if part.displacement is None else 0.5 * (c + c.T)
            r = None if part.displacement is None else motion.rest
            parts.append(Part(part.weight, part.parity, c, r))
        label = f"{self.start.label}, averaged over all times"
        return GaussianStart(self.start.statistics, tuple(parts), label, self.start.accuracy)

    def trace(self, name: str, times: Any) -> np.ndarray:
        """Mean at given times, (t,)."""
        t = np.atleast_1d(np.asarray(times, float))
        if not np.all(np.isfinite(t)):
            raise ValueError("times must be finite numbers")
        total = np.zeros(len(t))
        for path in self._path(name):
            turn = np.exp(-1j * np.outer(t, path.levels))
            both = np.einsum("tk,tk->t", turn @ path.pairs, turn.conj())
            total += np.real(both + turn @ path.line) + path.constant
        return total

    def average(self, name: str, window: tuple[float, float]) -> float:
        """Mean over a window of time, in closed form.

        Raises
        ------
        ValueError
            A window that is not one.
        """
        a, b = window
        if not (np.isfinite(a) and np.isfinite(b) and a < b):
            raise ValueError(f"a window is two finite times, the first before the second, not {window!r}")
        total = 0.0
        centre, half = 0.5 * (a + b), 0.5 * (b - a)
        weight = lambda w: np.exp(-1j * w * centre) * np.sinc(w * half / np.pi)
        for path in self._path(name):
            gaps = path.levels[:, None] - path.levels[None, :]
            value = np.sum(path.pairs * weight(gaps)) + np.sum(path.line * weight(path.levels))
            total += float(value.real) + path.constant
        return total

    def long_time(self, name: str) -> float:
        """Mean over all times: pairs of equal levels, and levels at zero."""
        total = 0.0
        for path in self._path(name):
            same = path.clusters[:, None] == path.clusters[None, :]
            total += float(np.real(path.pairs[same].sum())) + path.constant
        return total

    def variance(self, name: str) -> float:
        """Variance in time of the mean, over all times; equal gaps are added up before they are squared."""
        gaps, elements, width = [], [], 0.0
        for path in self._path(name):
            differ = path.clusters[:, None] != path.clusters[None, :]
            gaps += [(path.levels[:, None] - path.levels[None, :])[differ], path.levels]
            elements += [path.pairs[differ], path.line]
            width = max(width, float(np.abs(path.levels).max(initial=0.0)))
        w, c = np.concatenate(gaps), np.concatenate(elements)
        order = np.argsort(w)
        starts = np.concatenate([[0], np.flatnonzero(np.diff(w[order]) > EQUAL * width) + 1])
        return float(np.sum(np.abs(np.add.reduceat(c[order], starts)) ** 2))

    def _path(self, name: str) -> list[_Path]:
        if name not in self._paths:
            raise ValueError(f"no observable is called {name!r}; there are {', '.join(self._paths) or 'none'}")
        return self._paths[name]

"""Means in time: exact traces, averages over a window, fluctuations at infinite time.

With ``A_mn = sum_i w_i <P_m psi_i|O|P_n psi_i>`` over the n distinct energies of a start,

    <O(t)> = sum_mn exp(i (E_m - E_n) t) A_mn,
    average over [a, b] = sum_mn A_mn exp(i w (a+b)/2) sinc(w (b-a)/2),        w = E_m - E_n,
    temporal variance = sum over distinct gaps w > 0 of 2 |sum of A_mn with E_m - E_n = w|^2.

The last sum runs over *equal gaps*: adding the squares of single elements is right only where no two gaps agree.
Floor: quench.  Must not know charges or multipliers.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from maxent.memory import require_memory
from maxent.quench.dephasing import Dephased, dephase
from maxent.quench.levels import number_list, positive
from maxent.text import plural

__all__ = ["Evolution", "Fluctuation", "evolve"]

EPS = float(np.finfo(float).eps)
#: Default time up to which equal gaps are told apart, in units of 1/(spectral width).
RESOLVED = 1e11
#: Phases may be off by this much, in radians.
PHASE = 1e-2


@dataclass(frozen=True)
class Fluctuation:
    """Fluctuation in time of one mean, over infinitely long times.

    Attributes
    ----------
    mean : float
        Average over all times.
    variance : float
        Of the mean in time, not in the state.
    resolution : float
        Time 1/tolerance: gaps closer than 1/resolution counted as equal.
    gaps : int
        Distinct positive gaps.
    largest_group : int
        Most pairs of levels that share one gap.
    closest : float
        Smallest difference between two gaps (or of a gap from zero) that were told apart; infinite with a single one.
    cut : int
        Chains of neighbouring gaps longer than the tolerance, cut into pieces of its length: where this is not 0,
        "equal" is no clear-cut relation at this resolution, and the variance is an estimate.
    """

    mean: float
    variance: float
    resolution: float
    gaps: int
    largest_group: int
    closest: float
    cut: int

    @property
    def standard_deviation(self) -> float:
        """Square root of the variance."""
        return math.sqrt(self.variance)


@dataclass(frozen=True, eq=False)
class Evolution:
    """Means of observables in time.

    Attributes
    ----------
    dephased : Dephased
        The start in the energy basis.
    elements : dict of str to (n, n) ndarray
        A_mn of each observable, Hermitian, over the distinct energies with weight.
    """

    dephased: Dephased
    elements: dict[str, np.ndarray]

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the observables."""
        return tuple(self.elements)

    @cached_property
    def energies(self) -> np.ndarray:
        """Distinct energies with weight, measured from the mean energy: only differences matter."""
        return self.dephased.energies - self.dephased.energy

    @property
    def horizon(self) -> float:
        """Time beyond which rounding of the energies makes phases meaningless (an error above 0.01)."""
        e = self.dephased.spectrum.energies
        size = 4 * EPS * float(np.abs(e).max())
        return PHASE / size if size else math.inf

    @property
    def slowest(self) -> float:
        """1/(smallest gap between distinct energies with weight): only longer averages dephase everything."""
        return 1.0 / float(np.diff(self.energies).min()) if len(self.energies) > 1 else 0.0

    def trace(self, name: str, times: Any) -> np.ndarray:
        """Mean at given times.

        Parameters
        ----------
        name : str
        times : (t,) array_like
            In units of 1/energy, any order and sign.

        Returns
        -------
        (t,) ndarray

        Raises
        ------
        KeyError, ValueError
            Unknown name, or times beyond the horizon.
        """
        a, times = self._elements(name), number_list("times", times)
        self._check(float(np.abs(times).max(initial=0.0)))
        out = np.empty(len(times))
        step = max(1, (1 << 22) // max(len(self.energies), 1))
        for at in range(0, len(times), step):
            z = np.exp(-1j * np.outer(self.energies, times[at : at + step]))
            out[at : at + step] = np.real(np.sum(z.conj() * (a @ z), axis=0))
        return out

    def average(self, name: str, end: float, *, start: float = 0.0) -> float:
        """Average over the times from `start` to `end`, in closed form.

        Parameters
        ----------
        name : str
        end, start : float

        Raises
        ------
        KeyError, ValueError
            Unknown name, an interval in the wrong order, or times beyond the horizon.
        """
        a = self._elements(name)
        if not (math.isfinite(start) and math.isfinite(end) and end >= start):
            raise ValueError(f"an average runs from a time to a later one, not from {start:g} to {end:g}")
        self._check(max(abs(start), abs(end)))
        gap = self.energies[:, None] - self.energies[None, :]
        middle = np.exp(1j * self.energies * (0.5 * (start + end)))
        # sin(x)/x stays exact as x goes to 0, where (exp(i x) - 1)/(i x) cancels
        weights = np.sinc(gap * ((end - start) / (2 * np.pi)))
        return float(np.real(np.sum(middle[:, None] * middle.conj()[None, :] * weights * a)))

    def stationary(self, name: str) -> float:
        """Average over all times: the mean in the dephased state."""
        return float(np.real(np.trace(self._elements(name))))

    def fluctuation(self, name: str, *, resolution: float | None = None) -> Fluctuation:
        """Mean and variance in time over all times, equal gaps taken together.

        Parameters
        ----------
        name : str
        resolution : float, optional
            Time up to which gaps are told apart: those closer than 1/resolution are equal, those below it are zero.
            Default 1e11/(spectral width), far above rounding.

        Returns
        -------
        Fluctuation

        Raises
        ------
        KeyError, ValueError
            Unknown name, a resolution that is no positive time or beyond the horizon.
        ResourceError
            The list of gaps would not fit into memory.

        Notes
        -----
        All n (n - 1)/2 gaps of the n distinct energies are sorted: O(n^2 log n) operations.
        """
        a = self._elements(name)
        width = self.dephased.spectrum.width
        if resolution is None:
            resolution = min(RESOLVED / width, self.horizon) if width else math.inf
        else:
            self._check(positive("resolution", resolution))
        e, n = self.energies, len(self.energies)
        pairs = n * (n - 1) // 2
        require_memory(72 * pairs, f"{pairs:.3g} gaps between {n} energies need {{need}}")
        upper, lower = np.triu_indices(n, 1)
        gaps, elements = e[lower] - e[upper], a[lower, upper]
        order = np.argsort(gaps)
        gaps, elements = gaps[order], elements[order]
        tolerance = 1.0 / resolution
        zero = int(np.searchsorted(gaps, tolerance, side="right"))
        mean = float(np.real(np.trace(a)) + 2 * np.real(elements[:zero].sum()))
        gaps, elements = gaps[zero:], elements[zero:]
        if not len(gaps):
            return Fluctuation(mean, 0.0, resolution, 0, 0, math.inf, 0)
        new = np.concatenate([[True], np.diff(gaps) > tolerance])
        first = gaps[np.flatnonzero(new)][np.cumsum(new) - 1]
        piece = np.floor((gaps - first) / tolerance * (1 - 4 * EPS))
        cut = int(np.sum(np.bincount(np.cumsum(new)[piece > 0]) > 0)) if piece.any() else 0
        starts = np.flatnonzero(new | np.concatenate([[False], np.diff(piece) != 0]))
        sums = np.add.reduceat(elements, starts)
        apart = np.concatenate([[gaps[0]], (gaps[1:] - gaps[:-1])[starts[1:] - 1]])
        return Fluctuation(
            mean,
            2.0 * float(np.sum(np.abs(sums) ** 2)),
            resolution,
            len(starts),
            int(np.diff(np.append(starts, len(gaps))).max()),
            float(apart.min()),
            cut,
        )

    def _elements(self, name: str) -> np.ndarray:
        if name not in self.elements:
            raise KeyError(f"no observable {name!r}; there are {', '.join(map(repr, self.elements)) or 'none'}")
        return self.elements[name]

    def _check(self, time: float) -> None:
        if time > self.horizon:
            raise ValueError(
                f"time {time:.3g} is beyond {self.horizon:.3g}, where rounding of the energies makes phases "
                "meaningless; for all times together take the dephased state"
            )


def evolve(
    dephased: Any,
    observables: Mapping[str, Any],
    *,
    start: Any = None,
    progress: Callable[[str], None] | None = None,
) -> Evolution:
    """Prepare means in time of some observables.

    Parameters
    ----------
    dephased : Dephased, Spectrum, OperatorSum or matrix
        The start in the energy basis, or what drives the dynamics, with `start`.
    observables : dict of str to OperatorSum or (D, D) matrix
        Hermitian.
    start : Start or vector, optional
        Needed when `dephased` does not hold one.
    progress : callable, optional
        Told in one line what is being done.

    Raises
    ------
    TypeError, ValueError
        Not Hermitian, other dimensions, no start.
    ResourceError
        The elements would not fit into memory.

    Examples
    --------
    A spin that starts along x and turns about z:

    >>> import numpy as np
    >>> sx, sz = np.array([[0, 0.5], [0.5, 0]]), np.diag([0.5, -0.5])
    >>> turning = evolve(sz, {"Sx": sx}, start=np.full(2, 0.5 ** 0.5))
    >>> turning.trace("Sx", [0, np.pi / 2, np.pi]).round(12) + 0.0
    array([ 0.5,  0. , -0.5])
    >>> round(turning.fluctuation("Sx").variance, 12)
    0.125
    """
    if not isinstance(dephased, Dephased):
        if start is None:
            raise ValueError("evolve needs a start, or a dephased state that holds one")
        dephased = dephase(dephased, start, progress=progress)
    n = len(dephased.energies)
    m = len(observables)
    require_memory(16 * n * n * (m + 3), f"{plural(m, 'observable')} over {n} energies need {{need}}")
    elements = {}
    for name, operator in observables.items():
        if progress is not None and n > 200:
            progress(f"elements of {name} between {n} energies")
        elements[name] = _between_energies(dephased, operator)
    return Evolution(dephased, elements)


def _between_energies(dephased: Dephased, operator: Any) -> np.ndarray:
    """``A_mn`` by pairs of blocks: elements between levels times amplitudes, summed over the levels of each energy."""
    spectrum, n = dephased.spectrum, len(dephased.energies)
    levels, out = dephased.levels, np.zeros((n, n), complex)
    blocks, at = [], 0
    for i, block in enumerate(spectrum.blocks):
        first, last = np.searchsorted(levels, [block.start, block.start + block.size])
        if last > first:
            vectors = spectrum.block_vectors(i)[:, levels[first:last] - block.start]
            blocks.append((slice(at, at + block.size), slice(first, last), vectors, block.index))
            at += block.size
    q = spectrum.conjugated(operator, states=np.concatenate([index for *_, index in blocks]))
    for left, ours, u, _ in blocks:
        rows = q[left].tocsc()
        for right, theirs, v, _ in blocks:
            part = rows[:, right]
            if not part.nnz:
                continue
            product = u.conj().T @ (part @ v)
            product = product * (dephased.amplitudes[ours].conj() @ dephased.amplitudes[theirs].T)
            product, m = _summed(product, dephased.clusters[ours], 0)
            product, k = _summed(product, dephased.clusters[theirs], 1)
            out[np.ix_(m, k)] += product
    return 0.5 * (out + out.conj().T)


def _summed(array: np.ndarray, clusters: np.ndarray, axis: int) -> tuple[np.ndarray, np.ndarray]:
    """Sums over levels of equal energy, which stand next to each other within a block."""
    first = np.flatnonzero(np.concatenate([[True], np.diff(clusters) != 0]))
    return (array if len(first) == len(clusters) else np.add.reduceat(array, first, axis=axis)), clusters[first]

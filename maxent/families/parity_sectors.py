"""Charges of spins where the parity is sharp: free quasiparticles whose number is even, odd, or exactly one.

With levels ``e_k >= 0`` of ``sum_j lam_j A_j`` and the parity sigma of the state without quasiparticles, the states of
a sector with ``P = eta`` are those with an even (odd) number of quasiparticles for ``eta sigma = 1`` (-1).  The
Kubo-Mori covariance is a sum of squares over hops ``eta+_k eta_l``, pairs ``eta+_k eta+_l`` and occupations, whose
weights are probabilities of `maxent.families.projected`: nothing special happens at zero modes or at lam = 0.

The ground space of an odd sector with several lowest levels holds one quasiparticle in any of them: `Alone`, whose
charges are matrices over those levels.  Floor: families; must not know lattices.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from functools import partial
from typing import NamedTuple

import numpy as np

from maxent.core.blocks import Blocks
from maxent.families.antisymmetric import Canonical, canonical_forms
from maxent.families.levelling import levelled
from maxent.families.majoranas import from_majoranas
from maxent.families.projected import falls, filled
from maxent.families.ring_states import SectorState
from maxent.families.stacks import Stacks

__all__ = ["Alone", "Lines", "Look", "Sector", "Thermal"]


class Lines(NamedTuple):
    """Levels of a combination of charges in a sector.

    Attributes
    ----------
    low, high : float
        Lowest and highest value over the states of the sector.
    size : float
        Sum of the sizes of all levels, for rounding.
    top : float
        Largest single level.
    forms : list
        What the sector needs to go on from here.
    levels : (n,) ndarray
        Of all quasiparticles.
    sign : {1, -1, 0}
        Parity of their number.
    """

    low: float
    high: float
    size: float
    top: float
    forms: list
    levels: np.ndarray
    sign: int


class Look(NamedTuple):
    """``ln Z`` of a sector and its derivatives; `rows` makes (m, p) whose square is the covariance."""

    log_z: float
    values: np.ndarray
    covariance: np.ndarray
    rows: Callable[[], np.ndarray]
    level: float
    lowest: float


class Thermal(NamedTuple):
    """The state of a sector: ``ln Z``, entropy, and what makes a SectorState of its weight."""

    log_z: float
    entropy: float
    make: Callable[..., SectorState]


@dataclass(frozen=True, eq=False)
class Sector:
    """The charges where the parity is sharp.

    Attributes
    ----------
    parity : {1, -1, 0}
        Of all spins.
    inner : {1, -1, 0}
        Of the free modes: ``inner * det O`` is the parity of the number of quasiparticles in a frame O.
    constant : (m,) ndarray
    matrices : tuple of (m, B, d, d) ndarrays
        Real antisymmetric blocks.
    frames : tuple of (B, 2L, d) ndarrays
        The free Majorana operators of each block.
    pinned : (2L, 2L) ndarray
        Covariance of the others.
    """

    parity: int
    inner: int
    constant: np.ndarray
    matrices: tuple[np.ndarray, ...]
    frames: tuple[np.ndarray, ...]
    pinned: np.ndarray

    @property
    def modes(self) -> int:
        """Number of quasiparticle levels."""
        return sum(a.shape[1] * a.shape[2] for a in self.matrices) // 2

    @property
    def size(self) -> int:
        """Number of states."""
        return 1 << (self.modes - bool(self.inner))

    @property
    def log_dimension(self) -> float:
        """Logarithm of the number of states."""
        return (self.modes - bool(self.inner)) * float(np.log(2.0))

    def forms(self, v: np.ndarray) -> tuple[list[Canonical], np.ndarray, int]:
        """Canonical forms of ``v.Q``, all levels, and the parity of the number of quasiparticles."""
        forms, sign = [], self.inner
        for a in self.matrices:
            forms.append(canonical_forms((v @ a.reshape(len(v), -1)).reshape(a.shape[1:])))
            sign *= int(np.prod(forms[-1].orientation))
        levels = np.concatenate([f.levels.ravel() for f in forms]) if forms else np.zeros(0)
        return forms, levels, sign

    def lines(self, v: np.ndarray) -> Lines:
        """Levels of ``v.Q``: no quasiparticle at the lowest value, or one where the parity asks for it."""
        forms, e, sign = self.forms(v)
        total, low = float(e.sum()), float(v @ self.constant)
        first = float(e.min(initial=np.inf))
        turned = sign * (-1) ** len(e)
        up, down = (first if sign < 0 else 0.0), (first if turned < 0 else 0.0)
        top = float(e.max(initial=0.0))
        return Lines(low - 0.5 * total + up, low + 0.5 * total - down, total + abs(low), top, forms, e, sign)

    def combined(self, matrix: np.ndarray, offset: np.ndarray) -> Sector:
        """The charges ``matrix @ Q - offset``."""
        new = []
        for a in self.matrices:
            b = (matrix @ a.reshape(matrix.shape[1], -1)).reshape(len(matrix), *a.shape[1:])
            new.append(0.5 * (b - b.transpose(0, 1, 3, 2)))
        return replace(self, constant=matrix @ self.constant - offset, matrices=tuple(new))

    def _diagonals(self, forms: list[Canonical]) -> np.ndarray:
        """What each quasiparticle adds to each charge, (m, n)."""
        parts = [np.zeros((len(self.constant), 0))]
        for a, f in zip(self.matrices, forms, strict=True):
            turned = a @ f.frame[:, :, 1::2]
            parts.append(np.einsum("bak,jbak->jbk", f.frame[:, :, 0::2], turned).reshape(len(a), -1))
        return np.concatenate(parts, axis=1)

    def lowest_values(self, lines: Lines) -> np.ndarray:
        """Charges in one state of lowest value."""
        mean = np.zeros(len(lines.levels))
        if lines.sign < 0 and len(mean):
            mean[int(np.argmin(lines.levels))] = 1.0
        return self.constant + self._diagonals(lines.forms) @ (mean - 0.5)

    def degeneracy(self, lines: Lines, cut: float) -> float:
        """Logarithm of the number of states within `cut` of the lowest value."""
        e, sign = lines.levels, lines.sign
        free = int(np.sum(e <= cut))
        if free or sign >= 0:
            return (free - (free > 0 and sign != 0)) * float(np.log(2.0))
        return float(np.log(max(1, np.sum(e - e.min(initial=0.0) <= cut))))

    def stacks(self) -> Stacks:
        """The same charges with any parity, for the polish of directions."""
        m = len(self.constant)
        dense = tuple(1j * a for a in self.matrices if a.shape[1])
        return Stacks(self.constant, np.zeros((m, 0)), np.zeros(0), dense, (0.5,) * len(dense), 1)

    def sharpen(self, v: np.ndarray) -> Iterator[np.ndarray]:
        """Polished directions: of levels at zero, and of several lowest levels of which one is filled."""
        if self.modes:
            yield from self.stacks().sharpen(v)
            if self.forms(v)[2] < 0:
                yield from levelled(v, self._one_particle)

    def _one_particle(self, v: np.ndarray) -> tuple[np.ndarray, Callable[[np.ndarray], np.ndarray]]:
        forms, levels, _ = self.forms(v)
        return levels, partial(self._hops, forms)

    def _frame(self, forms: list[Canonical]) -> np.ndarray:
        """Majorana operators of the quasiparticles, (2L, 2n)."""
        parts = [np.zeros((len(self.pinned), 0))]
        for f, form in zip(self.frames, forms, strict=True):
            parts.append((f @ form.frame).transpose(1, 0, 2).reshape(len(self.pinned), -1))
        return np.concatenate(parts, axis=1)

    def on_ground(self, lines: Lines, cut: float) -> tuple[Sector | Alone, float, float]:
        """The states within `cut` of the lowest value, the gap above them, and their width."""
        e, sign = lines.levels, lines.sign
        diagonal, frame = self._diagonals(lines.forms), self._frame(lines.forms)
        free = e <= cut
        alone = sign < 0 and not free.any()
        if alone:  # one quasiparticle in the lowest level, or in any of those that are equal
            free = e - e.min() <= cut
        filling = np.where(free, 0.0, -1.0)
        half = frame[:, 0::2] * filling @ frame[:, 1::2].T
        constant = self.constant + 0.5 * diagonal @ filling
        pinned = self.pinned + half - half.T
        first = float(e.min()) if alone else 0.0
        gap, width = float(e[~free].min(initial=np.inf)) - first, float(e[free].max(initial=first)) - first
        if alone:
            gap = min(gap, float(np.sort(e)[1:3].sum()) if len(e) > 2 else np.inf)  # two more quasiparticles
            which = np.flatnonzero(free)
            columns = np.stack([2 * which, 2 * which + 1], axis=1).ravel()
            return Alone(self.parity, constant, self._hops(lines.forms, which), frame[:, columns], pinned), gap, width
        matrices, frames, at = [], [], 0
        for a, f, form in zip(self.matrices, self.frames, lines.forms, strict=True):
            held = free[at : at + form.levels.size].reshape(form.levels.shape)
            at += form.levels.size
            numbers = held.sum(axis=1)
            for k in np.unique(numbers[numbers > 0]):
                blocks = np.flatnonzero(numbers == k)
                within = np.nonzero(held[blocks])[1].reshape(len(blocks), k)
                kept = np.stack([2 * within, 2 * within + 1], axis=2).reshape(len(blocks), 1, 2 * k)
                isometry = np.take_along_axis(form.frame[blocks], kept, axis=2)
                new = isometry.transpose(0, 2, 1) @ a[:, blocks] @ isometry
                matrices.append(0.5 * (new - new.transpose(0, 1, 3, 2)))
                frames.append(f[blocks] @ isometry)
        inner = sign if free.any() else 0
        return Sector(self.parity, inner, constant, tuple(matrices), tuple(frames), pinned), gap, width

    def _hops(self, forms: list[Canonical], which: np.ndarray) -> np.ndarray:
        """Charges over the states with one quasiparticle in a level out of `which`, (m, g, g), without constants."""
        m, g = len(self.constant), len(which)
        out, at = np.zeros((m, g, g), complex), 0
        for a, form in zip(self.matrices, forms, strict=True):
            width = form.levels.shape[1]
            for b in range(len(form.levels)):
                here = np.flatnonzero((which >= at) & (which < at + width))
                if len(here):
                    inside = which[here] - at
                    o = form.frame[b][:, np.stack([2 * inside, 2 * inside + 1], axis=1).ravel()]
                    for j in range(m):
                        out[j][np.ix_(here, here)] = from_majoranas(o.T @ a[j, b] @ o)[0]
                at += width
        traces = 0.5 * np.einsum("jaa->j", out)
        return out - traces[:, None, None] * np.eye(g)

    def evaluated(self, lam: np.ndarray) -> Look:
        """``ln Z``, values and covariance."""
        forms, e, sign = self.forms(lam)
        inside = filled(e, sign)
        low, half = float(lam @ self.constant), 0.5 * float(e.sum())
        diagonal = self._diagonals(forms)
        rows, at, m = [np.zeros((len(lam), 0))], 0, len(lam)
        for a, f in zip(self.matrices, forms, strict=True):
            count, width = f.levels.shape
            place = at + np.arange(count * width).reshape(count, width)
            table = place[:, :, None], place[:, None, :]  # of the pairs of levels inside each block
            at += count * width
            y = f.frame.transpose(0, 2, 1) @ a @ f.frame
            y00, y01, y10, y11 = y[..., 0::2, 0::2], y[..., 0::2, 1::2], y[..., 1::2, 0::2], y[..., 1::2, 1::2]
            one = inside.one[table]
            first, second = f.levels[:, :, None], f.levels[:, None, :]
            hop = np.maximum(one, one.transpose(0, 2, 1)) * falls(np.abs(first - second))
            pair = inside.none[table] * falls(first + second)
            off = 1 - np.eye(width)
            for part, weight in ((y00 + y11, hop), (y01 - y10, hop), (y00 - y11, pair), (y01 + y10, pair)):
                rows.append((part * (0.5 * np.sqrt(weight * off))).reshape(m, -1))
        beside = np.concatenate(rows, axis=1)

        def every() -> np.ndarray:
            h, u = np.linalg.eigh(inside.covariance)
            return np.concatenate([beside, diagonal @ (u * np.sqrt(np.maximum(h, 0.0)))], axis=1)

        return Look(
            inside.log_z + half - low, self.constant + diagonal @ (inside.mean - 0.5),
            beside @ beside.T + diagonal @ inside.covariance @ diagonal.T, every, abs(low) + half,
            low - half + (float(e.min(initial=0.0)) if sign < 0 else 0.0),
        )  # fmt: skip

    def thermal(self, lam: np.ndarray) -> Thermal:
        """The state at multipliers `lam`."""
        forms, e, sign = self.forms(lam)
        inside = filled(e, sign)
        make = partial(
            SectorState, self.parity, frame=self._frame(forms), levels=e, mean=inside.mean, parity_of_levels=sign,
            pinned=self.pinned,
        )  # fmt: skip
        log_z = inside.log_z + 0.5 * float(e.sum()) - float(lam @ self.constant)
        return Thermal(log_z, inside.log_z + float(e @ inside.mean), make)


@dataclass(frozen=True, eq=False)
class Alone:
    """Exactly one quasiparticle in g levels.

    Attributes
    ----------
    parity : {1, -1}
        Of all spins.
    constant : (m,) ndarray
    matrices : (m, g, g) ndarray
        Complex Hermitian: charges over the levels.
    frame : (2L, 2g) ndarray
        Majorana operators of the levels.
    pinned : (2L, 2L) ndarray
        Covariance of the others.
    """

    parity: int
    constant: np.ndarray
    matrices: np.ndarray
    frame: np.ndarray
    pinned: np.ndarray

    @property
    def size(self) -> int:
        """Number of states."""
        return self.matrices.shape[1]

    @property
    def log_dimension(self) -> float:
        """Logarithm of the number of states."""
        return float(np.log(self.size))

    def _blocks(self) -> Blocks:
        m = len(self.constant)
        flat = np.real(self.matrices[:, :, 0]) if self.size == 1 else np.zeros((m, 0))
        return Blocks(flat, () if self.size == 1 else (self.matrices,)).combine(np.eye(m), -self.constant)

    def lines(self, v: np.ndarray) -> Lines:
        """Levels of ``v.Q``, counted from the lowest one."""
        low = float(v @ self.constant)
        e, u = np.linalg.eigh(np.tensordot(v, self.matrices, axes=(0, 0)))
        size = float(np.abs(e).max()) + abs(low)
        return Lines(low + float(e[0]), low + float(e[-1]), size, float(e[-1] - e[0]), [u], e - e[0], -1)

    def combined(self, matrix: np.ndarray, offset: np.ndarray) -> Alone:
        """The charges ``matrix @ Q - offset``."""
        new = np.tensordot(matrix, self.matrices, axes=(1, 0))
        new = 0.5 * (new + new.conj().transpose(0, 2, 1))
        return replace(self, constant=matrix @ self.constant - offset, matrices=new)

    def lowest_values(self, lines: Lines) -> np.ndarray:
        """Charges in one state of lowest value."""
        u = lines.forms[0][:, 0]
        return self.constant + np.real(np.einsum("a,jab,b->j", u.conj(), self.matrices, u))

    def degeneracy(self, lines: Lines, cut: float) -> float:
        """Logarithm of the number of states within `cut` of the lowest value."""
        return float(np.log(np.sum(lines.levels <= cut)))

    def sharpen(self, v: np.ndarray) -> Iterator[np.ndarray]:
        """Polished directions."""
        if self.size > 1:
            yield from self._blocks().sharpen(v)

    def on_ground(self, lines: Lines, cut: float) -> tuple[Alone, float, float]:
        """The states within `cut` of the lowest value, the gap above them, and their width."""
        e, free = lines.levels, lines.levels <= cut
        u = lines.forms[0]
        frame, inside = self._turned(u), u[:, free]
        new = inside.conj().T @ self.matrices @ inside
        empty = np.where(free, 0.0, -1.0)
        half = frame[:, 0::2] * empty @ frame[:, 1::2].T
        columns = np.repeat(free, 2)
        kept = Alone(
            self.parity, self.constant, 0.5 * (new + new.conj().transpose(0, 2, 1)), frame[:, columns],
            self.pinned + half - half.T,
        )  # fmt: skip
        return kept, float(e[~free].min(initial=np.inf)), float(e[free].max())

    def _turned(self, u: np.ndarray) -> np.ndarray:
        """Majorana operators of the levels with amplitudes `u`, one column each."""
        even, odd = self.frame[:, 0::2], self.frame[:, 1::2]
        frame = np.empty_like(self.frame)
        frame[:, 0::2] = even @ u.real + odd @ u.imag
        frame[:, 1::2] = odd @ u.real - even @ u.imag
        return frame

    def evaluated(self, lam: np.ndarray) -> Look:
        """``ln Z``, values and covariance."""
        ev = self._blocks().evaluate(lam)
        assert ev.factor is not None
        return Look(
            float(ev.log_partition), ev.values, ev.covariance, ev.factor, float(ev.level), self.lines(lam).low
        )  # fmt: skip

    def thermal(self, lam: np.ndarray) -> Thermal:
        """The state at multipliers `lam`."""
        lines = self.lines(lam)
        p = np.exp(-lines.levels)
        total = float(p.sum())
        p = p / total
        make = partial(
            SectorState, self.parity, frame=self._turned(lines.forms[0]), levels=lines.levels, mean=p,
            parity_of_levels=-1, pinned=self.pinned, alone=True,
        )  # fmt: skip
        return Thermal(float(np.log(total)) - lines.low, float(np.log(total) + p @ lines.levels), make)

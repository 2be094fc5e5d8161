"""One-body matrices of translation-invariant lattices, written by distance and diagonalised by momentum.

    Q = sum_x sum_r sum_ab t_r[a, b] c+_{x,a} c_{x+r,b} + 1/2 sum_x sum_r (d_r[a, b] c+_{x,a} c+_{x+r,b} + h.c.)

with ``x`` on a ring of cells of p modes each.  With ``c_k = L^(-1/2) sum_x e^{-ikx} c_x`` the matrix of momentum k is
``h(k) = sum_r t_r e^{ikr}``, and with pairing ``[[h(k), d(k)], [d(k)^H, -h(-k)^T]]`` for ``(c_k, c+_{-k})``.  Nothing
of size L x L is ever made.  Floor: families; must not know lattices.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

__all__ = ["Periodic"]


class Periodic:
    """A one-body operator that is the same in every cell of a ring.

    Parameters
    ----------
    cells : int
        Number of cells L.
    hopping : dict of int to float, complex or (p, p) array_like
        Amplitudes t_r by distance r in cells.  Of r and -r one is enough: ``t_{-r} = t_r^H``; if both are given they
        must agree, and t_0 must be Hermitian.
    pairing : dict of int to float, complex or (p, p) array_like, optional
        Amplitudes d_r; ``d_{-r} = -d_r^T`` for fermions.
    antiperiodic : bool
        Whether an amplitude that passes from the last cell to the first one changes its sign: momenta are then
        ``2 pi (m + 1/2)/L``.

    Raises
    ------
    TypeError, ValueError
        Amplitudes of different shapes, not finite, or in conflict with one another.

    Examples
    --------
    >>> Periodic(100_000, {1: -1.0}).blocks()[0].shape
    (100000, 1, 1)
    """

    def __init__(
        self,
        cells: int,
        hopping: Mapping[int, Any],
        *,
        pairing: Mapping[int, Any] | None = None,
        antiperiodic: bool = False,
    ):
        if isinstance(cells, bool) or not isinstance(cells, int | np.integer) or cells < 1:
            raise ValueError(f"cells must be a positive integer, not {cells!r}")
        self.cells, self.antiperiodic = int(cells), bool(antiperiodic)
        given = {("hopping", r): t for r, t in hopping.items()}
        given |= {("pairing", r): t for r, t in (pairing or {}).items()}
        matrices = {key: _amplitude(value, *key) for key, value in given.items()}
        shapes = {a.shape for a in matrices.values()} or {(1, 1)}
        if len(shapes) > 1:
            raise ValueError(f"amplitudes have different shapes: {', '.join(map(str, sorted(shapes)))}")
        self.modes_per_cell = next(iter(shapes))[0]
        self.hopping = self._completed({r: a for (k, r), a in matrices.items() if k == "hopping"}, "hopping")
        self.pairing = self._completed({r: a for (k, r), a in matrices.items() if k == "pairing"}, "pairing")

    def _completed(self, given: dict[int, np.ndarray], what: str) -> dict[int, np.ndarray]:
        """Amplitudes of both directions."""
        back = (lambda a: a.conj().T) if what == "hopping" else (lambda a: -a.T)
        out = dict(given)
        for r, a in given.items():
            if -r in given and np.abs(given[-r] - back(a)).max() > 1e-12 * np.abs(a).max():
                rule = "the adjoint" if what == "hopping" else "minus the transpose"
                raise ValueError(f"{what}: the amplitude of distance {-r} is not {rule} of that of {r}")
            out[-r] = back(a)
        return out

    @property
    def modes(self) -> int:
        """Number of modes; mode ``x p + a`` is mode a of cell x."""
        return self.cells * self.modes_per_cell

    def momenta(self) -> np.ndarray:
        """Momenta (L,), in the order of the blocks."""
        return 2 * np.pi * (np.arange(self.cells) + 0.5 * self.antiperiodic) / self.cells

    def blocks(self) -> tuple[np.ndarray, np.ndarray]:
        """``h(k)`` and ``d(k)`` of all momenta, (L, p, p) each."""
        return self._at(self.hopping), self._at(self.pairing)

    def _at(self, amplitudes: dict[int, np.ndarray]) -> np.ndarray:
        k, p = self.momenta(), self.modes_per_cell
        out = np.zeros((self.cells, p, p), complex)
        for r, a in amplitudes.items():
            out += np.exp(1j * k * r)[:, None, None] * a
        return out

    def matrices(self) -> tuple[np.ndarray, np.ndarray]:
        """The same operator as dense matrices of all modes, (L p, L p): one-body part and pairing."""
        p, n = self.modes_per_cell, self.modes
        out = []
        for amplitudes in (self.hopping, self.pairing):
            total = np.zeros((n, n), complex)
            for r, a in amplitudes.items():
                for x in range(self.cells):
                    turns, y = divmod(x + r, self.cells)
                    sign = -1.0 if self.antiperiodic and turns % 2 else 1.0
                    total[x * p : (x + 1) * p, y * p : (y + 1) * p] += sign * a
            out.append(total)
        return out[0], out[1]


def _amplitude(value: Any, what: str, r: Any) -> np.ndarray:
    if isinstance(r, bool) or not isinstance(r, int | np.integer):
        raise TypeError(f"{what}: distances are integers, not {r!r}")
    a = np.asarray(value)
    if a.dtype == object or not np.issubdtype(a.dtype, np.number):
        raise TypeError(f"{what}: the amplitude of distance {r} must be a number or a matrix")
    a = a.reshape(1, 1) if a.ndim == 0 else a
    if a.ndim != 2 or a.shape[0] != a.shape[1]:
        raise ValueError(f"{what}: the amplitude of distance {r} must be a number or a square matrix, not {a.shape}")
    if not np.all(np.isfinite(a)):
        raise ValueError(f"{what}: the amplitude of distance {r} is not finite")
    if r == 0:
        off = np.abs(a - a.conj().T).max() if what == "hopping" else np.abs(a + a.T).max()
        if off > 1e-12 * np.abs(a).max():
            rule = "Hermitian" if what == "hopping" else "antisymmetric"
            raise ValueError(f"{what}: the amplitude of distance 0 must be {rule}")
    return a

"""Quadratic operators as users hand them in: checked, and in the form each evaluator wants.

Fermions: ``sum h_ab c+_a c_b + 1/2 sum (D_ab c+_a c+_b + h.c.) + constant``, h Hermitian, D antisymmetric.  Bosons: the
same with symmetric D, and linear terms ``sum (l_a b+_a + h.c.)``.  Floor: families.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.families.operators import operator_matrix
from maxent.families.periodic import Periodic

__all__ = ["Quadratic", "STATISTICS", "quadratic"]

STATISTICS = ("fermions", "bosons")


@dataclass(frozen=True, eq=False)
class Quadratic:
    """A checked quadratic operator.

    Attributes
    ----------
    hopping : (n, n) ndarray, CSR array or Periodic
        h, or the whole operator for a periodic one.
    pairing : (n, n) ndarray or None
    constant : float
    linear : (n,) ndarray or None
    """

    hopping: Any
    pairing: np.ndarray | None = None
    constant: float = 0.0
    linear: np.ndarray | None = None

    @property
    def is_periodic(self) -> bool:
        """Whether it is given by distances."""
        return isinstance(self.hopping, Periodic)

    @property
    def modes(self) -> int:
        """Number of modes."""
        return self.hopping.modes if isinstance(self.hopping, Periodic) else self.hopping.shape[0]

    @property
    def conserves_number(self) -> bool:
        """Whether it has neither pairing nor linear terms."""
        if isinstance(self.hopping, Periodic):
            return not self.hopping.pairing
        return self.pairing is None and self.linear is None

    def matrices(self) -> tuple[np.ndarray, np.ndarray | None]:
        """Hopping h and pairing D as dense matrices; D is None without pairing."""
        if isinstance(self.hopping, Periodic):
            h, d = self.hopping.matrices()
            return h, d if self.hopping.pairing else None
        h = self.hopping.toarray() if sp.issparse(self.hopping) else self.hopping
        return h, self.pairing

    def phase_space(self) -> tuple[np.ndarray, np.ndarray, float]:
        """M, d and constant with ``Q = R.M.R/2 + d.R + constant`` for bosons, ``R = (x.., p..)``."""
        h, pairing = self.matrices()
        n = len(h)
        d = np.zeros_like(h) if pairing is None else pairing
        # b+_a b_b = (x - ip)_a (x + ip)_b / 2, of which -1/2 per mode is the order of b and b+
        xx, pp = np.real(h) + np.real(d), np.real(h) - np.real(d)
        xp = np.imag(d) - np.imag(h)
        m = np.block([[xx, xp], [xp.T, pp]])
        linear = np.zeros(n) if self.linear is None else self.linear
        line = np.sqrt(2.0) * np.concatenate([np.real(linear), np.imag(linear)])
        return m, line, self.constant - 0.5 * float(np.trace(h).real)


def quadratic(value: Any, label: str, statistics: str) -> Quadratic:
    """A checked operator.

    Parameters
    ----------
    value : (n, n) array_like or scipy.sparse, Periodic, Quadratic, or tuple
        A tuple is ``(h, D)``, ``(h, D, constant)`` or, for bosons, ``(h, D, constant, l)``; D may be None.
    label : str
        For messages.
    statistics : {"fermions", "bosons"}

    Raises
    ------
    TypeError, ValueError
        Naming `label`.
    """
    if isinstance(value, Quadratic):
        return value
    if isinstance(value, Periodic):
        if statistics == "bosons" and value.pairing:
            raise ValueError(f"{label}: periodic bosons take no pairing; give dense matrices")
        return Quadratic(value)
    if not isinstance(value, tuple):
        return Quadratic(operator_matrix(value, label))
    if not 2 <= len(value) <= (3 if statistics == "fermions" else 4):
        most = "(h, D, constant)" if statistics == "fermions" else "(h, D, constant, l)"
        raise ValueError(f"{label} must be a matrix, a pair (h, D) or up to {most}, not {len(value)} things")
    first = value[0]
    constant = 0.0 if len(value) < 3 else value[2]
    if isinstance(constant, bool) or np.ndim(constant) or np.iscomplexobj(constant) or not np.isfinite(constant):
        raise ValueError(f"{label}: the constant must be a finite real number, not {constant!r}")
    if isinstance(first, Periodic):
        if value[1] is not None:
            raise ValueError(f"{label}: the pairing of a periodic operator belongs into Periodic")
        checked = quadratic(first, label, statistics)
        return Quadratic(checked.hopping, None, float(constant))
    h = operator_matrix(first, label)
    pairing = None if value[1] is None else _pairing(value[1], h.shape, label, statistics)
    linear = None
    if len(value) == 4 and value[3] is not None:
        linear = np.asarray(value[3])
        if linear.shape != h.shape[:1] or not np.all(np.isfinite(linear)):
            raise ValueError(f"{label}: linear terms must be {h.shape[0]} finite numbers, not of shape {linear.shape}")
    return Quadratic(h, pairing, float(constant), linear)


def _pairing(value: Any, shape: tuple[int, int], label: str, statistics: str) -> np.ndarray | None:
    d = value.toarray() if sp.issparse(value) else np.asarray(value)
    if d.shape != shape or not np.issubdtype(d.dtype, np.number) or not np.all(np.isfinite(d)):
        raise ValueError(f"{label}: the pairing must be a finite matrix of shape {shape}, not {d.shape}")
    sign, word = (1, "antisymmetric") if statistics == "fermions" else (-1, "symmetric")
    off = float(np.abs(d + sign * d.T).max(initial=0.0))
    if off > 1e-12 * np.abs(d).max(initial=0.0):
        raise ValueError(f"{label}: the pairing must be {word} for {statistics}: it is off by {off:.1e}")
    return 0.5 * (d - sign * d.T) if d.any() else None

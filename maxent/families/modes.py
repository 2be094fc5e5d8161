"""Independent levels: ``ln Z = sum_k g_k f(w_k)`` with ``w_k = sum_j lam_j q_jk``, for fermions, bosons and others.

Charges are ``Q_j = sum_k q_jk N_k + c_j`` with N_k the number of particles in level k (g_k copies).  One evaluation
with m charges and n levels costs O(m^2 n) in one pass over the data; 1e6 levels and 10 charges are held in memory.
What can be reached is a zonotope for fermions and a cone otherwise (`maxent.families.reachable`).  Floor: families.
Must not know what the levels are.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from maxent.core.contract import EPS, SAFETY, Barrier, Evaluation, Face, Family, Lowest, namespace
from maxent.core.pytrees import register
from maxent.families.finite import checked_charges
from maxent.families.levels import (
    ModesState,
    checked_degeneracy,
    checked_edges,
    checked_statistics,
    fill,
    level_values,
)
from maxent.families.openings import opening
from maxent.families.operators import check_size
from maxent.families.reachable import PASS, face_normals, inward, triangle_rows
from maxent.families.statistics import (
    SIGNS,
    dual_of_logs,
    exponents,
    level_entropy,
    level_terms,
    log_partitions,
    unmixing,
)
from maxent.families.steps import kept_inside

__all__ = ["Modes", "ModesState", "fill"]

#: Levels below zero by less than this many roundings of ``v.q`` are at zero; directions come out of products.
LOOSE = 16 * SAFETY

#: Nothing is exact: a rounding above zero where there are no levels.
TINY = 1e-300


@register("names", "statistics")
@dataclass(frozen=True, init=False)
class Modes(Family):
    """Charges of independent levels, each held by any number of bosons or at most one fermion per copy.

    Parameters
    ----------
    charges : dict of str to (n,) array_like
        Value of each charge for one particle in each level: 1 for the particle number, the level for the energy.
    statistics : {"fermions", "bosons", "distinguishable"}, optional
        Distinguishable particles are those of Maxwell and Boltzmann, ``ln Z = sum g exp(-w)`` (the 1/N! is counted).
    degeneracy : (n,) array_like, optional
        Number of copies g_k of each level, or quadrature weights of a density of states; 1 by default.
    constants : dict of str to float, optional
        Value of a charge without any particle (zero-point energy, filled shells).
    continuum : dict of str to float or (e,) array_like, optional
        Bosons only.  States that the levels stand for a *continuous* density of states: they are the nodes and
        `degeneracy` the weights of a quadrature, and the spectrum ends at e points where one particle has these
        charges.  Then no level can hold a condensate, ``lam.q`` stays above zero at these points, and what the levels
        cannot take up there is the excess of an `unattained` verdict.  State it only if the number of particles in the
        continuum stays finite at the edge (above two dimensions for free particles).

    Raises
    ------
    TypeError, ValueError
        No charges, wrong shapes, charges that are not finite, a degeneracy that is not positive; bosons that no
        combination of the charges confines (``ln Z`` is infinite for all multipliers).

    Examples
    --------
    >>> import numpy as np, maxent
    >>> e = np.arange(10.0)
    >>> gas = Modes({"number": np.ones(10), "energy": e})
    >>> result = maxent.solve(gas, {"number": 4, "energy": 14})
    >>> f"{result.multipliers['energy']:.6f}", f"{result.entropy:.6f}"
    ('0.213142', '6.315270')
    """

    charges: np.ndarray
    degeneracy: np.ndarray
    constant: np.ndarray
    edges: np.ndarray | None
    anchor: np.ndarray | None
    index: np.ndarray
    pinned: np.ndarray
    copies: np.ndarray
    filling: float
    names: tuple[str, ...]
    statistics: str

    def __init__(
        self,
        charges: Mapping[str, Any],
        statistics: str = "fermions",
        degeneracy: Any = None,
        *,
        constants: Mapping[str, float] | None = None,
        continuum: Mapping[str, Any] | None = None,
    ):
        given = checked_charges(charges, "Modes")
        statistics = checked_statistics(statistics)
        rows = [_charge(name, value) for name, value in given.items()]
        sizes = {len(r) for r in rows}
        if not sizes and degeneracy is None:
            raise ValueError("no charges given: Modes needs at least one charge, or a degeneracy")
        if len(sizes) > 1:
            detail = ", ".join(f"{name!r} has {len(r)}" for name, r in zip(given, rows, strict=True))
            raise ValueError(f"charges list different numbers of levels: {detail}")
        n = sizes.pop() if sizes else len(level_values("degeneracy", degeneracy))
        if not n:
            raise ValueError("no levels given: the charges are empty")
        g = checked_degeneracy(degeneracy, n)
        values = np.array(rows, float).reshape(len(rows), n)
        edges = None
        if continuum is not None:
            if statistics != "bosons":
                raise ValueError(f"continuum states where bosons condense; {statistics} do not")
            edges = checked_edges(tuple(given), continuum)
        anchor = None if statistics == "fermions" else inward(values)
        if statistics == "bosons" and anchor is None:
            raise ValueError(_unconfined(tuple(given), values))
        constant = np.array([_constant(name, (constants or {}).get(name, 0.0)) for name in given], float)
        unknown = set(constants or {}) - set(given)
        if unknown:
            raise ValueError(f"constants name {sorted(unknown)[0]!r}, which is no charge")
        self._set(
            charges=values, degeneracy=g, constant=constant, edges=edges, anchor=anchor, index=np.arange(n),
            pinned=np.zeros(n), copies=g, filling=1.0, names=tuple(given), statistics=statistics,
        )  # fmt: skip

    @classmethod
    def own(cls, names: Iterable[str], statistics: str = "fermions", degeneracy: Any = None) -> Modes:
        """The family in which the occupation of every level is a charge of its own.

        Multipliers are known in closed form, and the search starts there: it takes no iteration, pinned levels
        included.  For thousands of levels take `fill`, which needs no solver.

        Parameters
        ----------
        names : iterable of str
            One name per level.
        statistics : {"fermions", "bosons", "distinguishable"}, optional
        degeneracy : (n,) array_like, optional
            A charge counts the particles in all copies of its level.
        """
        labels = tuple(names)
        if len(set(labels)) < len(labels):
            raise ValueError("two levels have the same name")
        return cls(dict(zip(labels, np.eye(len(labels)), strict=True)), statistics, degeneracy)

    def _set(self, **known: Any) -> Modes:
        for key, value in known.items():
            object.__setattr__(self, key, value)
        return self

    def _with(self, **changed: Any) -> Modes:
        fields = {name: getattr(self, name) for name in self.__dataclass_fields__}
        return object.__new__(Modes)._set(**{**fields, **changed})

    @property
    def size(self) -> int:
        """Number of levels that are not pinned, copies counted, rounded; values are totals."""
        return round(float(self.degeneracy.sum()))

    @property
    def _sign(self) -> int:
        """S in ``n = 1/(e^w + s)``."""
        return SIGNS[self.statistics]

    @property
    def entropy_floor(self) -> float:  # type: ignore[override]
        """0 for fermions and bosons."""
        return -np.inf if self.statistics == "distinguishable" else 0.0

    @property
    def scale(self) -> np.ndarray:
        """Operator norm of each charge for fermions; otherwise of one particle in one level.  Shape (m,)."""
        if self.statistics != "fermions":
            return self._largest + np.abs(self.constant)
        up = np.maximum(self.charges, 0.0) @ self.degeneracy
        down = np.minimum(self.charges, 0.0) @ self.degeneracy
        return np.maximum(np.abs(up + self.constant), np.abs(down + self.constant))

    # ------------------------------------------------------------------ the log-partition function

    def log_partition(self, lam: Any) -> Any:
        """``ln Z(lam)``, traceable by JAX; +inf where bosons are not confined."""
        import jax.numpy as jnp

        log_z = jnp.sum(self.degeneracy * log_partitions(lam @ self.charges, self._sign)) - lam @ self.constant
        if self.edges is None:
            return log_z
        return jnp.where(jnp.min(lam @ self.edges + self._play(lam)) >= 0, log_z, jnp.inf)

    def _play(self, lam: Any) -> Any:
        """Rounding of ``lam.q`` at the edges of the continuum, where zero is allowed."""
        xp = namespace(lam)
        return 64 * EPS * (xp.abs(lam) @ xp.abs(xp.asarray(self.edges)))

    def evaluate(self, lam: Any, order: int = 2) -> Evaluation:
        """``ln Z``, values and (order 2) covariance in one pass; NumPy or JAX by the type of `lam`."""
        xp = namespace(lam)
        m, n = self.charges.shape
        step = PASS if xp is np else max(n, 1)
        log_z, low, high, largest, values = 0.0, 0.0, 0.0, 0.0, xp.zeros(m)
        covariance = xp.zeros((m, m))
        inside = True if self.edges is None else xp.min(lam @ self.edges + self._play(lam)) >= 0
        with np.errstate(over="ignore", invalid="ignore"):  # a trial point may lie anywhere; it is then refused
            for i in range(0, n, step):
                q, g = self.charges[:, i : i + step], self.degeneracy[i : i + step]
                w = lam @ q
                if self.statistics == "bosons":
                    inside = inside & (xp.min(w) > 0)
                    if xp is np and not inside:
                        break
                    w = xp.where(w > 0, w, 1.0) if xp is not np else w
                f, occupation, variance = level_terms(w, self._sign)
                log_z = log_z + g @ f
                low, high = low + g @ xp.minimum(w, 0.0), high + g @ xp.maximum(w, 0.0)
                largest = xp.maximum(largest, xp.max(xp.abs(w), initial=0.0))
                values = values + q @ (g * occupation)
                if order == 2:
                    scaled = q * xp.sqrt(g * variance)
                    covariance = covariance + scaled @ scaled.T
            held = lam @ self.constant
            lowest, level = low + held, xp.maximum(xp.abs(low + held), xp.abs(high + held))
            if self.statistics != "fermions":
                lowest = xp.where(low < 0, -xp.inf, held)
                level = xp.abs(held) + xp.abs(log_z) + largest
            # rounding of the sums, and of w by |lam| |q| at the levels that fluctuate: a condensate amplifies it
            spread = xp.sqrt(xp.trace(covariance)) if order == 2 else xp.asarray(1.0)
            size = xp.sqrt(self.constant @ self.constant) * (1 + 0.05 * n**0.5)
            rounding = 4 * EPS * (size + spread * (1 + spread * xp.sqrt(lam @ lam))) + TINY
        if xp is np and (not inside or not np.isfinite(log_z)):
            return Evaluation(np.inf, np.full(m, np.nan), np.eye(m), np.inf, np.inf)
        factor = (lambda: self._factor(lam)) if xp is np else None
        log_z = log_z - held if xp is np else xp.where(inside, log_z - held, xp.inf)
        if order < 2:
            covariance = xp.full((m, m), xp.nan)
        return Evaluation(log_z, values + self.constant, covariance, rounding, level, factor=factor, lowest=lowest)

    def _factor(self, lam: np.ndarray) -> np.ndarray:
        return triangle_rows(self.charges, self.degeneracy * level_terms(lam @ self.charges, self._sign)[2])

    # ------------------------------------------------------------------ where the search starts and may go

    def start(self) -> np.ndarray:
        """Multipliers to start from.

        Fermions: 0.  Otherwise along the combination u that confines the particles, the particle number where it is a
        charge: ``lam = u ln(1 + G/N)/u.q`` (``ln(G/N)`` for distinguishable particles) with N the target and G the
        number of levels, and from there to the multipliers of a few hundred levels that stand for all of them
        (`maxent.families.openings`).  Where every level has a charge of its own: the multipliers themselves.
        """
        m, n = self.charges.shape
        if 0 < n <= m and np.count_nonzero(self.charges) == n:
            there = self.charges != 0
            if np.all(there.sum(axis=0) == 1) and np.all(there.sum(axis=1) <= 1):
                return self._closed_form(np.argmax(there, axis=0))
        if self.anchor is None or not n:
            return np.zeros(m)
        height = self.anchor @ self.charges
        total = float(self.degeneracy.sum())
        mean, asked = float(self.degeneracy @ height) / total, -float(self.anchor @ self.constant)
        per_level = total * mean / asked if asked > 0 else 1.0
        plain = self.anchor * (np.log1p(per_level) if self.statistics == "bosons" else np.log(per_level)) / mean
        if not asked > 0 or self.edges is not None:
            return plain
        return opening(self.charges, self.degeneracy, -self.constant, plain, self._sign)

    def _closed_form(self, charge: np.ndarray) -> np.ndarray:
        """Multipliers where each level has a `charge` (n,) of its own; far out where it is pinned or beyond reach."""
        own = self.charges[charge, np.arange(len(charge))]
        n = -self.constant[charge] / (own * self.degeneracy)
        most = 1.0 if self.statistics == "fermions" else np.inf
        w = np.where(n > 0.5, -40.0, 40.0)
        some = (n > 1e-17) & (n < most)
        w[some] = exponents(n[some], self._sign)
        lam = np.zeros(len(self.constant))
        lam[charge] = w / own
        return lam

    def inside(self, lam: Any, step: Any, evaluation: Evaluation) -> Any:
        """Steps along which the dual falls and bosons stay confined; of fermions, the given ones."""
        return step if self.statistics == "fermions" else kept_inside(self, lam, step, evaluation)

    def domain(self) -> np.ndarray | None:
        """Edges of a continuous density of states."""
        return None if self.edges is None else self.edges.T

    # ------------------------------------------------------------------ questions of the verdict logic

    def traced(self) -> Family:
        """The family itself."""
        return self

    def reference(self) -> tuple[np.ndarray, np.ndarray]:
        """Means and rows with every copy of a level half full, the counting measure of fermions.

        Others have none: `filling` particles in every copy take its place, the same for all combinations of charges.
        """
        n = 0.5 if self.statistics == "fermions" else self.filling
        variance = n * (1 - self._sign * n)
        mean = n * (self.charges @ self.degeneracy) + self.constant
        return mean, triangle_rows(self.charges, variance * self.degeneracy)

    def combine(self, matrix: np.ndarray, offset: np.ndarray) -> Modes:
        """Family of the charges ``matrix @ Q - offset``; shares the charges where only the offset changes."""
        xp = namespace(matrix)
        m = self.charges.shape[0]
        names = self.names if matrix.shape[0] == len(self.names) else ()
        constant = matrix @ self.constant - offset
        if xp is np and matrix.shape[0] == m and np.array_equal(matrix, np.eye(m)):
            moved = self._with(constant=constant, names=names)
            # many particles: coordinates made for one would drown in the rounding of the targets
            return moved._with(filling=max(1.0, moved._particles / float(np.maximum(self.degeneracy.sum(), 1.0))))
        charges = matrix @ self.charges
        edges = None if self.edges is None else matrix @ self.edges
        anchor = self.anchor
        if anchor is not None:
            anchor = xp.linalg.pinv(matrix.T) @ anchor
            if xp is np and charges.shape[1] and not (len(matrix) and (anchor @ charges).min() > 0):
                anchor = inward(charges)
        return self._with(charges=charges, constant=constant, edges=edges, anchor=anchor, names=names)

    def lowest(self, v: np.ndarray, *, with_values: bool = False) -> Lowest:
        """Lowest value of ``<v.Q>``: every level with ``v.q < 0`` full, or minus infinity where none is ever full."""
        height = v @ self.charges
        held, size = float(v @ self.constant), float(np.abs(v) @ np.abs(self.constant))
        if self.statistics == "fermions":
            below = self.degeneracy @ np.minimum(height, 0.0)
            above = self.degeneracy @ np.maximum(height, 0.0)
            values = None
            if with_values:
                values = self.charges @ np.where(height < 0, self.degeneracy, 0.0) + self.constant
            flat = np.abs(height) <= 64 * EPS * np.abs(height).max(initial=0.0)
            degeneracy = float(self.degeneracy[flat].sum() * np.log(2.0))
            return Lowest(held + below, held + above, EPS * (above - below + size), values, degeneracy)
        every = height if self.edges is None else np.concatenate([height, v @ self.edges])
        unit = EPS * float(np.abs(v) @ self._largest)
        sinks, rises = self._slack(every, unit), self._slack(-every, unit)
        low, high = held - sinks, held + rises
        values = self.constant.copy() if with_values and np.isfinite(low) else None
        flat = np.inf if np.any(np.abs(height) <= SAFETY * unit) else 0.0
        return Lowest(low, high, EPS * size + unit * self._particles, values, flat)

    @cached_property
    def _largest(self) -> np.ndarray:
        """Size of each charge of one particle, (m,)."""
        return np.abs(self.charges).max(axis=1, initial=0.0)

    @cached_property
    def _particles(self) -> float:
        """Number of particles that the target of the confining combination stands for; rounding grows with it."""
        if self.anchor is None or not self.charges.shape[1]:
            return 0.0
        mean = float(self.degeneracy @ (self.anchor @ self.charges)) / float(self.degeneracy.sum())
        return max(-float(self.anchor @ self.constant), 0.0) / mean

    def _slack(self, height: np.ndarray, unit: float) -> float:
        """How far rounding of ``v.q`` can carry ``<v.Q>`` below its value without particles; inf for real levels below.

        Particles in levels where v.q is negative by rounding alone are no more than the confined ones: with
        ``v.q >= -rho u.q`` no state that meets the target of u has a lower value than ``-rho`` times that target.
        """
        below = np.flatnonzero(height < 0)
        if not len(below):
            return 0.0
        if height[below].min() < -LOOSE * unit:
            return np.inf
        if self.anchor is None:
            return 0.0
        q = self.charges if self.edges is None else np.concatenate([self.charges, self.edges], axis=1)
        confined = self.anchor @ q[:, below]
        rho = np.max(-height[below] / np.where(confined > 0, confined, np.inf))
        return float(rho * max(-float(self.anchor @ self.constant), 0.0))

    def face(self, v: np.ndarray, tol: float) -> Face | None:
        """States in which all levels with ``v.q != 0`` are pinned: full below zero, empty above."""
        height = v @ self.charges
        size = np.abs(height).max(initial=0.0)
        fermions = self.statistics == "fermions"
        lowest = float(v @ self.constant) + (float(self.degeneracy @ np.minimum(height, 0.0)) if fermions else 0.0)
        cut = max(10 * tol, 1e-12 * size)
        free = np.abs(height) <= cut
        if free.all() or lowest > cut or (not fermions and height.min() < -cut):
            return None
        full = (height < -cut) & fermions
        constant = self.constant + self.charges[:, full] @ self.degeneracy[full]
        pinned = self.pinned.copy()
        pinned[self.index[~free]] = np.where(full[~free], -np.inf, np.inf)
        family = self._with(
            charges=np.ascontiguousarray(self.charges[:, free]), degeneracy=self.degeneracy[free], constant=constant,
            index=self.index[free], pinned=pinned,
        )  # fmt: skip
        states = float(self.degeneracy[free].sum() * np.log(2.0)) if fermions else (np.inf if free.any() else 0.0)
        off = np.abs(height)
        return Face(
            family, float(off[~free].min() / size), states, exact=True, width=float(off[free].max(initial=0.0) / size)
        )

    def sharpen(self, v: np.ndarray) -> Iterator[np.ndarray]:
        """Normals of candidate faces near `v`."""
        return face_normals(self.charges, v, signed=self.statistics == "fermions")

    def barrier(self, lam: np.ndarray) -> Barrier | None:
        """Dual of ``sum_k ln N_k (g_k - N_k)``, the logarithmic barrier of the occupations themselves.

        Self-concordant as a conjugate of a self-concordant function; its minimum exists exactly if the targets are met
        by occupations that are neither empty nor full.  Multipliers are counted in units of the number of levels, so
        that the minimum lies near one over the depth.
        """
        n = self.charges.shape[1]
        w = n * (lam @ self.charges)
        fermions = self.statistics == "fermions"
        copies = self.degeneracy if fermions else np.ones(n)
        if not n or (not fermions and not w.min() > 0):
            return None
        value, occupation, curvature = dual_of_logs(copies * w, self._sign)
        gradient = -n * (self.charges @ (copies * occupation) + self.constant)
        rows = n * triangle_rows(self.charges, copies**2 * curvature)
        blur = n * (np.abs(lam) @ np.abs(self.charges))
        rounding = EPS * float(np.max(blur / (np.maximum(np.abs(w), 1.0) if fermions else w)))
        total = float(value.sum()) - n * float(lam @ self.constant)
        return Barrier(gradient, rows, 1.0, float(n), total, rounding)

    def stiffness(self, lam: np.ndarray, u: np.ndarray, *, exact: bool = True) -> float | None:
        """Largest ``|u.q_k|``, for bosons times ``coth(w_k/2)``: a seminorm of u, and better than the spread."""
        w = lam @ self.charges if self.statistics == "bosons" else np.zeros(0)
        return unmixing(w, u @ self.charges, self._sign)

    def reach(self) -> Any:
        """Largest ``|q_jk|`` of each charge: bounds the stiffness, unless bosons."""
        return np.full(len(self.constant), np.inf) if self._sign < 0 else self._largest

    # ------------------------------------------------------------------ states

    def state(self, lam: Any) -> ModesState:
        """State at multipliers `lam`, shape (m,).

        Raises
        ------
        TypeError, ValueError
            Multipliers that are not finite, or outside the domain of bosons.
        """
        if isinstance(lam, dict):
            raise TypeError("multipliers are a list in the order of the family's names, not a dict")
        array = np.asarray(lam, float)
        if array.shape != self.constant.shape:
            raise ValueError(f"multipliers must have shape {self.constant.shape}, not {array.shape}")
        if not np.all(np.isfinite(array)):
            raise ValueError(f"multipliers must be finite, not {array.tolist()}")
        w = array @ self.charges
        if self._sign < 0 and len(w) and not w.min() > 0:
            k = int(np.argmin(w))
            raise ValueError(
                f"multipliers outside the domain of bosons: lam.q is {w[k]:.6g} at level {self.index[k]}, not above 0"
            )
        f, occupation, _ = level_terms(w, self._sign)
        every, filled = self.pinned.copy(), np.where(self.pinned == -np.inf, 1.0, 0.0)
        every[self.index], filled[self.index] = w, occupation
        entropy = float(self.degeneracy @ level_entropy(w, occupation, self._sign))
        log_z = float(self.degeneracy @ f - array @ self.constant)
        return ModesState(every, filled, self.copies, self.statistics, log_z, entropy)


# ---------------------------------------------------------------- checked input


def _charge(name: str, value: Any) -> np.ndarray:
    array = level_values(f"charge {name!r}", value)
    check_size(float(np.abs(array).max(initial=0.0)), f"charge {name!r}")
    return array


def _constant(name: str, value: Any) -> float:
    array = level_values(f"the constant of {name!r}", np.atleast_1d(value))
    if len(array) != 1:
        raise ValueError(f"the constant of {name!r} must be one number, not {len(array)}")
    return float(array[0])


def _unconfined(names: tuple[str, ...], values: np.ndarray) -> str:
    why = "every combination of the charges is zero or negative for some level"
    if len(names) == 1:
        k = int(np.argmin(values[0] * (np.sign(values[0].sum()) or 1.0)))
        why = f"{names[0]!r} is {values[0, k]:.6g} at level {k}"
    return f"no charge confines the particles: {why}, so ln Z is infinite for all multipliers; add the particle number"

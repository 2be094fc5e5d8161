"""Free particles whose number is fixed: exact for any number of fermions or bosons, by sums of positive terms.

Compared with the Gaussian state of equal means this is another ensemble: the number has no multiplier and no
fluctuation, occupations of two levels are correlated, and Wick's theorem does not hold.  The covariance of charges that
are ``q_a`` for a particle in level a is ``sum_{a < b} (<n_a><n_b> - <n_a n_b>) (q_a - q_b)^2``, without cancellation.
``mu = (ln Z_N - ln Z_{N+1})/beta`` takes the place of the multiplier.  Floor: families.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from scipy.special import gammaln

from maxent.core.blocks import real_rows
from maxent.core.contract import EPS, Evaluation, Lowest
from maxent.families.fixed_levels import canonical
from maxent.families.gaussian_states import NumberState, quadratic_of
from maxent.families.hosted import Hosted
from maxent.families.levelling import levelled
from maxent.families.places import Places
from maxent.families.projected import falls
from maxent.families.stacks import Free, Stacks, adjoint, eigh, rotated

__all__ = ["Canonical", "FixedNumberState"]


@dataclass(frozen=True, eq=False)
class FixedNumberState(NumberState):
    """A state with a fixed number of particles; not Gaussian, so that only quadratic means follow from its matrix.

    Fluctuations belong to the ensemble: the number has none here, and those of single levels are `variances`; where the
    number is free they are ``n (1 -+ n)``, for a condensed level of bosons of the order of n^2.

    Attributes
    ----------
    number : (n, n) ndarray
        ``<c+_a c_b>``.
    particles : int
    entropy, log_partition : float
    insertion : float
        ``ln Z_N - ln Z_{N+1}``: beta mu; NaN when all levels are filled.
    filling, variances : (k,) ndarrays
        Means and variances, with the number fixed, of the occupations of the free levels of ``lam.Q``, lowest first.
    statistics : {"fermions", "bosons"}
    """

    number: np.ndarray
    particles: int
    entropy: float
    log_partition: float
    insertion: float
    filling: np.ndarray
    variances: np.ndarray
    statistics: str = "fermions"

    def mean(self, operator: Any) -> float:
        """Expectation value of a quadratic operator; what changes the number has none.

        Raises
        ------
        TypeError, ValueError
        """
        q = quadratic_of(operator, self.statistics, self.modes)
        return float(np.sum(q.matrices()[0] * self.number).real + q.constant)


@dataclass(frozen=True)
class Canonical(Hosted):
    """m number-conserving charges of `number` particles.

    Attributes
    ----------
    free : Stacks
        The charges without the constraint; all blocks of weight 1.
    number : int
    """

    free: Stacks
    number: int
    what: ClassVar[str] = "fixed numbers"

    @property
    def constant(self) -> np.ndarray:
        """The numbers c_j."""
        return np.asarray(self.free.constant)

    @property
    def levels(self) -> float:
        """Number of levels."""
        return self.free.levels

    @property
    def dense(self) -> tuple[Any, ...]:
        """Blocks that are matrices."""
        return self.free.dense

    def evaluate(self, lam: Any, order: int = 2) -> Evaluation:
        """``ln Z_N``, values and covariance.

        Raises
        ------
        TypeError
            For arrays of JAX.
        """
        self.require_host(lam)
        pairs = [eigh(k) for k in self.free.exponent(lam)]
        x = self._levels(lam, pairs)
        levels = canonical(x, self.number, self.free.sign)
        diagonal, rows, at = [self.free.flat], [], self.free.flat.shape[1]
        for a, (e, u) in zip(self.free.dense, pairs, strict=True):
            y = rotated(a, u)
            diagonal.append(np.real(np.einsum("jbii->jbi", y)).reshape(len(lam), e.size))
            weight = np.zeros((*e.shape, e.shape[1]))
            for b in range(len(e)):
                one = levels.one[at : at + e.shape[1], at : at + e.shape[1]]
                gap = np.abs(e[b][:, None] - e[b][None, :])
                weight[b] = np.maximum(one, one.T) * falls(gap)
                at += e.shape[1]
            rows.append(real_rows(y * np.sqrt(weight)))
        every = np.concatenate(diagonal, axis=1)
        low = float(lam @ self.constant)
        values = self.constant + every @ levels.mean
        first, second = np.nonzero(np.triu(levels.pull))
        rows.append((every[:, first] - every[:, second]) * np.sqrt(levels.pull[first, second]))
        beside = np.concatenate(rows, axis=1)
        covariance = beside @ beside.T
        bottom, top = self._ends(x)
        ground, level = low + bottom, max(abs(low + bottom), abs(low + top))
        rounding = 4 * EPS * (1 + level) * max(1.0, float(np.sqrt(np.linalg.norm(covariance))))
        return Evaluation(
            np.float64(levels.excess - ground), values, 0.5 * (covariance + covariance.T), np.float64(rounding),
            np.float64(level), factor=lambda: beside, lowest=np.float64(ground),
        )  # fmt: skip

    def combine(self, matrix: np.ndarray, offset: np.ndarray) -> Canonical:
        """The same particles with the charges ``matrix @ Q - offset``."""
        return Canonical(self.free.combine(matrix, offset), self.number)

    def _ends(self, x: np.ndarray) -> tuple[float, float]:
        """Lowest and highest sum of levels: fermions fill one after the other, bosons all go into one."""
        if self.free.sign < 0:
            return self.number * float(x.min(initial=np.inf)), self.number * float(x.max(initial=-np.inf))
        order, n = np.sort(x), self.number
        return float(order[:n].sum()), float(order[len(x) - n :].sum())

    def _first_filling(self, x: np.ndarray) -> np.ndarray:
        """Occupations (n,) of the lowest state."""
        first = np.zeros(len(x))
        order = np.argsort(x, kind="stable")
        first[order[: self.number] if self.free.sign > 0 else order[:1]] = 1.0 if self.free.sign > 0 else self.number
        return first

    def lowest(self, v: np.ndarray, *, with_values: bool = False) -> Lowest:
        """Lowest value of ``<v.Q>``: the lowest levels filled."""
        x = self.free.spectrum(v)[0]
        low, (bottom, top) = float(v @ self.constant), self._ends(x)
        size = abs(low) + (float(np.abs(x).sum()) if self.free.sign > 0 else max(abs(bottom), abs(top)))
        ground = self.ground(v, 0.0)
        degeneracy = 0.0 if ground is None else ground.log_dimension
        values = None
        if with_values:
            pairs = [eigh(k) for k in self.free.exponent(v)]
            values = self.constant + self._diagonals(pairs) @ self._first_filling(self._levels(v, pairs))
        return Lowest(low + bottom, low + top, EPS * size, values, degeneracy)

    def _levels(self, v: np.ndarray, pairs: list) -> np.ndarray:
        return np.concatenate([v @ self.free.flat, *[e.ravel() for e, _ in pairs]])

    def _diagonals(self, pairs: list) -> np.ndarray:
        """What a particle in each level adds to each charge, (m, n)."""
        parts = [self.free.flat]
        for a, (e, u) in zip(self.free.dense, pairs, strict=True):
            parts.append(np.real(np.einsum("bpi,jbpi->jbi", u.conj(), a @ u)).reshape(len(a), e.size))
        return np.concatenate(parts, axis=1)

    def _extended(self, v: np.ndarray) -> tuple[Stacks, np.ndarray]:
        """The charges and the number, counted from its value, and `v` with the level up to which is filled."""
        free = self.free
        m = len(self.constant)
        ones = [np.concatenate([a, np.broadcast_to(np.eye(a.shape[2]), (1, *a.shape[1:]))]) for a in free.dense]
        flat = np.concatenate([free.flat, np.ones((1, free.flat.shape[1]))])
        constant = np.append(self.constant, -float(self.number))
        extended = Stacks(constant, flat, free.flat_weights, tuple(ones), free.weights, free.sign)
        x = np.sort(free.spectrum(v)[0])
        if free.sign < 0:
            return extended, np.append(v, -float(x[0]) if len(x) else 0.0)
        ends = np.concatenate([x[:1] - 1, x, x[-1:] + 1]) if len(x) else np.zeros(2)
        fermi = 0.5 * (ends[self.number] + ends[self.number + 1])
        return extended, np.append(v, -fermi)[: m + 1]

    def ground(self, v: np.ndarray, tol: float) -> Free | None:
        """Levels within `tol` of the last filled one are free where they are not all filled or all empty."""
        extended, at = self._extended(v)
        ground = extended.ground(at, tol)
        if ground is None:
            return None
        count = int(np.sum(ground.flat == 0)) + sum(p.frame.shape[2] * len(p.which) for p in ground.parts)
        inside = self.number - self._filled(ground)
        ways = count if self.free.sign > 0 else count + inside - 1  # bosons may share a level
        dimension = float(gammaln(ways + 1) - gammaln(inside + 1) - gammaln(ways - inside + 1))
        return ground._replace(log_dimension=dimension)

    def _filled(self, ground: Free) -> int:
        dense = sum(float(np.einsum("bii->", p).real) for p in ground.filled)
        return int(np.sum(ground.flat == 1)) + round(dense)

    def compress(self, ground: Free) -> Canonical:
        """The free levels with the particles that are left for them."""
        return Canonical(self.free.compress(ground), self.number - self._filled(ground))

    def glance(self, v: np.ndarray) -> float:
        """Upper bound of ``lowest``: fill the modes of lowest energy."""
        diagonal = [v @ self.free.flat, *[np.real(np.einsum("bii->bi", k)).ravel() for k in self.free.exponent(v)]]
        return float(v @ self.constant) + self._ends(np.concatenate(diagonal))[0]

    def sharpen(self, v: np.ndarray) -> Iterator[np.ndarray]:
        """Candidates for exposing directions: levels at the last filled one, polished with that level as a charge.

        Of bosons the lowest levels are made equal.
        """
        if self.free.sign < 0:
            yield from levelled(v, self._one_particle)
            return
        extended, at = self._extended(v)
        for better in extended.sharpen(at / np.linalg.norm(at)):
            size = np.linalg.norm(better[:-1])
            if size > 1e-12:
                yield better[:-1] / size

    def _one_particle(self, v: np.ndarray) -> tuple[np.ndarray, Callable[[np.ndarray], np.ndarray]]:
        pairs = [eigh(k) for k in self.free.exponent(v)]

        def charges_over(which: np.ndarray) -> np.ndarray:
            m, at = len(v), self.free.flat.shape[1]
            out = np.zeros((m, len(which), len(which)), complex)
            i = np.flatnonzero(which < at)
            out[:, i, i] = self.free.flat[:, which[i]]
            for a, (e, u) in zip(self.free.dense, pairs, strict=True):
                for b in range(len(e)):
                    here = np.flatnonzero((which >= at) & (which < at + e.shape[1]))
                    inside = u[b][:, which[here] - at]
                    out[:, here[:, None], here[None, :]] = inside.conj().T @ a[:, b] @ inside
                    at += e.shape[1]
            return out

        return self._levels(v, pairs), charges_over

    def state_in(self, lam: np.ndarray, places: Places) -> FixedNumberState:
        """The state at multipliers `lam`, in the user's modes."""
        pairs = [eigh(k) for k in self.free.exponent(lam)]
        x = self._levels(lam, pairs)
        levels = canonical(x, self.number, self.free.sign)
        at, dense = self.free.flat.shape[1], []
        flat = levels.mean[:at]
        for e, u in pairs:
            dense.append((u * levels.mean[at : at + e.size].reshape(e.shape)[:, None, :]) @ adjoint(u))
            at += e.size
        whole: Any = places.layout.state(*places.fill(flat, dense), 0.0, 0.0)
        log_z = levels.excess - self._ends(x)[0] - float(lam @ self.constant)
        order = np.argsort(x, kind="stable")
        return FixedNumberState(
            whole.number, self.number, levels.entropy, log_z, levels.insertion, levels.mean[order],
            levels.variances[order], "fermions" if self.free.sign > 0 else "bosons",
        )  # fmt: skip

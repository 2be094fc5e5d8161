"""Free particles whose number is fixed: exact for any number, of fermions by projection, of bosons by recursion.

    Z_N = e^{mu N} 1/M sum_m e^{-i phi_m N} det(1 + e^{-X - mu + i phi_m}),      phi_m = 2 pi m/M,  M > n,

for fermions, at the mu that gives N particles on the average, where all terms are of one sign at the maximum.  Means
and pair probabilities of the levels are the same sum with complex occupations in it.  For bosons Z_N is the complete
homogeneous symmetric sum of the weights ``w = e^-x``, all terms of which are positive,

    N Z_N = sum_k (sum_a w_a^k) Z_{N-k},        <n_a> = sum_{k >= 1} w_a^k Z_{N-k} / Z_N

(P. T. Landsberg, Thermodynamics with Quantum Statistical Illustrations, 1961, from memory).  Compared with the Gaussian
state of equal means this is another ensemble: the number has no multiplier and no fluctuation, occupations of two
levels are correlated, and Wick's theorem does not hold.  ``mu = (ln Z_N - ln Z_{N+1})/beta`` takes the place of the
multiplier.  Floor: families.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any, ClassVar, NamedTuple

import numpy as np
from scipy.optimize import brentq
from scipy.special import gammaln

from maxent.core.blocks import real_rows
from maxent.core.contract import EPS, Evaluation, Lowest
from maxent.families.gaussian_states import NumberState, quadratic_of
from maxent.families.hosted import Hosted
from maxent.families.levelling import levelled
from maxent.families.places import Places
from maxent.families.projected import falls
from maxent.families.stacks import Free, Stacks, adjoint, eigh, rotated
from maxent.families.statistics import log_weights, occupations

__all__ = ["Canonical", "FixedNumberState"]


class Levels(NamedTuple):
    """A fixed number of particles in levels.

    Attributes
    ----------
    log_z : float
    mean : (n,) ndarray
    one : (n, n) ndarray
        ``<n_a (1 -+ n_b)>``: for fermions the probabilities that the first level is filled and the second one empty.
    covariance : (n, n) ndarray
        Of the occupations.
    """

    log_z: float
    mean: np.ndarray
    one: np.ndarray
    covariance: np.ndarray


def canonical(x: np.ndarray, number: int, sign: int) -> Levels:
    """Levels `x` (n,) with exactly `number` fermions (sign 1) or bosons (-1)."""
    return _fermions(x, number) if sign > 0 else _bosons(x, number)


def _fermions(x: np.ndarray, number: int) -> Levels:
    n = len(x)
    if number in (0, n):
        mean = np.full(n, float(number == n))
        return Levels(-float(x @ mean), mean, np.zeros((n, n)), np.zeros((n, n)))
    order = np.sort(x)
    edge = order[number - 1], order[number]
    reach = 40.0 + np.log(n)
    excess = lambda mu: float(occupations(x + mu, 1).sum()) - number
    mu = brentq(excess, -edge[1] - reach, -edge[0] + reach, xtol=1e-12, rtol=4 * EPS)
    y = x + mu
    points = n + 1 + n % 2  # odd, so that no phase is pi, where a level at zero would have a pole
    turn = np.exp(2j * np.pi * np.arange(points) / points)[:, None]
    small = np.exp(-np.abs(y))
    # ln(1 + e^{-y} turn) relative to turn = 1, from whichever exponential is small
    above = y > 0
    grown = np.where(above, 1 + small * turn, turn + small)
    log = np.log(grown).sum(axis=1) - np.log1p(small).sum()
    weight = np.exp(log) * turn[:, 0] ** (-number)
    total = float(weight.sum().real)
    share = weight / total
    filled = np.where(above, small * turn, turn) / grown
    empty = np.where(above, 1.0, small) / grown
    mean = np.real(share @ filled)
    one = np.maximum(np.real((filled * share[:, None]).T @ empty), 0.0)
    np.fill_diagonal(one, 0.0)
    # rows of the covariance add up to zero; off the diagonal it is <n_a> - P(a, not b) - <n_a><n_b>
    both = mean[:, None] - one
    np.fill_diagonal(both, mean)
    covariance = both - np.outer(mean, mean)
    log_z = float(log_weights(y, 1).sum()) + mu * number + float(np.log(total / points))
    return Levels(log_z, mean, one, 0.5 * (covariance + covariance.T))


def _bosons(x: np.ndarray, number: int) -> Levels:
    first = float(x.min()) if len(x) else 0.0
    powers = np.exp(-np.outer(np.arange(number + 1), x - first))  # w^k, w = 1 in the lowest level
    sums = np.log(powers.sum(axis=1)) if len(x) else np.zeros(number + 1)
    log = np.zeros(number + 1)
    for k in range(1, number + 1):
        terms = sums[1 : k + 1] + log[k - 1 :: -1][:k]
        top = float(terms.max())
        log[k] = top + float(np.log(np.exp(terms - top).sum())) - np.log(k)
    # Z_{N-j} / Z_N <= 1, and 0 beyond j = N
    ratio = np.concatenate([np.exp(log[::-1] - log[-1]), np.zeros(number)])
    ratios = ratio[np.arange(number + 1)[:, None] + np.arange(number + 1)[None, :]]
    mean = ratio[1 : number + 1] @ powers[1:]
    one = powers[1:].T @ ratios[1:] @ powers
    both = powers[1:].T @ ratios[1:, 1:] @ powers[1:]
    # n^2 = sum of the first n odd numbers, and <at least k in a> = w^k Z_{N-k}/Z_N
    np.fill_diagonal(both, ((2 * np.arange(1, number + 1) - 1) * ratio[1 : number + 1]) @ powers[1:])
    np.fill_diagonal(one, 0.0)
    covariance = both - np.outer(mean, mean)
    return Levels(float(log[-1]) - number * first, mean, one, 0.5 * (covariance + covariance.T))


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
        # what is the same in all levels does not fluctuate: taken out before the root of the covariance is
        uneven = every - every.mean(axis=1, keepdims=True) if every.shape[1] else every
        covariance = uneven @ levels.covariance @ uneven.T + sum(r @ r.T for r in rows)
        bottom, top = self._ends(x)
        ground, level = low + bottom, max(abs(low + bottom), abs(low + top))
        rounding = 4 * EPS * (1 + level) * max(1.0, float(np.sqrt(np.linalg.norm(covariance))))

        def factor() -> np.ndarray:
            h, u = np.linalg.eigh(levels.covariance)
            return np.concatenate([uneven @ (u * np.sqrt(np.maximum(h, 0.0))), *rows], axis=1)

        return Evaluation(
            np.float64(levels.log_z - low), values, 0.5 * (covariance + covariance.T), np.float64(rounding),
            np.float64(level), factor=factor, lowest=np.float64(ground),
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
        first = self._first_filling(x)
        entropy = max(0.0, levels.log_z + float(x @ first) + float(x @ (levels.mean - first)))
        full = self.free.sign > 0 and self.number == len(x)
        more = np.nan if full else canonical(x, self.number + 1, self.free.sign).log_z
        order = np.argsort(x, kind="stable")
        return FixedNumberState(
            whole.number, self.number, entropy, levels.log_z - float(lam @ self.constant), levels.log_z - more,
            levels.mean[order], np.diag(levels.covariance)[order], "fermions" if self.free.sign > 0 else "bosons",
        )  # fmt: skip

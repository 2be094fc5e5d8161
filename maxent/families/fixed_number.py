"""Free fermions whose number is fixed: a projection of the grand-canonical sum, exact for any number.

    Z_N = e^{mu N} 1/M sum_m e^{-i phi_m N} det(1 + e^{-X - mu + i phi_m}),      phi_m = 2 pi m/M,  M > n,

at the mu that gives N particles on the average, where all terms are of one sign at the maximum.  Means and pair
probabilities of the levels are the same sum with complex occupations in it.  Compared with the Gaussian state of equal
means this is another ensemble: the number has no multiplier and no fluctuation, occupations of two levels are
correlated, and Wick's theorem does not hold.  ``mu = (ln Z_N - ln Z_{N+1})/beta`` takes the place of the multiplier.
Floor: families.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import Any, ClassVar, NamedTuple

import numpy as np
from scipy.optimize import brentq
from scipy.special import gammaln

from maxent.core.blocks import real_rows
from maxent.core.contract import EPS, Evaluation, Family, Lowest
from maxent.families.fillings import log_weights, occupations
from maxent.families.places import Places
from maxent.families.quadratic import quadratic
from maxent.families.stacks import Free, Stacks, adjoint, eigh, rotated

__all__ = ["Canonical", "FixedNumberState"]


class Levels(NamedTuple):
    """A fixed number of fermions in levels.

    Attributes
    ----------
    log_z : float
    mean : (n,) ndarray
    one : (n, n) ndarray
        Probabilities that the first level is filled and the second one empty.
    covariance : (n, n) ndarray
        Of the occupations.
    """

    log_z: float
    mean: np.ndarray
    one: np.ndarray
    covariance: np.ndarray


def canonical(x: np.ndarray, number: int) -> Levels:
    """Levels `x` (n,) with exactly `number` fermions.

    Parameters
    ----------
    x : (n,) ndarray
    number : int
        0..n.
    """
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


@dataclass(frozen=True, eq=False)
class FixedNumberState:
    """A state with a fixed number of fermions; not Gaussian, so that only quadratic means follow from its matrix.

    Attributes
    ----------
    number : (n, n) ndarray
        ``<c+_a c_b>``.
    particles : int
    entropy, log_partition : float
    insertion : float
        ``ln Z_N - ln Z_{N+1}``: beta mu; NaN when all levels are filled.
    """

    number: np.ndarray
    particles: int
    entropy: float
    log_partition: float
    insertion: float
    #: These families have no prior.
    relative_entropy: ClassVar[None] = None

    @property
    def modes(self) -> int:
        """Number of modes."""
        return len(self.number)

    @property
    def occupations(self) -> np.ndarray:
        """``<c+_a c_a>`` of every mode, (n,)."""
        return np.real(np.diag(self.number)).copy()

    def mean(self, operator: Any) -> float:
        """Expectation value of a quadratic operator; what changes the number has none.

        Raises
        ------
        TypeError, ValueError
        """
        q = quadratic(operator, "operator", "fermions")
        if q.modes != self.modes:
            raise ValueError(f"the operator has {q.modes} modes, the state {self.modes}")
        return float(np.sum(q.matrices()[0] * self.number).real + q.constant)


@dataclass(frozen=True)
class Canonical(Family):
    """m number-conserving charges of `number` fermions.

    Attributes
    ----------
    free : Stacks
        The charges without the constraint; all blocks of weight 1.
    number : int
    """

    free: Stacks
    number: int

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

    @cached_property
    def scale(self) -> np.ndarray:
        """Operator norms (m,)."""
        lows = [self.lowest(v) for v in np.eye(len(self.constant))]
        return np.array([max(abs(low.value), abs(low.highest)) for low in lows])

    def log_partition(self, lam: Any) -> float:
        """``ln Z_N(lam)``, on the host."""
        return float(self.evaluate(lam).log_partition)

    def evaluate(self, lam: Any, order: int = 2) -> Evaluation:
        """``ln Z_N``, values and covariance.

        Raises
        ------
        TypeError
            For arrays of JAX.
        """
        if not isinstance(lam, np.ndarray):
            raise TypeError("a fixed number runs on the host driver: give NumPy arrays, or solve with driver='host'")
        pairs = [eigh(k) for k in self.free.exponent(lam)]
        x = np.concatenate([lam @ self.free.flat, *[e.ravel() for e, _ in pairs]])
        levels = canonical(x, self.number)
        diagonal, rows, at = [self.free.flat], [], self.free.flat.shape[1]
        for a, (e, u) in zip(self.free.dense, pairs, strict=True):
            y = rotated(a, u)
            diagonal.append(np.real(np.einsum("jbii->jbi", y)).reshape(len(lam), e.size))
            weight = np.zeros((*e.shape, e.shape[1]))
            for b in range(len(e)):
                one = levels.one[at : at + e.shape[1], at : at + e.shape[1]]
                gap = np.abs(e[b][:, None] - e[b][None, :])
                fall = np.where(gap > 1e-8, -np.expm1(-gap) / np.where(gap > 1e-8, gap, 1.0), 1 - 0.5 * gap)
                weight[b] = np.maximum(one, one.T) * fall
                at += e.shape[1]
            rows.append(real_rows(y * np.sqrt(weight)))
        every = np.concatenate(diagonal, axis=1)
        low = float(lam @ self.constant)
        values = self.constant + every @ levels.mean
        covariance = every @ levels.covariance @ every.T + sum(r @ r.T for r in rows)
        order_ = np.sort(x)
        ground = low + float(order_[: self.number].sum())
        level = max(abs(ground), abs(low + float(order_[len(x) - self.number :].sum())))
        rounding = 4 * EPS * (1 + level) * max(1.0, float(np.sqrt(np.linalg.norm(covariance))))

        def factor() -> np.ndarray:
            h, u = np.linalg.eigh(levels.covariance)
            return np.concatenate([every @ (u * np.sqrt(np.maximum(h, 0.0))), *rows], axis=1)

        return Evaluation(
            np.float64(levels.log_z - low), values, 0.5 * (covariance + covariance.T), np.float64(rounding),
            np.float64(level), factor=factor, lowest=np.float64(ground),
        )  # fmt: skip

    def start(self) -> np.ndarray:
        """Infinite temperature."""
        return np.zeros(len(self.constant))

    def reference(self) -> tuple[np.ndarray, np.ndarray]:
        """Infinite-temperature means (m,) and charges minus mean as rows (m, p)."""
        ev = self.evaluate(self.start())
        assert ev.factor is not None
        return ev.values, ev.factor()

    def combine(self, matrix: np.ndarray, offset: np.ndarray) -> Canonical:
        """The same particles with the charges ``matrix @ Q - offset``."""
        return Canonical(self.free.combine(matrix, offset), self.number)

    def traced(self) -> Family:
        """Not there: the sum over phases is made on the host.

        Raises
        ------
        TypeError
        """
        raise TypeError("a fixed number runs on the host driver: solve with driver='host'")

    def reach(self) -> np.ndarray:
        """Upper bounds (m,) of the spread of each charge."""
        return 2 * self.scale

    def inside(self, lam: Any, step: Any, evaluation: Evaluation) -> Any:
        """The step as it is: ``ln Z_N`` is finite everywhere."""
        return step

    def lowest(self, v: np.ndarray, *, with_values: bool = False) -> Lowest:
        """Lowest value of ``<v.Q>``: the lowest levels filled."""
        x = np.sort(self.free.spectrum(v)[0])
        low, n = float(v @ self.constant), self.number
        size = float(np.abs(x).sum()) + abs(low)
        values = None
        if with_values:
            extended, at = self._extended(v)
            values = extended.lowest(at, with_values=True).values
            values = None if values is None else values[:-1]
        ground = self.ground(v, 0.0)
        degeneracy = 0.0 if ground is None else ground.log_dimension
        return Lowest(
            low + float(x[:n].sum()), low + float(x[len(x) - n :].sum()), EPS * size, values, degeneracy
        )  # fmt: skip

    def _extended(self, v: np.ndarray) -> tuple[Stacks, np.ndarray]:
        """The charges and the number, counted from its value, and `v` with the level up to which is filled."""
        free = self.free
        m = len(self.constant)
        ones = [np.concatenate([a, np.broadcast_to(np.eye(a.shape[2]), (1, *a.shape[1:]))]) for a in free.dense]
        flat = np.concatenate([free.flat, np.ones((1, free.flat.shape[1]))])
        extended = Stacks(
            np.append(self.constant, -float(self.number)), flat, free.flat_weights, tuple(ones), free.weights, 1,
        )  # fmt: skip
        x = np.sort(free.spectrum(v)[0])
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
        dimension = float(gammaln(count + 1) - gammaln(inside + 1) - gammaln(count - inside + 1))
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
        return float(v @ self.constant) + float(np.sort(np.concatenate(diagonal))[: self.number].sum())

    def sharpen(self, v: np.ndarray) -> Iterator[np.ndarray]:
        """Candidates for exposing directions: levels at the last filled one, polished with that level as a charge."""
        extended, at = self._extended(v)
        for better in extended.sharpen(at / np.linalg.norm(at)):
            size = np.linalg.norm(better[:-1])
            if size > 1e-12:
                yield better[:-1] / size

    def state_in(self, lam: np.ndarray, places: Places) -> FixedNumberState:
        """The state at multipliers `lam`, in the user's modes."""
        pairs = [eigh(k) for k in self.free.exponent(lam)]
        x = np.concatenate([lam @ self.free.flat, *[e.ravel() for e, _ in pairs]])
        levels = canonical(x, self.number)
        at, dense = self.free.flat.shape[1], []
        flat = levels.mean[:at]
        for e, u in pairs:
            dense.append((u * levels.mean[at : at + e.size].reshape(e.shape)[:, None, :]) @ adjoint(u))
            at += e.size
        whole: Any = places.layout.state(*places.fill(flat, dense), 0.0, 0.0)
        first = np.zeros(len(x))
        first[np.argsort(x, kind="stable")[: self.number]] = 1.0
        entropy = max(0.0, levels.log_z + float(x @ first) + float(x @ (levels.mean - first)))
        more = canonical(x, self.number + 1).log_z if self.number < len(x) else np.nan
        return FixedNumberState(
            whole.number, self.number, entropy, levels.log_z - float(lam @ self.constant), levels.log_z - more
        )  # fmt: skip

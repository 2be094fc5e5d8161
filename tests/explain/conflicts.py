"""Problems with a planted conflict: a set of charges that cannot be met, while all of them but one can.

The planted charges live on states of their own; the others live on a second factor of a product space, with targets
well inside.  So no other set is in conflict, unless two conflicts are planted.  Nothing here calls the solver.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tests.corpus import pieces


@dataclass(frozen=True)
class Clash:
    """Charges (m, n) or (m, d, d), targets, and the irreducible sets that were planted."""

    charges: np.ndarray
    targets: np.ndarray
    planted: tuple[frozenset[int], ...]

    @property
    def family(self):
        from maxent.families import Matrices, Microstates

        named = {f"c{j}": a for j, a in enumerate(self.charges)}
        return Microstates(named) if self.charges.ndim == 2 else Matrices(named)

    @property
    def named_targets(self) -> dict[str, float]:
        return {f"c{j}": float(q) for j, q in enumerate(self.targets)}

    def disguised(self, rng, decades: float) -> Clash:
        """In another order, in units of 10^-decades..10^decades each, with offsets."""
        m = len(self.targets)
        order = rng.permutation(m)
        unit = 10.0 ** rng.uniform(-decades, decades, m)
        offset = unit * rng.uniform(-1, 1, m)
        one = np.ones(self.charges.shape[1]) if self.charges.ndim == 2 else np.eye(self.charges.shape[1])
        shape = (-1,) + (1,) * (self.charges.ndim - 1)
        charges = unit.reshape(shape) * self.charges[order] + np.multiply.outer(offset, one)
        where = {int(old): new for new, old in enumerate(order)}
        planted = tuple(frozenset(where[j] for j in s) for s in self.planted)
        return Clash(charges, unit * self.targets[order] + offset, planted)


def beside(first: np.ndarray, second: np.ndarray) -> np.ndarray:
    """Charges on a product space: those of the first factor, then those of the second."""
    n, k = first.shape[1], second.shape[1]
    if first.ndim == 2:
        return np.concatenate([np.repeat(first, k, axis=1), np.tile(second, n)])
    return np.array([*[np.kron(a, np.eye(k)) for a in first], *[np.kron(np.eye(n), b) for b in second]])


def bystanders(rng, count: int, *, is_quantum: bool) -> tuple[np.ndarray, np.ndarray]:
    """Charges that take part in no conflict, and means of a state of full rank."""
    if is_quantum:
        charges = np.array([pieces.hermitian(rng, 3, is_complex=True) for _ in range(count)])
        state = pieces.gibbs(np.tensordot(0.5 * rng.standard_normal(count), charges, axes=1))[0]
    else:
        charges = rng.standard_normal((count, count + 4))
        state = pieces.probabilities(rng, count + 4)
    return charges, pieces.values_in(charges, state)


def joined(rng, charges: np.ndarray, targets: np.ndarray, others: int) -> Clash:
    """The planted charges with some bystanders."""
    k = len(targets)
    if not others:
        return Clash(charges, targets, (frozenset(range(k)),))
    more, q = bystanders(rng, others, is_quantum=charges.ndim == 3)
    return Clash(beside(charges, more), np.concatenate([targets, q]), (frozenset(range(k)),))


def corner(rng, k: int) -> tuple[np.ndarray, np.ndarray]:
    """States e_1..e_k and -1: the sum of the charges is at most 1, and a little more is asked, evenly.

    All but one of them are asked for less than 1 together, which a mixture has.
    """
    charges = np.concatenate([np.eye(k), -np.ones((k, 1))], axis=1)
    excess = rng.uniform(0.2, 0.8) / (k * max(k - 1, 1))
    return charges, np.full(k, 1 / k + excess)


def classical(rng, index: int) -> Clash:
    return joined(rng, *corner(rng, 1 + index % 5), others=index % 4)


def commuting(rng, index: int) -> Clash:
    """The same as matrices in a random basis."""
    clash = joined(rng, *corner(rng, 1 + index % 4), others=index % 3)
    n = clash.charges.shape[1]
    frame = pieces.unitary(rng, n, is_complex=True)
    return Clash(pieces.rotate([np.diag(row) for row in clash.charges], frame), clash.targets, clash.planted)


#: five matrices that anticommute with one another and square to 1
ANTICOMMUTING = [pieces.pauli(w) for w in ("x1", "y1", "zx", "zy", "zz")]


def anticommuting(rng, index: int) -> Clash:
    """k anticommuting matrices of square 1: the squares of their means sum to at most 1.

    Each is asked for a mean a with k a^2 > 1 > (k-1) a^2.
    """
    k = 2 + index % 4
    low, high = 1 / np.sqrt(k), 1 / np.sqrt(k - 1)
    a = low + rng.uniform(0.2, 0.8) * (min(high, 1.0) - low)
    frame = pieces.unitary(rng, 4, is_complex=True)
    charges = pieces.rotate(ANTICOMMUTING[:k], frame)
    return joined(rng, charges, a * rng.choice([-1, 1], k), others=index % 3)


def dependent(rng, index: int) -> Clash:
    """k charges whose weighted sum is a number, asked for another one; any k-1 are independent and inside."""
    k, is_quantum = 1 + index % 4, bool(index // 4 % 2)
    base, q = bystanders(rng, k, is_quantum=is_quantum)
    weights = rng.uniform(0.5, 2, k) * rng.choice([-1, 1], k)
    one = np.eye(base.shape[1]) if is_quantum else np.ones(base.shape[1])
    number = rng.uniform(-1, 1)
    rest = np.tensordot(weights[:-1], base[:-1], axes=1) if k > 1 else 0 * one
    base[-1] = (number * one - rest) / weights[-1]
    q[-1] = (number - weights[:-1] @ q[:-1]) / weights[-1] + 0.1 * rng.choice([-1, 1])
    clash = joined(rng, base, q, others=index % 3)
    if k == 1 or abs(q[-1]) < inner(base[-1]):
        return clash
    return dependent(rng, index)  # the last charge alone must be possible


def inner(charge: np.ndarray) -> float:
    """A mean up to which, of both signs, the charge is possible on its own."""
    levels = charge if charge.ndim == 1 else np.linalg.eigvalsh(charge)
    return 0.9 * float(min(-levels.min(), levels.max()))


def twice(rng, index: int) -> Clash:
    """Two planted conflicts on the two factors of a product space; either may be found."""
    (one, q), (two, r) = corner(rng, 1 + index % 3), corner(rng, 2 + index % 3)
    if index % 2:
        one, two = (np.array([np.diag(row) for row in c]) for c in (one, two))
    k = len(q)
    planted = frozenset(range(k)), frozenset(range(k, k + len(r)))
    return Clash(beside(one, two), np.concatenate([q, r]), planted)


def moments(rng, index: int) -> Clash:
    """Powers of a number in [0, 1]: the mean of a power below that power of the mean, others of other numbers."""
    x = np.linspace(0, 1, 21)
    power = 2 + index % 4
    mean = rng.choice(x[4:-4])
    charges = np.array([x, x**power])
    return joined(rng, charges, np.array([mean, 0.9 * mean**power]), others=1 + index % 3)


KINDS = {f.__name__: f for f in (classical, commuting, anticommuting, dependent, twice, moments)}


def make(kind: str, index: int, decades: float = 6.0) -> Clash:
    """One problem; the same on every call."""
    rng = np.random.default_rng([index, *kind.encode()])
    return KINDS[kind](rng, index).disguised(rng, decades)

"""Listed classical states: n states, m charges that are numbers on them, ``ln Z = ln sum_x w_x exp(-lam.f_x)``.

Also the diagonal of any commuting problem.  Cost of one evaluation O(m^2 n); held in memory up to about 1e6 states and
30 charges.  Infinite lists are in `maxent.families.rules`.  Floor: families.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from maxent.core.blocks import Blocks, Ground
from maxent.core.pytrees import register
from maxent.families.finite import Finite, checked_charges, checked_multipliers, relative_to_prior
from maxent.families.operators import check_size

__all__ = ["Microstates", "MicrostatesState"]


@register("names", "listed")
@dataclass(frozen=True, init=False)
class Microstates(Finite):
    """Charges of listed classical states.

    Parameters
    ----------
    charges : dict of str to (n,) array_like
        Value of each charge in each state.
    log_weights : (n,) array_like, optional
        Logarithms of degeneracies: state x stands for ``exp(log_weights[x])`` equal ones.  They count in the entropy,
        ``S = -sum p ln(p/w) = ln Z + lam.q``.  ``-inf`` removes a state; a span of hundreds of decades is fine.
    log_prior : (n,) array_like, optional
        Logarithm of a prior.  It does not count in the entropy, which stays ``-sum p ln p``; the relative entropy to
        the normalised prior is reported beside it.

    Raises
    ------
    TypeError
        A charge that is complex or not numeric.
    ValueError
        No charges and no weights, wrong shapes, NaN or infinite charges, or no state left.

    Examples
    --------
    >>> import numpy as np, maxent
    >>> die = Microstates({"pips": np.arange(1, 7)})
    >>> result = maxent.solve(die, {"pips": 4.5})
    >>> f"{result.multipliers['pips']:.5f}"
    '-0.37105'
    """

    blocks: Blocks
    names: tuple[str, ...]
    index: np.ndarray
    degeneracy: np.ndarray | None
    listed: int
    log_norm: float

    def __init__(self, charges: Any, log_weights: Any = None, log_prior: Any = None):
        charges = checked_charges(charges, "Microstates")
        weights = [
            None if w is None else _weights(w, what)
            for w, what in ((log_weights, "log_weights"), (log_prior, "log_prior"))
        ]
        rows = [_charge(name, value) for name, value in charges.items()]
        sizes = {len(r) for r in rows} | {len(w) for w in weights if w is not None}
        if not sizes:
            raise ValueError("no charges given: Microstates needs at least one charge, or log_weights")
        if len(sizes) > 1:
            detail = ", ".join(f"{name!r} has {len(r)}" for name, r in zip(charges, rows, strict=True))
            weight = ", ".join(
                f"{what} has {len(w)}"
                for w, what in zip(weights, ("log_weights", "log_prior"), strict=True)
                if w is not None
            )
            raise ValueError(f"charges list different numbers of states: {', '.join(x for x in (detail, weight) if x)}")
        (n,) = sizes
        given = [w for w in weights if w is not None]
        total: np.ndarray | None = np.sum(given, axis=0) if given else None
        index = np.arange(n) if total is None else np.flatnonzero(total > -np.inf)
        if not len(index):
            raise ValueError("no state left: every weight is zero" if n else "no states given: the charges are empty")
        values = np.array(rows, float).reshape(len(rows), n)
        if len(index) < n:
            values = values[:, index]
            total = None if total is None else total[index]
        degeneracy = None if weights[0] is None else weights[0][index]
        self._set(
            Blocks(values, prior=total),
            tuple(charges),
            index,
            degeneracy,
            n,
            _log_sum(total) if total is not None else 0.0,
        )

    @staticmethod
    def from_rule(rule: Any) -> Any:
        """The family of an infinite list of states given by a rule with a stated bound on its tail.

        Parameters
        ----------
        rule : maxent.families.rules.Rule

        Returns
        -------
        maxent.families.rules.GrownMicrostates
        """
        from maxent.families.rules import GrownMicrostates

        return GrownMicrostates.of(rule)

    def _set(
        self,
        blocks: Blocks,
        names: tuple[str, ...],
        index: Any,
        degeneracy: Any,
        listed: int,
        log_norm: float,
    ) -> Microstates:
        for key, value in zip(
            ("blocks", "names", "index", "degeneracy", "listed", "log_norm"),
            (blocks, names, index, degeneracy, listed, log_norm),
            strict=True,
        ):
            object.__setattr__(self, key, value)
        return self

    def _with(self, blocks: Blocks, ground: Ground | None) -> Microstates:
        keep = slice(None) if ground is None else ground.keep
        degeneracy = None if self.degeneracy is None else self.degeneracy[keep]
        names = self.names if len(self.names) == len(blocks.diagonal) else ()
        return object.__new__(Microstates)._set(blocks, names, self.index[keep], degeneracy, self.listed, self.log_norm)

    def restrict(self, indices: Any) -> Microstates:
        """The family of some of the states: a sector, a window, a face.

        Parameters
        ----------
        indices : (k,) int or (n,) bool array_like
            States to keep, counted in the list as it was given.
        """
        keep = _positions(indices, self.listed)
        where = np.flatnonzero(np.isin(self.index, keep))
        if not len(where):
            raise ValueError("no state left after the restriction")
        b = self.blocks
        blocks = Blocks(b.diagonal[:, where], prior=None if b.prior is None else b.prior[where])
        degeneracy = None if self.degeneracy is None else self.degeneracy[where]
        log_norm = 0.0 if blocks.prior is None else _log_sum(blocks.prior)
        return object.__new__(Microstates)._set(
            blocks, self.names, self.index[where], degeneracy, self.listed, log_norm
        )

    def state(self, lam: Any) -> MicrostatesState:
        """State ``p_x = w_x exp(-lam.f_x)/Z`` at multipliers `lam`, shape (m,)."""
        log_p = -(checked_multipliers(lam, self.blocks) @ self.blocks.diagonal)
        if self.blocks.prior is not None:
            log_p = log_p + self.blocks.prior
        log_z = _log_sum(log_p)
        log_p = log_p - log_z
        p = np.exp(log_p)
        p = p / p.sum()
        on = p > 0
        entropy = -float(p[on] @ log_p[on])
        relative = None
        if self.blocks.prior is not None:
            relative = relative_to_prior(log_p, p, float(p[on] @ self.blocks.prior[on]), self.log_norm)
        if self.degeneracy is not None:
            entropy += float(p[on] @ self.degeneracy[on])
        return MicrostatesState(p, self.index, self.listed, log_z, entropy, relative)


@dataclass(frozen=True)
class MicrostatesState:
    """Probabilities of listed states.

    Attributes
    ----------
    weights : (k,) ndarray
        Probabilities of the states in `index`; the others have none.
    index : (k,) int ndarray
    listed : int
        Number of states in the list.
    log_partition : float
    entropy : float
        In nats.
    relative_entropy : float or None
        To the normalised weights or prior, in nats.
    """

    weights: np.ndarray
    index: np.ndarray
    listed: int
    log_partition: float
    entropy: float
    relative_entropy: float | None = None

    @property
    def probabilities(self) -> np.ndarray:
        """Probability of every listed state, shape (n,)."""
        full = np.zeros(self.listed)
        full[self.index] = self.weights
        return full

    def mean(self, operator: Any) -> float:
        """Expectation value of an (n,) real observable."""
        values = _charge("operator", operator)
        if len(values) != self.listed:
            raise ValueError(f"the operator lists {len(values)} states, the family {self.listed}")
        return float(values[self.index] @ self.weights)

    def reduced(self, sites: Any) -> Any:
        """Listed states have no tensor structure; raises."""
        raise ValueError("listed states have no tensor structure to reduce; use Matrices with dims")


def _log_sum(x: np.ndarray) -> float:
    top = x.max()
    return float(top + np.log(np.exp(x - top).sum()))


def _numbers(name: str, value: Any) -> np.ndarray:
    if np.ma.is_masked(value):
        raise ValueError(f"{name} has masked entries; drop these states")
    array = np.asarray(value)
    if array.dtype == object or not (np.issubdtype(array.dtype, np.number) or array.dtype == bool):
        raise TypeError(f"{name} must be numbers, not {array.dtype}")
    if np.iscomplexobj(array):
        if np.any(array.imag):
            raise TypeError(f"{name} must be real, not complex")
        array = array.real
    if array.ndim != 1:
        raise ValueError(f"{name} must be a list of n values, one per state, not an array of shape {array.shape}")
    return array.astype(float)


def _charge(name: str, value: Any) -> np.ndarray:
    label = name if name == "operator" else f"charge {name!r}"
    array = _numbers(label, value)
    bad = np.flatnonzero(~np.isfinite(array))
    if len(bad):
        raise ValueError(f"{label} is {array[bad[0]]} in state {bad[0]}; it must be finite")
    check_size(float(np.abs(array).max(initial=0.0)), label)
    return array


def _weights(value: Any, what: str) -> np.ndarray:
    array = _numbers(what, value)
    bad = np.flatnonzero(np.isnan(array) | (array == np.inf))
    if len(bad):
        raise ValueError(f"{what} is {array[bad[0]]} in state {bad[0]}; it must be finite or -inf")
    return array


def _positions(indices: Any, n: int) -> np.ndarray:
    """Indices or a mask as sorted positions below n."""
    array = np.asarray(indices)
    if array.dtype == bool:
        if array.shape != (n,):
            raise ValueError(f"a mask must have shape ({n},), not {array.shape}")
        return np.flatnonzero(array)
    if array.ndim == 1 and not len(array):
        return np.zeros(0, int)
    if array.ndim != 1 or not np.issubdtype(array.dtype, np.integer):
        raise TypeError("indices must be a list of integers or a mask")
    if len(array) and (array.min() < 0 or array.max() >= n):
        raise ValueError(f"indices must lie in 0..{n - 1}")
    if len(np.unique(array)) < len(array):
        raise ValueError("indices must not repeat")
    return np.sort(array)

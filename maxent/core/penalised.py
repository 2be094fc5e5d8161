"""A family under a quadratic penalty: ``ln Z(lam) + lam.C.lam/2``, again a family.

The penalty is the log-partition function of further, independent Gaussian charges of covariance C that are added to
those of the family.  So the minimum of the dual has ``<Q> = q + C lam``: the state of largest entropy minus
``r.C^-1.r/2``, r the residual.  A combination that meets the penalty is unbounded below and can certify nothing;
whether the other charges can be met must be decided before.  Floor: core.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from maxent.core.contract import Barrier, Evaluation, Family, Lowest

__all__ = ["Penalised"]


@dataclass(frozen=True)
class Penalised(Family):
    """The charges of `inner` with the penalty ``root @ root.T``.

    Attributes
    ----------
    inner : Family
    root : (m, p) ndarray
        A factor of C; rows of zeros for charges without a penalty.
    """

    inner: Family
    root: np.ndarray

    @classmethod
    def of(cls, inner: Family, covariance: np.ndarray) -> Penalised:
        """Penalty with the (m, m) matrix `covariance`, positive definite on its rows that are not zero."""
        unit = np.sqrt(np.diag(covariance))
        on = np.flatnonzero(unit > 0)
        root = np.zeros((len(unit), len(on)))
        correlation = covariance[np.ix_(on, on)] / np.outer(unit[on], unit[on])
        root[on] = unit[on, None] * np.linalg.cholesky(correlation)
        return cls(inner, root)

    @property
    def scale(self) -> np.ndarray:
        """Size of each charge, shape (m,)."""
        return self.inner.scale

    def log_partition(self, lam: Any) -> Any:
        """``ln Z + lam.C.lam/2``, traceable by JAX."""
        along = lam @ self.root
        return self.inner.log_partition(lam) + 0.5 * (along @ along)

    def evaluate(self, lam: Any, order: int = 2) -> Evaluation:
        """Evaluation of the penalised function; its values are ``<Q> - C lam``, its covariance has C added."""
        ev = self.inner.evaluate(lam, order)
        along = lam @ self.root
        factor = ev.factor
        return replace(
            ev,
            log_partition=ev.log_partition + 0.5 * (along @ along),
            values=ev.values - self.root @ along,
            covariance=ev.covariance + self.root @ self.root.T,
            factor=None if factor is None else lambda: np.concatenate([factor(), self.root], axis=1),
            lowest=None,
        )

    def reference(self) -> tuple[np.ndarray, np.ndarray]:
        """Means of the charges and their rows, the Gaussian part beside them."""
        mean, rows = self.inner.reference()
        return mean, np.concatenate([rows, self.root], axis=1)

    def combine(self, matrix: np.ndarray, offset: np.ndarray) -> Penalised:
        """Family of the charges ``matrix @ Q - offset``."""
        return Penalised(self.inner.combine(matrix, offset), matrix @ self.root)

    def lowest(self, v: np.ndarray, *, with_values: bool = False) -> Lowest:
        """Lowest value of ``<v.Q>``: minus infinity as soon as `v` meets the penalty by more than rounding."""
        low = self.inner.lowest(v, with_values=with_values)
        if np.linalg.norm(v @ self.root) > 1e-12 * (np.abs(v) @ (self.scale + np.linalg.norm(self.root, axis=1))):
            return Lowest(-np.inf, np.inf, low.error)
        return low

    def glance(self, v: np.ndarray) -> float:
        """No separation is looked for: whether the exact charges can be met has been decided before."""
        return -np.inf

    def state(self, lam: np.ndarray) -> Any:
        """State of the family at `lam`; the penalty has no part in it."""
        return self.inner.state(lam)

    def start(self) -> np.ndarray:
        """Start of the family."""
        return self.inner.start()

    def barrier(self, lam: np.ndarray) -> Barrier | None:
        """The family's barrier with the penalty added: a sum of self-concordant functions."""
        b = self.inner.barrier(lam)
        if b is None:
            return None
        along = lam @ self.root
        return replace(
            b,
            value=b.value + 0.5 * float(along @ along),
            gradient=b.gradient + self.root @ along,
            factor=np.concatenate([b.factor, self.root], axis=1),
        )

    def stiffness(self, lam: np.ndarray, u: np.ndarray, *, exact: bool = True) -> float | None:
        """Bound of the family: a constant added to the Hessian changes more slowly still."""
        return self.inner.stiffness(lam, u, exact=exact)

    def reach(self) -> Any:
        """Bounds of the family, for the same reason."""
        return self.inner.reach()

    def inside(self, lam: Any, step: Any, evaluation: Evaluation) -> Any:
        """Steps of the family: the penalty has no edge."""
        return self.inner.inside(lam, step, evaluation)

    def domain(self) -> np.ndarray | None:
        """Domain of the family."""
        return self.inner.domain()

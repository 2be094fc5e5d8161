"""Bosons with pairing and linear terms: charges ``R.M_j.R/2 + d_j.R + c_j`` over positions and momenta.

    ln Z = -sum_k ln 2 sinh(nu_k/2) + d.M^-1.d/2 - lam.c,      M = sum_j lam_j M_j > 0,  d = sum_j lam_j d_j,

with the symplectic eigenvalues nu of M (J. Williamson, Am. J. Math. 58, 141 (1936)): the positive eigenvalues of the
Hermitian ``i L^T Omega L`` for ``M = L L^T``.  A matrix that has no Cholesky factor lies outside the domain.  Second
derivatives are sums of squares with the weights

    a b (n_b - n_a)/(2 (a - b))  for levels of one sign,      a b (1 + n_a + n_b)/(2 (a + b))  across,

which neither cancel nor overflow.  Floor: families; must not know names.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np

from maxent.core.blocks import Blocks, real_rows
from maxent.core.contract import EPS, Evaluation, Family, Lowest, namespace
from maxent.core.polish import complement_of
from maxent.core.pytrees import register
from maxent.families.antisymmetric import canonical_form
from maxent.families.fillings import bends
from maxent.families.gaussian_states import BosonState, symplectic_form
from maxent.families.openings import best_multiple
from maxent.families.quadratic import Quadratic
from maxent.families.stacks import outside
from maxent.families.statistics import log_weights, occupations

__all__ = ["PhaseSpace", "Whereabouts"]


class Split(NamedTuple):
    """A phase space cut in two: `free` (2n, 2k) and `bound` (2n, 2(n - k)) symplectic frames.

    The bound part is in its vacuum with covariance and mean; gap, width and log_dimension as in `Face`.
    """

    free: np.ndarray
    bound: np.ndarray
    covariance: np.ndarray
    mean: np.ndarray
    gap: float
    width: float
    log_dimension: float


@dataclass(frozen=True, eq=False)
class Modes:
    """How many modes there are."""

    modes: int


@dataclass(frozen=True, eq=False)
class Whereabouts:
    """Where a phase space sits in the user's: a symplectic frame, a mean, and the covariance of what is pinned."""

    layout: Modes
    frame: np.ndarray
    mean: np.ndarray
    pinned: np.ndarray

    @classmethod
    def of(cls, space: PhaseSpace) -> Whereabouts:
        """The whole phase space as it is."""
        size = space.matrices.shape[1]
        return cls(Modes(size // 2), np.eye(size), np.zeros(size), np.zeros((size, size)))

    def on_face(self, ground: Split) -> Whereabouts:
        """The free part; the bound part stays where it is."""
        bound = self.frame @ ground.bound
        return Whereabouts(
            self.layout, self.frame @ ground.free, self.mean + bound @ ground.mean,
            self.pinned + bound @ ground.covariance @ bound.T,
        )  # fmt: skip

    def state(self, space: PhaseSpace, lam: np.ndarray) -> BosonState:
        """The state at multipliers `lam`."""
        nu, v, r, log_z = space.thermal(lam)
        n = occupations(nu, -1)
        entropy = float(np.sum(np.log1p(n) + n * nu))
        total = self.frame @ v @ self.frame.T + self.pinned
        return BosonState(0.5 * (total + total.T), self.mean + self.frame @ r, entropy, log_z)


@register()
@dataclass(frozen=True)
class PhaseSpace(Family):
    """m charges of n boson modes.

    Attributes
    ----------
    constant : (m,) array
    matrices : (m, 2n, 2n) array
        M_j, real symmetric; R = (x_1..x_n, p_1..p_n).
    linear : (m, 2n) array
    confining : (m,) ndarray or None
        A combination with ``M > 0``.
    """

    constant: Any
    matrices: Any
    linear: Any
    confining: Any = None

    sign = -1

    @classmethod
    def of(cls, operators: tuple[Quadratic, ...]) -> PhaseSpace:
        """The phase space of checked operators."""
        m, d, c = zip(*(q.phase_space() for q in operators), strict=True)
        return cls(np.array(c), np.array(m), np.array(d))

    @property
    def levels(self) -> int:
        """Number of modes."""
        return int(self.matrices.shape[1] // 2)

    @property
    def dense(self) -> tuple[Any, ...]:
        """The matrices as one block."""
        return (self.matrices[:, None],) if self.matrices.shape[1] else ()

    @cached_property
    def scale(self) -> np.ndarray:
        """Size of each charge, (m,): its eigenvalues added up, and its linear and constant parts."""
        spread = np.abs(np.linalg.eigvalsh(self.matrices)).sum(axis=1) if self.matrices.shape[1] else 0.0
        return np.abs(self.constant) + spread + np.linalg.norm(self.linear, axis=1)

    def start(self) -> np.ndarray:
        """The best multiple of a confining combination."""
        u = np.asarray(self.confining)
        if not self.matrices.shape[1]:
            return u
        nu = self.thermal(u)[0]
        return best_multiple(nu, np.ones(len(nu)), self.lowest(u).value) * u

    def one_particle(self) -> Blocks:
        """The matrices M_j as charges of a finite space."""
        return Blocks(np.zeros((len(self.constant), 0)), (self.matrices,))

    def smallest_level(self, lam: np.ndarray) -> float:
        """Smallest eigenvalue of M, which must be positive."""
        return float(np.linalg.eigvalsh(self.at(lam)).min(initial=np.inf))

    def at(self, lam: Any) -> Any:
        """The matrix M of ``lam.Q``."""
        xp, a = namespace(lam), self.matrices
        return xp.reshape(lam @ xp.reshape(a, (a.shape[0], a.shape[1] * a.shape[2])), a.shape[1:])

    # ------------------------------------------------------------------ the log-partition function

    def log_partition(self, lam: Any) -> Any:
        """``ln Z(lam)`` for JAX, twice differentiable in `lam`; not in the arrays of the family."""
        return _log_z()(lam, (self.constant, self.matrices, self.linear))

    def thermal(self, lam: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray, float]:
        """Symplectic eigenvalues, covariance V, mean r and ``ln Z``."""
        matrix, d = self.at(lam), lam @ self.linear
        n = len(d) // 2
        root = np.linalg.cholesky(matrix)
        x, u = np.linalg.eigh(1j * root.T @ symplectic_form(n) @ root)
        nu = x[n:]
        r = -np.linalg.solve(matrix, d) if n else d
        frame = np.linalg.solve(root.T, u) if n else u
        # V = M^-1/2-like frame with x coth(x/2)/2 on it
        v = np.real((frame * (0.5 * np.abs(x) * (1 + 2 * occupations(np.abs(x), -1)))) @ frame.conj().T)
        log_z = float(np.sum(log_weights(nu, -1) - 0.5 * nu) - 0.5 * d @ r - lam @ self.constant)
        return nu, v, r, log_z

    def evaluate(self, lam: Any, order: int = 2) -> Evaluation:
        """``ln Z``, values and covariance from one Cholesky and one eigendecomposition."""
        xp, m, n = namespace(lam), self.constant.shape[0], self.matrices.shape[1] // 2
        low = lam @ self.constant
        if not n:
            zero = xp.zeros((m, m))
            factor = None if xp is not np else lambda: np.zeros((m, m))
            return Evaluation(-low, self.constant, zero, 4 * EPS * (1 + xp.abs(low)), xp.abs(low), factor=factor)
        matrix, d = self.at(lam), lam @ self.linear
        try:
            root = xp.linalg.cholesky(matrix)
        except np.linalg.LinAlgError:
            return outside(m)
        inside = xp.all(xp.isfinite(root))
        root = root if xp is np else xp.where(inside, root, xp.eye(2 * n))
        x, u = xp.linalg.eigh(1j * (root.T @ xp.asarray(symplectic_form(n)) @ root))
        size = xp.abs(x)
        nu, filling = x[n:], occupations(size, -1)
        inverse = xp.linalg.inv(root)
        y = inverse @ self.matrices @ inverse.T
        r = -(inverse.T @ (inverse @ d))
        log_z = xp.sum(log_weights(nu, -1)) - 0.5 * xp.sum(nu) - 0.5 * (d @ r) - low
        z = xp.conj(u.T) @ y @ u
        thermal = 0.25 * size * (1 + 2 * filling)
        pull = self.linear + self.matrices @ r
        values = self.constant + xp.real(xp.linalg.diagonal(z)) @ thermal + 0.5 * (pull + self.linear) @ r
        same = (x[:, None] * x[None, :]) > 0
        across = (1 + filling[:, None] + filling[None, :]) / (size[:, None] + size[None, :])
        weight = 0.5 * size[:, None] * size[None, :] * xp.where(same, bends(size, -1), across)
        rows = [real_rows(z * xp.sqrt(weight)), pull @ inverse.T]
        covariance = rows[0] @ rows[0].T + rows[1] @ rows[1].T
        spread = xp.sqrt(xp.linalg.matrix_norm(covariance)) if m else xp.asarray(0.0)
        level = xp.abs(low) + xp.sum(nu * (0.5 + filling[n:])) + 0.5 * xp.abs(d @ r) + xp.max(nu)
        soft = xp.linalg.matrix_norm(rows[0]) if m else 0.0
        condition = xp.linalg.matrix_norm(root) * xp.linalg.matrix_norm(inverse)
        rounding = 4 * EPS * (1 + level) * xp.maximum(1.0, spread) + EPS * condition * soft
        if xp is not np:
            log_z, values = xp.where(inside, log_z, xp.inf), xp.where(inside, values, xp.nan)
            return Evaluation(log_z, values, covariance, rounding, level)
        lowest = low + 0.5 * float(nu.sum()) + 0.5 * float(d @ r)
        factor = lambda: np.concatenate(rows, axis=1)
        return Evaluation(log_z, values, covariance, rounding, level, factor=factor, lowest=lowest)

    # ------------------------------------------------------------------ questions of the verdict logic

    def reference(self) -> tuple[np.ndarray, np.ndarray]:
        """Means (m,) and charges minus mean as rows in the state with V = 1."""
        mean = self.constant + 0.5 * np.einsum("jaa->j", self.matrices)
        flat = self.matrices.reshape(len(self.constant), self.matrices.shape[1] ** 2)
        return mean, np.concatenate([flat / np.sqrt(2.0), self.linear], axis=1)

    def combine(self, matrix: np.ndarray, offset: np.ndarray) -> PhaseSpace:
        """The same modes with the charges ``matrix @ Q - offset``."""
        xp, size = namespace(matrix), self.matrices.shape[1]
        flat = xp.reshape(self.matrices, (self.matrices.shape[0], size * size))
        new = xp.reshape(matrix @ flat, (matrix.shape[0], size, size))
        confining = None
        if self.confining is not None and xp is np:
            confining = np.linalg.lstsq(matrix.T, np.asarray(self.confining), rcond=None)[0]
        constant = matrix @ self.constant - offset
        new = 0.5 * (new + xp.permute_dims(new, (0, 2, 1)))
        return PhaseSpace(constant, new, matrix @ self.linear, confining)

    def reach(self) -> np.ndarray:
        """No bound: the charges are unbounded."""
        return np.full(len(self.constant), np.inf)

    def stiffness(self, lam: np.ndarray, u: np.ndarray, *, exact: bool = True) -> float | None:
        """How fast curvature can fall along `u`: relative change of M times 6, plus the change of the largest nu.

        As for bosons without pairing, with two more for the linear terms; tested on random cases, not proved.
        """
        if not self.matrices.shape[1]:
            return 0.0
        inverse = np.linalg.inv(np.linalg.cholesky(self.at(lam)))
        share = float(np.abs(np.linalg.eigvalsh(inverse @ self.at(u) @ inverse.T)).max())
        return share * (6.0 + float(self.thermal(lam)[0].max()))

    def inside(self, lam: Any, step: Any, evaluation: Evaluation) -> Any:
        """Part of `step` on which M loses at most 9/10 in any direction."""
        xp = namespace(lam)
        if not self.matrices.shape[1]:
            return step
        e, u = xp.linalg.eigh(self.at(lam))
        half = u / xp.sqrt(xp.where(e > 0, e, 1.0))
        fall = -xp.min(xp.linalg.eigvalsh(half.T @ self.at(step) @ half))
        return step * xp.minimum(1.0, 0.9 / xp.maximum(fall, 1e-300))

    def _blur(self, v: np.ndarray) -> float:
        """Eigenvalues of M closer to zero than this are zero to rounding."""
        return 16 * EPS * float(np.abs(v) @ np.abs(self.matrices).sum(axis=2).max(axis=1, initial=0.0))

    def glance(self, v: np.ndarray) -> float:
        """Value in the vacuum without displacement."""
        trace = np.einsum("jaa->j", self.matrices)
        return float(v @ (self.constant + 0.25 * trace))

    def lowest(self, v: np.ndarray, *, with_values: bool = False) -> Lowest:
        """Vacuum energy of ``v.Q``; -inf where M has a negative direction or a force along a free one."""
        matrix, d, low = self.at(v), v @ self.linear, float(v @ self.constant)
        if not len(d):
            return Lowest(low, low, EPS * abs(low), np.array(self.constant) if with_values else None)
        e, u = np.linalg.eigh(matrix)
        blur = self._blur(v)
        flat = np.abs(e) <= blur
        force = np.abs(u[:, flat].T @ d).max(initial=0.0)
        limit = 16 * EPS * float(np.abs(v) @ np.abs(self.linear).max(axis=1, initial=0.0))
        high = low if flat.all() and force <= limit else np.inf
        if e[0] < -blur or force > limit:
            return Lowest(-np.inf, high, EPS * abs(low))
        root = u * np.sqrt(np.maximum(e, 0.0))
        nu = np.abs(np.linalg.eigvalsh(1j * root.T @ symplectic_form(len(d) // 2) @ root))
        shift = 0.5 * float(np.sum((u[:, ~flat].T @ d) ** 2 / e[~flat]))
        vacuum = 0.25 * float(nu.sum())
        values = None
        if with_values and not flat.any():
            ground = self.ground(v, 0.0)
            values = None if ground is None else self.compress(ground).constant
        free = np.inf if flat.any() else 0.0
        return Lowest(low + vacuum - shift, high, EPS * (abs(low) + vacuum + shift), values, free)

    def ground(self, v: np.ndarray, tol: float) -> Split | None:
        """The free and the bound part of phase space; None where ``v.Q`` has no state of lowest value, or only such."""
        matrix, size = self.at(v), self.matrices.shape[1]
        if not size:
            return None
        e, u = np.linalg.eigh(matrix)
        top = float(np.abs(e).max())
        cut = max(100 * tol, 1e-9 * top)
        flat = np.abs(e) <= cut
        kernel, omega = u[:, flat], symplectic_form(size // 2)
        if flat.all() or e[0] < -cut or kernel.shape[1] % 2:
            return None
        free = _symplectic_frame(kernel, omega)
        if free is None:  # a free particle: its lowest value is not attained
            return None
        left = kernel.T @ omega
        rest = np.linalg.svd(left)[2][len(left) :].T if len(left) else np.eye(size)
        bound = _symplectic_frame(rest, omega)
        assert bound is not None
        inner = PhaseSpace(
            np.zeros(1), (bound.T @ matrix @ bound)[None], (bound.T @ (v @ self.linear))[None], None
        )  # fmt: skip
        covariance, mean = inner.vacuum()
        width = float(np.abs(e[flat]).max(initial=0.0) / top)
        log_dimension = np.inf if flat.any() else 0.0
        return Split(free, bound, covariance, mean, float(e[~flat].min() / top), width, log_dimension)

    def vacuum(self) -> tuple[np.ndarray, np.ndarray]:
        """Covariance and mean of the state of lowest value of the one charge of this space."""
        matrix, d = self.matrices[0], self.linear[0]
        root = np.linalg.cholesky(0.5 * (matrix + matrix.T))
        x, u = np.linalg.eigh(1j * root.T @ symplectic_form(len(d) // 2) @ root)
        frame = np.linalg.solve(root.T, u)
        return np.real((frame * (0.5 * np.abs(x))) @ frame.conj().T), -np.linalg.solve(matrix, d)

    def compress(self, ground: Split) -> PhaseSpace:
        """The charges of the free part, with the bound one in its vacuum."""
        s, b, r = ground.free, ground.bound, ground.bound @ ground.mean
        spread = b @ ground.covariance @ b.T + np.outer(r, r)
        constant = self.constant + 0.5 * np.einsum("jab,ba->j", self.matrices, spread) + self.linear @ r
        linear = (self.linear + self.matrices @ r) @ s
        inner = s.T @ self.matrices @ s
        return PhaseSpace(constant, 0.5 * (inner + inner.transpose(0, 2, 1)), linear, self.confining)

    def sharpen(self, v: np.ndarray) -> Iterator[np.ndarray]:
        """`v` moved to where the vacuum energy is largest: Newton's method on the unit sphere, no level at zero."""
        for _ in range(12):
            ground = self.ground(v, 0.0)
            if ground is None or ground.free.shape[1]:
                return
            values, bend = self._at_zero_temperature(v)
            basis = complement_of(v)
            kappa = max(float(values @ v), 0.0)
            hessian = basis.T @ bend @ basis + (kappa + 1e-9) * np.eye(len(v) - 1)
            step = basis @ np.linalg.solve(hessian, basis.T @ values)
            length = float(np.linalg.norm(step))
            step = step * min(1.0, 0.3 / max(length, 1e-300))
            v = (v + step) / np.linalg.norm(v + step)
            if length < 1e-15:
                break
        yield v

    def _at_zero_temperature(self, v: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Values in the vacuum of ``v.Q``, and how they bend with v."""
        matrix, d = self.at(v), v @ self.linear
        root = np.linalg.cholesky(matrix)
        x, u = np.linalg.eigh(1j * root.T @ symplectic_form(len(d) // 2) @ root)
        inverse, size = np.linalg.inv(root), np.abs(x)
        r = -(inverse.T @ (inverse @ d))
        z = u.conj().T @ (inverse @ self.matrices @ inverse.T) @ u
        pull = self.linear + self.matrices @ r
        values = self.constant + np.real(np.einsum("jaa->ja", z)) @ (0.25 * size) + 0.5 * (pull + self.linear) @ r
        across = np.where(np.outer(x, x) < 0, np.outer(size, size) / (size[:, None] + size[None, :]), 0.0)
        rows = np.concatenate([real_rows(z * np.sqrt(0.5 * across)), pull @ inverse.T], axis=1)
        return values, rows @ rows.T


def _symplectic_frame(basis: np.ndarray, omega: np.ndarray) -> np.ndarray | None:
    """A frame S of the span with ``S^T Omega S`` in normal form, positions first; None where the form degenerates."""
    if not basis.shape[1]:
        return basis
    form = canonical_form(basis.T @ omega @ basis)
    if form.levels.min() < 1e-8:
        return None
    frame = basis @ form.frame
    return np.concatenate([frame[:, 0::2] / np.sqrt(form.levels), frame[:, 1::2] / np.sqrt(form.levels)], axis=1)


def _log_z() -> Any:
    """The log-partition function for JAX; its derivatives are the evaluation."""
    global _RULE
    if _RULE is None:
        import jax

        @jax.custom_jvp
        def values(lam: Any, arrays: Any) -> Any:
            return PhaseSpace(*arrays).evaluate(lam).values

        @jax.custom_jvp
        def log_z(lam: Any, arrays: Any) -> Any:
            return PhaseSpace(*arrays).evaluate(lam).log_partition

        def only_multipliers(tangents: tuple) -> Any:
            if any(not isinstance(t, jax.custom_derivatives.SymbolicZero) for t in jax.tree.leaves(tangents[1])):
                raise NotImplementedError("ln Z of a phase space is differentiable in the multipliers only")
            return tangents[0]

        def bent(primals: tuple, tangents: tuple) -> tuple:
            ev = PhaseSpace(*primals[1]).evaluate(primals[0])
            return ev.values, -(ev.covariance @ only_multipliers(tangents))

        def slope(primals: tuple, tangents: tuple) -> tuple:
            return log_z(*primals), -(values(*primals) @ only_multipliers(tangents))

        values.defjvp(bent, symbolic_zeros=True)
        log_z.defjvp(slope, symbolic_zeros=True)
        _RULE = log_z
    return _RULE


_RULE: Any = None

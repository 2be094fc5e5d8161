"""Many sets of targets for one family: batches that stay in the cache, one fit after the other inside each.

For charges that are numbers on listed states, values and covariance are one matrix product with the pair products of
the charges, which all fits share.  Floor: core.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from maxent.core.autodiff import Fit, attach, consistent, fit, norm, values_at, whitener
from maxent.core.blocks import Blocks
from maxent.core.contract import EPS, Family

__all__ = ["Many", "fit_many"]

#: Numbers per batch that stay in a second-level cache of 1 MiB.
CACHED = 1 << 17


class Many(NamedTuple):
    """Fits with leading axis n, and what the last evaluation knew: ``ln Z`` (n,) and values (n, m)."""

    fit: Fit
    log_partition: Any
    values: Any


def fit_many(
    family: Family, targets: Any, free: tuple[int, ...], m: int, iterations: int, batch: int | None
) -> Many:
    """Fits of many targets (n, len(free))."""
    if isinstance(family, Blocks) and not family.dense and free == tuple(range(m)):
        size = batch or int(np.clip(CACHED // max(family.size, 1), 1, 128))
        still, q = jax.lax.stop_gradient((family, targets))
        found = _diagonal(still, q, iterations, size)
        lam = jax.vmap(lambda t, x: attach(family, t, x, free))(targets, found.fit.lam)
        log_z, values = jax.vmap(lambda x, z, v: recall(family, x, z, v))(lam, found.log_partition, found.values)
        return Many(Fit(lam, found.fit.converged, found.fit.steps), log_z, values)

    def one(q: Any) -> Many:
        found = fit(family, q, free, m, iterations)
        return Many(found, family.log_partition(found.lam), values_at(family, found.lam))

    return jax.lax.map(one, targets, batch_size=batch) if batch else jax.lax.map(one, targets)


@jax.custom_jvp
def recall(family: Family, lam: Any, log_partition: Any, values: Any) -> tuple[Any, Any]:
    """``ln Z`` and values that are known at `lam`; only a derivative computes them again."""
    return log_partition, values


@recall.defjvp
def _recall_jvp(primals: tuple, tangents: tuple) -> tuple[Any, Any]:
    family, lam, log_partition, values = primals
    both = lambda f, x: (f.log_partition(x), values_at(f, x))
    _, moved = jax.jvp(both, (family, lam), tangents[:2])
    return (log_partition, values), moved


def positive_solve(matrix: Any, right: Any) -> Any:
    """Solution of ``matrix @ x = right`` for a small positive definite matrix; `right` is (k,) or (k, r).

    Gauss-Jordan elimination (no pivoting is needed) on the whole array: mapped over a batch it is k vector operations,
    where LAPACK would be called once for every matrix.
    """
    k = matrix.shape[0]
    a = jnp.concatenate([matrix, right.reshape(k, -1)], axis=1)
    for i in range(k):
        row = a[i] / a[i, i]
        here = (np.arange(k) == i)[:, None]
        a = jnp.where(here, row, a - a[:, i : i + 1] * row)
    return a[:, k:].reshape(right.shape)


def _diagonal(family: Blocks, targets: Any, iterations: int, batch: int) -> Many:
    """Newton's method for listed states: single precision to the neighbourhood, double precision from there.

    Three stages for each fit: damped Newton in single precision, from the inverted cumulant series, capped in the
    metric of the start; one evaluation in double precision, whose weights also give the moments after the step it asks
    for (the step is tiny, four terms of the exponential series are exact to rounding); damped Newton in double
    precision for what is not settled then.  A last step is taken without another evaluation once the residual it
    leaves is below the rounding floor.
    """
    k, n = family.diagonal.shape
    log_weights = jnp.zeros(n) if family.prior is None else family.prior
    # spread and rank under the counting measure: peaked weights can hide them
    mean = jnp.mean(family.diagonal, axis=1)
    centred = family.diagonal - mean[:, None]
    covariance = centred @ centred.T / n
    transform = whitener(covariance)
    # combinations without any spread keep the multiplier zero; a one on their diagonal leaves them alone
    dead = jnp.where(jnp.any(transform != 0, axis=1), 0.0, 1.0)
    agrees = jax.vmap(lambda t: consistent(covariance, mean, t))(targets)
    w = transform @ centred
    reach = jnp.sqrt(jnp.max(jnp.sum(w * w, axis=0)))
    p0 = jax.nn.softmax(log_weights)
    first = w @ p0
    off_mean = w - first[:, None]
    second, third = (off_mean * p0) @ off_mean.T, jnp.einsum("an,bn,cn->abc", off_mean * p0, off_mean, off_mean)
    blurs = EPS * norm(jnp.abs(transform) @ (jnp.abs(mean)[:, None] + jnp.abs(targets.T)), axis=0)
    double = _Moments(w, log_weights, dead, reach, EPS)
    short = [a.astype(jnp.float32) for a in (w, log_weights, dead, reach)]
    single = _Moments(short[0], short[1], short[2], short[3], float(np.finfo(np.float32).eps))

    def guess(q: Any) -> tuple[Any, Any]:
        # <w>(x) = first - second x + third[x, x]/2 - ..., inverted; far targets start on their ray instead
        ahead = double.newton(q - first, second)
        distance = jnp.sqrt(jnp.maximum(ahead @ (q - first), 0.0))
        bent = double.newton(0.5 * third @ ahead @ ahead, second)
        x = jnp.where(distance < 1.0, bent - ahead, -ahead / jnp.maximum(1.0, distance))
        return x * jnp.minimum(1.0, 10.0 / jnp.maximum(norm(x), 1.0)), distance

    def one(pair: tuple[Any, ...]) -> tuple[Any, ...]:
        q, blur, x = pair
        rough = single.descend(single.unknown(x.astype(jnp.float32), q.astype(jnp.float32)), 0.0, min(iterations, 12))
        near = jnp.where(single.settled(rough, 0.0), rough.x + rough.step, rough.x).astype(x.dtype)
        found, weights = double.begin(jnp.where(jnp.all(jnp.isfinite(near)), near, x), q)
        moved, small = double.moved(found, single.change(found.step, weights))
        close = small & double.settled(moved, blur)
        found = double.descend(found._replace(stop=close), blur, iterations)
        found = jax.tree.map(lambda a, b: jnp.where(close, a, b), moved, found)
        off, chi, step = found.off, found.chi, found.step
        soft = jnp.trace(positive_solve(chi + 1e-300 * jnp.eye(k) + jnp.diag(dead), jnp.eye(k))) - jnp.sum(dead)
        exists = (soft * 2 * reach * (norm(off) + 16 * double.floor(found, blur))) ** 2 < 0.25
        done = double.settled(found, blur) & exists
        x = jnp.where(done, found.x + step, found.x)
        left = jnp.where(done, jnp.zeros(k), off)
        log_z = found.value - 0.5 * jnp.where(done, off @ step, 0.0) - x @ q
        return x, done, rough.count + found.count, log_z, left

    white = (targets - mean) @ transform.T
    # a batch takes as many steps as its slowest fit: fits that lie equally far out go together
    starts, distances = jax.vmap(guess)(white)
    order = jnp.argsort(distances)
    found = jax.lax.map(one, (white[order], blurs[order], starts[order]), batch_size=batch)
    back = jnp.argsort(order)
    x, converged, steps, log_z, left = jax.tree.map(lambda a: a[back], found)
    lam = x @ transform
    inverse = jnp.linalg.pinv(transform)
    return Many(Fit(lam, converged & agrees, steps), log_z - lam @ mean, targets + left @ inverse.T)


class _Point(NamedTuple):
    """Where one fit stands: value of the dual, residual, covariance, Newton step, and how far the model is trusted."""

    x: Any
    q: Any
    value: Any
    off: Any
    chi: Any
    step: Any
    #: Bound on the part of the residual that the step leaves.
    left_over: Any
    radius: Any
    count: Any
    stop: Any


class _Moments:
    """Values and covariance of the whitened charges `w` (k, n) in one floating-point precision, and steps with them."""

    def __init__(self, w: Any, log_weights: Any, dead: Any, reach: Any, eps: float):
        k, n = w.shape
        self.w, self.log_weights, self.dead, self.reach, self.eps, self.k = w, log_weights, dead, reach, eps, k
        rows, columns = np.triu_indices(k)
        self.features = jnp.concatenate([jnp.ones((1, n), w.dtype), w, w[rows] * w[columns]])
        # spreads the upper triangle over both: a product is faster than scattering in every fit
        where = np.zeros((len(rows), k, k), w.dtype)
        where[range(len(rows)), rows, columns] = where[range(len(rows)), columns, rows] = 1.0
        self.symmetric = jnp.asarray(where.reshape(len(rows), k * k))

    def unknown(self, x: Any, q: Any) -> _Point:
        """Point at x before anything is known there; any evaluation is better."""
        k = self.k
        big = jnp.full((), np.finfo(x.dtype).max, x.dtype)
        zeros, one = jnp.zeros(k, x.dtype), jnp.ones((), x.dtype)
        off, chi, none = zeros + jnp.sqrt(big) / k, jnp.eye(k, dtype=x.dtype), jnp.asarray(0)
        return _Point(x, q, big, off, chi, zeros, big, one, none, jnp.asarray(False))

    def begin(self, x: Any, q: Any) -> tuple[_Point, Any]:
        """Point at x, evaluated, and the weights of the states there (not normalised)."""
        exponent = self.log_weights - x @ self.w
        top = jnp.max(exponent)
        weights = jnp.exp(exponent - top)
        value, off, chi = self.cumulants(self.features @ weights, top, x, q)
        step = self.newton(off, chi)
        one = jnp.ones((), x.dtype)
        left_over = norm(step) * self.reach
        return _Point(x, q, value, off, chi, step, left_over, one, jnp.asarray(1), jnp.asarray(False)), weights

    def cumulants(self, moments: Any, top: Any, x: Any, q: Any) -> tuple[Any, Any, Any]:
        """Dual function, residual and covariance from the sums over the states."""
        k = self.k
        first = moments[1 : k + 1] / moments[0]
        second = (moments[k + 1 :] / moments[0] @ self.symmetric).reshape(k, k)
        return top + jnp.log(moments[0]) + x @ q, first - q, second - jnp.outer(first, first)

    def newton(self, off: Any, chi: Any) -> Any:
        """Newton step; a ridge far below rounding keeps it finite."""
        ridge = (45 * self.eps * jnp.trace(chi) + 1e-30 * self.eps) * jnp.eye(self.k, dtype=off.dtype)
        return positive_solve(chi + ridge + jnp.diag(self.dead), off)

    def floor(self, at: _Point, blur: Any) -> Any:
        """Residual that rounding explains."""
        return 4 * self.eps * (1 + norm(at.x) * self.reach) * jnp.maximum(1.0, jnp.sqrt(norm(at.chi))) + 2 * blur

    def settled(self, at: _Point, blur: Any) -> Any:
        """Whether the residual is at the rounding floor, now or after one more full step."""
        floor = self.floor(at, blur)
        after = norm(at.off) * at.left_over
        return (norm(at.off) <= floor) | ((at.left_over < 1e-3) & (after <= floor))

    def descend(self, start: _Point, blur: Any, iterations: int) -> _Point:
        """Damped Newton steps until the point is settled."""

        def unfinished(at: _Point) -> Any:
            return (at.count < iterations) & ~(at.stop | self.settled(at, blur)) & (at.radius > 1e-9)

        def advance(at: _Point) -> _Point:
            length = norm(at.step)
            step = at.step * jnp.minimum(1.0, at.radius / length)
            new, _ = self.begin(at.x + step, at.q)
            blind = 160 * self.eps * (jnp.abs(at.value) + norm(at.x) * self.reach + 1)
            gain = at.off @ step
            ok = (new.value <= at.value - 1e-4 * gain) | ((gain < blind) & (norm(new.off) < norm(at.off)))
            radius = jnp.where(
                ok, jnp.where(length > at.radius, 3 * at.radius, at.radius), 0.25 * jnp.minimum(length, at.radius)
            )
            kept = jax.tree.map(lambda a, b: jnp.where(ok, a, b), new, at)
            return kept._replace(radius=radius, count=at.count + 1)

        return jax.lax.while_loop(unfinished, advance, start)

    def change(self, step: Any, weights: Any) -> Any:
        """Sums over the states of g(t) and g(t) w with ``g(t) = exp(-t) - 1 + t`` and ``t = step.w``, |t| below 1e-3.

        They are of second order in t: beside the sums with 1 - t single precision is enough for them.
        """
        weights = weights.astype(self.w.dtype)
        size = jnp.maximum(norm(step), 1e-300)  # apart, so that the square of a tiny step is not lost
        t = (step / size).astype(self.w.dtype) @ self.w
        s = size.astype(self.w.dtype)
        curved = weights * (t * t * (0.5 - s * t * (1 / 6 - s * t / 24)))
        return size * size * (self.features[: self.k + 1] @ curved).astype(step.dtype) / jnp.sum(weights)

    def moved(self, at: _Point, change: Any) -> tuple[_Point, Any]:
        """The point after the full Newton step, from the moments before it; and whether the step is small enough.

        exp(-t) = 1 - t + g(t): the means with 1 - t are known, those with g are `change`.  The step from there uses
        the covariance before the move, which is off by a relative |t|.
        """
        mean = at.off + at.q
        along = mean @ at.step
        after = 1.0 - along + change[0], mean - at.chi @ at.step - mean * along + change[1:]
        x = at.x + at.step
        off = after[1] / after[0] - at.q
        value = at.value + at.step @ at.q + jnp.log(after[0])
        spread = norm(at.step) * self.reach
        moved = at._replace(x=x, value=value, off=off, step=self.newton(off, at.chi), left_over=2 * spread)
        return moved, spread < 1e-3

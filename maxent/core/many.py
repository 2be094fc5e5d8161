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
    """Solution of ``matrix @ x = right`` for a small positive definite matrix.

    Unrolled Cholesky elimination up to 8 x 8: mapped over a batch it is a handful of vector operations, where LAPACK
    would be called once for every matrix.
    """
    k = matrix.shape[0]
    if k > 8:
        return jax.scipy.linalg.cho_solve((jnp.linalg.cholesky(matrix), True), right)
    rows, b = [matrix[i] for i in range(k)], [right[i] for i in range(k)]
    for i in range(k):
        for j in range(i + 1, k):
            factor = rows[j][i] / rows[i][i]
            rows[j] = rows[j] - factor * rows[i]
            b[j] = b[j] - factor * b[i]
    x: list[Any] = [None] * k
    for i in reversed(range(k)):
        known = sum((rows[i][j] * x[j] for j in range(i + 1, k)), jnp.zeros_like(b[i]))
        x[i] = (b[i] - known) / rows[i][i]
    return jnp.stack(x)


def _diagonal(family: Blocks, targets: Any, iterations: int, batch: int) -> Many:
    """Damped Newton for listed states, from the inverted cumulant series, capped in the metric of the start.

    The last step is taken without another evaluation once the residual it leaves, at most the present one times the
    spread of the step, is below the rounding floor.
    """
    k, n = family.diagonal.shape
    log_weights = jnp.zeros(n) if family.prior is None else family.prior
    p0 = jax.nn.softmax(log_weights)
    mean = family.diagonal @ p0
    centred = family.diagonal - mean[:, None]
    covariance = (centred * p0) @ centred.T
    transform = whitener(covariance)
    # combinations without any spread keep the multiplier zero; a one on their diagonal leaves them alone
    dead = jnp.where(jnp.any(transform != 0, axis=1), 0.0, 1.0)
    agrees = jax.vmap(lambda t: consistent(covariance, mean, t))(targets)
    w = transform @ centred
    rows, columns = np.triu_indices(k)
    features = jnp.concatenate([jnp.ones((1, n)), w, w[rows] * w[columns]])
    reach = jnp.sqrt(jnp.max(jnp.sum(w * w, axis=0)))
    third = jnp.einsum("an,bn,cn->abc", w * p0, w, w)
    blurs = EPS * norm(jnp.abs(transform) @ (jnp.abs(mean)[:, None] + jnp.abs(targets.T)), axis=0)

    def evaluate(x: Any, q: Any) -> tuple[Any, Any, Any]:
        exponent = log_weights - x @ w
        top = jnp.max(exponent)
        moments = features @ jnp.exp(exponent - top)
        first = moments[1 : k + 1] / moments[0]
        second = jnp.zeros((k, k)).at[rows, columns].set(moments[k + 1 :] / moments[0], unique_indices=True)
        second = second + jnp.triu(second, 1).T
        return top + jnp.log(moments[0]) + x @ q, first - q, second - jnp.outer(first, first)

    def newton(off: Any, chi: Any) -> Any:
        ridge = (1e-14 * jnp.trace(chi) + 1e-300) * jnp.eye(k) + jnp.diag(dead)
        return positive_solve(chi + ridge, off)

    def one(pair: tuple[Any, Any]) -> tuple[Any, ...]:
        q, blur = pair

        def floor(x: Any, chi: Any) -> Any:
            return 4 * EPS * (1 + norm(x) * reach) * jnp.maximum(1.0, jnp.sqrt(norm(chi))) + 2 * blur

        def settled(x: Any, off: Any, chi: Any, step: Any) -> Any:
            # residual after one more full step, bounded through the spread of the step
            after = norm(off) * norm(step) * reach
            return (norm(off) <= floor(x, chi)) | ((norm(step) * reach < 1e-3) & (after <= floor(x, chi)))

        def unfinished(carry: tuple) -> Any:
            count, x, _, off, chi, step, radius = carry
            return (count < iterations) & ~settled(x, off, chi, step) & (radius > 1e-9)

        def advance(carry: tuple) -> tuple:
            count, x, value, off, chi, step, radius = carry
            length = norm(step)
            step = step * jnp.minimum(1.0, radius / length)
            new_value, new_off, new_chi = evaluate(x + step, q)
            blind = 160 * EPS * (jnp.abs(value) + norm(x) * reach + 1)
            ok = (new_value <= value - 1e-4 * (off @ step)) | ((off @ step < blind) & (norm(new_off) < norm(off)))
            radius = jnp.where(ok, jnp.where(length > radius, 3 * radius, radius), 0.25 * jnp.minimum(length, radius))
            x, value, off, chi = jax.tree.map(
                lambda a, b: jnp.where(ok, a, b), (x + step, new_value, new_off, new_chi), (x, value, off, chi)
            )
            return count + 1, x, value, off, chi, newton(off, chi), radius

        # <w>(x) = -x + third[x, x]/2 - ..., inverted; far targets start on their ray instead
        x = jnp.where(norm(q) < 1.0, -q + 0.5 * third @ q @ q, -q / jnp.maximum(1.0, norm(q)))
        value, off, chi = evaluate(x, q)
        start = (jnp.asarray(1), x, value, off, chi, newton(off, chi), jnp.asarray(1.0))
        count, x, value, off, chi, step, _ = jax.lax.while_loop(unfinished, advance, start)
        soft = jnp.trace(positive_solve(chi + 1e-300 * jnp.eye(k) + jnp.diag(dead), jnp.eye(k))) - jnp.sum(dead)
        exists = (soft * 2 * reach * (norm(off) + 16 * floor(x, chi))) ** 2 < 0.25
        done = settled(x, off, chi, step) & exists
        x = jnp.where(done, x + step, x)
        left = jnp.where(done, jnp.zeros(k), off)
        return x, done, count, value - 0.5 * jnp.where(done, off @ step, 0.0) - x @ q, left

    white = (targets - mean) @ transform.T
    # a batch takes as many steps as its slowest fit: fits that lie equally far out go together
    order = jnp.argsort(norm(white, axis=1))
    found = jax.lax.map(one, (white[order], blurs[order]), batch_size=batch)
    back = jnp.argsort(order)
    x, converged, steps, log_z, left = jax.tree.map(lambda a: a[back], found)
    lam = x @ transform
    inverse = jnp.linalg.pinv(transform)
    return Many(Fit(lam, converged & agrees, steps), log_z - lam @ mean, targets + left @ inverse.T)

"""Multipliers as a differentiable function of targets and charges, inside anybody's JAX code.

The minimiser of ``F(lam) = ln Z(lam) + lam.q`` obeys ``<Q>(lam) = q``; by the implicit function theorem

    d lam = -chi^-1 (d q - d<Q>|_lam),

with the Kubo-Mori covariance chi and the change of the values at fixed multipliers through the family's arrays.  The
iteration itself is never differentiated.  Floor: core.
"""

from __future__ import annotations

from dataclasses import replace
from functools import partial
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp

from maxent.core.blocks import Blocks
from maxent.core.contract import EPS, Evaluation, Family
from maxent.core.newton import PATIENCE, Iterate, at_floor, begin, newton_step
from maxent.core.pytrees import announce

__all__ = ["Fit", "attach", "consistent", "fit", "minimiser_near", "norm", "values_at", "whitener"]

announce()

#: Eigenvalues of the normalised covariance below this are redundancies: the Gram matrix knows no better.
REDUNDANT = 1e-13


class Fit(NamedTuple):
    """Multipliers of all charges (m,), whether the residual is at its rounding floor, and the steps taken."""

    lam: Any
    converged: Any
    steps: Any


def values_at(family: Family, lam: Any) -> Any:
    """``<Q_j>`` at `lam`, differentiable once more at any degeneracy."""
    return -jax.grad(lambda x: family.log_partition(x))(lam)


def spread_out(lam: Any, free: tuple[int, ...], m: int) -> Any:
    """Multipliers of all m charges from those of the free ones; the other charges are observed, at zero."""
    return lam if free == tuple(range(m)) else jnp.zeros(m).at[jnp.array(free, int)].set(lam, unique_indices=True)


def fit(family: Family, targets: Any, free: tuple[int, ...], m: int, iterations: int) -> Fit:
    """Multipliers that give the free charges their targets.

    Parameters
    ----------
    family : Family
        A pytree of arrays (`Family.traced`).
    targets : (len(free),) array
    free : tuple of int
        Charges that have a target; the multipliers of the others are zero.
    m : int
        Number of charges.
    iterations : int
        Largest number of trial steps.
    """
    # the iteration sees constants: its derivative is attached afterwards
    still, q = jax.lax.stop_gradient((family, targets))
    start, picked = jnp.zeros(len(free)), jnp.array(free, int)
    # spread and rank under the counting measure: a peaked prior can hide them
    counting = replace(still, prior=None, prior_dense=()) if isinstance(still, Blocks) else still
    first = counting.evaluate(spread_out(start, free, m))
    h0 = first.covariance[jnp.ix_(picked, picked)]
    transform = whitener(h0)

    def evaluate(x: Any) -> Evaluation:
        lam = transform.T @ x
        ev = still.evaluate(spread_out(lam, free, m))
        values, covariance = ev.values[picked], ev.covariance[jnp.ix_(picked, picked)]
        chi = transform @ covariance @ transform.T
        blur = EPS * norm(jnp.abs(transform) @ (jnp.abs(values) + jnp.abs(q)))
        rounding = 4 * EPS * (1 + ev.level) * jnp.maximum(1.0, jnp.sqrt(norm(chi))) + 2 * blur
        level = ev.level + jnp.abs(lam) @ jnp.abs(q)
        return Evaluation(ev.log_partition + lam @ q, transform @ (values - q), chi, rounding, level)

    def unfinished(carry: tuple[Any, Iterate]) -> Any:
        count, at = carry
        return (count < iterations) & ~at_floor(at) & (at.rejected < PATIENCE)

    def advance(carry: tuple[Any, Iterate]) -> tuple[Any, Iterate]:
        count, at = carry
        return count + 1, newton_step(evaluate, at)

    count, at = jax.lax.while_loop(unfinished, advance, (jnp.asarray(0), begin(evaluate, start)))
    lam = attach(family, targets, spread_out(transform.T @ at.lam, free, m), free)
    reach = still.reach()[picked] if isinstance(still, Blocks) else jnp.full(len(free), jnp.nan)
    agrees = consistent(h0, first.values[picked], q)
    return Fit(lam, agrees & at_floor(at) & minimiser_near(at, jnp.abs(transform) @ reach), count)


def consistent(covariance: Any, values: Any, targets: Any) -> Any:
    """Whether combinations without any spread have the values they are asked to have.

    `covariance` and `values` are those of any state of full support: such a combination is the same in all of them.
    """
    size = jnp.sqrt(jnp.diagonal(covariance))
    unit = jnp.where(size > 0, 1 / jnp.where(size > 0, size, 1.0), 1 / (jnp.abs(values) + jnp.abs(targets) + 1e-300))
    live = size > 0
    chi = jnp.where(live[:, None] & live[None, :], covariance * unit[:, None] * unit[None, :], 0.0)
    h, axes = jnp.linalg.eigh(chi)
    off = jnp.abs(axes.T @ (unit * (values - targets)))
    blur = jnp.abs(axes.T) @ (unit * (jnp.abs(values) + jnp.abs(targets)))
    return jnp.all((h > REDUNDANT * h[-1]) | (off <= 1e-9 * (1 + blur)))


def minimiser_near(at: Iterate, reach: Any) -> Any:
    """Whether a minimiser exists near the iterate: ``R nu < 1/2`` of `core.exists`, with `reach` bounding the spreads.

    A diverging run always gets to its rounding floor, which grows with the exponent; this tells it from a fit.  Where
    no bound is known (NaN), a relative residual of 1e-9 has to do.
    """
    h = jnp.maximum(at.curvature, 1e-150)
    off = jnp.abs(at.axes.T @ at.evaluation.values) + at.evaluation.rounding
    spread = jnp.abs(at.axes.T) @ reach
    # combinations that were left where they are (no spread at all) have nothing to prove
    there = ~(spread <= 1e-12 * jnp.max(reach))
    nu2 = jnp.sum(jnp.where(there, off**2 / h, 0.0))
    r2 = jnp.sum(jnp.where(there, spread**2 / h, 0.0))
    return jnp.where(jnp.isnan(r2), at.residual < 1e-9, r2 * nu2 < 0.25)


def whitener(covariance: Any) -> Any:
    """Rows T with ``T chi T^T = 1`` where there is spread, and zero rows where there is none."""
    size = jnp.sqrt(jnp.diagonal(covariance))
    unit = jnp.where(size > 0, 1 / jnp.where(size > 0, size, 1.0), 0.0)
    h, axes = jnp.linalg.eigh(covariance * unit[:, None] * unit[None, :])
    live = h > REDUNDANT * h[-1]
    return jnp.where(live[:, None], (axes / jnp.sqrt(jnp.where(live, h, 1.0))).T, 0.0) * unit[None, :]


@partial(jax.custom_jvp, nondiff_argnums=(3,))
def attach(family: Family, targets: Any, lam: Any, free: tuple[int, ...]) -> Any:
    """`lam` itself, with the derivative that the minimiser has; costs nothing when nobody differentiates."""
    return lam


@attach.defjvp
def _attach_jvp(free: tuple[int, ...], primals: tuple, tangents: tuple) -> tuple[Any, Any]:
    (family, _, lam), (family_dot, targets_dot, _) = primals, tangents
    picked = jnp.array(free, int)
    _, moved = jax.jvp(lambda f: values_at(f, lam)[picked], (family,), (family_dot,))
    covariance = family.evaluate(lam).covariance[jnp.ix_(picked, picked)]
    transform = whitener(covariance)
    change = -(transform.T @ (transform @ (targets_dot - moved)))
    return lam, spread_out(change, free, lam.shape[0])


def norm(x: Any, axis: int | None = None) -> Any:
    """Euclidean (Frobenius) norm, of all entries or along an axis."""
    return jnp.sqrt(jnp.sum(x * x, axis=axis))

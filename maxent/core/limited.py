"""Limited-memory BFGS for many multipliers, compiled: no Hessian until the end.

A Newton step with thousands of charges spends its time forming the covariance.  This route minimises the dual with the
optax implementation (zoom line search, More and Thuente type conditions; Nocedal, Wright, Numerical Optimization, 2006,
from memory) and hands its end point to the verdict logic, which needs the covariance only there.  Floor: core.
"""

from __future__ import annotations

from functools import partial
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import optax

from maxent.core.contract import EPS, Family
from maxent.core.pytrees import announce

__all__ = ["MANY", "minimise_limited"]

announce()

#: Above this many independent charges the JAX driver starts with this route (measured, docs/drivers.md).
MANY = 300


@partial(jax.jit, static_argnames=("memory", "iterations"))
def _minimise(family: Family, lam: Any, memory: int, iterations: int) -> tuple[Any, Any]:
    search = optax.lbfgs(memory_size=memory)
    dual = lambda x: family.log_partition(x)
    value_and_slope = optax.value_and_grad_from_state(dual)

    def unfinished(carry: tuple) -> Any:
        count, x, state, best, stalled = carry
        slope = optax.tree.get(state, "grad")
        value = optax.tree.get(state, "value")
        rounding = 4 * EPS * (1 + jnp.abs(value) + jnp.abs(x @ slope))
        small = jnp.sqrt(jnp.sum(slope * slope)) <= 8 * rounding
        return (count < iterations) & (stalled < 12) & ((count == 0) | ~small)

    def advance(carry: tuple) -> tuple:
        count, x, state, best, stalled = carry
        value, slope = value_and_slope(x, state=state)
        step, state = search.update(slope, state, x, value=value, grad=slope, value_fn=dual)
        x = optax.apply_updates(x, step)
        size = jnp.sqrt(jnp.sum(optax.tree.get(state, "grad") ** 2))
        better = size < 0.9 * best
        return count + 1, x, state, jnp.minimum(best, size), jnp.where(better, 0, stalled + 1)

    start = (jnp.asarray(0), lam, search.init(lam), jnp.asarray(jnp.inf), jnp.asarray(0))
    count, x, *_ = jax.lax.while_loop(unfinished, advance, start)
    return x, count


def minimise_limited(
    family: Family, lam: np.ndarray, *, memory: int = 20, iterations: int = 3000
) -> tuple[np.ndarray, int]:
    """Minimiser of ``ln Z`` of a whitened, shifted family without Hessians, or the last iterate.

    Parameters
    ----------
    family : Family
        Whitened charges minus targets; a pytree.
    lam : (r,) ndarray
        Start.
    memory : int
        Pairs of steps and gradient changes kept.
    iterations : int
        Largest number of steps.

    Returns
    -------
    lam : (r,) ndarray
    count : int
        Steps taken.
    """
    with jax.enable_x64(True):
        x, count = _minimise(family, jnp.asarray(lam), memory, iterations)
        return np.asarray(x), int(count)

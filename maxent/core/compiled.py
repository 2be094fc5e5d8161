"""The JAX driver: the dual free energy as a differentiable function, minimised under ``lax.while_loop``.

Shares the Newton step with the host driver; carries a code and no faces, because verdicts are decided on the host.
Importing it never changes JAX's precision: every entry works inside ``jax.enable_x64(True)``.  Floor: core.
"""

from __future__ import annotations

from functools import partial
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from maxent.core.contract import EPS, Evaluation, Family
from maxent.core.newton import PATIENCE, Iterate, at_floor, begin, newton_step
from maxent.core.pytrees import announce

__all__ = ["evaluate_by_derivatives", "minimise"]

#: Size of the exponent beyond which the compiled loop hands over to the host.
FAR = 1e6


announce()


@jax.jit
def _derivatives(family: Family, lam: Any) -> tuple[Any, Any, Any]:
    value, gradient = jax.value_and_grad(lambda x: family.log_partition(x))(lam)
    return value, gradient, jax.hessian(lambda x: family.log_partition(x))(lam)


def evaluate_by_derivatives(family: Family, lam: Any) -> Evaluation:
    """Evaluation of a family that brings nothing but `log_partition`, by automatic differentiation."""
    host = isinstance(lam, np.ndarray)
    if host:
        with jax.enable_x64(True):
            log_z, gradient, hessian = (np.asarray(x) for x in _derivatives(family, lam))
    else:
        log_z, gradient, hessian = _derivatives(family, lam)
    xp = np if host else jnp
    # the exponent itself is not seen from here; on the states that matter it is of the size of these two
    level = xp.abs(log_z) + xp.abs(lam @ gradient)
    size = xp.sqrt(xp.linalg.matrix_norm(hessian)) if len(lam) else 0.0
    rounding = 4 * EPS * (1 + level) * xp.maximum(1.0, size)
    return Evaluation(log_z, -gradient, 0.5 * (hessian + hessian.T), rounding, level)


@partial(jax.jit, static_argnames="iterations")
def _minimise(family: Family, lam: Any, iterations: int) -> tuple[Any, Any]:
    start = begin(family.evaluate, lam)

    def unfinished(carry: tuple[Any, Iterate]) -> Any:
        count, at = carry
        # a separating or diverging iterate is the host's business: faces and certificates are decided there
        ev = at.evaluation
        here = ev.level < FAR if ev.lowest is None else (ev.level < FAR) & ~(ev.lowest > 0)
        return (count < iterations) & ~at_floor(at) & (at.rejected < PATIENCE) & here

    def advance(carry: tuple[Any, Iterate]) -> tuple[Any, Iterate]:
        count, at = carry
        return count + 1, newton_step(family.evaluate, at, family.inside)

    count, at = jax.lax.while_loop(unfinished, advance, (jnp.asarray(0), start))
    return at.lam, count


def minimise(family: Family, lam: np.ndarray, *, iterations: int = 200) -> tuple[np.ndarray, int]:
    """Minimiser of ``ln Z`` of a whitened, shifted family, or the last iterate where there is none.

    Parameters
    ----------
    family : Family
        Whitened charges minus targets; a pytree.
    lam : (r,) ndarray
        Start.
    iterations : int
        Largest number of trial steps.

    Returns
    -------
    lam : (r,) ndarray
    count : int
        Trial steps taken.
    """
    with jax.enable_x64(True):
        x, count = _minimise(family, jnp.asarray(lam), iterations)
        return np.asarray(x), int(count)

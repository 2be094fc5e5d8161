"""Trace functions of free particles, ``Tr ln(1 + e^-X)`` and ``-Tr ln(1 - e^-X)``, with their second derivatives.

One rule serves every quadratic family: ``ln Z = Tr f(X)``, ``d ln Z = -Re Tr(n(X) dX)``, and second derivatives are
divided differences of the occupation n.  These are written as products that neither cancel nor overflow, whatever the
distance of two levels:

    (n_a - n_b)/(x_b - x_a) = max(n) * (1 - n of the higher level) * (1 - e^-d)/d,      d = |x_a - x_b|,

with ``1 + n`` for bosons.  Derivatives by JAX are right to second order at any degeneracy.  Floor: families; must not
know where a one-body matrix comes from.
"""

from __future__ import annotations

from functools import cache
from typing import Any

from maxent.core.contract import namespace
from maxent.families.statistics import log_weights, occupations, vacancies

__all__ = ["bends", "trace_log"]


def bends(x: Any, sign: int) -> Any:
    """Divided differences of ``-n(x)`` over pairs of levels; x (..., d), result (..., d, d), never negative."""
    xp = namespace(x)
    a, b = x[..., :, None], x[..., None, :]
    gap = xp.abs(a - b)
    # below 1e-8 the series is right to the last digit; the inner where keeps the division finite
    ratio = xp.where(gap > 1e-8, -xp.expm1(-gap) / xp.where(gap > 1e-8, gap, 1.0), 1.0 - 0.5 * gap)
    n, left = occupations(x, sign), vacancies(x, sign)
    low = xp.maximum(n[..., :, None], n[..., None, :])
    pair = (left[..., :, None], left[..., None, :])
    return low * (xp.maximum(*pair) if sign > 0 else xp.minimum(*pair)) * ratio


@cache
def _rules(sign: int) -> Any:
    """The trace function of one statistics with its derivatives, for JAX."""
    import jax
    import jax.numpy as jnp

    @jax.custom_jvp
    def once_more(matrix: Any) -> Any:
        """Identity that refuses to be differentiated: the rule of `filled` is right once."""
        return matrix

    @once_more.defjvp
    def refuse(primals: tuple, tangents: tuple) -> tuple:
        raise NotImplementedError("third derivatives of Tr ln(1 + e^-X) are not provided: wrong at degeneracies")

    @jax.custom_jvp
    def filled(matrix: Any) -> Any:
        x, u = jnp.linalg.eigh(matrix, symmetrize_input=False)
        return (u * occupations(x, sign)[..., None, :]) @ jnp.conj(jnp.swapaxes(u, -1, -2))

    @filled.defjvp
    def bent(primals: tuple, tangents: tuple) -> tuple:
        (matrix,), (change,) = primals, tangents
        x, u = jnp.linalg.eigh(once_more(matrix), symmetrize_input=False)
        adjoint = jnp.conj(jnp.swapaxes(u, -1, -2))
        value = (u * occupations(x, sign)[..., None, :]) @ adjoint
        return value, -(u @ (bends(x, sign) * (adjoint @ change @ u)) @ adjoint)

    @jax.custom_jvp
    def total(matrix: Any) -> Any:
        x = jnp.linalg.eigh(matrix, symmetrize_input=False)[0]
        inside = jnp.where(jnp.min(x) > 0, jnp.sum(log_weights(jnp.where(x > 0, x, 1.0), sign)), jnp.inf)
        return jnp.sum(log_weights(x, sign)) if sign > 0 else inside

    @total.defjvp
    def slope(primals: tuple, tangents: tuple) -> tuple:
        (matrix,), (change,) = primals, tangents
        occupied = jnp.swapaxes(filled(matrix), -1, -2)
        return total(matrix), -jnp.real(jnp.sum(occupied * change))

    return total


def trace_log(matrices: Any, sign: int) -> Any:
    """``sum Tr f(X)`` over Hermitian matrices (..., d, d), for JAX; +inf for bosons outside their domain."""
    return _rules(sign)(matrices)

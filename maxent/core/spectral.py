"""Spectral functions of Hermitian matrices with derivatives right to second order at any degeneracy.

``ln Tr exp(-K)`` differentiated twice through an eigendecomposition is NaN wherever two levels coincide (always at
``lam = 0``).  Here the first derivative is ``-Re Tr(rho dK)`` and the derivative of ``rho`` is written with divided
differences, which are finite for equal levels:

    (d rho)_ab = -(V^H dK V)_ab * [p_a, p_b] + ...,     [p_a, p_b] = (p_a - p_b)/(E_b - E_a) -> p_a.

Third derivatives are refused.  Floor: core.
"""

from __future__ import annotations

from typing import Any

import jax
import jax.numpy as jnp

from maxent.core.contract import namespace

__all__ = ["divided_differences", "gibbs", "log_trace_exp"]


def divided_differences(levels: Any, weights: Any) -> Any:
    """Divided differences of ``exp(-E)`` over pairs of levels, normalised as the weights are.

    ``K_ab = integral_0^1 p_a^(1-s) p_b^s ds = max(p_a, p_b) (1 - exp(-|d|))/|d|`` with ``d = E_a - E_b``; the
    weights of the Kubo-Mori inner product (D. Petz, J. Math. Phys. 35, 780 (1994),
    from memory).

    Parameters
    ----------
    levels : (d,) array
        Eigenvalues of the exponent.
    weights : (d,) array
        ``exp(-levels)`` up to a common factor.

    Returns
    -------
    (d, d) array
    """
    xp = namespace(levels)
    gap = xp.abs(levels[:, None] - levels[None, :])
    # below 1e-8 the series 1 - gap/2 is right to the last digit; the inner where keeps the division finite
    ratio = xp.where(gap > 1e-8, -xp.expm1(-gap) / xp.where(gap > 1e-8, gap, 1.0), 1.0 - 0.5 * gap)
    return ratio * xp.maximum(weights[:, None], weights[None, :])


@jax.custom_jvp
def _once_more(exponent: Any) -> Any:
    """Identity that refuses to be differentiated: the rule of `gibbs` is right once."""
    return exponent


@_once_more.defjvp
def _refuse(primals: tuple, tangents: tuple) -> tuple:
    raise NotImplementedError("third derivatives of ln Tr exp(-K) are not provided: wrong at degeneracies")


@jax.custom_jvp
def gibbs(exponent: Any) -> Any:
    """Density matrix ``exp(-K)/Tr exp(-K)``, differentiable once at any degeneracy.

    Parameters
    ----------
    exponent : (d, d) array
        Hermitian matrix K, real or complex.
    """
    levels, vectors = jnp.linalg.eigh(exponent, symmetrize_input=False)
    weights = jax.nn.softmax(-levels)
    return (vectors * weights) @ vectors.conj().T


@gibbs.defjvp
def _gibbs_jvp(primals: tuple, tangents: tuple) -> tuple:
    (exponent,), (change,) = primals, tangents
    levels, vectors = jnp.linalg.eigh(_once_more(exponent), symmetrize_input=False)
    weights = jax.nn.softmax(-levels)
    adjoint = vectors.conj().T
    rotated = adjoint @ change @ vectors
    rho = (vectors * weights) @ adjoint
    mean = jnp.sum(weights * jnp.real(jnp.diagonal(rotated)))
    bent = vectors @ (rotated * divided_differences(levels, weights)) @ adjoint
    return rho, mean * rho - bent


@jax.custom_jvp
def log_trace_exp(exponent: Any) -> Any:
    """``ln Tr exp(-K)`` of a Hermitian matrix, differentiable twice at any degeneracy.

    Parameters
    ----------
    exponent : (d, d) array
        Hermitian matrix K, real or complex.
    """
    return jax.nn.logsumexp(-jnp.linalg.eigh(exponent, symmetrize_input=False)[0])


@log_trace_exp.defjvp
def _log_trace_exp_jvp(primals: tuple, tangents: tuple) -> tuple:
    (exponent,), (change,) = primals, tangents
    return log_trace_exp(exponent), -jnp.real(jnp.sum(gibbs(exponent).T * change))

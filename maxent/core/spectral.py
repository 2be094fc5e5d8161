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

from maxent.core.differences import divided_differences

__all__ = ["divided_differences", "gibbs", "log_trace_exp"]


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

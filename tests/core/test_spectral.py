"""Spectral functions against mpmath and SciPy's Frechet derivative: exact degeneracies, lam = 0, large gaps."""

from __future__ import annotations

import jax
import jax.numpy as jnp
import mpmath
import numpy as np
import pytest
from scipy.linalg import expm, expm_frechet

from maxent.core.spectral import divided_differences, gibbs, log_trace_exp


def hermitian(rng, d, *, is_complex):
    a = rng.standard_normal((d, d)) + (1j * rng.standard_normal((d, d)) if is_complex else 0)
    return (a + a.conj().T) / 2


def exponents(rng, *, is_complex):
    """Exponents of every kind of spectrum, in a generic basis."""
    u = np.linalg.eigh(hermitian(rng, 5, is_complex=is_complex))[1]
    spectra = {
        "zero": np.zeros(5),
        "all equal": np.full(5, 3.0),
        "pairs": np.array([0, 0, 1, 1, 2.0]),
        "nearly equal": np.array([0, 1e-13, 1e-10, 1e-8, 1e-6]),
        "around the series": np.array([0, 0.99e-8, 2.0e-8, 1.0, 1 + 1.01e-8]),
        "generic": np.array([-1.3, 0.2, 0.9, 2.2, 3.1]),
        "large gaps": np.array([0, 0, 30, 400, 900.0]),
        "far from zero": np.array([-5e3, -5e3 + 1, 5e3 - 1, 5e3, 5e3]) + 1e3,
    }
    for name, levels in spectra.items():
        k = np.diag(levels).astype(complex if is_complex else float) if name == "zero" else (u * levels) @ u.conj().T
        yield name, (k + k.conj().T) / 2


@pytest.mark.parametrize("is_complex", [False, True], ids=["real", "complex"])
def test_values_gradient_and_hessian(rng, is_complex):
    changes = np.array([hermitian(rng, 5, is_complex=is_complex) for _ in range(2)])

    @jax.jit
    def derivatives(k):
        f = lambda t: log_trace_exp(k + jnp.tensordot(t, changes, axes=1))
        return f(jnp.zeros(2)), jax.grad(f)(jnp.zeros(2)), jax.hessian(f)(jnp.zeros(2)), gibbs(k)

    with jax.enable_x64(True):
        for name, k in exponents(rng, is_complex=is_complex):
            f, slope, hessian, rho = (np.asarray(x) for x in derivatives(jnp.asarray(k)))
            low = np.linalg.eigvalsh(k)[0]
            w = expm(-(k - low * np.eye(5)))
            z = np.trace(w).real
            shifted = -(k - low * np.eye(5)) - np.log(z) * np.eye(5)
            # rounding of the exponent enters the weights relatively
            tol = 1e-14 * (1 + np.abs(k).max()) + 1e-12
            assert f == pytest.approx(np.log(z) - low, rel=1e-14, abs=tol), name
            np.testing.assert_allclose(rho, w / z, rtol=0, atol=tol, err_msg=name)
            means = np.einsum("jab,ba->j", changes, w / z).real
            np.testing.assert_allclose(slope, -means, rtol=0, atol=10 * tol, err_msg=name)
            bent = [expm_frechet(shifted, c, compute_expm=False) for c in changes]
            expected = np.array([[np.trace(a @ b).real for b in bent] for a in changes]) - np.outer(means, means)
            np.testing.assert_allclose(hessian, expected, rtol=0, atol=10 * tol, err_msg=name)


def test_hessian_at_zero_in_closed_form(rng):
    """At K = 0 the Hessian is the covariance of the counting measure."""
    a = hermitian(rng, 4, is_complex=True)
    with jax.enable_x64(True):
        f = lambda t: log_trace_exp(t * jnp.asarray(a))
        bend = float(jax.jit(jax.grad(jax.grad(f)))(0.0))
    assert bend == pytest.approx(np.trace(a @ a).real / 4 - (np.trace(a).real / 4) ** 2, abs=1e-14)


def test_spin_in_closed_form():
    """ln Tr exp(-lam.sigma) = ln 2 cosh |lam|, at 0 and along an axis, where two charges do not commute with it."""
    sigma = jnp.asarray(np.array([[[0, 1], [1, 0]], [[0, -1j], [1j, 0]], [[1, 0], [0, -1]]]))
    with jax.enable_x64(True):
        hessian = jax.jit(jax.hessian(lambda lam: log_trace_exp(jnp.tensordot(lam, sigma, axes=1))))
        np.testing.assert_allclose(hessian(jnp.zeros(3)), np.eye(3), atol=1e-15)
        for r in (1e-12, 1e-6, 0.5, 3.0, 300.0):
            expected = np.diag([np.tanh(r) / r, np.tanh(r) / r, 1 / np.cosh(r) ** 2])
            np.testing.assert_allclose(hessian(jnp.array([0, 0, r])), expected, atol=1e-15)


def test_reverse_and_forward_mode_agree(rng):
    k, a, b = (hermitian(rng, 4, is_complex=True) for _ in range(3))
    with jax.enable_x64(True):
        f = lambda t: log_trace_exp(jnp.asarray(k) + t[0] * a + t[1] * b)
        every = jax.jit(
            lambda x: (jax.grad(f)(x), jax.jacfwd(f)(x), jax.jacrev(jax.grad(f))(x), jax.jacfwd(jax.jacfwd(f))(x))
        )
        back, forward, back_twice, forward_twice = every(jnp.array([0.3, -0.2]))
        np.testing.assert_allclose(back, forward, atol=1e-14)
        np.testing.assert_allclose(back_twice, forward_twice, atol=1e-13)


@jax.jit
def third_derivative(base, change):
    return jax.jvp(jax.grad(jax.grad(lambda t: log_trace_exp(base + t * change))), (0.0,), (1.0,))[1]


@pytest.mark.parametrize("gap", [0.0, 1e-15, 1e-9, 0.1])
def test_third_derivative_is_refused_or_right(gap):
    """A number that is neither right nor NaN would be the one wrong answer."""
    base = np.diag([0.0, 1.0, 1.0 + gap])
    change = np.array([[0, 1, 0], [1, 0, 2], [0, 2, 0.3]])
    with mpmath.workdps(60):
        levels = lambda t: mpmath.eigsy(
            mpmath.matrix(base.tolist()) + t * mpmath.matrix(change.tolist()), eigvals_only=True
        )
        f = lambda t: mpmath.log(sum(mpmath.exp(-e) for e in levels(t)))
        truth = float(mpmath.diff(f, 0, 3, h=mpmath.mpf(10) ** -12))
    with jax.enable_x64(True):
        try:
            third = float(third_derivative(jnp.asarray(base), jnp.asarray(change)))
        except (NotImplementedError, TypeError, ValueError):
            return
    assert np.isnan(third) or third == pytest.approx(truth, rel=1e-6)


def test_precision_follows_the_caller():
    """Single precision stays single; nothing has switched the global flag."""
    assert not jax.config.jax_enable_x64
    assert log_trace_exp(jnp.eye(2)).dtype == jnp.float32
    with jax.enable_x64(True):
        assert log_trace_exp(jnp.eye(2)).dtype == jnp.float64
    assert not jax.config.jax_enable_x64


GAPS = [0.0, 1e-16, 1e-12, 0.99e-8, 1e-8, 1.01e-8, 1e-6, 1e-3, 1.0, 30.0, 700.0, 1e4]


@pytest.mark.parametrize("gap", GAPS)
def test_divided_differences(gap):
    """(p_a - p_b)/(E_b - E_a), both signs of the gap, at 50 digits."""
    levels = np.array([0.25, 0.25 + gap, 1.5])
    weights = np.exp(-levels)
    found = divided_differences(levels, weights)
    with mpmath.workdps(50):
        for i in range(3):
            for j in range(3):
                a, b = mpmath.mpf(levels[i]), mpmath.mpf(levels[j])
                exact = mpmath.exp(-a) if a == b else (mpmath.exp(-a) - mpmath.exp(-b)) / (b - a)
                assert found[i, j] == pytest.approx(float(exact), rel=4e-16 * (1 + abs(levels[i])) + 2e-15, abs=1e-300)
    np.testing.assert_array_equal(found, found.T)


def test_divided_differences_do_not_overflow():
    levels = np.array([-700.0, 0.0, 800.0])
    found = divided_differences(levels, np.exp(-levels - 700.0))
    assert np.all(np.isfinite(found)) and np.all(found >= 0)
    assert found[0, 1] == pytest.approx(1 / 700, rel=1e-14)

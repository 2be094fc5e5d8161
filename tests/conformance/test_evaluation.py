"""One convex function: evaluate, log_partition, their derivatives and their compiled forms agree, and are right."""

from __future__ import annotations

import functools

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from tests.conformance.views import compiled_views, views

every_view = pytest.mark.parametrize("view", views(), ids=lambda v: v.name)
every_compiled = pytest.mark.parametrize("view", compiled_views(), ids=lambda v: v.name)


@functools.cache
def truths(name: str):
    (view,) = [v for v in views() if v.name == name]
    return [(lam, *view.dense.derivatives(lam)) for lam in view.multipliers()]


@jax.jit
def compiled(family, batch):
    """Everything JAX says at a batch of multipliers: ln Z, gradient, Hessian, and the evaluation."""
    f = family.log_partition
    everything = lambda lam: (f(lam), jax.grad(f)(lam), jax.hessian(f)(lam), family.evaluate(lam))
    return jax.vmap(everything)(batch)


@functools.cache
def answers(name: str):
    (view,) = [v for v in views() if v.name == name]
    with jax.enable_x64(True):
        return jax.tree.map(np.asarray, compiled(view.family, jnp.asarray(np.array(view.multipliers()))))


def close(actual, expected, tol=1e-12):
    scale = max(1.0, np.abs(expected).max(initial=0.0))
    np.testing.assert_allclose(actual, expected, rtol=0, atol=tol * scale)


@every_view
def test_evaluate_is_right_to_second_order(view):
    for lam, log_z, values, covariance in truths(view.name):
        ev = view.family.evaluate(lam)
        close(ev.log_partition, log_z)
        close(ev.values, values)
        close(ev.covariance, covariance)
        factor = ev.factor()
        close(factor @ factor.T, covariance)


@every_view
def test_values_alone_are_the_same_values(view):
    for lam, log_z, values, _ in truths(view.name):
        ev = view.family.evaluate(lam, 1)
        close(ev.log_partition, log_z)
        close(ev.values, values)


@every_view
def test_values_are_differences_of_log_partition(view):
    step = 1e-4
    for lam, *_ in truths(view.name):
        ev = view.family.evaluate(lam)
        at = lambda x: view.family.evaluate(x)
        for j, e in enumerate(np.eye(view.m) * step):
            slope = (at(lam + e).log_partition - at(lam - e).log_partition) / (2 * step)
            assert slope == pytest.approx(-ev.values[j], abs=2e-6 * (1 + np.abs(ev.covariance).max() ** 1.5))
            bend = (at(lam + e).values - at(lam - e).values) / (2 * step)
            np.testing.assert_allclose(
                -bend, ev.covariance[j], rtol=0, atol=1e-5 * (1 + np.abs(ev.covariance).max() ** 2)
            )


@every_compiled
def test_automatic_derivatives_of_log_partition(view):
    """Gradient and Hessian through JAX, at lam = 0 and at degenerate spectra as anywhere; batched."""
    f, slope, hessian, _ = answers(view.name)
    assert f.dtype == slope.dtype == hessian.dtype == np.float64
    for i, (_, log_z, values, covariance) in enumerate(truths(view.name)):
        close(f[i], log_z)
        close(-slope[i], values)
        close(hessian[i], covariance)


@every_compiled
def test_both_array_libraries_evaluate_alike(view):
    """The compiled, batched evaluation equals a loop of host evaluations."""
    *_, many = answers(view.name)
    for i, lam in enumerate(view.multipliers()):
        ev = view.family.evaluate(lam)
        close(many.log_partition[i], ev.log_partition, 1e-13)
        close(many.values[i], ev.values, 1e-13)
        close(many.covariance[i], ev.covariance, 1e-13)
        assert many.rounding[i] == pytest.approx(float(ev.rounding), rel=1e-6)
        assert many.level[i] == pytest.approx(float(ev.level), abs=1e-13)


@every_view
def test_level_is_the_size_of_the_exponent(view):
    for lam, *_ in truths(view.name):
        exponent = view.dense.of(lam)
        if any(len(p) for p in getattr(getattr(view.family, "blocks", None), "prior_dense", ())):
            exponent = exponent - view.dense.log_prior
        ev = view.family.evaluate(lam)
        # the prior of states that are numbers stays out of the exponent; where both occur the dense part decides
        bound = np.abs(np.linalg.eigvalsh(exponent)).max()
        assert float(ev.level) <= bound * (1 + 1e-12) + np.abs(np.diag(view.dense.log_prior)).max() + 1e-12
        if not np.any(view.dense.log_prior):
            assert float(ev.level) == pytest.approx(bound, abs=1e-12)
            assert float(ev.lowest) == pytest.approx(np.linalg.eigvalsh(exponent)[0], abs=1e-12)
        assert 0 < float(ev.rounding) < 1e-12


@pytest.mark.parametrize(
    "name", ["microstates-log_weights", "matrices-commuting", "matrices-complex", "matrices-blocks"]
)
def test_compiled_one_by_one_equals_the_batch(name):
    """jit takes families as arguments; the batch is the loop over its members."""
    (view,) = [v for v in views() if v.name == f"{name}-given"]
    one = jax.jit(lambda family, lam: (family.log_partition(lam), family.evaluate(lam).values))
    f, _, _, many = answers(view.name)
    with jax.enable_x64(True):
        for i, lam in enumerate(view.multipliers()):
            log_z, values = one(view.family, jnp.asarray(lam))
            close(log_z, f[i], 1e-14)
            close(values, many.values[i], 1e-14)

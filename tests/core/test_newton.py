"""Trust-region steps against SciPy and brute force; NumPy and JAX take the same step."""

from __future__ import annotations

from dataclasses import replace

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy.optimize import brentq, minimize

import maxent.core.compiled  # noqa: F401  registers Evaluation and Blocks as pytrees
from maxent.core.blocks import Blocks
from maxent.core.contract import Evaluation
from maxent.core.newton import PATIENCE, at_floor, begin, curvatures, newton_step, settle, trust_step


def model(g, h, s):
    return g @ s + 0.5 * s @ h @ s


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("radius", [1e-3, 0.3, 2.0, 1e6])
def test_trust_step_is_the_minimiser_in_the_ball(seed, radius):
    rng = np.random.default_rng(seed)
    m = 4
    axes = np.linalg.qr(rng.standard_normal((m, m)))[0]
    curvature = np.sort(10.0 ** rng.uniform(-6, 2, m))
    h, g = (axes * curvature) @ axes.T, rng.standard_normal(m)
    s, predicted = trust_step(g, curvature, axes, radius)
    size = np.linalg.norm(s)
    assert size <= radius * (1 + 1e-9)
    assert predicted == pytest.approx(-model(g, h, s), rel=1e-9, abs=1e-14)
    # exact: (h + mu) s = -g with mu from a root finder
    of = lambda mu: np.linalg.norm((axes.T @ g) / (curvature + mu))
    mu = 0.0 if of(0.0) <= radius else brentq(lambda x: 1 / of(x) - 1 / radius, 0.0, 1e8, xtol=1e-14, rtol=1e-15)
    exact = -axes @ ((axes.T @ g) / (curvature + mu))
    np.testing.assert_allclose(s, exact, rtol=0, atol=1e-7 * np.linalg.norm(exact))
    # and no point of the ball is lower
    ball = rng.standard_normal((2000, m))
    ball *= (radius if mu else size) * rng.random((2000, 1)) ** 0.25 / np.linalg.norm(ball, axis=1, keepdims=True)
    assert min(model(g, h, x) for x in ball) >= model(g, h, s) - 1e-9 * abs(model(g, h, s))


def test_trust_step_against_scipy(rng):
    """A constrained minimiser that shares nothing with it."""
    axes = np.linalg.qr(rng.standard_normal((3, 3)))[0]
    curvature = np.array([0.01, 1.0, 30.0])
    h, g = (axes * curvature) @ axes.T, np.array([1.0, -2.0, 0.5])
    s, _ = trust_step(g, curvature, axes, 0.8)
    cons = {"type": "ineq", "fun": lambda x: 0.64 - x @ x, "jac": lambda x: -2 * x}
    start = -0.5 * g / np.linalg.norm(g)
    found = minimize(
        lambda x: model(g, h, x),
        start,
        jac=lambda x: g + h @ x,
        constraints=cons,
        method="SLSQP",
        options={"ftol": 1e-15},
    )
    np.testing.assert_allclose(s, found.x, atol=1e-6)


def test_zero_gradient_makes_no_step():
    s, predicted = trust_step(np.zeros(3), np.array([1e-20, 1.0, 2.0]), np.eye(3), 1.0)
    assert np.array_equal(s, np.zeros(3)) and predicted == 0


def test_curvatures_resolve_what_the_product_loses(rng):
    """Squared singular values of the factor reach 1e-24, where the Gram matrix ends at 1e-16."""
    u, v = np.linalg.qr(rng.standard_normal((3, 3)))[0], np.linalg.qr(rng.standard_normal((50, 3)))[0]
    factor = (u * np.array([1.0, 1e-6, 1e-12])) @ v.T
    ev = Evaluation(0.0, np.zeros(3), factor @ factor.T, 0.0, 0.0, factor=lambda: factor)
    h, axes = curvatures(ev)
    np.testing.assert_allclose(h, [1e-24, 1e-12, 1.0], rtol=1e-3)
    np.testing.assert_allclose(np.abs(axes[:, 0] @ u[:, 2]), 1, atol=1e-6)
    assert np.all(np.diff(h) > 0)
    well = rng.standard_normal((3, 50))
    ev = Evaluation(0.0, np.zeros(3), well @ well.T, 0.0, 0.0, factor=lambda: well)
    np.testing.assert_allclose(curvatures(ev)[0], np.linalg.eigvalsh(well @ well.T), rtol=1e-12)


def spectra(rng, *, is_complex):
    a = rng.standard_normal((3, 5, 5)) + (1j * rng.standard_normal((3, 5, 5)) if is_complex else 0)
    return Blocks(rng.standard_normal((3, 4)), (0.5 * (a + a.conj().transpose(0, 2, 1)),))


@jax.jit
def compiled_step(family, at):
    return newton_step(family.evaluate, at)


@pytest.mark.parametrize("is_complex", [False, True], ids=["real", "complex"])
def test_both_drivers_take_the_same_steps(rng, is_complex):
    """To rounding, from a cold start over accepted and rejected steps to the floor."""
    family = spectra(rng, is_complex=is_complex)
    family = family.combine(np.eye(3), family.evaluate(np.array([1.0, -2.0, 0.7])).values)
    at = begin(family.evaluate, np.array([4.0, 3.0, -5.0]))
    rejected = 0
    with jax.enable_x64(True):
        for _ in range(12):
            carried = jax.tree.map(jnp.asarray, at._replace(evaluation=_plain(at.evaluation)))
            there = compiled_step(family, carried)
            at = newton_step(family.evaluate, at)
            rejected += int(at.rejected > 0)
            np.testing.assert_allclose(there.lam, at.lam, rtol=0, atol=1e-12 * (1 + np.abs(at.lam).max()))
            assert int(there.rejected) == int(at.rejected)
            assert float(there.radius) == pytest.approx(float(at.radius), rel=1e-9)
            np.testing.assert_allclose(there.evaluation.values, at.evaluation.values, rtol=0, atol=1e-12)
            np.testing.assert_allclose(there.evaluation.covariance, at.evaluation.covariance, rtol=0, atol=1e-12)
            assert bool(at_floor(there)) == bool(at_floor(at)) or at.residual < 1e-13
            if at_floor(at):
                break
    assert at_floor(at)
    np.testing.assert_allclose(at.lam, [1.0, -2.0, 0.7], atol=1e-11)


def _plain(ev):
    return replace(ev, factor=None, **{k: np.asarray(getattr(ev, k), float) for k in ("error", "lowest")})


def test_a_nonfinite_trial_is_a_rejected_step():
    """Outside its domain F is +inf; the radius shrinks and the point stays."""

    def evaluate(lam):
        inside = lam[0] > -1
        f = -np.log1p(lam[0]) - 5 * lam[0] if inside else np.inf
        value = 1 / (1 + lam[0]) + 5 if inside else np.nan
        return Evaluation(f, np.array([value]), np.array([[1 / (1 + lam[0]) ** 2 if inside else np.nan]]), 1e-15, 0.0)

    def leaving(lam):  # the slope pulls over the edge
        ev = evaluate(lam)
        return Evaluation(-ev.log_partition, -ev.values, ev.covariance, 1e-15, 0.0)

    at = begin(leaving, np.array([0.0]))
    at = at._replace(radius=10.0)
    after = newton_step(leaving, at)
    assert after.lam[0] == 0.0 and after.rejected == 1
    assert after.radius == pytest.approx(0.25 * 6)  # a quarter of the Newton step that was tried
    assert after.evaluation is at.evaluation


def test_rejections_come_to_an_end():
    """An isolated point of the domain: no step is accepted, however short; PATIENCE rejections show it."""
    lie = lambda lam: Evaluation(np.inf if lam.any() else 0.0, np.array([1.0, 0.0]), np.eye(2), 1e-15, 0.0)
    at = begin(lie, np.zeros(2))
    for _ in range(PATIENCE + 1):
        at = newton_step(lie, at)
    assert at.rejected > PATIENCE


def test_settle_never_makes_it_worse(rng):
    """Near a boundary: the residual after settling is at most that before, and reaches its floor."""
    rows = np.array([np.arange(6.0), np.arange(6.0) ** 2])
    depth = 1e-9
    p = np.array([1.0, *[depth] * 5])
    family = Blocks(rows).combine(np.eye(2), rows @ p / p.sum())
    lam = np.array([20.0, 1.0])
    at = begin(family.evaluate, lam)
    for _ in range(60):
        at = newton_step(family.evaluate, at)
    shaken = begin(family.evaluate, at.lam * (1 + 1e-13))
    assert settle(family.evaluate, shaken).residual <= shaken.residual

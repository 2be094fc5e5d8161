"""Residuals, errors of multipliers, redundancies and conditioning, against dense computation and perturbed targets."""

from __future__ import annotations

import numpy as np
import pytest

import maxent
from maxent.diagnose.conditioning import conditioning
from maxent.families import Matrices, Microstates, Modes


def listed(rows):
    return Microstates({f"q{j}": r for j, r in enumerate(rows)})


def named(values):
    return {f"q{j}": float(x) for j, x in enumerate(values)}


def gibbs(rows, lam):
    e = -(lam @ rows)
    p = np.exp(e - e.max())
    return p / p.sum()


def vector(mapping):
    return np.array(list(mapping.values()))


# ---------------------------------------------------------------- residuals


@pytest.mark.parametrize("spread", [1e-8, 1.0, 1e8])
def test_residual_is_value_minus_target(rng, spread):
    rows = spread * rng.standard_normal((3, 20))
    q = rows @ gibbs(rows, np.array([0.5, -0.2, 0.1]) / spread)
    result = maxent.solve(listed(rows), named(q))
    p = result.state.probabilities
    np.testing.assert_allclose(vector(result.values), rows @ p, rtol=0, atol=1e-15 * 20 * spread)
    np.testing.assert_allclose(vector(result.residuals), vector(result.values) - q, rtol=0, atol=1e-15 * 20 * spread)
    assert np.abs(vector(result.residuals)).max() <= 1e-14 * spread * 5


def test_replay_tells_what_the_listed_multipliers_reproduce():
    """Nearly dependent charges: the state is exact, the multipliers alone are not, and replay says by how much."""
    x = np.linspace(0, 1, 30)
    rows = np.array([x, x + 1e-9 * np.sin(7 * x)])
    q = rows @ gibbs(rows, np.array([1e8, -1e8 + 3]))
    result = maxent.solve(listed(rows), named(q))
    assert result.verdict is maxent.Verdict.SOLVED
    assert np.abs(vector(result.residuals)).max() < 1e-14
    replayed = np.abs(rows @ gibbs(rows, vector(result.multipliers)) - q).max() / (1 + np.abs(q).max())
    assert result.replay == pytest.approx(replayed, rel=1.0, abs=1e-14)
    good = maxent.solve(listed(rows[:1]), named(q[:1]))
    assert good.replay < 1e-15


# ---------------------------------------------------------------- errors of the multipliers


@pytest.mark.parametrize("accuracy", [1e-3, 1e-6, 1e-9])
def test_errors_bound_what_perturbed_targets_do(rng, accuracy):
    """Targets moved anywhere within their stated accuracy: no multiplier moves by more than its error."""
    rows = rng.standard_normal((3, 12))
    q = rows @ gibbs(rows, np.array([0.4, -0.6, 0.3]))
    family = listed(rows)
    stated = accuracy * np.array([1.0, 0.3, 2.0])
    result = maxent.solve(family, named(q), accuracy=named(stated))
    errors, at = vector(result.multiplier_errors), vector(result.multipliers)
    largest = np.zeros(3)
    for signs in np.array(np.meshgrid([-1, 1], [-1, 1], [-1, 1])).reshape(3, -1).T:
        moved = vector(maxent.solve(family, named(q + signs * stated)).multipliers)
        largest = np.maximum(largest, np.abs(moved - at))
    assert np.all(largest <= errors * (1.05 if accuracy < 1e-3 else 1.5) + 1e-13)
    assert np.all(errors <= 10 * largest + 1e-13)


def test_errors_of_rounding_alone(rng):
    """Exact targets: the true multipliers lie within a few errors, also near the boundary where errors are large."""
    ratios = []
    for cold in (1.0, 5.0, 10.0):
        rows = rng.standard_normal((2, 10))
        lam = cold * np.array([0.8, 0.6])
        q = rows @ gibbs(rows, lam)
        result = maxent.solve(listed(rows), named(q))
        assert result.verdict is maxent.Verdict.SOLVED
        error = np.abs(vector(result.multipliers) - lam)
        ratios.append(np.max(error / vector(result.multiplier_errors)))
    assert max(ratios) < 5
    assert result.multiplier_errors["q0"] > 1e-12


def test_loose_says_that_digits_are_missing():
    die = listed([np.arange(1.0, 7)])
    tight = maxent.solve(die, {"q0": 2.0})
    assert not tight.loose and tight.digits["q0"] > 13
    rough = maxent.solve(die, {"q0": 2.0}, accuracy=1e-3)
    assert rough.loose and rough.digits["q0"] < 4
    edge = maxent.solve(die, {"q0": 1 + 1e-11})
    assert edge.verdict is maxent.Verdict.SOLVED and edge.loose
    unsolved = maxent.solve(die, {"q0": 0.5})
    assert not unsolved.loose and np.isnan(unsolved.digits["q0"])


# ---------------------------------------------------------------- redundancies


@pytest.mark.parametrize("kind", ["listed", "matrices"])
def test_every_relation_is_true(rng, kind):
    """Random dependent charges: each relation holds as an operator identity; there are as many as there should be."""
    base = rng.standard_normal((2, 8)) if kind == "listed" else None
    if kind == "listed":
        mix = rng.standard_normal((5, 2))
        stack = np.array([np.diag(x + 0.3 * j) for j, x in enumerate(mix @ base)])
        family = listed(np.array([np.diag(s) for s in stack]))
    else:
        base = rng.standard_normal((2, 5, 5)) + 1j * rng.standard_normal((2, 5, 5))
        base = base + base.conj().transpose(0, 2, 1)
        mix = rng.standard_normal((5, 2))
        stack = np.einsum("jr,rab->jab", mix, base) + np.arange(5)[:, None, None] * np.eye(5)
        family = Matrices({f"q{j}": s for j, s in enumerate(stack)})
    q = np.trace(stack, axis1=1, axis2=2).real / stack.shape[1]
    result = maxent.solve(family, named(q))
    assert result.verdict is maxent.Verdict.SOLVED
    assert len(result.redundancies) == 3
    vectors = []
    for relation in result.redundancies:
        c = np.array([relation.coefficients.get(f"q{j}", 0.0) for j in range(5)])
        total = np.einsum("j,jab->ab", c, stack)
        size = np.abs(c[:, None, None] * stack).max()
        np.testing.assert_allclose(total, relation.constant * np.eye(stack.shape[1]), atol=1e-12 * size)
        vectors.append(c)
    assert np.linalg.matrix_rank(vectors) == 3


def test_relations_are_as_short_as_possible():
    """A duplicate, a constant and a zero are named alone, not mixed with one another."""
    x = np.array([0.0, 1.0, 4.0])
    family = Microstates({"x": x, "twice": 2 * x, "seven": np.full(3, 7.0), "zero": np.zeros(3), "y": x**2})
    result = maxent.solve(family, {"x": 1.0, "twice": 2.0, "seven": 7.0, "zero": 0.0, "y": 2.5})
    found = {frozenset(r.coefficients): r for r in result.redundancies}
    assert set(found) == {frozenset({"x", "twice"}), frozenset({"seven"}), frozenset({"zero"})}
    assert found[frozenset({"seven"})].constant / found[frozenset({"seven"})].coefficients["seven"] == pytest.approx(
        7.0
    )
    pair = found[frozenset({"x", "twice"})].coefficients
    assert pair["x"] / pair["twice"] == pytest.approx(-2.0)


def test_no_relation_among_independent_charges(rng):
    assert maxent.solve(listed(rng.standard_normal((3, 9))), named([0.0, 0.1, 0.0])).redundancies == ()


# ---------------------------------------------------------------- conditioning


def test_conditioning_is_the_spectrum_of_the_correlations(rng):
    """Against numpy.corrcoef with the weights of the state, through the public result."""
    rows = rng.standard_normal((3, 15)) * np.array([1e-3, 1, 1e4])[:, None]
    rows[1] += rows[2] * 1e-4
    lam = np.array([300.0, 0.2, -1e-5])
    p = gibbs(rows, lam)
    result = maxent.solve(listed(rows), named(rows @ p))
    c = np.cov(rows, aweights=p, bias=True)
    np.testing.assert_allclose(
        result.covariance, c, rtol=1e-10, atol=1e-12 * np.abs(np.outer(*[np.sqrt(np.diag(c))] * 2)).max()
    )
    correlations = c / np.sqrt(np.outer(np.diag(c), np.diag(c)))
    levels, axes = np.linalg.eigh(correlations)
    k = result.conditioning
    np.testing.assert_allclose(k.spectrum, levels[::-1], rtol=1e-9)
    assert k.condition_number == pytest.approx(levels[-1] / levels[0], rel=1e-9)
    for combination, axis, level in ((k.stiffest, axes[:, -1], levels[-1]), (k.sloppiest, axes[:, 0], levels[0])):
        found = np.array([combination.coefficients[n] for n in result.names])
        assert abs(found @ axis) == pytest.approx(1, abs=1e-9)
        assert combination.variance == pytest.approx(level, rel=1e-9)
        assert found[np.argmax(np.abs(found))] > 0


def test_conditioning_of_matrices_is_kubo_mori():
    """A spin at lam along z: variance of x is tanh(r)/r, of z 1/cosh(r)^2, uncorrelated."""
    family = Matrices({"x": [[0, 1], [1, 0]], "z": [[1, 0], [0, -1]]})
    result = maxent.solve(family, {"x": 0.0, "z": -np.tanh(1.5)})
    np.testing.assert_allclose(result.covariance, np.diag([np.tanh(1.5) / 1.5, 1 / np.cosh(1.5) ** 2]), atol=1e-13)
    assert result.conditioning.condition_number == pytest.approx(1.0)


def test_conditioning_beyond_the_reach_of_the_covariance(rng):
    """Condition 1e22 from the factor, where the product of it with itself knows 1e16 at most."""
    u = np.linalg.qr(rng.standard_normal((20, 2)))[0].T
    factor = np.array([u[0], u[0] + 1e-11 * u[1]])
    found = conditioning(("a", "b"), factor)
    assert found.condition_number == pytest.approx(4e22, rel=1e-3)


def test_conditioning_leaves_out_what_does_not_fluctuate():
    found = conditioning(("a", "b"), np.array([[0.0, 0.0], [1.0, 2.0]]))
    assert found.spectrum == (pytest.approx(1.0),)
    assert found.stiffest.coefficients == {"a": 0.0, "b": 1.0}
    assert conditioning(("a",), np.zeros((1, 3))) is None
    assert conditioning(("a",), np.zeros((1, 0))) is None


def test_conditioning_ignores_redundant_combinations():
    x = np.arange(5.0)
    result = maxent.solve(Microstates({"x": x, "y": x**2, "sum": x + x**2}), {"x": 1.5, "y": 4.0, "sum": 5.5})
    assert np.isfinite(result.conditioning.condition_number)
    assert len(result.conditioning.spectrum) == 2


def test_values_of_few_particles_on_many_levels():
    """1e-5 particles on 100 000 levels: the values keep their digits, whatever they are at infinite temperature."""
    energies = np.sort(np.random.default_rng(1).random(100_000)) * 1e4
    beta, number = 0.01, 1e-5
    alpha = -np.log(number / np.exp(-beta * energies).sum())
    n = 1 / (np.exp(beta * energies + alpha) + 1)
    targets = {"energy": float(energies @ n), "number": float(n.sum())}
    result = maxent.solve(Modes({"energy": energies, "number": np.ones(len(energies))}, statistics="fermions"), targets)
    for name, value in targets.items():
        assert result.values[name] == pytest.approx(value, rel=1e-12)
        assert abs(result.residuals[name]) < 1e-12 * value

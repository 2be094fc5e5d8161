"""Independent levels against closed forms, 40-digit roots, all Fock states, SciPy, and their own derivatives."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from scipy.optimize import linprog

import maxent
from maxent.core import decide as decisions
from maxent.core.contract import Problem
from maxent.families import Matrices, Microstates, Modes, openings
from maxent.families.modes import fill
from maxent.families.reachable import inward
from maxent.families.statistics import SIGNS, level_terms

ALL = ("fermions", "bosons", "distinguishable")
LEVELS = np.array([0.0, 0.5, 1.0, 1.7])
COPIES = np.array([1.0, 3, 6, 10])


def gas(statistics: str, levels=LEVELS, copies=COPIES, **more) -> Modes:
    return Modes({"number": np.ones(len(levels)), "energy": levels}, statistics, copies, **more)


def ask(family, number, energy, **more):
    return maxent.solve(family, {"number": number, "energy": energy}, **more)


# ---------------------------------------------------------------- reference fits

#: Roots of the two equations for number and energy in 40 digits (mpmath.findroot), printed to 16.
ROOTS = [
    ("fermions", [0, 0.3, 0.7, 1.1, 1.6, 2.2, 2.9, 3.5], [1, 2, 3, 1, 2, 3, 1, 2], (6.5, 7.25),
     (-0.8039689207035752, 0.7189407542838089), 9.278648749380805, 9.26517123336518),
    ("bosons", LEVELS, COPIES, (12.0, 6.0), (0.16452105921246687, 1.1380504676356484), 7.0595344777993505,
     15.862089994162844),
    ("distinguishable", LEVELS, COPIES, (12.0, 6.0), (-1.5034066061485623, 2.360654219345825), 12.0, 8.1230460422922),
]  # fmt: skip


@pytest.mark.parametrize(("statistics", "e", "g", "q", "lam", "log_z", "entropy"), ROOTS, ids=[r[0] for r in ROOTS])
def test_reference_fits(statistics, e, g, q, lam, log_z, entropy):
    result = ask(gas(statistics, np.array(e), np.array(g, float)), *q)
    assert result.success and result.evidence == "proved"
    assert result.iterations <= 15
    np.testing.assert_allclose(list(result.multipliers.values()), lam, rtol=0, atol=1e-13)
    assert result.log_partition == pytest.approx(log_z, abs=1e-12)
    assert result.entropy == pytest.approx(entropy, abs=1e-12)


@pytest.mark.parametrize(
    ("number", "energy"), [(970.0, 30.0), (1e3, 15.0), (1e4, 100.0), (1e5, 5.0), (1e6, 0.01), (30.0, 30.0)]
)
@pytest.mark.parametrize("zero_point", [0.0, 0.75])
def test_condensed_level_is_exact(number, energy, zero_point):
    """w_0 ~ 1/N_0 to the last digits, also where it is the difference of two multipliers of order one."""
    result = ask(gas("bosons", LEVELS + zero_point), number, energy + zero_point * number)
    assert result.success
    assert abs(result.residuals["number"]) <= 1e-14 * number
    with mpmath.workdps(40):
        e = [mpmath.mpf(x) for x in LEVELS]
        n = lambda a, b: [g / mpmath.expm1(a + b * x) for g, x in zip(COPIES, e, strict=True)]
        asked = mpmath.mpf(energy + zero_point * number) - mpmath.mpf(zero_point) * number
        equations = lambda la, b: (
            sum(n(mpmath.exp(la), b)) / number - 1,
            sum(x * y for x, y in zip(e, n(mpmath.exp(la), b), strict=True)) / asked - 1,
        )
        start = (mpmath.log(result.state.own_multipliers[0]), result.multipliers["energy"])
        root = mpmath.findroot(equations, start, tol=1e-30)
        w0 = float(mpmath.exp(root[0]))
    resolved = 1e-13 + 4e-16 * zero_point * number / energy  # the targets themselves are rounded
    assert result.state.own_multipliers[0] == pytest.approx(w0, rel=resolved)
    assert result.multipliers["energy"] == pytest.approx(float(root[1]), rel=resolved)


@pytest.mark.parametrize("statistics", ALL)
@pytest.mark.parametrize("size", [1e-8, 1e-4, 1.0, 3.0])
def test_multipliers_to_targets_and_back(statistics, size, rng):
    charges = rng.standard_normal((3, 50))
    charges[2] = 1.0
    lam = size * np.array([0.7, -0.4, 1.0])
    if statistics == "bosons":
        lam[2] += -(lam @ charges).min() + 0.1 * size
    family = Modes(dict(zip("abc", charges, strict=True)), statistics)
    ev = family.evaluate(lam)
    result = maxent.solve(family, dict(zip("abc", ev.values, strict=True)))
    assert result.success
    error = np.array(list(result.multiplier_errors.values()))
    assert np.all(np.abs(np.array(list(result.multipliers.values())) - lam) <= 10 * error + 1e-15 * size)
    assert max(abs(r) for r in result.residuals.values()) <= 1e-13 * (1 + np.abs(ev.values).max())


@pytest.mark.parametrize("statistics", ALL)
def test_nothing_overflows_or_cancels(statistics):
    """ln Z, mean and variance of one level for exponents from 1e-8 to 1e5, against 40 digits."""
    w = np.concatenate([10.0 ** np.arange(-8, 5.1, 0.5), -(10.0 ** np.arange(-8, 5.1, 0.5))])
    if statistics != "fermions":
        w = w[w > (0 if statistics == "bosons" else -600)]
    with mpmath.workdps(60):
        for x, *got in zip(w, *level_terms(w, SIGNS[statistics]), strict=True):
            y = mpmath.mpf(float(x))
            if statistics == "distinguishable":
                n, s, log_z = mpmath.exp(-y), 0, mpmath.exp(-y)
            else:
                s = 1 if statistics == "fermions" else -1
                n, log_z = 1 / (mpmath.exp(y) + s), s * mpmath.log1p(s * mpmath.exp(-y))
            variance = n if s == 0 else mpmath.exp(y) * n**2
            for a, b in zip(got, (log_z, n, variance), strict=True):
                assert a == pytest.approx(float(b), rel=1e-14, abs=1e-300)
    family = Modes({"number": np.ones(len(w)), "w": w}, statistics)
    ev = family.evaluate(np.array([1e-9 if statistics == "bosons" else 0.0, 1.0]))
    assert np.isfinite(ev.log_partition) and np.all(np.isfinite(ev.covariance))


@pytest.mark.parametrize("statistics", ALL)
def test_evaluation_is_one_function(statistics, rng):
    """Long lists go pass by pass; derivatives of ln Z by differences and by JAX."""
    import jax
    import jax.numpy as jnp

    n = 40000 if statistics == "bosons" else 400
    charges = np.vstack([rng.standard_normal((2, n)), np.ones(n)])
    family = Modes(dict(zip("abc", charges, strict=True)), statistics, rng.uniform(0.5, 2, n))
    lam = np.array([0.3, -0.2, 3.0])
    ev, step = family.evaluate(lam), 1e-5
    np.testing.assert_allclose(family.evaluate(lam, 1).values, ev.values, rtol=1e-14)
    factor = ev.factor()
    assert factor.shape[1] < 1000
    np.testing.assert_allclose(factor @ factor.T, ev.covariance, rtol=1e-12)
    for j, e in enumerate(step * np.eye(3)):
        slope = (family.evaluate(lam + e).log_partition - family.evaluate(lam - e).log_partition) / (2 * step)
        assert slope == pytest.approx(-ev.values[j], rel=1e-7)

    def everything(family, x):
        f = family.log_partition
        return f(x), jax.grad(f)(x), jax.hessian(f)(x), family.evaluate(x)

    with jax.enable_x64(True):
        f, slope, bend, there = jax.jit(everything)(family, jnp.asarray(lam))
    assert float(f) == pytest.approx(float(ev.log_partition), rel=1e-13)
    np.testing.assert_allclose(-np.asarray(slope), ev.values, rtol=1e-11)
    np.testing.assert_allclose(np.asarray(bend), ev.covariance, rtol=1e-10)
    np.testing.assert_allclose(np.asarray(there.covariance), ev.covariance, rtol=1e-12)


@pytest.mark.parametrize("statistics", ALL)
def test_drivers_agree(statistics):
    for q in ((4, 14), (4, -1)):
        family = gas(statistics, np.arange(10.0), np.ones(10))
        host, compiled = (ask(family, *q, driver=d) for d in ("host", "jax"))
        assert host.verdict is compiled.verdict
        np.testing.assert_allclose(
            list(host.multipliers.values()), list(compiled.multipliers.values()), rtol=1e-11, equal_nan=True
        )


# ---------------------------------------------------------------- all Fock states


def fock(charges, most: int) -> list[np.ndarray]:
    """Diagonal operators on all states with 0..most particles per level."""
    n = charges.shape[1]
    held = np.indices((most + 1,) * n).reshape(n, -1)
    return [q @ held for q in charges]


@pytest.mark.parametrize("seed", range(3))
def test_fermions_equal_matrices_on_fock_space(seed, rng):
    rng = np.random.default_rng(seed)
    charges = rng.standard_normal((3, 6))
    names = ("a", "b", "c")
    levels = Modes(dict(zip(names, charges, strict=True)))
    dense = Matrices({x: np.diag(q) for x, q in zip(names, fock(charges, 1), strict=True)})
    lam = rng.standard_normal(3)
    low = levels.lowest(np.array([0.6, 0.0, -0.8]), with_values=True).values
    for q in (levels.evaluate(lam).values, low, low + [-1e-3, 0, 1e-3], low + 0.3 * (levels.reference()[0] - low)):
        targets = dict(zip(names, map(float, q), strict=True))
        ours, theirs = maxent.solve(levels, targets), maxent.solve(dense, targets)
        assert ours.verdict is theirs.verdict
        if ours.success:
            np.testing.assert_allclose(
                list(ours.multipliers.values()), list(theirs.multipliers.values()), rtol=0, atol=1e-11
            )
            assert ours.log_partition == pytest.approx(theirs.log_partition, abs=1e-11)
            np.testing.assert_allclose(ours.covariance, theirs.covariance, rtol=0, atol=1e-12)
        if ours.state is not None:
            assert ours.entropy == pytest.approx(theirs.entropy, abs=1e-12)
            np.testing.assert_allclose(list(ours.values.values()), list(theirs.values.values()), rtol=0, atol=1e-12)
        if ours.certificate is not None:  # each holds for the other family too
            assert ours.certificate.verify(dense, targets) and theirs.certificate.verify(levels, targets)
            assert ours.face is None or ours.face.dimension == theirs.face.dimension


def test_bosons_and_distinguishable_particles_against_lists_of_states():
    """Cold enough that 20 particles per level are all there are to 1e-12; weights 1/n! make them distinguishable."""
    charges = np.array([[1.0, 1.0, 1.0], [0.0, 0.4, 1.0]])
    lam, most = np.array([1.5, 0.5]), 20
    held = np.indices((most + 1,) * 3).reshape(3, -1)
    from scipy.special import gammaln

    for statistics, weights in (("bosons", None), ("distinguishable", -gammaln(held + 1.0).sum(axis=0))):
        listed = Microstates({"a": charges[0] @ held, "b": charges[1] @ held}, log_weights=weights)
        ours, theirs = Modes({"a": charges[0], "b": charges[1]}, statistics).evaluate(lam), listed.evaluate(lam)
        assert ours.log_partition == pytest.approx(theirs.log_partition, abs=1e-11)
        np.testing.assert_allclose(ours.values, theirs.values, atol=1e-11)
        np.testing.assert_allclose(ours.covariance, theirs.covariance, atol=1e-10)
        a = Modes({"a": charges[0], "b": charges[1]}, statistics).state(lam)
        assert a.entropy == pytest.approx(listed.state(lam).entropy, abs=1e-11)
        operator = np.array([0.3, -1.0, 2.0])
        assert a.mean(operator) == pytest.approx(listed.state(lam).mean(operator @ held), abs=1e-11)
        square = listed.state(lam).mean((operator @ held) ** 2) - listed.state(lam).mean(operator @ held) ** 2
        assert a.variance(operator) == pytest.approx(square, abs=1e-10)


# ---------------------------------------------------------------- what can be reached


@pytest.mark.parametrize("statistics", ALL)
def test_verdicts_against_linear_programs(statistics, rng):
    """Targets all around, far above the resolution of the linear program."""
    charges = np.vstack([np.ones(12), rng.standard_normal((2, 12))])
    family, seen = Modes(dict(zip("abc", charges, strict=True)), statistics), set()
    for _ in range(25):
        q = charges @ (rng.uniform(0, 1, 12) * (rng.random(12) < 0.3)) * rng.uniform(0.5, 1.5) + 0.3 * rng.normal(
            size=3
        )
        bounds = (0, 1 if statistics == "fermions" else None)
        feasible = linprog(np.zeros(12), A_eq=charges, b_eq=q, bounds=bounds, method="highs").status == 0
        result = maxent.solve(family, dict(zip("abc", q, strict=True)))
        assert result.verdict is (maxent.Verdict.SOLVED if feasible else maxent.Verdict.INFEASIBLE)
        assert feasible or result.certificate.verify(family, result.targets)
        seen.add(feasible)
    assert seen == {True, False}


BOUNDARIES = [
    ("fermions", (0, 0), 0, 1), ("fermions", (20, 24.5), 0, 1), ("fermions", (1, 0), 0, 1),
    ("fermions", (2.5, 0.75), np.log(8), 8),
    ("bosons", (0, 0), 0, 1), ("bosons", (3, 0), 4 * np.log(4) - 3 * np.log(3), np.inf),
    ("bosons", (5, 8.5), 10 * (1.5 * np.log(1.5) - 0.5 * np.log(0.5)), np.inf),
    ("distinguishable", (3, 0), 3 - 3 * np.log(3), np.inf), ("distinguishable", (0, 0), 0, 1),
]  # fmt: skip


@pytest.mark.parametrize(("statistics", "q", "entropy", "dimension"), BOUNDARIES)
def test_faces(statistics, q, entropy, dimension):
    """Vacuum, everything full, the lowest level alone, a level half full: limit states in closed form."""
    family = gas(statistics)
    result = ask(family, *q)
    assert result.verdict is maxent.Verdict.BOUNDARY
    assert result.face.dimension == dimension
    assert result.entropy == pytest.approx(entropy, abs=1e-11)
    assert result.certificate.verify(family, result.targets)
    assert result.message and np.isnan(result.log_partition)


def test_zonotope_boundary_of_many_levels(rng):
    """Half of the levels empty, the others full, two of them free: the face is found among 3000 levels."""
    n = 3000
    charges = rng.standard_normal((4, n))
    v = np.array([0.5, -0.1, 0.7, 0.5])
    v /= np.linalg.norm(v)
    charges[:, :2] -= np.outer(v, v @ charges[:, :2])
    held = np.where(v @ charges < 0, 1.0, 0.0)
    held[:2] = 0.3, 0.8
    q = dict(zip("abcd", charges @ held, strict=True))
    result = maxent.solve(Modes(dict(zip("abcd", charges, strict=True))), q)
    assert result.verdict is maxent.Verdict.BOUNDARY
    assert result.face.dimension == 4
    np.testing.assert_allclose(result.state.occupations, held, atol=1e-9)


@pytest.mark.parametrize("statistics", ALL)
def test_barrier_is_a_self_concordant_function(statistics, rng):
    charges = np.vstack([rng.standard_normal((2, 9)), np.ones(9)])
    family = Modes(dict(zip("abc", charges, strict=True)), statistics, rng.integers(1, 4, 9))
    shifted = family.combine(np.eye(3), charges @ (0.4 * family.degeneracy))
    lam, step = np.array([0.01, 0.02, 0.2]), 1e-5
    at = shifted.barrier(lam)
    for j, e in enumerate(np.eye(3) * step):
        up, down = shifted.barrier(lam + e), shifted.barrier(lam - e)
        assert (up.value - down.value) / (2 * step) == pytest.approx(at.gradient[j], rel=1e-6, abs=1e-6)
        np.testing.assert_allclose(
            (up.gradient - down.gradient) / (2 * step), (at.factor @ at.factor.T)[j], rtol=1e-4, atol=1e-3
        )
    for u in rng.standard_normal((20, 3)):
        # |D3[u, u, u]| <= 2 D2[u, u]^(3/2), by differences of the second derivative along u
        second = lambda t, u=u: np.sum((u @ shifted.barrier(lam + t * u).factor) ** 2)
        third = (second(1e-5) - second(-1e-5)) / 2e-5
        assert abs(third) <= 2 * second(0) ** 1.5 * (1 + 1e-4)
    if statistics != "fermions":
        assert shifted.barrier(-lam) is None


@pytest.mark.parametrize("statistics", ALL)
def test_barrier_decides_interiority(statistics, rng):
    charges = np.vstack([rng.standard_normal((2, 9)), np.ones(9)])
    family = Modes(dict(zip("abc", charges, strict=True)), statistics)
    from maxent.core.centre import centre

    start = 0.1 * np.eye(3)[2]
    ask = lambda lam, step, count: None
    inside = family.combine(np.eye(3), charges @ rng.uniform(0.1, 0.9, 9))
    assert centre(inside, np.zeros(3), [start], ask).status == "interior"
    outside = family.combine(np.eye(3), charges @ np.full(9, 1.2) + [100.0, 0, 0])
    assert centre(outside, np.zeros(3), [start], ask).status in ("diverged", "stuck")


@pytest.mark.parametrize("statistics", ALL)
def test_stiffness_bounds_the_fall_of_the_curvature(statistics, rng):
    charges = np.vstack([rng.standard_normal((2, 9)), np.ones(9)])
    family = Modes(dict(zip("abc", charges, strict=True)), statistics)
    for _ in range(20):
        lam, u = np.append(rng.standard_normal(2), 4.0), 0.3 * rng.standard_normal(3)
        here, c = u @ family.evaluate(lam).covariance @ u, family.stiffness(lam, u)
        for t in (-1, -0.1, 0.1, 1):
            there = family.evaluate(lam + t * u)
            if np.isfinite(there.log_partition):
                assert u @ there.covariance @ u >= here * np.exp(-abs(t) * c) * (1 - 1e-12)


def test_confining_directions(rng):
    for m, n in ((2, 5), (3, 40), (5, 200)):
        u = rng.standard_normal(m)
        vectors = rng.standard_normal((m, n))
        vectors -= np.outer(u, np.where(u @ vectors < 1e-3, (u @ vectors - 1e-3) / (u @ u), 0.0))
        found = inward(vectors * 10.0 ** rng.uniform(-3, 3, (m, 1)))
        assert found is not None
        around = np.hstack([vectors, -vectors.sum(axis=1, keepdims=True)])
        assert inward(around) is None
    assert inward(np.zeros((2, 3))) is None and inward(np.zeros((0, 3))) is None


# ---------------------------------------------------------------- own occupations


@pytest.mark.parametrize("statistics", ALL)
def test_own_occupations_take_no_iteration(statistics):
    n = np.array([0.9, 0.5, 0.12, 0.03]) if statistics == "fermions" else np.array([6.3, 3.5, 0.84, 0.21])
    names = [f"n{k}" for k in range(4)]
    result = maxent.solve(Modes.own(names, statistics), dict(zip(names, n, strict=True)))
    s = {"fermions": 1, "bosons": -1, "distinguishable": 0}[statistics]
    assert result.success and result.iterations == 0
    lam = np.log1p(-s * n) - np.log(n)
    np.testing.assert_allclose(list(result.multipliers.values()), lam, rtol=1e-14)
    x = np.where(n == 1, 1, 1 - s * n)
    entropy = np.sum(-n * np.log(n) - s * x * np.log(x)) if s else np.sum(n - n * np.log(n))
    state = fill(n, statistics)
    assert result.entropy == pytest.approx(entropy, rel=1e-14) and state.entropy == pytest.approx(entropy, rel=1e-14)
    np.testing.assert_allclose(state.own_multipliers, lam, rtol=1e-15)
    np.testing.assert_allclose(state.fluctuations, n * (1 - s * n), rtol=1e-13)
    assert state.log_partition == pytest.approx(result.log_partition, rel=1e-13)


def test_pinned_levels_are_faces():
    names = [f"n{k}" for k in range(5)]
    n = np.array([0.0, 1.0, 0.25, 0.5, 0.0])
    result = maxent.solve(
        Modes.own(names, degeneracy=[1, 2, 4, 1, 1]), dict(zip(names, n * [1, 2, 4, 1, 1], strict=True))
    )
    assert result.verdict is maxent.Verdict.BOUNDARY and result.iterations == 0
    assert result.face.dimension == 2**5
    state = fill(n, degeneracy=[1, 2, 4, 1, 1])
    assert np.isnan(state.log_partition)  # a full level
    assert fill([0.0, 0.5]).log_partition == pytest.approx(np.log(2))
    assert result.entropy == pytest.approx(state.entropy, abs=1e-14)
    np.testing.assert_allclose(result.state.occupations, n, atol=1e-15)
    assert state.own_multipliers[[0, 1, 4]].tolist() == [np.inf, -np.inf, np.inf]
    assert state.mean(np.arange(5.0)) == pytest.approx(result.mean(np.arange(5.0)))
    too_many = maxent.solve(Modes.own(["a", "b"]), {"a": 1.2, "b": 0.5})
    assert too_many.verdict is maxent.Verdict.INFEASIBLE
    assert too_many.certificate.margin == pytest.approx(0.2)


# ---------------------------------------------------------------- a continuous density of states


def continuum(**more) -> Modes:
    """Free bosons in three dimensions: density 2/sqrt(pi) sqrt(e) in units of the thermal volume at beta = 1."""
    x, weight = np.polynomial.legendre.leggauss(300)
    x, weight = 3.5 * (x + 1), 3.5 * weight
    return gas("bosons", x**2, 4 / np.sqrt(np.pi) * x**2 * weight, continuum={"number": 1, "energy": 0}, **more)


def test_too_many_bosons_in_a_continuum_are_unattained():
    """zeta(3/2) is all that fits at beta = 1, with energy (3/2) zeta(5/2): the rest is the excess."""
    critical, energy = 2.612375348685488, 1.5 * 1.341487257250917
    below = ask(continuum(), 0.99 * critical, energy)
    assert below.success and below.multipliers["number"] > 0
    above = ask(continuum(), 1.3 * critical, energy)
    assert above.verdict is maxent.Verdict.UNATTAINED
    assert above.excess["number"] == pytest.approx(0.3 * critical, rel=1e-9)
    assert abs(above.excess["energy"]) < 1e-12
    assert "number" in above.message and above.state is None
    assert above.iterations < 40
    discrete = ask(gas("bosons", np.array([0.0, 1.0]), np.array([1.0, 50.0])), 1e5, 3.0)
    assert discrete.success  # with levels that can hold a condensate nothing is left over


def test_the_edge_of_the_continuum_is_the_edge_of_the_domain():
    family = continuum()
    assert np.isfinite(family.evaluate(np.array([0.0, 1.0])).log_partition)
    assert family.evaluate(np.array([-1e-6, 1.0])).log_partition == np.inf
    assert float(family.log_partition(np.array([-1e-6, 1.0]))) == np.inf
    assert ask(family, 1.0, -0.5).verdict is maxent.Verdict.INFEASIBLE


# ---------------------------------------------------------------- targets that leave room, twins, input


@pytest.mark.parametrize("statistics", ALL)
def test_relaxed_targets(statistics):
    family = gas(statistics, np.arange(10.0), np.ones(10))
    held = maxent.solve(family, {"number": 4, "energy": maxent.AtMost(6.5)})
    exact = ask(family, 4, 6.5)
    assert held.success
    np.testing.assert_allclose(list(held.multipliers.values()), list(exact.multipliers.values()), rtol=1e-9)
    measured = maxent.solve(family, {"number": maxent.Measured(4, 0.1), "energy": maxent.Measured(14, 0.1)})
    assert measured.success
    for name, q in (("number", 4), ("energy", 14)):  # residual = sigma^2 lam
        assert measured.values[name] - q == pytest.approx(0.01 * measured.multipliers[name], rel=1e-9)


@pytest.mark.parametrize("statistics", ALL)
def test_explanations_name_the_nearest_targets(statistics):
    result = ask(gas(statistics), 3, -1, explain=True)
    assert result.verdict is maxent.Verdict.INFEASIBLE
    assert result.conflict == ("energy",) and result.explanation
    assert result.nearest.upper - result.nearest.lower <= 1e-9
    full = (
        ask(gas(statistics), 5, 8.5, explain=True)
        if statistics != "fermions"
        else ask(gas(statistics), 0, 0, explain=True)
    )
    assert full.verdict is maxent.Verdict.BOUNDARY and full.explanation


def test_constants_and_degeneracies():
    """A zero-point energy shifts the target; copies are levels written twice."""
    shifted = gas("bosons", constants={"energy": 2.5})
    a, b = ask(shifted, 5, 6.5), ask(gas("bosons"), 5, 4.0)
    np.testing.assert_allclose(list(a.multipliers.values()), list(b.multipliers.values()), rtol=1e-13)
    assert a.entropy == pytest.approx(b.entropy, rel=1e-13)
    twice = Modes({"number": np.ones(20), "energy": np.repeat(LEVELS, COPIES.astype(int))}, "bosons")
    c = ask(twice, 5, 4.0)
    np.testing.assert_allclose(list(c.multipliers.values()), list(b.multipliers.values()), rtol=1e-13)
    assert Modes({}, degeneracy=[2.0, 1.0]).evaluate(np.zeros(0)).log_partition == pytest.approx(3 * np.log(2))


BAD = [
    (lambda: Modes({"energy": LEVELS}, "bosons"), "'energy' is 0 at level 0.*add the particle number"),
    (lambda: Modes({"a": [1.0, -1.0], "b": [-1.0, 1.0]}, "bosons"), "no charge confines the particles"),
    (lambda: Modes({"a": [1.0, 2.0]}, "anyons"), "statistics must be one of"),
    (lambda: Modes({"a": [1.0, np.nan]}), "charge 'a' is nan at level 1"),
    (lambda: Modes({"a": [1.0, 2.0], "b": [1.0]}), "'a' has 2, 'b' has 1"),
    (lambda: Modes({"a": [1.0, 2.0]}, degeneracy=[1, 0]), "degeneracy is 0 at level 1"),
    (lambda: Modes({"a": [1.0, 2.0]}, degeneracy=[1]), "degeneracy lists 1 levels where there are 2"),
    (lambda: Modes({"a": [1j, 2.0]}), "must be real"),
    (lambda: Modes({"a": [[1.0, 2.0]]}), "one per level"),
    (lambda: Modes({}), "no charges given"),
    (lambda: Modes({"a": []}), "no levels given"),
    (lambda: Modes({"a": [1.0]}, constants={"b": 1.0}), "'b', which is no charge"),
    (lambda: Modes({"a": [1.0]}, continuum={"a": 0.0}), "fermions do not"),
    (lambda: Modes({"a": [1.0]}, "bosons", continuum={"b": 0.0}), "continuum must give the charges 'a'"),
    (lambda: Modes.own(["a", "a"]), "same name"),
    (lambda: fill([0.2, 1.2]), "level 1 is 1.2: fermions have 0..1"),
    (lambda: fill([0.2, -0.5], "bosons"), "level 1 is -0.5: bosons have 0 or more"),
    (lambda: gas("bosons").state([-0.1, 1.0]), "outside the domain of bosons: lam.q is -0.1 at level 0"),
    (lambda: gas("bosons").state([0.1]), "shape"),
    (lambda: fill([0.5]).mean([1.0, 2.0]), "the operator lists 2 levels, the state 1"),
    (lambda: fill([0.5]).reduced([0]), "levels are no sites"),
]  # fmt: skip


@pytest.mark.parametrize(("make", "words"), BAD)
def test_bad_input_is_one_line(make, words):
    with pytest.raises((ValueError, TypeError), match=words) as caught:
        make()
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize("levels", [300, 30000])
def test_evaluations_of_a_fit_are_few_however_many_levels(monkeypatch, rng, levels):
    e = np.sort(rng.uniform(0, 1, levels))
    more = np.cos(2 * np.pi * np.arange(levels) / levels)
    family = Modes(dict(zip("abcd", (np.ones(levels), e, more, e**2), strict=True)))
    targets = dict(zip("abcd", family.evaluate(np.array([-1, 2, 0.3, 0.5])).values, strict=True))
    calls, evaluate = [], Modes.evaluate
    monkeypatch.setattr(Modes, "evaluate", lambda *a, **k: (calls.append(1), evaluate(*a, **k))[1])
    assert maxent.solve(family, targets).success
    assert len(calls) <= 25


@pytest.mark.parametrize("statistics", ["bosons", "distinguishable"])
@pytest.mark.parametrize("number", [1e-12, 1e12, 1e18])
def test_few_and_many_particles(statistics, number):
    result = ask(gas(statistics), number, 0.3 * number)
    assert result.success
    # rounding of a target is counted on the scale of one particle
    assert max(abs(r) for r in result.residuals.values()) <= 1e-14 * max(number, 1.0)


@pytest.mark.parametrize("levels", [5, 60, 700, 20000])
@pytest.mark.parametrize("smallest", [1e-10, 1e-6, 1e-2, 12.0])
@pytest.mark.parametrize("m", [2, 4])
def test_no_condensate_takes_many_steps(levels, smallest, m, rng):
    """Multipliers drawn, one level at the smallest exponent: 1e10 particles in it, or 1e-6 in all."""
    q = rng.standard_normal((m, levels))
    q[-1] = 1.0
    lam = rng.standard_normal(m)
    q[:-1] -= q[:-1, [int(np.argmin(lam @ q))]]  # the lowest level counts in the last charge alone
    lam[-1] = smallest
    family = Modes({f"q{j}": x for j, x in enumerate(q)}, "bosons")
    targets = {f"q{j}": float(x @ (1 / np.expm1(lam @ q))) for j, x in enumerate(q)}
    result = maxent.solve(family, targets)
    assert result.success and result.iterations <= 15
    np.testing.assert_allclose(list(result.multipliers.values()), lam, rtol=1e-6, atol=1e-6 * abs(lam).max())
    assert result.multipliers[f"q{m - 1}"] == pytest.approx(smallest, rel=1e-8)


@pytest.mark.parametrize("levels", [300, 30000])
def test_passes_of_the_opening_are_counted(monkeypatch, rng, levels):
    """The start looks at a few hundred levels many times, at all of them a few times."""
    e = np.sort(rng.uniform(0, 1, levels)) ** 2
    family = Modes({"n": np.ones(levels), "e": e, "f": e**2}, "bosons")
    held = 1 / np.expm1(2 * (e - e.min()) + 1e-6)
    targets = {name: float(x @ held) for name, x in zip("nef", family.charges, strict=True)}
    looked, found = [], openings.occupations
    monkeypatch.setattr(openings, "occupations", lambda w, s: (looked.append(len(w)), found(w, s))[1])
    assert maxent.solve(family, targets).success
    assert sum(n == levels for n in looked) <= (3 * openings.STEPS if levels <= openings.SAMPLE else 60)


@pytest.mark.parametrize("statistics", ["bosons", "distinguishable"])
def test_the_opening_of_what_cannot_be_reached_stays_finite(statistics, rng):
    q = np.array([np.ones(40), rng.uniform(0.2, 1, 40)])
    for energy in (0.1, 3.0, q[1].min()):
        start = Modes({"n": q[0], "e": q[1]}, statistics).combine(np.eye(2), np.array([5.0, 5 * energy])).start()
        assert np.all(np.isfinite(start)) and (statistics != "bosons" or (start @ q).min() > 0)


def test_decisions_do_not_whiten_anew_for_bounded_charges(monkeypatch):
    """The coordinates of states in number are made once."""
    monkeypatch.setattr(decisions, "_whiten_anew", lambda *a: pytest.fail("whitened anew"))
    assert maxent.solve(Microstates({"a": np.arange(9.0)}), {"a": 1e-9}).verdict is maxent.Verdict.SOLVED
    assert ask(gas("fermions"), 3, 1.7).success
    problem = Problem.pose(gas("fermions"), np.array([3.0, 1.7]))
    assert decisions.decide(problem).verdict is maxent.Verdict.SOLVED


@pytest.mark.parametrize("statistics", ["bosons", "fermions"])
def test_the_values_of_one_single_level(statistics):
    """Four charges of a level on a curve, all particles in it: a vertex, reached without a warning of NumPy."""
    e = np.random.default_rng(0).uniform(0, 4, 3000)
    charges = {"number": np.ones(3000), "e": e, "e2": e**2 / 4, "e3": e**3 / 16}
    result = maxent.solve(Modes(charges, statistics=statistics), {n: float(v[0]) for n, v in charges.items()})
    assert str(result.verdict) == "boundary"
    np.testing.assert_allclose([result.values[n] for n in charges], [v[0] for v in charges.values()], rtol=1e-9)

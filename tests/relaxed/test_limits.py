"""Relaxed targets in limits and cases that are known in closed form."""

import mpmath
import numpy as np
import pytest
from scipy.optimize import brentq

import maxent
from maxent import AtLeast, AtMost, Exact, Measured, Within
from maxent.core.contract import Problem
from maxent.core.decide import decide
from maxent.core.penalised import Penalised
from maxent.core.relaxed import decide_relaxed
from maxent.core.slack import Slack
from maxent.families import Matrices, Microstates
from tests.corpus import pieces

PIPS = np.arange(1, 7)


@pytest.fixture
def die():
    return Microstates({"pips": PIPS})


@pytest.fixture
def spins():
    """Three charges that do not commute, and a state to take targets from."""
    rng = np.random.default_rng(3)
    stack = np.array([pieces.hermitian(rng, 6, is_complex=True) for _ in range(3)])
    state, _ = pieces.gibbs(np.tensordot([0.7, -0.4, 0.3], stack, axes=1))
    names = ("energy", "current", "field")
    return Matrices(dict(zip(names, stack, strict=True))), dict(
        zip(names, pieces.values_in(stack, state).tolist(), strict=True)
    )


def test_the_nearer_edge_of_a_tolerance(die):
    """Mean 4.5 within 0.2: the state of mean 4.3, the one nearest to equal weights."""
    relaxed = maxent.solve(die, {"pips": Within(4.5, 0.2)})
    exact = maxent.solve(die, {"pips": 4.3})
    assert relaxed.multipliers["pips"] == pytest.approx(exact.multipliers["pips"], rel=1e-12)
    assert relaxed.residuals["pips"] == pytest.approx(-0.2, abs=1e-14)
    assert relaxed.slack == {"pips": "at the lower edge"}
    assert relaxed.targets == {"pips": 4.5}
    assert relaxed.log_partition == pytest.approx(exact.log_partition, abs=1e-12)
    assert relaxed.entropy == pytest.approx(exact.entropy, abs=1e-12)
    assert relaxed.covariance == pytest.approx(exact.covariance, abs=1e-12)


@pytest.mark.parametrize(
    ("target", "verdict", "value", "place"),
    [
        (AtMost(4.0), "solved", 3.5, "inside"),
        (AtMost(3.0), "solved", 3.0, "at the upper edge"),
        (AtMost(1.0), "boundary", 1.0, "at the upper edge"),
        (AtMost(0.5), "infeasible", np.nan, "unknown"),
        (AtLeast(3.0), "solved", 3.5, "inside"),
        (AtLeast(4.0), "solved", 4.0, "at the lower edge"),
        (AtLeast(6.0), "boundary", 6.0, "at the lower edge"),
        (AtLeast(6.5), "infeasible", np.nan, "unknown"),
        (Within(7.0, 1.5), "solved", 5.5, "at the lower edge"),
        (Within(7.0, 1.0), "boundary", 6.0, "at the lower edge"),
        (Within(7.0, 0.5), "infeasible", np.nan, "unknown"),
    ],
)
def test_one_charge(die, target, verdict, value, place):
    result = maxent.solve(die, {"pips": target})
    assert str(result.verdict) == verdict
    assert result.values["pips"] == pytest.approx(value, abs=1e-13, nan_ok=True)
    assert result.slack == {"pips": place}
    assert result.not_needed == (("pips",) if place == "inside" else ())
    if place == "inside":
        assert result.multipliers == {"pips": 0.0}
        assert result.multiplier_errors == {"pips": 0.0}
    if verdict == "infeasible":
        assert result.certificate.margin == pytest.approx(0.5, abs=1e-13)
    assert (result.certificate is None) == (verdict == "solved")


def test_the_slack_of_a_certificate(die):
    certificate = maxent.solve(die, {"pips": Within(7.0, 0.5)}).certificate
    assert (certificate.lowest, certificate.asked, certificate.slack) == (-6.0, -7.0, 0.5)
    assert certificate.verify(die, {"pips": Within(7.0, 0.5)}).slack == 0.5
    # the claim is about these targets: with more room it does not hold, with none the numbers are others
    assert not certificate.verify(die, {"pips": Within(7.0, 1.0)})
    assert not certificate.verify(die, {"pips": AtMost(7.0)})
    without = certificate.verify(die, {"pips": 7.0})
    assert without.margin == 1.0 and without.faults == ("margin is 1, not 0.5", "slack is 0, not 0.5")
    assert maxent.solve(die, {"pips": 7.0}).certificate.slack == 0.0


def test_accuracy_keeps_its_meaning(die):
    """Outside by 1e-9 of a tolerance is outside, unless the numbers are no better than that."""
    targets = {"pips": Within(7.0, 1.0 - 1e-9)}
    assert str(maxent.solve(die, targets).verdict) == "infeasible"
    assert str(maxent.solve(die, targets, accuracy=1e-8).verdict) == "boundary"


def test_no_tolerance_is_the_exact_answer(spins):
    family, q = spins
    exact = maxent.solve(family, q)
    off = []
    for tolerance in (1e-2, 1e-4, 1e-6, 1e-8):
        relaxed = maxent.solve(family, {n: Within(x, tolerance) for n, x in q.items()})
        assert relaxed.success
        off.append(max(abs(relaxed.multipliers[n] - exact.multipliers[n]) for n in q))
        assert all(abs(relaxed.residuals[n]) == pytest.approx(tolerance, rel=1e-6) for n in q)
    assert off == sorted(off, reverse=True)
    assert off[0] / off[3] == pytest.approx(1e6, rel=0.1)
    for tolerance in (1e-12, 1e-15, 1e-150):
        relaxed = maxent.solve(family, {n: Within(x, tolerance) for n, x in q.items()})
        assert list(relaxed.multipliers.values()) == pytest.approx(list(exact.multipliers.values()), abs=1e-10)


@pytest.mark.parametrize("prior", [False, True])
def test_a_wide_tolerance_is_the_prior(prior):
    logs = np.array([0.0, -3.0, 1.0, 500.0, 499.0]) if prior else None
    charges = {"a": [1.0, 2, 3, 4, 5], "b": [0.3, -1, 2, 0, 1]}
    family = Microstates(charges, log_prior=logs)
    result = maxent.solve(family, {"a": Within(0.0, 10.0), "b": AtMost(50.0)})
    p = np.exp(logs - logs.max()) if prior else np.ones(5)
    p = p / p.sum()
    assert result.multipliers == {"a": 0.0, "b": 0.0}
    assert result.not_needed == ("a", "b")
    assert result.state.probabilities == pytest.approx(p, abs=1e-15)
    total = mpmath.fsum(map(mpmath.exp, logs)) if prior else 5
    assert result.log_partition == pytest.approx(float(mpmath.log(total)))


def test_what_is_not_needed_can_be_left_out(spins):
    family, q = spins
    result = maxent.solve(family, q | {"current": AtMost(q["current"] + 0.5)})
    assert result.not_needed == ("current",)
    operators = family.operators()
    alone = Matrices({n: operators[n] for n in ("energy", "field")})
    fewer = maxent.solve(alone, {n: q[n] for n in ("energy", "field")})
    for n, lam in fewer.multipliers.items():
        assert result.multipliers[n] == pytest.approx(lam, rel=1e-10)
    assert result.mean(operators["current"]) == pytest.approx(fewer.mean(operators["current"]), abs=1e-12)


def test_exact_targets_take_the_same_path(spins):
    family, q = spins
    plain = maxent.solve(family, q)
    same = maxent.solve(family, {n: Exact(x) for n, x in q.items()})
    direct = decide(Problem.pose(family, np.array(list(q.values()))))
    assert same.multipliers == plain.multipliers
    assert same.message == plain.message
    assert list(plain.last_multipliers.values()) == list(direct.whitening.transform.T @ direct.at.lam)
    assert plain.slack == dict.fromkeys(q, "exact")
    assert plain.not_needed == ()


def test_redundant_charges():
    """The same charge twice: intervals that overlap, touch, and miss each other."""
    charges = {"a": PIPS, "twice": 2.0 * PIPS}
    family = Microstates(charges)
    overlap = maxent.solve(family, {"a": Within(4.0, 0.3), "twice": AtLeast(8.2)})
    assert overlap.success
    assert overlap.values["a"] == pytest.approx(4.1, abs=1e-13)
    assert overlap.not_needed == ("a",)
    assert len(overlap.redundancies) == 1
    touch = maxent.solve(family, {"a": Within(4.0, 0.5), "twice": Within(10.0, 1.0)})
    assert touch.success
    assert touch.values["a"] == pytest.approx(4.5, abs=1e-13)
    apart = maxent.solve(family, {"a": Within(4.0, 0.5), "twice": Within(10.0, 1.0 - 1e-6)})
    assert str(apart.verdict) == "inconsistent"
    assert apart.certificate.kind == "contradiction"
    assert apart.certificate.margin == pytest.approx(1e-6 / np.sqrt(5), rel=1e-6)
    assert apart.certificate.verify(family, {"a": Within(4.0, 0.5), "twice": Within(10.0, 1.0 - 1e-6)})


def test_a_charge_without_spread():
    family = Microstates({"a": PIPS, "one": np.full(6, 3.0)})
    assert maxent.solve(family, {"a": 4.0, "one": AtMost(3.5)}).success
    assert maxent.solve(family, {"a": 4.0, "one": AtMost(3.0)}).success
    assert str(maxent.solve(family, {"a": 4.0, "one": AtMost(2.5)}).verdict) == "inconsistent"
    measured = maxent.solve(family, {"a": 4.0, "one": Measured(2.5, 0.5)})
    assert measured.success
    assert measured.multipliers["one"] == pytest.approx(0.5 / 0.5**2)


def test_a_disc_touched_by_a_corner():
    """Spin 1/2: |<x>|^2 + |<z>|^2 <= 1; the corner of the box of allowed values lies on the circle."""
    spin = Matrices({"x": pieces.PAULI["x"], "z": pieces.PAULI["z"]})
    corner = lambda depth: {"x": Within(0.6 + 0.1 - depth, 0.1), "z": AtLeast(0.8 - depth)}
    touch = maxent.solve(spin, corner(0.0))
    assert str(touch.verdict) == "boundary"
    direction = touch.certificate.direction
    assert [direction["x"], direction["z"]] == pytest.approx([-0.6, -0.8], abs=1e-7)
    assert touch.values == pytest.approx({"x": 0.6, "z": 0.8}, abs=1e-12)
    assert maxent.solve(spin, corner(1e-6)).success
    outside = maxent.solve(spin, corner(-1e-6))
    assert str(outside.verdict) == "infeasible"
    assert outside.certificate.margin == pytest.approx(np.hypot(0.6 + 1e-6, 0.8 + 1e-6) - 1, rel=1e-6)


# ---------------------------------------------------------------- measured


@pytest.mark.parametrize("sigma", [1e-3, 0.3, 1.0, 30.0])
def test_one_measured_spin_in_closed_form(sigma):
    """Levels -1 and 1: <Q> = -tanh(lam), so lam solves sigma^2 lam + tanh(lam) + q = 0."""
    result = maxent.solve(Microstates({"spin": [-1.0, 1.0]}), {"spin": Measured(0.7, sigma)})
    lam = brentq(lambda x: sigma**2 * x + np.tanh(x) + 0.7, -3, 3, xtol=1e-15)
    assert result.multipliers["spin"] == pytest.approx(lam, rel=1e-12)
    assert result.residuals["spin"] == pytest.approx(sigma**2 * lam, rel=1e-9)
    assert result.slack == {"spin": "penalised"}


def test_measured_far_outside_is_still_an_answer(die):
    result = maxent.solve(die, {"pips": Measured(9.0, 0.5)})
    assert result.success
    assert result.certificate is None
    assert result.residuals["pips"] == pytest.approx(0.25 * result.multipliers["pips"], rel=1e-12)
    assert 5.9 < result.values["pips"] < 6.0


def test_measured_beside_an_unreachable_charge(spins):
    """What is measured can always be missed; whether there is an answer is decided by the other charges."""
    family, q = spins
    out = maxent.solve(family, q | {"energy": 10.0, "current": Measured(0.1, 0.1)})
    assert str(out.verdict) == "infeasible"
    assert out.certificate.direction["current"] == 0.0
    top = float(np.linalg.eigvalsh(family.operators()["energy"].toarray())[-1])
    edge = maxent.solve(family, {"energy": AtLeast(top), "current": Measured(0.1, 0.1), "field": Measured(0.0, 1.0)})
    assert str(edge.verdict) == "boundary"
    assert edge.certificate.direction["current"] == 0.0
    assert edge.slack["current"] == "penalised"


def dual(stack, q, covariance, lam):
    """The penalised dual, from the raw arrays."""
    levels = np.linalg.eigvalsh(np.tensordot(lam, stack, axes=1))
    return np.log(np.exp(-levels).sum()) + lam @ q + 0.5 * lam @ covariance @ lam


def test_the_penalised_dual_is_at_its_minimum(spins):
    """Central differences of the dual vanish at the multipliers, and its second differences are chi + C."""
    family, q = spins
    sigma = {"energy": 0.2, "current": 0.05, "field": 0.6}
    wanted = {n: x + 0.1 for n, x in q.items()}
    result = maxent.solve(family, {n: Measured(wanted[n], sigma[n]) for n in q})
    stack = np.array([x.toarray() for x in family.operators().values()])
    covariance = np.diag(np.square(list(sigma.values())))
    lam, target = np.array(list(result.multipliers.values())), np.array(list(wanted.values()))
    f = lambda x: dual(stack, target, covariance, x)
    h = 1e-4
    slope = [(f(lam + h * e) - f(lam - h * e)) / (2 * h) for e in np.eye(3)]
    assert slope == pytest.approx([0, 0, 0], abs=1e-7)
    second = lambda a, b: f(lam + a + b) - f(lam + a - b) - f(lam - a + b) + f(lam - a - b)
    curvature = np.array([[second(h * a, h * b) for a in np.eye(3)] for b in np.eye(3)]) / (4 * h * h)
    assert curvature == pytest.approx(result.covariance + covariance, abs=1e-5)
    rng = np.random.default_rng(0)
    assert all(f(lam + d) > f(lam) for d in 0.1 * rng.standard_normal((20, 3)))


def test_correlated_measurements(spins):
    """A full covariance matrix: the residuals are C lam, and the dual is at its minimum."""
    family, q = spins
    root = np.random.default_rng(1).standard_normal((3, 3))
    covariance = 0.1 * root @ root.T
    target = np.array(list(q.values())) + 0.2
    found = decide_relaxed(Problem.pose(family, target), Slack.measured(covariance))
    assert str(found.outcome.verdict) == "solved"
    assert found.outcome.values == pytest.approx(covariance @ found.last, abs=1e-12)
    stack = np.array([x.toarray() for x in family.operators().values()])
    f = lambda x: dual(stack, target, covariance, x)
    rng = np.random.default_rng(0)
    assert all(f(found.last + d) > f(found.last) for d in 0.1 * rng.standard_normal((20, 3)))


def test_a_covariance_that_is_none():
    with pytest.raises(ValueError, match="positive definite"):
        Slack.measured(np.array([[1.0, 2.0], [2.0, 1.0]]))


def test_the_penalised_family_answers_as_its_charges_do(spins):
    """Derivatives of the penalised function; a combination that is penalised has no lowest value."""
    family, _ = spins
    covariance = np.diag([0.3, 0.0, 0.0])
    penalised = Penalised.of(family, covariance)
    lam = np.array([0.4, -0.2, 0.9])
    h = 1e-5
    numeric = [
        -(penalised.evaluate(lam + h * e).log_partition - penalised.evaluate(lam - h * e).log_partition) / (2 * h)
        for e in np.eye(3)
    ]
    ev = penalised.evaluate(lam)
    assert ev.values == pytest.approx(numeric, abs=1e-8)
    assert ev.factor() @ ev.factor().T == pytest.approx(ev.covariance, abs=1e-12)
    assert penalised.lowest(np.array([0.1, 1.0, 0.0])).value == -np.inf
    assert penalised.lowest(np.array([0.0, 1.0, 0.0])).value == family.lowest(np.array([0.0, 1.0, 0.0])).value
    matrix = np.array([[1.0, 2.0, 0.0], [0.0, 1.0, -1.0]])
    mixed = penalised.combine(matrix, np.zeros(2))
    assert mixed.evaluate(np.array([0.5, 0.1])).log_partition == pytest.approx(
        penalised.evaluate(matrix.T @ np.array([0.5, 0.1])).log_partition, abs=1e-12
    )

"""From targets to verdicts, the same questions for every family: round trips, and the three twins of each."""

from __future__ import annotations

import numpy as np
import pytest

import maxent
from maxent.families import Bilinears, Matrices, Microstates, Modes
from tests.conformance.examples import NAMES, Example, examples
from tests.conformance.views import plateau_face

every_example = pytest.mark.parametrize("example", examples(), ids=lambda e: e.name)
both_drivers = pytest.mark.parametrize("driver", ["host", "jax"])
LAM = np.array([0.5, -0.3, 0.8])


def named(values) -> dict[str, float]:
    return {n: float(x) for n, x in zip(NAMES, values, strict=True)}


def listed(result) -> np.ndarray:
    return np.array([result.multipliers[n] for n in result.names])


def more_charges(example: Example, extra: dict) -> object:
    """The family with further charges, each given as coefficients of (charges..., identity)."""
    family = example.family
    if isinstance(family, Microstates):
        rows = np.zeros((3, family.listed))
        rows[:, family.index] = [np.diag(q) for q in example.dense.charges]
        charges = dict(zip(NAMES, rows, strict=True))
        for name, c in extra.items():
            charges[name] = c[:3] @ rows + c[3]
        weights = np.full(family.listed, -np.inf)
        weights[family.index] = np.diag(example.dense.log_prior)
        kind = "log_weights" if example.degenerate_weights is not None else "log_prior"
        return Microstates(charges, **({kind: weights} if example.has_weights else {}))
    if isinstance(family, Modes):
        charges = dict(zip(NAMES, family.charges, strict=True))
        constants = dict(zip(NAMES, family.constant, strict=True))
        for name, c in extra.items():
            charges[name], constants[name] = c[:3] @ family.charges, c[:3] @ family.constant + c[3]
        return Modes(charges, degeneracy=family.degeneracy, constants=constants)
    if isinstance(family, Bilinears):
        given = list(family.operators().values())
        h = np.array([q.matrices()[0] for q in given])
        pairings = [q.matrices()[1] for q in given]
        d = np.array([np.zeros_like(h[0]) if p is None else p for p in pairings])
        numbers = np.array([q.constant for q in given])
        charges = family.operators()
        for name, c in extra.items():
            charges[name] = np.tensordot(c[:3], h, 1), np.tensordot(c[:3], d, 1), float(c[:3] @ numbers + c[3])
        return Bilinears(charges)
    charges = dict(zip(NAMES, example.dense.charges, strict=True))
    for name, c in extra.items():
        charges[name] = np.einsum("j,jab->ab", c[:3], example.dense.charges) + c[3] * np.eye(example.dense.d)
    return Matrices(charges, log_prior=example.dense.log_prior if example.has_weights else None)


# ---------------------------------------------------------------- feasible


@every_example
@pytest.mark.parametrize("lam", [LAM, np.zeros(3), 6 * LAM], ids=["generic", "zero", "cold"])
def test_multipliers_to_targets_and_back(example, lam):
    log_z, targets, covariance = example.dense.derivatives(lam)
    result = maxent.solve(example.family, named(targets))
    assert result.verdict is maxent.Verdict.SOLVED and result.success
    assert result.evidence == "proved"
    # the condition of the covariance stands between rounding of the targets and the multipliers
    slack = 1e-14 / np.linalg.eigvalsh(covariance)[0]
    np.testing.assert_allclose(listed(result), lam, rtol=0, atol=20 * slack + 1e-13)
    np.testing.assert_allclose(list(result.values.values()), targets, rtol=0, atol=1e-13 * (1 + np.abs(targets).max()))
    np.testing.assert_allclose(
        result.covariance, covariance, rtol=0, atol=1e-11 * np.abs(covariance).max() + slack * 1e-2
    )
    assert result.log_partition == pytest.approx(log_z, abs=1e-11 + 100 * slack)
    rho = example.dense.density(lam)[0]
    x, inside = example.observable(np.random.default_rng(1))
    assert result.mean(x) == pytest.approx(np.trace(inside @ rho).real, abs=1e-11 + slack)
    assert all(v is not None for v in (result.state, result.conditioning))
    assert (result.certificate, result.face, result.excess) == (None, None, None)


@every_example
def test_drivers_agree(example):
    _, targets, covariance = example.dense.derivatives(LAM)
    assert np.linalg.cond(covariance) < 1e4
    host = maxent.solve(example.family, named(targets), driver="host")
    compiled = maxent.solve(example.family, named(targets), driver="jax")
    assert (host.driver, compiled.driver) == ("host", "jax")
    assert host.verdict is compiled.verdict is maxent.Verdict.SOLVED
    np.testing.assert_allclose(listed(compiled), listed(host), rtol=0, atol=1e-12)
    assert compiled.iterations > 0


# ---------------------------------------------------------------- the twins


@every_example
@pytest.mark.parametrize("distance", [1e-1, 1e-6, 1e-10])
def test_unreachable_twin(example, distance):
    """The lowest point of a direction, moved outwards."""
    v = np.array([0.36, 0.48, -0.8])
    low = example.family.lowest(v, with_values=True)
    targets = named(low.values - distance * v)
    result = maxent.solve(example.family, targets)
    assert result.verdict is maxent.Verdict.INFEASIBLE
    c = result.certificate
    assert c.kind == "outside"
    direction = np.array([c.direction[n] for n in NAMES])
    assert np.linalg.norm(direction) == pytest.approx(1)
    levels = example.dense.levels(direction)
    asked = sum(c.direction[n] * targets[n] for n in NAMES)
    assert c.lowest == pytest.approx(levels[0], abs=1e-12)
    assert c.asked == pytest.approx(asked, abs=1e-13)
    assert c.tolerance < c.margin <= distance * (1 + 1e-6) + 1e-13
    assert c.margin == pytest.approx(levels[0] - asked, abs=1e-12)
    assert c.verify(example.family, targets)
    assert result.state is None and np.all(np.isnan(listed(result)))


@every_example
@both_drivers
def test_vertex(example, driver):
    """The one state that attains the lowest value of a generic direction."""
    v = np.array([0.36, 0.48, -0.8])
    low = example.family.lowest(v, with_values=True)
    assert low.log_degeneracy == 0
    targets = named(low.values)
    result = maxent.solve(example.family, targets, driver=driver)
    assert result.verdict is maxent.Verdict.BOUNDARY
    assert result.face.dimension == 1
    there = 0.0  # of one state; with degeneracies, of that many equal ones
    if example.degenerate_weights is not None:
        there = example.degenerate_weights[np.argmin(np.diag(example.dense.of(v)))]
    assert result.entropy == pytest.approx(there, abs=1e-12)
    rho = example.dense.ground(v, 1)
    x, inside = example.observable(np.random.default_rng(1))
    # rounding of the targets moves a vertex by its square root
    assert result.mean(x) == pytest.approx((rho.conj().T @ inside @ rho).real.item(), abs=1e-6)
    assert result.certificate.verify(example.family, targets)


@every_example
@both_drivers
def test_face_twin(example, driver):
    """A generic state on the plateau of charge 0: the limit state is the one of largest entropy there."""
    _, dense = plateau_face(example)
    lam = np.array([0.0, 0.7, -0.4])
    _, targets, _ = dense.derivatives(lam)
    targets[0] = 0.0
    result = maxent.solve(example.family, named(targets), driver=driver)
    assert result.verdict is maxent.Verdict.BOUNDARY
    assert result.face.dimension == example.degeneracy
    assert result.certificate.kind == "face"
    direction = np.array([result.certificate.direction[n] for n in NAMES])
    levels = example.dense.combined(np.eye(3), targets).levels(direction)  # exposes the plateau and nothing else
    assert np.abs(levels[: example.degeneracy]).max() < 1e-12
    assert levels[example.degeneracy] > 1e-3
    assert result.certificate.verify(example.family, named(targets))
    assert np.all(np.isnan(listed(result)))
    isometry = example.dense.ground(np.eye(3)[0], example.degeneracy)
    rho = isometry @ dense.density(lam)[0] @ isometry.conj().T
    x, inside = example.observable(np.random.default_rng(1))
    assert result.mean(x) == pytest.approx(np.trace(inside @ rho).real, abs=1e-7)


@every_example
def test_inside_of_the_plateau_is_no_boundary(example):
    """The neighbour just inside is solved."""
    _, dense = plateau_face(example)
    _, targets, _ = dense.derivatives(np.array([0.0, 0.7, -0.4]))
    mean = np.trace(example.dense.charges, axis1=1, axis2=2).real / example.dense.d
    result = maxent.solve(example.family, named(targets + 1e-3 * (mean - targets)))
    assert result.verdict is maxent.Verdict.SOLVED
    assert max(abs(x) for x in result.residuals.values()) < 1e-12


@every_example
def test_redundant_twin(example):
    """A fourth charge that follows from the others: same state, named relation, multipliers of least norm."""
    c = np.array([2.0, -1.0, 0.5, 0.25])
    family = more_charges(example, {"sum": c})
    _, targets, _ = example.dense.derivatives(LAM)
    asked = named(targets) | {"sum": float(c[:3] @ targets + c[3])}
    result = maxent.solve(family, asked)
    assert result.verdict is maxent.Verdict.SOLVED
    (relation,) = result.redundancies
    # sum - 2 plateau + second - third/2 = 1/4, up to a common factor
    factor = 1 / relation.coefficients["sum"]
    scaled = {n: factor * x for n, x in relation.coefficients.items()}
    assert scaled == {
        "plateau": pytest.approx(-2, abs=1e-11), "second": pytest.approx(1, abs=1e-11),
        "third": pytest.approx(-0.5, abs=1e-11), "sum": 1.0,
    }  # fmt: skip
    assert factor * relation.constant == pytest.approx(0.25, abs=1e-11)
    # lam of the independent charges: lam_j + c_j lam_sum
    lam = np.array([result.multipliers[n] + c[j] * result.multipliers["sum"] for j, n in enumerate(NAMES)])
    np.testing.assert_allclose(lam, LAM, atol=1e-11)
    # least norm in units of each charge's spread: orthogonal to the null combination
    d = example.dense.d
    stack = np.array([*example.dense.charges, example.dense.of(c[:3])])
    traceless = stack - (np.trace(stack, axis1=1, axis2=2) / d)[:, None, None] * np.eye(d)
    variance = np.einsum("jab,jba->j", traceless, traceless).real / d
    assert abs((listed(result) * variance) @ np.array([2.0, -1.0, 0.5, -1.0])) < 1e-10


@every_example
@both_drivers
def test_inconsistent_twin(example, driver):
    c = np.array([2.0, -1.0, 0.5, 0.25])
    family = more_charges(example, {"sum": c})
    _, targets, _ = example.dense.derivatives(LAM)
    asked = named(targets) | {"sum": float(c[:3] @ targets + c[3]) + 1e-7}
    result = maxent.solve(family, asked, driver=driver)
    assert result.verdict is maxent.Verdict.INCONSISTENT
    cert = result.certificate
    assert cert.kind == "contradiction"
    assert cert.margin == pytest.approx(1e-7 / np.linalg.norm([2, -1, 0.5, -1]), rel=1e-6)
    assert cert.verify(family, asked)
    assert not cert.verify(family, asked | {"sum": float(c[:3] @ targets + c[3])})


@every_example
def test_drivers_agree_on_the_unreachable(example):
    v = np.array([0.36, 0.48, -0.8])
    low = example.family.lowest(v, with_values=True)
    for distance in (1e-1, 1e-8):
        result = maxent.solve(example.family, named(low.values - distance * v), driver="jax")
        assert result.verdict is maxent.Verdict.INFEASIBLE
        assert result.certificate.margin <= distance * (1 + 1e-6) + 1e-13


# ---------------------------------------------------------------- the smallest problems


ONE_STATE = [Microstates({"a": [2.0], "b": [-3.0]}), Matrices({"a": [[2.0]], "b": [[-3.0]]})]
NO_CHARGE = [
    Microstates({}, log_weights=np.log([1.0, 2.0, 3.0])), Matrices({}, dims=(2, 3)),
    Matrices({}, basis=np.eye(4)[:, :2]),
]  # fmt: skip


@pytest.mark.parametrize("family", ONE_STATE, ids=["microstates", "matrices"])
@both_drivers
def test_a_single_state(family, driver):
    solved = maxent.solve(family, {"a": 2.0, "b": -3.0}, driver=driver)
    assert solved.verdict is maxent.Verdict.SOLVED
    assert solved.multipliers == {"a": 0.0, "b": 0.0}
    assert solved.entropy == 0 and solved.log_partition == 0
    assert len(solved.redundancies) == 2
    assert {next(iter(r.coefficients)): r.constant for r in solved.redundancies} == {"a": 2.0, "b": -3.0}
    missed = maxent.solve(family, {"a": 2.0, "b": -3.5}, driver=driver)
    assert missed.verdict is maxent.Verdict.INCONSISTENT
    assert missed.certificate.margin == pytest.approx(0.5)
    assert missed.certificate.verify(family, {"a": 2.0, "b": -3.5})


@pytest.mark.parametrize("family", NO_CHARGE, ids=["microstates", "matrices", "matrices-basis"])
@both_drivers
def test_no_charges(family, driver):
    result = maxent.solve(family, {}, driver=driver)
    assert result.verdict is maxent.Verdict.SOLVED
    assert result.multipliers == {} and result.redundancies == () and result.covariance.shape == (0, 0)
    expected = np.log(6) if family is not NO_CHARGE[2] else np.log(2)
    assert result.log_partition == pytest.approx(expected, abs=1e-14)
    assert result.entropy == pytest.approx(expected, abs=1e-14)
    assert family.evaluate(np.zeros(0)).values.shape == (0,)


@pytest.mark.parametrize("kind", [Microstates, Matrices])
def test_charges_that_are_numbers_or_zero(kind):
    """Zero, the identity and a duplicate carry no information and get no multiplier of their own."""
    x = np.array([0.0, 1.0, 2.0])
    charges = {"x": x, "zero": 0 * x, "one": np.ones(3), "again": x}
    if kind is Matrices:
        charges = {n: np.diag(c) for n, c in charges.items()}
    family = kind(charges)
    result = maxent.solve(family, {"x": 0.5, "zero": 0.0, "one": 1.0, "again": 0.5})
    assert result.verdict is maxent.Verdict.SOLVED
    assert len(result.redundancies) == 3
    assert result.multipliers["zero"] == result.multipliers["one"] == 0
    assert result.multipliers["x"] == pytest.approx(result.multipliers["again"], abs=1e-13)
    y = np.exp(-2 * result.multipliers["x"])  # one level per step
    assert (y + 2 * y**2) / (1 + y + y**2) == pytest.approx(0.5, abs=1e-13)
    for name, wrong in {"zero": 1e-9, "one": 1 - 1e-9, "again": 0.5 + 1e-9}.items():
        targets = {"x": 0.5, "zero": 0.0, "one": 1.0, "again": 0.5} | {name: wrong}
        assert maxent.solve(family, targets).verdict is maxent.Verdict.INCONSISTENT

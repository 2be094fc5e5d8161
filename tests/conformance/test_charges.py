"""Questions about the charges, against dense linear algebra: scale, reference, lowest, face, barrier, stiffness."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg as sla

from maxent.core.contract import EPS, Problem
from maxent.core.whiten import whiten
from maxent.families import Bilinears, Modes
from tests.conformance.dense import random_unitary
from tests.conformance.examples import LEVELS, examples, states_of
from tests.conformance.views import plateau_face, views

every_view = pytest.mark.parametrize("view", views(), ids=lambda v: v.name)
every_commuting_view = pytest.mark.parametrize(
    "view",
    [
        v
        for v in views()
        if isinstance(v.family, Modes) or not (isinstance(v.family, Bilinears) or v.family.blocks.dense)
    ],
    ids=lambda v: v.name,
)
#: Families of states rather than of levels: their barrier, gap and stiffness count states.
every_view_of_states = pytest.mark.parametrize(
    "view", [v for v in views() if not isinstance(v.family, LEVELS)], ids=lambda v: v.name
)
every_listed_view = pytest.mark.parametrize(
    "view", [v for v in views() if not isinstance(v.family, LEVELS) and not v.family.blocks.dense], ids=lambda v: v.name
)
every_example = pytest.mark.parametrize("example", examples(), ids=lambda e: e.name)


@every_view
def test_scale_is_the_operator_norm(view):
    norms = [np.abs(np.linalg.eigvalsh(q)).max() for q in view.dense.charges]
    np.testing.assert_allclose(view.family.scale, norms, rtol=1e-12, atol=1e-14)


@every_view
def test_size_and_start(view):
    assert states_of(view.family) == view.dense.d
    assert np.array_equal(view.family.start(), np.zeros(view.m))


@every_view
def test_reference_is_the_counting_measure(view):
    """Means and inner products of the traceless parts; the prior takes no part."""
    mean, rows = view.family.reference()
    d, q = view.dense.d, view.dense.charges
    expected = np.trace(q, axis1=1, axis2=2).real / d
    traceless = q - expected[:, None, None] * np.eye(d)
    gram = np.einsum("jab,kba->jk", traceless, traceless).real / d
    np.testing.assert_allclose(mean, expected, atol=1e-13)
    np.testing.assert_allclose(rows @ rows.T, gram, rtol=0, atol=1e-13 * max(1, np.abs(gram).max()))


@every_view
def test_whitened_charges_are_orthonormal(view):
    q = np.trace(view.dense.charges, axis1=1, axis2=2).real / view.dense.d + 0.01
    # noise as core states it on faces, where a charge may vanish up to the rounding of the compression
    problem = Problem(view.family.combine(np.eye(view.m), q), np.full(view.m, 8 * EPS * 4), np.zeros(view.m))
    w = whiten(problem)
    charges = view.dense.combined(w.transform, w.transform @ q)
    mean = np.trace(charges.charges, axis1=1, axis2=2).real / view.dense.d
    traceless = charges.charges - mean[:, None, None] * np.eye(view.dense.d)
    gram = np.einsum("jab,kba->jk", traceless, traceless).real / view.dense.d
    np.testing.assert_allclose(gram, np.eye(w.rank), atol=1e-12)
    assert w.rank + len(w.null) == view.m
    # the inverse gives the charges back, null combinations included
    np.testing.assert_allclose(w.values(mean), w.mean, atol=1e-12)
    for c in w.null:
        levels = view.dense.levels(c)
        assert levels[-1] - levels[0] <= 1e-13 * max(1, np.abs(levels).max())


@every_view
def test_lowest_is_the_smallest_eigenvalue(view):
    rng = np.random.default_rng(3)
    for v in [*np.eye(view.m), *rng.standard_normal((3, view.m))]:
        levels = view.dense.levels(v)
        low = view.family.lowest(v, with_values=True)
        assert low.value == pytest.approx(levels[0], abs=1e-13 * (1 + np.abs(levels).max()))
        assert low.highest == pytest.approx(levels[-1], abs=1e-13 * (1 + np.abs(levels).max()))
        assert low.error <= 8 * EPS * (1 + np.abs(levels).max())
        size = max(np.abs(levels).max(), 1e-300)
        assert low.log_degeneracy == pytest.approx(np.log(np.sum(levels <= levels[0] + 1e-12 * size)))
        # the values belong to a state: it attains the minimum, and no direction finds them out of reach
        assert v @ low.values == pytest.approx(levels[0], abs=1e-12 * (1 + np.abs(levels).max()))
        for w in rng.standard_normal((5, view.m)):
            assert w @ low.values >= view.dense.levels(w)[0] - 1e-12 * (
                1 + np.abs(w @ view.dense.charges.reshape(view.m, -1)).max()
            )
        assert view.family.glance(v) >= levels[0] - 1e-13 * (1 + np.abs(levels).max())


@every_listed_view
def test_glance_may_be_attained(view):
    """On states that are numbers the cheap bound is exact, so it is no constant."""
    v = np.arange(1, view.m + 1.0)
    assert view.family.glance(v) == pytest.approx(view.family.lowest(v).value, abs=1e-13)


@every_example
def test_face_is_the_ground_space(example):
    face, dense = plateau_face(example)
    levels = example.dense.levels(np.eye(3)[0])
    assert np.exp(face.log_dimension) == pytest.approx(example.degeneracy)
    assert states_of(face.family) == dense.d == example.degeneracy
    largest = np.abs(levels).max()
    if isinstance(example.family, LEVELS):  # of one particle
        largest = example.family.charges[0].max() if isinstance(example.family, Modes) else 1.5
    assert face.gap == pytest.approx(levels[example.degeneracy] / largest, rel=1e-10)
    assert face.width <= 1e-14
    rng = np.random.default_rng(9)
    for v in rng.standard_normal((4, 3)):
        low, levels = face.family.lowest(v), dense.levels(v)
        assert low.value == pytest.approx(levels[0], abs=1e-12)
        assert low.highest == pytest.approx(levels[-1], abs=1e-12)
    # charge 0 is a number there
    assert np.ptp([face.family.lowest(np.eye(3)[0]).value, face.family.lowest(np.eye(3)[0]).highest]) <= 1e-14


@every_example
def test_face_of_a_face(example):
    """Down to a single state, a vertex."""
    face, dense = plateau_face(example)
    v = np.array([0.0, 1.0, 0.5])
    shift = dense.levels(v)[0]
    lowered = face.family.combine(np.eye(3), shift * v / (v @ v))
    vertex = lowered.face(v, 1e-13)
    assert states_of(vertex.family) == 1
    assert vertex.log_dimension == 0
    x = dense.ground(v, 1)[:, 0]
    expected = np.einsum("a,jab,b->j", x.conj(), dense.charges, x).real - shift * v / (v @ v)
    np.testing.assert_allclose(vertex.family.reference()[0], expected, atol=1e-12)
    np.testing.assert_allclose(vertex.family.evaluate(np.array([3.0, -1.0, 2.0])).values, expected, atol=1e-12)
    assert np.all(np.abs(vertex.family.evaluate(np.ones(3)).covariance) <= 1e-25)


@every_example
def test_no_face_where_there_is_none(example):
    v = np.eye(3)[0]
    assert example.family.combine(np.eye(3), -np.array([0.5, 0, 0])).face(v, 1e-13) is None  # all levels above zero
    assert example.family.combine(np.zeros((3, 3)), np.zeros(3)).face(v, 1e-13) is None  # the whole space
    face, _ = plateau_face(example)
    assert face.family.face(v, 1e-13) is None  # again the whole space


@every_view_of_states
def test_barrier_is_minus_log_det(view):
    rng = np.random.default_rng(4)
    identity = np.eye(view.dense.d)
    for direction in rng.standard_normal((3, view.m)):
        lam = 0.7 * direction / np.abs(view.dense.levels(direction)).max()
        matrix = identity + view.dense.of(lam)
        at = view.family.barrier(lam)
        inverse = np.linalg.inv(matrix)
        solved = np.einsum("ab,jbc->jac", inverse, view.dense.charges)
        assert at.value == pytest.approx(-np.linalg.slogdet(matrix)[1], abs=1e-12)
        np.testing.assert_allclose(at.gradient, -np.trace(solved, axis1=1, axis2=2).real, atol=1e-11)
        hessian = np.einsum("jab,kba->jk", solved, solved).real
        np.testing.assert_allclose(at.factor @ at.factor.T, hessian, atol=1e-11 * max(1, np.abs(hessian).max()))
        assert at.smallest == pytest.approx(np.linalg.eigvalsh(matrix)[0], abs=1e-12)
        assert at.complexity == view.dense.d


@every_view_of_states
def test_barrier_ends_at_its_domain(view):
    v = np.eye(view.m)[-1]
    lowest = view.dense.levels(v)[0]
    sign = -1.0 if lowest >= 0 else 1.0
    edge = 1 / np.abs(view.dense.levels(sign * v)[0])
    assert view.family.barrier(sign * v * edge * 0.999) is not None
    assert view.family.barrier(sign * v * edge * 1.001) is None


@every_view_of_states
def test_stiffness_is_a_spread(view):
    rng = np.random.default_rng(8)
    for u in rng.standard_normal((4, view.m)):
        levels = view.dense.levels(u)
        exact = view.family.stiffness(np.zeros(view.m), u)
        cheap = view.family.stiffness(np.zeros(view.m), u, exact=False)
        assert exact == pytest.approx(levels[-1] - levels[0], abs=1e-12 * (1 + np.abs(levels).max()))
        assert cheap >= exact * (1 - 1e-12)
        # no more than what Frobenius norms cost
        assert cheap <= 2 * np.sqrt(view.dense.d) * exact + 1e-12


@every_view
def test_curvature_along_a_ray_falls_no_faster_than_stiffness_says(view):
    """u.H(lam + t u).u >= exp(-c t) u.H(lam).u, which is what the existence proof uses."""
    rng = np.random.default_rng(6)
    for lam, u in 3 * rng.standard_normal((6, 2, view.m)):
        here = u @ view.family.evaluate(lam).covariance @ u
        for t in (-1, -0.3, -0.1, 0.1, 0.3, 1):
            there = u @ view.family.evaluate(lam + t * u).covariance @ u
            assert there >= here * np.exp(-abs(t) * view.family.stiffness(lam, u)) * (1 - 1e-10) - 1e-28


@every_commuting_view
def test_curvature_of_commuting_charges_falls_no_faster_in_any_direction(view):
    """For commuting charges the bound holds as a matrix inequality (it does not for others)."""
    rng = np.random.default_rng(6)
    for lam, u in rng.standard_normal((6, 2, view.m)):
        here, there = view.family.evaluate(lam).covariance, view.family.evaluate(lam + u).covariance
        change = there - np.exp(-view.family.stiffness(lam, u)) * here
        assert np.linalg.eigvalsh(change)[0] >= -1e-13 * np.abs(there).max()


@every_example
def test_combine_composes(example):
    rng = np.random.default_rng(2)
    a, b, x, y = (
        rng.standard_normal((3, 3)),
        rng.standard_normal((2, 3)),
        rng.standard_normal(3),
        rng.standard_normal(2),
    )
    twice, once = example.family.combine(a, x).combine(b, y), example.family.combine(b @ a, b @ x + y)
    lam = np.array([0.4, -0.7])
    np.testing.assert_allclose(twice.evaluate(lam).values, once.evaluate(lam).values, atol=1e-12)
    assert twice.evaluate(lam).log_partition == pytest.approx(once.evaluate(lam).log_partition, abs=1e-12)


@every_example
def test_sharpened_directions_expose(example):
    """Near the exposing direction of the plateau there is a candidate that touches the target to rounding."""
    if example.name.startswith("microstates"):
        points = np.array([np.diag(q) for q in example.dense.charges])
        q = points[:, :3] @ np.array([0.5, 0.2, 0.3])
    else:
        ground = example.dense.ground(np.eye(3)[0], example.degeneracy)
        rho = ground @ ground.conj().T / example.degeneracy
        q = np.einsum("jab,ba->j", example.dense.charges, rho).real
    shifted = example.family.combine(np.eye(3), q)
    near = np.array([1.0, 1e-5, -2e-5])
    near /= np.linalg.norm(near)
    before = shifted.lowest(near).value
    best = max(shifted.lowest(v / np.linalg.norm(v)).value for v in shifted.sharpen(near))
    assert before < -1e-12
    assert best >= -1e-14


def test_dense_judge_itself():
    """The judge's Frechet derivative against mixed differences of its own expm."""
    (example,) = [e for e in examples() if e.name == "matrices-complex"]
    lam, step = np.array([0.3, -0.2, 0.5]), 1e-5
    covariance = example.dense.derivatives(lam)[2]
    for j, e in enumerate(np.eye(3) * step):
        bend = (example.dense.derivatives(lam + e)[1] - example.dense.derivatives(lam - e)[1]) / (2 * step)
        np.testing.assert_allclose(-bend, covariance[j], atol=1e-8)
    u = random_unitary(np.random.default_rng(0), 6, is_complex=True)
    assert sla.norm(u.conj().T @ u - np.eye(6)) < 1e-13

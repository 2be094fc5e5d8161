"""The reachable ball around solved targets: never larger than the distance to the boundary, and not much smaller."""

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial import ConvexHull

import maxent
from maxent import AtLeast, AtMost, Measured, Within
from maxent.diagnose.proof import NO_METHOD, NOT_PROVABLE
from maxent.diagnose.proofs.interior import Part, reachable_ball
from maxent.families import Matrices, Microstates
from tests.proofs.test_certificates import Ladder, X, Y, Z, random_charges, sparse_model


def depth(points, q):
    """Distance of q from the boundary of the convex hull of points (n, 2), negative outside."""
    equations = ConvexHull(points).equations
    return float(-(equations[:, :-1] @ q + equations[:, -1]).max())


def nearest_face(charges, q, rng, tries=4000):
    """Upper bound of the distance of q from the boundary of the reachable set: supporting planes of many directions."""
    stack = np.array([q_j.toarray() if hasattr(q_j, "toarray") else q_j for q_j in charges.values()])
    best = np.inf
    v = rng.standard_normal((tries, len(stack)))
    v /= np.linalg.norm(v, axis=1)[:, None]
    for i in range(0, tries, 500):
        levels = np.linalg.eigvalsh(np.tensordot(v[i : i + 500], stack, axes=(1, 0)))
        best = min(best, float((v[i : i + 500] @ q - levels[:, 0]).min()))
    return best


@pytest.mark.parametrize("length", [0.0, 0.5, 0.9, 0.999, 1 - 1e-6])
def test_bloch_ball(length):
    """The values of x, y, z of a spin 1/2 fill the unit ball."""
    family = Matrices({"x": X, "y": Y, "z": Z})
    targets = dict(zip("xyz", (length * np.array([2.0, -1.0, 2.0]) / 3).tolist(), strict=True))
    proof = maxent.solve(family, targets).prove(family)
    truth = 1 - float(np.linalg.norm(list(targets.values())))
    assert proof and proof.exact is None
    assert 0.4 * truth < proof.margin < truth


def test_listed_against_the_hull(rng):
    points = rng.standard_normal((400, 2))
    family = Microstates({"a": points[:, 0], "b": points[:, 1]}, log_weights=rng.standard_normal(400))
    for q in ([0.0, 0.0], [0.5, -1.0], [1.2, 0.4]):
        proof = maxent.solve(family, {"a": q[0], "b": q[1]}).prove(family)
        assert proof and 0.05 * depth(points, q) < proof.margin <= depth(points, q)


@settings(max_examples=80)
@given(st.integers(0, 2**32 - 1), st.integers(3, 9), st.floats(-17, 0), st.floats(-12, 1))
def test_nothing_false_from_any_state(seed, n, near, outside):
    """Weights that have nothing to do with the targets, targets on either side of the boundary, thin triangles."""
    rng = np.random.default_rng(seed)
    points = rng.standard_normal((n, 2)) * [1.0, 10.0 ** (near / 4)]
    hull = ConvexHull(points, qhull_options="QJ")
    facet = int(rng.integers(len(hull.equations)))
    corners = points[hull.simplices[facet]]
    on_edge = rng.dirichlet([1.0, 1.0]) @ corners
    normal = hull.equations[facet, :2]
    for sign in (1, -1):
        q = on_edge + sign * 10.0**outside * normal
        weights = rng.dirichlet(np.full(n, 0.5)) if rng.uniform() < 0.5 else np.exp(-5 * np.abs(points - q).sum(axis=1))
        found = reachable_ball([Part(points.T, weights)], q, np.zeros(2))
        if sign > 0:
            assert found is None
        elif found is not None:
            assert found[0] <= depth(points, q) + 1e-12


@pytest.mark.parametrize("is_complex", [False, True])
@pytest.mark.parametrize("d", [2, 5, 16])
def test_matrices_against_supporting_planes(rng, d, is_complex):
    charges = random_charges(rng, d, is_complex, m=2)
    family = Matrices(charges)
    lam = np.array([0.7, -0.4])
    state = family.state(lam)
    targets = {n: state.mean(q) for n, q in charges.items()}
    proof = maxent.solve(family, targets).prove(family)
    far = nearest_face(charges, np.array(list(targets.values())), rng)
    assert proof and 0.1 * far < proof.margin <= far


def test_sparse_blocks(rng):
    charges = sparse_model(rng)
    family = Matrices(charges)
    for prior in (None, np.diag(np.linspace(0, 1, 11))):
        family = Matrices(charges, log_prior=prior)
        state = family.state(np.array([0.5, 0.2]))
        targets = {n: state.mean(q) for n, q in charges.items()}
        proof = maxent.solve(family, targets).prove(family)
        far = nearest_face(charges, np.array(list(targets.values())), rng)
        assert proof and 0.05 * far < proof.margin <= far


def test_units_do_not_matter(rng):
    """The ball is Euclidean in the user's units: the small charge sets it, and scaling does not spoil it."""
    charges = random_charges(rng, 4, is_complex=True, m=2)
    radius = {}
    for size in (1.0, 1e-6):
        scaled = {"a": charges["a"], "b": size * charges["b"]}
        family = Matrices(scaled)
        radius[size] = maxent.solve(family, {"a": 0.01, "b": 0.02 * size}).prove(family).margin
    assert 0.3 * radius[1.0] < radius[1e-6] / 1e-6 < 3 * radius[1.0]


def test_close_to_the_boundary(rng):
    points = rng.standard_normal((30, 2))
    hull = ConvexHull(points)
    middle = points[hull.simplices[0]].mean(axis=0)
    family = Microstates({"a": points[:, 0], "b": points[:, 1]})
    proved = []
    for gap in (1e-2, 1e-5, 1e-8):
        q = middle - gap * hull.equations[0, :2]
        result = maxent.solve(family, {"a": q[0], "b": q[1]})
        assert result.success
        proof = result.prove(family)
        proved.append(bool(proof))
        assert proof.margin <= gap * 1.001
    assert proved[:2] == [True, True]


def test_redundant_charges_allow_no_ball(rng):
    a = rng.standard_normal(20)
    family = Microstates({"a": a, "twice": 2 * a})
    result = maxent.solve(family, {"a": 0.0, "twice": 0.0})
    assert result.success
    proof = result.prove(family)
    assert proof.status == NOT_PROVABLE and proof.margin == 0.0 and "redundant" in proof.detail
    constant = Microstates({"one": np.ones(3)})
    assert not maxent.solve(constant, {"one": 1.0}).prove(constant)


def test_stated_accuracy_must_fit_into_the_ball():
    family = Microstates({"n": [0.0, 1.0, 2.0]})
    radius = maxent.solve(family, {"n": 0.9}).prove(family).margin
    assert maxent.solve(family, {"n": 0.9}, accuracy=0.9 * radius).prove(family)
    proof = maxent.solve(family, {"n": 0.9}, accuracy=1.1 * radius).prove(family)
    assert proof.status == NOT_PROVABLE and proof.margin == radius and "accuracy" in proof.detail


@pytest.mark.parametrize(
    "asked",
    [Within(2.5, 0.5), Within(1.0, 0.25), AtMost(0.8), AtMost(5.0), AtLeast(1.5), Measured(4.0, 2.0)],
    ids=repr,
)
def test_relaxed_targets(asked):
    family = Microstates({"n": [0.0, 1.0, 2.0, 3.0], "m": [1.0, 0.0, 0.0, 1.0]})
    targets = {"n": asked, "m": 0.4}
    result = maxent.solve(family, targets)
    assert result.success
    proof = result.prove(family, targets)
    points = np.array([[0.0, 1.0], [1.0, 0.0], [2.0, 0.0], [3.0, 1.0]])
    assert proof and 0 < proof.margin <= depth(points, [result.values["n"], 0.4]) + 1e-9


def test_what_has_nothing_to_prove():
    family = Microstates.from_rule(Ladder())
    assert maxent.solve(family, {"energy": 1.0}).prove(family).status == NO_METHOD
    empty = Matrices({}, dims=(2, 2))
    assert maxent.solve(empty, {}).prove(empty)


def test_nearly_dependent_charges(rng):
    """A third charge that nearly repeats the first: the ball shrinks with what is left, and is never too large."""
    a, b, c = rng.standard_normal((3, 60))
    proved = []
    for left in (1e-2, 1e-4, 1e-6, 1e-8, 1e-11, 1e-14):
        family = Microstates({"a": a, "b": b, "c": a + left * c})
        weights = np.full(60, 1 / 60)
        q = np.array([x @ weights for x in (a, b, a + left * c)])
        found = reachable_ball([Part(family.blocks.diagonal, weights)], q, np.zeros(3))
        proved.append(found is not None)
        # along (1, 0, -1)/sqrt 2 the states spread over no more than this
        assert found is None or found[0] <= left * np.abs(c).max() * np.sqrt(2)
    assert proved == sorted(proved, reverse=True) and proved[:3] == [True] * 3 and not proved[-1]


def test_the_theorem_in_many_digits(rng):
    """Targets inside the ball are built as a state, with the formula of the proof and 50 digits."""
    points, weights = rng.standard_normal((2, 7)), rng.dirichlet(np.ones(7))
    q = np.array([0.1, 0.2])
    # weights whose mean is q: one solve suffices
    family = Microstates({"a": points[0], "b": points[1]}, log_weights=np.log(weights))
    result = maxent.solve(family, {"a": q[0], "b": q[1]})
    radius, _ = reachable_ball([Part(points, result.state.weights)], q, np.zeros(2))
    with mpmath.workdps(50):
        p = mpmath.matrix(result.state.weights.tolist())
        for angle in np.linspace(0, 6, 7):
            asked = q + 0.999 * float(radius) * np.array([np.cos(angle), np.sin(angle)])
            g = mpmath.matrix(points.tolist())
            moment = mpmath.matrix([[sum(p[x] * (g[i, x] - asked[i]) * g[j, x] for x in range(7)) for j in range(2)]
                                    for i in range(2)])  # fmt: skip
            rest = mpmath.matrix([-sum(p[x] * (g[i, x] - asked[i]) for x in range(7)) for i in range(2)])
            y = mpmath.lu_solve(moment - _outer(p, g, asked, q), rest)
            state = [p[x] * (1 + sum(y[j] * (g[j, x] - q[j]) for j in range(2))) for x in range(7)]
            assert min(state) > 0
            for i in range(2):
                assert abs(sum(s * (g[i, x] - asked[i]) for x, s in enumerate(state))) < mpmath.mpf(10) ** -45


def _outer(p, g, asked, q):
    """What counting the corrections from q instead of 0 takes from the moments."""
    first = [sum(p[x] * (g[i, x] - asked[i]) for x in range(7)) for i in range(2)]
    return mpmath.matrix([[first[i] * q[j] for j in range(2)] for i in range(2)])

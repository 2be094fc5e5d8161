"""The numbers behind the region figure, against closed forms, Qhull and LAPACK."""

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.spatial import ConvexHull

import maxent
from maxent.diagnose import region as module
from maxent.diagnose.region import region
from maxent.families import Bilinears, Matrices, Microstates
from maxent.families.rules import ratio_tail

X, Z = np.array([[0.0, 1.0], [1.0, 0.0]]), np.diag([1.0, -1.0])
Y = np.array([[0, -1j], [1j, 0]])


def support(corners, angles):
    """Lowest value of u.x over a polygon, for each direction u."""
    return np.array([(corners @ (np.cos(t), np.sin(t))).min() for t in angles])


def hermitian(rng, d):
    a = rng.standard_normal((d, d)) + 1j * rng.standard_normal((d, d))
    return a + a.conj().T


def chain(rng, sites):
    """A transverse-field chain with random couplings: two sparse matrices that do not commute."""
    on = lambda q, i: sp.kron(sp.kron(sp.eye_array(2**i), sp.csr_array(q)), sp.eye_array(2 ** (sites - 1 - i)))
    bonds = sum(rng.uniform(0.5, 1.5) * on(Z, i) @ on(Z, i + 1) for i in range(sites - 1))
    return sp.csr_array(bonds), sp.csr_array(sum(on(X, i) for i in range(sites)))


def signed_area(corners):
    x, y = corners.T
    return 0.5 * float(np.sum(x * np.roll(y, -1) - y * np.roll(x, -1)))


@pytest.mark.parametrize("pair", [(0, 1), (0, 2), (2, 1)])
def test_one_spin_fills_the_unit_disc(pair):
    found = region(Matrices({"x": X, "y": Y, "z": Z}), pair)
    assert found.bounded and found.outline.all() and found.pair == pair
    assert np.linalg.norm(found.corners, axis=1) == pytest.approx(1.0, abs=1e-12)
    # a regular polygon with n corners in a disc: the arc rises 1 - cos(pi/n) above its side
    assert 1 - np.pi / 64 < signed_area(found.corners) / np.pi <= 1
    assert found.gap <= 1e-3


@pytest.mark.parametrize("scale", [(1.0, 1.0), (1e-6, 1e5), (3e7, 2e7)])
def test_lists_give_the_convex_hull_exactly(rng, scale):
    points = rng.standard_normal((40, 2)) * scale + np.array([3.0, -1.0]) * scale
    found = region(Microstates({"a": points[:, 0], "b": points[:, 1]}), (0, 1))
    hull = points[ConvexHull(points / scale).vertices]  # counter-clockwise, as ours
    start = int(np.argmin(np.abs(hull - found.corners[0]).sum(axis=1)))
    assert found.corners == pytest.approx(np.roll(hull, -start, axis=0), rel=1e-12)
    assert found.gap <= 1e-3


def test_matrices_agree_with_lapack_in_every_direction(rng):
    a, b = hermitian(rng, 12), 10 * hermitian(rng, 12)
    found = region(Matrices({"a": a, "b": b}), (0, 1))
    extent = np.ptp(found.corners, axis=0)
    for t in rng.uniform(0, 2 * np.pi, 40):
        u = np.array([np.cos(t), np.sin(t)]) / extent
        below = np.linalg.eigvalsh(u[0] * a + u[1] * b)[0]
        reached = float((found.corners @ u).min())
        assert below - 1e-12 <= reached <= below + np.linalg.norm(u * extent) * found.gap + 1e-12
    assert found.gap <= 1e-3
    assert signed_area(found.corners) > 0


def test_large_sparse_blocks_are_asked_by_iteration_and_agree_with_lapack(rng, monkeypatch):
    a, b = chain(rng, 8)
    calls = []
    iterated = module._iterated
    monkeypatch.setattr(module, "_iterated", lambda *given: calls.append(1) or iterated(*given))
    found = region(Matrices({"a": a, "b": b}), (0, 1))
    assert len(calls) == found.directions
    extent = np.ptp(found.corners, axis=0)
    for t in np.arange(12) * np.pi / 6 + 0.1:
        u = np.array([np.cos(t), np.sin(t)]) / extent
        below = np.linalg.eigvalsh((u[0] * a + u[1] * b).toarray())[0]
        assert below - 1e-6 <= float((found.corners @ u).min()) <= below + found.gap + 1e-6


@pytest.mark.parametrize("targets", [(0.0, 0.0), (0.25, 0.3), (-0.1, 0.77)])
def test_degenerate_edges_keep_both_corners(targets):
    """Two spins: exchange and magnetisation fill the triangle of singlet and fully polarised triplets."""
    s = [np.kron(p, np.eye(2)) / 2 for p in (X, Y, Z)], [np.kron(np.eye(2), p) / 2 for p in (X, Y, Z)]
    exchange = sum(p @ q for p, q in zip(*s, strict=True))
    family = Matrices({"exchange": exchange, "magnetisation": s[0][2] + s[1][2]})
    shifted = family.combine(np.eye(2), np.array(targets))
    found = region(shifted, (0, 1), origin=targets)
    corners = sorted(map(tuple, np.round(found.corners, 12) + 0.0))
    assert corners == [(-0.75, 0.0), (0.25, -1.0), (0.25, 1.0)]


def test_all_spin_components_of_a_chain_look_alike():
    """A degenerate ground space may hand out any of its states; that must not cut the corners off."""
    d = 4
    spin = lambda p: sum(np.kron(np.kron(np.eye(2**i), p), np.eye(2 ** (d - 1 - i))) / 2 for i in range(d))
    pair = lambda p, i: np.kron(np.kron(np.eye(2**i), np.kron(p, p)), np.eye(2 ** (d - 2 - i))) / 4
    energy = sum(pair(p, i) for p in (X, Y, Z) for i in range(d - 1))
    family = Matrices({"energy": energy, "x": spin(X), "y": spin(Y), "z": spin(Z)})
    angles = np.linspace(0, 2 * np.pi, 50)
    shifted = family.combine(np.eye(4), np.array([-1.1, 0.25, -0.4, 0.6]))
    shapes = [
        support(region(shifted, (0, k), origin=(-1.1, t)).corners, angles) for k, t in ((1, 0.25), (2, -0.4), (3, 0.6))
    ]
    assert shapes[0] == pytest.approx(shapes[1], abs=1e-3)
    assert shapes[0] == pytest.approx(shapes[2], abs=1e-3)


@pytest.mark.parametrize(
    ("second", "corners"),
    [
        ([0.0, 2.0, 4.0, 6.0], [(0, 0), (3, 6)]),  # redundant: a segment
        ([1.0, 1.0, 1.0, 1.0], [(0, 1), (3, 1)]),  # a charge that is a number
    ],
)
def test_redundant_charges_give_a_segment(second, corners):
    found = region(Microstates({"a": [0.0, 1.0, 2.0, 3.0], "b": second}), (0, 1))
    assert sorted(map(tuple, np.round(found.corners, 12))) == corners


def test_numbers_give_a_point_and_one_charge_an_interval():
    point = region(Microstates({"a": [2.0, 2.0], "b": [1.0, 1.0]}), (0, 1))
    assert point.corners == pytest.approx(np.array([[2.0, 1.0]]))
    interval = region(Microstates({"a": [2.0, 5.0, 3.0]}), (0, None))
    assert np.sort(interval.corners[:, 0]) == pytest.approx([2.0, 5.0])
    assert interval.corners[:, 1] == pytest.approx(0.0)


class Parabola:
    """Charges n and n^2 on n = 0, 1, 2, ...: the region lies above the polygon through (n, n^2), without end."""

    names = ("n", "square")
    start = (0.0, 1.0)

    def states(self, first, stop):
        n = np.arange(first, stop, dtype=float)
        return np.array([n, n**2]), None

    def log_tail(self, lam, first, moment):
        x = max(first, 1)
        ratio = -lam[0] - lam[1] * (2 * x + 1) + 2 * moment * np.log1p(1 / x)
        return ratio_tail(-lam[0] * x - lam[1] * x**2 + 2 * moment * np.log(x), ratio) if lam[1] > 0 else np.inf

    def lowest(self, v, first):
        if v[1] < 0 or (v[1] == 0 and v[0] < 0):
            return -np.inf
        at = first if v[1] == 0 else max(first, -v[0] / (2 * v[1]))
        return v[0] * at + v[1] * at**2

    def domain(self):
        return None


def test_an_unbounded_region_is_cut_where_it_has_no_edge():
    found = region(Microstates.from_rule(Parabola()), (0, 1), around=[(1.0, 2.0), (2.0, 5.0)])
    assert not found.bounded
    inside = lambda n: found.corners[:, 1] - (n**2 + (2 * n + 1) * (found.corners[:, 0] - n))
    for n in range(4):  # above every side of the polygon from (n, n^2) to (n + 1, (n + 1)^2)
        assert inside(n).min() >= -1e-3
    assert np.abs(found.corners - (0, 0)).sum(axis=1).min() < 1e-9
    assert found.outline.any() and not found.outline.all()
    for p, q, edge in zip(found.corners, np.roll(found.corners, -1, axis=0), found.outline, strict=True):
        middle = 0.5 * (p + q)
        n = np.floor(middle[0])
        height = middle[1] - (n**2 + (2 * n + 1) * (middle[0] - n))
        if edge and middle[0] > 1e-9:  # an edge lies on the polygon
            assert abs(height) < 1e-3
        elif not edge:
            assert height > 0.1 or middle[0] > 1


def test_work_is_capped_by_size_and_not_by_a_clock(rng):
    family = Matrices({"a": hermitian(rng, 40), "b": hermitian(rng, 40)})
    assert region(family, (0, 1), seconds=1e-6) is None
    few, many = region(family, (0, 1), seconds=0.05), region(family, (0, 1), seconds=10.0)
    assert few.directions < many.directions <= 132
    assert few.gap > many.gap
    again = region(family, (0, 1), seconds=0.05)
    assert np.array_equal(few.corners, again.corners)


def test_large_quadratic_families_get_few_directions(monkeypatch):
    """Levels of hopping matrices: the corners are reachable values, and the number of questions is capped."""
    n = 160
    hop = lambda k: np.eye(n, k=k) + np.eye(n, k=-k)
    family = Bilinears({"near": hop(1), "far": hop(2)})
    asked = []
    lowest = Bilinears.lowest
    monkeypatch.setattr(Bilinears, "lowest", lambda self, v, **how: asked.append(v) or lowest(self, v, **how))
    found = region(family, (0, 1), seconds=0.1)
    assert found.directions == len(asked) == 16
    theta = np.linspace(0, 2 * np.pi, 9)[:-1] + 0.1
    for u in np.stack([np.cos(theta), np.sin(theta)], axis=1):
        levels = np.linalg.eigvalsh(u[0] * hop(1) + u[1] * hop(2))
        low = levels[levels < 0].sum()
        inner = (found.corners @ u).min()
        extent = np.ptp(found.corners, axis=0)
        assert -1e-9 <= inner - low <= found.gap * np.linalg.norm(u * extent) * 1.001
    assert region(family, (0, 1), seconds=0.01) is None
    many = region(family, (0, 1), seconds=3.0)
    assert many.directions > 20 and many.gap < found.gap


@pytest.mark.parametrize("pair", [(0, 0), (0, 2), (-1, 0), (2, None)])
def test_pairs_that_do_not_exist(pair):
    with pytest.raises(ValueError, match="a pair is two different positions below 2"):
        region(Microstates({"a": [0.0, 1.0], "b": [1.0, 3.0]}), pair)


def test_every_reached_state_lies_inside(rng):
    """Outside check of the claim itself: states of any multipliers are in the region."""
    a, b = hermitian(rng, 6), hermitian(rng, 6)
    family = Matrices({"a": a, "b": b})
    corners = region(family, (0, 1)).corners
    for lam in rng.standard_normal((30, 2)):
        values = family.evaluate(lam).values
        sides = np.roll(corners, -1, axis=0) - corners
        height = sides[:, 0] * (values - corners)[:, 1] - sides[:, 1] * (values - corners)[:, 0]
        assert height.min() > -2e-3 * np.ptp(corners) ** 2
    assert maxent.solve(family, {"a": float(corners.mean(axis=0)[0]), "b": float(corners.mean(axis=0)[1])}).success

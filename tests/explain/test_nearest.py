"""Nearest reachable targets: closed forms, independent projections, bounds that meet, the verdict after the move."""

import cvxpy as cp
import numpy as np
import pytest
from scipy.optimize import nnls

import maxent
from maxent.core.blocks import Blocks
from maxent.core.contract import Family, Problem
from maxent.core.decide import decide
from maxent.diagnose.nearest import nearest
from maxent.families import Matrices, Microstates
from tests.corpus import pieces
from tests.explain import distances
from tests.oracles import semidefinite

#: Bounds and closed forms agree to this, counted in the largest charge in its unit.
CLOSE = 1e-12

CASES = [(kind, index) for kind in distances.KINDS for index in range(20)]


def solved(case):
    result = maxent.solve(case.family(), case.by_name(case.targets), explain=True, metric=case.by_name(case.unit))
    assert str(result.verdict) in ("infeasible", "inconsistent")
    return result


def size(case):
    levels = [np.abs(a).max() if a.ndim == 1 else np.abs(np.linalg.eigvalsh(a)).max() for a in case.charges]
    return float(np.max((np.array(levels) + np.abs(case.targets)) / case.unit))


@pytest.mark.parametrize(("kind", "index"), CASES)
def test_distance_known(kind, index):
    case = distances.make(kind, index)
    result = solved(case)
    near, yard = result.nearest, size(case)
    assert near.upper == near.distance
    assert 0 <= near.upper - near.lower <= CLOSE * yard
    assert near.distance == pytest.approx(case.distance, abs=CLOSE * yard)
    moves = np.array([near.moves[n] for n in result.names]) / case.unit
    assert np.linalg.norm(moves) == pytest.approx(near.distance, rel=1e-12, abs=1e-15 * yard)
    assert near.unit == case.by_name(case.unit)
    moved = maxent.solve(case.family(), near.targets)
    inside = ("boundary", "solved") if str(result.verdict) == "inconsistent" else ("boundary",)
    assert str(moved.verdict) in inside, moved.message
    if case.nearest is not None:
        off = (np.array([near.targets[n] for n in result.names]) - case.nearest) / case.unit
        assert np.linalg.norm(off) <= 1e-9 * yard


def hull(points, q):
    """Distance of q from the hull of the columns of `points` by non-negative least squares; good to 1e-8."""
    shifted = points - q[:, None]
    weight, _ = nnls(np.vstack([shifted, np.ones(points.shape[1])]), np.append(np.zeros(len(q)), 1.0))
    return np.linalg.norm(shifted @ (weight / weight.sum()))


@pytest.mark.parametrize("index", range(30))
def test_polytopes_against_least_squares(index):
    rng = np.random.default_rng(index)
    m, n = 2 + index % 6, 8 + 10 * (index % 5)
    points = rng.standard_normal((m, n)) if index % 2 else rng.integers(-3, 4, (m, n)).astype(float)
    q = points.mean(axis=1) + 3.5 * rng.standard_normal(m) / np.sqrt(m) + 2.5
    expected = hull(points, q)
    names = [f"c{j}" for j in range(m)]
    family, asked = Microstates(dict(zip(names, points, strict=True))), dict(zip(names, map(float, q), strict=True))
    result = maxent.solve(family, asked, explain=True, metric=dict.fromkeys(names, 1.0))
    if expected < 1e-6:
        assert result.nearest is None
        return
    assert result.nearest.upper == pytest.approx(expected, abs=1e-7)
    assert 0 <= result.nearest.upper - result.nearest.lower <= CLOSE * (np.abs(points).max() + np.abs(q).max())
    assert str(maxent.solve(family, result.nearest.targets).verdict) == "boundary"


@pytest.mark.parametrize("index", range(12))
def test_matrices_against_semidefinite_programming(index):
    rng = np.random.default_rng(index)
    d, m = 2 + index % 4, 2 + index % 3
    charges = np.array([pieces.hermitian(rng, d, is_complex=True) for _ in range(m)])
    q, unit = 2 * rng.standard_normal(m), 10.0 ** rng.uniform(-0.5, 0.5, m)
    state = cp.Variable((d, d), hermitian=True)
    off = cp.hstack([(cp.real(cp.trace(a @ state)) - x) / u for a, x, u in zip(charges, q, unit, strict=True)])
    task = cp.Problem(cp.Minimize(cp.norm(off)), [state >> 0, cp.real(cp.trace(state)) == 1])
    task.solve(solver=cp.CLARABEL, **semidefinite.OPTIONS)
    names = [f"c{j}" for j in range(m)]
    by_name = lambda x: dict(zip(names, map(float, x), strict=True))
    family = Matrices(dict(zip(names, charges, strict=True)))
    result = maxent.solve(family, by_name(q), explain=True, metric=by_name(unit))
    if task.value < 1e-5:
        assert result.nearest is None
        return
    assert result.nearest.upper == pytest.approx(task.value, abs=2e-6)
    assert result.nearest.upper - result.nearest.lower <= CLOSE * 10
    assert str(maxent.solve(family, result.nearest.targets).verdict) == "boundary"


@pytest.mark.parametrize("kind", distances.KINDS)
def test_twins_inside_and_on_the_edge_have_no_nearest_targets(kind):
    case = distances.make(kind, 1, decades=1.0)
    family, middle = case.family(), case.charges.mean(axis=1)
    if case.charges.ndim == 3:
        middle = np.trace(case.charges, axis1=1, axis2=2).real / case.charges.shape[1]
    for q, verdicts in ((middle, ("solved",)), (case.nearest, ("boundary", "solved"))):
        result = maxent.solve(family, case.by_name(q), explain=True)
        assert str(result.verdict) in verdicts
        assert result.nearest is None and result.conflict is None


def test_the_default_unit_is_the_spread():
    pips = np.arange(1, 7)
    family = Microstates({"pips": pips, "zero": np.zeros(6), "seven": np.full(6, 7.0)})
    result = maxent.solve(family, {"pips": 6.5, "zero": 1.0, "seven": 7.0}, explain=True)
    # a charge without spread: its norm, or 1 where it has none
    assert result.nearest.unit == pytest.approx({"pips": np.std(pips), "zero": 1.0, "seven": 7.0})
    assert result.nearest.targets == pytest.approx({"pips": 6.0, "zero": 0.0, "seven": 7.0})
    assert result.nearest.distance == pytest.approx(np.hypot(0.5 / np.std(pips), 1.0), rel=1e-14)


def test_a_metric_may_name_some_charges_only():
    spin = Matrices({"x": pieces.PAULI["x"], "z": pieces.PAULI["z"]})
    free = maxent.solve(spin, {"x": 1.2, "z": 1.2}, explain=True, metric={"x": 1e3}).nearest
    # moving x is almost free: z moves as little as it must
    assert free.unit == pytest.approx({"x": 1e3, "z": 1.0})
    assert free.targets["z"] == pytest.approx(1.0, abs=1e-5)
    assert free.upper - free.lower <= CLOSE * 2.5


class Ladder:
    """States 0, 1, 2, ... with charges n and n^2."""

    names = ("n", "square")
    start = (0.0, 1.0)

    def states(self, first, stop):
        n = np.arange(first, stop, dtype=float)
        return np.array([n, n**2]), None

    def log_tail(self, lam, first, moment):
        linear, square = lam
        if square < 0 or (square == 0 and linear <= 0):
            return np.inf
        step = linear + square * (2 * first + 1)
        ratio = -step + 2 * moment * np.log1p(1 / max(first, 1))
        if not ratio < 0:
            return np.inf
        return -(linear * first + square * first**2) + 2 * moment * np.log(max(first, 1)) - np.log(-np.expm1(ratio))

    def lowest(self, v, first):
        linear, square = v
        if square < 0 or (square == 0 and linear < 0):
            return -np.inf
        bottom = max(first, -linear / (2 * square)) if square > 0 else first
        return linear * bottom + square * bottom**2

    def domain(self):
        return None


def test_infinite_lists():
    family = Microstates.from_rule(Ladder())
    result = maxent.solve(family, {"n": 2.5, "square": 6.0}, explain=True, metric={"n": 1.0, "square": 1.0})
    # between the corners (2, 4) and (3, 9) the square is at least 5 n - 6
    assert result.conflict == ("n", "square")
    assert result.nearest.distance == pytest.approx(0.5 / np.sqrt(26), rel=1e-12)
    assert result.nearest.upper - result.nearest.lower <= CLOSE * 9
    low = maxent.solve(family, {"n": -1.0, "square": 4.0}, explain=True, metric={"n": 1.0, "square": 1.0})
    assert low.conflict == ("n",)
    # no state is nearest: weight at ever larger n gives n -> 0 at square = 4; the bounds stay open and say so
    assert low.nearest.lower == pytest.approx(1.0, rel=1e-12) and low.nearest.upper > low.nearest.lower
    assert "no reachable targets are nearer than 1;" in low.explanation[2]
    assert "at least 0" in low.explanation[0]


class Bare(Family):
    """A family that answers what it must and nothing more."""

    def __init__(self, blocks):
        self.blocks = blocks

    @property
    def scale(self):
        return self.blocks.scale

    def evaluate(self, lam, order=2):
        return self.blocks.evaluate(lam, order)

    def start(self):
        return self.blocks.start()

    def reference(self):
        return self.blocks.reference()

    def combine(self, matrix, offset):
        return Bare(self.blocks.combine(matrix, offset))

    def lowest(self, v, *, with_values=False):
        return self.blocks.lowest(v, with_values=with_values)


@pytest.mark.parametrize("kind", ["box", "simplex", "ball"])
def test_a_family_with_the_required_part_alone(kind):
    # no faces, no sharper directions: polytopes are still exact, and bounds stay bounds
    for index in range(6):
        case = distances.make(kind, index, decades=0.0)
        blocks = (
            Blocks(case.charges)
            if case.charges.ndim == 2
            else Blocks(np.zeros((len(case.targets), 0)), (case.charges,))
        )
        problem = Problem.pose(Bare(blocks), case.targets)
        move = nearest(problem, decide(problem), case.unit)
        assert move.lower - CLOSE * size(case) <= case.distance <= move.upper + CLOSE * size(case)
        assert move.upper - move.lower <= (1e-5 if kind == "ball" else CLOSE) * size(case)


@pytest.mark.parametrize(
    ("metric", "kind", "text"),
    [
        ({"y": 1.0}, ValueError, "metric 'y' is for no charge"),
        ({"x": 0.0}, ValueError, "metric 'x' is 0.0; it must be positive"),
        ({"x": -1.0}, ValueError, "must be positive"),
        ({"x": np.nan}, ValueError, "must be finite"),
        ({"x": "wide"}, TypeError, "must be a number"),
        ([1.0, 1.0], TypeError, "must be a dict"),
    ],
)
def test_a_bad_metric_is_refused_in_one_line(metric, kind, text):
    spin = Matrices({"x": pieces.PAULI["x"], "z": pieces.PAULI["z"]})
    with pytest.raises(kind, match=text) as bad:
        maxent.solve(spin, {"x": 1.2, "z": 1.2}, explain=True, metric=metric)
    assert "\n" not in str(bad.value)


def test_a_metric_without_explanations_is_refused():
    spin = Matrices({"x": pieces.PAULI["x"]})
    with pytest.raises(ValueError, match="needs explain=True"):
        maxent.solve(spin, {"x": 1.2}, metric={"x": 1.0})

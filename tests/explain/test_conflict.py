"""Conflicts: planted ones are found as planted, and every answer is irreducible by an independent judge."""

import numpy as np
import pytest

import maxent
from maxent import AtLeast, AtMost, Within
from maxent.families import Microstates
from tests.explain import conflicts
from tests.oracles import linear

CASES = [(kind, index) for kind in conflicts.KINDS for index in range(28)]


def positions(names):
    return frozenset(int(n[1:]) for n in names)


@pytest.mark.parametrize(("kind", "index"), CASES)
def test_the_planted_set_is_found(kind, index):
    clash = conflicts.make(kind, index)
    result = maxent.solve(clash.family, clash.named_targets, explain=True)
    expected = ("inconsistent",) if kind == "dependent" else ("infeasible",)
    assert str(result.verdict) in expected
    assert positions(result.conflict) in clash.planted
    assert result.conflict == tuple(n for n in result.names if n in result.conflict)


@pytest.mark.parametrize("kind", conflicts.KINDS)
def test_without_one_charge_of_each_conflict_the_rest_can_hold(kind):
    # the generators keep their promise: this would fail if a planted set were not irreducible
    for index in range(6):
        clash = conflicts.make(kind, index, decades=1.0)
        gone = {min(s) for s in clash.planted}
        keep = [j for j in range(len(clash.targets)) if j not in gone]
        if not keep:
            continue
        twin = conflicts.Clash(clash.charges[keep], clash.targets[keep], ())
        result = maxent.solve(twin.family, twin.named_targets, explain=True)
        assert str(result.verdict) in ("solved", "boundary")
        assert result.conflict is None and result.nearest is None


@pytest.mark.parametrize("index", range(40))
def test_irreducible_by_linear_programming(index):
    # random points and targets, conflicts of any kind: HiGHS judges the set and every set with one charge less
    rng = np.random.default_rng(index)
    m, n = 3 + index % 5, 12 + 4 * (index % 4)
    points = rng.standard_normal((m, n))
    q = points @ rng.dirichlet(np.ones(n)) + rng.uniform(0.4, 1.2) * rng.standard_normal(m)
    if linear.distance(points, q) < 1e-6:
        q = points.max(axis=1) * np.array([1.1, *np.full(m - 1, 0.5)])
    names = [f"c{j}" for j in range(m)]
    family = Microstates(dict(zip(names, points, strict=True)))
    result = maxent.solve(family, dict(zip(names, map(float, q), strict=True)), explain=True)
    found = sorted(positions(result.conflict))
    assert linear.distance(points[found], q[found]) > linear.RESOLUTION
    for j in found:
        left = [i for i in found if i != j]
        assert not left or linear.distance(points[left], q[left]) < linear.RESOLUTION


def test_relaxed_targets_in_conflict():
    levels = np.arange(4.0)
    family = Microstates({"energy": levels, "square": levels**2, "parity": levels % 2})
    asked = {"energy": Within(1.5, 0.1), "square": AtMost(1.0), "parity": AtLeast(0.2)}
    result = maxent.solve(family, asked, explain=True)
    # energy is at least 1.4, where the square is at least 2.2
    assert str(result.verdict) == "infeasible"
    assert result.conflict == ("energy", "square")
    assert result.nearest is None and "energy and square" in result.explanation[0]
    wide = asked | {"square": AtMost(2.3)}
    assert maxent.solve(family, wide, explain=True).conflict is None


def test_without_being_asked_nothing_is_explained():
    clash = conflicts.make("classical", 3)
    result = maxent.solve(clash.family, clash.named_targets)
    assert result.conflict is None and result.nearest is None and result.explanation == ()

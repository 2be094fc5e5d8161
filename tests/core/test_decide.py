"""Every stage of the decision answers somewhere, with the right verdict; no stage answers another one's question."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

import maxent
from maxent.core import decide as module
from maxent.core.contract import EPS, Problem, Verdict
from maxent.core.decide import decide
from maxent.families import Matrices, Microstates
from tests.conformance.toy import Toy
from tests.core.tail import Tail

DIE = np.arange(1.0, 7.0)[None, :]
PARABOLA = np.array([DIE[0], DIE[0] ** 2])
#: The long edge from (1, 0) to (0, 1) seen from a mean far off its middle.
TRIANGLE = np.array([[0, 0, 0, 0, 1, 0.0], [0, 0, 0, 0.1, 0, 1.0]])
SPIN = Matrices({"x": [[0, 1], [1, 0]], "z": [[1, 0], [0, -1]]})
#: A qutrit: two charges that do not commute, a smooth boundary.
QUTRIT = Matrices({"a": [[0, 1, 0], [1, 0, 2], [0, 2, 1]], "b": [[1, 0, 0.5], [0, -1, 0], [0.5, 0, 0.3]]})


def listed(rows) -> Microstates:
    return Microstates({f"q{j}": r for j, r in enumerate(np.asarray(rows, float))})


def asked(family, q, accuracy=0.0):
    """The outcome, and the name of the stage that answered at the top."""
    answered = []
    stages = []
    for stage in module.STAGES:

        def seen(problem, memo, stage=stage):
            answer = stage(problem, memo)
            if answer is not None and memo.depth == 0:
                answered.append(stage.__name__)
            return answer

        stages.append(seen)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(module, "STAGES", tuple(stages))
        outcome = decide(Problem.pose(family, np.asarray(q, float), accuracy))
    return outcome, (answered or ["no stage"])[0]


def points(p):
    return PARABOLA @ (np.asarray(p) / np.sum(p))


CASES = {
    "contradiction": (listed(np.array([DIE[0], 2 * DIE[0]])), [3.0, 6.1], 0.0, Verdict.INCONSISTENT),
    "nothing_free": (listed(np.array([[2.0, 2.0, 2.0]])), [2.0], 0.0, Verdict.SOLVED),
    "first_look": (listed(DIE), [7.0], 0.0, Verdict.INFEASIBLE),
    "descend": (listed(TRIANGLE), [0.5 + 1e-3, 0.5 + 1e-3], 0.0, Verdict.INFEASIBLE),
    "edge_of_domain": (Tail(), [0.7, 0.2], 0.0, Verdict.UNATTAINED),
    "existence": (listed(DIE), [4.5], 0.0, Verdict.SOLVED),
    "close_call": (listed(DIE), [1 + 1e-12], 0.0, Verdict.SOLVED),
    "nominal": (listed(DIE), [1.01], 0.02, Verdict.SOLVED),
}


@pytest.mark.parametrize("stage", list(CASES))
def test_each_stage_answers(stage):
    family, q, accuracy, verdict = CASES[stage]
    outcome, found = asked(family, q, accuracy)
    assert (found, outcome.verdict) == (stage, verdict)
    assert outcome.evidence == ("tested" if stage in ("edge_of_domain", "close_call", "nominal") else "proved")


def test_the_last_stages_answer_near_and_on_edges():
    """Boundaries and points within 1e-11 of them need `face_in_sight` or `interior`; both occur, and both are right."""
    seen = set()
    for depth in (0.0, 1e-15, 1e-11, 1e-10):
        for mean in (1.0 + depth, 6.0 - depth):
            outcome, stage = asked(listed(DIE), [mean])
            seen.add((stage, outcome.verdict))
            assert outcome.verdict is (Verdict.SOLVED if depth > 1e-13 else Verdict.BOUNDARY)
        q = points([depth, depth, 1, 1, depth, depth])
        outcome, stage = asked(listed(PARABOLA), q)
        seen.add((stage, outcome.verdict))
        assert outcome.verdict is (Verdict.SOLVED if depth > 1e-13 else Verdict.BOUNDARY)
        low = QUTRIT.lowest(np.array([0.6, 0.8]), with_values=True).values
        outcome, stage = asked(QUTRIT, (1 - depth) * low)
        seen.add((stage, outcome.verdict))
        assert outcome.verdict is not Verdict.INFEASIBLE
        assert outcome.verdict is Verdict.SOLVED if depth > 1e-13 else Verdict.BOUNDARY
    assert {s for s, v in seen if v is Verdict.BOUNDARY} & {"face_in_sight", "descend", "interior"}
    assert ("interior", Verdict.SOLVED) in seen or ("existence", Verdict.SOLVED) in seen


#: Families with an edge, the unit normal to the outside there, and a point on it.
EDGES = {
    "vertex": (listed(DIE), np.array([1.0]), np.array([6.0])),
    "side": (listed(PARABOLA), np.array([-7.0, 1.0]) / np.sqrt(50), points([2, 0, 0, 0, 0, 1])),
    "circle": (SPIN, np.array([0.6, 0.8]), np.array([0.6, 0.8])),
}


@pytest.mark.parametrize("edge", list(EDGES))
@pytest.mark.parametrize("distance", [1e-1, 1e-2, 1e-4, 1e-6, 1e-8, 1e-10, 1e-12])
def test_a_stated_accuracy_decides_near_the_edge(edge, distance):
    """Outside within it: boundary, with a state within it. Inside: boundary when very near, else solved and tested."""
    family, normal, point = EDGES[edge]
    for times in (1.5, 10.0):
        accuracy = times * distance * np.abs(normal)
        out, _ = asked(family, point + distance * normal, accuracy)
        assert out.verdict is Verdict.BOUNDARY
        assert np.all(np.abs(out.values) <= accuracy + 1e-11 * out.problem.size)
        into, _ = asked(family, point - distance * normal, accuracy)
        deep = distance > 1e-6 * float(np.abs(normal) @ into.problem.size)
        assert (into.verdict, into.evidence) == ((Verdict.SOLVED, "tested") if deep else (Verdict.BOUNDARY, "proved"))
    too_fine, _ = asked(family, point + distance * normal, 0.5 * distance * np.abs(normal))
    assert too_fine.verdict is Verdict.INFEASIBLE
    apart, _ = asked(family, point - distance * normal, 0.01 * distance * np.abs(normal))
    assert apart.verdict is Verdict.SOLVED


def test_a_coarse_accuracy_of_one_charge_hides_nothing_of_another():
    """A mean of 0.9 of a die is out of reach whatever the other charge may be."""
    outcome, _ = asked(listed([DIE[0], DIE[0] % 2]), [0.9, 0.5], [0.0, 10.0])
    assert outcome.verdict is Verdict.INFEASIBLE
    np.testing.assert_allclose([outcome.margin, abs(outcome.direction[0])], [0.1, 1.0], rtol=1e-9)
    edge, _ = asked(listed([DIE[0], DIE[0] % 2]), [1.0, 0.5], [0.0, 0.6])
    assert edge.verdict is Verdict.BOUNDARY
    np.testing.assert_allclose(edge.values, [0.0, 0.5], atol=1e-12)


@pytest.mark.parametrize("stage", ["face_in_sight", "interior"])
def test_late_stages_can_decide_on_their_own(stage):
    """With the early looks taken away, the late ones still find the face."""
    keep = {"face_in_sight": module.face_in_sight, "interior": module.interior}[stage]
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(module, "STAGES", (module.contradiction, module.nothing_free, module.first_look, keep))
        edge = decide(Problem.pose(SPIN, np.array([0.6, 0.8])))
        out = decide(Problem.pose(SPIN, np.array([0.6, 0.8]) * (1 + 1e-9)))
        if stage == "interior":
            inside = decide(Problem.pose(SPIN, np.array([0.6, 0.8]) * (1 - 1e-9)))
            assert inside.verdict is Verdict.SOLVED and inside.evidence == "proved"
    assert edge.verdict in (Verdict.BOUNDARY, Verdict.UNFINISHED)
    assert out.verdict in (Verdict.INFEASIBLE, Verdict.UNFINISHED)
    if stage == "interior":
        assert edge.verdict is Verdict.BOUNDARY and out.verdict is Verdict.INFEASIBLE


def test_without_stages_nothing_is_made_up():
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(module, "STAGES", (module.contradiction, module.nothing_free, module.first_look))
        outcome = decide(Problem.pose(listed(DIE), np.array([3.0])))
    assert outcome.verdict is Verdict.UNFINISHED
    assert outcome.reason == "no stage could prove or refute that the targets can be reached"


def test_a_close_call_needs_faces_that_were_seen():
    """On an edge, a family without faces shows only directions far off the exposing one: nothing is solved."""
    family = Toy(np.array([[0, 0, 0, 0, 2, 2, 2, 3], [0, 4, 0, 4, 0, 4, 1, 2.0]]), ("a", "b"))
    for share in (0.1, 0.35, 0.8):
        for driver in ("host", "jax"):
            outcome = decide(Problem.pose(family, np.array([0.0, 4 * share])), driver=driver)
            assert outcome.verdict is Verdict.UNFINISHED


def test_edge_of_the_domain_in_closed_form():
    """Inside: solved with lam_x = (1/(2<x>) - 1)^2; beyond 1/2 the rest is the excess; below 0 nothing exists."""
    inside, stage = asked(Tail(), [0.3, 0.2])
    assert (inside.verdict, stage) == (Verdict.SOLVED, "existence") and inside.evidence == "tested"
    lam = inside.whitening.transform.T @ inside.at.lam
    np.testing.assert_allclose(lam, [(1 / 0.6 - 1) ** 2, -np.arctanh(0.2)], rtol=1e-10)
    beyond, _ = asked(Tail(), [0.7, 0.2])
    np.testing.assert_allclose(beyond.excess, [0.2, 0.0], atol=1e-12)
    assert beyond.verdict is Verdict.UNATTAINED and beyond.evidence == "tested"
    outside, _ = asked(Tail(), [-0.1, 0.2])
    assert outside.verdict is Verdict.INFEASIBLE
    assert 0 < outside.margin <= 0.1 * (1 + 1e-12)
    coin, _ = asked(Tail(), [0.3, 1.2])
    assert coin.verdict is Verdict.INFEASIBLE
    assert coin.margin <= 0.2 * (1 + 1e-12)


@pytest.mark.parametrize("x", [0.5 - 1e-3, 0.5 - 1e-5, 0.5 + 1e-5, 0.5 + 1e-3])
def test_either_side_of_the_edge(x):
    outcome, _ = asked(Tail(), [x, 0.1])
    expected = Verdict.SOLVED if x < 0.5 else Verdict.UNATTAINED
    assert outcome.verdict in (expected, Verdict.UNFINISHED)
    if abs(x - 0.5) >= 1e-3:
        assert outcome.verdict is expected


# ---------------------------------------------------------------- the grey zone of margins


@pytest.mark.parametrize("margin", [1e-13, 3e-13, 1e-12, 1e-10])
@pytest.mark.parametrize("family", ["die", "spin", "qutrit"])
def test_the_sign_of_margins_down_to_1e_13(family, margin):
    """|s| >= 1e-13: outside is never solved, inside is never infeasible; on the right side, or honestly on the edge."""
    if family == "die":
        f, v, low = listed(DIE), np.array([1.0]), np.array([1.0])
    else:
        f = SPIN if family == "spin" else QUTRIT
        v = np.array([0.6, 0.8])
        low = f.lowest(v, with_values=True).values
    scale = float(f.scale.max())
    inward = v * margin * scale
    outside = decide(Problem.pose(f, low - inward))
    assert outside.verdict in (Verdict.INFEASIBLE, Verdict.BOUNDARY)
    assert -3e-15 * scale <= outside.margin <= (margin + 3e-15) * scale
    inside = decide(Problem.pose(f, low + inward))
    assert inside.verdict in (Verdict.SOLVED, Verdict.BOUNDARY)
    if margin >= 1e-12:
        assert outside.verdict is Verdict.INFEASIBLE and inside.verdict is Verdict.SOLVED


# ---------------------------------------------------------------- stated accuracy


def verdict(family, q, accuracy):
    return decide(Problem.pose(family, np.asarray(q, float), np.asarray(accuracy, float))).verdict


@pytest.mark.parametrize("margin", [1e-2, 1e-5, 1e-8])
def test_accuracy_decides_between_outside_and_edge(margin):
    """A target outside by less than its stated accuracy is on the boundary; by more, unreachable."""
    for family, at, v in (
        (listed(DIE), np.array([1.0]), np.ones(1)),
        (SPIN, np.array([0.6, 0.8]), -np.array([0.6, 0.8])),
    ):
        q = at - margin * v
        reach = np.abs(v).sum()  # tolerance of a unit direction is |v|.accuracy
        assert verdict(family, q, 0.0) is Verdict.INFEASIBLE
        assert verdict(family, q, np.full(len(q), 0.5 * margin / reach)) is Verdict.INFEASIBLE
        loose = verdict(family, q, np.full(len(q), 2 * margin))
        assert loose in (Verdict.BOUNDARY, Verdict.UNFINISHED)
        if len(q) == 1:
            assert loose is Verdict.BOUNDARY


def test_accuracy_of_one_charge_counts_only_in_directions_that_use_it():
    rows = np.array([DIE[0], np.array([0.0, 1, 0, 1, 0, 1])])
    q = np.array([0.9, 0.5])
    assert verdict(listed(rows), q, [0.0, 0.3]) is Verdict.INFEASIBLE
    assert verdict(listed(rows), q, [0.0, 10.0]) in (Verdict.INFEASIBLE, Verdict.UNFINISHED)
    # (1.2, 0.9) lies outside along a - b, a direction that uses both charges
    assert verdict(listed(rows), [1.2, 0.9], [0.0, 0.1]) is Verdict.INFEASIBLE
    assert verdict(listed(rows), [1.2, 0.9], [0.0, 0.8]) is not Verdict.INFEASIBLE


def test_accuracy_inside_changes_nothing():
    """Well inside, stated accuracy leaves verdict and multipliers as they are."""
    plain = decide(Problem.pose(listed(DIE), np.array([3.0])))
    rough = decide(Problem.pose(listed(DIE), np.array([3.0]), 0.1))
    assert plain.verdict is rough.verdict is Verdict.SOLVED
    np.testing.assert_allclose(plain.at.lam, rough.at.lam, rtol=1e-14)


def test_accuracy_forgives_small_contradictions():
    rows = np.array([DIE[0], 2 * DIE[0]])
    assert verdict(listed(rows), [3.0, 6.01], 0.0) is Verdict.INCONSISTENT
    assert verdict(listed(rows), [3.0, 6.01], [0.02, 0.02]) is Verdict.SOLVED
    assert verdict(listed(rows), [3.0, 6.5], [0.02, 0.02]) is Verdict.INCONSISTENT


# ---------------------------------------------------------------- problems and their noise


def test_noise_is_in_the_units_of_each_charge():
    p = Problem.pose(listed(np.array([1e8 * DIE[0], 1e-8 * DIE[0]])), np.array([3e8, 3e-8]), 1e-9)
    np.testing.assert_allclose(p.noise, EPS * np.array([9e8, 9e-8]))
    np.testing.assert_allclose(p.size, [9e8, 9e-8])
    np.testing.assert_allclose(p.unit, 16 * p.noise + 1e-9)


def test_verify_is_the_lowest_value_of_the_shifted_charges():
    p = Problem.pose(listed(PARABOLA), np.array([0.5, 2.0]))
    v = np.array([0.6, -0.8])
    margin, tolerance = p.verify(v)
    heights = v @ (PARABOLA - np.array([[0.5], [2.0]]))
    assert margin == pytest.approx(heights.min())
    assert tolerance == pytest.approx(np.abs(v) @ p.unit + 16 * EPS * np.abs(heights).max(), rel=1e-12)
    assert 0 < tolerance < 1e-11


def test_a_charge_that_is_zero_has_size_one():
    p = Problem.pose(listed(np.zeros((1, 3))), np.zeros(1))
    assert p.noise[0] == 0 and p.size[0] == 1


@pytest.mark.parametrize("target", [1e7, 1e15, -1e16, 1e300])
def test_targets_that_would_swallow_the_charge(target):
    """Counted from 1e16 the charge has no digit left; it is still infeasible, not a contradiction."""
    result = maxent.solve(Microstates({"n": [0.0, 1, 2, 3]}), {"n": target})
    assert result.verdict is maxent.Verdict.INFEASIBLE
    assert result.certificate.margin == pytest.approx(max(target - 3, -target), rel=1e-9)
    constant = maxent.solve(Microstates({"n": [2.0, 2, 2]}), {"n": target})
    assert constant.verdict is maxent.Verdict.INCONSISTENT


@pytest.mark.parametrize("shift", [-800.0, -1e4, 800.0])
def test_a_common_log_weight_changes_nothing_but_the_partition_function(shift):
    """A prior over 2^1200 configurations, normalised, has log weights of -832."""
    charges = {"n": [0.0, 1, 2]}
    for target in (0.7, 1.0, 2.0):
        plain = maxent.solve(Microstates(charges), {"n": target})
        moved = maxent.solve(Microstates(charges, log_weights=[shift] * 3), {"n": target})
        assert moved.verdict is plain.verdict
        assert moved.multipliers == pytest.approx(plain.multipliers, abs=1e-11, nan_ok=True)
        if plain.success:
            assert moved.log_partition == pytest.approx(plain.log_partition + shift, rel=1e-12)


@pytest.mark.parametrize(("missed", "verdict"), [(1e-10, Verdict.SOLVED), (1e-7, Verdict.UNFINISHED)])
def test_a_state_that_misses_its_targets_solves_nothing(missed, verdict):
    """A proof of existence is one thing, the state at hand another: its values must be the targets."""

    def astray(evaluate, at, *, anyway=False):
        return at._replace(evaluation=replace(at.evaluation, values=at.evaluation.values + 10 * missed))

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(module, "settle", astray)
        outcome, _ = asked(listed(DIE), [4.5])
        loose, _ = asked(listed(DIE), [4.5], 1e-3)
    assert outcome.verdict is verdict
    assert ("misses them by" in outcome.reason) == (verdict is Verdict.UNFINISHED)
    assert loose.verdict is Verdict.SOLVED

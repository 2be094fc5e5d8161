"""What each verdict says: one sentence, with numbers that are true, in the words of the house."""

from __future__ import annotations

import re

import numpy as np
import pytest

import maxent
from maxent.diagnose.wording import combination_text, message
from maxent.families import Matrices, Microstates

DIE = Microstates({"pips": np.arange(1, 7)})
NUMBER = r"-?\d+(?:\.\d+)?(?:e[-+]?\d+)?"


def says(result, pattern):
    found = re.fullmatch(pattern, result.message)
    assert found, result.message
    return [float(x) for x in found.groups()]


def test_solved():
    result = maxent.solve(DIE, {"pips": 4.5})
    (residual,) = says(result, rf"Reached: 1 independent multiplier, relative residual ({NUMBER})\.")
    assert residual < 1e-14


def test_solved_with_redundancy():
    two = Microstates({"pips": np.arange(1, 7), "twice": 2 * np.arange(1, 7)})
    result = maxent.solve(two, {"pips": 4.5, "twice": 9.0})
    says(
        result,
        rf"Reached: 1 independent multiplier, relative residual {NUMBER}; 1 redundant combination\(s\), "
        rf"multipliers of least norm\.",
    )


def test_solved_but_loose():
    result = maxent.solve(DIE, {"pips": 4.5}, accuracy=1e-3)
    assert result.message.endswith(
        "Fewer than six digits of the multipliers are fixed by the inputs; see their errors."
    )


def test_solved_but_only_the_state_carries_it():
    x = np.linspace(0, 1, 30)
    rows = {"a": x, "b": x + 1e-9 * np.sin(7 * x)}
    p = np.exp(-3 * x)
    p /= p.sum()
    result = maxent.solve(Microstates(rows), {n: float(r @ p) + (1e-11 if n == "b" else 0) for n, r in rows.items()})
    assert result.verdict is maxent.Verdict.SOLVED
    if result.replay > 1e-10:
        assert "the listed multipliers alone reproduce it to" in result.message
        assert "predict from the state, not from the multipliers" in result.message


def test_infeasible():
    result = maxent.solve(DIE, {"pips": 6.2})
    below, resolvable = says(
        result,
        rf"No state has these values: -pips is asked to lie ({NUMBER}) below its lowest possible value "
        rf"\(resolvable ({NUMBER})\)\.",
    )
    assert below == pytest.approx(0.2) and resolvable == pytest.approx(result.certificate.tolerance, rel=0.5)


def test_infeasible_by_very_little():
    result = maxent.solve(DIE, {"pips": 6 + 1e-11})
    assert result.verdict is maxent.Verdict.INFEASIBLE
    assert result.message.endswith(
        "If the targets are accurate to no more than that, treat this as the boundary: state their accuracy."
    )


def test_boundary():
    result = maxent.solve(DIE, {"pips": 6.0})
    margin, resolvable, dimension = says(
        result,
        rf"On the boundary of what any state can reach, to the accuracy of the inputs \(margin ({NUMBER}), resolvable "
        rf"({NUMBER})\): no finite multipliers; limit state on a (\d+)-dimensional face, exposing "
        r"combination -pips\.",
    )
    assert abs(margin) <= resolvable and dimension == 1


def test_boundary_after_several_faces():
    """Two points of a square's edge: first the edge, then its corner is no help, depth counts faces."""
    family = Microstates({"x": [0, 0, 1, 1, 2], "y": [0, 0, 0, 1, 3], "z": [0, 1, 5, 7, 1]})
    result = maxent.solve(family, {"x": 0.0, "y": 0.0, "z": 0.0})
    assert result.verdict is maxent.Verdict.BOUNDARY
    depth = result.face.depth
    assert len(result.face.directions) == len(result.face.gaps) == depth
    assert (f"after {depth} faces" in result.message) == (depth > 1)


def test_inconsistent():
    two = Microstates({"pips": np.arange(1, 7), "twice": 2 * np.arange(1, 7)})
    result = maxent.solve(two, {"pips": 4.5, "twice": 9.1})
    missed, _ = says(
        result,
        rf"The targets contradict one another: .*pips.*twice is the same number in every state, and the targets "
        rf"miss it by ({NUMBER}) \(resolvable ({NUMBER})\); drop or correct one of these targets\.",
    )
    assert missed == pytest.approx(0.1 / np.sqrt(5), rel=1e-2)


def test_unattained():
    from maxent.core.contract import Problem, Verdict
    from maxent.core.decide import decide
    from tests.core.tail import Tail

    outcome = decide(Problem.pose(Tail(), np.array([0.7, 0.2])))
    assert outcome.verdict is Verdict.UNATTAINED
    text = message(("x", "y"), outcome, None, np.nan)
    assert text == "States with these values exist, but none has the largest entropy; what stays unmatched: x 0.2."


def test_unfinished_names_its_reason_and_tells_the_truth():
    """A toy without faces, exactly on its edge: the residual is at rounding, and the sentence says so."""
    from tests.conformance.toy import Toy

    result = maxent.solve(Toy(np.arange(1.0, 7)[None], ("pips",)), {"pips": 6.0})
    assert result.verdict is maxent.Verdict.UNFINISHED
    residual, steps = says(result, rf"[A-Z].* \(relative residual ({NUMBER}) after (\d+) steps\)\.")
    assert steps == result.iterations


def test_unfinished_does_not_claim_what_is_not_so():
    """Accuracy that swallows one charge hides the separation; a residual of 1e-1 is not 'reproduced to rounding'."""
    family = Microstates({"a": np.arange(1, 7), "b": [0, 1, 0, 1, 0, 1]})
    result = maxent.solve(family, {"a": 0.9, "b": 0.5}, accuracy={"b": 10.0})
    assert result.verdict is not maxent.Verdict.SOLVED
    off = max(abs(x) for x in result.outcome.values) if result.outcome.values is not None else 1.0
    if off > 1e-3:
        assert "reproduced to rounding" not in result.message


def test_every_message_is_one_line():
    spin = Matrices({"x": [[0, 1], [1, 0]], "z": [[1, 0], [0, -1]]})
    for q in ((0.3, 0.4), (0.6, 0.8), (0.9, 0.9)):
        text = maxent.solve(spin, {"x": q[0], "z": q[1]}).message
        assert "\n" not in text and text[0].isupper() and text.endswith(".")


@pytest.mark.parametrize(
    ("v", "text"),
    [
        ([1.0, 0.0, 0.0], "a"),
        ([0.6, -0.8, 0.0], "0.6 a - 0.8 b"),
        ([-0.6, 0.0, 0.8], "-0.6 a + 0.8 c"),
        ([1.0, 1e-13, -1.0], "a - c"),
        ([0.123456789, 0.0, 0.0], "0.1235 a"),
        ([0.0, 0.0, 0.0], "0"),
    ],
)
def test_combinations_as_text(v, text):
    assert combination_text(("a", "b", "c"), np.array(v)) == text


def test_long_combinations_are_cut():
    names = [f"c{k}" for k in range(600)]
    v = np.linspace(1.0, 2.0, 600)
    text = combination_text(names, v)
    assert text.endswith("c599 + 588 smaller parts") and len(text) < 300
    assert combination_text(["a", "b"], np.array([1.0, -0.5])) == "a - 0.5 b"

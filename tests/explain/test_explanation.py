"""Sentences that explain a verdict: the right names, numbers that stand in the result, and none where none belong."""

import re
from dataclasses import replace

import numpy as np
import pytest
from scipy.special import gamma, gammaincc

import maxent
from maxent import AtMost, Within
from maxent.diagnose.explanation import Findings, explain
from maxent.diagnose.multipliers import Multipliers
from maxent.families import Matrices, Microstates
from tests.corpus import pieces

LEVELS = np.arange(4.0)
LADDER = Microstates({"energy": LEVELS, "square": LEVELS**2})


def explained(family, targets, **options):
    result = maxent.solve(family, targets, explain=True, **options)
    assert all(re.fullmatch(r"[A-Z].*[.]", s, re.S) and "\n" not in s for s in result.explanation)
    assert not re.search(r"\bnan\b|None", " ".join(result.explanation))
    return result


def test_infeasible_names_the_conflict_and_the_nearest_targets():
    levels = np.repeat(LEVELS, 2)
    family = Microstates({"energy": levels, "square": levels**2, "coin": np.tile([0.0, 1.0], 4)})
    result = explained(family, {"energy": 1.5, "square": 2.1, "coin": 0.5}, metric=dict.fromkeys(family.names, 1.0))
    first, second, third = result.explanation
    assert first == (
        "The targets of energy and square cannot hold together; without any one of them the others can. "
        "coin takes no part in this conflict."
    )
    # the plane through the states 1 and 2: square >= 3 energy - 2, missed by 0.4 along (-3, 1)
    assert result.nearest.distance == pytest.approx(0.4 / np.sqrt(10), rel=1e-12)
    assert "energy 1.38 (moved by -0.12) and square 2.14 (moved by 0.04)" in second and "other targets stay" in second
    assert "0.126491" in third and "1 for coin" in third


def test_a_single_target_out_of_range_is_told_the_range():
    result = explained(LADDER, {"energy": 3.5, "square": 9.0})
    assert result.conflict == ("energy",)
    assert result.explanation[0] == (
        "The target of energy is out of reach on its own: it lies between 0 and 3 in every state, and 3.5 is asked."
    )


def test_a_number_asked_for_another_value():
    family = Microstates({"energy": LEVELS, "count": np.full(4, 2.0)})
    result = explained(family, {"energy": 1.0, "count": 3.0})
    assert result.explanation[0].endswith("it is 2 in every state, and 3 is asked.")
    assert "count 2 (moved by -1). The other targets stay." in result.explanation[1]


def test_inconsistent_names_what_contradicts():
    family = Microstates({"energy": LEVELS, "twice": 2 * LEVELS, "square": LEVELS**2})
    result = explained(family, {"energy": 1.0, "twice": 3.0, "square": 2.0})
    assert result.conflict == ("energy", "twice")
    assert "square takes no part" in result.explanation[0]


def test_boundary_tells_the_face():
    one = explained(LADDER, {"energy": 1.5, "square": 2.5})
    assert one.explanation[0] == (
        "Only states of lowest -energy + 0.333 square can have these values: a face of 2 states, with a gap of 1 of "
        "the whole range to the next level."
    )
    assert one.explanation[1] == (
        "The limit state is fixed by one combination of the targets; the others hold in every state of the face."
    )
    assert "grow without end along t (-energy + 0.333 square)" in one.explanation[2]


def test_a_chain_of_two_faces_is_told_step_by_step():
    # disc of values (x, z) of one qubit and a further state at (1.5, -1): the tangent at the bottom touches both
    charges = {}
    for name, letter, extra in (("x", "x", 1.5), ("z", "z", -1.0)):
        a = np.zeros((3, 3))
        a[:2, :2], a[2, 2] = pieces.PAULI[letter], extra
        charges[name] = a
    result = explained(Matrices(charges), {"x": 0.0, "z": -1.0})
    assert result.face.depth == 2
    assert result.explanation[0].startswith("Only states of lowest z can have these values: a face of 2 states")
    assert result.explanation[1].startswith("Among them, only those of lowest x can have these values: a single state")


def test_solved_well_conditioned():
    result = explained(LADDER, {"energy": 1.2, "square": 2.4})
    digits = {n: int(np.floor(d)) for n, d in result.digits.items()}
    for name, count in digits.items():
        assert f"{name} {count}" in " ".join(result.explanation)
    assert "give the targets back" in result.explanation[-1]


def test_solved_with_two_charges_nearly_the_same():
    a = np.linspace(0, 1, 50)
    x = np.sin(7 * a)
    p = np.exp(-0.7 * a - 1.3 * x)
    p /= p.sum()
    b = a + 1e-3 * x
    result = explained(Microstates({"a": a, "b": b}), {"a": p @ a, "b": p @ b})
    text = result.explanation[0]
    assert "the targets fix a and b together" in text and "but a - b is open by" in text
    # the multiplier of the difference, in standard deviations: that of the eigenvector of the covariance
    deviation = np.sqrt(np.diag(result.covariance))
    known = (np.array([1, -1]) / np.sqrt(2) * deviation) @ np.array([result.multipliers[n] for n in "ab"])
    stated = float(re.search(r"where its multiplier is (-?[\d.e+]+) ", text)[1])
    assert stated == pytest.approx(known, rel=1e-3)
    assert f"condition number {result.conditioning.condition_number:.2g}" in text


def test_loose_tells_which_combination_is_missing():
    a = np.linspace(0, 1, 50)
    x = np.sin(7 * a)
    p = np.exp(-0.7 * a - 1.3 * x)
    p /= p.sum()
    b = a + 1e-10 * x
    result = explained(Microstates({"a": a, "b": b}), {"a": p @ a, "b": p @ b})
    assert result.loose
    missing = next(s for s in result.explanation if "missing" in s)
    assert "a - b" in missing and "charge of its own" in missing
    die = explained(Microstates({"pips": np.arange(1, 7)}), {"pips": 6 - 1e-9})
    assert die.loose and "So close to a boundary" in " ".join(die.explanation)


def test_relaxed_targets_that_are_not_needed():
    result = explained(LADDER, {"energy": Within(1.5, 0.2), "square": AtMost(8.0)})
    assert result.explanation == (
        "The state is the same without the targets of energy and square: what they leave open is kept anyway.",
    )


class Stretched:
    """States 0, 1, 2, ... of weight exp(-2 sqrt n): no multiplier gives a mean above the one at 0."""

    names = ("number",)
    start = (0.5,)

    def states(self, first, stop):
        n = np.arange(first, stop)
        return n[None].astype(float), -2 * np.sqrt(n)

    def log_tail(self, lam, first, moment):
        # int_{N-1}^inf x^k exp(-2 sqrt x) dx, an incomplete gamma function
        if lam[0] < 0 or first < 64:
            return np.inf
        p = 2 * moment + 2
        upper = max(gammaincc(p, 2 * np.sqrt(first - 1.0)), 1e-300)
        return float(np.log(2 * gamma(p) / 2.0**p) + np.log(upper)) - lam[0] * first

    def lowest(self, v, first):
        return v[0] * first if v[0] >= 0 else -np.inf

    def domain(self):
        return np.array([[1.0]])


def test_unattained_tells_what_stays_unmatched():
    n = np.arange(4000)
    weight = np.exp(-2 * np.sqrt(n))
    edge = (n * weight).sum() / weight.sum()
    result = explained(Microstates.from_rule(Stretched()), {"number": edge + 2})
    assert str(result.verdict) == "unattained"
    assert "the rest, 2 number, can be carried" in result.explanation[0]


def test_unfinished_claims_nothing():
    result = explained(LADDER, {"energy": 1.2, "square": 2.4})
    in_order = lambda x: np.array([x[n] for n in result.names])
    multipliers = Multipliers(in_order(result.multipliers), in_order(result.multiplier_errors), False)
    outcome = replace(result.outcome, verdict=maxent.Verdict.UNFINISHED)
    found = Findings(result.names, in_order(result.targets), outcome, multipliers, result.replay, None, (), None)
    (sentence,) = explain(found)
    assert sentence.startswith("Nothing is claimed about these targets.")


def test_no_charges_no_words():
    result = explained(Matrices({}, dims=(2, 2)), {})
    assert str(result.verdict) == "solved" and result.explanation == ()


def test_a_target_in_other_units_is_named_and_nothing_else_is_claimed():
    """Counted from 1e14 a spin has no digits left: no nearest targets, no statement about other charges."""
    spin = Matrices({"x": np.array([[0.0, 1], [1, 0]]), "z": np.diag([1.0, -1])})
    result = maxent.solve(spin, {"x": 1e14, "z": 0.5}, explain=True)
    assert result.conflict == ("x",)
    assert result.nearest is None
    assert result.explanation == ("The target of x is 1e+14, where the charge has the size 1: check its units.",)

"""Far limits, extreme widths, values that no state has: answered rightly, refused in one line, or left unfinished."""

import re

import numpy as np
import pytest

import maxent
from maxent import AtLeast, AtMost, Measured, Verdict, Within
from maxent.families import Matrices, Microstates
from tests.corpus import pieces

FAR = [20.0, 1e3, 1e10, 1e14, 1e16, 1e100]


@pytest.fixture
def die():
    return Microstates({"pips": np.arange(1, 7), "even": [0, 1, 0, 1, 0, 1]})


def idle(x):
    """Targets that forbid nothing."""
    return [AtMost(x), AtLeast(-x), Within(3.0, x), Within(x, 2 * x), Within(-x, 2 * x)]


@pytest.mark.parametrize("x", FAR)
def test_a_far_limit_changes_nothing(die, x):
    """Weights .2 on even and .4/3 on odd pips: mean .2 * 12 + .4/3 * 9 = 3.6, multiplier log(.4/.6)."""
    for far in idle(x):
        targets = {"pips": far, "even": 0.6}
        result = maxent.solve(die, targets)
        assert result.success
        assert result.redundancies == ()
        assert result.values["pips"] == pytest.approx(3.6, rel=1e-13)
        assert result.residuals["even"] == pytest.approx(0.0, abs=1e-14)
        assert result.targets == {"pips": far.value, "even": 0.6}
        assert result.residuals["pips"] == pytest.approx(3.6 - far.value, rel=1e-14)
        assert result.multipliers["pips"] == 0.0
        assert result.multipliers["even"] == pytest.approx(np.log(0.4 / 0.6), rel=1e-13)
        assert result.log_partition == pytest.approx(np.log(3 + 3 * 0.6 / 0.4), rel=1e-13)
        assert result.slack == {"pips": "inside", "even": "exact"}
        assert result.not_needed == ("pips",)


@pytest.mark.parametrize("x", FAR)
def test_a_far_limit_hides_no_verdict(die, x):
    """Boundary, infeasible and redundant twins, with certificates about what was asked."""
    for far in idle(x):
        for asked, verdict in ((1.0, Verdict.BOUNDARY), (1.2, Verdict.INFEASIBLE)):
            targets = {"pips": far, "even": asked}
            result = maxent.solve(die, targets, explain=True)
            assert result.verdict is verdict
            assert result.conflict == (("even",) if verdict is Verdict.INFEASIBLE else None)
            assert result.certificate.direction == pytest.approx({"pips": 0.0, "even": -1.0}, abs=1e-15)
            assert result.certificate.lowest == pytest.approx(-1.0, abs=1e-14)
            assert result.certificate.margin == pytest.approx(asked - 1.0, abs=1e-14)
            check = result.certificate.verify(die, targets)
            assert check
            assert check.margin == pytest.approx(asked - 1.0, abs=1e-14)
        twice = Microstates({"pips": np.arange(1, 7), "eyes": 2 * np.arange(1, 7)})
        result = maxent.solve(twice, {"pips": far, "eyes": 9.0})
        assert result.success
        assert result.values == pytest.approx({"pips": 4.5, "eyes": 9.0}, rel=1e-13)
        assert len(result.redundancies) == 1
        assert result.redundancies[0].constant == pytest.approx(0.0, abs=1e-12)


@pytest.mark.parametrize("x", FAR)
def test_a_far_limit_out_of_reach(die, x):
    for far, margin in ((AtLeast(x), x - 6), (AtMost(-x), x + 1), (Within(x, x / 2), x / 2 - 6)):
        targets = {"pips": far, "even": 0.6}
        result = maxent.solve(die, targets, explain=True)
        assert result.verdict is Verdict.INFEASIBLE
        assert result.conflict == ("pips",)
        assert "in every state" not in result.explanation[0] or "between 1 and 6" in result.explanation[0]
        assert result.certificate.verify(die, targets)
        along = abs(result.certificate.direction["pips"])
        assert result.certificate.margin == pytest.approx(margin * along, rel=1e-2 if x > 100 else 0.5)
    assert maxent.solve(die, {"pips": x, "even": AtMost(0.6)}).verdict is Verdict.INFEASIBLE


def test_a_far_limit_on_a_number(die):
    """Charges without any spread: kept by the limit, or contradicted; also the charge that is zero."""
    for number in (0.0, 2.0):
        family = Microstates({"fixed": np.full(3, number), "level": [1.0, 2, 3]})
        for far in (AtMost(1e10), AtMost(number + 5), AtLeast(-1e10), Within(0.0, 1e10)):
            result = maxent.solve(family, {"fixed": far, "level": 1.5})
            assert result.success
            assert result.values == pytest.approx({"fixed": number, "level": 1.5}, abs=1e-14)
        assert maxent.solve(family, {"fixed": AtLeast(1e10), "level": 1.5}).verdict is Verdict.INCONSISTENT


@pytest.mark.parametrize("x", FAR)
def test_far_limits_on_charges_that_do_not_commute(x):
    rng = np.random.default_rng(5)
    stack = np.array([pieces.hermitian(rng, 5, is_complex=True) for _ in range(3)])
    state, _ = pieces.gibbs(np.tensordot([0.5, -0.3, 0.2], stack, axes=1))
    a, b, c = pieces.values_in(stack, state)
    x = x * max(1.0, np.abs(np.linalg.eigvalsh(stack[1])).max())
    family = Matrices(dict(zip("abc", stack, strict=True)))
    alone = maxent.solve(Matrices({"a": stack[0], "c": stack[2]}), {"a": a, "c": c})
    for far in idle(x):
        result = maxent.solve(family, {"a": a, "b": far, "c": c})
        assert result.success
        assert result.residuals["a"] == pytest.approx(0.0, abs=1e-13)
        assert result.entropy == pytest.approx(alone.entropy, rel=1e-13)
        assert result.values["b"] == pytest.approx(alone.mean(stack[1]), abs=1e-12)


def test_one_edge_far_and_the_other_one_holding(die):
    """|<pips> - q| <= q - 4.2: the lower edge holds; q itself decides how many digits are left."""
    near = maxent.solve(die, {"pips": AtLeast(4.2), "even": 0.6})
    result = maxent.solve(die, {"pips": Within(46.0, 41.8), "even": 0.6})
    assert result.success
    assert result.multipliers == pytest.approx(near.multipliers, rel=1e-11)
    assert result.log_partition == pytest.approx(near.log_partition, rel=1e-11)
    assert result.slack["pips"] == "at the lower edge"
    for q in (1e10, 1e14):
        far = maxent.solve(die, {"pips": Within(q, q - 4.2), "even": 0.6})
        assert not far.success or abs(far.residuals["even"]) < 1e-8


@pytest.mark.parametrize("sigma", [1e-3, 1e-4, 1e-5, 1e-6, 1e-7, 1e-9, 1e-150])
@pytest.mark.parametrize("other", [AtMost(0.6), Within(0.5, 0.1), 0.6])
def test_a_measured_value_that_no_state_has(die, sigma, other):
    """As sigma vanishes the state tends to the largest <pips> with <even> at most .6: .6 on 6 and .4 on 5."""
    result = maxent.solve(die, {"pips": Measured(9.0, sigma), "even": other})
    if result.success:
        assert result.values["even"] == pytest.approx(0.6, abs=1e-8)
        assert result.values["pips"] == pytest.approx(5.6, abs=1e-7)
    else:
        assert result.verdict is Verdict.UNFINISHED
        assert len(result.message) > 40
    assert result.success or sigma < 1e-3
    reachable = maxent.solve(die, {"pips": Measured(3.7, sigma), "even": other})
    assert reachable.success
    assert reachable.values["pips"] == pytest.approx(3.7, abs=1e-6)


SIZES = [1e300, 1e151, 1e-151, 1e-300]


@pytest.mark.parametrize("size", SIZES)
def test_extreme_widths_are_refused(die, size):
    shown = re.escape(str(size))
    for target, what in ((Measured(4.0, size), "sigma"), (Within(4.0, size), "tolerance")):
        with pytest.raises(ValueError, match=rf"^{what} of target 'pips' is {shown}; it must lie between[^\n]*$"):
            maxent.solve(die, {"pips": target, "even": 0.6})
    with pytest.raises(ValueError, match=rf"^metric 'even' is {shown}; it must lie between[^\n]*$"):
        maxent.solve(die, {"pips": 7.0, "even": 0.6}, explain=True, metric={"even": size})


@pytest.mark.parametrize("target", [AtMost(1e300), AtLeast(-1e300), Within(1e300, 1.0), Measured(-1e151, 1.0)])
def test_extreme_limits_are_refused(die, target):
    with pytest.raises(ValueError, match=r"^target 'pips' is [^\n]*; it must lie within 1e\+150[^\n]*$"):
        maxent.solve(die, {"pips": target, "even": 0.6})


def test_widths_at_the_ends_are_taken(die):
    for wide in (Measured(4.0, 1e150), Within(4.0, 1e150)):
        result = maxent.solve(die, {"pips": wide, "even": 0.6})
        assert result.success
        assert result.values["pips"] == pytest.approx(3.6, rel=1e-13)
    for narrow in (Measured(4.0, 1e-150), Within(4.0, 1e-150)):
        result = maxent.solve(die, {"pips": narrow, "even": 0.6})
        assert result.success
        assert result.values["pips"] == pytest.approx(4.0, rel=1e-13)

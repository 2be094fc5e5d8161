"""Results in the forms of other tools."""

import html
import sys

import numpy as np
import pytest
import scipy.optimize

import maxent
from maxent.families import Microstates

F = np.array([[0.0, 1.0, 2.0, 3.0], [1.0, -1.0, 0.5, 2.0]])
FAMILY = Microstates({"a<b>": F[0], "c & d": F[1]})
Q = np.array([1.1, 0.7])


@pytest.fixture(scope="module")
def solved():
    return maxent.solve(FAMILY, dict(zip(FAMILY.names, Q, strict=True)))


@pytest.fixture(scope="module")
def infeasible():
    return maxent.solve(FAMILY, {"a<b>": 1.0, "c & d": 3.0})


def test_scipy_finds_what_we_hand_out_in_its_form(solved):
    dual = lambda lam: np.log(np.exp(-lam @ F).sum()) + lam @ Q
    theirs = scipy.optimize.minimize(dual, np.zeros(2), method="BFGS", tol=1e-10)
    ours = solved.to_scipy()
    assert isinstance(ours, scipy.optimize.OptimizeResult)
    assert ours.x == pytest.approx(theirs.x, abs=1e-6)
    assert ours.fun == pytest.approx(theirs.fun, rel=1e-12)
    assert ours.jac == pytest.approx(np.zeros(2), abs=1e-14)
    h, near = 1e-4, lambda a, b: dual(ours.x + a + b) - dual(ours.x + a - b)
    second = [[(near(a, b) - near(-a, b)) / (4 * h**2) for a in h * np.eye(2)] for b in h * np.eye(2)]
    assert ours.hess == pytest.approx(np.array(second), abs=1e-6)
    assert ours.success is True and ours.status == 0 and ours.nit == solved.iterations
    assert ours.message.startswith("solved: ")


def test_a_failure_is_a_failure_in_every_form(infeasible):
    ours = infeasible.to_scipy()
    assert ours.success is False and ours.status == 3
    assert np.isnan(ours.x).all() and np.isnan(ours.fun) and np.isnan(ours.jac).all()
    data = infeasible.to_dataset()
    assert np.isnan(data["multiplier"]).all() and data.attrs["verdict"] == "infeasible"
    assert data["target"].sel(charge="c & d") == 3.0


def test_every_verdict_has_its_own_status():
    from maxent.diagnose.export import STATUS

    assert set(STATUS) == set(maxent.Verdict) and len(set(STATUS.values())) == len(STATUS)
    assert maxent.solve(FAMILY, {"a<b>": 0.0, "c & d": 1.0}).to_scipy().status == 1


def test_dataset_is_labelled_by_charge(solved):
    data = solved.to_dataset()
    assert list(data["charge"].values) == list(solved.names)
    for name in solved.names:
        at = data.sel(charge=name)
        assert float(at["target"]) == solved.targets[name]
        assert float(at["value"]) == solved.values[name]
        assert float(at["residual"]) == solved.residuals[name]
        assert float(at["multiplier"]) == solved.multipliers[name]
        assert float(at["multiplier_error"]) == solved.multiplier_errors[name]
    assert float(data["covariance"].sel(charge="a<b>", charge_other="c & d")) == solved.covariance[0, 1]
    assert float(data["entropy"]) == solved.entropy and float(data["log_partition"]) == solved.log_partition
    assert data.attrs == {"verdict": "solved", "evidence": solved.evidence, "message": solved.message}
    data["covariance"][0, 0] = 0.0
    assert solved.covariance[0, 0] != 0.0  # a copy


def test_without_xarray_the_error_names_it(solved, monkeypatch):
    monkeypatch.setitem(sys.modules, "xarray", None)
    with pytest.raises(ImportError, match=r"needs the package xarray .*maxent-states\[labelled\]"):
        solved.to_dataset()


def test_notebook_form_is_escaped_and_the_same_every_time(solved, infeasible):
    for result in (solved, infeasible):
        text = result._repr_html_()
        assert text == result._repr_html_()
        assert "<b>" in text and "a&lt;b&gt;" in text and "c &amp; d" in text
        assert "<script" not in text and " id=" not in text
        assert html.unescape(text).count(result.message) == 1
    assert "–" in infeasible._repr_html_() and "nan" not in infeasible._repr_html_()

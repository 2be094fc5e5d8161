"""The public result: certificates checked again, frozen fields, require(), errors with suggestions, lazy imports."""

from __future__ import annotations

import dataclasses
import subprocess
import sys

import numpy as np
import pytest

import maxent
from maxent.families import Matrices, Microstates

DIE = Microstates({"pips": np.arange(1, 7)})
SPIN = Matrices({"x": [[0, 1], [1, 0]], "z": [[1, 0], [0, -1]]})
PAIR = Microstates({"energy": [0, 1, 1, 2], "number": [0, 1, 0, 1]})


# ---------------------------------------------------------------- certificates


@pytest.mark.parametrize(
    ("family", "targets", "kind"),
    [
        (DIE, {"pips": 6.2}, "outside"),
        (SPIN, {"x": 0.8, "z": 0.7}, "outside"),
        (SPIN, {"x": 0.6, "z": 0.8}, "face"),
        (DIE, {"pips": 1.0}, "face"),
        (PAIR, {"energy": 2.0, "number": 1.0}, "face"),
        (Microstates({"a": [0, 1, 2], "b": [1, 3, 5]}), {"a": 1.0, "b": 3.2}, "contradiction"),
    ],
)
class TestCertificates:
    def test_verify_recomputes_the_numbers(self, family, targets, kind):
        c = maxent.solve(family, targets).certificate
        check = c.verify(family, targets)
        assert c.kind == kind and check and check.holds is True
        for name in ("lowest", "asked", "margin", "tolerance"):
            assert getattr(check, name) == pytest.approx(getattr(c, name), abs=1e-13)

    def test_a_tampered_direction_fails(self, family, targets, kind):
        c = maxent.solve(family, targets).certificate
        turned = dataclasses.replace(c, direction={n: -x for n, x in c.direction.items()})
        assert not turned.verify(family, targets)
        first = next(iter(c.direction))
        if len(c.direction) > 1:
            bent = dataclasses.replace(c, direction=c.direction | {first: c.direction[first] + 1.0})
            if kind != "outside":
                assert not bent.verify(family, targets)
        empty = dataclasses.replace(c, direction=dict.fromkeys(c.direction, 0.0))
        assert not empty.verify(family, targets)

    def test_tampered_targets_fail(self, family, targets, kind):
        """Moved to the middle of what is reachable, where nothing of this is true."""
        c = maxent.solve(family, targets).certificate
        centre = dict(zip(family.names, (float(x) for x in family.reference()[0]), strict=True))
        assert not c.verify(family, centre)

    def test_written_numbers_are_compared(self, family, targets, kind):
        """They prove nothing, and the check carries its own; a certificate that states others is not confirmed."""
        c = maxent.solve(family, targets).certificate
        check = dataclasses.replace(c, margin=1e3, lowest=1e3, tolerance=0.0).verify(family, targets)
        assert not check and check.margin == pytest.approx(c.margin, abs=1e-13)
        assert [fault.split()[0] for fault in check.faults] == ["lowest", "margin", "tolerance"]

    @pytest.mark.parametrize(
        ("name", "number"),
        [("margin", 5.0), ("margin", 1e-9), ("lowest", 1.0), ("asked", -1.0), ("slack", 1e-6), ("lowest", np.nan)],
    )
    def test_one_tampered_number_is_named(self, family, targets, kind, name, number):
        c = maxent.solve(family, targets).certificate
        check = dataclasses.replace(c, **{name: getattr(c, name) + number}).verify(family, targets)
        assert not check and [fault.split()[0] for fault in check.faults] == [name]

    @pytest.mark.parametrize("tolerance", [0.0, 1e3, -1.0, np.nan])
    def test_a_tampered_tolerance_is_named(self, family, targets, kind, tolerance):
        c = maxent.solve(family, targets).certificate
        check = dataclasses.replace(c, tolerance=tolerance).verify(family, targets)
        assert not check and check.faults[0].startswith("tolerance is")

    def test_a_direction_of_another_length_fails(self, family, targets, kind):
        c = maxent.solve(family, targets).certificate
        for factor in (1e6, 2.0, 1 + 1e-6, 1e-300, 1e300):
            long = dataclasses.replace(c, direction={n: factor * x for n, x in c.direction.items()})
            assert not long.verify(family, targets)
            assert "the direction has the length" in long.verify(family, targets).faults[0]

    @pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf])
    def test_a_direction_that_is_not_finite_fails_quietly(self, family, targets, kind, value):
        c = maxent.solve(family, targets).certificate
        broken = dataclasses.replace(c, direction=c.direction | {next(iter(c.direction)): value})
        assert broken.verify(family, targets).faults == ("the direction is not finite",)

    def test_other_kinds_fail(self, family, targets, kind):
        """A contradiction is outside, too: everything else is a claim that does not hold."""
        c = maxent.solve(family, targets).certificate
        for other in {"outside", "face", "contradiction", "junk"} - {kind}:
            check = dataclasses.replace(c, kind=other).verify(family, targets)
            assert bool(check) is ((kind, other) == ("contradiction", "outside"))
            assert bool(check) is not bool(check.faults)

    def test_names_of_the_direction_must_fit(self, family, targets, kind):
        c = maxent.solve(family, targets).certificate
        more = dataclasses.replace(c, direction=c.direction | {"unheard": 0.0})
        for ask in (more.verify, more.prove):
            with pytest.raises(ValueError, match="direction 'unheard' is for no charge"):
                ask(family, targets)

    def test_names_must_fit(self, family, targets, kind):
        c = maxent.solve(family, targets).certificate
        with pytest.raises(ValueError, match="no target for charge|is for no charge"):
            c.verify(family, {"wrong": 1.0})


def test_face_certificates_need_a_state_and_not_only_a_tangent():
    """A line that touches at one corner: a target on the line but off the corner is no boundary."""
    triangle = Microstates({"x": [0, 1, 2], "y": [0, 3, 1]})
    c = maxent.solve(triangle, {"x": 0.0, "y": 0.0}).certificate
    touch = dataclasses.replace(c, direction={"x": 1.0, "y": 0.0})
    assert touch.verify(triangle, {"x": 0.0, "y": 0.0})
    assert not touch.verify(triangle, {"x": 0.0, "y": 0.5})


def test_margin_is_at_most_the_distance():
    """The die and the spin, where the distance is known."""
    for excess in (1e-10, 1e-3, 0.7):
        assert maxent.solve(DIE, {"pips": 6 + excess}).certificate.margin == pytest.approx(excess, rel=1e-4)
        q = (1 + excess) * np.array([0.6, 0.8])
        margin = maxent.solve(SPIN, {"x": q[0], "z": q[1]}).certificate.margin
        assert 0 < margin <= excess * (1 + 1e-9) + 1e-15


def test_accuracy_enters_the_certificate():
    c = maxent.solve(DIE, {"pips": 6.5}, accuracy=0.1).certificate
    assert c.accuracy == {"pips": 0.1}
    assert c.tolerance == pytest.approx(0.1, rel=1e-9)
    assert c.verify(DIE, {"pips": 6.5})
    assert not c.verify(DIE, {"pips": 6.05})
    # the numbers are compared within rounding, however coarse the accuracy
    assert not dataclasses.replace(c, margin=0.45).verify(DIE, {"pips": 6.5})
    assert not dataclasses.replace(c, accuracy={"pips": 0.0}).verify(DIE, {"pips": 6.5})
    coarse = maxent.solve(DIE, {"pips": 10.0}, accuracy=3.0).certificate
    assert coarse.verify(DIE, {"pips": 10.0})
    assert not dataclasses.replace(coarse, kind="contradiction").verify(DIE, {"pips": 10.0})


# ---------------------------------------------------------------- the result


RESULTS = {
    "solved": (DIE, {"pips": 4.5}), "boundary": (DIE, {"pips": 6.0}), "infeasible": (DIE, {"pips": 6.5}),
    "inconsistent": (Microstates({"a": [1, 1]}), {"a": 2.0}),
}  # fmt: skip


@pytest.mark.parametrize("verdict", list(RESULTS))
def test_every_field_is_there_whatever_the_verdict(verdict):
    result = maxent.solve(*RESULTS[verdict])
    assert str(result.verdict) == verdict
    assert result.success is (verdict == "solved")
    names = set(result.names)
    for field in ("targets", "values", "residuals", "multipliers", "last_multipliers", "multiplier_errors"):
        assert set(getattr(result, field)) == names
        assert all(type(x) is float for x in getattr(result, field).values())
    assert result.covariance.shape == (len(names), len(names))
    has_state = verdict in ("solved", "boundary")
    assert (result.state is not None) is has_state
    assert np.isnan(result.covariance).any() == (not has_state)
    assert np.isfinite(result.entropy) == has_state
    assert np.isfinite(result.mean(np.ones(6))) == has_state
    assert np.isnan(result.log_partition) == (verdict != "solved")
    assert all(np.isnan(x) for x in result.multipliers.values()) == (verdict != "solved")
    assert all(np.isfinite(x) for x in result.last_multipliers.values())
    assert (result.certificate is None) is (verdict == "solved")
    assert (result.face is None) is (verdict != "boundary")
    assert result.message and result.evidence in ("proved", "tested")
    assert str(result.verdict) in repr(result) and all(n in repr(result) for n in names)


def test_verdict_is_printed_as_a_word():
    assert f"{maxent.Verdict.SOLVED}" == "solved"
    assert {str(v) for v in maxent.Verdict} == {
        "solved", "boundary", "unattained", "infeasible", "inconsistent", "unfinished",
    }  # fmt: skip


def test_the_result_is_frozen():
    result = maxent.solve(DIE, {"pips": 4.5})
    for name in ("verdict", "multipliers", "message"):
        with pytest.raises(dataclasses.FrozenInstanceError):
            setattr(result, name, None)
    with pytest.raises(TypeError):
        iter(result)


def test_require_returns_or_raises():
    good = maxent.solve(DIE, {"pips": 4.5})
    assert good.require() is good
    bad = maxent.solve(DIE, {"pips": 6.5})
    with pytest.raises(maxent.SolveError, match="No state has these values") as caught:
        bad.require()
    assert caught.value.result is bad
    assert isinstance(caught.value, maxent.MaxentError)
    with pytest.raises(maxent.SolveError, match="On the boundary"):
        maxent.solve(DIE, {"pips": 6.0}).require()


def test_thermodynamic_identities():
    """S = ln Z + lam.q, and d ln Z / d lam = -q."""
    result = maxent.solve(SPIN, {"x": 0.3, "z": -0.5})
    r = np.hypot(0.3, 0.5)
    p = np.array([(1 + r) / 2, (1 - r) / 2])
    assert result.entropy == pytest.approx(-p @ np.log(p), abs=1e-13)
    lam_q = sum(result.multipliers[n] * result.targets[n] for n in result.names)
    assert result.entropy == pytest.approx(result.log_partition + lam_q, abs=1e-13)
    assert result.log_partition == pytest.approx(np.log(2 * np.cosh(np.arctanh(r))), abs=1e-13)


def test_limit_states_answer_means():
    result = maxent.solve(SPIN, {"x": 0.6, "z": 0.8})
    assert result.entropy == pytest.approx(0, abs=1e-12)
    assert result.mean([[0, -1j], [1j, 0]]) == pytest.approx(0, abs=1e-7)
    assert result.face.dimension == 1 and result.face.depth == len(result.face.directions) == 1
    assert result.face.gap == pytest.approx(1.0, rel=1e-6)


# ---------------------------------------------------------------- bad requests


@pytest.mark.parametrize(
    ("targets", "kwargs", "error", "message"),
    [
        (
            {"energie": 1.0, "number": 0.5},
            {},
            ValueError,
            r"target 'energie' is for no charge \(charges: 'energy', 'number'\); did you mean 'energy'\?",
        ),
        ({"energy": 1.0}, {}, ValueError, "no target for charge 'number'"),
        ({}, {}, ValueError, "no target for charge 'energy'"),
        ([1.0, 0.5], {}, TypeError, "targets must be a dict name -> value, not list"),
        ({"energy": 1 + 1j, "number": 0.5}, {}, TypeError, "target 'energy' must be real, not complex"),
        ({"energy": "high", "number": 0.5}, {}, TypeError, "target 'energy' must be a number, not str"),
        ({"energy": None, "number": 0.5}, {}, TypeError, "target 'energy' must be a number, not NoneType"),
        ({"energy": True, "number": 0.5}, {}, TypeError, "target 'energy' must be a number, not bool"),
        ({"energy": float("nan"), "number": 0.5}, {}, ValueError, "target 'energy' is nan; it must be finite"),
        ({"energy": 1.0, "number": float("inf")}, {}, ValueError, "target 'number' is inf; it must be finite"),
        ({"energy": [1.0, 2.0], "number": 0.5}, {}, TypeError, "target 'energy' must be a number, not list"),
        (
            {"energy": np.ones(2), "number": 0.5},
            {},
            TypeError,
            r"target 'energy' must be one number, not an array of shape \(2,\)",
        ),
        (
            {"energy": 1.0, "number": 0.5},
            {"accuracy": -1.0},
            ValueError,
            "accuracy 'energy' is -1.0; it must not be negative",
        ),
        (
            {"energy": 1.0, "number": 0.5},
            {"accuracy": {"numbr": 0.1}},
            ValueError,
            "accuracy 'numbr' is for no charge .*did you mean 'number'",
        ),
        ({"energy": 1.0, "number": 0.5}, {"accuracy": float("nan")}, ValueError, "accuracy is nan; it must be finite"),
        (
            {"energy": 1.0, "number": 0.5},
            {"driver": "gpu"},
            ValueError,
            "driver must be one of 'auto', 'host', 'jax', not 'gpu'",
        ),
    ],
)
def test_bad_requests(targets, kwargs, error, message):
    with pytest.raises(error, match=message):
        maxent.solve(PAIR, targets, **kwargs)


def test_not_a_family():
    with pytest.raises(TypeError, match="family must be a Family such as Matrices or Microstates, not dict"):
        maxent.solve({"energy": [1, 2]}, {"energy": 1.5})


@pytest.mark.parametrize("value", [maxent.Exact(1.2), np.float64(1.2), np.float32(1.2), np.array(1.2), 1])
def test_numbers_of_every_kind(value):
    result = maxent.solve(PAIR, {"energy": value, "number": 0.5})
    assert result.verdict is maxent.Verdict.SOLVED
    assert result.targets["energy"] == pytest.approx(float(getattr(value, "value", value)))


def test_solving_leaves_the_precision_of_jax_alone():
    import jax

    before = jax.config.jax_enable_x64
    for driver in ("host", "jax"):
        result = maxent.solve(DIE, {"pips": 4.5}, driver=driver)
        assert result.covariance.dtype == np.float64
        assert result.multipliers["pips"] == pytest.approx(-0.3710489, abs=1e-7)
    assert jax.config.jax_enable_x64 == before


# ---------------------------------------------------------------- imports


def loaded_by(code: str) -> set[str]:
    heavy = "('jax', 'scipy', 'numpy', 'pydantic', 'matplotlib', 'optax', 'jinja2')"
    run = subprocess.run(
        [sys.executable, "-c", f"import sys\n{code}\nprint(*[m for m in {heavy} if m in sys.modules])"],
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    return set(run.stdout.split())


def test_importing_the_package_loads_nothing():
    assert loaded_by("import maxent; maxent.__version__; dir(maxent)") == set()
    assert loaded_by("import maxent; maxent.SolveError, maxent.ConfigError") == set()


def test_the_check_of_imports_can_fail():
    assert "numpy" in loaded_by("import maxent; maxent.solve")
    assert {"jax", "numpy"} <= loaded_by("from maxent.families import Matrices")


def test_a_fit_on_the_host_never_loads_jax():
    code = """
from maxent.families.microstates import Microstates
import maxent
assert maxent.solve(Microstates({"pips": [1, 2, 3, 4, 5, 6]}), {"pips": 4.5}).success
"""
    assert "jax" not in loaded_by(code)
    assert "pydantic" not in loaded_by("import maxent.families; import maxent; maxent.solve")


def test_public_names():
    for name in maxent.__all__:
        assert getattr(maxent, name) is not None and name in dir(maxent)
    with pytest.raises(AttributeError, match="module 'maxent' has no attribute 'solver_of_all'"):
        _ = maxent.solver_of_all


@pytest.mark.parametrize(
    ("family", "targets", "accuracy"),
    [
        (DIE, {"pips": 6.5}, 0.6),
        (DIE, {"pips": 6 - 1e-8}, 2e-8),
        (Matrices({"x": [[0, 1], [1, 0]], "z": [[1, 0], [0, -1]]}), {"x": 0.8, "z": 0.7}, 0.09),
        (Microstates({"a": np.arange(1, 7), "b": [0, 1, 0, 1, 0, 1]}), {"a": 6.3, "b": 1.2}, {"a": 0.4, "b": 0.3}),
    ],
)
def test_a_boundary_that_only_the_accuracy_reaches_is_confirmed(family, targets, accuracy):
    result = maxent.solve(family, targets, accuracy=accuracy)
    assert result.verdict is maxent.Verdict.BOUNDARY
    assert result.certificate.verify(family, targets)
    beyond = {name: value + 2 * (value - result.values[name]) for name, value in targets.items()}
    assert not result.certificate.verify(family, beyond)

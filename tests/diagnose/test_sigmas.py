"""Standard errors of multipliers: closed forms, refits at shifted targets, and refits to sampled data."""

from __future__ import annotations

import numpy as np
import pytest

import maxent
from maxent.families import Matrices, Microstates

PIPS = np.arange(1.0, 7.0)


def vector(mapping):
    return np.array(list(mapping.values()))


def gibbs(rows, lam):
    e = -(lam @ rows)
    p = np.exp(e - e.max())
    return p / p.sum()


def refitted(family, targets, sigmas, step=1e-5):
    """Standard errors from central differences of whole fits; `targets` makes what is asked from the numbers."""
    q = np.zeros(len(sigmas))
    columns = []
    for k in range(len(q)):
        shift = step * np.eye(len(q))[k]
        ends = [maxent.solve(family, targets(sign * shift)) for sign in (1, -1)]
        columns.append((vector(ends[0].multipliers) - vector(ends[1].multipliers)) / (2 * step))
    return np.sqrt((np.array(columns).T ** 2) @ np.array(sigmas) ** 2)


def test_one_charge_has_sigma_over_variance():
    p = gibbs(PIPS[None], np.array([0.3]))
    mean = p @ PIPS
    result = maxent.solve(Microstates({"pips": PIPS}), {"pips": mean})
    expected = 0.02 / (p @ (PIPS - mean) ** 2)
    assert result.multiplier_sigmas([[0.02]])["pips"] == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("units", [1.0, 1e-150, 1e150])
def test_correlated_errors_in_any_units(rng, units):
    """``chi^-1 Sigma chi^-1`` by dense algebra, with charges whose squares may not be formed."""
    rows = rng.standard_normal((3, 15))
    p = gibbs(rows, np.array([0.4, -0.3, 0.2]))
    q = rows @ p
    factor = 1e-3 * rng.standard_normal((3, 5))
    inverse = np.linalg.inv((rows * p) @ rows.T - np.outer(q, q))
    expected = np.sqrt(np.diag(inverse @ factor @ factor.T @ inverse))
    family = Microstates({f"q{j}": units * r for j, r in enumerate(rows)})
    result = maxent.solve(family, {f"q{j}": units * x for j, x in enumerate(q)})
    np.testing.assert_allclose(vector(result.multiplier_sigmas(units * factor)) * units, expected, rtol=1e-9)


def test_charges_that_do_not_commute_against_refits():
    x, z = np.array([[0.0, 1.0], [1.0, 0.0]]), np.diag([1.0, -1.0])
    family, sigmas = Matrices({"x": x, "z": z}), [0.01, 0.03]
    targets = lambda s: {"x": 0.5 + s[0], "z": 0.4 + s[1]}
    result = maxent.solve(family, targets([0, 0]))
    expected = refitted(family, targets, sigmas)
    np.testing.assert_allclose(vector(result.multiplier_sigmas(np.diag(sigmas))), expected, rtol=1e-6)


def test_redundant_charges_share_the_error():
    """The same charge three times, in other units: errors in line with the relation, multipliers of least norm."""
    family = Microstates({"a": PIPS, "b": 2 * PIPS, "c": PIPS + 3})
    targets = lambda s: {"a": 4.0 + s[0], "b": 8.0 + 2 * s[0], "c": 7.0 + s[0]}
    result = maxent.solve(family, targets([0.0]))
    assert len(result.redundancies) == 2
    expected = refitted(family, targets, [0.05])
    sigmas = vector(result.multiplier_sigmas(0.05 * np.array([[1.0], [2.0], [1.0]])))
    np.testing.assert_allclose(sigmas, expected, rtol=1e-6)
    alone = maxent.solve(Microstates({"a": PIPS}), {"a": 4.0}).multiplier_sigmas([[0.05]])["a"]
    assert sigmas @ [1, 2, 1] == pytest.approx(alone, rel=1e-9)


@pytest.mark.parametrize("width", [0.01, 0.5])
def test_measured_targets_against_refits(rng, width):
    rows = rng.standard_normal((3, 15))
    q = rows @ gibbs(rows, np.array([0.4, -0.3, 0.2]))
    family = Microstates({"a": rows[0], "b": rows[1], "c": rows[2]})

    def targets(s):
        return {"a": maxent.Measured(q[0] + s[0], width), "b": q[1], "c": maxent.Measured(q[2] + s[1], 2 * width)}

    result = maxent.solve(family, targets([0, 0]))
    assert result.sigmas == {"a": width, "b": 0.0, "c": 2 * width}
    expected = refitted(family, targets, [width, 2 * width], step=1e-4)
    np.testing.assert_allclose(vector(result.multiplier_sigmas()), expected, rtol=1e-5)


def test_two_measurements_of_one_charge_count_as_one_of_their_mean():
    family = Microstates({"a": PIPS, "b": PIPS, "c": PIPS})
    result = maxent.solve(family, {n: maxent.Measured(4.0, 0.3) for n in "abc"})
    one = maxent.solve(Microstates({"a": PIPS}), {"a": maxent.Measured(4.0, 0.3 / np.sqrt(3))})
    targets = lambda s: {n: maxent.Measured(4.0 + x, 0.3) for n, x in zip("abc", s, strict=True)}
    expected = refitted(family, targets, [0.3] * 3, step=1e-4)
    assert sum(result.multipliers.values()) == pytest.approx(one.multipliers["a"], rel=1e-9)
    np.testing.assert_allclose(vector(result.multiplier_sigmas()), expected, rtol=1e-5)


def test_a_target_that_is_not_needed_has_none():
    family = Microstates({"pips": PIPS, "square": PIPS**2})
    result = maxent.solve(family, {"pips": maxent.Measured(4.0, 0.1), "square": maxent.AtMost(30.0)})
    alone = maxent.solve(Microstates({"pips": PIPS}), {"pips": maxent.Measured(4.0, 0.1)})
    sigmas = result.multiplier_sigmas()
    assert result.not_needed == ("square",) and sigmas["square"] == 0.0
    assert sigmas["pips"] == pytest.approx(alone.multiplier_sigmas()["pips"], rel=1e-9)


@pytest.mark.parametrize(("asked", "verdict"), [(6.0, "boundary"), (6.5, "infeasible")])
def test_no_multipliers_no_sigmas(asked, verdict):
    result = maxent.solve(Microstates({"pips": PIPS}), {"pips": asked})
    assert str(result.verdict) == verdict and np.isnan(result.multiplier_sigmas([[0.1]])["pips"])


def test_wrong_shape_is_named():
    result = maxent.solve(Microstates({"pips": PIPS}), {"pips": 4.0})
    with pytest.raises(ValueError, match=r"shape \(1, p\), not \(2, 2\)"):
        result.multiplier_sigmas(np.eye(2))

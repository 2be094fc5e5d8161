"""A family with only the required part never gets a wrong verdict; it may stay unfinished, and says why."""

from __future__ import annotations

import numpy as np
import pytest

import maxent
from maxent.core.contract import Verdict
from tests.conformance.toy import Toy

NAMES = ("a", "b", "c")
#: Integer points: every face, distance and relation below is exact.
POINTS = np.array([[0, 0, 0, 0, 2, 2, 2, 3], [0, 4, 0, 4, 0, 4, 1, 2], [0, 0, 4, 4, 1, 0, 4, 3.0]])


def ask(points: np.ndarray, q: np.ndarray, driver: str = "host"):
    return maxent.solve(Toy(points, NAMES[: len(points)]), dict(zip(NAMES, q, strict=False)), driver=driver)


def weights(seed: int, sharpness: float) -> np.ndarray:
    w = np.exp(-sharpness * np.random.default_rng(seed).standard_normal(POINTS.shape[1]))
    return w / w.sum()


@pytest.mark.parametrize("driver", ["host", "jax"])
@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("sharpness", [0.0, 1.0, 4.0])
def test_feasible(driver, seed, sharpness):
    """Plain problems are solved and proved; the default stiffness needs nothing but `lowest`."""
    q = POINTS @ weights(seed, sharpness)
    result = ask(POINTS, q, driver)
    assert result.verdict is Verdict.SOLVED
    assert result.evidence == "proved"
    np.testing.assert_allclose(list(result.values.values()), q, rtol=0, atol=1e-13)
    assert result.mean(POINTS[1]) == pytest.approx(q[1], abs=1e-12)


@pytest.mark.parametrize("depth", [1e-2, 1e-4, 1e-6, 1e-8, 1e-10])
@pytest.mark.parametrize("seed", range(3))
def test_close_inside(seed, depth):
    """Near the face a = 0: a state with all weights positive exists, so nothing else may be claimed."""
    p = weights(seed, 1.0) * (POINTS[0] == 0)
    q = (1 - depth) * POINTS @ (p / p.sum()) + depth * POINTS.mean(axis=1)
    result = ask(POINTS, q)
    assert result.verdict in (Verdict.SOLVED, Verdict.UNFINISHED)
    if depth >= 1e-6:
        assert result.verdict is Verdict.SOLVED


@pytest.mark.parametrize("driver", ["host", "jax"])
@pytest.mark.parametrize("distance", [1.0, 1e-3, 1e-6, 1e-9, 1e-12, 3e-14])
@pytest.mark.parametrize("seed", range(2))
def test_outside(driver, seed, distance):
    """Outside the face a = 0 by a known distance: infeasible, or unfinished, never solved and never more than it."""
    p = weights(seed, 1.0) * (POINTS[0] == 0)
    q = POINTS @ (p / p.sum()) - distance * np.eye(3)[0]
    result = ask(POINTS, q, driver)
    assert result.verdict in (Verdict.INFEASIBLE, Verdict.UNFINISHED)
    if distance >= 1e-3:
        assert result.verdict is Verdict.INFEASIBLE
    if result.verdict is Verdict.INFEASIBLE:
        c = result.certificate
        assert c.tolerance < c.margin <= distance * (1 + 1e-9) + 1e-14
        assert c.verify(Toy(POINTS, NAMES), result.targets)


@pytest.mark.parametrize("driver", ["host", "jax"])
@pytest.mark.parametrize("seed", range(4))
def test_boundary(driver, seed):
    """Exactly on a face, an edge or a corner; without `face` it cannot be told from inside; no verdict is made up."""
    p = weights(seed, 1.0) * (POINTS[0] == 0)
    face = POINTS @ (p / p.sum())
    edge = np.array([0, 1.0, 0])
    for q in (face, edge, POINTS[:, 0]):
        result = ask(POINTS, q, driver)
        assert result.verdict is Verdict.UNFINISHED
        assert result.message and result.state is None
        assert np.all(np.isnan(list(result.multipliers.values())))
        assert np.all(np.isfinite(list(result.last_multipliers.values())))


@pytest.mark.parametrize("seed", range(3))
def test_redundant_and_inconsistent(seed):
    points = np.array([POINTS[0], POINTS[1], 2 * POINTS[0] - POINTS[1] + 3])
    q = points @ weights(seed, 1.0)
    result = ask(points, q)
    assert result.verdict is Verdict.SOLVED
    assert len(result.redundancies) == 1
    for miss in (1e-3, 1e-9, 1e-12):
        wrong = ask(points, q + np.array([0, 0, miss]))
        assert wrong.verdict is Verdict.INCONSISTENT
        assert wrong.certificate.margin == pytest.approx(miss / np.sqrt(6), rel=1e-2)


def test_no_spread_and_no_charge():
    numbers = np.tile([[1.0], [2.0]], (1, 5))
    assert ask(numbers, np.array([1.0, 2.0])).verdict is Verdict.SOLVED
    assert ask(numbers, np.array([1.0, 2.1])).verdict is Verdict.INCONSISTENT


@pytest.mark.parametrize("scale", [1e-8, 1e8])
def test_units_do_not_matter(scale):
    factor = np.array([scale, 1.0, 1 / scale])
    q = POINTS @ weights(1, 1.0)
    result = ask(factor[:, None] * POINTS, factor * q)
    assert result.verdict is Verdict.SOLVED
    plain = ask(POINTS, q)
    found = np.array(list(result.multipliers.values())) * factor
    np.testing.assert_allclose(found, list(plain.multipliers.values()), atol=1e-11)
    outside = factor * (POINTS[:, 0] - np.array([1e-3, 0, 0]))
    assert ask(factor[:, None] * POINTS, outside).verdict is Verdict.INFEASIBLE

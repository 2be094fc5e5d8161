"""The analytic centre: interior points are proved, others diverge; against the LP distance by brute force."""

from __future__ import annotations

import numpy as np
import pytest

from maxent.core.blocks import Blocks
from maxent.core.centre import centre, starts_along
from maxent.core.contract import EPS, Family

NOBODY = lambda lam, step, count: None


def simplex(depth: float) -> Blocks:
    """Corners of a triangle, seen from a point at `depth` (as weight of one corner)."""
    corners = np.array([[0.0, 1.0, 0.0], [0.0, 0.0, 1.0]])
    q = corners @ np.array([depth, 0.5 - depth / 2, 0.5 - depth / 2])
    return Blocks(corners).combine(np.eye(2), q)


@pytest.mark.parametrize("depth", [0.3, 1e-3, 1e-6, 1e-9])
def test_interior_points_are_proved(depth):
    end = centre(simplex(depth), np.full(2, 16 * EPS), [np.zeros(2)], NOBODY)
    assert end.status == "interior"


def test_centre_in_closed_form():
    """At the analytic centre lam of n points, p_x = 1/(n (1 + lam.a_x)) is a distribution with mean zero."""
    family = simplex(0.1)
    end = centre(family, np.full(2, 16 * EPS), [np.zeros(2)], NOBODY)
    p = 1 / (1 + end.lam @ family.diagonal)
    assert np.linalg.norm(family.diagonal @ p) / p.sum() < 0.1
    assert np.all(p > 0)


@pytest.mark.parametrize("depth", [0.0, -1e-9, -0.1])
def test_points_on_or_outside_are_never_called_interior(depth):
    end = centre(simplex(depth), np.full(2, 16 * EPS), [np.zeros(2)], NOBODY)
    assert end.status in ("diverged", "stuck", "unsure")


def test_noise_larger_than_the_depth_is_not_proved():
    end = centre(simplex(1e-6), np.full(2, 1e-5), [np.zeros(2)], NOBODY)
    assert end.status != "interior"


def test_the_question_is_asked_on_the_way_out():
    seen = []

    def ask(lam, step, count):
        seen.append(lam)
        return "direction" if np.linalg.norm(lam) > 1e3 else None

    end = centre(simplex(-0.1), np.full(2, 16 * EPS), [np.zeros(2)], ask)
    assert end.status == "found" and end.found == "direction"
    # the escape separates: v.a > 0 at every corner
    assert (end.lam @ simplex(-0.1).diagonal).min() > 0
    assert len(seen) > 1


def test_matrices(rng):
    """A spin inside, on and outside its sphere."""
    sigma = np.array([[[0, 1], [1, 0]], [[1, 0], [0, -1]]], float)
    for radius, inside in ((0.9, True), (1 - 1e-7, True), (1.0, False), (1.01, False)):
        q = radius * np.array([0.6, 0.8])
        family = Blocks(np.zeros((2, 0)), (sigma - q[:, None, None] * np.eye(2),))
        end = centre(family, np.full(2, 16 * EPS), [np.zeros(2)], NOBODY)
        assert (end.status == "interior") is inside


def test_starts_lie_in_the_domain():
    family = simplex(1e-6)
    v = np.array([1.0, 1.0]) / np.sqrt(2)
    starts = starts_along(family, [v, -v, np.zeros(2), np.array([np.nan, 1.0])])
    assert starts
    for x in starts:
        assert family.barrier(x) is not None
    upwards = np.array([1.0, 1.0])  # lowest value above zero: no depth to start from
    assert starts_along(Blocks(np.ones((2, 3))), [upwards]) == []


def test_a_family_without_barrier_says_none():
    assert centre(Family(), np.ones(1), [np.zeros(1)], NOBODY).status == "none"

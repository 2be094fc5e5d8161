"""Whitening: orthonormal charges, rank in noise units, indifference to units, multipliers of least norm."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import null_space

from maxent.core.blocks import Blocks
from maxent.core.contract import EPS, SAFETY, Problem
from maxent.core.whiten import tall_triangle, whiten


def problem(rows, q=None, accuracy=0.0) -> Problem:
    return Problem.pose(Blocks(np.asarray(rows, float)), np.zeros(len(rows)) if q is None else q, accuracy)


def test_orthonormal_under_the_counting_measure(rng):
    rows = rng.standard_normal((4, 30))
    p = problem(rows, np.array([0.1, 0.2, 0.3, 0.4]))
    w = whiten(p)
    white = w.transform @ p.family.diagonal
    centred = white - white.mean(axis=1, keepdims=True)
    np.testing.assert_allclose(centred @ centred.T / 30, np.eye(4), atol=1e-13)
    assert w.null == () and w.rank == 4
    np.testing.assert_allclose(w.spread, rows.std(axis=1), rtol=1e-13)
    np.testing.assert_allclose(w.mean, rows.mean(axis=1) - [0.1, 0.2, 0.3, 0.4], atol=1e-14)


def test_prior_takes_no_part(rng):
    rows, prior = rng.standard_normal((3, 20)), np.linspace(-300, 300, 20)
    plain = whiten(problem(rows))
    weighted = whiten(Problem.pose(Blocks(rows, prior=prior), np.zeros(3)))
    np.testing.assert_array_equal(plain.transform, weighted.transform)


@pytest.mark.parametrize("factor", [1e-200, 1e-8, 1.0, 1e8, 1e150])
def test_units_of_the_charges_do_not_matter(rng, factor):
    """Same rank and same whitened space, whatever one charge is measured in; also units that overflow when squared."""
    rows = rng.standard_normal((3, 20))
    rows[2] = rows[0] - 2 * rows[1]
    scaled = rows * np.array([factor, 1.0, factor])[:, None]
    scaled[2] = factor * rows[0] - 2 * factor * rows[1]
    w = whiten(problem(scaled))
    assert w.rank == 2
    (c,) = w.null
    assert np.linalg.norm(c) == pytest.approx(1)
    # c . A is a number: judged charge by charge, in units of the parts
    parts = c[:, None] * scaled
    assert np.ptp(parts.sum(axis=0)) <= 1e-13 * np.abs(parts).max()
    white = w.transform @ (scaled - scaled.mean(axis=1, keepdims=True))
    np.testing.assert_allclose(white @ white.T / 20, np.eye(2), atol=1e-12)


def test_rank_counts_down_to_the_noise(rng):
    """A charge that differs from another by delta is a charge of its own above the noise, and a duplicate below it."""
    rows = rng.standard_normal((2, 50))
    for delta, rank in ((1e-6, 2), (1e-10, 2), (1e-13, 2), (1e-16, 1), (0.0, 1)):
        pair = np.array([rows[0], rows[0] + delta * rows[1]])
        assert whiten(problem(pair)).rank == rank, delta


def test_threshold_is_sixteen_units():
    """A charge whose spread is x noise units of its own: kept exactly above SAFETY."""
    for units, rank in ((0.9 * SAFETY, 0), (1.1 * SAFETY, 1)):
        rows = np.array([[1.0, 1.0]])
        p = problem(rows)
        noise = EPS * 1.0
        spread = units * noise
        family = Blocks(np.array([[-spread, spread]]))
        w = whiten(Problem(family, p.noise, p.accuracy))
        assert w.rank == rank
        assert len(w.null) == 1 - rank


def test_condition_number_up_to_the_rank_decision(rng):
    """Condition 1e12 is whitened to orthonormality at the level of eps times the condition."""
    u = np.linalg.qr(rng.standard_normal((40, 3)))[0].T
    mix = np.array([[1, 0, 0], [1, 1e-6, 0], [1, 1e-6, 1e-12]])
    p = problem(mix @ u)
    w = whiten(p)
    assert w.rank == 3
    white = w.transform @ p.family.diagonal
    white -= white.mean(axis=1, keepdims=True)
    np.testing.assert_allclose(white @ white.T / 40, np.eye(3), atol=1e-3)
    assert w.singular[0] / w.singular[-1] > 1e11


def test_values_and_back(rng):
    rows = rng.standard_normal((4, 25))
    rows[3] = 2 * rows[0] + rows[1] - 1
    p = problem(rows, rng.standard_normal(4) * 0.1)
    w = whiten(p)
    weight = rng.random(25)
    weight /= weight.sum()
    exact = p.family.diagonal @ weight
    # the fourth value follows from its relation
    np.testing.assert_allclose(w.values(w.transform @ exact), exact, atol=1e-13)


def test_minimum_norm_against_the_pseudoinverse(rng):
    """Smallest multipliers in units of the spreads that give the same exponent."""
    base = rng.standard_normal((2, 30))
    mix = rng.standard_normal((5, 2)) * np.array([1e-3, 1, 1, 1e3, 10])[:, None]
    p = problem(mix @ base)
    w = whiten(p)
    assert w.rank == 2 and len(w.null) == 3
    lam = rng.standard_normal(5)
    small = w.minimum_norm(lam)
    np.testing.assert_allclose(mix.T @ small, mix.T @ lam, rtol=1e-11)
    scaled = mix / w.spread[:, None]
    expected = np.linalg.pinv(scaled.T) @ (mix.T @ lam) / w.spread
    np.testing.assert_allclose(small, expected, rtol=1e-9)


def test_null_space_against_scipy(rng):
    base = rng.standard_normal((3, 30))
    mix = rng.standard_normal((5, 3))
    rows = mix @ base
    w = whiten(problem(rows))
    centred = rows - rows.mean(axis=1, keepdims=True)
    truth = null_space(centred.T, rcond=1e-12)
    found = np.linalg.qr(np.array(w.null).T)[0]
    np.testing.assert_allclose(found @ found.T, truth @ truth.T, atol=1e-12)


def test_contradiction_points_at_the_targets(rng):
    """Among several null combinations the one the targets contradict most is proposed, with positive margin."""
    rows = rng.standard_normal((2, 20))
    rows = np.array([rows[0], rows[1], rows[0] + rows[1], rows[0] - rows[1]])
    q = rows.mean(axis=1) + np.array([0, 0, 0.3, -0.4])
    p = problem(rows, q)
    best = max(p.verify(c)[0] for c in whiten(p).contradictions())
    # distance of the offset from the span of consistent ones
    consistent = np.array([[1, 0], [0, 1], [1, 1], [1, -1.0]]) / w_spread(rows)[:, None]
    miss = np.array([0, 0, 0.3, -0.4]) / w_spread(rows)
    rest = miss - consistent @ np.linalg.lstsq(consistent, miss, rcond=None)[0]
    c = rest / w_spread(rows)
    assert best >= abs(c @ np.array([0, 0, 0.3, -0.4])) / np.linalg.norm(c) * (1 - 1e-9)
    assert all(p.verify(c)[0] >= -1e-14 for c in whiten(p).contradictions())


def w_spread(rows):
    return rows.std(axis=1)


def test_triangle_of_tall_arrays(rng):
    """Passes of any length give the same Gram matrix as the whole array."""
    rows = rng.standard_normal((3, 1000))
    for step in (7, 100, 5000):
        r = tall_triangle(rows, step=step)
        np.testing.assert_allclose(r.T @ r, rows @ rows.T, rtol=1e-12)
    short = rng.standard_normal((4, 3))
    np.testing.assert_allclose(tall_triangle(short), short.T)


def test_nothing_to_whiten():
    w = whiten(problem(np.zeros((0, 4))))
    assert w.rank == 0 and w.null == ()
    w = whiten(problem([[1.0, 1.0], [0.0, 0.0]]))
    assert w.rank == 0 and len(w.null) == 2

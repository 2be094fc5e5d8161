"""The existence proof: R nu < 1/2 is never reached when there is no minimiser, whatever the residual says."""

from __future__ import annotations

import numpy as np
import pytest

from maxent.core.blocks import Blocks
from maxent.core.contract import EPS, SAFETY, Evaluation, Problem
from maxent.core.exists import minimiser_exists
from maxent.core.newton import begin, newton_step
from maxent.core.whiten import whiten
from tests.conformance.toy import Toy


def whitened(family, q):
    problem = Problem.pose(family, np.asarray(q, float))
    w = whiten(problem)
    return problem.family.combine(w.transform, np.zeros(w.rank)), np.abs(w.transform) @ problem.unit


def descended(family, steps=100):
    at = begin(family.evaluate, np.zeros(len(family.scale)))
    for _ in range(steps):
        at = newton_step(family.evaluate, at)
    return at


DIE = np.arange(1.0, 7.0)[None, :]


@pytest.mark.parametrize("mean", [1 + 1e-6, 1.01, 2.0, 3.5, 6 - 1e-4])
def test_proved_inside(mean):
    family, unit = whitened(Blocks(DIE), [mean])
    ok, shift, evidence = minimiser_exists(family, descended(family), unit)
    assert (ok, evidence) == (True, "proved") and 0 <= shift < 0.5


@pytest.mark.parametrize("mean", [1.0, 6.0, 1 - 1e-15, 6 + 1e-3, 1 - 1e-10])
def test_never_on_or_outside(mean):
    """Also where the iteration has come to a residual of rounding size."""
    family, unit = whitened(Blocks(DIE), [mean])
    at = descended(family)
    ok, shift, _ = minimiser_exists(family, at, unit)
    assert not ok and shift >= 0.5


def test_never_at_any_point_of_the_path():
    """No iterate of a hopeless problem passes: proof does not depend on having converged."""
    for q in ([1.0, 1.0], [0.99, 1.0]):  # the corner of the parabola, and a point left of it
        family, unit = whitened(Blocks(np.array([DIE[0], DIE[0] ** 2])), q)
        at = begin(family.evaluate, np.zeros(2))
        for _ in range(60):
            assert not minimiser_exists(family, at, unit)[0]
            at = newton_step(family.evaluate, at)


def test_spin_close_to_its_sphere():
    """Quantum: pure states have no multipliers, all others have."""
    sigma = np.array([[[0, 1], [1, 0]], [[1, 0], [0, -1]]], float)
    blocks = Blocks(np.zeros((2, 0)), (sigma,))
    for depth in (0.5, 1e-3, 1e-6, 1e-9):
        family, unit = whitened(blocks, (1 - depth) * np.array([0.6, 0.8]))
        assert minimiser_exists(family, descended(family), unit)[0]
    for depth in (0.0, -1e-16, -1e-9):
        family, unit = whitened(blocks, (1 - depth) * np.array([0.6, 0.8]))
        assert not minimiser_exists(family, descended(family), unit)[0]


def test_accuracy_that_reaches_over_the_edge_is_not_proved():
    """A die with mean 1.01 known to 0.02 may be outside: no proof for every target in that range."""
    family, unit = whitened(Blocks(DIE), [1.01])
    at = descended(family)
    wide = unit * 0.02 / (SAFETY * EPS * 7)
    assert minimiser_exists(family, at, unit)[0]
    assert not minimiser_exists(family, at, wide)[0]


def test_the_largest_noise_that_is_proved_is_really_inside():
    """Growing the noise until the proof fails: at the last proof the whole interval of targets is reachable."""
    for mean in (1.001, 1.3, 3.0):
        family, _ = whitened(Blocks(DIE), [mean])
        at = descended(family)
        to_user = DIE.std()
        noise = 1e-15
        while minimiser_exists(family, at, np.array([noise * 1.1]))[0]:
            noise *= 1.1
        assert mean - noise * to_user > 1.0
        assert noise * to_user > 0.05 * (mean - 1.0)  # and the proof is not empty


class Boundless(Toy):
    """Without a stiffness bound the Hessian is probed."""

    def stiffness(self, lam, u, *, exact=True):
        return None

    def combine(self, matrix, offset):
        return Boundless(Toy.combine(self, matrix, offset).points)

    def evaluate(self, lam, order=2):
        return Blocks(self.points).evaluate(lam, order)


def test_probing_where_no_bound_is_known():
    for mean, exists in ((3.0, True), (1.01, True), (1.0, False), (0.9, False)):
        family, unit = whitened(Boundless(DIE), [mean])
        ok, _, evidence = minimiser_exists(family, descended(family), unit)
        assert (ok, evidence) == (exists, "tested")


def test_probe_that_leaves_the_domain_fails():
    class Edge(Boundless):
        def evaluate(self, lam, order=2):
            ev = Blocks(self.points).evaluate(lam, order)
            return ev if np.abs(lam).max() < 1e-9 else Evaluation(np.inf, ev.values, ev.covariance, 0.0, 0.0)

    at = begin(Blocks(DIE - 3.5).evaluate, np.zeros(1))
    ok, shift, evidence = minimiser_exists(Edge(DIE - 3.5), at, np.array([0.1]))
    assert (ok, evidence) == (False, "tested") and shift == np.inf

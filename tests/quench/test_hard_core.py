"""Coherence of hard-core bosons against many-body states and the infinite chain."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from maxent.lattice import Chain, formula
from maxent.quench import thermal_start
from maxent.quench.gaussian_evolution import gaussian_evolve
from maxent.quench.gaussian_starts import gaussian_ground, gaussian_thermal
from maxent.quench.hard_core import coherences, momentum_distribution
from maxent.quench.infinite_chains import HardCoreChain

HOP = "-(X[i]*X[i+1] + Y[i]*Y[i+1])/2"


def test_coherences_of_seven_sites():
    sites = Chain(7)
    text = f"{HOP} + 0.4*(-1)**i*Z[i] + 0.1*Z[0]"
    found = coherences(gaussian_thermal(formula(text, sites), 1.3).state, floor=0.0)
    exact = thermal_start(formula(text, sites), 1.3)
    for i in range(7):
        assert found[i, i] == pytest.approx(exact.mean(formula(f"0.5 - Z[{i}]/2", sites))[0], abs=1e-12)
        for j in range(i + 1, 7):
            word = f"(X[{i}]*X[{j}] + Y[{i}]*Y[{j}])/4"
            assert found[i, j] == found[j, i] == pytest.approx(exact.mean(formula(word, sites))[0], abs=1e-12)


def test_release_from_a_superlattice():
    """A long box after dephasing: in the middle the coherence of the infinite chain; momenta sum to the number."""
    size = 120
    hop = -(np.eye(size, k=1) + np.eye(size, k=-1))
    start = gaussian_ground(hop + np.diag(4.0 * (-1.0) ** np.arange(size)))
    late = gaussian_evolve(start, hop).dephased().state
    found = coherences(late)
    infinite = HardCoreChain().after_superlattice(4.0)
    for r in (1, 2, 3):
        expected = 0.25 * sum(infinite.mean_word({0: p, r: p}) for p in "XY")
        assert found[60, 60 + r] == pytest.approx(expected, abs=2e-4)
    k = 2 * np.pi * np.arange(size) / size
    n = momentum_distribution(late, k)
    assert n.mean() == pytest.approx(0.5) and np.all(n > 0) and n.argmax() == 0
    # the start has its atoms on every second site: coherence only in second order
    assert n[0] > 1.2 * n[size // 2]


def test_currents_are_refused():
    h = np.array([[0, 1j], [-1j, 0]])
    with pytest.raises(ValueError, match="without currents"):
        coherences(gaussian_thermal(h, 1.0).state)


def test_what_lies_beyond_the_floor():
    state = gaussian_thermal(formula(HOP, Chain(60)), 0.5).state
    assert_allclose(coherences(state), coherences(state, floor=0.0), atol=1e-12)

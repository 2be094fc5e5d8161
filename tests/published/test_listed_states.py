"""Listed states: what tests/outside/test_published.py leaves open, the counting of samples."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import gammaln

import maxent
from maxent.families import Microstates

#: Two samples of 50 throws; E. T. Jaynes, "Concentration of distributions at entropy maxima"
#: (1979), text after eq. 17: the first can be realised in 38220 times as many ways.
SAMPLES = np.array([[3, 4, 6, 8, 12, 17], [0, 1, 7, 16, 18, 8]])
RATIO = 38220


@pytest.fixture(scope="module")
def samples():
    """One listed state per sample, with the number of its orderings as degeneracy."""
    ways = gammaln(51) - gammaln(SAMPLES + 1).sum(1)
    return Microstates({"first": np.array([1.0, 0])}, log_weights=ways)


def test_ways_of_two_samples(samples):
    share = samples.state(np.zeros(1)).mean(np.array([1.0, 0]))
    assert share / (1 - share) == pytest.approx(RATIO, abs=1)
    # what makes both equally probable is the logarithm of the ratio
    result = maxent.solve(samples, {"first": 0.5})
    assert np.exp(result.multipliers["first"]) == pytest.approx(RATIO, abs=1)


def test_one_sample_alone_and_none(samples):
    edge = maxent.solve(samples, {"first": 1.0})
    # entropy is that of its orderings alone
    assert str(edge.verdict) == "boundary"
    assert edge.entropy == pytest.approx(gammaln(51) - gammaln(SAMPLES[0] + 1).sum(), rel=1e-14)
    assert str(maxent.solve(samples, {"first": 1 + 1e-6}).verdict) == "infeasible"

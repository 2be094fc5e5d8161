"""The general identities in numbers: forty random states with three charges (generator seeded with 5).

Own computation, each by a second route (differences of ln Z, of solved targets).  The same ensemble is tested without
its numbers in tests/outside/test_published.py.
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

import maxent
from maxent.families import Microstates

LAM = np.array([0.3, -0.2, 0.5])
TARGETS = np.array([-0.4634520142866787, 0.21445609793001003, -0.5008619033391957])
RESPONSE = [
    [-1.839462447425726, -0.12331570731401699, -0.32717479918091663],
    [-0.12331570731401688, -1.1242914455816608, -0.10511045889088574],
    [-0.32717479918091663, -0.10511045889088577, -1.9705408546927814],
]


@pytest.fixture(scope="module")
def charges():
    return np.random.default_rng(5).standard_normal((3, 40))


def solve(charges, targets=TARGETS):
    names = [f"q{j}" for j in range(len(charges))]
    return maxent.solve(Microstates(dict(zip(names, charges, strict=True))), dict(zip(names, targets, strict=True)))


def listed(result):
    return np.array(list(result.multipliers.values()))


def test_values_are_slopes_and_entropy_is_the_legendre_transform(charges):
    family = Microstates({f"q{j}": q for j, q in enumerate(charges)})
    assert_allclose(family.evaluate(LAM, 1).values, TARGETS, atol=1e-12)
    result = solve(charges)
    assert_allclose(listed(result), LAM, atol=1e-12)
    assert result.entropy == pytest.approx(3.5770528072381502, abs=1e-12)
    assert result.log_partition + LAM @ TARGETS == pytest.approx(3.5770528072381502, abs=1e-12)


def test_response_of_the_multipliers(charges):
    """d lam/dq = -covariance^-1."""
    assert_allclose(-np.linalg.inv(solve(charges).covariance), RESPONSE, atol=1e-11)


def test_mixed_charges(charges):
    """lam' = A^-T lam (E. T. Jaynes, "Where do we stand on maximum entropy?", 1979, B74) for one random A."""
    expected = np.array([0.393526623120808, 0.16552686207324127, 0.18195273208002824])
    # the mixing was not recorded: of all A with these lam' the one nearest to the identity, A^T lam' = lam
    mixing = np.eye(3) + np.outer(expected, LAM - expected) / (expected @ expected)
    result = solve(mixing @ charges, mixing @ TARGETS)
    assert_allclose(listed(result), expected, atol=1e-11)
    assert result.entropy == pytest.approx(3.5770528072381502, abs=1e-12)


def test_errors_of_the_multipliers_of_sampled_data(charges):
    """cov(lam) = covariance^-1/N (R. A. Fisher): fits to samples of 4000 draws,
    ratio of the traces 1."""
    number, rounds = 4000, 120
    result = solve(charges)
    p = np.exp(-LAM @ charges - result.log_partition)
    rng = np.random.default_rng(8)
    sampled = rng.multinomial(number, p / p.sum(), size=rounds) @ charges.T / number
    fits = np.array([listed(solve(charges, q)) for q in sampled])
    expected = np.trace(np.linalg.inv(result.covariance)) / number
    # three multipliers, `rounds` fits: the relative standard error of the sum of variances is at most sqrt(2/rounds)
    assert np.trace(np.cov(fits.T)) / expected == pytest.approx(1.0, abs=3 * np.sqrt(2 / rounds))


def test_redundant_and_contradicting_twins(charges):
    twice = np.vstack([charges, charges[0] - charges[1]])
    consistent = np.append(TARGETS, TARGETS[0] - TARGETS[1])
    result = solve(twice, consistent)
    assert str(result.verdict) == "solved" and len(result.redundancies) == 1
    assert result.entropy == pytest.approx(3.5770528072381502, abs=1e-12)
    assert str(solve(twice, consistent + [0, 0, 0, 0.01]).verdict) == "inconsistent"
    assert str(solve(charges, charges[:, 7] * 9).verdict) == "infeasible"

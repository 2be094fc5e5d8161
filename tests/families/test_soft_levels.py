"""Condensates in one-body matrices that do not commute, against levels with 40 digits."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest

import maxent
from maxent.families import Bilinears
from maxent.families.soft_levels import resolved


def hermitian(rng, n: int, is_complex: bool) -> np.ndarray:
    a = rng.standard_normal((n, n)) + (1j * rng.standard_normal((n, n)) if is_complex else 0)
    return (a + a.conj().T) / 2


def levels_at_40_digits(lam, charges) -> list[float]:
    with mpmath.workdps(40):
        total = mpmath.zeros(charges[0].shape[0])
        for x, h in zip(lam, charges, strict=True):
            total += mpmath.mpf(float(x)) * mpmath.matrix(h.tolist())
        return [float(x) for x in mpmath.eighe(total, eigvals_only=True)]


@pytest.mark.parametrize("is_complex", [False, True])
@pytest.mark.parametrize("lowest", [1e-4, 1e-8, 1e-12])
@pytest.mark.parametrize("few", [1, 2])
def test_small_levels_keep_their_digits(rng, is_complex, lowest, few):
    n = 9
    first, second = hermitian(rng, n, is_complex), hermitian(rng, n, is_complex)
    lam = np.array([0.7, -1.3, 1.0])
    e, u = np.linalg.eigh(0.7 * first - 1.3 * second)
    shift = (u * (-e + np.where(np.arange(n) < few, lowest * (1 + np.arange(n)), 1.0 + np.arange(n)))) @ u.conj().T
    charges = np.array([first, second, (shift + shift.conj().T) / 2])
    plain = np.linalg.eigh(np.tensordot(lam, charges, 1))
    found, vectors = resolved(lam, charges[:, None], plain[0][None], plain[1][None])
    exact = levels_at_40_digits(lam, charges)
    np.testing.assert_allclose(found[0], exact, rtol=1e-12)
    np.testing.assert_allclose(vectors[0].conj().T @ vectors[0], np.eye(n), atol=1e-14)


def test_levels_of_their_own_size_are_left_alone(rng):
    h = hermitian(rng, 5, False) + 20 * np.eye(5)
    e, u = np.linalg.eigh(h)
    found, vectors = resolved(np.ones(1), h[None, None], e[None], u[None])
    assert found[0] is not e and np.array_equal(found[0], e) and np.array_equal(vectors[0], u)


@pytest.mark.parametrize("is_complex", [False, True])
@pytest.mark.parametrize("smallest", [1e-5, 1e-8])
def test_condensates_in_matrices_are_solved(rng, is_complex, smallest):
    """1e5 and 1e8 bosons in a level that no charge has for its own."""
    hs = [hermitian(rng, 8, is_complex), hermitian(rng, 8, is_complex), np.eye(8)]
    lam = np.array([0.8, -1.1, 0.0])
    e, u = np.linalg.eigh(lam[0] * hs[0] + lam[1] * hs[1])
    lam[2] = smallest - e[0]
    held = (u / np.expm1(e - e[0] + smallest)) @ u.conj().T
    targets = {f"q{j}": float(np.trace(h @ held).real) for j, h in enumerate(hs)}
    result = maxent.solve(Bilinears(dict(zip(targets, hs, strict=True)), statistics="bosons"), targets)
    assert result.success
    np.testing.assert_allclose(list(result.multipliers.values()), lam, rtol=1e-5)
    assert result.state.mean(hs[2]) == pytest.approx(targets["q2"], rel=1e-6)
    assert abs(result.residuals["q2"]) <= 1e-8 * targets["q2"]


def test_a_condensate_beyond_the_edge_is_none(rng):
    """No state has more than every particle in the lowest level: the twin just outside is infeasible."""
    hs = {"a": hermitian(rng, 8, False), "n": np.eye(8)}
    lowest = np.linalg.eigvalsh(hs["a"])[0]
    family = Bilinears(hs, statistics="bosons")
    assert maxent.solve(family, {"a": 1e6 * lowest - 10, "n": 1e6}).verdict is maxent.Verdict.INFEASIBLE
    assert maxent.solve(family, {"a": 1e6 * lowest, "n": 1e6}).verdict is maxent.Verdict.BOUNDARY
    assert maxent.solve(family, {"a": 1e6 * lowest + 10, "n": 1e6}).success

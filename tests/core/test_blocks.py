"""The evaluator's parts: norms, rotations, eigenvalues, weights of hundreds of decades, long lists."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest

from maxent.core.blocks import PASS, Blocks, eigh, operator_norm, rotate, rotate_with


def hermitian(rng, d, *, is_complex=False):
    a = rng.standard_normal((d, d)) + (1j * rng.standard_normal((d, d)) if is_complex else 0)
    return 0.5 * (a + a.conj().T)


@pytest.mark.parametrize("is_complex", [False, True], ids=["real", "complex"])
@pytest.mark.parametrize("d", [1, 5, 140])
def test_eigenvectors(rng, d, is_complex):
    """Both LAPACK drivers: small, and large complex."""
    a = hermitian(rng, d, is_complex=is_complex)
    e, u = eigh(a.copy())
    np.testing.assert_allclose((u * e) @ u.conj().T, a, atol=1e-12 * max(1, d / 5))
    assert np.all(np.diff(e) >= 0)


@pytest.mark.parametrize("d", [3, 20, 60, 200])
def test_operator_norm(rng, d):
    """Exact when small, a few per cent low when large; never above; sign and shape of the spectrum do not matter."""
    for a in (hermitian(rng, d), -np.diag(np.arange(d) + 1.0), hermitian(rng, d, is_complex=True) - 30 * np.eye(d)):
        exact = np.abs(np.linalg.eigvalsh(a)).max()
        found = operator_norm(a, 0.0)
        assert (1 - 1e-13 if d <= 32 else 0.9) * exact <= found <= exact * (1 + 1e-12)


def test_operator_norm_need_not_be_known_below_another():
    a = np.array([[0.0, 1.0], [1.0, 0.0]])
    assert operator_norm(a, 5.0) <= 5.0
    assert operator_norm(a, 0.5) == pytest.approx(1.0)


def test_norm_of_two_sectors_that_do_not_talk(rng):
    """A large norm hidden in a corner that a single start vector could miss."""
    a = np.zeros((80, 80))
    a[:78, :78] = 1e-3 * hermitian(rng, 78)
    a[78, 79] = a[79, 78] = 7.0
    assert operator_norm(a, 0.0) == pytest.approx(7.0, rel=1e-6)


@pytest.mark.parametrize("is_complex", [False, True], ids=["real", "complex"])
def test_the_rotation_that_spares_a_product(rng, is_complex):
    charges = np.array([hermitian(rng, 6, is_complex=is_complex) for _ in range(3)])
    for lam in (np.array([1.0, -2.0, 0.3]), np.array([0.0, 1e-6, 0.0]), np.array([1e4, 1.0, 1e-4])):
        e, u = np.linalg.eigh(np.tensordot(lam, charges, axes=1))
        expected = np.array([u.conj().T @ q @ u for q in charges])
        np.testing.assert_allclose(rotate(charges, u), expected, atol=1e-13)
        np.testing.assert_allclose(rotate_with(charges, u, e, lam), expected, atol=1e-12)


def test_weights_of_hundreds_of_decades():
    """ln Z, value and variance at 50 digits with weights from e^-690 to e^690."""
    f, w = np.array([1.0, 2.0, 5.0, 7.0]), np.array([690.0, -690.0, 300.0, -2.0])
    blocks, lam = Blocks(f[None, :], prior=w), np.array([-97.5])
    with mpmath.workdps(50):
        terms = [mpmath.exp(mpmath.mpf(a) + mpmath.mpf("97.5") * b) for a, b in zip(w, f, strict=True)]
        z = mpmath.fsum(terms)
        mean = mpmath.fsum(t * x for t, x in zip(terms, f, strict=True)) / z
        variance = mpmath.fsum(t * (x - mean) ** 2 for t, x in zip(terms, f, strict=True)) / z
    ev = blocks.evaluate(lam)
    assert ev.log_partition == pytest.approx(float(mpmath.log(z)), rel=1e-15)
    assert ev.values[0] == pytest.approx(float(mean), rel=1e-12)
    assert ev.covariance[0, 0] == pytest.approx(float(variance), rel=1e-9)


def test_variance_does_not_drown_in_a_large_mean(rng):
    """Means are subtracted before anything is squared."""
    x = rng.standard_normal(50)
    for offset in (0.0, 1e7):
        ev = Blocks((x + offset)[None, :]).evaluate(np.array([0.3]))
        p = np.exp(-0.3 * x)
        p /= p.sum()
        assert ev.covariance[0, 0] == pytest.approx(p @ (x - p @ x) ** 2, rel=1e-7)


def test_long_lists_are_summed_in_passes(rng):
    n = 2 * PASS + 17
    rows = rng.standard_normal((2, n))
    ev = Blocks(rows).evaluate(np.array([0.4, -0.2]))
    p = np.exp(-np.array([0.4, -0.2]) @ rows)
    p /= p.sum()
    centred = rows - (rows @ p)[:, None]
    np.testing.assert_allclose(ev.values, rows @ p, rtol=1e-12)
    np.testing.assert_allclose(ev.covariance, (centred * p) @ centred.T, rtol=1e-12, atol=1e-15)


def test_ground_space_and_its_edges():
    """Levels within the tolerance are kept, the next one sets the gap; nothing kept and all kept are no face."""
    levels = np.array([0.0, 1e-13, 0.5, 2.0])
    diagonal = Blocks(levels[None, :])
    ground = diagonal.ground(np.ones(1), 1e-13)
    assert (ground.dimension, ground.gap) == (2, pytest.approx(0.25))
    assert ground.width == pytest.approx(0.5e-13)
    dense = Blocks(np.zeros((1, 0)), (np.diag(levels)[None],))
    ground = dense.ground(np.ones(1), 1e-13)
    assert (ground.dimension, ground.gap) == (2, pytest.approx(0.25))
    assert diagonal.ground(-np.ones(1), 1e-13) is None
    assert Blocks(levels[None, 2:]).ground(np.ones(1), 1e-13) is None


def test_lowest_across_diagonal_and_blocks():
    sx = np.array([[0.0, 1.0], [1.0, 0.0]])
    both = Blocks(np.array([[3.0, -0.5]]), (sx[None],))
    low = both.lowest(np.ones(1), with_values=True)
    assert (low.value, low.highest) == (pytest.approx(-1.0), 3.0)
    assert low.values[0] == pytest.approx(-1.0)
    assert both.lowest(-np.ones(1), with_values=True).values[0] == 3.0
    assert both.size == 4

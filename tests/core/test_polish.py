"""Exposing directions of known faces: what is proposed near them, and how fast the polish converges."""

from __future__ import annotations

import numpy as np
import pytest

from maxent.core.blocks import Blocks
from maxent.core.polish import (
    complement_of,
    face_sizes,
    matrix_of,
    normal_directions,
    normals,
    polish,
    polished_directions,
    separating,
    vectors_of,
)


def flat_face(rng, *, d=7, k=3, m=4, is_complex=False):
    """Shifted charges with a known exposing direction v: v.A >= 0 with a k-fold zero level, target inside that face."""
    a = rng.standard_normal((m, d, d)) + (1j * rng.standard_normal((m, d, d)) if is_complex else 0)
    a = 0.5 * (a + a.conj().transpose(0, 2, 1))
    u = np.linalg.qr(a[0])[0]
    exposing = (u * np.array([0.0] * k + list(rng.uniform(1, 3, d - k)))) @ u.conj().T
    v = rng.standard_normal(m)
    v /= np.linalg.norm(v)
    a = a - np.einsum("j,kab,k->jab", v, a, v) + v[:, None, None] * exposing
    a = 0.5 * (a + a.conj().transpose(0, 2, 1))
    rho = u[:, :k] @ np.diag(rng.dirichlet(np.ones(k) * 5)) @ u[:, :k].conj().T
    q = np.einsum("jab,ba->j", a, rho).real
    return Blocks(np.zeros((m, 0)), (a - q[:, None, None] * np.eye(d),)), v


@pytest.mark.parametrize("is_complex", [False, True], ids=["real", "complex"])
@pytest.mark.parametrize("k", [1, 2, 3])
def test_polish_converges_quadratically_to_the_direction(rng, is_complex, k):
    blocks, v = flat_face(rng, k=k, is_complex=is_complex)
    off = complement_of(v) @ rng.standard_normal(3)
    errors = []
    near = v + 1e-2 * off / np.linalg.norm(off)
    near /= np.linalg.norm(near)
    for passes in range(1, 7):
        found = polish(blocks, near, k, passes=passes)
        errors.append(np.linalg.norm(found - v))
    assert errors[-1] < 1e-13
    fast = [i for i in range(5) if 1e-7 < errors[i] < 5e-3]
    assert fast and all(errors[i + 1] < 100 * errors[i] ** 2 for i in fast)


@pytest.mark.parametrize("error", [1e-3, 1e-6, 1e-9])
def test_candidates_contain_the_sharp_direction(rng, error):
    """The ground space has dimension 2; the family does not say so, the levels do."""
    blocks, v = flat_face(rng, k=2)
    off = complement_of(v) @ rng.standard_normal(3)
    near = v + error * off / np.linalg.norm(off)
    found = list(polished_directions(blocks, near / np.linalg.norm(near)))
    assert min(np.linalg.norm(x - v) for x in found) < 1e-13
    assert max(blocks.lowest(x).value for x in found) > -1e-14 > blocks.lowest(near).value


def test_polish_does_not_pull_a_target_onto_the_boundary(rng):
    """Just outside by 1e-9: the best direction still shows the distance."""
    blocks, v = flat_face(rng, k=2)
    outside = blocks.combine(np.eye(4), -1e-9 * v)
    found = max(outside.lowest(x).value for x in polished_directions(outside, v))
    assert found == pytest.approx(1e-9, rel=1e-4)


def test_one_charge_has_nothing_to_polish():
    assert list(polished_directions(Blocks(np.zeros((1, 0)), (np.diag([0.0, 1.0])[None],)), np.ones(1))) == []


def test_face_sizes_come_by_the_size_of_the_gap():
    assert face_sizes(np.array([1e-15, 2e-15, 0.0, 1.0, 1.1]))[0] == 3
    assert face_sizes(np.array([0.0, 1e-8, 1.0, 1.1]))[:2] in ([2, 1], [1, 2])
    assert face_sizes(np.ones(3)) == []


def test_normals_of_points(rng):
    plane = np.linalg.qr(rng.standard_normal((5, 5)))[0]
    points = plane[:, :3] @ rng.standard_normal((3, 40))
    found = normals(points, 1e-12)
    np.testing.assert_allclose(found @ found.T, plane[:, 3:] @ plane[:, 3:].T, atol=1e-12)
    few = normals(points[:, :2], 1e-12)
    assert few.shape == (5, 3)
    assert np.abs(few.T @ points[:, :2]).max() < 1e-12


def test_normal_of_a_corner_lies_in_its_cone(rng):
    """At a corner the normals span everything; the proposal must have all other points above."""
    points = np.concatenate([np.zeros((3, 1)), rng.uniform(0.1, 2, (3, 30))], axis=1)
    v = np.array([1.0, -0.2, 0.3])
    v /= np.linalg.norm(v)
    found = list(normal_directions(points, np.array([1.0, 1e-9, 1e-9])))
    assert any((x @ points[:, 1:]).min() > 0 for x in found)


def test_separating_finds_a_direction_or_says_no(rng):
    above = rng.standard_normal((3, 20))
    above[0] = np.abs(above[0]) + 0.01
    y = separating(above)
    assert y is not None and (y @ above).min() > 0
    around = np.concatenate([above, -above], axis=1)
    assert separating(around) is None


@pytest.mark.parametrize("is_complex", [False, True], ids=["real", "complex"])
def test_matrices_as_vectors_keep_inner_products(rng, is_complex):
    a = rng.standard_normal((2, 4, 4)) + (1j * rng.standard_normal((2, 4, 4)) if is_complex else 0)
    a = 0.5 * (a + a.conj().transpose(0, 2, 1))
    x = vectors_of(a)
    assert x.shape == (2, 16 if is_complex else 10)
    assert x[0] @ x[1] == pytest.approx(np.trace(a[0] @ a[1]).real)
    for i in range(2):
        np.testing.assert_allclose(matrix_of(x[i], 4, is_complex), a[i], atol=1e-15)


def test_complement():
    v = np.array([0.6, 0.0, 0.8])
    c = complement_of(v)
    np.testing.assert_allclose(c.T @ c, np.eye(2), atol=1e-15)
    assert np.abs(v @ c).max() < 1e-15

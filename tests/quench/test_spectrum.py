"""Spectra by blocks against dense diagonalisation, with symmetry bases written out by hand."""

import numpy as np
import pytest
import scipy.sparse as sp
from numpy.testing import assert_allclose

from maxent.errors import ResourceError
from maxent.lattice import Ring, formula
from maxent.quench import Spectrum
from maxent.quench.windows import sharp_window
from tests.quench.momenta import momentum_basis

XXZ = "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.6*Sz[i]*Sz[i+1]"


@pytest.fixture(scope="module")
def turned():
    return Spectrum(formula(XXZ, Ring(6)), basis=momentum_basis(6))


@pytest.fixture(scope="module")
def dense():
    return formula(XXZ, Ring(6)).matrix().toarray()


def test_energies(turned, dense):
    assert_allclose(np.sort(turned.energies), np.linalg.eigvalsh(dense), atol=1e-13)
    assert_allclose(turned.width, np.ptp(np.linalg.eigvalsh(dense)), rtol=1e-13)
    assert max(b.size for b in turned.blocks) <= 4  # momentum x magnetisation; 20 without momenta
    assert sum(b.size for b in turned.blocks) == 64


def test_eigenvectors(turned, dense):
    vectors = turned.vectors(np.arange(64))
    assert_allclose(vectors.conj().T @ vectors, np.eye(64), atol=1e-12)
    assert_allclose(dense @ vectors, vectors * turned.energies, atol=1e-12)
    assert_allclose(turned.vectors([9]), vectors[:, [9]], atol=1e-15)


def test_there_and_back(turned):
    rng = np.random.default_rng(2)
    psi = rng.normal(size=(64, 3)) + 1j * rng.normal(size=(64, 3))
    assert_allclose(turned.vector(turned.amplitudes(psi)), psi, atol=1e-13)
    assert_allclose(turned.vector(turned.amplitudes(psi[:, 0])), psi[:, 0], atol=1e-13)


def test_only_blocks_with_weight_are_given_vectors():
    s = Spectrum(formula(XXZ, Ring(6)))
    psi = np.zeros(64)
    psi[0b000111] = 1.0
    s.amplitudes(psi)
    assert [v is not None for v in s._vectors] == [0b000111 in b.index for b in s.blocks]


def test_equal_energies_across_blocks(dense):
    """Every level of the isotropic ring of 4 has its multiplets: 16 states, distinct energies -2, -1, 0, 1."""
    s = Spectrum(formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1]", Ring(4)))
    labels = s.clusters()
    assert np.bincount(labels).tolist() == [1, 3, 7, 5]
    assert [round(float(s.energies[labels == k].mean()), 12) + 0.0 for k in range(4)] == [-2.0, -1.0, 0.0, 1.0]


def test_equal_energies_far_from_zero():
    """A constant of 1e7 costs digits of the energies, not their degeneracies."""
    h = formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1] + 1e7", Ring(4))
    assert np.bincount(Spectrum(h).clusters()).tolist() == [1, 3, 7, 5]


def test_multiple_of_the_identity_is_one_level():
    assert Spectrum(3.7 * np.eye(5)).clusters().tolist() == [0] * 5


def test_companions_join_blocks():
    h, field = formula(XXZ, Ring(4)), formula("Sx[i]", Ring(4))
    assert len(Spectrum(h).blocks) == 5
    assert len(Spectrum(h, companions=[field]).blocks) == 1


def test_thermal_weights_give_the_thermal_state(turned, dense):
    p = np.exp(-0.8 * turned.energies)
    state = turned.state(p / p.sum())
    e, v = np.linalg.eigh(dense)
    w = np.exp(-0.8 * e)
    rho = (v * (w / w.sum())) @ v.conj().T
    assert_allclose(state.density(), rho, atol=1e-13)
    assert_allclose(state.mean(formula("Sz[0]*Sz[2]", Ring(6)).matrix()),
                    np.trace(rho @ formula("Sz[0]*Sz[2]", Ring(6)).matrix()).real, rtol=1e-11)  # fmt: skip
    assert_allclose(state.reduced([0, 1]), np.trace(rho.reshape(4, 16, 4, 16), axis1=1, axis2=3), atol=1e-13)
    w /= w.sum()
    assert_allclose(state.entropy, -w @ np.log(w), rtol=1e-12)


def test_windows_take_it(turned):
    assert sharp_window(turned, {"energy": (-1.0, 1.0)}).entropy > 1


def test_sector(dense):
    """An isometry onto zero magnetisation."""
    keep = [n for n in range(64) if n.bit_count() == 3]
    basis = sp.eye_array(64, format="csc")[:, keep].tocsr()
    s = Spectrum(formula(XXZ, Ring(6)), basis=basis)
    assert_allclose(np.sort(s.energies), np.linalg.eigvalsh(dense[np.ix_(keep, keep)]), atol=1e-13)
    psi = np.zeros(64)
    psi[0b010101] = 1.0
    assert_allclose(s.vector(s.amplitudes(psi)), psi, atol=1e-14)
    psi[[0b010101, 0]] = 0.8, 0.6
    with pytest.raises(ValueError, match="the start has weight 0.36 outside the sector"):
        s.amplitudes(psi)


class TestBadInput:
    def test_leaving_the_sector(self):
        basis = sp.eye_array(16, format="csc")[:, [1, 2]].tocsr()
        with pytest.raises(ValueError, match="the Hamiltonian leads out of the basis: entries of 5.0e-01"):
            Spectrum(formula(XXZ, Ring(4)), basis=basis)

    @pytest.mark.parametrize(
        "keywords, message",
        [
            ({"basis": np.eye(3)}, "the basis has 3 rows, the Hamiltonian dimension 4"),
            ({"basis": np.ones((4, 1))}, "not orthonormal"),
            ({"companions": [np.eye(3)]}, "companion 0 has dimension 3, the Hamiltonian 4"),
            ({"dims": (2, 3)}, "multiply to 6, the Hamiltonian has dimension 4"),
        ],
    )
    def test_sizes(self, keywords, message):
        with pytest.raises(ValueError, match=message):
            Spectrum(np.diag([1.0, 2, 3, 4]), **keywords)

    def test_not_hermitian(self):
        with pytest.raises(ValueError, match="the Hamiltonian is not Hermitian: .* is 1.0e"):
            Spectrum([[0, 1], [0, 0]])
        with pytest.raises(ValueError, match="the Hamiltonian is not Hermitian: the word"):
            Spectrum(formula("Splus[0]", Ring(2)))

    def test_start_of_another_length(self, turned):
        with pytest.raises(ValueError, match=r"the start has shape \(32,\), the Hamiltonian dimension 64"):
            turned.amplitudes(np.ones(32))

    @pytest.mark.parametrize("weights, message", [
        (np.ones(3) / 3, "must have shape"), (np.full(64, 1 / 63), "their sum is 1.015873"),
        (np.concatenate([[-0.1, 1.1], np.zeros(62)]), "the lowest -0.1"),
    ])  # fmt: skip
    def test_weights(self, turned, weights, message):
        with pytest.raises(ValueError, match=message):
            turned.state(weights)

    def test_memory_is_asked_before_work(self, monkeypatch):
        h = formula("Sx[i]*Sz[i+1] + Sz[i]", Ring(8)).matrix()
        monkeypatch.setattr("maxent.memory.available_memory", lambda: 1 << 20)
        with pytest.raises(ResourceError, match="256 states in blocks of up to 256 need 2 MiB for eigenvectors"):
            Spectrum(h)

    def test_progress_is_told(self):
        said = []
        found = Spectrum(formula("Sx[i]*Sz[i+1] + Sz[i] + Sx[i]", Ring(7)), progress=said.append)
        assert found.width > 0
        assert said == ["energies: block 1 of 1, 128 states"]

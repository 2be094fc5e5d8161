"""Dephased states against superoperators, long averages and published values."""

import numpy as np
import pytest
import scipy.linalg as sla
from numpy.testing import assert_allclose

from maxent.families.density import MatricesState
from maxent.lattice import ProductState, Ring, formula
from maxent.quench import Spectrum, Start, dephase, ground_start, thermal_start
from tests.quench.momenta import momentum_basis

HEISENBERG = "X[i]*X[i+1] + Y[i]*Y[i+1] + Z[i]*Z[i+1]"
# own computation by two routes: projections on energies, kernel of the 1024-dimensional superoperator [H, .]
DEGENERATE = {"Z[0]*Z[1]": -0.1462439251657204, "X[0]": 0.36071501064175576, "Z[0]*X[1]": 0.187696532405927}


def by_kernel(h, rho):
    """Projection of a density matrix on everything that commutes with H."""
    d = len(h)
    kernel = sla.null_space(np.kron(h, np.eye(d)) - np.kron(np.eye(d), h.T), rcond=1e-11)
    return (kernel @ (kernel.conj().T @ rho.ravel())).reshape(d, d)


@pytest.fixture(scope="module")
def degenerate_start():
    return Start.from_vector(ProductState(Ring(5), [0.3, 1.9, 0.8, 2.4, 1.2], [0.1, 0.7, -0.4, 1.1, 2.0]))


@pytest.fixture(scope="module", params=["pattern", "momenta"])
def degenerate(request, degenerate_start):
    """Isotropic ring of 5, whose energies are highly degenerate across blocks."""
    basis = momentum_basis(5) if request.param == "momenta" else None
    return dephase(Spectrum(formula(HEISENBERG, Ring(5)), basis=basis), degenerate_start)


@pytest.mark.parametrize("text", DEGENERATE)
def test_equal_energies_keep_their_coherence(degenerate, text):
    assert_allclose(degenerate.state.mean(formula(text, Ring(5)).matrix()), DEGENERATE[text], rtol=1e-12)


def test_entropy_and_number_of_energies(degenerate):
    assert len(degenerate.energies) == 6
    assert degenerate.degenerate == 6
    assert_allclose(degenerate.entropy, 1.6483083797577878, rtol=1e-12)
    assert isinstance(degenerate.state, MatricesState)


def test_diagonal_of_single_eigenvectors_is_wrong(degenerate, degenerate_start):
    """The trap: the same start, diagonal in the eigenvectors of magnetisation blocks, has <X> = 0."""
    spectrum = Spectrum(formula(HEISENBERG, Ring(5)))
    p = np.abs(spectrum.amplitudes(degenerate_start.vectors[:, 0])) ** 2
    x = formula("X[0]", Ring(5)).matrix()
    assert abs(spectrum.state(p).mean(x)) < 1e-12
    assert degenerate.state.mean(x) > 0.36


def test_whole_state_and_reduced_states(degenerate, degenerate_start):
    h = formula(HEISENBERG, Ring(5)).matrix().toarray()
    psi = degenerate_start.vectors[:, 0]
    exact = by_kernel(h, np.outer(psi, psi.conj()))
    assert_allclose(degenerate.state.density(), exact, atol=1e-12)
    block = np.trace(exact.reshape(4, 8, 4, 8), axis1=1, axis2=3)
    assert_allclose(degenerate.state.reduced([0, 1]), block, atol=1e-13)


def test_mixed_start():
    """sum_n P_n rho P_n of a thermal state of another Hamiltonian, which does not commute."""
    ring = Ring(4)
    h = formula(HEISENBERG, ring)
    start = thermal_start(formula("Z[i]*Z[i+1] + 0.7*X[i] + 0.3*Z[0]", ring), 0.6)
    found = dephase(h, start)
    rho = (start.vectors * start.weights) @ start.vectors.conj().T
    exact = by_kernel(h.matrix().toarray(), rho)
    assert_allclose(found.state.density(), exact, atol=1e-12)
    p = np.linalg.eigvalsh(exact)
    assert_allclose(found.entropy, -np.sum(p[p > 1e-14] * np.log(p[p > 1e-14])), rtol=1e-10)
    assert_allclose(found.weights.sum(), 1.0, rtol=1e-14)
    assert found.state.mean(h.matrix()) == pytest.approx(start.mean(h)[0], abs=1e-12)


def test_stationary_start_stays():
    h = formula(HEISENBERG, Ring(4))
    start = thermal_start(h, 0.4)
    rho = (start.vectors * start.weights) @ start.vectors.conj().T
    assert_allclose(dephase(h, start).state.density(), rho, atol=1e-13)


def test_effective_dimension():
    h = np.diag([0.0, 0.0, 1.0, 2.0])
    assert_allclose(dephase(h, [0.5, 0.5, 0.5, 0.5]).effective_dimension, 1 / (0.25 + 2 / 16))
    assert_allclose(dephase(h, [0.0, 0, 0, 1]).effective_dimension, 1.0)


@pytest.mark.parametrize("size, mean, energy", [
    (8, 0.5027462337846147, -0.7268640746651728), (12, 0.5161532883171293, -0.725820197411427),
])  # fmt: skip
def test_transverse_field_ring(size, mean, energy):
    """h0 = 2 -> h = 0.5: stationary <sigma_z> and energy per site of a finite ring, closed form finite sums.

    P. Calabrese, F. H. L. Essler, M. Fagotti, Phys. Rev. Lett. 106, 227203 (2011) and J. Stat. Mech. (2012) P07016.
    """
    ring = Ring(size)
    start = ground_start(formula("-X[i]*X[i+1] - 2*Z[i]", ring))
    h = formula("-X[i]*X[i+1] - 0.5*Z[i]", ring)
    found = dephase(Spectrum(h, basis=momentum_basis(size)), start)
    assert_allclose(found.state.mean(formula("Z[0]", ring).matrix()), mean, atol=1e-12)
    assert_allclose(found.energy / size, energy, atol=1e-12)
    assert_allclose(start.mean(h)[0] / size, energy, atol=1e-12)


def test_other_means_of_the_transverse_field_ring():
    """Own computation by two routes, dense and of free fermions; L = 8, h0 = 2 -> h = 0.5."""
    ring = Ring(8)
    found = dephase(formula("-X[i]*X[i+1] - 0.5*Z[i]", ring), ground_start(formula("-X[i]*X[i+1] - 2*Z[i]", ring)))
    values = {
        "X[0]*X[1]": 0.4754909577728641,
        "Z[0]*Z[1]": 0.34688515804132913,
        "X[0]*X[2]": 0.16662143700301585,
        "Y[0]*Y[1]": -0.09090514535687519,
    }
    for text, value in values.items():
        assert_allclose(found.state.mean(formula(text, ring).matrix()), value, atol=1e-12)


def test_entropy_is_half_of_that_of_the_modes():
    """h0 = 0.5 -> h = 2, L = 8: -sum_{k>0} [n ln n + (1-n) ln (1-n)], half the entropy of the mode ensemble.

    V. Gurarie, J. Stat. Mech. (2013) P02014; M. Kormos, L. Bucciantini, P. Calabrese, EPL 107, 40002 (2014).
    """
    ring = Ring(8)
    before, after = (formula(f"-X[i]*X[i+1] - {h}*Z[i]", ring) for h in (0.5, 2))
    assert_allclose(dephase(after, ground_start(before)).entropy, 1.293659249410484, atol=1e-9)


def test_alternating_state_on_an_xxz_ring():
    """L = 10, Delta = 3: infinite-time averages of <sz1 sz2>, <sz1 sz3> in sigma matrices.

    Own exact diagonalisation, degeneracies kept (group 6 of the published values, a single route).
    """
    ring = Ring(10)
    h = formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 3*Sz[i]*Sz[i+1]", ring)
    start = Start.from_vector(ProductState(ring, [0.0, np.pi], 0.0))
    found = dephase(Spectrum(h, basis=momentum_basis(10)), start)
    assert_allclose(found.state.mean(formula("Z[0]*Z[1]", ring).matrix()), -0.8208601614201364, atol=1e-9)
    assert_allclose(found.state.mean(formula("Z[0]*Z[2]", ring).matrix()), 0.6595136984143695, atol=1e-9)


class TestBadInput:
    def test_length_and_norm(self):
        with pytest.raises(ValueError, match=r"the start has shape \(2, 1\), the Hamiltonian dimension 4"):
            dephase(np.diag([1.0, 2, 3, 4]), [1.0, 0.0])
        with pytest.raises(ValueError, match="has norm 2, not 1"):
            dephase(np.diag([1.0, 2]), [2.0, 0.0])

    def test_not_hermitian(self):
        with pytest.raises(ValueError, match="the Hamiltonian is not Hermitian"):
            dephase([[0, 1], [0, 0]], [1.0, 0.0])

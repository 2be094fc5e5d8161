"""Known spectra and conserved quantities of small rings."""

import numpy as np
import pytest

from maxent.lattice import Chain, ProductState, Ring, formula

HEISENBERG = "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1]"
DENSITY = {"h": "J*(Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Delta*Sz[i]*Sz[i+1])"}
CURRENT = "1j*commutator(h[i], h[i+1])"


def levels(text, sites, parameters=None):
    return np.linalg.eigvalsh(formula(text, sites, parameters).matrix().toarray())


def test_heisenberg_ring_of_four_by_total_spin():
    # H = (S^2 - S_even^2 - S_odd^2)/2, S_even and S_odd each 0 or 1: levels -2 (1), -1 (3), 0 (7), 1 (5)
    expected = [-2.0] + [-1.0] * 3 + [0.0] * 7 + [1.0] * 5
    np.testing.assert_allclose(levels(HEISENBERG, Ring(4)), expected, atol=1e-13)


def test_heisenberg_ring_of_six():
    # lowest level -(2 + sqrt 13)/2: two-dimensional block of the fully symmetric singlets of the hexagon
    assert levels(HEISENBERG, Ring(6))[0] == pytest.approx(-(2 + np.sqrt(13)) / 2, abs=1e-12)


def test_heisenberg_open_chain_of_three():
    # H = (S^2 - S_2^2 - S_13^2)/2: -1 (2), 0 (2), 1/2 (4)
    np.testing.assert_allclose(levels(HEISENBERG, Chain(3)), [-1, -1, 0, 0, 0.5, 0.5, 0.5, 0.5], atol=1e-13)


@pytest.mark.parametrize("size", [6, 8])
def test_xx_ring_is_free_fermions(size):
    # E. Lieb, T. Schultz, D. Mattis, Ann. Phys. 16, 407 (1961): sum of cos k over the occupied half
    energy = levels("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1]", Ring(size))[0]
    assert energy == pytest.approx(-1 / np.sin(np.pi / size), abs=1e-12)


@pytest.mark.parametrize("field", [0.4, 1.0, 1.7])
def test_transverse_field_ising_ring(field):
    # P. Pfeuty, Ann. Phys. 57, 79 (1970): momenta (2n+1) pi / L in the even sector
    k = (2 * np.arange(8) + 1) * np.pi / 8
    expected = -np.sum(np.sqrt(1 + field**2 - 2 * field * np.cos(k)))
    assert levels("-X[i]*X[i+1] - g*Z[i]", Ring(8), {"g": field})[0] == pytest.approx(expected, abs=1e-11)


def test_moments_of_the_heisenberg_ring_are_exact():
    # ln Z / L = ln 2 + 3/32 b^2 + 1/64 b^3 + ..., so Tr H^2 / 2^L = 3 L / 16 and Tr H^3 / 2^L = -3 L / 32
    # (D. C. Johnston et al., Phys. Rev. B 61, 9558 (2000))
    op = formula(HEISENBERG, Ring(8))
    square = op * op
    assert str(square.words[()]) == "1.5"
    assert str((square * op).words[()]) == "-0.75"


@pytest.mark.parametrize("size", [6, 8])
@pytest.mark.parametrize("delta", [1.0, 0.6, -1.5])
def test_energy_current_of_the_xxz_ring_is_conserved(size, delta):
    parameters = {"J": 1.2, "Delta": delta}
    energy = formula("h[i]", Ring(size), parameters, DENSITY)
    magnetisation = formula("Sz[i]", Ring(size))
    current = formula(CURRENT, Ring(size), parameters, DENSITY, hermitian=True)
    assert current.range == 3
    # for every J and Delta at once, from the canonical words
    assert current.commutator(energy).terms == ()
    assert current.commutator(magnetisation).terms == ()
    a, b, c = (op.matrix() for op in (current, energy, magnetisation))
    assert abs(a @ b - b @ a).max() < 1e-12
    assert abs(a @ c - c @ a).max() < 1e-12
    assert abs(a).max() > 0.1


def test_energy_current_is_not_conserved_on_a_chain_or_without_the_commutator():
    parameters = {"J": 1.0, "Delta": 0.5}
    energy = formula("h[i]", Chain(6), parameters, DENSITY)
    assert formula(CURRENT, Chain(6), parameters, DENSITY).commutator(energy).terms != ()
    ring = formula("h[i]", Ring(6), parameters, DENSITY)
    other = formula("Sx[i]*(Sy[i+1]*Sz[i+2] - Sz[i+1]*Sy[i+2])", Ring(6))
    assert other.commutator(ring).terms != ()


TRIPLE = (
    "Sx[i]*(Sy[i+1]*Sz[i+2] - Sz[i+1]*Sy[i+2]) + Sy[i]*(Sz[i+1]*Sx[i+2] - Sx[i+1]*Sz[i+2])"
    " + Sz[i]*(Sx[i+1]*Sy[i+2] - Sy[i+1]*Sx[i+2])"
)


def test_isotropic_energy_current_is_the_triple_product():
    # i [S1.S2, S2.S3] = sum over a, b, c of S1_a S3_b i [S_2a, S_2b] = -S1_a S3_b eps_abc S_2c = S1.(S2 x S3)
    current = formula(CURRENT, Ring(6), {"J": 1.5, "Delta": 1}, DENSITY).matrix()
    triple = formula(f"J**2*({TRIPLE})", Ring(6), {"J": 1.5}).matrix()
    assert abs(current - triple).max() < 1e-14


def test_energy_current_in_product_states():
    ring = Ring(10)
    parameters = {"J": 1.0, "Delta": 1.0}
    current = formula(CURRENT, ring, parameters, DENSITY)
    theta, q = np.pi / 3, 2 * np.pi / 10
    spiral = ProductState(ring, theta, "2*pi*i/L")
    # n_i . (n_{i+1} x n_{i+2}) of a cone: sin^2 cos (2 sin q - sin 2q), spins of length 1/2
    expected = 10 / 8 * np.sin(theta) ** 2 * np.cos(theta) * (2 * np.sin(q) - np.sin(2 * q))
    assert spiral.mean(current) == pytest.approx(expected, abs=1e-14)
    assert abs(expected) > 0.05
    for start in (
        ProductState(ring, theta, 0.4),
        ProductState(ring, [0, "pi"], 0.0),
        ProductState(ring, [theta, 2.5], [0.3, 1.1]),
        ProductState(ring, "pi/2", "2*pi*i/L"),
    ):
        assert start.mean(current) == pytest.approx(0, abs=1e-15)

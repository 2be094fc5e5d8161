"""Conservation against closed forms, dense commutators and known charges of published models."""

import numpy as np
import pytest
import scipy.sparse as sp
from numpy.testing import assert_allclose

import maxent
from maxent.families import Matrices
from maxent.lattice import Bosons, ProductState, Ring, formula
from maxent.quench import Start, check_conservation, dephase, ground_start, require_conserved, state_defect

RING = Ring(6)
XXZ = formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.6*Sz[i]*Sz[i+1]", RING)
SPIN = {a: formula(f"S{a}[i]", RING) for a in "xyz"}
# -sum X X - h sum Z, h = 1/2, and two of its further charges in the form published for every range
ISING = {
    "H": "-X[i]*X[i+1] - 0.5*Z[i]",
    "I1": "-(X[i]*Z[i+1]*X[i+2] - Z[i]) + 0.5*(X[i]*X[i+1] + Y[i]*Y[i+1])",
    "I2": "-(X[i]*Z[i+1]*Z[i+2]*X[i+3] + Y[i]*Y[i+1]) + 0.5*(X[i]*Z[i+1]*X[i+2] + Y[i]*Z[i+1]*Y[i+2])",
    "S1": "X[i]*Y[i+1] - Y[i]*X[i+1]",
}


def dense_defect(h, q):
    h, q = (m.toarray() if sp.issparse(m) else np.asarray(m) for m in (h, q))
    q = q - np.trace(q) / len(q) * np.eye(len(q))
    return np.linalg.norm(h @ q - q @ h) / (np.ptp(np.linalg.eigvalsh(h)) * np.linalg.norm(q))


def test_one_spin():
    """[Sz, Sx] = i Sy: |i Sy| = |Sx| and the width of Sz is 1, so that the defect is 1: the largest possible."""
    s = np.array([[0, 0.5], [0.5, 0]])
    found = check_conservation(np.diag([0.5, -0.5]), {"x": s, "z": np.diag([3.0, 1.0])})
    assert_allclose(found.charges["x"].defect, 1.0, rtol=1e-14)
    assert found.charges["z"].verdict == "conserved"
    assert found.broken == ("x",)


def test_words_are_exact_and_matrices_agree():
    exact = check_conservation(XXZ, SPIN)
    numeric = check_conservation(XXZ.matrix(), {n: q.matrix() for n, q in SPIN.items()})
    for name in SPIN:
        a, b = exact.charges[name], numeric.charges[name]
        assert (a.exact, b.exact) == (True, False)
        assert_allclose(a.defect, b.defect, atol=1e-15)
        assert_allclose(a.defect, dense_defect(XXZ.matrix(), SPIN[name].matrix()), atol=1e-14)
    assert exact.charges["z"].defect == 0.0
    assert exact.broken == numeric.broken == ("x", "y")


def test_non_commuting_charges_of_the_isotropic_ring():
    """[Sx, Sy] = i Sz for the total spin: |Sz|/(width(Sx) |Sy|) = 1/L."""
    found = check_conservation(formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1]", RING), SPIN)
    assert found.broken == ()
    assert found.clashes == (("x", "y"), ("x", "z"), ("y", "z"))
    assert_allclose(found.mutual[np.triu_indices(3, 1)], 1 / 6, rtol=1e-12)
    assert "their states are stationary all the same" in found.message
    assert require_conserved(found, ["x", "y"]) == ""


def test_charges_of_the_transverse_field_ring():
    """Four charges of range 2 to 4 commute with H and with each other; the start h0 = 2 keeps their values."""
    ring = Ring(8)
    charges = {n: formula(text, ring) for n, text in ISING.items()}
    dephased = dephase(charges["H"], ground_start(formula("-X[i]*X[i+1] - 2*Z[i]", ring)))
    found = check_conservation(charges["H"], charges, dephased=dephased)
    assert found.broken == () and found.clashes == ()
    # targets of two routes, dense and of free fermions
    values = [-5.814912597321382, 7.316698577698826, 1.4899233795357933, 0.0]
    for name, value in zip(ISING, values, strict=True):
        charge = found.charges[name]
        assert abs(charge.value - value) < 1e-12
        assert charge.drift < 1e-12


def test_drift_and_refusal():
    start = Start.from_vector(ProductState(RING, [0.4, 1.1], 0.0))
    found = check_conservation(XXZ, SPIN, dephased=dephase(XXZ, start))
    assert found.charges["z"].drift < 1e-13
    assert_allclose(found.charges["x"].drift, abs(found.charges["x"].value - found.charges["x"].dephased))
    assert found.charges["x"].drift > 0.1
    with pytest.raises(ValueError) as caught:
        require_conserved(found, ["z", "x"])
    text = str(caught.value)
    assert "\n" not in text and "'z'" not in text
    assert text.startswith("'x' is not conserved: its commutator with the Hamiltonian is 0.0")
    assert "drifts by" in text and "the least biased state at one instant" in text
    note = require_conserved(found, ["z", "x"], insist=["x"])
    assert note.startswith("Not stationary: 'x' is not conserved")
    with pytest.raises(ValueError, match="'x' is not conserved.* and 'y' is not conserved.*leave them out"):
        require_conserved(found, SPIN)


def test_multiples_of_the_identity_and_constants():
    found = check_conservation(XXZ.matrix() + 50 * sp.eye_array(64), {"one": np.eye(64), "z": SPIN["z"].matrix()})
    assert found.charges["one"].defect == 0.0 and found.broken == ()
    shifted = check_conservation(XXZ, {"x": SPIN["x"].matrix() + 1e6 * sp.eye_array(64)})
    assert_allclose(shifted.charges["x"].defect, dense_defect(XXZ.matrix(), SPIN["x"].matrix()), rtol=1e-9)


def test_nearly_conserved_is_told_from_rounding():
    """Boundary twin: a field of 1e-6 across breaks Sz by 1e-6, far above the tolerance."""
    h = XXZ.matrix() + 1e-6 * SPIN["x"].matrix()
    charge = check_conservation(h, {"z": SPIN["z"].matrix()}).charges["z"]
    assert not charge.conserved
    assert 1e-8 < charge.defect < 1e-6


def test_rounded_coefficients_count_as_conserved():
    """Decimals of a charge cut after 12 digits leave a commutator of 1e-13, exactly formed as it is."""
    ring = Ring(8)
    text = "0.333333333333*(X[i]*Z[i+1]*X[i+2] - Z[i]) - 0.166666666667*(X[i]*X[i+1] + Y[i]*Y[i+1])"
    charge = check_conservation(formula(ISING["H"], ring), {"I1": formula(text, ring)}).charges["I1"]
    assert charge.exact and charge.conserved
    assert 0 < charge.defect < 1e-11


class TestStates:
    def test_against_the_dense_commutator(self):
        """A state of Sx and H is not stationary; relative |[H, rho]| by dense algebra."""
        h, x = XXZ.matrix(), SPIN["x"].matrix()
        state = Matrices({"h": h, "x": x}, dims=RING.dims).state(np.array([0.7, 0.4]))
        rho, dense = state.density(), h.toarray()
        exact = np.linalg.norm(dense @ rho - rho @ dense) / (np.ptp(np.linalg.eigvalsh(dense)) * np.linalg.norm(rho))
        assert_allclose(state_defect(XXZ, state), exact, rtol=1e-11)
        assert exact > 1e-3

    def test_stationary_states(self):
        start = Start.from_vector(ProductState(RING, [0.4, 1.1, 2.0], 0.3))
        assert state_defect(XXZ, dephase(XXZ, start).state) < 1e-14
        thermal = maxent.solve(Matrices({"h": XXZ.matrix(), "z": SPIN["z"].matrix()}), {"h": -1.0, "z": 0.5}).state
        assert state_defect(XXZ, thermal) < 1e-13

    def test_part_of_the_space(self):
        """A pure start as a state of rank 1: |[H, rho]|_F = sqrt(2 Var H)."""
        start = Start.from_vector(ProductState(RING, [0.4, 1.1, 2.0], 0.3))
        frozen = dephase(np.zeros((64, 64)), start).state
        width = np.ptp(np.linalg.eigvalsh(XXZ.matrix().toarray()))
        assert_allclose(state_defect(XXZ, frozen), np.sqrt(2 * start.variance(XXZ)) / width, rtol=1e-12)

    def test_sector_that_is_left(self):
        """One basis state of a spin along z under a field along x: |[Sx, P]|_F = 1/sqrt 2, width 1."""
        state = Matrices({"one": np.ones((1, 1))}, basis=np.array([[1.0], [0.0]])).state(np.zeros(1))
        assert_allclose(state_defect([[0, 0.5], [0.5, 0]], state), 0.5**0.5, rtol=1e-14)

    def test_size(self):
        state = Matrices({"h": np.diag([0.0, 1.0])}).state(np.ones(1))
        with pytest.raises(ValueError, match="the Hamiltonian has dimension 64, the state 2"):
            state_defect(XXZ, state)


class TestBadInput:
    def test_mixed_sizes(self):
        with pytest.raises(ValueError, match="different dimensions: the Hamiltonian 64, charge 'q' 3"):
            check_conservation(XXZ, {"q": np.eye(3)})

    def test_not_hermitian(self):
        with pytest.raises(ValueError, match="charge 'q' is not Hermitian"):
            check_conservation(XXZ, {"q": formula("Splus[i]", RING)})
        with pytest.raises(ValueError, match="the Hamiltonian is not Hermitian"):
            check_conservation(np.array([[0, 1], [0, 0]]), {})

    def test_unknown_name(self):
        with pytest.raises(ValueError, match="charge 'w' was not tested"):
            require_conserved(check_conservation(XXZ, SPIN), ["w"])


def test_a_cutoff_of_bosons_breaks_what_the_words_conserve():
    ring = Ring(4, Bosons(cutoff=2))
    hopping = formula("-dagger(b[i])*b[i+1] - dagger(b[i+1])*b[i]", ring)
    charges = {
        "number": formula("n[i]", ring),
        "current": formula("1j*dagger(b[i])*b[i+1] - 1j*dagger(b[i+1])*b[i]", ring),
    }
    found = check_conservation(hopping, charges)
    assert found.broken == ("current",) and not any(c.exact for c in found.charges.values())
    assert_allclose(found.charges["current"].defect, dense_defect(hopping.matrix(), charges["current"].matrix()))
    assert_allclose(found.charges["current"].defect, 0.0814, atol=5e-5)
    assert hopping.commutator(charges["current"]).words == {}  # without a cut-off they commute
    with pytest.raises(ValueError, match=r"'current' is not conserved: its commutator with the Hamiltonian is 0.0814"):
        require_conserved(found, ["current"])

"""Start states: values against closed forms and dense algebra, and bad input told in one line."""

import numpy as np
import pytest
import scipy.linalg as sla
from numpy.testing import assert_allclose

from maxent.errors import ResourceError
from maxent.lattice import Chain, ProductState, Ring, domain_wall, formula
from maxent.quench import Start, ground_start, read_start, thermal_start

SIGMA = {"x": np.array([[0, 1], [1, 0]]), "y": np.array([[0, -1j], [1j, 0]]), "z": np.diag([1, -1])}


def ising(size, field):
    """-sum X X - h sum Z on a ring."""
    return formula(f"-X[i]*X[i+1] - {field}*Z[i]", Ring(size))


class TestMeans:
    def test_bloch_vector(self):
        """<sigma> of a spin is its direction; Var sigma_a = 1 - n_a^2."""
        theta, phi = 1.1, 0.4
        start = Start.from_vector([np.cos(theta / 2), np.exp(1j * phi) * np.sin(theta / 2)])
        n = {"x": np.sin(theta) * np.cos(phi), "y": np.sin(theta) * np.sin(phi), "z": np.cos(theta)}
        for axis, matrix in SIGMA.items():
            value, accuracy = start.mean(matrix)
            assert abs(value - n[axis]) <= accuracy < 1e-14
            assert_allclose(start.variance(matrix), 1 - n[axis] ** 2, rtol=1e-13)
            assert_allclose(start.spread(matrix) ** 2, start.variance(matrix), rtol=1e-13)

    def test_vector_of_angles_agrees_with_the_product_formula(self):
        ring = Ring(6)
        state = ProductState(ring, [0.3, 1.9, 0.8], [0.1, 0.7, -0.4])
        h = formula("Sx[i]*Sx[i+1] + 0.7*Sy[i]*Sz[i+1] + 0.2*Sz[i]", ring)
        start = Start.from_vector(state)
        value, accuracy = start.mean(h)
        assert abs(value - state.mean(h)) <= accuracy < 1e-13
        assert_allclose(start.variance(h), state.variance(h), rtol=1e-12)

    def test_width_of_the_alternating_state(self):
        """Relative energy width sqrt(L/4)/L of the alternating state, J = 1 (closed form; published group 13)."""
        ring = Ring(8)
        h = formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1]", ring)
        start = Start.from_vector(ProductState(ring, [0.0, np.pi], 0.0))
        assert_allclose(start.spread(h) / 8, np.sqrt(8 / 4) / 8, rtol=1e-12)

    def test_domain_wall(self):
        """Left half up, right half down: six bonds of equal spins, two of unlike ones on a ring of 8."""
        ring = Ring(8)
        start = Start.from_vector(domain_wall(ring, ["up"], ["down"]))
        assert start.mean(formula("Sz[i]*Sz[i+1]", ring))[0] == (6 - 2) / 4
        assert [start.mean(formula(f"Sz[{i}]", ring))[0] for i in (0, 3, 4, 7)] == [0.5, 0.5, -0.5, -0.5]

    def test_sharp_charge_has_no_spread(self):
        ring = Ring(8)
        start = Start.from_vector(ProductState(ring, [0.0, np.pi], 0.0))
        assert start.spread(formula("Sz[i]", ring)) < 1e-15
        assert start.spread(formula("Sx[i]", ring)) > 1

    def test_known_error_of_a_vector_shows_in_the_mean(self):
        """A vector known to 1e-6 gives <Q> to 2e-6 times the spread of Q."""
        start = Start.from_vector([0.6, 0.8], accuracy=1e-6)
        _, accuracy = start.mean(SIGMA["z"])
        assert_allclose(accuracy, 2e-6 * np.sqrt(1 - 0.28**2), rtol=1e-3)
        true = np.array([np.cos(np.arccos(0.6) + 1e-6), np.sin(np.arccos(0.6) + 1e-6)])
        assert abs(true[0] ** 2 - true[1] ** 2 + 0.28) <= accuracy * 1.001

    def test_mixture(self):
        up, right = Start.from_vector([1, 0], label="up"), Start.from_vector([0.5**0.5, 0.5**0.5], label="right")
        mixed = Start.mixture([up, right], [0.25, 0.75])
        assert_allclose(mixed.mean(SIGMA["z"])[0], 0.25)
        assert_allclose(mixed.mean(SIGMA["x"])[0], 0.75)
        assert_allclose(mixed.variance(SIGMA["x"]), 1 - 0.75**2)
        assert not mixed.is_pure and up.is_pure

    def test_density_matrix(self):
        rng = np.random.default_rng(1)
        a = rng.normal(size=(6, 3)) + 1j * rng.normal(size=(6, 3))
        rho = a @ a.conj().T / np.linalg.norm(a) ** 2
        q = rng.normal(size=(6, 6))
        q = q + q.T
        start = Start.from_density(rho)
        assert start.vectors.shape == (6, 3)  # rank 3: nothing else has weight
        value, accuracy = start.mean(q)
        exact = np.trace(rho @ q).real
        assert abs(value - exact) < 1e-13 < accuracy * 1e3
        assert_allclose(start.variance(q), np.trace(rho @ q @ q).real - exact**2, rtol=1e-11)


class TestGroundStates:
    @pytest.mark.parametrize("field, energy", [(2.0, -17.01816447028056), (0.5, -8.50908223514028)])
    def test_energy_of_the_transverse_field_ring(self, field, energy):
        """Closed form -(1/2) sum_k eps_k of the even sector, P. Pfeuty, Ann. Phys. 57, 79 (1970); L = 8."""
        start = ground_start(ising(8, field))
        assert start.is_pure
        assert_allclose(start.mean(ising(8, field))[0], energy, rtol=1e-13)
        assert f"energy {energy:.10g}" in start.note

    def test_ferromagnet_is_mixed_over_its_whole_ground_space(self):
        """2S + 1 = L + 1 states of largest spin: every spin component vanishes in their equal mixture."""
        ring = Ring(6)
        start = ground_start(formula("-Sx[i]*Sx[i+1] - Sy[i]*Sy[i+1] - Sz[i]*Sz[i+1]", ring))
        assert start.vectors.shape[1] == 7
        assert "7-fold degenerate ground space" in start.note
        for axis in "xyz":
            assert abs(start.mean(formula(f"S{axis}[i]", ring))[0]) < 1e-12
        total = formula("Sz[i]*Sz[j] for i != j", ring)
        assert_allclose(start.mean(total)[0] + 6 / 4, 3 * 4 / 3, rtol=1e-12)  # <Sz^2> = S (S + 1)/3

    def test_large_space_finds_every_copy(self):
        """1024 states, ground level of the ferromagnet 11-fold: a Krylov space holds one of them."""
        ring = Ring(10)
        h = formula("-Sx[i]*Sx[i+1] - Sy[i]*Sy[i+1] - Sz[i]*Sz[i+1]", ring)
        start = ground_start(h)
        assert start.vectors.shape[1] == 11
        assert_allclose(start.vectors.conj().T @ start.vectors, np.eye(11), atol=1e-12)
        assert_allclose(start.mean(h)[0], -10 / 4, rtol=1e-12)
        gap = float(start.note.rsplit("next level ", 1)[1].split()[0])
        assert_allclose(gap, 1 - np.cos(2 * np.pi / 10), rtol=5e-3)  # one magnon of the smallest momentum

    @pytest.mark.parametrize("d", [40, 600])
    @pytest.mark.parametrize(
        ("gap", "vectors", "said"),
        [
            (0.0, 2, "2-fold degenerate ground space, taken as the equal mixture of all of it; energy -1, next"),
            (5e-11, 2, "the 2 lowest levels lie 1e-10 apart, 5e-11 of the width of the spectrum, and count as one"),
            (5e-10, 1, "energy -1, next level 1e-09 higher, only 5e-10 of the width of the spectrum: nearly "
                       "degenerate, but the lowest vector alone was taken."),
            (1e-6, 1, "energy -1, next level 2e-06 higher."),
        ],
    )  # fmt: skip
    def test_levels_that_nearly_meet(self, gap, vectors, said, d):
        """Levels -1, -1 + gap * width, then 0 to 1, in a rotated basis: what is taken, and the words for it."""
        levels = np.concatenate([[-1.0, -1.0 + 2 * gap], np.linspace(0.0, 1.0, d - 2)])
        rng = np.random.default_rng(3)
        a = rng.normal(size=d)
        mirror = np.eye(d) - 2 * np.outer(a, a) / (a @ a)
        start = ground_start((mirror * levels) @ mirror, label="trap")
        assert start.vectors.shape[1] == vectors
        assert start.note.startswith(f"trap: {said}")
        assert_allclose(start.weights, 1 / vectors)
        value, accuracy = start.mean((mirror * np.arange(d)) @ mirror)  # mean number of the level
        assert abs(value - (vectors - 1) / 2) <= accuracy < 1e-4

    def test_a_level_that_nearly_joins_a_mixture(self):
        start = ground_start(np.diag([0.0, 0.0, 1e-9, 0.5, 1.0]))
        assert start.vectors.shape[1] == 2
        assert start.note.endswith(
            "2-fold degenerate ground space, taken as the equal mixture of all of it; energy 0, next level 1e-09 "
            "higher, only 1e-09 of the width of the spectrum: nearly degenerate, but it is not part of the mixture."
        )

    def test_too_large_a_ground_space_is_refused(self):
        with pytest.raises(ValueError, match="holds more than 3 states"):
            ground_start(formula("-Sx[i]*Sx[i+1] - Sy[i]*Sy[i+1] - Sz[i]*Sz[i+1]", Ring(10)), most=3)

    def test_not_hermitian(self):
        with pytest.raises(ValueError, match="the Hamiltonian of the start is not Hermitian"):
            ground_start(np.array([[0, 1], [0, 0]]))


class TestThermalStates:
    @pytest.mark.parametrize("beta", [0.0, 0.7, -0.7, 40.0])
    def test_against_the_exponential(self, beta):
        chain = Chain(4)
        h = formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.4*Sz[i]*Sz[i+1] + 0.3*Sx[i]", chain)
        dense = h.matrix().toarray()
        rho = sla.expm(-beta * (dense - np.eye(16) * np.linalg.eigvalsh(dense)[0 if beta > 0 else -1]))
        rho /= np.trace(rho)
        start = thermal_start(h, beta)
        assert_allclose((start.vectors * start.weights) @ start.vectors.conj().T, rho, atol=1e-13)

    def test_cold_state_keeps_few_vectors(self):
        assert thermal_start(ising(6, 2.0), 20.0).vectors.shape[1] < 10

    @pytest.mark.parametrize("beta", [float("nan"), float("inf"), "cold"])
    def test_bad_beta(self, beta):
        with pytest.raises(ValueError, match="beta must be a finite number"):
            thermal_start(np.eye(2), beta)


class TestFiles:
    def test_vector_and_density(self, tmp_path):
        vector = np.array([0.6, 0.8j])
        np.save(tmp_path / "psi.npy", vector)
        np.savez(tmp_path / "two.npz", psi=vector, rho=np.diag([0.25, 0.75]))
        assert_allclose(read_start(tmp_path / "psi.npy").mean(SIGMA["y"])[0], 0.96)
        assert_allclose(read_start(f"{tmp_path}/two.npz:psi").mean(SIGMA["y"])[0], 0.96)
        start = read_start(f"{tmp_path}/two.npz:rho")
        assert_allclose(start.mean(SIGMA["z"])[0], -0.5)
        assert start.label == "two.npz:rho"

    def test_lone_array_needs_no_name(self, tmp_path):
        np.savez(tmp_path / "one.npz", psi=np.array([1.0, 0.0]))
        assert read_start(tmp_path / "one.npz").label == "one.npz:psi"

    @pytest.mark.parametrize(
        "name, message",
        [
            ("two.npz:phi", "has no array 'phi'; it holds 'psi', 'rho'"),
            ("two.npz", "more than one array, say which after a colon; it holds 'psi', 'rho'"),
            ("two.csv", "is no file of arrays"),
            ("objects.npy", "holds Python objects, which are not loaded"),
            ("zip.npy", "is not what its ending says"),
            ("cut.npy", "is damaged"),
            ("cut.npz:psi", "is damaged"),
        ],
    )
    def test_bad_files(self, tmp_path, name, message):
        np.savez(tmp_path / "two.npz", psi=np.ones(1), rho=np.eye(1))
        np.save(tmp_path / "objects.npy", np.array([{}, 1]), allow_pickle=True)
        whole = (tmp_path / "two.npz").read_bytes()
        (tmp_path / "zip.npy").write_bytes(whole)
        (tmp_path / "cut.npz").write_bytes(whole[:-40])
        np.save(tmp_path / "cut.npy", np.ones(50))
        (tmp_path / "cut.npy").write_bytes((tmp_path / "cut.npy").read_bytes()[:-8])
        with pytest.raises(ValueError, match=message) as caught:
            read_start(f"{tmp_path}/{name}")
        assert "\n" not in str(caught.value)

    def test_missing_file(self, tmp_path):
        with pytest.raises(FileNotFoundError):
            read_start(tmp_path / "none.npy")


class TestBadInput:
    @pytest.mark.parametrize(
        "vector, message",
        [
            ([1.0, 1.0], "has norm 1.414213562, not 1"),
            ([1 + 2e-8, 0.0], "has norm 1.00000002, not 1"),
            ([0.0, 0.0], "has norm 0, not 1"),
            ([np.nan, 1.0], "NaN or infinite"),
            ([[1.0, 0.0]], "a vector of amplitudes, not an array of shape"),
        ],
    )
    def test_vectors(self, vector, message):
        with pytest.raises(ValueError, match=message):
            Start.from_vector(vector)

    def test_rounded_vector_is_taken_and_counts_as_inaccurate(self):
        """Boundary twin: 9e-9 off is within what is set right."""
        start = Start.from_vector([1 + 9e-9, 0.0])
        assert_allclose(np.linalg.norm(start.vectors), 1.0, rtol=1e-15)
        assert 8e-9 < start.accuracy < 1e-8

    @pytest.mark.parametrize(
        "density, message",
        [
            (np.diag([0.5, 0.6]), "has trace 1.1, not 1"),
            (np.diag([1.2, -0.2]), "its lowest eigenvalue is -0.2, below 0"),
            ([[0.5, 0.1], [0.0, 0.5]], "is not Hermitian: .* is 1.0e-01 where .* is 5.0e-01"),
            (np.ones((2, 3)), "must be a square density matrix"),
        ],
    )
    def test_densities(self, density, message):
        with pytest.raises(ValueError, match=message):
            Start.from_density(density)

    def test_numbers(self):
        with pytest.raises(TypeError, match="must be made of numbers"):
            Start.from_vector(["a", "b"])

    def test_operator_of_another_size(self):
        with pytest.raises(ValueError, match="the operator has dimension 3, the start 'vector' 2"):
            Start.from_vector([1, 0]).mean(np.eye(3))

    @pytest.mark.parametrize("weights, message", [
        ([0.5, 0.6], "they sum to 1.1"), ([1.5, -0.5], "the lowest is -0.5"), ([1.0], "needs as many weights"),
    ])  # fmt: skip
    def test_weights(self, weights, message):
        with pytest.raises(ValueError, match=message):
            Start.mixture([Start.from_vector([1, 0]), Start.from_vector([0, 1])], weights)

    def test_mixed_sizes(self):
        parts = [Start.from_vector([1, 0], label="two"), Start.from_vector([0, 1, 0], label="three")]
        with pytest.raises(ValueError, match="different dimensions: 'two' 2, 'three' 3"):
            Start.mixture(parts, [0.5, 0.5])

    def test_memory_is_asked_before_work(self, monkeypatch):
        monkeypatch.setattr("maxent.memory.available_memory", lambda: 1 << 16)
        with pytest.raises(ResourceError, match="eigenvectors of start 'density matrix' over 64 states need"):
            Start.from_density(np.eye(64) / 64)

"""Gaussian starts and their motion against many-body vectors, matrices and closed forms."""

import numpy as np
import pytest
import scipy.linalg as sla
from numpy.testing import assert_allclose
from scipy.special import j0

from maxent.lattice import Bosons, Chain, Fermions, Ring, formula
from maxent.quench import Spectrum, dephase, ground_start, thermal_start
from maxent.quench.evolution import evolve
from maxent.quench.gaussian_evolution import gaussian_evolve
from maxent.quench.gaussian_starts import (
    gaussian_ground,
    gaussian_pattern,
    gaussian_state,
    gaussian_thermal,
    read_covariance,
    vacuum_parity,
)

CHARGES = {
    "energy": "-X[i]*X[i+1] - 0.6*Z[i] + 0.25",
    "second": "-X[i]*Z[i+1]*X[i+2] + 0.7*Y[i]*Z[i+1]*Y[i+2]",
    "odd": "X[i]*Y[i+1] - Y[i]*X[i+1]",
    "first": "Z[0] + 0.5*X[0]*X[1]",
    "hop": "dagger(c[i])*c[i+1] + h.c.",
}
STARTS = {
    "paramagnet": "-X[i]*X[i+1] - 2*Z[i]",
    "ferromagnet": "-X[i]*X[i+1] - 0.4*Z[i]",
    "turned": "Y[i]*Y[i+1] + 0.3*Z[i] + 0.2*X[i]*Z[i+1]*X[i+2]",
    "odd wins": "X[i]*X[i+1] + Y[i]*Y[i+1] - 0.3*Z[i]",
}


def spins(geometry, size, texts=None):
    chosen = {n: t for n, t in CHARGES.items() if n != "hop"} if texts is None else texts
    return {n: formula(t, geometry(size)) for n, t in chosen.items()}


# ------------------------------------------------------------------ starts


@pytest.mark.parametrize("geometry", [Ring, Chain])
@pytest.mark.parametrize("size", [3, 4, 7])
@pytest.mark.parametrize("name", STARTS)
def test_ground_states_of_spins(geometry, size, name):
    hamiltonian = formula(STARTS[name], geometry(size))
    found, exact = gaussian_ground(hamiltonian), ground_start(hamiltonian)
    for q in (*spins(geometry, size).values(), hamiltonian):
        value, accuracy = found.mean(q)
        assert_allclose(value, exact.mean(q)[0], atol=1e-11)
        assert accuracy < 1e-11


@pytest.mark.parametrize(("geometry", "size", "copies"), [(Ring, 6, 2), (Chain, 5, 2), (Ring, 3, 2)])
def test_degenerate_ground_states_are_said(geometry, size, copies):
    """Without a field both ferromagnets are ground states: the equal mixture, as for many-body matrices."""
    hamiltonian = formula("-X[i]*X[i+1]", geometry(size))
    found = gaussian_ground(hamiltonian)
    assert f"{copies}-fold degenerate ground level" in found.note
    exact = ground_start(hamiltonian)
    for q in spins(geometry, size).values():
        assert found.mean(q)[0] == pytest.approx(exact.mean(q)[0], abs=1e-11)


def test_free_levels_of_fermions():
    """Two free levels: four ground states on the whole space, two of each parity in a ring of spins."""
    text = "-(dagger(c[i])*c[i+1] + h.c.)"
    found = gaussian_ground(formula(text, Ring(4, Fermions())))  # two levels are zero
    assert "4-fold degenerate" in found.note
    exact = ground_start(formula(text, Ring(4, Fermions())))
    number = formula("(dagger(c[i])*c[i+2] + h.c.) + n[0]", Ring(4, Fermions()))
    assert found.mean(number)[0] == pytest.approx(exact.mean(number)[0], abs=1e-11)


@pytest.mark.parametrize("geometry", [Ring, Chain])
@pytest.mark.parametrize("beta", [0.0, 0.7, 40.0, -1.2])
def test_thermal_states_of_spins(geometry, beta):
    hamiltonian = formula(STARTS["ferromagnet"], geometry(6))
    found, exact = gaussian_thermal(hamiltonian, beta), thermal_start(hamiltonian, beta)
    for q in spins(geometry, 6).values():
        assert found.mean(q)[0] == pytest.approx(exact.mean(q)[0], abs=1e-11)


def test_pairs_of_fermions():
    text = "-(exp(0.4j)*dagger(c[i])*c[i+1] + h.c.) + 0.3*n[i] + (0.5*dagger(c[i])*dagger(c[i+1]) + h.c.)"
    sites = Ring(5, Fermions())
    hamiltonian, q = formula(text, sites), formula("(1j*dagger(c[0])*c[1] + (0.2+1j)*c[2]*c[3] + h.c.) + n[4]", sites)
    for found, exact in (
        (gaussian_ground(hamiltonian), ground_start(hamiltonian)),
        (gaussian_thermal(hamiltonian, 0.8), thermal_start(hamiltonian, 0.8)),
    ):
        assert found.mean(q)[0] == pytest.approx(exact.mean(q)[0], abs=1e-11)
        assert found.mean(q.one_body())[0] == pytest.approx(exact.mean(q)[0], abs=1e-11)


def test_bosons_against_closed_forms():
    """One mode w b+b + g (b^2 + h.c.)/2: the ground state has <b+b> = (w/e - 1)/2, e^2 = w^2 - g^2."""
    q = formula("w*n[i] + g/2*(b[i]*b[i] + h.c.) + l*(b[i] + h.c.)", Chain(1, Bosons()), {"w": 1.5, "g": 0.6, "l": 0.0})
    e = np.sqrt(1.5**2 - 0.6**2)
    assert gaussian_ground(q).mean(formula("n[0]", Chain(1, Bosons())))[0] == pytest.approx((1.5 / e - 1) / 2)
    warm = gaussian_thermal(q, 0.9)
    assert warm.mean(q)[0] == pytest.approx(e / (np.expm1(0.9 * e)) + (e - 1.5) / 2)
    assert_allclose(gaussian_thermal(q, 400.0).state.covariance, gaussian_ground(q).state.covariance, atol=1e-13)
    with pytest.raises(ValueError, match=r"no lowest level.*-0\.5"):
        gaussian_ground((np.eye(1), 1.5 * np.eye(1)), statistics="bosons")


def test_patterns():
    pattern = [1, 0, 0, 1, 1, 0]
    found = gaussian_pattern(pattern)
    assert found.label == "100110" and found.parts[0].parity == -1 == vacuum_parity(found.parts[0].covariance)
    for j, n in enumerate(pattern):
        assert found.mean(formula(f"Z[{j}]", Ring(6)))[0] == 1 - 2 * n
    assert found.mean(formula("X[i]*X[i+1]", Ring(6)))[0] == 0
    assert gaussian_pattern([0.5, 1]).parts[0].parity == 0
    with pytest.raises(ValueError, match=r"0\.\.1"):
        gaussian_pattern([0.5, 1.2])


def test_files(tmp_path):
    wanted = gaussian_ground(formula(STARTS["paramagnet"], Ring(6)))
    g = wanted.parts[0].covariance
    np.save(tmp_path / "g.npy", g)
    found = read_covariance(tmp_path / "g.npy")
    energy = formula(CHARGES["energy"], Ring(6))
    assert found.parts[0].parity == 1 and found.mean(energy)[0] == pytest.approx(wanted.mean(energy)[0])
    for bad, said in (
        (1.01 * g, r"\|iG\| reaches 1\.01"),
        (g + 0.1, "antisymmetric"),
        (g[:3, :3], "2n"),
        (np.full_like(g, np.nan), "finite"),
    ):
        with pytest.raises(ValueError, match=rf"start 'g'.*{said}"):
            gaussian_state(bad, label="g")
    with pytest.raises(ValueError, match="uncertainty relation"):
        gaussian_state(0.4 * np.eye(2), statistics="bosons")
    vacuum = gaussian_state(0.5 * np.eye(2), [1.0, 2.0], statistics="bosons")
    assert vacuum.mean(np.eye(1))[0] == pytest.approx(2.5)  # (x^2 + p^2)/2 of the displacement


def test_a_ring_needs_a_sharp_parity():
    with pytest.raises(ValueError, match="no sharp parity"):
        gaussian_pattern([0.5] * 6).mean(formula("X[i]*X[i+1]", Ring(6)))
    with pytest.raises(ValueError, match="6 modes, the start '10' 2"):
        gaussian_pattern([1, 0]).mean(formula("Z[i]", Ring(6)))
    with pytest.raises(ValueError, match="no quadratic form.*Sz"):
        gaussian_pattern([1, 0, 0, 1]).mean(formula("Z[i]*Z[i+1]", Chain(4)))


# ------------------------------------------------------------------ motion


@pytest.mark.parametrize("geometry", [Ring, Chain])
@pytest.mark.parametrize("before", ["paramagnet", "ferromagnet"])
def test_motion_of_spins(geometry, before):
    size = 6
    charges = spins(geometry, size)
    hamiltonian, h0 = charges["energy"], formula(STARTS[before], geometry(size))
    moved = gaussian_evolve(gaussian_ground(h0), hamiltonian, charges)
    exact = evolve(dephase(Spectrum(hamiltonian), ground_start(h0)), {n: q.matrix() for n, q in charges.items()})
    times = [0.0, 0.3, 2.0, 17.0]
    for name in charges:
        assert_allclose(moved.trace(name, times), exact.trace(name, times), atol=1e-10)
        assert_allclose(moved.average(name, (0.5, 9.0)), exact.average(name, 9.0, start=0.5), atol=1e-10)
        found = exact.fluctuation(name)
        assert_allclose([moved.long_time(name), moved.variance(name)], [found.mean, found.variance], atol=1e-10)
        assert moved.dephased().mean(charges[name])[0] == pytest.approx(found.mean, abs=1e-10)
    assert moved.variance("energy") < 1e-20
    assert moved.at(2.0).mean(charges["first"])[0] == pytest.approx(float(moved.trace("first", 2.0)[0]), abs=1e-12)


def test_motion_of_thermal_states_of_a_ring():
    """Both parities move, each by its own form."""
    charges, h0 = spins(Ring, 5), formula(STARTS["ferromagnet"], Ring(5))
    moved = gaussian_evolve(gaussian_thermal(h0, 0.6), charges["energy"], charges)
    exact = evolve(
        dephase(Spectrum(charges["energy"]), thermal_start(h0, 0.6)), {n: q.matrix() for n, q in charges.items()}
    )
    for name in charges:
        assert_allclose(moved.trace(name, [0.7, 5.0]), exact.trace(name, [0.7, 5.0]), atol=1e-10)
    assert "mixture of 2 parts" in str(pytest.raises(ValueError, lambda: moved.start.state).value)


def test_alternating_pattern_moves_as_a_bessel_function():
    """Infinite chain: <Z_j> = (-1)^(j+1) J_0(4 J t), exact until the ends are felt (closed form)."""
    sites = Chain(80)
    hop = formula("-0.5*(X[i]*X[i+1] + Y[i]*Y[i+1])", sites)
    moved = gaussian_evolve(gaussian_pattern([1, 0] * 40), hop, {"z": formula("Z[40]", sites)})
    times = np.linspace(0, 8, 17)
    assert_allclose(moved.trace("z", times), -j0(4 * times), atol=1e-10)


def test_equal_gaps_are_added_before_they_are_squared():
    """Two pairs of sites with equal splitting: their oscillations have one frequency."""
    h = np.kron(np.eye(2), [[0, 1], [1, 0]])
    n0 = np.diag([1.0, 0, 1, 0])
    moved = gaussian_evolve(gaussian_pattern([1, 0, 1, 0]), h, {"both": n0})
    assert_allclose(moved.trace("both", [0.0, 0.3]), [2.0, 1 + np.cos(0.6)])
    assert moved.variance("both") == pytest.approx(0.5)  # of 1 + cos(2 t)
    assert moved.long_time("both") == pytest.approx(1.0)


def test_motion_of_displaced_bosons():
    """Two coupled modes with a force: exact motion of R and V by the matrix exponential."""
    rng = np.random.default_rng(3)
    a = rng.normal(size=(4, 4))
    v = 0.5 * np.eye(4) + 0.1 * a @ a.T
    r = rng.normal(size=4)
    h, d, line = np.array([[1.2, 0.3], [0.3, 0.9]]), np.array([[0.2, 0.1], [0.1, -0.3]]), np.array([0.4, -0.2 + 0.3j])
    drive = (h, d, 0.5, line)
    number = (np.diag([1.0, 0.0]), None, 0.0, np.array([0.1, 0.0]))
    start = gaussian_state(v, r, statistics="bosons")
    moved = gaussian_evolve(start, drive, {"n": number, "energy": drive})
    m = np.block([[h.real + d, 0 * h], [0 * h, h.real - d]])
    force = np.sqrt(2) * np.array([0.4, -0.2, 0.0, 0.3])
    omega = np.block([[np.zeros((2, 2)), np.eye(2)], [-np.eye(2), np.zeros((2, 2))]])
    s, rest = sla.expm(1.7 * omega @ m), -np.linalg.solve(m, force)
    then = moved.at(1.7).state
    assert_allclose(then.displacement, rest + s @ (r - rest), atol=1e-12)
    assert_allclose(then.covariance, s @ v @ s.T, atol=1e-12)
    assert moved.trace("n", 1.7)[0] == pytest.approx(then.mean(number), abs=1e-12)
    assert_allclose(moved.trace("energy", [0.0, 1.7, 30.0]), start.mean(drive)[0], atol=1e-11)
    late = np.mean(moved.trace("n", np.linspace(0, 3000, 60001)))
    assert moved.long_time("n") == pytest.approx(late, abs=2e-3)
    assert moved.dephased().mean(number)[0] == pytest.approx(moved.long_time("n"), abs=1e-12)
    assert moved.variance("n") == pytest.approx(np.var(moved.trace("n", np.linspace(0, 3000, 60001))), rel=2e-2)
    with pytest.raises(ValueError, match="not a sum of oscillations"):
        gaussian_evolve(start, (np.zeros((2, 2)), None))


#: Three hard-core bosons in the ground state of a box of 4 sites, released into 10: site densities averaged over all
#: times and multipliers of the modes (M. Rigol, V. Dunjko, V. Yurovsky, M. Olshanii, Phys. Rev. Lett. 98, 050405
#: (2007), a small instance of the protocol; closed form, checked by exact diagonalisation of the 120 states).
BOX = [0.3525559359034048, 0.2814083184375024, 0.28140831843750236, 0.3119001544943177, 0.27272727272727276]
BOX_MULTIPLIERS = [
    0.754247442872756, 0.058474960312811596, 0.6316670227101828, 0.2183383468054676, 0.4381205434645664,
    0.45538388794911405, 0.2614622520966498, 1.8935478144366076, 5.147961501035776, 2.9431470082531286,
]  # fmt: skip


def test_published_release_of_hard_core_bosons_from_a_box():
    hop = -(np.eye(10, k=1) + np.eye(10, k=-1))
    inner = np.zeros((10, 10))
    inner[:4, :4] = hop[:4, :4]
    inner -= np.diag([1.0] * 4 + [0.0] * 6)  # three of the four levels below zero
    start = gaussian_ground(inner + np.diag([0.0] * 4 + [1.0] * 6))
    assert start.mean(np.eye(10))[0] == pytest.approx(3)
    late = gaussian_evolve(start, hop).dephased().state
    assert_allclose(late.occupations[:5], BOX, atol=1e-11)
    _, modes = np.linalg.eigh(hop)
    n = np.real(np.diag(modes.T @ late.number @ modes))
    assert_allclose(np.log(1 / n - 1), BOX_MULTIPLIERS, atol=1e-9)

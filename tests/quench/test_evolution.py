"""Means in time against matrix exponentials, quadrature and closed forms; equal gaps by hand."""

import numpy as np
import pytest
import scipy.linalg as sla
from numpy.testing import assert_allclose

from maxent.errors import ResourceError
from maxent.lattice import Chain, ProductState, Ring, formula
from maxent.quench import (
    Spectrum,
    Start,
    block_bound,
    dephase,
    evolve,
    plateau_window,
    revival_time,
    thermal_start,
)
from tests.quench.momenta import momentum_basis

MIXED = "Z[i]*Z[i+1] + 0.9045*X[i] + 0.8090*Z[i]"


@pytest.fixture(scope="module")
def small():
    """Isotropic ring of 5, degenerate energies, an observable that couples all blocks; reference by expm."""
    ring = Ring(5)
    h = formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1]", ring)
    start = Start.from_vector(ProductState(ring, [0.3, 1.9, 0.8, 2.4, 1.2], [0.1, 0.7, -0.4, 1.1, 2.0]))
    observables = {"x": formula("Sx[0]", ring), "zx": formula("Sz[0]*Sx[1] + Sy[2]", ring)}
    return h, start, observables


def by_exponential(h, start, q, t):
    u = sla.expm(-1j * t * h.matrix().toarray())
    moved = u @ start.vectors
    return float(start.weights @ np.real(np.einsum("ik,ik->k", moved.conj(), q.matrix() @ moved)))


@pytest.mark.parametrize("basis", [None, momentum_basis(5)], ids=["pattern", "momenta"])
@pytest.mark.parametrize("name", ["x", "zx"])
def test_trace(small, basis, name):
    h, start, observables = small
    found = evolve(Spectrum(h, basis=basis), observables, start=start)
    times = [0.0, 0.3, 7.0, -4.0]
    exact = [by_exponential(h, start, observables[name], t) for t in times]
    assert_allclose(found.trace(name, times), exact, atol=1e-13)
    assert_allclose(found.stationary(name), found.dephased.state.mean(observables[name].matrix()), atol=1e-13)


def test_mixed_start(small):
    h, _, observables = small
    start = thermal_start(formula("Z[i]*Z[i+1] + 0.7*X[i] + 0.3*Y[0]", Ring(5)), 0.6)
    found = evolve(h, observables, start=start)
    for t in (0.0, 1.3):
        assert_allclose(found.trace("zx", [t])[0], by_exponential(h, start, observables["zx"], t), atol=1e-13)
    nodes, weights = np.polynomial.legendre.leggauss(60)
    sampled = weights @ found.trace("zx", 4 * nodes + 4) / 2
    assert_allclose(found.average("zx", 8.0), sampled, atol=1e-12)


@pytest.fixture(scope="module")
def mixed_field():
    ring = Ring(10)
    start = Start.from_vector(ProductState(ring, 2.0, 0.5))
    spectrum = Spectrum(formula(MIXED, ring), basis=momentum_basis(10))
    return evolve(spectrum, {"x": formula("X[i]/10", ring)}, start=start)


def test_long_average(mixed_field):
    """Average over [0, 200] of the mean X, by 48000-point Gauss-Legendre quadrature (own computation, two routes)."""
    assert_allclose(mixed_field.average("x", 200.0), 0.22320554505481163, rtol=1e-12)
    assert_allclose(mixed_field.stationary("x"), 0.22257878783151508, rtol=1e-12)
    assert len(mixed_field.energies) == 78  # momentum 0, even under reflection


def test_averages_add_up(mixed_field):
    whole = 3 * mixed_field.average("x", 3.0) + 5 * mixed_field.average("x", 8.0, start=3.0)
    assert_allclose(whole / 8, mixed_field.average("x", 8.0), rtol=1e-13)


@pytest.mark.parametrize("length", [0.0, 1e-12, 1e-6])
def test_short_averages_are_the_mean_at_once(mixed_field, length):
    """(exp(ix) - 1)/(ix) would lose all digits here."""
    now = mixed_field.trace("x", [2.0])[0]
    slope = (mixed_field.trace("x", [2.0 + 1e-4])[0] - mixed_field.trace("x", [2.0 - 1e-4])[0]) / 2e-4
    assert_allclose(mixed_field.average("x", 2.0 + length, start=2.0), now + slope * length / 2, atol=1e-12)


def test_variance_is_that_of_a_long_trace(mixed_field):
    """All gaps differ: no group of two, and the variance agrees with a long stretch of the trace."""
    found = mixed_field.fluctuation("x")
    assert (found.largest_group, found.gaps, found.cut) == (1, 78 * 77 // 2, 0)
    times = np.random.default_rng(0).uniform(1e5, 1e8, 20000)
    assert_allclose(found.variance, mixed_field.trace("x", times).var(), rtol=0.05)


class TestEqualGaps:
    def test_two_spins(self):
        """Two spins turning together: <Sx> = cos t, variance 1/2; squares of single elements would give 1/4."""
        up, sx = np.diag([0.5, -0.5]), np.array([[0, 0.5], [0.5, 0]])
        both = lambda q: np.kron(q, np.eye(2)) + np.kron(np.eye(2), q)
        found = evolve(both(up), {"x": both(sx)}, start=np.full(4, 0.5))
        fluctuation = found.fluctuation("x")
        assert_allclose(fluctuation.variance, 0.5, rtol=1e-14)
        assert (fluctuation.gaps, fluctuation.largest_group) == (2, 2)
        assert_allclose(2 * np.sum(np.abs(np.triu(found.elements["x"], 1)) ** 2), 0.25, rtol=1e-14)
        assert_allclose(fluctuation.standard_deviation, 0.5**0.5)

    def test_open_chain(self):
        """XX + YY + ZZ/2 on 4 sites, tilted alternating start (0.7), <sigma_x> of the first site."""
        chain = Chain(4)
        h = formula("X[i]*X[i+1] + Y[i]*Y[i+1] + 0.5*Z[i]*Z[i+1]", chain)
        start = Start.from_vector(ProductState(chain, [0.7, np.pi - 0.7], [0, np.pi]))
        found = evolve(h, {"x": formula("X[0]", chain)}, start=start)
        assert_allclose(found.fluctuation("x").variance, 0.0923918, atol=5e-8)
        times = np.random.default_rng(1).uniform(0, 1e7, 40000)
        assert_allclose(found.trace("x", times).var(), 0.0923918, rtol=0.02)
        # the trap: elements between single eigenvectors, equal energies taken for different ones
        e, v = np.linalg.eigh(h.matrix().toarray())
        c = v.T @ start.vectors[:, 0]
        single = np.abs(c[:, None].conj() * (v.T @ formula("X[0]", chain).matrix() @ v) * c[None, :]) ** 2
        assert abs(single.sum() - np.trace(single) - 0.0923918) > 5e-3

    def test_resolution_decides_what_is_equal(self):
        """Two oscillations of frequencies 1 and 1 + 1e-3, amplitudes 2 a each: 2 (a^2 + a^2) or 2 (2 a)^2."""
        h = np.diag([0.0, 1.0, 10.0, 11.001])
        q = np.zeros((4, 4))
        q[[0, 1, 2, 3], [1, 0, 3, 2]] = 1.0
        found = evolve(h, {"q": q}, start=np.full(4, 0.5))
        fine, coarse = found.fluctuation("q"), found.fluctuation("q", resolution=100.0)
        assert_allclose([fine.variance, coarse.variance], [4 * 0.25**2, 8 * 0.25**2], rtol=1e-13)
        assert_allclose(fine.closest, 1e-3, rtol=1e-9)
        assert (fine.cut, coarse.cut) == (0, 0)

    def test_gaps_below_the_resolution_belong_to_the_mean(self):
        found = evolve(np.diag([0.0, 1e-3]), {"x": np.array([[0, 1.0], [1.0, 0]])}, start=np.full(2, 0.5**0.5))
        assert_allclose([found.fluctuation("x").mean, found.fluctuation("x").variance], [0.0, 0.5], atol=1e-15)
        coarse = found.fluctuation("x", resolution=100.0)
        assert_allclose([coarse.mean, coarse.variance], [1.0, 0.0])

    def test_chains_are_cut_and_told(self, mixed_field):
        found = mixed_field.fluctuation("x", resolution=20.0)
        assert found.cut > 0
        assert found.gaps < 78 * 77 // 2

    def test_single_level(self):
        found = evolve(np.diag([1.0, 2.0]), {"z": np.diag([1.0, -1.0])}, start=[1.0, 0.0]).fluctuation("z")
        assert (found.mean, found.variance, found.gaps, found.closest) == (1.0, 0.0, 0, np.inf)


class TestYardsticks:
    def test_revival_of_free_excitations(self):
        """Hopping on a ring of 12: eps = -2 cos k, v_max = 2; a spin that parts both ways meets itself at L/(2 v)."""
        ring = Ring(12)
        h = formula("-Splus[i]*Sminus[i+1] + h.c.", ring)
        psi = np.zeros(4096)
        psi[4095 ^ 1 << 11] = 1.0  # site 0 up, all others down
        found = evolve(h, {"far": formula("0.5 + Sz[6]", ring)}, start=psi)
        early, late = found.trace("far", [0.5 * revival_time(12, 2.0), 1.1 * revival_time(12, 2.0)])
        assert early < 0.01 < 0.3 < late

    def test_plateau(self):
        assert plateau_window(12, 2.0, sites=2) == (0.5, 3.0)
        assert plateau_window(12, 2.0, sites=6).is_open
        assert not plateau_window(12, 2.0, sites=7).is_open

    def test_bound_holds(self, mixed_field):
        """Trace distance of one site from its dephased state, averaged over long times."""
        ring, dephased = Ring(10), mixed_field.dephased
        found = evolve(dephased, {a: formula(f"{a}[0]", ring) for a in "XYZ"})
        times = np.random.default_rng(3).uniform(1e3, 1e6, 300)
        off = np.array([found.trace(a, times) - found.stationary(a) for a in "XYZ"])
        distance = 0.5 * np.linalg.norm(off, axis=0).mean()
        bound = block_bound(2, dephased.effective_dimension)
        assert_allclose(bound, 1 / np.sqrt(dephased.effective_dimension))
        assert 0.1 * bound < distance < bound

    @pytest.mark.parametrize("call", [
        lambda: revival_time(0, 1.0), lambda: revival_time(4, -1.0), lambda: plateau_window(4, 1.0, sites=5),
        lambda: block_bound(0, 3.0), lambda: block_bound(2, 0.5), lambda: block_bound(2, 3.0, equal_gaps=0),
    ])  # fmt: skip
    def test_bad_numbers(self, call):
        with pytest.raises(ValueError):
            call()


class TestBadInput:
    def test_times_beyond_the_horizon(self, mixed_field):
        assert 1e11 < mixed_field.horizon < 1e13
        with pytest.raises(ValueError, match="time 1e\\+14 is beyond .* take the dephased state"):
            mixed_field.trace("x", [1e14])
        with pytest.raises(ValueError, match="is beyond"):
            mixed_field.average("x", 1e14)
        with pytest.raises(ValueError, match="is beyond"):
            mixed_field.fluctuation("x", resolution=1e14)

    def test_names_and_numbers(self, mixed_field):
        with pytest.raises(KeyError, match="no observable 'y'; there are 'x'"):
            mixed_field.trace("y", [0.0])
        with pytest.raises(ValueError, match="from 2 to 1"):
            mixed_field.average("x", 1.0, start=2.0)
        with pytest.raises(ValueError, match="resolution must be a positive number"):
            mixed_field.fluctuation("x", resolution=0.0)
        with pytest.raises(ValueError, match="times must be a list of finite numbers"):
            mixed_field.trace("x", [np.nan])

    def test_observable(self, mixed_field):
        with pytest.raises(ValueError, match="the operator has dimension 4, the Hamiltonian 1024"):
            evolve(mixed_field.dephased, {"q": np.eye(4)})
        with pytest.raises(ValueError, match="evolve needs a start"):
            evolve(np.eye(2), {})

    def test_memory_is_asked_before_work(self, mixed_field, monkeypatch):
        dephased = dephase(np.diag(np.arange(60.0)), np.full(60, 60**-0.5))
        monkeypatch.setattr("maxent.memory.available_memory", lambda: 1 << 16)
        with pytest.raises(ResourceError, match="1 observable over 60 energies need"):
            evolve(dephased, {"q": np.eye(60)})
        with pytest.raises(ResourceError, match="gaps between 78 energies need"):
            mixed_field.fluctuation("x")

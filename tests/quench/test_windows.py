"""Windows against routes that share no code: numerical derivatives, (H, H^2) fits, binomial counts, exact sums."""

import math

import numpy as np
import pytest
import scipy.sparse as sp
from numpy.testing import assert_allclose

import maxent
from maxent.families import Matrices, Microstates
from maxent.lattice import Chain, Ring, formula
from maxent.quench.levels import distinct, levels
from maxent.quench.spectrum import Spectrum
from maxent.quench.windows import gaussian_window, scan_widths, sharp_window

#: ZZ + 0.9045 X + 0.8090 Z in Pauli matrices
MIXED = "4*Sz[i]*Sz[i+1] + 1.809*Sx[i] + 1.618*Sz[i]"


@pytest.fixture(scope="module")
def ring():
    return formula(MIXED, Ring(10)).matrix()


@pytest.fixture(scope="module")
def energies(ring):
    return np.linalg.eigvalsh(ring.toarray())


def xxz(sites):
    h = formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.5*Sz[i]*Sz[i+1] + 0.3*Sz[i]*Sz[i+2]", sites).matrix()
    return {"energy": h, "magnetisation": formula("Sz[i]", sites).matrix()}


# own computation by two routes that agree to 6e-14: sum over the spectrum, Chebyshev derivatives of it
MICROCANONICAL = {"log_sum": 4.932851804598721, "beta": 0.19684980217494452, "beta_slope": -0.08511342727262627}


@pytest.mark.parametrize("name", MICROCANONICAL)
def test_reference_window(energies, name):
    window = gaussian_window(energies, 1.0, centre=-5.0)
    assert_allclose(getattr(window, name), MICROCANONICAL[name], rtol=0, atol=1e-11)


# own computation, printed to the digits shown
@pytest.mark.parametrize(
    ("width", "mean", "beta"), [(0.25, 5.63, 0.094), (0.5, 5.57, 0.187), (1.0, 5.40, 0.197), (2.0, 4.85, 0.167)]
)
def test_the_mean_is_not_the_centre(energies, width, mean, beta):
    assert abs(gaussian_window(energies, width, centre=5.58).mean - mean) < 5.1e-3
    assert abs(gaussian_window(energies, width, centre=-5.0).beta - beta) < 5.1e-4


def test_slopes_are_derivatives_of_the_sum(energies):
    nodes = np.cos(np.pi * (np.arange(24) + 0.5) / 24)
    sums = [gaussian_window(energies, 0.8, centre=-4.0 + 0.5 * x).log_sum for x in nodes]
    fit = np.polynomial.chebyshev.Chebyshev.fit(-4.0 + 0.5 * nodes, sums, 23, domain=[-4.5, -3.5])
    window = gaussian_window(energies, 0.8, centre=-4.0)
    assert_allclose(window.beta, fit.deriv()(-4.0), rtol=1e-11)
    assert_allclose(window.beta_slope, fit.deriv(2)(-4.0), rtol=1e-9)


def test_a_window_is_the_state_of_energy_and_its_square(ring):
    window = gaussian_window(Matrices({"energy": ring}, dims=(2,) * 10), 1.0, centre=-5.0)
    family = Matrices({"energy": ring, "energy_squared": ring @ ring})
    result = maxent.solve(family, {"energy": window.mean, "energy_squared": window.variance + window.mean**2})
    assert_allclose([result.multipliers[n] for n in result.names], [5.0, 0.5], rtol=1e-11)
    assert window.multipliers == {"energy": 5.0, "energy_squared": 0.5}
    assert_allclose(window.entropy, result.entropy, rtol=1e-12)
    assert_allclose(window.log_partition, result.log_partition, rtol=1e-12)
    flip = formula("Sx[0]*Sx[3]", Ring(10)).matrix()
    assert_allclose(window.state.mean(flip), result.mean(flip), rtol=0, atol=1e-12)
    # the reduced state, from an independent partial trace of the density matrix
    rho = window.state.density().reshape(4, 256, 4, 256)
    assert_allclose(window.state.reduced([0, 1]), np.einsum("abcb->ac", rho), rtol=0, atol=1e-13)


def test_the_centre_is_shifted_to_the_energy(energies):
    for width in (0.3, 1.0, 10.0):
        window = gaussian_window(energies, width, mean=-5.0)
        assert abs(window.mean + 5.0) < 1e-13
        assert_allclose(window.centre, -5.0 - window.beta * width**2, rtol=1e-12)


def test_wide_windows_are_canonical(energies):
    # canonical beta at this energy, own computation by two routes
    window = gaussian_window(energies, 1e5, mean=-5.0)
    assert_allclose(window.beta, 0.247354546316, atol=1e-9)
    canonical = maxent.solve(Microstates({"energy": energies}), {"energy": -5.0})
    assert_allclose(window.entropy, canonical.entropy, rtol=1e-9)
    assert_allclose(window.effective_states, math.exp(canonical.entropy), rtol=1e-8)


def test_beta_is_the_slope_at_the_mean():
    """Density of states exp(-E^2/2v), slope -E/v: beta_w is exact at <E>_w and wrong at the centre."""
    grid, v = np.linspace(-40, 40, 40001), 9.0
    family = Microstates({"energy": grid}, log_weights=-0.5 * grid**2 / v)
    window = gaussian_window(family, 1.5, centre=-6.0)
    assert_allclose(window.beta, -window.mean / v, rtol=1e-10)
    assert abs(window.beta - 6.0 / v) > 0.1


def test_scan_tells_what_is_too_narrow(energies):
    scan = scan_widths(energies, [0.01, 0.05, 0.25, 0.5, 1.0], mean=-5.0)
    assert_allclose(scan.widths, [0.25, 0.5, 1.0])
    assert [width for width, _ in scan.refused] == [0.01, 0.05]
    assert all("spacings wide" in why for _, why in scan.refused)
    assert_allclose(scan.betas, [gaussian_window(energies, s, mean=-5.0).beta for s in scan.widths])


def test_spacing_counts_distinct_energies():
    even = np.arange(-200, 201) * 0.1
    once, thrice = gaussian_window(even, 1.0, centre=0.3), gaussian_window(np.repeat(even, 3), 1.0, centre=0.3)
    assert_allclose([once.spacing, thrice.spacing], 0.1, rtol=1e-12)
    assert_allclose(thrice.effective_states, 3 * once.effective_states)
    assert gaussian_window(even, 0.5, centre=0.0).width == 0.5  # the edge: five spacings
    with pytest.raises(ValueError, match=r"width 0\.49 about 0 .* 0\.1 apart: it must be at least 5 spacings"):
        gaussian_window(even, 0.49, centre=0.0)
    assert gaussian_window(even, 0.49, centre=0.0, spacings=4).width == 0.49
    assert list(distinct(np.array([1.0, 0.0, 1.0 + 1e-12, 2.0]))) == [1, 0, 1, 2]


# --------------------------------------------------------------------- sharp


def test_counts_of_two_level_spins():
    """ln C(N, k) and its slope: ln[C(100,26)/C(100,24)]/2 = 1.0856245 (closed form)."""
    k = np.arange(101)
    spins = Microstates({"energy": k}, log_weights=[math.log(math.comb(100, int(j))) for j in k])
    entropy = lambda j: sharp_window(spins, {"energy": j}).entropy
    assert_allclose(0.5 * (entropy(26) - entropy(24)), 1.0856245454665014, rtol=1e-12)
    slope = sharp_window(spins, {"energy": (15, 35)}).slope(6.0, spacings=3)
    assert_allclose(slope.beta, math.log((100 - slope.energy + 0.5) / (slope.energy + 0.5)), rtol=0.05)
    total = sharp_window(spins, {"energy": (0, 100)})
    assert_allclose(total.entropy, 100 * math.log(2), rtol=1e-13)


def test_entropy_below_the_canonical_one():
    """N = 1000, N/4 up: S_canonical - S_sharp, the Stirling form (closed form) good to 1e-6."""
    counts = [math.comb(1000, j) for j in range(1001)]
    logs = [math.log(c) for c in counts]
    spins = Microstates({"energy": np.arange(1001)}, log_weights=logs)
    canonical = maxent.solve(spins, {"energy": 250.0})
    assert_allclose(canonical.entropy - sharp_window(spins, {"energy": 250}).entropy, 3.5361890670210165, atol=1e-6)


def test_the_slope_of_a_sharp_window(energies):
    window = sharp_window(energies, {"energy": (-6.0, -4.0)})
    slope = window.slope(0.6)
    assert_allclose(window.entropy, math.log(np.sum((energies >= -6) & (energies <= -4))))

    def smoothed(c):  # integral of the Gaussian density over the window, by quadrature
        x, w = np.polynomial.legendre.leggauss(60)
        density = np.exp(-0.5 * ((c + x[:, None] - energies) / 0.6) ** 2).sum(1) / (0.6 * math.sqrt(2 * math.pi))
        return math.log(w @ density)

    assert_allclose(slope.entropy, smoothed(-5.0), rtol=1e-12)
    assert_allclose(slope.beta, (smoothed(-5.0 + 1e-4) - smoothed(-5.0 - 1e-4)) / 2e-4, rtol=1e-6)
    assert -5.0 < slope.energy < -4.7
    with pytest.raises(ValueError, match="smoothing by a window of width 0.01"):
        window.slope(0.01)
    with pytest.raises(ValueError, match="two limits in 'energy'"):
        sharp_window(energies, {"energy": (-np.inf, -4.0)}).slope(0.5)
    with pytest.raises(ValueError, match="no width"):
        sharp_window(energies, {"energy": energies[300]}).slope(0.5)


def test_the_lowest_value_is_that_of_a_state(energies, ring):
    window = sharp_window(Matrices({"energy": ring}), {"energy": (-6.0, -4.0)})
    inside = energies[(energies >= -6) & (energies <= -4)]
    assert_allclose([window.lowest["energy"], window.highest["energy"]], [inside.min(), inside.max()], rtol=1e-12)
    assert window.lowest["energy"] > -6.0
    family = window.family()
    assert family.size == len(inside) == round(window.count)
    assert_allclose(family.lowest(np.ones(1)).value, inside.min(), rtol=1e-12)
    # below its lowest state the window has nothing, although its limit is lower
    asked = 0.5 * (inside.min() - 6.0)
    assert maxent.solve(family, {"energy": asked}).verdict is maxent.Verdict.INFEASIBLE
    assert maxent.solve(family, {"energy": inside.min() + 0.01}).success
    assert maxent.solve(family, {"energy": window.lowest["energy"]}).verdict is maxent.Verdict.BOUNDARY
    z = formula("Sz[i]", Ring(10)).matrix()
    assert_allclose(window.state.mean(z), family.state(np.zeros(1)).mean(z), atol=1e-11)
    assert_allclose(window.state.entropy, math.log(len(inside)), rtol=1e-12)
    assert "S = ln" in str(window) and "width 2" in str(window)


# --------------------------------------------------------------------- joint windows


def test_joint_windows_are_sectors():
    """The window in (E, M) against the levels of the block of that magnetisation alone."""
    sites = Ring(8)
    charges = xxz(sites)
    family = Matrices(charges, dims=sites.dims)
    up = np.flatnonzero(charges["magnetisation"].diagonal() == 1.0)
    block = np.linalg.eigvalsh(charges["energy"].toarray()[np.ix_(up, up)])
    sharp = sharp_window(family, {"energy": (-1.0, 0.5), "magnetisation": 1.0})
    assert round(sharp.count) == np.sum((block >= -1) & (block <= 0.5))
    assert_allclose(sharp.state.mean(charges["magnetisation"]), 1.0, rtol=1e-12)
    assert sharp.lowest["magnetisation"] == sharp.highest["magnetisation"] == 1.0
    smooth = gaussian_window(family, 0.9, mean=-0.3, within={"magnetisation": 1.0})
    alone = gaussian_window(block, 0.9, mean=-0.3)
    assert_allclose([smooth.entropy, smooth.beta, smooth.centre], [alone.entropy, alone.beta, alone.centre], rtol=1e-10)
    assert_allclose(smooth.state.mean(charges["energy"]), -0.3, rtol=1e-12)
    everything = gaussian_window(family, 0.9, mean=-0.3)
    assert everything.entropy > smooth.entropy + 1
    assert_allclose(smooth.mean_of(levels(family).values["magnetisation"]), 1.0)


def test_windows_of_a_spectrum():
    """From energies by blocks as from a family of charges that commute."""
    sites = Ring(6)
    charges = xxz(sites)
    family = Matrices(charges, dims=sites.dims)
    spectrum = Spectrum(charges["energy"], companions=[charges["magnetisation"]], dims=sites.dims)
    up = charges["magnetisation"].diagonal()
    blocks = np.concatenate([np.full(b.size, up[b.index[0]]) for b in spectrum.blocks])
    listed = levels(spectrum, further={"magnetisation": blocks})
    zz = formula("Sz[0]*Sz[1]", sites).matrix()
    bounds = {"energy": (-1.3, 0.45), "magnetisation": (-1, 1)}
    for make in (lambda x: sharp_window(x, bounds), lambda x: gaussian_window(x, 0.9, mean=-0.2, spacings=3)):
        ours, theirs = make(listed), make(family)
        assert_allclose(ours.entropy, theirs.entropy, rtol=1e-12)
        assert_allclose(ours.state.log_partition, theirs.state.log_partition, rtol=1e-12)
        assert_allclose(ours.state.mean(zz), theirs.state.mean(zz), atol=1e-12)
        assert_allclose(ours.state.reduced([0, 3]), theirs.state.reduced([0, 3]), atol=1e-12)
    inside = sharp_window(listed, bounds).family()
    lam = [0.7, -0.2]
    assert inside.names == ("energy", "magnetisation")
    assert_allclose(inside.state(lam).mean(zz), sharp_window(family, bounds).family().state(lam).mean(zz), atol=1e-12)
    assert levels(spectrum).names == ("energy",)


def test_three_charges_and_listed_states():
    n, m = np.divmod(np.arange(12), 4)
    listed = Microstates({"energy": n + 0.1 * m, "number": n, "magnetisation": m}, log_weights=np.log(1.0 + m))
    window = sharp_window(listed, {"energy": (0.0, 1.15), "number": 1, "magnetisation": (0, 2)})
    assert_allclose(window.count, 1 + 2)
    assert_allclose(window.state.probabilities[[4, 5]], [1 / 3, 2 / 3])
    assert_allclose(window.state.entropy, math.log(3))
    assert window.family().size == 2


def test_charges_that_do_not_commute_are_refused():
    sites = Chain(4)
    h = formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1]", sites).matrix()
    x, z = formula("Sx[i]", sites).matrix(), formula("Sz[i]", sites).matrix()
    clash = r"no joint levels: 'along_x' and 'along_z' do not commute, \|\[A, B\]\| is 0\."
    with pytest.raises(ValueError, match=clash):
        sharp_window(Matrices({"energy": h, "along_x": x, "along_z": z}), {"energy": (-1, 0), "along_z": 0.0})
    # either of them alone commutes with the energy
    one = sharp_window(Matrices({"energy": h, "along_x": x}), {"energy": (-2, 0), "along_x": 1.0})
    other = sharp_window(Matrices({"energy": h, "along_z": z}), {"energy": (-2, 0), "along_z": 1.0})
    assert_allclose(one.entropy, other.entropy, rtol=1e-12)
    assert_allclose(one.state.mean(x), 1.0, rtol=1e-12)


def test_bad_input(energies):
    family = Matrices({"h": sp.diags_array([1.0, 2.0, 3.0])})
    for wrong, message in [
        (lambda: gaussian_window(energies, 1.0), "either its centre or its mean"),
        (lambda: gaussian_window(energies, 1.0, centre=0.0, mean=0.0), "one of the two"),
        (lambda: gaussian_window(energies, 1.0, centre=np.nan), "must be finite"),
        (lambda: gaussian_window(energies, -1.0, centre=0.0), "width must be a positive number"),
        (lambda: gaussian_window(energies, 1.0, mean=energies.max()), "no window has the mean energy 19.5"),
        (lambda: gaussian_window(energies, 1.0, mean=-99.0), "the levels reach from -12.6"),
        (lambda: gaussian_window(energies, 1.0, centre=0.0, within={"energy": (0, 1)}), "takes no sharp limits"),
        (lambda: sharp_window(energies, {}), "needs limits"),
        (lambda: sharp_window(energies, {"number": 3}), "'number', which is no charge"),
        (lambda: sharp_window(energies, {"energy": (2, 1)}), "wrong order"),
        (lambda: sharp_window(energies, {"energy": (1, 2, 3)}), "a pair of numbers"),
        (lambda: sharp_window(energies, {"energy": (-99, -98)}), "no state in the window .* -12.6"),
        (lambda: sharp_window([1.0, np.nan], {"energy": (0, 2)}), "NaN"),
        (lambda: levels(family), "no charge 'energy'"),
        (lambda: levels(family, energy="h", further={"n": [1, 2, 3]}), "give all charges to the family"),
        (lambda: levels([1.0, 2.0], further={"number": [1.0]}), "'number' must be a list of numbers as long"),
        (lambda: levels(Microstates({"energy": [0, 1]}, log_prior=[0.0, 0.5])), "with a prior has no window"),
        (lambda: levels(Matrices({"energy": np.eye(2)}, log_prior=np.diag([0, 1.0]))), "with a prior has no window"),
        (lambda: sharp_window(energies, {"energy": (0, 1)}).state, "array of energies have no states"),
        (lambda: sharp_window(energies, {"energy": (0, 1)}).family(), "array of energies have no states"),
        (lambda: sharp_window(energies, {"energy": (0, 1)}).mean_of([1.0]), "one per level"),
        (lambda: levels(family, energy="h").state([1.0]), "one per level"),
    ]:
        with pytest.raises(ValueError, match=message):
            wrong()
    with pytest.raises(TypeError, match="limits of 'energy'"):
        sharp_window(energies, {"energy": "low"})

"""Ideal gases and free-particle quenches: published values and closed forms, source beside each."""

from __future__ import annotations

import numpy as np
import pytest

import maxent
from maxent.families import Modes
from maxent.families.modes import fill


def nodes(top: float, n: int = 400):
    """Gauss-Legendre nodes and weights on 0..top."""
    x, w = np.polynomial.legendre.leggauss(n)
    return 0.5 * top * (x + 1), 0.5 * top * w


def free(statistics: str, **more) -> Modes:
    """Free particles in three dimensions per volume lambda^3 at beta = 1: density 2/sqrt(pi) sqrt(e)."""
    x, w = nodes(8.0)
    charges = {"number": np.ones(len(x)), "energy": x**2}
    return Modes(charges, statistics, 4 / np.sqrt(np.pi) * x**2 * w, **more)


def test_equidistant_levels():
    # ten levels 0..9, fermions: one-body solution equal to the sum over all 1024 states (own computation, two routes)
    ten = {"number": np.ones(10), "energy": np.arange(10.0)}
    a = maxent.solve(Modes(ten), {"number": 4, "energy": 14})
    assert a.multipliers["energy"] == pytest.approx(0.21314193327018016, abs=1e-12)
    assert a.multipliers["number"] == pytest.approx(-0.5168577570725936, abs=1e-12)
    assert a.entropy == pytest.approx(6.315270402159391, abs=1e-12)
    # the same for bosons with <E> = 10 (own one-body solution)
    b = maxent.solve(Modes(ten, "bosons"), {"number": 4, "energy": 10})
    assert b.multipliers["energy"] == pytest.approx(0.1895874706390064, abs=1e-12)
    assert b.multipliers["number"] == pytest.approx(0.6501830921981895, abs=1e-12)


def test_ideal_gases_in_three_dimensions():
    # closed form -Gamma(j+1) Li_{j+1}(-e^x), inverted: n lambda^3 = 1, beta mu = 0.3487..., E/(N kT) = 1.7603...
    fermi = maxent.solve(free("fermions"), {"number": 1.0, "energy": 1.7603767015535106})
    assert fermi.multipliers["energy"] == pytest.approx(1, abs=1e-10)
    assert -fermi.multipliers["number"] == pytest.approx(0.3487473611036425, abs=1e-10)
    # polylogarithms inverted: fugacity 0.69861..., E/(N kT) = 1.22971...
    bose = maxent.solve(free("bosons"), {"number": 1.0, "energy": 1.229712496397012})
    assert np.exp(-bose.multipliers["number"]) == pytest.approx(0.6986143591350651, abs=1e-10)
    # Fermi-Dirac integral F_1/2(0) = 0.678094: J. McDougall, E. C. Stoner, Phil. Trans. R. Soc. A 237, 67 (1938)
    values = free("fermions").evaluate(np.array([0.0, 1.0])).values
    assert values[0] * np.sqrt(np.pi) / 2 == pytest.approx(0.678094, abs=2e-6)
    # F_3/2(0) to 12 digits (closed form)
    assert values[1] * np.sqrt(np.pi) / 2 == pytest.approx(1.1528038370883613, abs=1e-11)
    # number and energy of photons per kT: 2 zeta(3) and pi^4/15 (M. Planck 1900, closed form)
    x, w = nodes(60.0)
    photons = Modes({"energy": x}, "bosons", x**2 * w)
    state = maxent.solve(photons, {"energy": np.pi**4 / 15}).state
    assert state.mean(np.ones(len(x))) == pytest.approx(2.4041138063191885, abs=1e-9)


def test_critical_density():
    # zeta(3/2) = 2.612375...: the largest density of an ideal Bose gas without condensate (A. Einstein 1925)
    zeta32, zeta52 = 2.612375348685488, 1.341487257250917
    gas = free("bosons", continuum={"number": 1.0, "energy": 0.0})
    result = maxent.solve(gas, {"number": 2 * zeta32, "energy": 1.5 * zeta52})
    assert result.verdict is maxent.Verdict.UNATTAINED
    assert result.values["number"] == pytest.approx(zeta32, abs=1e-9)


TRAPS = [  # own exact sums over levels n with (n+1)(n+2)/2 states at T/T_c0: N, t, -beta mu, N0/N, energy per particle
    (1000, 0.9, 0.010673039216075517, 0.09319491412433166, 18.737716507057467),
    (1000, 1.0, 0.15589303355997575, 0.005927640652793124, 23.98789480595096),
    (10000, 0.5, 0.00011798113253623509, 0.8475431529584497, 3.811520095593083),
    (10000, 1.0, 0.07312357319795865, 0.0013181573596884979, 53.27902725923203),
]


@pytest.mark.parametrize(("number", "t", "alpha", "condensed", "energy"), TRAPS)
def test_isotropic_trap(number, t, alpha, condensed, energy):
    """Grand-canonical bosons in a trap, condensed and not; the start of the search is the documented one."""
    temperature = t * (number / 1.2020569031595942) ** (1 / 3)
    n = np.arange(int(40 * temperature) + 40.0)
    trap = Modes({"number": np.ones(len(n)), "energy": n}, "bosons", (n + 1) * (n + 2) / 2)
    result = maxent.solve(trap, {"number": number, "energy": number * energy})
    assert result.success and result.iterations <= 15
    assert 1 / result.multipliers["energy"] == pytest.approx(temperature, rel=1e-9)
    assert result.multipliers["number"] == pytest.approx(alpha, rel=1e-7)
    assert result.state.occupations[0] / number == pytest.approx(condensed, rel=1e-8)
    # finite-size law 1 - t^3 - 3 zeta(2)/(2 zeta(3)^(2/3)) t^2 N^(-1/3)
    # W. Ketterle, N. J. van Druten, Phys. Rev. A 54, 656 (1996)
    if t < 1:
        law = 1 - t**3 - 1.5 * 1.6449340668482264 / 1.2020569031595942 ** (2 / 3) * t**2 * number ** (-1 / 3)
        assert result.state.occupations[0] / number == pytest.approx(law, abs=3e-3)


def test_debye_heat_capacity():
    # C/(3 N k) at T = Theta/4, Theta/2, Theta (standard Debye table): beta^2 Var(E) of phonons with density 3 w^2
    w, weight = nodes(1.0, 60)
    phonons = Modes({"energy": w}, "bosons", 3 * w**2 * weight)
    for t, c in ((0.25, 0.5031), (0.5, 0.8254), (1.0, 0.9517)):
        assert phonons.evaluate(np.array([1 / t])).covariance[0, 0] / t**2 == pytest.approx(c, abs=6e-5)


def test_release_of_hard_core_bosons_from_a_box():
    """3 in 4 of 10 sites, mapped to fermions: every mode's own occupation is a charge.

    M. Rigol, V. Dunjko, V. Yurovsky, M. Olshanii, Phys. Rev. Lett. 98, 050405 (2007), lam = ln((1 - n)/n), a small
    instance of the protocol; numbers from the two sets of box orbitals.
    """
    box = lambda sites: (
        np.sqrt(2 / (sites + 1))
        * np.sin(np.pi * np.outer(np.arange(1, sites + 1), np.arange(1, sites + 1)) / (sites + 1))
    )
    large, small = box(10), box(4)
    n = np.sum((large[:, :4] @ small[:3].T) ** 2, axis=1)
    names = [f"n{k + 1}" for k in range(10)]
    result = maxent.solve(Modes.own(names), dict(zip(names, n, strict=True)))
    lam = [
        0.754247442872756, 0.058474960312811596, 0.6316670227101828, 0.2183383468054676, 0.4381205434645664,
        0.45538388794911405, 0.2614622520966498, 1.8935478144366076, 5.147961501035776, 2.9431470082531286,
    ]  # fmt: skip
    np.testing.assert_allclose(list(result.multipliers.values()), lam, rtol=0, atol=1e-10)
    assert result.iterations == 0
    np.testing.assert_allclose(fill(n).own_multipliers, lam, rtol=0, atol=1e-10)
    densities = [0.3525559359034048, 0.2814083184375024, 0.28140831843750236, 0.3119001544943177, 0.27272727272727276]
    # time averages: sum_m n_m |phi_m(i)|^2, an operator that is a number on every mode
    np.testing.assert_allclose([result.mean(large[:, i] ** 2) for i in range(5)], densities, rtol=0, atol=1e-9)


SUPERLATTICE = [  # A: energy per site, beta of the energy alone, entropy of all modes, entropy of the thermal state
    (1.0, -0.5174861450445362, 1.588137554545466, 0.3696400494024992, 0.3709541273136448),
    (4.0, -0.22966609851578054, 0.4859343501293521, 0.6389165189617602, 0.6389211983766678),
    (8.0, -0.12217978213929624, 0.2481007983935224, 0.6781058752329933, 0.6781059711957065),
]


@pytest.mark.parametrize(("a", "energy", "beta", "entropy", "thermal"), SUPERLATTICE)
def test_release_from_a_superlattice(a, energy, beta, entropy, thermal):
    """Two-band Bloch states in closed form, A = 4: lam_k = -2 asinh(2 cos k/A).

    M. Rigol, A. Muramatsu, M. Olshanii, Phys. Rev. A 74, 053616 (2006); A. C. Cassidy, C. W. Clark, M. Rigol,
    Phys. Rev. Lett. 106, 140405 (2011).  400 momenta reproduce the integrals to rounding.
    """
    k = 2 * np.pi * (np.arange(400) + 0.5) / 400
    n = 0.5 * (1 + 2 * np.cos(k) / np.sqrt(a**2 + 4 * np.cos(k) ** 2))
    state = fill(n)
    np.testing.assert_allclose(state.own_multipliers, -2 * np.arcsinh(2 * np.cos(k) / a), atol=1e-12)
    assert state.entropy / 400 == pytest.approx(entropy, abs=1e-9)
    assert state.mean(-2 * np.cos(k)) / 400 == pytest.approx(energy, abs=1e-9)
    fit = maxent.solve(Modes({"energy": -2 * np.cos(k)}), {"energy": 400 * energy})
    assert fit.multipliers["energy"] == pytest.approx(beta, abs=1e-8)
    assert fit.entropy / 400 == pytest.approx(thermal, abs=1e-9)


def test_transverse_field_quench():
    """h0 = 2 -> 0.5 on the infinite chain, all mode occupations: stationary <sz> and entropy per site.

    P. Calabrese, F. H. L. Essler, M. Fagotti, Phys. Rev. Lett. 106, 227203 (2011) and J. Stat. Mech. (2012) P07016:
    n_k = (1 - cos Delta_k)/2; values by quadrature.
    """
    h0, h, size = 2.0, 0.5, 4000
    k = 2 * np.pi * (np.arange(size) + 0.5) / size
    eps, before = (2 * np.sqrt(1 + x * x - 2 * x * np.cos(k)) for x in (h, h0))
    cosine = 4 * (h * h0 - (h + h0) * np.cos(k) + 1) / (eps * before)
    state = fill(0.5 * (1 - cosine))
    magnetisation = np.mean(2 * (h - np.cos(k)) / eps * (1 - 2 * state.occupations))
    assert magnetisation == pytest.approx(0.5173158092226835, abs=1e-9)
    assert state.entropy / size == pytest.approx(0.30071107273653447, abs=1e-8)
    assert state.mean(eps) / size - 0.5 * np.mean(eps) == pytest.approx(-0.7257656334451887, abs=1e-9)
    # multiplier at k = pi/2: 2 artanh(cos Delta)
    at = 4 * (h * h0 + 1) / (4 * np.sqrt((1 + h * h) * (1 + h0 * h0)))
    assert fill([0.5 * (1 - at)]).own_multipliers[0] == pytest.approx(2.1972245773362182, abs=1e-12)

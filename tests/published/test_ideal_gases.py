"""Ideal quantum gases with a continuous density of states: Gauss-Legendre nodes as levels, weights as degeneracies.

Fermi and Bose integrals enter as means, energies per particle as targets; both directions are asked.  Units are stated
at each test; the cloud of the trap has discrete levels.  Values of the trap at N = 1000 and 10000, of Debye and of
equidistant levels stand in tests/outside/test_published_modes.py.
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

import maxent
from maxent.families import Modes
from maxent.quench.thermodynamics import thermodynamics

# DLMF 25.6 (from memory)
ZETA = {1.5: 2.612375348685488, 2: 1.6449340668482264, 2.5: 1.341487257250917, 3: 1.2020569031595942,
        4: 1.082323233711138}  # fmt: skip


def levels(top: float, power: float, n: int = 400) -> tuple[np.ndarray, np.ndarray]:
    """Energies and weights of the density e^power on 0..top; nodes in sqrt(e), where the integrand is smooth."""
    x, w = np.polynomial.legendre.leggauss(n)
    x, w = 0.5 * np.sqrt(top) * (x + 1), 0.5 * np.sqrt(top) * w
    return x**2, 2 * x ** (2 * power + 1) * w


def gas(statistics: str, top: float, power: float, factor: float, **more) -> Modes:
    e, g = levels(top, power)
    return Modes({"number": np.ones(len(e)), "energy": e}, statistics, factor * g, **more)


def thermal_volume(statistics: str, top: float = 60.0, **more) -> Modes:
    """Free particles in three dimensions per volume lambda^3 at beta = 1: density 2 sqrt(e/pi)."""
    return gas(statistics, top, 0.5, 2 / np.sqrt(np.pi), **more)


def ask(family: Modes, number: float, energy: float):
    return maxent.solve(family, {"number": number, "energy": energy})


# ------------------------------------------------------------------ Fermi and Bose integrals

#: F_1/2(x) = int t^1/2/(exp(t - x) + 1): J. McDougall, E. C. Stoner, Phil. Trans. R. Soc. A 237, 67 (1938), leading
#: digits from memory.
TABLE = {-4.0: 0.016128, 0.0: 0.678094, 1.0: 1.396375, 2.0: 2.502458, 4.0: 5.770726}
#: F_1/2 and F_3/2, closed form -Gamma(j + 1) Li_{j+1}(-e^x), DLMF 25.12.16.
FERMI = [
    (0.0, 0.678093895153101, 1.1528038370883613),
    (1.0, 1.3963752806665641, 2.6616826247320042),
    (4.0, 5.770726527604896, 17.627702501044965),
]


@pytest.mark.parametrize("x", TABLE)
def test_table_of_fermi_dirac_integrals(x):
    density = thermal_volume("fermions").evaluate(np.array([-x, 1.0]), 1).values[0]
    assert density * np.sqrt(np.pi) / 2 == pytest.approx(TABLE[x], abs=1e-6)


@pytest.mark.parametrize(("x", "half", "three_halves"), FERMI)
def test_fermi_dirac_integrals_as_targets(x, half, three_halves):
    family, scale = thermal_volume("fermions"), 2 / np.sqrt(np.pi)
    values = family.evaluate(np.array([-x, 1.0]), 1).values
    assert_allclose(values, [scale * half, scale * three_halves], rtol=0, atol=2e-11)
    result = ask(family, scale * half, scale * three_halves)
    assert_allclose(list(result.multipliers.values()), [-x, 1.0], atol=1e-9)


def test_bose_integrals_at_fugacity_one_half():
    """g_3/2(1/2) and g_5/2(1/2), polylogarithms (closed form): density and 2/3 of the energy at beta = 1."""
    result = ask(thermal_volume("bosons"), 0.6248370208199139, 1.5 * 0.5549972787175123)
    assert_allclose(list(result.multipliers.values()), [np.log(2), 1.0], atol=1e-10)
    assert result.log_partition == pytest.approx(0.5549972787175123, abs=1e-12)


@pytest.mark.parametrize("s", ZETA)
def test_bose_integrals_at_fugacity_one(s):
    """int e^(s-1)/(exp(e) - 1) = Gamma(s) zeta(s)."""
    from scipy.special import gamma

    e, g = levels(60.0, s - 1)
    family = Modes({"energy": e}, "bosons", g / gamma(s))
    energy = family.evaluate(np.ones(1), 1).values[0]
    result = maxent.solve(family, {"energy": float(energy)})
    assert result.multipliers["energy"] == pytest.approx(1.0, abs=1e-12)
    assert result.mean(np.ones(len(e))) == pytest.approx(ZETA[s], abs=1e-11)


@pytest.mark.parametrize(("statistics", "sign"), [("fermions", 1), ("bosons", -1), ("distinguishable", 0)])
def test_second_virial_coefficient(statistics, sign):
    """P V/(N k T) = 1 +- n lambda^3/2^(5/2): 0.1767766952966369 (G. E. Uhlenbeck, E. Beth 1937, ideal part)."""
    family = thermal_volume(statistics)
    density = 1e-5
    # E/(N k T) is 3/2 of P V/(N k T); the next term is of order 1e-12 here
    result = ask(family, density, 1.5 * density * (1 + sign * 0.1767766952966369 * density))
    assert result.multipliers["energy"] == pytest.approx(1.0, abs=1e-10)
    pressure = result.log_partition / result.mean(np.ones(400))
    assert (pressure - 1) / density == pytest.approx(sign * 0.1767766952966369, abs=1e-6)


# ------------------------------------------------------------------ Fermi gases, energies in units of the Fermi energy


def two_dimensions() -> Modes:
    """One particle at constant density of states, Fermi energy 1."""
    return gas("fermions", 70.0, 0.0, 1.0)


def test_chemical_potential_zero_in_two_dimensions():
    """mu = 0 at kT = 1/ln 2 = 1.4426950408889634; the energy there is kT^2 pi^2/12 (closed form)."""
    t = 1.4426950408889634
    result = ask(two_dimensions(), 1.0, t**2 * np.pi**2 / 12)
    assert 1 / result.multipliers["energy"] == pytest.approx(t, abs=1e-10)
    assert result.multipliers["number"] == pytest.approx(0.0, abs=1e-10)


def test_energy_at_the_fermi_temperature_in_two_dimensions():
    """E/(N E_F) = -Li_2(1 - e) at kT = E_F; exp(mu/kT) = e - 1 (closed form)."""
    result = ask(two_dimensions(), 1.0, 1.2775046341122482)
    assert_allclose(list(result.multipliers.values()), [-np.log(np.e - 1), 1.0], atol=1e-9)


def three_dimensions(top: float) -> Modes:
    return gas("fermions", top, 0.5, 1.5)


#: kT/E_F, mu/E_F, E/(N E_F): closed form (Fermi-Dirac integrals).
DEGENERATE = [
    (0.05, 0.9979360702660384, 0.6061453488741233),
    (0.1, 0.9916412363704542, 0.6242831061507568),
    (0.2, 0.9645760393978465, 0.6915162257706358),
]


@pytest.mark.parametrize(("t", "mu", "energy"), DEGENERATE)
def test_fermi_gas_in_three_dimensions(t, mu, energy):
    thermo = thermodynamics(ask(three_dimensions(1 + 40 * t), 1.0, energy), numbers="number")
    assert thermo["temperature"].value == pytest.approx(t, abs=1e-9)
    assert thermo["chemical potential"].value == pytest.approx(mu, abs=1e-9)
    # A. Sommerfeld 1928 (from memory): mu = 1 - (pi^2/12) t^2 - (pi^4/80) t^4, 0.9979362223312026 at t = 0.05
    if t == 0.05:
        assert thermo["chemical potential"].value == pytest.approx(0.9979362223312026, abs=1e-6)


def test_where_the_chemical_potential_changes_sign():
    """mu = 0 at kT/E_F = (2/(3 F_1/2(0)))^(2/3) = 0.9887335499380608 (closed form)."""
    t = 0.9887335499380608
    # energy per particle kT F_3/2(0)/F_1/2(0)
    at = lambda warmer: ask(three_dimensions(45.0), 1.0, warmer * t * 1.1528038370883613 / 0.678093895153101)
    result = at(1.0)
    assert 1 / result.multipliers["energy"] == pytest.approx(t, abs=1e-10)
    assert result.multipliers["number"] == pytest.approx(0.0, abs=1e-10)
    assert at(0.99).multipliers["number"] < 0 < at(1.01).multipliers["number"]


def test_edges_of_the_fermi_gas():
    """At E/N = 3/5 E_F of the filled sphere the nodes leave no room; below it nothing is reachable."""
    family = three_dimensions(2.0)
    assert str(ask(family, 1.0, 0.59).verdict) == "infeasible"
    assert str(ask(family, 1.0, 0.61).verdict) == "solved"


# ------------------------------------------------------------------ condensation


def test_condensation_temperature_of_the_uniform_gas():
    """kT_c = 2 pi/zeta(3/2)^(2/3) hbar^2 n^(2/3)/m, 3.3125 (A. Einstein 1925, closed form); n = m = hbar = 1."""
    t = 3.312502009395621
    family = gas("bosons", 60 * t, 0.5, 1 / (np.sqrt(2) * np.pi**2), continuum={"number": 1.0, "energy": 0.0})
    values = family.evaluate(np.array([0.0, 1 / t]), 1).values
    assert values[0] == pytest.approx(1.0, abs=1e-12)
    assert str(ask(family, 0.999, values[1]).verdict) == "solved"
    crowded = ask(family, 1.2, values[1])
    assert str(crowded.verdict) == "unattained"
    assert crowded.excess["number"] == pytest.approx(0.2, abs=1e-9)


def test_heat_capacity_at_the_condensation_temperature():
    """C_V/(N k) = 15/4 zeta(5/2)/zeta(3/2) = 1.9257 (F. London 1938, closed form).

    At and below T_c the condensate takes up particles at no cost in energy: no multiplier for their number.
    """
    e, g = levels(60.0, 0.5)
    family = Modes({"energy": e}, "bosons", 2 / np.sqrt(np.pi) * g)
    result = maxent.solve(family, {"energy": 1.5 * ZETA[2.5]})
    number = result.mean(np.ones(len(e)))
    assert thermodynamics(result)["heat capacity"].value / number == pytest.approx(1.9256716754819545, abs=1e-11)


def trap_levels(n: np.ndarray) -> np.ndarray:
    return (n + 1) * (n + 2) / 2


def test_condensation_temperature_of_the_trap():
    """kT_c = hbar omega (N/zeta(3))^(1/3): 0.94, 0.940498970 (S. R. de Groot, G. J. Hooyman, C. A. ten Seldam 1950;
    V. Bagnato, D. E. Pritchard, D. Kleppner 1987; from memory).  Density of states e^2/2."""
    family = gas("bosons", 60.0, 2.0, 0.5, continuum={"number": 1.0, "energy": 0.0})
    number, energy = family.evaluate(np.array([0.0, 1.0]), 1).values
    assert number ** (-1 / 3) == pytest.approx(0.94, abs=6e-4)
    assert number ** (-1 / 3) == pytest.approx(0.940498970, abs=1e-9)
    assert str(ask(family, 0.99 * number, energy).verdict) == "solved"
    assert str(ask(family, 1.01 * number, energy).verdict) == "unattained"


def test_finite_size_shift_of_the_trap():
    """dT_c/T_c = -0.7275 N^(-1/3) in an isotropic trap (S. Grossmann, M. Holthaus 1995; W. Ketterle, N. J. van Druten,
    Phys. Rev. A 54, 656 (1996); F. Dalfovo et al., Rev. Mod. Phys. 71, 463 (1999); from memory).

    N is what the excited levels hold at the energy of the lowest one.  The next terms, (ln T)/T and 1/T in units of
    hbar omega, are removed by three temperatures.
    """
    shifts, temperatures = [], np.array([500.0, 2000.0, 8000.0])
    for t in temperatures:
        n = np.arange(1.0, 45 * t)
        excited = Modes({"energy": n}, "bosons", trap_levels(n))
        number = excited.state(np.array([1 / t])).mean(np.ones(len(n)))
        ideal = (number / ZETA[3]) ** (1 / 3)
        shifts.append((t / ideal - 1) * number ** (1 / 3))
    terms = np.stack([np.ones(3), np.log(temperatures) / temperatures, 1 / temperatures], 1)
    assert np.linalg.solve(terms, shifts)[0] == pytest.approx(-0.7275, abs=5e-5)
    assert shifts[0] < shifts[1] < shifts[2] < -0.7275


def test_condensate_of_a_million_atoms():
    """N = 10^6 at T = T_c0/2: N0/N, law 0.8695437229828404 against exact sums 0.8693726382081794.

    W. Ketterle, N. J. van Druten, Phys. Rev. A 54, 656 (1996); F. Dalfovo et al. 1999; law from memory.
    """
    number, law, exact = 1e6, 0.8695437229828404, 0.8693726382081794
    t = 0.5 * (number / ZETA[3]) ** (1 / 3)
    n = np.arange(np.ceil(45 * t))
    trap = Modes({"number": np.ones(len(n)), "energy": n}, "bosons", trap_levels(n))
    alpha = np.log1p(1 / (exact * number))
    values = trap.evaluate(np.array([alpha, 1 / t]), 1).values
    assert values[0] == pytest.approx(number, rel=1e-9)
    result = ask(trap, number, values[1])
    assert 1 / result.multipliers["energy"] == pytest.approx(t, rel=1e-9)
    assert result.state.occupations[0] / number == pytest.approx(law, abs=2e-4)
    assert result.state.occupations[0] / number == pytest.approx(exact, abs=1e-9)


def test_a_measured_condensation_temperature():
    """T_c = 0.94(5) T_0 with 40000 atoms: J. R. Ensher, D. S. Jin, M. R. Matthews, C. E. Wieman, E. A. Cornell,
    Phys. Rev. Lett. 77, 4984 (1996), abstract; the number of atoms from memory.  A measured value: the shift of the
    ideal gas by its finite size, 0.979, is within one standard error."""
    shift = 1 - 0.7275 * 40000 ** (-1 / 3)
    t = shift * (40000 / ZETA[3]) ** (1 / 3)
    n = np.arange(1.0, np.ceil(45 * t))
    excited = Modes({"energy": n}, "bosons", trap_levels(n)).state(np.array([1 / t])).mean(np.ones(len(n)))
    assert t / (excited / ZETA[3]) ** (1 / 3) == pytest.approx(0.979, abs=1e-3)
    assert abs(shift - 0.94) < 0.05


# ------------------------------------------------------------------ radiation


@pytest.fixture(scope="module")
def photons():
    """Photons at beta = 1 in units of 1/(pi^2 (hbar c)^3), from their energy pi^4/15 = 6 zeta(4)."""
    e, g = levels(60.0, 2.0)
    result = maxent.solve(Modes({"energy": e}, "bosons", g), {"energy": 6 * ZETA[4]})
    return result, e


def test_photons(photons):
    """2 zeta(3) photons of mean energy pi^4/(30 zeta(3)) kT (M. Planck 1900, closed form)."""
    result, e = photons
    assert result.multipliers["energy"] == pytest.approx(1.0, abs=1e-11)
    number = result.mean(np.ones(len(e)))
    assert number == pytest.approx(2.4041138063191885, abs=1e-10)
    assert result.values["energy"] / number == pytest.approx(2.7011780329190636, abs=1e-10)


def test_stefan_boltzmann_constant(photons):
    """5.670374419e-8 W m^-2 K^-4 from the exact h, c, k (CODATA, from memory): 2 pi k^4/(h^3 c^2) of the energy."""
    h, c, k = 6.62607015e-34, 299792458.0, 1.380649e-23
    result, _ = photons
    energy = 3 * result.log_partition  # radiation pressure is a third of the energy density
    assert 2 * np.pi * k**4 / (h**3 * c**2) * energy == pytest.approx(5.670374419e-8, abs=1e-17)


def test_displacement_law():
    """Maximum per wavelength at x = 5 (1 - exp(-x)), 4.965114231744276 (W. Wien; from memory).

    Where x^5 n(x) is stationary, 5 n = x n (1 + n): occupation and variance of one mode.
    """
    x = 4.965114231744276
    one = Modes({"number": np.ones(1)}, "bosons")
    result = maxent.solve(one, {"number": float(1 / np.expm1(x))})
    assert result.multipliers["number"] == pytest.approx(x, abs=1e-12)
    assert 5 * result.values["number"] / result.covariance[0, 0] == pytest.approx(x, abs=1e-12)

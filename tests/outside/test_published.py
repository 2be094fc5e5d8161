"""Published values and closed forms: discrete maximum entropy, spins, oscillators, general identities.

Each value stands beside its source; "from memory" where the number or formula was recalled and reproduced by
computation, not read in the source.  State = exp(-sum lam_j Q_j)/Z, k_B = hbar = 1.  Ising models and
non-commuting charges are in `test_published_models`.

More of them are in `tests/published/`.  Left out, because nothing is solved or predicted: mu_B/k (a constant; it is the
input of the electron-spin test).  The energy of a gas at fixed beta mu has no recorded parameters; the identity itself
is tested on levels.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import chi2

import maxent
from maxent.families import Matrices, Microstates
from tests.corpus import pieces

FACES = np.arange(1.0, 7.0)
# R. Wolf's 20000 throws of a white and a red die, as printed by E. T. Jaynes 1979 (Table 1)
WHITE = np.array([3246, 3449, 2897, 2841, 3635, 3932])
RED = np.array([3407, 3631, 3176, 2916, 3448, 3422])
WOLF = {"shift": FACES - 3.5, "squash": np.array([1.0, 1, -2, -2, 1, 1])}


def probabilities(result, n: int) -> np.ndarray:
    """Probability of each listed state: the mean of its indicator."""
    return np.array([result.mean(row) for row in np.eye(n)])


def means(charges: dict, frequencies) -> dict:
    return {name: float(values @ frequencies) for name, values in charges.items()}


# ------------------------------------------------------------------ the dice of Jaynes and Wolf


def test_the_die_with_mean_four_and_a_half():
    result = maxent.solve(Microstates({"points": FACES}), {"points": 4.5})
    # E. T. Jaynes, "Where do we stand on maximum entropy?" (MIT Press 1979), B12 to B14
    assert result.multipliers["points"] == pytest.approx(-0.37105, abs=6e-6)
    assert np.exp(result.log_partition) == pytest.approx(26.66365, abs=6e-6)
    printed = [0.05435, 0.07877, 0.11416, 0.16545, 0.23977, 0.34749]
    assert probabilities(result, 6) == pytest.approx(printed, abs=6e-6)
    assert result.entropy == pytest.approx(1.61358, abs=6e-6)
    # closed form, 13 digits
    assert result.entropy == pytest.approx(1.6135810981538292, abs=1e-12)


def test_the_die_with_mean_four():
    result = maxent.solve(Microstates({"points": FACES}), {"points": 4.0})
    # closed form; 0.10 0.12 0.15 0.17 0.21 0.25 in common use
    assert probabilities(result, 6) == pytest.approx([0.1031, 0.1227, 0.1461, 0.1740, 0.2072, 0.2468], abs=6e-5)


def test_a_mean_of_more_than_six_is_unreachable_and_six_is_the_edge():
    die = Microstates({"points": FACES})
    # closed form: the reachable means are [1, 6]
    unreachable = maxent.solve(die, {"points": 6.2})
    assert str(unreachable.verdict) == "infeasible"
    assert unreachable.certificate.margin == pytest.approx(0.2, abs=1e-12)
    edge = maxent.solve(die, {"points": 6.0})
    assert (str(edge.verdict), edge.face.dimension) == ("boundary", 1)
    assert edge.entropy == pytest.approx(0.0, abs=1e-12)
    assert edge.mean(FACES) == pytest.approx(6.0, abs=1e-12)


def test_wolfs_frequencies_themselves():
    frequencies = WHITE / WHITE.sum()
    indicators = {f"is {face:.0f}": row for face, row in zip(FACES, np.eye(6), strict=True)}
    result = maxent.solve(Microstates(indicators), means(indicators, frequencies))
    # the six indicators sum to one: one relation, and the state is the frequencies
    assert len(result.redundancies) == 1
    # E. T. Jaynes, "Concentration of distributions at entropy maxima" (1979), eq. 20
    assert result.entropy == pytest.approx(1.78499, abs=6e-7)
    deficit = np.log(6) - result.entropy
    assert deficit == pytest.approx(0.006769, abs=6e-7)
    # eq. 21 prints 270.1 for 2 N deficit; his own 0.006769 gives 270.77, the print is a slip
    assert 2 * WHITE.sum() * deficit == pytest.approx(270.77, abs=5e-3)
    # "Where do we stand", B59 and B62
    assert result.mean(WOLF["shift"]) == pytest.approx(0.0983, abs=6e-5)
    assert result.mean(WOLF["squash"]) == pytest.approx(0.1393, abs=6e-5)


def test_wolfs_die_with_one_constraint():
    one = {"shift": WOLF["shift"]}
    result = maxent.solve(Microstates(one), means(one, WHITE / WHITE.sum()))
    # "Where do we stand", text before Table 1 (sign of exp(-lam f)), and Table 1
    assert result.multipliers["shift"] == pytest.approx(-0.03373, abs=6e-6)
    printed = [0.15294, 0.15818, 0.16361, 0.16922, 0.17502, 0.18103]
    assert probabilities(result, 6) == pytest.approx(printed, abs=6e-6)


def test_wolfs_die_with_two_constraints():
    frequencies = WHITE / WHITE.sum()
    result = maxent.solve(Microstates(WOLF), means(WOLF, frequencies))
    # "Where do we stand", below B66: x = 1.032233, y = 1.074415; Table 2 and B67
    assert result.multipliers["shift"] == pytest.approx(-0.0317244, abs=6e-8)
    assert result.multipliers["squash"] == pytest.approx(-0.0717764, abs=6e-8)
    p = probabilities(result, 6)
    assert p == pytest.approx([0.16433, 0.16963, 0.14117, 0.14573, 0.18656, 0.19258], abs=6e-6)
    expected = p * WHITE.sum()
    assert np.sum((WHITE - expected) ** 2 / expected) == pytest.approx(9.375, abs=6e-3)
    # "Concentration of distributions", eq. 23 and below eq. 24
    assert result.entropy == pytest.approx(1.785225, abs=6e-7)
    deficit = result.entropy + frequencies @ np.log(frequencies)
    assert deficit == pytest.approx(0.000235, abs=6e-7)
    assert chi2.sf(2 * WHITE.sum() * deficit, 3) == pytest.approx(0.025, abs=6e-4)


def test_wolfs_red_die():
    result = maxent.solve(Microstates(WOLF), means(WOLF, RED / RED.sum()))
    # own computation by another route from the marginals of Table 1, "Concentration of distributions"
    assert result.multipliers["shift"] == pytest.approx(0.006053182202404919, abs=1e-9)
    assert result.multipliers["squash"] == pytest.approx(-0.0440891061044062, abs=1e-9)


def test_three_levels_with_mean_and_mean_square():
    q = np.array([-1.0, 0.0, 1.0])
    result = maxent.solve(Microstates({"q": q, "square": q**2}), {"q": 0.2, "square": 0.6})
    # closed form: lam = (-ln((s+m)/(s-m))/2, -ln(sqrt(s^2-m^2)/(2(1-s)))) at mean m, mean square s
    assert result.multipliers["q"] == pytest.approx(-0.34657359027997264, abs=1e-12)
    assert result.multipliers["square"] == pytest.approx(0.34657359027997275, abs=1e-12)


# ------------------------------------------------------------------ spins, levels, oscillators


def test_one_polarised_spin_and_five_of_them():
    # closed form: lam = -artanh(1/2), entropy of (3/4, 1/4)
    result = maxent.solve(Matrices({"z": pieces.PAULI["z"]}), {"z": 0.5})
    assert result.multipliers["z"] == pytest.approx(-0.5493061443340549, abs=1e-13)
    assert result.entropy == pytest.approx(0.5623351446188083, abs=1e-13)
    total = 2 * pieces.field_of("z", 5)
    many = maxent.solve(Matrices({"z": total}), {"z": 2.5})
    assert many.multipliers["z"] == pytest.approx(-0.5493061443340549, abs=1e-13)
    assert many.entropy == pytest.approx(5 * 0.5623351446188083, abs=1e-12)


def test_an_inverted_population_has_a_negative_temperature():
    # closed form: H = sigma_z/2 at +1/4 gives beta = -ln 3
    result = maxent.solve(Matrices({"energy": pieces.PAULI["z"] / 2}), {"energy": 0.25})
    assert result.multipliers["energy"] == pytest.approx(-1.0986122886681098, abs=1e-13)


@pytest.mark.parametrize(
    ("j", "value"), [(1.0, 0.5752103826044412), (2.5, 1.0653678508573161), (3.5, 1.381947397579529)]
)
def test_the_magnetisation_of_spin_j(j, value):
    # closed form: J B_J(1) is <J_z> at lam = -1/J (L. Brillouin 1927)
    for family in (Matrices({"Jz": pieces.spin(j)[2]}), Microstates({"Jz": np.arange(-j, j + 1)})):
        result = maxent.solve(family, {"Jz": value})
        assert result.multipliers["Jz"] == pytest.approx(-1 / j, abs=1e-12)


def test_the_inverse_brillouin_function():
    result = maxent.solve(Matrices({"Jz": pieces.spin(3.5)[2]}), {"Jz": 2.0})
    # closed form inverted by bisection
    assert result.multipliers["Jz"] == pytest.approx(-0.4617375197292011, abs=1e-10)


def test_a_continuous_unit_vector():
    """cos(theta) on Gauss-Legendre nodes: the integral over the sphere is exact to rounding with 40 nodes."""
    nodes, weights = np.polynomial.legendre.leggauss(40)
    family = Microstates({"cos": nodes}, log_weights=np.log(weights / 2))
    # closed form: coth 1 - 1 at multiplier -1 (P. Langevin 1905)
    result = maxent.solve(family, {"cos": 0.31303528549933146})
    assert result.multipliers["cos"] == pytest.approx(-1.0, abs=1e-11)


def heat_capacity(levels, degeneracies, beta: float) -> float:
    """beta^2 Var(E) of the state that the mean energy at beta is solved back to."""
    family = Microstates({"energy": np.asarray(levels, float)}, log_weights=np.log(degeneracies))
    p = np.asarray(degeneracies) * np.exp(-beta * np.asarray(levels, float))
    result = maxent.solve(family, {"energy": float(p @ levels / p.sum())})
    assert result.multipliers["energy"] == pytest.approx(beta, rel=1e-10)
    return result.multipliers["energy"] ** 2 * result.covariance[0, 0]


# kT/Delta and C/k at the maximum; 0.4168 and 0.4392 are the standard values (0.42 and 0.44 in textbooks), the
# digits follow from x tanh x = 1; the others are closed forms (stationarity)
@pytest.mark.parametrize(
    ("ratio", "temperature", "capacity", "within"),
    [
        (1.0, 0.4168, 0.4392, 4e-5),
        (1.0, 0.41677828, 0.439228839890645, 1e-11),
        (3.0, 0.35149521207154466, 1.0234905543865052, 1e-7),
        (0.5, 0.44887247517326573, 0.24077792447765417, 1e-7),
    ],
)
def test_the_heat_capacity_maximum_of_two_levels(ratio, temperature, capacity, within):
    top = heat_capacity([0, 1], [1, ratio], 1 / temperature)
    assert top == pytest.approx(capacity, abs=within)
    for beside in (0.99, 1.01):
        assert heat_capacity([0, 1], [1, ratio], beside / temperature) < top


def test_an_oscillator_with_one_quantum():
    # closed form: lam = ln 2 and entropy 2 ln 2 at <n> = 1; 150 levels lose 2^-150
    result = maxent.solve(Microstates({"n": np.arange(150.0)}), {"n": 1.0})
    assert result.multipliers["n"] == pytest.approx(np.log(2), abs=1e-12)
    assert result.entropy == pytest.approx(1.3862943611198906, abs=1e-10)


def test_the_heat_capacity_of_an_oscillator():
    # closed form: x^2 e^x/(e^x - 1)^2 at x = 1 (A. Einstein 1907)
    assert heat_capacity(np.arange(80), np.ones(80), 1.0) == pytest.approx(0.9206735942077923, abs=1e-12)


def test_a_rigid_rotor():
    j = np.arange(60.0)
    p = (2 * j + 1) * np.exp(-0.1 * j * (j + 1))
    family = Microstates({"energy": j * (j + 1)}, log_weights=np.log(2 * j + 1))
    result = maxent.solve(family, {"energy": float(p @ (j * (j + 1)) / p.sum())})
    assert result.multipliers["energy"] == pytest.approx(0.1, abs=1e-12)
    # H. P. Mulholland 1928: Z = 1/t + 1/3 + t/15 + 4 t^2/315 + t^3/315 at t = 0.1, good to 2e-6
    assert np.exp(result.log_partition) == pytest.approx(10.34013028019415, abs=2e-6)


def test_a_free_electron_spin_at_one_tesla_and_one_kelvin():
    # CODATA 2022, from memory: mu_B/k = 0.67171381472 K/T; closed form tanh(g mu_B B/2kT), g = 2.00231930436
    energy = 2.00231930436 * 0.67171381472 / 2 * pieces.PAULI["z"]
    polarisation = 0.5866172317429609
    result = maxent.solve(Matrices({"energy": energy}), {"energy": -polarisation * energy[0, 0]})
    assert 1 / result.multipliers["energy"] == pytest.approx(1.0, abs=1e-9)


def dimer() -> dict:
    """S1.S2 and the total S^z of two spins 1/2."""
    dot = sum(np.kron(a, a) for a in pieces.spin(0.5)).real
    return {"dot": dot, "Sz": pieces.field_of("z", 2).real}


def test_the_susceptibility_maximum_of_a_spin_dimer():
    def susceptibility(temperature):
        singlet, triplet = np.exp(0.75 / temperature), 3 * np.exp(-0.25 / temperature)
        dot = (-0.75 * singlet + 0.25 * triplet) / (singlet + triplet)
        result = maxent.solve(Matrices(dimer()), {"dot": dot, "Sz": 0.0})
        assert result.multipliers["dot"] == pytest.approx(1 / temperature, rel=1e-10)
        return result.multipliers["dot"] * result.covariance[1, 1]

    # closed form: root of 3 + e^x = x e^x at x = J/kT (B. Bleaney, K. D. Bowers 1952)
    best = 0.6236180081083693
    assert susceptibility(best) > susceptibility(best * 0.999)
    assert susceptibility(best) > susceptibility(best * 1.001)
    x = 1 / best
    assert susceptibility(best) == pytest.approx(2 * x / (3 + np.exp(x)), abs=1e-12)


def test_a_spin_dimer_at_minus_one_half():
    # closed form: beta = ln[3 (1/4 - e)/(3/4 + e)], e = -1/2, is ln 9
    result = maxent.solve(Matrices({"dot": dimer()["dot"]}), {"dot": -0.5})
    assert result.multipliers["dot"] == pytest.approx(2.1972245773362196, abs=1e-12)


# ------------------------------------------------------------------ general identities


@pytest.fixture(scope="module")
def forty_states():
    """Forty random states with three charges, lam = (0.3, -0.2, 0.5)."""
    rng = np.random.default_rng(5)
    charges = {name: row for name, row in zip("abc", rng.standard_normal((3, 40)), strict=True)}
    lam = np.array([0.3, -0.2, 0.5])
    p, _ = pieces.gibbs(lam @ np.array(list(charges.values())))
    return charges, means(charges, p), lam


def test_values_are_the_slope_of_the_log_partition(forty_states):
    charges, targets, lam = forty_states
    family = Microstates(charges)
    result = maxent.solve(family, targets)
    for j, name in enumerate(charges):
        step = 1e-5 * np.eye(3)[j]
        slope = (family.state(lam + step).log_partition - family.state(lam - step).log_partition) / 2e-5
        assert result.values[name] == pytest.approx(-slope, abs=1e-8)


def test_entropy_is_log_partition_plus_lam_q(forty_states):
    charges, targets, lam = forty_states
    result = maxent.solve(Microstates(charges), targets)
    p = probabilities(result, 40)
    assert result.entropy == pytest.approx(-p @ np.log(p), abs=1e-12)
    assert result.entropy == pytest.approx(result.log_partition + lam @ list(targets.values()), abs=1e-12)


def test_multipliers_are_the_slope_of_the_entropy_and_respond_by_the_inverse_covariance(forty_states):
    charges, targets, lam = forty_states
    family = Microstates(charges)
    result = maxent.solve(family, targets)
    response = -np.linalg.inv(result.covariance)
    for j, name in enumerate(charges):
        above = maxent.solve(family, targets | {name: targets[name] + 1e-4})
        below = maxent.solve(family, targets | {name: targets[name] - 1e-4})
        assert (above.entropy - below.entropy) / 2e-4 == pytest.approx(lam[j], abs=1e-7)
        change = [(above.multipliers[n] - below.multipliers[n]) / 2e-4 for n in charges]
        assert change == pytest.approx(response[:, j], abs=1e-6)


def test_shifted_and_scaled_charges(forty_states):
    charges, targets, lam = forty_states
    result = maxent.solve(Microstates(charges), targets)
    # Q -> Q + c: same state and multipliers, ln Z shifts by -lam c
    shifted = maxent.solve(Microstates(charges | {"a": charges["a"] + 7.0}), targets | {"a": targets["a"] + 7.0})
    assert list(shifted.multipliers.values()) == pytest.approx(lam, abs=1e-12)
    assert shifted.log_partition == pytest.approx(result.log_partition - 7.0 * lam[0], abs=1e-12)
    # Q -> s Q: lam -> lam/s
    scaled = maxent.solve(Microstates(charges | {"b": 1e3 * charges["b"]}), targets | {"b": 1e3 * targets["b"]})
    assert scaled.multipliers["b"] == pytest.approx(lam[1] / 1e3, rel=1e-11)
    assert scaled.entropy == pytest.approx(result.entropy, abs=1e-12)


def test_mixed_charges_mix_the_multipliers(forty_states):
    charges, targets, lam = forty_states
    mixing = np.array([[1.0, 2, 0], [0, 1, -1], [3, 0, 1]])
    rows = mixing @ np.array(list(charges.values()))
    result = maxent.solve(
        Microstates(dict(zip("uvw", rows, strict=True))),
        dict(zip("uvw", mixing @ list(targets.values()), strict=True)),
    )
    # E. T. Jaynes, "Where do we stand", B74: lam' = A^-T lam, the same state
    assert list(result.multipliers.values()) == pytest.approx(np.linalg.solve(mixing.T, lam), abs=1e-10)
    p, _ = pieces.gibbs(lam @ np.array(list(charges.values())))
    assert probabilities(result, 40) == pytest.approx(p, abs=1e-12)


def test_a_duplicate_is_redundant_and_a_contradiction_inconsistent(forty_states):
    charges, targets, lam = forty_states
    doubled = Microstates(charges | {"again": charges["a"]})
    result = maxent.solve(doubled, targets | {"again": targets["a"]})
    assert str(result.verdict) == "solved"
    (relation,) = result.redundancies
    assert relation.coefficients["a"] == pytest.approx(-relation.coefficients["again"])
    # only the sum of the two is fixed; of smallest norm are two halves
    assert result.multipliers["a"] == pytest.approx(lam[0] / 2, abs=1e-12)
    assert result.multipliers["again"] == pytest.approx(lam[0] / 2, abs=1e-12)
    wrong = maxent.solve(doubled, targets | {"again": targets["a"] + 0.01})
    assert str(wrong.verdict) == "inconsistent"
    assert wrong.certificate.margin == pytest.approx(0.01 / np.sqrt(2), abs=1e-12)


def test_energy_is_the_slope_at_fixed_beta_mu():
    levels = np.array([0.0, 0.3, 1.1])
    filling = (np.arange(8)[:, None] >> np.arange(3)) & 1
    charges = {"energy": filling @ levels, "number": filling.sum(1).astype(float)}
    beta, beta_mu = 1.3, 0.4
    log_z = lambda b: np.sum(np.log1p(np.exp(beta_mu - b * levels)))
    slope = -(log_z(beta + 1e-5) - log_z(beta - 1e-5)) / 2e-5
    occupation = 1 / (np.exp(beta * levels - beta_mu) + 1)
    result = maxent.solve(Microstates(charges), {"energy": float(slope), "number": float(occupation.sum())})
    # identity E = -d ln Z/d beta at fixed beta mu, with lam_energy = beta and lam_number = -beta mu
    assert result.multipliers["energy"] == pytest.approx(beta, abs=1e-8)
    assert result.multipliers["number"] == pytest.approx(-beta_mu, abs=1e-8)


def test_signs_and_edges_of_a_finite_spectrum():
    family = Microstates({"energy": np.array([0.0, 0.0, 1.0, 3.0])})
    # textbook rules: lam = 0 at the plain average, positive below, negative above
    assert maxent.solve(family, {"energy": 1.0}).multipliers["energy"] == pytest.approx(0.0, abs=1e-13)
    assert maxent.solve(family, {"energy": 0.4}).multipliers["energy"] > 0
    assert maxent.solve(family, {"energy": 1.9}).multipliers["energy"] < 0
    # at the lowest level the entropy is ln(degeneracy), beyond it nothing is reachable
    edge = maxent.solve(family, {"energy": 0.0})
    assert (str(edge.verdict), edge.face.dimension) == ("boundary", 2)
    assert edge.entropy == pytest.approx(np.log(2), abs=1e-12)
    assert str(maxent.solve(family, {"energy": -1e-6}).verdict) == "infeasible"


def test_one_fermion_and_one_boson_mode():
    # closed forms: <n> = 1/(1 + e^lam) and 1/(e^lam - 1) at <n> = 0.3; 200 boson levels lose 4.3^-200
    fermion = maxent.solve(Microstates({"n": np.array([0.0, 1.0])}), {"n": 0.3})
    assert fermion.multipliers["n"] == pytest.approx(0.8472978603872037, abs=1e-12)
    assert fermion.entropy == pytest.approx(-0.3 * np.log(0.3) - 0.7 * np.log(0.7), abs=1e-12)
    boson = maxent.solve(Microstates({"n": np.arange(200.0)}), {"n": 0.3})
    assert boson.multipliers["n"] == pytest.approx(1.4663370687934272, abs=1e-12)

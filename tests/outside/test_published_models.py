"""Published values and closed forms: Ising models, mean-field magnet, non-commuting charges.

Each value stands beside its source; "from memory" where the number or formula was recalled and reproduced by
computation, not read in the source.  State = exp(-sum lam_j Q_j)/Z, k_B = hbar = 1, Ising energy -sum s s'.

Larger tori and Onsager's lattice are in `tests/published/test_ising.py`.  Left out: Yang's magnetisation, which is no
mean on a finite torus.  The infinite Ising chain is tested on open chains: their bonds and inner spins have the same
multipliers.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import gammaln

import maxent
from maxent.families import Matrices, Microstates
from tests.corpus import pieces
from tests.corpus.pieces import PAULI, pauli


def spins(n: int) -> np.ndarray:
    """All configurations of n spins +-1, shape (2^n, n)."""
    return 1.0 - 2.0 * ((np.arange(2**n)[:, None] >> np.arange(n)) & 1)


def named(rows, names: str) -> dict:
    return dict(zip(names, rows, strict=True))


# ------------------------------------------------------------------ Ising models


@pytest.fixture(scope="module")
def four_by_four():
    s = spins(16).reshape(-1, 4, 4)
    energy = -(s * np.roll(s, 1, axis=1) + s * np.roll(s, 1, axis=2)).sum((1, 2))
    return Microstates({"energy": energy})


def test_the_four_by_four_torus_at_temperature_two(four_by_four):
    # closed form from the density of states (P. D. Beale, Phys. Rev. Lett. 76, 78 (1996)): ln Z, E/N, C/N
    log_z, energy, capacity = 17.105367118731582, -1.7553802887774352, 0.6055326572100551
    result = maxent.solve(four_by_four, {"energy": 16 * energy})
    assert result.multipliers["energy"] == pytest.approx(0.5, abs=1e-10)
    assert result.log_partition == pytest.approx(log_z, abs=1e-9)
    assert result.covariance[0, 0] * 0.25 / 16 == pytest.approx(capacity, abs=1e-10)


def test_the_four_by_four_torus_inverted(four_by_four):
    # own inversion of the exact density of states at E/N = -1.5: beta and entropy
    result = maxent.solve(four_by_four, {"energy": -24.0})
    assert result.multipliers["energy"] == pytest.approx(0.42525386866217585, abs=1e-10)
    assert result.entropy == pytest.approx(4.9371923783275875, abs=1e-10)


def test_the_four_by_four_torus_at_the_critical_point(four_by_four):
    # E/N and C/N, formula of B. Kaufman 1949 and A. E. Ferdinand, M. E. Fisher, Phys. Rev. 185, 832 (1969),
    # digits our own
    energy, capacity = -1.5656237876383186, 0.7832668259289094
    beta = np.log(1 + np.sqrt(2)) / 2
    result = maxent.solve(four_by_four, {"energy": 16 * energy})
    assert result.multipliers["energy"] == pytest.approx(beta, abs=1e-9)
    assert result.covariance[0, 0] * beta**2 / 16 == pytest.approx(capacity, abs=1e-9)


def bonds_on_the_eight_by_eight_torus() -> np.ndarray:
    """Exact number of configurations with k = 0..128 unequal bonds, row by row; all counts are below 2^63."""
    row = np.arange(256)
    unequal = np.array([bin(r ^ ((r >> 1) | ((r & 1) << 7))).count("1") for r in row])
    # first rows that are equal up to rotation, reflection and flip give the same counts
    turned = [((row >> k) | (row << (8 - k))) & 255 for k in range(8)]
    mirrored = np.array([int(f"{r:08b}"[::-1], 2) for r in row])
    everything = np.array([*turned, *[t ^ 255 for t in turned]])
    first = np.minimum(everything.min(0), everything[:, mirrored].min(0))
    starts, multiplicity = np.unique(first, return_counts=True)
    count = np.zeros((len(starts), 256, 129), np.int64)
    count[np.arange(len(starts)), starts, 0] = 1
    for _ in range(8):
        for r in row:
            shifted = np.zeros_like(count[:, r])
            shifted[:, unequal[r] :] = count[:, r, : 129 - unequal[r]]
            count[:, r] = shifted
        for site in range(8):
            flipped = count[:, row ^ (1 << site)]
            count[:, :, 1:] += flipped[:, :, :-1]
    closed = count[np.arange(len(starts)), starts]
    return (multiplicity[:, None] * closed).sum(0)


def test_the_eight_by_eight_torus():
    """All 2^64 states as 65 levels with their multiplicities."""
    count = bonds_on_the_eight_by_eight_torus()
    energy = 2.0 * np.arange(129) - 128.0
    # OEIS A364781, T(8, 8): states of zero energy, exact
    assert int(count[64]) == 2627978003957146636
    live = count > 0
    energy, logs = energy[live], np.log(count[live].astype(float))
    p, _ = pieces.gibbs(0.35 * energy - logs)
    result = maxent.solve(Microstates({"energy": energy}, log_weights=logs), {"energy": float(p @ energy)})
    assert result.multipliers["energy"] == pytest.approx(0.35, abs=1e-12)
    # B. Kaufman, Phys. Rev. 76, 1232 (1949): ln Z at K = 0.35 from the product formula
    assert result.log_partition == pytest.approx(53.199358828359486, abs=1e-10)
    assert result.entropy == pytest.approx(53.199358828359486 + 0.35 * (p @ energy), abs=1e-9)


def test_bonds_of_an_open_chain_are_those_of_the_infinite_one():
    s = spins(10)
    family = Microstates({"bonds": (s[:, 1:] * s[:, :-1]).sum(1)})
    # E. Ising 1925: <s s'> = tanh K, K = artanh(1/2) at 1/2 per bond
    result = maxent.solve(family, {"bonds": 4.5})
    assert result.multipliers["bonds"] == pytest.approx(-0.5493061443340548, abs=1e-12)
    # closed form: Z = 2^N cosh(K)^(N-1), N = 10, K = 1
    ordered = maxent.solve(family, {"bonds": 9 * np.tanh(1.0)})
    assert ordered.log_partition == pytest.approx(10.835499279946697, abs=1e-12)


def test_a_ring_of_eight_spins_in_a_field():
    s = spins(8)
    charges = {"bonds": (s * np.roll(s, 1, axis=1)).sum(1), "field": s.sum(1)}
    # closed form lambda_+^8 + lambda_-^8 (E. Ising 1925) at K = 0.6, H = 0.2: ln Z, <ss'>, <s>
    log_z, bond, magnetisation = 7.392944249805623, 0.6406636264654199, 0.552817861536698
    result = maxent.solve(Microstates(charges), {"bonds": 8 * bond, "field": 8 * magnetisation})
    assert result.multipliers["bonds"] == pytest.approx(-0.6, abs=1e-8)
    assert result.multipliers["field"] == pytest.approx(-0.2, abs=1e-8)
    assert result.log_partition == pytest.approx(log_z, abs=1e-8)


def test_magnetisation_and_bonds_of_the_infinite_chain():
    """An open piece of the infinite chain: the two ends carry what the rest of the chain does to them."""
    s = spins(7)
    inner, ends = s[:, 1:-1].sum(1), s[:, 0] + s[:, -1]
    family = Microstates({"bonds": (s[:, 1:] * s[:, :-1]).sum(1), "inner": inner, "ends": ends})
    m, c = 0.3, 0.4
    result = maxent.solve(family, {"bonds": 6 * c, "inner": 5 * m, "ends": 2 * m})
    # closed form (Markov chain): K = ln[p++ p--/p+-^2]/4, H = ln[p++/p--]/2 - ln[(1+m)/(1-m)]/2
    assert result.multipliers["bonds"] == pytest.approx(-0.372913719194, abs=1e-11)
    assert result.multipliers["inner"] == pytest.approx(-0.148625761734, abs=1e-11)


def test_a_hundred_thousand_spins_in_mean_field():
    """Multiplicities from 1 to e^69314 in one list."""
    n = 100_000
    up = np.arange(n + 1.0)
    magnetisation = (2 * up - n) / n
    logs = gammaln(n + 1) - gammaln(up + 1) - gammaln(n - up + 1)
    energy = -n * magnetisation**2 / 2
    p, _ = pieces.gibbs(1.5 * energy - logs)
    result = maxent.solve(Microstates({"energy": energy}, log_weights=logs), {"energy": float(p @ energy)})
    assert result.multipliers["energy"] == pytest.approx(1.5, abs=1e-6)
    # P. Weiss 1907: root of m = tanh(1.5 m), reached for N -> infinity
    assert np.sqrt(result.mean(magnetisation**2)) == pytest.approx(0.8585596366401104, abs=1e-4)


# ------------------------------------------------------------------ non-commuting charges

BLOCH = {name: PAULI[name] for name in "xyz"}


def test_one_qubit_with_three_charges():
    result = maxent.solve(Matrices(BLOCH), {"x": 0.3, "y": 0.4, "z": 0.5})
    # closed form (Bloch ball): lam = -artanh(r) r/|r|
    known = [-0.3739351440841383, -0.49858019211218446, -0.6232252401402305]
    assert list(result.multipliers.values()) == pytest.approx(known, abs=1e-10)
    # closed form (Kubo-Mori-Bogoliubov product; D. Petz 1994): 1 - r^2 along r, r/artanh r across
    curvatures = np.linalg.eigvalsh(result.covariance)
    assert curvatures == pytest.approx([0.4999999999999999, 0.8022781617244772, 0.8022781617244772], abs=1e-10)


def test_a_qubit_target_outside_the_ball():
    result = maxent.solve(Matrices(BLOCH), {"x": 0.8, "y": 0.6, "z": 0.3})
    assert str(result.verdict) == "infeasible"
    # closed form: distance sqrt(1.09) - 1 although each component is below 1; the margin is a lower bound
    distance = 0.04403065089105507
    assert 0 < result.certificate.margin <= distance + 1e-12
    assert result.certificate.verify(Matrices(BLOCH), {"x": 0.8, "y": 0.6, "z": 0.3})


def test_two_components_of_a_qubit_outside_and_on_the_circle():
    family = Matrices({name: PAULI[name] for name in "xz"})
    # closed form: 0.64 + 0.49 > 1; 0.36 + 0.64 = 1 is a pure state
    assert str(maxent.solve(family, {"x": 0.8, "z": 0.7}).verdict) == "infeasible"
    edge = maxent.solve(family, {"x": 0.6, "z": 0.8})
    assert (str(edge.verdict), edge.face.dimension) == ("boundary", 1)
    assert all(np.isnan(x) for x in edge.multipliers.values())
    assert edge.entropy == pytest.approx(0.0, abs=1e-12)
    assert edge.mean(PAULI["x"] @ PAULI["z"] * 1j) == pytest.approx(0.0, abs=1e-12)


def test_the_reachable_set_of_spin_three_halves_is_a_ball():
    family = Matrices(named(pieces.spin(1.5), "xyz"))
    u = np.array([1.0, 2.0, 2.0]) / 3
    # closed form: the largest value of u.J is J
    edge = maxent.solve(family, named(1.5 * u, "xyz"))
    assert (str(edge.verdict), edge.face.dimension) == ("boundary", 1)
    assert edge.certificate.lowest == pytest.approx(-1.5, abs=1e-12)
    assert list(edge.certificate.direction.values()) == pytest.approx(-u, abs=1e-7)
    assert str(maxent.solve(family, named(1.5 * (1 + 1e-9) * u, "xyz")).verdict) == "infeasible"
    assert str(maxent.solve(family, named(1.5 * (1 - 1e-9) * u, "xyz")).verdict) == "solved"


def test_spin_three_halves_inside_the_ball():
    result = maxent.solve(Matrices(named(pieces.spin(1.5), "xyz")), {"x": 0.4, "y": -0.3, "z": 0.6})
    # closed form (rotation covariance, inverse Brillouin function)
    known = [-0.36359271706927115, 0.2726945378019533, -0.5453890756039066]
    assert list(result.multipliers.values()) == pytest.approx(known, abs=1e-9)


def disc_and_point() -> dict:
    """sigma_x + 1 and sigma_z + 0 on three levels: a disc whose tangent at (1, 0) has a second state."""
    x, z = np.diag([0.0, 0.0, 1.0]), np.diag([1.0, -1.0, 0.0])
    x[0, 1] = x[1, 0] = 1.0
    return {"X": x, "Z": z}


def test_inference_is_discontinuous_at_a_tangent_point():
    family = Matrices(disc_and_point())
    # S. Weis, A. Knauf, J. Math. Phys. 53, 102206 (2012); J. Chen et al., New J. Phys. 17, 083019 (2015):
    # entropy ln 2 at (1, 0) itself, 0 along the circle however close
    edge = maxent.solve(family, {"X": 1.0, "Z": 0.0})
    assert (str(edge.verdict), edge.face.dimension) == ("boundary", 2)
    assert edge.entropy == pytest.approx(0.6931471805599453, abs=1e-12)
    for angle in (0.5, 0.05):
        beside = maxent.solve(family, {"X": np.cos(angle), "Z": np.sin(angle)})
        assert (str(beside.verdict), beside.face.dimension) == ("boundary", 1)
        assert beside.entropy == pytest.approx(0.0, abs=1e-9)


def test_inside_next_to_the_tangent_point():
    result = maxent.solve(Matrices(disc_and_point()), {"X": 0.98, "Z": 0.0})
    # closed form: lam_X = -b with (2 e^b - e^-b)/(2 e^b + e^-b) = 0.98, lam_Z = 0, and the entropy
    assert result.multipliers["X"] == pytest.approx(-1.9509863347873222, abs=1e-8)
    assert result.multipliers["Z"] == pytest.approx(0.0, abs=1e-8)
    assert result.entropy == pytest.approx(0.7422172431091929, abs=1e-8)


def test_three_correlations_of_two_qubits():
    """Bell-diagonal state of <XX> = 0.4, <YY> = -0.3, <ZZ> = 0.2, weights (1 +- 0.4 +- 0.3 +- 0.2)/4."""
    charges = {w: pauli(w).real for w in ("xx", "yy", "zz")}
    result = maxent.solve(Matrices(charges, dims=(2, 2)), {"xx": 0.4, "yy": -0.3, "zz": 0.2})
    # closed form: -sum p ln p
    assert result.entropy == pytest.approx(1.2541813939702853, abs=1e-10)
    p = np.array([1.9, 0.9, 0.7, 0.5]) / 4
    assert np.sort(np.linalg.eigvalsh(result.state.reduced((0, 1))))[::-1] == pytest.approx(p, abs=1e-10)


def test_a_correlation_inequality_at_its_classical_limit():
    # closed form: weights ((1+s)^2, 1-s^2, 1-s^2, (1-s)^2)/4, s = b/(2 sqrt 2); entropy 2 h((1+s)/2), b = 2
    operator = np.sqrt(2) * (pauli("xx") + pauli("zz"))
    family = Matrices({"B": operator})
    assert maxent.solve(family, {"B": 2.0}).entropy == pytest.approx(0.832991061399375, abs=1e-10)
    # the quantum limit 2 sqrt 2 is a pure state, beyond it there is none
    edge = maxent.solve(family, {"B": 2 * np.sqrt(2)})
    assert (str(edge.verdict), edge.face.dimension) == ("boundary", 1)
    assert str(maxent.solve(family, {"B": 2 * np.sqrt(2) + 1e-9}).verdict) == "infeasible"


def test_five_anticommuting_charges():
    words = ("x1", "y1", "zx", "zy", "zz")
    family = Matrices({w: pauli(w) for w in words})
    # closed form (Clifford algebra): sum of squares at most 1
    assert str(maxent.solve(family, dict.fromkeys(words, 0.5)).verdict) == "infeasible"
    result = maxent.solve(family, dict.fromkeys(words, 0.4))
    # lam_i = -artanh(sqrt 0.8) 0.4/sqrt 0.8
    assert list(result.multipliers.values()) == pytest.approx([-0.645613411446006] * 5, abs=1e-9)
    edge = maxent.solve(family, dict.fromkeys(words, 1 / np.sqrt(5)))
    assert (str(edge.verdict), edge.face.dimension) == ("boundary", 2)


def test_local_charges_give_a_product_state():
    charges = {"z1": pauli("z1"), "x1": pauli("x1"), "1x": pauli("1x")}
    result = maxent.solve(Matrices(charges, dims=(2, 2)), {"z1": 0.3, "x1": 0.2, "1x": 0.5})
    # closed form (subadditivity): h(|(0.2, 0, 0.3)|) + h(0.5)
    assert result.entropy == pytest.approx(1.188995205392676, abs=1e-9)
    joint = result.state.reduced((0, 1))
    product = np.kron(result.state.reduced((0,)), result.state.reduced((1,)))
    assert joint == pytest.approx(product, abs=1e-12)


def test_two_qubits_with_coupling_and_transverse_field():
    charges = {"zz": pauli("zz"), "x": pauli("x1") + pauli("1x")}
    result = maxent.solve(Matrices(charges), {"zz": 0.3, "x": 0.9})
    # closed form: Z = 2 cosh sqrt(a^2 + 4 c^2) + 2 cosh a
    assert result.multipliers["zz"] == pytest.approx(-0.36402494673703834, abs=1e-7)
    assert result.multipliers["x"] == pytest.approx(-0.5049298210849202, abs=1e-7)
    a, c = result.multipliers.values()
    z = 2 * np.cosh(np.hypot(a, 2 * c)) + 2 * np.cosh(a)
    assert result.log_partition == pytest.approx(np.log(z), abs=1e-12)


def test_a_precessing_spin_measured_at_two_times():
    """sigma_x at two times a quarter period apart: sigma_x and the rotated sigma_y."""
    family = Matrices({"now": PAULI["x"], "later": PAULI["y"]})
    # E. T. Jaynes, "Where do we stand on maximum entropy?" (MIT Press 1979), section D: a^2 + b^2 <= 1
    assert str(maxent.solve(family, {"now": 0.8, "later": 0.7}).verdict) == "infeasible"
    assert str(maxent.solve(family, {"now": 0.8, "later": 0.5}).verdict) == "solved"
    # the same component asked at a full period with another value: any other time dependence is inconsistent
    again = Matrices({"now": PAULI["x"], "later": PAULI["y"], "a period later": PAULI["x"]})
    refused = maxent.solve(again, {"now": 0.3, "later": 0.2, "a period later": 0.4})
    assert str(refused.verdict) == "inconsistent"

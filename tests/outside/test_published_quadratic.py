"""Published and closed-form values of quadratic systems: rings after quenches, box releases, levels of a gas."""

from __future__ import annotations

import numpy as np
import pytest

import maxent
from maxent.families import Bilinears, Periodic, SpinRing

#: Rings so long that the infinite chain is reached to the last digit: corrections fall like exp(-L/xi).
LONG = 600


def transverse(n: int, h: float) -> tuple:
    """-sum (X X + h Z) on a ring of even parity as fermions: Z = 1 - 2n."""
    return Periodic(n, {0: 2 * h, 1: -1.0}, pairing={1: -1.0}, antiperiodic=True), None, -h * n


def moment(n: int, h: float, m: int) -> Periodic:
    """The charge e_k cos(mk) of the transverse-field ring, by distance."""
    one = {0: 2 * h, 1: -1.0, -1: -1.0}
    two = {1: -1.0, -1: 1.0}
    shifted = lambda t: {r: 0.5 * (t.get(r - m, 0.0) + t.get(r + m, 0.0)) for r in range(-m - 1, m + 2)}
    return Periodic(n, shifted(one), pairing=shifted(two), antiperiodic=True)


def ground_state(n: int, h: float):
    return Bilinears({"energy": transverse(n, h)}).state(np.array([200.0]))


@pytest.mark.parametrize(
    ("before", "after", "energy", "beta", "field", "entropy"),
    [
        (2.0, 0.5, -0.7257656334451887, 0.7402391794706977, 0.26469004197427043, 0.45739456750250446),
        (0.2, 0.8, -1.0703298500953118, 1.3606197663834985, 0.48278286301918405, 0.23023369822377027),
    ],
)
def test_the_temperature_of_a_transverse_field_quench(before, after, energy, beta, field, entropy):
    """Energy of the old ground state under the new Hamiltonian, per site.

    The definition is that of D. Rossini, A. Silva, G. Mussardo, G. E. Santoro, Phys. Rev. Lett. 102, 127204 (2009); the
    energy follows from P. Calabrese, F. H. L. Essler, M. Fagotti, Phys. Rev. Lett. 106, 227203 (2011); numbers: own
    quadrature on the infinite chain, 1e-9.
    """
    new = transverse(LONG, after)
    asked = ground_state(LONG, before).mean(new)
    assert asked / LONG == pytest.approx(energy, abs=1e-9)
    result = maxent.solve(Bilinears({"energy": new}), {"energy": asked})
    assert result.success and result.iterations <= 15
    assert result.multipliers["energy"] == pytest.approx(beta, abs=1e-9)
    sz = 1 - 2 * result.mean(Periodic(LONG, {0: 1.0}, antiperiodic=True)) / LONG
    assert sz == pytest.approx(field, abs=1e-9)
    assert result.entropy / LONG == pytest.approx(entropy, abs=1e-9)


def test_truncated_ensembles_of_a_transverse_field_quench():
    """h = 2 -> 1/2 with the charges e_k cos(mk), m < M: entropy per site (own computation), falling to the full one.

    The full one, 0.30071107273653447, is that of P. Calabrese, F. H. L. Essler, M. Fagotti, J. Stat. Mech. (2012)
    P07022 (formula; own quadrature).
    """
    start, charges, found = ground_state(LONG, 2.0), {}, []
    for m in range(5):
        charges[f"I{m}"] = moment(LONG, 0.5, m)
        asked = {name: start.mean(q) for name, q in charges.items()}
        result = maxent.solve(Bilinears(charges), asked)
        assert result.success and result.iterations <= 15
        found.append(result.entropy / LONG)
    expected = [0.4573945675025043, 0.34490934990521893, 0.3292175514588431, 0.31251595293469037, 0.3085741215265232]
    np.testing.assert_allclose(found, expected, atol=1e-9)
    assert found[-1] > 0.30071107273653447


@pytest.mark.parametrize(("h", "energy"), [(0.5, -8.50908223514028), (2.0, -17.01816447028056)])
def test_the_ground_energy_of_a_ring_of_eight(h, energy):
    """``-sum_k eps_k / 2`` of the even sector (P. Pfeuty, Ann. Phys. 57, 79 (1970), closed form)."""
    terms = [(-1.0, {j: "X", (j + 1) % 8: "X"}) for j in range(8)] + [(-h, {j: "Z"}) for j in range(8)]
    assert SpinRing(8, {"energy": terms}, sectors="even").lowest(np.ones(1)).value == pytest.approx(energy, abs=1e-10)


def test_the_critical_chain_has_energy_minus_four_over_pi():
    """``e = -4/pi``, ``<Z> = 2/pi`` (P. Pfeuty, Ann. Phys. 57, 79 (1970), from memory); the ring is off by 1/L^2."""
    n = 4000
    low = Bilinears({"energy": transverse(n, 1.0)}).lowest(np.ones(1), with_values=True)
    assert low.value / n == pytest.approx(-4 / np.pi, abs=1e-7)
    field = Bilinears({"energy": transverse(n, 1.0), "field": (Periodic(n, {0: -2.0}, antiperiodic=True), None, n)})
    values = field.lowest(np.array([1.0, 0.0]), with_values=True).values
    assert values[1] / n == pytest.approx(2 / np.pi, abs=1e-6)


@pytest.mark.parametrize(
    ("depth", "energy", "beta", "entropy"),
    [
        (1.0, -0.5174861450445362, 1.588137554545466, 0.3709541273136448),
        (8.0, -0.12217978213929624, 0.2481007983935224, 0.6781059711957065),
    ],
)
def test_hard_core_bosons_released_from_a_superlattice(depth, energy, beta, entropy):
    """Half filling, hopping alone after the release; energy and number fix the thermal state.

    Protocol of M. Rigol, A. Muramatsu, M. Olshanii, Phys. Rev. A 74, 053616 (2006); numbers: own quadrature, 1e-9.
    """
    n = LONG
    before = Bilinears({"energy": superlattice(n, depth)}).state(np.array([300.0]))
    hop, count = (
        cells(n, {0: np.array([[0, -1.0], [-1.0, 0]]), -1: np.array([[0, -1.0], [0, 0]])}),
        cells(n, {0: np.eye(2)}),
    )
    asked = {"energy": before.mean(hop), "number": before.mean(count)}
    assert asked["energy"] / n == pytest.approx(energy, abs=1e-9)
    result = maxent.solve(Bilinears({"energy": hop, "number": count}), asked)
    assert result.success
    assert result.multipliers["energy"] == pytest.approx(beta, abs=1e-8)
    assert result.multipliers["number"] == pytest.approx(0, abs=1e-8)
    assert result.entropy / n == pytest.approx(entropy, abs=1e-9)


def cells(n: int, hopping: dict) -> Periodic:
    """A ring of n sites as cells of two."""
    return Periodic(n // 2, hopping, antiperiodic=True)


def superlattice(n: int, depth: float) -> Periodic:
    return cells(n, {0: np.array([[depth, -1.0], [-1.0, -depth]]), -1: np.array([[0, -1.0], [0, 0]])})


def test_three_hard_core_bosons_released_from_a_box():
    """Ground state of four sites into ten; every mode occupation is a charge, lam_m = ln((1 - n_m)/n_m).

    M. Rigol, V. Dunjko, V. Yurovsky, M. Olshanii, Phys. Rev. Lett. 98, 050405 (2007): protocol and formula; a small
    instance of it.
    """
    wave = lambda n, m: np.sqrt(2 / (n + 1)) * np.sin(np.pi * m * np.arange(1, n + 1) / (n + 1))
    modes = [wave(10, m) for m in range(1, 11)]
    box = np.zeros((4, 10))
    box[:, :4] = [wave(4, m) for m in range(1, 5)]
    family = Bilinears({f"n{m}": np.outer(u, u) for m, u in enumerate(modes, 1)})
    asked = {f"n{m}": float(sum((u @ b) ** 2 for b in box[:3])) for m, u in enumerate(modes, 1)}
    result = maxent.solve(family, asked)
    lam = [
        0.754247442872756, 0.058474960312811596, 0.6316670227101828, 0.2183383468054676, 0.4381205434645664,
        0.45538388794911405, 0.2614622520966498, 1.8935478144366076, 5.147961501035776, 2.9431470082531286,
    ]  # fmt: skip
    np.testing.assert_allclose(list(result.multipliers.values()), lam, atol=1e-10)
    densities = [0.3525559359034048, 0.2814083184375024, 0.28140831843750236, 0.3119001544943177, 0.27272727272727276]
    np.testing.assert_allclose(result.state.occupations[:5], densities, atol=1e-9)


def test_ten_equidistant_levels():
    """Fermions with N = 4, E = 14; bosons with N = 4, E = 10 (own computation: one-body sums, and all 1024 states)."""
    levels = {"energy": np.diag(np.arange(10.0)), "number": np.eye(10)}
    fermions = maxent.solve(Bilinears(levels), {"energy": 14.0, "number": 4.0})
    np.testing.assert_allclose(
        list(fermions.multipliers.values()), [0.21314193327018016, -0.5168577570725936], atol=1e-9
    )
    assert fermions.entropy == pytest.approx(6.315270402159391, abs=1e-9)
    bosons = maxent.solve(Bilinears(levels, statistics="bosons"), {"energy": 10.0, "number": 4.0})
    np.testing.assert_allclose(list(bosons.multipliers.values()), [0.1895874706390064, 0.6501830921981895], atol=3e-7)


def test_six_modes_with_matrices_that_do_not_commute():
    """Number, hopping with a phase, staggered potential (own computation: 64 states, difference 1e-14)."""
    n = 6
    hop = np.zeros((n, n), complex)
    for j in range(n - 1):
        hop[j, j + 1] = -np.exp(0.4j)
    h = [np.eye(n), hop + hop.conj().T, np.diag((-1.0) ** np.arange(n))]
    family = Bilinears(dict(zip("abc", h, strict=True)))
    lam = np.array([0.3, 0.8, -0.5])
    k = np.einsum("j,jab->ab", lam, h)
    x, u = np.linalg.eigh(k)
    g = (u / (1 + np.exp(x))) @ u.conj().T
    state = family.state(lam)
    # <c+_a c_b> = G[b, a]: for complex h the transpose is what makes Tr h G the value
    np.testing.assert_allclose(state.number, g.T, atol=1e-13)
    assert np.abs(g - g.T).max() > 0.1
    np.testing.assert_allclose(family.evaluate(lam).values, [np.trace(q @ g).real for q in h], atol=1e-13)

"""Square Ising model beyond lists of configurations: tori of 16 x 16 and 32 x 32 sites as levels with multiplicities.

The 2^1024 states of the larger torus are a list of 1024 energies.  Energy -sum s s', k_B = 1.

The spontaneous magnetisation of the infinite lattice (C. N. Yang 1952) is no mean of a finite torus: not tested.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

import maxent
from maxent.families import Microstates
from maxent.quench.thermodynamics import thermodynamics
from tests.published.torus_counts import torus_counts

CRITICAL = math.log(1 + math.sqrt(2)) / 2


class Torus:
    """n x n spins: exact multiplicities, and the family of their energies."""

    def __init__(self, n: int):
        self.sites, self.counts = n * n, torus_counts(n)
        live = [k for k, c in enumerate(self.counts) if c]
        energy = np.array([4.0 * k - 2 * self.sites for k in live])
        self.family = Microstates({"energy": energy}, log_weights=[math.log(self.counts[k]) for k in live])

    def per_site(self, energy: float):
        """Solve for an energy per site: beta, ln Z, entropy and heat capacity, all but beta per site."""
        result = maxent.solve(self.family, {"energy": self.sites * energy})
        thermo = thermodynamics(result)
        numbers = result.log_partition, result.entropy, thermo["heat capacity"].value
        return np.array([result.multipliers["energy"], *[x / self.sites for x in numbers]])

    def at(self, beta: float):
        """Energy and ln Z per site."""
        found = self.family.evaluate(np.array([beta]), 1)
        return np.array([found.values[0], found.log_partition]) / self.sites


@pytest.fixture(scope="module")
def tori():
    return {n: Torus(n) for n in (4, 8, 16, 32)}


def test_multiplicities(tori):
    """P. D. Beale, Phys. Rev. Lett. 76, 78 (1996): orders x^8, x^20, x^64 of the 32 x 32 torus, x = exp(-2K)."""
    for torus in tori.values():
        assert sum(torus.counts) == 2**torus.sites and torus.counts == torus.counts[::-1]
    printed = {8: 1057792, 20: 22748079183872, 64: 3523173455605142701375696893142359104}
    assert {order: tori[32].counts[order // 2] for order in printed} == printed
    # OEIS A364781, T(8, 8): states of zero energy of the 8 x 8 torus
    assert tori[8].counts[32] == 2627978003957146636


@pytest.mark.parametrize(
    ("n", "energy", "capacity"),
    [
        (4, -1.5656237876383186, 0.7832668259289094),
        (16, -1.453064852813477, 1.4987049594000261),
        (32, -1.4336584661462484, 1.8467675900395588),
    ],
)
def test_tori_at_the_critical_point(tori, n, energy, capacity):
    """Energy and heat capacity per site at T_c: formula of B. Kaufman 1949 and A. E. Ferdinand, M. E. Fisher,
    Phys. Rev. 185, 832 (1969); digits from the product, own evaluation."""
    beta, _, _, found = tori[n].per_site(energy)
    assert beta == pytest.approx(CRITICAL, abs=1e-9)
    assert found == pytest.approx(capacity, abs=1e-9)


#: Energy, ln Z and entropy per site of the infinite lattice (L. Onsager 1944, closed form), and what the torus of
#: 32 x 32 sites may be off by: exp(-32/xi) with 1/xi = |ln coth K - 2K|; below T_c also ln 2 for its two phases.
INFINITE = [
    (5.0, [-0.42822883324034805, 0.734530812276326, 0.6488850456282564], 1e-10, 0.0),
    (3.0, [-0.8173095925024202, 0.8158827318577213, 0.5434462010235813], 2e-7, 0.0),
    (2.0, [-1.745564575312554, 1.0257928126949176, 0.1530105250386406], 2e-7, math.log(2) / 1024),
]


@pytest.mark.parametrize(("temperature", "numbers", "within", "phases"), INFINITE)
def test_the_infinite_lattice_away_from_the_critical_point(tori, temperature, numbers, within, phases):
    energy, log_z, entropy = numbers
    found = tori[32].per_site(energy)[:3] - [0, phases, phases]
    assert found == pytest.approx([1 / temperature, log_z, entropy], abs=within)
    nearer, farther = (abs(tori[n].at(1 / temperature)[0] - energy) for n in (32, 16))
    assert nearer < farther / 5


def test_the_infinite_lattice_at_the_critical_point(tori):
    """u = -sqrt 2 and ln Z/N = (ln 2)/2 + 2G/pi = 0.929695398341610 (L. Onsager 1944, from memory).

    At T_c a torus is off by powers of 1/n: 1/n, 1/n^3, 1/n^5 in the energy, 1/n^2, 1/n^4, 1/n^6 in ln Z; four sizes
    remove three of them.
    """
    n = np.array([4.0, 8, 16, 32])
    values = np.array([tori[int(m)].at(CRITICAL) for m in n])
    u = np.linalg.solve(np.stack([n**0, n**-1, n**-3, n**-5], 1), values[:, 0])[0]
    log_z = np.linalg.solve(np.stack([n**0, n**-2, n**-4, n**-6], 1), values[:, 1])[0]
    assert u == pytest.approx(-math.sqrt(2), abs=1e-6)
    assert log_z == pytest.approx(0.92969539834161, abs=2e-8)
    assert abs(values[-1, 0] + math.sqrt(2)) > 1e-2, "without the extrapolation the energy is far off"


def test_edges_of_the_torus(tori):
    """Two ground states of -2 per site, entropy ln 2; below them there is nothing; the middle is infinitely hot."""
    family = tori[32].family
    edge = maxent.solve(family, {"energy": -2048.0})
    assert (str(edge.verdict), edge.face.dimension) == ("boundary", 1)
    assert edge.entropy == pytest.approx(math.log(2), abs=1e-12)
    assert str(maxent.solve(family, {"energy": -2048.001}).verdict) == "infeasible"
    hot = maxent.solve(family, {"energy": 0.0})
    assert hot.multipliers["energy"] == pytest.approx(0.0, abs=1e-12)
    assert hot.entropy == pytest.approx(1024 * math.log(2), rel=1e-13)

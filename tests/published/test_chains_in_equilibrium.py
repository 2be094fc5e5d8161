"""Heisenberg, XXZ and XX chains in equilibrium: rings towards the infinite chain, series, edges, the XX chain exactly.

Energy sum S.S with J = 1, k_B = 1; numbers per site.  Rings of 10, 12 and 14 sites approach the infinite chain like a
geometric sequence where the thermal length is short; what is left of it is added (`limit`), and each number states how
far that may stay off.  At T = 0.1 and in the law C/T -> 2/3 (I. Affleck 1986) rings of this size say nothing about the
infinite chain, and the maximum of C/T is approached only.
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

import maxent
from maxent.families import Matrices, Modes
from maxent.lattice import Ring, formula
from maxent.quench import ground_start
from maxent.quench.ensembles import Charges
from maxent.quench.thermodynamics import thermodynamics

LENGTHS = (10, 12, 14)
NAMES = ("Massieu potential", "energy", "entropy", "heat capacity at fixed along z", "susceptibility of along z")


def exchange(delta: float) -> str:
    return f"Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + {delta!r}*Sz[i]*Sz[i+1]"


def limit(a, b, c):
    """Limit of three terms of a geometric sequence."""
    return c - (c - b) ** 2 / ((c - b) - (b - a))


@pytest.fixture(scope="module")
def rings():
    """Length -> family of energy and magnetisation."""
    return {
        n: Charges({"energy": formula(exchange(1.0), Ring(n)), "along z": formula("Sz[i]", Ring(n))}, "energy").family
        for n in LENGTHS
    }


def at(rings, n: int, temperature: float) -> np.ndarray:
    """ln Z, e, s, C and chi per site of the state solved back from its own energy."""
    family = rings[n]
    values = family.evaluate(np.array([1 / temperature, 0.0]), 1).values
    result = maxent.solve(family, dict(zip(family.names, values, strict=True)))
    assert result.multipliers["energy"] == pytest.approx(1 / temperature, rel=1e-9)
    thermo = thermodynamics(result, fields="along z")
    return np.array([thermo[name].value / n for name in NAMES])


# ------------------------------------------------------------------ Heisenberg chain

#: T: ln Z/N, e, s, C/N, chi of the infinite chain (own solution of the integral equations of A. Kluemper 1993,
#: A. Kluemper and D. C. Johnston, Phys. Rev. Lett. 84, 4701 (2000), two grids), and how far the limit may be off.
INFINITE = {
    0.2: (
        [2.28478974422709, -0.42839818684135617, 0.14279881002030947, 0.1623482673363697, 0.12103092468716337],
        [2e-4, 4e-5, 7e-4, 0.1, 6e-4],
    ),
    0.25: (
        [1.8605587850033336, -0.41889737301571905, 0.18496929294045739, 0.2177675272165591, 0.12510423786981525],
        [5e-5, 1e-6, 2e-4, 8e-3, 6e-5],
    ),
    0.3: (
        [1.5849730396032802, -0.4066912049478131, 0.2293356897772365, 0.2690862498390929, 0.1295978819238792],
        [2e-5, 1e-6, 5e-5, 2e-3, 7e-6],
    ),
    0.4: (
        [1.2571667647568592, -0.3760028860311695, 0.31715954967893545, 0.3353449208562336, 0.13813958854311364],
        [2e-6, 1e-7, 4e-6, 2e-4, 1e-7],
    ),
}


@pytest.mark.parametrize("temperature", INFINITE)
def test_rings_approach_the_infinite_chain(rings, temperature):
    expected, within = (np.array(x) for x in INFINITE[temperature])
    found = [at(rings, n, temperature) for n in LENGTHS]
    off = np.abs(np.array(found) - expected)
    assert np.all(off[2] < off[1]) and np.all(off[1] < off[0])
    assert np.all(np.abs(limit(*found) - expected) <= within)


def test_a_warm_ring_is_the_infinite_chain(rings):
    """T = 2 (same source; a ring of 16 agrees): fourteen sites are enough for ten digits."""
    expected = [0.718148018212502, -0.10220344247953472, 0.6670462969727347, 0.053358169808863765, 0.09447374750616519]
    assert_allclose(at(rings, 14, 2.0), expected, rtol=0, atol=1e-10)


#: D. C. Johnston, R. K. Kremer, M. Troyer, X. Wang, A. Kluemper et al., Phys. Rev. B 61, 9558 (2000), digits from
#: memory: T and height of the maxima of C and of chi, and how far the limit of the rings may be off.
MAXIMA = [(3, 0.48028487, 0.3497121235, 5e-5), (4, 0.640851, 0.146926279, 1e-9)]


@pytest.mark.parametrize(("index", "temperature", "height", "within"), MAXIMA)
def test_maxima_of_the_infinite_chain(rings, index, temperature, height, within):
    around = [
        limit(*[at(rings, n, t)[index] for n in LENGTHS]) for t in (temperature - 0.02, temperature, temperature + 0.02)
    ]
    assert around[1] == pytest.approx(height, abs=within)
    assert around[1] > max(around[0], around[2])


def test_maximum_of_the_heat_capacity_over_temperature(rings):
    """0.8973651576 at T = 0.30716996 (same source, from memory; own solution 0.89736518): approached from above."""
    found = np.array([at(rings, n, 0.30717)[3] / 0.30717 for n in LENGTHS])
    off = found - 0.8973651576
    assert off[0] > off[1] > off[2] > 0
    assert limit(*found) == pytest.approx(0.8973651576, abs=6e-3)


def test_series_of_the_heat_capacity(rings):
    """C/N = 3 b^2/16 (1 + b/2 - ...) at small b = J/T: Johnston et al. 2000, leading terms from memory; exact
    rationals by own traces of rings longer than the order."""
    terms = [1, 1 / 2, -5 / 16, -5 / 16, 7 / 256, 917 / 7680, 1417 / 61440, -4303 / 129024]
    for b in (0.1, 0.05):
        series = 3 * b**2 / 16 * sum(c * b**k for k, c in enumerate(terms))
        assert at(rings, 12, 1 / b)[3] == pytest.approx(series, rel=2 * b**8)


@pytest.mark.parametrize("n", [10, 12])
def test_cumulants_at_infinite_temperature(rings, n):
    """Variance 3/16 and third cumulant -3/32 = -0.09375 of the energy per site (closed form)."""
    variance = lambda b: rings[n].evaluate(np.array([b, 0.0])).covariance[0, 0] / n
    assert variance(0.0) == pytest.approx(0.1875, abs=1e-12)
    b = np.cos(np.pi * (np.arange(14) + 0.5) / 14) * 0.2
    slope = np.polynomial.Chebyshev.fit(b, [variance(x) for x in b], 13, domain=[-0.2, 0.2]).deriv()(0.0)
    assert -slope == pytest.approx(-0.09375, abs=1e-11)


# ------------------------------------------------------------------ lower edge of a gapped chain


def test_lower_edge_of_the_xxz_chain():
    """Delta = 2: -0.6172220459758657 per site, closed series (C. N. Yang, C. P. Yang 1966).

    Rings of 12 and 14 sites: -0.62167645, -0.62010861 (own computation); they come from below.
    """
    edge, known = -0.6172220459758657, [-0.62167645, -0.62010861]
    lowest = []
    for n in (10, 12, 14):
        energy = formula(exchange(2.0), Ring(n))
        lowest.append(float(ground_start(energy).mean(energy)[0]) / n)
    assert_allclose(lowest[1:], known, rtol=0, atol=5.1e-9)
    assert lowest[0] < lowest[1] < lowest[2] < edge
    assert limit(*lowest) == pytest.approx(edge, abs=1e-3)
    family = Charges({"energy": formula(exchange(2.0), Ring(12))}, "energy").family
    for energy, verdict in ((edge, "solved"), (lowest[1], "boundary"), (lowest[1] - 1e-4, "infeasible")):
        assert str(maxent.solve(family, {"energy": 12 * energy}).verdict) == verdict


# ------------------------------------------------------------------ XX chain


def test_maximum_of_the_heat_capacity_of_the_xx_chain():
    """T = 0.31614344314331294, C/N = 0.3260068713099953 (own evaluation of the integrals of S. Katsura 1962).

    Free fermions with levels cos k; 400 momenta reproduce the integrals to rounding.
    """
    k = 2 * np.pi * (np.arange(400) + 0.5) / 400
    family = Modes({"energy": np.cos(k)}, degeneracy=np.full(400, 1 / 400))

    def capacity(temperature):
        energy = family.evaluate(np.array([1 / temperature]), 1).values[0]
        return thermodynamics(maxent.solve(family, {"energy": float(energy)}))["heat capacity"].value

    t = 0.31614344314331294
    assert capacity(t) == pytest.approx(0.3260068713099953, abs=1e-11)
    x = np.cos(np.pi * (np.arange(12) + 0.5) / 12) * 0.02
    fit = np.polynomial.Chebyshev.fit(t + x, [capacity(t + y) for y in x], 11, domain=[t - 0.02, t + 0.02])
    (top,) = [r.real for r in fit.deriv().roots() if abs(r.imag) < 1e-9 and abs(r.real - t) < 0.02]
    assert top == pytest.approx(t, abs=1e-7)


def test_variance_of_the_xx_chain_at_infinite_temperature():
    """1/8 per site (closed form), of free fermions and of spins alike; ln Z/N = ln 2 + b^2/16 + ..."""
    k = 2 * np.pi * (np.arange(400) + 0.5) / 400
    fermions = Modes({"energy": np.cos(k)}, degeneracy=np.full(400, 1 / 400))
    spins = Matrices({"energy": formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1]", Ring(8)).matrix()})
    for family, n in ((fermions, 1), (spins, 8)):
        assert family.evaluate(np.zeros(1)).covariance[0, 0] / n == pytest.approx(0.125, abs=1e-12)
        small = family.evaluate(np.array([0.01]), 0).log_partition / n - np.log(2)
        assert small == pytest.approx(0.01**2 / 16, abs=1e-9)

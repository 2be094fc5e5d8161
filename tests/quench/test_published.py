"""Quenches, ensembles and thermodynamics of chains against values from outside, through the public interface.

Each value stands beside its source; "from memory" where the number or formula was recalled and reproduced by
computation, not read in the source; "own computation" where two independent programs agree (to 3e-13 unless said).
State = exp(-sum lam_j Q_j)/Z, k_B = hbar = 1.

Left out, because they belong to the infinite chain and rings of these sizes do not come near them: entropies and
correlators of the complete and of the strictly local ensembles after a quench from the alternating state, their large
Delta expansions, correlation lengths, low-temperature laws.  An ideal gas with surface entropy has no list of levels.
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

import maxent
from maxent.families import Matrices
from maxent.lattice import Chain, ProductState, Ring, formula
from maxent.quench import Spectrum, dephase, ground_start
from maxent.quench.comparison import compare
from maxent.quench.ensembles import Charges
from maxent.quench.thermodynamics import thermodynamics
from tests.quench.momenta import momentum_basis


def exchange(delta: float) -> str:
    """Energy of one bond of an XXZ chain."""
    return f"Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + {delta!r}*Sz[i]*Sz[i+1]"


def transverse(field: float) -> str:
    """Energy density of a transverse-field chain in Pauli matrices."""
    return f"-X[i]*X[i+1] - {field!r}*Z[i]"


# ------------------------------------------------------------------ transverse-field ring: four charges, one by one

#: L = 8, J = 1, ground state of h0 = 2, then h = 0.5.  Own computation: dense Newton, and Newton on free fermions of
#: both boundary conditions.
TRANSVERSE = {
    "energy": transverse(0.5),
    "second": "-X[i]*Z[i+1]*X[i+2] + Z[i] + 0.5*(X[i]*X[i+1] + Y[i]*Y[i+1])",
    "third": "-X[i]*Z[i+1]*Z[i+2]*X[i+3] - Y[i]*Y[i+1] + 0.5*(X[i]*Z[i+1]*X[i+2] + Y[i]*Z[i+1]*Y[i+2])",
    "odd": "X[i]*Y[i+1] - Y[i]*X[i+1]",
}
MEANS = {"z": "Z[0]", "xx": "X[0]*X[1]", "zz": "Z[0]*Z[1]", "xx2": "X[0]*X[2]", "yy": "Y[0]*Y[1]"}
TARGETS = [-5.814912597321382, 7.316698577698826, 1.4899233795357933, 0.0]
ENSEMBLES = [
    (
        [0.7162288005438076],
        3.6704928761488675,
        [0.2582991335270639, 0.597714507901641, 0.0766043806270868, 0.38551698249400457, -0.016356174230537313],
    ),
    (
        [0.9649533542869652, -0.745746655236734],
        2.7709837041421697,
        [0.4647815602182753, 0.4944732945560351, 0.22190439883284782, 0.1435706301559633, -0.014975798224198256],
    ),
    (
        [0.6994666590102515, -0.5749534018446824, -0.2388877670794477],
        2.6691511231238927,
        [0.49299898658449703, 0.4803645813729248, 0.2749424101943875, 0.11776732879295623, -0.07141065095664048],
    ),
    (
        [0.6994666590102493, -0.5749534018446829, -0.23888776707944834, 0.0],
        2.6691511231238945,
        [0.4929989865844971, 0.4803645813729243, 0.2749424101943875, 0.11776732879295547, -0.0714106509566404],
    ),
]
DEPHASED = [0.5027462337846125, 0.4754909577728641, 0.34688515804132913, 0.16662143700301585, -0.09090514535687519]


@pytest.fixture(scope="module")
def four_charges():
    ring = Ring(8)
    read = lambda texts: {name: formula(text, ring) for name, text in texts.items()}
    return compare(read(TRANSVERSE), ground_start(formula(transverse(2.0), ring)), observables=read(MEANS))


def test_targets_and_dephased_state_of_the_transverse_field_ring(four_charges):
    assert_allclose(list(four_charges.targets.values()), TARGETS, atol=1e-11)
    assert_allclose(list(four_charges.truth.values()), DEPHASED, atol=1e-11)
    assert all(c.conserved for c in four_charges.conservation.charges.values())


@pytest.mark.parametrize("count", [1, 2, 3, 4])
def test_ensembles_of_the_transverse_field_ring(four_charges, count):
    multipliers, entropy, means = ENSEMBLES[count - 1]
    found = next(e for e in four_charges.ensembles if len(e.charges) == count and e.multipliers and not e.sector)
    assert found.verdict == "solved"
    assert_allclose(list(found.multipliers.values()), multipliers, atol=1e-10)
    assert_allclose(found.entropy, entropy, atol=1e-11)
    assert_allclose(list(found.means.values()), means, atol=1e-11)


def test_order_of_the_four_charges(four_charges):
    """Entropy drops are differences of the entropies above; a charge that is odd under complex conjugation adds none.

    Such charges have multiplier zero for a real start (closed form: the start, H and the other charges are real).
    """
    drops = {s.charge: s.entropy_drop for s in four_charges.ranking.by_entropy}
    entropies = [8 * np.log(2.0), *[e for _, e, _ in ENSEMBLES]]
    assert list(drops) == ["energy", "second", "third", "odd"]
    assert_allclose(list(drops.values()), -np.diff(entropies), atol=1e-11)
    assert "odd: multiplier zero, no entropy drop for this start." in four_charges.ranking.suggestion


def test_entropy_drops_are_relative_entropies(four_charges):
    """S_k - S_(k+1) = S(rho_(k+1) || rho_k) for nested sets with the same targets (closed form), by dense matrices."""
    ring = Ring(8)
    operators = [formula(text, ring).matrix().toarray() for text in TRANSVERSE.values()]

    def state_and_log(multipliers):
        e, u = np.linalg.eigh(sum(x * q for x, q in zip(multipliers, operators, strict=False)))
        logs = -e - np.log(np.sum(np.exp(-e)))
        return (u * np.exp(logs)) @ u.conj().T, (u * logs) @ u.conj().T

    nested = [e.multipliers.values() for e in four_charges.ensembles if e.multipliers and not e.sector]
    states = [state_and_log([0.0] * 4), *map(state_and_log, nested)]
    steps = four_charges.ranking.by_entropy
    for (_, before), (rho, after), step in zip(states, states[1:], steps, strict=False):
        assert_allclose(step.entropy_drop, np.trace(rho @ (after - before)).real, rtol=0, atol=1e-12)
    assert len(states) == 1 + len(steps) == 5


# ------------------------------------------------------------------ transverse-field chain: towards infinite size

#: P. Calabrese, F. H. L. Essler, M. Fagotti, Phys. Rev. Lett. 106, 227203 (2011) and J. Stat. Mech. (2012) P07016,
#: P07022: stationary <sigma_z> and <sigma_x sigma_x>, formula, evaluated by quadrature; 7/8 and 1/2 also by contour
#: integrals (closed forms).  beta, thermal <sigma_z>, thermal entropy per site at the same energy: own quadrature,
#: definition as in D. Rossini, A. Silva, G. Mussardo, G. E. Santoro, Phys. Rev. Lett. 102, 127204 (2009).
#: The last number is the distance that rings of 6, 8, 10 sites, extrapolated geometrically, may keep.
CHAIN = [
    (2.0, 0.5, "z", 0.5173158092226835, 6e-4),
    (2.0, 0.5, "xx", 0.467107728833847, 3e-4),
    (0.5, 2.0, "xx", 0.5173158092226832, 6e-4),
    (np.inf, 2.0, "z", 0.875, 1e-5),
    (np.inf, 1.0, "z", 0.5, 1e-12),
    (2.0, 0.5, "beta", 0.7402391794706977, 3e-3),
    (2.0, 0.5, "thermal z", 0.26469004197427043, 6e-4),
    (2.0, 0.5, "thermal entropy", 0.45739456750250446, 3e-4),
    (np.inf, 1.0, "beta", 0.7316165802876614, 6e-4),
    (np.inf, 1.0, "thermal z", 0.5, 3e-4),
    (np.inf, 1.0, "thermal entropy", 0.3976038487391282, 6e-5),
]


@pytest.fixture(scope="module")
def rings():
    """(h0, h) -> what rings of 6, 8 and 10 sites say, by name."""

    def tell(size, before, after):
        ring = Ring(size)
        up = ProductState(ring, 0.0, 0.0).vector()
        start = up if np.isinf(before) else ground_start(formula(transverse(before), ring))
        found = compare(
            {"energy": formula(transverse(after), ring)}, start, blocks=(1,), ranking=False,
            observables={"z": formula("Z[0]", ring), "xx": formula("X[0]*X[1]", ring)},
        )  # fmt: skip
        thermal = found.ensemble("canonical")
        return {
            "z": found.truth["z"], "xx": found.truth["xx"], "beta": thermal.multipliers["energy"],
            "thermal z": thermal.means["z"], "thermal entropy": thermal.entropy / size,
        }  # fmt: skip

    cases = sorted({case[:2] for case in CHAIN})
    return {case: [tell(size, *case) for size in (6, 8, 10)] for case in cases}


@pytest.mark.parametrize(("before", "after", "name", "value", "within"), CHAIN)
def test_rings_approach_the_infinite_chain(rings, before, after, name, value, within):
    a, b, c = (told[name] for told in rings[before, after])
    off = np.abs(np.array([a, b, c]) - value)
    if off.max() > 1e-12:  # the differences form a geometric sequence, and what is left of it is added
        assert off[2] < off[1] < off[0]
        c += (c - b) ** 2 / (2 * b - a - c)
    assert abs(c - value) <= within
    assert abs(c - value) < off[2] or off.max() <= 1e-12


# ------------------------------------------------------------------ alternating start on XXZ rings


def fourth_charge(delta: float) -> str:
    """Q4 = i[B, Q3], Q3 = i[B, H], B = sum j h_j, read off the middle of an open chain.

    M. P. Grabowski, P. Mathieu, Ann. Phys. 243, 299 (1995).
    """
    chain = Chain(10)
    h, b = formula(exchange(delta), chain), formula(f"i*({exchange(delta)})", chain)
    q4 = 1j * b.commutator(1j * b.commutator(h))
    words = [
        f"({float(c.real)!r})*" + "*".join(f"{o}[i+{p - 4}]" for o, p in zip(t.operators, t.positions, strict=True))
        for t, c in zip(q4.terms, q4.coefficients, strict=True)
        if t.positions and min(t.positions) == 4
    ]
    return " + ".join(words)


#: Own exact diagonalisation in the sector S^z = 0: beta, <sigma_z sigma_z> of neighbours and of next neighbours,
#: entropy with the energy alone; multipliers, correlators, entropy with Q4.  A single route but for L = 8.
ALTERNATING = {
    (10, 2): (
        [1.3148989936188522, -0.6470357729954405, 0.3534242766928755, 2.958816221270639],
        [1.2651625358140484, -0.07047355155767132, -0.6424166310280269, 0.3451497286979548, 2.939026206975344],
    ),
    (8, 3): (
        [1.2000728116759218, -0.805257509003813, 0.6231312824988442, 1.718514036443631],
        [1.196939547164949, -0.010072858013365585, -0.8042685788385305, 0.6210684051226258, 1.7178304818647303],
    ),
    (10, 3): (
        [1.288146896712689, -0.7999410580134667, 0.6148209944250137, 2.0731741281805953],
        [1.2913883965321282, 0.010899744467902029, -0.8013972686160591, 0.6177058947798163, 2.0720962360230817],
    ),
}


@pytest.mark.parametrize(("size", "delta"), ALTERNATING)
def test_alternating_start_with_the_fourth_charge(size, delta):
    ring = Ring(size)
    found = compare(
        {"energy": formula(exchange(delta), ring), "magnetisation": formula("Sz[i]", ring),
         "fourth": formula(fourth_charge(delta), ring)},
        ProductState(ring, ["0", "pi"], 0.0).vector(), ranking=False, blocks=(1,), by_symmetry=False,
        observables={"near": formula("Z[0]*Z[1]", ring), "next": formula("Z[0]*Z[2]", ring)},
    )  # fmt: skip
    # closed form, found with the charge: 3 Delta/8 per site, no term of third order in Delta
    assert_allclose([found.targets["energy"] / size, found.targets["fourth"] / size], [-delta / 4, 3 * delta / 8])
    assert found.conservation.charges["fourth"].conserved and found.sharp == {"magnetisation": 0.0}
    alone, both = ALTERNATING[size, delta]
    thermal = found.ensemble("canonical", sector=True)
    assert_allclose(
        [thermal.multipliers["energy"], *thermal.means.values(), thermal.entropy], alone, rtol=0, atol=1e-8
    )
    wide = found.ensemble("generalised: energy, magnetisation, fourth", sector=True)
    numbers = [wide.multipliers["energy"], wide.multipliers["fourth"], *wide.means.values(), wide.entropy]
    assert_allclose(numbers, both, rtol=0, atol=1e-8)
    assert wide.entropy < thermal.entropy


def test_inverse_temperature_over_all_sectors_and_inside_one():
    """L = 12, Delta = 1.5, alternating start: 1.494 over all sectors, 1.277 at zero magnetisation (own computation)."""
    ring = Ring(12)
    found = compare(
        {"energy": formula(exchange(1.5), ring), "magnetisation": formula("Sz[i]", ring)},
        ProductState(ring, ["0", "pi"], 0.0).vector(), ranking=False, blocks=(1,), by_symmetry=False,
    )  # fmt: skip
    betas = [found.ensemble("canonical", sector=inside).multipliers["energy"] for inside in (False, True)]
    assert_allclose(betas, [1.494, 1.277], atol=5.1e-4)


# ------------------------------------------------------------------ mixed-field ring


def test_thermal_and_stationary_state_of_the_mixed_field_ring():
    """L = 10, all spins at theta = 2, phi = 0.5: beta by Newton and by bracketing; means of X (own computation)."""
    ring = Ring(10)
    found = compare(
        {"energy": formula("Z[i]*Z[i+1] + 0.9045*X[i] + 0.8090*Z[i]", ring)}, ProductState(ring, 2.0, 0.5).vector(),
        observables={"x": formula("X[i]/10", ring)}, blocks=(1, 2),
    )  # fmt: skip
    thermal = found.ensemble("canonical")
    assert_allclose(thermal.multipliers["energy"], -0.19545565235669898, rtol=1e-11)
    assert_allclose(thermal.means["x"], 0.16794186709295986, rtol=1e-11)
    assert_allclose(found.truth["x"], 0.22257878783151508, rtol=1e-11)
    assert found.deviation("canonical", "x") == thermal.means["x"] - found.truth["x"]


# ------------------------------------------------------------------ Heisenberg, XXZ chains in equilibrium


@pytest.fixture(scope="module")
def fourteen():
    ring = Ring(14)
    charges = {"energy": formula(exchange(1.0), ring), "along z": formula("Sz[i]", ring)}
    return Charges(charges, "energy").family


def thermal(family, temperature):
    lam = np.array([1 / temperature, 0.0])
    values = family.evaluate(lam, 1).values
    return thermodynamics(maxent.solve(family, dict(zip(family.names, values, strict=True))), fields="along z")


@pytest.mark.parametrize(
    ("name", "temperature", "peak"),
    [
        ("heat capacity at fixed along z", 0.4787560999956611, 0.3500618602862371),
        ("susceptibility of along z", 0.6408933472563753, 0.14692569013943696),
    ],
)
def test_maxima_of_a_ring_of_fourteen(fourteen, name, temperature, peak):
    """Temperature and height of the maxima per site (own exact diagonalisation of both charges, one route)."""
    at = lambda t: thermal(fourteen, t)[name].value / 14
    assert_allclose(at(temperature), peak, atol=1e-11)
    below, above = at(temperature * 0.999), at(temperature * 1.001)
    assert max(below, above) < peak
    shift = 0.5e-3 * (below - above) / (below - 2 * peak + above)  # top of the parabola, relative
    assert abs(shift) < 3e-6


def test_maximum_of_the_susceptibility_of_the_infinite_chain(fourteen):
    """0.146926279 at T = 0.640851: D. C. Johnston et al., Phys. Rev. B 61, 9558 (2000), digits from memory.

    Half of it is 0.07346 of J. C. Bonner and M. E. Fisher, Phys. Rev. 135, A640 (1964), from memory.
    """
    found = thermal(fourteen, 0.640851)["susceptibility of along z"].value / 14
    assert_allclose(found, 0.146926279, atol=1e-6)
    assert_allclose(found / 2, 0.07346, atol=2e-5)


def test_series_of_the_log_partition():
    """ln Z/N - ln 2 in powers of b = J/T: exact rational moments of rings longer than the order; they agree with
    the series quoted by D. C. Johnston et al., Phys. Rev. B 61, 9558 (2000), and by A. Buehler, N. Elstner,
    G. S. Uhrig, Eur. Phys. J. B 16, 475 (2000).  The next order is left: 0.2^10 times a small number."""
    terms = [3 / 32, 1 / 64, -5 / 1024, -3 / 1024, 7 / 40960, 131 / 245760, 1417 / 18350080, -4303 / 49545216]
    ring = Ring(10)
    family = Charges({"energy": formula(exchange(1.0), ring)}, "energy").family
    for b in (0.2, -0.2):
        log_z = family.evaluate(np.array([b]), 0).log_partition / 10 - np.log(2)
        assert_allclose(log_z, sum(c * b ** (k + 2) for k, c in enumerate(terms)), atol=1e-11)


@pytest.mark.parametrize(
    ("delta", "edge", "within"),
    [
        (0.5, -0.375, 1e-4),  # closed form: C. N. Yang, C. P. Yang (1966); Alcaraz, Barber, Batchelor
        (1.0, 0.25 - np.log(2.0), 1.5e-4),  # L. Hulthen, Ark. Mat. Astron. Fys. 26A, 1 (1938); slowed by logarithms
    ],
)
def test_lower_edge_of_the_energy(delta, edge, within):
    """Rings come from below like 1/L^2; between their edge and that of the infinite chain targets are reachable."""
    lowest = {
        size: Spectrum(formula(exchange(delta), Ring(size)), basis=momentum_basis(size)).energies.min() / size
        for size in (8, 10, 12)
    }
    assert lowest[8] < lowest[10] < lowest[12] < edge
    assert_allclose((144 * lowest[12] - 100 * lowest[10]) / 44, edge, atol=within)
    family = Matrices({"energy": formula(exchange(delta), Ring(8)).matrix()})
    assert str(maxent.solve(family, {"energy": 8 * edge}).verdict) == "solved"
    assert str(maxent.solve(family, {"energy": 8 * lowest[8]}).verdict) == "boundary"
    assert str(maxent.solve(family, {"energy": 8 * lowest[8] - 0.01}).verdict) == "infeasible"


def test_ground_state_of_a_gapped_ring():
    # Delta = 2, L = 12: -0.62167645 per site (own computation, from which the infinite chain was extrapolated)
    energies = Spectrum(formula(exchange(2.0), Ring(12)), basis=momentum_basis(12)).energies
    assert_allclose(energies.min() / 12, -0.62167645, atol=5.1e-9)


# ------------------------------------------------------------------ random states


def test_entropy_of_half_of_a_random_state():
    """Mean over random states of 4 + 4 spins, sum_(k=n+1)^(mn) 1/k - (m-1)/(2n): D. N. Page, Phys. Rev. Lett. 71,
    1291 (1993), from memory; 2.2748659695882867 for m = n = 16."""
    page = sum(1 / k for k in range(17, 257)) - 15 / 32
    assert_allclose(page, 2.2748659695882867, rtol=1e-14)
    ring = Ring(8)
    at_rest = formula("0.5", ring)  # a multiple of the identity: nothing dephases
    rng = np.random.default_rng(5)
    entropies = []
    for _ in range(40):
        psi = rng.normal(size=256) + 1j * rng.normal(size=256)
        p = np.linalg.eigvalsh(dephase(at_rest, psi / np.linalg.norm(psi)).state.reduced(range(4)))
        entropies.append(-np.sum(p * np.log(p)))
    assert abs(np.mean(entropies) - page) < 0.005

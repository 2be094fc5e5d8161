"""Comparison of free particles: every number against that of the comparison of matrices, or of states written out."""

from itertools import product

import numpy as np
import pytest

from maxent.families.matrices import Matrices
from maxent.families.pfaffians import pauli_word, word_mean
from maxent.families.spin_rings import SpinRing
from maxent.lattice import Bosons, Chain, Fermions, Lattice, PatternState, Ring, formula
from maxent.quench import (
    SizeSeries,
    Start,
    compare,
    compare_gaussian,
    dephase,
    gaussian_ground,
    gaussian_pattern,
    gaussian_thermal,
    ground_start,
    size_series,
    thermal_start,
)
from maxent.quench.columns import COMPLETE
from maxent.quench.distances import relative_entropy, trace_distance
from maxent.quench.gaussian_conservation import gaussian_conservation
from maxent.quench.gaussian_forms import as_quadratic, gaussian_family
from maxent.quench.gaussian_parity import block_density, block_rest, parity_terms, projected_mean, ring_mean
from maxent.quench.gaussian_speeds import group_velocity
from maxent.quench.gaussian_words import word_sum
from maxent.solver import solve

ISING = {
    "energy": "-X[i]*X[i+1] - 0.5*Z[i]",
    "second": "-X[i]*Z[i+1]*X[i+2] + Z[i] + 0.5*(X[i]*X[i+1] + Y[i]*Y[i+1])",
}
SPINS = {"z": "Z[i]/L", "zz": "Z[i]*Z[i+1]/L", "xx": "X[i]*X[i+1]/L", "pair": "Z[0]*Z[2]"}
HOPPING = {"energy": "-(dagger(c[i])*c[i+1] + h.c.) + 0.3*n[0]", "number": "n[i]"}
STRONG = "-X[i]*X[i+1] - 1.7*Z[i]"


def read(texts, sites):
    return {name: formula(text, sites) for name, text in texts.items()}


def both(charges, observables, sites, start, free, **options):
    """The two comparisons of one problem."""
    q, o = read(charges, sites), read(observables, sites)
    times = np.linspace(0.0, 7.0, 12)
    many = compare(q, start, observables=o, times=times, by_symmetry=False, **options)
    return many, compare_gaussian(q, free, observables=o, times=times, **options)


def blocks_by_moments(matrices, found, sites):
    """Density matrices of blocks: all words of Pauli matrices in the Gaussian state of given second moments."""
    pauli = {"I": np.eye(2), "X": np.array([[0, 1], [1, 0]]), "Y": np.array([[0, -1j], [1j, 0]]), "Z": np.diag([1, -1])}
    out = {}
    for block, where in found.block_sites.items():
        rho = np.zeros((2**block, 2**block), complex)
        for letters in product("IXYZ", repeat=block):
            word = {s: c for s, c in enumerate(letters) if c != "I"}
            matrix = np.eye(1)
            for c in letters:
                matrix = np.kron(matrix, pauli[c])
            g = matrices[np.ix_(*[[2 * s + k for s in where for k in (0, 1)]] * 2)]
            rho += word_mean(g, pauli_word(word)) * matrix / 2**block
        out[block] = rho
    return out


def dephased_moments(state, sites):
    """``<i g_a g_b>`` in a state of matrices, from the operators written out."""
    n = sites.size
    g = [
        formula("*".join([*(f"Z[{k}]" for k in range(j)), f"{x}[{j}]"]), sites).matrix() for j in range(n) for x in "XY"
    ]
    out = np.zeros((2 * n, 2 * n))
    for a in range(2 * n):
        for b in range(a):
            out[a, b] = np.real(state.mean(1j * (g[a] @ g[b])))
            out[b, a] = -out[a, b]
    return out


def agree(many, free, *, means=1e-10, noted=("zz", "pair")):
    """Whatever both comparisons have."""
    for key in ("initial", "truth", "targets"):
        assert getattr(free, key) == pytest.approx(getattr(many, key), abs=means), key
    for name, trace in many.traces.items():
        np.testing.assert_allclose(free.traces[name], trace, atol=1e-10)
        if name not in noted:
            assert free.fluctuations[name] == pytest.approx(many.fluctuations[name], abs=1e-10)
        else:  # from a sample of times
            assert free.fluctuations[name] == pytest.approx(many.fluctuations[name], rel=0.15)
    assert free.conservation.broken == many.conservation.broken
    labels = [e.label for e in many.ensembles if e.multipliers and not e.sector]
    assert [e.label for e in free.ensembles if not e.sector] == [*labels, COMPLETE]
    for label in labels:
        a, b = many.ensemble(label), free.ensemble(label)
        assert b.verdict == a.verdict
        assert b.multipliers == pytest.approx(a.multipliers, abs=1e-9)
        assert b.entropy == pytest.approx(a.entropy, abs=1e-10)
        assert b.means == pytest.approx(a.means, abs=1e-10)
        assert b.corrections == pytest.approx(a.corrections, abs=1e-7)
        for name, pair in a.variances.items():
            assert b.variances[name] == pytest.approx(pair, abs=1e-9)
        assert [q.name for q in b.quantities] == [q.name for q in a.quantities]
        for p, q in zip(a.quantities, b.quantities, strict=True):
            assert q.value == pytest.approx(p.value, abs=1e-8, nan_ok=True), q.name
        assert all(b.self_checks)
    if many.ranking is not None:
        a, b = many.ranking.by_entropy, free.ranking.by_entropy
        assert [s.charge for s in a] == [s.charge for s in b]
        np.testing.assert_allclose([s.entropy_drop for s in b], [s.entropy_drop for s in a], atol=1e-10)
        np.testing.assert_allclose([s.predicted_drop for s in b], [s.predicted_drop for s in a], atol=1e-10)


@pytest.mark.parametrize("sites", [Ring(6), Ring(7), Chain(5)])
def test_spins_in_a_ground_state(sites):
    insist = () if sites.is_ring else ("second",)
    start = formula(STRONG, sites)
    many, free = both(ISING, SPINS, sites, ground_start(start), gaussian_ground(start), insist=insist)
    agree(many, free)


def test_a_start_that_is_the_same_nowhere():
    sites, pattern = Ring(6), ["up", "up", "down", "up", "down", "down"]
    free = gaussian_pattern([0, 0, 1, 0, 1, 1])
    many, free = both(ISING, SPINS, sites, Start.from_vector(PatternState(sites, pattern)), free)
    agree(many, free)
    assert free.sharp == {"parity": -1.0}


def test_a_mixed_start():
    sites = Chain(5)
    start = formula(STRONG, sites)
    one = {"energy": ISING["energy"]}
    many, free = both(one, SPINS, sites, thermal_start(start, 0.7), gaussian_thermal(start, 0.7))
    agree(many, free)


def test_fermions_with_a_number():
    sites = Chain(5, Fermions())
    observed = {"n2": "n[2]", "hop": "dagger(c[0])*c[3] + h.c."}
    start = Start.from_vector(PatternState(sites, [1, 0, 0, 1, 0]))
    many, free = both(HOPPING, observed, sites, start, gaussian_pattern([1, 0, 0, 1, 0]))
    agree(many, free)
    assert [e.kind for e in free.ensembles] == ["canonical", "grand canonical", COMPLETE]


@pytest.mark.parametrize("sites", [Ring(6), Chain(6)])
def test_blocks_against_the_long_time_moments(sites):
    """Distances from the Gaussian state whose moments are those of the dephased matrices."""
    one = {"energy": ISING["energy"]}
    start = formula(STRONG, sites)
    many, free = both(one, {}, sites, ground_start(start), gaussian_ground(start), blocks=(1, 2, 3))
    dephased = dephase(formula(one["energy"], sites), ground_start(start))
    expected = blocks_by_moments(dephased_moments(dephased.state, sites), free, sites)
    family = Matrices({"energy": formula(one["energy"], sites).matrix()}, dims=sites.dims)
    state = solve(family, {"energy": many.targets["energy"]}).state
    found = free.ensemble("canonical")
    for block, rho in expected.items():
        mine = state.reduced(free.block_sites[block])
        assert found.distances[block] == pytest.approx(trace_distance(mine, rho), abs=1e-10)
        assert found.relative_entropies[block] == pytest.approx(relative_entropy(rho, mine), abs=1e-9)
        assert free.ensemble(COMPLETE).distances[block] == 0.0
    assert found.distances[1] == pytest.approx(many.ensemble("canonical").distances[1], abs=1e-10)


@pytest.mark.parametrize(("parity", "occupied"), [(1, [0, 1, 1, 0, 0]), (-1, [0, 1, 0, 0, 0])])
def test_the_sector_of_the_start(parity, occupied):
    sites = Ring(5)
    q = read(ISING, sites)
    free = compare_gaussian(q, gaussian_pattern(occupied), observables=read(SPINS, sites), ranking=False)
    line = formula("*".join(f"Z[{k}]" for k in range(5)), sites).matrix().diagonal().real
    whole = Matrices({n: op.matrix() for n, op in q.items()}, dims=sites.dims)
    inside = solve(whole.restrict(np.flatnonzero(line == parity)), free.targets)
    found = next(e for e in free.ensembles if e.sector and e.kind == "generalised")
    assert found.sector == {"parity": float(parity)}
    assert found.multipliers == pytest.approx(inside.multipliers, abs=1e-9)
    assert found.entropy == pytest.approx(inside.entropy, abs=1e-10)
    for name, text in SPINS.items():
        assert found.means[name] == pytest.approx(inside.state.mean(formula(text, sites).matrix()), abs=1e-10)


@pytest.mark.parametrize("beta", [0.0, 0.3, 3.0, 40.0])
@pytest.mark.parametrize("sectors", ["both", "even", "odd"])
def test_the_parity_by_the_inverse_covariance(sectors, beta):
    """Means and blocks of sectors against words around the ring; at beta = 0 every level lies at zero."""
    sites = Ring(6)
    ring = SpinRing(6, {"energy": formula(ISING["energy"], sites).pauli_terms()}, sectors=sectors)
    state = ring.state(np.array([beta]))
    for text in ("Z[0]*Z[1]", "X[0]*X[3]", "Z[i]*Z[i+1]*Z[i+2]*Z[i+3]*Z[i+4]*Z[i+5]", "X[i]*X[i+2]*Z[i+3]"):
        operator = formula(text, sites)
        expected = sum(c * state.mean_word(letters) for c, letters in operator.pauli_terms())
        assert ring_mean(state, operator) == pytest.approx(expected, abs=1e-11)
        short = [word_sum(operator, parity=t.parity, period=1) for t in parity_terms(state)]
        assert projected_mean(parity_terms(state), short) == pytest.approx(expected, abs=1e-11)
    rho = block_density(parity_terms(state), (0, 1, 2))
    np.testing.assert_allclose(rho, state.reduced([0, 1, 2]), atol=1e-11)
    left_out = sum(t.weight * t.covariance for t in parity_terms(state))
    for text in ("Z[0]*Z[1]", "X[0]*X[2]"):
        missed = abs(word_sum(formula(text, sites)).mean(left_out) - ring_mean(state, formula(text, sites)))
        if sectors != "both" and beta < 1:
            assert missed <= block_rest(parity_terms(state), (0, 1, 2)) + 1e-12


def test_bosons():
    """The truth by the motion of two coupled oscillators; no state where nothing confines the particles."""
    sites = Chain(2, Bosons())
    charges = read({"energy": "1.0*n[0] + 1.0*n[1] + 0.2*(dagger(b[0])*b[1] + h.c.)", "number": "n[i]"}, sites)
    h0 = formula("1.0*n[0] + 2.0*n[1] + 0.1*(b[0]*b[0] + h.c.)", sites)
    found = compare_gaussian(charges, gaussian_ground(h0), observables=read({"n0": "n[0]"}, sites), blocks=(1,))
    initial = [gaussian_ground(h0).mean(formula(f"n[{k}]", sites))[0] for k in (0, 1)]
    # the levels 1 +- 0.2 are (b0 +- b1)/sqrt 2: half of all particles on each site in the long run, from symmetry
    assert found.truth["n0"] == pytest.approx(sum(initial) / 2, abs=1e-12)
    assert found.initial["n0"] == pytest.approx(initial[0], abs=1e-12)
    label = "canonical"  # with the number the two levels are fixed, and so is the state of a site
    low, high = found.ensemble(label).distance_bounds[1]
    assert 0 < low < high and not found.ensemble(label).distances and found.ranking is None
    assert found.ensemble(COMPLETE).entropy >= 0
    # occupations 1/(exp(m) - 1) of the multipliers that the complete state has
    np.testing.assert_allclose(1 / np.expm1(found.modes["multiplier"]), found.modes["occupation"], rtol=1e-10)


def test_the_complete_state_keeps_every_level():
    """Occupations of momenta after the quench of a ring are those of the closed form, at 60 sites."""
    sites, h, h0 = Ring(60), 0.5, 1.7
    found = compare_gaussian(read({"energy": ISING["energy"]}, sites), gaussian_ground(formula(STRONG, sites)))
    k = np.pi / 60 * (2 * np.arange(30) + 1)
    angle = lambda f: np.arctan2(np.sin(k), f - np.cos(k))
    energy = 2 * np.sqrt(1 + h * h - 2 * h * np.cos(k))
    n = 0.5 * (1 - np.cos(angle(h) - angle(h0)))  # E. Barouch, B. McCoy, M. Dresden, Phys. Rev. A 2, 1075 (1970)
    order = np.argsort(energy)
    np.testing.assert_allclose(found.modes["energy"], np.repeat(energy[order], 2), atol=1e-12)
    np.testing.assert_allclose(found.modes["occupation"], np.repeat(n[order], 2), atol=1e-12)
    entropy = -2 * np.sum(n * np.log(n) + (1 - n) * np.log1p(-n))
    assert found.ensemble(COMPLETE).entropy == pytest.approx(entropy, abs=1e-10)
    entropies = [e.entropy for e in found.ensembles if not e.sector]
    assert entropies == sorted(entropies, reverse=True)


@pytest.mark.parametrize("h", [0.3, 1.0, 2.5])
@pytest.mark.parametrize("sites", [Ring(12), Chain(12)])
def test_the_largest_group_velocity(sites, h):
    """2 min(h, 1) for the transverse-field ring."""
    found = compare_gaussian(
        {"energy": formula(f"-X[i]*X[i+1] - {h}*Z[i]", sites)}, gaussian_ground(formula(STRONG, sites)), blocks=(1,)
    )
    assert found.speed == pytest.approx(2 * min(h, 1.0), abs=1e-6)
    assert found.revival == pytest.approx((12 if sites.is_ring else 24) / (2 * found.speed))


def test_the_velocity_of_bosons_and_of_two_sites_in_a_cell():
    free = as_quadratic(formula("2.5*n[i] - (dagger(b[i])*b[i+1] + h.c.)", Ring(12, Bosons())).one_body())
    assert group_velocity(free, "bosons", closing=1) == pytest.approx(2.0, abs=1e-6)  # 2.5 - 2 cos k
    # alternating hopping 1, w: levels +-|1 + w e^ik| of a cell, at most min(1, w) cells, twice as many sites, per time
    h = np.diag([1.0, 0.4] * 5 + [1.0], 1)
    alternating = as_quadratic(h + h.T)
    assert group_velocity(alternating, "fermions") == pytest.approx(0.8, abs=1e-6)
    disordered = as_quadratic(h + h.T + np.diag(np.linspace(0, 1, 12)))
    assert group_velocity(disordered, "fermions") is None


def test_blocks_that_matrices_cannot_reach_and_a_series():
    def build(n):
        ring = Ring(n)
        q = read(ISING, ring)
        return {
            "charges": q, "start": gaussian_ground(formula(STRONG, ring)), "blocks": (1, 2, 12), "ranking": False,
            "observables": read({"z": SPINS["z"]}, ring),
        }  # fmt: skip

    series = size_series(build, [24, 28, 32], make=compare_gaussian)
    assert isinstance(series, SizeSeries) and list(series.sizes) == [24, 28, 32]
    last = series.comparisons[-1]
    for e in last.ensembles[:-1]:
        low, high = e.distance_bounds[12]
        assert 0 < low < high < 1 and e.distances[2] <= high + 1e-12  # a part of a block is no farther than the block
        assert 2 * e.distances[2] ** 2 <= e.relative_entropies[2] <= e.relative_entropies[12] + 1e-12
    assert last.best() == "generalised: energy, second"
    assert not any(COMPLETE in s for s in series.statements) and len(series.statements) >= 2
    plain = last.to_dict()
    assert plain["dimension"] is None and plain["eigenstate_tests"] is None and plain["statistics"] == "fermions"


def test_one_gaussian_state_instead_of_two_sectors():
    sites = Ring(30)
    q, start = read(ISING, sites), gaussian_ground(formula(STRONG, sites))
    exact, plain = (
        compare_gaussian(q, start, observables=read(SPINS, sites), unprojected=u, ranking=False) for u in (False, True)
    )
    assert not plain.sharp and len(plain.ensembles) == 3 and len(exact.ensembles) == 5
    for label in plain.labels:
        assert plain.ensemble(label).means == pytest.approx(exact.ensemble(label).means, abs=1e-4)


def test_conservation_by_forms():
    ring = Ring(6)
    found = gaussian_conservation(formula(ISING["energy"], ring), read(ISING | {"z": "Z[i]"}, ring))
    assert found.broken == ("z",) and 0 < found.charges["z"].defect <= 1
    assert found.clashes == (("energy", "z"), ("second", "z"))


@pytest.mark.parametrize(
    ("charges", "observables", "start", "options", "said"),
    [
        ({"energy": "-X[i]*X[i+1] + Z[i]*Z[i+1]"}, {}, None, {}, "is not quadratic"),
        ({"energy": "-X[i]*X[i+1]", "z": "Z[i]"}, {}, None, {}, "'z' is not conserved"),
        ({"energy": "-X[i]*X[i+1]"}, {}, gaussian_pattern([0, 1]), {}, "6 modes, the start '01' 2"),
        ({"energy": "-X[i]*X[i+1]"}, {}, gaussian_pattern([0.5] * 6), {}, "no sharp parity"),
        ({"energy": "-X[i]*X[i+1]"}, {}, None, {"hamiltonian": "h"}, "none of the charges 'energy'"),
        ({"energy": "-X[i]*X[i+1]"}, {}, None, {"numbers": ["n"]}, "numbers: 'n' is none of the charges"),
    ],
)
def test_what_is_refused(charges, observables, start, options, said):
    ring = Ring(6)
    start = gaussian_ground(formula(STRONG, ring)) if start is None else start
    with pytest.raises(ValueError, match=said):
        compare_gaussian(read(charges, ring), start, observables=read(observables, ring), **options)


def test_other_starts_and_observables_are_refused():
    chain = Chain(4, Fermions())
    q = read({"energy": HOPPING["energy"]}, chain)
    with pytest.raises(TypeError, match="not Start"):
        compare_gaussian(q, Start.from_vector(PatternState(chain, [1, 0, 0, 1])))
    with pytest.raises(ValueError, match="not quadratic"):
        compare_gaussian(q, gaussian_pattern([1, 0, 0, 1]), observables={"nn": formula("n[0]*n[1]", chain)})


def test_spins_that_are_not_in_a_row_have_no_block():
    """Blocks along bonds of a lattice: only those in the order of the modes."""
    grid = Lattice.grid(2, 3)
    q = {"energy": formula("-Z[i]", grid)}
    found = compare_gaussian(q, gaussian_pattern([0, 1, 0, 0, 0, 1]), blocks=(1, 2, 3))
    assert all(list(s) == list(range(s[0], s[0] + b)) for b, s in found.block_sites.items())
    assert gaussian_family(q).names == ("energy",)

"""Matrices in a sparse symmetry basis: every number equals that of the product basis, sector by sector and in total."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg
import scipy.sparse as sp

import maxent
import maxent.memory
from maxent.families import Matrices
from maxent.lattice import Chain, Fermions, Ring, Spin, formula
from maxent.lattice.symmetries import adapted_basis, blocked, reflection, sector, symmetry_basis, translation

XXZ = "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 1.5*Sz[i]*Sz[i+1]"
XYZ = "Sx[i]*Sx[i+1] + 0.7*Sy[i]*Sy[i+1] + 0.4*Sz[i]*Sz[i+1]"


def current(bond):
    return f"1j*commutator({bond}, {bond.replace('[i+1]', '[i+2]').replace('[i]', '[i+1]')})"


HOPPING = "-dagger(c[i])*c[i+1] + 0.6*n[i]*n[i+1] + h.c."
CASES = {
    "xxz": (Ring(8), [XXZ, current(XXZ), "Sz[i]"], "Sz[0]*Sx[1]*Sx[3]"),
    "xyz": (Ring(6), [XYZ, current(XYZ)], "Sx[0]*Sy[1] + Sy[2]"),
    "mixed field": (Ring(7), ["-Z[i]*Z[i+1] + 0.9*X[i] + 0.8*Z[i]"], "X[0]*Z[2]"),
    "not commuting": (Ring(6), [XXZ, "Sx[i]", "Sz[i]*Sz[i+2]"], "Sz[0] + Sx[0]*Sz[1]"),
    "open chain": (Chain(6), [XYZ, "Sx[i]*Sz[i+1]*Sx[i+2]"], "Sz[0]*Sz[5]"),
    "spin 1": (Ring(4, Spin(1)), ["Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.4*Sz[i]**2", "Sz[i]"], "Sx[0]**2*Sz[1]"),
    "fermions, even": (Ring(6, Fermions()), [HOPPING, "n[i]"], "n[0]*n[2]"),
    "fermions, odd": (Ring(5, Fermions()), [HOPPING, "n[i]"], "n[0]*n[2]"),
    "electrons": (
        Ring(3, Fermions("up", "down")),
        ["dagger(c[i, up])*c[i+1, up] + dagger(c[i, down])*c[i+1, down] + 0.8*n[i, up]*n[i, down] + h.c."],
        "n[0, up]*n[1, down]",
    ),
}


def families(name):
    sites, texts, _ = CASES[name]
    operators = {f"q{k}": formula(t, sites) for k, t in enumerate(texts)}
    plain = Matrices({n: q.matrix() for n, q in operators.items()}, dims=sites.dims)
    basis = adapted_basis(operators, sites)
    return sites, operators, plain, basis, Matrices(blocked(operators, basis), basis=basis.matrix, dims=sites.dims)


@pytest.mark.parametrize("name", CASES)
def test_everything_is_the_same_with_and_without_the_basis(name):
    sites, operators, plain, basis, adapted = families(name)
    lam = np.array([0.4, -0.3, 0.2])[: len(operators)]
    one, two = plain.evaluate(lam), adapted.evaluate(lam)
    assert abs(one.log_partition - two.log_partition) <= 1e-12
    np.testing.assert_allclose(two.values, one.values, atol=1e-12)
    np.testing.assert_allclose(two.covariance, one.covariance, atol=1e-12)
    one, two = plain.state(lam), adapted.state(lam)
    assert abs(one.entropy - two.entropy) <= 1e-12
    np.testing.assert_allclose(two.populations, one.populations, atol=1e-14)
    for q in (*operators.values(), formula(CASES[name][2], sites)):
        assert two.mean(q.matrix()) == pytest.approx(one.mean(q.matrix()), abs=1e-12)
    # the judge of states knows no blocks: the exponential of the dense matrix
    whole = scipy.linalg.expm(-sum(x * q.matrix().toarray() for x, q in zip(lam, operators.values(), strict=True)))
    whole /= np.trace(whole)
    np.testing.assert_allclose(one.density(), whole, atol=1e-13)
    np.testing.assert_allclose(two.density(), whole, atol=1e-13)
    table = whole.reshape(sites.dims * 2)
    n = sites.size
    for kept in ([0], [2, 1], [0, 1, 2], []):
        ends = [k + n if k in kept else k for k in range(n)]
        exact = np.einsum(table, [*range(n), *ends], [*kept, *(k + n for k in kept)])
        size = int(np.prod([sites.dims[k] for k in kept], dtype=int))
        for state in (one, two):
            np.testing.assert_allclose(state.reduced(kept), exact.reshape(size, size), atol=1e-13)


@pytest.mark.parametrize("number", [2, 3])
def test_sectors_of_a_fermion_ring(number):
    """Even and odd numbers, where hopping across the seam has different signs."""
    sites, operators, plain, basis, adapted = families("fermions, even")
    counts = formula("n[i]", sites)
    chosen = np.flatnonzero(counts.matrix().diagonal() == number)
    one = plain.restrict(chosen)
    two = adapted.restrict(basis.columns({}, {"number": (counts, number)}))
    lam = np.array([0.7, 0.1])
    assert one.size == two.size
    assert one.evaluate(lam).log_partition == pytest.approx(two.evaluate(lam).log_partition, abs=1e-12)
    np.testing.assert_allclose(two.state(lam).reduced([0, 1]), one.state(lam).reduced([0, 1]), atol=1e-13)


def test_one_sector_by_restriction_by_isometry_and_alone():
    sites, operators, plain, basis, adapted = families("xxz")
    values, charges = {"translation": 3}, {"M": (operators["q2"], 1)}
    part = sector([translation(sites)], values, charges)
    alone = Matrices(blocked(operators, part), basis=part.matrix, dims=sites.dims)
    others = [plain.restrict(part.matrix), adapted.restrict(basis.columns(values, charges))]
    lam = np.array([0.5, 0.3, -0.2])
    isometry = part.matrix.toarray()
    dense = sum(x * q.matrix().toarray() for x, q in zip(lam, operators.values(), strict=True))
    levels = np.linalg.eigvalsh(isometry.conj().T @ dense @ isometry)
    exact = np.log(np.exp(-levels).sum())
    probe = formula("Sz[0]*Sx[1]*Sx[3]", sites).matrix()
    means = []
    for family in (alone, *others):
        assert family.size == part.size == 7
        assert family.evaluate(lam).log_partition == pytest.approx(exact, abs=1e-12)
        state = family.state(lam)
        means.append([state.mean(probe), *state.reduced([1, 4]).ravel()])
    np.testing.assert_allclose(means[1], means[0], atol=1e-13)
    np.testing.assert_allclose(means[2], means[0], atol=1e-13)


def test_momentum_and_reflection_in_one_sector():
    sites, operators, plain, _, _ = families("mixed field")
    part = sector([translation(sites), reflection(sites)], {"translation": 0, "reflection": 1})
    alone = Matrices(blocked(operators, part), basis=part.matrix, dims=sites.dims)
    assert alone.block_sizes == ()
    other = plain.restrict(part.matrix)
    assert alone.evaluate(np.array([0.4])).log_partition == pytest.approx(
        other.evaluate(np.array([0.4])).log_partition, abs=1e-12
    )


@pytest.mark.parametrize(
    ("fraction", "all_sectors", "at_rest"), [(0.2, 0.267, 0.144), (0.4, 0.520, 0.393), (1.0, 1.494, 1.277)]
)
def test_sharp_magnetisation_changes_the_temperature_of_a_small_ring(fraction, all_sectors, at_rest, xxz_ring):
    """Independent three-digit values from dense diagonalisation of both ensembles."""
    family, sector_alone = xxz_ring
    energy = -12 * 1.5 / 4 * fraction
    assert maxent.solve(family, {"energy": energy}).multipliers["energy"] == pytest.approx(all_sectors, abs=5e-4)
    assert maxent.solve(sector_alone, {"energy": energy}).multipliers["energy"] == pytest.approx(at_rest, abs=5e-4)


@pytest.fixture(scope="module")
def xxz_ring():
    ring = Ring(12)
    energy, magnetisation = formula(XXZ, ring), formula("Sz[i]", ring)
    basis = adapted_basis([energy, magnetisation], ring)
    family = Matrices(blocked({"energy": energy}, basis), basis=basis.matrix)
    return family, family.restrict(basis.columns({}, {"M": (magnetisation, 0)}))


def test_a_solved_problem_has_the_same_multipliers_and_states():
    sites, operators, plain, basis, adapted = families("not commuting")
    targets = {"q0": -0.9, "q1": 0.7, "q2": 0.2}
    one, two = maxent.solve(plain, targets).require(), maxent.solve(adapted, targets).require()
    for name in targets:
        assert one.multipliers[name] == pytest.approx(two.multipliers[name], abs=1e-10)
    np.testing.assert_allclose(one.state.reduced([0, 1]), two.state.reduced([0, 1]), atol=1e-11)


def test_a_boundary_state_in_the_basis():
    """Ground space of an Ising ring: two ferromagnetic states, whose reduced state is classical."""
    ring = Ring(6)
    energy = formula("-Z[i]*Z[i+1]", ring)
    basis = symmetry_basis([translation(ring)])
    adapted = Matrices(blocked({"energy": energy}, basis), basis=basis.matrix, dims=ring.dims)
    result = maxent.solve(adapted, {"energy": -6.0})
    assert str(result.verdict) == "boundary"
    np.testing.assert_allclose(result.state.reduced([0, 3]), np.diag([0.5, 0, 0, 0.5]), atol=1e-12)
    assert maxent.solve(adapted, {"energy": -6.5}).verdict is maxent.Verdict.INFEASIBLE


def test_reduced_states_never_need_the_whole_density(monkeypatch):
    sites, operators, plain, basis, adapted = families("xxz")
    state = adapted.state(np.array([0.4, -0.3, 0.2]))
    monkeypatch.setattr(maxent.memory, "available_memory", lambda: 100_000)
    state.reduced([0, 1])
    state.mean(operators["q0"].matrix())
    with pytest.raises(maxent.MaxentError, match="the density matrix of 256 states needs 1 MiB"):
        state.density()


def test_restricted_charges_come_back_without_stored_zeros():
    _, operators, _, basis, adapted = families("xxz")
    again = adapted.operators()
    inside = blocked(operators, basis)
    for name, q in again.items():
        assert abs(q - inside[name]).max() <= 1e-15
        assert q.count_nonzero() == q.nnz


def test_a_sparse_basis_that_is_not_orthonormal_is_refused():
    basis = symmetry_basis([translation(Ring(4))]).matrix
    with pytest.raises(ValueError, match="basis has columns that are not orthonormal"):
        Matrices({"h": sp.eye_array(16)}, basis=1.1 * basis)
    with pytest.raises(ValueError, match="basis has columns that are not orthonormal"):
        Matrices({"h": sp.eye_array(16)}, basis=basis * np.nan)

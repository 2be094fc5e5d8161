"""States of every family against the dense density matrix: means, entropies, sectors, reduced states."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp

from maxent.families import Bilinears, Matrices, Microstates, Modes
from tests.conformance.dense import partial_trace, random_unitary
from tests.conformance.examples import LEVELS, NAMES, examples
from tests.conformance.views import plateau_face

every_example = pytest.mark.parametrize("example", examples(), ids=lambda e: e.name)
LAM = np.array([0.6, -0.4, 0.9])


def means(example, state, rho, rng):
    for _ in range(4):
        operator, inside = example.observable(rng)
        expected = np.trace(inside @ rho).real
        assert state.mean(operator) == pytest.approx(expected, abs=1e-12 * (1 + np.abs(inside).max()))


@every_example
def test_means_are_those_of_the_density_matrix(example, rng):
    rho, log_z = example.dense.density(LAM)
    state = example.family.state(LAM)
    assert state.log_partition == pytest.approx(log_z, abs=1e-12)
    means(example, state, rho, rng)


@every_example
def test_charges_are_operators_like_any_other(example):
    if example.name.startswith("matrices-basis"):
        basis = example.family.basis
        operators = [basis @ q @ basis.conj().T for q in example.dense.charges]
        operators = [(x + x.conj().T) / 2 for x in operators]
    elif isinstance(example.family, Microstates):
        listed = np.zeros((3, example.family.listed))
        listed[:, example.family.index] = [np.diag(q) for q in example.dense.charges]
        operators = list(listed)
    elif isinstance(example.family, Modes):  # operators have no constants
        operators = list(example.family.charges)
    elif isinstance(example.family, Bilinears):
        operators = list(example.family.operators().values())
    else:
        operators = list(example.dense.charges)
    values = example.family.evaluate(LAM).values
    state = example.family.state(LAM)
    constant = example.family.constant if isinstance(example.family, Modes) else 0.0
    np.testing.assert_allclose(np.array([state.mean(x) for x in operators]) + constant, values, atol=1e-12)


@every_example
def test_entropies(example):
    rho, log_z = example.dense.density(LAM)
    state = example.family.state(LAM)
    p = np.linalg.eigvalsh(rho)
    entropy = -p @ np.log(p)
    if example.degenerate_weights is not None:  # log_weights are degeneracies: they count
        weights = np.diag(rho).real
        entropy += weights @ example.degenerate_weights
        values = example.family.evaluate(LAM).values
        assert state.entropy == pytest.approx(log_z + LAM @ values, abs=1e-12)
    assert state.entropy == pytest.approx(entropy, abs=1e-12)
    if not example.has_weights:
        assert state.relative_entropy is None
        return
    prior, log_norm = example.dense.density(np.zeros(3))
    relative = p @ np.log(p) - np.trace(rho @ example.dense.log_prior).real + log_norm
    assert state.relative_entropy == pytest.approx(relative, abs=1e-12)
    assert relative > 1e-3


@every_example
def test_state_on_a_face(example, rng):
    """Limit states live in the user's space: a face only loses states."""
    face, dense = plateau_face(example)
    isometry = example.dense.ground(np.eye(3)[0], example.degeneracy)
    rho = isometry @ dense.density(LAM)[0] @ isometry.conj().T
    means(example, face.family.state(LAM), rho, rng)


@pytest.mark.parametrize("example", [e for e in examples() if not isinstance(e.family, LEVELS)], ids=lambda e: e.name)
def test_restriction_to_listed_states(example, rng):
    """A sector by indices or by a mask: the same states, and the user's operators still fit."""
    d = example.dense.d
    keep = np.array([1, 3, 4, 5])
    at = keep if not isinstance(example.family, Microstates) else example.family.index[keep]
    whole = d if not isinstance(example.family, Microstates) else example.family.listed
    isometry = np.eye(d)[:, keep]
    inner = example.dense.compressed(isometry)
    rho, log_z = inner.density(LAM)
    embedded = isometry @ rho @ isometry.conj().T
    for part in (at, np.isin(np.arange(whole), at)):
        sector = example.family.restrict(part)
        assert sector.names == example.family.names
        assert sector.size == 4
        assert sector.evaluate(LAM).log_partition == pytest.approx(log_z, abs=1e-12)
        np.testing.assert_allclose(sector.evaluate(LAM).values, inner.derivatives(LAM)[1], atol=1e-12)
        means(example, sector.state(LAM), embedded, rng)
        again = sector.restrict(at[:2] if isinstance(sector, Microstates) else [0, 1])
        assert again.size == 2
        expected = example.dense.compressed(isometry[:, :2]).density(LAM)[1]
        assert again.evaluate(LAM).log_partition == pytest.approx(expected, abs=1e-12)


every_matrices = pytest.mark.parametrize(
    "example", [e for e in examples() if isinstance(e.family, Matrices)], ids=lambda e: e.name
)


@every_matrices
@pytest.mark.parametrize("sparse", [False, True], ids=["dense", "sparse"])
def test_restriction_by_an_isometry(example, rng, sparse):
    d = example.dense.d
    isometry = random_unitary(rng, d, is_complex=True)[:, :4]
    inner = example.dense.compressed(isometry)
    sector = example.family.restrict(sp.csr_array(isometry) if sparse else isometry)
    rho, log_z = inner.density(LAM)
    assert sector.evaluate(LAM).log_partition == pytest.approx(log_z, abs=1e-12)
    means(example, sector.state(LAM), isometry @ rho @ isometry.conj().T, rng)
    if example.has_weights:
        assert sector.state(np.zeros(3)).relative_entropy == pytest.approx(0, abs=1e-12)


@every_matrices
def test_energy_window(example, rng):
    """The states of the four lowest levels of the second charge: a window is an isometry of eigenvectors."""
    vectors = np.linalg.eigh(example.dense.charges[1])[1][:, :4]
    window = example.family.restrict(vectors)
    levels = np.linalg.eigvalsh(example.dense.charges[1])[:4]
    low = window.lowest(np.eye(3)[1])
    assert (low.value, low.highest) == (pytest.approx(levels[0], abs=1e-12), pytest.approx(levels[3], abs=1e-12))
    means(
        example, window.state(LAM), vectors @ example.dense.compressed(vectors).density(LAM)[0] @ vectors.conj().T, rng
    )


@every_matrices
def test_reduced_states(example, rng):
    family = example.family
    if family.dims is None:  # the family with a prior was given none
        family = Matrices(
            dict(zip(NAMES, example.dense.charges, strict=True)), dims=(2, 3), log_prior=example.dense.log_prior
        )
    rho = example.dense.density(LAM)[0]
    if family.basis is not None:
        rho = family.basis @ rho @ family.basis.conj().T
    state = family.state(LAM)
    np.testing.assert_allclose(state.density(), rho, atol=1e-13)
    for kept in ([0], [1], [0, 1], [1, 0], []):
        expected = partial_trace(rho, family.dims, kept)
        np.testing.assert_allclose(state.reduced(kept), expected, atol=1e-13)


def test_reduced_states_of_three_unequal_sites(rng):
    """Sites of dimensions 2, 3, 2 in a sector of product states and on a face, in every order."""
    dims = (2, 3, 2)
    digits = np.array(np.unravel_index(np.arange(12), dims))
    number = np.diag(digits.sum(axis=0).astype(float))
    hop = np.zeros((12, 12), complex)
    for a in range(12):
        for b in range(12):
            if digits[:, a].sum() == digits[:, b].sum() and a < b:
                hop[a, b] = rng.standard_normal() + 1j * rng.standard_normal()
    hop = hop + hop.conj().T
    family = Matrices({"number": number, "hop": hop}, dims=dims)
    lam = np.array([0.3, 0.8])
    from scipy.linalg import expm

    rho = expm(-0.3 * number - 0.8 * hop)
    keep = np.flatnonzero(digits.sum(axis=0) == 2)
    projector = np.diag((digits.sum(axis=0) == 2).astype(float))
    inside = projector @ rho @ projector
    for fam, matrix in ((family, rho / np.trace(rho)), (family.restrict(keep), inside / np.trace(inside))):
        state = fam.state(lam)
        for kept in ([0], [2], [1, 2], [2, 0], [0, 2, 1], [1]):
            np.testing.assert_allclose(state.reduced(kept), partial_trace(matrix, dims, kept), atol=1e-13)


@every_matrices
def test_populations_are_the_spectrum(example):
    p = np.sort(np.linalg.eigvalsh(example.dense.density(LAM)[0]))[::-1]
    np.testing.assert_allclose(example.family.state(LAM).populations, p, atol=1e-13)


def test_probabilities_of_removed_states_are_zero():
    (example,) = [e for e in examples() if e.name == "microstates-log_weights"]
    p = example.family.state(LAM).probabilities
    assert p.shape == (9,) and p[4] == 0 and p.sum() == pytest.approx(1, abs=1e-15)

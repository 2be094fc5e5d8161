"""Matrices: every bad input with its message, sparse formats, blocks never densified as a whole, dims, memory."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp

import maxent
import maxent.memory
from maxent.families import Matrices

X = np.array([[0.0, 1.0], [1.0, 0.0]])
Z = np.array([[1.0, 0.0], [0.0, -1.0]])
nan, inf = float("nan"), float("inf")


@pytest.mark.parametrize(
    ("charges", "kwargs", "error", "message"),
    [
        ([X], {}, TypeError, "Matrices takes a dict name -> charge, not list"),
        ({1: X}, {}, TypeError, "name of a charge must be non-empty text, not 1"),
        ({"": X}, {}, TypeError, "name of a charge must be non-empty text"),
        ({}, {}, ValueError, "no charges given: Matrices needs at least one charge, or basis or dims"),
        (
            {"h": [[0, 1], [2, 0]]},
            {},
            ValueError,
            r"charge 'h' is not Hermitian: \|Q - Q\^H\| is 1.0e\+00 where \|Q\| is 2.0e\+00",
        ),
        ({"h": [[0, 1j], [1j, 0]]}, {}, ValueError, "charge 'h' is not Hermitian"),
        ({"h": [[1j, 0], [0, 1]]}, {}, ValueError, "charge 'h' is not Hermitian"),
        ({"h": sp.csr_array([[0, 1.0], [0, 0]])}, {}, ValueError, "charge 'h' is not Hermitian"),
        ({"h": X, "m": X + 1e-9 * np.array([[0, 1], [-1, 0]])}, {}, ValueError, "charge 'm' is not Hermitian"),
        ({"h": np.ones((2, 3))}, {}, ValueError, r"charge 'h' must be a square matrix, not of shape \(2, 3\)"),
        ({"h": [1.0, 2.0]}, {}, ValueError, r"charge 'h' must be a square matrix, not of shape \(2,\)"),
        ({"h": np.zeros((2, 2, 2))}, {}, ValueError, r"charge 'h' must be a square matrix, not of shape \(2, 2, 2\)"),
        ({"h": 3.0}, {}, ValueError, r"charge 'h' must be a square matrix, not of shape \(\)"),
        ({"h": sp.csr_array(np.ones((2, 3)))}, {}, ValueError, "charge 'h' must be a square matrix"),
        ({"h": X, "m": np.eye(3)}, {}, ValueError, "charges have different dimensions: 'h' 2, 'm' 3"),
        ({"h": X}, {"log_prior": np.eye(3)}, ValueError, "charges have different dimensions: 'h' 2, 'log_prior' 3"),
        ({"h": [[nan, 0], [0, 1]]}, {}, ValueError, "charge 'h' has NaN or infinite entries"),
        ({"h": [[0, inf], [inf, 0]]}, {}, ValueError, "charge 'h' has NaN or infinite entries"),
        ({"h": sp.csr_array([[0, inf], [inf, 0]])}, {}, ValueError, "charge 'h' has NaN or infinite entries"),
        ({"h": [[None, 0], [0, 1]]}, {}, TypeError, "charge 'h' must be a matrix of numbers, not of object"),
        ({"h": [["a", "b"], ["b", "a"]]}, {}, TypeError, "charge 'h' must be a matrix of numbers, not of <U1"),
        ({"h": np.zeros((0, 0))}, {}, ValueError, "the charges have dimension 0"),
        ({"h": X}, {"dims": (2, 2)}, ValueError, r"dims \(2, 2\) multiply to 4, the operators have dimension 2"),
        ({"h": X}, {"dims": ()}, ValueError, r"dims must be positive integers, one per site, not \(\)"),
        ({"h": X}, {"dims": (2, 1.0)}, ValueError, "dims must be positive integers"),
        ({"h": X}, {"dims": (-2, -1)}, ValueError, "dims must be positive integers"),
        ({"h": X}, {"dims": (True, 2)}, ValueError, "dims must be positive integers"),
        (
            {"h": X},
            {"basis": np.ones((3, 2))},
            ValueError,
            r"basis has columns that are not orthonormal: \|B\^H B - 1\| is 3",
        ),
        ({"h": X}, {"basis": np.eye(3)}, ValueError, "basis has 3 columns, the charges have dimension 2"),
        ({"h": X}, {"basis": np.ones(3)}, ValueError, r"basis must be a \(D, d\) matrix whose columns are states"),
        ({"h": X}, {"basis": sp.csr_array(2 * np.eye(2))}, ValueError, "basis has columns that are not orthonormal"),
        ({"h": X}, {"basis": np.array([[nan, 0], [0, 1]])}, ValueError, "basis has columns that are not orthonormal"),
        (
            {"h": X},
            {"basis": np.eye(3)[:, :2], "dims": (2,)},
            ValueError,
            "multiply to 2, the operators have dimension 3",
        ),
        ({"h": X}, {"log_prior": [[0, 1], [0, 0]]}, ValueError, "log_prior is not Hermitian"),
    ],
)
def test_bad_input(charges, kwargs, error, message):
    with pytest.raises(error, match=message):
        Matrices(charges, **kwargs)


def test_rounding_of_hermiticity_is_forgiven_and_removed():
    rough = X + 1e-14 * np.array([[0, 1], [-1, 0]])
    family = Matrices({"h": rough, "z": Z})
    (block,) = family.blocks.dense
    np.testing.assert_array_equal(block[0], block[0].T)


def test_complex_with_no_imaginary_part_becomes_real():
    family = Matrices({"x": X.astype(complex), "z": Z})
    assert not np.iscomplexobj(family.blocks.dense[0])


@pytest.mark.parametrize(
    ("part", "error", "message"),
    [
        ([0, 0], ValueError, "indices must not repeat"),
        ([4], ValueError, r"indices must lie in 0\.\.3"),
        ([0.0, 1.0], TypeError, "indices must be a list of integers or a mask"),
        ([True], ValueError, r"a mask must have shape \(4,\), not \(1,\)"),
        (np.zeros(4, bool), ValueError, "no state left after the restriction"),
        (np.zeros(0, int), ValueError, "no state left after the restriction"),
        (np.ones((4, 2)), ValueError, "not orthonormal"),
        (np.eye(3)[:, :2], ValueError, "the isometry has 3 rows, the family 4 states"),
        (np.zeros((4, 0)), ValueError, "no state left"),
    ],
)
def test_bad_restrictions(part, error, message):
    with pytest.raises(error, match=message):
        Matrices({"x": np.kron(X, X), "z": np.kron(Z, np.eye(2))}).restrict(part)


@pytest.mark.parametrize(
    ("operator", "error", "message"),
    [
        (np.eye(3), ValueError, "the operator has dimension 3, the family 2"),
        ([[0, 1], [0, 0]], ValueError, "operator is not Hermitian"),
        ([[nan, 1], [1, 0]], ValueError, "operator has NaN or infinite entries"),
        ([1, 2], ValueError, "operator must be a square matrix"),
    ],
)
def test_bad_operators(operator, error, message):
    with pytest.raises(error, match=message):
        Matrices({"x": X, "z": Z}).state(np.zeros(2)).mean(operator)


@pytest.mark.parametrize("sites", [[0, 0], [2], [-1]])
def test_bad_sites(sites):
    state = Matrices({"x": np.kron(X, X)}, dims=(2, 2)).state(np.zeros(1))
    with pytest.raises(ValueError, match=r"sites must be different numbers in 0\.\.1"):
        state.reduced(sites)


def test_reduced_needs_dims():
    with pytest.raises(ValueError, match="reduced states need the dimensions of the sites: give dims to the family"):
        Matrices({"x": X}).state(np.zeros(1)).reduced([0])


# ---------------------------------------------------------------- sparse input and blocks

FORMATS = ["bsr", "coo", "csc", "csr", "dia", "dok", "lil"]


@pytest.mark.parametrize("form", FORMATS)
@pytest.mark.parametrize("kind", [sp.csr_array, sp.csr_matrix], ids=["array", "matrix"])
def test_every_sparse_format(form, kind):
    """Both sparse classes of SciPy in all formats give the same family as dense input."""
    h = np.kron(X, X) + 0.3 * np.kron(Z, np.eye(2))
    m = np.kron(Z, Z)
    dense = Matrices({"h": h, "m": m})
    sparse = Matrices({"h": kind(h).asformat(form), "m": kind(m).asformat(form)})
    assert sparse.block_sizes == dense.block_sizes
    lam = np.array([0.3, -0.8])
    np.testing.assert_allclose(sparse.evaluate(lam).covariance, dense.evaluate(lam).covariance, atol=1e-14)
    operator = np.kron(X, Z)
    expected = dense.state(lam).mean(operator)
    assert sparse.state(lam).mean(kind(operator).asformat(form)) == pytest.approx(expected, abs=1e-14)


def test_jax_arrays_and_lists():
    import jax.numpy as jnp

    family = Matrices({"x": jnp.asarray(X), "z": Z.tolist()})
    assert maxent.solve(family, {"x": 0.3, "z": 0.4}).multipliers["x"] == pytest.approx(
        -np.arctanh(0.5) * 0.6, abs=1e-12
    )


def test_stored_zeros_do_not_join_blocks():
    q = sp.csr_array((np.array([1.0, 0.0, 0.0, 2.0]), ([0, 0, 1, 1], [0, 1, 0, 1])), shape=(2, 2))
    assert q.nnz == 4
    assert Matrices({"q": q}).block_sizes == ()
    assert len(Matrices({"q": q}).flat) == 2


def test_blocks_are_the_components_of_all_charges_together(rng):
    """A charge that couples two blocks of another one joins them; the prior counts too."""
    a = sp.block_diag([X + Z, 2 * X + Z, [[1.0]]])
    b = sp.block_diag([Z, X, [[0.5]]])
    assert Matrices({"a": a, "b": b}).block_sizes == (2, 2)
    bridge = np.zeros((5, 5))
    bridge[1, 2] = bridge[2, 1] = 1.0
    assert Matrices({"a": a, "b": b, "c": bridge}).block_sizes == (4,)
    assert Matrices({"a": a, "b": b}, log_prior=bridge).block_sizes == (4,)
    order = rng.permutation(5)
    shuffled = {n: q.toarray()[order][:, order] for n, q in {"a": a, "b": b}.items()}
    assert Matrices(shuffled).block_sizes == (2, 2)


def test_large_space_of_small_blocks_is_never_made_dense():
    """2^14 states, one 2 x 2 block that does not commute: the rest are numbers, and the answer is exact."""
    d = 2**14
    rng = np.random.default_rng(0)
    energy = rng.integers(0, 40, d).astype(float)
    h = sp.lil_array((d, d))
    h.setdiag(energy)
    h[100, 9000] = h[9000, 100] = 0.7
    filling = rng.integers(0, 3, d).astype(float)
    filling[[100, 9000]] = 1.0, 2.0
    number = sp.diags_array(filling)
    family = Matrices({"h": h, "number": number.tocsr()})
    assert family.size == d
    assert family.block_sizes == (2,)
    assert family.blocks.diagonal.shape == (2, d - 2)
    lam = np.array([0.11, -0.2])
    ev = family.evaluate(lam)
    block = np.array([[energy[100], 0.7], [0.7, energy[9000]]])
    n = number.diagonal()
    e = np.linalg.eigvalsh(lam[0] * block + lam[1] * np.diag(n[[100, 9000]]))
    rest = np.delete(lam[0] * energy + lam[1] * n, [100, 9000])
    assert ev.log_partition == pytest.approx(np.log(np.exp(-e).sum() + np.exp(-rest).sum()), abs=1e-12)
    result = maxent.solve(family, {"h": float(ev.values[0]), "number": float(ev.values[1])})
    assert result.verdict is maxent.Verdict.SOLVED
    assert result.multipliers["h"] == pytest.approx(0.11, abs=1e-11)
    assert result.mean(h) == pytest.approx(result.values["h"], abs=1e-11)


def test_operators_are_put_together_again(rng):
    a = sp.block_diag([X + Z, 2 * X + Z, [[1.0]], rng.standard_normal((1, 1))]).toarray()
    b = sp.block_diag([Z, X, [[0.5]], [[0.1]]]).toarray()
    order = rng.permutation(6)
    given = {"a": a[order][:, order], "b": b[order][:, order]}
    back = Matrices(given).operators()
    for name, q in given.items():
        assert sp.issparse(back[name])
        np.testing.assert_allclose(back[name].toarray(), q, atol=1e-14)


# ---------------------------------------------------------------- commuting charges


def joint(rng, rows, *, is_complex=True):
    d = rows.shape[1]
    a = rng.standard_normal((d, d)) + (1j * rng.standard_normal((d, d)) if is_complex else 0)
    u = np.linalg.qr(a)[0]
    out = [(u * r) @ u.conj().T for r in rows]
    return [0.5 * (q + q.conj().T) for q in out]


@pytest.mark.parametrize("is_complex", [False, True], ids=["real", "complex"])
def test_commuting_charges_become_numbers(rng, is_complex):
    """Generic, degenerate and jointly degenerate spectra."""
    rows = np.array([rng.integers(0, 3, 8), rng.integers(0, 2, 8), rng.standard_normal(8)], float)
    family = Matrices(dict(zip("abc", joint(rng, rows, is_complex=is_complex), strict=True)))
    assert family.block_sizes == ()
    found = family.blocks.diagonal[:, np.argsort(family.blocks.diagonal[2])]
    np.testing.assert_allclose(found, rows[:, np.argsort(rows[2])], atol=1e-11)


def test_rounding_of_a_large_offset_does_not_hide_that_charges_commute(rng):
    """A zero of energy 1e3 spreads away: entries carry rounding of 1e3, and so does the commutator."""
    rows = np.array([rng.standard_normal(8), rng.standard_normal(8) + 1e3])
    assert Matrices(dict(zip("ab", joint(rng, rows), strict=True))).block_sizes == ()


def test_charges_that_do_not_commute_stay_matrices(rng):
    a, b = joint(rng, rng.standard_normal((2, 6)))
    other = joint(rng, rng.standard_normal((1, 6)))[0]
    assert Matrices({"a": a, "b": b, "c": other}).block_sizes == (6,)
    assert Matrices({"a": a, "b": b}).block_sizes == ()


@pytest.mark.parametrize("size", [1e-10, 1e-6])
def test_nearly_commuting_charges_are_not_forced_to_commute(rng, size):
    """[a, b] of relative size 1e-10 is no rounding: values follow the true matrices."""
    a, b = joint(rng, rng.standard_normal((2, 6)))
    c = rng.standard_normal((6, 6))
    b = b + size * (c + c.T)
    family = Matrices({"a": a, "b": b})
    assert family.block_sizes == (6,)
    back = family.operators()
    np.testing.assert_allclose(back["b"].toarray(), b, atol=1e-14)


def test_degenerate_combination_does_not_fool_the_detection():
    """Charges whose sum is degenerate, and whose eigenvectors it does not fix."""
    a, b = np.kron(Z, np.eye(2)), np.kron(np.eye(2), Z)
    assert Matrices({"a": a, "b": b, "x": np.kron(X, X), "y": np.kron(Z, Z)}).block_sizes != ()
    pair = Matrices({"xx": np.kron(X, X), "zz": np.kron(Z, Z)})  # these commute
    assert pair.block_sizes == ()
    values = sorted(map(tuple, np.round(pair.blocks.diagonal.T, 12)))
    assert values == [(-1, -1), (-1, 1), (1, -1), (1, 1)]


def test_multiples_of_the_identity_join_anything(rng):
    a = joint(rng, rng.standard_normal((1, 4)))[0]
    family = Matrices({"a": a, "one": np.eye(4), "zero": np.zeros((4, 4))})
    assert family.block_sizes == ()
    np.testing.assert_array_equal(family.blocks.diagonal[1], np.ones(4))


# ---------------------------------------------------------------- memory and space


def test_too_large_blocks_are_refused_before_they_are_made(monkeypatch):
    monkeypatch.setattr(maxent.memory, "available_memory", lambda: 10_000_000)
    d = 1000
    chain = sp.diags_array([np.ones(d - 1), np.ones(d - 1)], offsets=[-1, 1])
    with pytest.raises(
        maxent.ResourceError,
        match=r"1000 states in blocks of up to 1000 need .* MiB for 1 charges; available 9\.54 MiB",
    ):
        Matrices({"chain": chain})
    small = sp.diags_array(np.arange(float(d)))  # the same dimension without blocks is no trouble
    assert Matrices({"small": small}).size == d


def test_memory_that_is_not_known_is_not_refused(monkeypatch):
    monkeypatch.setattr(maxent.memory, "available_memory", lambda: None)
    assert Matrices({"x": X}).size == 2


def test_no_charges_but_a_space():
    assert Matrices({}, dims=(2, 3)).size == 6
    assert Matrices({}, basis=np.eye(5)[:, :3]).size == 3


def test_basis_as_a_sparse_selection_of_product_states(rng):
    """One spin up of three: reduced states and means in the space of all eight states."""
    columns = [1, 2, 4]
    select = sp.eye_array(8, format="csc")[:, columns]
    hop = np.ones((3, 3)) - np.eye(3)
    potential = np.diag([0.0, 1.0, 2.0])
    family = Matrices({"hop": hop, "v": potential}, basis=select, dims=(2, 2, 2))
    lam = np.array([0.4, 0.7])
    from scipy.linalg import expm

    rho = expm(-0.4 * hop - 0.7 * potential)
    rho /= np.trace(rho)
    # state 1 = |001>: the last site is up with probability rho_00
    np.testing.assert_allclose(family.state(lam).reduced([2]), np.diag([1 - rho[0, 0], rho[0, 0]]), atol=1e-14)
    sigma_z = np.kron(np.eye(4), Z)
    assert family.state(lam).mean(sigma_z) == pytest.approx(1 - 2 * rho[0, 0], abs=1e-14)
    assert family.state(lam).density().shape == (8, 8)


def test_inputs_are_not_changed(rng):
    a = rng.standard_normal((5, 5))
    a = a + a.T
    before = a.copy()
    family = Matrices({"a": a, "b": np.diag(np.arange(5.0))})
    family.combine(np.eye(2), np.ones(2)).evaluate(np.array([1.0, 2.0]))
    family.state(np.array([1.0, 2.0]))
    family.barrier(np.array([0.01, 0.01]))
    np.testing.assert_array_equal(a, before)
    (block,) = family.blocks.dense
    np.testing.assert_array_equal(block[0], before)


def test_duplicate_entries_of_a_sparse_matrix_add_up():
    """CSR may hold an entry in pieces; the user's matrix is left as it is."""
    entries = (np.array([1.0, 2.0, 5.0, 5.0]), np.array([0, 0, 2, 1]), np.array([0, 2, 3, 4]))
    pieces = sp.csr_array(entries, shape=(3, 3))
    family = Matrices({"a": pieces})
    np.testing.assert_allclose(np.sort(family.blocks.diagonal[0]), [-5, 3, 5], atol=1e-14)
    assert pieces.nnz == 4

"""Gaussian states, their distances, Pfaffians and canonical forms against dense matrices."""

from __future__ import annotations

from functools import reduce

import numpy as np
import pytest
import scipy.linalg as sla

from maxent.families.antisymmetric import canonical_form, canonical_forms
from maxent.families.gaussian_distances import relative_entropy, root_fidelity, trace_distance, trace_distance_bounds
from maxent.families.gaussian_states import BosonState, FermionState, majorana_operators
from maxent.families.pfaffians import complement, log_pfaffian, pauli_word
from maxent.families.phase_space import PhaseSpace


def antisymmetric(rng, n: int) -> np.ndarray:
    a = rng.standard_normal((n, n))
    return a - a.T


def fermions(rng, n: int, size: float) -> FermionState:
    y, u = np.linalg.eigh(1j * size * antisymmetric(rng, 2 * n))
    return FermionState.of(np.real((u * -np.tanh(y / 2)) @ u.conj().T / 1j))


@pytest.mark.parametrize("n", [2, 4, 6, 10])
@pytest.mark.parametrize("zero_modes", [0, 2])
def test_canonical_form(rng, n, zero_modes):
    a = antisymmetric(rng, n)
    if zero_modes:
        q = np.linalg.qr(rng.standard_normal((n, n)))[0]
        a = q[:, zero_modes:] @ antisymmetric(rng, n - zero_modes) @ q[:, zero_modes:].T if n > zero_modes else 0 * a
    form = canonical_form(a)
    np.testing.assert_allclose(form.frame.T @ form.frame, np.eye(n), atol=1e-13)
    block = np.kron(np.diag(form.levels), [[0, 1], [-1, 0]])
    np.testing.assert_allclose(form.frame.T @ a @ form.frame, block, atol=1e-12)
    assert np.all(form.levels >= 0)
    assert form.orientation == pytest.approx(np.linalg.det(form.frame), abs=1e-10)


@pytest.mark.parametrize("size", [2, 4, 6])
def test_stacks_of_canonical_forms(rng, size):
    """Generic blocks, zero blocks, blocks with a zero level, and levels that are equal."""
    stack = np.array([antisymmetric(rng, size) for _ in range(6)])
    stack[1] = 0
    stack[2, :, -1] = stack[2, -1, :] = 0
    stack[3] = np.kron(np.eye(size // 2), [[0, 1.5], [-1.5, 0]])
    stack[4, 1:, 0] = stack[4, 0, 1:] = 0
    form = canonical_forms(stack)
    for a, e, o, det in zip(stack, form.levels, form.frame, form.orientation, strict=True):
        np.testing.assert_allclose(o.T @ o, np.eye(size), atol=1e-14)
        np.testing.assert_allclose(o.T @ a @ o, np.kron(np.diag(e), [[0, 1], [-1, 0]]), atol=1e-13)
        assert np.all(e >= 0) and det == pytest.approx(np.linalg.det(o), abs=1e-12)
    np.testing.assert_allclose(np.sort(form.levels[0]), np.linalg.eigvalsh(1j * stack[0])[size // 2 :], atol=1e-13)


@pytest.mark.parametrize("n", [0, 2, 6, 9, 40])
def test_the_pfaffian_squared_is_the_determinant(rng, n):
    a = antisymmetric(rng, n) + (1j * antisymmetric(rng, n) if n == 6 else 0)
    sign, size = log_pfaffian(a)
    if n % 2:
        assert (sign, size) == (0, -np.inf)
        return
    d, log = np.linalg.slogdet(a) if n else (1.0, 0.0)
    assert sign**2 == pytest.approx(d, abs=1e-10) and 2 * size == pytest.approx(log, abs=1e-10)


def test_the_pfaffian_has_its_sign():
    """Pf of four letters: a01 a23 - a02 a13 + a03 a12."""
    a = antisymmetric(np.random.default_rng(1), 4)
    sign, size = log_pfaffian(a)
    assert sign * np.exp(size) == pytest.approx(a[0, 1] * a[2, 3] - a[0, 2] * a[1, 3] + a[0, 3] * a[1, 2])
    huge = np.kron(np.eye(300), 1e5 * np.array([[0, 1], [-1, 0]]))
    assert log_pfaffian(huge) == (1.0, pytest.approx(300 * np.log(1e5)))


def test_words_are_the_operators_they_stand_for():
    g = [x.toarray() for x in majorana_operators(4)]
    one = {"X": [[0, 1], [1, 0]], "Y": [[0, -1j], [1j, 0]], "Z": [[1, 0], [0, -1]]}
    for letters in (
        {0: "X", 3: "Y"},
        {1: "X", 2: "Z", 3: "X"},
        {0: "Y", 1: "X", 2: "X", 3: "Y"},
        {2: "Y"},
        {1: "Z"},
        {},
    ):
        phase, word = pauli_word(letters)
        product = phase * np.eye(16)
        for k in word:
            product = product @ g[k]
        expected = np.eye(1)
        for j in range(4):
            expected = np.kron(expected, one[letters[j]] if j in letters else np.eye(2))
        np.testing.assert_allclose(product, expected, atol=1e-15)
    parity = np.diag([(-1.0) ** bin(i).count("1") for i in range(1 << 4)])
    for letters in ((), (1, 3), (0, 2, 4, 7), (5,)):
        phase, rest = complement((1.0, letters), 4)
        both = [reduce(np.matmul, [g[i] for i in word], np.eye(1 << 4)) for word in (letters, rest)]
        np.testing.assert_allclose(phase * both[1], both[0] @ parity, atol=1e-15)


@pytest.mark.parametrize(("n", "size"), [(2, 0.2), (3, 0.5), (4, 1.0)])
def test_distances_of_fermions_against_dense_matrices(rng, n, size):
    first, second = fermions(rng, n, size), fermions(rng, n, 0.7)
    a, b = first.density(), second.density()
    p = np.linalg.eigvalsh(a)
    assert first.entropy == pytest.approx(-p @ np.log(p), abs=1e-11)
    exact = -first.entropy - np.trace(a @ sla.logm(b)).real
    assert relative_entropy(first, second) == pytest.approx(exact, abs=1e-10)
    root = sla.sqrtm(a)
    fidelity = np.sqrt(np.maximum(np.linalg.eigvalsh(root @ b @ root), 0)).sum()
    assert root_fidelity(first, second) == pytest.approx(fidelity, abs=1e-8)
    distance = trace_distance(first, second)
    assert distance == pytest.approx(0.5 * np.abs(np.linalg.eigvalsh(a - b)).sum(), abs=1e-12)
    low, high = trace_distance_bounds(first, second)
    assert low <= distance <= high
    assert relative_entropy(first, first) == pytest.approx(0, abs=1e-12)
    assert root_fidelity(first, first) == pytest.approx(1, abs=1e-12)


def test_orthogonal_patterns():
    first, second = FermionState.pattern([1, 0, 1]), FermionState.pattern([1, 1, 0])
    assert first.entropy == 0 and np.array_equal(first.occupations, [1, 0, 1])
    assert relative_entropy(first, second) == np.inf
    assert root_fidelity(first, second) == pytest.approx(0, abs=1e-7)
    assert trace_distance(first, second) == pytest.approx(1)
    assert trace_distance_bounds(first, second).lower == pytest.approx(1)


def test_relative_entropy_of_bosons():
    """Two pairs of modes against a truncated Fock space of 32 levels each (own computation, difference 1e-14)."""
    m = np.array([[1.3, 0.2, 0.1, 0.05], [0.2, 0.9, 0, 0.1], [0.1, 0, 1, -0.15], [0.05, 0.1, -0.15, 1.6]])
    k = np.array([[1.53, 0.17, 0, 0], [0.17, 1.87, 0, 0.085], [0, 0, 2.04, 0.17], [0, 0.085, 0.17, 1.7]])
    state = lambda x: BosonState.of(PhaseSpace(np.zeros(1), x[None], np.zeros((1, 4))).thermal(np.ones(1))[1])
    assert relative_entropy(state(1.8 * m), state(k)) == pytest.approx(0.16148093253253304, abs=1e-12)
    assert relative_entropy(state(m), state(m)) == pytest.approx(0, abs=1e-12)
    moved = BosonState.of(state(m).covariance, [0.3, 0, 0, 0])
    assert relative_entropy(moved, state(m)) == pytest.approx(0.5 * 0.09 * m[0, 0], abs=1e-12)


def test_thermal_and_squeezed_modes():
    """One mode with n bosons: entropy (n+1) ln(n+1) - n ln n; squeezing leaves it."""
    n, r = 0.7, 1.1
    entropy = (n + 1) * np.log(n + 1) - n * np.log(n)
    squeezed = BosonState.of((n + 0.5) * np.diag([np.exp(2 * r), np.exp(-2 * r)]))
    assert squeezed.entropy == pytest.approx(entropy, abs=1e-12)
    np.testing.assert_allclose(squeezed.symplectic_levels, [n + 0.5], rtol=1e-12)
    pure = BosonState.of(0.5 * np.diag([4.0, 0.25]))
    assert pure.entropy == pytest.approx(0, abs=1e-7)
    pair = BosonState.of(np.kron(np.eye(2), np.diag([1.5, 2.5])), [0.1, 0.2, 0.3, 0.4])
    assert pair.reduced([1]).occupations[0] == pytest.approx(2.0 + 0.5 * (0.04 + 0.16))


@pytest.mark.parametrize(
    ("make", "text"),
    [
        (lambda: FermionState.of(np.array([[0, 1.2], [-1.2, 0]])), "iG. reaches 1.2"),
        (lambda: FermionState.of(np.eye(2)), "real and antisymmetric"),
        (lambda: FermionState.of(np.zeros((3, 3))), "not of shape"),
        (
            lambda: FermionState.of(np.full((2, 2), np.nan)),
            r"fermions is finite: 4 of 4 entries are not, first \[0, 0\] = nan",
        ),
        (lambda: FermionState.of(1j * np.ones((2, 2))), "fermions is real: imaginary parts reach 1, dtype complex128"),
        (lambda: BosonState.of(1j * np.eye(2)), "bosons is real: imaginary parts reach 1, dtype complex128"),
        (
            lambda: BosonState.of(np.diag([1.0, np.inf])),
            r"bosons is finite: 1 of 4 entries is not, first \[1, 1\] = inf",
        ),
        (lambda: FermionState.pattern([1.3, 0]), "occupations must lie in 0..1, these reach from 0 to 1.3"),
        (lambda: FermionState.of_correlations(np.array([[0, 1.0], [0, 0]])), "must be Hermitian"),
        (lambda: BosonState.of(0.3 * np.eye(2)), "eigenvalue -0.2, below the uncertainty"),
        (lambda: BosonState.of(np.array([[1.0, 2], [0, 1]])), "real and symmetric"),
        (lambda: BosonState.of(np.eye(2), [1.0]), "mean of R has shape"),
        (lambda: FermionState.pattern([1, 0]).reduced([2]), "modes must be different numbers in 0..1"),
        (lambda: FermionState.pattern([1, 0]).mean_word({5: "Z"}), "sites must lie in 0..1"),
        (lambda: trace_distance(FermionState.pattern([0] * 11), FermionState.pattern([1] * 11)), "up to 10 modes"),
        (lambda: relative_entropy(FermionState.pattern([0]), FermionState.pattern([0, 1])), "1 and 2 modes"),
    ],
)
def test_what_is_no_state_is_refused_with_the_numbers(make, text):
    with pytest.raises(ValueError, match=text):
        make()


def fock(levels: int, modes: int) -> list[np.ndarray]:
    """Positions and momenta of some modes over so many levels each."""
    b = np.diag(np.sqrt(np.arange(1.0, levels)), 1)
    one = [(b + b.T) / np.sqrt(2), (b - b.T) / (1j * np.sqrt(2))]
    place = lambda a, k: reduce(np.kron, [a if i == k else np.eye(levels) for i in range(modes)])
    return [place(a, k) for a in one for k in range(modes)]


@pytest.mark.parametrize(("modes", "levels"), [(1, 70), (2, 24)])
def test_distances_of_bosons_against_truncated_fock_spaces(rng, modes, levels):
    """exp(-R.M.R/2 - d.R) of both states as matrices; the cut is not seen."""
    r, states, matrices, roots = fock(levels + 2, modes), [], [], []
    # products are formed in a larger space and cut: at the top level they would be wrong
    inside = np.flatnonzero((np.indices((levels + 2,) * modes) < levels).all(axis=0).ravel())
    cut = lambda x: x[np.ix_(inside, inside)]
    for size in (2.0, 3.0):
        a = 0.15 * rng.standard_normal((2 * modes, 2 * modes))
        m, d = size * (np.eye(2 * modes) + 0.5 * (a + a.T)), 0.3 * rng.standard_normal(2 * modes)
        k = sum(m[i, j] * r[i] @ r[j] for i in range(2 * modes) for j in range(2 * modes)) / 2
        k = k + sum(d[i] * r[i] for i in range(2 * modes))
        e, u = np.linalg.eigh(cut(0.5 * (k + k.conj().T)))
        p = np.exp(-(e - e[0])) / np.exp(-(e - e[0])).sum()
        matrices.append((u * p) @ u.conj().T)
        roots.append((u * np.sqrt(p)) @ u.conj().T)
        mean = np.array([np.trace(matrices[-1] @ cut(x)).real for x in r])
        v = [[0.5 * np.trace(matrices[-1] @ cut(x @ y + y @ x)).real for y in r] for x in r]
        states.append(BosonState.of(np.array(v) - np.outer(mean, mean), mean))
    exact = np.linalg.svd(roots[0] @ roots[1], compute_uv=False).sum()
    first, second = states
    assert root_fidelity(first, second) == pytest.approx(exact, abs=1e-6)
    assert root_fidelity(second, first) == pytest.approx(root_fidelity(first, second), abs=1e-12)
    distance = 0.5 * np.abs(np.linalg.eigvalsh(matrices[0] - matrices[1])).sum()
    low, high = trace_distance_bounds(first, second)
    assert 0.01 < low <= distance <= high < 1


def test_fidelity_of_thermal_and_coherent_bosons():
    """sum sqrt(p q) of two geometric distributions; ``exp(-|alpha - beta|^2/2)`` of coherent states."""
    n, m, k = 0.3, 1.2, np.arange(400)
    one, other = BosonState.of((n + 0.5) * np.eye(2)), BosonState.of((m + 0.5) * np.eye(2))
    overlap = np.sqrt((n / (1 + n)) ** k / (1 + n) * (m / (1 + m)) ** k / (1 + m)).sum()
    assert root_fidelity(one, other) == pytest.approx(overlap, abs=1e-14)
    assert root_fidelity(one, one) == pytest.approx(1.0, abs=1e-14)
    here, there = (BosonState.of(0.5 * np.eye(4), np.sqrt(2) * np.array(d)) for d in ([0.3, 0, 0, 0], [0, 0, 0, 0.4]))
    assert root_fidelity(here, there) == pytest.approx(np.exp(-0.125), abs=1e-7)
    assert trace_distance_bounds(here, there).upper == pytest.approx(np.sqrt(1 - np.exp(-0.25)), abs=1e-6)

"""Distances of pure and nearly pure Gaussian states: rotated product states, spin chains, overlaps in 50 digits."""

from __future__ import annotations

from functools import reduce

import mpmath as mp
import numpy as np
import pytest

from maxent.families import fermion_fidelity
from maxent.families.fermion_fidelity import covariance_distance
from maxent.families.gaussian_distances import (
    relative_entropy,
    root_fidelity,
    root_fidelity_bounds,
    trace_distance,
    trace_distance_bounds,
)
from maxent.families.gaussian_states import BosonState, FermionState, majorana_operators

#: What the dense matrices of the tests are good for.
DENSE = 3e-14


def occupations(rng, n: int, kind: str) -> np.ndarray:
    """Of one particle or hole per mode, near 0 or 1."""
    q = 10 ** -rng.uniform(0.31, {"mixed": 1, "purer": 3}.get(kind, 16), n)
    if kind == "partly pure":
        q[rng.random(n) < 0.5] = 0
    if kind == "pure":
        q[:] = 0
    return np.where(rng.random(n) < 0.5, q, 1 - q)


def turns(rng, n: int, size: float) -> list[tuple[int, int, float]]:
    """Pairs of Majorana operators and angles."""
    return [(*rng.choice(2 * n, 2, replace=False), size * rng.standard_normal()) for _ in range(3 * n)]


def turned(q: np.ndarray, angles: list[tuple[int, int, float]]) -> tuple[FermionState, np.ndarray, np.ndarray]:
    """Product state with occupations q under ``exp(angle g_a g_b / 2)``: the state, eigenvectors, eigenvalues."""
    n = len(q)
    g = [x.toarray() for x in majorana_operators(n)]
    covariance = np.kron(np.diag(1 - 2 * q), [[0, -1.0], [1, 0]])
    unitary = np.eye(2**n, dtype=complex)
    for a, b, angle in angles:
        unitary = np.cos(angle / 2) * unitary + np.sin(angle / 2) * (g[a] @ (g[b] @ unitary))
        turn = np.eye(2 * n)
        turn[[a, a, b, b], [a, b, a, b]] = np.cos(angle), np.sin(angle), -np.sin(angle), np.cos(angle)
        covariance = turn @ covariance @ turn.T
    return FermionState.of(covariance), unitary, reduce(np.kron, [np.array([1 - x, x]) for x in q])


def dense(unitary: np.ndarray, p: np.ndarray) -> np.ndarray:
    return (unitary * p) @ unitary.conj().T


def test_turned_product_states_have_the_covariance_of_their_matrices(rng):
    state, u, p = turned(occupations(rng, 3, "mixed"), turns(rng, 3, 1.0))
    g, rho = majorana_operators(3), dense(u, p)
    means = [[(1j * np.trace(rho @ (x @ y).toarray())).real if x is not y else 0.0 for y in g] for x in g]
    np.testing.assert_allclose(state.covariance, means, atol=1e-13)


@pytest.mark.parametrize("n", [1, 2, 4, 6])
@pytest.mark.parametrize("kind", ["mixed", "purer", "nearly pure", "partly pure", "pure"])
def test_bounds_of_fermions_hold_however_pure_the_states(rng, n, kind):
    for size in (1.0, 1e-2, 1e-5, 1e-9, 0.0):
        q, start = occupations(rng, n, kind), turns(rng, n, 1.0)
        other = q if rng.random() < 0.5 else occupations(rng, n, kind)
        (first, u, p), (second, v, r) = turned(q, start), turned(other, start + turns(rng, n, size))
        fidelity = np.linalg.svd(np.sqrt(p)[:, None] * (u.conj().T @ v) * np.sqrt(r), compute_uv=False).sum()
        distance = 0.5 * np.abs(np.linalg.eigvalsh(dense(u, p) - dense(v, r))).sum()
        low, high = trace_distance_bounds(first, second)
        assert low - DENSE <= distance <= high + DENSE
        # an occupation of eps next to 0 changes F by sqrt(eps) where it is small
        close = 1e-12 if kind in ("mixed", "purer") else 2e-7
        assert root_fidelity(first, second) == pytest.approx(fidelity, abs=close)
        below, above = root_fidelity_bounds(first, second)
        assert below - 2e-7 <= fidelity <= above + 2e-7
        assert above**2 - below**2 < 1e-5
        assert high <= np.sqrt(max(0.0, 1 - fidelity**2)) + 1e-6


@pytest.mark.parametrize("pairs", [1, 4, 20])
def test_one_half_filled_mode_among_pure_ones(pairs):
    first, second = FermionState.pattern([1, 0] * pairs + [1]), FermionState.pattern([1, 0] * pairs + [0.5])
    assert root_fidelity(first, second) == pytest.approx(np.sqrt(0.5), abs=1e-13)
    low, high = trace_distance_bounds(first, second)
    assert 0.5 - 1e-12 < low <= 0.5 <= high < 0.5 + 1e-12
    assert relative_entropy(first, second) == pytest.approx(np.log(2), abs=1e-10)
    assert relative_entropy(second, first) == np.inf


def test_many_pure_modes_that_differ_a_little():
    """Overlap of the patterns turned pairwise by t: cos(t)^20; the fidelity says far more than any single mode."""
    t, n = 0.4, 20
    first = FermionState.pattern([1, 0] * n)
    turn = np.kron(np.eye(n), [[np.cos(t), -np.sin(t)], [np.sin(t), np.cos(t)]])
    second = FermionState.of_correlations(turn @ np.diag([1.0, 0.0] * n) @ turn.T)
    overlap = np.cos(t) ** n
    assert root_fidelity(first, second) == pytest.approx(overlap, abs=1e-12)
    low, high = trace_distance_bounds(first, second)
    assert 1 - overlap - 1e-6 < low <= np.sqrt(1 - overlap**2) <= high < np.sqrt(1 - overlap**2) + 1e-11


def chain(sites: int, field: float) -> FermionState:
    """Ground state of ``-sum X X - h sum Z`` on an open chain, from its Majorana form."""
    a = np.zeros((2 * sites, 2 * sites))
    a[np.arange(0, 2 * sites, 2), np.arange(1, 2 * sites, 2)] = field
    a[np.arange(1, 2 * sites - 1, 2), np.arange(2, 2 * sites, 2)] = -1
    y, u = np.linalg.eigh(1j * (a - a.T))
    return FermionState.of(np.real((u * np.sign(y)) @ u.conj().T / 1j))


def spin_block(sites: int, field: float, block: int) -> np.ndarray:
    """Density matrix of the first sites in the ground state of the spin matrices."""
    x, z = np.array([[0, 1.0], [1, 0]]), np.diag([1.0, -1])
    at = lambda m, j: np.kron(np.kron(np.eye(2**j), m), np.eye(2 ** (sites - j - 1)))
    h = -sum(at(x, j) @ at(x, j + 1) for j in range(sites - 1)) - field * sum(at(z, j) for j in range(sites))
    psi = np.linalg.eigh(h)[1][:, 0].reshape(2**block, -1)
    return psi @ psi.T


def test_blocks_of_spin_chains_against_spin_matrices():
    for block in (1, 3, 5):
        first, second = (chain(9, h).reduced(range(block)) for h in (2.0, 1.9))
        a, b = (spin_block(9, h, block) for h in (2.0, 1.9))
        distance = 0.5 * np.abs(np.linalg.eigvalsh(a - b)).sum()
        assert trace_distance(first, second) == pytest.approx(distance, abs=1e-13)
        low, high = trace_distance_bounds(first, second)
        assert 0.3 * distance < low < distance + DENSE and distance - DENSE < high < 2 * distance


def test_ground_states_of_two_chains():
    """Blocks at the end of 40 sites: dense matrices where there are any, and relative entropies in 70 digits.

    Those are from the singular value decomposition of the block of G that couples the two kinds of Majorana operators
    (own computation): the purest levels of the second state are 2e-13, 6e-21, 1e-28, 3e-36 from pure.
    """
    first, second = chain(40, 2.0), chain(40, 1.9)
    exact = {1: 9.6635441e-5, 4: 0.0044593587, 6: 0.011162562, 8: 0.020924542, 10: 0.033742193}
    fidelities = []
    for block in (1, 2, 4, 6, 8, 10, 20, 40):
        pair = first.reduced(range(block)), second.reduced(range(block))
        low, high = trace_distance_bounds(*pair)
        assert 0 < low < high < 0.06
        if block <= 8:
            assert low - DENSE <= trace_distance(*pair) <= high + DENSE
        if block in exact:
            entropy = relative_entropy(*pair)
            assert 0.7 * exact[block] < entropy < exact[block] * (1 + 1e-5)
            if block <= 4:
                assert entropy == pytest.approx(exact[block], rel=1e-5)
        fidelities.append(root_fidelity(*pair))
    # a smaller block tells no more
    assert np.all(np.diff(fidelities) < 0)
    # of pure states F is the square root of the overlap, det((1 - G_1 G_2)/2)^(1/4)
    overlap = np.linalg.slogdet(0.5 * (np.eye(80) - first.covariance @ second.covariance))[1]
    assert fidelities[-1] == pytest.approx(np.exp(0.25 * overlap), abs=1e-12)


@pytest.mark.parametrize("small", [1e-3, 1e-8, 1e-12])
def test_two_nearly_pure_modes_in_fifty_digits(small):
    """Modes turned by 0.3 with occupations (small, 1 - 2 small) and (3 small, 1 - small)."""
    with mp.workdps(50):
        matrices, states = [], []
        for angle, q in ((0.0, (small, 1 - 2 * small)), (0.3, (3 * small, 1 - small))):
            c, s = mp.cos(angle), mp.sin(angle)
            n = mp.matrix([[c, -s], [s, c]]) * mp.diag(list(map(mp.mpf, q))) * mp.matrix([[c, s], [-s, c]])
            empty, full = (1 - mp.mpf(q[0])) * (1 - mp.mpf(q[1])), mp.mpf(q[0]) * mp.mpf(q[1])
            rho = mp.zeros(4)
            # one particle: weights q (1 - q') in the turned modes
            one = mp.diag([mp.mpf(q[0]) * (1 - mp.mpf(q[1])), (1 - mp.mpf(q[0])) * mp.mpf(q[1])])
            one = mp.matrix([[c, -s], [s, c]]) * one * mp.matrix([[c, s], [-s, c]])
            rho[0, 0], rho[3, 3] = empty, full
            for i in range(2):
                for j in range(2):
                    rho[1 + i, 1 + j] = one[i, j]
            matrices.append(rho)
            states.append(FermionState.of_correlations(np.array(n.tolist(), float)))

        def root(m):
            e, u = mp.eigsy(m)
            return u * mp.diag([mp.sqrt(max(x, 0)) for x in e]) * u.T

        inner = root(matrices[0]) * matrices[1] * root(matrices[0])
        fidelity = float(sum(mp.sqrt(max(x, 0)) for x in mp.eigsy(inner, eigvals_only=True)))
        distance = float(sum(abs(x) for x in mp.eigsy(matrices[0] - matrices[1], eigvals_only=True)) / 2)
        e, u = mp.eigsy(matrices[1])
        entropy = sum(x * mp.log(x) for x in mp.eigsy(matrices[0], eigvals_only=True))
        entropy -= sum((u.T * matrices[0] * u)[k, k] * mp.log(e[k]) for k in range(4))
    assert root_fidelity(*states) == pytest.approx(fidelity, abs=1e-10)
    low, high = trace_distance_bounds(*states)
    assert low <= distance <= high < distance + 0.2
    assert relative_entropy(*states) == pytest.approx(float(entropy), rel=1e-13 / small)


def test_distance_of_covariances_bounds_the_trace_distance(rng):
    """Equal for modes that commute one by one, above it for all others."""
    assert covariance_distance(FermionState.pattern([0.3]), FermionState.pattern([0.8])) == pytest.approx(0.5)
    for kind in ("mixed", "nearly pure", "pure"):
        q, start = occupations(rng, 4, kind), turns(rng, 4, 1.0)
        first, second = turned(q, start)[0], turned(q, start + turns(rng, 4, 1e-4))[0]
        assert 0 < trace_distance(first, second) <= covariance_distance(first, second) + DENSE
        assert trace_distance_bounds(first, second).upper < 1e-2
    same = trace_distance_bounds(first, first)
    assert same.lower == 0 and same.upper < 1e-12


def test_unresolved_levels_leave_a_lower_bound():
    """S(1||2) of one mode with occupations 1e-9 and 1e-18 is 1e-9 (ln(1e9) - 1) = 1.97e-8; float64 holds no 1e-18."""
    t = np.array([[np.cos(0.4), -np.sin(0.4)], [np.sin(0.4), np.cos(0.4)]])
    first, second = (FermionState.of_correlations(t @ np.diag([q, 0.5]) @ t.T) for q in (1e-9, 1e-18))
    assert 1e-8 < relative_entropy(first, second) < 1.97e-8
    assert relative_entropy(second, first) == pytest.approx(1e-9, abs=1e-11)
    low, high = trace_distance_bounds(first, second)
    assert low <= 1e-9 <= high < 1.001e-9
    # a pattern is pure to the last bit, a state with a tenth outside is far from pure
    assert relative_entropy(FermionState.pattern([1e-9, 0.5]), FermionState.pattern([0, 0.5])) == np.inf
    half = FermionState.of_correlations(t @ np.diag([0.5, 0.5]) @ t.T)
    assert relative_entropy(half, second) == np.inf


def test_blocks_too_large_for_the_graded_decomposition_keep_their_bounds(monkeypatch):
    monkeypatch.setattr(fermion_fidelity, "GRADED", 0)
    first, second = chain(40, 2.0).reduced(range(8)), chain(40, 1.9).reduced(range(8))
    low, high = trace_distance_bounds(first, second)
    assert low <= trace_distance(first, second) <= high < 0.05
    assert 1 - root_fidelity(first, second) == pytest.approx(2.1e-4, rel=0.5)


def boson_frame(rng, n: int, size: float) -> np.ndarray:
    """A symplectic matrix: squeezing between two turns that mix the modes."""

    def mixing():
        u = np.linalg.qr(rng.standard_normal((n, n)) + 1j * rng.standard_normal((n, n)))[0]
        return np.block([[u.real, -u.imag], [u.imag, u.real]])

    squeeze = np.exp(size * rng.standard_normal(n))
    return mixing() @ np.diag(np.concatenate([squeeze, 1 / squeeze])) @ mixing()


@pytest.mark.parametrize("n", [1, 3, 6])
@pytest.mark.parametrize("size", [0.0, 0.3, 1.5])
def test_pure_bosons_against_their_overlap_in_fifty_digits(rng, n, size):
    """``F^2 = Tr rho_1 rho_2 = exp(-d.S^-1.d/2) / sqrt(det S)`` where the first is pure."""
    frame = boson_frame(rng, n, size)
    for near in (1.0, 1e-2, 1e-5, 1e-9):
        for excess in (np.zeros(n), near * 10 ** -rng.uniform(0, 16, n)):
            other = frame @ boson_frame(rng, n, near * 0.5)
            v, w = frame @ frame.T / 2, (other * np.tile(0.5 + excess, 2)) @ other.T
            d = near * rng.standard_normal(2 * n)
            first, second = BosonState.of(0.5 * (v + v.T)), BosonState.of(0.5 * (w + w.T), d)
            with mp.workdps(50):
                total, apart = mp.matrix((first.covariance + second.covariance).tolist()), mp.matrix(d.tolist())
                square = float(mp.exp(-(apart.T * mp.lu_solve(total, apart))[0] / 2) / mp.sqrt(mp.det(total)))
            rounding = 1e-14 * np.linalg.cond(v)
            low, high = root_fidelity_bounds(first, second)
            assert low**2 - rounding <= square <= high**2 + rounding
            low, high = trace_distance_bounds(first, second)
            # for a pure state 1 - F^2 <= T <= sqrt(1 - F^2), equal to the latter if both are pure
            distance = np.sqrt(max(0.0, 1 - square))
            assert high >= (distance if not excess.any() else distance**2) - np.sqrt(rounding) * (near < 1e-4)
            assert low <= distance + np.sqrt(rounding) * (near < 1e-4)


@pytest.mark.parametrize("size", [0.0, 1.0])
def test_bosons_with_the_same_nearly_pure_modes(rng, size):
    """Geometric distributions: F, T and S(1||2) of one mode as sums over occupations, for several the products."""
    for means in ((1e-3, 1e-12), (1e-9, 1e-10), (0.5, 1e-6), (0.0, 1e-9)):
        a, b = means
        frame = boson_frame(rng, 1, size)
        first, second = (BosonState.of((0.5 + m) * frame @ frame.T) for m in means)
        k = np.arange(200)
        p, q = ((m / (1 + m)) ** k / (1 + m) for m in means)
        assert root_fidelity(first, second) == pytest.approx(np.sqrt(p * q).sum(), abs=1e-6)
        low, high = trace_distance_bounds(first, second)
        assert low <= 0.5 * np.abs(p - q).sum() <= high
        exact = np.log((1 + b) / (1 + a)) + (a * np.log(a * (1 + b) / (1 + a) / b) if a else 0.0)
        if b > 1e-11:
            assert relative_entropy(first, second) == pytest.approx(exact, rel=5e-2, abs=1e-11)
    vacuum = BosonState.of(0.5 * np.eye(2))
    assert relative_entropy(BosonState.of((0.5 + 1e-8) * np.eye(2)), vacuum) == np.inf
    assert relative_entropy(BosonState.of(0.5 * np.eye(2), [0.1, 0]), vacuum) == np.inf
    assert relative_entropy(vacuum, vacuum) < 1e-13
    # squeezed, the second cannot be told from a state with some 1e-14 bosons
    squeezed = np.diag([np.exp(0.6), np.exp(-0.6)])
    faint = relative_entropy(BosonState.of((0.5 + 1e-8) * squeezed), BosonState.of(0.5 * squeezed))
    assert 0 < faint < 1e-6
    assert relative_entropy(BosonState.of(squeezed), BosonState.of(0.5 * squeezed)) == np.inf


@pytest.mark.parametrize("size", [0.0, 0.3, 1.0, 2.0])
def test_bosons_of_many_common_modes(rng, size):
    """F of geometric distributions is ``prod 1/(sqrt((1 + a)(1 + b)) - sqrt(a b))``."""
    for n in (2, 4, 7):
        frame, means = boson_frame(rng, n, size), [10 ** -rng.uniform(-1, 17, n) for _ in range(2)]
        for a, b in (means, (means[0], means[0] * (1 + 1e-6))):
            pair = [(frame * np.tile(0.5 + m, 2)) @ frame.T for m in (a, b)]
            low, high = root_fidelity_bounds(*(BosonState.of(0.5 * (v + v.T)) for v in pair))
            exact = np.prod(1 / (np.sqrt((1 + a) * (1 + b)) - np.sqrt(a * b)))
            assert low - 1e-14 <= exact <= high + 1e-14
            assert high - low < 1e-5 * np.sqrt(np.linalg.cond(pair[0] + pair[1]))


@pytest.mark.parametrize("empty", [FermionState(np.zeros((0, 0)), 0.0), BosonState(np.zeros((0, 0)), np.zeros(0), 0.0)])
def test_states_of_no_modes_are_equal(empty):
    assert root_fidelity(empty, empty) == 1 and relative_entropy(empty, empty) == 0
    assert trace_distance_bounds(empty, empty) == (0, pytest.approx(0, abs=1e-15))

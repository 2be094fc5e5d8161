"""Quadratic charges against dense matrices of all states, against closed forms, and where float64 could fail."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp

import maxent
from maxent.families import Bilinears, Matrices, Periodic
from maxent.families.zero_levels import barrier
from tests.conformance.dense import random_hermitian, random_unitary
from tests.conformance.examples import many_body, random_pairing

NAMES = ("a", "b", "c")


def named(x) -> dict[str, float]:
    return dict(zip(NAMES, map(float, x), strict=True))


def listed(result) -> np.ndarray:
    return np.array([result.multipliers[n] for n in result.names])


def charges(kind: str, seed: int, n: int = 4) -> list[tuple]:
    """Three quadratic operators (h, D, constant): without pairing, with it, and in two coupled halves."""
    rng = np.random.default_rng(seed)
    out = []
    for _ in NAMES:
        h, d = random_hermitian(rng, n, is_complex=kind != "real"), random_pairing(rng, n)
        if kind == "real":
            d = d.real
        if kind == "halves":  # couples particles of the first half to holes of the second one
            h[: n // 2, n // 2 :] = 0
            h[n // 2 :, : n // 2] = 0
            d[: n // 2, : n // 2] = 0
            d[n // 2 :, n // 2 :] = 0
        out.append((h, None if kind == "plain" else d, 0.3))
    return out


def both(given: list[tuple]) -> tuple[Bilinears, Matrices]:
    n = len(given[0][0])
    dense = Matrices(dict(zip(NAMES, [many_body(*q) for q in given], strict=True)), dims=(2,) * n)
    return Bilinears(dict(zip(NAMES, given, strict=True))), dense


# ---------------------------------------------------------------- against Matrices


@pytest.mark.parametrize("kind", ["plain", "paired", "real", "halves"])
def test_everything_agrees_with_the_matrices_of_all_states(kind):
    family, dense = both(charges(kind, 1))
    assert family.particles.weights == ((1.0,) if kind in ("plain", "halves") else (0.5,))
    np.testing.assert_allclose(family.scale, dense.scale, rtol=1e-12)
    rng = np.random.default_rng(2)
    for size in (0.0, 1.0, 5.0):
        lam = size * rng.standard_normal(3)
        one, other = family.evaluate(lam), dense.evaluate(lam)
        assert one.log_partition == pytest.approx(other.log_partition, rel=1e-13, abs=1e-12)
        np.testing.assert_allclose(one.values, other.values, atol=1e-12)
        np.testing.assert_allclose(one.covariance, other.covariance, atol=1e-12)
        state, rho = family.state(lam), dense.state(lam)
        assert state.entropy == pytest.approx(rho.entropy, abs=1e-12)
        np.testing.assert_allclose(state.density(), rho.density(), atol=1e-12)
        for kept in ([0, 1], [1, 2, 3], [3, 2]):
            if kept != [3, 2]:  # in another order fermions and qubits differ by signs
                np.testing.assert_allclose(state.reduced(kept).density(), rho.reduced(kept), atol=1e-12)
        assert state.reduced([3, 2]).entropy == pytest.approx(state.reduced([2, 3]).entropy, abs=1e-13)
        word = {0: "X", 1: "Z", 3: "Y"}
        assert state.mean_word(word) == pytest.approx(float(pauli(word, 4, rho.density())), abs=1e-12)


def pauli(letters: dict[int, str], n: int, rho: np.ndarray) -> float:
    one = {"X": [[0, 1], [1, 0]], "Y": [[0, -1j], [1j, 0]], "Z": [[1, 0], [0, -1]]}
    q = np.eye(1)
    for j in range(n):
        q = np.kron(q, one[letters[j]] if j in letters else np.eye(2))
    return np.trace(q @ rho).real


@pytest.mark.parametrize("kind", ["plain", "paired", "halves"])
@pytest.mark.parametrize("seed", [3, 4, 5])
def test_verdicts_and_certificates_agree(kind, seed):
    family, dense = both(charges(kind, seed, 3))
    rng = np.random.default_rng(seed)
    v = rng.standard_normal(3)
    v /= np.linalg.norm(v)
    low = family.lowest(v, with_values=True)
    for distance in (1e-1, 1e-8, 0.0, -1e-8, -1e-1):
        targets = named(low.values - distance * v)
        one, other = maxent.solve(family, targets), maxent.solve(dense, targets)
        assert one.verdict is other.verdict
        if distance != -1e-8:  # next to the boundary the proof without commuting charges has no room
            assert one.evidence == "proved"
        if one.certificate is not None:
            assert one.certificate.verify(family, targets) and one.certificate.verify(dense, targets)
            assert other.certificate.verify(family, targets)
        if one.success:
            np.testing.assert_allclose(listed(one), listed(other), rtol=1e-6, atol=1e-8)
            assert one.entropy == pytest.approx(other.entropy, abs=1e-9)
        if one.face is not None:
            assert one.face.dimension == other.face.dimension == 1


@pytest.mark.parametrize("seed", range(4))
def test_levels_at_zero_are_a_face_with_an_inside(seed):
    """Two filled levels, three free ones, one empty: 8 states, and the limit state among them."""
    rng = np.random.default_rng(seed)
    u = random_unitary(rng, 6, is_complex=True)
    h = (u * np.array([-1, -0.5, 0, 0, 0, 2.0])) @ u.conj().T
    others = [random_hermitian(rng, 6, is_complex=True) for _ in "bc"]
    family = Bilinears(dict(zip(NAMES, [0.5 * (h + h.conj().T), *others], strict=True)))
    e = np.array([1.0, 0, 0])
    face = family.combine(np.eye(3), -1.5 * e).face(e, 1e-13)
    assert face.family.size == 3 and face.gap == pytest.approx(0.25)
    inside = face.family.state(np.array([0, 0.7, -0.4]))
    q = face.family.evaluate(np.array([0, 0.7, -0.4])).values - 1.5 * e
    result = maxent.solve(family, named(q))
    assert (result.verdict, result.face.dimension) == (maxent.Verdict.BOUNDARY, 8)
    assert result.entropy == pytest.approx(inside.entropy, abs=1e-9)
    np.testing.assert_allclose(result.state.covariance, inside.covariance, atol=1e-8)
    assert maxent.solve(family, named(q - 1e-9 * e)).verdict is maxent.Verdict.INFEASIBLE
    assert maxent.solve(family, named(q + 1e-9 * e)).verdict is maxent.Verdict.SOLVED


def test_redundant_and_inconsistent_charges():
    given = charges("paired", 6)
    sum_ = tuple(a + b for a, b in zip(given[0], given[1], strict=True))
    family = Bilinears(dict(zip((*NAMES, "sum"), [*given, sum_], strict=True)))
    q = family.evaluate(np.array([0.3, -0.2, 0.5, 0.0])).values
    asked = dict(zip(family.names, q, strict=True))
    result = maxent.solve(family, asked)
    assert result.success and len(result.redundancies) == 1
    assert maxent.solve(family, asked | {"sum": q[3] + 1e-6}).verdict is maxent.Verdict.INCONSISTENT


def test_barrier_derivatives_are_those_of_its_value():
    family, _ = both(charges("paired", 7))
    stacks = family.combine(np.eye(3), family.evaluate(np.array([0.2, -0.4, 0.1])).values).particles
    rng = np.random.default_rng(0)
    for u in rng.standard_normal((3, 3)):
        lam = 0.5 * u / -stacks.lowest(u).value
        at, step = barrier(stacks, lam), 1e-6
        near = [(barrier(stacks, lam + step * e), barrier(stacks, lam - step * e)) for e in np.eye(3)]
        slope = np.array([(a.value - b.value) / (2 * step) for a, b in near])
        bend = np.array([(a.gradient - b.gradient) / (2 * step) for a, b in near])
        np.testing.assert_allclose(at.gradient, slope, rtol=1e-6, atol=1e-6)
        np.testing.assert_allclose(at.factor @ at.factor.T, bend, rtol=1e-5, atol=1e-5)
        edge = u / -stacks.lowest(u).value
        assert stacks.barrier(0.999 * edge) is not None and stacks.barrier(1.001 * edge) is None


def test_stiffness_bounds_the_change_of_curvature():
    """u.H(lam + t u).u >= exp(-c t) u.H(lam).u with c the one-body norm, far below the spread of all states."""
    family, _ = both(charges("paired", 8))
    rng = np.random.default_rng(1)
    for lam, u in 2 * rng.standard_normal((8, 2, 3)):
        here, c = u @ family.evaluate(lam).covariance @ u, family.stiffness(lam, u)
        for t in (-0.5, -0.1, 0.1, 0.5):
            there = u @ family.evaluate(lam + t * u).covariance @ u
            assert there >= here * np.exp(-abs(t) * c) * (1 - 1e-10)
    low = family.lowest(u)
    assert c < low.highest - low.value


@pytest.mark.parametrize("kind", ["plain", "paired", "bosons"])
def test_targets_within_the_norm_needed_are_inside(kind):
    """Along every direction the lowest value lies at least as far off as the proof reaches."""
    rng = np.random.default_rng(9)
    if kind == "bosons":
        h = [np.eye(4), *(random_hermitian(rng, 4, is_complex=True) for _ in "bc")]
        family = Bilinears(dict(zip(NAMES, h, strict=True)), statistics="bosons")
        lam = np.array([6.0, 0.4, -0.2])
    else:
        family, lam = both(charges(kind, 8))[0], np.array([0.4, -0.3, 0.2])
    values = family.evaluate(lam).values
    here = family.combine(np.eye(3), values)
    for v in rng.standard_normal((200, 3)):
        v /= np.linalg.norm(v)
        reach = 1 / here.norm_needed(lam, v, np.zeros(3))
        assert 0 < reach <= -here.lowest(v).value
        assert here.norm_needed(lam, np.zeros(3), np.abs(v)) >= here.norm_needed(lam, v, np.zeros(3))
    result = maxent.solve(family, named(values))
    assert result.success and result.evidence == "proved"


def test_evidence_is_tested_where_no_proof_is_known():
    """Pairing of bosons, and a fixed number of fermions whose charges do not commute."""
    rng = np.random.default_rng(10)
    squeezed = Bilinears({"a": np.eye(2), "b": (np.zeros((2, 2)), np.array([[0, 0.3], [0.3, 0]]))}, statistics="bosons")
    h = [random_hermitian(rng, 4, is_complex=True) for _ in NAMES]
    fixed = Bilinears(dict(zip(NAMES, h, strict=True)), number=2)
    commuting = Bilinears({"a": np.diag(np.arange(4.0))}, number=2)
    for family, lam, evidence in (
        (squeezed, [1.0, 0.5], "tested"),
        (fixed, [0.2, 0.1, 0.3], "tested"),
        (commuting, [0.4], "proved"),
    ):
        values = family.evaluate(np.array(lam)).values
        result = maxent.solve(family, dict(zip(family.names, values, strict=True)))
        assert (result.success, result.evidence) == (True, evidence)


# ---------------------------------------------------------------- rings by momentum


@pytest.mark.parametrize(("cells", "p"), [(6, 1), (7, 1), (5, 2)])
@pytest.mark.parametrize("antiperiodic", [False, True])
def test_momentum_blocks_are_the_same_charges(cells, p, antiperiodic):
    rng = np.random.default_rng(cells)
    amplitude = lambda: rng.standard_normal((p, p)) + 1j * rng.standard_normal((p, p))
    make = lambda: Periodic(
        cells, {0: random_hermitian(rng, p), 1: amplitude(), 2: amplitude()}, pairing={1: amplitude()},
        antiperiodic=antiperiodic,
    )  # fmt: skip
    given = [make() for _ in NAMES]
    family = Bilinears(dict(zip(NAMES, given, strict=True)))
    dense = Bilinears(dict(zip(NAMES, [q.matrices() for q in given], strict=True)))
    lam = rng.standard_normal(3)
    one, other = family.evaluate(lam), dense.evaluate(lam)
    assert one.log_partition == pytest.approx(other.log_partition, abs=1e-11)
    np.testing.assert_allclose(one.values, other.values, atol=1e-11)
    np.testing.assert_allclose(one.covariance, other.covariance, atol=1e-11)
    state, whole = family.state(lam), dense.state(lam)
    np.testing.assert_allclose(state.reduced(range(cells * p)).covariance, whole.covariance, atol=1e-12)
    assert state.entropy == pytest.approx(whole.entropy, abs=1e-11)
    probe = make()
    assert state.mean(probe) == pytest.approx(whole.mean(probe.matrices()), abs=1e-11)


def test_a_hundred_thousand_sites():
    """Pairs of momenta in closed form; the energy per site of a long ring is that of any long ring."""

    def ring(n: int) -> Bilinears:
        energy = (Periodic(n, {0: 1.2, 1: -1.0}, pairing={1: -1.0}, antiperiodic=True), None, -0.6 * n)
        return Bilinears({"energy": energy, "number": Periodic(n, {0: 1.0}, antiperiodic=True)})

    long, short = ring(100_000), ring(400)
    lam = np.array([0.8, 0.1])
    np.testing.assert_allclose(long.evaluate(lam).values / 1e5, short.evaluate(lam).values / 400, rtol=1e-11)
    np.testing.assert_allclose(long.evaluate(lam).covariance / 1e5, short.evaluate(lam).covariance / 400, rtol=1e-10)
    result = maxent.solve(long, dict(zip(long.names, long.evaluate(lam).values, strict=True)))
    assert result.success and result.iterations <= 15
    np.testing.assert_allclose(listed(result), lam, rtol=1e-11)
    np.testing.assert_allclose(
        result.state.reduced(range(5)).covariance, short.state(lam).reduced(range(5)).covariance, atol=1e-11
    )


# ---------------------------------------------------------------- float64 at its ends


@pytest.mark.parametrize("size", [1e-8, 1e-3, 1.0, 1e3, 1e5])
def test_nothing_overflows_and_nothing_cancels(size):
    """Levels 0, 1, 2 of multipliers from 1e-8 to 1e5 against the closed form of single levels."""
    x = np.array([-2.0, -1.0, 0.0, 1e-9, 1.0, 2.0])
    u = random_unitary(np.random.default_rng(0), 6, is_complex=True)
    h = (u * x) @ u.conj().T
    family = Bilinears({"h": 0.5 * (h + h.conj().T)})
    ev, state = family.evaluate(np.array([size])), family.state(np.array([size]))
    y = size * x
    n = np.where(y > 0, np.exp(-np.abs(y)), 1.0) / (1 + np.exp(-np.abs(y)))
    assert ev.log_partition == pytest.approx(np.logaddexp(0, -y).sum(), rel=1e-13)
    assert ev.values[0] == pytest.approx(x @ n, abs=1e-13)
    assert ev.covariance[0, 0] == pytest.approx((x * x) @ (n * (1 - n)), rel=1e-6, abs=1e-13)
    plus = np.logaddexp(0, -np.abs(y)) + np.abs(y) * np.exp(-np.abs(y)) / (1 + np.exp(-np.abs(y)))
    assert state.entropy == pytest.approx(plus.sum(), rel=1e-6)
    paired = Bilinears({"h": (np.zeros((2, 2)), np.array([[0, 1.0], [-1.0, 0]]))})
    assert paired.evaluate(np.array([size])).log_partition == pytest.approx(
        2 * (size / 2 + np.log1p(np.exp(-size))), rel=1e-13
    )


def test_a_dilute_gas_keeps_its_digits():
    """Occupations of 1e-200: nothing is counted from half filling."""
    family = Bilinears({"number": np.eye(3), "h": np.diag([0, 1.0, 2.0])})
    ev = family.evaluate(np.array([460.0, 1.0]))
    n = np.exp(-np.array([460.0, 461.0, 462.0]))
    np.testing.assert_allclose(ev.values, [n.sum(), n @ [0, 1, 2]], rtol=1e-13)
    assert ev.log_partition == pytest.approx(n.sum(), rel=1e-13)


# ---------------------------------------------------------------- bosons


def test_bosons_against_their_levels():
    rng = np.random.default_rng(3)
    h, x = random_hermitian(rng, 5, is_complex=True), random_hermitian(rng, 5, is_complex=True)
    family = Bilinears({"a": np.eye(5), "b": h, "c": x}, statistics="bosons")
    for lam in ([9.0, 0.5, -0.3], [1.0, 0.1, 0.05]):
        lam = np.array(lam)
        e, u = np.linalg.eigh(lam[0] * np.eye(5) + lam[1] * h + lam[2] * x)
        ev = family.evaluate(lam)
        assert ev.log_partition == pytest.approx(-np.log1p(-np.exp(-e)).sum(), rel=1e-12)
        g = (u / np.expm1(e)) @ u.conj().T
        np.testing.assert_allclose(ev.values, [np.trace(q @ g).real for q in (np.eye(5), h, x)], rtol=1e-11)
        np.testing.assert_allclose(family.state(lam).number, g.T, atol=1e-12)
        step = 1e-5
        slope = [
            (family.evaluate(lam + d).values - family.evaluate(lam - d).values) / -2 / step for d in step * np.eye(3)
        ]
        np.testing.assert_allclose(ev.covariance, slope, rtol=1e-5, atol=1e-7)
        result = maxent.solve(family, named(ev.values))
        assert result.success and result.evidence == "proved" and result.iterations <= 15
        np.testing.assert_allclose(listed(result), lam, rtol=1e-9, atol=1e-11)


@pytest.mark.parametrize("seed", range(4))
def test_the_cone_of_bosons_and_its_edge(seed):
    """All bosons in the lowest mode of h: the boundary; below it unreachable, above it solved."""
    rng = np.random.default_rng(seed)
    h, x = random_hermitian(rng, 5, is_complex=True), np.diag(rng.random(5))
    family = Bilinears({"a": np.eye(5), "b": h, "c": x}, statistics="bosons")
    e, u = np.linalg.eigh(h)
    q = 4 * np.array([1, e[0], (u[:, 0].conj() @ x @ u[:, 0]).real])
    down = np.array([0, 1.0, 0])
    result = maxent.solve(family, named(q))
    assert result.verdict is maxent.Verdict.BOUNDARY and result.face.dimension == np.inf
    np.testing.assert_allclose(result.state.number, 4 * np.outer(u[:, 0].conj(), u[:, 0]), atol=1e-7)
    for distance in (1e-2, 1e-9):
        below = maxent.solve(family, named(q - distance * down))
        assert below.verdict is maxent.Verdict.INFEASIBLE and below.certificate.verify(
            family, named(q - distance * down)
        )
        assert maxent.solve(family, named(q + distance * down)).verdict is maxent.Verdict.SOLVED


def test_pairing_of_bosons_against_a_truncated_fock_space():
    """Two modes, 34 levels each: values of both routes computed outside (own computation, difference 2e-14)."""
    m = np.zeros((3, 4, 4))
    m[0] = [[1.3, 0.2, 0.1, 0.05], [0.2, 0.9, 0, 0.1], [0.1, 0, 1, -0.15], [0.05, 0.1, -0.15, 1.6]]
    m[1, 0, 0] = 1
    m[2] = [[0, 0, 0, 0.5], [0, 0, -0.5, 0], [0, -0.5, 0, 0], [0.5, 0, 0, 0]]
    lam = np.array([1.5, 0.4, 0.3])
    family = Bilinears(dict(zip(NAMES, [from_phase_space(q) for q in m], strict=True)), statistics="bosons")
    ev, state = family.evaluate(lam), family.state(lam)
    assert ev.log_partition == pytest.approx(-1.448228984937146, abs=1e-13)
    np.testing.assert_allclose(ev.values, [1.617676233712568, 0.2822890323856484, -0.04883972325066965], atol=1e-13)
    np.testing.assert_allclose(
        ev.covariance[0], [0.650366852553812, 0.08892907273654253, -0.07463349964778843], atol=1e-12
    )
    assert state.entropy == pytest.approx(1.0765490616107634, abs=1e-12)
    np.testing.assert_allclose(np.diag(state.covariance)[:2], [0.5645780647712968, 0.9659722936167018], atol=1e-13)
    result = maxent.solve(family, named(ev.values))
    assert result.success and result.iterations <= 15
    np.testing.assert_allclose(listed(result), lam, atol=1e-12)
    v = lam / np.linalg.norm(lam)
    low = family.lowest(v, with_values=True)
    verdicts = [str(maxent.solve(family, named(low.values - d * v)).verdict) for d in (1e-2, 1e-8, 0, -1e-8)]
    assert verdicts == ["infeasible", "infeasible", "boundary", "solved"]


def from_phase_space(m: np.ndarray) -> tuple:
    """(h, D, constant) of R.M.R/2 without a constant."""
    n = len(m) // 2
    xx, xp, pp = m[:n, :n], m[:n, n:], m[n:, n:]
    h = 0.5 * (xx + pp) - 0.5j * (xp - xp.T)
    return h, 0.5 * (xx - pp) + 0.5j * (xp + xp.T), 0.5 * np.trace(h).real


def test_linear_terms_displace_an_oscillator():
    """b+ b - 0.5 (b + b+) at beta: ln Z = -ln(1 - e^-beta) + beta/4, <b> = 1/2."""
    family = Bilinears({"e": (np.eye(1), None, 0.0, np.array([-0.5]))}, statistics="bosons")
    beta = 0.7
    ev, state = family.evaluate(np.array([beta])), family.state(np.array([beta]))
    assert ev.log_partition == pytest.approx(-np.log(-np.expm1(-beta)) + beta / 4, abs=1e-13)
    np.testing.assert_allclose(state.displacement, [0.5 * np.sqrt(2), 0], atol=1e-14)
    assert state.occupations[0] == pytest.approx(1 / np.expm1(beta) + 0.25, rel=1e-12)
    assert ev.values[0] == pytest.approx(1 / np.expm1(beta) - 0.25, rel=1e-12)
    assert state.mean((np.zeros((1, 1)), None, 0.0, np.array([1.0]))) == pytest.approx(1.0)


# ---------------------------------------------------------------- a fixed number


@pytest.mark.parametrize("number", [0, 2, 3, 5])
def test_a_fixed_number_is_a_sector_of_all_states(number):
    rng = np.random.default_rng(number)
    given = [(random_hermitian(rng, 5, is_complex=True), None, 0.1) for _ in NAMES]
    given[0][0][:2, 2:] = given[0][0][2:, :2] = 0
    family = Bilinears(dict(zip(NAMES, given, strict=True)), number=number)
    kept = np.array([bin(i).count("1") == number for i in range(32)])
    dense = Matrices(dict(zip(NAMES, [many_body(*q) for q in given], strict=True)), dims=(2,) * 5).restrict(kept)
    for size in (0.0, 1.0, 40.0):
        lam = size * rng.standard_normal(3)
        one, other = family.evaluate(lam), dense.evaluate(lam)
        assert one.log_partition == pytest.approx(other.log_partition, rel=1e-13, abs=1e-12)
        np.testing.assert_allclose(one.values, other.values, atol=1e-12)
        np.testing.assert_allclose(one.covariance, other.covariance, atol=1e-12)
        assert family.state(lam).entropy == pytest.approx(dense.state(lam).entropy, abs=1e-11)
        assert family.state(lam).occupations.sum() == pytest.approx(number, abs=1e-12)
    if number in (0, 5):
        return
    v = np.array([0.36, 0.48, -0.8])
    low = family.lowest(v, with_values=True)
    for distance in (1e-1, 1e-8, 0.0, -1e-8):
        targets = named(low.values - distance * v)
        assert maxent.solve(family, targets).verdict is maxent.solve(dense, targets).verdict


def test_inserting_a_particle_costs_the_chemical_potential():
    """ln Z_N - ln Z_{N+1} of 60 levels approaches beta mu of the grand-canonical ensemble."""
    h = np.diag(np.arange(60) / 10.0)
    fixed = Bilinears({"energy": h}, number=20).state(np.array([2.0]))
    assert fixed.insertion == pytest.approx(2.0 * 2.0, abs=0.05)
    free = maxent.solve(Bilinears({"energy": h, "number": np.eye(60)}), {"energy": fixed.mean(h), "number": 20.0})
    assert free.multipliers["number"] == pytest.approx(-fixed.insertion, abs=0.15)
    assert fixed.entropy < free.entropy


# ---------------------------------------------------------------- bad input


@pytest.mark.parametrize(
    ("make", "text"),
    [
        (lambda: Bilinears({}), "at least one charge"),
        (lambda: Bilinears({"h": np.array([[0, 1.0], [0, 0]])}), "'h' is not Hermitian"),
        (lambda: Bilinears({"h": np.eye(2), "g": np.eye(3)}), "'h' 2, 'g' 3"),
        (lambda: Bilinears({"h": np.eye(2)}, statistics="anyons"), "statistics must be one of"),
        (lambda: Bilinears({"h": (np.eye(2), np.eye(2))}), "'h': the pairing must be antisymmetric"),
        (lambda: Bilinears({"h": (np.eye(2), None, np.nan)}), "'h': the constant must be a finite"),
        (lambda: Bilinears({"h": np.diag([1.0, -1])}, statistics="bosons"), "no charge confines the bosons"),
        (lambda: Bilinears({"h": np.eye(2)}, number=3), "number must be an integer in 0..2"),
        (lambda: Bilinears({"h": Periodic(4, {1: 1.0}), "g": np.eye(4)}), "'g' is not periodic"),
        (lambda: Bilinears({"h": Periodic(4, {1: 1.0}), "g": Periodic(5, {0: 1.0})}), "different numbers of modes"),
        (
            lambda: Bilinears({"h": Periodic(4, {1: 1.0}), "g": Periodic(4, {0: 1.0}, antiperiodic=True)}),
            "different rings: 'h' 4 x 1, 'g' 4 x 1, antiperiodic",
        ),
        (lambda: Periodic(4, {1: 1.0, -1: 2.0}), "not the adjoint"),
        (lambda: Periodic(4, {0: 1j}), "must be Hermitian"),
        (lambda: Bilinears({"h": np.eye(2)}).state([np.inf]), "finite numbers"),
        (lambda: Bilinears({"h": np.eye(2)}, statistics="bosons").state([-1.0]), "outside their domain"),
        (lambda: Bilinears({"h": np.eye(2)}).select(["g"]), "select takes"),
        (lambda: Bilinears({"h": np.eye(2)}).restrict([0, 0]), "modes must be different"),
        (lambda: Bilinears({"h": np.eye(2)}).state([0.0]).mean(np.eye(3)), "3 modes, the state 2"),
    ],
)  # fmt: skip
def test_bad_input_is_named(make, text):
    with pytest.raises((ValueError, TypeError), match=text):
        make()


def test_confining_combinations_are_found():
    """No charge alone confines, the difference of two does."""
    a = np.diag([1.0, -1.0, 2.0])
    family = Bilinears({"a": a, "b": np.diag([0.5, -2.0, 1.0])}, statistics="bosons")
    assert family.particles.smallest_level(family.start()) > 0


def test_parts_of_the_modes_and_of_the_charges():
    given = charges("paired", 9)
    family, _ = both(given)
    kept = [0, 2, 3]
    part = family.restrict(kept)
    inside = [(h[np.ix_(kept, kept)], d[np.ix_(kept, kept)], c) for h, d, c in given]
    lam = np.array([0.3, -0.6, 0.2])
    assert part.evaluate(lam).log_partition == pytest.approx(both(inside)[0].evaluate(lam).log_partition, abs=1e-12)
    swapped = family.select(["c", "a"])
    np.testing.assert_allclose(
        swapped.evaluate(np.array([0.2, 0.3])).values,
        family.evaluate(np.array([0.3, 0, 0.2])).values[[2, 0]],
        atol=1e-12,
    )
    sparse = Bilinears({"h": sp.csr_array(np.diag([1.0, 2.0, 3.0]))})
    assert sparse.block_sizes == () and sparse.size == 3

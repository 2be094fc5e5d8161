"""Proofs about free particles against sums in fractions, eigenvalues to 50 digits, and tampering."""

from fractions import Fraction

import mpmath
import numpy as np
import pytest

import maxent
from maxent.diagnose.proof import NO_METHOD, NOT_PROVABLE
from maxent.diagnose.proofs.levels import lowest_filled
from maxent.diagnose.proofs.momenta import roots_of_unity
from maxent.diagnose.proofs.one_body import block_filled, block_lowest, stack_filled, stack_lowest
from maxent.diagnose.proofs.sums import exact_dot, exact_sum
from maxent.families import Bilinears, Modes, Periodic
from maxent.result import Certificate
from tests.conformance.dense import random_hermitian, random_unitary
from tests.conformance.examples import random_pairing
from tests.corpus.problems import KINDS, problems
from tests.proofs.elimination import dot

NAMES = ("a", "b", "c")
MARGINS = (1e-1, 1e-5, 1e-9, 1e-11)


def named(x) -> dict[str, float]:
    return dict(zip(NAMES, map(float, x), strict=True))


def claim(direction, kind="outside", accuracy=None) -> Certificate:
    return Certificate(direction, 0.0, 0.0, 0.0, 0.0, kind, accuracy or {})


def levels_of(matrix) -> list:
    """Eigenvalues to 50 digits."""
    with mpmath.workdps(50):
        return list(mpmath.eighe(mpmath.matrix(np.asarray(matrix, complex).tolist()), eigvals_only=True))


def combined(v, matrices):
    """``v.Q`` to 50 digits, as an mpmath matrix."""
    with mpmath.workdps(50):
        parts = [
            mpmath.mpf(x) * mpmath.matrix(np.asarray(q, complex).tolist()) for x, q in zip(v, matrices, strict=True)
        ]
        return sum(parts[1:], parts[0])


def negative(matrix):
    """Sum of the negative eigenvalues of an mpmath matrix, to 50 digits."""
    with mpmath.workdps(50):
        return mpmath.fsum(min(x, 0) for x in mpmath.eighe(matrix, eigvals_only=True))


# ---------------------------------------------------------------- sums and levels


def test_sums_have_no_rounding(rng):
    a = rng.standard_normal(300) * 10.0 ** rng.integers(-290, 290, 300)
    b = rng.standard_normal(300) * 10.0 ** rng.integers(-15, 15, 300)
    a[:3], b[5] = (5e-324, 1e308, -1e308), 0.0
    assert exact_sum(a) == sum(map(Fraction, a.tolist()))
    assert exact_dot(a, b) == dot(a, b)
    with pytest.raises(OverflowError):
        exact_sum(np.array([1.0, np.inf]))


@pytest.mark.parametrize("n", [1, 2, 3, 5, 8, 30, 97])
def test_roots_of_unity_to_their_last_digit(n):
    with mpmath.workdps(50):
        for j, z in enumerate(roots_of_unity(n)):
            angle = 2 * mpmath.pi * j / n
            assert abs(mpmath.mpf(z.real) - mpmath.cos(angle)) < 2.0**-53
            assert abs(mpmath.mpf(z.imag) - mpmath.sin(angle)) < 2.0**-53


def test_filled_levels_are_an_exact_sum(rng):
    """Half of the levels cancel to the last digits."""
    q = rng.standard_normal((3, 60))
    w = rng.standard_normal(3)
    q[2, :30] = -(w[:2] @ q[:2, :30]) / w[2]
    copies = rng.uniform(0.5, 3, 60)
    truth = sum(Fraction(float(g)) * min(dot(w, x), Fraction(0)) for g, x in zip(copies, q.T, strict=True))
    assert lowest_filled(w, q, copies) == (truth, True)


def test_too_many_levels_at_zero_are_bounded(rng):
    q = rng.standard_normal((2, 40_000))
    q[1] = -q[0] / 3
    w = np.array([1.0, 3.0])
    low, exact = lowest_filled(w, q, np.ones(40_000))
    truth = sum(min(dot(w, x), Fraction(0)) for x in q.T)
    assert not exact and truth - Fraction(1e-9) < low <= truth


# ---------------------------------------------------------------- one-body matrices


@pytest.mark.parametrize("is_complex", [False, True])
@pytest.mark.parametrize("d", [2, 3, 7, 12])
def test_traces_of_negative_parts_lie_below_the_exact_ones(rng, d, is_complex):
    """Generic, of low rank, with levels near zero, and graded."""
    for case in range(4):
        a = random_hermitian(rng, d, is_complex=is_complex)
        if case:
            e, u = np.linalg.eigh(a)
            e = (e * (np.arange(d) < 1), e * 10.0 ** -rng.integers(10, 17, d), e * 4.0 ** -np.arange(d))[case - 1]
            a = (u * e) @ u.conj().T
            a = 0.5 * (a + a.conj().T)
        exact = levels_of(a)
        with mpmath.workdps(50):
            truth, least = mpmath.fsum(min(x, 0) for x in exact), min(exact)
        size = float(np.abs(np.linalg.eigvalsh(a)).sum())
        w = np.ones(1)
        for low in (stack_filled(a[None], np.zeros((1, d, d))), block_filled(w, [a])):
            assert truth - 100 * d * 2.0**-53 * size <= mpmath.mpf(low.numerator) / low.denominator <= truth
        for low in (stack_lowest(a[None], np.zeros((1, d, d))), block_lowest(w, [a])):
            assert least - 100 * d * 2.0**-53 * size <= mpmath.mpf(low.numerator) / low.denominator <= least


# ---------------------------------------------------------------- certificates: independent levels


@pytest.mark.parametrize("copies", [False, True])
def test_fermions_down_to_the_tolerance(rng, copies):
    q, g = rng.standard_normal((3, 40)), rng.integers(1, 4, 40).astype(float)
    family = Modes(dict(zip(NAMES, q, strict=True)), degeneracy=g if copies else None, constants={"b": 0.3})
    g = g if copies else np.ones(40)
    for margin in MARGINS:
        v = rng.standard_normal(3)
        v /= np.linalg.norm(v)
        targets = named(q @ (g * (v @ q < 0)) + np.array([0, 0.3, 0]) - margin * v)
        result = maxent.solve(family, targets)
        assert result.verdict is maxent.Verdict.INFEASIBLE
        proof, u = result.prove(family), list(result.certificate.direction.values())
        truth = sum(Fraction(x) * min(dot(u, y), Fraction(0)) for x, y in zip(g.tolist(), q.T, strict=True))
        truth += Fraction(u[1]) * Fraction(0.3) - dot(u, targets.values())
        assert proof and Fraction(proof.exact) == truth and Fraction(proof.margin) <= truth


@pytest.mark.parametrize("statistics", ["bosons", "distinguishable"])
def test_a_cone_down_to_the_tolerance(rng, statistics):
    """Levels at zero lie below it by a rounding: the theorem is about a direction next to the certificate."""
    q = rng.standard_normal((3, 30))
    q[0], q[2] = np.append(np.zeros(3), rng.uniform(0.3, 2, 27)), 1.0
    turn = random_unitary(rng, 3, is_complex=False)
    point, charges = turn @ (q @ np.append([0.7, 1.3, 0.4], np.zeros(27))), turn @ q
    family = Modes(dict(zip(NAMES, charges, strict=True)), statistics)
    for margin in MARGINS:
        targets = named(point - margin * turn[:, 0])
        result = maxent.solve(family, targets)
        proof = result.prove(family)
        assert proof and proof.margin == pytest.approx(result.certificate.margin, rel=1e-2)
    assert not maxent.solve(family, named(point)).prove(family)


def test_a_tampered_direction_is_not_proved(rng):
    q = np.array([rng.uniform(0.3, 2, 20), rng.standard_normal(20), np.ones(20)])
    family = Modes(dict(zip(NAMES, q, strict=True)), "bosons")
    targets = {"a": -0.1, "b": 0.2, "c": 1.0}
    good = maxent.solve(family, targets).certificate
    assert good.prove(family, targets)
    off = good.direction | {"c": good.direction["c"] - 10}
    proof = claim(off).prove(family, targets)
    assert proof.status == NOT_PROVABLE and proof.margin == -np.inf and "below zero" in proof.detail
    fermions = Modes(dict(zip(NAMES, q, strict=True)))
    assert not claim(good.direction | {"b": 5.0}).prove(fermions, targets)
    # too much is said: the stated accuracy takes the margin
    assert not claim(good.direction, accuracy=dict.fromkeys(NAMES, 1.0)).prove(family, targets)


# ---------------------------------------------------------------- certificates: quadratic charges


@pytest.mark.parametrize("kind", ["plain", "paired", "diagonal", "number"])
def test_quadratic_fermions_down_to_the_tolerance(rng, kind):
    n = 5
    h = [random_hermitian(rng, n, is_complex=kind != "diagonal") for _ in NAMES]
    d = [random_pairing(rng, n) if kind == "paired" else np.zeros((n, n)) for _ in NAMES]
    h = [np.diag(np.diag(x)) for x in h] if kind == "diagonal" else h
    number = 2 if kind == "number" else None
    given = dict(zip(NAMES, [(x, y, 0.3) for x, y in zip(h, d, strict=True)], strict=True))
    family = Bilinears(given, number=number)
    for margin in MARGINS:
        v = rng.standard_normal(3)
        v /= np.linalg.norm(v)
        targets = named(family.lowest(v, with_values=True).values - margin * v)
        result = maxent.solve(family, targets)
        assert result.verdict is maxent.Verdict.INFEASIBLE
        proof, u = result.prove(family), list(result.certificate.direction.values())
        with mpmath.workdps(50):
            shift = mpmath.fsum(
                mpmath.mpf(x) * (mpmath.mpf(0.3) - mpmath.mpf(q)) for x, q in zip(u, targets.values(), strict=True)
            )
            if kind == "paired":
                whole = [np.block([[x, y], [-y.conj(), -x.conj()]]) for x, y in zip(h, d, strict=True)]
                trace = mpmath.fsum(
                    mpmath.mpf(x) * mpmath.mpf(float(e)) for x, q in zip(u, h, strict=True) for e in np.diag(q).real
                )
                truth = (negative(combined(u, whole)) + trace) / 2 + shift
            elif kind == "number":
                truth = mpmath.fsum(sorted(mpmath.eighe(combined(u, h), eigvals_only=True))[:2]) + shift
            else:
                truth = negative(combined(u, h)) + shift
            assert proof and proof.margin <= truth, (kind, margin)
            assert abs(truth - proof.margin) <= 1e-13 + 1e-3 * margin
        assert not claim({n: -x for n, x in result.certificate.direction.items()}).prove(family, targets)


def test_quadratic_bosons_down_to_the_tolerance(rng):
    h, x = random_hermitian(rng, 5, is_complex=True), np.diag(rng.random(5))
    e, u = np.linalg.eigh(h)
    family = Bilinears(dict(zip(NAMES, (np.eye(5), h, x), strict=True)), statistics="bosons")
    point = 4 * np.array([1, e[0], (u[:, 0].conj() @ x @ u[:, 0]).real])
    for margin in MARGINS:
        targets = named(point - margin * np.array([0, 1.0, 0]))
        result = maxent.solve(family, targets)
        proof = result.prove(family)
        assert proof and proof.margin == pytest.approx(result.certificate.margin, rel=0.1)
    assert not maxent.solve(family, named(point)).prove(family)
    assert not claim({"a": 0.0, "b": 1.0, "c": 0.0}).prove(family, named(point - 1.0))


@pytest.mark.parametrize("antiperiodic", [False, True])
@pytest.mark.parametrize("paired", [False, True])
def test_rings_agree_with_the_matrices_they_stand_for(rng, antiperiodic, paired):
    a = 0.3 * rng.standard_normal((2, 2)) + 0.2j
    pairs = {1: np.array([[0.4, 0.1], [-0.3, 0.2j]])} if paired else None
    given = {
        "a": Periodic(6, {0: np.eye(2), 1: a}, antiperiodic=antiperiodic),
        "b": Periodic(6, {1: -np.eye(2), 2: 0.3j * a}, antiperiodic=antiperiodic, pairing=pairs),
        "c": Periodic(6, {0: np.diag([1.0, -0.5])}, antiperiodic=antiperiodic),
    }
    ring = Bilinears(given)
    dense = Bilinears({n: q.matrices() for n, q in given.items()})
    for margin in MARGINS:
        v = rng.standard_normal(3)
        v /= np.linalg.norm(v)
        targets = named(ring.lowest(v, with_values=True).values - margin * v)
        result = maxent.solve(ring, targets)
        one, other = result.prove(ring), result.certificate.prove(dense, targets)
        assert one and other and one.margin == pytest.approx(other.margin, abs=2e-13)


def test_a_hundred_thousand_sites_of_a_ring():
    ring = Bilinears({"energy": Periodic(100_000, {1: -1.0}), "number": Periodic(100_000, {0: 1.0})})
    result = maxent.solve(ring, {"energy": -70_000.0, "number": 50_000.0})  # 2/pi per site is the least
    proof = result.prove(ring)
    assert proof and proof.margin == pytest.approx(result.certificate.margin, rel=1e-9)


def test_inconsistent_targets_are_proved(rng):
    q = rng.standard_normal((2, 30))
    twice = Modes({"a": q[0], "b": q[1], "c": q[0] + q[1]})
    targets = {"a": 1.0, "b": 1.0, "c": 2.0 + 1e-6}
    result = maxent.solve(twice, targets)
    assert result.verdict is maxent.Verdict.INCONSISTENT and result.prove(twice)
    h = [random_hermitian(rng, 4, is_complex=True) for _ in "ab"]
    matrices = Bilinears({"a": h[0], "b": h[1], "c": h[0] + h[1]})
    result = maxent.solve(matrices, targets)
    assert result.verdict is maxent.Verdict.INCONSISTENT and result.prove(matrices)


# ---------------------------------------------------------------- solved targets


@pytest.mark.parametrize("statistics", ["fermions", "bosons", "distinguishable"])
def test_balls_of_solved_targets_are_inside(rng, statistics):
    """The radius is below the distance to the edge: along every direction probed the lowest value is farther away."""
    q = rng.standard_normal((3, 12))
    q[2] = 1.0
    family = Modes(dict(zip(NAMES, q, strict=True)), statistics)
    lam = np.array([0.4, -0.3, 0.0])
    lam[2] = 0.5 - (lam @ q).min()
    targets = family.evaluate(lam).values
    proof = maxent.solve(family, named(targets)).prove(family)
    assert proof and 1e-3 < proof.margin
    shifted = family.combine(np.eye(3), targets)
    for v in rng.standard_normal((500, 3)):
        v /= np.linalg.norm(v)
        assert shifted.lowest(v).value <= -proof.margin
    edge = maxent.solve(family, named(targets)).prove(family, named(targets))
    assert edge == proof


def test_redundant_charges_and_the_edge_of_a_continuum_have_no_ball(rng):
    q = rng.standard_normal(12)
    twice = Modes({"a": q, "b": 2 * q})
    assert maxent.solve(twice, {"a": 0.5, "b": 1.0}).prove(twice).status == NOT_PROVABLE
    levels = np.linspace(0.1, 4, 30)
    free = Modes({"n": np.ones(30), "e": levels}, "bosons", continuum={"n": 1.0, "e": 0.0})
    assert maxent.solve(free, {"n": 3.0, "e": 2.0}).prove(free).status == NO_METHOD


def test_what_was_computed_is_not_proved(rng):
    h = [random_hermitian(rng, 4, is_complex=True) for _ in NAMES]
    family = Bilinears(dict(zip(NAMES, h, strict=True)))
    targets = dict.fromkeys(NAMES, 30.0)
    certificate = maxent.solve(family, targets).certificate
    assert certificate.prove(family, targets)
    proof = certificate.prove(family.combine(np.eye(3), np.zeros(3)), targets)
    assert proof.status == NO_METHOD and "computed" in proof.detail


# ---------------------------------------------------------------- problems of known truth


UNREACHABLE = [
    k for k in KINDS if k.startswith(("outside", "inconsistent")) and k.split("-")[1] in ("levels", "quadratic", "ring")
]


@pytest.mark.parametrize("kind", UNREACHABLE)
def test_whatever_is_called_unreachable_is_proved(kind):
    for problem in problems(kind, seed=21, count=4):
        family = problem.build()
        result = maxent.solve(family, problem.targets)
        proof = result.prove(family)
        assert str(result.verdict) == problem.verdict and proof, (problem.identity, proof.detail)
        assert proof.margin <= problem.distance * (1 + 1e-9) + 2 * result.certificate.tolerance, problem.identity


def with_pairing(rng, n: int, m: int, free: int) -> list[tuple]:
    """Charges of paired fermions; the first has `free` levels at zero and fills all below, its value is 0."""
    h, d = random_hermitian(rng, n, is_complex=True), random_pairing(rng, n)
    u = np.linalg.eigh(np.block([[h, d], [-d.conj(), -h.conj()]]))[1][:, n:]
    holes = np.concatenate([u[n:], u[:n]]).conj()
    x = np.append(np.zeros(free), rng.uniform(0.3, 2, n - free))
    whole = (u * x) @ u.conj().T - (holes * x) @ holes.conj().T
    pair = 0.5 * (whole[:n, n:] - whole[:n, n:].T)
    first = (0.5 * (whole[:n, :n] + whole[:n, :n].conj().T), pair, 0.5 * float(x.sum() - np.trace(whole[:n, :n]).real))
    return [first] + [(random_hermitian(rng, n, is_complex=True), random_pairing(rng, n), 0.3) for _ in range(m - 1)]


@pytest.mark.parametrize("free", [0, 1, 2])
@pytest.mark.parametrize("seed", range(3))
def test_paired_fermions_on_and_next_to_a_face(seed, free):
    """Infeasible, boundary and solved, all next to a face with `free` levels; infeasible ones are proved."""
    rng = np.random.default_rng([seed, free])
    family = Bilinears(dict(zip(NAMES, with_pairing(rng, 4, 3, free), strict=True)))
    e = np.array([1.0, 0.0, 0.0])
    assert family.lowest(e).value == pytest.approx(0.0, abs=1e-13)
    inside = family.evaluate(0.3 * rng.standard_normal(3)).values
    face = family.face(e, 1e-13).family
    point = np.append(0.0, face.evaluate(rng.standard_normal(3)).values[1:])
    edge = maxent.solve(family, named(point))
    assert edge.verdict is maxent.Verdict.BOUNDARY and edge.face.dimension == 2**free
    for step in (1e-1, 1e-5, 1e-9):
        result = maxent.solve(family, named(point - step * e))
        assert result.verdict is maxent.Verdict.INFEASIBLE and result.prove(family)
        t = step / inside[0]
        assert t < 1 and maxent.solve(family, named((1 - t) * point + t * inside)).verdict is maxent.Verdict.SOLVED

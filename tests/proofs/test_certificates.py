"""Certificates proved, not proved when tampered with, and never with a margin above the exact one."""

from dataclasses import replace
from fractions import Fraction

import jax
import numpy as np
import pytest
import scipy.sparse as sp

import maxent
from maxent import AtLeast, AtMost, Measured, Within
from maxent.diagnose.proof import NO_METHOD, NOT_PROVABLE, PROVED
from maxent.families import Matrices, Microstates
from maxent.families.rules import ratio_tail
from maxent.result import Certificate
from tests.proofs.elimination import combination, dot, is_positive_semidefinite

X, Y, Z = np.array([[0, 1], [1, 0]]), np.array([[0, -1j], [1j, 0]]), np.diag([1, -1])
ATOL = 5e-15


def random_charges(rng, d, is_complex, m=3):
    """Matrices of norm 1."""
    out = {}
    for name in "abcde"[:m]:
        a = rng.standard_normal((d, d)) + (1j * rng.standard_normal((d, d)) if is_complex else 0.0)
        a = a + a.conj().T
        out[name] = a / np.linalg.norm(a, 2)
    return out


def outside_by(rng, charges, margin):
    """A unit direction, and targets that lie outside by `margin` along it, up to rounding."""
    v = rng.standard_normal(len(charges))
    v = v / np.linalg.norm(v)
    vectors = np.linalg.eigh(sum(x * q for x, q in zip(v, charges.values(), strict=True)))[1]
    ground = vectors[:, 0]
    values = [float(np.real(ground.conj() @ q @ ground)) for q in charges.values()]
    targets = {n: x - margin * y for n, x, y in zip(charges, values, v, strict=True)}
    return dict(zip(charges, map(float, v), strict=True)), targets


def claim(direction, margin=0.0, kind="outside", accuracy=None):
    return Certificate(direction, 0.0, 0.0, margin, 0.0, kind, accuracy or {})


def holds_exactly(charges, direction, targets, margin):
    """Whether ``v.(Q - q) >= margin`` in rationals."""
    names = list(charges)
    v = [direction[n] for n in names]
    exact = combination(v, [np.asarray(charges[n], complex) for n in names])
    return is_positive_semidefinite(exact, Fraction(margin) + dot(v, [targets[n] for n in names]))


# ---------------------------------------------------------------- what is proved


@pytest.mark.parametrize("is_complex", [False, True])
@pytest.mark.parametrize("exponent", [1, 3, 6, 9, 11, 12, 13])
def test_from_large_margins_to_the_tolerance(rng, is_complex, exponent):
    margin = 10.0**-exponent
    charges = random_charges(rng, 3, is_complex)
    family = Matrices(charges)
    _, targets = outside_by(rng, charges, margin)
    result = maxent.solve(family, targets)
    assert str(result.verdict) == "infeasible"
    proof = result.prove(family)
    assert proof and proof.status == PROVED and proof.exact is None
    assert proof == result.certificate.prove(family, targets)
    assert proof.margin == pytest.approx(result.certificate.margin, rel=0.1 if exponent > 9 else 1e-3)
    assert holds_exactly(charges, result.certificate.direction, targets, proof.margin)
    assert not holds_exactly(charges, result.certificate.direction, targets, proof.margin * 1.1 + ATOL)


@pytest.mark.parametrize("d", [2, 6, 24, 80])
def test_where_proving_stops(rng, d):
    """Every margin above the decision tolerance is proved, and so is half of it; inside, nothing is."""
    charges = random_charges(rng, d, is_complex=False)
    family = Matrices(charges)
    for factor, provable in ((1.0, True), (0.5, True), (-0.5, False)):
        tolerance = 1.6e-14
        direction, targets = outside_by(rng, charges, factor * tolerance)
        certificate = claim(direction)
        assert certificate.verify(family, targets).tolerance == pytest.approx(tolerance, rel=0.5)
        assert bool(certificate.prove(family, targets)) is provable


def test_two_dimensions_by_hand():
    """v.Q has the eigenvalues +-1: the margin is 1 less than the length of the targets, known to any digit."""
    family, targets = Matrices({"x": X, "z": Z}), {"x": 0.8, "z": 0.7}
    certificate = maxent.solve(family, targets).certificate
    v = [certificate.direction[n] for n in "xz"]
    truth = -((Fraction(v[0]) ** 2 + Fraction(v[1]) ** 2) ** 1)  # lowest = -|v|, which is -|v|^2 up to rounding of |v|
    proof = certificate.prove(family, targets)
    assert float(truth - dot(v, targets.values())) == pytest.approx(proof.margin, abs=1e-14)
    assert proof.margin <= certificate.margin + 1e-15
    assert holds_exactly({"x": X, "z": Z}, certificate.direction, targets, proof.margin)


def test_listed_states_are_exact(rng):
    charges = {"a": rng.standard_normal(50), "b": rng.standard_normal(50)}
    family, targets = Microstates(charges), {"a": 2.5, "b": 2.5}
    certificate = maxent.solve(family, targets).certificate
    proof = certificate.prove(family, targets)
    v = [certificate.direction[n] for n in "ab"]
    truth = min(dot(v, x) for x in np.array(list(charges.values())).T) - dot(v, targets.values())
    assert proof and Fraction(proof.exact) == truth
    assert Fraction(proof.margin) <= truth < Fraction(np.nextafter(proof.margin, np.inf))


def test_listed_margins_down_to_the_last_digit():
    """Outside by one unit in the last place: float64 calls it boundary, the rational minimum is 2^-51."""
    family, targets = Microstates({"n": [0.0, 1.0, 3.0]}), {"n": float(np.nextafter(3.0, 4.0))}
    assert str(maxent.solve(family, targets).verdict) == "boundary"
    proof = claim({"n": -1.0}).prove(family, targets)
    assert proof and proof.exact == str(Fraction(1, 2**51))
    assert not claim({"n": -1.0}).prove(family, {"n": 3.0})


def test_dropped_states_do_not_count():
    weights = [0.0, 0.0, -np.inf]
    targets = {"n": 1.5}
    with_all, without = Microstates({"n": [0, 1, 2]}), Microstates({"n": [0, 1, 2]}, log_weights=weights)
    assert not claim({"n": -1.0}).prove(with_all, targets)
    assert claim({"n": -1.0}).prove(without, targets).exact == "1/2"


def test_a_million_states(rng):
    values = rng.standard_normal((3, 1_000_000))
    family = Microstates(dict(zip("abc", values, strict=True)))
    direction = {"a": 0.6, "b": 0.0, "c": -0.8}
    targets = {"a": -4.0, "b": 0.0, "c": 5.0}
    proof = claim(direction).prove(family, targets)
    heights = 0.6 * values[0] - 0.8 * values[2]
    least = int(np.argmin(heights))
    v = list(direction.values())
    assert proof and Fraction(proof.exact) == dot(v, values[:, least]) - dot(v, targets.values())


def test_a_million_rivals(rng):
    """A contradiction: every state has the same height, and the float bound stands."""
    x = rng.standard_normal(300_000)
    family = Microstates({"x": x, "twice": 2 * x + 1})
    result = maxent.solve(family, {"x": 0.0, "twice": 1.001})
    assert str(result.verdict) == "inconsistent"
    proof = result.prove(family)
    assert proof and proof.exact is None and proof.margin == pytest.approx(result.certificate.margin, rel=1e-9)


@pytest.mark.parametrize("is_complex", [False, True])
def test_contradictions_of_matrices(rng, is_complex):
    a = random_charges(rng, 5, is_complex, m=1)["a"]
    charges = {"a": a, "b": X_block(a)}
    charges["both"] = charges["a"] + 2 * charges["b"] + 3 * np.eye(5)
    family = Matrices(charges)
    targets = {"a": 0.0, "b": 0.0, "both": 3.0 + 1e-6}
    result = maxent.solve(family, targets)
    assert str(result.verdict) == "inconsistent"
    proof = result.prove(family)
    assert proof and proof.margin == pytest.approx(result.certificate.margin, rel=1e-6)
    assert holds_exactly(charges, result.certificate.direction, targets, proof.margin)
    consistent = {"a": 0.0, "b": 0.0, "both": 3.0}
    assert not result.certificate.prove(family, consistent)


def X_block(a):
    """A charge that does not commute with `a`."""
    b = np.zeros_like(a)
    b[0, 1] = b[1, 0] = 0.5
    return b


# ---------------------------------------------------------------- which numbers it is about


def sparse_model(rng):
    """Two charges on 11 states: a diagonal state, a commuting block, two blocks that stay matrices, mixed up."""
    u = np.linalg.qr(rng.standard_normal((3, 3)))[0]
    commuting = [u @ np.diag(x) @ u.T for x in ([1.0, 2.0, 4.0], [0.0, 1.0, -1.0])]
    commuting = [0.5 * (c + c.T) for c in commuting]
    rest = [random_charges(rng, d, is_complex=True, m=2) for d in (3, 4)]
    order = rng.permutation(11)
    out = []
    for j, name in enumerate("ab"):
        q = sp.csr_array(sp.block_diag([[[0.25 + j]], commuting[j], rest[0][name], rest[1][name]]))
        out.append(sp.csr_array(q[order][:, order]))
    return {"a": out[0], "b": out[1]}


def test_sparse_blocks(rng):
    charges = sparse_model(rng)
    family = Matrices(charges)
    assert len(family.block_sizes) == 2 and len(family.turned) == 1
    dense = {n: q.toarray() for n, q in charges.items()}
    for margin in (1e-2, 1e-8, 1e-12):
        direction, targets = outside_by(rng, dense, margin)
        certificate = claim(direction)
        proof = certificate.prove(family, targets)
        assert proof.margin == pytest.approx(certificate.verify(family, targets).margin, rel=1e-2, abs=1e-15)
        assert holds_exactly(dense, direction, targets, proof.margin)
        assert not holds_exactly(dense, direction, targets, proof.margin + 5e-14)


def test_the_charges_as_given_not_their_eigenvalues(rng):
    """Commuting charges are stored as rounded eigenvalues; the proof is about the matrices."""
    u = np.linalg.qr(rng.standard_normal((6, 6)))[0]
    pair = {n: u @ np.diag(x) @ u.T for n, x in (("a", np.arange(6.0)), ("b", np.arange(6.0) ** 2))}
    pair = {n: 0.5 * (q + q.T) for n, q in pair.items()}
    family = Matrices(pair)
    assert not family.blocks.dense
    for name, q in family.operators().items():
        assert np.array_equal(q.toarray(), pair[name])
    direction, targets = outside_by(rng, pair, 1e-6)
    proof = claim(direction).prove(family, targets)
    assert proof and proof.exact is None
    assert holds_exactly(pair, direction, targets, proof.margin)


def test_sectors_keep_the_numbers(rng):
    charges = sparse_model(rng)
    family = Matrices(charges)
    keep = np.arange(7)
    part = {n: q.toarray()[np.ix_(keep, keep)] for n, q in charges.items()}
    direction, targets = outside_by(rng, part, 1e-9)
    proof = claim(direction).prove(family.restrict(keep), targets)
    assert proof == claim(direction).prove(Matrices(part), targets)
    assert holds_exactly(part, direction, targets, proof.margin)


def test_computed_charges_have_no_proof(rng):
    charges = sparse_model(rng)
    family = Matrices(charges)
    isometry = np.linalg.qr(rng.standard_normal((11, 4)))[0]
    leaves, structure = jax.tree_util.tree_flatten(family)
    others = [
        family.combine(np.eye(2), np.zeros(2)),
        family.restrict(isometry),
        family.restrict(isometry).restrict([0, 1]),
        jax.tree_util.tree_unflatten(structure, [2 * np.asarray(x) for x in leaves]),
    ]
    for other in others:
        proof = claim({"a": 1.0, "b": 0.0}).prove(other, {"a": -9.0, "b": 0.0})
        assert proof.status == NO_METHOD and not proof and np.isnan(proof.margin)


def test_a_prior_does_not_change_the_claim(rng):
    charges = random_charges(rng, 4, is_complex=True)
    direction, targets = outside_by(rng, charges, 1e-3)
    plain = claim(direction).prove(Matrices(charges), targets)
    weighted = claim(direction).prove(Matrices(charges, log_prior=np.diag(rng.standard_normal(4))), targets)
    assert weighted.margin == plain.margin


class Ladder:
    """Energies 0, 1, 2, ..."""

    names, start = ("energy",), (1.0,)

    def states(self, first, stop):
        return np.arange(first, stop, dtype=float)[None], None

    def log_tail(self, lam, first, moment):
        return ratio_tail(-lam[0] * first + moment * np.log(first), -lam[0] + moment * np.log1p(1 / first))

    def lowest(self, v, first):
        return v[0] * first if v[0] >= 0 else -np.inf

    def domain(self):
        return None


def test_other_families():
    family = Microstates.from_rule(Ladder())
    proof = claim({"energy": 1.0}).prove(family, {"energy": -1.0})
    assert proof.status == NO_METHOD and "GrownMicrostates" in proof.detail


# ---------------------------------------------------------------- what is not proved


def test_tampering(rng):
    charges = random_charges(rng, 5, is_complex=True)
    family = Matrices(charges)
    _, targets = outside_by(rng, charges, 1e-3)
    certificate = maxent.solve(family, targets).certificate
    good = certificate.prove(family, targets)
    assert good
    inside = {n: float(np.real(np.trace(q))) / 5 for n, q in charges.items()}
    assert not certificate.prove(family, inside)
    turned = replace(certificate, direction={n: -x for n, x in certificate.direction.items()})
    assert not turned.prove(family, targets)
    assert not replace(certificate, direction={"a": 0.0, "b": 0.0, "c": 0.0}).prove(family, targets)
    assert not replace(certificate, direction={"a": np.nan}).prove(family, targets)
    assert not replace(certificate, direction={"a": np.inf}).prove(family, targets)
    boast = replace(certificate, margin=1e3)
    assert boast.prove(family, targets).margin == good.margin
    wrong = Matrices({n: q + 0.01 * np.eye(5) * (n == "a") for n, q in charges.items()})
    shifted = certificate.prove(wrong, targets)
    assert shifted.margin == pytest.approx(good.margin + 0.01 * certificate.direction["a"], abs=1e-12)
    with pytest.raises(ValueError, match="'d' is for no charge"):
        certificate.prove(family, {**targets, "d": 1.0})


def test_a_boundary_is_an_equality():
    family = Matrices({"x": X, "z": Z})
    result = maxent.solve(family, {"x": 0.0, "z": 1.0})
    assert str(result.verdict) == "boundary"
    proof = result.prove(family)
    assert proof.status == NOT_PROVABLE and "equality" in proof.detail and abs(proof.margin) < 1e-14


def test_stated_accuracy_counts():
    family = Microstates({"n": [0, 1]})
    for accuracy, provable in ((0.0, True), (0.5, True), (0.75, False), (0.9, False)):
        proof = claim({"n": -1.0}, accuracy={"n": accuracy}).prove(family, {"n": 1.75})
        assert bool(proof) is provable and proof.exact == "3/4"
        assert ("accuracy" in proof.detail) is (accuracy > 0)


def test_what_the_targets_leave_open_counts():
    family, v = Microstates({"n": [0, 1, 1], "k": [0, 2, 1]}), {"n": -1.0, "k": 0.0}
    prove = lambda target: claim(v).prove(family, {"n": target, "k": 1.0})
    assert prove(Within(1.75, 0.5)).exact == "1/4" and prove(Within(1.75, 0.5))
    assert prove(Within(1.75, 0.75)).exact == "0" and not prove(Within(1.75, 0.75))
    assert prove(AtLeast(1.75)).exact == "3/4" and prove(AtLeast(1.75))
    for unlimited in (AtMost(1.75), Measured(1.75, 0.1)):
        assert prove(unlimited).status == NOT_PROVABLE and prove(unlimited).margin == -np.inf
    result = maxent.solve(family, {"n": AtLeast(1.75), "k": AtMost(2.0)})
    assert str(result.verdict) == "infeasible"
    assert result.prove(family, {"n": AtLeast(1.75), "k": AtMost(2.0)})
    assert not result.prove(family, {"n": AtLeast(0.75), "k": AtMost(2.0)})
    with pytest.raises(ValueError, match="target 'n' leaves something open"):
        result.prove(family)


def test_numbers_at_the_ends_of_the_range():
    """Charges of 1e-300 and 1e150 are scaled by a power of two; what would overflow is not proved."""
    for size in (1e-300, 1.0, 1e150):
        family = Matrices({"x": size * X, "z": size * Z})
        direction, targets = {"x": -0.6, "z": -0.8}, {"x": 0.72 * size, "z": 0.96 * size}
        proof = claim(direction).prove(family, targets)
        assert proof and proof.margin == pytest.approx(0.2 * size, rel=1e-12)
    mixed = Microstates({"small": [0.0, 1e-300], "large": [1e300, 2e300]})
    proof = claim({"small": 1e-300, "large": 1.0}).prove(mixed, {"small": 0.0, "large": 0.0})
    assert proof.status == NOT_PROVABLE and "overflow" in proof.detail

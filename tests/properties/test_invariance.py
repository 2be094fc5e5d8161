"""Laws that hold for every problem: convexity, and indifference to units, order and mixing of the charges."""

from __future__ import annotations

import numpy as np
from hypothesis import assume, given, settings
from hypothesis import strategies as st

import maxent
from maxent.families import Matrices, Microstates

seeds = st.integers(0, 2**32 - 1)
few = settings(max_examples=25)


def hermitian(rng, d, *, is_complex):
    a = rng.standard_normal((d, d)) + (1j * rng.standard_normal((d, d)) if is_complex else 0)
    return 0.5 * (a + a.conj().T)


@st.composite
def problems(draw, m=3):
    """Charges as a stack (listed or matrices), and targets: well inside, outside, or on the boundary."""
    rng = np.random.default_rng(draw(seeds))
    kind = draw(st.sampled_from(["listed", "real", "complex"]))
    d = draw(st.integers(4, 7))
    if kind == "listed":
        stack = np.array([np.diag(rng.standard_normal(d)) for _ in range(m)])
    else:
        stack = np.array([hermitian(rng, d, is_complex=kind == "complex") for _ in range(m)])
    where = draw(st.sampled_from(["inside", "outside", "boundary"]))
    v = rng.standard_normal(m)
    v /= np.linalg.norm(v)
    u = np.linalg.eigh(np.tensordot(v, stack, axes=1))[1][:, 0]
    corner = np.einsum("a,jab,b->j", u.conj(), stack, u).real
    mean = np.trace(stack, axis1=1, axis2=2).real / d
    if where == "inside":
        q = mean + draw(st.floats(0, 0.8)) * (corner - mean)
    else:
        q = corner - (draw(st.sampled_from([1e-6, 1e-2, 1.0])) * v if where == "outside" else 0)
    return kind, stack, q, where


def family_of(kind, stack, names):
    if kind == "listed":
        return Microstates({n: np.diag(q) for n, q in zip(names, stack, strict=True)})
    return Matrices(dict(zip(names, stack, strict=True)))


def answer(kind, stack, q, names="abc"):
    return maxent.solve(family_of(kind, stack, names), {n: float(x) for n, x in zip(names, q, strict=True)})


def density(result, kind):
    return np.diag(result.state.probabilities) if kind == "listed" else result.state.density()


EXPECTED = {"inside": "solved", "outside": "infeasible", "boundary": "boundary"}


def same(before, after, kind, where):
    """The verdict, and the state if there is one (limit states inherit the square root of rounding)."""
    assert str(before.verdict) == str(after.verdict) == EXPECTED[where]
    if where == "inside":
        np.testing.assert_allclose(density(after, kind), density(before, kind), atol=1e-10)
    if where == "boundary":
        np.testing.assert_allclose(density(after, kind), density(before, kind), atol=1e-5)


@few
@given(problems(), st.lists(st.floats(-8, 8), min_size=3, max_size=3), st.lists(st.booleans(), min_size=3, max_size=3))
def test_units_of_the_charges(problem, decades, flips):
    """Q_j -> c_j Q_j with any c_j, signs included: lam_j -> lam_j/c_j, the same verdict and state."""
    kind, stack, q, where = problem
    c = 10.0 ** np.array(decades) * np.where(flips, -1, 1)
    before, after = answer(kind, stack, q), answer(kind, c[:, None, None] * stack, c * q)
    same(before, after, kind, where)
    if where == "inside":
        lam = np.array(list(before.multipliers.values()))
        np.testing.assert_allclose(np.array(list(after.multipliers.values())) * c, lam, rtol=1e-8, atol=1e-9)


@few
@given(problems(), st.permutations(range(3)))
def test_order_of_the_charges(problem, order):
    kind, stack, q, where = problem
    order = list(order)
    before = answer(kind, stack, q)
    after = answer(kind, stack[order], q[order], [("a", "b", "c")[j] for j in order])
    same(before, after, kind, where)
    if where == "inside":
        for name in "abc":
            assert abs(after.multipliers[name] - before.multipliers[name]) < 1e-9 * (1 + abs(before.multipliers[name]))


@few
@given(problems(), seeds)
def test_mixing_the_charges(problem, seed):
    """Q' = A Q, q' = A q: the same verdict and state, and lam' = A^-T lam."""
    kind, stack, q, where = problem
    a = np.random.default_rng(seed).standard_normal((3, 3))
    assume(np.linalg.cond(a) < 100)
    mixed = np.einsum("ij,jab->iab", a, stack)
    mixed = 0.5 * (mixed + mixed.conj().transpose(0, 2, 1))
    before, after = answer(kind, stack, q), answer(kind, mixed, a @ q)
    same(before, after, kind, where)
    if where == "inside":
        lam = np.array(list(before.multipliers.values()))
        expected = np.linalg.solve(a.T, lam)
        np.testing.assert_allclose(list(after.multipliers.values()), expected, rtol=1e-8, atol=1e-8)


@few
@given(problems(), st.lists(st.floats(-100, 100), min_size=3, max_size=3))
def test_zero_points_of_the_charges(problem, shift):
    """Q_j -> Q_j + s_j: targets move along, multipliers and state stay, ln Z changes by -lam.s."""
    kind, stack, q, where = problem
    s = np.array(shift)
    moved = stack + s[:, None, None] * np.eye(stack.shape[1])
    before, after = answer(kind, stack, q), answer(kind, moved, q + s)
    same(before, after, kind, where)
    if where == "inside":
        lam = np.array(list(before.multipliers.values()))
        np.testing.assert_allclose(list(after.multipliers.values()), lam, rtol=1e-8, atol=1e-9)
        assert abs(after.log_partition - before.log_partition + lam @ s) < 1e-8 * (1 + np.abs(lam @ s))


@few
@given(problems(), seeds)
def test_change_of_basis(problem, seed):
    """U^H Q U: same multipliers; a permutation for listed states."""
    kind, stack, q, where = problem
    rng = np.random.default_rng(seed)
    d = stack.shape[1]
    if kind == "listed":
        u = np.eye(d)[rng.permutation(d)]
    else:
        u = np.linalg.eigh(hermitian(rng, d, is_complex=True))[1]
    turned = np.array([u.conj().T @ x @ u for x in stack])
    turned = 0.5 * (turned + turned.conj().transpose(0, 2, 1))
    before, after = answer(kind, stack, q), answer(kind, turned, q)
    assert str(before.verdict) == str(after.verdict) == EXPECTED[where]
    if where == "inside":
        np.testing.assert_allclose(
            list(after.multipliers.values()), list(before.multipliers.values()), rtol=1e-8, atol=1e-9
        )


@few
@given(problems(), seeds)
def test_dual_is_convex_along_lines(problem, seed):
    """F at the middle lies below the chord, and the slope at both ends bounds F in between."""
    kind, stack, q, _ = problem
    rng = np.random.default_rng(seed)
    family = family_of(kind, stack, "abc").combine(np.eye(3), q)
    a, b = rng.standard_normal((2, 3)) * 10.0 ** rng.uniform(-2, 2)
    fa, fb = family.evaluate(a), family.evaluate(b)
    tol = 1e-12 * (1 + abs(fa.log_partition) + abs(fb.log_partition) + fa.level + fb.level)
    for t in (0.1, 0.5, 0.9):
        middle = family.evaluate((1 - t) * a + t * b).log_partition
        assert middle <= (1 - t) * fa.log_partition + t * fb.log_partition + tol
        assert middle >= fa.log_partition - t * fa.values @ (b - a) - tol
        assert middle >= fb.log_partition + (1 - t) * fb.values @ (b - a) - tol


@few
@given(problems())
def test_the_state_has_the_largest_entropy(problem):
    """Any other state with the same values has less: moves along traceless directions orthogonal to the charges."""
    kind, stack, q, where = problem
    assume(where == "inside")
    result = answer(kind, stack, q)
    rho, d = density(result, kind), stack.shape[1]
    rng = np.random.default_rng(0)
    change = np.diag(rng.standard_normal(d)) if kind == "listed" else hermitian(rng, d, is_complex=kind == "complex")
    fixed = np.array([np.eye(d).ravel(), *(x.ravel() for x in stack)])
    overlap = np.linalg.lstsq(fixed.T, change.ravel(), rcond=None)[0]
    change = change - (fixed.T @ overlap).reshape(d, d)
    size = np.linalg.norm(change)
    assume(size > 1e-3)
    other = rho + change * (0.3 * np.linalg.eigvalsh(rho)[0] / size)
    p = np.linalg.eigvalsh(0.5 * (other + other.conj().T))
    assert abs(np.trace(stack[0] @ other).real - q[0]) < 1e-9 * (1 + abs(q[0]))
    assert -p @ np.log(p) < result.entropy + 1e-13


@few
@given(problems(), st.floats(0.05, 0.95))
def test_reachable_targets_are_a_convex_set(problem, t):
    """Between two solvable targets lies a solvable one, and outside certificates bound every one of them."""
    kind, stack, q, where = problem
    mean = np.trace(stack, axis1=1, axis2=2).real / stack.shape[1]
    result = answer(kind, stack, q)
    if where == "inside":
        assert str(answer(kind, stack, (1 - t) * mean + t * q).verdict) == "solved"
        return
    if where == "outside":
        v = np.array(list(result.certificate.direction.values()))
        # every state lies on the other side
        rng = np.random.default_rng(1)
        for _ in range(20):
            x = rng.standard_normal(stack.shape[1])
            x /= np.linalg.norm(x)
            values = (
                np.einsum("a,jab,b->j", x, stack, x).real if kind != "listed" else np.einsum("a,jaa->j", x**2, stack)
            )
            assert v @ values >= v @ q + result.certificate.margin - 1e-12

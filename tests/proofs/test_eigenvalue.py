"""Lower bounds of eigenvalues: never above the exact one, and close to it."""

from fractions import Fraction

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st

from maxent.diagnose.proofs.bounds import UNIT, above, below, gamma, matrix_norm, scaled
from maxent.diagnose.proofs.cholesky import ADVANCE, COMPUTED, lowest_eigenvalue
from maxent.diagnose.proofs.combine import combined_twice
from maxent.diagnose.proofs.remainder import remainder_norm
from maxent.families.twofold import two_product, two_sum
from tests.proofs.elimination import combination, is_positive_semidefinite, smallest_eigenvalue

NEVER = Fraction(-(10**9))  # asked so low that the bound in advance is good enough


def hermitian(rng, d, is_complex):
    a = rng.standard_normal((d, d)) + (1j * rng.standard_normal((d, d)) if is_complex else 0.0)
    return 0.5 * (a + a.conj().T)


def from_levels(rng, levels, is_complex):
    """A matrix that has these eigenvalues up to rounding."""
    u = np.linalg.qr(hermitian(rng, len(levels), is_complex))[0]
    a = (u * levels) @ u.conj().T
    return 0.5 * (a + a.conj().T)


@pytest.mark.parametrize("is_complex", [False, True])
@pytest.mark.parametrize("d", [1, 2, 3, 5])
@pytest.mark.parametrize("hard", [False, True])
def test_between_rounding_and_the_exact_eigenvalue(rng, d, is_complex, hard):
    for _ in range(4):
        charges, w = [hermitian(rng, d, is_complex) for _ in range(3)], rng.standard_normal(3)
        exact = combination(w, charges)
        asked = Fraction(float(smallest_eigenvalue(exact))) - Fraction(1, 10**13) if hard else NEVER
        bound, method = lowest_eigenvalue(w, charges, asked=asked)
        assert is_positive_semidefinite(exact, bound)
        room = 3e-15 * np.sqrt(d) if hard else 1e-14 * d**2
        assert not is_positive_semidefinite(exact, bound + Fraction(room * 8))
        assert hard or method == ADVANCE


@pytest.mark.parametrize("is_complex", [False, True])
def test_where_the_bound_in_advance_stops(rng, is_complex):
    # 30 states: the rounding analysis alone loses some 1e-14, the computed remainder some 1e-16
    levels = np.concatenate([[5e-15], rng.uniform(0.1, 1.0, 29)])
    charges, w = [from_levels(rng, levels, is_complex)], np.ones(1)
    in_advance, method = lowest_eigenvalue(w, charges, asked=NEVER)
    assert method == ADVANCE and in_advance < 0
    bound, method = lowest_eigenvalue(w, charges, asked=Fraction(0))
    assert method == COMPUTED and Fraction(4, 10**15) < bound
    assert bound <= Fraction(float(smallest_eigenvalue(combination(w, charges)))) + Fraction(1, 10**25)


def test_sparse_is_the_same_as_dense(rng):
    a = np.where(rng.uniform(size=(9, 9)) < 0.3, hermitian(rng, 9, True), 0.0)
    a = 0.5 * (a + a.conj().T)
    b = np.diag(rng.standard_normal(9))
    w = np.array([0.3, 1.1])
    dense = lowest_eigenvalue(w, [a, b], asked=NEVER)
    assert lowest_eigenvalue(w, [sp.csr_array(a), sp.csr_array(b)], asked=NEVER) == dense
    assert is_positive_semidefinite(combination(w, [a, b]), dense[0])


def test_a_block_that_lies_high_costs_one_decomposition(rng):
    low, high = from_levels(rng, np.arange(1.0, 6.0), False), from_levels(rng, np.arange(3.0, 8.0), False)
    enough = lowest_eigenvalue(np.ones(1), [low], asked=NEVER)[0]
    bound = lowest_eigenvalue(np.ones(1), [high], asked=NEVER, enough=enough)[0]
    assert enough <= bound < Fraction(2)
    assert is_positive_semidefinite(combination(np.ones(1), [high]), bound)


@settings(max_examples=120)
@given(st.data())
def test_never_above_the_exact_one(data):
    """Nearly degenerate, nearly cancelling and badly scaled matrices."""
    d = data.draw(st.integers(1, 5), "d")
    rng = np.random.default_rng(data.draw(st.integers(0, 2**32 - 1), "seed"))
    is_complex = data.draw(st.booleans(), "complex")
    base = data.draw(st.sampled_from([0.0, 1.0, 1e8, -3.0]), "base")
    noise = 10.0 ** data.draw(st.integers(-18, 0), "noise")
    grade = 10.0 ** np.linspace(0, data.draw(st.integers(-12, 0), "grade"), d)
    a = from_levels(rng, base + noise * rng.standard_normal(d), is_complex) * np.outer(grade, grade)
    a = 0.5 * (a + a.conj().T)
    if data.draw(st.booleans(), "cancel"):
        b = a * (1 + 2.0**-50) + noise * hermitian(rng, d, is_complex) * 2.0**-40
        charges, w = [a, 0.5 * (b + b.conj().T)], np.array([1.0, -1.0])
    else:
        charges, w = [a], np.array([data.draw(st.floats(0.1, 10.0), "w")])
    exact = combination(w, charges)
    for asked in (NEVER, Fraction(float(smallest_eigenvalue(exact))) - Fraction(1, 10**15)):
        found = lowest_eigenvalue(w, charges, asked=asked)
        if found is not None:
            assert is_positive_semidefinite(exact, found[0])


@pytest.mark.parametrize("is_complex", [False, True])
def test_the_remainder_of_any_factor(rng, is_complex):
    # nothing is assumed of the factor: a wrong one has a large remainder, known here in fractions
    charges, w, t = (
        [hermitian(rng, 4, is_complex) + 5 * np.eye(4), np.diag(np.arange(4.0))],
        np.array([0.7, -0.2]),
        0.125,
    )
    right = np.linalg.cholesky(0.7 * charges[0] - 0.2 * charges[1] - t * np.eye(4))
    spread = Fraction(100)
    for factor, least, most in ((right, 0.0, 1e-14), (right + 0.01 * hermitian(rng, 4, is_complex), 1e-3, 1.0)):
        product = factor @ factor.conj().T
        off = 0.7 * charges[0] - 0.2 * charges[1] - t * np.eye(4) - product
        bound = remainder_norm(w, charges, t, factor, spread)
        assert (
            max(least, np.linalg.norm(off, 2) - 1e-14) <= bound <= max(most * 1e-3, 4 * np.linalg.norm(off, 2)) + most
        )


def test_the_remainder_is_exact_to_second_order():
    # L L^T = [[1, 2^-30], [2^-30, 1 + 2^-60]]: the last digit lies beyond float64
    factor = np.array([[1.0, 0.0], [2.0**-30, 1.0]])
    charges = [np.array([[1.0, 2.0**-30], [2.0**-30, 1.0]])]
    bound = remainder_norm(np.ones(1), charges, 0.0, factor, Fraction(2))
    assert Fraction(1, 2**60) <= bound <= Fraction(1, 2**60) + Fraction(1, 10**25)


def test_a_tiny_row_has_no_exact_products():
    assert remainder_norm(np.ones(1), [np.eye(2)], 0.0, np.diag([1.0, 1e-200]), Fraction(1)) is None


def test_transformations_without_error(rng):
    a, b = rng.standard_normal(200) * 10.0 ** rng.integers(-8, 8, 200), rng.standard_normal(200)
    for (high, low), exact in (
        (two_sum(a, b), [Fraction(x) + Fraction(y) for x, y in zip(a, b, strict=True)]),
        (two_product(0.1, b), [Fraction(0.1) * Fraction(y) for y in b]),
    ):
        assert [Fraction(x) + Fraction(y) for x, y in zip(high, low, strict=True)] == exact


def test_twofold_combination(rng):
    charges, w = [hermitian(rng, 3, True) for _ in range(4)], rng.standard_normal(4)
    exact = combination(w, charges)
    (real, real_low), (imag, imag_low) = combined_twice(w, charges)
    for i in range(3):
        for j in range(3):
            assert abs(Fraction(real[i, j]) + Fraction(real_low[i, j]) - exact[i][j]) < Fraction(1, 10**30)
            assert abs(Fraction(imag[i, j]) + Fraction(imag_low[i, j]) - exact[i + 3][j]) < Fraction(1, 10**30)


def test_norms_of_non_negative_matrices(rng):
    for d in (1, 2, 5, 40):
        a = np.abs(hermitian(rng, d, False)) * (rng.uniform(size=(d, d)) < 0.3)
        a = a + a.T
        bound = matrix_norm(a.__matmul__, d, d)
        largest = np.linalg.eigvalsh(a)[-1]
        assert largest * (1 - 1e-15) <= bound <= 1.5 * largest + 1e-300
    with pytest.raises(OverflowError):
        matrix_norm(np.array([[np.inf]]).__matmul__, 1, 1)


def test_directed_conversion():
    third = Fraction(1, 3)
    assert Fraction(below(third)) < third < Fraction(above(third))
    assert above(third) == np.nextafter(below(third), 1.0)
    assert below(Fraction(0.1)) == above(Fraction(0.1)) == 0.1
    assert below(Fraction(10) ** 400) == np.finfo(float).max and above(Fraction(10) ** 400) == np.inf
    assert below(Fraction(1, 10**400)) == 0.0 < above(Fraction(1, 10**400))
    assert gamma(3) > 3 * UNIT


def test_scaling_by_a_power_of_two():
    w, k = scaled(np.array([3.0, 0.5, 7.0]), np.array([1e200, 1e-3, 0.0]))
    assert np.array_equal(np.ldexp(w, k), [3.0, 0.5, 0.0]) and 0.1 < w[0] * 1e200 < 1.0
    assert scaled(np.array([1.0, 1e-300]), np.array([1e300, 1.0])) is None  # the small one would underflow
    assert scaled(np.array([np.nan]), np.ones(1)) is None
    assert scaled(np.zeros(2), np.ones(2))[1] == 0

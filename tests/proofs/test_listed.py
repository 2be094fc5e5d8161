"""The minimum over listed states, in rationals."""

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from maxent.diagnose.proofs.listed import lowest_listed
from tests.proofs.elimination import dot

numbers = st.floats(-1e3, 1e3) | st.sampled_from([0.1, 0.3, 1e-300, -1e-17, 5e-324, 1.0, 1 + 2.0**-52])


@given(hnp.arrays(float, (3, 7), elements=numbers), hnp.arrays(float, 3, elements=numbers))
def test_is_the_minimum(listed, w):
    truth = min(dot(w, column) for column in listed.T)
    assert lowest_listed(w, listed) == (truth, True)
    bound, exact = lowest_listed(w, listed, most=0)
    assert not exact and bound <= truth
    assert truth - bound <= Fraction(1e-13 * float(np.abs(w).max() * np.abs(listed).max()) + 1e-290)


def test_states_that_differ_behind_the_last_digit():
    # 0.1 + 0.2 - 0.3 in rationals is 2^-55 times something, not the 5.6e-17 of float64, and not 0
    listed = np.array([[0.1, 0.1], [0.2, 0.2], [0.3, np.nextafter(0.3, 0)]])
    w = np.array([1.0, 1.0, -1.0])
    assert lowest_listed(w, listed)[0] == Fraction(0.1) + Fraction(0.2) - Fraction(0.3) != 0


def test_many_equal_states_are_one():
    listed = np.tile([[1.0], [2.0]], (1, 200_000))
    assert lowest_listed(np.array([2.0, -1.0]), listed) == (Fraction(0), True)


def test_many_rivals_leave_the_bound_of_floats(rng):
    x = rng.standard_normal(100_000)
    bound, exact = lowest_listed(np.array([1.0, -1.0]), np.array([x, x]))
    assert not exact and Fraction(-1, 10**13) < bound <= 0


def test_nothing_and_too_much():
    assert lowest_listed(np.zeros(0), np.zeros((0, 4))) == (Fraction(0), True)
    with pytest.raises(OverflowError):
        lowest_listed(np.array([1e10]), np.array([[1e300, 1.0]]))

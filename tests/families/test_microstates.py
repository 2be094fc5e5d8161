"""Listed states: every bad input with its message, weights and priors, the closed form of the die."""

from __future__ import annotations

import numpy as np
import pytest

import maxent
from maxent.families import Microstates

nan, inf = float("nan"), float("inf")


@pytest.mark.parametrize(
    ("charges", "kwargs", "error", "message"),
    [
        ([1, 2], {}, TypeError, "Microstates takes a dict name -> charge, not list"),
        ({3: [1, 2]}, {}, TypeError, "name of a charge must be non-empty text, not 3"),
        ({"": [1, 2]}, {}, TypeError, "name of a charge must be non-empty text, not ''"),
        ({}, {}, ValueError, "no charges given: Microstates needs at least one charge, or log_weights"),
        ({"a": []}, {}, ValueError, "no states given: the charges are empty"),
        ({"a": [1, 2], "b": [1, 2, 3]}, {}, ValueError, "different numbers of states: 'a' has 2, 'b' has 3"),
        ({"a": [1, 2]}, {"log_weights": [0, 0, 0]}, ValueError, "'a' has 2, log_weights has 3"),
        ({"a": [1, 2]}, {"log_prior": [0.0]}, ValueError, "'a' has 2, log_prior has 1"),
        ({"a": [1, nan]}, {}, ValueError, "charge 'a' is nan in state 1; it must be finite"),
        ({"b": [-inf, 1]}, {}, ValueError, "charge 'b' is -inf in state 0; it must be finite"),
        ({"a": [1, 2j]}, {}, TypeError, "charge 'a' must be real, not complex"),
        ({"a": ["x", "y"]}, {}, TypeError, "charge 'a' must be numbers, not <U1"),
        ({"a": [1, None]}, {}, TypeError, "charge 'a' must be numbers, not object"),
        ({"a": [[1, 2], [3, 4]]}, {}, ValueError, r"charge 'a' must be a list of n values, .* shape \(2, 2\)"),
        ({"a": 3.0}, {}, ValueError, r"charge 'a' must be a list of n values, .* shape \(\)"),
        (
            {"a": [1, 2]},
            {"log_weights": [nan, 0]},
            ValueError,
            "log_weights is nan in state 0; it must be finite or -inf",
        ),
        ({"a": [1, 2]}, {"log_weights": [0, inf]}, ValueError, "log_weights is inf in state 1"),
        ({"a": [1, 2]}, {"log_weights": [-inf, -inf]}, ValueError, "no state left: every weight is zero"),
        ({"a": [1, 2]}, {"log_weights": [-inf, 0], "log_prior": [0, -inf]}, ValueError, "no state left"),
        ({"a": [1, 2]}, {"log_prior": [0, 1j]}, TypeError, "log_prior must be real"),
        ({"a": [1, 2]}, {"log_prior": [[0, 0]]}, ValueError, r"log_prior must be a list .* shape \(1, 2\)"),
    ],
)
def test_bad_input(charges, kwargs, error, message):
    with pytest.raises(error, match=message):
        Microstates(charges, **kwargs)


def test_complex_without_imaginary_part_bool_and_integers_are_numbers():
    family = Microstates({"a": np.array([1 + 0j, 2]), "b": [True, False], "c": [1, 2]})
    np.testing.assert_array_equal(family.blocks.diagonal, [[1, 2], [1, 0], [1, 2]])


@pytest.mark.parametrize(
    ("part", "error", "message"),
    [
        ([0, 0], ValueError, "indices must not repeat"),
        ([0, 6], ValueError, r"indices must lie in 0\.\.5"),
        ([-1], ValueError, r"indices must lie in 0\.\.5"),
        ([0.5], TypeError, "indices must be a list of integers or a mask"),
        ([[0, 1]], TypeError, "indices must be a list of integers or a mask"),
        ([True, False], ValueError, r"a mask must have shape \(6,\), not \(2,\)"),
        (np.zeros(6, bool), ValueError, "no state left after the restriction"),
        (np.zeros(0, int), ValueError, "no state left after the restriction"),
    ],
)
def test_bad_restrictions(part, error, message):
    with pytest.raises(error, match=message):
        Microstates({"pips": np.arange(6)}).restrict(part)


def test_restriction_to_removed_states_only():
    family = Microstates({"a": [1, 2, 3]}, log_weights=[0, -inf, 0])
    with pytest.raises(ValueError, match="no state left after the restriction"):
        family.restrict([1])
    assert family.restrict([1, 2]).size == 1


@pytest.mark.parametrize(
    ("operator", "error", "message"),
    [
        ([1, 2], ValueError, "the operator lists 2 states, the family 6"),
        ([nan] * 6, ValueError, "operator is nan in state 0"),
        ([1j] * 6, TypeError, "operator must be real"),
        (np.eye(6), ValueError, "operator must be a list of n values"),
    ],
)
def test_bad_operators(operator, error, message):
    with pytest.raises(error, match=message):
        Microstates({"pips": np.arange(6)}).state(np.zeros(1)).mean(operator)


def test_no_tensor_structure():
    with pytest.raises(ValueError, match="listed states have no tensor structure to reduce; use Matrices with dims"):
        Microstates({"pips": np.arange(6)}).state(np.zeros(1)).reduced([0])


def test_weights_are_degeneracies():
    """Three equal states or one of weight three: the same in every number, entropy included."""
    many = maxent.solve(Microstates({"e": [0, 1, 1, 1]}), {"e": 0.6})
    one = maxent.solve(Microstates({"e": [0, 1]}, log_weights=np.log([1, 3])), {"e": 0.6})
    for name in ("log_partition", "entropy"):
        assert getattr(one, name) == pytest.approx(getattr(many, name), abs=1e-13)
    assert one.multipliers["e"] == pytest.approx(many.multipliers["e"], abs=1e-13)
    assert many.entropy == pytest.approx(one.log_partition + one.multipliers["e"] * 0.6, abs=1e-13)


def test_prior_does_not_count_in_the_entropy():
    prior = np.log([0.2, 0.3, 0.5])
    result = maxent.solve(Microstates({"e": [0, 1, 2]}, log_prior=prior), {"e": 1.3})
    # the prior has mean 1.3 already
    assert result.multipliers["e"] == pytest.approx(0, abs=1e-13)
    assert result.relative_entropy == pytest.approx(0, abs=1e-14)
    assert result.entropy == pytest.approx(-np.exp(prior) @ prior, abs=1e-13)
    shifted = maxent.solve(Microstates({"e": [0, 1, 2]}, log_prior=prior + 500), {"e": 0.7})
    plain = maxent.solve(Microstates({"e": [0, 1, 2]}, log_prior=prior), {"e": 0.7})
    p = shifted.state.probabilities
    assert shifted.relative_entropy == pytest.approx(p @ (np.log(p) - prior), abs=1e-12)
    assert shifted.relative_entropy == pytest.approx(plain.relative_entropy, abs=1e-12)
    assert shifted.log_partition == pytest.approx(plain.log_partition + 500, abs=1e-9)


def test_weights_and_prior_together():
    """Degeneracy 2 with prior weight 3 on the second state: weight 6, entropy per state."""
    both = Microstates({"e": [0, 1]}, log_weights=np.log([1, 2]), log_prior=np.log([1, 3]))
    state = both.state(np.zeros(1))
    np.testing.assert_allclose(state.probabilities, [1 / 7, 6 / 7])
    assert state.entropy == pytest.approx(-(1 / 7) * np.log(1 / 7) - (6 / 7) * np.log(3 / 7))


def test_weights_do_not_move_the_reachable_set():
    """Reach is decided by states, not by how much they weigh, down to e^-600."""
    for weight in (0.0, -600.0):
        family = Microstates({"e": [0, 1, 2]}, log_weights=[0, 0, weight])
        assert maxent.solve(family, {"e": 2 + 1e-9}).verdict is maxent.Verdict.INFEASIBLE
        assert maxent.solve(family, {"e": 2.0}).verdict is maxent.Verdict.BOUNDARY
        assert maxent.solve(family, {"e": 1.9}).verdict is maxent.Verdict.SOLVED
    removed = Microstates({"e": [0, 1, 2]}, log_weights=[0, 0, -inf])
    assert maxent.solve(removed, {"e": 1.9}).verdict is maxent.Verdict.INFEASIBLE


def test_inputs_are_not_kept_or_changed(rng):
    x = rng.standard_normal(8)
    before = x.copy()
    family = Microstates({"x": x})
    x[:] = 0
    np.testing.assert_array_equal(family.blocks.diagonal[0], before)


def test_sizes_names_and_frozen():
    family = Microstates({"b": [1, 2], "a": [0, 1]})
    assert family.names == ("b", "a") and family.size == 2
    with pytest.raises(AttributeError):
        family.names = ("x",)

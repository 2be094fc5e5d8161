"""Bad input for relaxed targets: one line that names the charge, before any work."""

import numpy as np
import pytest

import maxent
from maxent import AtLeast, AtMost, Measured, Within
from maxent.families import Microstates

BAD = [
    (Within(3.0, 0.0), ValueError, "tolerance of target 'pips' is 0.0; it must be positive; for none give the number"),
    (Within(3.0, -0.1), ValueError, "tolerance of target 'pips' is -0.1; it must be positive"),
    (Within(3.0, float("nan")), ValueError, "tolerance of target 'pips' is nan; it must be finite"),
    (Within(3.0, float("inf")), ValueError, "tolerance of target 'pips' is inf; it must be finite"),
    (Within(3.0, "0.1"), TypeError, "tolerance of target 'pips' must be a number, not str"),
    (Within(float("nan"), 0.1), ValueError, "target 'pips' is nan; it must be finite"),
    (Within(3.0, np.array([0.1, 0.2])), TypeError, "tolerance of target 'pips' must be one number"),
    (Measured(3.0, 0.0), ValueError, "sigma of target 'pips' is 0.0; it must be positive"),
    (Measured(3.0, -1.0), ValueError, "sigma of target 'pips' is -1.0; it must be positive"),
    (Measured(3.0, float("nan")), ValueError, "sigma of target 'pips' is nan"),
    (Measured(float("inf"), 0.1), ValueError, "target 'pips' is inf; it must be finite"),
    (Measured(3.0, 1j), TypeError, "sigma of target 'pips' must be real"),
    (Measured(3.0, True), TypeError, "sigma of target 'pips' must be a number, not bool"),
    (AtMost(float("inf")), ValueError, "target 'pips' is inf; it must be finite"),
    (AtLeast(float("-inf")), ValueError, "target 'pips' is -inf; it must be finite"),
    (AtMost("3"), TypeError, "target 'pips' must be a number, not str"),
    (AtMost(None), TypeError, "target 'pips' must be a number, not NoneType"),
    (AtLeast(Within(3.0, 0.1)), TypeError, "target 'pips' must be a number, not Within"),
    ((3.0, 0.1), TypeError, "target 'pips' must be a number, not tuple"),
]


@pytest.mark.parametrize(("target", "error", "text"), BAD, ids=[repr(t) for t, _, _ in BAD])
def test_bad_targets(target, error, text):
    with pytest.raises(error) as caught:
        maxent.solve(Microstates({"pips": np.arange(1, 7)}), {"pips": target})
    assert text in str(caught.value)
    assert "\n" not in str(caught.value)


def test_numbers_may_be_arrays_without_dimension():
    family = Microstates({"pips": np.arange(1, 7)})
    plain = maxent.solve(family, {"pips": Within(4.5, 0.2)})
    arrays = maxent.solve(family, {"pips": Within(np.float32(4.5), np.array(0.2))})
    assert arrays.multipliers == plain.multipliers

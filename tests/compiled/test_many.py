"""Many targets by one call: what must never pass as a fit."""

import jax
import numpy as np

import maxent
from maxent import compiled
from maxent.families import Microstates


def test_peaked_weights_never_pass_as_a_fit():
    # at multiplier zero one state has all the weight: no charge spreads there, though the targets ask for spread
    rng = np.random.default_rng(7)
    charges = rng.normal(size=(2, 60))
    weights = np.zeros(60)
    weights[3] = 400.0
    family = Microstates({"a": charges[0], "b": charges[1]}, log_weights=weights)
    targets = rng.dirichlet(np.ones(60), size=8) @ charges.T
    with jax.enable_x64(True):
        found = compiled.solve_many(family, {"a": targets[:, 0], "b": targets[:, 1]})
        alone = [compiled.solve(family, {"a": a, "b": b}) for a, b in targets]
    for k in range(8):
        for fit, at in ((found, k), (alone[k], ())):
            if fit.converged[at]:
                lam = [float(fit.multipliers[n][at]) for n in "ab"]
                np.testing.assert_allclose(family.evaluate(np.array(lam), 1).values, targets[k], atol=1e-9)
    assert all(str(maxent.solve(family, {"a": a, "b": b}).verdict) == "solved" for a, b in targets)

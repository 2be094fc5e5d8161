"""Many targets by one call, and many multipliers without Hessians: `python -m benchmarks.many [--write]`.

(a) 1000 sets of targets, 4 charges, 4096 listed states: `maxent.compiled.solve_many` against a loop of SciPy's BFGS
and a loop of a hand-written NumPy Newton; compilation apart.  (b) 2000 multipliers, 20 000 states: the limited-memory
route of the JAX driver against SciPy's L-BFGS-B, to a residual of 1e-8.
"""

from __future__ import annotations

import os
import time
from typing import Any

import numpy as np
from scipy.optimize import minimize

from benchmarks import measure


def dual(charges: np.ndarray, q: np.ndarray) -> Any:
    """Dual function and gradient as a practitioner writes them."""

    def value_and_slope(lam: np.ndarray) -> tuple[float, np.ndarray]:
        e = -(lam @ charges)
        top = e.max()
        p = np.exp(e - top)
        z = p.sum()
        return top + np.log(z) + lam @ q, q - charges @ (p / z)

    return value_and_slope


def newton(charges: np.ndarray, q: np.ndarray) -> np.ndarray:
    """Newton's method by hand, to 1e-11."""
    lam = np.zeros(len(q))
    for _ in range(50):
        e = -(lam @ charges)
        p = np.exp(e - e.max())
        p /= p.sum()
        mean = charges @ p
        if np.abs(q - mean).max() < 1e-11:
            break
        centred = charges - mean[:, None]
        lam -= np.linalg.solve((centred * p) @ centred.T, q - mean)
    return lam


def many_targets(count: int = 1000, part: int = 50) -> list[tuple[str, ...]]:
    """Rows of the table: microseconds per fit and ratios."""
    import jax

    from maxent import compiled
    from maxent.families import Microstates

    rng = np.random.default_rng(0)
    charges = rng.normal(size=(4, 4096))
    lam = rng.normal(size=(count, 4)) * 0.5
    family = Microstates(dict(zip("abcd", charges, strict=True)))
    q = np.array([family.evaluate(x, 1).values for x in lam])
    columns = dict(zip("abcd", q.T, strict=True))
    with jax.enable_x64(True):
        start = time.process_time()
        jax.block_until_ready(compiled.solve_many(family, columns))
        first = time.process_time() - start
        spent = measure.interleaved(
            {
                "one call": lambda: jax.block_until_ready(compiled.solve_many(family, columns)),
                "BFGS": lambda: [
                    minimize(dual(charges, x), np.zeros(4), jac=True, method="BFGS", options={"gtol": 1e-10})
                    for x in q[:part]
                ],
                "Newton": lambda: [newton(charges, x) for x in q[:part]],
            },
            7,
        )
        found = compiled.solve_many(family, columns)
    ours, bfgs, by_hand = spent["one call"] / count, spent["BFGS"] / part, spent["Newton"] / part
    worst = max(float(np.abs(np.asarray(found.multipliers[n]) - lam[:, j]).max()) for j, n in enumerate("abcd"))
    micro = lambda s: f"{1e6 * s:.0f} us"
    times, ratios = (micro(ours), micro(bfgs), micro(by_hand)), (f"{bfgs / ours:.1f}", f"{by_hand / ours:.1f}")
    return [(*times, *ratios, f"{first:.1f} s", f"{worst:.0e}")]


def many_multipliers(m: int = 2000, n: int = 20_000) -> list[tuple[str, ...]]:
    """Row of the table: seconds of the minimisation alone, and of the whole solve with its verdict."""
    import maxent
    from maxent.core.contract import Problem
    from maxent.core.limited import minimise_limited
    from maxent.core.whiten import whiten
    from maxent.families import Microstates

    rng = np.random.default_rng(0)
    charges = rng.normal(size=(m, n))
    lam = rng.normal(size=m) * 0.02
    e = -(lam @ charges)
    p = np.exp(e - e.max())
    q = charges @ (p / p.sum())
    family = Microstates({f"c{j}": row for j, row in enumerate(charges)})
    problem = Problem.pose(family, q)
    whitening = whiten(problem)
    white = problem.family.combine(whitening.transform, np.zeros(m)).traced()
    minimise_limited(white, np.zeros(m))  # compile
    tasks = {
        "route": lambda: minimise_limited(white, np.zeros(m)),
        "scipy": lambda: minimize(
            dual(charges, q), np.zeros(m), jac=True, method="L-BFGS-B",
            options={"gtol": 1e-8, "ftol": 0.0, "maxiter": 5000, "maxfun": 20_000},
        ),
    }  # fmt: skip
    spent = measure.interleaved(tasks, 3)
    x, steps = minimise_limited(white, np.zeros(m))
    off = float(np.abs(whitening.values(white.evaluate(x, 1).values)).max())
    start = time.process_time()
    result = maxent.solve(family, dict(zip(family.names, q, strict=True)), driver="jax")
    whole = time.process_time() - start
    row = (
        f"{spent['route']:.2f} s", f"{spent['scipy']:.2f} s", f"{spent['scipy'] / spent['route']:.2f}", str(steps),
        f"{off:.0e}", f"{whole:.1f} s", f"{result.verdict}, {result.evidence}",
    )  # fmt: skip
    return [row]


def main() -> None:
    """Measure and report."""
    measure.clean_environment("benchmarks.many")
    os.sched_setaffinity(0, {max(os.sched_getaffinity(0))})  # on one core, all of them
    head = ["one call, per fit", "BFGS", "Newton by hand", "to BFGS", "to Newton", "first call", "worst error"]
    first = measure.table(head, many_targets())
    head = ["minimisation", "SciPy L-BFGS-B", "SciPy/ours", "steps", "residual", "whole solve", "verdict"]
    second = measure.table(head, many_multipliers())
    text = (
        "1000 sets of targets for 4 charges on 4096 listed states by one call of `maxent.compiled.solve_many`, "
        'against loops of `scipy.optimize.minimize(method="BFGS")` and of a Newton iteration written by hand in '
        f"NumPy (goals: 50 and 15 times).\n\n{first}\n\n2000 multipliers on 20 000 states: the limited-memory "
        "route of the JAX driver alone, to its rounding floor, against SciPy's L-BFGS-B to 1e-8; and the whole solve, "
        f"which also whitens 2000 charges and forms their covariance for the verdict.\n\n{second}\n"
    )
    measure.report("benchmarks.many", "Many targets, many multipliers", text)


if __name__ == "__main__":
    main()

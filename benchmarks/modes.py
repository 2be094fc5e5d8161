"""A million independent levels: whole fits against a script that hands the dual to a general minimiser.

The script is what one writes by hand: the dual and its gradient in NumPy, minimised by SciPy's L-BFGS-B from zero; for
bosons the dual is infinite outside its domain.  It proves nothing and scales nothing.  Evaluations of ours are counted
(one pass over all charges, with covariance); everything else a fit does is in its time.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.optimize import minimize

import maxent
from benchmarks.measure import clean_environment, interleaved, report, seconds, table
from maxent.families import Modes

LEVELS, GOAL = 1_000_000, 40


def dual(charges: np.ndarray, statistics: str, targets: np.ndarray):
    """The dual and its gradient, as a script."""

    def value(lam: np.ndarray) -> tuple[float, np.ndarray]:
        w = lam @ charges
        if statistics == "fermions":
            return np.logaddexp(0, -w).sum() + lam @ targets, targets - charges @ (1 / (np.exp(w) + 1))
        if statistics == "bosons":
            if w.min() <= 0:
                return np.inf, np.zeros(len(lam))
            return -np.log1p(-np.exp(-w)).sum() + lam @ targets, targets - charges @ (1 / np.expm1(w))
        return np.exp(-w).sum() + lam @ targets, targets - charges @ np.exp(-w)

    return value


def evaluations(task: Callable[[], object]) -> int:
    """How many evaluations `task` asks for."""
    evaluate, calls = Modes.evaluate, []

    def counted(*args, **more):
        calls.append(1)
        return evaluate(*args, **more)

    Modes.evaluate = counted  # type: ignore[method-assign]
    try:
        task()
    finally:
        Modes.evaluate = evaluate  # type: ignore[method-assign]
    return len(calls)


def main() -> None:
    """Run, print, and write when asked."""
    clean_environment("benchmarks.modes")
    rng = np.random.default_rng(0)
    e = np.sort(rng.uniform(0, 1, LEVELS))
    rows = np.vstack([np.ones(LEVELS), e, np.cos(2 * np.pi * np.arange(LEVELS) / LEVELS), e**2])
    names = ("number", "energy", "current", "square")
    out = []
    for statistics, lam in (
        ("fermions", np.array([-1.0, 2.0, 0.3, 0.5])), ("bosons", np.array([0.5, 2.0, 0.3, 0.5])),
        ("distinguishable", np.array([-1.0, 2.0, 0.3, 0.5])),
    ):  # fmt: skip
        family = Modes(dict(zip(names, rows, strict=True)), statistics)
        targets = family.evaluate(lam).values
        start = np.zeros(4) if statistics == "fermions" else family.combine(np.eye(4), targets).start()
        kept: dict[str, object] = {}

        def ours(family=family, targets=targets, kept=kept):
            kept["ours"] = maxent.solve(family, dict(zip(names, targets, strict=True)))

        def script(statistics=statistics, targets=targets, start=start, kept=kept):
            kept["script"] = minimize(dual(rows, statistics, targets), start, jac=True, method="L-BFGS-B")

        def one(family=family, lam=lam):
            family.evaluate(lam)

        spent = interleaved({"ours": ours, "script": script, "one": one}, 3)
        count = evaluations(ours)
        result, theirs = kept["ours"], kept["script"]
        off = max(abs(result.residuals[n]) / abs(q) for n, q in zip(names, targets, strict=True))  # type: ignore[attr-defined]
        miss = np.max(np.abs(dual(rows, statistics, targets)(theirs.x)[1] / targets))  # type: ignore[attr-defined]
        out.append([
            statistics, f"{result.verdict}, {result.evidence}", result.iterations, count, seconds(spent["one"]),  # type: ignore[attr-defined]
            seconds(spent["ours"]), f"{spent['ours'] / spent['one']:.0f}", f"<= {GOAL}", f"{off:.0e}",
            theirs.nfev, seconds(spent["script"]), f"{spent['ours'] / spent['script']:.2f}", f"{miss:.0e}",  # type: ignore[attr-defined]
        ])  # fmt: skip
    head = [
        "particles", "verdict", "iterations", "evaluations", "one evaluation", "whole fit", "in evaluations", "goal",
        "residual", "evaluations of the script", "script", "ours / script", "residual of the script",
    ]  # fmt: skip
    text = (
        f"{LEVELS:,} levels with four charges (invented). Whole fits, verdict and proof included, in units of one "
        "evaluation with covariance; residuals are relative to the targets.\n\n"
    )
    report("benchmarks.modes", "A million independent levels", text + table(head, out))


if __name__ == "__main__":
    main()

"""Run the corpus and print a table per kind: ``python -m tests.corpus --seed 3``.

``--count`` sets the number of problems per kind (otherwise that of the default run), ``--seeds`` the number
of seeds from ``--seed`` on, ``--kind`` picks the kinds whose name contains a text, ``--index`` a single
problem.  Exit code 1 if anything is wrong.
"""

from __future__ import annotations

import argparse
import sys
import time

import numpy as np

import maxent
from tests.corpus import judge
from tests.corpus.problem import Problem
from tests.corpus.problems import KINDS, make


def examine(problem: Problem) -> tuple[bool, list[str], float]:
    """Whether the verdict is right, all complaints, and the worst relative residual."""
    try:
        family = problem.build()
        result = maxent.solve(family, problem.targets)
        is_right = str(result.verdict) == problem.verdict
        worst = 0.0 if result.state is None else judge.worst_residual(problem, result.residuals)
        return is_right, judge.everything(problem, result, family), worst
    except Exception as error:  # a crash on one problem must not hide the others
        return False, [f"raised {error!r}"], 0.0


def main(arguments: list[str] | None = None) -> int:
    parser = argparse.ArgumentParser(prog="python -m tests.corpus", description=__doc__.split("\n")[0])
    parser.add_argument("--seed", type=int, default=0, help="first seed")
    parser.add_argument("--seeds", type=int, default=1, help="number of seeds")
    parser.add_argument("--count", type=int, default=None, help="problems per kind")
    parser.add_argument("--kind", default="", help="only kinds whose name contains this")
    parser.add_argument("--index", type=int, default=None, help="only this problem of each kind")
    options = parser.parse_args(arguments)

    n_all = n_wrong = n_other = 0
    clock = time.perf_counter()
    heads = ("right", "wrong", "other", "residual", "median ms", "max ms")
    print(f"{'kind':27s}" + "".join(f"{head:>10s}" for head in heads))
    for kind, (_, default) in KINDS.items():
        if options.kind not in kind:
            continue
        count = default if options.count is None else options.count
        picked = range(count) if options.index is None else [options.index]
        right = wrong = other = 0
        worst, times, remarks = 0.0, [], []
        for seed in range(options.seed, options.seed + options.seeds):
            for index in picked:
                problem = make(kind, seed, index)
                start = time.perf_counter()
                is_right, complaints, residual = examine(problem)
                times.append(1e3 * (time.perf_counter() - start))
                worst = max(worst, residual if is_right else 0.0)
                right, wrong = right + is_right, wrong + (not is_right)
                other += bool(is_right and complaints)
                remarks += [f"    {problem.identity}: {text}" for text in complaints]
        n_all, n_wrong, n_other = n_all + right + wrong, n_wrong + wrong, n_other + other
        row = f"{kind:27s}{right:10d}{wrong:10d}{other:10d}{worst:10.1e}"
        print(f"{row}{np.median(times):10.2f}{max(times):10.1f}")
        print("".join(f"{remark}\n" for remark in remarks), end="")
    seconds = time.perf_counter() - clock
    print(f"{n_all} problems, {n_wrong} wrong verdicts, {n_other} with other complaints, {seconds:.1f} s")
    return 1 if n_wrong or n_other else 0


if __name__ == "__main__":
    sys.exit(main())

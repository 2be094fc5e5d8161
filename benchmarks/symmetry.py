"""Momentum blocks against blocks from the pattern alone, on XXZ and mixed-field rings.

One evaluation is ln Z, values and covariance.  The charges of the XXZ ring commute, and `Matrices` would diagonalise
them once and be done; to compare evaluations alone the same blocks are also given to the evaluator as matrices, as they
would be if the charges did not commute.  The blocks from the pattern are magnetisation sectors.
"""

from __future__ import annotations

import resource
import statistics
import time
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np

from benchmarks.measure import clean_environment, report, seconds, table
from maxent.core.blocks import Blocks
from maxent.families import Matrices
from maxent.lattice import Ring, formula
from maxent.lattice.symmetries import adapted_basis, blocked, symmetry_basis, translation

BOND = "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 1.5*Sz[i]*Sz[i+1]"
NEXT = BOND.replace("[i+1]", "[i+2]").replace("[i]", "[i+1]")
TEXTS = {
    "XXZ": {"energy": BOND, "magnetisation": "Sz[i]", "energy_current": f"1j*commutator({BOND}, {NEXT})"},
    "mixed field": {"energy": "-Z[i]*Z[i+1] + 0.9*X[i] + 0.8*Z[i]", "transverse": "X[i]", "pairs": "Z[i]*Z[i+2]"},
}
#: Multipliers of the evaluation.
AT = np.array([0.3, 0.2, 0.1])
GOAL = 20


def spent(task: Callable[[], Any], repetitions: int = 1) -> tuple[float, Any]:
    """Median CPU seconds and the last answer."""
    times = []
    for _ in range(repetitions):
        start = time.process_time()
        answer = task()
        times.append(time.process_time() - start)
    return statistics.median(times), answer


def as_matrices(family: Matrices) -> Blocks:
    """The blocks of a family before anything was diagonalised."""
    diagonal, blocks = family.as_given()
    dense = [np.array([q.toarray() if hasattr(q, "toarray") else q for q in stack]) for stack in blocks]
    return Blocks(diagonal, tuple(dense))


def prepared(operators: Mapping, ring: Ring, *, real: bool) -> Matrices:
    """Search for symmetries, basis, charges in the basis, family."""
    basis = adapted_basis(operators, ring) if real else symmetry_basis([translation(ring)])
    return Matrices(blocked(operators, basis), basis=basis.matrix, dims=ring.dims)


def row(model: str, size: int, *, compare: bool, real: bool = True) -> list[str]:
    """Times of one ring."""
    ring = Ring(size)
    operators = {name: formula(text, ring) for name, text in TEXTS[model].items()}
    matrices = {name: q.matrix() for name, q in operators.items()}
    once, family = spent(lambda: prepared(operators, ring, real=real))
    blocks = as_matrices(family)
    ours, ours_at = spent(lambda: blocks.evaluate(AT), 3)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
    largest = f"{max(a.shape[1] for a in blocks.dense)}, {'real' if real else 'complex'}"
    cells = [model, str(size), largest, seconds(once), seconds(ours), f"{peak:.2f}"]
    if not compare:
        return [*cells, "–", "–", "–", "–", "–", "–"]
    pattern_once, plain = spent(lambda: Matrices(matrices))
    pattern = as_matrices(plain)
    theirs, theirs_at = spent(lambda: pattern.evaluate(AT), 3 if size <= 10 else 1)
    apart = max(np.abs(getattr(ours_at, x) - getattr(theirs_at, x)).max() for x in ("values", "covariance"))
    whole = (pattern_once + theirs) / (once + ours)
    goal = f">= {GOAL}" if size == 12 else ""
    largest = str(max(a.shape[1] for a in pattern.dense))
    return [*cells, largest, seconds(theirs), f"{theirs / ours:.0f}", goal, f"{whole:.1f}", f"{apart:.0e}"]


def main() -> None:
    """Run, print, and write when asked."""
    clean_environment("benchmarks.symmetry")
    rows = []
    # largest last: the peak of memory is that of the process so far
    for model, size, compare, real in (
        ("XXZ", 14, False, True),
        ("XXZ", 14, False, False),
        ("mixed field", 12, False, True),
        ("mixed field", 10, True, True),
        ("XXZ", 10, True, True),
        ("XXZ", 12, True, True),
        ("XXZ", 12, True, False),
    ):
        rows.append(row(model, size, compare=compare, real=real))
    head = [
        "ring", "sites", "largest block", "preparation", "one evaluation", "peak so far, GiB", "largest block, pattern",
        "one evaluation, pattern", "ratio", "goal", "ratio with preparation", "apart",
    ]  # fmt: skip
    text = (
        "Three charges each; one evaluation is ln Z, values and covariance at given multipliers, from blocks that stay "
        "matrices. Preparation is the search for symmetries, the basis, the charges written in it and the family "
        "(which, for the commuting charges of the XXZ ring, includes their diagonalisation: evaluations of that family "
        "take about a millisecond from then on). Blocks are momentum x magnetisation (XXZ) or momentum (mixed field), "
        "made real by reflection times complex conjugation, which is a symmetry; complex where the translation alone "
        "was used. Blocks from the pattern alone are magnetisation sectors (XXZ) or everything (mixed field).\n\n"
    )
    report("benchmarks.symmetry", "Symmetry: momentum blocks against the pattern alone", text + table(head, rows))


if __name__ == "__main__":
    main()

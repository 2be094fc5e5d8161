"""Commuting charges: a whole fit, from sparse matrices to the verdict, against one eigendecomposition of the blocks.

Energy, magnetisation and energy current of XXZ rings commute with one another.  The yardstick diagonalises one dense
combination per magnetisation sector with the faster of the two LAPACK routines for its size; finding the sectors and
copying them is not counted there.
"""

from __future__ import annotations

import numpy as np

import maxent
from benchmarks.measure import clean_environment, interleaved, report, seconds, table
from benchmarks.rings import TEXTS
from maxent.core.blocks import eigh
from maxent.families import Matrices
from maxent.lattice import ProductState, Ring, formula

GOAL = 1.5


def main() -> None:
    """Run, print, and write when asked."""
    clean_environment("benchmarks.commuting")
    rows = []
    for size, names, repetitions in (
        (10, ("energy", "magnetisation"), 9), (10, ("energy", "magnetisation", "energy_current"), 9),
        (12, ("energy", "magnetisation"), 3), (12, ("energy", "magnetisation", "energy_current"), 3),
    ):  # fmt: skip
        ring = Ring(size)
        operators = {n: formula(TEXTS[n], ring) for n in names}
        charges = {n: q.matrix() for n, q in operators.items()}
        start = ProductState(theta="pi/3", phi="2*pi*i/L", sites=ring)
        targets = {n: start.mean(q) for n, q in operators.items()}
        up = np.array([bin(x).count("1") for x in range(2**size)])
        total = sum(c * q for c, q in zip((1.0, 0.3, 0.7), charges.values(), strict=False)).tocsr()
        sectors = [total[up == k][:, up == k].toarray() for k in range(size + 1)]
        kept = {}

        def ours(charges=charges, targets=targets, kept=kept):
            kept["ours"] = maxent.solve(Matrices(charges), targets)

        def yardstick(sectors=sectors):
            for block in sectors:
                eigh(block.copy())

        ours()
        yardstick()
        spent = interleaved({"ours": ours, "yardstick": yardstick}, repetitions)
        ratio = spent["ours"] / spent["yardstick"]
        kind = "complex" if np.iscomplexobj(total) else "real"
        rows.append([
            size, ", ".join(names), kind, max(len(s) for s in sectors), str(kept["ours"].verdict),
            seconds(spent["ours"]), seconds(spent["yardstick"]), f"{ratio:.2f}", f"<= {GOAL}",
        ])  # fmt: skip
    head = ["sites", "charges", "blocks", "largest", "verdict", "whole fit", "one eigendecomposition", "ratio", "goal"]
    text = (
        "Construction of the family and solve, against one eigendecomposition of the same magnetisation sectors. A "
        "ratio below 1 is possible: commuting charges also fall into smaller blocks where a charge splits them.\n\n"
    )
    report("benchmarks.commuting", "Commuting charges against one eigendecomposition", text + table(head, rows))


if __name__ == "__main__":
    main()

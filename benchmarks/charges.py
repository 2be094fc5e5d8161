"""Search for local conserved operators: seconds by range, for an easy and for the worst kind of chain.

Mixed-field Ising chains have no symmetry but the translations, so that their equations fall into two blocks only.
"""

from __future__ import annotations

import time

from benchmarks.measure import clean_environment, report, seconds, table
from maxent.quench.search import search

GOAL = 2.0
MODELS = {
    "XXZ": [(1.0, "XX"), (1.0, "YY"), (0.5, "ZZ")],
    "XYZ in a field": [(1.0, "XX"), (0.5, "YY"), (0.25, "ZZ"), (0.75, "Z")],
    "mixed-field Ising": [(1.0, "ZZ"), (0.75, "X"), (0.5, "Z")],
}


def main() -> None:
    """Run, print, and write when asked."""
    clean_environment("benchmarks.charges")
    search(MODELS["XXZ"], 3)
    rows = []
    for name, words in MODELS.items():
        for up_to in (4, 5, 6):
            begun = time.process_time()
            found = search(words, up_to)
            spent = time.process_time() - begun
            near = found.nearly[-1]
            rows.append([
                name, up_to, 3 * 4 ** (up_to - 1), ", ".join(map(str, found.counts)),
                "" if near is None else f"{near.value:.3f}", seconds(spent), f"<= {GOAL} s" if up_to == 5 else "",
            ])  # fmt: skip
    head = ["chain", "range", "unknowns", "conserved", "next singular value", "time", "goal"]
    text = (
        "All translation-invariant operators up to the range, at infinite volume: null spaces, formulas, exact "
        "checks and mutual commutators.\n\n"
    )
    report("benchmarks.charges", "Local conserved operators", text + table(head, rows))


if __name__ == "__main__":
    main()

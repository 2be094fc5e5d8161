"""Search for local conserved operators: seconds by range, for an easy and the worst kind of chain, and for fermions.

Mixed-field Ising chains have no symmetry but the translations, so that their equations fall into two blocks only. The
Hubbard chain has sixteen operators per site.
"""

from __future__ import annotations

import time

from benchmarks.measure import clean_environment, report, seconds, table
from maxent.lattice import Fermions, Ring, formula
from maxent.quench.charges import LocalCharges
from maxent.quench.search import search
from maxent.quench.strings import count

GOAL = 2.0
MODELS = {
    "XXZ": [(1.0, "XX"), (1.0, "YY"), (0.5, "ZZ")],
    "XYZ in a field": [(1.0, "XX"), (0.5, "YY"), (0.25, "ZZ"), (0.75, "Z")],
    "mixed-field Ising": [(1.0, "ZZ"), (0.75, "X"), (0.5, "Z")],
    "Hubbard": formula(
        "4*n[i, up]*n[i, down] - (dagger(c[i, up])*c[i+1, up] + dagger(c[i, down])*c[i+1, down] + h.c.)",
        Ring(6, Fermions("up", "down")),
    ),
}
RANGES = {"Hubbard": (2, 3)}


def _unknowns(found: LocalCharges, up_to: int) -> int:
    h = found.hamiltonian
    return count(up_to, h.cell, h.modes, even=bool(h.species))


def main() -> None:
    """Run, print, and write when asked."""
    clean_environment("benchmarks.charges")
    search(MODELS["XXZ"], 3)
    rows = []
    for name, chain in MODELS.items():
        for up_to in RANGES.get(name, (4, 5, 6)):
            begun = time.process_time()
            found = search(chain, up_to)
            spent = time.process_time() - begun
            near, goal = found.nearly[-1], up_to == RANGES.get(name, (4, 5))[1]
            rows.append([
                name, up_to, _unknowns(found, up_to), ", ".join(map(str, found.counts)),
                "" if near is None else f"{near.value:.3f}", seconds(spent), f"<= {GOAL} s" if goal else "",
            ])  # fmt: skip
    head = ["chain", "range", "unknowns", "conserved", "next singular value", "time", "goal"]
    text = (
        "All translation-invariant operators up to the range, at infinite volume: null spaces, formulas, exact "
        "checks and mutual commutators.\n\n"
    )
    report("benchmarks.charges", "Local conserved operators", text + table(head, rows))


if __name__ == "__main__":
    main()

"""A complete run of the quench workbench: CPU seconds of every part and the peak of memory, each row in a process.

Everything is counted, from imports and the search for local conserved operators to the ranking.  What is compared:
canonical, grand canonical and generalised ensembles with further charges in turn, over all sectors and, where the start
has sharp values, inside its own; a Gaussian window; single eigenstates; the dephased state; traces over 400 times.
"""

from __future__ import annotations

import json
import resource
import subprocess
import sys
import time
from typing import Any

from benchmarks.measure import clean_environment, report, seconds, table

ROWS = (("alternating", 12), ("spiral", 12), ("mixed field", 12), ("alternating", 14), ("spiral", 14))
#: Seconds and GiB.
GOALS = {12: (60.0, None), 14: (600.0, 8.0)}
XXZ = [(1.0, "XX"), (1.0, "YY"), (1.5, "ZZ")]
MIXED = [(-1.0, "ZZ"), (0.9, "X"), (0.8, "Z")]


def study(kind: str, size: int) -> dict[str, Any]:
    """Arguments of a comparison: charges as the search finds them, start, observables."""
    from maxent.lattice import ProductState, Ring, formula
    from maxent.quench.search import search

    ring = Ring(size)
    found = search(MIXED if kind == "mixed field" else XXZ, 4)
    names = {"energy": next(c for c in found.charges if c.hamiltonian)} | {
        f"range {c.range}": c for c in found.charges if not c.hamiltonian
    }
    angles = {
        "alternating": (["0", "pi"], 0.0), "spiral": ("pi/3", "2*pi*i/L"), "mixed field": (2.0, 0.5),
    }[kind]  # fmt: skip
    observables = {"neighbours": "Sz[i]*Sz[i+1]/L", "across": "Sx[i]*Sx[i+1]/L", "next": "Sz[i]*Sz[i+2]/L"}
    return {
        "charges": {name: formula(c.formula(), ring) for name, c in names.items()},
        "start": ProductState(ring, *angles).vector(),
        "observables": {name: formula(text, ring) for name, text in observables.items()},
    }


def row(kind: str, size: int) -> dict[str, Any]:
    """One run, measured in this process."""
    from maxent.quench.comparison import compare

    arguments = study(kind, size)
    before = time.process_time()
    found = compare(arguments.pop("charges"), arguments.pop("start"), **arguments)
    return {
        "parts": {"imports and charges": before, **found.seconds},
        "whole": time.process_time(),
        "peak": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20,
        "charges": len(found.targets),
        "columns": len(found.ensembles),
    }


def main() -> None:
    """Run every row in a process of its own, print, and write when asked."""
    clean_environment("benchmarks.quench")
    if "--row" in sys.argv:
        kind, size = sys.argv[sys.argv.index("--row") + 1 :][:2]
        sys.stdout.write(json.dumps(row(kind, int(size))))
        return
    parts: list[str] = []
    rows = []
    for kind, size in ROWS:
        command = [sys.executable, "-m", "benchmarks.quench", "--row", kind, str(size)]
        got = json.loads(subprocess.run(command, capture_output=True, text=True, check=True).stdout)
        parts = parts or list(got["parts"])
        spent, memory = GOALS[size]
        goal = f"<= {spent:.0f} s" + ("" if memory is None else f", {memory:.0f} GiB")
        rows.append([
            size, kind, got["charges"], got["columns"], *(seconds(got["parts"].get(p, 0.0)) for p in parts),
            seconds(got["whole"]), f"{got['peak']:.2f}", goal,
        ])  # fmt: skip
    head = ["sites", "start", "charges", "columns", *parts, "whole run", "peak, GiB", "goal"]
    text = (
        "Complete runs: charges from the search up to range 4, ensembles, windows, single eigenstates, distances on "
        "blocks of 1 to 4 sites, time averages, ranking; imports counted. XXZ rings (Delta = 1.5, four charges, "
        "blocks by momentum and magnetisation) from an alternating state and from a spiral; an Ising ring in a tilted "
        "field (one charge, blocks by momentum).\n\n"
    )
    report("benchmarks.quench", "Quench workbench, complete runs", text + table(head, rows))


if __name__ == "__main__":
    main()

"""Cold starts of the command, each in a process of its own: CPU seconds of the child, imports and all."""

from __future__ import annotations

import os
import resource
import statistics
import subprocess
import sys
import tempfile
from pathlib import Path

from benchmarks.measure import clean_environment, report, seconds, table

ROOT = Path(__file__).parents[1]
RING, DICE = "configs/xxz_ring_quench.toml", "configs/wolf_dice.toml"


def child(arguments: list[str], expected: int) -> float:
    """CPU seconds of one run of the command."""
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    run = subprocess.run([sys.executable, "-m", "maxent", *arguments], capture_output=True, text=True, cwd=ROOT)
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    if run.returncode != expected:
        raise RuntimeError(f"{' '.join(arguments)} ended with {run.returncode}: {run.stderr}")
    return after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime


def main() -> None:
    """Run, print, and write when asked."""
    clean_environment("benchmarks.cold")
    with tempfile.TemporaryDirectory() as folder:
        broken = Path(folder) / "broken.toml"
        broken.write_text("kind = 'spins'\n[sites\n")
        out = os.path.join(folder, "run")
        cases = (
            ("multipliers --help", ["--help"], 0, 0.3),
            ("a config with a syntax error", ["solve", str(broken)], 2, 0.3),
            ("multipliers solve configs/xxz_ring_quench.toml", ["solve", RING, "--out", out, "--force"], 0, 4.0),
            ("multipliers solve configs/wolf_dice.toml", ["solve", DICE, "--out", out + "2", "--force"], 0, 4.0),
        )  # fmt: skip
        rows = []
        for label, arguments, code, goal in cases:
            child(arguments, code)  # compiled bytecode and file cache are warm in daily use
            spent = statistics.median(child(arguments, code) for _ in range(5))
            rows.append([f"`{label}`" if label.startswith("multipliers") else label, seconds(spent), f"<= {goal} s"])
    report("benchmarks.cold", "Cold starts of the command", table(["command", "CPU time", "goal"], rows))


if __name__ == "__main__":
    main()

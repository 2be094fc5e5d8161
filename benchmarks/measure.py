"""How everything here is measured: CPU time in one process, interleaved repetitions, medians, a clean environment.

Two variables that some machines set choose the kernels of OpenBLAS by hand; they are removed together, and the kernel
that is then in use is part of every result.
"""

from __future__ import annotations

import os
import platform
import re
import statistics
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from importlib.metadata import version
from pathlib import Path

PAGE = Path(__file__).parents[1] / "docs" / "benchmarks.md"
REMOVED = ("OPENBLAS_CORETYPE", "OPENBLAS_L2_SIZE")
THREADS = "OMP_NUM_THREADS"


def clean_environment(module: str) -> None:
    """Start `python -m module` anew unless the environment is as it should be: kernels unforced, one thread."""
    if os.environ.get(THREADS) == "1" and not any(name in os.environ for name in REMOVED):
        return
    environment = {k: v for k, v in os.environ.items() if k not in REMOVED} | {THREADS: "1"}
    os.execve(sys.executable, [sys.executable, "-m", module, *sys.argv[1:]], environment)


def interleaved(tasks: Mapping[str, Callable[[], object]], repetitions: int) -> dict[str, float]:
    """Median CPU seconds of each task; the tasks take turns, so that a busy machine slows all of them alike."""
    spent: dict[str, list[float]] = {name: [] for name in tasks}
    for _ in range(repetitions):
        for name, task in tasks.items():
            start = time.process_time()
            task()
            spent[name].append(time.process_time() - start)
    return {name: statistics.median(times) for name, times in spent.items()}


def seconds(x: float) -> str:
    """A time for people."""
    return f"{x * 1e3:.3g} ms" if x < 1 else f"{x:.3g} s"


def table(head: Sequence[str], rows: Sequence[Sequence[object]]) -> str:
    """Markdown table."""
    lines = [head, ["---"] * len(head), *rows]
    return "\n".join("| " + " | ".join(str(cell) for cell in line) + " |" for line in lines)


def machine() -> str:
    """Processor, linear-algebra kernel and versions, in one sentence."""
    import numpy  # noqa: F401  loads the library that threadpoolctl shall see
    import scipy.linalg  # noqa: F401
    from threadpoolctl import threadpool_info

    kernels = sorted(
        {f"{i['internal_api']} {i['version']} ({i['architecture']})" for i in threadpool_info() if "architecture" in i}
    )
    names = ", ".join(f"{name} {version(name)}" for name in ("numpy", "scipy", "jax"))
    try:
        found = re.search(r"model name\s*:\s*(.*)", Path("/proc/cpuinfo").read_text())
        processor = found.group(1) if found else platform.processor()
    except OSError:
        processor = platform.processor()
    return (
        f"{processor}, {os.cpu_count()} processors, one thread; Python {platform.python_version()}, {names}; "
        f"{', '.join(kernels) or 'kernels unknown'}"
    )


INTRODUCTION = f"""# Benchmarks

CPU seconds, not clock time; medians of repetitions that take turns in one process, on one thread. Each section
is written by the command under its heading. The commands remove the variables
{" and ".join(f"`{n}`" for n in REMOVED)} together before they start, because they
force OpenBLAS to kernels of another processor; which kernel was in use stands in each section.
Ratios travel between machines better than seconds do.
"""


def report(module: str, title: str, body: str) -> None:
    """Print a section; with `--write` replace it in docs/benchmarks.md."""
    section = f"## {title}\n\n`python -m {module}` on {machine()}.\n\n{body.strip()}\n"
    sys.stdout.write(section)
    if "--write" not in sys.argv[1:]:
        return
    text = PAGE.read_text() if PAGE.exists() else ""
    sections = dict(re.findall(r"^## (.*?)\n(.*?)(?=^## |\Z)", text, flags=re.M | re.S))
    sections[title] = section.split("\n", 1)[1]
    parts = [f"## {name}\n\n{part.strip()}\n" for name, part in sections.items()]
    PAGE.write_text("\n".join([INTRODUCTION, *parts]))

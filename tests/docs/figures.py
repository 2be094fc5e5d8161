"""Draw the figures of `docs/quench.md` anew: ``python -m tests.docs.figures``.

The study is that of the page, made by the page's own Python blocks.
"""

from __future__ import annotations

import doctest
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from maxent import plots

DOCS = Path(__file__).parents[2] / "docs"
BLOCK = re.compile(r"^```python\n(.*?)^```$", re.S | re.M)


def study() -> dict[str, Any]:
    """Names that the blocks of the page define; raises when one of them shows something else than it prints."""
    names: dict[str, Any] = {}
    runner = doctest.DebugRunner(optionflags=doctest.NORMALIZE_WHITESPACE | doctest.ELLIPSIS)
    for found in BLOCK.finditer((DOCS / "quench.md").read_text(encoding="utf-8")):
        example = doctest.DocTestParser().get_doctest(found[1], names, "quench.md", None, 0)
        runner.run(example, clear_globs=False)
        names.update(example.globs)
    return names


def figures(names: dict[str, Any]) -> Iterator[tuple[str, str]]:
    """File name and SVG of every figure."""
    ten, series = names["ten"], names["series"]
    drawn = {
        "ensembles": ("Ensembles beside the dephased state", plots.plot_ensembles, plots.describe_ensembles, (ten,)),
        "blocks": ("States of blocks", plots.plot_distances, plots.describe_distances, (ten,)),
        "trace": ("Nearest-neighbour correlation in time", plots.plot_trace, plots.describe_trace, (ten, "zz")),
        "eigenstates": ("Single eigenstates", plots.plot_eigenstates, plots.describe_eigenstates, (ten, "zz")),
        "ranking": ("Ranking of the charges", plots.plot_ranking, plots.describe_ranking, (ten.ranking,)),
        "scatter": ("Scatter of eigenstates", plots.plot_scatter, plots.describe_scatter, (names["several"], "x")),
        "sizes": ("Distance of two sites by size", plots.plot_sizes, plots.describe_sizes, (series, 2)),
    }
    for name, (title, plot, describe, of) in drawn.items():
        yield f"quench-{name}.svg", plots.to_svg(plot(*of), title=title, description=describe(*of), name=name)


def main() -> None:
    """Write them all."""
    folder = DOCS / "figures"
    folder.mkdir(exist_ok=True)
    for name, svg in figures(study()):
        (folder / name).write_text(f"{svg.strip()}\n", encoding="utf-8")


if __name__ == "__main__":
    main()

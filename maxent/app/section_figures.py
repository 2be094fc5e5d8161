"""Figures of the further sections of a run.

Floor: app.  Drawing is done by `maxent.plots`.  Must not know: files, HTML pages.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from maxent.app.figures import Figure

__all__ = ["draw"]


def draw(entries: Sequence[Mapping[str, Any]]) -> tuple[Figure, ...]:
    """Draw the curves of the sections of a record.

    Parameters
    ----------
    entries : sequence of mapping
        See sections.py.

    Returns
    -------
    tuple of Figure
        Each says by `section` where it belongs.
    """
    from maxent import plots

    found = []
    for e in entries:
        columns = {c["name"]: np.array(c["values"], float) for c in e["columns"] if c["name"] in e["curves"]}
        if not columns:
            continue
        first = e["columns"][0]
        x = np.array(first["values"], float)
        words = plots.describe_curves(x, columns, abscissa=first["name"])
        ax = plots.plot_curves(x, columns, abscissa=first["name"], ordinate=e["ordinate"], log=e["scale"] == "log")
        svg = plots.to_svg(ax, title=e["title"], description=words, name=e["name"])
        found.append(Figure(e["name"], e["title"], e["lead"], words, svg, section=e["name"]))
    return tuple(found)

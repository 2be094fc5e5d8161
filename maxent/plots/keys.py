"""What the figures of a comparison share: names and marks of the ensembles, and a key that fits.  Floor: plots.

An ensemble has one mark in all figures, told apart by its shape alone; filled it stands for all sectors, open for the
sector of the start.
Must not know: what is drawn.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from maxent.plots.style import COLOUR, short

if TYPE_CHECKING:
    from maxent.quench.comparison import Comparison, Ensemble
    from maxent.quench.sizes import SizeSeries

__all__ = [
    "SECTOR", "brief_names", "ensemble_mark", "key", "key_height", "observable_of", "reading", "sector_handle",
    "usable",
]  # fmt: skip

SECTOR = "sector of the start"

_MARKERS = "osD^vPX<>*ph"
_COLOURS = ("edge", "mark", "ink", "soft")
#: Inches that a letter of a key and the mark beside it take.
_LETTER, _MARK = 0.0505, 0.36


def brief_names(ensembles: Iterable[Ensemble]) -> dict[str, str]:
    """Short name of each label, in order: of ensembles that list their charges by how many these are."""
    several = {"generalised": "generalised", "microcanonical": "sharp"}
    found = {
        e.label: f"{several[e.kind]}, {len(e.charges)} charges"
        if e.kind in several and len(e.charges) > 1
        else short(e.label, 26)
        for e in ensembles
    }
    if len(set(found.values())) < len(found):
        return {label: short(label, 34) for label in found}
    return found


def ensemble_mark(index: int, *, sector: bool = False) -> dict[str, Any]:
    """Marker, colour and line of the ensemble at a position of the list; the later, the smaller."""
    colour = COLOUR[_COLOURS[index % len(_COLOURS)]]
    return {
        "marker": _MARKERS[index % len(_MARKERS)],
        "ms": max(5.0 - 0.4 * index, 3.4),
        "color": colour,
        "mec": colour,
        "mew": 1.0,
        "mfc": COLOUR["page"] if sector else colour,
        "ls": (0, (3, 2)) if sector else "-",
        "lw": 0.8,
    }


def sector_handle() -> Line2D:
    """For the key: open marks are values inside the sector of the start."""
    return Line2D(
        [], [], color=COLOUR["soft"], ls=(0, (3, 2)), lw=0.8, marker="o", ms=5.0, mfc=COLOUR["page"],
        mec=COLOUR["soft"], label=f"open: {SECTOR}",
    )  # fmt: skip


def usable(comparison: Comparison) -> list[Ensemble]:
    """Ensembles that have a state."""
    return [e for e in comparison.ensembles if e.means or e.distances]


def observable_of(comparison: Comparison, name: str) -> str:
    """The name, if it is that of an observable.

    Raises
    ------
    ValueError
        It is not.
    """
    if name not in comparison.truth:
        known = ", ".join(map(repr, comparison.truth)) or "none"
        raise ValueError(f"no observable {name!r}; the observables are {known}")
    return name


def reading(series: SizeSeries, what: str | int) -> Callable[..., tuple[np.ndarray, np.ndarray]]:
    """How an observable (by name) or a block (by its number of sites) is read from a series.

    Raises
    ------
    ValueError
        There is no such observable or block.
    """
    blocks = sorted({b for c in series.comparisons for b in c.block_bounds})
    if what not in (blocks if isinstance(what, int) else series.observables):
        word = "block of so many sites" if isinstance(what, int) else "observable"
        known = f"the observables {list(series.observables)} and blocks of {blocks} sites"
        raise ValueError(f"no {word}: {what!r}; there are {known}")
    return series.distances if isinstance(what, int) else series.deviations


def key(ax: Axes, more: Iterable[Artist] = ()) -> None:
    """Key above the axes, in as many columns as fit beside each other."""
    handles, labels = ax.get_legend_handles_labels()
    for handle in more:
        handles.append(handle)
        labels.append(str(handle.get_label()))
    if not handles:
        return
    figure = ax.get_figure(root=True)
    assert figure is not None
    room = figure.get_figwidth() * min(ax.get_position().width / 0.775, 1.0)
    count = len(labels)
    columns = next(c for c in range(min(count, 5), 0, -1) if c == 1 or _width(labels, c) < room)
    found = ax.legend(
        handles, labels, loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=columns, borderaxespad=0.2, borderpad=0.2,
        handlelength=1.5, handletextpad=0.5, columnspacing=1.0, labelspacing=0.3,
    )  # fmt: skip
    for text in found.get_texts():
        text.set_parse_math(False)


def key_height(entries: int, columns: int = 2) -> float:
    """Inches that a key of so many entries takes above a new figure."""
    return 0.15 * -(-entries // columns)


def _width(labels: list[str], columns: int) -> float:
    parts = np.array_split([len(x) for x in labels], columns)
    return float(sum(part.max() * _LETTER + _MARK for part in parts))

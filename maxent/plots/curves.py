"""Curves over a common abscissa.  Floor: plots.  Must not know: where the numbers come from."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

from maxent.plots.keys import ensemble_mark, key, key_height
from maxent.plots.style import SIZE, decades, drawing, name_of_axis, say
from maxent.text import number

__all__ = ["describe_curves", "plot_curves"]

#: Points up to which every one has a mark.
MARKED = 40
#: Marks of a curve of more points.
MARKS = 12
_DASHES: tuple[Any, ...] = ("-", (0, (4, 1.5)), (0, (1.2, 1.2)), (0, (4, 1.2, 1.2, 1.2)))


def plot_curves(
    x: Any, curves: Mapping[str, Any], *, abscissa: str, ordinate: str = "", log: bool = False, ax: Axes | None = None
) -> Axes:
    """Some curves over the same points.

    Parameters
    ----------
    x : (n,) array_like
    curves : mapping of name to (n,) array_like
        What is not finite, and on a logarithmic axis what is not positive, is left out.
    abscissa, ordinate : str
        Names of the axes.
    log : bool, optional
        Whether the values lie on a logarithmic axis.
    ax : Axes, optional
        Where to draw; a new figure without a window by default.

    Returns
    -------
    Axes
    """
    at = np.asarray(x, float)
    with drawing(ax, (SIZE[0], SIZE[1] + key_height(len(curves)))) as ax:
        drawn = []
        for k, (name, values) in enumerate(curves.items()):
            y = np.asarray(values, float)
            y = np.where(np.isfinite(y) & ((y > 0) | (not log)), y, np.nan)
            drawn.append(y[np.isfinite(y)])
            style = ensemble_mark(k) | {"ls": _DASHES[k % len(_DASHES)], "lw": 1.1}
            if len(at) > MARKED:  # shifted from curve to curve, so that marks of curves on top of each other show
                every = max(len(at) // MARKS, 1)
                style["markevery"] = (k * every // max(len(curves), 1), every)
            ax.plot(at, y, label=name, zorder=3 - 0.1 * k, **style)
        found = np.concatenate([*drawn, []])
        if not len(found):
            return say(ax, "No numbers to draw.")
        if log:
            ax.set_yscale("log")
            low, high = 0.5 * found.min(), 2 * found.max()
            ax.set_ylim(low, high)
            decades(ax.yaxis, low, high)
        if np.all(at == np.round(at)):
            ax.xaxis.set_major_locator(MaxNLocator(7, integer=True))
        ax.set_xlabel(name_of_axis(abscissa), parse_math=False)
        ax.set_ylabel(name_of_axis(ordinate), parse_math=False)
        key(ax)
        return ax


def describe_curves(x: Any, curves: Mapping[str, Any], *, abscissa: str) -> str:
    """What `plot_curves` shows, in words: where every curve begins and ends, its lowest and highest value.

    Returns
    -------
    str
    """
    at, said = np.asarray(x, float), []
    for name, values in curves.items():
        y = np.asarray(values, float)
        known = np.flatnonzero(np.isfinite(y))
        if not len(known):
            said.append(f"{name}: no values.")
            continue
        first, last = known[0], known[-1]
        text = (
            f"{name}: {number(y[first], 4)} at {abscissa} {number(at[first], 4)}, "
            f"{number(y[last], 4)} at {number(at[last], 4)}"
        )
        low, high = float(y[known].min()), float(y[known].max())
        said.append(f"{text}, from {number(low, 4)} to {number(high, 4)} in all.")
    return " ".join(said)

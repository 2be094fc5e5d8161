"""The course of the iteration.  Floor: plots."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

from maxent.core.contract import EPS
from maxent.plots.style import COLOUR, decades, drawing, legend, say

__all__ = ["plot_convergence"]


def plot_convergence(result: Any, *, ax: Axes | None = None) -> Axes:
    """The whitened residual at every step, and what rounding alone explains of it.

    Parameters
    ----------
    result : Result
    ax : Axes, optional
        Where to draw; a new figure without a window by default.

    Returns
    -------
    Axes
    """
    with drawing(ax) as ax:
        if not result.trace:
            return say(ax, "Decided before the first step.")
        residual, _, level = np.array(result.trace).T
        floor = 4 * EPS * (1 + level)
        step = np.arange(len(residual))
        shown = np.maximum(residual, 0.3 * floor.min())
        ax.set_yscale("log")
        ax.plot(step, floor, color=COLOUR["soft"], lw=1.0, ls=(0, (4, 2)), label="rounding")
        ax.plot(step, shown, color=COLOUR["edge"], marker="o", ms=3.5, label="residual", clip_on=False)
        below = step[residual < shown]
        if len(below):
            ax.plot(below, shown[below], ls="none", marker="v", ms=6, color=COLOUR["edge"], label="zero", clip_on=False)
        low, high = 0.2 * min(shown.min(), floor.min()), 3 * max(shown.max(), floor.max())
        ax.set_ylim(low, high)
        ax.set_xlim(-0.3, max(len(step) - 0.7, 1.0))
        ax.xaxis.set_major_locator(MaxNLocator(6, integer=True))
        decades(ax.yaxis, low, high)
        ax.set_xlabel("Newton step")
        ax.set_ylabel("whitened residual")
        legend(ax)
        return ax

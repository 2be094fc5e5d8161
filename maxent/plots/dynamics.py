"""Time, energy and width: traces, single eigenstates, windows.  Floor: plots.

Must not know: how the numbers came about.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import PathCollection
from matplotlib.ticker import MaxNLocator

from maxent.plots.keys import brief_names, ensemble_mark, key, key_height, observable_of, sector_handle, usable
from maxent.plots.style import COLOUR, SIZE, decades, drawing, name_of_axis, say, short
from maxent.quench.yardsticks import Plateau

if TYPE_CHECKING:
    from maxent.quench.comparison import Comparison, Ensemble
    from maxent.quench.windows import WindowScan

__all__ = ["plot_eigenstates", "plot_trace", "plot_widths"]

#: Eigenstates are drawn one by one up to this number; of more that lie on one spot of a fine grid one is drawn.
SINGLE = 2000
GRID = (170, 120)
#: Share of the start that the marked eigenstates hold together, and how many there are at most.
HELD, MARKED = 0.999, 300


def plot_trace(comparison: Comparison, observable: str, *, ax: Axes | None = None) -> Axes:
    """Mean of an observable in time, beside what the dephased state and the ensembles say.

    The band is the temporal standard deviation about the dephased value.  On the right each ensemble has a mark,
    filled over all sectors and open inside the sector of the start.  The bar above spans the plateau, the times at
    which the largest block can look stationary; the dotted line is the revival time.

    Parameters
    ----------
    comparison : Comparison
    observable : str
    ax : Axes, optional
        Where to draw; a new figure without a window by default.

    Returns
    -------
    Axes

    Raises
    ------
    ValueError
        No such observable.
    """
    name = observable_of(comparison, observable)
    ensembles = [e for e in usable(comparison) if name in e.means]
    names = brief_names(ensembles)
    with drawing(ax, (SIZE[0], 2.1 + key_height(len(names) + 6))) as ax:
        if name not in comparison.traces or not len(comparison.times):
            return say(ax, "No trace in time was computed.")
        times, values, truth = comparison.times, comparison.traces[name], comparison.truth[name]
        spread = comparison.fluctuations.get(name)
        first, last = float(times[0]), float(times[-1])
        span = last - first if last > first else 1.0
        edge, slot = last + 0.02 * span, 0.055 * span
        end = edge + slot * (len(names) + 0.3)
        if spread is not None:
            style: dict[str, Any] = {"color": COLOUR["fill"], "lw": 0, "zorder": 0.3}
            ax.fill_between([first, end], truth - spread, truth + spread, label="± temporal s.d.", **style)
        ax.plot([first, end], [truth, truth], color=COLOUR["soft"], lw=0.9, label="dephased", zorder=0.6)
        ax.plot(times, values, color=COLOUR["edge"], lw=0.9, label="trace", zorder=1)
        _ensemble_values(ax, name, ensembles, names, edge, slot)
        if names:
            ax.axvline(edge, color=COLOUR["rule"], lw=0.7, zorder=0.5)
        drawn = [values.min(), values.max(), *(e.means[name] for e in ensembles)]
        drawn += [truth - (spread or 0.0), truth + (spread or 0.0)]
        low, high = float(min(drawn)), float(max(drawn))
        height = max(high - low, 1e-9, 1e-6 * abs(high))
        ax.set_ylim(low - 0.05 * height, high + 0.12 * height)
        _yardsticks(ax, comparison, first, last)
        ax.set_xlim(first, end)
        ax.set_xticks([t for t in MaxNLocator(5).tick_values(first, last) if first <= t <= last])
        ax.set_xlabel("time")
        ax.set_ylabel(short(name, 26), parse_math=False)
        key(ax, [sector_handle()] if any(e.sector for e in ensembles) else [])
        return ax


def _ensemble_values(
    ax: Axes, name: str, ensembles: list[Ensemble], names: dict[str, str], edge: float, slot: float
) -> None:
    order = list(names)
    for e in sorted(ensembles, key=lambda e: bool(e.sector)):
        i = order.index(e.label)
        at = edge + slot * (i + np.array([0.1, 0.5, 0.9]))
        alone = not any(o.label == e.label and not o.sector for o in ensembles)
        label = names[e.label] if not e.sector or alone else f"_{e.label} in the sector"
        style = ensemble_mark(i, sector=bool(e.sector)) | {"markevery": [1]}
        ax.plot(at, [e.means[name]] * 3, label=label, clip_on=False, zorder=3, **style)


def _yardsticks(ax: Axes, comparison: Comparison, first: float, last: float) -> None:
    """The plateau where there is one, and the revival if it lies inside the times."""
    across = ax.get_xaxis_transform()
    if comparison.plateau is not None:
        start, stop = comparison.plateau
        if Plateau(start, stop).is_open and first <= start < last:
            style: dict[str, Any] = {"color": COLOUR["mark"], "lw": 2.6, "solid_capstyle": "butt", "clip_on": False}
            ax.plot([start, min(stop, last)], [0.965] * 2, transform=across, label="plateau", **style)
    if comparison.revival is not None and first <= comparison.revival <= last:
        style = {"color": COLOUR["ink"], "lw": 1.0, "ls": (0, (1, 1.5)), "zorder": 0.9}
        ax.plot([comparison.revival] * 2, [0.0, 1.0], transform=across, label="revival", **style)


def plot_eigenstates(comparison: Comparison, observable: str, *, ax: Axes | None = None) -> Axes:
    """Values of single eigenstates in the sector of the start against energy.

    The area of a circle is the weight of the eigenstate in the start; the ones without weight are dots.

    Parameters
    ----------
    comparison : Comparison
    observable : str
    ax : Axes, optional
        Where to draw; a new figure without a window by default.

    Returns
    -------
    Axes

    Raises
    ------
    ValueError
        No such observable.
    """
    name = observable_of(comparison, observable)
    with drawing(ax, (SIZE[0], SIZE[1] + 0.3)) as ax:
        data = comparison.levels
        if not len(data.get(name, ())) or not np.isfinite(data[name]).any():
            return say(ax, "No values of single eigenstates were computed.")
        known = np.isfinite(data[name])
        energy, value, weight = (np.asarray(data[k])[known] for k in ("energy", name, "weight"))
        marked = _heaviest(weight)
        rest = _thinned(energy, value, np.setdiff1d(np.arange(len(energy)), marked))
        ax.axhline(comparison.truth[name], color=COLOUR["ink"], lw=0.9, zorder=2.5, label="dephased")
        _window(ax, comparison, name)
        style: dict[str, Any] = {"ls": "none", "marker": "o", "ms": 1.8, "mfc": COLOUR["soft"], "mec": "none"}
        if len(rest):
            ax.plot(energy[rest], value[rest], label="eigenstate", zorder=1, **style)
        if len(marked):
            area = 6 + 110 * weight[marked] / weight[marked].max()
            ax.scatter(
                energy[marked], value[marked], s=area, fc="none", ec=COLOUR["edge"], lw=0.9, zorder=2,
                label="area: weight in the start",
            )  # fmt: skip
        ax.margins(0.06, 0.09)  # room for the largest circle
        ax.locator_params(nbins=6)
        ax.set_xlabel(name_of_axis(comparison.hamiltonian), parse_math=False)
        ax.set_ylabel(short(name, 26), parse_math=False)
        key(ax)
        found = ax.get_legend()
        for handle in found.legend_handles if found is not None else ():
            if isinstance(handle, PathCollection):
                handle.set_sizes([22.0])  # not that of the first circle
        return ax


def _window(ax: Axes, comparison: Comparison, name: str) -> None:
    """Mean of the window over one width to each side of its mean energy."""
    found = [e for e in comparison.ensembles if e.label == "Gaussian window" and name in e.means]
    matching = [e for e in found if bool(e.sector) == bool(comparison.sharp)]
    if not matching or not comparison.window:
        return
    middle, width = comparison.window["mean"], comparison.window["width"]
    ax.axvspan(middle - width, middle + width, color=COLOUR["fill"], lw=0, zorder=0.3)
    style: dict[str, Any] = {"color": COLOUR["mark"], "lw": 2.0, "solid_capstyle": "butt", "zorder": 2.6}
    ax.plot([middle - width, middle + width], [matching[0].means[name]] * 2, label="window", **style)


def _heaviest(weight: np.ndarray) -> np.ndarray:
    """Positions of the eigenstates that hold nearly all of the start, heaviest first."""
    total = float(weight.sum())
    if total <= 0:
        return np.empty(0, int)
    order = np.argsort(-weight, kind="stable")
    count = int(np.searchsorted(np.cumsum(weight[order]), HELD * total)) + 1
    return order[: min(count, MARKED)]


def _thinned(x: np.ndarray, y: np.ndarray, which: np.ndarray) -> np.ndarray:
    """Of many points those that can be told apart."""
    if len(which) <= SINGLE:
        return which
    cells = [
        np.floor(n * (v - v.min()) / max(np.ptp(v), 1e-300)).astype(int)
        for v, n in zip((x[which], y[which]), GRID, strict=True)
    ]
    _, first = np.unique(cells[0] * (GRID[1] + 1) + cells[1], return_index=True)
    return which[np.sort(first)]


def plot_widths(
    scan: WindowScan | None, *, canonical: float | None = None, sector: bool = False, ax: Axes | None = None
) -> Axes:
    """Slope of the entropy in Gaussian windows of several widths.

    Parameters
    ----------
    scan : WindowScan or None
    canonical : float, optional
        beta of the canonical ensemble of the same mean energy in the same sector.
    sector : bool, optional
        Whether the windows and the canonical ensemble are those inside the sector of the start.
    ax : Axes, optional
        Where to draw; a new figure without a window by default.

    Returns
    -------
    Axes
    """
    with drawing(ax, (SIZE[0], SIZE[1] - 0.15)) as ax:
        if scan is None or not len(scan.windows):
            return say(ax, "No window is well above the level spacing.")
        widths, betas = scan.widths, scan.betas
        order = np.argsort(widths)
        refused = np.array([width for width, _ in scan.refused])
        every = np.concatenate([widths, refused])
        where = ", in the sector" if sector else ""
        low, high = every.min() / 1.3, every.max() * 1.3
        ax.set_xscale("log")
        ax.set_xlim(low, high)
        decades(ax.xaxis, low, high)
        if canonical is not None:
            ax.axhline(canonical, color=COLOUR["mark"], lw=1.0, ls=(0, (4, 2)), label=f"canonical{where}")
        ax.plot(widths[order], betas[order], color=COLOUR["edge"], marker="o", ms=4.0, label=f"Gaussian window{where}")
        shown = np.append(betas, canonical if canonical is not None else betas)
        middle, half = (shown.max() + shown.min()) / 2, np.ptp(shown) / 2
        half = max(half, 0.05 * abs(middle), 1e-3)
        ax.set_ylim(middle - 1.25 * half, middle + 1.25 * half)
        if len(refused):
            style: dict[str, Any] = {"ls": "none", "marker": "x", "ms": 4.5, "mec": COLOUR["soft"], "clip_on": False}
            height = np.full(len(refused), 0.0)
            ax.plot(refused, height, transform=ax.get_xaxis_transform(), label="too close to the levels", **style)
        ax.yaxis.set_major_locator(MaxNLocator(5))
        ax.set_xlabel("width of the window")
        ax.set_ylabel("beta")
        key(ax)
        return ax

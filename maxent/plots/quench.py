"""Ensembles against the dephased state: observables, blocks, ranking of charges, several sizes.  Floor: plots.

Every figure shows the yardstick of a finite system beside the deviation.  Must not know: how the numbers came about.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patches import Rectangle
from matplotlib.ticker import MaxNLocator

from maxent.plots.keys import (
    SECTOR,
    brief_names,
    ensemble_mark,
    key,
    key_height,
    observable_of,
    reading,
    sector_handle,
    usable,
)
from maxent.plots.style import COLOUR, SIZE, decades, drawing, say, short

if TYPE_CHECKING:
    from maxent.quench.comparison import Comparison, Ensemble
    from maxent.quench.ranking import Ranking, Step
    from maxent.quench.sizes import SizeSeries

__all__ = ["plot_distances", "plot_ensembles", "plot_ranking", "plot_scatter", "plot_sizes"]

_ORDERS = (("by_entropy", "by entropy"), ("by_distance", "by distance"))
#: What is smaller is rounding of numbers of order one.
ROUNDING = 1e-12
_SEQUENCES = {"L = 4n": "o", "L = 4n + 2": "s", "L odd": "^"}
#: Lines of the same, where the shape of a mark is that of an ensemble.
_DASHES: dict[str, Any] = {"L = 4n": "-", "L = 4n + 2": (0, (4, 1.5)), "L odd": (0, (1, 1.5))}


def plot_ensembles(
    comparison: Comparison, *, observables: Sequence[str] | None = None, ax: Axes | None = None
) -> Axes:
    """Deviation of each observable from its dephased value, by ensemble.

    Dots are ensembles over all sectors, rings those inside the sector of the start.  The band is the temporal standard
    deviation, the tick where the leading correction for the spreads of the charges would bring the dot, the pale bar
    what single eigenstates in the window have.

    Parameters
    ----------
    comparison : Comparison
    observables : sequence of str, optional
        All by default.
    ax : Axes, optional
        Where to draw; a new figure without a window by default.

    Returns
    -------
    Axes

    Raises
    ------
    ValueError
        A name that is no observable.
    """
    chosen = [observable_of(comparison, n) for n in (comparison.truth if observables is None else observables)]
    ensembles = [e for e in usable(comparison) if e.means]
    names = brief_names(ensembles)
    step = len(names) + 1.5
    rows = step * len(chosen)
    with drawing(ax, (SIZE[0], max(0.75 + 0.165 * rows, 1.6))) as ax:
        if not chosen:
            return say(ax, "No observables were given.")
        if not ensembles:
            return say(ax, "No ensemble has a state.")
        ticks = []
        for k, name in enumerate(chosen):
            top = step * k
            at = {label: top + 1.2 + i for i, label in enumerate(names)}
            ticks += [(at[label], text) for label, text in names.items()]
            _deviations(ax, comparison, name, ensembles, at)
            ax.annotate(
                short(name, 40), (0.0, top + 0.15), xycoords=("axes fraction", "data"), xytext=(3, 0),
                textcoords="offset points", va="center", color=COLOUR["ink"], parse_math=False,
            )  # fmt: skip
        ax.margins(x=0.06)
        ax.set_ylim(rows - 0.5, -0.5)
        ax.set_yticks([y for y, _ in ticks], [text for _, text in ticks], parse_math=False)
        ax.tick_params(axis="y", length=0)
        ax.spines["left"].set_visible(False)
        ax.xaxis.set_major_locator(MaxNLocator(4, steps=[1, 2, 5, 10]))
        ax.set_xlabel("deviation")
        key(ax)
        return ax


def _deviations(
    ax: Axes, comparison: Comparison, name: str, ensembles: Sequence[Ensemble], at: dict[str, float]
) -> None:
    """The rows of one observable; each kind of mark is named once for the key."""
    truth, spread = comparison.truth[name], comparison.fluctuations.get(name)
    low, high = min(at.values()) - 0.5, max(at.values()) + 0.5
    known = set(ax.get_legend_handles_labels()[1])

    def once(label: str) -> str:
        fresh = label not in known
        known.add(label)
        return label if fresh else f"_{label}"

    if spread is not None:
        box = Rectangle((-spread, low), 2 * spread, high - low, fc=COLOUR["fill"], ec="none", zorder=0.4)
        box.set_label(once("± temporal s.d."))
        ax.add_patch(box)
    ax.plot([0, 0], [low, high], color=COLOUR["soft"], lw=0.7, zorder=0.6)
    for e in sorted(ensembles, key=lambda e: bool(e.sector)):
        y, x = at[e.label], e.means[name] - truth
        if name in e.ranges:
            ends = [v - truth for v in e.ranges[name]]
            style: dict[str, Any] = {"color": COLOUR["rule"], "lw": 3.2, "solid_capstyle": "butt", "zorder": 0.5}
            ax.plot(ends, [y, y], label=once("10–90 % of eigenstates"), **style)
        correction = e.corrections.get(name, np.nan)
        if np.isfinite(correction):
            label = once("with leading correction")
            style = {"color": COLOUR["mark"], "marker": "|", "ms": 6.5, "mew": 1.4, "lw": 0.9, "markevery": [1]}
            ax.plot([x, x + correction], [y, y], label=label, zorder=2, **style)
        if e.sector:
            style = {"ms": 6.4, "mfc": "none", "mec": COLOUR["ink"], "mew": 1.0, "zorder": 3}
        else:
            style = {"ms": 3.4, "mfc": COLOUR["edge"], "mec": COLOUR["edge"], "zorder": 4}
        ax.plot([x], [y], marker="o", ls="none", label=once(SECTOR if e.sector else "all sectors"), **style)


def plot_distances(comparison: Comparison, *, ax: Axes | None = None) -> Axes:
    """Trace distance of each ensemble from the dephased state, by the number of sites of a block.

    The steps are bounds on how far the block is from its dephased state in the average over all times; those of 1 and
    more say nothing and are left out.  Bars are proved bounds of the distance itself, on blocks of free particles that
    are too large for its value.

    Parameters
    ----------
    comparison : Comparison
    ax : Axes, optional
        Where to draw; a new figure without a window by default.

    Returns
    -------
    Axes
    """
    ensembles = [e for e in usable(comparison) if e.distances or e.distance_bounds]
    names = brief_names(ensembles)
    with drawing(ax, (SIZE[0], 2.1 + key_height(len(names) + 2))) as ax:
        if not ensembles:
            return say(ax, "No blocks were compared.")
        bounds = {b: x for b, x in comparison.block_bounds.items() if x < 1}
        for k, (block, bound) in enumerate(bounds.items()):
            ax.add_patch(Rectangle((block - 0.45, 0), 0.9, bound, fc=COLOUR["fill"], ec="none", zorder=0.4))
            label = "fluctuation bound" if k == 0 else "_bound"
            ax.plot([block - 0.45, block + 0.45], [bound] * 2, color=COLOUR["soft"], lw=1.0, label=label, zorder=0.5)
        order, width = list(names), min(0.16, 0.75 / len(names))
        for e in sorted(ensembles, key=lambda e: bool(e.sector)):
            i = order.index(e.label)
            x = np.array(list(e.distances)) + (i - (len(order) - 1) / 2) * width
            alone = not any(o.label == e.label and not o.sector for o in ensembles)
            label = names[e.label] if not e.sector or alone else f"_{e.label} in the sector"
            style = ensemble_mark(i, sector=bool(e.sector))
            for at, block in zip(x, e.distances, strict=True):
                if block in e.distance_ranges:
                    ends = e.distance_ranges[block]
                    known = "10–90 % of eigenstates" in ax.get_legend_handles_labels()[1]
                    bar = "_10–90 % of eigenstates" if known else "10–90 % of eigenstates"
                    ax.plot([at, at], ends, color=COLOUR["rule"], lw=3.2, solid_capstyle="butt", zorder=0.6, label=bar)
            ax.plot(x, list(e.distances.values()), label=label, clip_on=False, **style)
            _bounded(ax, e, (i - (len(order) - 1) / 2) * width, style)
        blocks = sorted({b for e in ensembles for b in (*e.distances, *e.distance_bounds)})
        ax.set_xlim(blocks[0] - 0.55, blocks[-1] + 0.55)
        ax.set_xticks(blocks)
        wide = [r[1] for e in ensembles for r in (*e.distance_ranges.values(), *e.distance_bounds.values())]
        every = [*(x for e in ensembles for x in e.distances.values()), *wide]
        highest = max([*bounds.values(), *every])
        ax.set_ylim(0.0, 1.06 * highest if highest > 1e-12 else 1.0)
        ax.set_xlabel("sites of the block")
        ax.set_ylabel("trace distance")
        key(ax, [sector_handle()] if any(e.sector for e in ensembles) else [])
        return ax


def _bounded(ax: Axes, ensemble: Ensemble, shift: float, style: dict[str, Any]) -> None:
    """Bars between the proved bounds of large blocks, in the colour of the ensemble."""
    for block, ends in ensemble.distance_bounds.items():
        fresh = "proved bounds" not in ax.get_legend_handles_labels()[1]
        label = "proved bounds" if fresh else "_proved bounds"
        look: dict[str, Any] = {"color": style["color"], "lw": 1.2, "marker": "_", "ms": 4.0, "ls": style["ls"]}
        ax.plot([block + shift] * 2, ends, clip_on=False, label=label, **look)


def plot_ranking(ranking: Ranking | None, *, ax: Axes | None = None) -> Axes:
    """The charges in both orders: the drop of entropy that each brings (left), the distances after it (right).

    Parameters
    ----------
    ranking : Ranking or None
    ax : Axes, optional
        Where to draw; a new figure without a window by default.

    Returns
    -------
    Axes
        Its two children, `child_axes`, are the halves.
    """
    orders = [(title, getattr(ranking, attribute, ())) for attribute, title in _ORDERS]
    orders = [(title, steps) for title, steps in orders if steps]
    rows = sum(len(steps) + 1.4 for _, steps in orders)
    with drawing(ax, (SIZE[0], max(1.0 + 0.17 * rows, 1.5))) as ax:
        if not orders:
            return say(ax, "The charges were not ranked." if ranking is None else "No charge could be added.")
        ax.set_axis_off()
        left, right = ax.inset_axes((0.0, 0.0, 0.47, 1.0)), ax.inset_axes((0.56, 0.0, 0.44, 1.0))
        ticks: list[tuple[float, str]] = []
        top = 0.0
        for title, steps in orders:
            y = top + 1 + np.arange(len(steps))
            ticks += [(float(a), short(s.charge, 20)) for a, s in zip(y, steps, strict=True)]
            _drops(left, y, steps, first=not top)
            _falls(right, y, steps, first=not top)
            left.annotate(
                title, (0.0, top + 0.1), xycoords=("axes fraction", "data"), xytext=(3, 0), va="center",
                textcoords="offset points", color=COLOUR["soft"], bbox={"fc": COLOUR["page"], "ec": "none", "pad": 0.5},
            )  # fmt: skip
            top += len(steps) + 1.4
        for half in (left, right):
            half.set_ylim(top - 0.5, -0.5)
            half.xaxis.set_major_locator(MaxNLocator(4, steps=[1, 2, 5, 10]))
            most = float(half.dataLim.x1)
            half.set_xlim(0.0, 1.06 * most if most > 1e-12 else 1.0)
            half.tick_params(axis="y", length=0)
        left.set_yticks([y for y, _ in ticks], [text for _, text in ticks], parse_math=False)
        right.set_yticks([])
        left.set_xlabel("drop (nats)")
        right.set_xlabel("distance")
        key(ax, [*_named(left), *_named(right)])
        return ax


def _drops(ax: Axes, y: np.ndarray, steps: Sequence[Step], *, first: bool) -> None:
    drops = [s.entropy_drop for s in steps]
    label = "entropy drop" if first else "_drop"
    ax.barh(y, drops, height=0.5, color=COLOUR["fill"], ec=COLOUR["edge"], lw=0.9, label=label)
    style: dict[str, Any] = {"ls": "none", "marker": "D", "ms": 3.6, "mfc": COLOUR["mark"], "mec": COLOUR["mark"]}
    ax.plot([s.predicted_drop for s in steps], y, label="predicted" if first else "_predicted", clip_on=False, **style)


def _falls(ax: Axes, y: np.ndarray, steps: Sequence[Step], *, first: bool) -> None:
    for i, block in enumerate(sorted(steps[0].distances)):
        name = f"{block} site{'' if block == 1 else 's'}"
        style = ensemble_mark(i) | {"ms": 3.6}
        ax.plot([s.distances[block] for s in steps], y, clip_on=False, label=name if first else f"_{name}", **style)


def _named(ax: Axes) -> list[Artist]:
    return [handle for handle, _ in zip(*ax.get_legend_handles_labels(), strict=True)]


def plot_sizes(series: SizeSeries, what: str | int, *, sector: bool = False, ax: Axes | None = None) -> Axes:
    """Deviation of an observable, or distance of a block, against 1/L.

    Every ensemble has its mark.  Sizes of one sequence (multiples of 4, even others, odd) are joined, by a line of
    their own kind.

    Parameters
    ----------
    series : SizeSeries
    what : str or int
        An observable, or the number of sites of a block.
    sector : bool, optional
        The ensembles inside the sector of the start instead of those over all sectors.
    ax : Axes, optional
        Where to draw; a new figure without a window by default.

    Returns
    -------
    Axes

    Raises
    ------
    ValueError
        No such observable or block.
    """
    read = reading(series, what)
    names = brief_names(e for c in series.comparisons for e in c.ensembles if e.label in series.labels)
    with drawing(ax, (SIZE[0], 2.1 + key_height(len(names) + 3))) as ax:
        drawn: set[str] = set()
        for i, (label, name) in enumerate(names.items()):
            sizes, values = read(label, what, sector=sector)
            for sequence, which in series.sequences().items():
                here = np.isin(sizes, series.sizes[which])
                if here.any():
                    # of ensembles that agree the later ones lie inside the marks and lines of the earlier ones
                    style = ensemble_mark(i, sector=sector) | {"ls": _DASHES[sequence]}
                    style |= {"ms": max(7.5 - 1.7 * i, 3.0), "lw": max(2.0 - 0.6 * i, 0.6)}
                    ax.plot(1 / sizes[here], values[here], label=f"_{label}: {sequence}", clip_on=False, **style)
                    drawn |= {name, sequence}
        if not drawn:
            return say(ax, f"No ensemble has values{' inside the sector of the start' if sector else ''}.")
        ax.axhline(0.0, color=COLOUR["soft"], lw=0.7, zorder=0.5)
        _size_axis(ax, series.sizes)
        if isinstance(what, int):
            ax.set_ylim(bottom=0.0)
            ax.set_ylabel(f"trace distance, {what} site{'' if what == 1 else 's'}")
        else:
            ax.set_ylabel(f"deviation of {short(what, 22)}", parse_math=False)
        marks = [ensemble_mark(i, sector=sector) | {"ls": "none"} for i in range(len(names))]
        handles = [Line2D([], [], label=n, **m) for n, m in zip(names.values(), marks, strict=True) if n in drawn]
        line: dict[str, Any] = {"color": COLOUR["soft"], "lw": 1.0}
        handles += [Line2D([], [], label=s, ls=ls, **line) for s, ls in _DASHES.items() if s in drawn]
        key(ax, handles)
        return ax


def plot_scatter(series: SizeSeries, observable: str, *, ax: Axes | None = None) -> Axes:
    """Scatter of eigenstate values about their running mean, against the number of levels of the sector.

    Both axes are logarithmic.  The dashed guide falls as the inverse root of the number of levels, which eigenstates
    that thermalise follow; it goes through the largest sector.

    Parameters
    ----------
    series : SizeSeries
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
    for c in series.comparisons:
        observable_of(c, observable)
    sizes, dimensions, scatter = series.scatter(observable)
    seen = scatter > ROUNDING
    with drawing(ax, (SIZE[0], 2.1 + key_height(3))) as ax:
        if not len(sizes):
            return say(ax, "No sector has enough levels for a test.")
        if not seen.any():
            return say(ax, "All eigenstates have the same value.")
        ax.set_xscale("log")
        ax.set_yscale("log")
        ends = np.array([dimensions.min() / 1.25, dimensions.max() * 1.25])
        last = int(np.flatnonzero(seen)[np.argmax(dimensions[seen])])
        guide = scatter[last] * np.sqrt(dimensions[last] / ends)
        style: dict[str, Any] = {"color": COLOUR["soft"], "lw": 0.9, "ls": (0, (4, 2)), "zorder": 0.6}
        ax.plot(ends, guide, label="levels to the power −1/2", **style)
        for sequence, which in series.sequences().items():
            here = seen & np.isin(sizes, series.sizes[which])
            if here.any():
                style = {"marker": _SEQUENCES[sequence], "ms": 5.0, "color": COLOUR["edge"], "lw": 0.8}
                ax.plot(dimensions[here], scatter[here], label=sequence, **style)
                for x, y, n in zip(dimensions[here], scatter[here], sizes[here], strict=True):
                    ax.annotate(f"{n}", (x, y), xytext=(4, 4), textcoords="offset points", color=COLOUR["soft"])
        low, high = min(scatter[seen].min(), guide.min()), max(scatter[seen].max(), guide.max())
        ax.set_xlim(*ends)
        ax.set_ylim(low / 1.3, high * 1.45)
        decades(ax.xaxis, *ends)
        decades(ax.yaxis, low / 1.3, high * 1.45)
        ax.set_xlabel("levels in the sector")
        ax.set_ylabel(f"scatter of {short(observable, 22)}", parse_math=False)
        key(ax)
        return ax


def _size_axis(ax: Axes, sizes: np.ndarray) -> None:
    """1/L from 0 on; labels only where they have room."""
    right = 1 / sizes.min()
    ax.set_xlim(0.0, 1.04 * right)
    labelled, last = [(0.0, "0")], 0.0
    for n in sizes[::-1]:
        if 1 / n - last > 0.13 * right:
            labelled.append((1 / n, f"1/{n}"))
            last = 1 / n
    ax.set_xticks([x for x, _ in labelled], [text for _, text in labelled])
    ax.set_xticks(1 / sizes, minor=True)
    ax.set_xlabel("1/L")

"""The figures of a comparison of ensembles: which ones there are, and what stands under them.

Floor: app.  Drawing and words are those of `maxent.plots`.  The same comparison gives the same bytes.
Must not know: files, HTML pages.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any

from maxent.app.figures import Figure
from maxent.app.study_cells import left_out

__all__ = ["draw"]

#: Observables that get figures of their own: the first ones.
OBSERVABLES = 3


def draw(series: Any) -> tuple[Figure, ...]:
    """Draw every figure that has something to show; those of one size are of the largest.

    Parameters
    ----------
    series : SizeSeries

    Returns
    -------
    tuple of Figure
    """
    from maxent import plots

    c = series.comparisons[-1]
    names = list(c.truth)[:OBSERVABLES]
    at = f" at {c.size} sites"
    found: list[Figure] = []

    def add(name: str, title: str, caption: str, words: str, make: Callable[[], Any]) -> None:
        name = f"quench-{name}"
        svg = plots.to_svg(make(), title=title, description=words, name=name)
        found.append(Figure(name, title, caption, words, svg, study=True))

    if names and any(e.means for e in c.ensembles):
        add(
            "ensembles",
            f"Deviations from the long-time means{at}",
            "Mean in each ensemble minus mean in the long-time state. The band is the temporal standard deviation, the "
            "tick where the leading correction for the spread of the charges would bring the mean.",
            plots.describe_ensembles(c),
            lambda: plots.plot_ensembles(c),
        )
    if c.block_bounds and any(e.distances or e.distance_bounds for e in c.ensembles):
        add(
            "distances",
            f"States of blocks{at}",
            "Trace distance of neighbouring sites from their long-time state, by ensemble.",
            plots.describe_distances(c),
            lambda: plots.plot_distances(c),
        )
    if c.ranking is not None and (c.ranking.by_entropy or c.ranking.by_distance):
        add(
            "ranking",
            f"Which charges matter{at}",
            "Above in the order of the entropy that each charge takes away, below in that of the distances left.",
            plots.describe_ranking(c.ranking),
            lambda: plots.plot_ranking(c.ranking),
        )
    for k, name in enumerate(names):
        if name in c.traces and len(c.times):
            add(
                f"trace-{k + 1}",
                f"{name} in time{at}",
                "Mean in time, the long-time mean with the band of its fluctuations; at the right the ensembles.",
                plots.describe_trace(c, name),
                partial(plots.plot_trace, c, name),
            )
    for k, name in enumerate(names):
        if len(c.levels.get(name, ())):
            add(
                f"eigenstates-{k + 1}",
                f"{name} in single eigenstates{at}",
                _eigenstates_caption(c),
                plots.describe_eigenstates(c, name),
                partial(plots.plot_eigenstates, c, name),
            )
    if c.window_scan is not None and c.window_scan.windows:
        inside = bool(c.sharp) and bool(c.window)
        beta = _canonical_beta(c, inside)
        where = " in the sector of the start" if inside else ""
        dashed = f"; dashed: the canonical ensemble{' there' if inside else ''}" if beta is not None else ""
        add(
            "widths",
            f"Slope of the entropy by width of the window{where}{at}",
            f"beta of Gaussian windows around the energy of the start{where}{dashed}.",
            plots.describe_widths(c.window_scan, canonical=beta, sector=inside),
            lambda: plots.plot_widths(c.window_scan, canonical=beta, sector=inside),
        )
    for k, name in enumerate(names):
        if len(series.scatter(name)[0]) > 1:
            add(
                f"scatter-{k + 1}",
                f"Scatter of {name} over eigenstates by size",
                "Standard deviation about the running mean inside one sector, against its number of levels; the "
                "numbers beside the marks are sizes. Dashed: what eigenstates that thermalise follow."
                + _not_tested(series, name),
                plots.describe_scatter(series, name),
                partial(plots.plot_scatter, series, name),
            )
    if len(series.comparisons) > 1 and series.labels:
        blocks = sorted(set.intersection(*(set(x.block_bounds) for x in series.comparisons)))
        for k, what in enumerate([*names, *blocks[-1:]]):
            title = f"Distance on {what} sites by size" if isinstance(what, int) else f"Deviation of {what} by size"
            add(
                f"sizes-{k + 1}",
                title,
                "Against 1/L; sizes that differ by 2 modulo 4, or odd from even, are sequences of their own.",
                plots.describe_sizes(series, what),
                partial(plots.plot_sizes, series, what),
            )
    return tuple(found)


def _canonical_beta(c: Any, inside: bool) -> float | None:
    """Slope of the entropy, beta, of the canonical ensemble in the sector that the windows are in."""
    for e in c.ensembles:
        if e.kind == "canonical" and bool(e.sector) == inside:
            return e.multipliers.get(c.hamiltonian)
    return None


def _eigenstates_caption(c: Any) -> str:
    """What is drawn: there may be no sector and no window."""
    where = " in the sector of the start" if c.sharp else ""
    window = ", the window" if c.window else ""
    return f"Eigenstates{where}{window} and the long-time mean. The area of a circle is the weight in the start."


def _not_tested(series: Any, name: str) -> str:
    """Sizes that have no mark, each with the reason."""
    sizes = [c.size for c in series.comparisons if c.size not in series.scatter(name)[0]]
    if not sizes:
        return ""
    return f" Not tested: {left_out([c.to_dict() for c in series.comparisons], sizes)}."

"""What the figures of a comparison say, in words with the numbers: for a reader who does not see them.  Floor: plots.

One function beside each ``plot_x``; both read the same numbers.  Must not know: axes.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING

import numpy as np

from maxent.plots.keys import observable_of, reading, usable
from maxent.quench.eigenstates import decay_exponent
from maxent.quench.yardsticks import Plateau
from maxent.text import listing, number, plural

if TYPE_CHECKING:
    from maxent.quench.comparison import Comparison, Ensemble
    from maxent.quench.ranking import Ranking, Step
    from maxent.quench.sizes import SizeSeries
    from maxent.quench.windows import WindowScan

__all__ = [
    "describe_distances", "describe_eigenstates", "describe_ensembles", "describe_ranking", "describe_scatter",
    "describe_sizes", "describe_trace", "describe_widths",
]  # fmt: skip

#: What is smaller is rounding of numbers of order one.
_ROUNDING = 1e-10


def describe_ensembles(comparison: Comparison, *, observables: Iterable[str] | None = None) -> str:
    """Deviation of each observable by ensemble, see `plot_ensembles`.

    Raises
    ------
    ValueError
        A name that is no observable.
    """
    chosen = [observable_of(comparison, n) for n in (comparison.truth if observables is None else observables)]
    ensembles = [e for e in usable(comparison) if e.means]
    if not chosen:
        return "No observables were given."
    if not ensembles:
        return "No ensemble has a state."
    said = []
    for name in chosen:
        truth = comparison.truth[name]
        text = f"{name}: dephased value {_n(truth)}"
        if name in comparison.fluctuations:
            text += f", temporal standard deviation {_n(comparison.fluctuations[name])}"
        parts = []
        for e in ensembles:
            part = f"{_where(e)} {_signed(e.means[name] - truth)}"
            correction = e.corrections.get(name, np.nan)
            if np.isfinite(correction) and abs(correction) > _ROUNDING:
                part += f" ({_signed(e.means[name] + correction - truth)} with the leading correction)"
            if name in e.ranges:
                low, high = (v - truth for v in e.ranges[name])
                part += f" (median; 10 % to 90 % from {_signed(low)} to {_signed(high)})"
            parts.append(part)
        said.append(f"{text}. Deviations: {'; '.join(parts)}.")
    return " ".join(said)


def describe_distances(comparison: Comparison) -> str:
    """Trace distance by size of the block for each ensemble, see `plot_distances`."""
    ensembles = [e for e in usable(comparison) if e.distances]
    between = [
        f"{_where(e)} on {plural(b, 'site')} from {_n(low)} to {_n(high)}"
        for e in usable(comparison)
        for b, (low, high) in e.distance_bounds.items()
    ]
    beyond = f" Between proved bounds: {'; '.join(between)}." if between else ""
    if not ensembles:
        return beyond.strip() or "No blocks were compared."
    blocks = listing([str(b) for b in ensembles[0].distances], "and")
    said = f"Trace distance to the dephased state on blocks of {blocks} {_sites(ensembles[0].distances)}: "
    said += "; ".join(f"{_where(e)} {_row(e.distances)}{_spans(e)}" for e in ensembles) + f".{beyond}"
    if comparison.statistics:
        return said
    bounds = {b: x for b, x in comparison.block_bounds.items() if x < 1}
    if not bounds:
        return f"{said} No bound on the temporal fluctuations of a block is below 1."
    each = listing([f"{_n(x)} for {plural(b, 'site')}" for b, x in bounds.items()], "and")
    return f"{said} Bound on temporal fluctuations: {each}."


def describe_ranking(ranking: Ranking | None) -> str:
    """The charges in both orders, see `plot_ranking`."""
    if ranking is None:
        return "The charges were not ranked."
    if not ranking.by_entropy and not ranking.by_distance:
        return f"No charge could be added{': ' + ranking.stuck if ranking.stuck else ''}."
    said = [
        f"Ordered by {word}: {'; '.join(map(_step, steps))}."
        for word, steps in (("entropy", ranking.by_entropy), ("distance", ranking.by_distance))
        if steps
    ]
    return " ".join([*said, ranking.suggestion]).strip()


def describe_trace(comparison: Comparison, observable: str) -> str:
    """Course of an observable in time, see `plot_trace`.

    Raises
    ------
    ValueError
        No such observable.
    """
    name = observable_of(comparison, observable)
    if name not in comparison.traces or not len(comparison.times):
        return "No trace in time was computed."
    times, values = comparison.times, comparison.traces[name]
    said = [
        f"{name} starts at {_n(values[0])} and stays between {_n(values.min())} and {_n(values.max())} "
        f"up to time {number(float(times[-1]), 4)}."
    ]
    text = f"The dephased value is {_n(comparison.truth[name])}"
    if name in comparison.fluctuations:
        text += f" with a temporal standard deviation of {_n(comparison.fluctuations[name])}"
    said.append(text + ".")
    found = [f"{_where(e)} {_n(e.means[name])}" for e in usable(comparison) if name in e.means]
    if found:
        said.append(f"Ensembles: {'; '.join(found)}.")
    if comparison.revival is None:
        said.append("The revival time is not known.")
    else:
        said.append(f"The revival time is {number(comparison.revival, 4)}.")
    if comparison.plateau is not None:
        span = Plateau(*comparison.plateau)
        ends = f"from {number(span.start, 4)} to {number(span.end, 4)}"
        said.append(f"The plateau lasts {ends}." if span.is_open else f"There is no plateau: {ends} is too short.")
    return " ".join(said)


def describe_eigenstates(comparison: Comparison, observable: str) -> str:
    """Values of single eigenstates, see `plot_eigenstates`.

    Raises
    ------
    ValueError
        No such observable.
    """
    name = observable_of(comparison, observable)
    values = np.asarray(comparison.levels.get(name, ()), float)
    known = np.isfinite(values)
    if not known.any():
        return "No values of single eigenstates were computed."
    energies, weights = comparison.levels["energy"][known], comparison.levels["weight"][known]
    inside = " in the sector of the start" if comparison.sharp else ""
    heaviest = int(np.argmax(weights))
    said = [
        f"{plural(int(known.sum()), 'eigenstate')}{inside} with energies from {_n(energies.min())} to "
        f"{_n(energies.max())}: {name} goes from {_n(values[known].min())} to {_n(values[known].max())}.",
        f"The largest weight in the start is {_n(weights[heaviest])}, at energy {_n(energies[heaviest])}, with "
        f"{name} {_n(values[known][heaviest])}.",
        f"The dephased value is {_n(comparison.truth[name])}.",
    ]
    for e in comparison.ensembles:
        if e.label == "Gaussian window" and name in e.means and bool(e.sector) == bool(comparison.sharp):
            middle, width = comparison.window.get("mean"), comparison.window.get("width")
            said.append(f"The window of width {_n(width)} about {_n(middle)} has {_n(e.means[name])}.")
    for e in comparison.ensembles:
        if name in e.ranges:
            low, high = e.ranges[name]
            said.append(f"In the window 10 % of the eigenstates lie below {_n(low)} and 10 % above {_n(high)}.")
    return " ".join(said)


def describe_sizes(series: SizeSeries, what: str | int, *, sector: bool = False) -> str:
    """Deviation of an observable, or distance of a block, by size, see `plot_sizes`.

    Raises
    ------
    ValueError
        No such observable or block.
    """
    read = reading(series, what)
    head = f"Trace distance on {plural(what, 'site')}" if isinstance(what, int) else f"Deviation of {what}"
    said = []
    for label in series.labels:
        sizes, values = read(label, what, sector=sector)
        if len(sizes):
            each = listing([f"{_n(x)} at L = {n}" for n, x in zip(sizes, values, strict=True)], "and")
            said.append(f"{label} {each}")
    where = " inside the sector of the start" if sector else ""
    return f"{head}{where}: {'; '.join(said)}." if said else f"No ensemble has values{where}."


def describe_scatter(series: SizeSeries, observable: str) -> str:
    """Scatter of eigenstate values by the number of levels, see `plot_scatter`.

    Raises
    ------
    ValueError
        No such observable.
    """
    for c in series.comparisons:
        observable_of(c, observable)
    sizes, dimensions, scatter = series.scatter(observable)
    if not len(sizes):
        return "No sector has enough levels for a test."
    if scatter.max() <= _ROUNDING:
        return "All eigenstates have the same value."
    rows = zip(scatter, sizes, dimensions, strict=True)
    each = listing([f"{_n(x)} at {plural(int(n), 'site')} ({plural(int(d), 'level')})" for x, n, d in rows], "and")
    said = f"Scatter of {observable} over the eigenstates of one sector about their running mean: {each}."
    if len(sizes) >= 3 and scatter.min() > _ROUNDING and len(set(dimensions)) > 1:
        power = decay_exponent(dimensions.tolist(), scatter.tolist())
        said += (
            f" It goes as the number of levels to the power {_n(-power)}; where eigenstates thermalise the power "
            "is -1/2, where conserved quantities abound it is near 0."
        )
    return said


def describe_widths(scan: WindowScan | None, *, canonical: float | None = None, sector: bool = False) -> str:
    """Slope of the entropy by width of the window, see `plot_widths`."""
    if scan is None or not scan.windows:
        return "No window is well above the level spacing."
    each = [f"{_n(w.beta)} at width {_n(w.width)}" for w in scan.windows]
    said = f"beta of the Gaussian window{' in the sector of the start' if sector else ''} is {listing(each, 'and')}"
    there = " there" if sector else ""
    said += "." if canonical is None else f"; that of the canonical ensemble{there} is {_n(canonical)}."
    if scan.refused:
        narrow = listing([_n(width) for width, _ in scan.refused], "and")
        word = "Width" if len(scan.refused) == 1 else "Widths"
        said += f" {word} too close to the level spacing: {narrow}."
    return said


def _step(step: Step) -> str:
    return (
        f"{step.charge} (entropy drop {_n(step.entropy_drop)} nats, predicted {_n(step.predicted_drop)}; distance on "
        f"{listing([str(b) for b in step.distances], 'and')} {_sites(step.distances)} {_row(step.distances)})"
    )


def _where(e: Ensemble) -> str:
    return f"{e.label} in the sector of the start" if e.sector else e.label


def _sites(blocks: Mapping[int, float]) -> str:
    return "site" if list(blocks) == [1] else "sites"


def _row(values: Mapping[int, float]) -> str:
    return listing([_n(x) for x in values.values()], "and")


def _spans(e: Ensemble) -> str:
    """Quantiles of the distances of single eigenstates; empty for ensembles."""
    if not e.distance_ranges:
        return ""
    each = [f"{_n(low)} to {_n(high)}" for low, high in e.distance_ranges.values()]
    return f" (medians; 10 % to 90 % {listing(each, 'and')})"


def _n(x: float | None) -> str:
    return number(x if x is None or abs(x) > _ROUNDING else 0.0, 3)


def _signed(x: float) -> str:
    text = _n(x)
    return text if text.startswith("-") or text in ("0", "–") else f"+{text}"

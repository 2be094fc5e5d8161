"""The figures of a run: which ones there are, what stands under them, and what they say in words.

Floor: app.  Drawing is done by `maxent.plots`, computing by `maxent.diagnose`.  The same result gives the same bytes.
Must not know: files, HTML pages.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations
from typing import Any

import numpy as np

from maxent.text import combination, listing, number, plural

__all__ = ["Figure", "draw", "recoloured"]

#: Pairs of charges that are drawn; the ones with the largest part in the certificate, or the first ones.
PAIRS = 10
#: Seconds of a usual processor for all regions together.
SECONDS = 2.0


@dataclass(frozen=True)
class Figure:
    """One figure.

    Parameters
    ----------
    name : str
        Name of its file without ending; letters, digits and hyphens.
    title : str
        What it shows, in a few words.
    caption : str
        How to read it, in a sentence.
    words : str
        What is to be seen in it, with the numbers: for a reader who does not see it.
    svg : str
        The figure, an ``svg`` element with title and words inside.
    study : bool, optional
        Whether it belongs to the comparison of ensembles.
    section : str, optional
        Name of the further section that it belongs to.
    """

    name: str
    title: str
    caption: str
    words: str
    svg: str
    study: bool = False
    section: str = ""


def draw(result: Any, *, labels: Sequence[str] = ()) -> tuple[Figure, ...]:
    """Draw every figure that has something to show for a result.

    Parameters
    ----------
    result : Result
    labels : sequence of str, optional
        Names of the listed states.

    Returns
    -------
    tuple of Figure
    """
    found = [*_regions(result), _populations(result, labels), _spectrum(result), _convergence(result)]
    return tuple(f for f in found if f is not None)


def recoloured(svg: str) -> str:
    """The figure with colours that a page may change (for a dark screen, say), and that stay the same elsewhere."""
    from maxent.plots.style import COLOUR

    for word, colour in COLOUR.items():
        svg = svg.replace(f": {colour}", f": var(--figure-{word}, {colour})")
    return svg


# ---------------------------------------------------------------------- regions


def _regions(result: Any) -> list[Figure]:
    pairs = _pairs(result)
    named: set[str] = set()
    out = []
    for pair in pairs:
        figure = _region(result, pair, SECONDS / len(pairs), named)
        if figure is not None:
            out.append(figure)
    return out


def _pairs(result: Any) -> list[tuple[str, ...]]:
    """Pairs worth drawing, in the order of the charges; a charge alone when there is but one."""
    names = list(result.names)
    if len(names) < 2:
        return [(n,) for n in names]
    pairs: list[tuple[str, ...]] = list(combinations(names, 2))
    if len(pairs) > PAIRS and result.certificate is not None:
        scale = dict(zip(names, result.outcome.problem.family.scale, strict=True))
        part = {n: abs(result.certificate.direction[n]) * scale[n] for n in names}
        largest = sorted(pairs, key=lambda pair: (-part[pair[0]] - part[pair[1]], pairs.index(pair)))[:PAIRS]
        return [pair for pair in pairs if pair in largest]
    return pairs[:PAIRS]


def _region(result: Any, pair: tuple[str, ...], seconds: float, named: set[str]) -> Figure | None:
    from maxent.plots import plot_region, to_svg
    from maxent.plots.plane import marks, positions, reachable, supporting_line

    alone = len(pair) == 1
    at = positions(result.names, None if alone else pair)
    numbers = reachable(result, at, seconds=seconds)
    if numbers is None:
        return None
    points, line = marks(result, at), supporting_line(result, at)
    say = lambda p: listing([f"{n} {number(x, 6)}" for n, x in zip(pair, p, strict=False)], last="and")
    words = [_extent(pair, numbers.corners) if numbers.bounded else "The reachable values have no end."]
    words += [f"The {word} is at {say(point)}." for word, point in points.items()]
    if line is not None:
        direction = dict(zip(pair, line[0], strict=False))
        words.append(f"The certificate is the line {combination(direction, 4)} = {number(line[1], 6)}.")
    free = ", whatever the other charges are" if len(result.names) > 2 else ""
    caption = f"All {'values' if alone else 'pairs of values'} that states can have{free}."
    title = f"Reachable values of {listing(pair, 'and')}"
    name = _unique("region-" + "-".join(_slug(n) for n in pair), named)
    ax = plot_region(result, pair=None if alone else pair, numbers=numbers)
    text = " ".join(words)
    return Figure(name, title, caption, text, to_svg(ax, title=title, description=text, name=name))


def _extent(pair: Sequence[str], corners: np.ndarray) -> str:
    low, high = corners.min(axis=0), corners.max(axis=0)
    every = [
        f"{n} from {number(a, 6)} to {number(b, 6)}" if b > a else f"{n} is always {number(a, 6)}"
        for n, a, b in zip(pair, low, high, strict=False)
    ]
    return f"Reachable: {listing(every, 'and')}."


def _slug(name: str) -> str:
    return re.sub(r"[^a-z0-9]+", "-", name.lower()).strip("-")[:30].strip("-") or "charge"


def _unique(name: str, named: set[str]) -> str:
    """`name`, with a number behind it if another figure has it: names may differ in what files cannot show."""
    count, out = 1, name
    while out in named:
        count += 1
        out = f"{name}-{count}"
    named.add(out)
    return out


# ---------------------------------------------------------------------- the state and the way to it


def _populations(result: Any, labels: Sequence[str]) -> Figure | None:
    from maxent.plots import plot_populations, to_svg
    from maxent.plots.bars import SINGLE, populations

    p = populations(result.state)
    if p is None or len(p) < 2:
        return None
    limit = " of the limit state" if str(result.verdict) == "boundary" else ""
    if len(p) <= SINGLE:
        every = labels if len(labels) == len(p) else [f"level {k + 1}" for k in range(len(p))]
        words = "Probabilities: " + ", ".join(f"{n} {number(x, 4)}" for n, x in zip(every, p, strict=True)) + "."
        caption = f"Probabilities{limit}. Dashed: all alike."
    else:
        down = np.sort(p)[::-1]
        half = int(np.searchsorted(np.cumsum(down), 0.5)) + 1
        words = (
            f"{plural(len(p), 'level')}: the most probable has {number(down[0], 4)}, the least {number(down[-1], 2)}; "
            f"half of the probability lies in {plural(half, 'level')}."
        )
        caption = f"Probabilities of the levels{limit}, in descending order. Dashed: all alike."
    title, name = "Populations of the state", "populations"
    svg = to_svg(plot_populations(result, labels=labels), title=title, description=words, name=name)
    return Figure(name, title, caption, words, svg)


def _spectrum(result: Any) -> Figure | None:
    from maxent.plots import plot_spectrum, to_svg

    found = result.conditioning
    if found is None or len(found.spectrum) < 2:
        return None  # a single charge is correlated with nothing
    words = (
        f"Variances: {', '.join(number(x, 3) for x in found.spectrum)}. "
        f"Stiffest: {combination(found.stiffest.coefficients, 3)}. "
        f"Sloppiest: {combination(found.sloppiest.coefficients, 3)}."
    )
    title, name = "Spectrum of the correlations", "spectrum"
    caption = (
        "Variances of the independent combinations of the charges, each charge in units of its standard deviation. "
        "What lies far to the left of 1 is fixed badly by the targets."
    )
    svg = to_svg(plot_spectrum(result), title=title, description=words, name=name)
    return Figure(name, title, caption, words, svg)


def _convergence(result: Any) -> Figure | None:
    from maxent.plots import plot_convergence, to_svg

    if len(result.trace) < 2:
        return None
    first, last = result.trace[0][0], result.trace[-1][0]
    words = (
        f"The residual goes from {number(first, 2)} to {number(last, 2)} in {plural(len(result.trace) - 1, 'step')}."
    )
    title, name = "Course of the iteration", "convergence"
    caption = "Residual per Newton step, in units of the spread of the charges. Dashed: what rounding explains."
    svg = to_svg(plot_convergence(result), title=title, description=words, name=name)
    return Figure(name, title, caption, words, svg)


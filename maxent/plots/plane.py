"""The reachable region of two charges, with the target, the state and the certificate in it.  Floor: plots."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Polygon

from maxent.diagnose.region import Region, region
from maxent.plots.style import COLOUR, SIZE, drawing, legend, name_of_axis, say

__all__ = ["marks", "plot_region", "positions", "reachable", "supporting_line"]

_STATE = {"boundary": "limit state", "solved": "state"}


def plot_region(
    result: Any,
    *,
    pair: Sequence[str] | None = None,
    ax: Axes | None = None,
    numbers: Region | None = None,
    units: Mapping[str, str] | None = None,
) -> Axes:
    """What two charges can be together, and what was asked of them.

    The region is the shadow of all states on the plane of the two charges, the others left free.  The line is the
    certificate: with the other charges at their targets, no state lies on its far side.

    Parameters
    ----------
    result : Result
    pair : two names, optional
        The first two charges by default.  A single charge is drawn as an interval.
    ax : Axes, optional
        Where to draw; a new figure without a window by default.
    numbers : Region, optional
        The region, where it is known already; by default it is computed (about a second at most).
    units : dict of str to str, optional
        Units of the charges, for the labels.

    Returns
    -------
    Axes

    Raises
    ------
    ValueError
        Names that are no charges of the result, or twice the same.
    """
    at = positions(result.names, pair)
    found = reachable(result, at) if numbers is None else numbers
    with drawing(ax, SIZE if at[1] is not None else (3.4, 1.1)) as ax:
        if found is None:
            return say(ax, "The family is too large to draw what it can reach.")
        points = marks(result, at)
        _window(ax, found, points)
        _shape(ax, found)
        line = supporting_line(result, at)
        if line is not None:
            foot, along = _on_line(ax, *line, points["target"])
            style: dict[str, Any] = {"color": COLOUR["ink"], "lw": 0.9, "ls": (0, (5, 2))}
            ax.axline(tuple(foot), tuple(foot + along), label="certificate", **style)
        _points(ax, points)
        names = ["" if k is None else result.names[k] for k in at]
        x, y = (name_of_axis(n, (units or {}).get(n)) for n in names)
        ax.set_xlabel(x, parse_math=False)
        ax.set_ylabel(y, parse_math=False)
        if at[1] is None:
            ax.set_yticks([])
            ax.spines["left"].set_visible(False)
        legend(ax)
        return ax


def positions(names: Sequence[str], pair: Sequence[str] | None = None) -> tuple[int, int | None]:
    """Positions of a pair of charges; the second is None where there is but one charge.

    Raises
    ------
    ValueError
        Names that are no charges, or not two different ones.
    """
    if pair is None and len(names) == 1:
        return 0, None
    chosen = tuple(names[:2]) if pair is None else tuple(pair)
    for name in chosen:
        if name not in names:
            raise ValueError(f"no charge {name!r}; the charges are {', '.join(map(repr, names))}")
    if len(chosen) != 2 or len(set(chosen)) != 2:
        raise ValueError(f"a region is that of two different charges, not of {list(chosen)}")
    return names.index(chosen[0]), names.index(chosen[1])


def reachable(result: Any, pair: tuple[int, int | None], *, seconds: float = 1.0) -> Region | None:
    """The region of a pair for a result, see `maxent.diagnose.region`."""
    points = marks(result, pair)
    family = result.outcome.problem.family
    return region(family, pair, origin=points["target"], around=tuple(points.values()), seconds=seconds)


def marks(result: Any, pair: tuple[int, int | None]) -> dict[str, np.ndarray]:
    """The points of a figure by their word: target, state or limit state, nearest; each (2,)."""
    pick = lambda values: np.array([0.0 if k is None else float(values[result.names[k]]) for k in pair])
    out = {"target": pick(result.targets)}
    if result.state is not None:
        out[_STATE[str(result.verdict)]] = pick(result.values)
    if result.nearest is not None:
        out["nearest"] = pick(result.nearest.targets)
    return out


def supporting_line(result: Any, pair: tuple[int, int | None]) -> tuple[np.ndarray, float] | None:
    """The certificate in a plane, ``a.x = height`` with the other charges at their targets.

    Returns
    -------
    tuple of (2,) ndarray and float, or None
        None where there is no certificate, or the two charges have no part in it.
    """
    found = result.certificate
    if found is None:
        return None
    v = {n: float(c) for n, c in found.direction.items()}
    scale = dict(zip(result.names, result.outcome.problem.family.scale, strict=True))
    here = [None if k is None else result.names[k] for k in pair]
    largest = max(abs(v[n]) * scale[n] for n in v)
    if max(abs(v[n]) * scale[n] for n in here if n is not None) < 1e-6 * largest:
        return None
    a = np.array([0.0 if n is None else v[n] for n in here])
    return a, float(a @ marks(result, pair)["target"] + found.lowest - found.asked)


def _window(ax: Axes, found: Region, points: Mapping[str, np.ndarray]) -> None:
    """Limits that hold the region and all points; set first, so that a line without end changes nothing."""
    inside = np.array([*found.corners, *points.values()])
    low, high = inside.min(axis=0), inside.max(axis=0)
    pad = np.where(high > low, 0.07 * (high - low), np.maximum(0.5 * np.abs(high), 0.5))
    if not found.bounded:
        pad = np.where(high > low, 0.0, pad)
    ax.set_xlim(low[0] - pad[0], high[0] + pad[0])
    ax.set_ylim(low[1] - pad[1], high[1] + pad[1])
    ax.locator_params(nbins=5)


def _shape(ax: Axes, found: Region) -> None:
    corners, closed = found.corners, bool(found.outline.all())
    if len(corners) == 1:
        ax.plot(*corners.T, marker="s", ms=5, color=COLOUR["edge"], ls="none", label="reachable")
    elif len(corners) == 2:
        ax.plot(*corners.T, color=COLOUR["edge"], lw=1.6, label="reachable")
    elif len(corners) > 2:
        edge = COLOUR["edge"] if closed else "none"
        ax.add_patch(Polygon(corners, closed=True, fc=COLOUR["fill"], ec=edge, lw=1.0, label="reachable"))
    if len(corners) > 2 and not closed:
        for p, q, real in zip(corners, np.roll(corners, -1, axis=0), found.outline, strict=True):
            if real:
                ax.plot(*np.array([p, q]).T, color=COLOUR["edge"], lw=1.0)


def _points(ax: Axes, points: Mapping[str, np.ndarray]) -> None:
    """Target as an open circle, the state as a dot that fits into it, the nearest target as a diamond."""
    target = points["target"]
    for word, point in points.items():
        if word == "nearest":
            ax.plot(*np.array([target, point]).T, color=COLOUR["mark"], lw=0.8, ls=":", clip_on=False)
            style: dict[str, Any] = {"marker": "D", "ms": 4.5, "mfc": COLOUR["ink"], "mec": COLOUR["ink"]}
        elif word == "target":
            style = {"marker": "o", "ms": 7.5, "mfc": "none", "mec": COLOUR["mark"], "mew": 1.4}
        else:
            style = {"marker": "o", "ms": 3.0, "mfc": COLOUR["ink"], "mec": COLOUR["ink"]}
        ax.plot(*point[:, None], ls="none", label=word, clip_on=False, zorder=5, **style)


def _on_line(ax: Axes, a: np.ndarray, height: float, near: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """A point of the line ``a.x = height`` beside `near`, and a step along it, both of the size of the window."""
    size = np.array([np.ptp(ax.get_xlim()), np.ptp(ax.get_ylim())])
    scaled = a * size
    foot = near + (height - a @ near) * scaled * size / (scaled @ scaled)
    return foot, np.array([-scaled[1], scaled[0]]) / np.linalg.norm(scaled) * size

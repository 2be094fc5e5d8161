"""Bars: the spectrum of the correlations, and the populations of the state.  Floor: plots."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

from maxent.plots.style import COLOUR, decades, drawing, legend, say, short

__all__ = ["plot_populations", "plot_spectrum"]

#: States that are drawn one by one.
SINGLE = 24
#: Populations below this share of the largest are left out of a logarithmic axis.
FAINT = 1e-12


def plot_spectrum(result: Any, *, ax: Axes | None = None) -> Axes:
    """Variances of the independent combinations of the charges, each charge in units of its standard deviation.

    Bars start at 1, the variance of uncorrelated charges: to the right what the targets fix well, to the left what
    they fix badly.

    Parameters
    ----------
    result : Result
    ax : Axes, optional
        Where to draw; a new figure without a window by default.

    Returns
    -------
    Axes
    """
    found = result.conditioning
    count = 0 if found is None else len(found.spectrum)
    with drawing(ax, (3.4, float(np.clip(1.15 + 0.34 * count, 1.5, 5.0)))) as ax:
        if found is None:
            return say(ax, "No charge fluctuates in the state." if result.state else "There is no state.")
        size = np.array(found.spectrum)
        row = np.arange(count)
        # never less than a factor of two each way, so that a small correlation looks small
        low, high = min(size[size > 0].min(), 0.5), max(size.max(), 2.0)
        pad = (high / low) ** 0.06
        left, right = low / pad, high * pad
        shown = np.maximum(size, left)
        ax.set_xscale("log")
        ax.axvline(1.0, color=COLOUR["soft"], lw=0.7, zorder=0.5)
        ax.barh(row, shown - 1.0, left=1.0, height=0.3, color=COLOUR["fill"], ec=COLOUR["edge"], lw=0.9)
        ax.plot(shown, row, ls="none", marker="o", ms=3.5, color=COLOUR["edge"], clip_on=False)
        ends = {0: ("stiffest", found.stiffest), count - 1: ("sloppiest", found.sloppiest)}
        for k, (word, what) in ends.items() if count > 1 else ((0, ("the only one", found.stiffest)),):
            note = ax.annotate(
                f"{word}: {_few(what.coefficients)}", (0.0, k - 0.15), xycoords=("axes fraction", "data"),
                xytext=(2, 3), textcoords="offset points", fontsize=7.0, color=COLOUR["ink"], parse_math=False,
                annotation_clip=False, bbox={"fc": COLOUR["page"], "ec": "none", "pad": 0.8}, zorder=0.8,
            )  # fmt: skip
            note.set_in_layout(False)
        ax.set_xlim(left, right)
        ax.set_ylim(count - 0.5, -0.75)
        ax.set_yticks(row, [str(k + 1) for k in row])
        ax.tick_params(axis="y", length=0)
        ax.spines["left"].set_visible(False)
        decades(ax.xaxis, left, right)
        ax.set_xlabel("variance (1: uncorrelated)")
        ax.set_ylabel("combination")
        return ax


def plot_populations(result: Any, *, labels: Sequence[str] = (), ax: Axes | None = None) -> Axes:
    """Probabilities of the states: one by one for a short list, in descending order for a long one.

    Parameters
    ----------
    result : Result
    labels : sequence of str, optional
        Names of the listed states.
    ax : Axes, optional
        Where to draw; a new figure without a window by default.

    Returns
    -------
    Axes
    """
    with drawing(ax) as ax:
        p = populations(result.state)
        if p is None:
            return say(ax, "There is no state." if result.state is None else "The state lists no populations.")
        _few_states(ax, p, labels) if len(p) <= SINGLE else _many_states(ax, p)
        if str(result.verdict) == "boundary":
            ax.set_xlabel(f"{ax.get_xlabel()} (on the face)", parse_math=False)
        ax.set_ylabel("probability")
        legend(ax)
        return ax


def populations(state: Any) -> np.ndarray | None:
    """Probabilities of listed states, or eigenvalues of a density matrix, descending; None where there are none."""
    listed = getattr(state, "probabilities", None)
    return getattr(state, "populations", None) if listed is None else listed


def _few_states(ax: Axes, p: np.ndarray, labels: Sequence[str]) -> None:
    at, named = np.arange(1, len(p) + 1), len(labels) == len(p)
    ax.bar(at, p, width=0.62, color=COLOUR["fill"], ec=COLOUR["edge"], lw=0.9)
    _equal(ax, len(p))
    if named:
        words = [short(x, 14) for x in labels]
        slanted = max(map(len, words)) * len(words) > 44
        ha = "right" if slanted else "center"
        ax.set_xticks(at, words, rotation=45 if slanted else 0, ha=ha, rotation_mode="anchor", parse_math=False)
    else:
        ax.xaxis.set_major_locator(MaxNLocator(12, integer=True))
    ax.tick_params(axis="x", length=0)
    ax.set_xlim(0.4, len(p) + 0.6)
    ax.set_xlabel("state" if named else "level")


def _equal(ax: Axes, count: int) -> None:
    ax.axhline(1 / count, color=COLOUR["soft"], lw=0.9, ls=(0, (4, 2)), label=f"equal (1/{count})")


def _many_states(ax: Axes, p: np.ndarray) -> None:
    p = np.sort(p)[::-1]
    shown = p[p > FAINT * p[0]]
    at = np.arange(1, len(shown) + 1)
    ax.plot(at, shown, color=COLOUR["edge"], marker="." if len(shown) <= 64 else None, ms=4, label="populations")
    _equal(ax, len(p))
    ax.set_xlim(0, 1.02 * len(shown) + 1)
    if shown[-1] < 0.05 * shown[0]:
        ax.set_yscale("log")
        low, high = shown[-1] / 1.6, 1.6 * max(shown[0], 1 / len(p))
        ax.set_ylim(low, high)
        decades(ax.yaxis, low, high)
    else:
        ax.set_ylim(0.0, 1.08 * max(shown[0], 1 / len(p)))
    ax.set_xlabel("level, most probable first")


def _few(coefficients: Mapping[str, float], most: int = 44) -> str:
    """A combination in one line, largest terms first, as many as fit."""
    text = ""
    order = sorted((n for n in coefficients if abs(coefficients[n]) > 1e-12), key=lambda n: -abs(coefficients[n]))
    for name in order:
        c = coefficients[name]
        size = f"{abs(c):.2g}".removesuffix(".0")
        sign = (" - " if c < 0 else " + ") if text else ("-" if c < 0 else "")
        term = f"{sign}{'' if size == '1' else size + ' '}{short(name, 26)}"
        if text and len(text) + len(term) > most:
            return text + " …"
        text += term
    return text

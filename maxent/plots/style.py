"""One look for every figure, and its text as SVG.  Floor: plots.

Colours keep apart in grey and for colour-blind eyes (Okabe and Ito's blue and vermilion against ink and grey), and no
meaning rests on colour alone: every mark has its own shape.  Names are never read as formulas.
Must not know: results.
"""

from __future__ import annotations

import io
import re
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import Formatter, LogLocator, NullLocator

__all__ = ["COLOUR", "decades", "drawing", "legend", "name_of_axis", "say", "short", "to_svg"]

COLOUR = {
    "ink": "#1d2329",
    "soft": "#5b6672",
    "rule": "#c9d0d8",
    "fill": "#dfe9f2",
    "edge": "#0072b2",
    "mark": "#b8500c",
    "page": "#ffffff",
}

#: Inches: one column of a journal page.
SIZE = (3.4, 2.55)

_LOOK: Any = {
    "text.parse_math": False,
    "text.color": COLOUR["ink"],
    "font.family": ["DejaVu Sans"],
    "font.size": 8.0,
    "axes.labelsize": 8.0,
    "axes.titlesize": 8.0,
    "xtick.labelsize": 7.5,
    "ytick.labelsize": 7.5,
    "legend.fontsize": 7.5,
    "axes.edgecolor": COLOUR["soft"],
    "axes.labelcolor": COLOUR["ink"],
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.formatter.useoffset": False,
    "axes.formatter.use_mathtext": False,
    "axes.axisbelow": True,
    "xtick.color": COLOUR["soft"],
    "ytick.color": COLOUR["soft"],
    "xtick.labelcolor": COLOUR["ink"],
    "ytick.labelcolor": COLOUR["ink"],
    "xtick.major.width": 0.7,
    "ytick.major.width": 0.7,
    "xtick.major.size": 3.0,
    "ytick.major.size": 3.0,
    "lines.linewidth": 1.2,
    "legend.frameon": False,
    "figure.facecolor": "none",
    "axes.facecolor": "none",
    "savefig.facecolor": "none",
    "svg.fonttype": "none",
    "svg.hashsalt": "maxent",
}

#: Layout is done with the first and widest of these, so that no reader's font makes text collide.
_FONTS = "'Source Sans 3', 'Segoe UI', 'Helvetica Neue', Arial, 'DejaVu Sans', sans-serif"

_RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


@contextmanager
def drawing(ax: Axes | None, size: tuple[float, float] = SIZE) -> Iterator[Axes]:
    """The axes to draw on, in the look of the house: the ones given, or those of a new figure without a window.

    Parameters
    ----------
    ax : Axes or None
    size : tuple of float, optional
        Width and height of a new figure, in inches.

    Yields
    ------
    Axes
    """
    if ax is not None and not isinstance(ax, Axes):
        raise TypeError(f"ax must be a Matplotlib Axes or None, not {type(ax).__name__}")
    with matplotlib.rc_context(_LOOK):
        yield Figure(figsize=size, layout="constrained").add_subplot() if ax is None else ax


class _Powers(Formatter):
    """Decades as ``10⁻³``: plain text, so that it needs no formula reader."""

    def __call__(self, x: float, pos: int | None = None) -> str:
        return f"10{f'{np.log10(x):.0f}'.translate(_RAISED)}"


class _Plain(Formatter):
    """Numbers as they are."""

    def __call__(self, x: float, pos: int | None = None) -> str:
        return f"{x:.6g}"


def decades(axis: Any, low: float, high: float) -> None:
    """Give a logarithmic axis few labelled ticks: powers of ten, or plain numbers where it spans less than three."""
    if high > 1000 * low:
        axis.set_major_locator(LogLocator(numticks=7))
        axis.set_major_formatter(_Powers())
    else:
        axis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0), numticks=6))
        axis.set_major_formatter(_Plain())
    axis.set_minor_locator(NullLocator())


def name_of_axis(name: str, unit: str | None = None) -> str:
    """Label of an axis, with the unit where there is one; long names are shortened in the middle."""
    return short(name, 40) if unit is None else f"{short(name, 40)} ({unit})"


def short(text: str, most: int) -> str:
    """`text` in one line of at most `most` characters.

    Examples
    --------
    >>> short("magnetisation", 40), short("a very long name of a charge", 12)
    ('magnetisation', 'a very…harge')
    """
    text = " ".join(text.split())
    return text if len(text) <= most else f"{text[: most - most // 2]}…{text[len(text) - most // 2 + 1 :]}"


def legend(ax: Axes) -> None:
    """Legend in one line above the axes, where it hides nothing."""
    found = ax.legend(
        loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=5, borderaxespad=0.2, borderpad=0.2, handlelength=1.3,
        handletextpad=0.4, columnspacing=1.0,
    )  # fmt: skip
    for text in found.get_texts():
        text.set_parse_math(False)


def say(ax: Axes, text: str) -> Axes:
    """Empty axes with a sentence: why there is nothing to draw."""
    ax.set_axis_off()
    ax.text(
        0.5, 0.5, text, transform=ax.transAxes, ha="center", va="center", color=COLOUR["soft"], wrap=True,
        parse_math=False,
    )  # fmt: skip
    return ax


def to_svg(ax: Axes, *, title: str, description: str, name: str) -> str:
    """The figure of some axes as an SVG element with a text alternative.

    Parameters
    ----------
    ax : Axes
    title, description : str
        What a reader is told who does not see the figure.
    name : str
        Letters, digits and hyphens; all ids of the element begin with it, so that several fit on one page.

    Returns
    -------
    str
        An ``svg`` element without prolog: the same text for the same figure, with no clock value and no address.

    Raises
    ------
    ValueError
        A name with other characters.
    """
    if not re.fullmatch(r"[A-Za-z][A-Za-z0-9-]*", name):
        raise ValueError(f"name must be letters, digits and hyphens, not {name!r}")
    figure = ax.get_figure(root=True)
    assert figure is not None
    stream = io.StringIO()
    with matplotlib.rc_context(_LOOK):
        nothing = dict.fromkeys(("Date", "Creator", "Format", "Type"))
        figure.savefig(stream, format="svg", metadata=nothing)
    text = stream.getvalue()
    text = text[text.index("<svg") :]
    text = re.sub(r'\bid="([^"]*)"', rf'id="{name}-\1"', text)
    text = re.sub(r'href="#([^"]*)"', rf'href="#{name}-\1"', text)
    text = re.sub(r"url\(#([^)]*)\)", rf"url(#{name}-\1)", text)
    text = text.replace("'DejaVu Sans'", _FONTS)
    text = re.sub(r"[ \t]+$", "", text, flags=re.M)
    head = f'<svg role="img" aria-labelledby="{name}-title {name}-description"'
    start, rest = text.removeprefix("<svg").split(">", 1)
    words = f'<title id="{name}-title">{_escaped(title)}</title>'
    more = f'<desc id="{name}-description">{_escaped(description)}</desc>'
    return f"{head}{start}>\n {words}\n {more}{rest}"


def _escaped(text: str) -> str:
    return text.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")

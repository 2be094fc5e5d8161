"""Curves over a common abscissa: the numbers as they are, gaps left out, words beside them."""

import numpy as np
import pytest
from matplotlib.figure import Figure

from maxent import plots


def test_lines_are_the_numbers():
    x, y = np.arange(5), np.array([1.0, 0.1, 0.0, np.nan, 1e-3])
    ax = plots.plot_curves(x, {"a": y, "b": y + 1}, abscissa="charges", ordinate="nats", log=True)
    first, second = ax.get_lines()
    np.testing.assert_array_equal(first.get_ydata(), [1.0, 0.1, np.nan, np.nan, 1e-3])  # zero has no logarithm
    np.testing.assert_array_equal(second.get_ydata(), y + 1)
    assert (ax.get_yscale(), ax.get_xlabel(), ax.get_ylabel()) == ("log", "charges", "nats")
    assert [t.get_text() for t in ax.get_legend().get_texts()] == ["a", "b"]
    assert first.get_linestyle() != second.get_linestyle() and first.get_marker() != second.get_marker()


def test_zero_is_drawn_on_a_linear_axis():
    axes = Figure().add_subplot()
    ax = plots.plot_curves([0.0, 0.5], {"a": [0.0, -1.0]}, abscissa="k", ax=axes)
    assert ax is axes
    np.testing.assert_array_equal(ax.get_lines()[0].get_ydata(), [0.0, -1.0])


@pytest.mark.parametrize("values", [[np.nan, np.nan], [0.0, -1.0]])
def test_nothing_to_draw_is_said(values):
    ax = plots.plot_curves([1, 2], {"a": values}, abscissa="x", log=True)
    assert "No numbers" in ax.texts[0].get_text()


def test_words():
    words = plots.describe_curves([1, 2, 4], {"gap": [0.5, 0.25, np.nan], "none": [np.nan] * 3}, abscissa="charges")
    assert words == "gap: 0.5 at charges 1, 0.25 at 2, from 0.25 to 0.5 in all. none: no values."

"""Figures of a result: functions that only draw.  Floor: plots.

Each takes a result, or a comparison of ensembles after a quench, and an optional Matplotlib ``Axes`` and returns the
``Axes``; nothing is shown, no global state is touched.  Numbers come from what is drawn and from `maxent.diagnose`.
`to_svg` writes a figure as text, the same text for the same figure; ``describe_x`` says in words what ``plot_x`` shows
of a comparison.

Examples
--------
>>> import maxent, maxent.plots
>>> from maxent.families import Microstates
>>> trap = Microstates({"energy": [0.0, 1.0, 2.0], "energy squared": [0.0, 1.0, 4.0]})
>>> ax = maxent.plots.plot_region(maxent.solve(trap, {"energy": 1.0, "energy squared": 1.6}))
>>> ax.get_xlabel(), ax.get_ylabel()
('energy', 'energy squared')
"""

from maxent.plots.bars import plot_populations, plot_spectrum
from maxent.plots.curves import describe_curves, plot_curves
from maxent.plots.dynamics import plot_eigenstates, plot_trace, plot_widths
from maxent.plots.plane import plot_region
from maxent.plots.quench import plot_distances, plot_ensembles, plot_ranking, plot_scatter, plot_sizes
from maxent.plots.steps import plot_convergence
from maxent.plots.style import to_svg
from maxent.plots.words import (
    describe_distances,
    describe_eigenstates,
    describe_ensembles,
    describe_ranking,
    describe_scatter,
    describe_sizes,
    describe_trace,
    describe_widths,
)

__all__ = [
    "describe_curves", "describe_distances", "describe_eigenstates", "describe_ensembles", "describe_ranking",
    "describe_scatter", "describe_sizes", "describe_trace", "describe_widths", "plot_convergence", "plot_curves",
    "plot_distances", "plot_eigenstates", "plot_ensembles", "plot_populations", "plot_ranking", "plot_region",
    "plot_scatter", "plot_sizes", "plot_spectrum", "plot_trace", "plot_widths", "to_svg",
]  # fmt: skip

"""Figures of a result: functions that only draw.  Floor: plots.

Each takes a result and an optional Matplotlib ``Axes`` and returns the ``Axes``; nothing is shown, no global state is
touched.  Numbers come from the result and from `maxent.diagnose`.  `to_svg` writes a figure as text, the same text for
the same figure.

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
from maxent.plots.plane import plot_region
from maxent.plots.steps import plot_convergence
from maxent.plots.style import to_svg

__all__ = ["plot_convergence", "plot_populations", "plot_region", "plot_spectrum", "to_svg"]

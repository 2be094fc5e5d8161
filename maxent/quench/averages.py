"""Traces in time and temporal fluctuations of a comparison.  Floor: quench."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, NamedTuple

import numpy as np
import scipy.sparse as sp

from maxent.errors import ResourceError
from maxent.quench.evolution import Evolution, evolve
from maxent.quench.setting import Setting
from maxent.quench.yardsticks import revival_time
from maxent.text import plural

__all__ = ["TimeAverages", "time_averages"]


class TimeAverages(NamedTuple):
    """What the dynamics says.

    Attributes
    ----------
    times : (t,) ndarray
    traces : dict of str to (t,) ndarray
    fluctuations : dict of str to float
        Temporal standard deviations over infinite time.
    equal_gaps : int
        Most pairs of levels that share one gap.
    """

    times: np.ndarray
    traces: dict[str, np.ndarray]
    fluctuations: dict[str, float]
    equal_gaps: int


def time_averages(
    setting: Setting, truth: Mapping[str, float], *, times: Any, speed: float | None, resolution: float | None
) -> TimeAverages:
    """Traces and fluctuations of every observable.

    Parameters
    ----------
    setting : Setting
    truth : dict of str to float
        Dephased means.
    times : (t,) array_like or None
        By default 400 up to four revival times.
    speed : float or None
    resolution : float or None
        Time up to which equal gaps are told apart.
    """
    charges, dephased = setting.charges, setting.dephased
    observables = charges.observables or {"": sp.eye_array(setting.start.dimension)}  # gaps are grouped in any case
    if times is None:
        scale = dephased.spectrum.width / charges.sites.size
        last = 4 * revival_time(setting.length, speed) if speed else 60.0 / scale if scale > 0 else 1.0
        times = np.linspace(0.0, last, 400)
    times = np.asarray(times, float)
    try:
        evolution: Evolution = evolve(dephased, observables, progress=setting.progress)
    except ResourceError as refused:
        setting.notes.append(f"No traces in time and no temporal fluctuations: {refused}.")
        return TimeAverages(np.empty(0), {}, {}, max(len(dephased.energies) - 1, 1))  # no gap is shared by more pairs
    if not charges.observables:
        groups = evolution.fluctuation("", resolution=resolution).largest_group
        return TimeAverages(np.empty(0), {}, {}, max(groups, 1))
    traces = {n: evolution.trace(n, times) for n in evolution.names}
    fluctuations, groups = {}, 1
    for name in evolution.names:
        f = evolution.fluctuation(name, resolution=resolution)
        fluctuations[name] = f.standard_deviation
        groups = max(groups, f.largest_group)
        if resolution is not None and abs(f.mean - truth[name]) > 1e-9 * max(1.0, abs(truth[name])):
            setting.notes.append(
                f"Over times up to the resolution {f.resolution:.3g} not all levels dephase: there {name} averages "
                f"{f.mean:.4g}, not {truth[name]:.4g}, and its temporal fluctuation is about that mean."
            )
        if f.cut:
            setting.notes.append(
                f"Temporal fluctuation of {name}: {plural(f.cut, 'chain')} of gaps closer than the resolution "
                f"{f.resolution:.3g} in time had to be cut; the value is an estimate."
            )
    return TimeAverages(times, traces, fluctuations, groups)

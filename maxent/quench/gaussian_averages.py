"""Long-time means, temporal fluctuations and traces of a comparison of free particles.  Floor: quench.

Quadratic observables have closed forms for all three.  Products of Pauli matrices that are not quadratic have traces by
Wick's theorem at every time; their average over all times has a closed form up to four operators, and is else, like
their temporal standard deviation always, taken from times spread evenly over a long window.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np

from maxent.quench.gaussian_charges import GaussianCharges
from maxent.quench.gaussian_evolution import GaussianEvolution
from maxent.quench.gaussian_wick import long_time_words, word_traces
from maxent.quench.yardsticks import revival_time
from maxent.text import listing

__all__ = ["GaussianAverages", "gaussian_averages", "slowest_time"]

#: The long window ends after so many revivals, and so many of its times are looked at.
REVIVALS, SAMPLES = 1000, 400
#: Fraction of the golden ratio: multiples of it modulo 1 are spread evenly.
GOLDEN = 0.5 * (np.sqrt(5.0) - 1.0)


class GaussianAverages(NamedTuple):
    """What the dynamics says; see `Comparison` for the attributes."""

    truth: dict[str, float]
    fluctuations: dict[str, float]
    times: np.ndarray
    traces: dict[str, np.ndarray]


def gaussian_averages(
    charges: GaussianCharges,
    evolution: GaussianEvolution,
    *,
    times: Any,
    length: float,
    speed: float | None,
    notes: list[str],
    progress: Callable[[str], None] | None = None,
) -> GaussianAverages:
    """Long-time means, fluctuations and traces of every observable.

    Parameters
    ----------
    charges : GaussianCharges
    evolution : GaussianEvolution
        Of the quadratic observables.
    times : (t,) array_like or None
        By default 400 up to four revival times.
    length : float
        Sites around the ring; twice those of an open chain.
    speed : float or None
    notes : list of str
        Grows.
    progress : callable, optional
    """
    fastest = max(float(np.abs(m.levels).max(initial=0.0)) for m in evolution.motions)
    revival = revival_time(length, speed) if speed else (15.0 / fastest if fastest else 1.0)
    times = np.linspace(0.0, 4 * revival, 400) if times is None else np.asarray(times, float)
    truth, fluctuations, traces = {}, {}, {}
    for name in evolution.names:
        truth[name] = evolution.long_time(name)
        fluctuations[name] = float(np.sqrt(evolution.variance(name)))
        traces[name] = evolution.trace(name, times)
    parities = [p.parity for p in evolution.start.parts]
    sums = {n: [charges.words(n, p) for p in parities] for n in charges.observables if n not in traces}
    if sums:
        traces |= word_traces(evolution, sums, times, progress=progress)
        last = REVIVALS * revival
        window = last * np.modf(GOLDEN * np.arange(1, SAMPLES + 1))[0]
        seen = word_traces(evolution, sums, window, progress=progress)
        closed = {name: long_time_words(evolution, each) for name, each in sums.items()}
        for name, average in closed.items():
            truth[name] = float(seen[name].mean()) if average is None else average
            fluctuations[name] = float(np.sqrt(np.mean((seen[name] - truth[name]) ** 2)))
        notes.append(
            f"Not quadratic: {listing(closed, 'and')}. Temporal standard deviations are those at {SAMPLES} times up to "
            f"{REVIVALS} revivals" + _sampled([n for n, average in closed.items() if average is None])
        )
    ordered = list(charges.observables)
    by_order = lambda found: {n: found[n] for n in ordered}
    return GaussianAverages(by_order(truth), by_order(fluctuations), times, by_order(traces))


def _sampled(names: list[str]) -> str:
    """What is to be known of long-time means that have no closed form."""
    if not names:
        return "; long-time means have a closed form."
    part = f"1/{np.sqrt(SAMPLES):.0f}"
    return f"; so are long-time means of {listing(names, 'and')}, right to about {part} of these deviations."


def slowest_time(evolution: GaussianEvolution) -> float:
    """1/(smallest difference of two levels): only longer averages dephase everything."""
    gaps = []
    for motion in evolution.motions:
        order = np.argsort(motion.levels)
        steps = np.diff(motion.levels[order])[np.diff(motion.clusters[order]) > 0]
        gaps += steps.tolist()
    return 1.0 / min(gaps) if gaps else 0.0

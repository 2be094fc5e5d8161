"""Microcanonical states: Gaussian and sharp windows in energy and in further charges that commute with it.

A Gaussian window of centre e and width s is the maximum-entropy state of the charges (H, H^2) with multipliers
``(-e/s^2, 1/(2 s^2))``, populations ``p_n ~ exp(-(E_n - e)^2/(2 s^2))``.  Their sum g(e) is the density of states,
smoothed:

    d ln g/de = (<E>_w - e)/s^2 = beta_w,        d beta_w/de = Var_w/s^4 - 1/s^2,

without a histogram.  For a smooth density ``exp(S(E))`` the populations peak where ``S'(E) = (E - e)/s^2``, so that
beta_w is the slope of S at ``<E>_w``, not at e; the centre is therefore shifted until ``<E>_w`` is the energy asked
for.  Both are estimates of a finite system: s must be well above the spacing of the levels, and is refused otherwise.

A sharp window counts the states between two energies; ``S = ln Omega`` depends on its width, and jumps as levels enter
and leave it, so that it is smoothed before it is differentiated.  Floor: quench.  Must not know matrices or lattices:
it works on a list of levels.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from scipy.optimize import brentq
from scipy.special import logsumexp, ndtr

from maxent.quench.levels import Levels, interval, levels, positive, weighted_mean, where

__all__ = ["GaussianWindow", "SharpWindow", "Slope", "WindowScan", "gaussian_window", "scan_widths", "sharp_window"]

#: A width of at least this many mean spacings of distinct levels is well above the spacing.
SPACINGS = 5.0


@dataclass(frozen=True, eq=False)
class GaussianWindow:
    """Gaussian window in energy, inside sharp limits of further charges.

    Attributes
    ----------
    levels : Levels
    centre, width : float
        e and s.
    bounds : dict of str to (float, float)
        Sharp limits of further charges.
    weights : (n,) ndarray
        Probability of each level.
    log_sum : float
        ``ln g(e)``, g the sum of ``exp(-(E - e)^2/(2 s^2))`` over the states inside the limits.
    mean, variance : float
        ``<E>_w`` and its variance.
    entropy : float
        Von Neumann entropy in nats.
    """

    levels: Levels
    centre: float
    width: float
    bounds: dict[str, tuple[float, float]]
    weights: np.ndarray
    log_sum: float
    mean: float
    variance: float
    entropy: float

    @property
    def beta(self) -> float:
        """``beta_w = (<E>_w - e)/s^2``: slope of the entropy at ``<E>_w``, an estimate of a finite system."""
        return (self.mean - self.centre) / self.width**2

    @property
    def beta_slope(self) -> float:
        """``d beta_w/de = Var_w/s^4 - 1/s^2``, e the centre."""
        return (self.variance / self.width**2 - 1.0) / self.width**2

    @property
    def effective_states(self) -> float:
        """``exp(S)``: how many states the window holds."""
        return math.exp(self.entropy) if self.entropy < 709 else math.inf

    @cached_property
    def effective_levels(self) -> float:
        """How many distinct energies the window holds, ``1/sum P^2`` over them."""
        shares = np.bincount(self.levels.clusters, self.weights)
        return float(1.0 / np.sum(shares**2))

    @property
    def spacing(self) -> float:
        """Mean spacing of distinct energies in the window.

        On evenly spaced levels a Gaussian of width s has ``1/sum P^2 = 2 sqrt(pi) s/spacing``.
        """
        return 2.0 * math.sqrt(math.pi) * self.width / self.effective_levels

    @property
    def multipliers(self) -> dict[str, float]:
        """Multipliers of the charges (H, H^2) whose maximum-entropy state the window is (with sharp limits: there)."""
        name = self.levels.energy
        return {name: -self.centre / self.width**2, f"{name}_squared": 0.5 / self.width**2}

    @property
    def log_partition(self) -> float:
        """``ln Z`` at these multipliers; it is ``ln g + e^2/(2 s^2)``."""
        return self.log_sum + 0.5 * (self.centre / self.width) ** 2

    @cached_property
    def state(self) -> Any:
        """The state: ``.mean``, ``.entropy``, ``.log_partition`` and, where the sites are known, ``.reduced``."""
        return self.levels.state(self.weights, log_partition=self.log_partition)

    def mean_of(self, values: Any) -> float:
        """Mean of a quantity given by its value (n,) in each level."""
        return weighted_mean(self.weights, values)

    def __str__(self) -> str:
        return (
            f"Gaussian window of width {self.width:.6g} (spacing {self.spacing:.2g}) about {self.centre:.6g}"
            f"{where(self.bounds)}: <E> = {self.mean:.6g}, beta_w = {self.beta:.6g}, "
            f"N_eff = {self.effective_states:.1f}"
        )


@dataclass(frozen=True, eq=False)
class SharpWindow:
    """All states between limits, equally likely.

    Attributes
    ----------
    levels : Levels
    bounds : dict of str to (float, float)
        Limits, both included.
    kept : (n,) bool ndarray
        Which levels are inside.
    weights : (n,) ndarray
        Probability of each level.
    entropy : float
        ``ln Omega`` in nats, Omega the number of states inside.  It depends on the widths.
    """

    levels: Levels
    bounds: dict[str, tuple[float, float]]
    kept: np.ndarray
    weights: np.ndarray
    entropy: float

    @property
    def count(self) -> float:
        """Number of states inside."""
        return math.exp(self.entropy) if self.entropy < 709 else math.inf

    @property
    def widths(self) -> dict[str, float]:
        """Width of the window in each charge; 0 for one that is held at a value."""
        return {name: high - low for name, (low, high) in self.bounds.items()}

    @property
    def lowest(self) -> dict[str, float]:
        """Lowest value of each charge among the states that are kept (not the limit)."""
        return {name: float(v[self.kept].min()) for name, v in self.levels.values.items()}

    @property
    def highest(self) -> dict[str, float]:
        """Highest value of each charge among the states that are kept."""
        return {name: float(v[self.kept].max()) for name, v in self.levels.values.items()}

    @property
    def mean(self) -> float:
        """Mean energy."""
        return float(self.weights @ self.levels.energies)

    @cached_property
    def state(self) -> Any:
        """The state: ``.mean``, ``.entropy``, ``.log_partition`` and, where the sites are known, ``.reduced``."""
        return self.levels.state(self.weights, log_partition=self.entropy)

    def mean_of(self, values: Any) -> float:
        """Mean of a quantity given by its value (n,) in each level."""
        return weighted_mean(self.weights, values)

    def family(self) -> Any:
        """The family of the charges on the states of the window, for further fits inside it."""
        return self.levels.restrict(self.kept)

    def slope(self, smoothing: float, *, spacings: float = SPACINGS) -> Slope:
        """Slope of the entropy, smoothed before it is differentiated.

        The step at either limit becomes an error function of width `smoothing`,
        ``Omega(c) = sum_n [Phi((c + D/2 - E_n)/s) - Phi((c - D/2 - E_n)/s)]``, D the width and c the middle of the
        window; the slope is its logarithmic derivative by c.

        Parameters
        ----------
        smoothing : float
            s, in units of the energy.
        spacings : float, optional
            How many mean level spacings `smoothing` must be at least.

        Returns
        -------
        Slope

        Raises
        ------
        ValueError
            The window has no limits in energy, or the smoothing is not well above the level spacing.
        """
        name = self.levels.energy
        if name not in self.bounds or not all(map(math.isfinite, self.bounds[name])):
            raise ValueError(f"the slope needs a window with two limits in {name!r}")
        smoothing = positive("smoothing", smoothing)
        low, high = self.bounds[name]
        others = {n: b for n, b in self.bounds.items() if n != name}
        inside = self.levels.inside(others)
        probe = _gaussian(self.levels, 0.5 * (low + high), smoothing, others, inside)
        refusal = _refusal(probe, spacings)
        if refusal:
            raise ValueError("smoothing by a " + refusal)
        above, below = (high - self.levels.energies) / smoothing, (low - self.levels.energies) / smoothing
        # both in one tail: differences of the smaller tail keep their digits
        tail = below > 0
        share = np.where(tail, ndtr(-below) - ndtr(-above), ndtr(above) - ndtr(below))
        logs = 0.0 if self.levels.log_degeneracies is None else self.levels.log_degeneracies
        top = float(np.max(logs))
        states = np.where(inside, np.exp(logs - top), 0.0)
        share = share * states
        density = np.exp(-0.5 * np.stack([above, below]) ** 2) / (smoothing * math.sqrt(2 * math.pi))
        change = (density[0] - density[1]) * states
        total = float(share.sum())
        if not total > 0:
            raise ValueError(f"the window in {name!r} has no width: nothing is left of it when it is smoothed")
        return Slope(
            top + math.log(total), float(change.sum() / total), float(share @ self.levels.energies / total), smoothing,
            probe.spacing,
        )  # fmt: skip

    def __str__(self) -> str:
        width = self.widths.get(self.levels.energy, math.inf)
        return (
            f"S = ln {self.count:.6g} = {self.entropy:.6g} in a window of width {width:.6g}{where(self.bounds)}, "
            f"lowest state kept at {self.lowest[self.levels.energy]:.6g}"
        )


@dataclass(frozen=True)
class Slope:
    """Slope of the smoothed entropy of a sharp window.

    Attributes
    ----------
    entropy : float
        ``ln Omega`` after smoothing.
    beta : float
        Its slope, which is that of the entropy at `energy`.
    energy : float
        Mean energy of the smoothed window.
    smoothing, spacing : float
        Width of the smoothing and mean spacing of the distinct levels there.
    """

    entropy: float
    beta: float
    energy: float
    smoothing: float
    spacing: float


@dataclass(frozen=True, eq=False)
class WindowScan:
    """Gaussian windows of several widths.

    Attributes
    ----------
    windows : tuple of GaussianWindow
        Those whose width is well above the level spacing, in the order asked for.
    refused : tuple of (float, str)
        The other widths and why.
    """

    windows: tuple[GaussianWindow, ...]
    refused: tuple[tuple[float, str], ...]

    @property
    def widths(self) -> np.ndarray:
        """Widths of the windows."""
        return np.array([w.width for w in self.windows])

    @property
    def betas(self) -> np.ndarray:
        """``beta_w`` of the windows."""
        return np.array([w.beta for w in self.windows])


def gaussian_window(
    source: Any,
    width: float,
    *,
    centre: float | None = None,
    mean: float | None = None,
    within: Mapping[str, Any] | None = None,
    spacings: float = SPACINGS,
) -> GaussianWindow:
    """Gaussian window about a centre, or with the centre shifted until its mean energy is the one asked for.

    Parameters
    ----------
    source : Levels, or what `maxent.quench.levels.levels` takes
        A family of commuting charges, a spectrum, or an array of energies.
    width : float
        s, in units of the energy.
    centre, mean : float
        Exactly one of them: e, or the value that ``<E>_w`` shall have.
    within : dict of str to float or (float, float), optional
        Sharp limits of further charges, such as a particle number; one number holds a charge at this value.
    spacings : float, optional
        How many mean spacings of distinct levels the width must be at least.

    Returns
    -------
    GaussianWindow

    Raises
    ------
    TypeError, ValueError
        A width that is not well above the level spacing (with both numbers), a mean outside the spectrum, charges
        that do not commute, no state inside the limits, both or neither of `centre` and `mean`.

    Examples
    --------
    >>> import numpy as np
    >>> energies = np.sqrt(np.arange(1.0, 4000.0))  # their density is 2 E
    >>> window = gaussian_window(energies, 1.0, mean=40.0)
    >>> f"beta {window.beta:.4f}, centre {window.centre:.4f}"
    'beta 0.0250, centre 39.9750'
    """
    found, limits, inside = _prepared(source, within)
    window = _placed(found, positive("width", width), centre, mean, limits, inside)
    refusal = _refusal(window, spacings)
    if refusal:
        raise ValueError(refusal)
    return window


def scan_widths(
    source: Any,
    widths: Iterable[float],
    *,
    centre: float | None = None,
    mean: float | None = None,
    within: Mapping[str, Any] | None = None,
    spacings: float = SPACINGS,
) -> WindowScan:
    """Gaussian windows of several widths: how beta_w depends on them.

    Parameters
    ----------
    source, centre, mean, within, spacings
        As for `gaussian_window`.
    widths : iterable of float

    Returns
    -------
    WindowScan
        Widths too close to the level spacing are listed as refused, with the reason.

    Raises
    ------
    TypeError, ValueError
        As for `gaussian_window`, but for widths that are too small.
    """
    found, limits, inside = _prepared(source, within)
    kept, refused = [], []
    for width in widths:
        window = _placed(found, positive("width", width), centre, mean, limits, inside)
        refusal = _refusal(window, spacings)
        if refusal:
            refused.append((window.width, refusal))
        else:
            kept.append(window)
    return WindowScan(tuple(kept), tuple(refused))


def sharp_window(source: Any, bounds: Mapping[str, Any]) -> SharpWindow:
    """All states between limits of one charge or of several that commute.

    Parameters
    ----------
    source : Levels, or what `maxent.quench.levels.levels` takes
    bounds : dict of str to float or (float, float)
        Limits of charges, both included; one number holds a charge at this value.

    Returns
    -------
    SharpWindow

    Raises
    ------
    TypeError, ValueError
        Charges that do not commute, unknown names, no limits, or no state inside them.

    Examples
    --------
    >>> from maxent.families import Microstates
    >>> two_dice = Microstates({"energy": [2, 3, 4, 4, 5, 6], "odd": [0, 1, 0, 1, 1, 0]})
    >>> window = sharp_window(two_dice, {"energy": (2.5, 5.5), "odd": 1})
    >>> round(window.count, 9), window.lowest["energy"]
    (3.0, 3.0)
    """
    if not bounds:
        raise ValueError("a sharp window needs limits of at least one charge")
    found, limits, inside = _prepared(source, bounds)
    logs = np.where(inside, 0.0 if found.log_degeneracies is None else found.log_degeneracies, -np.inf)
    entropy = float(logsumexp(logs))
    return SharpWindow(found, limits, inside, np.exp(logs - entropy), entropy)


def _prepared(
    source: Any, bounds: Mapping[str, Any] | None
) -> tuple[Levels, dict[str, tuple[float, float]], np.ndarray]:
    """Levels, limits as pairs, and the levels inside them, at least one."""
    found = source if isinstance(source, Levels) else levels(source)
    limits = {name: interval(name, value) for name, value in (bounds or {}).items()}
    inside = found.inside(limits)
    if not inside.any():
        ranges = ", ".join(f"{n!r} {v.min():.6g}..{v.max():.6g}" for n, v in found.values.items() if n in limits)
        raise ValueError(f"no state in the window{where(limits)}; the levels have {ranges}")
    return found, limits, inside


def _placed(
    found: Levels,
    width: float,
    centre: float | None,
    mean: float | None,
    limits: dict[str, tuple[float, float]],
    inside: np.ndarray,
) -> GaussianWindow:
    """Window about the centre, or about the one that gives the mean."""
    if (centre is None) == (mean is None):
        raise ValueError("a Gaussian window needs either its centre or its mean energy, one of the two")
    if found.energy in limits:
        raise ValueError(f"a Gaussian window in {found.energy!r} takes no sharp limits in {found.energy!r} as well")
    if mean is None:
        assert centre is not None
        if not math.isfinite(centre):
            raise ValueError(f"the centre of a window must be finite, not {centre}")
        return _gaussian(found, float(centre), width, limits, inside)
    energies = found.energies[inside]
    low, high = float(energies.min()), float(energies.max())
    if not low < mean < high:
        raise ValueError(f"no window has the mean energy {mean:.10g}: the levels reach from {low:.10g} to {high:.10g}")
    # <E>_w grows with the centre, its slope is Var_w/s^2
    excess = lambda e: _gaussian(found, e, width, limits, inside).mean - mean
    step = width
    left, right = float(mean), float(mean)
    while excess(left) > 0:
        left, step = left - step, 2 * step
    step = width
    while excess(right) < 0:
        right, step = right + step, 2 * step
    best = left if left == right else brentq(excess, left, right, xtol=1e-15 * max(abs(left), abs(right)), rtol=1e-15)
    return _gaussian(found, float(best), width, limits, inside)


def _gaussian(
    found: Levels, centre: float, width: float, limits: dict[str, tuple[float, float]], inside: np.ndarray
) -> GaussianWindow:
    energies = found.energies
    # counted from an energy inside: a far centre, the canonical limit, loses no digits
    at = float(energies[inside].mean())
    logs = -0.5 * ((energies - at) / width) * ((energies + at - 2 * centre) / width)
    if found.log_degeneracies is not None:
        logs = logs + found.log_degeneracies
    logs = np.where(inside, logs, -np.inf)
    log_sum = float(logsumexp(logs))
    log_p = logs - log_sum
    weights = np.exp(log_p)
    log_sum -= 0.5 * ((at - centre) / width) ** 2
    on = weights > 0
    entropy = -float(weights[on] @ log_p[on])
    if found.log_degeneracies is not None:
        entropy += float(weights[on] @ found.log_degeneracies[on])
    mean = float(weights @ energies)
    away = energies - mean
    variance = float(weights @ away**2)
    return GaussianWindow(found, centre, width, limits, weights, log_sum, mean, variance, entropy)


def _refusal(window: GaussianWindow, spacings: float) -> str:
    """Why the width is not well above the level spacing; empty when it is."""
    if window.width >= spacings * window.spacing:
        return ""
    return (
        f"window of width {window.width:.4g} about {window.centre:.6g} holds {window.effective_levels:.1f} distinct "
        f"levels, {window.spacing:.2g} apart: it must be at least {spacings:g} spacings wide (about "
        f"{spacings * window.spacing:.2g})"
    )

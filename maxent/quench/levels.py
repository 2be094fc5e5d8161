"""Levels of commuting charges: their joint eigenvalues, and states that are diagonal in them.

Windows and single eigenstates are probabilities on a list of levels; where the levels come from (matrices, listed
states, a spectrum by blocks, an array of energies) makes no difference to them.  Charges that do not commute have no
joint levels and are refused by name.  Floor: quench.  Must not know what a window is.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from itertools import combinations
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.families.density import Group, MatricesState
from maxent.families.matrices import Matrices
from maxent.families.microstates import Microstates, MicrostatesState
from maxent.quench.spectrum import Spectrum

__all__ = [
    "Levels",
    "distinct",
    "interval",
    "levels",
    "number_list",
    "positive",
    "weighted_mean",
    "where",
]

#: Levels closer than this fraction of the spectral width are one level.
EQUAL = 1e-10


@dataclass(frozen=True, eq=False)
class Levels:
    """Joint levels of commuting charges.

    Attributes
    ----------
    values : dict of str to (n,) ndarray
        Value of each charge in each level.
    energy : str
        Name of the charge that is the energy.
    source : Matrices, Microstates, Spectrum or None
        Where the levels come from, and who makes states of them.
    log_degeneracies : (n,) ndarray or None
        Logarithms of how many states a level stands for; None where each stands for one.
    """

    values: dict[str, np.ndarray]
    energy: str
    source: Any = None
    log_degeneracies: np.ndarray | None = None

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the charges."""
        return tuple(self.values)

    @property
    def energies(self) -> np.ndarray:
        """Energy of each level, shape (n,)."""
        return self.values[self.energy]

    @property
    def size(self) -> int:
        """Number of levels."""
        return len(self.energies)

    @cached_property
    def clusters(self) -> np.ndarray:
        """Number (n,) of the distinct energy each level has, counted upwards."""
        return distinct(self.energies)

    def inside(self, bounds: Mapping[str, Any]) -> np.ndarray:
        """Which levels lie within bounds, closed intervals of charges.

        Parameters
        ----------
        bounds : dict of str to float or (float, float)
            One number keeps the levels that have this value.

        Returns
        -------
        (n,) bool ndarray

        Raises
        ------
        ValueError
            Unknown names, limits that are no numbers or in the wrong order.
        """
        mask = np.ones(self.size, bool)
        for name, limits in bounds.items():
            if name not in self.values:
                raise ValueError(f"window in {name!r}, which is no charge of the levels: {', '.join(self.names)}")
            low, high = interval(name, limits)
            values = self.values[name]
            slack = EQUAL * max(float(np.ptp(values)), abs(low), abs(high))
            mask &= (values >= low - slack) & (values <= high + slack)
        return mask

    def state(self, weights: np.ndarray, *, log_partition: float = float("nan")) -> Any:
        """State with these probabilities on the levels, of the class of the source.

        Parameters
        ----------
        weights : (n,) ndarray
            Probabilities; a level that stands for several states shares its own evenly among them.
        log_partition : float, optional
            Logarithm of the sum that the probabilities were normalised with.

        Raises
        ------
        ValueError
            Levels without a source, or probabilities of another number.
        """
        weights = np.asarray(weights, float)
        if weights.shape != (self.size,):
            raise ValueError(f"weights must have shape ({self.size},), one per level, not {weights.shape}")
        if self.source is None:
            raise ValueError("levels made from an array of energies have no states: give a family or a spectrum")
        on = weights > 0
        entropy = -float(weights[on] @ np.log(weights[on]))
        if isinstance(self.source, Microstates):
            if self.log_degeneracies is not None:
                entropy += float(weights[on] @ self.log_degeneracies[on])
            return MicrostatesState(weights, self.source.index, self.source.listed, log_partition, entropy)
        if isinstance(self.source, Matrices):
            family, at, groups = self.source, len(self.source.flat), []
            for index, vectors in family.turned:
                p = weights[at : at + vectors.shape[1]]
                at += vectors.shape[1]
                if np.any(p > 0):
                    groups.append(Group(index, vectors[:, p > 0], p[p > 0]))
            return MatricesState(
                family.flat, weights[: len(family.flat)], tuple(groups), family.dimension, family.basis, family.dims,
                log_partition, entropy,
            )  # fmt: skip
        return self.source.state(weights, log_partition=log_partition)

    def restrict(self, mask: np.ndarray) -> Any:
        """The family of the charges on some of the levels alone.

        Parameters
        ----------
        mask : (n,) bool ndarray

        Returns
        -------
        Matrices or Microstates

        Raises
        ------
        ValueError
            Levels without a source.
        """
        if isinstance(self.source, Microstates):
            return self.source.restrict(self.source.index[mask])
        if isinstance(self.source, Spectrum):
            inside = {name: sp.diags_array(value[mask]) for name, value in self.values.items()}
            return Matrices(inside, basis=self.source.vectors(np.flatnonzero(mask)), dims=self.source.dims)
        if self.source is None:
            raise ValueError("levels made from an array of energies have no states: give a family or a spectrum")
        family, at = self.source, len(self.source.flat)
        kept = family.flat[mask[:at]]
        parts = [sp.coo_array((np.ones(len(kept)), (kept, np.arange(len(kept)))), (family.dimension, len(kept)))]
        for index, vectors in family.turned:
            block = sp.coo_array(vectors[:, mask[at : at + vectors.shape[1]]])
            at += vectors.shape[1]
            row, column = block.coords
            parts.append(sp.coo_array((block.data, (index[row], column)), (family.dimension, block.shape[1])))
        return family.restrict(sp.hstack(parts, format="csr"))


def levels(source: Any, *, energy: str = "energy", further: Mapping[str, Any] | None = None) -> Levels:
    """Joint levels of the charges of a family, of a spectrum, or of plain arrays.

    Parameters
    ----------
    source : Matrices, Microstates, Spectrum, or (n,) array_like
        Charges that commute; or energies.
    energy : str, optional
        Name of the charge that is the energy.
    further : dict of str to (n,) array_like, optional
        Values of further charges in the levels, for a spectrum or an array.

    Returns
    -------
    Levels

    Raises
    ------
    ValueError
        Charges that do not commute (named, with the size of their commutator), a family with a prior, a name that is
        not there, arrays that do not fit.

    Examples
    --------
    >>> from maxent.families import Matrices
    >>> import numpy as np
    >>> x, z = np.array([[0, 1], [1, 0]]), np.diag([1, -1])
    >>> levels(Matrices({"energy": z})).energies
    array([ 1., -1.])
    >>> levels(Matrices({"energy": z, "field": x}))
    Traceback (most recent call last):
    ValueError: no joint levels: 'energy' and 'field' do not commute, |[A, B]| is 1 of 2|A||B|; take ...
    """
    degeneracies: Any = None
    origin: Any = None
    if isinstance(source, Matrices | Microstates):
        if isinstance(source, Matrices):
            if source.blocks.dense:
                raise ValueError(_clash(source))
            if source.blocks.has_prior:
                raise ValueError("windows count states: a family with a prior has no window")
        elif source.blocks.prior is not None:
            degeneracies = source.degeneracy
            if degeneracies is None or np.any(source.blocks.prior != degeneracies):
                raise ValueError("windows count states: a family with a prior has no window (log_weights are counted)")
        found = dict(zip(source.names, np.asarray(source.blocks.diagonal), strict=True))
        origin = source
        if further:
            raise ValueError("further values go with a spectrum or an array; give all charges to the family instead")
    elif isinstance(source, Spectrum):
        found, origin = {energy: np.asarray(source.energies, float)}, source
    else:
        found = {energy: np.asarray(source, float)}
    found |= {name: np.asarray(value, float) for name, value in (further or {}).items()}
    if energy not in found:
        raise ValueError(f"no charge {energy!r} to be the energy; the charges are {', '.join(map(repr, found))}")
    n = found[energy].shape
    for name, array in found.items():
        if array.ndim != 1 or array.shape != n or not len(array):
            raise ValueError(f"levels of {name!r} must be a list of numbers as long as {energy!r}, not {array.shape}")
        if not np.all(np.isfinite(array)):
            raise ValueError(f"levels of {name!r} have NaN or infinite entries")
    return Levels(found, energy, origin, degeneracies)


def distinct(energies: np.ndarray, *, rtol: float = EQUAL) -> np.ndarray:
    """Number (n,) of the distinct value each energy has, counted upwards.

    Neighbours closer than `rtol` of the spectral width are one value.
    """
    energies = np.asarray(energies, float)
    order = np.argsort(energies, kind="stable")
    steps = np.diff(energies[order]) > rtol * float(np.ptp(energies))
    labels = np.empty(len(energies), int)
    labels[order] = np.concatenate([[0], np.cumsum(steps)])
    return labels


def interval(name: str, limits: Any) -> tuple[float, float]:
    """Limits of a window as (low, high); a single number is both.

    Raises
    ------
    TypeError, ValueError
    """
    try:
        array = np.atleast_1d(np.asarray(limits, float))
    except (TypeError, ValueError):
        raise TypeError(f"limits of {name!r} must be a number or a pair of numbers, not {limits!r}") from None
    if array.shape not in ((1,), (2,)) or np.any(np.isnan(array)):
        raise ValueError(f"limits of {name!r} must be a number or a pair of numbers, not {limits!r}")
    low, high = float(array[0]), float(array[-1])
    if low > high:
        raise ValueError(f"limits of {name!r} are in the wrong order: {low:g} > {high:g}")
    return low, high


def number_list(name: str, value: Any) -> np.ndarray:
    """A list of finite numbers.

    Raises
    ------
    ValueError
    """
    array = np.asarray(value, float)
    if array.ndim != 1 or not np.all(np.isfinite(array)):
        raise ValueError(f"{name} must be a list of finite numbers, not of shape {array.shape}")
    return array


def _clash(family: Matrices) -> str:
    """Which charges do not commute, and by how much: ``|[A, B]|_F / (2 |A| |B|_F)`` of the traceless parts, 0 to 1."""
    worst, pair = 0.0, (0, 0)
    for stack in family.blocks.dense:
        size = stack.shape[1]
        shifted = [q - np.trace(q) / size * np.eye(size) for q in stack]
        for i, j in combinations(range(len(family.names)), 2):
            a, b = shifted[i], shifted[j]
            scale = 2 * np.linalg.norm(a, 2) * np.linalg.norm(b)
            defect = float(np.linalg.norm(a @ b - b @ a) / scale) if scale else 0.0
            if defect > worst:
                worst, pair = defect, (i, j)
    first, second = (family.names[k] for k in pair)
    return (
        f"no joint levels: {first!r} and {second!r} do not commute, |[A, B]| is {worst:.2g} of 2|A||B|; take a window "
        "in one of them, or fit both as charges of a state"
    )


def where(bounds: Mapping[str, tuple[float, float]]) -> str:
    """The limits in words, with a comma in front of each but the first."""
    parts = [f"{n} = {lo:g}" if lo == hi else f"{n} in [{lo:g}, {hi:g}]" for n, (lo, hi) in bounds.items()]
    return f" with {', '.join(parts)}" if parts else ""


def positive(name: str, value: float) -> float:
    """A positive number.

    Raises
    ------
    ValueError
    """
    if not (isinstance(value, int | float | np.floating | np.integer) and math.isfinite(value) and value > 0):
        raise ValueError(f"{name} must be a positive number, not {value!r}")
    return float(value)


def weighted_mean(weights: np.ndarray, values: Any) -> float:
    """Mean of a quantity given by its value in each level."""
    array = np.asarray(values, float)
    if array.shape != weights.shape:
        raise ValueError(f"values must have shape {weights.shape}, one per level, not {array.shape}")
    return float(weights @ array)

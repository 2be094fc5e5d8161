"""Single eigenstates: how alike they are, and how close to the window around them.

Two questions about one symmetry sector: the scatter of eigenstate expectation values about their smoothed mean, and
the distance of reduced eigenstates from the reduced window (J. M. Deutsch, Phys. Rev. A 43, 2046 (1991); M. Srednicki,
Phys. Rev. E 50, 888 (1994); from memory).  The smoothed mean at the energy E is ``sum_m w_m O_mm / sum_m w_m`` with
``w_m = exp(-(E_m - E)^2/(2 s^2))`` over the levels of the sector.  Floor: quench.  Must not know lattices: sectors come
as isometries, blocks as sites of given dimensions.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.core.blocks import eigh
from maxent.families.operators import checked_basis, operator_matrix
from maxent.memory import require_memory
from maxent.quench.levels import distinct, number_list
from maxent.quench.spacings import middle
from maxent.quench.windows import SPACINGS, GaussianWindow, SharpWindow

__all__ = [
    "EigenstateRange", "Scatter", "block_scatter", "decay_exponent", "eigenstate_means", "eigenstate_range",
    "eigenstate_scatter", "matching_levels", "reduced_states", "sector_spectrum", "smoothed_mean",
    "weighted_quantiles",
]  # fmt: skip

#: A sector whose restricted Hamiltonian leaves this much (of its norm) outside is no sector.
LEAK = 1e-10
#: The smoothing is this fraction of the width of the spectrum unless it is given.
SMOOTHING = 1 / 30
#: Eigenvectors that are written out over all sites at once.
FEW = 16


@dataclass(frozen=True, eq=False)
class Scatter:
    """Deviation of eigenstates from the smoothed mean in the middle of one sector.

    Attributes
    ----------
    size : int
        Number of levels of the sector.
    energies : (k,) ndarray
        Energies of the eigenstates looked at.
    deviations : (k,) ndarray
        Value minus smoothed mean; for blocks the trace distance.
    width, spacing : float
        Width of the smoothing, and mean spacing of distinct levels in its window in the middle of the sector.
    """

    size: int
    energies: np.ndarray
    deviations: np.ndarray
    width: float
    spacing: float

    @property
    def std(self) -> float:
        """Standard deviation of the deviations."""
        return float(np.std(self.deviations))

    @property
    def mean(self) -> float:
        """Mean of the deviations: small for values, the mean distance for blocks."""
        return float(np.mean(self.deviations))

    @property
    def largest(self) -> float:
        """Largest deviation in size."""
        return float(np.abs(self.deviations).max())


@dataclass(frozen=True)
class EigenstateRange:
    """What single eigenstates of a window predict for one quantity.

    Attributes
    ----------
    index : int
        Level of the eigenstate closest to the energy asked for.
    energy, value : float
        Its energy, and its value of the quantity.
    degeneracy : int
        Levels of this energy in the window.  Above 1 the eigenstate, and its value, are one choice among many.
    median, low, high : float
        Median, 10 % and 90 % quantile over the window, each eigenstate with its probability in it.
    """

    index: int
    energy: float
    value: float
    degeneracy: int
    median: float
    low: float
    high: float


def smoothed_mean(energies: Any, values: Any, at: Any, width: float) -> np.ndarray:
    """Gaussian average over the levels of one sector.

    Parameters
    ----------
    energies : (n,) array_like
    values : (n, ...) array_like
        Value of any quantity, or reduced state, of each level.
    at : (k,) array_like
        Energies at which the average is taken.
    width : float

    Returns
    -------
    (k, ...) ndarray
    """
    e, x = number_list("energies", energies), np.asarray(values)
    if len(x) != len(e):
        raise ValueError(f"{len(x)} values for {len(e)} energies")
    distance = (np.atleast_1d(np.asarray(at, float))[:, None] - e) ** 2
    weights = np.exp(-0.5 * (distance - distance.min(axis=1, keepdims=True)) / width**2)
    weights /= weights.sum(axis=1, keepdims=True)
    return np.tensordot(weights, x, axes=(1, 0))


def eigenstate_scatter(
    energies: Any, values: Any, *, width: float | None = None, part: float = 0.2, spacings: float = SPACINGS
) -> Scatter:
    """Scatter of eigenstate expectation values about their smoothed mean in the middle of one sector.

    Parameters
    ----------
    energies, values : (n,) array_like
        Energy and expectation value of each eigenstate of one sector.
    width : float, optional
        Width of the smoothing; by default a thirtieth of the width of the spectrum, or what the level
        spacing demands.
    part : float, optional
        Middle part of the levels that is looked at; all of them enter the smoothed mean.
    spacings : float, optional
        How many mean level spacings the width must be at least.

    Returns
    -------
    Scatter

    Raises
    ------
    ValueError
        A width that is not well above the level spacing, arrays that do not fit.

    Examples
    --------
    >>> e = np.linspace(-1, 1, 401)
    >>> eigenstate_scatter(e, 0.3 * e).std < 1e-12  # a smooth dependence on energy is no scatter
    True
    """
    e, x = number_list("energies", energies), number_list("values", values)
    if len(e) != len(x):
        raise ValueError(f"{len(x)} values for {len(e)} energies")
    picked, width, spacing = _picked(e, width, part, spacings)
    return Scatter(len(e), e[picked], x[picked] - smoothed_mean(e, x, e[picked], width), width, spacing)


def block_scatter(
    energies: Any, reduced: Any, *, width: float | None = None, part: float = 0.2, spacings: float = SPACINGS
) -> Scatter:
    """Trace distance of reduced eigenstates from the reduced window around each, in the middle of one sector.

    Parameters
    ----------
    energies : (n,) array_like
    reduced : (n, k, k) array_like
        Reduced states of the eigenstates, from `reduced_states`.
    width, part, spacings
        As for `eigenstate_scatter`.

    Returns
    -------
    Scatter
        Its deviations are trace distances, 0 to 1.

    Raises
    ------
    ValueError
        As for `eigenstate_scatter`.
    """
    e, rho = number_list("energies", energies), np.asarray(reduced)
    if rho.ndim != 3 or rho.shape[1] != rho.shape[2] or len(rho) != len(e):
        raise ValueError(f"reduced states must have shape ({len(e)}, k, k), not {rho.shape}")
    picked, width, spacing = _picked(e, width, part, spacings)
    difference = rho[picked] - smoothed_mean(e, rho, e[picked], width)
    distances = 0.5 * np.abs(np.linalg.eigvalsh(difference)).sum(axis=1)
    return Scatter(len(e), e[picked], distances, width, spacing)


def decay_exponent(sizes: Sequence[float], deviations: Sequence[float]) -> float:
    """Exponent a of ``deviation ~ size^-a`` by least squares of the logarithms.

    Where eigenstates thermalise the scatter falls as the inverse root of the number of levels, a = 1/2; where
    conserved quantities abound it falls at most as a power of the length, a = 0 in this measure.

    Parameters
    ----------
    sizes : sequence of float
        Numbers of levels of the sectors, at least three: one size, or two, show no trend.
    deviations : sequence of float
        Positive.

    Raises
    ------
    ValueError
        Fewer than three sizes, or numbers that are not positive.
    """
    n, d = number_list("sizes", sizes), number_list("deviations", deviations)
    if len(n) != len(d) or len(n) < 3:
        raise ValueError(f"a trend needs three sizes at least and a deviation for each, not {len(n)} and {len(d)}")
    if np.any(n <= 0) or np.any(d <= 0) or np.ptp(n) == 0:
        raise ValueError("sizes and deviations must be positive, and the sizes not all the same")
    return -float(np.polyfit(np.log(n), np.log(d), 1)[0])


def eigenstate_range(
    window: GaussianWindow | SharpWindow, values: Any, *, energy: float | None = None
) -> EigenstateRange:
    """Single eigenstates inside a window: the one at the energy, and the spread of all.

    Parameters
    ----------
    window : GaussianWindow or SharpWindow
        In the symmetry sectors that match the start state, by its limits (``within``).
    values : (n,) array_like
        Expectation value of the quantity in each level.
    energy : float, optional
        Energy asked for; by default the mean energy of the window.

    Returns
    -------
    EigenstateRange

    Raises
    ------
    ValueError
        Values of another number than levels.
    """
    x = number_list("values", values)
    if len(x) != window.levels.size:
        raise ValueError(f"{len(x)} values for {window.levels.size} levels")
    asked = window.mean if energy is None else float(energy)
    inside = np.flatnonzero(window.levels.inside(window.bounds) & (window.weights > 0))
    e = window.levels.energies
    index = int(inside[np.argmin(np.abs(e[inside] - asked))])
    equal = int(np.sum(window.levels.clusters[inside] == window.levels.clusters[index]))
    low, median, high = weighted_quantiles(x[inside], window.weights[inside])
    return EigenstateRange(index, float(e[index]), float(x[index]), equal, median, low, high)


def weighted_quantiles(values: Any, weights: Any) -> tuple[float, float, float]:
    """10 % quantile, median and 90 % quantile of values (n,) with weights (n,): values that occur, none between."""
    low, median, high = np.quantile(values, [0.1, 0.5, 0.9], weights=weights, method="inverted_cdf")
    return float(low), float(median), float(high)


def matching_levels(labels: Any, populations: Any, *, least: float = 1e-10) -> np.ndarray:
    """Levels of the symmetry sectors in which the start state has weight.

    Parameters
    ----------
    labels : (n,) array_like
        Which sector each level belongs to.
    populations : (n,) array_like
        Weight of the start state on each level.
    least : float, optional
        Sectors with no more weight than this do not match.

    Returns
    -------
    (n,) bool ndarray
        Give it to `maxent.quench.levels.levels` as a further charge and hold it at 1.

    Raises
    ------
    ValueError
        Arrays that do not fit, or no sector with weight.
    """
    labels, p = np.asarray(labels), number_list("populations", populations)
    if labels.shape != p.shape:
        raise ValueError(f"labels have shape {labels.shape}, populations {p.shape}")
    _, which = np.unique(labels, return_inverse=True)
    matching = np.bincount(which, p)[which] > least
    if not matching.any():
        raise ValueError(f"the start state has no weight above {least:g} in any sector")
    return matching


def sector_spectrum(hamiltonian: Any, isometry: Any) -> tuple[np.ndarray, np.ndarray]:
    """Levels and eigenvectors of one symmetry sector.

    Parameters
    ----------
    hamiltonian : (D, D) array_like or scipy.sparse
        Hermitian.
    isometry : (D, d) array_like or scipy.sparse
        Columns are the states of the sector.

    Returns
    -------
    energies : (d,) ndarray
    vectors : (d, d) ndarray
        Eigenvectors as columns, in the states of the sector.

    Raises
    ------
    ValueError
        The Hamiltonian is not Hermitian, or leads out of the sector (with the part that leaves it).
    ResourceError
        The sector would not fit into memory.
    """
    h, b = operator_matrix(hamiltonian, "hamiltonian"), checked_basis(isometry)
    if b.shape[0] != h.shape[0]:
        raise ValueError(f"the isometry has {b.shape[0]} rows, the Hamiltonian {h.shape[0]}")
    require_memory(64 * b.shape[1] ** 2, f"the eigenvectors of a sector of {b.shape[1]} states need {{need}}")
    image = h @ b
    inside = b.conj().T @ image
    norm = sp.linalg.norm if sp.issparse(image) else np.linalg.norm
    left, whole = float(norm(image - b @ inside)), float(norm(image))
    if left > LEAK * whole:
        raise ValueError(f"the Hamiltonian leads out of the sector: {left / whole:.1e} of it leaves the states given")
    dense = inside.toarray() if sp.issparse(inside) else np.asarray(inside)
    dense = 0.5 * (dense + dense.conj().T)
    if np.iscomplexobj(dense) and np.abs(dense.imag).max(initial=0.0) <= 1e-14 * np.abs(dense).max(initial=0.0):
        dense = np.ascontiguousarray(dense.real)
    return eigh(dense)


def eigenstate_means(vectors: np.ndarray, operator: Any, *, isometry: Any = None) -> np.ndarray:
    """Expectation values (k,) of an operator in eigenvectors.

    Parameters
    ----------
    vectors : (d, k) ndarray
        As columns.
    operator : (D, D) array_like or scipy.sparse
        Hermitian.
    isometry : (D, d) array_like or scipy.sparse, optional
        States that the vectors are written in; without it D = d.
    """
    q = operator_matrix(operator, "operator")
    if isometry is not None:
        q = isometry.conj().T @ (q @ isometry)
    if q.shape[1] != len(vectors):
        raise ValueError(f"the operator has dimension {q.shape[1]} there, the vectors {len(vectors)}")
    return np.real(np.einsum("ik,ik->k", vectors.conj(), np.asarray(q @ vectors)))


def reduced_states(
    vectors: np.ndarray,
    dims: Sequence[int],
    sites: Sequence[int],
    *,
    isometry: Any = None,
    progress: Callable[[str], None] | None = None,
) -> np.ndarray:
    """Reduced states of eigenvectors on a block of sites, a few vectors at a time.

    Parameters
    ----------
    vectors : (d, n) ndarray
        As columns.
    dims : sequence of int
        Dimensions of all sites, site 0 the slowest index.
    sites : sequence of int
        The block.
    isometry : (D, d) array_like or scipy.sparse, optional
        States that the vectors are written in.
    progress : callable, optional
        Told how far it is, every few hundred vectors.

    Returns
    -------
    (n, k, k) ndarray

    Raises
    ------
    ValueError
        Sites that do not exist or repeat, dimensions that do not fit.
    """
    kept = [int(s) for s in sites]
    if len(set(kept)) < len(kept) or any(not 0 <= s < len(dims) for s in kept):
        raise ValueError(f"sites must be different numbers in 0..{len(dims) - 1}, not {list(sites)}")
    whole = len(vectors) if isometry is None else isometry.shape[0]
    if math.prod(dims) != whole:
        raise ValueError(f"dims {tuple(dims)} multiply to {math.prod(dims)}, the vectors have {whole} entries")
    order = kept + [s for s in range(len(dims)) if s not in kept]
    size, number = math.prod(dims[s] for s in kept), vectors.shape[1]
    complex_ = np.iscomplexobj(vectors) or (isometry is not None and np.iscomplexobj(isometry))
    out = np.empty((number, size, size), complex if complex_ else float)
    for n in range(0, number, FEW):
        some = vectors[:, n : n + FEW]
        some = np.asarray(some if isometry is None else isometry @ some).T
        blocks = some.reshape(-1, *dims).transpose(0, *(1 + s for s in order)).reshape(len(some), size, -1)
        out[n : n + FEW] = blocks @ blocks.conj().swapaxes(1, 2)
        if progress is not None and (n + FEW) % 256 == 0:
            progress(f"reduced states: {min(n + FEW, number)} of {number}")
    return out


def _picked(e: np.ndarray, width: float | None, part: float, spacings: float) -> tuple[np.ndarray, float, float]:
    """Levels of the middle part, the width of the smoothing and the level spacing in the middle."""
    order = np.argsort(e, kind="stable")
    picked = order[middle(len(e), part)]
    if len(picked) < 2:
        raise ValueError(f"the middle part of {len(e)} levels holds {len(picked)}: too few for a scatter")
    clusters, centre = distinct(e), float(np.median(e[picked]))
    if width is None:
        width = SMOOTHING * float(np.ptp(e))
        width = max(width, spacings * _spacing(e, clusters, centre, width) * 1.1)
    if not width > 0:
        raise ValueError(f"width must be positive, not {width}")
    spacing = _spacing(e, clusters, centre, width)
    if width < spacings * spacing:
        raise ValueError(
            f"smoothing of width {width:.4g} is less than {spacings:g} level spacings of {spacing:.2g}: widen it to "
            f"about {spacings * spacing:.2g}, or take a larger sector"
        )
    return picked, float(width), spacing


def _spacing(e: np.ndarray, clusters: np.ndarray, at: float, width: float) -> float:
    """Mean spacing of distinct levels in a Gaussian window, as in `maxent.quench.windows`."""
    distance = ((e - at) / width) ** 2
    weights = np.exp(-0.5 * (distance - distance.min()))
    shares = np.bincount(clusters, weights / weights.sum())
    return 2 * math.sqrt(math.pi) * width * float(np.sum(shares**2))

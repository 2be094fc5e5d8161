"""The largest group velocity of free particles, from the dispersion of the infinite system.

Inside a ring or a chain whose cells are alike the form of the Hamiltonian is ``h(k) = sum_r h_r exp(i k r)`` over the
operators of one cell, and a level x(k) moves with

    dx/dk = <u| dh/dk |u> / <u| metric |u>,      h(k) u = x(k) metric u,

the metric being 1 for fermions and ``i Omega`` for bosons; levels that meet are taken together.  Floor: quench.
"""

from __future__ import annotations

import numpy as np

from maxent.families.gaussian_states import symplectic_form
from maxent.families.majoranas import to_majoranas
from maxent.families.quadratic import Quadratic

__all__ = ["group_velocity"]

#: Momenta between 0 and 2 pi.
POINTS = 1024


def group_velocity(form: Quadratic, statistics: str, *, per_site: int = 1, closing: int = 0) -> float | None:
    """Largest group velocity, in sites per time.

    Parameters
    ----------
    form : Quadratic
        The Hamiltonian.
    statistics : {"fermions", "bosons"}
    per_site : int, optional
        Modes per site.
    closing : {1, -1, 0}, optional
        Sign with which a ring of modes is closed; 0 for an open chain, of which the middle counts.

    Returns
    -------
    float or None
        None where cells are not alike, or particles do not move.
    """
    n = form.modes
    if statistics == "fermions":
        a = 1j * to_majoranas(*form.matrices())[0]
    else:  # site by site instead of all positions first
        order = np.arange(2 * n).reshape(2, n).T.ravel()
        a = form.phase_space()[0][np.ix_(order, order)].astype(complex)
    width = float(np.abs(a).max(initial=0.0))
    if not width:
        return None
    for period in range(per_site, max(n // 4, per_site) + 1, per_site):
        if closing and n % period:
            continue
        blocks = _by_distance(a, 2 * period, closing, 1e-12 * width)
        if blocks is not None:
            speed = _largest(blocks, statistics) * period / per_site
            return speed if speed > 1e-9 * width else None
    return None


def _by_distance(a: np.ndarray, d: int, closing: int, small: float) -> dict[int, np.ndarray] | None:
    """Couplings of a cell of d operators to the one r cells away, or None where cells differ."""
    cells = len(a) // d
    middle = cells // 2
    near: dict[int, np.ndarray] = {}
    for other in range(cells):
        block = a[middle * d : (middle + 1) * d, other * d : (other + 1) * d]
        if np.abs(block).max() > small:
            near[other - middle] = block
    reach = max(map(abs, near), default=0)
    if 2 * reach >= cells:
        return None
    for cell in range(cells) if closing else range(reach, cells - reach):
        row = np.zeros((d, len(a)), complex)
        for r, block in near.items():
            turns, at = divmod(cell + r, cells)
            row[:, at * d : (at + 1) * d] = block * (closing if turns else 1)
        if np.abs(row - a[cell * d : (cell + 1) * d]).max() > small:
            return None
    return near


def _largest(blocks: dict[int, np.ndarray], statistics: str) -> float:
    """Largest speed over all momenta, in cells per time: on a grid, then on finer ones around the best point."""
    step = 2 * np.pi / POINTS
    momenta, best = step * (np.arange(POINTS) + 0.5), 0.0
    for _ in range(3):
        speeds = [_speed(blocks, statistics, k) for k in momenta]
        at = int(np.argmax(speeds))
        best, momenta = max(best, speeds[at]), momenta[at] + step * np.linspace(-1, 1, 41)
        step /= 20
    return best


def _speed(blocks: dict[int, np.ndarray], statistics: str, k: float) -> float:
    d = len(next(iter(blocks.values())))
    h, slope = np.zeros((d, d), complex), np.zeros((d, d), complex)
    for r, block in blocks.items():
        turned = block * np.exp(1j * k * r)
        h, slope = h + turned, slope + 1j * r * turned
    if statistics == "fermions":
        x, u = np.linalg.eigh(h)
    else:
        metric = 1j * np.kron(np.eye(d // 2), symplectic_form(1))
        try:
            root = np.linalg.cholesky(h)
        except np.linalg.LinAlgError:
            return 0.0  # no oscillation at this momentum
        x, v = np.linalg.eigh(root.conj().T @ metric @ root)
        u = np.linalg.solve(root.conj().T, v) * np.sqrt(np.abs(x))
    moved = u.conj().T @ slope @ u
    edges = np.flatnonzero(np.diff(x) > 1e-9 * max(float(np.abs(x).max()), 1e-300)) + 1
    groups = np.split(np.arange(d), edges)
    return max(float(np.abs(np.linalg.eigvalsh(moved[np.ix_(g, g)])).max()) for g in groups)

"""Spin rings whose charges are quadratic after the Jordan-Wigner map: exact at any size, not one Gaussian state.

On a ring the string that closes it depends on the parity ``P = prod_j Z_j``, so that each charge is one quadratic form
of Majorana operators where P = 1 and another where P = -1 (E. Lieb, T. Schultz, D. Mattis, Ann. Phys. 16, 407 (1961)):

    Z = sum_{eta = 1, -1} Tr (1 + eta P)/2 exp(-sum_j lam_j Q_j^eta).

Rings whose cells are all alike are blocks by momentum, any others one block per sector.  Cost of one evaluation: one
decomposition and m rotations per block, and a table of all pairs of levels.  Floor: families; must not know lattices.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from maxent.core.contract import EPS, Evaluation, Face, Lowest
from maxent.families.finite import checked_charges
from maxent.families.hosted import Hosted
from maxent.families.parity_sectors import Alone, Lines, Sector
from maxent.families.ring_forms import blocked, quadratic_form, sparse_form
from maxent.families.ring_states import RingState
from maxent.memory import require_memory

__all__ = ["SpinRing"]

#: What a user may choose: the whole space, one sector, or one Gaussian state that ignores the parity.
CHOICES = {"both": (1, -1), "even": (1,), "odd": (-1,), "unprojected": (0,)}


@dataclass(frozen=True, init=False, eq=False)
class SpinRing(Hosted):
    """Charges of a ring (or an open chain) of spins 1/2 that are quadratic in fermions in each parity sector.

    Parameters
    ----------
    sites : int
        Number of spins.
    charges : dict of str to iterable of (float, dict of int to str)
        Sums of products of Pauli matrices: coefficients and letters by site.  After the Jordan-Wigner map every term
        must be quadratic, as ``X X``, ``Y Y``, ``X Y`` of neighbours, ``X Z X``, ``Z``; around the ring's end inside a
        sector.
    sectors : {"both", "even", "odd", "unprojected"}
        The whole space; the states with ``prod Z = 1`` or -1 alone; or one Gaussian state in which the ring is closed
        as for an even parity whatever the parity is.  The last one is not exact on a ring: ``ln Z`` is off by about
        exp(-L/xi).  Open chains have no sectors: "both" and "unprojected" are the same there.

    Raises
    ------
    TypeError, ValueError
        A term that is not quadratic, a site that does not exist; names the charge.

    Notes
    -----
    Runs on the host driver only.  Means of operators that are not quadratic come from Pfaffians.

    Examples
    --------
    >>> import maxent
    >>> n = 30
    >>> bonds = [(-1.0, {j: "X", (j + 1) % n: "X"}) for j in range(n)]
    >>> fields = [(-1.0, {j: "Z"}) for j in range(n)]
    >>> ring = SpinRing(n, {"energy": bonds + fields})
    >>> result = maxent.solve(ring, {"energy": -30.0})
    >>> print(result.verdict, round(result.multipliers["energy"], 4))
    solved 0.7316
    """

    sites: int
    names: tuple[str, ...]
    sectors: tuple[Sector | Alone, ...]
    what: ClassVar[str] = "spin rings"

    def __init__(self, sites: int, charges: Any, *, sectors: str = "both"):
        charges = checked_charges(charges, "SpinRing")
        if isinstance(sites, bool) or not isinstance(sites, int | np.integer) or sites < 1:
            raise ValueError(f"sites must be a positive integer, not {sites!r}")
        if sectors not in CHOICES:
            raise ValueError(f"sectors must be one of {', '.join(map(repr, CHOICES))}, not {sectors!r}")
        if not charges:
            raise ValueError("no charges given: SpinRing needs at least one charge")
        n, m = int(sites), len(charges)
        listed = {name: list(terms) for name, terms in charges.items()}
        made = []
        for eta in CHOICES[sectors]:
            forms = [sparse_form(t, n, eta or 1, f"charge {name!r}") for name, t in listed.items()]
            require_memory(8 * 12 * (2 * n) ** 2, f"{n} sites need {{need}}")
            blocks = blocked([a for a, _ in forms], n, eta, f"{n} sites need {{need}} for {m} charges")
            constant = np.array([c for _, c in forms])
            made.append(Sector(eta, eta, constant, *blocks, np.zeros((2 * n, 2 * n))))
        self._set(n, tuple(charges), tuple(made))

    def _set(self, *values: Any) -> SpinRing:
        for key, value in zip(("sites", "names", "sectors"), values, strict=True):
            object.__setattr__(self, key, value)
        return self

    def _with(self, sectors: tuple[Sector | Alone, ...]) -> SpinRing:
        names = self.names if len(self.names) == len(sectors[0].constant) else ()
        return object.__new__(SpinRing)._set(self.sites, names, sectors)

    @property
    def constant(self) -> np.ndarray:
        """What each charge has as a number in the first sector, (m,)."""
        return self.sectors[0].constant

    @property
    def entropy_floor(self) -> float:  # type: ignore[override]
        """0: states are counted."""
        return 0.0

    @property
    def size(self) -> int:
        """Number of states; values are totals, not per site."""
        return sum(s.size for s in self.sectors)

    def evaluate(self, lam: Any, order: int = 2) -> Evaluation:
        """``ln Z``, values and covariance: both sectors weighed by their partition functions.

        Raises
        ------
        TypeError
            For arrays of JAX.
        """
        self.require_host(lam)
        parts = [s.evaluated(lam) for s in self.sectors]
        log_z, share = _weighed([p.log_z for p in parts])
        values = sum((w * p.values for w, p in zip(share, parts, strict=True)), np.zeros(len(lam)))
        between = np.stack([np.sqrt(w) * (p.values - values) for w, p in zip(share, parts, strict=True)], axis=1)
        covariance = sum((w * p.covariance for w, p in zip(share, parts, strict=True)), between @ between.T)
        level = max(p.level for p in parts)
        rounding = 4 * EPS * (1 + level) * max(1.0, float(np.sqrt(np.linalg.norm(covariance))))

        def factor() -> np.ndarray:
            inside = [np.sqrt(w) * p.rows() for w, p in zip(share, parts, strict=True)]
            return np.concatenate([between, *inside], axis=1)

        return Evaluation(
            np.float64(log_z), values, 0.5 * (covariance + covariance.T), np.float64(rounding), np.float64(level),
            factor=factor, lowest=np.float64(min(p.lowest for p in parts)),
        )  # fmt: skip

    def combine(self, matrix: np.ndarray, offset: np.ndarray) -> SpinRing:
        """Family of the charges ``matrix @ Q - offset``."""
        return self._with(tuple(s.combined(matrix, offset) for s in self.sectors))

    def lowest(self, v: np.ndarray, *, with_values: bool = False) -> Lowest:
        """Lowest value of ``<v.Q>``: no quasiparticle, or one where the parity asks for it."""
        lines = [s.lines(v) for s in self.sectors]
        low, error = min(x.low for x in lines), EPS * max(x.size for x in lines)
        at = int(np.argmin([x.low for x in lines]))
        values = self.sectors[at].lowest_values(lines[at]) if with_values else None
        cut = 64 * error
        counts = [s.degeneracy(x, cut) for s, x in zip(self.sectors, lines, strict=True) if x.low - low <= cut]
        return Lowest(low, max(x.high for x in lines), error, values, float(np.logaddexp.reduce(counts)))

    def face(self, v: np.ndarray, tol: float) -> Face | None:
        """Ground space of ``v.Q``: free modes of each sector, or one quasiparticle in several levels."""
        lines = [s.lines(v) for s in self.sectors]
        low, top = min(x.low for x in lines), max(x.top for x in lines)
        if not top > 0 or abs(low) > max(100 * tol, 1e-9 * float(np.abs(v) @ self.scale)):
            return None
        kept, gap, width = self._ground(lines, max(100 * tol, 1e-9 * top))
        if not np.isfinite(gap):
            return None  # the whole space
        dimension = float(np.logaddexp.reduce([s.log_dimension for s in kept]))
        return Face(self._with(tuple(kept)), gap / top, dimension, width=width / top)

    def _ground(self, lines: list[Lines], cut: float) -> tuple[list[Sector | Alone], float, float]:
        """Ground space over all sectors: its parts, the gap to the next level, and its width."""
        low = min(x.low for x in lines)
        kept: list[Sector | Alone] = []
        gap, width = np.inf, 0.0
        for s, x in zip(self.sectors, lines, strict=True):
            if x.low - low > cut:
                gap = min(gap, x.low - low)
                continue
            part, above, spread = s.on_ground(x, cut)
            kept.append(part)
            gap, width = min(gap, above), max(width, spread)
        return kept, gap, width

    def sharpen(self, v: np.ndarray) -> Iterator[np.ndarray]:
        """Polished directions of each sector, the one with the lowest value first; then those where sectors meet."""
        for s in sorted(self.sectors, key=lambda s: s.lines(v).low):
            yield from s.sharpen(v)
        if len(self.sectors) == 2:
            yield from self._levelled(v)

    def _levelled(self, v: np.ndarray) -> Iterator[np.ndarray]:
        """The direction near `v` along which both sectors have the same lowest value."""
        for _ in range(6):
            lines = [s.lines(v) for s in self.sectors]
            first, second = (s.lowest_values(x) for s, x in zip(self.sectors, lines, strict=True))
            apart = first - second
            size = float(apart @ apart)
            if abs(lines[0].low - lines[1].low) > 0.1 * max(x.top for x in lines) or not size > 0:
                return
            step = apart * (float(apart @ v) / size)
            left = float(np.linalg.norm(v - step))
            if left < 0.5:
                return
            v = (v - step) / left
            if np.linalg.norm(step) < 1e-15:
                break
        yield v

    def state(self, lam: Any) -> RingState:
        """State at multipliers `lam`, shape (m,).

        Raises
        ------
        ValueError
            Not m finite numbers.
        """
        lam = np.asarray(lam, float)
        m = len(self.constant)
        if lam.shape != (m,) or not np.all(np.isfinite(lam)):
            raise ValueError(f"multipliers must be {m} finite numbers, not {lam.tolist()}")
        parts = [s.thermal(lam) for s in self.sectors]
        log_z, share = _weighed([p.log_z for p in parts])
        mixing = -float(share[share > 0] @ np.log(share[share > 0]))
        states = tuple(p.make(weight=float(w)) for p, w in zip(parts, share, strict=True))
        entropy = mixing + float(share @ [p.entropy for p in parts])
        sites = self.sites
        form_of = lambda terms, parity: quadratic_form(terms, sites, parity or 1)
        return RingState(sites, states, form_of, entropy, log_z)


def _weighed(logs: list[float]) -> tuple[float, np.ndarray]:
    """``ln Z`` of all sectors and their probabilities, which add up to 1 however large the logarithms are."""
    top = max(logs)
    share = np.exp(np.array(logs) - top)
    total = float(share.sum())
    return top + float(np.log(total)), share / total

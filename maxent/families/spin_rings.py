"""Spin rings whose charges are quadratic after the Jordan-Wigner map: exact at any size, not one Gaussian state.

On a ring the string that closes it depends on the parity ``P = prod_j Z_j``, so that each charge is one quadratic form
of Majorana operators where P = 1 and another where P = -1 (E. Lieb, T. Schultz, D. Mattis, Ann. Phys. 16, 407 (1961)):

    Z = sum_{eta = 1, -1} Tr (1 + eta P)/2 exp(-sum_j lam_j Q_j^eta).

With levels ``e_k >= 0`` of ``sum_j lam_j A_j`` and the parity sigma of the state without quasiparticles, the states of
a sector are those with an even (odd) number of quasiparticles for ``eta sigma = 1`` (-1).

The Kubo-Mori covariance is a sum of squares over hops ``eta+_k eta_l``, pairs ``eta+_k eta+_l`` and occupations, whose
weights are probabilities of `maxent.families.projected`: nothing special happens at zero modes or at lam = 0.  Floor:
families; must not know lattices.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from functools import cached_property, partial
from typing import Any

import numpy as np

from maxent.core.contract import EPS, Evaluation, Face, Family, Lowest
from maxent.families.antisymmetric import Canonical, canonical_form
from maxent.families.finite import checked_charges
from maxent.families.pfaffians import Word, parity_word, pauli_word, times
from maxent.families.projected import Filled, filled
from maxent.families.ring_states import RingState, SectorState
from maxent.families.stacks import Stacks
from maxent.memory import require_memory

__all__ = ["Sector", "SpinRing", "quadratic_form"]

#: What a user may choose: the whole space, one sector, or one Gaussian state that ignores the parity.
CHOICES = {"both": (1, -1), "even": (1,), "odd": (-1,), "unprojected": (0,)}

Terms = Iterable[tuple[float, Mapping[int, str]]]


def quadratic_form(terms: Terms, sites: int, parity: int, label: str = "operator") -> tuple[np.ndarray, float]:
    """The form ``(i/4) sum A_ab g_a g_b + c`` of a sum of products of Pauli matrices.

    Parameters
    ----------
    terms : iterable of (float, dict of int to str)
        Coefficients and letters by site, such as ``(-1.0, {0: "X", 1: "X"})``.
    sites : int
    parity : {1, -1, 0}
        Value of P, by which words longer than half are shortened; 0: none are.
    label : str
        For messages.

    Returns
    -------
    A : (2 sites, 2 sites) ndarray
    c : float

    Raises
    ------
    ValueError
        A term that is not quadratic, or not Hermitian; sites that do not exist.
    """
    a, constant = np.zeros((2 * sites, 2 * sites)), 0.0
    for coefficient, letters in terms:
        if any(not 0 <= x < sites for x in letters):
            raise ValueError(f"{label}: sites must lie in 0..{sites - 1}, not {sorted(letters)}")
        phase, word = _shortened(pauli_word(letters), sites, parity)
        value = coefficient * phase
        if len(word) not in (0, 2):
            text = " ".join(f"{letters[x]}{x}" for x in sorted(letters))
            raise ValueError(f"{label}: {text} is not quadratic in fermions: its word has {len(word)} letters")
        value = value * -2j if word else value  # c g_a g_b = (i/4) (A_ab g_a g_b + A_ba g_b g_a)
        if not np.isfinite(value) or abs(value.imag) > 1e-12 * abs(value):
            raise ValueError(f"{label}: coefficients must be finite real numbers, not {coefficient!r}")
        if not word:
            constant += value.real
            continue
        a[word[0], word[1]] += value.real
        a[word[1], word[0]] -= value.real
    return a, constant


def _shortened(word: Word, sites: int, parity: int) -> Word:
    """The same operator where P has the value `parity`, by the shorter of two words."""
    if not parity or len(word[1]) <= sites:
        return word
    phase, letters = parity_word(sites)
    return times((word[0] * phase * parity, word[1]), letters)


@dataclass(frozen=True, eq=False)
class Sector:
    """The charges where the parity is sharp.

    Attributes
    ----------
    parity : {1, -1, 0}
        Of all spins.
    inner : {1, -1, 0}
        Of the free modes: ``inner * det O`` is the parity of the number of quasiparticles in a frame O.
    constant : (m,) ndarray
    matrices : (m, 2n, 2n) ndarray
        Real antisymmetric.
    frame : (2L, 2n) ndarray
        The free Majorana operators.
    pinned : (2L, 2L) ndarray
        Covariance of the others.
    """

    parity: int
    inner: int
    constant: np.ndarray
    matrices: np.ndarray
    frame: np.ndarray
    pinned: np.ndarray

    def form(self, v: np.ndarray) -> tuple[Canonical, int]:
        """Canonical form of ``v.Q`` and the parity of its quasiparticles."""
        size = self.matrices.shape[1]
        flat = self.matrices.reshape(len(v), size * size)
        form = canonical_form((v @ flat).reshape(size, size))
        return form, self.inner * form.orientation

    def combined(self, matrix: np.ndarray, offset: np.ndarray) -> Sector:
        """The charges ``matrix @ Q - offset``."""
        size = self.matrices.shape[1]
        new = (matrix @ self.matrices.reshape(matrix.shape[1], size * size)).reshape(len(matrix), size, size)
        new = 0.5 * (new - new.transpose(0, 2, 1))
        return Sector(self.parity, self.inner, matrix @ self.constant - offset, new, self.frame, self.pinned)

    def bounds(self, v: np.ndarray) -> tuple[float, float, float]:
        """Lowest and highest value of ``v.Q`` in the sector, and the sum of its levels."""
        form, s = self.form(v)
        total, low = float(form.levels.sum()), float(v @ self.constant)
        first = float(form.levels.min(initial=np.inf))
        turned = s * (-1) ** len(form.levels)
        up, down = (first if s < 0 else 0.0), (first if turned < 0 else 0.0)
        return low - 0.5 * total + up, low + 0.5 * total - down, total

    def values(self, form: Canonical, mean: np.ndarray) -> np.ndarray:
        """Charges in a state with occupations `mean` of the quasiparticles."""
        even, odd = form.frame[:, 0::2], form.frame[:, 1::2]
        diagonal = np.einsum("ak,jak->jk", even, self.matrices @ odd)
        return self.constant + diagonal @ (mean - 0.5)

    def stacks(self) -> Stacks:
        """The same charges with any parity, for the polish of directions."""
        m = len(self.constant)
        dense = (1j * self.matrices[:, None],) if self.matrices.shape[1] else ()
        return Stacks(self.constant, np.zeros((m, 0)), np.zeros(0), dense, (0.5,) * len(dense), 1)

    def on_ground(self, v: np.ndarray, cut: float) -> tuple[Sector, float, float] | None:
        """The ground space of ``v.Q`` in the sector, its gap and width; None where it is not of this form."""
        form, s = self.form(v)
        e, frame = form.levels, form.frame.copy()
        free = e <= cut
        pinned_filling = -np.ones(len(e))
        bound = e[~free]
        if s < 0 and not free.any():
            # one quasiparticle in the lowest level, if that is unique
            order = np.argsort(e)
            if len(e) > 1 and e[order[1]] - e[order[0]] <= cut:
                return None
            pinned_filling[order[0]] = 1.0
            bound = np.array([e[order[1]] - e[order[0]]]) if len(e) > 1 else np.zeros(0)
        even, odd = frame[:, 0::2], frame[:, 1::2]
        diagonal = np.einsum("ak,jak->jk", even, self.matrices @ odd)
        constant = self.constant + 0.5 * diagonal[:, ~free] @ pinned_filling[~free]
        half = self.frame @ (even[:, ~free] * pinned_filling[~free]) @ (self.frame @ odd[:, ~free]).T
        columns = np.array([i for k in np.flatnonzero(free) for i in (2 * k, 2 * k + 1)], int)
        inner = frame[:, columns]
        sector = Sector(
            self.parity, s if free.any() else 0, constant, inner.T @ self.matrices @ inner, self.frame @ inner,
            self.pinned + half - half.T,
        )  # fmt: skip
        return sector, float(bound.min(initial=np.inf)), float(e[free].max(initial=0.0))

    @property
    def log_dimension(self) -> float:
        """Logarithm of the number of states."""
        n = self.matrices.shape[1] // 2
        return (n - (self.inner != 0)) * float(np.log(2.0))

    def evaluated(self, lam: np.ndarray) -> tuple[float, np.ndarray, list[np.ndarray], np.ndarray, Filled, Canonical]:
        """``ln Z``, values, rows whose squares add up to the covariance of hops and pairs, entries of occupations."""
        form, s = self.form(lam)
        e = form.levels
        inside = filled(e, s)
        log_z = inside.log_z + 0.5 * float(e.sum()) - float(lam @ self.constant)
        y = form.frame.T @ self.matrices @ form.frame
        y00, y01, y10, y11 = y[:, 0::2, 0::2], y[:, 0::2, 1::2], y[:, 1::2, 0::2], y[:, 1::2, 1::2]
        diagonal = np.einsum("jkk->jk", y01).copy()
        hop = np.maximum(inside.one, inside.one.T) * _falls(np.abs(e[:, None] - e[None, :]))
        pair = inside.none * _falls(e[:, None] + e[None, :])
        for w in (hop, pair):
            np.fill_diagonal(w, 0.0)
        rows = []
        for part, weight in ((y00 + y11, hop), (y01 - y10, hop), (y00 - y11, pair), (y01 + y10, pair)):
            rows.append((part * (0.5 * np.sqrt(weight))).reshape(len(lam), len(e) ** 2))
        return log_z, self.constant + diagonal @ (inside.mean - 0.5), rows, diagonal, inside, form


def _falls(d: np.ndarray) -> np.ndarray:
    """``(1 - e^-d)/d``, 1 at d = 0."""
    return np.where(d > 1e-8, -np.expm1(-d) / np.where(d > 1e-8, d, 1.0), 1.0 - 0.5 * d)


@dataclass(frozen=True, init=False, eq=False)
class SpinRing(Family):
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
    sectors: tuple[Sector, ...]

    def __init__(self, sites: int, charges: Any, *, sectors: str = "both"):
        charges = checked_charges(charges, "SpinRing")
        if isinstance(sites, bool) or not isinstance(sites, int | np.integer) or sites < 1:
            raise ValueError(f"sites must be a positive integer, not {sites!r}")
        if sectors not in CHOICES:
            raise ValueError(f"sectors must be one of {', '.join(map(repr, CHOICES))}, not {sectors!r}")
        if not charges:
            raise ValueError("no charges given: SpinRing needs at least one charge")
        n, m = int(sites), len(charges)
        require_memory(8 * 12 * m * (2 * n) ** 2, f"{n} sites need {{need}} for {m} charges")
        listed = {name: list(terms) for name, terms in charges.items()}
        made = []
        for eta in CHOICES[sectors]:
            forms = [quadratic_form(t, n, eta or 1, f"charge {name!r}") for name, t in listed.items()]
            matrices, constant = np.array([a for a, _ in forms]), np.array([c for _, c in forms])
            made.append(Sector(eta, eta, constant, matrices, np.eye(2 * n), np.zeros((2 * n, 2 * n))))
        self._set(n, tuple(charges), tuple(made))

    def _set(self, *values: Any) -> SpinRing:
        for key, value in zip(("sites", "names", "sectors"), values, strict=True):
            object.__setattr__(self, key, value)
        return self

    def _with(self, sectors: tuple[Sector, ...]) -> SpinRing:
        names = self.names if len(self.names) == len(sectors[0].constant) else ()
        return object.__new__(SpinRing)._set(self.sites, names, sectors)

    @property
    def entropy_floor(self) -> float:  # type: ignore[override]
        """0: states are counted."""
        return 0.0

    @property
    def size(self) -> int:
        """Number of states; values are totals, not per site."""
        return sum(1 << (s.matrices.shape[1] // 2 - bool(s.inner)) for s in self.sectors)

    @cached_property
    def scale(self) -> np.ndarray:
        """Operator norm of each charge, shape (m,)."""
        lows = [self.lowest(v) for v in np.eye(len(self.sectors[0].constant))]
        return np.array([max(abs(low.value), abs(low.highest)) for low in lows])

    def log_partition(self, lam: Any) -> float:
        """``ln Z(lam)``, on the host."""
        return float(self.evaluate(lam).log_partition)

    def evaluate(self, lam: Any, order: int = 2) -> Evaluation:
        """``ln Z``, values and covariance: both sectors weighed by their partition functions.

        Raises
        ------
        TypeError
            For arrays of JAX.
        """
        if not isinstance(lam, np.ndarray):
            raise TypeError("spin rings run on the host driver: give NumPy arrays, or solve with driver='host'")
        parts = [(s, *s.evaluated(lam)) for s in self.sectors]
        logs = np.array([p[1] for p in parts])
        log_z = float(logs.max() + np.log(np.exp(logs - logs.max()).sum()))
        share = np.exp(logs - log_z)
        values = sum(w * p[2] for w, p in zip(share, parts, strict=True))
        m = len(lam)
        covariance, level, lowest = np.zeros((m, m)), 0.0, np.inf
        kept: list[np.ndarray] = []
        for w, (sector, _, q, rows, diagonal, inside, form) in zip(share, parts, strict=True):
            covariance += w * (diagonal @ inside.covariance @ diagonal.T)
            kept += [np.sqrt(w) * r for r in rows] + [np.sqrt(w) * (q - values)[:, None]]
            low, half = float(lam @ sector.constant), 0.5 * float(form.levels.sum())
            s = sector.inner * form.orientation
            lowest = min(lowest, low - half + (float(form.levels.min(initial=0.0)) if s < 0 else 0.0))
            level = max(level, abs(low) + half)
        for r in kept:
            covariance += r @ r.T
        rounding = 4 * EPS * (1 + level) * max(1.0, float(np.sqrt(np.linalg.norm(covariance))))

        def factor() -> np.ndarray:
            every = list(kept)
            for w, (_, _, _, _, diagonal, inside, _) in zip(share, parts, strict=True):
                h, u = np.linalg.eigh(inside.covariance)
                every.append(np.sqrt(w) * diagonal @ (u * np.sqrt(np.maximum(h, 0.0))))
            return np.concatenate(every, axis=1)

        return Evaluation(
            np.float64(log_z), values, 0.5 * (covariance + covariance.T), np.float64(rounding), np.float64(level),
            factor=factor, lowest=np.float64(lowest),
        )  # fmt: skip

    def reference(self) -> tuple[np.ndarray, np.ndarray]:
        """Infinite-temperature means (m,) and charges minus mean as rows (m, p)."""
        ev = self.evaluate(np.zeros(len(self.sectors[0].constant)))
        assert ev.factor is not None
        return ev.values, ev.factor()

    def traced(self) -> Family:
        """Not there: decompositions of real antisymmetric matrices are LAPACK's.

        Raises
        ------
        TypeError
        """
        raise TypeError("spin rings run on the host driver: solve with driver='host'")

    def reach(self) -> np.ndarray:
        """Upper bounds (m,) of the spread of each charge."""
        return 2 * self.scale

    def combine(self, matrix: np.ndarray, offset: np.ndarray) -> SpinRing:
        """Family of the charges ``matrix @ Q - offset``."""
        return self._with(tuple(s.combined(matrix, offset) for s in self.sectors))

    def lowest(self, v: np.ndarray, *, with_values: bool = False) -> Lowest:
        """Lowest value of ``<v.Q>``: no quasiparticle, or one where the parity asks for it."""
        bounds = [s.bounds(v) for s in self.sectors]
        low, high = min(b[0] for b in bounds), max(b[1] for b in bounds)
        sector = self.sectors[int(np.argmin([b[0] for b in bounds]))]
        form, s = sector.form(v)
        error = EPS * max(b[2] + abs(v @ x.constant) for b, x in zip(bounds, self.sectors, strict=True))
        mean = np.zeros(len(form.levels))
        if s < 0 and len(mean):
            mean[int(np.argmin(form.levels))] = 1.0
        values = sector.values(form, mean) if with_values else None
        face = self._ground(v, 64 * error)
        degeneracy = 0.0 if face is None else float(np.logaddexp.reduce([x.log_dimension for x in face[0]]))
        return Lowest(low, high, error, values, degeneracy)

    def _ground(self, v: np.ndarray, cut: float) -> tuple[list[Sector], float, float] | None:
        """Ground space of ``v.Q`` over all sectors: its parts, the gap to the next level, and its width."""
        bounds = [s.bounds(v)[0] for s in self.sectors]
        low = min(bounds)
        kept, gap, width = [], np.inf, 0.0
        for s, bound in zip(self.sectors, bounds, strict=True):
            if bound - low > cut:
                gap = min(gap, bound - low)
                continue
            part = s.on_ground(v, cut)
            if part is None:
                return None
            kept.append(part[0])
            gap, width = min(gap, part[1]), max(width, part[2])
        return kept, gap, width

    def face(self, v: np.ndarray, tol: float) -> Face | None:
        """Ground space of ``v.Q`` as a ring of the free modes.

        None also where an odd sector has several lowest quasiparticle levels: that space is not of this form.
        """
        forms = [s.form(v)[0].levels for s in self.sectors]
        top = max((float(e.max(initial=0.0)) for e in forms), default=0.0)
        away = abs(min(s.bounds(v)[0] for s in self.sectors)) > max(100 * tol, 1e-9 * float(np.abs(v) @ self.scale))
        found = None if away else self._ground(v, max(100 * tol, 1e-9 * top))
        if found is None or not top > 0:
            return None
        sectors, gap, width = found
        if not np.isfinite(gap):
            return None  # the whole space
        dimension = float(np.logaddexp.reduce([s.log_dimension for s in sectors]))
        return Face(self._with(tuple(sectors)), gap / top, dimension, width=width / top)

    def sharpen(self, v: np.ndarray) -> Iterator[np.ndarray]:
        """Polished directions of each sector, the one with the lowest value first."""
        for s in sorted(self.sectors, key=lambda s: s.bounds(v)[0]):
            if s.matrices.shape[1]:
                yield from s.stacks().sharpen(v)

    def state(self, lam: Any) -> RingState:
        """State at multipliers `lam`, shape (m,).

        Raises
        ------
        ValueError
            Not m finite numbers.
        """
        lam = np.asarray(lam, float)
        m = len(self.sectors[0].constant)
        if lam.shape != (m,) or not np.all(np.isfinite(lam)):
            raise ValueError(f"multipliers must be {m} finite numbers, not {lam.tolist()}")
        logs, entropies, made = [], [], []
        for s in self.sectors:
            form, sign = s.form(lam)
            inside = filled(form.levels, sign)
            logs.append(inside.log_z + 0.5 * float(form.levels.sum()) - float(lam @ s.constant))
            entropies.append(inside.log_z + float(form.levels @ inside.mean))
            made.append(partial(
                SectorState, s.parity, frame=s.frame @ form.frame, levels=form.levels, mean=inside.mean,
                parity_of_levels=sign, pinned=s.pinned,
            ))  # fmt: skip
        log_z = float(np.logaddexp.reduce(logs))
        share = np.exp(np.array(logs) - log_z)
        mixing = -float(share[share > 0] @ np.log(share[share > 0]))
        states = tuple(make(weight=float(w)) for make, w in zip(made, share, strict=True))
        sites = self.sites
        form_of = lambda terms, parity: quadratic_form(terms, sites, parity or 1)
        return RingState(sites, states, form_of, mixing + float(share @ entropies), log_z)

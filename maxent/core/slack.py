"""What a target leaves open: an interval for each residual, and a quadratic penalty.

With residuals ``r_j = <Q_j> - q_j`` allowed in ``[l_j, u_j]`` and penalised by ``r.C^-1.r/2``, the state of largest
``S - r.C^-1.r/2`` has the dual

    F(lam) + h(lam) + lam.C.lam/2,     h(v) = max over allowed r of v.r = sum_j max(v_j l_j, v_j u_j),

so the support function ``h`` is both the kink in the dual and the slack of a certificate: no state is allowed if
``lowest(v) > v.q + h(v)``.  Exact: l = u.  A tolerance: l = -u.  One-sided: one end infinite.  Penalised: both ends
infinite, so that no certificate can rest on it.  Floor: core; knows nothing of names or of how the dual is solved.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from maxent.core.contract import EPS, SAFETY, Family, Problem

__all__ = ["Slack"]

#: Edges further out than this, in units of the size of the charge, are looked at: digits may cancel.
FAR = 8.0


@dataclass(frozen=True)
class Slack:
    """Intervals and penalty of m residuals.

    Attributes
    ----------
    lower, upper : (m,) ndarray
        Ends of the intervals; may be infinite.
    penalty : (m, m) ndarray
        C, the covariance matrix of the penalised targets; zero rows for all others.

    Raises
    ------
    ValueError
        A penalty that is not positive definite on the charges it concerns.
    """

    lower: np.ndarray
    upper: np.ndarray
    penalty: np.ndarray

    def __post_init__(self) -> None:
        on = self.is_penalised
        if not np.any(on):
            return
        block = self.penalty[np.ix_(on, on)]
        unit = np.sqrt(np.maximum(np.diag(block), 1e-300))
        correlation = block / np.outer(unit, unit)
        if not np.allclose(correlation, correlation.T, rtol=0, atol=1e-12) or np.linalg.eigvalsh(correlation)[0] <= 0:
            raise ValueError("the covariance matrix of the measured targets is not positive definite")

    @classmethod
    def exact(cls, m: int) -> Slack:
        """No slack at all, for m charges."""
        return cls(np.zeros(m), np.zeros(m), np.zeros((m, m)))

    @classmethod
    def measured(cls, covariance: np.ndarray) -> Slack:
        """Every target measured, with this (m, m) covariance matrix of the targets."""
        m = len(covariance)
        return cls(np.full(m, -np.inf), np.full(m, np.inf), np.asarray(covariance, float))

    # ------------------------------------------------------------------ kinds

    @property
    def is_exact(self) -> np.ndarray:
        """Charges whose residual is a given number, (m,) bool."""
        return self.lower == self.upper

    @property
    def is_penalised(self) -> np.ndarray:
        """Charges whose residual costs instead of being bounded, (m,) bool."""
        return np.isinf(self.lower) & np.isinf(self.upper)

    @property
    def has_edge(self) -> np.ndarray:
        """Charges whose residual may be anywhere in an interval with an end, (m,) bool."""
        return ~(self.is_exact | self.is_penalised)

    @property
    def any(self) -> bool:
        """Whether anything is left open."""
        return not bool(np.all(self.is_exact & (self.lower == 0)))

    # ------------------------------------------------------------------ the support function

    def support(self, v: np.ndarray) -> float:
        """``h(v)``, the largest ``v.r`` over allowed residuals r; inf where a residual in `v` is unbounded."""
        end = np.where(v > 0, self.upper, self.lower)
        on = v != 0
        return float(v[on] @ end[on])

    def edges(self, side: np.ndarray) -> np.ndarray:
        """Residual at the end of the interval that `side` (m,) names by its sign; 0 where `side` is 0."""
        end = np.where(side > 0, self.upper, np.where(side < 0, self.lower, 0.0))
        return np.where(self.is_exact, self.lower, end)

    def admissible(self, v: np.ndarray) -> np.ndarray | None:
        """The nearest unit direction of finite support, or None: wrong signs and penalised charges are dropped."""
        finite = np.isfinite(np.where(v > 0, self.upper, self.lower)) & np.isfinite(v)
        v = np.where(finite, v, 0.0)
        size = np.linalg.norm(v)
        return v / size if size > 0 else None

    def verify(self, problem: Problem, v: np.ndarray) -> tuple[float, float, bool]:
        """Margin ``lowest(v) - h(v)`` of a direction, its tolerance, and whether ``v.Q`` is a mere number.

        The only evidence there is: a margin above the tolerance proves that no state is allowed.
        """
        low = problem.family.lowest(v)
        tolerance = float(np.abs(v) @ problem.unit + SAFETY * low.error)
        return low.value - self.support(v), tolerance, bool(low.highest - low.value <= 2 * tolerance)

    # ------------------------------------------------------------------ other problems

    def noisy(self, problem: Problem) -> Problem:
        """`problem` with the rounding of the interval ends added to its noise."""
        ends = np.maximum(*(np.where(np.isfinite(x), np.abs(x), 0.0) for x in (self.lower, self.upper)))
        return replace(problem, noise=problem.noise + EPS * ends)

    def brought_near(self, family: Family, q: np.ndarray) -> tuple[np.ndarray, Slack, np.ndarray]:
        """The same question with far edges that no state can reach brought near, so that no digits cancel.

        A limit above the highest value of its charge forbids nothing, wherever it stands; but charges counted from a
        limit of 1e10 have lost ten digits.  Such edges are moved to one size of the charge outside its spectrum.

        Parameters
        ----------
        family : Family
            Charges as the user gave them.
        q : (m,) ndarray
            Centres of the targets.

        Returns
        -------
        q : (m,) ndarray
            Centres near the spectrum; those of targets with an edge that may hold are the given ones.
        slack : Slack
            Counted from them.
        upper, lower : (2, m) ndarray of bool
            Which edges were moved: they can take part in no certificate.
        """
        q, lower, upper = np.array(q, float), self.lower.copy(), self.upper.copy()
        moved = np.zeros((2, len(q)), bool)
        scale = np.asarray(family.scale, float)
        for j in np.flatnonzero(self.has_edge):
            ends = q[j] + np.array([lower[j], upper[j]])
            if not scale[j] > 0 or not np.any(np.abs(ends[np.isfinite(ends)]) > FAR * scale[j]):
                continue
            low = family.lowest(np.eye(len(q))[j])
            if not np.isfinite([low.value, low.highest]).all():
                continue
            below, above = low.value - scale[j], low.highest + scale[j]
            idle = np.array([np.isfinite(ends[0]) and ends[0] < below, np.isfinite(ends[1]) and ends[1] > above])
            held = np.isfinite(ends) & ~idle
            if not np.any(idle):
                continue
            if not np.any(held):
                q[j] = below if not idle[1] else above if not idle[0] else 0.5 * (below + above)
            elif abs(q[j]) > FAR * scale[j]:
                continue  # the multiplier of the edge that may hold belongs to the centre as given
            lower[j] = below - q[j] if idle[0] else lower[j]
            upper[j] = above - q[j] if idle[1] else upper[j]
            moved[:, j] = idle[1], idle[0]
        return q, Slack(lower, upper, self.penalty), moved

    def pinned(self, v: np.ndarray) -> tuple[Slack, np.ndarray]:
        """Slack on the face that `v` exposes, counted from the edges there, and these edges (m,).

        States with ``<v.(Q - q)> = h(v)`` have every charge with ``v_j != 0`` at the end that belongs to its sign.
        """
        edge = self.edges(np.sign(v))
        fixed = (v != 0) | self.is_exact
        return Slack(np.where(fixed, 0.0, self.lower), np.where(fixed, 0.0, self.upper), self.penalty), edge

    def excess(self, residual: np.ndarray) -> np.ndarray:
        """How far each residual lies outside its interval, (m,), positive above and negative below."""
        return np.maximum(residual - self.upper, 0.0) - np.maximum(self.lower - residual, 0.0)

"""What the verdict logic works with and what it hands out.  Floor: core."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from maxent.core.contract import Family, Problem, Verdict
from maxent.core.newton import Iterate
from maxent.core.whiten import Whitening

__all__ = ["Memo", "Outcome"]


@dataclass(frozen=True)
class Outcome:
    """A verdict with its evidence, in the charges of one problem.

    Attributes
    ----------
    verdict : Verdict
    problem : Problem
    whitening : Whitening
    evidence : {"proved", "tested"}
    family : Family or None
        Whitened family that carries the state (of the face, for a boundary).
    at : Iterate or None
        Where the iteration ended in that family.
    values : (m,) ndarray or None
        Charges minus targets in the state.
    direction, margin, tolerance
        Certificate: unit vector v in the user's charges, ``lowest(v)`` of the shifted charges, decision tolerance.
    face : Outcome or None
        The problem on the face, for a boundary.
    gap, log_dimension : float
        Of this face, not of the deepest one.
    excess : (m,) ndarray or None
        What stays unmatched, for an unattained target.
    shift : float
        The number ``R nu`` of the existence proof, below 1/2 when it holds.
    reason : str
        Why there is no verdict.
    depth : float
        How far the targets lie inside the nearest face that was seen, NaN when none was.
    iterations : int
        Newton steps, faces included.
    trace : tuple
        (residual, ln Z, size of the exponent) per Newton step of this problem.
    """

    verdict: Verdict
    problem: Problem
    whitening: Whitening
    evidence: str = "proved"
    family: Family | None = None
    at: Iterate | None = None
    values: np.ndarray | None = None
    direction: np.ndarray | None = None
    margin: float = np.nan
    tolerance: float = np.nan
    face: Outcome | None = None
    gap: float = np.nan
    log_dimension: float = np.nan
    excess: np.ndarray | None = None
    shift: float = np.nan
    reason: str = ""
    depth: float = np.nan
    iterations: int = 0
    trace: tuple[tuple[float, float, float], ...] = ()

    @property
    def deepest(self) -> Outcome:
        """The outcome that carries the state: itself, or that of the last face."""
        return self if self.face is None else self.face.deepest

    def relative(self) -> float:
        """Largest residual in the state over ``|Q_j| + |q_j|``."""
        if self.values is None:
            return np.inf
        return float(np.max(np.abs(self.values) / self.problem.size, initial=0.0))


@dataclass
class Memo:
    """What the stages leave for one another: the one mutable object of a decision."""

    whitening: Whitening
    family: Family
    unit: np.ndarray
    driver: str = "host"
    depth: int = 0
    at: Iterate | None = None
    step: np.ndarray | None = None
    floored: bool = False
    shift: float = np.nan
    touched: bool = False
    iterations: int = 0
    near: list[tuple[float, np.ndarray]] = field(default_factory=list)
    trace: list[tuple[float, float, float]] = field(default_factory=list)
    reason: str = ""

    @property
    def here(self) -> Iterate:
        """The iterate, once there is one."""
        assert self.at is not None
        return self.at

    def outcome(self, problem: Problem, verdict: Verdict, **known: Any) -> Outcome:
        """Outcome with the bookkeeping filled in."""
        known.setdefault("at", self.at)
        if self.near:
            known["depth"] = -max(margin for margin, _ in self.near)
        known["iterations"] = known.get("iterations", 0) + self.iterations
        return Outcome(verdict, problem, self.whitening, shift=self.shift, trace=tuple(self.trace), **known)

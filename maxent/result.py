"""The result of a solve: one frozen class, every field always there.  Floor: result.

Without a solution the multipliers are NaN and the last iterate has its own name, so that nobody can use it by mistake;
the certificate stands in its own field, named by charge, with its margin.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any

import numpy as np

from maxent.core.contract import Family, Verdict
from maxent.core.outcome import Outcome
from maxent.diagnose.claims import Check, check_claim
from maxent.diagnose.conditioning import Conditioning
from maxent.diagnose.export import to_dataset, to_html, to_scipy
from maxent.diagnose.multipliers import propagated, user_covariance
from maxent.diagnose.nearest import Nearest
from maxent.diagnose.proof import NOT_PROVABLE, Proof, prove_interior, prove_outside
from maxent.diagnose.redundancy import Redundancy
from maxent.errors import SolveError
from maxent.targets import collect, collect_slack

__all__ = ["Certificate", "Check", "FaceChain", "Nearest", "Result", "Verdict"]


@dataclass(frozen=True)
class Certificate:
    """Why there are no finite multipliers: one combination of the charges, checkable by one decomposition.

    Attributes
    ----------
    direction : dict of str to float
        Unit combination v of the charges.
    lowest : float
        Lowest value of ``<v.Q>`` over all states.
    asked : float
        The value ``v.q`` that the targets give it.
    margin : float
        lowest - asked - slack; with ``|v| = 1`` a lower bound of the distance of the targets from what can be reached.
    tolerance : float
        What rounding and the stated accuracy leave undecided.
    kind : {"outside", "face", "contradiction"}
        ``outside``: margin above tolerance, no state has these values.  ``face``: margin zero within tolerance, only
        states of lowest v.Q can have them.  ``contradiction``: v.Q is a number, and the targets give another one.
    accuracy : dict of str to float
        Stated accuracy of the targets that entered the tolerance.
    slack : float
        By how much tolerances and limits let ``<v.Q>`` exceed `asked`; 0 for exact targets.
    """

    direction: dict[str, float]
    lowest: float
    asked: float
    margin: float
    tolerance: float
    kind: str
    accuracy: dict[str, float] = field(default_factory=dict)
    slack: float = 0.0

    def verify(self, family: Family, targets: Mapping[str, Any]) -> Check:
        """Compute the claim again from the charges and the targets alone.

        Nothing that is written in the certificate but the direction, the kind and the accuracy enters; the other
        numbers are compared with the ones found.

        Parameters
        ----------
        family : Family
            With named charges.
        targets : dict of str to float, Exact, Within, AtMost, AtLeast or Measured
            As given to `maxent.solve`; the slack is computed from them again.

        Returns
        -------
        Check
            True when the claim holds and the numbers fit; carries the numbers found, and what does not hold.

        Raises
        ------
        ValueError
            Names that do not fit.
        """
        names = names_of(family)
        q, accuracy = collect(names, targets, self.accuracy)
        stated = {n: float(getattr(self, n)) for n in ("lowest", "asked", "margin", "tolerance", "slack")}
        v, slack = self._along(names), collect_slack(names, targets)
        return check_claim(family, q, accuracy, slack, v=v, kind=self.kind, stated=stated)

    def prove(self, family: Family, targets: Mapping[str, Any]) -> Proof:
        """Prove the claim as a theorem about the float64 numbers in the charges, the targets and the direction.

        Parameters
        ----------
        family : Family
            With named charges, as it was given to `maxent.solve`.
        targets : dict of str to float, Exact, Within, AtMost, AtLeast or Measured
            As given to `maxent.solve`; what they leave open is computed from them again.

        Returns
        -------
        Proof
            True when proved; carries the proved margin, rounded down.

        Raises
        ------
        ValueError
            Names that do not fit.
        """
        names = names_of(family)
        q, accuracy = collect(names, targets, self.accuracy)
        v, slack = self._along(names), collect_slack(names, targets)
        return prove_outside(family, v, q, accuracy, slack, kind=self.kind, margin=self.margin)

    def _along(self, names: tuple[str, ...]) -> np.ndarray:
        """The direction in the order of `names`, (m,); a charge that it leaves out takes no part."""
        for unknown in self.direction.keys() - set(names):
            raise ValueError(f"direction {unknown!r} is for no charge (charges: {', '.join(map(repr, names))})")
        return np.array([self.direction.get(n, 0.0) for n in names], float)


@dataclass(frozen=True)
class FaceChain:
    """The faces a boundary target lies on, outermost first.

    Attributes
    ----------
    dimension : float
        Number of independent states of the last face.
    log_dimension : float
    depth : int
        Number of faces, one inside the other.
    directions : tuple of dict of str to float
        Exposing combination of each.
    gaps : tuple of float
        Relative distance of the next level, for each.
    """

    dimension: float
    log_dimension: float
    depth: int
    directions: tuple[dict[str, float], ...]
    gaps: tuple[float, ...]

    @property
    def gap(self) -> float:
        """Relative distance of the next level on the outermost face."""
        return self.gaps[0]


@dataclass(frozen=True)
class Result:
    """Answer of `maxent.solve`.

    Attributes
    ----------
    verdict : Verdict
        ``str()`` gives the lower-case word.
    evidence : {"proved", "tested"}
        Whether the verdict rests on a bound, or on probing where the family knows no bound.
    message : str
        One sentence with numbers: what happened and what to try.
    names : tuple of str
        Charges, in the order of `covariance`.
    targets, values, residuals : dict of str to float
        residual = value - target; values are NaN when there is no state.
    multipliers : dict of str to float
        NaN unless solved.
    slack : dict of str to str
        Where each value lies in what its target leaves open: ``exact``, ``inside``, ``at the upper edge``, ``at the
        lower edge``, ``penalised``; ``unknown`` without a state.
    not_needed : tuple of str
        Charges whose tolerance or limit is met anyway: their multiplier is exactly 0, the state is the same without
        them.
    last_multipliers : dict of str to float
        The last iterate whatever the verdict; not a solution unless solved.
    multiplier_errors : dict of str to float
        What rounding and stated target accuracy leave open; NaN unless solved.
    loose : bool
        Fewer than six digits of the largest multiplier are fixed by the inputs.
    replay : float
        Relative residual that the float64 multipliers alone reproduce in the user's charges; NaN unless solved.
    covariance : (m, m) ndarray
        Kubo-Mori covariance of the charges in the state (Hessian of ln Z); NaN without a state.
    certificate : Certificate or None
    face : FaceChain or None
        For a boundary.
    excess : dict of str to float or None
        For an unattained target: what stays unmatched.
    conflict : tuple of str or None
        With ``explain=True``, for an unreachable target: charges whose targets cannot hold together, while without any
        one of them the others can.
    nearest : Nearest or None
        With ``explain=True``, for an unreachable target: the nearest reachable ones, with bounds of their distance.
        None when a target leaves something open (a tolerance, a limit).
    explanation : tuple of str
        With ``explain=True``: the verdict in sentences.
    sigmas : dict of str to float
        Standard errors of the targets given as `maxent.Measured`; 0 for all others.
    redundancies : tuple of Redundancy
    conditioning : Conditioning or None
    iterations : int
        Newton steps, faces included.
    driver : {"host", "jax"}
        Who ran them.
    trace : tuple of (float, float, float)
        Whitened residual, ln Z and size of the exponent, per step.
    """

    verdict: Verdict
    evidence: str
    message: str
    names: tuple[str, ...]
    targets: dict[str, float]
    values: dict[str, float]
    residuals: dict[str, float]
    multipliers: dict[str, float]
    last_multipliers: dict[str, float]
    multiplier_errors: dict[str, float]
    loose: bool
    replay: float
    covariance: np.ndarray
    certificate: Certificate | None
    face: FaceChain | None
    excess: dict[str, float] | None
    redundancies: tuple[Redundancy, ...]
    conditioning: Conditioning | None
    iterations: int
    driver: str
    trace: tuple[tuple[float, float, float], ...]
    outcome: Outcome = field(repr=False)
    slack: dict[str, str] = field(default_factory=dict)
    not_needed: tuple[str, ...] = ()
    conflict: tuple[str, ...] | None = None
    nearest: Nearest | None = None
    explanation: tuple[str, ...] = ()
    sigmas: dict[str, float] = field(default_factory=dict)

    @property
    def success(self) -> bool:
        """Whether the verdict is SOLVED; the residual was computed at the multipliers that are returned."""
        return self.verdict is Verdict.SOLVED

    @cached_property
    def state(self) -> Any:
        """The state, from the whitened charges; None unless solved or boundary.

        Float64 multipliers cannot carry condition numbers above 1e8, the whitened ones can.
        """
        if self.verdict not in (Verdict.SOLVED, Verdict.BOUNDARY):
            return None
        last = self.outcome.deepest
        assert last.family is not None
        lam = np.zeros(len(last.family.scale)) if last.at is None else last.at.lam
        state = last.family.state(lam)
        if self.verdict is Verdict.BOUNDARY:
            return replace(state, log_partition=np.nan)  # diverges with the multipliers
        shift = sum(self.multipliers[n] * self.targets[n] for n in self.names)
        return replace(state, log_partition=state.log_partition - shift)

    def mean(self, operator: Any) -> float:
        """Expectation value of an operator of the same kind as the charges; NaN without a state."""
        return float("nan") if self.state is None else self.state.mean(operator)

    @property
    def log_partition(self) -> float:
        """``ln Z`` of the charges as given; NaN unless solved."""
        return float("nan") if self.state is None else float(self.state.log_partition)

    @property
    def entropy(self) -> float:
        """Entropy in nats; NaN without a state."""
        return float("nan") if self.state is None else float(self.state.entropy)

    @property
    def relative_entropy(self) -> float | None:
        """Relative entropy to the prior in nats; None without a prior or a state."""
        return None if self.state is None else getattr(self.state, "relative_entropy", None)

    @property
    def digits(self) -> dict[str, float]:
        """Decimal digits of each multiplier that the inputs fix; NaN unless solved."""
        out = {}
        for n in self.names:
            size, error = abs(self.multipliers[n]), self.multiplier_errors[n]
            out[n] = float(np.clip(-np.log10(max(error, 1e-300) / max(size, error, 1e-300)), 0.0, 16.0))
            if not np.isfinite(self.multipliers[n]):
                out[n] = float("nan")
        return out

    def multiplier_sigmas(self, errors: np.ndarray | None = None) -> dict[str, float]:
        """Standard errors of the multipliers that follow from those of the targets, to first order.

        `multiplier_errors` are about rounding and stated accuracy; these are about measurement, and mostly far larger.
        A multiplier that is zero because its target is not needed has none.

        Parameters
        ----------
        errors : (m, p) ndarray, optional
            ``errors @ errors.T`` is the covariance matrix of the targets, in the order of `names`; ``np.diag(sigma)``
            for independent standard errors.  By default those of the targets given as `maxent.Measured`.

        Returns
        -------
        dict of str to float
            NaN unless solved.

        Raises
        ------
        ValueError
            Not m rows.
        """
        pull = np.array([self.sigmas.get(n, 0.0) for n in self.names])
        errors = np.diag(pull) if errors is None else np.asarray(errors, float)
        if errors.ndim != 2 or len(errors) != len(pull):
            raise ValueError(f"errors must have shape ({len(pull)}, p), not {errors.shape}")
        if not self.success:
            return dict.fromkeys(self.names, float("nan"))
        factor, spread = user_covariance(self.outcome)[1], self.outcome.whitening.spread
        kept = np.array([n not in self.not_needed for n in self.names], bool)
        known = None if self.not_needed or np.any(pull) else factor.shape[1]
        out = np.zeros(len(pull))
        out[kept] = propagated(factor[kept], spread[kept], errors[kept], pull[kept], known)
        return dict(zip(self.names, map(float, out), strict=True))

    def prove(self, family: Family, targets: Mapping[str, Any] | None = None) -> Proof:
        """Prove the verdict as a theorem about the numbers given.

        Infeasible and inconsistent: `Certificate.prove`.  Solved: a ball of targets around these is reachable, hence
        the multipliers exist (`maxent.diagnose.proofs.interior` has the theorem); its radius is the margin.

        Parameters
        ----------
        family : Family
            As it was given to `maxent.solve`.
        targets : dict of str to float, Exact, Within, AtMost, AtLeast or Measured, optional
            As given to `maxent.solve`; needed when one of them leaves something open.

        Returns
        -------
        Proof

        Raises
        ------
        ValueError
            A target leaves something open and `targets` are not given, or the names do not fit.
        """
        names_of(family)
        if targets is None:
            relaxed = [n for n, place in self.slack.items() if place != "exact"]
            if relaxed:
                raise ValueError(f"target {relaxed[0]!r} leaves something open: give prove the targets, too")
            targets = self.targets
        if self.certificate is not None:
            return self.certificate.prove(family, targets)
        if self.verdict is not Verdict.SOLVED:
            return Proof(NOT_PROVABLE, float("nan"), None, "", f"nothing to prove: the verdict is {self.verdict}")
        q, _ = collect(self.names, targets, 0.0)
        values = np.array([self.values[n] for n in self.names])
        accuracy, slack = self.outcome.problem.accuracy, collect_slack(self.names, targets)
        return prove_interior(family, self.state, q, accuracy, slack, values)

    def require(self) -> Result:
        """The result itself when solved.

        Raises
        ------
        SolveError
            Otherwise; carries the result.
        """
        if not self.success:
            raise SolveError(self)
        return self

    def to_scipy(self) -> Any:
        """The result as a `scipy.optimize.OptimizeResult` of the dual ``F(lam) = ln Z + lam.q``.

        Returns
        -------
        scipy.optimize.OptimizeResult
            x: multipliers; fun: F; jac: its gradient, target - value; hess: the covariance; nit, success, message;
            status 0 solved, 1 boundary, 2 unattained, 3 infeasible, 4 inconsistent, 5 unfinished.  NaN as here.
        """
        return to_scipy(self)

    def to_dataset(self) -> Any:
        """The result as an `xarray.Dataset` with the names of the charges as coordinates.

        Returns
        -------
        xarray.Dataset
            target, value, residual, multiplier and multiplier_error by charge; covariance by charge and charge_other;
            entropy and log_partition; verdict, evidence and message as attributes.

        Raises
        ------
        ImportError
            Without xarray.
        """
        return to_dataset(self)

    def _repr_html_(self) -> str:
        return to_html(self)

    def __repr__(self) -> str:
        lines = [f"{self.verdict} ({self.evidence}, {self.iterations} steps): {self.message}"]
        for n in self.names:
            numbers = self.targets[n], self.values[n], self.multipliers[n]
            lines.append("  {}: target {:.10g}, value {:.10g}, multiplier {:.10g}".format(n, *numbers))
        return "\n".join(lines)


def names_of(family: Any) -> tuple[str, ...]:
    """Names of the charges of a family.

    Raises
    ------
    TypeError
        Not a family with named charges.
    """
    if not isinstance(family, Family) or not hasattr(family, "names"):
        raise TypeError(f"family must be the one given to maxent.solve, not {type(family).__name__}")
    return tuple(family.names)

"""Quadratic charges of a comparison: their families, fits, means and covariances.

What `maxent.quench.ensembles.Charges` is for matrices.  Floor: quench.  Must not know starts or dynamics.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from maxent.core.contract import Evaluation
from maxent.families.gaussian_states import symplectic_form
from maxent.families.ring_states import RingState
from maxent.lattice import OperatorSum, recognise
from maxent.quench.corrections import leading_correction, second_derivatives
from maxent.quench.gaussian_blocks import moments_of
from maxent.quench.gaussian_forms import as_quadratic, gaussian_family, gaussian_mean
from maxent.quench.gaussian_parity import ParityTerm, parity_terms, projected_mean
from maxent.quench.gaussian_starts import GaussianStart, phase_form
from maxent.quench.gaussian_wick import word_mean
from maxent.quench.gaussian_words import WordSum, word_sum
from maxent.quench.potentials import Potentials
from maxent.result import Result
from maxent.solver import solve

__all__ = ["GaussianCharges", "gaussian_potentials", "moment_covariance"]

#: Leading corrections are made of some 2 m^2 means of m charges: most operations for which they are.
WORK = 2e9
_SECTORS = {1: "even", -1: "odd"}


class GaussianCharges:
    """Charges and observables of one size.

    Parameters
    ----------
    charges : mapping from str to OperatorSum
    hamiltonian : str
    observables : mapping from str to OperatorSum, optional
        Of spins 1/2 any; of fermions and bosons quadratic ones.
    unprojected : bool, optional
        Whether ensembles over all states of a ring of spins are one Gaussian state that ignores the parity.

    Attributes
    ----------
    sites : Sites
    statistics : {"fermions", "bosons"}
    has_sectors : bool
        Whether the Hamiltonian and the charges are one quadratic form per parity: a ring of spins.
    period : int
        Sites after which means of words repeat, see `maxent.quench.gaussian_words`; set by the comparison.

    Raises
    ------
    ValueError
        Something that is not quadratic, with the word; operators on different sites; no such Hamiltonian.
    """

    def __init__(
        self,
        charges: Mapping[str, OperatorSum],
        hamiltonian: str,
        *,
        observables: Mapping[str, OperatorSum] | None = None,
        unprojected: bool = False,
    ):
        if hamiltonian not in charges:
            raise ValueError(f"the Hamiltonian {hamiltonian!r} is none of the charges {', '.join(map(repr, charges))}")
        self.operators, self.hamiltonian = dict(charges), hamiltonian
        self.observables, self.unprojected = dict(observables or {}), unprojected
        self.sites = charges[hamiltonian].sites
        for name, op in {**self.operators, **self.observables}.items():
            if op.sites != self.sites:
                raise ValueError(f"{name!r} lives on {op.sites}, the Hamiltonian on {self.sites}")
        found = recognise(self.operators)
        if not found.is_quadratic or found.statistics is None:
            raise ValueError(found.obstacle)
        self.statistics, self.has_sectors = found.statistics, found.has_sectors
        self.period = self.sites.size
        self._quadratic: dict[str, bool] = {}
        self._words: dict[tuple[str, int], WordSum] = {}
        for name, op in self.observables.items():
            seen = recognise({name: op})
            if not seen.is_quadratic and not self.sites.is_spin_half:
                raise ValueError(f"observable: {seen.obstacle}")
            self._quadratic[name] = seen.is_quadratic

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the charges."""
        return tuple(self.operators)

    @property
    def modes(self) -> int:
        """Number of modes."""
        return len(self.sites.slots)

    def is_quadratic(self, name: str) -> bool:
        """Whether an observable is."""
        return self._quadratic[name]

    def words(self, name: str, parity: int) -> WordSum:
        """Words of an observable of spins, where the parity of a ring has some value."""
        parity = parity if self.has_sectors else 0
        if (name, parity) not in self._words:
            operator = self.observables[name]
            self._words[name, parity] = word_sum(operator, parity=parity, period=self.period if parity else None)
        return self._words[name, parity]

    # ------------------------------------------------------------------ ensembles

    def family(self, names: Sequence[str], parity: int = 0) -> Any:
        """Family of some charges, over all states or those of one parity."""
        chosen = {n: self.operators[n] for n in names}
        if parity:
            return gaussian_family(chosen, sectors=_SECTORS[parity])
        return gaussian_family(chosen, sectors="unprojected" if self.unprojected else "both")

    def fit(self, names: Sequence[str], targets: Mapping[str, tuple[float, float]], parity: int = 0) -> Result:
        """Ensemble of some charges, over all states or those of one parity."""
        family = self.family(names, parity)
        return solve(family, {n: targets[n][0] for n in names}, accuracy={n: targets[n][1] for n in names})

    def evaluate(self, names: Sequence[str], lam: np.ndarray) -> Evaluation:
        """The family of some charges at multipliers, to second order."""
        return self.family(names).evaluate(lam, 2)

    def means(self, state: Any) -> dict[str, float]:
        """Means of all observables in a state of `family`."""
        if not isinstance(state, RingState):
            return {name: gaussian_mean(state, q) for name, q in self.observables.items()}
        moments = moments_of(state)
        terms = () if all(self._quadratic.values()) else parity_terms(state)
        return {name: self._ring_mean(name, moments, terms) for name in self.observables}

    def _ring_mean(self, name: str, moments: GaussianStart, terms: Sequence[ParityTerm]) -> float:
        if self._quadratic[name]:
            return moments.mean(self.observables[name])[0]
        return projected_mean(terms, [self.words(name, t.parity) for t in terms])

    def mean_of_moments(self, name: str, moments: GaussianStart) -> float:
        """Mean of an observable in a mixture of Gaussian states."""
        if self._quadratic[name]:
            return moments.mean(self.observables[name])[0]
        return word_mean(moments, [self.words(name, p.parity) for p in moments.parts])

    def correction(self, result: Result, names: Sequence[str], spread: np.ndarray, chi: np.ndarray) -> dict[str, float]:
        """Leading correction of every observable; empty where that would be much work.

        Parameters
        ----------
        result : Result
        names : sequence of str
        spread, chi : (m, m) ndarray
            Covariance of these charges in the start, and in the ensemble.
        """
        if (2 * len(names) ** 2 + 1) * (2.0 * self.modes) ** 3 > WORK:
            return {}
        family = self.family(names)
        lam = np.array([result.multipliers[n] for n in names])

        def at(x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
            return family.evaluate(x, 1).values, np.array(list(self.means(family.state(x)).values()))

        curvature = second_derivatives(at, lam, result.covariance)
        if curvature is None:
            return {}
        return dict(zip(self.observables, map(float, leading_correction(curvature, spread, chi)), strict=True))


def moment_covariance(state: GaussianStart, operators: Sequence[OperatorSum]) -> np.ndarray:
    """Symmetrised covariance (m, m) of quadratic operators in a mixture of Gaussian states.

    Notes
    -----
    With ``C = 1 - i G`` fermions have ``tr(A^T C B C^T)/8``; bosons, with forms ``R.M R/2 + l.R``,
    ``tr(M V M' V)/2 + tr(M Omega M' Omega)/8 + (M r + l).V (M' r + l')``.
    """
    m = len(operators)
    means, out = np.zeros((len(state.parts), m)), np.zeros((m, m))
    forms = [[phase_form(form, state.statistics) for _, form in state.paired(q)] for q in operators]
    for k, part in enumerate(state.parts):
        here = [each[k] for each in forms]
        if state.statistics == "fermions":
            c = np.eye(len(part.covariance)) - 1j * part.covariance
            turned = [c.T @ (4 * f) @ c for f, _, _ in here]
            inside = [[np.vdot(4 * a, t).real / 8 for t in turned] for a, _, _ in here]
            means[k] = [float(np.sum(f * part.covariance)) + constant for f, _, constant in here]
        else:
            v, r = part.covariance, np.zeros(len(part.covariance)) if part.displacement is None else part.displacement
            omega = symplectic_form(len(v) // 2)
            slopes = [2 * f @ r + line for f, line, _ in here]
            inside = [
                [
                    2 * np.sum((f @ v) * (v @ g)) + 0.5 * np.sum((f @ omega) * (omega.T @ g.T)) + a @ v @ b
                    for (g, _, _), b in zip(here, slopes, strict=True)
                ]
                for (f, _, _), a in zip(here, slopes, strict=True)
            ]
            means[k] = [float(np.sum(f * (v + np.outer(r, r))) + line @ r) + constant for f, line, constant in here]
        out += part.weight * np.array(inside)
    weights = np.array([p.weight for p in state.parts])
    off = means - weights @ means
    out += (weights[:, None] * off).T @ off
    return 0.5 * (out + out.T)


def gaussian_potentials(charges: GaussianCharges, broken: Sequence[str]) -> Potentials:
    """Conserved sums of diagonal one-site operators: of particles numbers, of spins field charges."""
    others = [n for n in charges.names if n not in (charges.hamiltonian, *broken)]
    diagonal = tuple(n for n in others if _is_diagonal(charges.operators[n], charges.statistics))
    return Potentials((), diagonal) if charges.sites.is_spin_half else Potentials(diagonal, ())


def _is_diagonal(operator: OperatorSum, statistics: str) -> bool:
    if operator.range > 1:
        return False
    if operator.sites.is_spin_half:
        letters = [word for _, word in operator.pauli_terms() if word]
        return bool(letters) and all(len(w) == 1 and set(w.values()) == {"Z"} for w in letters)
    form = as_quadratic(operator.one_body(), statistics)
    h, pairing = form.matrices()
    line = form.phase_space()[1] if statistics == "bosons" else np.zeros(1)
    diagonal = not np.any(h - np.diag(np.diag(h))) and not np.any(pairing) and not np.any(line)
    return bool(diagonal and np.any(h))

"""Which quadratic charges a quadratic Hamiltonian conserves: commutators of their one-particle forms.

    defect of Q = |[K_H, K_Q]|_F / (2 |K_H|_2 |K_Q|_F),

a number from 0 (conserved) to 1, with the matrix K of the motion that a form makes, on a ring of spins the larger one
of both parities.  The same question as that of `maxent.quench.conservation`, asked of one particle instead of all
states: 0 means the same, other values do not.  Floating-point numbers tell, no exact coefficients.  Floor: quench.
Must not know how a state was fitted.
"""

from __future__ import annotations

from collections.abc import Mapping
from itertools import combinations

import numpy as np

from maxent.families.gaussian_states import symplectic_form
from maxent.families.majoranas import to_majoranas
from maxent.families.quadratic import Quadratic
from maxent.lattice import OperatorSum, recognise
from maxent.quench.conservation import TOLERANCE, Conservation, Conserved
from maxent.quench.gaussian_forms import as_quadratic
from maxent.quench.gaussian_starts import GaussianStart

__all__ = ["gaussian_conservation", "moment_defect"]


def gaussian_conservation(
    hamiltonian: OperatorSum,
    charges: Mapping[str, OperatorSum],
    *,
    start: GaussianStart | None = None,
    dephased: GaussianStart | None = None,
) -> Conservation:
    """Test quadratic charges against a quadratic Hamiltonian.

    Parameters
    ----------
    hamiltonian : OperatorSum
    charges : dict of str to OperatorSum
    start, dephased : GaussianStart, optional
        For values and drifts.

    Raises
    ------
    ValueError
        A charge that is not quadratic.
    """
    motions = _motions({"": hamiltonian, **{f" {n}": q for n, q in charges.items()}})
    names = list(charges)
    h = [each[""] for each in motions]
    forms = {n: [each[f" {n}"] for each in motions] for n in names}
    found = {}
    for name in names:
        defect = max(_defect(a, b) for a, b in zip(h, forms[name], strict=True))
        value = accuracy = later = None
        if start is not None:
            value, accuracy = start.mean(charges[name])
        if dephased is not None:
            later = dephased.mean(charges[name])[0]
        found[name] = Conserved(name, defect, False, defect <= TOLERANCE, value, accuracy, later)
    mutual = np.zeros((len(names), len(names)))
    for i, j in combinations(range(len(names)), 2):
        pairs = zip(forms[names[i]], forms[names[j]], strict=True)
        ratio = max(max(_defect(a, b), _defect(b, a)) for a, b in pairs)
        mutual[i, j] = mutual[j, i] = ratio if ratio > TOLERANCE else 0.0
    return Conservation(found, mutual, TOLERANCE)


def moment_defect(hamiltonian: OperatorSum, state: GaussianStart) -> float:
    """How far second moments are from being stationary: their rate of change over the largest possible, 0 to 1."""
    worst = 0.0
    for part, form in state.paired(hamiltonian):
        k = _motion(form, state.statistics)
        k = k[:-1, :-1]
        rate = float(np.linalg.norm(k @ part.covariance + part.covariance @ k.T))
        scale = 2 * float(np.linalg.norm(k, 2)) * float(np.linalg.norm(part.covariance))
        worst = max(worst, rate / scale if scale > 0 else 0.0)
    return min(worst, 1.0)


def _motions(operators: Mapping[str, OperatorSum]) -> list[dict[str, np.ndarray]]:
    """K of every operator, by parity."""
    found = recognise(operators)
    if not found.is_quadratic or found.statistics is None:
        raise ValueError(found.obstacle)
    statistics = found.statistics
    return [{n: _motion(as_quadratic(q), statistics) for n, q in forms.items()} for forms in found.sectors.values()]


def _motion(form: Quadratic, statistics: str) -> np.ndarray:
    """K (2n+1, 2n+1) with ``d(g, 1)/dt = K (g, 1)``."""
    n = form.modes
    k = np.zeros((2 * n + 1, 2 * n + 1))
    if statistics == "fermions":
        k[:-1, :-1] = to_majoranas(*form.matrices())[0]
    else:
        m, line, _ = form.phase_space()
        omega = symplectic_form(n)
        k[:-1, :-1], k[:-1, -1] = omega @ m, omega @ line
    return k


def _defect(a: np.ndarray, b: np.ndarray) -> float:
    scale = 2 * float(np.linalg.norm(a, 2)) * float(np.linalg.norm(b))
    return min(float(np.linalg.norm(a @ b - b @ a)) / scale, 1.0) if scale > 0 else 0.0

"""Fitted columns of a comparison: nested sets of charges, over all sectors and inside that of the start.

Floor: quench.  Must not know windows or dynamics.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np

from maxent.quench.columns import Ensemble
from maxent.quench.distances import block_distances
from maxent.quench.ensembles import Sector
from maxent.quench.potentials import thermodynamic_facts
from maxent.quench.setting import Setting
from maxent.quench.starts import Start
from maxent.result import Result
from maxent.text import listing

if TYPE_CHECKING:
    from maxent.quench.gaussian_fits import GaussianSetting

__all__ = ["fitted_columns", "nested_sets"]


def fitted_columns(setting: Setting) -> list[Ensemble]:
    """Every nested set of charges fitted to the start."""
    charges, sector = setting.charges, setting.sector
    covariance = start_covariance(setting.start, [op.matrix() for op in charges.operators.values()])
    out: list[Ensemble] = []
    shown: dict[tuple[str, ...], str] = {}  # label by the charges that are not fixed in the sector
    for kind, names in nested_sets(setting):
        label = kind if kind != "generalised" else f"generalised: {', '.join(names)}"
        for inside in (None, sector) if sector is not None else (None,):
            if inside is not None:
                free = tuple(n for n in names if n not in inside.charges)
                if free in shown:
                    fixed = [n for n in names if n in inside.charges]
                    setting.notes.append(
                        f"In the sector of the start {listing(fixed, 'and')} {'is' if len(fixed) == 1 else 'are'} "
                        f"fixed, and {label} is the same state as {shown[free]}: it is shown once."
                    )
                    continue
                shown[free] = label
            setting.say(f"{label}{'' if inside is None else ', in the sector of the start'}")
            result = charges.fit(names, setting.targets, inside)
            sharp = {} if inside is None else inside.values
            plain = Ensemble(label, kind, names, sharp, str(result.verdict), result.message)
            if result.state is not None:
                plain = _filled(setting, plain, result, covariance, inside)
                quantities, checks = thermodynamic_facts(result, charges, setting.potentials, inside)
                plain = replace(plain, quantities=quantities, self_checks=checks)
            out.append(plain)
    return out


def nested_sets(setting: Setting | GaussianSetting) -> list[tuple[str, tuple[str, ...]]]:
    """Kind and names of nested sets: the Hamiltonian, then numbers and field charges, then the others in order."""
    charges, h = setting.charges, setting.charges.hamiltonian
    known = {*setting.potentials.numbers, *setting.potentials.fields}
    numbers = tuple(n for n in charges.names if n in known)
    sets: list[tuple[str, tuple[str, ...]]] = [("canonical", (h,))]
    if numbers:
        sets.append(("grand canonical", (h, *numbers)))
    joined = (h, *numbers)
    for name in charges.names:
        if name not in joined:
            joined = (*joined, name)
            sets.append(("generalised", joined))
    return sets


def _filled(
    setting: Setting, plain: Ensemble, result: Result, covariance: np.ndarray, sector: Sector | None
) -> Ensemble:
    """The ensemble with what its state says."""
    charges, names, state = setting.charges, plain.charges, result.state
    index = [charges.names.index(n) for n in names]
    spread = covariance[np.ix_(index, index)]
    corrections: dict[str, float] = {}
    if result.success and charges.observables:
        corrections = charges.correction(result, names, spread, sector)
    chi = np.full(len(names), np.nan)
    if result.success:
        chi = np.diagonal(charges.fluctuations(result, names, sector))
    return replace(
        plain,
        multipliers=dict(result.multipliers),
        multiplier_errors=dict(result.multiplier_errors),
        entropy=result.entropy,
        means=charges.means(state, sector),
        distances=block_distances(state, setting.reference),
        corrections=corrections,
        variances={n: (float(spread[k, k]), float(chi[k])) for k, n in enumerate(names)},
    )


def start_covariance(start: Start, operators: Sequence[Any]) -> np.ndarray:
    """Symmetrised covariance of operators in a start."""
    images = [q @ start.vectors for q in operators]
    means = [float(start.weights @ np.real(np.einsum("ik,ik->k", start.vectors.conj(), x))) for x in images]
    off = [x - m * start.vectors for x, m in zip(images, means, strict=True)]
    n = len(operators)
    out = np.empty((n, n))
    for i in range(n):
        for j in range(i + 1):
            out[i, j] = out[j, i] = float(start.weights @ np.real(np.einsum("ik,ik->k", off[i].conj(), off[j])))
    return out

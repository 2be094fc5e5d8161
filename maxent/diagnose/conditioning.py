"""Which combinations of the charges fluctuate together, and which hardly at all.  Floor: diagnose."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

__all__ = ["Combination", "Conditioning", "conditioning"]


@dataclass(frozen=True)
class Combination:
    """A unit combination of the charges, each divided by its standard deviation in the state.

    Attributes
    ----------
    coefficients : dict of str to float
    variance : float
        Its variance; 1 for uncorrelated charges.
    """

    coefficients: dict[str, float]
    variance: float


@dataclass(frozen=True)
class Conditioning:
    """Spectrum of the correlation matrix of the charges.

    Attributes
    ----------
    condition_number : float
        Largest over smallest eigenvalue, redundant combinations left out.
    stiffest : Combination
        The combination of the charges with the largest variance: its multiplier is the best fixed one.
    sloppiest : Combination
        The one with the smallest variance: targets fix its multiplier worst.
    spectrum : tuple of float
        All eigenvalues, descending.
    """

    condition_number: float
    stiffest: Combination
    sloppiest: Combination
    spectrum: tuple[float, ...]


def conditioning(names: Sequence[str], factor: np.ndarray) -> Conditioning | None:
    """Conditioning from a factor (m, r) of the covariance; None when no charge fluctuates.

    Singular values of the correlation-normalised factor are taken, which resolves condition numbers up to 1e30.
    """
    largest = np.abs(factor).max(axis=1, initial=0.0)
    live = np.flatnonzero(largest > 0)
    if not len(live) or not factor.shape[1]:
        return None
    rows = factor[live] / largest[live, None]  # before it is squared: units may be extreme
    u, s, _ = np.linalg.svd(rows / np.linalg.norm(rows, axis=1)[:, None], full_matrices=False)
    rank = min(len(live), factor.shape[1])
    spectrum = s[:rank] ** 2

    def named(k: int) -> Combination:
        size = np.abs(u[:, k])
        # the first of the largest, ties to rounding included: the sign must not depend on the machine
        vector = u[:, k] * np.sign(u[np.argmax(size >= (1 - 1e-6) * size.max()), k])
        coefficients = dict.fromkeys(names, 0.0) | {names[int(j)]: float(x) for j, x in zip(live, vector, strict=True)}
        return Combination(coefficients, float(spectrum[k]))

    number = float(spectrum[0] / spectrum[-1]) if spectrum[-1] > 0 else float("inf")
    return Conditioning(number, named(0), named(rank - 1), tuple(float(x) for x in spectrum))
